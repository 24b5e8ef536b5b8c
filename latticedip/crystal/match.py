"""Laying one structure over another: by a stated transformation, or by matching lattices and sites.

Words used here and nowhere renamed:

parent       the Crystal in whose cell positions are given
child        another Crystal of the same structure, in a cell and a Cartesian frame of its own
P, p         x_parent = P x_child + p in fractional coordinates; columns of P are child vectors in parent vectors
rotation     the rigid turn from the child's Cartesian frame into the parent's: v_parent = rotation @ v_child
strain       largest relative change of a length from the child, turned, to the parent

Only proper rotations are used, so a structure is never exchanged for its mirror image.
"""

from __future__ import annotations

import itertools
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.lattice import (
    exact_translations,
    primitive_basis,
    reduced_basis,
    translation_classes,
    vectors_between,
)
from latticedip.crystal.model import Crystal, site_order
from latticedip.crystal.symmetry import find_operations
from latticedip.errors import InputError, LimitError

#: Lengths of the two lattices may differ by this fraction; the first value is tried first.
STRAINS = (1e-3, 0.02)
#: After the strain is taken out, each child site must lie this close (Å) to a parent site of its element.
SITE_TOLERANCE_A = 0.2
#: Matchings whose misfit (Å) differs by less than this are equally good: they differ by a symmetry of the parent.
EQUAL_MISFIT_A = 0.002
#: Distance (Å) within which two parent atoms count as translation copies of one another.
TRANSLATION_TOLERANCE_A = 0.01
#: Distance (Å) within which a motion must map the atoms of the parent onto each other to count as a symmetry.
SYMMETRY_MOTION_A = 0.05
#: Pairs of lattice vectors tried before the search is given up.
MAX_PAIRS = 200_000


@dataclass(frozen=True, eq=False)
class Match:
    """One way in which a child structure lies over its parent.

    P: Shape (3, 3) float. p: Shape (3,) float. rotation: Shape (3, 3) float.
    strain: largest relative change of a length. displacement_A: largest distance of a child site from its partner.
    misfit_A: root-mean-square distance plus strain times the edge of a cube that holds one atom.
    partners: Shape (n_child,) int. The parent site each child site lies on.
    cells: Shape (n_child, 3) float, whole numbers. The parent cell that partner is in.
    """

    P: FloatArray
    p: FloatArray
    rotation: FloatArray
    strain: float
    displacement_A: float
    misfit_A: float
    partners: np.ndarray
    cells: FloatArray

    @cached_property
    def angle_deg(self) -> float:
        """The angle of the rotation in degrees."""
        # The sine part keeps small angles exact where the cosine alone would lose half the digits.
        skew = self.rotation - self.rotation.T
        sine = float(np.sqrt((skew**2).sum() / 8))
        return float(np.degrees(np.arctan2(sine, (np.trace(self.rotation) - 1) / 2)))


def translations_of(crystal: Crystal) -> FloatArray:
    """Shape (n, 3) float. All pure translations of a structure (elements and occupancies alike), zero first, exact.

    Those the file states count too, where they are more than a search finds.
    """
    found, _ = find_operations(crystal, TRANSLATION_TOLERANCE_A)
    sets = [operations.centrings() for operations in (found, crystal.operations) if operations is not None]
    return exact_translations(max(sets, key=len, default=np.zeros((1, 3))))


def check_transform(parent: Crystal, child: Crystal, P: Any, p: Any) -> Match:
    """The match that a stated transformation makes.

    Raises InputError where the child cell differs from P times the parent cell by more than 2 % in a length,
    where the turn would mirror the structure, where the contents disagree, or where a site has no partner within 0.2 Å.
    """
    P = np.asarray(P, dtype=float)
    if abs(np.linalg.det(P)) < 1e-6:
        raise InputError("its matrix has no inverse.")
    _check_elements(parent, child)
    turn = _turn(child.cell, P.T @ parent.cell)
    if turn.strain > STRAINS[-1]:
        raise InputError(
            f"its cell differs from that of the parent, so transformed, by {100 * turn.strain:.3g} % in a length "
            f"(at most {100 * STRAINS[-1]:g} % is taken)."
        )
    if not turn.proper:
        raise InputError("it turns a right-handed cell into a left-handed one.")
    _check_counts(parent, child, P)
    match = _lay_over(parent, child, P, np.asarray(p, dtype=float), turn)
    complaint = _site_complaint(parent, child, match)
    if complaint:
        raise InputError(complaint)
    return match


def match_structures(parent: Crystal, child: Crystal) -> list[Match]:
    """All equally good ways of laying a child over its parent, the smallest rotation first.

    Lattices agree within 2 % in every length, sites of each element within 0.2 Å, and equal volumes of both hold as
    many atoms of each element that the child has. Of equal angles the match with the larger entries of P comes first,
    then the shorter origin shift. Origin shifts that differ by a translation of the parent give one match.

    Raises InputError, naming what does not agree, where there is none; LimitError where the search grows beyond
    200,000 pairs of lattice vectors. Crystals not periodic in three directions match only in the same cell.
    """
    _check_elements(parent, child)
    if not (all(parent.pbc) and all(child.pbc)):
        return [_same_cell(parent, child)]
    translations = translations_of(parent)
    basis, _ = reduced_basis(primitive_basis(translations) @ parent.cell)
    anchors = _anchors(parent, child, translations)
    nearest_miss: Match | None = None
    count_complaint = ""
    # The short translations of the child structure leave few ways to try. A child with other elements than the
    # parent, or a less distorted one, may have translations the parent lacks: then its cell vectors are tried.
    own = primitive_basis(translations_of(child))
    spans = (np.eye(3),) if np.allclose(own, np.eye(3)) else (own, np.eye(3))
    for strain, vectors in itertools.product(STRAINS, spans):
        found: list[Match] = []
        for P in _lattice_maps(parent, child, vectors, basis, strain, len(translations)):
            turn = _turn(child.cell, P.T @ parent.cell)
            if not turn.proper or turn.strain > strain:
                continue
            try:
                _check_counts(parent, child, P)
            except InputError as error:
                count_complaint = str(error)
                continue
            for start, site in anchors:
                match = _fit_origin(parent, child, P, parent.positions[site] - P @ child.positions[start], turn, basis)
                if not _site_complaint(parent, child, match):
                    found.append(match)
                elif nearest_miss is None or match.displacement_A < nearest_miss.displacement_A:
                    nearest_miss = match
        if found:
            return _best(parent, found)
    if nearest_miss is not None:
        raise InputError(_site_complaint(parent, child, nearest_miss))
    lengths = ", ".join(f"{x:.4g}" for x in np.linalg.norm(child.cell, axis=1))
    raise InputError(
        count_complaint
        or f"no lattice vectors of the parent have the lengths {lengths} Å and the angles of its cell within "
        f"{100 * STRAINS[-1]:g} %."
    )


def is_symmetry(crystal: Crystal, first: Match, second: Match) -> bool:
    """True where the motion that leads from one match to the other maps every atom of the parent onto its like."""
    linear = second.P @ np.linalg.inv(first.P)
    moved = (crystal.positions - first.p) @ linear.T + second.p
    for position, symbol in zip(moved, crystal.symbols, strict=True):
        gap = crystal.positions[[other == symbol for other in crystal.symbols]] - position
        gap -= np.round(gap)
        if np.linalg.norm(gap @ crystal.cell, axis=1).min() > SYMMETRY_MOTION_A:
            return False
    return True


@dataclass(frozen=True)
class _Turn:
    rotation: FloatArray
    strain: float
    proper: bool


def _turn(child_cell: FloatArray, target: FloatArray) -> _Turn:
    """Split the map from one cell to another into a rotation and a stretch (polar decomposition)."""
    left, stretches, right = np.linalg.svd(np.linalg.solve(child_cell, target))
    rotation = (left @ right).T
    if np.abs(rotation - np.eye(3)).max() < 1e-9:
        rotation = np.eye(3)
    return _Turn(rotation, float(np.abs(stretches - 1).max()), bool(np.linalg.det(rotation) > 0))


def _lattice_maps(
    parent: Crystal, child: Crystal, own: FloatArray, basis: FloatArray, strain: float, n_translations: int
) -> Iterator[FloatArray]:
    """Every P that carries translations of the child (rows of ``own``, in its cell) onto translations of the parent.

    Lengths and angles agree within the strain. basis: primitive vectors of the parent, Cartesian, reduced.
    """
    short, steps = reduced_basis(own @ child.cell)
    lengths = np.linalg.norm(short, axis=1)
    shells = [vectors_between(basis, length * (1 - strain), length * (1 + strain)) for length in lengths]
    vectors = [shell @ basis for shell in shells]
    slack = 2 * strain + strain**2

    def fits(i: int, vector: FloatArray, j: int) -> np.ndarray:
        bound = slack * lengths[i] * lengths[j] + 1e-9
        return np.asarray(np.abs(vectors[j] @ vector - short[i] @ short[j]) <= bound)

    pairs = 0
    to_parent = basis @ np.linalg.inv(parent.cell)
    back = np.round(np.linalg.inv(steps @ own))
    for one, first in enumerate(vectors[0]):
        third_one = fits(0, first, 2)
        for two in np.flatnonzero(fits(0, first, 1)):
            pairs += 1
            if pairs > MAX_PAIRS:
                raise LimitError(
                    f"matching the lattices grows beyond {MAX_PAIRS:,} pairs of vectors: the cell is too large. "
                    "Use a smaller cell."
                )
            for three in np.flatnonzero(third_one & fits(1, vectors[1][two], 2)):
                whole = np.array([shells[0][one], shells[1][two], shells[2][three]])
                P = (back @ whole @ to_parent).T
                yield np.round(P * n_translations) / n_translations


def _check_elements(parent: Crystal, child: Crystal) -> None:
    for symbol in child.symbols:
        if symbol not in parent.symbols:
            raise InputError(f"it has {symbol}, which the parent has not.")


def _check_counts(parent: Crystal, child: Crystal, P: FloatArray) -> None:
    volumes = abs(np.linalg.det(P))
    in_parent = Counter(parent.symbols)
    for symbol, count in Counter(child.symbols).items():
        expected = volumes * in_parent[symbol]
        if abs(count - expected) > 1e-3:
            raise InputError(
                f"its cell holds {count} {symbol} where the same volume of the parent holds {expected:.6g}."
            )


def _anchors(parent: Crystal, child: Crystal, translations: FloatArray) -> list[tuple[int, int]]:
    """Pairs (child site, parent site) that may lie on each other: one child site of the rarest element."""
    counts = Counter(child.symbols)
    rarest = min(counts, key=lambda symbol: (counts[symbol], symbol))
    ours = [i for i, symbol in enumerate(child.symbols) if symbol == rarest]
    start = ours[site_order(child.positions[ours])[0]]
    theirs = [i for i, symbol in enumerate(parent.symbols) if symbol == rarest]
    first, _ = translation_classes(parent, translations)
    return [(start, int(site)) for site in np.unique(first[theirs])]


def _fit_origin(parent: Crystal, child: Crystal, P: FloatArray, p: FloatArray, turn: _Turn, basis: FloatArray) -> Match:
    """The match with the origin shift that centres the displacements, brought to its shortest equivalent."""
    displacement = _displacements(parent, child, P, p)[2]
    p = p - displacement.mean(axis=0) @ np.linalg.inv(parent.cell)
    return _lay_over(parent, child, P, _shortest_shift(parent, basis, p), turn)


def _shortest_shift(parent: Crystal, basis: FloatArray, p: FloatArray) -> FloatArray:
    in_basis = p @ parent.cell @ np.linalg.inv(basis)
    nudges = np.array(list(itertools.product((-1, 0, 1), repeat=3)))
    cartesian = (in_basis - np.round(in_basis) + nudges) @ basis
    fractional = cartesian @ np.linalg.inv(parent.cell)
    order = sorted(
        range(len(nudges)),
        key=lambda i: (round(float(np.linalg.norm(cartesian[i])), 6), *(-round(float(x), 6) for x in fractional[i])),
    )
    shift = fractional[order[0]]
    # Whole 24ths carry no noise from the fit where the structures agree exactly.
    neat = np.round(shift * 24) / 24
    return np.asarray(np.where(np.abs(shift - neat) < 1e-9, neat + 0.0, shift))


def _displacements(
    parent: Crystal, child: Crystal, P: FloatArray, p: FloatArray
) -> tuple[np.ndarray, FloatArray, FloatArray]:
    """For each child site: the nearest parent site of its element, that site's cell, the Cartesian distance vector."""
    images = child.positions @ P.T + p
    partners = np.zeros(child.n_sites, dtype=int)
    cells = np.zeros((child.n_sites, 3))
    vectors = np.zeros((child.n_sites, 3))
    for symbol in dict.fromkeys(child.symbols):
        ours = np.array([i for i, other in enumerate(child.symbols) if other == symbol])
        theirs = np.array([i for i, other in enumerate(parent.symbols) if other == symbol])
        gaps = images[ours, None] - parent.positions[None, theirs]
        whole = np.where(parent.pbc, np.round(gaps), 0.0)
        cartesian = (gaps - whole) @ parent.cell
        nearest = np.argmin(np.linalg.norm(cartesian, axis=-1), axis=1)
        rows = np.arange(len(ours))
        partners[ours] = theirs[nearest]
        cells[ours] = whole[rows, nearest]
        vectors[ours] = cartesian[rows, nearest]
    return partners, cells, vectors


def _lay_over(parent: Crystal, child: Crystal, P: FloatArray, p: FloatArray, turn: _Turn) -> Match:
    partners, cells, vectors = _displacements(parent, child, P, p)
    distances = np.linalg.norm(vectors, axis=1)
    edge = (parent.volume_A3 / max(parent.n_sites, 1)) ** (1 / 3)
    misfit = float(np.sqrt((distances**2).mean())) + turn.strain * edge
    largest = float(distances.max(initial=0.0))
    return Match(P, p, turn.rotation, turn.strain, largest, misfit, partners, cells)


def _site_complaint(parent: Crystal, child: Crystal, match: Match) -> str:
    """What is wrong with the sites of a match; empty where nothing is."""
    images = child.positions @ match.P.T + match.p
    on_parent = parent.positions[match.partners] + match.cells
    distances = np.linalg.norm((images - on_parent) @ parent.cell, axis=1)
    worst = int(np.argmax(distances))
    if distances[worst] > SITE_TOLERANCE_A:
        return (
            f"its atom {worst + 1} ({child.labels[worst]}) lies {distances[worst]:.3f} Å from the nearest "
            f"{child.symbols[worst]} of the parent (at most {SITE_TOLERANCE_A:g} Å is taken)."
        )
    to_child = np.linalg.inv(match.P).T
    for partner in np.unique(match.partners):
        sharing = np.flatnonzero(match.partners == partner)
        steps = match.cells[sharing] @ to_child
        gaps = steps[:, None] - steps[None]
        gaps -= np.where(child.pbc, np.round(gaps), 0.0)
        same = np.argwhere(np.triu(np.abs(gaps).max(axis=-1) < 1e-6, k=1))
        if len(same):
            i, j = (int(x) for x in sharing[same[0]])
            return f"its atoms {i + 1} and {j + 1} ({child.labels[j]}) lie on one atom of the parent."
    return ""


def _same_cell(parent: Crystal, child: Crystal) -> Match:
    if parent.pbc != child.pbc:
        raise InputError(f"its periodic directions {child.pbc} are not those of the parent, {parent.pbc}.")
    if np.abs(child.cell - parent.cell).max() > STRAINS[0] * np.linalg.norm(parent.cell, axis=1).max():
        raise InputError("crystals that are not periodic in three directions are matched only in the same cell.")
    _check_counts(parent, child, np.eye(3))
    match = _lay_over(parent, child, np.eye(3), np.zeros(3), _turn(np.eye(3), np.eye(3)))
    complaint = _site_complaint(parent, child, match)
    if complaint:
        raise InputError(complaint)
    return match


def _best(parent: Crystal, found: list[Match]) -> list[Match]:
    least = min(match.misfit_A for match in found)
    equal = [match for match in found if match.misfit_A <= least + EQUAL_MISFIT_A]
    return sorted(
        equal,
        key=lambda match: (
            round(match.angle_deg, 4),
            *(-round(float(x), 6) for x in match.P.ravel()),
            round(float(np.linalg.norm(match.p @ parent.cell)), 4),
            *(-round(float(x), 6) for x in match.p),
        ),
    )
