"""Paramagnetic shift: the field of moments that an applied field induces, relative to that field.

Reference and sign. K = (B_local·h − B_applied)/B_applied with h the direction of the applied field: the reference is
the bare particle in the applied field, and K > 0 means a larger field (a higher frequency) than there. Shielding by
the particle's own electrons is not included.

Moments are taken to first order, m_j = χ_j B_applied with χ_j the measured moment per applied field, so that

    K = Σ_j p_j (A_j + C_j) χ_j  +  (µ0/3V) Σ_j p_j χ_j  −  (µ0/V) N Σ_j p_j χ_j
        dipolar, contact             Lorentz                 demagnetizing

with A_j the Lorentz-sphere dipole tensor of site j and C_j its contact coupling. K is a (3, 3) tensor, not symmetric in
general; to first order the shift along h is h·K·h, in which only its symmetric part counts.

Uncertainties follow from those of the positions (through A_j) and of χ_j, to first order: K changes by a step for one
standard uncertainty of each independent parameter, and the squares of the steps add up. Contact couplings, cell,
occupancies and the shape of the sample count as exact.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_floats, as_unit_vector, frozen
from latticedip.crystal.displace import Displaced
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError
from latticedip.observables.coupling_tensor import SiteCouplings, site_couplings
from latticedip.observables.powder import PowderLine
from latticedip.observables.susceptibility import UNITS, Susceptibility
from latticedip.observables.tensor import PrincipalFrame, ProbeTensor, added, known, mean_tensor, principal_frame
from latticedip.physics.boundary import boundary_words
from latticedip.probe import Contact
from latticedip.sample import Sample


@dataclass(frozen=True, eq=False)
class Rotation:
    """Shift while the crystal turns in the field, K(φ) = constant + cosine cos 2φ + sine sin 2φ.

    axis: Shape (3,) unit vector, Cartesian; the field stays across it. start: Shape (3,), field direction at φ = 0.
    The field turns from start towards axis × start, seen from the crystal.
    angles_deg: Shape (n,). shift: Shape (n,), as a fraction.
    """

    axis: FloatArray
    start: FloatArray
    constant: float
    cosine: float
    sine: float
    angles_deg: FloatArray
    shift: FloatArray

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; the shift is a fraction."""
        return {
            "axis": self.axis.tolist(),
            "start": self.start.tolist(),
            "constant": self.constant,
            "cosine": self.cosine,
            "sine": self.sine,
            "angles_deg": self.angles_deg.tolist(),
            "shift": self.shift.tolist(),
        }


@dataclass(frozen=True, eq=False, kw_only=True)
class Shift(ProbeTensor):
    """Shift of a probe in its parts, as fractions of the applied field; Cartesian tensors (3, 3).

    position: Shape (3,) fractional. site: label of the atom it is on, empty where it is on none.
    temperature_K: where a susceptibility is a table, else None.
    dipolar: Lorentz-sphere sum. contact: contact couplings. lorentz: a third of the volume susceptibility.
    demagnetizing: −N times it. volume_susceptibility: Shape (3, 3), SI, dimensionless.
    chi_cm3_per_mol: a third of the trace of χ, mean over the magnetic ions, cgs per mole of ions.
    boundary: the boundary assumed, in words. notes: sentences a report must repeat.
    steps: Shape (m, 3, 3). Changes of the total by one standard uncertainty of each parameter; m is 0 where positions
        and χ state none, and all uncertainties are NaN then.
    """

    temperature_K: float | None
    volume_susceptibility: FloatArray
    chi_cm3_per_mol: float

    @cached_property
    def total(self) -> FloatArray:
        """Shape (3, 3) float. Sum of the four parts."""
        return frozen(self.dipolar + self.contact + self.lorentz + self.demagnetizing)

    @cached_property
    def principal(self) -> PrincipalFrame:
        """Principal frame of the symmetric part of the total."""
        return principal_frame(self.total, 1e-12 * float(np.abs(self.total).max()))

    @property
    def isotropic(self) -> float:
        """A third of the trace of the total; the mean shift of a powder."""
        return self.principal.isotropic

    @property
    def powder(self) -> PowderLine:
        """Line shape of a powder whose grains all have the shape and orientation stated for the sample."""
        return PowderLine(self.principal.values)

    def along(self, direction: Any) -> float:
        """Shift as a fraction, applied field along a Cartesian direction (3,); InputError for the zero vector."""
        h = as_unit_vector("direction", direction)
        return float(h @ self.total @ h)

    @property
    def total_su(self) -> FloatArray:
        """Shape (3, 3) float. Standard uncertainties of the total."""
        return added(self.steps)

    @property
    def isotropic_su(self) -> float:
        """Standard uncertainty of the isotropic shift."""
        return float(added(np.einsum("maa->m", self.steps) / 3))

    @property
    def principal_values_su(self) -> FloatArray:
        """Shape (3,) float. Standard uncertainties of the principal values; of their mean where they are equal."""
        return added(self.principal.changes(self.steps))

    def su_along(self, direction: Any) -> float:
        """Standard uncertainty of the shift along a Cartesian direction (3,); InputError for the zero vector."""
        h = as_unit_vector("direction", direction)
        return float(added(np.einsum("a,mab,b->m", h, self.steps, h)))

    def rotation(self, axis: Any, angles_deg: Any = None, start: Any = None) -> Rotation:
        """Shift against the angle by which the field turns about an axis of the crystal, always across it.

        axis: Shape (3,) Cartesian. angles_deg: Shape (n,); None: 0 to 360 in steps of 5. start: Shape (3,) Cartesian,
        its part across the axis is the direction at 0; None: Cartesian x, or y for an axis along x.

        Raises InputError for a zero axis or a start along the axis.
        """
        about = as_unit_vector("axis", axis)
        first = np.array([1.0, 0.0, 0.0]) if start is None else as_unit_vector("start", start)
        if start is None and abs(about[0]) > 1 - 1e-9:
            first = np.array([0.0, 1.0, 0.0])
        first = first - (first @ about) * about
        if np.linalg.norm(first) < 1e-6:
            raise InputError(f"start lies along the axis of rotation {about.tolist()}; give a direction across it.")
        first = first / np.linalg.norm(first)
        second = np.cross(about, first)
        angles = np.arange(0.0, 361.0, 5.0) if angles_deg is None else as_floats("angles_deg", angles_deg, (None,))
        k = (self.total + self.total.T) / 2
        constant = float(first @ k @ first + second @ k @ second) / 2
        cosine = float(first @ k @ first - second @ k @ second) / 2
        sine = float(first @ k @ second)
        twice = 2 * np.radians(angles)
        shift = constant + cosine * np.cos(twice) + sine * np.sin(twice)
        return Rotation(frozen(about), frozen(first), constant, cosine, sine, frozen(angles), frozen(shift))

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; shifts are fractions of the applied field, tensors Cartesian."""
        frame = self.principal
        return {
            "position": self.position.tolist(),
            "site": self.site or None,
            "temperature_K": self.temperature_K,
            "chi_cm3_per_mol": self.chi_cm3_per_mol,
            "volume_susceptibility": self.volume_susceptibility.tolist(),
            "boundary": self.boundary,
            "shift_dipolar": self.dipolar.tolist(),
            "shift_contact": self.contact.tolist(),
            "shift_lorentz": self.lorentz.tolist(),
            "shift_demagnetizing": self.demagnetizing.tolist(),
            "shift": self.total.tolist(),
            "shift_su": known(self.total_su),
            "shift_isotropic": frame.isotropic,
            "shift_isotropic_su": None if np.isnan(self.isotropic_su) else self.isotropic_su,
            "shift_principal_values": frame.values.tolist(),
            "shift_principal_values_su": known(self.principal_values_su),
            "shift_principal_axes": frame.axes.tolist(),
            "shift_anisotropy": frame.anisotropy,
            "shift_asymmetry": frame.asymmetry,
            "powder_edges": self.powder.edges.tolist(),
            "notes": list(self.notes),
        }


@dataclass(frozen=True, eq=False)
class ShiftCurve:
    """Shifts of one probe over a table of temperatures, and so against χ.

    shifts: one `Shift` per temperature, in the order asked for.
    """

    shifts: tuple[Shift, ...]

    @property
    def temperatures_K(self) -> FloatArray:
        """Shape (n,) float in K."""
        return frozen(np.array([shift.temperature_K for shift in self.shifts], dtype=float))

    @property
    def chi_cm3_per_mol(self) -> FloatArray:
        """Shape (n,) float. Mean isotropic susceptibility per mole of magnetic ions, cgs."""
        return frozen(np.array([shift.chi_cm3_per_mol for shift in self.shifts]))

    @property
    def isotropic(self) -> FloatArray:
        """Shape (n,) float. Isotropic shift, as a fraction."""
        return frozen(np.array([shift.isotropic for shift in self.shifts]))

    @property
    def principal_values(self) -> FloatArray:
        """Shape (n, 3) float. Principal values of each shift, as fractions."""
        return frozen(np.array([shift.principal.values for shift in self.shifts]).reshape(-1, 3))

    @property
    def isotropic_su(self) -> FloatArray:
        """Shape (n,) float. Standard uncertainties of the isotropic shifts; NaN where none is stated."""
        return frozen(np.array([shift.isotropic_su for shift in self.shifts]))

    def along(self, direction: Any) -> FloatArray:
        """Shape (n,) float. Shifts with the applied field along a Cartesian direction (3,), as fractions."""
        return frozen(np.array([shift.along(direction) for shift in self.shifts]))

    def to_dict(self) -> dict[str, Any]:
        """Plain dict with one entry per temperature."""
        return {"rows": [shift.to_dict() for shift in self.shifts]}


def paramagnetic_shift(
    crystal: Crystal,
    position: Any,
    susceptibility: Mapping[str, Susceptibility],
    *,
    temperature_K: float | None = None,
    sample: Sample | None = None,
    contact: Contact | Iterable[Contact] = (),
    spread: Any = None,
    displaced: Displaced | Iterable[Displaced] = (),
    position_su: Any = None,
    moment_spread: Any = None,
    tol: float = 1e-10,
) -> Shift:
    """Shift of a probe by the moments that an applied field induces; sign and reference as the module says.

    crystal, position, sample, contact, spread, displaced, position_su, moment_spread, tol: as `coupling_tensor`; the
    applied field of the sample plays no part. susceptibility: for every magnetic site label or element its
    Susceptibility. temperature_K: where one of them is a table.

    Raises InputError as `coupling_tensor` and `Susceptibility` do, and where two names mean the same atom.
    """
    (found,) = shifts_at(
        crystal,
        position,
        susceptibility,
        [temperature_K],
        sample=sample,
        contact=contact,
        spread=spread,
        displaced=displaced,
        position_su=position_su,
        moment_spread=moment_spread,
        tol=tol,
    )
    return found


def shift_curve(
    crystal: Crystal,
    position: Any,
    susceptibility: Mapping[str, Susceptibility],
    temperatures_K: Any = None,
    *,
    sample: Sample | None = None,
    contact: Contact | Iterable[Contact] = (),
    spread: Any = None,
    displaced: Displaced | Iterable[Displaced] = (),
    position_su: Any = None,
    moment_spread: Any = None,
    tol: float = 1e-10,
) -> ShiftCurve:
    """Shifts of a probe over temperatures.

    crystal, position, susceptibility, sample, contact, spread, displaced, position_su, moment_spread, tol: as
    `paramagnetic_shift`. temperatures_K: Shape (n,); None: those of the first table.

    Raises InputError as `paramagnetic_shift`, and where no susceptibility is a table.
    """
    tables = [chi.temperatures_K for chi in susceptibility.values() if _checked(chi).temperatures_K is not None]
    if not tables:
        raise InputError("a curve needs a susceptibility against temperature: give temperatures_K with its values.")
    temperatures = tables[0] if temperatures_K is None else as_floats("temperatures_K", temperatures_K, (None,))
    found = shifts_at(
        crystal,
        position,
        susceptibility,
        [float(t) for t in temperatures],
        sample=sample,
        contact=contact,
        spread=spread,
        displaced=displaced,
        position_su=position_su,
        moment_spread=moment_spread,
        tol=tol,
    )
    return ShiftCurve(tuple(found))


def shifts_at(
    crystal: Crystal,
    position: Any,
    susceptibility: Mapping[str, Susceptibility],
    temperatures_K: Sequence[float | None],
    *,
    sample: Sample | None = None,
    contact: Contact | Iterable[Contact] = (),
    spread: Any = None,
    displaced: Displaced | Iterable[Displaced] = (),
    position_su: Any = None,
    moment_spread: Any = None,
    tol: float = 1e-10,
) -> list[Shift]:
    """Shifts of a probe at some temperatures (None where no susceptibility is a table), from one set of sums.

    The other arguments and what is raised: as `paramagnetic_shift`.
    """
    sites = _magnetic_sites(crystal, susceptibility)
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
    return [_shift(crystal, parts, susceptibility, temperature, sample) for temperature in temperatures_K]


def averaged_shift(shifts: Sequence[Shift], weights: FloatArray) -> Shift:
    """Mean of the shifts at several positions, that of a probe that moves fast between them.

    weights: Shape (n,) float, adding up to 1. shifts: at one temperature and of one susceptibility, which with the
    sites of the ions bring their uncertainties. The position is that of the first.
    """
    return mean_tensor(shifts, np.asarray(weights, dtype=float))


def _checked(chi: Susceptibility) -> Susceptibility:
    if not isinstance(chi, Susceptibility):
        raise InputError(f"susceptibility must hold Susceptibility objects, got {chi!r}.")
    return chi


def _magnetic_sites(crystal: Crystal, susceptibility: Mapping[str, Susceptibility]) -> list[int]:
    if not susceptibility:
        raise InputError("susceptibility names no magnetic label or element.")
    sites: list[int] = []
    for name, chi in susceptibility.items():
        if not isinstance(chi, Susceptibility):
            raise InputError(f"susceptibility of {name} must be a Susceptibility, got {chi!r}.")
        for site in crystal.find(name):
            if site in sites:
                raise InputError(f"susceptibility: {name!r} means atom {crystal.labels[site]}, which is named before.")
            sites.append(site)
    return sites


def _shift(
    crystal: Crystal,
    parts: SiteCouplings,
    susceptibility: Mapping[str, Susceptibility],
    temperature_K: float | None,
    sample: Sample | None,
) -> Shift:
    # A temperature belongs to the tables; a single value beside a table holds at every temperature.
    tables = any(chi.temperatures_K is not None for chi in susceptibility.values())
    at = {
        name: temperature_K if entry.temperatures_K is not None or not tables else None
        for name, entry in susceptibility.items()
    }
    chi = np.concatenate([entry.of_atoms(crystal, name, at[name]) for name, entry in susceptibility.items()])
    weighted = parts.occupancies[:, None, None] * chi
    volume = parts.magnetization_T * weighted.sum(axis=0)
    specimen = Sample() if sample is None else sample
    mean = float(np.einsum("saa->", weighted) / 3 / parts.occupancies.sum())
    place = parts.place
    # What a step in the moment of one atom per field does to the field, all parts together.
    response = parts.dipolar + parts.contact
    response = response + parts.magnetization_T * (np.eye(3) / 3 - specimen.demagnetizing_tensor)
    steps = [np.einsum("msab,sbc->mac", parts.steps, weighted)]
    first = 0
    for name, entry in susceptibility.items():
        changes = entry.steps_of_atoms(crystal, name, at[name])
        rows = slice(first, first + changes.shape[1])
        steps.append(np.einsum("s,sab,msbc->mac", parts.occupancies[rows], response[rows], changes))
        first = rows.stop
    return Shift(
        position=place.position,
        site=crystal.labels[place.site] if place.site >= 0 else "",
        temperature_K=temperature_K,
        dipolar=frozen(np.einsum("sab,sbc->ac", parts.dipolar, weighted)),
        contact=frozen(np.einsum("sab,sbc->ac", parts.contact, weighted)),
        lorentz=frozen(volume / 3),
        demagnetizing=frozen(0.0 - specimen.demagnetizing_tensor @ volume),
        volume_susceptibility=frozen(volume),
        chi_cm3_per_mol=mean / UNITS["cm3/mol"],
        boundary=boundary_words(parts.ordering, sample),
        notes=parts.notes,
        steps=frozen(np.concatenate(steps)),
    )
