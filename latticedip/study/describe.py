"""What was understood of a structure file or a study, in plain values: the content of ``latticedip show``."""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping, Sequence
from fractions import Fraction
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.lattice import label_centrings
from latticedip.crystal.model import Crystal
from latticedip.crystal.neighbours import neighbours_of
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.ordering.patterns import triple
from latticedip.particles import particle_named
from latticedip.physics.boundary import boundary_words
from latticedip.physics.contact import shell_neighbours
from latticedip.physics.spread import probe_words, spread_words
from latticedip.probe import SHELL_TOLERANCE_A, Contact, Probe
from latticedip.study.documents import NO_SUM, document
from latticedip.study.start import formula
from latticedip.study.warnings import crystal_warnings, study_warnings
from latticedip.units import DIPOLE_EV_A3_PER_MUB2, K_PER_EV

if TYPE_CHECKING:
    from latticedip.study.schema import Study

#: Cells shown for one ordering at most, and along one axis where k has no short period.
MOST_CELLS = 16
CELLS_ALONG = 8
#: What the cells listed are where the pattern has no period that short.
FIRST_CELLS = "the first cells along each axis; the pattern goes on"
#: Shells of magnetic neighbours listed for one site label.
SHELLS = 3
#: Neighbours are looked for up to this distance (Å).
FARTHEST_A = 60.0


def describe_study(study: Study, *, orderings: Sequence[str] = (), probes: Sequence[str] = ()) -> dict[str, Any]:
    """The document of `show` for a study. orderings, probes: the names that were asked for, recorded only."""
    own = [ordering for ordering in study.orderings if ordering.reference is None]
    sizes = dict(moment_sizes(own))
    for name, size in study.moments.items():
        for site in study.crystal.find(name):
            sizes.setdefault(study.crystal.labels[site], float(size))
    where = study.crystal
    if not sizes and study.orderings:
        where, sizes = study.orderings[0].crystal, moment_sizes(study.orderings[:1])
    boundaries = [boundary_words(ordering, study.sample) for ordering in study.orderings]
    return document(
        "show",
        files=study.files,
        options={"orderings": list(orderings) or None, "probes": list(probes) or None},
        boundary="; ".join(dict.fromkeys(boundaries)) or NO_SUM,
        results={
            "title": study.title,
            **_structure(study.crystal),
            "moments_muB": {name: float(size) for name, size in study.moments.items()},
            "moments_su_muB": dict(study.moments_su),
            "orderings": [describe_ordering(ordering) for ordering in study.orderings],
            "neighbours": magnetic_neighbours(where, sizes),
            "moment_spread": {name: spread_words(spread) for name, spread in study.moment_spread.items()},
            "probes": _with_weights(
                study,
                [describe_probe(probe, study.crystal, set(sizes), own[0] if own else None) for probe in study.probes],
            ),
            "sample": study.sample.to_dict(),
            "susceptibility": {name: chi.words() for name, chi in study.susceptibility.items()},
            "abundances": dict(study.abundances),
            "warnings": study_warnings(study, sizes),
        },
    )


def describe_structure(path: Path, found: Crystal | Ordering) -> dict[str, Any]:
    """The document of `show` for a structure file, with its moments where it has them."""
    orderings = [found] if isinstance(found, Ordering) else []
    crystal = found.crystal if isinstance(found, Ordering) else found
    sizes = moment_sizes(orderings)
    return document(
        "show",
        files={"structure": path},
        options={},
        boundary="; ".join(boundary_words(ordering, None) for ordering in orderings) or NO_SUM,
        results={
            "title": f"{path.name} ({formula(crystal)})",
            **_structure(crystal),
            "moments_muB": {},
            "moments_su_muB": {},
            "orderings": [describe_ordering(ordering) for ordering in orderings],
            "neighbours": magnetic_neighbours(crystal, sizes),
            "moment_spread": {},
            "probes": [],
            "sample": None,
            "susceptibility": {},
            "abundances": {},
            "warnings": crystal_warnings(crystal),
        },
    )


# --- the crystal ----------------------------------------------------------------------------------------


def _structure(crystal: Crystal) -> dict[str, Any]:
    lengths = np.linalg.norm(crystal.cell, axis=1)
    unit = crystal.axes_unit
    cosines = [unit[1] @ unit[2], unit[2] @ unit[0], unit[0] @ unit[1]]
    operations = operations_of(crystal)
    return {
        "crystal": {
            "name": crystal.name,
            "cell_A": crystal.cell.tolist(),
            "lengths_A": lengths.tolist(),
            "angles_deg": [float(np.degrees(np.arccos(np.clip(c, -1, 1)))) for c in cosines],
            "volume_A3": crystal.volume_A3,
            "periodic": list(crystal.pbc),
            "symmetry_operations": len(operations.rotations),
            "centrings": len(label_centrings(crystal)),
            "atoms": crystal.n_sites,
            "notes": list(crystal.notes),
        },
        "sites": _sites(crystal),
    }


def _sites(crystal: Crystal) -> list[dict[str, Any]]:
    """One entry per label, its atoms in the order in which signs and amplitudes count."""
    entries = []
    for label in dict.fromkeys(crystal.labels):
        indices = crystal.find(label)
        occupancies = sorted({round(float(crystal.occupancies[i]), 9) for i in indices})
        entries.append(
            {
                "label": label,
                "elements": list(dict.fromkeys(crystal.symbols[i] for i in indices)),
                "multiplicity": len(indices),
                "occupancies": occupancies,
                "positions": [crystal.positions[i].tolist() for i in indices],
                "positions_su": [[None if np.isnan(x) else float(x) for x in crystal.position_su[i]] for i in indices],
            }
        )
    return entries


# --- orderings ------------------------------------------------------------------------------------------


def moment_sizes(orderings: Sequence[Ordering]) -> dict[str, float]:
    """Largest moment (µB, of the ion, over all cells) by site label; sites without a moment are left out."""
    sizes: dict[str, float] = {}
    for ordering in orderings:
        for site in np.flatnonzero(ordering.is_magnetic):
            # Real and imaginary part span an ellipse; its larger half axis is the largest moment. Several k add up.
            parts = np.stack([ordering.components[:, site].real, ordering.components[:, site].imag], axis=1)
            size = float(np.linalg.norm(parts, ord=2, axis=(1, 2)).sum())
            label = ordering.crystal.labels[site]
            sizes[label] = max(size, sizes.get(label, 0.0))
    return sizes


def first_cells(ordering: Ordering) -> tuple[list[tuple[int, ...]], str]:
    """Cells that show how an ordering goes on, and in words which they are."""
    periods = [_period(ordering.k[:, axis]) for axis in range(3)]
    whole = math.prod(p or 0 for p in periods)
    if 0 < whole <= MOST_CELLS:
        every: list[tuple[int, ...]] = list(itertools.product(*(range(p or 1) for p in periods)))
        return every, "the cell" if whole == 1 else "all cells of one magnetic period"
    cells: list[tuple[int, ...]] = [(0, 0, 0)]
    for axis, period in enumerate(periods):
        for step in range(1, min(period or CELLS_ALONG, CELLS_ALONG)):
            cells.append((step * (axis == 0), step * (axis == 1), step * (axis == 2)))
    return cells, FIRST_CELLS


def _period(coordinates: FloatArray) -> int | None:
    """The number of cells after which all phases along one axis repeat; None where that is not below 13."""
    period = 1
    for value in coordinates:
        fraction = Fraction(float(value)).limit_denominator(12)
        if abs(float(fraction) - value) > 1e-9:
            return None
        period = math.lcm(period, fraction.denominator)
    return period if period <= 12 else None


def describe_ordering(ordering: Ordering) -> dict[str, Any]:
    """An ordering with every moment over its first cells, along the axes of its own cell."""
    crystal = ordering.crystal
    cells, words = first_cells(ordering)
    moments = ordering.moments(cells)
    listed = [site for label in dict.fromkeys(crystal.labels) for site in crystal.find(label)]
    along = _common_direction(moments[:, listed])
    covariance = ordering.moments_covariance(cells)
    atoms = []
    for label in dict.fromkeys(crystal.labels):
        for number, site in enumerate(crystal.find(label), start=1):
            if not ordering.is_magnetic[site]:
                continue
            of_site = moments[:, site]
            atoms.append(
                {
                    "label": label,
                    "atom": number,
                    "position": crystal.positions[site].tolist(),
                    "moments_abc_muB": crystal.to_crystal_axes(of_site).tolist(),
                    "sizes_muB": np.linalg.norm(of_site, axis=1).tolist(),
                    "along_muB": None if along is None else (of_site @ along).tolist(),
                    "moment_su_muB": None
                    if np.all(np.isnan(ordering.moment_su[site]))
                    else [None if np.isnan(x) else float(x) for x in ordering.moment_su[site]],
                    "along_su_muB": None if along is None else _along_su(ordering, site, along),
                    **_cell_by_cell(crystal, covariance[:, site], along),
                }
            )
    return {
        "ordering": ordering.name,
        "k": ordering.k.tolist(),
        "ions_per_cell": ordering.n_ions,
        "net_moment_muB_per_cell": ordering.net_moment.tolist(),
        "own_cell": None if ordering.reference is None else _own_cell(ordering),
        "cells": [list(cell) for cell in cells],
        "cells_are": words,
        "direction_abc": None if along is None else crystal.to_crystal_axes(along).tolist(),
        "atoms": atoms,
        "notes": list(ordering.notes),
    }


def _along_su(ordering: Ordering, site: int, along: FloatArray) -> float | None:
    """Standard uncertainty of a moment along a Cartesian direction, of the amplitude where it is that of a wave."""
    for group in ordering.size_su:
        if site in group.sites:
            return float(group.relative * np.linalg.norm(np.abs(ordering.components[:, site] @ along)))
    su = ordering.moment_su[site]
    if np.all(np.isnan(su)):
        return None
    return float(np.linalg.norm(np.nan_to_num(su) * (ordering.crystal.axes_unit @ along)))


def _cell_by_cell(crystal: Crystal, covariance: FloatArray, along: FloatArray | None) -> dict[str, Any]:
    """Standard uncertainties of the moment of an atom in every cell, where those of its amplitudes are stated.

    covariance: Shape (n_cells, 3, 3) in µB², NaN where none is stated; the document then has no such entries.
    """
    if np.any(np.isnan(covariance)):
        return {}

    def su(directions: FloatArray) -> FloatArray:
        return np.asarray(np.sqrt(np.maximum(0.0, np.einsum("ba,cbd,da->ca", directions, covariance, directions))))

    to_axes = np.asarray(np.linalg.inv(crystal.axes_unit), dtype=np.float64)
    found: dict[str, Any] = {"moments_su_abc_muB": su(to_axes).tolist()}
    if along is not None:
        found["moments_su_along_muB"] = su(along[:, None])[:, 0].tolist()
    if len(covariance) == 1:
        found["moment_su_muB"] = found["moments_su_abc_muB"][0]
        found["along_su_muB"] = None if along is None else found["moments_su_along_muB"][0]
    return found


def _own_cell(ordering: Ordering) -> dict[str, Any]:
    return {
        "lengths_A": np.linalg.norm(ordering.crystal.cell, axis=1).tolist(),
        "atoms": ordering.crystal.n_sites,
        "how": "" if ordering.reference is None else ordering.reference.how,
    }


def _common_direction(moments: FloatArray) -> FloatArray | None:
    """The unit vector that all moments (cells, atoms, 3) lie along; None where they are not collinear.

    Of the largest moments the first one counts as +.
    """
    flat = moments.reshape(-1, 3)
    sizes = np.linalg.norm(flat, axis=1)
    largest = float(sizes.max(initial=0.0))
    if largest == 0.0:
        return None
    first = int(np.argmax(sizes > 0.999 * largest))
    direction = flat[first] / sizes[first]
    across = flat - np.outer(flat @ direction, direction)
    return direction if float(np.abs(across).max()) <= 1e-6 * largest else None


# --- neighbours -----------------------------------------------------------------------------------------


def magnetic_neighbours(crystal: Crystal, sizes_muB: Mapping[str, float]) -> list[dict[str, Any]]:
    """The nearest shells of magnetic neighbours of each magnetic label, with the dipolar scale µ0 m1 m2/(4π r³).

    Counted round the first atom of the label. sizes_muB: moment of the ion by label.
    """
    sites = tuple(i for i, label in enumerate(crystal.labels) if label in sizes_muB)
    rows = []
    for label in dict.fromkeys(crystal.labels[i] for i in sites):
        home = crystal.find(label)[0]
        for partner, distance, count in _shells(crystal, crystal.positions[home], sites)[:SHELLS]:
            energy = DIPOLE_EV_A3_PER_MUB2 * sizes_muB[label] * sizes_muB[partner] / distance**3
            rows.append(
                {
                    "site": label,
                    "neighbour": partner,
                    "count": count,
                    "distance_A": distance,
                    "dipolar_scale_ueV": energy * 1e6,
                    "dipolar_scale_K": energy * K_PER_EV,
                }
            )
    return rows


def _shells(crystal: Crystal, point: FloatArray, sites: tuple[int, ...]) -> list[tuple[str, float, int]]:
    """Label, distance (Å) and number of the nearest atoms, the point itself left out; whole shells only."""
    if not sites:
        return []
    radius = 5.0
    while True:
        found, _, vectors = neighbours_of(crystal, point, radius, sites)
        distances = np.linalg.norm(vectors, axis=1)
        shells: list[tuple[str, float, int]] = []
        for site, distance in zip(found, distances, strict=True):
            if distance < 1e-3 or distance > radius - SHELL_TOLERANCE_A:
                continue
            label = crystal.labels[site]
            place = next(
                (i for i, s in enumerate(shells) if s[0] == label and distance - s[1] < SHELL_TOLERANCE_A), None
            )
            if place is None:
                shells.append((label, float(distance), 1))
            else:
                shells[place] = (label, shells[place][1], shells[place][2] + 1)
        if len(shells) >= SHELLS or radius > FARTHEST_A or not any(crystal.pbc):
            return shells
        radius *= 1.6


# --- probes ---------------------------------------------------------------------------------------------


def describe_probe(
    probe: Probe, crystal: Crystal, magnetic: set[str], ordering: Ordering | None = None
) -> dict[str, Any]:
    """A probe, what is nearest to it (for a site: to its first atom) and which ions its contact terms couple to.

    ordering: one that lives in the crystal, whose ions the contact terms are shown for; None: they are not looked up.
    """
    sites = () if probe.site is None else crystal.find(probe.site)
    point = probe.position if probe.site is None else crystal.positions[sites[0]]
    everything = _shells(crystal, point, tuple(range(crystal.n_sites)))
    ions = _shells(crystal, point, tuple(i for i, label in enumerate(crystal.labels) if label in magnetic))
    return {
        "probe": probe.name,
        "particle": probe.particle,
        "MHz_per_T": particle_named(probe.particle).MHz_per_T,
        "site": probe.site,
        "position": None if probe.position is None else probe.position.tolist(),
        "points": max(len(sites), 1),
        "nearest_atom": everything[0][0] if everything else None,
        "nearest_atom_A": everything[0][1] if everything else None,
        "nearest_ion": ions[0][0] if ions else None,
        "nearest_ion_A": ions[0][1] if ions else None,
        "contact": [_contact(term, point, ordering) for term in probe.contact],
        "position_su": None if probe.position_su is None else probe.position_su.tolist(),
        "spread": probe.spread.tolist() if isinstance(probe.spread, np.ndarray) else probe.spread,
        "motion": [words.removeprefix(f"{probe.name}: ") for words in _motion(probe)],
    }


def _with_weights(study: Study, probes: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Probes with what is said of those that are one position of several."""
    shares = {
        member: (whole, float(weight))
        for whole in study.weighted
        for member, weight in zip(whole.members, whole.weights, strict=True)
    }
    for probe in probes:
        whole, weight = shares.get(probe["probe"], (None, None))
        probe["weight"] = weight
        if whole is not None:
            words = f"one of {len(whole.members)} positions of {whole.name}, weight {weight:.4g}"
            probe["motion"] = [words, *probe["motion"]]
    return probes


def _motion(probe: Probe) -> list[str]:
    """Spread, displaced neighbours and uncertainty of a probe in words."""
    words = probe_words(probe.name, probe.spread, probe.displaced)
    if probe.position_su is not None:
        words.append(f"{probe.name}: position uncertain by {triple(probe.position_su)}, fractional")
    return words


def _contact(term: Contact, point: FloatArray, ordering: Ordering | None) -> dict[str, Any]:
    plain: dict[str, Any] = {
        "coupling_T_per_muB": None if term.coupling_T_per_muB is None else term.coupling_T_per_muB.tolist(),
        "shell": term.shell,
        "within_A": term.within,
        "moment_density_muB_per_A3": None
        if term.moment_density_muB_per_A3 is None
        else term.moment_density_muB_per_A3.tolist(),
        "neighbours": None,
    }
    if term.coupling_T_per_muB is None or ordering is None:
        return plain
    try:
        sites, _, distances = shell_neighbours(ordering, point, term)
    except InputError as error:
        return {**plain, "refused": str(error)}
    rows: dict[tuple[str, float], int] = {}
    for site, distance in zip(sites, distances, strict=True):
        key = (ordering.crystal.labels[site], round(float(distance), 3))
        rows[key] = rows.get(key, 0) + 1
    plain["neighbours"] = [{"site": site, "distance_A": r, "count": count} for (site, r), count in rows.items()]
    return plain


# --- rows -----------------------------------------------------------------------------------------------


def show_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a show document for CSV: every moment in every cell listed, or the atoms where there is none."""
    moments = [
        {
            "ordering": entry["ordering"],
            "k": entry["k"],
            "site": atom["label"],
            "atom": atom["atom"],
            "position": atom["position"],
            "cell": cell,
            "moment_abc_muB": atom["moments_abc_muB"][i],
            "moment_size_muB": atom["sizes_muB"][i],
        }
        for entry in doc["orderings"]
        for atom in entry["atoms"]
        for i, cell in enumerate(entry["cells"])
    ]
    return moments or [
        {"site": site["label"], "element": ", ".join(site["elements"]), "atom": number, "position": position}
        for site in doc["sites"]
        for number, position in enumerate(site["positions"], start=1)
    ]
