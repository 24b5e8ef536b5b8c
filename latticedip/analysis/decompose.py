"""What the energy of an ordering is made of: pairs of sublattices, and shells of distance up to the full sum.

A sublattice is one magnetic site with its images in all cells. The dipolar part is a sum over pairs of sublattices,

    E_dipolar = −w Σ_k Re S*_ki·T_ij(k)·S_kj  over i, j   (w = ½ for a real component, ¼ for a Fourier pair),

and so is the shape energy where there is a net moment. By distance, the same pairs of ions are taken one by one,
T_ij(k) = Σ_R T(τ_i − τ_j − R) exp(−2πi k·R), each shell of equal distance whole; what lies beyond the last shell listed
is the full sum at N = 0 without them. Shells alone converge conditionally: the row "beyond" need not become small.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, check_tol, frozen
from latticedip.crystal.model import SAME_PLACE_A
from latticedip.crystal.neighbours import neighbours_of
from latticedip.errors import InputError, LimitError
from latticedip.ordering.model import Ordering, is_self_conjugate
from latticedip.physics.energy import Energy, dipolar_energy, weighted_couplings
from latticedip.probe import SHELL_TOLERANCE_A
from latticedip.sample import Sample
from latticedip.sums.pairs import pair_tensors
from latticedip.units import EV_PER_MUB_T, MU0_T_A3_PER_MUB

#: Largest number of shells, and largest distance (Å) at which one is looked for.
MOST_SHELLS, MOST_RADIUS_A = 1000, 300.0
#: Pairs of ions looked at in one go.
MOST_PAIRS = 5_000_000


@dataclass(frozen=True, eq=False)
class Shell:
    """Pairs of ions at one distance. pairs_per_ion: neighbours that an ion has on average, counted with occupancy.

    labels: pairs of site labels that occur. energy_eV: per cell.
    """

    distance_A: float
    pairs_per_ion: float
    labels: tuple[str, ...]
    energy_eV: float


@dataclass(frozen=True, eq=False)
class Decomposition:
    """The energy of an ordering in parts. All energies in eV per cell of its crystal; per ion: divide by n_ions.

    energy: the whole. sites: indices of the magnetic sites. names: one for each, "Mn1 (2)" for the second of a label.
    dipolar_eV, shape_eV: Shape (n, n), symmetric: half of what the pair of sublattices i, j has stands at [i, j] and
        half at [j, i]; the sum of all is the part of the energy. applied_eV: Shape (n,), of each sublattice.
    shells: nearest first. beyond_eV: the dipolar energy of all pairs farther apart, to the full sum at N = 0.
    """

    energy: Energy
    sites: tuple[int, ...]
    names: tuple[str, ...]
    labels: tuple[str, ...]
    dipolar_eV: FloatArray
    shape_eV: FloatArray
    applied_eV: FloatArray
    shells: tuple[Shell, ...]
    beyond_eV: float

    def pairs(self, by: str = "site") -> list[dict[str, Any]]:
        """One row per pair of sublattices, or of labels (by="label"), in µeV per ion; they add up to the whole.

        Raises InputError for another ``by``.
        """
        if by not in ("site", "label"):
            raise InputError(f'by must be "site" or "label", got {by!r}.')
        names = self.names if by == "site" else self.labels
        rows: dict[tuple[str, str], dict[str, Any]] = {}
        order = {name: i for i, name in enumerate(dict.fromkeys(names))}
        factor = 1e6 / self.energy.n_ions
        for i, one in enumerate(names):
            for j, two in enumerate(names):
                first, second = sorted((one, two), key=order.__getitem__)
                row = rows.setdefault(
                    (first, second),
                    {"first": first, "second": second, "dipolar_ueV_per_ion": 0.0, "shape_ueV_per_ion": 0.0},
                )
                row["dipolar_ueV_per_ion"] += float(self.dipolar_eV[i, j]) * factor
                row["shape_ueV_per_ion"] += float(self.shape_eV[i, j]) * factor
        return list(rows.values())

    def shell_rows(self) -> list[dict[str, Any]]:
        """One row per shell in µeV per ion, with the sum so far; the last one is all that lies beyond."""
        factor = 1e6 / self.energy.n_ions
        rows: list[dict[str, Any]] = []
        running = 0.0
        for shell in self.shells:
            running += shell.energy_eV
            rows.append(
                {
                    "distance_A": shell.distance_A,
                    "neighbours_per_ion": shell.pairs_per_ion,
                    "pairs": list(shell.labels),
                    "dipolar_ueV_per_ion": shell.energy_eV * factor,
                    "sum_ueV_per_ion": running * factor,
                }
            )
        rows.append(
            {
                "distance_A": None,
                "neighbours_per_ion": None,
                "pairs": [],
                "dipolar_ueV_per_ion": self.beyond_eV * factor,
                "sum_ueV_per_ion": (running + self.beyond_eV) * factor,
            }
        )
        return rows

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        factor = 1e6 / self.energy.n_ions
        return {
            "pairs": self.pairs(),
            "applied": [
                {"sublattice": name, "applied_ueV_per_ion": float(value) * factor}
                for name, value in zip(self.names, self.applied_eV, strict=True)
            ],
            "shells": self.shell_rows(),
            "dipolar_ueV_per_ion": self.energy.dipolar_eV * factor,
            "shape_ueV_per_ion": self.energy.shape_eV * factor,
            "applied_ueV_per_ion": self.energy.applied_eV * factor,
        }


def decompose(
    ordering: Ordering, *, sample: Sample | None = None, shells: int = 10, tol: float = 1e-10
) -> Decomposition:
    """Split the energy of an ordering by pairs of sublattices and by shells of distance.

    sample: shape and applied field; None means N = 0. shells: how many are listed; distances within 0.01 Å are one.
    tol: as `dipole_tensor`.

    Raises InputError for a number of shells that is not whole, below 0 or above 1000, and as `dipolar_energy` does;
    LimitError where the shells reach farther than 300 Å or hold too many pairs.
    """
    if isinstance(shells, bool) or not isinstance(shells, (int, np.integer)) or not 0 <= shells <= MOST_SHELLS:
        raise InputError(f"shells must be a whole number from 0 to {MOST_SHELLS}, got {shells!r}.")
    specimen = Sample() if sample is None else sample
    energy = dipolar_energy(ordering, sample=sample, tol=tol)
    sites = tuple(int(i) for i in np.flatnonzero(ordering.is_magnetic))
    dipolar = np.zeros((len(sites), len(sites)))
    for weight, mean, tensors in weighted_couplings(ordering, check_tol(tol)):
        dipolar -= weight * np.einsum("ia,ijab,jb->ij", mean.conj(), tensors, mean, optimize=True).real
    dipolar = 0.5 * (dipolar + dipolar.T) * EV_PER_MUB_T
    uniform = np.all(ordering.k == np.round(ordering.k), axis=1)
    nets = ordering.mean_components[uniform].real.sum(axis=0)[list(sites)]
    stray = 0.5 * MU0_T_A3_PER_MUB / ordering.crystal.volume_A3 * EV_PER_MUB_T * specimen.demagnetizing_tensor
    found = _shells(ordering, sites, int(shells))
    labels = tuple(ordering.crystal.labels[i] for i in sites)
    return Decomposition(
        energy,
        sites,
        _names(ordering, sites),
        labels,
        frozen(dipolar),
        frozen(nets @ stray @ nets.T),
        frozen(-EV_PER_MUB_T * nets @ specimen.applied_T),
        found,
        energy.dipolar_eV - sum(shell.energy_eV for shell in found),
    )


def _names(ordering: Ordering, sites: tuple[int, ...]) -> tuple[str, ...]:
    """Labels, with the number of the atom (in the order in which signs count) where a label covers several."""
    crystal = ordering.crystal
    names: dict[int, str] = {}
    for label in dict.fromkeys(crystal.labels[i] for i in sites):
        atoms = crystal.find(label)
        for number, site in enumerate(atoms, start=1):
            names[site] = label if len(atoms) == 1 else f"{label} ({number})"
    return tuple(names[i] for i in sites)


def _shells(ordering: Ordering, sites: tuple[int, ...], count: int) -> tuple[Shell, ...]:
    if count == 0:
        return ()
    crystal = ordering.crystal
    density = len(sites) / crystal.volume_A3
    radius = max(3.0, (3 * (count + 12) / (4 * np.pi * density)) ** (1 / 3))
    while True:
        if radius > MOST_RADIUS_A or len(sites) ** 2 / crystal.volume_A3 * 4.2 * radius**3 > MOST_PAIRS:
            raise LimitError(f"{count} shells of magnetic neighbours reach too far. Ask for fewer shells.")
        pairs = _pairs(ordering, sites, radius)
        order = np.argsort(pairs["distance"], kind="stable")
        distance = pairs["distance"][order]
        number = np.cumsum(np.diff(distance, prepend=distance[:1]) > SHELL_TOLERANCE_A)
        # The outermost shell seen may go on beyond the radius.
        if len(number) and number[-1] >= count:
            break
        radius *= 1.3
    found = []
    for shell in range(count):
        chosen = order[number == shell]
        names = dict.fromkeys(str(pairs["label"][i]) for i in chosen)
        found.append(
            Shell(
                float(np.average(pairs["distance"][chosen])),
                float(pairs["weight"][chosen].sum()) / ordering.n_ions,
                tuple(names),
                float(pairs["energy"][chosen].sum()),
            )
        )
    return tuple(found)


def _pairs(ordering: Ordering, sites: tuple[int, ...], radius: float) -> dict[str, np.ndarray]:
    """Every pair of ions within a radius, seen from both ends: distance, energy (half of the pair's), weight, label."""
    crystal = ordering.crystal
    weights = np.where(is_self_conjugate(ordering.k), 0.5, 0.25)
    place = {label: i for i, label in enumerate(dict.fromkeys(crystal.labels[i] for i in sites))}
    columns: dict[str, list[np.ndarray]] = {"distance": [], "energy": [], "weight": [], "label": []}
    for site in sites:
        others, cells, vectors = neighbours_of(crystal, crystal.positions[site], radius, sites)
        away = np.linalg.norm(vectors, axis=1) > SAME_PLACE_A
        others, cells, vectors = others[away], cells[away], vectors[away]
        tensors = pair_tensors(vectors)
        energy = np.zeros(len(others))
        for k, weight, mean in zip(ordering.k, weights, ordering.mean_components, strict=True):
            turned = mean[others] * np.exp(-2j * np.pi * ((cells @ k) % 1.0))[:, None]
            energy -= weight * np.einsum("a,nab,nb->n", mean[site].conj(), tensors, turned).real
        columns["distance"].append(np.linalg.norm(vectors, axis=1))
        columns["energy"].append(energy * EV_PER_MUB_T)
        columns["weight"].append(crystal.occupancies[site] * crystal.occupancies[others])
        own = crystal.labels[site]
        names = [sorted((own, crystal.labels[j]), key=place.__getitem__) for j in others]
        columns["label"].append(np.array([f"{a}–{b}" for a, b in names], dtype=object))
    return {key: np.concatenate(parts) for key, parts in columns.items()}
