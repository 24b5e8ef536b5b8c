"""Standard uncertainties of local fields, from those of moments and positions, by analytic derivatives.

The field is linear in the moments, with the sums of dipole tensors as coefficients, and its derivative by the place of
a source is minus that source's part of the field gradient. To first order the covariance of B is the sum over
independent parameters p of (∂B/∂p)(∂B/∂p)ᵀ σ_p², and σ(|B|)² = b·cov·b with b the unit vector of B. Where σ is not
small against |B|, first order is not enough: |B| then has a skew distribution.

Which parameters are independent:

* Each of the three crystal-axis components of a moment is one parameter. Atoms of one label whose moments an operation
  of the crystal (with or without time reversal) carries from the first of them are one refined moment: they change
  together, as that operation says. Any other atom has parameters of its own, also under the same label.
* Each fractional coordinate of a site is one parameter; atoms of one label that an operation carries from the first of
  them move together as it says.
* Each fractional coordinate of a probe is one parameter. A probe on a site moves with it.

Correlations that a refinement finds between these parameters are not known here and count as zero. Contact terms follow
the moments and not the places. Occupancies, cell, couplings and the applied field count as exact.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray, frozen
from latticedip.crystal.spread import carriers
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering, is_self_conjugate
from latticedip.physics.contact import shell_neighbours
from latticedip.physics.spread import exchanged_tensors, moments_of, pair_sums
from latticedip.units import MU0_T_A3_PER_MUB

if TYPE_CHECKING:
    from latticedip.physics.field import LocalField

#: A moment is carried by an operation where it comes out to this fraction of the largest moment.
CARRIED_FRACTION = 1e-3
#: Below this field (T) the direction of B has no meaning.
ZERO_FIELD_T = 1e-12

MODULATED = (
    "standard uncertainties of moments are stated, but with more than one propagation vector, or one where components "
    "have a phase, they do not say which component they belong to: field uncertainties are left open"
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
class Tied:
    """Atoms that change together, with what one unit of each component of the first atom does to them.

    sites: Shape (n,) int. turns: Shape (n, 3, 3) float: change of atom j = turns[j] @ change of the first.
    """

    sites: np.ndarray
    turns: FloatArray


def field_uncertainty(result: LocalField, *, site_position_su: Any = None) -> FieldUncertainty:
    """Propagate the uncertainties of the moments (``ordering.moment_su``), of probe positions and of site positions.

    result: what `local_field` returned; its moments and probes say what is uncertain.
    site_position_su: Shape (n_sites, 3) float, fractional; NaN or 0 where a coordinate is exact. None: all are.

    Raises InputError for a wrong shape or negative numbers.
    """
    ordering = result.ordering
    n = len(result.points)
    of_sites = _checked_su(site_position_su, ordering.crystal.n_sites)
    of_moments = np.nan_to_num(ordering.moment_su) * ordering.is_magnetic[:, None]
    of_probes = result.position_su_cart
    moments_known = bool(np.any(of_moments))
    single = len(ordering.k) == 1 and bool(is_self_conjugate(ordering.k)[0])
    known = np.full(n, moments_known or bool(np.any(of_sites))) | np.any(of_probes, axis=(1, 2))
    if moments_known and not single:
        return _open(n, (MODULATED,))
    if not np.any(known):
        return _open(n, ())
    by_moment, by_place = _derivatives(result, bool(np.any(of_sites) or np.any(of_probes)))
    covariance = np.zeros((n, 3, 3))
    if moments_known:
        axes = ordering.crystal.axes_unit.T
        for tied in tied_moments(ordering):
            steps = np.einsum("tjab,bc,jci->tai", by_moment[:, tied.sites], axes, tied.turns)
            steps = steps * of_moments[tied.sites[0]]
            covariance += steps @ steps.transpose(0, 2, 1)
    if by_place is not None:
        # The field of an atom at a probe depends on their separation alone.
        by_probe = by_place.sum(axis=1)
        by_site = -by_place
        on = np.flatnonzero(result.sites >= 0)
        by_site[on, result.sites[on]] += by_probe[on]
        for tied in tied_positions(ordering) if np.any(of_sites) else ():
            steps = np.einsum("tjab,cb,jci->tai", by_site[:, tied.sites], ordering.crystal.cell, tied.turns)
            steps = steps * of_sites[tied.sites[0]]
            covariance += steps @ steps.transpose(0, 2, 1)
        steps = np.einsum("tab,tib->tai", by_probe, of_probes)
        covariance += steps @ steps.transpose(0, 2, 1)
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


def _checked_su(value: Any, n: int) -> FloatArray:
    if value is None:
        return np.zeros((n, 3))
    su = np.asarray(value)
    if su.dtype.kind not in "iuf" or su.shape != (n, 3) or np.any(su < 0) or np.any(np.isinf(su)):
        raise InputError(f"site_position_su must hold numbers of at least 0 or NaN in shape ({n}, 3).")
    return np.nan_to_num(su.astype(float))


def _derivatives(result: LocalField, places: bool) -> tuple[FloatArray, FloatArray | None]:
    """∂B/∂m of every site in T/µB of the ion's moment, and each site's part of ∂B/∂x in T/Å, shapes (n, n_sites, 3, 3).

    The first holds for an ordering with one k at which components are real.
    """
    ordering, crystal = result.ordering, result.ordering.crystal
    n = len(result.points)
    by_moment = np.zeros((n, crystal.n_sites, 3, 3))
    by_place = np.zeros((n, crystal.n_sites, 3, 3)) if places else None
    clouds, extended = result.clouds_A2, result.moment_clouds_A2
    for part in pair_sums(ordering, result.targets_cart, clouds, extended, result.tol, slopes=places):
        index = np.ix_(part.rows, part.ions)
        by_moment[index] += part.tensors.real
        if by_place is not None:
            by_place[index] += part.gradients(ordering)
    if np.all(ordering.k[0] == np.round(ordering.k[0])):
        by_moment -= MU0_T_A3_PER_MUB / crystal.volume_A3 * result.demagnetizing_tensor
    for row in range(n):
        pairs = result.moved[row]
        if pairs is not None:
            change, slopes = exchanged_tensors(ordering, pairs, clouds[row], extended)
            np.add.at(by_moment[row], pairs.sites, change * _signs(ordering, pairs.cells)[:, None, None])
            if by_place is not None:
                np.add.at(by_place[row], pairs.sites, np.einsum("nabc,nb->nac", slopes, moments_of(ordering, pairs)))
        for term in result.contacts[row]:
            if term.coupling_T_per_muB is not None:
                sites, cells, _ = shell_neighbours(ordering, result.points[row], term)
                coupling = term.coupling_T_per_muB * _signs(ordering, cells)[:, None, None]
                np.add.at(by_moment[row], sites, coupling)
    by_moment *= crystal.occupancies[:, None, None]
    return by_moment, by_place


def _signs(ordering: Ordering, cells: np.ndarray) -> FloatArray:
    """What the moments in some cells are multiplied with, at a k where that is a sign."""
    return np.asarray(np.cos(2 * np.pi * ((cells @ ordering.k[0]) % 1.0)))


def tied_moments(ordering: Ordering) -> list[Tied]:
    """Magnetic sites whose moments change together; turns act on crystal-axis components."""
    crystal = ordering.crystal
    rotations = operations_of(crystal).rotations
    lengths = np.linalg.norm(crystal.cell, axis=1)
    moments = crystal.to_crystal_axes(ordering.moments()[0])
    allowed = CARRIED_FRACTION * float(np.abs(moments).max(initial=0.0))

    def turn(first: int, other: int) -> FloatArray | None:
        for i in carriers(crystal, first, other):
            # A moment is an axial vector: det(R) R, up to time reversal.
            axial = round(float(np.linalg.det(rotations[i]))) * lengths[:, None] * rotations[i] / lengths
            for sign in (1.0, -1.0):
                if np.abs(sign * axial @ moments[first] - moments[other]).max() <= allowed:
                    return np.asarray(sign * axial)
        return None

    return _tied(ordering, turn, [int(i) for i in np.flatnonzero(ordering.is_magnetic)])


def tied_positions(ordering: Ordering) -> list[Tied]:
    """Sites that move together; turns act on fractional coordinates."""
    crystal = ordering.crystal
    rotations = operations_of(crystal).rotations

    def turn(first: int, other: int) -> FloatArray | None:
        found = carriers(crystal, first, other)
        return np.asarray(rotations[found[0]], dtype=float) if len(found) else None

    return _tied(ordering, turn, list(range(crystal.n_sites)))


def _tied(ordering: Ordering, turn: Any, sites: list[int]) -> list[Tied]:
    groups: dict[tuple[str, str, int], list[tuple[int, FloatArray]]] = {}
    for site in sites:
        kind = (ordering.crystal.labels[site], ordering.crystal.symbols[site])
        for (label, symbol, first), members in groups.items():
            if (label, symbol) == kind:
                found = turn(first, site)
                if found is not None:
                    members.append((site, found))
                    break
        else:
            groups[(*kind, site)] = [(site, np.eye(3))]
    return [Tied(np.array([s for s, _ in group]), np.array([t for _, t in group])) for group in groups.values()]
