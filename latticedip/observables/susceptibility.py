"""Susceptibility of magnetic ions: units, tables against temperature, tensors of each atom."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import constants

from latticedip.checks import FloatArray, as_float, as_floats, frozen
from latticedip.crystal.model import Crystal
from latticedip.crystal.symmetry import operations_of
from latticedip.crystal.uncertain import parameter_steps
from latticedip.errors import InputError
from latticedip.units import BOHR_MAGNETON_J_PER_T

#: µB per tesla and ion for one unit. A cgs molar susceptibility is the moment of a mole in emu per oersted (1 Oe is
#: 1e-4 T in vacuum, 1 emu is 1e-3 A m²); the SI one is the moment per mole over H = B/µ0, 4π·10⁻⁶ times the cgs one.
UNITS = {
    "cm3/mol": 10 / (constants.N_A * BOHR_MAGNETON_J_PER_T),
    "m3/mol": 1 / (constants.mu_0 * constants.N_A * BOHR_MAGNETON_J_PER_T),
    "muB/T": 1.0,
}
#: How far a tensor may be from symmetric, and from the symmetry of its site, relative to its largest element.
TENSOR_TOLERANCE = 1e-6
#: Largest standard uncertainty, in any unit.
LARGEST_CHI_SU = 1e6
#: Elements of a symmetric tensor.
ELEMENTS = ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))
#: An operation carries an atom onto another within this distance (Å).
SAME_ATOM_A = 0.02


@dataclass(frozen=True, eq=False)
class Susceptibility:
    """Moment of one magnetic ion per applied field, m = χ B_applied, to first order in the field.

    chi: a number (isotropic), a (3, 3) Cartesian tensor, or (n_atoms, 3, 3) with one tensor for each atom of the label
        in the order of `Crystal.find`. With temperatures one more axis goes first: (n_T,), (n_T, 3, 3) or
        (n_T, n_atoms, 3, 3).
    unit: "cm3/mol" (cgs, emu per oersted and mole of magnetic ions), "m3/mol" (SI) or "muB/T" (per ion).
    temperatures_K: Shape (n_T,) in K, distinct and positive, where chi is a table; between them it is interpolated
        linearly.
    local: True: chi is the tensor of the label's first atom; that of every other atom is what the operations of the
        crystal make of it. False: a (3, 3) tensor is the same, in the Cartesian frame, for all atoms.
    chi_su: standard uncertainty, in the unit and shape of chi, or one number for all temperatures of a table of
        numbers. Each value, and each of the six elements of a tensor, counts as independent, but for elements that the
        site of a local tensor ties together.

    A mole is one of fully occupied sites; partial occupancy is applied when fields are summed.

    Raises InputError for wrong shapes, values that are not finite, tensors that are not symmetric, an unknown unit,
    or temperatures that are not positive or occur twice.
    """

    chi: Any
    unit: str = "cm3/mol"
    temperatures_K: Any = None
    local: bool = False
    chi_su: Any = None

    def __post_init__(self) -> None:
        if self.unit not in UNITS:
            raise InputError(
                f"unknown unit of susceptibility {self.unit!r}. Known are: cm3/mol (cgs, emu per oersted and mole), "
                "m3/mol, muB/T."
            )
        table = self.temperatures_K is not None
        depth = np.ndim(self.chi) - (1 if table else 0)
        if depth not in (0, 2, 3):
            raise InputError(
                "chi must be a number, a (3, 3) tensor or (n_atoms, 3, 3) tensors"
                f"{' per temperature' if table else ''}, got shape {np.shape(self.chi)}."
            )
        if self.local and depth != 2:
            raise InputError("a local susceptibility is one (3, 3) tensor, that of the first atom of its label.")
        lead: tuple[int | None, ...] = (None,) if table else ()
        inner: tuple[int | None, ...] = {0: (), 2: (3, 3), 3: (None, 3, 3)}[depth]
        chi = as_floats("chi", self.chi, (*lead, *inner)) if lead or inner else np.array(as_float("chi", self.chi))
        if depth >= 2:
            gap = np.abs(chi - np.swapaxes(chi, -1, -2)).max(initial=0.0)
            if gap > TENSOR_TOLERANCE * np.abs(chi).max(initial=0.0):
                raise InputError(f"chi must be symmetric, its elements across the diagonal differ by {gap:.6g}.")
            chi = (chi + np.swapaxes(chi, -1, -2)) / 2
        su = np.zeros(chi.shape) if self.chi_su is None else self._checked_su(chi, table and depth == 0)
        if table:
            temperatures = as_floats("temperatures_K", self.temperatures_K, (None,))
            if len(temperatures) != len(chi) or not len(temperatures):
                raise InputError(f"temperatures_K has {len(temperatures)} values, but chi is for {len(chi)}.")
            if np.any(temperatures <= 0):
                raise InputError(f"temperatures_K must be positive, got {float(temperatures.min())!r}.")
            order = np.argsort(temperatures, kind="stable")
            temperatures, chi, su = temperatures[order], chi[order], su[order]
            twice = np.flatnonzero(np.diff(temperatures) == 0)
            if len(twice):
                raise InputError(f"temperatures_K holds {float(temperatures[twice[0]])!r} twice.")
            object.__setattr__(self, "temperatures_K", frozen(temperatures))
        object.__setattr__(self, "chi", frozen(chi))
        object.__setattr__(self, "chi_su", None if self.chi_su is None else frozen(su))

    def _checked_su(self, chi: FloatArray, numbers: bool) -> FloatArray:
        """chi_su in the shape of chi; numbers: chi is a table of numbers."""
        su = self.chi_su
        if np.ndim(su) == 0 and numbers:
            su = np.full(chi.shape, as_float("chi_su", su))
        su = as_floats("chi_su", su, chi.shape) if chi.ndim else np.array(as_float("chi_su", su))
        if np.any(su < 0):
            raise InputError(f"chi_su must hold numbers of at least 0, got {float(su.min())!r}.")
        if np.any(su > LARGEST_CHI_SU):
            raise InputError(f"chi_su must hold numbers of at most {LARGEST_CHI_SU:g}, got {float(su.max())!r}.")
        if chi.ndim >= 2 and np.abs(su - np.swapaxes(su, -1, -2)).max() > TENSOR_TOLERANCE * np.abs(su).max():
            raise InputError("chi_su must be symmetric, as chi is.")
        return su

    def words(self) -> str:
        """What is stated, for reports."""
        table = self.temperatures_K
        depth = np.ndim(self.chi) - (0 if table is None else 1)
        kind = {0: "isotropic", 2: "tensor", 3: "one tensor per atom"}[depth]
        kind += " of the first atom, turned for the others" if self.local else ""
        mean = np.atleast_1d(self.chi if depth == 0 else np.einsum("...aa->...", self.chi) / 3)
        mean = mean if depth < 3 else mean.reshape(-1, np.shape(self.chi)[-3]).mean(axis=1)
        if table is None:
            return f"{float(mean[0]):.6g} {self.unit}, {kind}"
        first, last = (f"{float(mean[i]):.6g} {self.unit} at {float(table[i]):g} K" for i in (0, -1))
        return f"{first} to {last}, {len(table)} temperatures, {kind}" if len(table) > 1 else f"{first}, {kind}"

    def at(self, temperature_K: float | None = None) -> FloatArray:
        """Shape (), (3, 3) or (n_atoms, 3, 3) float in µB/T per ion, at a temperature where chi is a table.

        Raises InputError where a table gets no temperature or one outside it, or a single value gets one.
        """
        shares = self._shares(temperature_K)
        if self.temperatures_K is None:
            return np.asarray(self.chi * UNITS[self.unit])
        return np.asarray(sum(share * self.chi[i] for i, share in shares) * UNITS[self.unit])

    def _shares(self, temperature_K: float | None) -> list[tuple[int, float]]:
        """Rows of the table that make the value at a temperature, and their shares; errors as `at`."""
        if self.temperatures_K is None:
            if temperature_K is not None:
                raise InputError(
                    f"the susceptibility is a single value, so temperature_K = {temperature_K!r} has no meaning. "
                    "Leave it out, or give temperatures_K with a table."
                )
            return [(0, 1.0)]
        low, high = float(self.temperatures_K[0]), float(self.temperatures_K[-1])
        if temperature_K is None:
            raise InputError(f"the susceptibility is a table from {low:g} to {high:g} K: give temperature_K.")
        wanted = as_float("temperature_K", temperature_K)
        if not low <= wanted <= high:
            raise InputError(
                f"temperature_K = {wanted!r} lies outside the table of the susceptibility, {low:g} to {high:g} K."
            )
        above = min(int(np.searchsorted(self.temperatures_K, wanted)), len(self.temperatures_K) - 1)
        below = max(0, above - 1)
        span = self.temperatures_K[above] - self.temperatures_K[below]
        share = float((wanted - self.temperatures_K[below]) / span) if span > 0 else 1.0
        return [(below, 1 - share), (above, share)] if below != above else [(above, 1.0)]

    def of_atoms(self, crystal: Crystal, name: str, temperature_K: float | None = None) -> FloatArray:
        """Shape (n_atoms, 3, 3) float in µB/T per ion, for the atoms of a label or element in order.

        Raises InputError for an unknown name, a number of tensors that is not that of the atoms, and a local tensor
        that has not the symmetry of its site or whose label covers atoms of several kinds.
        """
        sites = crystal.find(name)
        value = self.at(temperature_K)
        if value.ndim == 3 and len(value) != len(sites):
            raise InputError(f"{name}: {len(value)} susceptibility tensors for {len(sites)} atoms.")
        if self.local:
            return _carried(crystal, name, sites, value)
        return _for_all(value, len(sites))

    def steps_of_atoms(self, crystal: Crystal, name: str, temperature_K: float | None = None) -> FloatArray:
        """Shape (m, n_atoms, 3, 3) float in µB/T per ion. Changes by one standard uncertainty of each parameter.

        m is 0 without chi_su. Arguments and errors as `of_atoms`.
        """
        sites = crystal.find(name)
        found = [np.zeros((0, len(sites), 3, 3))]
        for row, share in self._shares(temperature_K) if self.chi_su is not None else ():
            su = self.chi_su if self.temperatures_K is None else self.chi_su[row]
            found.append(share * UNITS[self.unit] * self._steps(crystal, sites, np.asarray(su)))
        return np.concatenate(found)

    def _steps(self, crystal: Crystal, sites: tuple[int, ...], su: FloatArray) -> FloatArray:
        """Shape (m, n_atoms, 3, 3). Changes of the tensors of all atoms; su: Shape (), (3, 3) or (n_atoms, 3, 3)."""
        if su.ndim == 0:
            return _for_all(su, len(sites))[None]
        if su.ndim == 3:
            each = np.array([_tensors(np.diag(_elements(tensor))) for tensor in su])
            own = np.eye(len(sites))
            return np.asarray(np.einsum("ij,imab->imjab", own, each).reshape(-1, len(sites), 3, 3))
        if not self.local:
            steps = _tensors(np.diag(_elements(su)))
            return np.asarray(np.tile(steps[:, None], (1, len(sites), 1, 1)))
        turns = _turns(crystal, sites)
        allowed = np.mean([_on_elements(turn) for target, turn in turns if target == 0], axis=0)
        steps = _tensors(parameter_steps(allowed, _elements(su)).T)
        first = dict(reversed(turns))
        return np.stack([first[i] @ steps @ first[i].T for i in range(len(sites))], axis=1)


def _for_all(value: FloatArray, n: int) -> FloatArray:
    """Shape (n, 3, 3) float. Tensors of n atoms from a number, one tensor or n of them."""
    if value.ndim == 0:
        return np.asarray(np.tile(value * np.eye(3), (n, 1, 1)))
    return value if value.ndim == 3 else np.asarray(np.tile(value, (n, 1, 1)))


def _elements(tensor: FloatArray) -> FloatArray:
    """Shape (6,) float. The elements of a symmetric tensor in the order of ELEMENTS."""
    return np.array([tensor[i, j] for i, j in ELEMENTS])


def _tensors(elements: FloatArray) -> FloatArray:
    """Shape (m, 3, 3) float. Symmetric tensors of their elements (m, 6)."""
    out = np.zeros((len(elements), 3, 3))
    for n, (i, j) in enumerate(ELEMENTS):
        out[:, i, j] = out[:, j, i] = elements[:, n]
    return out


def _on_elements(turn: FloatArray) -> FloatArray:
    """Shape (6, 6) float. What a rotation does to the elements of a symmetric tensor."""
    return np.array([_elements(turn @ tensor @ turn.T) for tensor in _tensors(np.eye(6))]).T


def _turns(crystal: Crystal, sites: tuple[int, ...]) -> list[tuple[int, FloatArray]]:
    """For every operation that carries the first site onto one of them, which one, and its Cartesian rotation."""
    operations = operations_of(crystal)
    columns = crystal.cell.T
    home = crystal.positions[sites[0]]
    found = []
    for rotation, translation in zip(operations.rotations, operations.translations, strict=True):
        gap = crystal.positions[list(sites)] - (rotation @ home + translation)
        distance = np.linalg.norm((gap - np.round(gap)) @ crystal.cell, axis=1)
        target = int(np.argmin(distance))
        if distance[target] <= SAME_ATOM_A:
            found.append((target, np.asarray(columns @ rotation @ np.linalg.inv(columns))))
    return found


def _carried(crystal: Crystal, name: str, sites: tuple[int, ...], tensor: FloatArray) -> FloatArray:
    """Tensors of all atoms of a label from that of the first, by the operations of the crystal."""
    out = np.full((len(sites), 3, 3), np.nan)
    scale = TENSOR_TOLERANCE * float(np.abs(tensor).max())
    for target, turn in _turns(crystal, sites):
        turned = turn @ tensor @ turn.T
        if np.isnan(out[target, 0, 0]):
            out[target] = turned
        elif np.abs(out[target] - turned).max() > scale:
            raise InputError(
                f"{name}: the local susceptibility does not have the symmetry of its site (an operation changes it "
                f"by {np.abs(out[target] - turned).max():.3g} µB/T). Give one tensor per atom, or one that the site "
                "allows."
            )
    missing = np.flatnonzero(np.isnan(out[:, 0, 0]))
    if len(missing):
        raise InputError(
            f"{name}: no operation of the crystal carries its first atom onto number {int(missing[0]) + 1}, so a local "
            "susceptibility cannot be carried over. Name the distinct sites one by one."
        )
    return out
