"""The Crystal: a cell, its sites and what is known of its symmetry.

Words used here and nowhere renamed:

cell         rows are the vectors a, b, c in Å (Cartesian)
site         one atom in the cell: element, label, fractional position, occupancy
label        the name a user calls sites by; it may cover several atoms
operations   rotations and translations of the non-magnetic structure, in fractional coordinates
centring     a translation of the non-magnetic lattice that is not a whole cell vector
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray, as_floats, check_cell, frozen
from latticedip.crystal.uncertain import checked_su
from latticedip.errors import InputError, near_match

if TYPE_CHECKING:
    from ase import Atoms

    from latticedip.crystal.uncertain import Moves

#: Two atoms of one label closer than this in a fractional coordinate count as equal when atoms are put in order.
ORDER_TOLERANCE = 1e-4
#: Beyond this a fractional coordinate has lost the digits that say where in the cell an atom is.
FARTHEST = 1e6
#: Atoms closer than this (Å) cannot both be there.
OVERLAP_A = 0.1
#: Atoms, or a point and an atom, closer than this (Å) are at one place.
SAME_PLACE_A = 1e-3


@dataclass(frozen=True, eq=False)
class Operations:
    """Space-group operations x' = R x + t in fractional coordinates.

    rotations: Shape (n, 3, 3) int. translations: Shape (n, 3) float.
    """

    rotations: np.ndarray
    translations: np.ndarray

    def __post_init__(self) -> None:
        object.__setattr__(self, "rotations", frozen(np.asarray(self.rotations, dtype=np.int64)))
        object.__setattr__(self, "translations", frozen(np.asarray(self.translations, dtype=float)))

    def centrings(self) -> FloatArray:
        """Shape (n, 3) float. The pure translations, wrapped into [0, 1), the zero translation first."""
        pure = np.all(self.rotations == np.eye(3, dtype=np.int64), axis=(1, 2))
        shifts = wrap(self.translations[pure])
        order = np.lexsort((shifts[:, 2], shifts[:, 1], shifts[:, 0]))
        return np.asarray(shifts[order])


@dataclass(frozen=True, eq=False)
class Crystal:
    """A periodic arrangement of sites; frozen, arrays read-only.

    cell: Shape (3, 3) float in Å. Rows are the cell vectors.
    positions: Shape (n_sites, 3) float, fractional. As given, not wrapped.
    symbols, labels: n_sites names each. Labels default to the symbols.
    occupancies: Shape (n_sites,) float in (0, 1].
    pbc: three bools, the periodic directions.
    operations: of the non-magnetic structure, or None where they are not known.
    notes: sentences a report must repeat (partial occupancy and the like).
    position_su: Shape (n_sites, 3) float, fractional. Standard uncertainties of the positions, NaN where none is known.

    Raises InputError for a cell without volume, values that are not finite, lists of unequal length, positions a
    million cells away, occupancies outside (0, 1], uncertainties below 0 and atoms closer than 0.1 Å (unless their
    occupancies add up to at most 1).
    """

    cell: FloatArray
    positions: FloatArray
    symbols: tuple[str, ...]
    labels: tuple[str, ...] = ()
    occupancies: FloatArray = None  # type: ignore[assignment]
    pbc: tuple[bool, bool, bool] = (True, True, True)
    operations: Operations | None = field(default=None, repr=False)
    name: str = ""
    notes: tuple[str, ...] = field(default=(), repr=False)
    position_su: FloatArray = field(default=None, repr=False)  # type: ignore[arg-type]

    def __post_init__(self) -> None:
        if np.shape(self.pbc) != (3,):
            raise InputError(f"pbc must be three bools, got {self.pbc!r}.")
        pbc = tuple(bool(p) for p in self.pbc)
        cell = check_cell("cell", self.cell, pbc)
        positions = self.positions if len(self.positions) else np.zeros((0, 3))
        positions = as_floats("positions", positions, (None, 3))
        for key, names in (("symbols", self.symbols), ("labels", self.labels)):
            if isinstance(names, str):
                raise InputError(f"{key} must be a list with one name per site, got the one text {names!r}.")
        symbols = tuple(str(s) for s in self.symbols)
        if len(symbols) != len(positions):
            raise InputError(f"{len(positions)} positions but {len(symbols)} symbols.")
        labels = tuple(str(s) for s in self.labels) or symbols
        if len(labels) != len(positions):
            raise InputError(f"{len(positions)} positions but {len(labels)} labels.")
        far = np.flatnonzero(np.abs(positions).max(axis=1, initial=0.0) > FARTHEST)
        if len(far):
            raise InputError(
                f"the position of {labels[far[0]]} (number {far[0] + 1}) is {positions[far[0]].tolist()} in fractional "
                "coordinates, far outside any cell."
            )
        occupancies = np.ones(len(positions)) if self.occupancies is None else self.occupancies
        occupancies = as_floats("occupancies", occupancies, (len(positions),))
        if np.any(occupancies <= 0) or np.any(occupancies > 1 + 1e-9):
            bad = int(np.argmax((occupancies <= 0) | (occupancies > 1 + 1e-9)))
            raise InputError(f"occupancy of {labels[bad]} must lie in (0, 1], got {occupancies[bad]}.")
        for key, value in (
            ("cell", cell),
            ("positions", positions),
            ("occupancies", np.minimum(occupancies, 1.0)),
            ("position_su", checked_su("position_su", self.position_su, (len(positions), 3))),
        ):
            object.__setattr__(self, key, frozen(value))
        object.__setattr__(self, "symbols", symbols)
        object.__setattr__(self, "labels", labels)
        object.__setattr__(self, "pbc", pbc)
        self._refuse_overlaps()

    def _refuse_overlaps(self) -> None:
        from latticedip.crystal.neighbours import close_pairs

        on_place = np.array(self.occupancies)
        for i, j, distance in close_pairs(self, OVERLAP_A):
            on_place[[i, j]] += self.occupancies[[j, i]]
            if i == j or on_place[[i, j]].max() > 1 + 1e-6:
                raise InputError(
                    f"atoms {self.labels[i]} (number {i + 1}) and {self.labels[j]} (number {j + 1}) are "
                    f"{distance:.4f} Å apart. Two atoms cannot share a place: remove one, or give occupancies "
                    "that add up to at most 1."
                )

    @property
    def n_sites(self) -> int:
        """Number of atoms in the cell."""
        return len(self.positions)

    @cached_property
    def volume_A3(self) -> float:
        """Cell volume in Å³ (of the three vectors, periodic or not)."""
        return float(abs(np.linalg.det(self.cell)))

    @cached_property
    def positions_cart(self) -> FloatArray:
        """Shape (n_sites, 3) float in Å. Cartesian positions."""
        return frozen(self.positions @ self.cell)

    @cached_property
    def places_cart(self) -> FloatArray:
        """Shape (n_sites, 3) float in Å. Cartesian positions, atoms that share a place (within 1e-3 Å) put on one.

        Such atoms are never there together, so that no sum may hold the field of one at the other.
        """
        from latticedip.crystal.neighbours import close_pairs

        places = np.array(self.positions_cart)
        if np.any(self.occupancies < 1):
            # Pairs come with the earlier site first, and an earlier site is final before it is used.
            for i, j, _ in close_pairs(self, SAME_PLACE_A):
                cells = np.where(self.pbc, np.round(self.positions[j] - self.positions[i]), 0.0)
                places[j] = places[i] + cells @ self.cell
        return frozen(places)

    @cached_property
    def position_moves(self) -> tuple[Moves, ...]:
        """The independent ways in which the positions of sites are uncertain, as `position_su` states."""
        from latticedip.crystal.uncertain import position_moves

        return tuple(position_moves(self, self.position_su))

    @cached_property
    def axes_unit(self) -> FloatArray:
        """Shape (3, 3) float. Rows are unit vectors along a, b, c (the magCIF crystal axes)."""
        return frozen(self.cell / np.linalg.norm(self.cell, axis=1)[:, None])

    def to_cartesian(self, crystal_axis_components: Any) -> FloatArray:
        """Turn components along unit vectors parallel to a, b, c (last axis) into Cartesian ones."""
        return np.asarray(np.asarray(crystal_axis_components) @ self.axes_unit)

    def to_crystal_axes(self, vectors_cart: Any) -> FloatArray:
        """Turn Cartesian vectors (last axis) into components along unit vectors parallel to a, b, c."""
        return np.asarray(np.asarray(vectors_cart) @ np.linalg.inv(self.axes_unit))

    def find(self, name: str) -> tuple[int, ...]:
        """Indices of the sites with this label or, where no label fits, of this element.

        They are ordered by wrapped fractional x, y, z (tolerance 1e-4). Raises InputError with a near match
        when neither a label nor an element fits.
        """
        chosen = [i for i, label in enumerate(self.labels) if label == name]
        chosen = chosen or [i for i, symbol in enumerate(self.symbols) if symbol == name]
        if not chosen:
            known = list(dict.fromkeys([*self.labels, *self.symbols]))
            raise InputError(
                f"no site has the label or element {name!r}. Known are: {', '.join(known)}." + near_match(name, known)
            )
        return tuple(chosen[i] for i in site_order(self.positions[chosen]))

    @classmethod
    def from_ase(cls, atoms: Atoms) -> Crystal:
        """Build a Crystal from ASE atoms; labels are taken from an array ``labels`` where there is one."""
        from latticedip.crystal.convert import crystal_from_ase

        return crystal_from_ase(atoms)

    def to_ase(self) -> Atoms:
        """Return ASE atoms with the same cell and positions, and arrays ``labels`` and ``occupancies``."""
        from latticedip.crystal.convert import crystal_to_ase

        return crystal_to_ase(self)


def wrap(fractional: Any) -> FloatArray:
    """Return fractional coordinates in [0, 1); values within 1e-4 below 1 become 0 when atoms are compared."""
    wrapped = np.asarray(fractional, dtype=float) % 1.0
    wrapped[wrapped > 1.0 - ORDER_TOLERANCE] = 0.0
    return np.asarray(wrapped)


def site_order(positions: FloatArray) -> list[int]:
    """Indices that put fractional positions in order of wrapped x, y, z, with values closer than 1e-4 equal."""
    wrapped = wrap(positions)
    ranks = np.empty(wrapped.shape, dtype=np.int64)
    for axis in range(3):
        order = np.argsort(wrapped[:, axis], kind="stable")
        steps = np.diff(wrapped[order, axis], prepend=wrapped[order[:1], axis]) > ORDER_TOLERANCE
        ranks[order, axis] = np.cumsum(steps)
    return [int(i) for i in np.lexsort((ranks[:, 2], ranks[:, 1], ranks[:, 0]))]


def distinct_labels(symbols: Sequence[str], classes: Iterable[int]) -> tuple[str, ...]:
    """Labels such as Mn1, Mn2, O1: element plus a number that counts the distinct sites of that element."""
    numbers: dict[tuple[str, int], int] = {}
    counts: dict[str, int] = {}
    labels = []
    for symbol, kind in zip(symbols, classes, strict=True):
        key = (symbol, int(kind))
        if key not in numbers:
            counts[symbol] = counts.get(symbol, 0) + 1
            numbers[key] = counts[symbol]
        labels.append(f"{symbol}{numbers[key]}")
    return tuple(labels)
