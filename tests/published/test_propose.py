"""Ground states in print, found from the crystal and its moments alone.

Constants of the cubic arrays: Luttinger and Tisza, Phys. Rev. 70, 954 (1946), erratum 72, 257 (1947); three decimals as
printed there, the longer ones recomputed by Ewald sums at three splittings and by planewise sums.
"""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from tests.published.helpers import CENTRINGS, CUBIC
from tests.reference.constants import DIPOLE_EV

A = 4.0
PYROCHLORE = np.array([[0, 0, 0], [0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 4
LOCAL = np.array([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]]) / np.sqrt(3)
EDGE = np.sqrt(2) / 4


def primitive(lattice: str, edge: float = A, symbol: str = "Mn") -> ld.Crystal:
    return ld.Crystal(edge * CUBIC[lattice][0], [[0, 0, 0]], [symbol])


def constant(row, per_cube: int, edge: float = A) -> float:
    """C in E = C n µ² per dipole, for 1 µB."""
    return row.energy.per_ion_eV * edge**3 / (DIPOLE_EV * per_cube)


def in_cube(row, lattice: str) -> np.ndarray:
    """The k of a row in units 2π/a of the cube."""
    return row.ordering.k @ np.linalg.inv(CUBIC[lattice][0]).T


def direction(row) -> np.ndarray:
    moment = row.ordering.components[0, 0].real
    return moment / np.linalg.norm(moment)


def test_simple_cubic_ground_state():
    """Antiparallel rods, k = (½,½,0), moments along the rods: −2.676."""
    for supercell in ((2, 2, 2), (1, 1, 1)):
        row = ld.propose(primitive("sc"), {"Mn": 1.0}, supercell=supercell).rows[0]
        assert constant(row, 1) == pytest.approx(-2.6767886844, abs=2e-9)
        assert sorted(np.abs(row.ordering.k[0])) == [0, 0.5, 0.5]
        assert np.abs(direction(row)) == pytest.approx(1.0 * (row.ordering.k[0] == 0), abs=1e-9)
    assert "mode" in row.origins


@pytest.mark.parametrize(
    ("lattice", "energy"),
    [
        ("bcc", -1.9859209288),  # printed −1.986
        ("fcc", -1.8075736340),  # printed −1.808
    ],
)
def test_centred_cubic_arrays(lattice, energy):
    per_cube = CUBIC[lattice][1]
    crystal = primitive(lattice)
    lowest = ld.propose(crystal, {"Mn": 1.0}, supercell=(2, 2, 2)).rows[0]
    assert constant(lowest, per_cube) == pytest.approx(-2 * np.pi / 3, abs=2e-9)
    assert np.all(lowest.ordering.k == 0)
    row = ld.propose(crystal, {"Mn": 1.0}, supercell=(2, 2, 2), net_zero=True).rows[0]
    assert constant(row, per_cube) == pytest.approx(energy, abs=2e-9)
    sphere = ld.propose(crystal, {"Mn": 1.0}, supercell=(2, 2, 2), sample=ld.Sample.sphere()).rows[0]
    assert constant(sphere, per_cube) == pytest.approx(energy, abs=2e-9)
    for found in (row, sphere):
        k, u = in_cube(found, lattice)[0], direction(found)
        # A vector of the star of (½,½,0) or (½,½,½), modulo the reciprocal lattice, with the moment across it.
        assert found.ordering.k.shape == (1, 3)
        if lattice == "fcc":
            assert np.abs(np.abs(k % 1) - 0.5).max() < 1e-9
            assert abs(u @ k) < 1e-9
        else:
            halves = np.abs(np.abs(k % 1) - 0.5) < 1e-9
            assert halves.sum() == 2
            assert np.abs(u[~halves]).max() < 1e-9
            assert np.abs(u[halves]) == pytest.approx([np.sqrt(0.5)] * 2, abs=1e-9)


def test_conventional_cubes_give_the_same():
    for lattice, energy in (("bcc", -1.9859209288), ("fcc", -1.0834664175)):
        # The cube itself holds the k = (1,0,0) states; doubled along two edges it also holds (½,½,0).
        crystal = ld.Crystal(A * np.eye(3), CENTRINGS[lattice], ["Mn"] * len(CENTRINGS[lattice]))
        supercell = (2, 2, 1) if lattice == "bcc" else (1, 1, 1)
        row = ld.propose(crystal, {"Mn": 1.0}, supercell=supercell, net_zero=True).rows[0]
        assert constant(row, CUBIC[lattice][1]) == pytest.approx(energy, abs=2e-9)


def test_rock_salt_type_two():
    """Moments in the (111) plane, degenerate there: Keffer and O'Sullivan, Phys. Rev. 108, 637 (1957), from memory.

    a = 4.4316 Å, 5 µB: 334.5 µeV per ion between [111] and the plane (recomputed).
    """
    a = 4.4316
    crystal = ld.Crystal(a * CUBIC["fcc"][0], [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "O"])
    k = (0.5, 0.5, 0.5)
    row = ld.propose(crystal, {"Mn": 5.0}, k=k).rows[0]
    assert abs(direction(row) @ [1, 1, 1]) < 1e-9
    assert "the direction of the moments is free in a plane; one short lattice direction is taken" in row.ordering.notes
    upright = ld.propose(crystal, {"Mn": 5.0}, k=k, along=(1, 1, 1)).rows[0]
    assert 1e6 * (upright.energy.per_ion_eV - row.energy.per_ion_eV) == pytest.approx(334.5, abs=0.05)
    # Without a k: what fcc allows without net moment.
    free = ld.propose(crystal, {"Mn": 5.0}, supercell=(2, 2, 2), net_zero=True).rows[0]
    assert free.energy.per_ion_eV == pytest.approx(row.energy.per_ion_eV, rel=1e-9)


def pyrochlore(edge: float = 10.0) -> ld.Crystal:
    cell = CUBIC["fcc"][0]
    return ld.Crystal(edge * cell, PYROCHLORE @ np.linalg.inv(cell), ["Dy"] * 4)


def in_D(row, edge: float = 10.0) -> float:
    return row.energy.per_ion_eV * (EDGE * edge) ** 3 / DIPOLE_EV


@pytest.mark.parametrize("how", [{"net_zero": True}, {"sample": ld.Sample.sphere()}], ids=["net zero", "sphere"])
def test_palmer_chalker_state(how):
    """Palmer and Chalker, PRB 62, 488 (2000), from memory: tangent to the sphere, parallel in pairs to edges.

    −2.04427 D per spin (recomputed).
    """
    row = ld.propose(pyrochlore(), {"Dy": 1.0}, **how).rows[0]
    assert in_D(row) == pytest.approx(-2.04427, abs=6e-6)
    assert row.ordering.k.tolist() == [[0, 0, 0]]
    moments = row.ordering.components[0].real
    assert np.abs(moments.sum(axis=0)).max() < 1e-9
    assert np.abs(np.einsum("ia,ia->i", moments, LOCAL)).max() < 1e-9
    assert np.sort(np.abs(moments), axis=1) == pytest.approx(np.tile([0, np.sqrt(0.5), np.sqrt(0.5)], (4, 1)), abs=1e-9)
    # Three states and their reverses.
    assert row.multiplicity == 6


def test_splayed_ferromagnet_without_demagnetizing_field():
    """−2.54852 D per spin at N = 0 (recomputed), below the Palmer-Chalker state."""
    result = ld.propose(pyrochlore(), {"Dy": 1.0})
    assert in_D(result.rows[0]) == pytest.approx(-2.54852, abs=6e-6)
    assert np.linalg.norm(result.rows[0].ordering.net_moment) > 3
    assert any(in_D(row) == pytest.approx(-2.04427, abs=6e-6) for row in result.rows)
    heisenberg = ld.propose(pyrochlore(), {"Dy": 1.0}, moments="heisenberg", restarts=8)
    assert in_D(heisenberg.rows[0]) == pytest.approx(-2.54852, abs=6e-6)
    assert "annealing" in heisenberg.rows[0].origins


@pytest.mark.parametrize("cell", ["cube", "two primitive cells"])
def test_spin_ice_ground_state(cell):
    """Melko, den Hertog and Gingras, PRL 87, 067203 (2001), from memory: chains at (0,0,1) 2π/a.

    −1.9475660 D per spin (recomputed).
    """
    if cell == "cube":
        sites = np.concatenate([PYROCHLORE + t for t in CENTRINGS["fcc"]])
        crystal, axes, supercell = ld.Crystal(10 * np.eye(3), sites, ["Dy"] * 16), np.tile(LOCAL, (4, 1)), (1, 1, 1)
    else:
        crystal, axes, supercell = pyrochlore(), LOCAL, (2, 2, 1)
    result = ld.propose(crystal, {"Dy": 1.0}, axes=axes, supercell=supercell)
    row = result.rows[0]
    assert in_D(row) == pytest.approx(-1.9475660, abs=2e-7)
    assert not row.tie
    if cell == "cube":
        moments = row.ordering.components[0].real.reshape(4, 4, 3)
        # Centrings with which the pattern keeps its sign, and with which it changes: k is one of the X points.
        signs = [round(float(np.vdot(moments[0], moments[i])) / 4) for i in range(4)]
        assert sorted(signs) == [-1, -1, 1, 1]
    else:
        k = row.ordering.k[0] @ np.linalg.inv(CUBIC["fcc"][0]).T
        assert sorted(np.abs(k).tolist()) == pytest.approx([0, 0, 1], abs=1e-9)
    annealed = ld.propose(crystal, {"Dy": 1.0}, axes=axes, supercell=supercell, method="annealing").rows[0]
    assert in_D(annealed) == pytest.approx(-1.9475660, abs=2e-7)
    assert annealed.multiplicity == row.multiplicity
