"""Lattice sum of dipole tensors, periodic in three directions (Ewald 1921; Born and Huang 1954, §30).

T_ab(x; k) = Σ_R T_ab(x − R) exp(−2πi k·R) = C Σ_R ∂_a∂_b (1/|x − R|) exp(−2πi k·R),   C = µ0 µB/4π.

With 1/r = erfc(αr)/r + erf(αr)/r the sum splits into

    real part          C Σ_R [B₂(r) r_a r_b − B₁(r) δ_ab] exp(−2πi k·R),   r = x − R
    reciprocal part    −(4πC/V) Σ_q (q_a q_b/q²) exp(−q²/4α²) exp(iq·x),   q = G − K
    self term          +C (4α³/3√π) δ_ab, for the source left out when x is on it
    boundary           at k = 0 the term q = 0 is dropped: no macroscopic demagnetizing field, N = 0

with B₁, B₂ as in `latticedip.kernels.radial`. The trace of the whole is known, (4πC/V) at k = 0 and 0 otherwise
(Laplace's equation, with the uniform background that the dropped term stands for), so five elements are summed.
"""

from __future__ import annotations

import logging
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats, check_cell, check_tol, frozen
from latticedip.errors import InputError, LimitError
from latticedip.kernels.jit import over_rows
from latticedip.kernels.phases import phase_table, reduce_offsets
from latticedip.kernels.real import real_gradients, real_tensors
from latticedip.kernels.reciprocal import reciprocal_tensors
from latticedip.sums.accuracy import choose_splitting, real_cutoffs, reciprocal_cutoffs
from latticedip.sums.boxes import Boxes, boxes, largest_radius
from latticedip.sums.lattice import ReducedLattice, reduce_cell, reduce_k, stable_inverse
from latticedip.units import DIPOLE_T_A3_PER_MUB

#: A target closer to a source than this (Å) is on it: that source is left out of its own sum.
ON_SITE_A = 1e-6
#: Share of ``tol`` given to each of the two tails. An element of the diagonal found from the trace collects the
#: tails of two others, two tails each; the rest is left for rounding.
TAIL_SHARE = 0.2
#: Pairs of target and source whose parts are held at one time: they stay in the second cache.
PAIRS_AT_A_TIME = 4096
#: Largest number of lattice or reciprocal vectors one sum may hold.
MAX_VECTORS = 20_000_000
#: Whole numbers above this cannot be taken from an offset exactly.
MAX_CELLS = 2**26

_log = logging.getLogger(__name__)


@dataclass(frozen=True, eq=False)
class Points:
    """Positions reduced into the cell, ready to be targets or sources of a `LatticeSum`.

    reduced: Shape (n, 3) float in Å. Cartesian, within half a vector of the reduced cell.
    turns: Shape (n,) float. k·R modulo 1 for the lattice vector R that was taken away.
    """

    reduced: FloatArray
    turns: FloatArray

    def __len__(self) -> int:
        return len(self.reduced)


@dataclass(frozen=True, eq=False)
class Stretches:
    """Waves sorted by m₁ and m₂: those of one stretch differ in m₃ only.

    rows: Shape (n, 3) int. m₁, m₂ and the number of orders |m₃| from 0, made even. orders: the largest, at least 2.
    row, order, negative: Shape (n_q,) int. The stretch of each wave, its |m₃|, and 1 where m₃ < 0.
    along: Shape (n_q,) float. m₃ − k₃ of each wave.
    """

    rows: np.ndarray
    orders: int
    row: np.ndarray
    order: np.ndarray
    negative: np.ndarray
    along: FloatArray

    def by_order(self, factors: np.ndarray) -> np.ndarray:
        """Shape (2, n, orders). One factor per wave (n_q,), those of m₃ ≥ 0 and of m₃ < 0 apart, by |m₃|; else zero."""
        out = np.zeros((2, len(self.rows), self.orders), dtype=factors.dtype)
        out[self.negative, self.row, self.order] = factors
        return out


@dataclass(frozen=True, eq=False)
class LatticeSum:
    """What is common to all sums over one lattice at one k: vectors, weights, splitting. See `lattice_sum`.

    alpha 1/Å; cutoff Å; images (3, n) Å with lengths (n,) and phase (2, n); q (n_q, 3) in 1/Å, q = (m − k)·waves;
    runs (n_runs, 5) and limits (3,): the whole numbers m as `phase_table` takes them; wave_factors (n_q,) in 1/Å: what
    stands before q_a q_b, with both waves of a pair ±q where only one is kept.
    """

    given_cell: FloatArray
    given_k: FloatArray
    lattice: ReducedLattice
    k: FloatArray
    tol: float
    alpha: float
    cutoff: float
    is_real: bool
    is_uniform: bool
    images: FloatArray
    lengths: FloatArray
    phase: FloatArray
    runs: np.ndarray
    limits: np.ndarray
    q: FloatArray
    wave_factors: FloatArray

    @cached_property
    def given_inverse(self) -> FloatArray:
        """Shape (3, 3) float in 1/Å. Inverse of the cell as given."""
        return stable_inverse(self.given_cell)

    @cached_property
    def stretches(self) -> Stretches:
        """The waves by stretches of m₃."""
        runs = self.runs
        # Several runs share m₁ and m₂ where the stretch is broken by the wave q = 0.
        new = np.append(True, np.any(np.diff(runs[:, 2:4], axis=0) != 0, axis=1))[: len(runs)]
        row = np.repeat(np.cumsum(new) - 1, runs[:, 1])
        third = np.repeat(runs[:, 4] - runs[:, 0], runs[:, 1]) + np.arange(len(self.q))
        top = np.zeros(int(new.sum()), dtype=np.int64)
        np.maximum.at(top, row, np.abs(third))
        rows = np.column_stack([runs[new, 2:4], (top + 2) // 2 * 2]).astype(np.int64)
        orders = int(rows[:, 2].max(initial=2))
        return Stretches(rows, orders, row, np.abs(third), (third < 0).astype(np.int64), third - self.k[2])

    @cached_property
    def tensor_factors(self) -> FloatArray:
        """Shape (n_stretches, orders, 6) in Å⁻¹. What `reciprocal_tensors` takes."""
        found = self.stretches
        out = np.empty((len(found.rows), found.orders, 6))
        for power in range(3):
            apart = found.by_order(self.wave_factors * found.along**power)
            out[..., 2 * power], out[..., 2 * power + 1] = apart[0] + apart[1], apart[0] - apart[1]
        return out

    def place(self, positions_cart: Any) -> Points:
        """Reduce Cartesian positions (n, 3) in Å by lattice vectors, exactly for the doubles as given."""
        positions = np.ascontiguousarray(positions_cart, dtype=float)
        inverse = self.given_inverse
        if len(positions) and np.abs(positions @ inverse).max() > MAX_CELLS:
            raise InputError(f"an offset lies more than {MAX_CELLS} cells away; reduce it by lattice vectors.")
        reduced, cells, turns = (
            np.empty((len(positions), 3)),
            np.empty((len(positions), 3)),
            np.empty(len(positions)),
        )
        over_rows(
            reduce_offsets, len(positions), positions, self.given_cell, inverse, self.lattice.steps,
            self.lattice.inverse, self.given_k, reduced, cells, turns, at_least=4096,
        )  # fmt: skip
        return Points(reduced, turns)

    def tensors(self, targets: Points, sources: Points) -> FloatArray | ComplexArray:
        """Shape (n_targets, n_sources, 3, 3) in T/µB. Σ_R T(x_t − x_s − R) exp(−2πi k·R), real where the sum is.

        A source on its target (within 1e-6 Å) is left out.
        """
        n_t, n_s = len(targets), len(sources)
        out = np.empty((n_t, n_s, 3, 3), dtype=float if self.is_real else complex)
        if out.size:
            found = boxes(self.lattice, targets.reduced)
            by_box = Points(targets.reduced[found.order], targets.turns[found.order])
            over_rows(
                _tensors_of_boxes, len(found), self, found, by_box, sources, unit_phases(self, sources.reduced), out,
                at_least=max(1, 400 * len(found) // (n_s * n_t)),
            )  # fmt: skip
        return out

    def field_gradient(self, targets: Points, sources: Points, components: ComplexArray) -> ComplexArray:
        """Shape (n_targets, 3, 3) complex in T/Å. ∂B_a/∂x_c of the field of components (n_sources, 3) in µB.

        The field of the source on a target is left out. Meant for few targets: every wave costs one product.
        """
        moments = np.ascontiguousarray(components * np.exp(2j * np.pi * sources.turns)[:, None])
        n_q = len(self.q)
        table, own = wave_table(self, sources.reduced), wave_table(self, targets.reduced)
        source_waves, target_waves = table[:, :n_q] + 1j * table[:, n_q:], own[:, :n_q] + 1j * own[:, n_q:]
        square = np.einsum("qa,qa->q", self.q, self.q)
        weight = -4j * np.pi / self.lattice.volume * np.exp(-square / (4 * self.alpha**2)) / square
        pairs = (self.q[:, :, None] * self.q[:, None, :]).reshape(n_q, 9)
        scalar = weight * np.einsum("qa,qa->q", self.q, source_waves.conj().T @ moments)
        out = ((target_waves * scalar) @ pairs).reshape(-1, 3, 3)
        if self.is_real:
            # Only one of each pair ±q is kept: −q brings q·F with both phases conjugated and the sign of q turned.
            reverse = -weight * np.einsum("qa,qa->q", self.q, source_waves.T @ moments)
            out += ((target_waves.conj() * reverse) @ pairs).reshape(-1, 3, 3)
        over_rows(
            real_gradients, len(targets), targets.reduced, sources.reduced, moments, self.lattice.cell,
            self.lattice.inverse, self.images, self.phase, self.k, self.alpha, self.cutoff, ON_SITE_A, out, at_least=4,
        )  # fmt: skip
        return out * DIPOLE_T_A3_PER_MUB * np.exp(-2j * np.pi * targets.turns)[:, None, None]


def _tensors_of_boxes(
    first: int,
    last: int,
    plan: LatticeSum,
    found: Boxes,
    targets: Points,
    sources: Points,
    source_phases: ComplexArray,
    out: FloatArray | ComplexArray,
) -> None:
    """Write the rows of ``out`` whose targets lie in boxes first..last; targets are sorted by box."""
    step = max(1, PAIRS_AT_A_TIME * len(found) // (len(targets) * len(sources)))
    for begin in range(first, last, step):
        part, rows = found.part(begin, min(last, begin + step))
        flat = np.empty((1 if plan.is_real else 2, len(part.order), len(sources), 5))
        reciprocal_part(plan, unit_phases(plan, targets.reduced[rows]), source_phases, flat)
        real_part(plan, part, targets.reduced[rows], sources.reduced, flat)
        out[part.order] = whole_tensors(flat, boundary_trace(plan), targets.turns[rows], sources.turns)


def real_part(plan: LatticeSum, found: Boxes, targets: FloatArray, sources: FloatArray, flat: FloatArray) -> None:
    """Add the real part and the self term, divided by C, to ``flat`` (parts, n_t, n_s, 5) in 1/Å³.

    targets (n_t, 3), sorted by box, and sources (n_s, 3): reduced, in Å.
    """
    real_tensors(
        0, len(found), found.starts, found.centres, found.radii, targets, sources, plan.lattice.cell,
        plan.lattice.inverse, plan.images, plan.lengths, plan.phase, plan.k, plan.alpha, plan.cutoff, ON_SITE_A,
        self_term(plan.alpha), flat,
    )  # fmt: skip


def self_term(alpha: float) -> float:
    """4α³/(3√π) in 1/Å³: what the reciprocal part holds of the source itself, −∂_a∂_b erf(αr)/r at r = 0."""
    return 4 * alpha**3 / (3 * np.sqrt(np.pi))


def boundary_trace(plan: LatticeSum) -> float:
    """Trace of the whole sum in T/µB: 4πC/V at k = 0, where the term q = 0 is dropped (N = 0), else 0."""
    return 4 * np.pi * DIPOLE_T_A3_PER_MUB / plan.lattice.volume if plan.is_uniform else 0.0


def wave_table(plan: LatticeSum, points: FloatArray) -> FloatArray:
    """Shape (n, 2 n_q) float. cos(q·x), then sin(q·x), of reduced positions."""
    table = np.empty((len(points), 2 * len(plan.q)))
    over_rows(phase_table, len(points), points, plan.lattice.waves, plan.runs, plan.k, plan.limits, table)
    return table


def reciprocal_part(plan: LatticeSum, targets: ComplexArray, sources: ComplexArray, flat: FloatArray) -> None:
    """Write the reciprocal part, divided by C, to ``flat`` (parts, n_t, n_s, 5) in 1/Å³.

    targets (n_t, 4), sources (n_s, 4): `unit_phases` of the points. Every pair has the products of those of its two.
    """
    parts, n_t, n_s, _ = flat.shape
    reciprocal_tensors(
        0, n_t * n_s, targets, sources, plan.lattice.waves, plan.k, plan.limits, plan.stretches.rows,
        plan.tensor_factors, flat.reshape(parts, n_t * n_s, 5),
    )  # fmt: skip


def unit_phases(plan: LatticeSum, points: FloatArray) -> ComplexArray:
    """Shape (n, 4) complex. exp(i b·x) for the three reciprocal vectors b, and exp(−i k·x), of reduced positions."""
    waves, k = plan.lattice.waves, plan.k
    # Term by term: a matrix product rounds a row by how many rows come with it.
    angles = points[:, :1] * waves[:, 0] + points[:, 1:2] * waves[:, 1] + points[:, 2:] * waves[:, 2]
    shift = -(angles[:, :1] * k[0] + angles[:, 1:2] * k[1] + angles[:, 2:] * k[2])
    return np.ascontiguousarray(np.exp(1j * np.hstack([angles, shift])))


def whole_tensors(
    flat: FloatArray, trace: float, target_turns: FloatArray, source_turns: FloatArray
) -> FloatArray | ComplexArray:
    """Shape (n_t, n_s, 3, 3) in T/µB. Symmetric tensors times exp(−2πi (turns of target − turns of source)).

    flat (parts, n_t, n_s, 5): xx, yy, xy, xz, yz divided by C. trace in T/µB, real.
    """
    out = np.empty((*flat.shape[1:3], 3, 3), dtype=float if len(flat) == 1 else complex)
    _unpack(flat[0], trace, out.real)
    if len(flat) == 2:
        _unpack(flat[1], 0.0, out.imag)
    turns = target_turns[:, None] - source_turns[None, :]
    if np.any(turns):
        # Where the sum is real turns are multiples of one half, so that the phase is a sign.
        phase = np.exp(-2j * np.pi * turns) if len(flat) == 2 else np.cos(2 * np.pi * turns)
        out *= phase[:, :, None, None]
    return out


def _unpack(flat: FloatArray, trace: float, out: FloatArray) -> None:
    np.multiply(flat[..., 0], DIPOLE_T_A3_PER_MUB, out=out[..., 0, 0])
    np.multiply(flat[..., 1], DIPOLE_T_A3_PER_MUB, out=out[..., 1, 1])
    np.subtract(trace - out[..., 0, 0], out[..., 1, 1], out=out[..., 2, 2])
    for e, (a, b) in zip((2, 3, 4), ((0, 1), (0, 2), (1, 2)), strict=True):
        np.multiply(flat[..., e], DIPOLE_T_A3_PER_MUB, out=out[..., a, b])
        out[..., b, a] = out[..., a, b]


def lattice_sum(cell: Any, k: Any = (0.0, 0.0, 0.0), tol: float = 1e-10, alpha: float | None = None) -> LatticeSum:
    """Prepare sums over a three-dimensional lattice; the result is kept, so that a second call costs nothing.

    cell: Shape (3, 3), rows in Å. k: Shape (3,), reduced coordinates. tol: bound of the error of every tensor,
    max |error| ≤ tol · max(1 T/µB, largest |element|). alpha: splitting in 1/Å, chosen by cost when None.

    Raises InputError for a singular cell or a tol out of range, AccuracyError where the bound cannot be kept,
    LimitError where the cell would need more vectors than fit in memory.
    """
    matrix = check_cell("cell", cell)
    vector = as_floats("k", k, (3,))
    if alpha is not None and not alpha > 0:
        raise InputError(f"alpha must be above zero, got {alpha!r}.")
    return _lattice_sum(matrix.tobytes(), vector.tobytes(), check_tol(tol), alpha)


@lru_cache(maxsize=64)
def _lattice_sum(cell_bytes: bytes, k_bytes: bytes, tol: float, alpha: float | None) -> LatticeSum:
    given = frozen(np.frombuffer(cell_bytes).reshape(3, 3))
    given_k = frozen(np.frombuffer(k_bytes))
    lattice = reduce_cell(given)
    k = reduce_k(lattice.steps, given_k)
    is_real = bool(np.all(2 * k == np.round(2 * k)))
    is_uniform = bool(np.all(k == np.round(k)))
    distances = lattice.layer_distances
    wanted = TAIL_SHARE * tol / DIPOLE_T_A3_PER_MUB
    if alpha is None:
        alpha, r_c, q_c = _splitting(distances.tobytes(), lattice.volume, wanted)
    else:
        one = np.array([alpha])
        r_c, q_c = (
            float(real_cutoffs(one, distances, wanted)[0]),
            float(reciprocal_cutoffs(one, distances, wanted)[0]),
        )
    # Targets of one box share a list of images: it holds what the farthest of them needs.
    images, cells = image_vectors(lattice, r_c + largest_radius(lattice))
    turns = (cells @ k) % 1.0
    indices, q = wave_vectors(lattice, k, q_c, is_real)
    square = np.einsum("qa,qa->q", q, q)
    factors = (2.0 if is_real else 1.0) * -4 * np.pi / lattice.volume * np.exp(-square / (4 * alpha**2)) / square
    return LatticeSum(
        given_cell=given, given_k=given_k, lattice=lattice, k=frozen(k), tol=tol, alpha=alpha, cutoff=r_c,
        is_real=is_real, is_uniform=is_uniform, images=frozen(images.T), lengths=frozen(np.linalg.norm(images, axis=1)),
        phase=frozen(np.stack([np.cos(2 * np.pi * turns), -np.sin(2 * np.pi * turns)])),
        runs=frozen(consecutive_runs(indices)), limits=frozen(np.abs(indices).max(axis=0, initial=0)), q=frozen(q),
        wave_factors=frozen(factors),
    )  # fmt: skip


@lru_cache(maxsize=256)
def _splitting(distances: bytes, volume: float, wanted: float) -> tuple[float, float, float]:
    """`choose_splitting`, done and told once for a lattice and a bound, whatever the k."""
    alpha, r_c, q_c = choose_splitting(np.frombuffer(distances), volume, wanted)
    _log.info(
        "lattice sum over a cell of %.5g Å³: splitting %.4g 1/Å, images within %.4g Å, waves up to %.4g 1/Å",
        volume, alpha, r_c, q_c,
    )  # fmt: skip
    return alpha, r_c, q_c


def image_vectors(lattice: ReducedLattice, cutoff: float) -> tuple[FloatArray, FloatArray]:
    """Lattice vectors (Å) by increasing length that can lie within ``cutoff`` of a separation in the home cell.

    The separation is within half a vector along each axis. Returns Cartesian vectors (n, 3) and whole numbers (n, 3).
    """
    spacing = 1 / np.linalg.norm(lattice.inverse, axis=0)
    reach = np.floor(cutoff / spacing + 0.5 + 1e-9).astype(int)
    cells = _grid(reach)
    vectors = cells @ lattice.cell
    farthest = 0.5 * max(
        float(np.linalg.norm(np.array(signs) @ lattice.cell))
        for signs in ((1, 1, 1), (1, 1, -1), (1, -1, 1), (-1, 1, 1))
    )
    length = np.linalg.norm(vectors, axis=1)
    keep = length <= (cutoff + farthest) * (1 + 1e-12)
    order = np.argsort(length[keep], kind="stable")
    return vectors[keep][order], cells[keep][order]


def wave_vectors(lattice: ReducedLattice, k: FloatArray, cutoff: float, half: bool) -> tuple[np.ndarray, FloatArray]:
    """Whole numbers m (n, 3) and q = (m − k)·waves (n, 3) with 0 < |q| ≤ cutoff; one of each pair ±q if ``half``."""
    waves = lattice.waves
    spacing = 2 * np.pi / np.linalg.norm(lattice.cell, axis=1)
    reach = np.floor(cutoff / spacing + np.abs(k) + 1e-9).astype(int)
    indices = _grid(reach)
    fractional = indices - k
    q = fractional @ waves
    keep = (np.einsum("qa,qa->q", q, q) <= cutoff**2 * (1 + 1e-12)) & np.any(fractional != 0, axis=1)
    if half:
        f = fractional
        # The half with m₁ > 0: stretches of consecutive m₃ then keep their whole length.
        keep &= (f[:, 0] > 0) | ((f[:, 0] == 0) & ((f[:, 1] > 0) | ((f[:, 1] == 0) & (f[:, 2] > 0))))
    return indices[keep].astype(np.int64), q[keep]


def consecutive_runs(indices: np.ndarray) -> np.ndarray:
    """Shape (n_runs, 5) int. Stretches of whole numbers with m₁, m₂ fixed and m₃ going up by one.

    Each row holds the first index, the length, m₁, m₂ and the first m₃.
    """
    steps = np.diff(indices, axis=0)
    breaks = np.flatnonzero(np.any(steps != (0, 0, 1), axis=1)) + 1
    starts = np.concatenate([[0], breaks]) if len(indices) else np.zeros(0, dtype=np.int64)
    lengths = np.diff(np.concatenate([starts, [len(indices)]]))
    return np.ascontiguousarray(np.column_stack([starts, lengths, indices[starts]]).astype(np.int64))


def _grid(reach: np.ndarray) -> FloatArray:
    count = int(np.prod(2 * reach.astype(float) + 1))
    if count > MAX_VECTORS:
        raise LimitError(
            f"the lattice sum would need {count:.3g} vectors for this cell and tolerance, more than {MAX_VECTORS}. "
            "Use a larger tol or a less extreme cell."
        )
    axes = [np.arange(-n, n + 1, dtype=float) for n in reach]
    return np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
