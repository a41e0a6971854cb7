"""Profiles of inverse temperature (one value a bond) and of beta times field (one value a site)."""

from __future__ import annotations

import numpy as np

from tnquench.conventions import Reals


def uniform(x: Reals, *, value: float) -> Reals:
    """Return the same value at every position x."""
    return np.full(np.shape(x), float(value))


def step(x: Reals, *, left: float, right: float, width: float = 0.0) -> Reals:
    """Return a step at x = 0: sharp for width 0 (mean of both sides at x = 0), else a hyperbolic tangent.

    x : positions in lattice spacings, any shape; width : half width of the tangent in lattice spacings.
    """
    rise = np.sign(x) if width == 0.0 else np.tanh(np.asarray(x) / width)
    return np.asarray(left + 0.5 * (right - left) * (1.0 + rise))


def bump(x: Reals, *, base: float, height: float, width: float) -> Reals:
    """Return a Gaussian bump base + height exp(-(x/width)^2 / 2)."""
    return np.asarray(base + height * np.exp(-0.5 * (np.asarray(x) / width) ** 2))


def wave(x: Reals, *, base: float, height: float, length: float) -> Reals:
    """Return a standing modulation base + height cos(2 pi x / length)."""
    return np.asarray(base + height * np.cos(2.0 * np.pi * np.asarray(x) / length))
