"""Coupling of a probe to the moments around it, site by site and summed for equal moments."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_floats, check_tol, frozen
from latticedip.crystal.displace import Displaced, moved_pairs
from latticedip.crystal.model import SAME_PLACE_A, Crystal
from latticedip.crystal.place import Place, place_of
from latticedip.crystal.spread import as_spread, covariance_of
from latticedip.crystal.uncertain import Moves
from latticedip.errors import InputError
from latticedip.observables.tensor import PrincipalFrame, ProbeTensor, added, known, mean_tensor, principal_frame
from latticedip.ordering.model import Ordering
from latticedip.physics.boundary import boundary_words
from latticedip.physics.contact import shell_neighbours
from latticedip.physics.coupling import require_bulk
from latticedip.physics.spread import (
    REACHED,
    counting_spread,
    equal_covariances,
    exchanged_tensors,
    extended_words,
    moment_clouds,
    moment_spread_words,
    probe_words,
    reached_words,
    refuse_thin,
)
from latticedip.probe import Contact
from latticedip.sample import Sample
from latticedip.sums.bulk import lattice_sum
from latticedip.sums.smear import smeared_sum
from latticedip.units import MU0_T_A3_PER_MUB


@dataclass(frozen=True, eq=False)
class SiteCouplings:
    """Coupling tensors of a probe to each magnetic site; moments count with the occupancy of their site.

    sites: Shape (n,) int, the magnetic sites. occupancies: Shape (n,) float.
    dipolar: Shape (n, 3, 3) in T/µB, Lorentz-sphere sums over all cells for equal moments in every cell.
    contact: Shape (n, 3, 3) in T/µB, summed over the neighbours that the contact terms mean.
    steps: Shape (m, n, 3, 3) in T/µB. What one standard uncertainty of each of m independent parameters of positions
        does to the dipolar tensors; m is 0 where none is stated.
    magnetization_T: µ0 times one Bohr magneton per cell volume, in T/µB.
    """

    place: Place
    sites: np.ndarray
    occupancies: FloatArray
    dipolar: FloatArray
    contact: FloatArray
    steps: FloatArray
    magnetization_T: float
    ordering: Ordering
    error_bound: float
    notes: tuple[str, ...]


@dataclass(frozen=True, eq=False, kw_only=True)
class CouplingTensor(ProbeTensor):
    """Field at a probe per Bohr magneton on every magnetic ion, B = A m, in its parts; Cartesian, T/µB.

    position: Shape (3,) fractional. site: label of the atom the position is on, empty where it is on none.
    magnetic: labels or elements that carry the moment. n_ions: magnetic ions per cell, counted with their occupancy.
    dipolar: Shape (3, 3). Lorentz-sphere sum Σ p (T − µ0/3V); symmetric, trace zero.
    lorentz: Shape (3, 3). (µ0/3V) Σ p, times the unit matrix. demagnetizing: Shape (3, 3). −(µ0/V) N Σ p.
    contact: Shape (3, 3). Σ p A over the neighbours of the contact terms; zero without them.
    error_bound: bound of the error of each element of the dipolar part that follows from tol, T/µB.
    principal: principal frame of the dipolar part.
    boundary: the boundary assumed, in words. notes: sentences a report must repeat.
    steps: Shape (m, 3, 3). Changes of the dipolar part by one standard uncertainty of each parameter of the positions.
    """

    magnetic: tuple[str, ...]
    n_ions: float
    error_bound: float

    @property
    def total(self) -> FloatArray:
        """Shape (3, 3) float in T/µB. Sum of the four parts."""
        return frozen(self.dipolar + self.lorentz + self.demagnetizing + self.contact)

    @property
    def principal(self) -> PrincipalFrame:
        """Principal frame of the dipolar part."""
        return principal_frame(self.dipolar, max(self.error_bound, 1e-12))

    @property
    def principal_values(self) -> FloatArray:
        """Shape (3,) float in T/µB. Principal values of the dipolar part, the largest in size last."""
        return self.principal.values

    @property
    def principal_axes(self) -> FloatArray:
        """Shape (3, 3) float. Rows are the principal axes of the dipolar part, Cartesian."""
        return self.principal.axes

    @property
    def asymmetry(self) -> float:
        """η of the dipolar part, 0 to 1; 0 where that part vanishes."""
        return self.principal.asymmetry

    @property
    def dipolar_su(self) -> FloatArray:
        """Shape (3, 3) float in T/µB. Standard uncertainties of the dipolar part; NaN where no position states any."""
        return added(self.steps)

    @property
    def principal_values_su(self) -> FloatArray:
        """Shape (3,) float in T/µB. Standard uncertainties of the principal values; of their mean where they are equal.

        NaN where no position states any.
        """
        return added(self.principal.changes(self.steps))

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units, tensors are Cartesian."""
        frame = self.principal
        return {
            "position": self.position.tolist(),
            "site": self.site or None,
            "magnetic": list(self.magnetic),
            "ions_per_cell": self.n_ions,
            "boundary": self.boundary,
            "dipolar_T_per_muB": self.dipolar.tolist(),
            "lorentz_T_per_muB": self.lorentz.tolist(),
            "demagnetizing_T_per_muB": self.demagnetizing.tolist(),
            "contact_T_per_muB": self.contact.tolist(),
            "coupling_T_per_muB": self.total.tolist(),
            "dipolar_su_T_per_muB": known(self.dipolar_su),
            "dipolar_principal_values_T_per_muB": frame.values.tolist(),
            "dipolar_principal_values_su_T_per_muB": known(self.principal_values_su),
            "dipolar_principal_axes": frame.axes.tolist(),
            "dipolar_asymmetry": frame.asymmetry,
            "error_bound_T_per_muB": self.error_bound,
            "notes": list(self.notes),
        }


def coupling_tensor(
    crystal: Crystal,
    position: Any,
    *,
    magnetic: str | Sequence[str],
    sample: Sample | None = None,
    contact: Contact | Iterable[Contact] = (),
    spread: Any = None,
    displaced: Displaced | Iterable[Displaced] = (),
    position_su: Any = None,
    moment_spread: Any = None,
    tol: float = 1e-10,
) -> CouplingTensor:
    """Coupling tensor of a probe to equal moments on all ions of a label or element: B = A m.

    crystal: periodic in three directions. position: Shape (3,) fractional; within 1e-3 Å of an atom it is that site,
    and leaves that atom out. magnetic: a site label or element (the label wins), or several; occupancy applies.
    sample: its demagnetizing tensor; None means N = 0. contact: Contacts that couple to whole shells of the magnetic
    ions. displaced: neighbours that the probe moves; shells of both kinds count in the undisturbed crystal.
    spread: of the probe, as `local_field`; the dipolar part is then the average over a Gaussian cloud.
    position_su: Shape (3,) fractional, standard uncertainties of the coordinates of a position that is on no atom.
    moment_spread: of the moments (extended ions), as `local_field`: the cloud of each pair is that of both together.
    tol: bound of the error of each site's tensor, as `dipole_tensor`.

    Uncertainties of the dipolar part follow from position_su and those of the sites (``crystal.position_su``), to first
    order, each independent parameter by itself; cell, contact and occupancies count as exact.

    Raises InputError for an unknown label, a position between 1e-3 and 0.1 Å from an atom, a shell that is not there,
    a contact term without a coupling, a spread (of the probe or of moments) as `local_field` refuses it, a position_su
    that is not three numbers of at least 0 or belongs to a position on an atom, or a crystal that is not periodic in
    three directions.
    """
    names = (magnetic,) if isinstance(magnetic, str) else tuple(magnetic)
    if not names:
        raise InputError("magnetic names no label or element.")
    sites = sorted({site for name in names for site in crystal.find(name)})
    parts = site_couplings(
        crystal,
        position,
        sites,
        contact=contact,
        spread=spread,
        displaced=displaced,
        position_su=position_su,
        moment_spread=moment_spread,
        tol=tol,
    )
    return summed(crystal, parts, np.arange(len(sites)), names, sample)


def summed(
    crystal: Crystal, parts: SiteCouplings, rows: np.ndarray, names: tuple[str, ...], sample: Sample | None
) -> CouplingTensor:
    """Coupling tensor to equal moments on some of the sites of `site_couplings`.

    rows: Shape (n,) int, which of them. names: what they are called. sample: None means N = 0.
    """
    specimen = Sample() if sample is None else sample
    occupancies = parts.occupancies[rows]
    total = float(occupancies.sum())
    volume_T = parts.magnetization_T * total
    place = parts.place
    return CouplingTensor(
        position=place.position,
        site=crystal.labels[place.site] if place.site >= 0 else "",
        magnetic=names,
        n_ions=total,
        dipolar=frozen(np.einsum("s,sab->ab", occupancies, parts.dipolar[rows])),
        lorentz=frozen(volume_T / 3 * np.eye(3)),
        demagnetizing=frozen(0.0 - volume_T * specimen.demagnetizing_tensor),
        contact=frozen(np.einsum("s,sab->ab", occupancies, parts.contact[rows])),
        error_bound=parts.error_bound,
        boundary=boundary_words(parts.ordering, sample),
        notes=parts.notes,
        steps=frozen(np.einsum("s,msab->mab", occupancies, parts.steps[:, rows])),
    )


def averaged(tensors: Sequence[CouplingTensor], weights: FloatArray) -> CouplingTensor:
    """Mean of the coupling tensors to the same ions at several positions, that of a probe that moves fast between them.

    weights: Shape (n,) float, adding up to 1. The position is that of the first; uncertainties are those of the sites,
    which all tensors share, so that each must count the same parameters.
    """
    shares = np.asarray(weights, dtype=float)
    bound = float(shares @ [one.error_bound for one in tensors])
    return dataclasses.replace(mean_tensor(tensors, shares), error_bound=bound)


def site_couplings(
    crystal: Crystal,
    position: Any,
    sites: Sequence[int],
    *,
    contact: Contact | Iterable[Contact] = (),
    spread: Any = None,
    displaced: Displaced | Iterable[Displaced] = (),
    position_su: Any = None,
    moment_spread: Any = None,
    tol: float = 1e-10,
) -> SiteCouplings:
    """Coupling tensors of a probe to each of some sites (indices, distinct); arguments as `coupling_tensor`."""
    require_bulk(crystal)
    check_tol(tol)
    place = place_of(crystal, position)
    of_probe = _probe_su(crystal, place, position_su)
    _refuse_split_place(crystal, place, sites)
    chosen = np.array(sites, dtype=int)
    terms = (displaced,) if isinstance(displaced, Displaced) else tuple(displaced)
    uniform = np.zeros((crystal.n_sites, 3))
    uniform[chosen, 2] = 1.0
    ordering = Ordering(crystal, uniform, name="equal moments")
    cloud = as_spread("spread", spread)
    moves = crystal.position_moves
    stated = bool(moves) or of_probe is not None
    extended = moment_clouds(ordering, moment_spread)
    tensors, slopes, reached = _dipolar(ordering, place, chosen, covariance_of(cloud), extended, terms, stated, tol)
    bound = float(crystal.occupancies[chosen] @ (tol * np.maximum(1.0, np.abs(tensors).max(axis=(1, 2)))))
    magnetization = MU0_T_A3_PER_MUB / crystal.volume_A3
    rows = {int(site): row for row, site in enumerate(chosen)}
    notes = [*crystal.notes, *(f"displaced: {term.words()}" for term in terms)]
    notes += [words.removeprefix(": ") for words in probe_words("", cloud, ())]
    notes += [*moment_spread_words(counting_spread([ordering], moment_spread)), *reached]
    if place.site >= 0:
        notes.append(f"the position is that of atom {crystal.labels[place.site]}, which does not act on itself")
    return SiteCouplings(
        place=place,
        sites=frozen(chosen),
        occupancies=frozen(crystal.occupancies[chosen]),
        dipolar=frozen(tensors - magnetization / 3 * np.eye(3)),
        contact=frozen(_contact(ordering, place, contact, rows)),
        steps=frozen(_steps(place, chosen, slopes, moves, of_probe)),
        magnetization_T=float(magnetization),
        ordering=ordering,
        error_bound=bound,
        notes=tuple(notes),
    )


def _probe_su(crystal: Crystal, place: Place, position_su: Any) -> FloatArray | None:
    """Shape (3, 3) float in Å. Rows: what one standard uncertainty of each coordinate does to the probe; or None."""
    if position_su is None:
        return None
    su = as_floats("position_su", position_su, (3,))
    if np.any(su < 0):
        raise InputError(f"position_su must hold numbers of at least 0, got {su.tolist()}.")
    if place.site >= 0:
        raise InputError(
            f"position_su goes with a position of its own; this one is that of atom {crystal.labels[place.site]} and "
            "has the uncertainty of that site."
        )
    return np.asarray(su[:, None] * crystal.cell)


def _dipolar(
    ordering: Ordering,
    place: Place,
    chosen: np.ndarray,
    covariance: FloatArray,
    of_moments: FloatArray,
    displaced: tuple[Displaced, ...],
    slopes: bool,
    tol: float,
) -> tuple[FloatArray, FloatArray, list[str]]:
    """N = 0 sums of each site (n, 3, 3) in T/µB, their derivatives by the place of the probe (n, 3, 3, 3) in T/µB/Å
    (zero where not asked for), and notes on the atoms that the cloud of the probe reaches.

    covariance, of_moments: Shape (3, 3) and (n_sites, 3, 3) in Å², of the probe and of the moments.
    """
    crystal = ordering.crystal
    k = (0.0, 0.0, 0.0)
    reach = np.full(len(chosen), np.inf)
    tensors = np.zeros((len(chosen), 3, 3))
    steep = np.zeros((len(chosen), 3, 3, 3))
    if slopes or np.any(covariance) or np.any(of_moments[chosen]):
        for some in equal_covariances(of_moments[chosen]):
            smeared = smeared_sum(crystal.cell, np.zeros(3), tol, covariance + of_moments[chosen[some[0]]])
            found, derivatives, near = smeared.tensors(
                smeared.place(place.cart[None]), smeared.place(crystal.places_cart[chosen[some]]), slopes
            )
            tensors[some], reach[some] = found[0].real, near[0]
            if derivatives is not None:
                steep[some] = derivatives[0].real
            if smeared.cloud.thin:
                refuse_thin(ordering, chosen[some], near, [])
    else:
        plan = lattice_sum(crystal.cell, k, tol)
        tensors[:] = plan.tensors(plan.place(place.cart[None]), plan.place(crystal.places_cart[chosen]))[0].real
    pairs = moved_pairs(crystal, place, displaced)
    rows = {int(site): row for row, site in enumerate(chosen)}
    change, change_steep = exchanged_tensors(ordering, pairs, covariance, of_moments)
    for i, site in enumerate(pairs.sites):
        if int(site) in rows:
            tensors[rows[int(site)]] += change[i]
            steep[rows[int(site)]] += change_steep[i]
    labels = dict.fromkeys(crystal.labels[site] for site in chosen[reach < REACHED])
    if not np.any(covariance):
        return tensors, steep, [extended_words("the probe", label) for label in labels]
    return tensors, steep, [reached_words("of the probe", label) for label in labels]


def _steps(
    place: Place, chosen: np.ndarray, slopes: FloatArray, moves: Sequence[Moves], of_probe: FloatArray | None
) -> FloatArray:
    """Shape (m, n, 3, 3) in T/µB. A tensor depends on the separation of probe and site alone; a probe on a site moves
    with it.
    """
    found = []
    for move in moves:
        apart = np.zeros((len(move.steps_cart), len(chosen), 3))
        for i, site in enumerate(move.sites):
            apart[:, chosen == site] -= move.steps_cart[:, i, None]
            if site == place.site:
                apart += move.steps_cart[:, i, None]
        found.append(apart)
    if of_probe is not None:
        found.append(np.repeat(of_probe[:, None], len(chosen), axis=1))
    apart = np.concatenate(found) if found else np.zeros((0, len(chosen), 3))
    return np.asarray(np.einsum("sabc,msc->msab", slopes, apart))


def _refuse_split_place(crystal: Crystal, place: Place, sites: Sequence[int]) -> None:
    for other, vector in zip(place.shared, place.shared_vectors, strict=True):
        distance = float(np.linalg.norm(vector))
        if other in sites and distance > SAME_PLACE_A:
            raise InputError(
                f"position sits on atom {crystal.labels[place.site]}, {distance:.4f} Å from the magnetic atom "
                f"{crystal.labels[other]}: only one of them is there at a time. Give both the same position."
            )


def _contact(
    ordering: Ordering, place: Place, contact: Contact | Iterable[Contact], rows: dict[int, int]
) -> FloatArray:
    """Shape (n, 3, 3) float in T/µB. Couplings summed over the neighbours of every term, by site."""
    out = np.zeros((len(rows), 3, 3))
    for term in (contact,) if isinstance(contact, Contact) else tuple(contact):
        if not isinstance(term, Contact):
            raise InputError(f"contact must hold Contact objects, got {term!r}.")
        if term.moment_density_muB_per_A3 is not None:
            raise InputError(
                "contact: a moment density is not a coupling to moments, so it adds nothing to a coupling tensor or a "
                "shift. Give coupling_T_per_muB with shell or within."
            )
        neighbours, _, _ = shell_neighbours(ordering, place.position, term)
        for site in neighbours:
            out[rows[int(site)]] += term.coupling_T_per_muB
    return out
