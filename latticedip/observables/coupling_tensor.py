"""Coupling of a probe to the moments around it, site by site and summed for equal moments."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, check_tol, frozen
from latticedip.crystal.displace import Displaced, moved_pairs
from latticedip.crystal.model import SAME_PLACE_A, Crystal
from latticedip.crystal.place import Place, place_of
from latticedip.errors import InputError
from latticedip.observables.tensor import PrincipalFrame, principal_frame
from latticedip.ordering.model import Ordering
from latticedip.physics.boundary import boundary_words
from latticedip.physics.contact import shell_neighbours
from latticedip.physics.coupling import require_bulk
from latticedip.probe import Contact
from latticedip.sample import Sample
from latticedip.sums.bulk import lattice_sum
from latticedip.sums.pairs import pair_tensors
from latticedip.units import MU0_T_A3_PER_MUB


@dataclass(frozen=True, eq=False)
class SiteCouplings:
    """Coupling tensors of a probe to each magnetic site; moments count with the occupancy of their site.

    sites: Shape (n,) int, the magnetic sites. occupancies: Shape (n,) float.
    dipolar: Shape (n, 3, 3) in T/µB, Lorentz-sphere sums over all cells for equal moments in every cell.
    contact: Shape (n, 3, 3) in T/µB, summed over the neighbours that the contact terms mean.
    magnetization_T: µ0 times one Bohr magneton per cell volume, in T/µB.
    """

    place: Place
    sites: np.ndarray
    occupancies: FloatArray
    dipolar: FloatArray
    contact: FloatArray
    magnetization_T: float
    ordering: Ordering
    error_bound: float
    notes: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class CouplingTensor:
    """Field at a probe per Bohr magneton on every magnetic ion, B = A m, in its parts; Cartesian, T/µB.

    position: Shape (3,) fractional. site: label of the atom the position is on, empty where it is on none.
    magnetic: labels or elements that carry the moment. n_ions: magnetic ions per cell, counted with their occupancy.
    dipolar: Shape (3, 3). Lorentz-sphere sum Σ p (T − µ0/3V); symmetric, trace zero.
    lorentz: Shape (3, 3). (µ0/3V) Σ p, times the unit matrix. demagnetizing: Shape (3, 3). −(µ0/V) N Σ p.
    contact: Shape (3, 3). Σ p A over the neighbours of the contact terms; zero without them.
    error_bound: bound of the error of each element of the dipolar part that follows from tol, T/µB.
    principal: principal frame of the dipolar part.
    boundary: the boundary assumed, in words. notes: sentences a report must repeat.
    """

    position: FloatArray
    site: str
    magnetic: tuple[str, ...]
    n_ions: float
    dipolar: FloatArray
    lorentz: FloatArray
    demagnetizing: FloatArray
    contact: FloatArray
    error_bound: float
    boundary: str
    notes: tuple[str, ...] = field(default=(), repr=False)

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
            "dipolar_principal_values_T_per_muB": frame.values.tolist(),
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
    displaced: Displaced | Iterable[Displaced] = (),
    tol: float = 1e-10,
) -> CouplingTensor:
    """Coupling tensor of a probe to equal moments on all ions of a label or element: B = A m.

    crystal: periodic in three directions. position: Shape (3,) fractional; within 1e-3 Å of an atom it is that site,
    and leaves that atom out. magnetic: a site label or element (the label wins), or several; occupancy applies.
    sample: its demagnetizing tensor; None means N = 0. contact: Contacts that couple to whole shells of the magnetic
    ions. displaced: neighbours that the probe moves; shells of both kinds count in the undisturbed crystal.
    tol: bound of the error of each site's tensor, as `dipole_tensor`.

    Raises InputError for an unknown label, a position between 1e-3 and 0.1 Å from an atom, a shell that is not there,
    a contact term without a coupling, or a crystal that is not periodic in three directions.
    """
    names = (magnetic,) if isinstance(magnetic, str) else tuple(magnetic)
    if not names:
        raise InputError("magnetic names no label or element.")
    sites = sorted({site for name in names for site in crystal.find(name)})
    parts = site_couplings(crystal, position, sites, contact=contact, displaced=displaced, tol=tol)
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
    )


def site_couplings(
    crystal: Crystal,
    position: Any,
    sites: Sequence[int],
    *,
    contact: Contact | Iterable[Contact] = (),
    displaced: Displaced | Iterable[Displaced] = (),
    tol: float = 1e-10,
) -> SiteCouplings:
    """Coupling tensors of a probe to each of some sites (indices, distinct); arguments as `coupling_tensor`."""
    require_bulk(crystal)
    check_tol(tol)
    place = place_of(crystal, position)
    _refuse_split_place(crystal, place, sites)
    chosen = np.array(sites, dtype=int)
    plan = lattice_sum(crystal.cell, (0.0, 0.0, 0.0), tol)
    tensors = plan.tensors(plan.place(place.cart[None]), plan.place(crystal.places_cart[chosen]))[0]
    bound = float(crystal.occupancies[chosen] @ (tol * np.maximum(1.0, np.abs(tensors).max(axis=(1, 2)))))
    magnetization = MU0_T_A3_PER_MUB / crystal.volume_A3
    dipolar = np.asarray(tensors, dtype=float) - magnetization / 3 * np.eye(3)
    terms = (displaced,) if isinstance(displaced, Displaced) else tuple(displaced)
    pairs = moved_pairs(crystal, place, terms)
    rows = {int(site): row for row, site in enumerate(chosen)}
    change = pair_tensors(pairs.after) - pair_tensors(pairs.before)
    for site, difference in zip(pairs.sites, change, strict=True):
        if int(site) in rows:
            dipolar[rows[int(site)]] += difference
    uniform = np.zeros((crystal.n_sites, 3))
    uniform[chosen, 2] = 1.0
    ordering = Ordering(crystal, uniform, name="equal moments")
    notes = [*crystal.notes, *(f"displaced: {term.words()}" for term in terms)]
    if place.site >= 0:
        notes.append(f"the position is that of atom {crystal.labels[place.site]}, which does not act on itself")
    return SiteCouplings(
        place=place,
        sites=frozen(chosen),
        occupancies=frozen(crystal.occupancies[chosen]),
        dipolar=frozen(dipolar),
        contact=frozen(_contact(ordering, place, contact, rows)),
        magnetization_T=float(magnetization),
        ordering=ordering,
        error_bound=bound,
        notes=tuple(notes),
    )


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
