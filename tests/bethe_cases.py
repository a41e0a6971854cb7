"""Anisotropies at which the Bethe ansatz is tested."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest


def root_of_unity(nu: int, sign: int = 1) -> float:
    return 0.0 if nu == 2 else float(sign * np.cos(np.pi / nu))


def named(nu: int, sign: int) -> Any:
    return pytest.param(root_of_unity(nu, sign), id=f"{'-' if sign < 0 else ''}cos(pi/{nu})")


ALL = [named(2, 1)] + [named(nu, sign) for nu in range(3, 9) for sign in (1, -1)]
SOME = [named(nu, sign) for nu, sign in ((2, 1), (3, 1), (3, -1), (4, 1), (5, -1), (6, 1))]
