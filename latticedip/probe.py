"""Probe and Contact: where a field is asked for, how the probe moves, and which contact coupling acts there."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_float, as_floats, frozen
from latticedip.crystal.displace import Displaced
from latticedip.crystal.spread import as_spread
from latticedip.crystal.uncertain import checked_su
from latticedip.errors import InputError

#: Neighbours whose distances differ by less than this (Å) belong to one shell.
SHELL_TOLERANCE_A = 0.01


@dataclass(frozen=True, eq=False)
class Contact:
    """One contact term at a probe.

    coupling_T_per_muB: a number or a (3, 3) tensor A in T/µB per neighbour; B_contact = Σ A m over neighbours.
    shell: the shell of magnetic neighbours (1 is the nearest; equal distances within 0.01 Å are one shell).
    within: radius in Å; all magnetic neighbours inside it. A shell is never split.
    moment_density_muB_per_A3: instead of a coupling, the moment density at the probe, Shape (3,) Cartesian µB/Å³:
        B_contact = (2/3) µ0 × density.

    Raises InputError unless exactly one of shell, within goes with a coupling, or a density stands alone.
    """

    coupling_T_per_muB: Any = None
    shell: int | None = None
    within: float | None = None
    moment_density_muB_per_A3: Any = None

    def __init__(
        self,
        coupling_T_per_muB: Any = None,
        *,
        shell: int | None = None,
        within: float | None = None,
        moment_density_muB_per_A3: Any = None,
    ) -> None:
        tensor: FloatArray | None = None
        density: FloatArray | None = None
        if moment_density_muB_per_A3 is not None:
            if coupling_T_per_muB is not None or shell is not None or within is not None:
                raise InputError(
                    "a Contact takes either moment_density_muB_per_A3 or a coupling with shell or within, not both."
                )
            density = frozen(as_floats("moment_density_muB_per_A3", moment_density_muB_per_A3, (3,)))
        else:
            if coupling_T_per_muB is None:
                raise InputError(
                    "a Contact needs coupling_T_per_muB (a number or a 3×3 tensor) or moment_density_muB_per_A3."
                )
            if (shell is None) == (within is None):
                raise InputError(
                    "a contact coupling needs exactly one of shell (1 is the nearest) and within (a radius in Å)."
                )
            if shell is not None and (isinstance(shell, bool) or not isinstance(shell, (int, np.integer)) or shell < 1):
                raise InputError(f"shell must be a whole number of at least 1, got {shell!r}.")
            if within is not None:
                within = as_float("within", within, low=1e-3, high=100.0)
            if np.ndim(coupling_T_per_muB) == 0:
                tensor = frozen(as_float("coupling_T_per_muB", coupling_T_per_muB) * np.eye(3))
            else:
                tensor = frozen(as_floats("coupling_T_per_muB", coupling_T_per_muB, (3, 3)))
        object.__setattr__(self, "coupling_T_per_muB", tensor)
        object.__setattr__(self, "shell", None if shell is None else int(shell))
        object.__setattr__(self, "within", within)
        object.__setattr__(self, "moment_density_muB_per_A3", density)


@dataclass(frozen=True, eq=False)
class Probe:
    """A position, or the atoms of a site label, where a field is asked for.

    position: Shape (3,) fractional. Exactly one of position and site is given.
    site: a site label or element; the probe then stands for each of its atoms in turn.
    particle: "muon" or an isotope such as "19F".
    name: what tables call it; defaults to the particle with the site or position.
    contact: Contacts whose fields add up.
    spread: rms displacement along each Cartesian axis in Å (a number), or a (3, 3) Cartesian covariance in Å²: fields
        are averages over this Gaussian cloud. An isotropic one changes nothing until it reaches an ion; there the
        traceless (principal-value) part is meant, and the rest is contact. On a site a covariance is that of its first
        atom, carried to the others by the operations of the crystal.
    displaced: Displaced neighbours. Shells of contact terms are those of the undisturbed crystal.
    position_su: Shape (3,) float, fractional. Standard uncertainties of the coordinates, taken as independent.

    Raises InputError for both or neither of position and site, for unknown particles (with a near match), and for a
    spread, neighbours or uncertainties that are not as described.
    """

    position: Any = None
    site: str | None = None
    particle: str = "muon"
    name: str = ""
    contact: tuple[Contact, ...] = ()
    spread: Any = None
    displaced: tuple[Displaced, ...] = ()
    position_su: Any = None

    def __init__(
        self,
        position: Any = None,
        *,
        site: str | None = None,
        particle: str = "muon",
        name: str = "",
        contact: Any = (),
        spread: Any = None,
        displaced: Any = (),
        position_su: Any = None,
    ) -> None:
        from latticedip.particles import particle_named

        if (position is None) == (site is None):
            raise InputError("a Probe needs exactly one of position (fractional) and site (a label or element).")
        if position is not None:
            position = frozen(as_floats("position", position, (3,)))
        if site is not None and not isinstance(site, str):
            raise InputError(f"site must be a label or an element, got {site!r}.")
        terms = tuple(contact) if isinstance(contact, Iterable) else (contact,)
        for term in terms:
            if not isinstance(term, Contact):
                raise InputError(f"contact must hold Contact objects, got {term!r}.")
        moved = tuple(displaced) if isinstance(displaced, Iterable) else (displaced,)
        for neighbour in moved:
            if not isinstance(neighbour, Displaced):
                raise InputError(f"displaced must hold Displaced objects, got {neighbour!r}.")
        if position_su is not None:
            if site is not None:
                raise InputError("position_su goes with position; a probe on a site has the uncertainty of that site.")
            position_su = frozen(as_floats("position_su", position_su, (3,)))
            if np.any(position_su < 0):
                raise InputError(f"position_su must hold numbers of at least 0, got {position_su.tolist()}.")
            checked_su("position_su", position_su, (3,))
        known = particle_named(particle)
        where = site if site is not None else "(" + ", ".join(f"{x:.4g}" for x in position) + ")"
        object.__setattr__(self, "position", position)
        object.__setattr__(self, "site", site)
        object.__setattr__(self, "particle", known.name)
        object.__setattr__(self, "name", name or f"{known.name} at {where}")
        object.__setattr__(self, "contact", terms)
        object.__setattr__(self, "spread", as_spread("spread", spread))
        object.__setattr__(self, "displaced", moved)
        object.__setattr__(self, "position_su", position_su)

    @property
    def MHz_per_T(self) -> float:
        """|γ|/2π of the particle in MHz/T."""
        from latticedip.particles import particle_named

        return particle_named(self.particle).MHz_per_T
