"""Energy of a collinear pattern against the direction of its moments, and its anisotropy field.

With all moments along ±û the energy per cell is E(û) = û·Q·û − g·û (`latticedip.analysis.rotate`). It is listed along
the three great circles through two of the principal axes of Q each: easy, middle and hard.

Anisotropy field: turned by θ from the easy axis towards another principal axis the energy is ΔE sin²θ. A field H along
each moment's own direction (the staggered field of an antiferromagnet) gives −H Σ|m| cos θ, which has the same
curvature at θ = 0 if

    B_A = µ0 H_A = 2 ΔE / Σ|m|,

in an antiferromagnet of two sublattices 2K/(2M) with K the anisotropy of both and M the moment of one per volume, the
field of Keffer, Phys. Rev. 87, 608 (1952).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.analysis.families import common_axis
from latticedip.analysis.rotate import DEGENERATE, quadratic_form
from latticedip.checks import FloatArray, frozen
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.ordering.phases import phase_space
from latticedip.physics.boundary import boundary_words
from latticedip.physics.energy import dipolar_energy
from latticedip.sample import Sample
from latticedip.units import EV_PER_MUB_T

#: Names of the principal axes, lowest energy first.
AXES = ("easy", "middle", "hard")
#: The great circles: from one axis towards another.
CIRCLES = (("easy", "hard"), ("easy", "middle"), ("middle", "hard"))
#: Most steps of half a turn.
MOST_STEPS = 10_000
#: Phases at which a modulated moment is averaged, along each free direction.
PHASES = 512


@dataclass(frozen=True, eq=False)
class DirectionTable:
    """Energy of one collinear pattern against direction. Energies per ion hold the dipolar, shape and applied part.

    axes_cart: Shape (3, 3), rows are the easy, middle and hard axis (unit vectors, right-handed); where two of them
        are equally high, they are any two in their plane. axis_eV: Shape (3,) eV per cell without the applied field.
    angles_deg: Shape (n,), from the first axis of a circle towards the second.
    energy_eV_per_ion: Shape (3, n), along the circles of `CIRCLES`. directions_cart: Shape (3, n, 3).
    mean_size_muB: mean size of a moment per ion, over cells. notes: what a report repeats.
    """

    ordering: Ordering
    axes_cart: FloatArray
    axis_eV: FloatArray
    angles_deg: FloatArray
    energy_eV_per_ion: FloatArray
    directions_cart: FloatArray
    n_ions: float
    mean_size_muB: float
    error_bound_eV: float
    boundary: str
    notes: tuple[str, ...] = ()

    @property
    def anisotropy_T(self) -> tuple[float, float]:
        """B_A = 2 ΔE/Σ|m| in T for turns of the moments from the easy towards the middle and the hard axis."""
        scale = 2 / (EV_PER_MUB_T * self.n_ions * self.mean_size_muB)
        middle, hard = (self.axis_eV[1:] - self.axis_eV[0]) * scale
        return float(middle), float(hard)

    def rows(self) -> list[dict[str, Any]]:
        """One plain dict per circle and angle."""
        lowest = float(self.energy_eV_per_ion.min())
        return [
            {
                "ordering": self.ordering.name,
                "from": first,
                "towards": second,
                "angle_deg": float(angle),
                "direction_cart": self.directions_cart[c, i].tolist(),
                "direction_abc": self.ordering.crystal.to_crystal_axes(self.directions_cart[c, i]).tolist(),
                "energy_ueV_per_ion": float(self.energy_eV_per_ion[c, i]) * 1e6,
                "above_lowest_ueV_per_ion": (float(self.energy_eV_per_ion[c, i]) - lowest) * 1e6,
            }
            for c, (first, second) in enumerate(CIRCLES)
            for i, angle in enumerate(self.angles_deg)
        ]

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        middle, hard = self.anisotropy_T
        return {
            "ordering": self.ordering.name,
            "boundary": self.boundary,
            "axes": [
                {
                    "axis": name,
                    "direction_cart": axis.tolist(),
                    "energy_without_field_ueV_per_ion": float(energy) / self.n_ions * 1e6,
                }
                for name, axis, energy in zip(AXES, self.axes_cart, self.axis_eV, strict=True)
            ],
            "anisotropy_field_towards_middle_T": middle,
            "anisotropy_field_towards_hard_T": hard,
            "mean_moment_muB": self.mean_size_muB,
            "ions_per_cell": self.n_ions,
            "error_bound_ueV_per_ion": self.error_bound_eV / self.n_ions * 1e6,
            "rows": self.rows(),
            "notes": list(self.notes),
        }


def energy_against_direction(
    ordering: Ordering, *, sample: Sample | None = None, steps: int = 18, tol: float = 1e-10
) -> DirectionTable:
    """Energy of a collinear pattern for all directions of its moments along three great circles.

    sample: shape and applied field; None means N = 0. steps: of half a turn, 10° each as given. Half a turn is listed,
    or a whole one where an applied field tells a direction from its opposite. tol: as `dipole_tensor`.

    Raises InputError for a pattern that is not collinear, a number of steps that is not whole or not from 2 to 10,000,
    and as `dipolar_energy` does.
    """
    if isinstance(steps, bool) or not isinstance(steps, (int, np.integer)) or not 2 <= steps <= MOST_STEPS:
        raise InputError(f"steps must be a whole number from 2 to {MOST_STEPS}, got {steps!r}.")
    specimen = Sample() if sample is None else sample
    energy = dipolar_energy(ordering, sample=sample, tol=tol)
    axis = common_axis(ordering)
    if axis is None:
        raise InputError(
            f"ordering {ordering.name!r} is not collinear: its energy is no function of one direction. "
            "`rank --rotate` turns it as a whole."
        )
    form, linear = quadratic_form(ordering, specimen, tol, axis)
    same = DEGENERATE * float(np.abs(form).max()) + 2 * energy.error_bound_eV
    levels, axes, notes = _principal(form, same, ordering.crystal.axes_unit)
    whole = bool(np.abs(linear).max() > 1e-12 * float(np.abs(form).max()))
    angles = np.arange((2 if whole else 1) * steps + 1) * (180.0 / steps)
    turned = np.radians(angles)[:, None]
    vectors = {name: axes[i] for i, name in enumerate(AXES)}
    directions = np.array([np.cos(turned) * vectors[a] + np.sin(turned) * vectors[b] for a, b in CIRCLES])
    per_cell = np.einsum("cna,ab,cnb->cn", directions, form, directions) - directions @ linear
    return DirectionTable(
        ordering,
        frozen(axes),
        frozen(levels),
        frozen(angles),
        frozen(per_cell / energy.n_ions),
        frozen(directions),
        energy.n_ions,
        mean_size(ordering) / energy.n_ions,
        energy.error_bound_eV,
        boundary_words(ordering, sample),
        (*ordering.crystal.notes, *ordering.notes, *notes),
    )


def mean_size(ordering: Ordering) -> float:
    """Σ|m| over the cell in µB, occupancy counted and averaged over all cells; of any pattern."""
    phases = phase_space(ordering.k)
    turns = phases.listed
    if phases.n_free:
        # Even steps along each free phase, off the special points.
        counts = max(8, round(PHASES ** (1 / phases.n_free)))
        grid = (np.arange(counts) + 0.5) / counts
        free = np.stack(np.meshgrid(*([grid] * phases.n_free), indexing="ij"), axis=-1).reshape(-1, phases.n_free)
        turns = (turns[:, None] + free[None] @ phases.free).reshape(-1, len(ordering.k))
    total = 0.0
    for block in np.array_split(turns, max(1, len(turns) // 256)):
        moments = np.einsum("ck,kja->cja", np.exp(-2j * np.pi * block), ordering.mean_components).real
        total += float(np.linalg.norm(moments, axis=2).sum())
    return total / len(turns)


def _principal(form: FloatArray, same: float, crystal_axes: FloatArray) -> tuple[FloatArray, FloatArray, list[str]]:
    """Levels, principal axes as rows, and remarks; within a level of several axes, those nearest to a, b, c."""
    levels, vectors = np.linalg.eigh(form)
    axes = np.array(vectors.T)
    groups = [[0]]
    for i in (1, 2):
        if levels[i] - levels[i - 1] <= same:
            groups[-1].append(i)
        else:
            groups.append([i])
    notes = []
    for group in groups:
        if len(group) == 1:
            continue
        level = levels[group].mean()
        levels[group] = level
        basis = axes[group]
        chosen: list[FloatArray] = []
        for candidate in crystal_axes:
            inside = basis.T @ (basis @ candidate)
            inside -= sum((v * (v @ inside) for v in chosen), np.zeros(3))
            if np.linalg.norm(inside) > 0.1 and len(chosen) < len(group):
                chosen.append(inside / np.linalg.norm(inside))
        axes[group] = chosen
        words = "all directions are" if len(group) == 3 else f"{AXES[group[0]]} and {AXES[group[1]]} axis are"
        notes.append(f"{words} equally high without an applied field: the axes within are a choice")
    for i in range(3):
        largest = int(np.argmax(np.abs(axes[i]).round(9)))
        axes[i] *= np.sign(axes[i, largest])
    axes[np.abs(axes) < 1e-14] = 0.0
    if np.linalg.det(axes) < 0:
        axes[2] *= -1
    return levels, axes + 0.0, notes
