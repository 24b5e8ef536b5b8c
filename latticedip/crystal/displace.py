"""Neighbours that a probe pushes or pulls: which atoms are moved, and by how much.

A charged muon, or a nucleus that is not the one the structure was determined with, shifts the atoms around it. The
crystal far away stays as it is, so that a lattice sum over the undisturbed crystal holds but for a finite set of pair
terms. Those are listed here, each with the vector from atom to probe before and after.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_float, as_floats, frozen
from latticedip.crystal.model import OVERLAP_A, Crystal
from latticedip.crystal.neighbours import neighbours_of
from latticedip.crystal.place import Place
from latticedip.errors import InputError

#: Neighbours whose distances differ by less than this (Å) belong to one shell.
SHELL_TOLERANCE_A = 0.01
#: Neighbours are looked for up to this distance (Å).
MAX_RADIUS_A = 200.0


@dataclass(frozen=True, eq=False)
class Displaced:
    """Neighbours of a probe that are moved; everything else stays where the crystal has it.

    shell: a whole shell of neighbours (1 is the nearest; equal distances within 0.01 Å are one shell).
    within: or all neighbours within this distance in Å (a shell is never split).
    atom: or one atom: (number of the site counted from 0, cell as three whole numbers).
    of: a site label or element; shells and distances then count its atoms only. None: all atoms.
    factor: the distance from the probe is multiplied by this (1.05 pushes away by 5 %).
    outward_A: or the atom moves away from the probe by this distance in Å (negative: towards it).
    vector_A: or the atom moves by this vector, Shape (3,) Cartesian in Å.

    Raises InputError unless exactly one of shell, within, atom and exactly one of factor, outward_A, vector_A is given.
    """

    shell: int | None = None
    within: float | None = None
    atom: tuple[int, tuple[int, int, int]] | None = None
    of: str | None = None
    factor: float | None = None
    outward_A: float | None = None
    vector_A: Any = None

    def __post_init__(self) -> None:
        if sum(value is not None for value in (self.shell, self.within, self.atom)) != 1:
            raise InputError(
                "a Displaced needs exactly one of shell (1 is the nearest), within (a radius in Å) and atom "
                "(a site number and a cell)."
            )
        if sum(value is not None for value in (self.factor, self.outward_A, self.vector_A)) != 1:
            raise InputError("a Displaced needs exactly one of factor, outward_A (Å) and vector_A (Cartesian, Å).")
        if self.shell is not None and (not _whole(self.shell) or self.shell < 1):
            raise InputError(f"shell must be a whole number of at least 1, got {self.shell!r}.")
        if self.within is not None:
            object.__setattr__(self, "within", as_float("within", self.within, low=1e-3, high=100.0))
        if self.atom is not None:
            object.__setattr__(self, "atom", _checked_atom(self.atom))
            if self.of is not None:
                raise InputError(f"a Displaced that names one atom takes no label or element, got of = {self.of!r}.")
        if self.factor is not None:
            object.__setattr__(self, "factor", as_float("factor", self.factor, low=1e-3, high=1e3))
        if self.outward_A is not None:
            object.__setattr__(self, "outward_A", as_float("outward_A", self.outward_A, low=-100.0, high=100.0))
        if self.vector_A is not None:
            object.__setattr__(self, "vector_A", frozen(as_floats("vector_A", self.vector_A, (3,))))

    def words(self) -> str:
        """What is moved and how, for reports."""
        what = f"{self.of} atoms" if self.of else "atoms"
        if self.shell is not None:
            who = f"{what} of shell {self.shell}"
        elif self.within is not None:
            who = f"{what} within {self.within:g} Å"
        else:
            assert self.atom is not None
            who = f"atom {self.atom[0] + 1} of cell {self.atom[1]}"
        if self.factor is not None:
            return f"{who}: distance times {self.factor:g}"
        if self.outward_A is not None:
            return f"{who}: moved outward by {self.outward_A:g} Å"
        return f"{who}: moved by ({', '.join(f'{x:g}' for x in self.vector_A)}) Å"


@dataclass(frozen=True, eq=False)
class MovedPairs:
    """The pairs of probe and atom that displaced neighbours change.

    sites: Shape (n,) int. cells: Shape (n, 3) int, the cells the atoms lie in.
    before, after: Shape (n, 3) float in Å. Cartesian vectors from atom to probe.
    """

    sites: np.ndarray
    cells: np.ndarray
    before: FloatArray
    after: FloatArray

    def __len__(self) -> int:
        return len(self.sites)


def moved_pairs(crystal: Crystal, place: Place, displaced: Iterable[Displaced] | Displaced) -> MovedPairs:
    """List the pairs that change when neighbours of a placed probe move.

    Shells are counted in the undisturbed crystal; the atom the probe sits on, and atoms that share its place, are no
    neighbours. Raises InputError where a shell or atom is not there, an atom is moved twice, or would come to lie
    within 0.1 Å of the probe.
    """
    terms = (displaced,) if isinstance(displaced, Displaced) else tuple(displaced)
    sites: list[int] = []
    cells: list[tuple[int, ...]] = []
    before: list[FloatArray] = []
    after: list[FloatArray] = []
    for term in terms:
        if not isinstance(term, Displaced):
            raise InputError(f"displaced must hold Displaced objects, got {term!r}.")
        for site, cell, vector in zip(*_chosen(crystal, place, term), strict=True):
            key = tuple(int(n) for n in cell)
            if (int(site), key) in set(zip(sites, cells, strict=True)):
                raise InputError(f"displaced: atom {crystal.labels[site]} in cell {key} is moved twice.")
            moved = _moved(vector, term)
            distance = float(np.linalg.norm(moved))
            if distance < OVERLAP_A:
                raise InputError(
                    f"displaced: atom {crystal.labels[site]} in cell {key} would lie {distance:.4f} Å from the probe. "
                    f"Keep it at least {OVERLAP_A} Å away."
                )
            sites.append(int(site))
            cells.append(key)
            before.append(vector)
            after.append(moved)
    return MovedPairs(
        frozen(np.array(sites, dtype=int)),
        frozen(np.array(cells, dtype=int).reshape(-1, 3)),
        frozen(np.array(before, dtype=float).reshape(-1, 3)),
        frozen(np.array(after, dtype=float).reshape(-1, 3)),
    )


def _moved(vector: FloatArray, term: Displaced) -> FloatArray:
    """Vector from the moved atom to the probe."""
    if term.factor is not None:
        return np.asarray(vector * term.factor)
    if term.outward_A is not None:
        length = float(np.linalg.norm(vector))
        # An atom pulled past the probe would come out on its other side.
        return np.asarray(vector * max(0.0, 1 + term.outward_A / length))
    return np.asarray(vector - term.vector_A)


def _chosen(crystal: Crystal, place: Place, term: Displaced) -> tuple[np.ndarray, np.ndarray, FloatArray]:
    """Sites (n,), cells (n, 3) and vectors from atom to probe (n, 3) in Å of the atoms a term means."""
    if term.atom is not None:
        site, cell = term.atom
        if site >= crystal.n_sites:
            raise InputError(f"displaced: the crystal has {crystal.n_sites} sites, there is no number {site}.")
        if np.any(np.array(cell)[~np.array(crystal.pbc)]):
            raise InputError(f"displaced: cell {cell} lies in a direction in which the crystal is not periodic.")
        vector = place.cart - crystal.places_cart[site] - np.array(cell) @ crystal.cell
        if np.linalg.norm(vector) < OVERLAP_A:
            raise InputError(f"displaced: atom {site} in cell {cell} is the place of the probe itself.")
        return np.array([site]), np.array([cell]), vector[None]
    among = tuple(range(crystal.n_sites)) if term.of is None else crystal.find(term.of)
    finite = not any(crystal.pbc)
    radius = MAX_RADIUS_A if finite else 4.0 if term.within is None else term.within + 1.0
    while True:
        sites, cells, _ = neighbours_of(crystal, place.position, radius, among)
        vectors = place.cart - crystal.places_cart[sites] - cells @ crystal.cell
        distance = np.linalg.norm(vectors, axis=1)
        away = distance > OVERLAP_A
        sites, cells, vectors, distance = sites[away], cells[away], vectors[away], distance[away]
        shell = np.cumsum(np.diff(distance, prepend=distance[:1]) > SHELL_TOLERANCE_A) + 1
        # The outermost shell seen may go on beyond the radius: only shells with a gap behind them are whole.
        last_whole = shell.max(initial=0) - (0 if finite else 1)
        if term.within is not None:
            wanted = int(shell[distance <= term.within].max(initial=0))
            if wanted == 0:
                raise InputError(f"displaced: no atom lies within {term.within:g} Å of the probe.")
            chosen = shell <= wanted
        else:
            wanted = int(term.shell or 0)
            chosen = shell == wanted
        if wanted <= last_whole:
            return sites[chosen], cells[chosen], vectors[chosen]
        radius *= 1.5
        if radius > MAX_RADIUS_A:
            raise InputError(f"displaced: shell {wanted} lies farther than {MAX_RADIUS_A:g} Å from the probe.")


def _whole(value: Any) -> bool:
    return isinstance(value, (int, np.integer)) and not isinstance(value, bool)


def _checked_atom(value: Any) -> tuple[int, tuple[int, int, int]]:
    try:
        site, cell = value
        numbers = (site, *cell)
    except (TypeError, ValueError):
        numbers = ()
    if len(numbers) != 4 or not all(_whole(n) for n in numbers) or numbers[0] < 0:
        raise InputError(
            f"atom must be a site number (from 0) and a cell of three whole numbers, such as (2, (0, 0, 1)), "
            f"got {value!r}."
        )
    site, first, second, third = (int(n) for n in numbers)
    return site, (first, second, third)
