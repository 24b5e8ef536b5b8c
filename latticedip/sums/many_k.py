"""Dipole tensors between the sites of a crystal at many propagation vectors, as matrix products.

The splitting of `latticedip.sums.bulk`, arranged for few pairs and many k. With τ_ij = d + n (d reduced, n a lattice
vector), q = G − K and K the Cartesian k including 2π,

    T_ij(k) = exp(−2πi k·n) { Σ_R A(d − R) exp(−2πi k·R) + exp(−iK·d) Σ_G w(q) q_a q_b exp(iG·d) },

A the real part of one image and w(q) = −(4πC/V) exp(−q²/4α²)/q². A and exp(iG·d) do not depend on k: they are tabulated
once, and a block of k costs two matrix products. T_ji(k) is the conjugate of T_ij(k).
"""

from __future__ import annotations

import logging
from dataclasses import dataclass
from itertools import combinations

import numpy as np
from scipy.special import erfc

from latticedip.checks import ComplexArray, FloatArray, check_cell, check_tol, frozen
from latticedip.errors import LimitError
from latticedip.sums.accuracy import count_bounds, real_cutoffs, reciprocal_cutoffs
from latticedip.sums.bulk import ON_SITE_A, TAIL_SHARE, image_vectors, self_term, wave_vectors
from latticedip.sums.lattice import ReducedLattice, reduce_cell, stable_inverse
from latticedip.units import DIPOLE_T_A3_PER_MUB

#: Largest tables held, in bytes.
MAX_TABLE_BYTES = 2 * 2**30
#: Bytes of temporaries per block of k.
BLOCK_BYTES = 2**24
#: Cost of one wave against one image, in the products and in building their tables (measured).
COST_WAVE = 1.5

_log = logging.getLogger(__name__)


@dataclass(frozen=True, eq=False)
class ManyK:
    """Tables for T_ij(k) of all pairs of sites at any k. See `many_k`.

    lattice: the reduced lattice. n_sites: number of sites. first, second: Shape (n_pairs,) int: the sites i ≤ j of each
    pair; pair 0 is (0, 0) and stands for every site with itself. offsets: Shape (n_pairs, 3) Å, the reduced separation
    d; cells: Shape (n_pairs, 3), the lattice vector n taken away, in the reduced basis. images: Shape (n_images, 3)
    whole numbers. real: Shape (n_images, 5 n_pairs) T/µB. waves: Shape (n_waves, 3) whole numbers. phases: Shape
    (n_waves, 2 n_pairs): cos and sin of G·d.
    """

    lattice: ReducedLattice
    n_sites: int
    first: np.ndarray
    second: np.ndarray
    offsets: FloatArray
    cells: FloatArray
    alpha: float
    images: FloatArray
    real: FloatArray
    waves: FloatArray
    phases: FloatArray

    @property
    def block(self) -> int:
        """Number of k to ask for at one time, so that temporaries stay small."""
        pairs = len(self.first)
        per_k = 8 * (5 * len(self.waves) + 4 * len(self.images) + 40 * pairs) + 16 * (3 * self.n_sites) ** 2
        return max(4, BLOCK_BYTES // per_k)

    def matrices(self, k: FloatArray) -> ComplexArray:
        """Shape (n_k, n, 3, n, 3) complex in T/µB. [:, i, a, j, b] is T_ij,ab(k), N = 0 at k = 0.

        k: Shape (n_k, 3), reduced coordinates of the cell as given. One call holds everything at once: ask for `block`.
        """
        reduced = (np.asarray(k, dtype=float) % 1.0) @ self.lattice.steps.T
        reduced -= np.round(reduced)
        elements = self._reciprocal(reduced)
        elements += self._real(reduced)
        elements *= np.exp(-2j * np.pi * ((reduced @ self.cells.T) % 1.0))[:, None, :]
        uniform = np.all(reduced == 0, axis=1)
        trace = np.where(uniform, 4 * np.pi * DIPOLE_T_A3_PER_MUB / self.lattice.volume, 0.0)
        return self._assemble(elements, trace)

    def _real(self, k: FloatArray) -> ComplexArray:
        n_k, pairs = len(k), len(self.first)
        angles = 2 * np.pi * ((k @ self.images.T) % 1.0)
        both = np.concatenate([np.cos(angles), -np.sin(angles)]) @ self.real
        both = both.reshape(2, n_k, 5, pairs)
        return np.asarray(both[0] + 1j * both[1])

    def _reciprocal(self, k: FloatArray) -> ComplexArray:
        n_k, pairs = len(k), len(self.first)
        q = (self.waves[None] - k[:, None]) @ self.lattice.waves
        square = np.einsum("kqa,kqa->kq", q, q)
        # At k = 0 the wave q = 0 is dropped: no macroscopic demagnetizing field.
        square[square == 0.0] = np.inf
        factor = -4 * np.pi * DIPOLE_T_A3_PER_MUB / self.lattice.volume * np.exp(-square / (4 * self.alpha**2)) / square
        weights = np.empty((n_k, 5, len(self.waves)))
        for e, (a, b) in enumerate(((0, 0), (1, 1), (0, 1), (0, 2), (1, 2))):
            np.multiply(factor * q[:, :, a], q[:, :, b], out=weights[:, e])
        both = (weights.reshape(5 * n_k, -1) @ self.phases).reshape(n_k, 5, 2, pairs)
        own = np.exp(-1j * ((k @ self.lattice.waves) @ self.offsets.T))
        return np.asarray((both[:, :, 0] + 1j * both[:, :, 1]) * own[:, None, :])

    def _assemble(self, elements: ComplexArray, trace: FloatArray) -> ComplexArray:
        n = self.n_sites
        out = np.empty((len(elements), n, 3, n, 3), dtype=complex)
        xx, yy, xy, xz, yz = np.moveaxis(elements, 1, 0)
        zz = trace[:, None] - xx - yy
        i, j = self.first[1:], self.second[1:]
        sites = np.arange(n)
        for a, row in enumerate(((xx, xy, xz), (xy, yy, yz), (xz, yz, zz))):
            for b, value in enumerate(row):
                # Every site has the same tensor with its own images; it is even, hence real.
                out[:, sites, a, sites, b] = value[:, :1].real
                out[:, i, a, j, b] = value[:, 1:]
                out[:, j, a, i, b] = value[:, 1:].conj()
        return out


def many_k(cell: FloatArray, places_cart: FloatArray, tol: float = 1e-10, alpha: float | None = None) -> ManyK:
    """Prepare the tensors between sites at many k.

    cell: Shape (3, 3), rows in Å. places_cart: Shape (n, 3) Å, at least one; sites that share a place do not feel each
    other. tol: bound of the error of every tensor, as in `lattice_sum`. alpha: splitting in 1/Å, by cost if None.

    Raises InputError for a singular cell or a tol out of range, AccuracyError where the bound cannot be kept,
    LimitError where the tables would not fit.
    """
    lattice = reduce_cell(check_cell("cell", cell))
    wanted = TAIL_SHARE * check_tol(tol) / DIPOLE_T_A3_PER_MUB
    distances = lattice.layer_distances
    grid = (
        np.sqrt(np.pi) / lattice.volume ** (1 / 3) * np.geomspace(0.25, 4.0, 33) if alpha is None else np.array([alpha])
    )
    r_c = real_cutoffs(grid, distances, wanted)
    q_c = reciprocal_cutoffs(grid, distances, wanted)
    # Whatever k, its waves within the cut-off are among those of a sphere wider by the longest reduced k.
    widest = _half_diagonal(lattice.waves)
    images = count_bounds(distances, r_c + _half_diagonal(lattice.cell))[1]
    waves = count_bounds(2 * np.pi / distances, q_c + widest)[1]
    best = int(np.argmin(images + COST_WAVE * waves))
    pairs = 1 + len(places_cart) * (len(places_cart) - 1) // 2
    if 8 * pairs * (5 * images[best] + 2 * waves[best]) > MAX_TABLE_BYTES:
        raise LimitError(
            f"{len(places_cart)} sites need tables larger than {MAX_TABLE_BYTES // 2**30} GiB for sums at many k. "
            "Give a primitive cell, fewer magnetic sites or a larger tol."
        )
    _log.info(
        "sums at many k between %d sites: splitting %.4g 1/Å, about %d images and %d waves tabulated",
        len(places_cart), grid[best], images[best], waves[best],
    )  # fmt: skip
    return _tabulate(
        lattice, np.asarray(places_cart, dtype=float), float(grid[best]), float(r_c[best]), float(q_c[best] + widest)
    )


def _half_diagonal(basis: FloatArray) -> float:
    signs = ((1, 1, 1), (1, 1, -1), (1, -1, 1), (-1, 1, 1))
    return 0.5 * max(float(np.linalg.norm(np.array(s) @ basis)) for s in signs)


def _tabulate(lattice: ReducedLattice, places: FloatArray, alpha: float, r_c: float, q_c: float) -> ManyK:
    ordered = [(0, 0), *combinations(range(len(places)), 2)]
    first, second = (np.array(part, dtype=np.int64) for part in zip(*ordered, strict=True))
    separations = places[first] - places[second]
    cells = np.round(separations @ stable_inverse(lattice.cell))
    offsets = separations - cells @ lattice.cell
    vectors, images = image_vectors(lattice, r_c)
    real = np.empty((len(images), 5, len(first)))
    for pair, offset in enumerate(offsets):
        real[:, :, pair] = _image_tensors(offset - vectors, alpha, r_c)
    indices, g = wave_vectors(lattice, np.zeros(3), q_c, False)
    angles = np.concatenate([np.zeros((1, 3)), g]) @ offsets.T
    return ManyK(
        lattice=lattice, n_sites=len(places), first=frozen(first), second=frozen(second), offsets=frozen(offsets),
        cells=frozen(cells), alpha=alpha, images=frozen(images), real=frozen(real.reshape(len(images), -1)),
        waves=frozen(np.concatenate([np.zeros((1, 3)), indices])),
        phases=frozen(np.concatenate([np.cos(angles), np.sin(angles)], axis=1)),
    )  # fmt: skip


def _image_tensors(r: FloatArray, alpha: float, cutoff: float) -> FloatArray:
    """Shape (n, 5) in T/µB. B₂ r_a r_b − B₁ δ_ab of separations r (n, 3): xx, yy, xy, xz, yz.

    Zero beyond the cut-off; a source on its target gives the self term.
    """
    square = np.einsum("ia,ia->i", r, r)
    own = square < ON_SITE_A**2
    used = (square <= cutoff**2) & ~own
    x = r[used]
    distance = np.sqrt(square[used])
    gauss = 2 * alpha / np.sqrt(np.pi) * np.exp(-square[used] * alpha**2)
    b1 = (erfc(alpha * distance) / distance + gauss) / square[used]
    b2 = (3 * b1 + 2 * alpha**2 * gauss) / square[used]
    out = np.zeros((len(r), 5))
    out[used] = b2[:, None] * x[:, [0, 1, 0, 0, 1]] * x[:, [0, 1, 1, 2, 2]]
    out[used, :2] -= b1[:, None]
    out[own, :2] = self_term(alpha)
    return out * DIPOLE_T_A3_PER_MUB
