"""The section [chain]: the model, its parameters and extra terms."""

from __future__ import annotations

from typing import Annotated, Any, ClassVar, Literal

from pydantic import Strict

from tnquench.config.extras import LARGEST_ENERGY, Extra
from tnquench.config.models import parameter_values
from tnquench.config.setting import Section, setting


def _parameter(meaning: str, *, symbols: tuple[str, ...], default_rule: str, **bounds: Any) -> Any:
    """Declare a setting of [chain] that only some models take; None until the model is known."""
    return setting(meaning, default=None, default_rule=default_rule, symbols=symbols, **bounds)


_GIVEN = "must be given"
_SCALES = {"ge": 1.0 / LARGEST_ENERGY, "le": LARGEST_ENERGY}
_ENERGIES = {"ge": -LARGEST_ENERGY, "le": LARGEST_ENERGY}


class Chain(Section):
    """The Hamiltonian of an open chain.

    xxz: J sum [SxSx + SySy + D SzSz], spins 1/2, S = sigma/2;
    ising: -J sum sigma^x sigma^x - g sum sigma^z, Pauli matrices;
    fermion: -t_h sum (c+c + h.c.) + V sum (n - 1/2)(n - 1/2);
    hubbard: -t_h sum (c+c + h.c.) + U sum (n_up - 1/2)(n_dn - 1/2), two species.
    A setting of another model is an error. Extra terms, sections [[chain.extra]], are described below.
    """

    EXAMPLE: ClassVar[str] = 'model = "xxz"\nsites = 64\nanisotropy = 0.5'

    model: Literal["xxz", "ising", "fermion", "hubbard"] = setting("model of the chain", default="xxz")
    sites: int = setting(
        "number of sites L; they lie at x_i = i - (L-1)/2",
        symbols=("L", "N", "length", "size"),
        remark="a bond joins two sites",
        ge=2,
        le=100_000,
    )
    coupling: float | None = _parameter(
        "coupling J (xxz, ising)", symbols=("J",), default_rule="`1.0`", **_SCALES
    )
    anisotropy: float | None = _parameter(
        "anisotropy D, of either sign (xxz)",
        symbols=("D", "delta"),
        default_rule=_GIVEN,
        ge=-1000.0,
        le=1000.0,
    )
    transverse_field: float | None = _parameter(
        "field g, of either sign (ising)", symbols=("g",), default_rule=_GIVEN, **_ENERGIES
    )
    hopping: float | None = _parameter(
        "hopping t_h (fermion, hubbard)", symbols=("t_h", "th"), default_rule="`1.0`", **_SCALES
    )
    repulsion: float | None = _parameter(
        "repulsion of neighbours V (fermion) or on a site U (hubbard), of either sign",
        symbols=("V", "U"),
        default_rule=_GIVEN,
        **_ENERGIES,
    )
    extra: Annotated[tuple[Extra, ...], Strict(strict=False)] = setting(
        "extra terms of the Hamiltonian, of any kind and number", default=()
    )

    @property
    def parameters(self) -> dict[str, float]:
        """The parameters of the model by name, defaults filled in."""
        values = parameter_values(self.model, {name: getattr(self, name) for name in type(self).model_fields})
        return {name: value for name, value in values.items() if isinstance(value, float)}
