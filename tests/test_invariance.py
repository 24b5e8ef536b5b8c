"""The same physics whatever the choice of cell, supercell, origin, order of atoms, orientation or splitting."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.sums.bulk import lattice_sum
from tests.reference.cells import random_rotation
from tests.reference.constants import DIPOLE_T

# Cells, offsets and k are whole numbers of 1/64, so that sums of cell vectors are exact in doubles and no test has
# to allow for the rounding of its own input.
GRAIN = 64.0
quick = settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.filter_too_much])


def grains(low: float, high: float) -> st.SearchStrategy[float]:
    return st.integers(int(low * GRAIN), int(high * GRAIN)).map(lambda n: n / GRAIN)


@st.composite
def cells(draw) -> np.ndarray:
    cell = np.array(draw(st.lists(grains(-9, 9), min_size=9, max_size=9))).reshape(3, 3) + np.diag([0.0, 4.0, 8.0])
    volume = abs(np.linalg.det(cell))
    assume(volume > 30 and volume > 0.05 * np.prod(np.linalg.norm(cell, axis=1)))
    return cell


@st.composite
def unimodular(draw) -> np.ndarray:
    matrix = np.eye(3, dtype=int)
    for _ in range(draw(st.integers(1, 4))):
        i, j = draw(st.sampled_from(list(itertools.permutations(range(3), 2))))
        step = np.eye(3, dtype=int)
        step[i, j] = draw(st.integers(-3, 3))
        matrix = step @ matrix
    return matrix


vectors = st.lists(grains(-12, 12), min_size=3, max_size=3).map(np.array)
waves = st.one_of(
    st.just(np.zeros(3)),
    st.sampled_from([(0.5, 0, 0), (0.5, 0.5, 0), (0.5, 0.5, 0.5)]).map(np.array),
    st.lists(grains(-1, 1), min_size=3, max_size=3).map(np.array),
)


def close(found, expected, tol=1e-10, extra=0.0):
    """Each tensor within the bounds of two evaluations at ``tol``, and ``extra`` (T/µB) for rounded inputs."""
    found, expected = np.asarray(found), np.asarray(expected)
    scale = np.maximum(1.0, np.abs(expected).max(axis=(-1, -2)))
    return bool(np.all(np.abs(found - expected).max(axis=(-1, -2)) <= 2 * tol * scale + extra))


@quick
@given(cells(), vectors, waves, unimodular())
def test_other_primitive_cell(cell, offset, k, matrix):
    assume(np.abs(matrix @ cell).max() < 500)
    one = ld.dipole_tensor(cell, [offset], k, tol=1e-12)
    other = ld.dipole_tensor(matrix @ cell, [offset], matrix @ k, tol=1e-12)
    assert close(other, one, 1e-12)


@quick
@given(cells(), vectors, waves, st.sampled_from([(2, 1, 1), (1, 3, 1), (2, 1, 2)]))
def test_supercell(cell, offset, k, repeat):
    multiple = np.array(repeat, dtype=float)[:, None] * cell
    steps = np.array(list(itertools.product(*(range(n) for n in repeat))), dtype=float)
    parts = ld.dipole_tensor(multiple, offset - steps @ cell, k * np.array(repeat), tol=1e-12)
    phases = np.exp(-2j * np.pi * (steps @ k))
    assert close(np.einsum("n,nab->ab", phases, parts), ld.dipole_tensor(cell, [offset], k)[0])


@quick
@given(cells(), vectors, waves, st.lists(st.integers(-40, 40), min_size=3, max_size=3).map(np.array))
def test_bloch_phase(cell, offset, k, step):
    here, there = ld.dipole_tensor(cell, [offset, offset + step @ cell], k, tol=1e-12)
    assert close(there, here * np.exp(-2j * np.pi * ((step @ k) % 1.0)), 1e-12)


@quick
@given(cells(), vectors, waves)
def test_opposite_offset_and_opposite_k_conjugate(cell, offset, k):
    there = ld.dipole_tensor(cell, [offset], k, tol=1e-12)
    assert close(ld.dipole_tensor(cell, [-offset], k, tol=1e-12), there.conj(), 1e-12)
    assert close(ld.dipole_tensor(cell, [offset], -k, tol=1e-12), there.conj(), 1e-12)
    assert close(np.swapaxes(there, 1, 2), there, 1e-15)


@quick
@given(cells(), vectors, waves)
def test_trace_is_that_of_the_background(cell, offset, k):
    # Laplace: each dipole's own tensor has no trace; the term dropped at k = 0 leaves 4π/V.
    trace = np.trace(ld.dipole_tensor(cell, [offset], k)[0])
    uniform = np.all(k == np.round(k))
    assert abs(trace - (4 * np.pi * DIPOLE_T / abs(np.linalg.det(cell)) if uniform else 0.0)) < 1e-9


@quick
@given(cells(), vectors, waves, st.integers(0, 10**6))
def test_rotation(cell, offset, k, seed):
    turn = random_rotation(np.random.default_rng(seed))
    straight = ld.dipole_tensor(cell, [offset], k, tol=1e-12)[0]
    turned = ld.dipole_tensor(cell @ turn.T, [turn @ offset], k, tol=1e-12)[0]
    # Turning rounds every coordinate by 1e-16 of the farthest vector; the tensor falls as the distance to the fourth.
    near = nearest(cell, offset)
    assume(near > 0.05)  # nearer than any probe comes the rounding of the input alone is large
    rounding = 1e-14 * (np.abs(cell).max() + np.abs(offset).max()) * 6 * DIPOLE_T * (1 + near**-4)
    assert close(turned, turn @ straight @ turn.T, 1e-12, rounding)


def nearest(cell, offset):
    home = offset - np.round(offset @ np.linalg.inv(cell)) @ cell
    steps = np.array(list(itertools.product((-2, -1, 0, 1, 2), repeat=3))) @ cell
    distance = np.linalg.norm(home - steps, axis=1)
    return float(distance[distance > 1e-6].min())


@quick
@given(cells(), vectors, waves, st.floats(0.5, 2.0))
def test_splitting(cell, offset, k, factor):
    chosen = lattice_sum(cell, k, 1e-10)
    other = lattice_sum(cell, k, 1e-10, alpha=factor * chosen.alpha)
    origin = np.zeros((1, 3))
    one, two = (
        plan.tensors(plan.place(np.array([offset, [0.0, 0.0, 0.0]])), plan.place(origin)) for plan in (chosen, other)
    )
    assert close(two[:, 0], one[:, 0])


def crystal_with_moments(seed: int, n: int = 4):
    rng = np.random.default_rng(seed)
    cell = np.array([[6.0, 0, 0], [-1.0, 7.0, 0], [0.5, 1.0, 9.0]])
    grid = np.array(list(itertools.product((0.1, 0.6), repeat=3)))
    positions = grid[rng.permutation(8)[:n]] + rng.uniform(0, 0.2, (n, 3))
    return cell, positions, rng.normal(size=(n, 3)), rng


def ordering(cell, positions, components, k=(0, 0, 0)):
    return ld.Ordering(ld.Crystal(cell, positions, ["Mn"] * len(positions)), components, k)


PROBE = np.array([[0.05, 0.45, 0.47]])


@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, 0), (0.21, -0.3, 0.4)])
def test_origin_and_order_of_atoms(k):
    cell, positions, moments, rng = crystal_with_moments(3)
    components = moments if k != (0.21, -0.3, 0.4) else moments + 1j * rng.normal(size=moments.shape)
    first = ordering(cell, positions, components, k)
    shift, order = np.array([0.123, -0.456, 0.789]), rng.permutation(len(positions))
    second = ordering(cell, (positions + shift)[order], components[order], k)
    assert ld.dipolar_energy(second).per_cell_eV == pytest.approx(ld.dipolar_energy(first).per_cell_eV, abs=1e-14)
    assert ld.local_field(second, PROBE + shift).total == pytest.approx(ld.local_field(first, PROBE).total, abs=1e-10)


@pytest.mark.parametrize("k", [(0, 0, 0), (0, 0.5, 0.5), (0.2, 0, 0)])
def test_energy_and_field_turn_with_the_whole(k):
    cell, positions, moments, rng = crystal_with_moments(4)
    turn = random_rotation(rng)
    sample = ld.Sample.ellipsoid((1.0, 2.0, 0.5), applied_T=(0.1, 0.0, 0.3))
    turned_sample = ld.Sample.ellipsoid((1.0, 2.0, 0.5), orientation=turn.T, applied_T=turn @ [0.1, 0.0, 0.3])
    first = ordering(cell, positions, moments, k)
    second = ordering(cell @ turn.T, positions, moments @ turn.T, k)
    energies = [ld.dipolar_energy(o, sample=s) for o, s in ((first, sample), (second, turned_sample))]
    for part in ("dipolar_eV", "shape_eV", "applied_eV", "per_cell_eV", "per_ion_eV"):
        assert getattr(energies[1], part) == pytest.approx(getattr(energies[0], part), abs=1e-13)
    fields = [ld.local_field(o, PROBE, sample=s) for o, s in ((first, sample), (second, turned_sample))]
    for part in ("dipolar", "lorentz", "demagnetizing", "contact", "applied", "total"):
        assert getattr(fields[1], part) == pytest.approx(getattr(fields[0], part) @ turn.T, abs=1e-10)


def test_wave_vector_against_its_magnetic_cell():
    """k = (0, ½, ½) in the small cell is k = 0 in the cell doubled along b and c."""
    cell, positions, moments, _ = crystal_with_moments(6, n=2)
    small = ordering(cell, positions, moments, (0, 0.5, 0.5))
    steps = [np.array([0, j, l]) for j in (0, 1) for l in (0, 1)]
    large = ordering(
        np.diag([1, 2, 2]) @ cell,
        np.concatenate([(positions + s) / [1, 2, 2] for s in steps]),
        np.concatenate([moments * (-1) ** s.sum() for s in steps]),
    )
    assert ld.dipolar_energy(large).per_ion_eV == pytest.approx(ld.dipolar_energy(small).per_ion_eV, abs=1e-14)
    for s in steps:
        there = ld.local_field(large, (PROBE + s) / [1, 2, 2]).total
        assert there == pytest.approx(ld.local_field(small, PROBE).total * (-1) ** s.sum(), abs=1e-10)


def test_helix_energy_is_the_mean_over_its_cells():
    """A turn of 120° per cell: the energy per ion is that of the tripled cell, at k = 0."""
    cell, positions, _, _ = crystal_with_moments(8, n=1)
    u, v = np.array([0.6, 0.8, 0.0]), np.array([0.0, 0.0, 1.3])
    helix = ordering(cell, positions, (u + 1j * v)[None], (1 / 3, 0, 0))
    turns = 2 * np.pi * np.arange(3) / 3
    large = ordering(
        np.diag([3, 1, 1]) @ cell,
        np.array([(positions[0] + [n, 0, 0]) / [3, 1, 1] for n in range(3)]),
        np.array([u * np.cos(t) + v * np.sin(t) for t in turns]),
    )
    assert helix.moments([(n, 0, 0) for n in range(3)])[:, 0] == pytest.approx(large.moments()[0], abs=1e-14)
    assert ld.dipolar_energy(helix).per_ion_eV == pytest.approx(ld.dipolar_energy(large).per_ion_eV, abs=1e-13)
