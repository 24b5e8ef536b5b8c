"""What may be a slip in a structure or a study, said aloud by ``latticedip show``; nothing here is refused."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import TYPE_CHECKING

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.lattice import label_centrings
from latticedip.crystal.model import SAME_PLACE_A, Crystal
from latticedip.crystal.neighbours import close_pairs, neighbours_of
from latticedip.crystal.symmetry import cells_in_conventional
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.particles import particle_named
from latticedip.physics.boundary import has_net_moment
from latticedip.physics.contact import shell_neighbours
from latticedip.probe import Contact, Probe
from latticedip.sample import Sample
from latticedip.study.start import OFTEN_MAGNETIC

if TYPE_CHECKING:
    from latticedip.study.schema import Study

#: Atoms closer than this (Å) are warned of; with hydrogen the second.
SHORT_A, SHORT_HYDROGEN_A = 1.0, 0.6
#: Pairs of atoms warned of one by one.
MOST_WARNINGS = 10
#: A probe closer than this (Å) to an atom is warned of.
SHORT_PROBE_A = 0.8
#: No ion has a larger moment (µB): ten for the ordered moments of holmium and dysprosium, and a little.
LARGEST_ION_MUB = 11.0


def crystal_warnings(crystal: Crystal) -> list[str]:
    """Atoms that are too close to each other, and partial occupancy that no note of the crystal tells of."""
    warnings = []
    names = _atom_names(crystal)
    for i, j, distance in close_pairs(crystal, SHORT_A):
        hydrogen = {"H", "D"} & {crystal.symbols[i], crystal.symbols[j]}
        shared = crystal.occupancies[i] + crystal.occupancies[j] <= 1 + 1e-6
        if not shared and distance < (SHORT_HYDROGEN_A if hydrogen else SHORT_A):
            warnings.append(
                f"{names[i]} and {names[j]} are only {distance:.3f} Å apart: check the cell and the positions."
            )
    if len(warnings) > MOST_WARNINGS:
        warnings[MOST_WARNINGS:] = [f"and {len(warnings) - MOST_WARNINGS} more pairs of atoms that are too close."]
    partial = [lab for lab, p in zip(crystal.labels, crystal.occupancies, strict=True) if p < 1 - 1e-9]
    if partial and not any("occup" in note for note in crystal.notes):
        warnings.append(f"partly occupied: {', '.join(dict.fromkeys(partial))}; sums take the mean moment.")
    return warnings


def _atom_names(crystal: Crystal) -> dict[int, str]:
    """Each atom by its label and its number among the atoms of the label, as the table of sites counts them."""
    names = {}
    for label in dict.fromkeys(crystal.labels):
        found = crystal.find(label)
        for number, site in enumerate(found, start=1):
            names[site] = label if len(found) == 1 else f"{label} (atom {number})"
    return names


def study_warnings(study: Study, sizes: Mapping[str, float]) -> list[str]:
    """Everything in a study that may be a slip. sizes: largest moment (µB, of the ion) by site label."""
    return [
        *crystal_warnings(study.crystal),
        *_moment_warnings(study, sizes),
        *_cell_warnings(study),
        *_shape_warnings(study),
        *(words for probe in study.probes for words in _probe_warnings(probe, study.crystal)),
        *(words for probe in study.probes for words in _contact_warnings(probe, study)),
    ]


def _moment_warnings(study: Study, sizes: Mapping[str, float]) -> Iterator[str]:
    known = set(sizes)
    known |= {study.crystal.labels[i] for name in study.susceptibility for i in study.crystal.find(name)}
    for ordering in study.orderings:
        known |= {ordering.crystal.labels[i] for i in np.flatnonzero(ordering.is_magnetic)}
    magnetic_elements = {o.crystal.symbols[i] for o in study.orderings for i in np.flatnonzero(o.is_magnetic)}
    for label in dict.fromkeys(study.crystal.labels):
        symbol = study.crystal.symbols[study.crystal.labels.index(label)]
        if symbol in OFTEN_MAGNETIC and label not in known and symbol not in magnetic_elements:
            yield f"{label} holds {symbol}, which often carries a moment, but no ordering gives it one."
    for label, size in sizes.items():
        if size > LARGEST_ION_MUB:
            yield f"{label} has a moment of {size:.6g} µB, more than any ion: check it."


def _cell_warnings(study: Study) -> Iterator[str]:
    """Where k could be meant in another cell of the same lattice: the primitive or the conventional one."""
    waves = [
        ordering.name
        for ordering in study.orderings
        if ordering.reference is None and not all(float(x).is_integer() for x in ordering.k.ravel())
    ]
    if not waves:
        return
    named = f"({', '.join(waves)})"
    centrings, cells = len(label_centrings(study.crystal)), cells_in_conventional(study.crystal)
    if centrings > 1:
        yield (
            f"the cell holds {centrings} primitive cells: k counts in the reciprocal vectors of this cell, not of a "
            f"primitive one {named}."
        )
    elif cells > 1 + 1e-6:
        yield (
            f"the cell is primitive, the conventional one holds {cells:.3g} of it: k counts in the reciprocal vectors "
            f"of this cell, not of the conventional one {named}."
        )


def _shape_warnings(study: Study) -> Iterator[str]:
    if study.sample.shape == Sample().shape:
        with_moment = [ordering.name for ordering in study.orderings if has_net_moment(ordering)]
        if with_moment:
            yield (
                f"net moment without a shape of the sample ({', '.join(with_moment)}): N = 0 is assumed. "
                "State [sample] where the sample has a shape of its own."
            )


def _probe_warnings(probe: Probe, crystal: Crystal) -> Iterator[str]:
    element = particle_named(probe.particle).name.lstrip("0123456789")
    if probe.site is not None:
        others = dict.fromkeys(crystal.symbols[i] for i in crystal.find(probe.site))
        if probe.particle != "muon" and element not in others:
            yield f"{probe.name}: {probe.particle} is no isotope of {', '.join(others)}, the element of {probe.site}."
        return
    sites, _, vectors = neighbours_of(crystal, probe.position, SHORT_PROBE_A)
    if not len(sites):
        return
    label, distance = crystal.labels[sites[0]], float(np.linalg.norm(vectors[0]))
    if distance <= SAME_PLACE_A:
        yield f"{probe.name} sits on an atom of {label}, whose own moment is left out of the field there."
    else:
        yield f"{probe.name} lies only {distance:.3f} Å from {label}."


def _contact_warnings(probe: Probe, study: Study) -> Iterator[str]:
    """Contact terms that mean other neighbours under one ordering than under another, whose ions are others."""
    for term in probe.contact:
        if term.coupling_T_per_muB is None:
            continue
        by_neighbours: dict[str, list[str]] = {}
        for ordering in study.orderings:
            for words in _neighbour_words(probe, study.crystal, ordering, term):
                by_neighbours.setdefault(words, []).append(ordering.name)
        if len(by_neighbours) > 1:
            reach = f"shell {term.shell}" if term.within is None else f"within {term.within:g} Å"
            listed = "; ".join(f"{words} under {', '.join(names)}" for words, names in by_neighbours.items())
            yield f"{probe.name}: the contact term of {reach} couples to different ions: {listed}."


def _neighbour_words(probe: Probe, crystal: Crystal, ordering: Ordering, term: Contact) -> set[str]:
    """The neighbours that a term means at the points of a probe under one ordering, in words; none where refused."""
    points: list[FloatArray] = (
        [probe.position] if probe.site is None else [crystal.positions[i] for i in crystal.find(probe.site)[:1]]
    )
    if ordering.reference is not None:
        points = [carried for point in points for carried in ordering.reference.carry(point)]
    found = set()
    for point in points:
        try:
            sites, _, distances = shell_neighbours(ordering, point, term)
        except InputError:
            # `field` refuses such a term with its reason.
            continue
        counts: dict[tuple[str, str], int] = {}
        for site, distance in zip(sites, distances, strict=True):
            key = ordering.crystal.symbols[site], f"{distance:.2f}"
            counts[key] = counts.get(key, 0) + 1
        found.add(", ".join(f"{n} {symbol} at {away} Å" for (symbol, away), n in counts.items()))
    return found
