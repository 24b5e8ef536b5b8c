"""Contact fields: couplings to whole shells of magnetic neighbours, or a moment density at the probe."""

from __future__ import annotations

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import SAME_PLACE_A
from latticedip.crystal.neighbours import neighbours_of
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.probe import SHELL_TOLERANCE_A, Contact
from latticedip.units import MU0_T_A3_PER_MUB

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
