"""Dipolar modes on screen: the lowest, the minima over k, and the levels at the special points of the path."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from latticedip.report.field import coordinates, k_text
from latticedip.report.tables import Column, bullets, decimals_for, direction, fixed, heading, pairs, short, table

#: Atoms whose components are listed.
MOST_ATOMS = 48


def modes_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the modes of a study as tables."""
    lowest, bound = document["lowest"], document["bound"]
    sizes = ", ".join(f"{name} {short(size)}" for name, size in document["sizes_muB"].items())
    digits = _digits(document)
    kelvin = decimals_for([lowest["energy_K_per_ion"]], significant=5)
    energy = (
        f"{fixed(lowest['energy_ueV_per_ion'], digits)} µeV per ion, {fixed(lowest['energy_K_per_ion'], kelvin)} K: "
        "a lower bound for every ordering"
    )
    lead = [
        ("moments", f"{sizes} µB, {_ions(document['ions_per_cell'])} per cell"),
        ("boundary", document["boundary"]),
        ("lowest mode", energy),
        ("at", where_text(lowest)),
        ("equal moments", _reached(lowest)),
        ("degeneracy", _degeneracy(lowest)),
    ]
    if bound is not None:
        lead.append(
            (
                "better bound",
                f"{fixed(bound['energy_ueV_per_ion'], digits)} µeV per ion, {where_text(bound)}: the sites weighted "
                "(Lyons and Kaplan 1960), since they are not equivalent",
            )
        )
    parts = [heading(document["title"]), "", pairs(lead, width=width), ""]
    parts += ["Lowest modes: minima over k", "", _minima(document, width), ""]
    parts += ["Moments of the lowest mode", "", _atoms(lowest, width), ""]
    if document["bands"] is not None:
        parts += ["Levels at the special points of the path", "", _levels(document, width), ""]
    return "\n".join([*parts, bullets(document["notes"], width=width)])


def where_text(mode: Mapping[str, Any]) -> str:
    """The k of a mode in words."""
    if mode["k"] is None:
        along = direction(mode["direction_cart"])
        return f"k → 0 along {along} (Cartesian), approached only: k = 0 itself pays for its net moment"
    return f"k = {k_text(mode['k'])}"


def _reached(mode: Mapping[str, Any]) -> str:
    if mode["equal_moments"] and mode["k"] is None:
        return "yes, in the limit of ever longer waves or larger domains"
    if mode["equal_moments"]:
        several = mode["k"] is not None and len(mode["k"]) > 1
        return "yes, by several arms of the star together" if several else "yes: an ordering reaches the bound"
    return "no ordering with moments of these sizes was found that reaches it"


def _ions(count: float) -> str:
    return f"{short(count)} {'ion' if count == 1 else 'ions'}"


def _degeneracy(mode: Mapping[str, Any]) -> str:
    arms = len(mode["star"])
    words = f"{mode['degeneracy']} {'mode' if mode['degeneracy'] == 1 else 'modes'}"
    return words if mode["k"] is None or arms == 1 else f"{words} at each of {arms} arms of the star (±k one arm)"


def _digits(document: Mapping[str, Any]) -> int:
    values = [mode["energy_ueV_per_ion"] for mode in document["modes"]]
    error = document["lowest"]["error_bound_ueV_per_ion"]
    return min(
        decimals_for(values, significant=15, error=error), max(3, decimals_for(values, significant=5, error=error))
    )


def _minima(document: Mapping[str, Any], width: int | None) -> str:
    columns = [
        Column("mode"),
        Column("k", words=True),
        Column("energy", "µeV/ion"),
        Column("above\nlowest", "µeV/ion"),
        Column("modes"),
        Column("arms"),
        Column("equal\nmoments", words=True),
    ]
    digits = _digits(document)
    first = document["lowest"]["energy_ueV_per_ion"]
    cells = [
        [
            str(number),
            "k → 0, approached only" if mode["k"] is None else k_text(mode["k"]),
            fixed(mode["energy_ueV_per_ion"], digits),
            fixed(mode["energy_ueV_per_ion"] - first, digits),
            str(mode["degeneracy"]),
            str(len(mode["star"])),
            "yes" if mode["equal_moments"] else "no",
        ]
        for number, mode in enumerate(document["modes"], start=1)
    ]
    return table(columns, cells, width=width, keys=2)


def _atoms(mode: Mapping[str, Any], width: int | None) -> str:
    """Components of a mode: cosine alone where k and −k are the same vector."""
    atoms = mode["atoms"][:MOST_ATOMS]
    waves = any(any(atom["sine_abc_muB"]) for atom in atoms)
    several = mode["k"] is not None and len(mode["k"]) > 1
    columns = [Column("site", words=True), Column("atom"), Column("position", words=True)]
    columns += [Column("k", words=True)] if several else []
    columns += [Column(f"{'cos ' if waves else ''}{axis}", "µB") for axis in "abc"]
    columns += [Column(f"sin {axis}", "µB") for axis in "abc"] if waves else []
    cells = []
    for atom in atoms:
        line = [atom["label"], str(atom["atom"]), coordinates(atom["position"])]
        line += [k_text([atom["k"]])] if several else []
        values = atom["cosine_abc_muB"] + (atom["sine_abc_muB"] if waves else [])
        cells.append([*line, *(fixed(value, 4) for value in values)])
    if len(mode["atoms"]) > MOST_ATOMS:
        cells.append([f"and {len(mode['atoms']) - MOST_ATOMS} more", *([""] * (len(columns) - 1))])
    return table(columns, cells, width=width, keys=2)


def _levels(document: Mapping[str, Any], width: int | None) -> str:
    """Lowest and highest energy at the special points, in the order of the path; the limit k → 0 along it."""
    bands = document["bands"]
    distance = np.array(bands["distance_per_A"])
    energies = np.array(bands["energies_ueV_per_ion"])
    k = np.array(bands["k"])
    columns = [
        Column("point", words=True),
        Column("k", words=True),
        Column("lowest", "µeV/ion"),
        Column("highest", "µeV/ion"),
        Column("", words=True),
    ]
    digits = decimals_for([float(np.abs(energies).max())], significant=6)
    cells = []
    for name, point in bands["special_points"].items():
        # One point may be reached along several segments, and then k → 0 differs.
        levels: dict[tuple[str, str], list[str]] = {}
        for i in np.flatnonzero(np.abs(k - np.array(point)).max(axis=1) < 1e-9):
            ends = fixed(float(energies[i, 0]), digits), fixed(float(energies[i, -1]), digits)
            levels.setdefault(ends, [])
            if bands["limit_k_to_0"][i]:
                levels[ends].append(_towards(bands, distance, int(i)))
        for (low, high), limits in levels.items():
            towards = ", ".join(dict.fromkeys(limits))
            cells.append([name, k_text([point]), low, high, f"limit along the path to {towards}" if limits else ""])
    return table(columns, cells, width=width, keys=1)


def _towards(bands: Mapping[str, Any], distance: np.ndarray, i: int) -> str:
    """The special point at the other end of the segment that a limit k → 0 belongs to."""
    ticks: Sequence[Mapping[str, Any]] = bands["ticks"]
    at = float(distance[i])
    # Two rows stand at the same distance where a segment ends and the next begins: the first belongs to the one before.
    before = i > 0 and distance[i - 1] < at - 1e-12
    places = [tick["distance_per_A"] for tick in ticks]
    here = int(np.argmin(np.abs(np.array(places) - at)))
    other = here - 1 if before else here + 1
    if not 0 <= other < len(ticks):
        return "its end"
    names = ticks[other]["name"].split("|")
    return str(names[-1] if before else names[0])
