"""Probes by rule: a [[probe]] that stands for as many places as the crystal at hand has of them.

Rules are short sentences, because a template says them of crystals nobody has looked at yet:

"every F site"                             every site label of that element, each with all its atoms
"every symmetry-distinct site"             one site label of each class of atoms that symmetry makes equal
"points at least 1 Å from any atom"        the points of a grid over the cell that keep this distance
"""

from __future__ import annotations

import re
from typing import TYPE_CHECKING

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.crystal.neighbours import image_shifts
from latticedip.crystal.symmetry import find_operations
from latticedip.errors import LimitError
from latticedip.observables.isotopes import isotopes_by_element
from latticedip.probe import Probe
from latticedip.study.keys import Key
from latticedip.study.motion import RULE_MOTION_KEYS, read_motion

if TYPE_CHECKING:
    from scipy.spatial import cKDTree

RULE_KEYS = ("rule", "name", "particle", "spacing_A", *RULE_MOTION_KEYS)
#: Points that one rule may make in one crystal.
MOST_POINTS = 20_000
#: Grid points that are looked at to find them.
MOST_GRID_POINTS = 10_000_000
#: Grid points tested at one time.
BLOCK = 100_000

_ELEMENT = re.compile(r"every ([A-Z][a-z]?) site")
_DISTINCT = "every symmetry-distinct site"
_POINTS = re.compile(r"points at least (\d+(?:\.\d+)?) (?:Å|A) from any atom")
_RULES = '"every F site" (any element), "every symmetry-distinct site" or "points at least 1 Å from any atom"'


def check_rule(table: dict[str, Key]) -> str:
    """The rule of a [[probe]] table as written; raises StudyError for one that is none, or a key without meaning."""
    rule = table["rule"].text(_RULES)
    points = _POINTS.fullmatch(rule)
    if rule != _DISTINCT and not _ELEMENT.fullmatch(rule) and points is None:
        raise table["rule"].expected(_RULES)
    if "spacing_A" in table:
        if points is None:
            raise table["spacing_A"].refuse("is the spacing of points, and this rule makes none. Leave it out.")
        table["spacing_A"].number("the largest spacing of the points in Å, larger than 0", above=0.0)
    for key, what in (("name", "a name in one line"), ("particle", '"muon" or an isotope such as "19F"')):
        if key in table:
            table[key].text(what)
    return rule


def probes_by_rule(item: Key, table: dict[str, Key], crystal: Crystal) -> list[Probe]:
    """The probes that a rule makes in a crystal, in the order of its atoms or by fractional x, y, z.

    A `name` goes in front of the label or the number of each. Without `particle` a site has the most abundant
    isotope with a moment of its element (a site without any is left out), and points have muons. A spread and displaced
    neighbours are those of each.

    Raises StudyError for a rule that is none, a rule that finds no place, and more than 20,000 points.
    """
    rule = check_rule(table)
    name = table["name"].value if "name" in table else ""
    particle = table["particle"].value if "particle" in table else None
    points = _POINTS.fullmatch(rule)
    motion = read_motion(item, table, crystal)
    with table["particle" if particle is not None else "rule"].located():
        if points is not None:
            spacing = float(table["spacing_A"].value) if "spacing_A" in table else 1.0
            places = far_points(crystal, float(points[1]), spacing)
            digits = len(str(len(places)))
            kind = particle or "muon"
            found = [
                Probe(position=place, particle=kind, name=f"{name or kind} {number:0{digits}d}", **motion)
                for number, place in enumerate(places, start=1)
            ]
        else:
            found = []
            for label, element in _labels(rule, crystal):
                kind = particle or _usual_isotope(crystal, element)
                if kind:
                    found.append(Probe(site=label, particle=kind, name=f"{name or kind} at {label}", **motion))
    if not found:
        raise table["rule"].refuse(f"{rule!r} finds no place in this structure.")
    return found


def _labels(rule: str, crystal: Crystal) -> list[tuple[str, str]]:
    """Site labels that a rule means, with their elements."""
    element = _ELEMENT.fullmatch(rule)
    chosen = list(range(crystal.n_sites))
    if element is None:
        _, first = find_operations(crystal)
        chosen = sorted(set(first))
    labels: dict[str, str] = {}
    for i in chosen:
        if element is None or crystal.symbols[i] == element[1]:
            labels.setdefault(crystal.labels[i], crystal.symbols[i])
    return list(labels.items())


def _usual_isotope(crystal: Crystal, element: str) -> str:
    """The most abundant isotope of an element that has a moment; empty where there is none."""
    shares = isotopes_by_element(crystal).get(element, [])
    return max(shares, key=lambda entry: entry[1])[0].name if shares else ""


def far_points(crystal: Crystal, distance_A: float, spacing_A: float) -> FloatArray:
    """Shape (n, 3) fractional. Points of a grid over the cell that keep a distance from every atom, by x, y, z.

    spacing_A: the largest step of the grid along a, b and c.

    Raises LimitError for more than 10 million grid points or 20,000 results, before memory is taken for them.
    """
    lengths = np.linalg.norm(crystal.cell, axis=1)
    counts = np.maximum(np.ceil(lengths / spacing_A - 1e-9), 1.0)
    total = float(np.prod(counts))
    if total > MOST_GRID_POINTS:
        raise LimitError(
            f"points every {spacing_A:g} Å would make {total:.3g} points in this cell; at most {MOST_GRID_POINTS} are "
            "tried. Use a larger spacing_A."
        )
    shape = tuple(int(n) for n in counts)
    tree = _atom_images(crystal, distance_A) if crystal.n_sites else None
    kept: list[FloatArray] = []
    n_kept = 0
    for start in range(0, int(total), BLOCK):
        index = np.arange(start, min(int(total), start + BLOCK))
        points = np.stack(np.unravel_index(index, shape), axis=1) / counts
        if tree is not None:
            nearest, _ = tree.query(points @ crystal.cell, distance_upper_bound=distance_A)
            points = points[np.isinf(nearest)]
        kept.append(points)
        n_kept += len(points)
        if n_kept > MOST_POINTS:
            raise LimitError(
                f"points every {spacing_A:g} Å at least {distance_A:g} Å from any atom are more than {MOST_POINTS} in "
                "this cell. Use a larger spacing_A."
            )
    return np.concatenate(kept)


def _atom_images(crystal: Crystal, distance_A: float) -> cKDTree:
    from scipy.spatial import cKDTree

    home = crystal.positions.copy()
    periodic = np.asarray(crystal.pbc)
    home[:, periodic] %= 1.0
    shifts = image_shifts(crystal, distance_A)
    return cKDTree((home[None] + shifts[:, None]).reshape(-1, 3) @ crystal.cell)
