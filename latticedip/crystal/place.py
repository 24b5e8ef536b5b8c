"""Where a point lies among the atoms of a crystal: free, or on a site."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_floats, frozen
from latticedip.crystal.model import OVERLAP_A, SAME_PLACE_A, Crystal
from latticedip.crystal.neighbours import neighbours_of
from latticedip.errors import InputError


@dataclass(frozen=True, eq=False)
class Place:
    """A point in a crystal, put onto the atom it is on.

    position: Shape (3,) float, fractional. cart: Shape (3,) float in Å.
    site: index of the atom the point is on, −1 where it is on none.
    shared: indices of the other atoms within 0.1 Å of that atom: they are never there together with it.
    shared_vectors: Shape (n, 3) float in Å. From each of these atoms to the point.
    """

    position: FloatArray
    cart: FloatArray
    site: int
    shared: tuple[int, ...]
    shared_vectors: FloatArray


def place_of(crystal: Crystal, position: Any) -> Place:
    """Put a fractional position within 1e-3 Å of an atom onto it.

    Raises InputError for a position that is not three finite numbers, and for one between 1e-3 and 0.1 Å from an atom.
    """
    point = as_floats("position", position, (3,))
    sites, cells, vectors = neighbours_of(crystal, point, OVERLAP_A)
    if not len(sites):
        return Place(frozen(point), frozen(point @ crystal.cell), -1, (), frozen(np.zeros((0, 3))))
    distance = float(np.linalg.norm(vectors[0]))
    site = int(sites[0])
    if distance > SAME_PLACE_A:
        raise InputError(
            f"position {_text(point)} lies {distance:.4f} Å from atom {crystal.labels[site]} at "
            f"{_text(crystal.positions[site])}. A point must be at least {OVERLAP_A} Å from every atom, or on a site "
            f"(within {SAME_PLACE_A} Å)."
        )
    home = crystal.positions[site] + cells[0]
    # The same rounding as the site itself, so that a lattice sum recognises its own atom.
    cart = crystal.places_cart[site] + cells[0] @ crystal.cell
    shared = slice(1, None)
    vectors_there = cart - crystal.places_cart[sites[shared]] - cells[shared] @ crystal.cell
    return Place(frozen(home), frozen(cart), site, tuple(int(i) for i in sites[shared]), frozen(vectors_there))


def _text(position: FloatArray) -> str:
    return "(" + ", ".join(f"{x:.5g}" for x in position) + ")"
