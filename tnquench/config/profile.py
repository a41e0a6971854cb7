"""The five shapes a profile may take; how they are evaluated stands in `model`."""

from __future__ import annotations

from typing import Annotated, Any, ClassVar, Literal

from pydantic import Field, Strict

from tnquench.config.setting import Section, setting

#: Largest beta (1/J) or beta h that a profile may name; beyond it the state is the ground state to rounding.
LARGEST_VALUE = 1000.0
#: Smallest and largest width or wavelength, in lattice spacings.
SMALLEST_LENGTH = 1e-3
LARGEST_LENGTH = 1e6

_LATTICE = "the lattice spacing"
#: Unit of the values of a profile: 1/J for beta, none for beta_field.
PROFILE_UNIT = "profile"


def _value(meaning: str) -> Any:
    return setting(meaning, unit=PROFILE_UNIT, ge=-LARGEST_VALUE, le=LARGEST_VALUE)


class StepProfile(Section):
    """Two values joined at x = 0: sharply, or by left + (right - left) (1 + tanh(x/width))/2."""

    EXAMPLE: ClassVar[str] = 'shape = "step"\nleft = 0.5\nright = 2.0'

    shape: Literal["step"] = setting("shape of the profile")
    left: float = _value("value far to the left")
    right: float = _value("value far to the right")
    width: float = setting(
        "width of the crossover; 0 is sharp, with the mean of both values at x = 0; else 0.001 or more",
        default=0.0,
        unit=_LATTICE,
        ge=0.0,
        le=LARGEST_LENGTH,
    )


class BumpProfile(Section):
    """A Gaussian in the middle: base + height exp(-(x/width)^2/2)."""

    EXAMPLE: ClassVar[str] = 'shape = "bump"\nbase = 1.0\nheight = -0.5\nwidth = 6.0'

    shape: Literal["bump"] = setting("shape of the profile")
    base: float = _value("value far from the middle")
    height: float = _value("value at x = 0 above the base; negative for a dip")
    width: float = setting(
        "standard deviation of the Gaussian", unit=_LATTICE, ge=SMALLEST_LENGTH, le=LARGEST_LENGTH
    )


class WaveProfile(Section):
    """A cosine: base + height cos(2 pi x/length)."""

    EXAMPLE: ClassVar[str] = 'shape = "wave"\nbase = 1.0\nheight = 0.2\nlength = 24.0'

    shape: Literal["wave"] = setting("shape of the profile")
    base: float = _value("mean value")
    height: float = _value("amplitude; x = 0 is a crest where it is positive")
    length: float = setting("wavelength", unit=_LATTICE, ge=SMALLEST_LENGTH, le=LARGEST_LENGTH)


class UniformProfile(Section):
    """The same value everywhere."""

    EXAMPLE: ClassVar[str] = 'shape = "uniform"\nvalue = 1.0'

    shape: Literal["uniform"] = setting("shape of the profile")
    value: float = _value("value everywhere")


class TableProfile(Section):
    """Every value given, from left to right: one a bond for beta, one a site for beta_field."""

    EXAMPLE: ClassVar[str] = 'shape = "table"\nfile = "profile.csv"  # or: values = [0.5, 0.7, 1.0, ...]'

    shape: Literal["table"] = setting("shape of the profile")
    values: Annotated[
        tuple[Annotated[float, Field(ge=-LARGEST_VALUE, le=LARGEST_VALUE)], ...], Strict(strict=False)
    ] = setting(
        "the values; sites - 1 of them for beta, sites of them for beta_field. Between them the prediction "
        "interpolates monotonically (piecewise cubic), beyond them it goes on flat",
        unit=PROFILE_UNIT,
        default_rule="must be given, or file",
        remark="or give file in its place",
    )
    file: str | None = setting(
        "instead of values: CSV file with one number a line (blank lines, lines that begin with #, and a "
        "heading are skipped); its path starts at the folder of the config and may not leave it. Once read, "
        "its numbers stand in `values`",
        default=None,
    )


Profile = Annotated[
    StepProfile | BumpProfile | WaveProfile | UniformProfile | TableProfile, Field(discriminator="shape")
]

#: Every shape by the name it has in the config.
SHAPES: dict[str, type[Section]] = {
    "step": StepProfile,
    "bump": BumpProfile,
    "wave": WaveProfile,
    "uniform": UniformProfile,
    "table": TableProfile,
}
