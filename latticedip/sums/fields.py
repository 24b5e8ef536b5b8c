"""Field of given moments on a lattice, periodic in three directions, for one target or a million.

The same Ewald sum as in `latticedip.sums.bulk`, with the moments summed into one structure factor per wave before any
target is looked at: the reciprocal part costs the same for one source and for a hundred. The splitting is chosen
for that, so that it differs from the one for tensors.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, check_tol
from latticedip.kernels.fields import real_fields
from latticedip.kernels.jit import over_rows
from latticedip.kernels.reciprocal import reciprocal_tensors
from latticedip.sums.accuracy import COST_FIELD_IMAGE, COST_FIELD_WAVE, choose_splitting
from latticedip.sums.bulk import ON_SITE_A, TAIL_SHARE, LatticeSum, Points, lattice_sum, self_term, wave_table
from latticedip.sums.lattice import ReducedLattice, reduce_cell
from latticedip.units import DIPOLE_T_A3_PER_MUB

#: Boxes whose targets share a list of images: targets wanted in each, and the smallest and largest edge in Å.
BOX_TARGETS, BOX_MIN_A, BOX_MAX_A = 8, 0.8, 4.0


def field_plan(cell: FloatArray, k: FloatArray, tol: float, n_sources: int) -> LatticeSum:
    """The `LatticeSum` with the splitting that suits fields of about this many sources; kept for the next call.

    cell (3, 3) Å, k (3,), tol as `lattice_sum`, which also says what is raised.
    """
    bucket = 1 << max(0, int(n_sources) - 1).bit_length()
    given = np.ascontiguousarray(cell, dtype=float)
    return lattice_sum(given, k, tol, _splitting(given.tobytes(), check_tol(tol), bucket))


@lru_cache(maxsize=64)
def _splitting(cell: bytes, tol: float, n_sources: int) -> float:
    lattice = reduce_cell(np.frombuffer(cell).reshape(3, 3))
    wanted = TAIL_SHARE * tol / DIPOLE_T_A3_PER_MUB
    costs = COST_FIELD_IMAGE, COST_FIELD_WAVE / n_sources
    return choose_splitting(lattice.layer_distances, lattice.volume, wanted, costs)[0]


def lattice_field(
    plan: LatticeSum, targets: Points, sources: Points, components: ComplexArray
) -> tuple[ComplexArray, FloatArray]:
    """Field Σ_s Σ_R T(x_t − x_s − R) S_s exp(−2πi k·R) of components S (n_sources, 3) in µB at every target.

    Returns the field, shape (n_targets, 3) complex in T, and shape (n_targets,) float in T: a bound of the size of
    the tensors times moments that were added up in the real part, for error bounds. A source on its target (within
    1e-6 Å) is left out. At k = 0 the sum is that with N = 0.
    """
    n_t = len(targets)
    moments = np.asarray(components, dtype=complex) * np.exp(2j * np.pi * sources.turns)[:, None]
    if plan.is_real:
        # The phases are signs here; cut what rounding leaves of their imaginary parts.
        moments = np.asarray(components, dtype=complex) * np.round(np.cos(2 * np.pi * sources.turns))[:, None]
    parts = 1 if plan.is_real and not np.any(moments.imag) else 2
    out = np.zeros((parts, n_t, 1, 3))
    weight = np.zeros(n_t)
    if n_t and len(sources):
        _reciprocal(plan, targets.reduced, sources.reduced, moments, out)
        _real(plan, targets.reduced, sources.reduced, moments, out, weight)
    out *= DIPOLE_T_A3_PER_MUB
    total = out[0, :, 0].astype(complex) if parts == 1 else out[0, :, 0] + 1j * out[1, :, 0]
    if np.any(targets.turns):
        total *= np.exp(-2j * np.pi * targets.turns)[:, None]
    return total, weight * DIPOLE_T_A3_PER_MUB


def _reciprocal(
    plan: LatticeSum, targets: FloatArray, sources: FloatArray, moments: ComplexArray, out: FloatArray
) -> None:
    """Write the reciprocal part, divided by C, to ``out`` (parts, n_t, 1, 3) in µB/Å³."""
    n_q, parts = len(plan.q), len(out)
    table = wave_table(plan, sources)
    # Not a matrix product: it is small, and the threads that BLAS would wake cost more than the work.
    cosine = np.einsum("sq,sa->qa", table[:, :n_q], moments.real) + 1j * np.einsum(
        "sq,sa->qa", table[:, :n_q], moments.imag
    )
    sine = np.einsum("sq,sa->qa", table[:, n_q:], moments.real) + 1j * np.einsum(
        "sq,sa->qa", table[:, n_q:], moments.imag
    )
    square = np.einsum("qa,qa->q", plan.q, plan.q)
    scale = (
        (2.0 if plan.is_real else 1.0)
        * -4
        * np.pi
        / plan.lattice.volume
        * np.exp(-square / (4 * plan.alpha**2))
        / square
    )

    def projected(structure: ComplexArray) -> ComplexArray:
        return np.asarray((plan.q * (scale * np.einsum("qa,qa->q", plan.q, structure))[:, None]).T)

    right = np.zeros((4 if parts == 1 else 8, 2 * n_q))
    rows = right[: 3 * parts].reshape(parts, 3, 2, n_q)
    if plan.is_real:
        # One of each pair ±q: cos q·(x_t − x_s) = cos cos + sin sin, for real and imaginary parts of the moments alike.
        both = projected(cosine), projected(sine)
        rows[0, :, 0], rows[0, :, 1] = both[0].real, both[1].real
        if parts == 2:
            rows[1, :, 0], rows[1, :, 1] = both[0].imag, both[1].imag
    else:
        wave = projected(cosine - 1j * sine)
        rows[0, :, 0], rows[0, :, 1] = wave.real, -wave.imag
        rows[1, :, 0], rows[1, :, 1] = wave.imag, wave.real
    over_rows(
        reciprocal_tensors, len(targets), targets, plan.lattice.waves, plan.runs, plan.k, plan.limits, right, out,
        at_least=max(4, 50_000 // max(1, right.size) * 4),
    )  # fmt: skip


def _real(
    plan: LatticeSum,
    targets: FloatArray,
    sources: FloatArray,
    moments: ComplexArray,
    out: FloatArray,
    weight: FloatArray,
) -> None:
    """Add the real part and the self term, divided by C, to ``out`` (parts, n_t, 1, 3) in µB/Å³."""
    positions, owner, phase = _source_images(plan, sources)
    carried = moments[owner] * phase[:, None]
    split = np.ascontiguousarray(np.stack([carried.real.T, carried.imag.T][: len(out)]))
    order, starts, centres, radii = boxes(plan.lattice, targets)
    sorted_out, sorted_weight = np.zeros(out.shape), np.zeros(len(targets))
    over_rows(
        real_fields, len(radii), starts, centres, radii, targets[order], positions, split, np.abs(carried).sum(axis=1),
        plan.alpha, plan.cutoff, ON_SITE_A, self_term(plan.alpha), sorted_out, sorted_weight, at_least=4,
    )  # fmt: skip
    out[:, order] += sorted_out
    weight[order] = sorted_weight


def _source_images(plan: LatticeSum, sources: FloatArray) -> tuple[FloatArray, np.ndarray, ComplexArray]:
    """Images of all sources within the cut-off of the home cell: positions (3, n), source of each and its phase."""
    shift = plan.lattice.inverse
    home = np.round(sources @ shift)
    inside = sources - home @ plan.lattice.cell
    # A target and a source both lie within half a vector of the origin, so that their separation needs one more shell.
    spacing = 1 / np.linalg.norm(shift, axis=0)
    reach = np.floor(plan.cutoff / spacing + 1.0 + 1e-9).astype(int)
    axes = [np.arange(-n, n + 1) for n in reach]
    cells = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    fractional = (inside @ shift)[None] + cells[:, None]
    # Beyond half a cell by more than the cut-off along any axis, an image is out of reach of the whole cell.
    near = np.all((np.abs(fractional) - 0.5) * spacing <= plan.cutoff * (1 + 1e-9), axis=2)
    cell_index, owner = np.nonzero(near)
    positions = inside[owner] + cells[cell_index] @ plan.lattice.cell
    turns = ((cells[cell_index] - home[owner]) @ plan.k) % 1.0
    phase = np.exp(-2j * np.pi * turns)
    if plan.is_real:
        phase = np.round(phase.real).astype(complex)
    return np.ascontiguousarray(positions.T), owner, phase


def boxes(lattice: ReducedLattice, targets: FloatArray) -> tuple[np.ndarray, np.ndarray, FloatArray, FloatArray]:
    """Group reduced targets (n, 3) by place: order (n,), starts (n_boxes + 1,), centres (n_boxes, 3), radii (n_boxes,).

    Few targets stand each for itself.
    """
    n = len(targets)
    edge = min(max((lattice.volume * BOX_TARGETS / max(1, n)) ** (1 / 3), BOX_MIN_A), BOX_MAX_A)
    count = np.maximum(1, np.ceil(np.linalg.norm(lattice.cell, axis=1) / edge)).astype(int)
    if np.prod(count.astype(float)) > n:
        return np.arange(n), np.arange(n + 1), np.ascontiguousarray(targets), np.zeros(n)
    place = np.clip(((targets @ lattice.inverse + 0.5) * count).astype(int), 0, count - 1)
    index = np.ravel_multi_index(tuple(place.T), tuple(count))
    order = np.argsort(index, kind="stable")
    kinds, first = np.unique(index[order], return_index=True)
    corner = np.array(np.unravel_index(kinds, tuple(count))).T
    centres = ((corner + 0.5) / count - 0.5) @ lattice.cell
    edges = lattice.cell / count[:, None]
    signs = ((1, 1, 1), (1, 1, -1), (1, -1, 1), (-1, 1, 1))
    # A hair wider, for targets that rounding puts on the other side of a face.
    radius = 0.5 * max(float(np.linalg.norm(np.array(s) @ edges)) for s in signs) + 1e-9
    return order, np.append(first, n), np.ascontiguousarray(centres), np.full(len(kinds), radius)
