"""Cutting a bond: the largest singular values of a two-site tensor, and the weight that is truly lost.

Three methods stand behind `cut`: `svd` (reference), `gram` (eigenvectors of the smaller Gram matrix) and
`subspace` (warm-started subspace iteration that measures what it discards from norms). The last two resolve
relative weights of about 1e-13 at best; for smaller targets the reference is used.

Sources: C. Eckart and G. Young, Psychometrika 1, 211 (1936); subspace iteration with QR in the spirit of J.
Unfried, J. Hauschild and F. Pollmann, Phys. Rev. B 107, 155133 (2023).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.linalg import LinAlgError, svd

from tnquench.conventions import Reals
from tnquench.evolution.orthogonal import orthonormal

METHODS = ("subspace", "gram", "svd")

#: Below this relative weight Gram matrices and differences of norms drown in rounding (1e-16 a term).
GRAM_FLOOR = 1e-12

#: Fewest singular values kept whatever the weight: below it a cut costs little less, and in a nearly uniform
#: region a few values hold everything, so that errors of cuts at any weight would be alike and companions
#: would not see them.
BOND_FLOOR = 32

#: Relative weight of a singular value that is rounding and never kept.
NEGLIGIBLE = 1e-26

#: Share of the weight target that the subspace may leave outside itself; the rest goes to its smallest
#: directions.
OUTSIDE_SHARE = 0.3

#: A charge that misses less than this share of what is allowed outside needs no more directions.
IDLE_SHARE = 0.05

#: Largest overlap of new directions with a basis that counts as orthogonal.
ORTHOGONALITY = 1e-13

#: Random directions added to a basis that misses too much: at least this many, and this fraction of its size.
EXTRA_DIRECTIONS, EXTRA_FRACTION = 4, 0.1


@dataclass
class Cut:
    """A two-site tensor cut in two, charge by charge: block = left @ right.

    left : (rows, kept) isometries; right : (kept, columns), of unit norm together
    discarded_weight : lost squared norm as a fraction of the whole
    norm : norm of the uncut tensor
    uncertainty : rounding of the discarded weight where it comes from norms or Gram matrices
    fallbacks : number of singular value decompositions that needed the slower driver
    """

    left: list[Reals]
    right: list[Reals]
    discarded_weight: float
    norm: float
    fallbacks: int = 0
    uncertainty: float = 0.0


@dataclass
class CutRule:
    """How bonds are cut.

    weight_target : squared norm that one cut may lose, relative
    bond_ceiling  : most singular values kept; when it binds the lost weight exceeds the target
    bond_floor    : fewest singular values kept (as long as they are not rounding), whatever the target: small
                    bonds cost little, and cutting them leaves errors that no longer shrink smoothly with the
                    weight
    method        : `subspace`, `gram` or `svd`
    random        : source of the directions that `subspace` adds to its warm start
    """

    weight_target: float
    bond_ceiling: int = 2**31
    bond_floor: int = BOND_FLOOR
    method: str = "subspace"
    random: np.random.Generator = field(default_factory=lambda: np.random.default_rng(20120529))

    def __post_init__(self) -> None:
        if self.method not in METHODS:
            message = f"unknown cutting method {self.method!r}; allowed: {', '.join(METHODS)}"
            raise ValueError(message)


@dataclass
class _Spectrum:
    """Singular directions of one block in descending order of weight: block = frame @ image up to what is
    outside.

    frame : orthonormal columns; image : frame.T @ block; weights : squared singular values
    rotation : orthogonal matrix that turns the frame into singular directions; None if it holds them already
    """

    frame: Reals
    image: Reals
    weights: Reals
    rotation: Reals | None = None

    def largest(self, kept: int) -> tuple[Reals, Reals]:
        """Return the `kept` leading left directions and the block seen in them."""
        if self.rotation is None:
            return np.ascontiguousarray(self.frame[:, :kept]), np.ascontiguousarray(self.image[:kept])
        rotation = self.rotation[:, :kept]
        return self.frame @ rotation, rotation.T @ self.image


def cut(blocks: list[Reals], rule: CutRule, *, guess: list[Reals] | None = None) -> Cut:
    """Cut a two-site tensor, given by one matrix a charge, keeping its largest singular values.

    blocks : matrices (rows, columns), one a charge of the middle bond; empty ones allowed
    guess  : rows that span the kept space nearly, (any number, columns) each; used by `subspace` alone
    Returns a Cut; its discarded_weight is the true lost fraction of the squared norm.
    Raises numpy.linalg.LinAlgError only if both SVD drivers fail, which means the tensor holds no numbers.
    """
    method = rule.method if rule.weight_target >= GRAM_FLOOR else "svd"
    total = sum(float(np.vdot(block, block)) for block in blocks)
    fallbacks, outside = 0, 0.0
    if method == "svd":
        spectra, fallbacks = _by_svd(blocks)
    elif method == "gram" or guess is None:
        spectra = [_by_gram(block) for block in blocks]
    else:
        spectra, outside = _by_subspace(blocks, guess, rule, total)
    result = _keep_largest(spectra, rule, total=total, outside=outside, fallbacks=fallbacks)
    if method != "svd":
        result.uncertainty = float(np.finfo(np.float64).eps) * len(blocks)
    return result


def _keep_largest(
    spectra: list[_Spectrum], rule: CutRule, *, total: float, outside: float, fallbacks: int
) -> Cut:
    """Discard the smallest singular values of all charges together while the lost weight stays under the
    target."""
    charges = np.concatenate([np.full(len(s.weights), charge) for charge, s in enumerate(spectra)])
    weights = np.concatenate([s.weights for s in spectra])
    order = np.argsort(weights, kind="stable")
    lost = outside + np.cumsum(weights[order])
    discard = int(np.searchsorted(lost, rule.weight_target * total, side="right"))
    discard = min(discard, len(weights) - rule.bond_floor)
    negligible = int(np.searchsorted(weights[order], NEGLIGIBLE * total, side="right"))
    discard = min(max(discard, negligible, len(weights) - rule.bond_ceiling), len(weights) - 1)
    kept = np.bincount(charges[order[discard:]].astype(np.int64), minlength=len(spectra))
    halves = [spectrum.largest(int(n)) for spectrum, n in zip(spectra, kept, strict=True)]
    left, right = [half[0] for half in halves], [half[1] for half in halves]
    held = sum(float(np.vdot(part, part)) for part in right)
    for part in right:
        part /= np.sqrt(held)
    measured = float(lost[discard - 1]) if discard else outside
    return Cut(left, right, max(measured, 0.0) / total, float(np.sqrt(total)), fallbacks)


def _by_svd(blocks: list[Reals]) -> tuple[list[_Spectrum], int]:
    """Return all left singular vectors; count the blocks for which the divide-and-conquer driver failed."""
    spectra, fallbacks = [], 0
    for block in blocks:
        if 0 in block.shape:
            spectra.append(
                _Spectrum(np.zeros((block.shape[0], 0)), np.zeros((0, block.shape[1])), np.zeros(0))
            )
            continue
        try:
            u, s, v = svd(block, full_matrices=False, lapack_driver="gesdd")
        except LinAlgError:
            fallbacks += 1
            u, s, v = svd(block, full_matrices=False, lapack_driver="gesvd")
        spectra.append(_Spectrum(u, s[:, None] * v, s**2))
    return spectra, fallbacks


def _by_gram(block: Reals) -> _Spectrum:
    """Return left singular vectors from the eigenvectors of the smaller Gram matrix."""
    rows, columns = block.shape
    if rows <= columns:
        weights, vectors = np.linalg.eigh(block @ block.T)
        return _Spectrum(vectors[:, ::-1], vectors[:, ::-1].T @ block, np.maximum(weights[::-1], 0.0))
    _, vectors = np.linalg.eigh(block.T @ block)
    # an eigenvector of a tiny eigenvalue is mapped to a short, inaccurate vector: QR makes the set
    # orthonormal again
    mapped = orthonormal(block @ vectors[:, ::-1])
    image = mapped.T @ block
    return _Spectrum(mapped, image, np.square(image).sum(axis=1))


def _by_subspace(
    blocks: list[Reals], guess: list[Reals], rule: CutRule, total: float
) -> tuple[list[_Spectrum], float]:
    """Find a subspace that holds each block up to a small share of the target; return its singular
    directions.

    The warm start is mapped once through the block; what the block has outside, measured as a difference of
    norms, is then caught by random directions of the residual, in growing portions and only where something
    is missing.
    """
    allowed = OUTSIDE_SHARE * rule.weight_target * total
    frames = [_frame(block, rows) for block, rows in zip(blocks, guess, strict=True)]
    norms = [float(np.vdot(block, block)) for block in blocks]
    extra = EXTRA_FRACTION
    if sum(len(image) for _, image in frames) < rule.bond_floor + EXTRA_DIRECTIONS * len(blocks):
        portion = rule.bond_floor // len(blocks) + EXTRA_DIRECTIONS  # the floor is filled whatever is missing
        frames = [
            _grown(block, *frame, max(0, portion - len(frame[1])), rule.random)
            for block, frame in zip(blocks, frames, strict=True)
        ]
    while True:
        held = [float(np.vdot(image, image)) for _, image in frames]
        missing = [norm - inside for norm, inside in zip(norms, held, strict=True)]
        open_ends = [
            charge
            for charge, (block, (_, image)) in enumerate(zip(blocks, frames, strict=True))
            if len(image) < min(block.shape) and missing[charge] > IDLE_SHARE * allowed
        ]
        if sum(missing) <= allowed or not open_ends:
            break
        for charge in open_ends:
            portion = max(EXTRA_DIRECTIONS, int(extra * len(frames[charge][1])))
            frames[charge] = _grown(blocks[charge], *frames[charge], portion, rule.random)
        extra *= 2.0
    spectra = []
    for basis, image in frames:
        weights, rotation = np.linalg.eigh(image @ image.T)
        spectra.append(_Spectrum(basis, image, np.maximum(weights[::-1], 0.0), rotation[:, ::-1]))
    return spectra, max(sum(missing), 0.0)


def _frame(block: Reals, rows: Reals) -> tuple[Reals, Reals]:
    """Return an orthonormal basis of the block's image of `rows`, and the block seen in it."""
    image = block @ rows[: min(block.shape)].T
    lengths = np.linalg.norm(image, axis=0)
    basis = orthonormal(image / np.where(lengths > 0.0, lengths, 1.0))
    return basis, basis.T @ block


def _grown(
    block: Reals, basis: Reals, image: Reals, portion: int, random: np.random.Generator
) -> tuple[Reals, Reals]:
    """Add so many directions of the residual block - basis @ image to a basis, up to the block's rank."""
    fresh = min(min(block.shape) - len(image), portion)
    if fresh == 0:
        return basis, image
    probe = random.standard_normal((block.shape[1], fresh))
    sample = block @ probe - basis @ (image @ probe)
    new = orthonormal(sample / np.maximum(np.linalg.norm(sample, axis=0), np.finfo(np.float64).tiny))
    new = orthonormal(new - basis @ (basis.T @ new))  # rounding left a trace of the old basis
    if len(image) and np.abs(basis.T @ new).max() > ORTHOGONALITY:
        # nothing but rounding is left of the block: any directions serve, as long as they are orthogonal
        new = orthonormal(np.hstack([basis, new]))[:, len(image) :]
    return np.hstack([basis, new]), np.vstack([image, new.T @ block])
