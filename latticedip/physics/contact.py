"""Contact fields: couplings to whole shells of magnetic neighbours, or a moment density at the probe."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import SAME_PLACE_A, Crystal
from latticedip.crystal.neighbours import neighbours_of
from latticedip.crystal.spread import SAME_TENSOR, SITE_MATCH_A
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import InputError
from latticedip.ordering.domains import orthogonal
from latticedip.ordering.model import Ordering
from latticedip.probe import SHELL_TOLERANCE_A, Contact
from latticedip.units import MU0_T_A3_PER_MUB

#: Places closer than this (fractional) are one, listed once for each cell of an ordering.
ONE_PLACE = 1e-6
#: Neighbours are looked for up to this distance (Å).
MAX_RADIUS_A = 200.0


def contact_field(ordering: Ordering, point: FloatArray, terms: tuple[Contact, ...]) -> FloatArray:
    """Shape (3,) float in T. Σ A_i m_i over the neighbours of each term, plus (2/3) µ0 × moment density.

    point: fractional. Neighbours are the ions of the ordering, also where its modulation vanishes; m_i is the mean
    moment (occupancy applied). The site the point sits on is not its own neighbour.

    Raises InputError where a shell or radius holds no neighbour.
    """
    total = np.zeros(3)
    for term in terms:
        if term.moment_density_muB_per_A3 is not None:
            total += 2 / 3 * MU0_T_A3_PER_MUB * term.moment_density_muB_per_A3
            continue
        sites, cells, _ = shell_neighbours(ordering, point, term)
        phases = np.exp(-2j * np.pi * ((cells @ ordering.k.T) % 1.0))
        moments = np.einsum("nk,kna->na", phases, ordering.mean_components[:, sites]).real
        total += term.coupling_T_per_muB @ moments.sum(axis=0)
    return total


def shell_neighbours(ordering: Ordering, point: FloatArray, term: Contact) -> tuple[np.ndarray, np.ndarray, FloatArray]:
    """Sites (n,), cells (n, 3) and distances (n,) in Å of the neighbours a contact term means; shells stay whole."""
    ions = tuple(int(i) for i in np.flatnonzero(ordering.is_magnetic))
    if not ions:
        raise InputError(f"ordering {ordering.name!r} has no magnetic ions for a contact coupling to act on.")
    radius = 4.0 if term.within is None else term.within + 1.0
    while True:
        sites, cells, vectors = neighbours_of(ordering.crystal, point, radius, ions)
        distance = np.linalg.norm(vectors, axis=1)
        away = distance > SAME_PLACE_A
        sites, cells, distance = sites[away], cells[away], distance[away]
        shell = np.cumsum(np.diff(distance, prepend=distance[:1]) > SHELL_TOLERANCE_A) + 1
        # The outermost shell seen may go on beyond the radius: only shells with a gap behind them are whole.
        whole = shell < shell[-1] if len(shell) else np.zeros(0, dtype=bool)
        if term.shell is not None and np.any(shell[whole] == term.shell):
            chosen = shell == term.shell
            break
        if term.within is not None:
            inside = distance <= term.within
            if not np.any(inside):
                raise InputError(f"contact: no magnetic ion lies within {term.within:g} Å of the probe.")
            if np.any(whole & (shell == shell[inside].max())):
                chosen = shell <= shell[inside].max()
                break
        radius *= 1.5
        if radius > MAX_RADIUS_A:
            if term.shell is None:
                raise InputError(
                    f"contact: beyond {term.within:g} Å the neighbours follow each other so closely that no shell ends "
                    f"within {MAX_RADIUS_A:g} Å. Use a smaller radius."
                )
            raise InputError(f"contact: shell {term.shell} lies farther than {MAX_RADIUS_A:g} Å from the probe.")
    return sites[chosen], cells[chosen], distance[chosen]


def is_isotropic(tensor: FloatArray) -> bool:
    """True for a number times the unit matrix."""
    return bool(np.abs(tensor - tensor[0, 0] * np.eye(3)).max() <= 1e-12 * np.abs(tensor).max(initial=0.0))


def has_direction(term: Contact) -> bool:
    """True for a coupling tensor that must be turned with the position it is stated for."""
    return term.coupling_T_per_muB is not None and not is_isotropic(term.coupling_T_per_muB)


def turned_term(term: Contact, turn: FloatArray) -> Contact:
    """A contact term carried by an orthogonal matrix on Cartesian vectors, shape (3, 3)."""
    if not has_direction(term):
        return term
    return dataclasses.replace(term, coupling_T_per_muB=turn @ term.coupling_T_per_muB @ turn.T)


def carried_contacts(
    home: Crystal, first: FloatArray, places: FloatArray, terms: Sequence[Contact], name: str
) -> list[tuple[Contact, ...]]:
    """Contact terms at equivalent places (n, 3) fractional, where they are stated for the place ``first`` (3,).

    A tensor is turned by an operation of the crystal that carries the first place onto the other.

    Raises InputError, naming ``name``, where there is no such operation or where two of them disagree: the tensor then
    lacks the symmetry of its place.
    """
    if not any(has_direction(term) for term in terms):
        return [tuple(terms)] * len(places)
    operations = operations_of(home)
    images = operations.rotations @ first + operations.translations
    found: list[tuple[Contact, ...]] = []
    for place in places:
        gaps = images - place
        leads = np.linalg.norm((gaps - np.round(gaps)) @ home.cell, axis=1) < SITE_MATCH_A
        turns = [orthogonal(home, rotation) for rotation in operations.rotations[leads]]
        found.append(tuple(_agreed(term, turns, name) if has_direction(term) else term for term in terms))
    return found


def contacts_of_site(
    home: Crystal, places: FloatArray, terms: Sequence[Contact], name: str
) -> list[tuple[Contact, ...]]:
    """Contact terms of each atom of a site at places (n, 3) fractional, where they are stated for the first of them.

    One atom alone keeps what is stated for it, whatever its symmetry says. Raises what `carried_contacts` raises.
    """
    if np.abs(places - places[0]).max() < ONE_PLACE:
        return [tuple(terms)] * len(places)
    return carried_contacts(home, places[0], places, terms, name)


def _agreed(term: Contact, turns: list[FloatArray], name: str) -> Contact:
    if not turns:
        raise InputError(
            f"{name}: its contact tensor is stated for the first atom, and no operation of the crystal carries it to "
            "all the others. Give each kind of atom a probe of its own, or give a number."
        )
    turned = [turned_term(term, turn) for turn in turns]
    scale = SAME_TENSOR * float(np.abs(term.coupling_T_per_muB).max())
    if any(np.abs(other.coupling_T_per_muB - turned[0].coupling_T_per_muB).max() > scale for other in turned):
        raise InputError(
            f"{name}: its contact tensor is stated for the first atom and does not have the symmetry of "
            "that site, so that the other atoms have none of their own. Symmetrize it, or give a number."
        )
    return turned[0]
