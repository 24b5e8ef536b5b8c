"""Field of given moments on a lattice, periodic in three directions, for one target or a million.

The same Ewald sum as in `latticedip.sums.bulk`, with the moments summed into one structure factor per wave before any
target is looked at: the reciprocal part costs the same for one source and for a hundred. The splitting is chosen
for that, so that it differs from the one for tensors.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, check_tol
from latticedip.kernels.fields import real_fields
from latticedip.kernels.jit import over_rows
from latticedip.kernels.reciprocal import reciprocal_fields
from latticedip.sums.accuracy import (
    COST_FIELD_IMAGE,
    COST_FIELD_IMAGE_ONCE,
    COST_FIELD_WAVE,
    COST_FIELD_WAVE_OF_SOURCE,
    COST_FIELD_WAVE_ONCE,
    choose_splitting,
)
from latticedip.sums.boxes import Boxes, boxes
from latticedip.sums.bulk import ON_SITE_A, TAIL_SHARE, LatticeSum, Points, lattice_sum, self_term, wave_table
from latticedip.sums.lattice import reduce_cell
from latticedip.units import DIPOLE_T_A3_PER_MUB


def field_plan(cell: FloatArray, k: FloatArray, tol: float, n_sources: int, n_targets: int) -> LatticeSum:
    """The `LatticeSum` with the splitting that suits about so many sources and targets; kept for the next call.

    cell (3, 3) Å, k (3,), tol as `lattice_sum`, which also says what is raised.
    """
    given = np.ascontiguousarray(cell, dtype=float)
    sizes = _bucket(n_sources, 2), _bucket(n_targets, 8)
    return lattice_sum(given, k, tol, _splitting(given.tobytes(), check_tol(tol), *sizes))


def _bucket(n: int, base: int) -> int:
    """The power of a base that is nearest to n by ratio, up to a million."""
    return int(base ** round(np.log(min(max(1, n), 10**6)) / np.log(base)))


@lru_cache(maxsize=64)
def _splitting(cell: bytes, tol: float, n_sources: int, n_targets: int) -> float:
    lattice = reduce_cell(np.frombuffer(cell).reshape(3, 3))
    wanted = TAIL_SHARE * tol / DIPOLE_T_A3_PER_MUB
    # What is done once for a batch counts for each of its targets.
    image = COST_FIELD_IMAGE + COST_FIELD_IMAGE_ONCE / n_targets
    wave = COST_FIELD_WAVE + (COST_FIELD_WAVE_ONCE + COST_FIELD_WAVE_OF_SOURCE * n_sources) / n_targets
    return choose_splitting(lattice.layer_distances, lattice.volume, wanted, (image, wave / n_sources))[0]


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
    out, weight = np.zeros((parts, n_t, 3)), np.zeros(n_t)
    if n_t and len(sources):
        found = boxes(plan.lattice, targets.reduced)
        over_rows(
            _fields_of_boxes, len(found), plan, found, targets.reduced[found.order],
            _wave_coefficients(plan, sources.reduced, moments, parts), _images(plan, sources.reduced, moments, parts),
            out, weight, at_least=max(4, 32 * len(found) // n_t),
        )  # fmt: skip
    out *= DIPOLE_T_A3_PER_MUB
    total = out[0].astype(complex) if parts == 1 else out[0] + 1j * out[1]
    if np.any(targets.turns):
        total *= np.exp(-2j * np.pi * targets.turns)[:, None]
    return total, weight * DIPOLE_T_A3_PER_MUB


def _fields_of_boxes(
    first: int,
    last: int,
    plan: LatticeSum,
    found: Boxes,
    targets: FloatArray,
    coefficients: list[FloatArray],
    images: Images,
    out: FloatArray,
    weight: FloatArray,
) -> None:
    """Write the rows of ``out`` (parts, n_t, 3) in µB/Å³ and ``weight`` (n_t,) of boxes first..last.

    targets (n_t, 3): reduced and sorted by box.
    """
    part, rows = found.part(first, last)
    here, added = np.zeros((len(out), len(part.order), 3)), np.zeros(len(part.order))
    _reciprocal_part(plan, targets[rows], coefficients, here)
    _real_part(plan, part, targets[rows], images, here, added)
    out[:, part.order], weight[part.order] = here, added


def _reciprocal_part(plan: LatticeSum, targets: FloatArray, coefficients: list[FloatArray], out: FloatArray) -> None:
    """Write the reciprocal part, divided by C, to ``out`` (parts, n_t, 3) in µB/Å³."""
    for factors, written in zip(coefficients, np.split(out, len(coefficients)), strict=True):
        reciprocal_fields(
            0, len(targets), targets, plan.lattice.waves, plan.k, plan.limits, plan.stretches.rows, factors, written
        )


def _real_part(
    plan: LatticeSum, found: Boxes, targets: FloatArray, images: Images, out: FloatArray, weight: FloatArray
) -> None:
    """Add the real part and the self term, divided by C, to ``out`` (parts, n_t, 3) in µB/Å³."""
    real_fields(
        0, len(found), found.starts, found.centres, found.radii, targets, images.positions, images.moments,
        images.sizes, plan.alpha, plan.cutoff, ON_SITE_A, self_term(plan.alpha), out, weight,
    )  # fmt: skip


def _wave_coefficients(plan: LatticeSum, sources: FloatArray, moments: ComplexArray, parts: int) -> list[FloatArray]:
    """What `reciprocal_fields` takes, once for all parts or once for each."""
    table = wave_table(plan, sources)
    if plan.is_real:
        # One of each pair ±q is kept, and the other is its conjugate. Real and imaginary parts of the moments go apart.
        structures = [_structure(plan, table, part) for part in (moments.real, moments.imag)[:parts]]
    else:
        structures = [_structure(plan, table, moments.real) + 1j * _structure(plan, table, moments.imag)]
    return [_coefficients(plan, plan.wave_factors * structure) for structure in structures]


def _structure(plan: LatticeSum, table: FloatArray, moments: FloatArray) -> ComplexArray:
    """Shape (n_q,) complex in µB/Å. Σ_s (q·m_s) exp(−iq·x_s) from the table of phases of the sources."""
    n_q = len(plan.q)
    # Not matrix products: they are small, and the threads that BLAS would wake cost more than the work.
    along = np.einsum("sa,qa->sq", moments, plan.q)
    cosine, sine = np.einsum("sq,sq->q", along, table[:, :n_q]), np.einsum("sq,sq->q", along, table[:, n_q:])
    return np.asarray(cosine - 1j * sine)


def _coefficients(plan: LatticeSum, factors: ComplexArray) -> FloatArray:
    """Shape (n_stretches, orders, 8). What `reciprocal_fields` takes, from one factor per wave."""
    stretches = plan.stretches
    out = np.empty((len(stretches.rows), stretches.orders, 8))
    for power in range(2):
        apart = stretches.by_order(factors * stretches.along**power)
        both, odd = apart[0] + apart[1], apart[0] - apart[1]
        out[..., 4 * power : 4 * power + 4] = np.stack([both.real, -odd.imag, both.imag, odd.real], axis=-1)
    return out


@dataclass(frozen=True, eq=False)
class Images:
    """Images of all sources that can come within the cut-off of a target in the home cell.

    positions: Shape (3, n) float in Å. moments: Shape (parts, 3, n) float in µB, phases included; sizes: Shape (n,).
    """

    positions: FloatArray
    moments: FloatArray
    sizes: FloatArray


def _images(plan: LatticeSum, sources: FloatArray, moments: ComplexArray, parts: int) -> Images:
    positions, owner, phase = _source_images(plan, sources)
    carried = moments[owner] * phase[:, None]
    split = np.ascontiguousarray(np.stack([carried.real.T, carried.imag.T][:parts]))
    return Images(positions, split, np.abs(carried).sum(axis=1))


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
