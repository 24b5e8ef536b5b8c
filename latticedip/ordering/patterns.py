"""Moments written down as a user writes them: signs along a direction, or cosine and sine amplitudes, at one k.

Words used here, beside those of the model:

entry        what a user gives for one atom: a sign, or a triple of crystal-axis components
centring     atoms related by a translation t of the non-magnetic lattice obey S(τ + t) = S(τ) exp(−2πi k·t)

A list of entries holds one per atom of the primitive cell of the non-magnetic lattice (the first atom of each
translation class, in the order of `Crystal.find`), and the rest follow by the centring rule; a list as long as the
atoms of the whole cell is taken literally. Crystal-axis components are along unit vectors parallel to a, b, c.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats
from latticedip.crystal.lattice import centring_classes, label_centrings
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError
from latticedip.ordering.model import ZERO_MOMENT_MUB, Ordering, is_self_conjugate, snap_k

#: A phase this close (in turns) to a quarter turn is taken as it.
PHASE_SNAP = 1e-9
#: Where k and −k are the same vector, a real part below this fraction of the amplitude comes from rounded positions
#: and counts as zero.
VANISHING_FRACTION = 1e-4
#: The characters of a sign list.
SIGNS = {"+": 1.0, "-": -1.0, "−": -1.0, "0": 0.0}


@dataclass(frozen=True, eq=False)
class Setting:
    """A crystal, one propagation vector, and the centrings of the non-magnetic lattice: what every pattern needs.

    crystal: the Crystal.
    k: Shape (3,) float, reduced coordinates.
    centrings: Shape (n, 3) float. Those that carry every atom onto one of the same label, zero first.
    """

    crystal: Crystal
    k: FloatArray
    centrings: FloatArray

    @classmethod
    def of(cls, crystal: Crystal, k: Any) -> Setting:
        """Check k and find the centrings.

        Raises InputError for a k that is not three finite numbers, that runs along a direction without
        periodicity, or that is a whole number other than 0 to which no centring gives a meaning.
        """
        vector = snap_k(as_floats("k", k, (3,)))
        for axis, periodic in enumerate(crystal.pbc):
            if not periodic and vector[axis] != 0:
                raise InputError(f"k has a component along {'abc'[axis]}, in which the crystal is not periodic.")
        centrings = label_centrings(crystal)
        if np.any(vector) and np.all(vector == np.round(vector)):
            turns = centrings @ vector
            if np.all(np.abs(turns - np.round(turns)) < PHASE_SNAP):
                raise InputError(
                    f"k = {triple(vector)} repeats in every cell and no centring of this crystal gives it another "
                    "meaning: it is the same as (0, 0, 0). Write k = [0, 0, 0], or the k of the cell you mean."
                )
        return cls(crystal, vector, centrings)

    @property
    def self_conjugate(self) -> bool:
        """True where k and −k are the same vector of this cell, so that only real components have a meaning."""
        return bool(is_self_conjugate(self.k[None])[0])

    def counts(self, sites: tuple[int, ...]) -> tuple[int, int]:
        """Entries a list for these sites may hold: (atoms of the primitive cell, atoms of the whole cell)."""
        first, _ = centring_classes(self.crystal, sites, self.centrings)
        return len(np.unique(first)), len(sites)

    def spread(self, sites: tuple[int, ...], entries: Any) -> ComplexArray:
        """Shape (n_sites, ...) complex. One value per listed site, from entries (m, ...) as the module describes.

        Raises InputError where m is neither the number of atoms of the primitive nor of the whole cell.
        """
        values = np.asarray(entries, dtype=complex)
        first, shift = centring_classes(self.crystal, sites, self.centrings)
        heads = np.unique(first)
        if len(values) == len(sites):
            return values
        if len(values) != len(heads):
            raise InputError(f"{len(values)} entries, expected {expected_entries(len(heads), len(sites))}.")
        chosen = values[np.searchsorted(heads, first)]
        factors = phase_factor(shift @ self.k)
        return np.asarray(chosen * factors.reshape(-1, *(1,) * (values.ndim - 1)))

    def follow_positions(self, sites: tuple[int, ...]) -> ComplexArray:
        """Shape (n_sites,) complex. exp(−2πi k·τ) of each listed site at its position in the cell."""
        return phase_factor(self.crystal.positions[list(sites)] @ self.k)

    def finish(self, components: ComplexArray, name: str = "", notes: Sequence[str] = ()) -> Ordering:
        """Turn components (n_sites, 3), Cartesian µB, into an Ordering.

        Where k and −k are the same vector the imaginary part has no meaning and is dropped; sites whose moment
        vanishes by that are named in a note. Raises InputError where no moment is left.
        """
        remarks = list(notes)
        final = components
        if self.self_conjugate:
            final, remark = self._drop_imaginary(components)
            remarks += remark
        if not np.any(np.abs(final) > ZERO_MOMENT_MUB):
            if np.any(np.abs(components) > ZERO_MOMENT_MUB):
                raise InputError(
                    f"at k = {triple(self.k)} every moment vanishes: the phase of each atom is a quarter turn. "
                    'Shift the phase (swap cosine and sine) or count cells with phase = "cell".'
                )
            raise InputError("every moment is zero.")
        return Ordering(self.crystal, final, self.k, name, notes=tuple(remarks))

    def _drop_imaginary(self, components: ComplexArray) -> tuple[ComplexArray, list[str]]:
        amplitude = np.abs(components).max(axis=1)
        kept = np.abs(components.real).max(axis=1)
        lost = (kept <= VANISHING_FRACTION * amplitude) & (amplitude > 0)
        real = np.where(lost[:, None], 0.0, components.real)
        if not np.any(lost):
            return real.astype(complex), []
        parts = []
        for label in dict.fromkeys(self.crystal.labels[i] for i in np.flatnonzero(lost)):
            among = [i for i, other in enumerate(self.crystal.labels) if other == label]
            parts.append(f"{int(np.sum(lost[among]))} of {len(among)} atoms of {label}")
        note = (
            f"the moment vanishes on {', '.join(parts)}: at k = {triple(self.k)} their phase is a quarter turn, and "
            "one k carries the real part alone"
        )
        return real.astype(complex), [note]


def read_signs(text: str) -> list[float]:
    """The numbers +1, −1, 0 that a sign list such as "+-+" stands for; blanks are skipped.

    Raises InputError at any other character, and for a list without signs.
    """
    letters = [letter for letter in text if not letter.isspace()]
    for letter in letters:
        if letter not in SIGNS:
            raise InputError(f"{letter!r} is no sign; signs are +, - and 0.")
    if not letters:
        raise InputError("the list holds no sign; signs are +, - and 0.")
    return [SIGNS[letter] for letter in letters]


def unit_direction(crystal: Crystal, along: Any) -> FloatArray:
    """Shape (3,) float. Cartesian unit vector of a direction in crystal axes (unit vectors along a, b, c).

    Raises InputError for the zero direction.
    """
    vector = as_floats("along", along, (3,))
    largest = np.abs(vector).max()
    if largest == 0:
        raise InputError("[0, 0, 0] has no direction.")
    cartesian = crystal.to_cartesian(vector / largest)
    return np.asarray(cartesian / np.linalg.norm(cartesian))


def phase_factor(turns: Any) -> ComplexArray:
    """exp(−2πi turns), exact where the phase is a whole number of quarter turns."""
    reduced = np.asarray(turns, dtype=float) % 1.0
    quarters = np.round(4 * reduced)
    exact = np.array([1, -1j, -1, 1j])[quarters.astype(int) % 4]
    near = np.abs(reduced - quarters / 4) <= PHASE_SNAP
    return np.asarray(np.where(near, exact, np.exp(-2j * np.pi * reduced)))


def expected_entries(primitive: int, whole: int) -> str:
    """In words, how many entries a list may hold."""
    if primitive == whole:
        return f"{whole} (one per atom)"
    return f"{primitive} (one per atom of the primitive cell) or {whole} (one per atom of the whole cell)"


def triple(vector: Any) -> str:
    """A k or a position for a message, "(0, 0.5, 0.3333)"."""
    return "(" + ", ".join(f"{x + 0.0:.4g}" for x in vector) + ")"
