"""Modulated structures in superspace as data: their text as a file, their moments by definition, and their symmetry."""

from __future__ import annotations

import dataclasses
import itertools
import re
from pathlib import Path

import numpy as np
import pytest

import latticedip as ld

CELLS = np.array(list(itertools.product((-2, 0, 1, 5), (0, 3), (-1, 0, 2, 7))))


@dataclasses.dataclass
class Operation:
    """x' = R x + v, x4' = H·x + ε x4 + δ, with time reversal θ; written out by `text`."""

    R: object
    v: object = (0, 0, 0)
    H: object = (0, 0, 0)
    epsilon: int = 1
    delta: float = 0.0
    theta: int = 1

    @property
    def text(self) -> str:
        def row(coefficients, shift):
            terms = [f"{c:+d}*x{i + 1}" for i, c in enumerate(coefficients) if c]
            return "".join(terms) + (f"{shift:+.12g}" if shift else "")

        rows = [row([*line, 0], shift) for line, shift in zip(np.array(self.R), self.v, strict=True)]
        return ",".join([*rows, row([*self.H, self.epsilon], self.delta), f"{self.theta:+d}"])


ONE = np.eye(3, dtype=int)


@dataclasses.dataclass
class Structure:
    """A modulated structure as a file lists it; series[label][n] = cosine, sine along unit vectors a, b, c."""

    cell: tuple
    q: tuple
    operations: list
    sites: dict
    series: dict
    averages: dict = dataclasses.field(default_factory=dict)
    centrings: list = dataclasses.field(default_factory=lambda: [Operation(ONE)])
    extra: str = ""
    axes: str = "xyz"

    @property
    def text(self) -> str:
        orders = sorted({n for waves in self.series.values() for n in waves})
        names = ("length_a", "length_b", "length_c", "angle_alpha", "angle_beta", "angle_gamma")
        lines = ["data_wave"]
        lines += [f"_cell_{name} {value}" for name, value in zip(names, self.cell, strict=True)]
        lines += [
            "_cell_modulation_dimension 1",
            "loop_",
            *(f"_cell_wave_vector.{x}" for x in ("seq_id", "x", "y", "z")),
        ]
        lines += ["1 " + " ".join(f"{x:.17g}" for x in self.q)]
        for kind, listed in (("operation", self.operations), ("centering", self.centrings)):
            lines += ["loop_", *(f"_space_group_symop_magn_ssg_{kind}.{x}" for x in ("id", "algebraic"))]
            lines += [f"{i} {operation.text}" for i, operation in enumerate(listed, start=1)]
        lines += ["loop_", *(f"_atom_site_{x}" for x in ("label", "type_symbol", "fract_x", "fract_y", "fract_z"))]
        lines += [f"{x} {x[:2]} " + " ".join(f"{y:.17g}" for y in place) for x, place in self.sites.items()]
        if self.averages:
            lines += ["loop_", "_atom_site_moment.label", *(f"_atom_site_moment.crystalaxis_{x}" for x in "xyz")]
            lines += [f"{x} " + " ".join(f"{y:.17g}" for y in moment) for x, moment in self.averages.items()]
        lines += ["loop_", *(f"_atom_site_Fourier_wave_vector.{x}" for x in ("seq_id", "x", "y", "z", "q1_coeff"))]
        lines += [f"{n} " + " ".join(f"{n * x:.17g}" for x in self.q) + f" {n}" for n in orders]
        lines += ["loop_", "_atom_site_moment_Fourier.id"]
        lines += [f"_atom_site_moment_Fourier.{x}" for x in ("atom_site_label", "wave_vector_seq_id", "axis")]
        lines += ["_atom_site_moment_Fourier_param.cos", "_atom_site_moment_Fourier_param.sin"]
        number = itertools.count(1)
        lines += [
            f"{next(number)} {label} {n} {axis} {cosine:.17g} {sine:.17g}"
            for label, waves in self.series.items()
            for n, wave in waves.items()
            for axis, cosine, sine in zip(self.axes.split() if " " in self.axes else self.axes, *wave, strict=True)
        ]
        return "\n".join(lines) + "\n" + self.extra

    def read(self, folder) -> ld.Ordering:
        path = Path(folder) / "wave.mcif"
        path.write_text(self.text)
        return ld.read_ordering(path)


def unit_axes(crystal) -> np.ndarray:
    return crystal.cell / np.linalg.norm(crystal.cell, axis=1)[:, None]


def formula(structure, label, x4) -> np.ndarray:
    """M_0 + Σ M_c cos 2πn x4 + M_s sin 2πn x4, crystal-axis components (the definition in the dictionaries)."""
    moment = np.array(structure.averages.get(label, (0, 0, 0)), dtype=float) + np.zeros((len(x4), 3))
    for n, (cosine, sine) in structure.series.get(label, {}).items():
        moment += np.outer(np.cos(2 * np.pi * n * x4), cosine) + np.outer(np.sin(2 * np.pi * n * x4), sine)
    return moment


def shifted(ordering, q, t) -> ld.Ordering:
    """The same modulation with x4 moved on by t: harmonic n of the wave turns by n t."""
    components = np.array(ordering.components)
    for i, k in enumerate(ordering.k):
        n = next(n for n in range(9) if np.abs(k - n * np.array(q)).max() < 1e-9)
        components[i] *= np.exp(-2j * np.pi * n * t)
    return dataclasses.replace(ordering, components=components)


def atom_at(crystal, position) -> tuple[int, np.ndarray]:
    gaps = position - crystal.positions
    whole = np.round(gaps)
    index = int(np.argmin(np.abs(gaps - whole).max(axis=1)))
    assert np.abs(gaps[index] - whole[index]).max() < 1e-6
    return index, whole[index]


def check(structure, ordering) -> None:
    """The listed atoms follow the formula in many cells, and real space is invariant under every operation.

    An operation takes real space at t to real space at ε t + δ − q·v.
    """
    crystal, q = ordering.crystal, np.array(structure.q)
    axes, lengths = unit_axes(crystal), np.linalg.norm(crystal.cell, axis=1)
    for label, place in structure.sites.items():
        index, offset = atom_at(crystal, np.array(place))
        expected = formula(structure, label, (CELLS + np.array(place)) @ q) @ axes
        assert ordering.moments(CELLS + offset.astype(int))[:, index] == pytest.approx(expected, abs=1e-9)
    t = 0.1234
    here = shifted(ordering, q, t)
    for first, second in itertools.product(structure.centrings, structure.operations):
        R, v = np.array(second.R), np.array(second.v) + first.v
        epsilon, delta = second.epsilon, second.delta + first.delta
        there = shifted(ordering, q, epsilon * t + delta - q @ v)
        turn = first.theta * second.theta * round(np.linalg.det(R)) * R * lengths[:, None] / lengths[None, :]
        for atom, place in enumerate(crystal.positions):
            image, offset = atom_at(crystal, R @ place + v)
            moved = CELLS @ R.T + offset
            before = here.moments(CELLS)[:, atom] @ np.linalg.inv(axes)
            after = there.moments(moved.astype(int))[:, image] @ np.linalg.inv(axes)
            assert after == pytest.approx(before @ turn.T, abs=1e-9)


A = [1.2, -0.7, 2.1], [0.4, 1.9, -0.6]
B = [-0.3, 0.8, 0.5], [1.1, 0.2, -0.9]
TWO_C = [[-1, 0, 0], [0, -1, 0], [0, 0, 1]]
TWO_A = [[1, 0, 0], [0, -1, 0], [0, 0, -1]]
TWO_B = [[-1, 0, 0], [0, 1, 0], [0, 0, -1]]
PLACES = {"Mn1": (0.13, 0.22, 0.31), "Fe1": (0.62, 0.55, 0.87)}
STRUCTURES = {
    "one atom, one helix": Structure((4, 5, 6, 90, 90, 90), (0, 0, 0.2137), [Operation(ONE)], {"Mn1": (0.1, 0.2, 0.3)},
        {"Mn1": {1: ([3, 0, 0], [0, 3, 0])}}),
    "triclinic, two atoms, three harmonics, average": Structure(
        (4.1, 5.2, 6.3, 83, 97, 104), (0.31, -0.17, 0.2137), [Operation(ONE)], PLACES,
        {"Mn1": {1: A, 2: B, 5: A}, "Fe1": {2: A}}, {"Mn1": (0.5, -1, 2), "Fe1": (1, 0, 0)}),
    "twofold axes that reverse the wave": Structure(
        (4, 5, 6, 90, 90, 90), (0, 0, 0.2137),
        [Operation(ONE), Operation(TWO_C, (0, 0, 0.5), delta=0.5), Operation(TWO_A, epsilon=-1, delta=0.25, theta=-1),
         Operation(TWO_B, (0, 0, 0.5), epsilon=-1, delta=0.75, theta=-1)],
        PLACES, {"Mn1": {1: A, 3: B}, "Fe1": {1: B}}, {"Mn1": (1, 2, 3)}),
    "inversion, which reverses the wave, and an anticentring": Structure(
        (4, 5, 6, 90, 105, 90), (0.31, 0, 0.2137), [Operation(ONE), Operation(-ONE, epsilon=-1)], PLACES,
        {"Mn1": {1: A, 3: B}}, centrings=[Operation(ONE), Operation(ONE, delta=0.5, theta=-1)]),
    "half a reciprocal vector along b": Structure(
        (4, 5, 6, 90, 90, 90), (0.31, 0.5, 0),
        [Operation(ONE), Operation(TWO_A, (0.5, 0, 0), (0, -1, 0), delta=0.5),
         Operation(TWO_C, epsilon=-1, H=(0, 0, 0), theta=-1),
         Operation(TWO_B, (0.5, 0, 0), (0, 1, 0), -1, 0.5, -1)],
        PLACES, {"Mn1": {1: A, 2: B}, "Fe1": {1: A}}, {"Fe1": (1, -2, 0.5)}),
    "threefold axis with q = (1/3, 1/3, g)": Structure(
        (5, 5, 8, 90, 90, 120), (1 / 3, 1 / 3, 0.0821),
        [Operation(ONE), Operation([[0, -1, 0], [1, -1, 0], [0, 0, 1]], (0, 0, 1 / 3), (0, -1, 0), delta=1 / 3),
         Operation([[-1, 1, 0], [-1, 0, 0], [0, 0, 1]], (0, 0, 2 / 3), (-1, 0, 0), delta=2 / 3)],
        PLACES, {"Mn1": {1: A, 2: B}}, {"Mn1": (0.1, 0.2, 2)}),
    "axes of unequal length mixed": Structure(
        (4, float(np.hypot(4, 7)), 6, 90, 90, float(np.degrees(np.arctan2(7, 4)))), (0.31, 0.31, 0.2),
        [Operation(ONE), Operation([[1, 2, 0], [0, -1, 0], [0, 0, 1]], (0, 0, 0.5), delta=0.5, theta=-1)],
        PLACES, {"Mn1": {1: A, 2: B}}, {"Fe1": (1, 2, 3)}),
    "body-centred, the centring moves the wave": Structure(
        (4, 5, 6, 90, 90, 90), (0, 0, 0.2137), [Operation(ONE), Operation(TWO_C, theta=-1)], PLACES,
        {"Mn1": {1: A, 4: B}}, {"Mn1": (1, 2, 3)}, [Operation(ONE), Operation(ONE, (0.5, 0.5, 0.5), delta=0.5)]),
    "special position on an axis along the wave": Structure(
        (5, 5, 8, 90, 90, 90), (0, 0, 0.31), [Operation(ONE), Operation(TWO_C, delta=0.5)], {"Mn1": (0.5, 0, 0.2)},
        {"Mn1": {1: ([1, -2, 0], [0.5, 3, 0]), 2: ([0, 0, 1], [0, 0, -2])}}, {"Mn1": (0, 0, 1.5)}),
    "special position at an inversion centre": Structure(
        (4, 5, 6, 80, 95, 102), (0.31, 0.12, 0.2),
        [Operation(ONE), Operation(-ONE, (0.5, 0, 0), epsilon=-1, delta=0.3)],
        # x4 → 0.3 − x4 leaves cos 2π(x4 − 0.15).
        {"Mn1": (0.25, 0.5, 0)},
        {"Mn1": {1: (np.cos(2 * np.pi * 0.15) * np.array(A[0]), np.sin(2 * np.pi * 0.15) * np.array(A[0]))}},
        {"Mn1": (1, 2, 3)}),
    "special position, x4 shifted by the position": Structure(
        (4, 5, 6, 90, 90, 90), (0.31, 0.5, 0), [Operation(ONE), Operation(TWO_A, H=(0, -1, 0))],
        # x4 → x4 − x2: at y = 1/2 half a turn, so that a wave across the axis is kept and one along it is not.
        {"Mn1": (0.1, 0.5, 0)}, {"Mn1": {1: ([0, 2, 1], [0, -1, 0.5]), 2: ([1.5, 0, 0], [0.3, 0, 0])}},
        {"Mn1": (1, 0, 0)}),
}  # fmt: skip


BASE = STRUCTURES["twofold axes that reverse the wave"]


def same(first, second, tolerance=1e-9):
    assert first.crystal.positions == pytest.approx(second.crystal.positions)
    assert first.k == pytest.approx(second.k)
    assert first.components == pytest.approx(second.components, abs=tolerance)


def read_text(text, folder, name="a.mcif"):
    path = Path(folder) / name
    path.write_text(text)
    return ld.read_ordering(path)


def replaced(text, *pairs):
    for old, new in pairs:
        assert old in text, old
        text = text.replace(old, new)
    return text


def loops(text):
    """The text cut at its loops."""
    return re.split(r"(?<=\n)(?=loop_\n)", text)


def swap_series(text, new):
    """The text with its Fourier loop exchanged."""
    parts = [part for part in loops(text) if "_atom_site_moment_Fourier." not in part]
    return "".join(parts) + new


def fourier_rows(text):
    part = next(part for part in loops(text) if "_atom_site_moment_Fourier." in part)
    return [line.split() for line in part.splitlines() if line and not line.startswith(("_", "loop_"))]
