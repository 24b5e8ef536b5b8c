"""What a search for orderings is given: moments of a supercell, their couplings, and the constraints on them.

Words used here, beside those of `physics.supercell`:

unit         what one free sign or vector stands for: one moment of the supercell, or, at a given k, one site with all
             its copies, which follow with the sign cos 2πk·R
weight       occupancy times moment size of a unit, µB
form         the energy of unit signs or vectors as ½ s·Q·s + g·s, in eV per supercell
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, as_floats
from latticedip.errors import InputError
from latticedip.ordering.model import snap_k
from latticedip.ordering.symmetry import SupercellSymmetry, pattern_orbit
from latticedip.physics.boundary import NET_MOMENT_MUB
from latticedip.physics.supercell import Supercell, SupercellField
from latticedip.sample import Sample
from latticedip.units import EV_PER_MUB_T

#: Longest lists of permutations that are written out; beyond, copies are counted by correlations.
MOST_NUMBERS = 30_000_000


@dataclass(frozen=True, eq=False)
class Found:
    """One arrangement that a search brought up.

    moments: Shape (n_moments, 3) float in µB, over the supercell. origin: "exhaustive", "symmetry", "mode" or
    "annealing". multiplicity: how many arrangements of the searched set are the same by symmetry, itself included.
    notes: sentences a report must repeat.
    """

    moments: FloatArray
    origin: str
    multiplicity: int
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class SearchProblem:
    """Moments, couplings and constraints of one search; frozen.

    supercell: the Supercell. sizes: Shape (n_sites,) float, µB per magnetic site. sample: shape and applied field.
    k: Shape (3,) where the pattern repeats with cos 2πk·R, None where every moment of the supercell is free.
    axes: Shape (n_sites, 3) unit vectors along which the moments lie, None where they are free or common to all.
    fixed: Shape (n_units,) int8, the signs that are given, 0 where free. net_zero: only arrangements without moment.
    tol: as `dipole_tensor`. whole: table of `Supercell.tensors` with the shape of the sample in it.
    """

    supercell: Supercell
    sizes: FloatArray
    sample: Sample
    whole: FloatArray
    k: FloatArray | None = None
    axes: FloatArray | None = None
    fixed: np.ndarray | None = None
    net_zero: bool = False

    @property
    def n_sites(self) -> int:
        """Magnetic sites in a cell."""
        return len(self.supercell.sites)

    @property
    def n_units(self) -> int:
        """Free or fixed units."""
        return self.n_sites if self.k is not None else self.supercell.n_moments

    @cached_property
    def repeat(self) -> tuple[int, int, int]:
        """Cells over which the units run."""
        return (1, 1, 1) if self.k is not None else self.supercell.repeat

    @cached_property
    def cell_signs(self) -> FloatArray:
        """Shape (n_cells,) float. cos 2πk·R of every cell at a given k, else one."""
        if self.k is None:
            return np.ones(self.supercell.n_cells)
        return np.asarray(np.round(np.cos(2 * np.pi * (self.supercell.cells @ self.k))))

    @cached_property
    def unit_axes(self) -> FloatArray | None:
        """Shape (n_units, 3) float, or None as ``axes``."""
        if self.axes is None:
            return None
        return np.tile(self.axes, (self.n_units // self.n_sites, 1))

    @cached_property
    def weights(self) -> FloatArray:
        """Shape (n_units,) float. Occupancy times size, µB."""
        one = self.sizes * self.supercell.occupancies[: self.n_sites]
        return np.tile(one, self.n_units // self.n_sites)

    @cached_property
    def copies(self) -> int:
        """Moments that each unit stands for."""
        return self.supercell.n_moments // self.n_units

    @cached_property
    def has_uniform_part(self) -> bool:
        """True unless k makes every net moment vanish."""
        return bool(self.k is None or np.all(self.cell_signs == 1))

    @cached_property
    def tensors(self) -> FloatArray:
        """Shape (n_unit_cells, n, n, 6) float in T/µB. Couplings between units, the copies of each summed."""
        if self.k is None:
            return self.whole
        return np.einsum("d,dijc->ijc", self.cell_signs, self.whole)[None]

    @cached_property
    def table(self) -> FloatArray:
        """Shape (n_unit_cells, n, n, 6) float in eV. Form of unit vectors, −copies · w_i w_j T_ij."""
        one = self.weights[: self.n_sites]
        return -EV_PER_MUB_T * self.copies * self.tensors * (one[:, None] * one[None])[None, :, :, None]

    @cached_property
    def linear(self) -> FloatArray:
        """Shape (n_units, 3) float in eV. g of unit vectors: −w B_applied, zero where k leaves no net moment."""
        if not self.has_uniform_part:
            return np.zeros((self.n_units, 3))
        return -EV_PER_MUB_T * self.copies * self.weights[:, None] * self.sample.applied_T[None]

    @cached_property
    def dense(self) -> FloatArray:
        """Shape (n_units, n_units, 6) float in eV. The form between all units; for few of them."""
        if self.k is not None:
            return self.table[0]
        places = self.supercell.differences()
        return np.asarray(self.table[places].transpose(0, 2, 1, 3, 4).reshape(self.n_units, self.n_units, 6))

    @cached_property
    def symmetry(self) -> SupercellSymmetry:
        """Operations on all moments of the supercell, that keep sizes, sample and field."""
        tensor = self.sample.demagnetizing_tensor
        return SupercellSymmetry.of(
            self.supercell.crystal,
            self.supercell.repeat,
            self.supercell.sites,
            self.sizes * self.supercell.occupancies[: self.n_sites],
            tensor=tensor if np.any(tensor) else None,
            field=self.sample.applied_T,
        )

    @cached_property
    def field(self) -> SupercellField:
        """Fields and energies of all moments of the supercell."""
        return SupercellField(self.supercell, self.whole, self.sample.applied_T)

    @cached_property
    def unit_permutations(self) -> tuple[np.ndarray, np.ndarray]:
        """Signed permutations of the units, as `SupercellSymmetry.signed_permutations`, that keep the fixed signs."""
        axes = None if self.axes is None else np.tile(self.axes, (self.supercell.n_cells, 1))
        inverse, factors = self.symmetry.signed_permutations(axes)
        if self.k is not None:
            inverse, factors = self._on_sites(inverse, factors)
        if self.fixed is not None:
            images = factors * self.fixed[inverse]
            keeps = np.all(images == self.fixed, axis=1)
            inverse, factors = inverse[keeps], factors[keeps]
        return np.ascontiguousarray(inverse), np.ascontiguousarray(factors)

    def _on_sites(self, inverse: np.ndarray, factors: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Signed permutations of the sites, from those of the moments that carry cos 2πk·R into itself."""
        n = self.n_sites
        signs = self.cell_signs.astype(np.int8)
        sites = (inverse % n).reshape(len(inverse), -1, n)
        total = factors.reshape(sites.shape) * signs[inverse // n].reshape(sites.shape) * signs[None, :, None]
        keeps = np.all(total == total[:, :1], axis=(1, 2)) & np.all(sites == sites[:, :1], axis=(1, 2))
        both = np.unique(np.concatenate([sites[keeps, 0], total[keeps, 0].astype(np.int64)], axis=1), axis=0)
        same = np.concatenate([np.arange(n), np.ones(n, dtype=np.int64)])
        both = both[np.any(both != same, axis=1)]
        return both[:, :n], both[:, n:].astype(np.int8)

    def spread(self, units: FloatArray) -> FloatArray:
        """Shape (n_moments, 3) float in µB. Moments of the supercell from unit vectors (n_units, 3)."""
        sizes = np.tile(self.sizes, self.supercell.n_cells)[:, None]
        if self.k is None:
            return np.asarray(sizes * units)
        return np.asarray(sizes * (self.cell_signs[:, None, None] * units[None]).reshape(-1, 3))

    def form_of(self, units: FloatArray) -> tuple[float, FloatArray]:
        """Energy in eV per supercell of unit vectors (n_units, 3), and its slope, shape (n_units, 3)."""
        if self.k is not None or self.supercell.n_cells == 1:
            slope = np.empty(units.shape)
            t = self.table[0]
            for a, columns in enumerate(((0, 5, 4), (5, 1, 3), (4, 3, 2))):
                slope[:, a] = sum(t[..., c] @ units[:, b] for b, c in enumerate(columns))
        else:
            moments = units * np.tile(self.sizes, self.supercell.n_cells)[:, None]
            slope = -EV_PER_MUB_T * self.weights[:, None] * self.field.fields(moments)
        energy = 0.5 * float(np.vdot(units, slope)) + float(np.vdot(units, self.linear))
        return energy, slope + self.linear

    def axis_form(self, signs: np.ndarray) -> tuple[FloatArray, FloatArray]:
        """(Q, g), shapes (3, 3) and (3,), in eV: the energy of a pattern along a common axis u is u·Q·u − g·u."""
        s = signs.astype(float)
        rows = []
        for axis in np.eye(3):
            slope = self.form_of(s[:, None] * axis)[1] - self.linear
            rows.append(0.5 * s @ slope)
        form = np.array(rows)
        return 0.5 * (form + form.T), -(s @ self.linear)

    def multiplicity(self, signs: np.ndarray | None, moments: FloatArray) -> int:
        """How many arrangements of the searched set are the same as one by symmetry, itself included.

        signs: Shape (n_units,), of a sign pattern; None for moments that point anywhere. moments: (n_moments, 3).
        """
        if signs is None:
            return self.symmetry.orbit_size(moments)
        if self.permutation_numbers <= MOST_NUMBERS:
            return pattern_orbit(np.asarray(signs, dtype=np.int8), *self.unit_permutations)
        if self.axes is not None:
            return self.symmetry.keeping_axes(np.tile(self.axes, (self.supercell.n_cells, 1))).orbit_size(moments)
        flat = (self.cell_signs[:, None] * np.reshape(signs, (-1, self.n_sites))).ravel()
        return self.symmetry.of_signs().orbit_size(flat[:, None] * np.array([0.0, 0.0, 1.0]))

    @property
    def permutation_numbers(self) -> int:
        """Size of the lists of `unit_permutations` before any is dropped."""
        return 2 * len(self.symmetry.operations) * self.supercell.n_cells * self.supercell.n_moments

    def net_moment(self, moments: FloatArray) -> FloatArray:
        """Shape (3,) float in µB per supercell, occupancy applied."""
        return np.asarray((moments * self.supercell.occupancies[:, None]).sum(axis=0))

    def admits(self, moments: FloatArray) -> bool:
        """True where the net moment fits: always, or zero within 1e-6 µB per cell with ``net_zero``."""
        limit = NET_MOMENT_MUB * self.supercell.n_cells
        return not self.net_zero or bool(np.linalg.norm(self.net_moment(moments)) <= limit)


class Hold:
    """Brings the net moment of unit vectors to zero in a descent (augmented Lagrangian: Hestenes 1969, Powell 1969).

    weights: Shape (n_units,), µB. active: False where nothing is held, so that one round is all.
    """

    def __init__(self, weights: FloatArray, active: bool) -> None:
        self.weights = weights
        self.rounds = 30 if active else 1
        self._multiplier = np.zeros(3)
        self._stiffness = 10.0 / max(float((weights**2).sum()), 1e-300) if active else 0.0
        self._last = np.inf

    def penalty(self, units: FloatArray) -> tuple[float, FloatArray]:
        """What is added to an energy of order one, and its slope (n_units, 3)."""
        net = self.weights @ units
        value = self._multiplier @ net + 0.5 * self._stiffness * net @ net
        return float(value), self.weights[:, None] * (self._multiplier + self._stiffness * net)

    def is_done(self, units: FloatArray) -> bool:
        """True once the net moment is zero, or where it will not become so; prepares the next round otherwise."""
        net = self.weights @ units
        size = float(np.linalg.norm(net))
        if size < 1e-9 * float(self.weights.sum()) or self._stiffness == 0.0:
            return True
        # Multipliers bring a net moment that can vanish down by a factor per round; else there is no such state here.
        stuck = self._last < np.inf and size > 0.9 * self._last and size > 1e-3 * float(self.weights.sum())
        self._multiplier = self._multiplier + self._stiffness * net
        self._stiffness *= 2.0
        self._last = size
        return stuck


def sign_list(name: str, value: Any, n_sites: int, n_units: int) -> np.ndarray | None:
    """Shape (n_units,) int8. Given signs +1 or −1, 0 where free; a list for one cell holds in every cell.

    Raises InputError for another length or other values.
    """
    if value is None:
        return None
    raw = np.asarray(value)
    if raw.ndim != 1 or len(raw) not in (n_sites, n_units) or raw.dtype.kind not in "biuf":
        wanted = f"{n_sites}" if n_sites == n_units else f"{n_sites} (one per magnetic site) or {n_units}"
        raise InputError(f"{name} must hold {wanted} signs (1, -1, or 0 where free), got shape {raw.shape}.")
    if not np.all(np.isin(raw, (-1, 0, 1))):
        raise InputError(f"{name} may hold 1, -1 and 0 only, got {raw.tolist()}.")
    if len(raw) != n_units:
        raw = np.tile(raw, n_units // n_sites)
    return np.asarray(raw, dtype=np.int8) if np.any(raw) else None


def unit_vectors(name: str, value: Any, n_sites: int) -> FloatArray:
    """Shape (n_sites, 3) float. Directions of length one; raises InputError for another shape or a zero vector."""
    vectors = as_floats(name, value, (None, 3))
    if len(vectors) != n_sites:
        raise InputError(f"{name} must hold one direction per magnetic site ({n_sites}), got {len(vectors)}.")
    lengths = np.linalg.norm(vectors, axis=1)
    if np.any(lengths == 0):
        raise InputError(f"{name} holds a zero vector (entry {int(np.argmin(lengths)) + 1}), which has no direction.")
    return np.asarray(vectors / lengths[:, None])


def wave_list(value: Any) -> FloatArray | None:
    """Shape (n_k, 3) float. One k or several, each with 2k a whole vector; None stays None.

    Raises InputError for other shapes and for a k that one sign per site cannot follow.
    """
    if value is None:
        return None
    raw = np.asarray(value)
    waves = snap_k(as_floats("k", raw[None] if raw.ndim == 1 else raw, (None, 3)))
    if not len(waves):
        raise InputError("k is an empty list; give at least one wave vector, or leave it out.")
    for wave in waves:
        if np.any(2 * wave != np.round(2 * wave)):
            raise InputError(
                f"k = {wave.tolist()}: a pattern of signs follows k only where every coordinate is a whole number or a "
                "half. Search a supercell instead, or look for modes."
            )
    return waves


def wave_words(waves: Sequence[Any] | FloatArray) -> str:
    """Wave vectors in words, such as "k = (1/2, 1/2, 0)"; many are only counted."""
    if len(waves) > 2:
        return f"{len(waves)} k vectors"
    return "k = " + " and ".join("(" + ", ".join(_fraction(float(x)) for x in wave) + ")" for wave in waves)


def _fraction(value: float) -> str:
    for denominator in range(1, 25):
        numerator = value * denominator
        if abs(numerator - round(numerator)) < 1e-9:
            return f"{round(numerator)}" if denominator == 1 else f"{round(numerator)}/{denominator}"
    return f"{value:.5g}"
