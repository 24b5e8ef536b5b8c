"""Static linewidth from nuclear moments: dipolar second moments in a strong field and in zero field.

Every nuclear spin is random and independent. For one nucleus of moment µ and spin I at distance r from the probe, with
b = (µ0/4π) µ/(I r³) the field per unit of spin and θ the angle between r and the strong field, the mean square field

    along a strong field, unlike spins   (1/3) I(I+1) b² (1 − 3cos²θ)²     Van Vleck, Phys. Rev. 74, 1168 (1948)
    along a strong field, like spins     (3/4) I(I+1) b² (1 − 3cos²θ)²     the same: 9/4 of it, by mutual flips
    in zero field, ⟨B_a B_b⟩             (1/3) I(I+1) b² (3 n_a n_b + δ_ab)

adds up over sites with occupancy and abundance as probabilities: ⟨B²⟩ = Σ_j p_j ⟨b_j²⟩, p_j their product, so that the
second moment of a dilute isotope is p times that of a full one. The line itself is near a Gaussian only for p near 1;
for p ≪ 1 it is close to a Lorentzian with a cut-off, and narrower than its second moment says (Kittel and Abrahams,
Phys. Rev. 90, 238 (1953)). Averaged over all directions (1 − 3cos²θ)² is 4/5. A
muon in a strong field relaxes with σ, exp(−σ²t²/2), σ² = γ² ⟨B_∥²⟩; in zero field with Δ per field component,
Δ² = γ² ⟨B²⟩/3, and Δ²/σ² = 5/2 in a powder (Hayano et al., Phys. Rev. B 20, 850 (1979)).

The strong field is stronger than all dipolar fields and quadrupole splittings of the nuclei; like spins are those of
the probe's own isotope, as if all of them had the same resonance. Where inequivalent sites are told apart by shift or
quadrupole splitting, mutual flips between them are quenched, and only the isotope's spins on sites equivalent to that
of the probe are like (`like="site"`). In a quadrupole splitting that the muon itself
causes at low fields the secular part differs (Hartmann, Phys. Rev. Lett. 39, 832 (1977)): that is not included.

A spread of the probe, an average over a Gaussian cloud, is motion that is fast against the linewidth, as zero-point
motion is: the field of every nucleus is averaged before it is squared (`latticedip.observables.averaged_pairs`). Slow
motion and disorder give a distribution of widths instead; sharp positions in the cloud stand for that.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np

from latticedip.checks import FloatArray, as_unit_vector, frozen
from latticedip.crystal.displace import Displaced, moved_pairs
from latticedip.crystal.model import OVERLAP_A, Crystal
from latticedip.crystal.place import Place, place_of
from latticedip.crystal.spread import as_spread, covariance_of
from latticedip.crystal.symmetry import equivalent_sites
from latticedip.errors import InputError
from latticedip.observables.averaged_pairs import averaged_power_tensors, change_by_cloud
from latticedip.observables.isotopes import element_of, isotopes_by_element
from latticedip.ordering.model import Ordering
from latticedip.particles import Particle, particle_named
from latticedip.physics.spread import REACHED, reached_words, refuse_thin, spread_words
from latticedip.sums.pairs import pair_power_tensors
from latticedip.sums.powers import direction_sum, power_tensors
from latticedip.sums.smear import cloud_of, smeared_pair_tensors
from latticedip.units import BOHR_MAGNETON_J_PER_T, DIPOLE_T_A3_PER_MUB, NUCLEAR_MAGNETON_J_PER_T

#: (µ0/4π) µ_N/Å³ in T.
NUCLEAR_FIELD_T_A3 = DIPOLE_T_A3_PER_MUB * NUCLEAR_MAGNETON_J_PER_T / BOHR_MAGNETON_J_PER_T
#: Second moment of like spins over that of unlike ones.
LIKE_FACTOR = 9 / 4
#: Below this share of sites with a moment a line is no longer near a Gaussian.
DILUTE = 0.1


@dataclass(frozen=True, eq=False)
class Contribution:
    """What one isotope adds.

    isotope: its name. like: True for spins that flip mutually with the probe. atoms_per_cell: mean number in the cell.
    second_moment_T2: mean square field along the strong field, T².
    mean_square_field_T2: ⟨B²⟩ of all three components in zero field, T².
    """

    isotope: str
    like: bool
    atoms_per_cell: float
    second_moment_T2: float
    mean_square_field_T2: float


@dataclass(frozen=True, eq=False)
class Linewidth:
    """Static dipolar second moments and widths of a probe; see the module for their meaning.

    position: Shape (3,) fractional. site: label of the atom it is on, empty where it is on none.
    particle: name of the probe. MHz_per_T: its |γ|/2π.
    direction: Shape (3,) unit vector of the strong field (in zero field: of the initial polarization), Cartesian; None
        for a powder.
    strong_tensor_T2: Shape (3, 3, 3, 3) in T². Σ p (1/3 or 3/4) I(I+1) b² n_a n_b n_c n_d, for all directions; with a
        spread the tensor that gives the averaged sums in the same way.
    zero_tensor_T2: Shape (3, 3) in T². ⟨B_a B_b⟩ in zero field.
    contributions: by isotope. notes: sentences a report must repeat. motion_notes: those of them on its spread.
    """

    position: FloatArray
    site: str
    particle: str
    MHz_per_T: float
    direction: FloatArray | None
    strong_tensor_T2: FloatArray
    zero_tensor_T2: FloatArray
    contributions: tuple[Contribution, ...]
    notes: tuple[str, ...] = field(default=(), repr=False)
    motion_notes: tuple[str, ...] = field(default=(), repr=False)

    @property
    def second_moment_T2(self) -> float:
        """Mean square dipolar field along a strong field, T²; along `direction`, or powder average."""
        return _along(self.strong_tensor_T2, self.direction)

    @property
    def transverse_width_per_us(self) -> float:
        """σ = γ √(second moment) in 1/µs (angular frequency), as in exp(−σ²t²/2)."""
        return self._rate(self.second_moment_T2)

    @property
    def zero_field_width_per_us(self) -> float | None:
        """Δ in 1/µs of the static Kubo–Toyabe function, Δ² = γ² ⟨B²⟩/3; None for anything but a muon.

        With a direction it is the width that a polarization along it shows, from the two field components across:
        Δ² = γ² (⟨B²⟩ − ⟨B_∥²⟩)/2, so that the polarization starts as 1 − Δ² t².
        """
        if self.particle != "muon":
            return None
        whole = float(np.trace(self.zero_tensor_T2))
        if self.direction is None:
            return self._rate(whole / 3)
        return self._rate((whole - float(self.direction @ self.zero_tensor_T2 @ self.direction)) / 2)

    def second_moment_along(self, direction: Any) -> float:
        """Second moment in T² with the strong field along a Cartesian direction (3,); InputError for a zero vector."""
        return _along(self.strong_tensor_T2, as_unit_vector("direction", direction))

    def _rate(self, mean_square_T2: float) -> float:
        return 2 * math.pi * self.MHz_per_T * math.sqrt(max(0.0, mean_square_T2))

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            "position": self.position.tolist(),
            "site": self.site or None,
            "particle": self.particle,
            "direction": None if self.direction is None else self.direction.tolist(),
            "second_moment_T2": self.second_moment_T2,
            "root_second_moment_mT": 1e3 * math.sqrt(max(0.0, self.second_moment_T2)),
            "transverse_width_per_us": self.transverse_width_per_us,
            "zero_field_width_per_us": self.zero_field_width_per_us,
            "zero_field_tensor_T2": self.zero_tensor_T2.tolist(),
            "contributions": [
                {
                    "isotope": part.isotope,
                    "like": part.like,
                    "atoms_per_cell": part.atoms_per_cell,
                    "second_moment_T2": part.second_moment_T2,
                    "mean_square_field_T2": part.mean_square_field_T2,
                }
                for part in self.contributions
            ],
            "notes": list(self.notes),
        }


def linewidth(
    crystal: Crystal,
    position: Any,
    *,
    particle: str,
    nuclei: str | Iterable[str] | None = None,
    direction: Any = None,
    abundances: Mapping[str, float] | None = None,
    displaced: Displaced | Iterable[Displaced] = (),
    like: Literal["isotope", "site"] = "isotope",
    spread: Any = None,
) -> Linewidth:
    """Static dipolar second moment and widths of a probe from the nuclear moments around it.

    crystal: periodic in three directions, or in none. position: Shape (3,) fractional; within 1e-3 Å of an atom it is
    that site, and neither that atom nor one that shares its place acts on the probe. particle: "muon" or an isotope.
    like: which spins of the same isotope are like spins: all ("isotope"), or those on sites that the symmetry of the
    crystal makes equal to that of the probe ("site"; none for a probe on no site).
    nuclei: isotopes ("63Cu") or elements ("Cu") that count; None: all.
    direction: Shape (3,) Cartesian, of the strong field; None: powder average. abundances: fraction of the atoms of an
    element that are an isotope, by its name, where they are not the natural ones. displaced: neighbours that the probe
    moves. spread: of the probe, as `local_field` takes it: rms displacement along each axis in Å (float) or a (3, 3)
    covariance in Å², of motion that is fast against the linewidth; None: a sharp place. Lattice sums are exact to ten
    digits or better.

    Raises InputError for unknown particles and nuclei, another word for like, a zero direction, a position between 1e-3
    and 0.1 Å from an atom, a shell that is not there, a crystal that is periodic in one or two directions, a spread as
    `local_field` refuses it, or a flat one that reaches a nucleus; AccuracyError where ten digits would take too many
    pairs.
    """
    probe = particle_named(particle)
    along = None if direction is None else frozen(as_unit_vector("direction", direction))
    isotopes = isotopes_by_element(crystal, nuclei, abundances)
    place = place_of(crystal, position)
    terms = (displaced,) if isinstance(displaced, Displaced) else tuple(displaced)
    cloud = as_spread("spread", spread)
    wanted = np.flatnonzero([symbol in isotopes for symbol in crystal.symbols])
    sums, reached = _site_sums(crystal, place, terms, wanted, covariance_of(cloud))
    strong, zero = np.zeros((3, 3, 3, 3)), np.zeros((3, 3))
    contributions = []
    own = _like_sites(crystal, place, like)
    for element, entries in isotopes.items():
        of_element = np.array([symbol == element for symbol in crystal.symbols])
        for isotope, share in entries:
            scale = share * _mean_square_T2_A6(isotope)
            same = isotope.name == probe.name
            # Spins of the probe's own isotope come in two kinds where the option parts them.
            for flips in (True, False) if same else (False,):
                sites = of_element & (own == flips) if same else of_element
                if not np.any(sites):
                    continue
                around = np.einsum("s,sabcd->abcd", crystal.occupancies[sites], sums[sites])
                second = np.einsum("abcc->ab", around)
                part = (LIKE_FACTOR if flips else 1.0) * scale * around
                random = scale * (3 * second + np.trace(second) * np.eye(3))
                strong += part
                zero += random
                atoms = share * float(crystal.occupancies[sites].sum())
                contributions.append(
                    Contribution(isotope.name, flips, atoms, _along(part, along), float(np.trace(random)))
                )
    moving = _spread_notes(cloud, reached)
    return Linewidth(
        position=place.position,
        site=crystal.labels[place.site] if place.site >= 0 else "",
        particle=probe.name,
        MHz_per_T=probe.MHz_per_T,
        direction=along,
        strong_tensor_T2=frozen(strong),
        zero_tensor_T2=frozen(zero),
        contributions=tuple(contributions),
        notes=(*_notes(crystal, place, probe, terms, contributions), *moving),
        motion_notes=moving,
    )


def _like_sites(crystal: Crystal, place: Place, like: str) -> np.ndarray:
    """Shape (n_sites,) bool. Sites on which spins of the probe's own isotope are like spins."""
    if like not in ("isotope", "site"):
        raise InputError(f'like must be "isotope" or "site", got {like!r}.')
    if like == "isotope":
        return np.ones(crystal.n_sites, dtype=bool)
    if place.site < 0:
        return np.zeros(crystal.n_sites, dtype=bool)
    first = np.array(equivalent_sites(crystal))
    return np.asarray(first == first[place.site])


def _mean_square_T2_A6(isotope: Particle) -> float:
    """(1/3) I(I+1) (µ0/4π)² (µ/I)² in T² Å⁶: mean square of one component of (µ0/4π) µ I/I."""
    field_per_spin = NUCLEAR_FIELD_T_A3 * isotope.moment_nuclear_magnetons / isotope.spin
    return isotope.spin * (isotope.spin + 1) / 3 * field_per_spin**2


def _along(tensor: FloatArray, direction: FloatArray | None) -> float:
    if direction is None:
        return 4 / 5 * float(np.einsum("aabb->", tensor))
    # Squares add up to at least zero; rounding may fall below it where every term vanishes.
    return max(0.0, float(direction_sum(tensor, direction)))


def _site_sums(
    crystal: Crystal, place: Place, displaced: tuple[Displaced, ...], sites: np.ndarray, covariance: FloatArray
) -> tuple[FloatArray, list[str]]:
    """Shape (n_sites, 3, 3, 3, 3) in 1/Å⁶. Σ n_a n_b n_c n_d r⁻⁶ over the atoms of each site, all cells.

    sites: those that count. covariance: Shape (3, 3) in Å², of the probe. Also the labels of atoms that it reaches.
    """
    offsets = place.cart - crystal.places_cart
    if all(crystal.pbc):
        sums = power_tensors(crystal.cell, offsets, leave_out_A=OVERLAP_A)
    elif not any(crystal.pbc):
        sums = np.zeros((crystal.n_sites, 3, 3, 3, 3))
        away = np.linalg.norm(offsets, axis=1) >= OVERLAP_A
        sums[away] = pair_power_tensors(offsets[away])
    else:
        raise InputError(
            f"the structure is periodic along {crystal.pbc} only; linewidths are available for three periodic "
            "directions or none."
        )
    pairs = moved_pairs(crystal, place, displaced)
    if not np.any(covariance) or not len(sites):
        np.add.at(sums, pairs.sites, pair_power_tensors(pairs.after) - pair_power_tensors(pairs.before))
        return sums, []
    averaged = change_by_cloud(crystal, place, sites, covariance, sums)
    sums = sums + averaged.change
    change = averaged_power_tensors(pairs.after, covariance) - averaged_power_tensors(pairs.before, covariance)
    np.add.at(sums, pairs.sites, change)
    reach = averaged.reach.copy()
    np.minimum.at(reach, pairs.sites, smeared_pair_tensors(pairs.after, covariance)[2])
    reach = reach[sites]
    if cloud_of(covariance).thin:
        refuse_thin(Ordering(crystal, np.zeros((crystal.n_sites, 3))), sites, reach[None], ["the probe"])
    return sums, list(dict.fromkeys(crystal.labels[site] for site in sites[reach < REACHED]))


def _spread_notes(spread: float | FloatArray | None, reached: list[str]) -> tuple[str, ...]:
    if spread is None or not np.any(spread):
        return ()
    return (
        f"pair fields averaged over a Gaussian spread of {spread_words(spread)}: motion that is fast against the "
        "linewidth; a slow one gives a distribution of widths instead",
        *(reached_words("of the probe", label) for label in reached),
    )


def _notes(
    crystal: Crystal, place: Place, probe: Particle, displaced: tuple[Displaced, ...], parts: list[Contribution]
) -> tuple[str, ...]:
    notes = [*crystal.notes, *(f"displaced: {term.words()}" for term in displaced)]
    if place.site >= 0:
        symbol, label = crystal.symbols[place.site], crystal.labels[place.site]
        notes.append(f"the position is that of atom {label}, which does not act on the probe")
        if probe.name != "muon" and element_of(probe.name) != symbol:
            notes.append(f"the probe {probe.name} takes the place of an atom of another element, {label}")
    if parts:
        strongest = max(parts, key=lambda part: part.second_moment_T2)
        element = element_of(strongest.isotope)
        atoms = sum(symbol == element for symbol in crystal.symbols)
        share = sum(part.atoms_per_cell for part in parts if part.isotope == strongest.isotope) / atoms
        if strongest.second_moment_T2 > 0 and share < DILUTE:
            notes.append(
                f"{strongest.isotope} sits on {100 * share:.3g} % of the {element} places only: the line of dilute "
                "spins is narrower than its second moment says (Kittel and Abrahams 1953)"
            )
    return tuple(notes)
