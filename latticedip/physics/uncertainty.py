"""Standard uncertainties of local fields, from those of moments and positions, by analytic derivatives.

The field is linear in the moments, with the sums of dipole tensors as coefficients, and its derivative by the place of
a source is minus that source's part of the field gradient. To first order the covariance of B is the sum over
independent parameters p of (∂B/∂p)(∂B/∂p)ᵀ σ_p², and σ(|B|)² = b·cov·b with b the unit vector of B. Where σ is not
small against |B|, first order is not enough: |B| then has a skew distribution.

Which parameters are independent:

* Each of the three crystal-axis components of a moment is one parameter, or as many as its symmetry leaves free: what
  the operations of the crystal (with or without time reversal) that keep the moment allow. Atoms of one label whose
  moments an operation carries from the first of them are one refined moment: they change together, as that operation
  says. Any other atom has parameters of its own, also under the same label.
* At k ≠ 0 they are the components of the amplitude A of a wave S = A exp(iφ) whose moments stay along one line: A is
  real, and its phase φ counts as exact. With F the sum of tensors at k, ∂B/∂A = Re[F exp(iφ)].
* Where the ordering states the parameters of its amplitudes (``ordering.amplitude_su``), as modulated magCIFs and the
  amplitudes of a study do, these are the parameters, at any number of k: each changes the components S_kj by a known
  step, and B by Σ Re[F_kj · step_kj]. A phase that follows the position of the atom counts as exact.
* A size that is stated with its uncertainty (``ordering.size_su``) is one parameter for all atoms it is stated for, at
  any k: their part of the field changes by its fraction.
* Each fractional coordinate of a site is one parameter, or as many as the symmetry of the site leaves free; atoms of
  one label that an operation carries from the first of them move together as it says.
* Each fractional coordinate of a probe is one parameter. A probe on a site moves with it.

Correlations that a refinement finds between these parameters are not known here and count as zero. Contact terms follow
the moments and not the places; a displaced neighbour keeps its displacement. Occupancies, cell, couplings and the
applied field count as exact.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, frozen
from latticedip.crystal.spread import carriers
from latticedip.crystal.symmetry import operations_of
from latticedip.crystal.uncertain import Moves, Tied, checked_su, parameter_steps, position_moves, tied_groups
from latticedip.ordering.model import ZERO_MOMENT_MUB, Ordering
from latticedip.ordering.uncertain import AmplitudeUncertainty
from latticedip.physics.contact import shell_neighbours
from latticedip.physics.spread import exchanged_tensors, moments_of, pair_sums
from latticedip.units import MU0_T_A3_PER_MUB

if TYPE_CHECKING:
    from latticedip.physics.field import LocalField

#: A moment is carried by an operation where it comes out to this fraction of the largest moment.
CARRIED_FRACTION = 1e-3
#: Moments stay along one line where their amplitude strays from it by at most this fraction.
ON_A_LINE = 1e-6
#: Below this field (T) the direction of B has no meaning.
ZERO_FIELD_T = 1e-12
#: Rows times sites times propagation vectors that are worked on at one time.
BLOCK = 200_000

MODULATED = (
    "standard uncertainties are stated of moments that turn along a propagation vector, or have components at several: "
    "they do not say which component they belong to, so that field uncertainties are left open"
)


@dataclass(frozen=True, eq=False)
class FieldUncertainty:
    """Standard uncertainties of the rows of a LocalField; all NaN in rows for which none is stated.

    covariance_T2: Shape (n, 3, 3) float in T². Of the Cartesian components of the total field.
    field_su_T: Shape (n, 3) float in T. size_su_T: Shape (n,) float in T, of |B|; NaN also where the field vanishes.
    frequency_su_MHz: Shape (n,) float in MHz, NaN for bare points. notes: sentences a report must repeat.
    """

    covariance_T2: FloatArray
    field_su_T: FloatArray
    size_su_T: FloatArray
    frequency_su_MHz: FloatArray
    notes: tuple[str, ...] = field(default=(), repr=False)


@dataclass(frozen=True, eq=False)
class Amplitudes:
    """Amplitudes of waves whose moments stay along one line.

    index: Shape (n_sites,) int, the k at which a site has its one component, −1 where it has none or several.
    turn: Shape (n_sites,) complex of size 1, exp(iφ). values: Shape (n_sites, 3) float in µB, Cartesian, S = A exp(iφ).
    """

    index: np.ndarray
    turn: ComplexArray
    values: FloatArray


def field_uncertainty(result: LocalField, *, site_position_su: Any = None) -> FieldUncertainty:
    """Propagate the uncertainties of moments (of ``result.ordering``), of probe positions and of site positions.

    result: what `local_field` returned; its ordering and probes say what is uncertain.
    site_position_su: Shape (n_sites, 3) float, fractional; NaN or 0 where a coordinate is exact. None: those of the
    crystal of the ordering.

    Raises InputError for a wrong shape or negative numbers.
    """
    ordering = result.ordering
    n, n_sites = len(result.points), ordering.crystal.n_sites
    placed = ordering.crystal.position_su if site_position_su is None else site_position_su
    of_sites = np.nan_to_num(checked_su("site_position_su", placed, (n_sites, 3)))
    of_moments = np.nan_to_num(ordering.moment_su) * ordering.is_magnetic[:, None]
    # The parameters of these atoms are stated themselves.
    stated = [site for group in ordering.size_su for site in group.sites]
    stated += [site for one in ordering.amplitude_su for site in one.sites]
    of_moments[stated] = 0.0
    lines = amplitudes(ordering)
    if np.any(of_moments[lines.index < 0]):
        return _open(n, (MODULATED,))
    lines.index[stated] = -1
    moments_known = bool(np.any(of_moments)) or any(group.relative > 0 for group in ordering.size_su)
    moments_known |= any(_changes(ordering, one) for one in ordering.amplitude_su)
    known = np.full(n, moments_known or bool(np.any(of_sites))) | np.any(result.position_su_cart, axis=(1, 2))
    if not np.any(known):
        return _open(n, ())
    covariance = np.zeros((n, 3, 3))
    tied = tied_moments(ordering, lines) if np.any(of_moments) else []
    moves: Sequence[Moves] = ordering.crystal.position_moves
    if site_position_su is not None:
        moves = position_moves(ordering.crystal, of_sites)
    rows = np.arange(n)
    for block in np.array_split(rows, max(1, -(-n * n_sites * len(ordering.k) // BLOCK))):
        if moments_known:
            transfer = _transfer(result, block)
            covariance[block] += _from_moments(ordering, transfer, lines, tied, of_moments)
        if moves or np.any(result.position_su_cart[block]):
            by_place = _by_place(result, block)
            # The field of an atom at a probe depends on their separation alone.
            by_probe, by_site = by_place.sum(axis=1), -by_place
            on = np.flatnonzero(result.sites[block] >= 0)
            by_site[on, result.sites[block][on]] += by_probe[on]
            for move in moves:
                covariance[block] += _squares(np.einsum("tjab,mjb->tam", by_site[:, move.sites], move.steps_cart))
            covariance[block] += _squares(np.einsum("tab,tib->tai", by_probe, result.position_su_cart[block]))
    covariance[~known] = np.nan
    with np.errstate(invalid="ignore", divide="ignore"):
        unit = result.total / result.size_T[:, None]
        size = np.sqrt(np.maximum(0.0, np.einsum("ta,tab,tb->t", unit, covariance, unit)))
    size[(result.size_T < ZERO_FIELD_T) | ~known] = np.nan
    return FieldUncertainty(
        covariance_T2=frozen(covariance),
        field_su_T=frozen(np.sqrt(np.einsum("taa->ta", covariance))),
        size_su_T=frozen(size),
        frequency_su_MHz=frozen(size * result.MHz_per_T),
    )


def _open(n: int, notes: tuple[str, ...]) -> FieldUncertainty:
    nan = np.full((n, 3, 3), np.nan)
    return FieldUncertainty(frozen(nan), frozen(nan[:, 0]), frozen(nan[:, 0, 0]), frozen(nan[:, 0, 0]), notes)


def _changes(ordering: Ordering, parameter: AmplitudeUncertainty) -> bool:
    """True where a parameter changes the moment of an ion."""
    return bool(np.any(parameter.steps[:, ordering.is_magnetic[list(parameter.sites)]]))


def _squares(steps: FloatArray) -> FloatArray:
    """Shape (n, 3, 3). Covariance of changes (n, 3, m) by one standard uncertainty of each of m parameters."""
    return np.asarray(steps @ steps.transpose(0, 2, 1))


def amplitudes(ordering: Ordering) -> Amplitudes:
    """The line along which the moment of every site stays, where it does."""
    here = np.abs(ordering.components).max(axis=2) > ZERO_MOMENT_MUB
    single = here.sum(axis=0) == 1
    index = np.where(single, np.argmax(here, axis=0), -1)
    parts = ordering.components[np.maximum(index, 0), np.arange(ordering.crystal.n_sites)]
    largest = np.take_along_axis(parts, np.abs(parts).argmax(axis=1)[:, None], axis=1)[:, 0]
    # A real component keeps its sign.
    angle = np.where(np.abs(parts.imag).max(axis=1) == 0.0, 0.0, np.angle(largest))
    turn = np.exp(1j * angle)
    along = parts * turn.conj()[:, None]
    size = np.abs(along).max(axis=1)
    index = np.where(np.abs(along.imag).max(axis=1) <= ON_A_LINE * size, index, -1)
    return Amplitudes(index, turn, np.asarray(along.real))


def _from_moments(
    ordering: Ordering, transfer: ComplexArray, lines: Amplitudes, tied: list[Tied], su: FloatArray
) -> FloatArray:
    """Shape (n, 3, 3) float in T². Covariance that the moments make.

    transfer: of `_transfer`. su: Shape (n_sites, 3) float in µB, crystal-axis components.
    """
    covariance = np.zeros((transfer.shape[1], 3, 3))
    for size in ordering.size_su:
        sites = list(size.sites)
        part = np.einsum("ktjab,kjb->ta", transfer[:, :, sites], ordering.components[:, sites]).real
        covariance += _squares(size.relative * part[:, :, None])
    for one in ordering.amplitude_su:
        part = np.einsum("ktjab,kjb->ta", transfer[:, :, list(one.sites)], one.steps).real
        covariance += _squares(part[:, :, None])
    for group in tied:
        steps = parameter_steps(group.allowed, su[group.sites[0]])
        if not steps.size:
            continue
        sums = transfer[lines.index[group.sites], :, group.sites] * lines.turn[group.sites][:, None, None, None]
        turned = np.einsum("jab,bm->jam", group.turns, steps)
        covariance += _squares(np.einsum("jtab,cb,jcm->tam", sums.real, ordering.crystal.axes_unit, turned))
    return covariance


def _transfer(result: LocalField, rows: np.ndarray) -> ComplexArray:
    """Shape (n_k, n, n_sites, 3, 3) complex in T/µB. F with B = Re Σ F S over all k and sites, occupancy included."""
    ordering, crystal = result.ordering, result.ordering.crystal
    out = np.zeros((len(ordering.k), len(rows), crystal.n_sites, 3, 3), dtype=complex)
    clouds, extended = result.clouds_A2[rows], result.moment_clouds_A2
    for part in pair_sums(ordering, result.targets_cart[rows], clouds, extended, result.tol):
        out[part.index][np.ix_(part.rows, part.ions)] += part.tensors
    uniform = np.all(ordering.k == np.round(ordering.k), axis=1)
    out[uniform] -= MU0_T_A3_PER_MUB / crystal.volume_A3 * result.demagnetizing_tensor
    for i, row in enumerate(rows):
        pairs = result.moved[row]
        if pairs is not None:
            change, _ = exchanged_tensors(ordering, pairs, clouds[i], extended)
            _add(out[:, i], ordering, pairs.sites, pairs.cells, change)
        for term in result.contacts[row]:
            if term.coupling_T_per_muB is not None:
                sites, cells, _ = shell_neighbours(ordering, result.points[row], term)
                _add(out[:, i], ordering, sites, cells, np.tile(term.coupling_T_per_muB, (len(sites), 1, 1)))
    return np.asarray(out * crystal.occupancies[:, None, None])


def _add(out: ComplexArray, ordering: Ordering, sites: np.ndarray, cells: np.ndarray, tensors: FloatArray) -> None:
    """Add tensors (n, 3, 3) of single atoms with their phases to ``out`` (n_k, n_sites, 3, 3)."""
    phases = np.exp(-2j * np.pi * ((cells @ ordering.k.T) % 1.0))
    for k in range(len(ordering.k)):
        np.add.at(out[k], sites, tensors * phases[:, k, None, None])


def _by_place(result: LocalField, rows: np.ndarray) -> FloatArray:
    """Shape (n, n_sites, 3, 3) float in T/Å. Part of every site in ∂B/∂x at the probe."""
    ordering = result.ordering
    out = np.zeros((len(rows), ordering.crystal.n_sites, 3, 3))
    clouds, extended = result.clouds_A2[rows], result.moment_clouds_A2
    for part in pair_sums(ordering, result.targets_cart[rows], clouds, extended, result.tol, slopes=True):
        out[np.ix_(part.rows, part.ions)] += part.gradients(ordering)
    for i, row in enumerate(rows):
        pairs = result.moved[row]
        if pairs is not None:
            _, slopes = exchanged_tensors(ordering, pairs, clouds[i], extended)
            np.add.at(out[i], pairs.sites, np.einsum("nabc,nb->nac", slopes, moments_of(ordering, pairs)))
    return out


def tied_moments(ordering: Ordering, lines: Amplitudes | None = None) -> list[Tied]:
    """Sites whose moments change together, of those that stay along one line; turns act on crystal-axis components."""
    crystal = ordering.crystal
    lines = amplitudes(ordering) if lines is None else lines
    operations = operations_of(crystal)
    lengths = np.linalg.norm(crystal.cell, axis=1)
    moments = crystal.to_crystal_axes(lines.values)
    allowed = CARRIED_FRACTION * float(np.abs(moments).max(initial=0.0))

    def turns(first: int, other: int) -> list[FloatArray]:
        found: list[FloatArray] = []
        for i in carriers(crystal, operations, first, other) if lines.index[first] == lines.index[other] else ():
            rotation = operations.rotations[i]
            # A moment is an axial vector: det(R) R, up to time reversal.
            axial = round(float(np.linalg.det(rotation))) * lengths[:, None] * rotation / lengths
            for sign in (1.0, -1.0):
                if np.abs(sign * axial @ moments[first] - moments[other]).max() <= allowed:
                    found.append(np.asarray(sign * axial))
                    break
        return found

    def turn(first: int, other: int) -> FloatArray | None:
        found = turns(first, other)
        return found[0] if found else None

    tied = []
    for group in tied_groups(crystal, [int(i) for i in np.flatnonzero(lines.index >= 0)], turn):
        first = group[0][0]
        stabilizer = turns(first, first) or [np.eye(3)]
        tied.append(Tied(np.array([s for s, _ in group]), np.array([t for _, t in group]), np.mean(stabilizer, axis=0)))
    return tied
