"""The state sigma as a matrix product of real tensors graded by charge.

sigma = U sqrt(rho_0) U+ is Hermitian, so it has real coefficients in products of normalised Pauli matrices
P/sqrt(2). Every bond index carries a charge; the charge of a site's local operator is the XOR of the charges
on both sides, so it need not be stored: a site tensor is an array (multiplicity, left, right) in which the
charges of the left and right index select the local operators `grading.members[charge]`.

Representation: C. Karrasch, J. H. Bardarson, J. E. Moore, Phys. Rev. Lett. 108, 227206 (2012), written as an
operator.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from tnquench.conventions import Integers, Reals
from tnquench.evolution.orthogonal import orthonormal_and_factor
from tnquench.evolution.threads import product
from tnquench.model.grading import Grading


@dataclass
class ChainState:
    """A matrix product state in mixed canonical form with unit norm.

    grading : charges of the local operators
    tensors : one array (multiplicity, left, right) a site
    bonds   : L + 1 arrays (sectors,): number of indices of each charge, ordered by charge, on the bond left
              of each site and on the one right of the last: equally many of each charge, but both ends hold a
              single neutral index
    centre  : the site that carries the norm; tensors left (right) of it are left (right) isometries
    """

    grading: Grading
    tensors: list[Reals]
    bonds: list[Integers]
    centre: int = 0

    @property
    def sites(self) -> int:
        """Number of sites."""
        return len(self.tensors)

    @property
    def bond_dimensions(self) -> Integers:
        """Bond dimension of each inner bond, shape (L - 1,)."""
        return np.array([int(sizes.sum()) for sizes in self.bonds[1:-1]], dtype=np.int64)

    @property
    def bytes(self) -> int:
        """Memory of all tensors in bytes."""
        return sum(tensor.nbytes for tensor in self.tensors)

    def set_size(self, bond: int, size: int) -> None:
        """Note that an inner bond holds `size` indices of each charge."""
        self.bonds[bond] = np.full(self.grading.sectors, size, dtype=np.int64)

    def copy(self) -> ChainState:
        """Return an independent copy."""
        return ChainState(
            self.grading,
            [tensor.copy() for tensor in self.tensors],
            [sizes.copy() for sizes in self.bonds],
            self.centre,
        )

    def sector_slices(self, bond: int) -> list[slice]:
        """Return the index range of each charge on `bond` (0..L, counted as in `bonds`)."""
        edges = np.concatenate(([0], np.cumsum(self.bonds[bond])))
        return [slice(int(a), int(b)) for a, b in pairwise(edges)]


def infinite_temperature(sites: int, grading: Grading) -> ChainState:
    """Return the identity operator with unit norm, the state at beta = 0; its charges but 0 hold zeros."""
    sectors = grading.sectors
    end = (np.arange(sectors) == 0).astype(np.int64)
    inner = np.ones(sectors, dtype=np.int64)
    identity = np.zeros((grading.multiplicity, sectors, sectors))
    identity[int(np.flatnonzero(grading.members[0] == 0)[0]), 0, 0] = 1.0
    tensors = [identity.copy() for _ in range(sites)]
    tensors[0] = tensors[0][:, :1].copy()
    tensors[-1] = tensors[-1][:, :, :1].copy()
    return ChainState(grading, tensors, [end, *(inner.copy() for _ in range(sites - 1)), end.copy()])


def by_right_charge(tensor: Reals, sectors: int) -> Reals:
    """Return a site tensor as one matrix a charge of its right bond, (charge, multiplicity x left, right)."""
    return tensor.reshape(tensor.shape[0] * tensor.shape[1], sectors, -1).swapaxes(0, 1)


def by_left_charge(tensor: Reals, sectors: int) -> Reals:
    """Return a site tensor as one matrix a charge of its left bond, (charge, left, multiplicity x right)."""
    copies, left, right = tensor.shape
    parts = tensor.reshape(copies, sectors, left // sectors, right)
    return parts.transpose(1, 2, 0, 3).reshape(sectors, left // sectors, copies * right)


def from_right_charge(parts: Reals, copies: int) -> Reals:
    """Return the site tensor whose `by_right_charge` is given."""
    sectors, rows, size = parts.shape
    return parts.swapaxes(0, 1).reshape(copies, rows // copies, sectors * size)


def from_left_charge(parts: Reals, copies: int) -> Reals:
    """Return the site tensor whose `by_left_charge` is given."""
    sectors, size, columns = parts.shape
    split = parts.reshape(sectors, size, copies, columns // copies)
    return split.transpose(2, 0, 1, 3).reshape(copies, sectors * size, columns // copies)


def move_centre(state: ChainState, site: int) -> None:
    """Move the orthogonality centre to `site` by QR decompositions of the tensors on the way."""
    while state.centre < site:
        _step_right(state)
    while state.centre > site:
        _step_left(state)


def _step_right(state: ChainState) -> None:
    """Make the centre a left isometry and hand its triangular factors to the next site."""
    here, sectors, copies = state.centre, state.grading.sectors, state.grading.multiplicity
    vectors = np.array(by_right_charge(state.tensors[here], sectors).swapaxes(1, 2), order="C")
    q, factor = orthonormal_and_factor(vectors)
    handed = product(factor.swapaxes(1, 2), by_left_charge(state.tensors[here + 1], sectors))
    state.tensors[here] = from_right_charge(q.swapaxes(1, 2), copies)
    state.tensors[here + 1] = from_left_charge(handed, copies)
    state.set_size(here + 1, q.shape[1])
    state.centre = here + 1


def _step_left(state: ChainState) -> None:
    """Make the centre a right isometry and hand its triangular factors to the site before."""
    here, sectors, copies = state.centre, state.grading.sectors, state.grading.multiplicity
    q, factor = orthonormal_and_factor(np.array(by_left_charge(state.tensors[here], sectors), order="C"))
    handed = product(by_right_charge(state.tensors[here - 1], sectors), factor)
    state.tensors[here] = from_left_charge(q, copies)
    state.tensors[here - 1] = from_right_charge(handed, copies)
    state.set_size(here, q.shape[1])
    state.centre = here - 1


def distance(first: ChainState, second: ChainState) -> float:
    """Return the norm of the difference of two unit vectors, accurate to rounding even when they nearly
    agree.

    The difference is written as one chain of block-diagonal tensors and its norm is found by orthogonalising
    from the left, which avoids the loss of half the digits in 2 - 2 <first|second>.
    Raises ValueError if the chains differ in length or grading.
    """
    if first.sites != second.sites or first.grading.sectors != second.grading.sectors:
        message = "states of different chains have no distance"
        raise ValueError(message)
    sectors = first.grading.sectors
    carried = [
        np.hstack([np.eye(1), -np.eye(1)]) if charge == 0 else np.zeros((0, 0)) for charge in range(sectors)
    ]
    for site in range(first.sites):
        carried = _absorb_pair(first, second, site, carried)
    closing = carried[0]
    return float(np.linalg.norm(closing.sum(axis=1)))


def _absorb_pair(first: ChainState, second: ChainState, site: int, carried: list[Reals]) -> list[Reals]:
    """Push the triangular factors of the difference chain through one site, charge by charge.

    carried : for each charge of the left bond an array (rows, left of first + left of second)
    """
    a, b = first.tensors[site], second.tensors[site]
    split = [int(size) for size in first.bonds[site]]
    left_a, left_b = first.sector_slices(site), second.sector_slices(site)
    right_a, right_b = first.sector_slices(site + 1), second.sector_slices(site + 1)
    factors: list[Reals] = []
    for ra, rb in zip(right_a, right_b, strict=True):
        stacked = [
            np.hstack([carry[:, :cut] @ a[copy, la, ra], carry[:, cut:] @ b[copy, lb, rb]])
            for carry, cut, la, lb in zip(carried, split, left_a, left_b, strict=True)
            for copy in range(a.shape[0])
        ]
        factors.append(np.asarray(np.linalg.qr(np.vstack(stacked), mode="r")))
    return factors
