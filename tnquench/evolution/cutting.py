"""Cutting a bond: the largest singular values of a two-site tensor, and the weight that is truly lost.

A two-site tensor is one matrix a charge of its middle bond. Equally many singular values of each charge are
kept, so that all matrices have one shape and every operation treats all charges at once; the spectra of the
charges are so alike that this keeps hardly more than the best choice.

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
from tnquench.evolution.orthogonal import orthonormal, orthonormal_beside
from tnquench.evolution.threads import eigensystems, product

METHODS = ("subspace", "gram", "svd")

#: Below this relative weight Gram matrices and differences of norms drown in rounding (1e-16 a term).
GRAM_FLOOR = 1e-12

#: Fewest singular values kept whatever the weight: below it a cut costs little less, and in a nearly uniform
#: region a few values hold everything, so that errors of cuts at any weight would be alike and companions
#: would not see them.
BOND_FLOOR = 32

#: Relative weight of a singular value that is rounding and never kept for its own sake.
NEGLIGIBLE = 1e-26

#: Share of the weight target that the subspace may leave outside itself; the rest goes to its smallest
#: directions. Larger shares lose no more and keep hardly more: 1 % at 0.7 against 0.3, at 25 % less time.
OUTSIDE_SHARE = 0.7

#: Warm starts of at least so many directions come in descending order: this fraction of them is kept as it is
#: and the eigenproblem, which decides what to discard, is that of the rest alone.
LEADING_FROM, LEADING_FRACTION = 8, 0.8

#: Largest overlap of new directions with a basis that counts as orthogonal.
ORTHOGONALITY = 1e-13

#: Random directions added to the warm start of each charge: at least this many, and this fraction of its
#: size. Few of them make a second portion likely, which costs more than they do.
EXTRA_DIRECTIONS, EXTRA_FRACTION = 2, 0.25

#: A subspace of more than this fraction of all directions is no cheaper than the whole.
LARGEST_FRACTION = 0.6


@dataclass
class Cut:
    """A two-site tensor cut in two, charge by charge: block = left @ right.

    left : isometries (charge, rows, kept); right : (charge, kept, columns), of unit norm together
    discarded_weight : lost squared norm as a fraction of the whole
    norm : norm of the uncut tensor
    uncertainty : rounding of the discarded weight where it comes from norms or Gram matrices
    fallbacks : number of singular value decompositions that needed the slower driver
    """

    left: Reals
    right: Reals
    discarded_weight: float
    norm: float
    fallbacks: int = 0
    uncertainty: float = 0.0


@dataclass
class CutRule:
    """How bonds are cut.

    weight_target : squared norm that one cut may lose, relative
    bond_ceiling  : most singular values kept, but at least one a charge; when it binds the lost weight
                    exceeds the target
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
    """Directions of all blocks in descending order of weight: block = frame.T @ image up to what is outside.

    frame : orthonormal rows (charge, size, rows of the block), None for all directions; image : frame @ block
    weights : squared norm in each direction (charge, size); squared singular values where it is singular
    rotation : orthogonal matrices, in columns, that turn the frame from direction `leading` on into singular
    directions of what is seen there; None if it holds them already
    leading : so many directions are kept as they are
    """

    frame: Reals | None
    image: Reals
    weights: Reals
    rotation: Reals | None = None
    leading: int = 0

    def largest(self, kept: int) -> tuple[Reals, Reals]:
        """Return the `kept` leading left directions of each charge, in rows, and the blocks seen in them."""
        if self.rotation is None:
            assert self.frame is not None, "singular directions are known by their frame"
            return self.frame[:, :kept], self.image[:, :kept]
        lead = self.leading
        turned = self.rotation[:, :, : kept - lead].swapaxes(1, 2)
        if self.frame is None:
            return turned, product(turned, self.image)
        left, right = (np.empty((len(each), kept, each.shape[2])) for each in (self.frame, self.image))
        for found, each in ((left, self.frame), (right, self.image)):
            found[:, :lead] = each[:, :lead]
            product(turned, each[:, lead:], out=found[:, lead:])
        return left, right


def cut(
    blocks: Reals, rule: CutRule, *, guess: Reals | None = None, squared_norm: float | None = None
) -> Cut:
    """Cut a two-site tensor, given by one matrix a charge, keeping its largest singular values.

    blocks : shape (charge, rows, columns)
    guess  : rows that span the kept space nearly, (charge, any number, columns); used by `subspace` alone
    squared_norm : of all blocks together, where it is known already
    Returns a Cut; its discarded_weight is the true lost fraction of the squared norm.
    Raises numpy.linalg.LinAlgError only if both SVD drivers fail, which means the tensor holds no numbers.
    """
    method = rule.method if rule.weight_target >= GRAM_FLOOR else "svd"
    total = float(np.vdot(blocks, blocks)) if squared_norm is None else squared_norm
    fallbacks, outside = 0, 0.0
    if method == "svd":
        spectrum, fallbacks = _by_svd(blocks)
    elif method == "gram" or guess is None:
        spectrum = _by_gram(blocks)
    else:
        spectrum, outside = _by_subspace(blocks, guess, rule, total)
    kept, lost = _chosen(spectrum.weights, rule, total=total, outside=outside)
    if kept <= spectrum.leading:
        spectrum = _rotated(spectrum.frame, spectrum.image)
        kept, lost = _chosen(spectrum.weights, rule, total=total, outside=outside)
    left, right = spectrum.largest(kept)
    right /= np.sqrt(np.vdot(right, right))
    uncertainty = 0.0 if method == "svd" else float(np.finfo(np.float64).eps) * len(blocks)
    return Cut(left.swapaxes(1, 2), right, lost, float(np.sqrt(total)), fallbacks, uncertainty)


def _chosen(weights: Reals, rule: CutRule, *, total: float, outside: float) -> tuple[int, float]:
    """Return how few directions of each charge can be kept with the lost weight under the target, and the
    fraction that is lost."""
    sectors, size = weights.shape
    together = weights.sum(axis=0)
    tail = outside + np.cumsum(together[::-1])[::-1]  # lost if this direction and all after it are discarded
    kept = int(np.count_nonzero(tail > rule.weight_target * total))
    floor = min(-(-rule.bond_floor // sectors), int(np.count_nonzero(together > NEGLIGIBLE * total)))
    kept = min(max(kept, floor, 1), max(rule.bond_ceiling // sectors, 1), size)
    lost = float(tail[kept]) if kept < size else outside
    return kept, max(lost, 0.0) / total


def _by_svd(blocks: Reals) -> tuple[_Spectrum, int]:
    """Return all left singular vectors; count the blocks for which the divide-and-conquer driver failed."""
    parts, fallbacks = [], 0
    for block in blocks:
        try:
            parts.append(svd(block, full_matrices=False, lapack_driver="gesdd"))
        except LinAlgError:
            fallbacks += 1
            parts.append(svd(block, full_matrices=False, lapack_driver="gesvd"))
    u, s, v = (np.array(each) for each in zip(*parts, strict=True))
    return _Spectrum(u.swapaxes(1, 2), s[:, :, None] * v, s**2), fallbacks


def _by_gram(blocks: Reals) -> _Spectrum:
    """Return left singular vectors from the eigenvectors of the smaller Gram matrices."""
    _, rows, columns = blocks.shape
    if rows <= columns:
        return _rotated(None, blocks)
    _, vectors = eigensystems(product(blocks.swapaxes(1, 2), blocks))
    # an eigenvector of a tiny eigenvalue is mapped to a short, inaccurate vector: orthonormal rows again
    mapped = orthonormal(product(vectors[:, :, ::-1].swapaxes(1, 2), blocks.swapaxes(1, 2)))
    return _rotated(mapped, product(mapped, blocks))


def _rotated(frame: Reals | None, image: Reals, *, leading: int = 0) -> _Spectrum:
    """Return the spectrum of the blocks seen in a frame; its first `leading` directions stay as they are."""
    rest = image[:, leading:]
    values, vectors = eigensystems(product(rest, rest.swapaxes(1, 2)))
    weights = np.maximum(values[:, ::-1], 0.0)
    if leading:
        weights = np.concatenate([np.square(image[:, :leading]).sum(axis=2), weights], axis=1)
    return _Spectrum(frame, image, weights, vectors[:, :, ::-1], leading)


def _by_subspace(blocks: Reals, guess: Reals, rule: CutRule, total: float) -> tuple[_Spectrum, float]:
    """Find a subspace that holds the blocks up to a small share of the target; return its directions and
    what they have outside.

    The warm start and some random directions are mapped once through the blocks; what these have outside,
    measured as a difference of norms, is then caught by more random directions, in growing portions.
    """
    sectors, rows, columns = blocks.shape
    most, held = min(rows, columns), guess.shape[1]
    extra = max(EXTRA_DIRECTIONS, int(EXTRA_FRACTION * held), -(-rule.bond_floor // sectors) - held)
    if held + extra > LARGEST_FRACTION * most:
        return _by_gram(blocks), 0.0
    basis = orthonormal(_sampled(blocks, guess, rule.random.standard_normal((sectors, extra, columns))))
    image = product(basis, blocks)
    allowed = OUTSIDE_SHARE * rule.weight_target * total
    while (missing := total - float(np.vdot(image, image))) > allowed:
        if image.shape[1] + extra > LARGEST_FRACTION * most:
            return _by_gram(blocks), 0.0
        new = _outside(blocks, basis, image, rule.random.standard_normal((sectors, extra, columns)))
        basis = np.concatenate([basis, new], axis=1)
        image = np.concatenate([image, product(new, blocks)], axis=1)
        extra *= 2
    leading = int(LEADING_FRACTION * held) if held >= LEADING_FROM else 0
    return _rotated(basis, image, leading=leading), max(missing, 0.0)


def _sampled(blocks: Reals, guess: Reals, probes: Reals) -> Reals:
    """Return the images of a warm start and of random directions under the transposed blocks, in rows."""
    return product(np.concatenate([guess, probes], axis=1), blocks.swapaxes(1, 2))


def _outside(blocks: Reals, basis: Reals, image: Reals, probes: Reals) -> Reals:
    """Return orthonormal directions of what the blocks have outside a basis, where the probes find it."""
    sample = product(probes, blocks.swapaxes(1, 2))
    sample -= product(product(probes, image.swapaxes(1, 2)), basis)
    new = orthonormal_beside(basis, sample)
    if np.abs(product(new, basis.swapaxes(1, 2))).max() > ORTHOGONALITY:
        # nothing but rounding is left of the blocks: any directions serve, as long as they are orthogonal
        new = orthonormal(np.concatenate([basis, new], axis=1))[:, basis.shape[1] :]
    return new
