"""Simulated annealing against exhaustive search, known bounds, and itself."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

import latticedip as ld
from latticedip.analysis.anneal import Schedule, anneal, doubled, settle
from latticedip.analysis.exhaustive import exhaustive
from latticedip.errors import InputError
from latticedip.kernels.annealing import add_field, add_vector_field, coupling_between
from tests.reference.constants import DIPOLE_EV
from tests.test_exhaustive import problem_of, random_crystal

CUBE = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
#: µ0µ²/(4π a³) of 1 µB.
UNIT = DIPOLE_EV / 4**3


def successes(problem, runs) -> int:
    lowest = problem.field.energy_eV(exhaustive(problem, 1)[0].moments)
    schedule = Schedule.usual(problem.n_units, False)
    hits = 0
    for seed in range(runs):
        found = anneal(problem, "ising", schedule, seed, 1).found[0]
        hits += problem.field.energy_eV(found.moments) <= lowest + 1e-9 * abs(lowest)
    return hits


@pytest.mark.parametrize("n", [12, 24])
def test_finds_the_exhaustive_minimum_along_an_axis(n):
    problem = problem_of(random_crystal(n, n), np.ones(n), axes=np.tile([0.0, 0.6, 0.8], (n, 1)))
    assert successes(problem, 100) >= 95


@pytest.mark.slow
@pytest.mark.parametrize("net_zero", [False, True])
@pytest.mark.parametrize("n", [16, 24])
def test_finds_the_exhaustive_minimum_along_best_axes(n, net_zero):
    problem = problem_of(random_crystal(n, n), np.ones(n), net_zero=net_zero)
    assert successes(problem, 100) >= 95


def test_finds_the_exhaustive_minimum_along_best_axes_in_a_few_runs():
    problem = problem_of(random_crystal(20, 20), np.ones(20))
    assert successes(problem, 5) >= 4


@pytest.mark.parametrize("kind", ["ising", "best axis", "planar", "heisenberg"])
def test_same_seed_same_result_on_any_number_of_threads(kind, monkeypatch):
    crystal = random_crystal(1, 6)
    axes = np.tile([0.0, 0.0, 1.0], (6, 1)) if kind in ("ising", "planar") else None
    problem = problem_of(crystal, np.ones(6), repeat=(1, 2, 1), axes=axes)
    name = "ising" if kind == "best axis" else kind
    results = []
    for threads in ("1", "2"):
        monkeypatch.setenv("OMP_NUM_THREADS", threads)
        results.append(anneal(problem, name, Schedule(8, 40), 5, 3))
    first, second = results
    assert (first.restarts, first.at_best) == (second.restarts, second.at_best)
    for one, two in zip(first.found, second.found, strict=True):
        assert np.array_equal(one.moments, two.moments)
    other = anneal(problem, name, Schedule(1, 1), 6, 3)
    assert other.restarts == 1


def test_free_moments_reach_the_bound():
    """Simple cubic, 2 × 2 × 2: −2.6767886844, the lowest eigenvalue (Luttinger and Tisza 1946)."""
    problem = problem_of(CUBE, [1.0], repeat=(2, 2, 2))
    result = anneal(problem, "heisenberg", Schedule(8, 100), 0, 1)
    energy = problem.field.energy_eV(result.found[0].moments) / 8
    assert energy / UNIT == pytest.approx(-2.6767886844, abs=1e-8)
    assert np.linalg.norm(result.found[0].moments, axis=1) == pytest.approx(np.ones(8), abs=1e-12)
    assert result.at_best >= 1


def test_planar_moments_stay_in_their_planes():
    crystal = random_crystal(2, 4)
    normals = np.random.default_rng(0).normal(size=(4, 3))
    normals /= np.linalg.norm(normals, axis=1)[:, None]
    problem = problem_of(crystal, np.linspace(1, 2, 4), repeat=(2, 1, 1), axes=normals)
    result = anneal(problem, "planar", Schedule(16, 100), 0, 2)
    best = result.found[0].moments
    assert np.abs(np.einsum("pa,pa->p", best, np.tile(normals, (2, 1)))).max() < 1e-12
    # No small turn of any moment in its plane gains.
    base = problem.field.energy_eV(best)
    for place, size in itertools.product(range(8), (-0.01, 0.01)):
        trial = best.copy()
        trial[place] = best[place] + size * np.cross(normals[place % 4], best[place])
        trial[place] *= np.linalg.norm(best[place]) / np.linalg.norm(trial[place])
        assert problem.field.energy_eV(trial) > base


@pytest.mark.parametrize("kind", ["ising", "best axis", "heisenberg"])
def test_net_moment_held_at_zero(kind):
    """bcc array: the uniform state lies lowest; without net moment −1.9859209288 (Luttinger and Tisza 1946)."""
    vectors = np.array([[-1, 1, 1], [1, -1, 1], [1, 1, -1]]) / 2
    crystal = ld.Crystal(4 * vectors, [[0, 0, 0]], ["Mn"])
    axes = np.array([[1.0, -1, 0]]) / np.sqrt(2) if kind == "ising" else None
    problem = problem_of(crystal, [1.0], repeat=(2, 2, 2), axes=axes, net_zero=True)
    result = anneal(problem, "heisenberg" if kind == "heisenberg" else "ising", Schedule(6, 100), 0, 1)
    best = result.found[0].moments
    assert np.abs(best.sum(axis=0)).max() < 1e-7
    assert problem.field.energy_eV(best) / 16 / UNIT == pytest.approx(-1.9859209288, abs=1e-7)


def test_net_moment_that_cannot_vanish():
    problem = problem_of(CUBE, [1.0], repeat=(3, 1, 1), axes=np.array([[0, 0, 1.0]]), net_zero=True)
    with pytest.raises(InputError) as caught:
        anneal(problem, "ising", Schedule(4, 20), 0, 1)
    assert str(caught.value) == (
        "none of 4 annealing restarts ended without a net moment; the sizes or the supercell may not allow it. Take "
        "another supercell, or more restarts."
    )


def test_applied_field_turns_moments_to_it():
    problem = problem_of(CUBE, [1.0], repeat=(2, 2, 2), sample=ld.Sample.sphere(applied_T=(0, 0, 5.0)))
    for kind in ("ising", "heisenberg"):
        best = anneal(problem, kind, Schedule(8, 60), 0, 1).found[0].moments
        assert best == pytest.approx(np.tile([0, 0, 1.0], (8, 1)), abs=1e-6)


def test_fixed_signs_stay():
    fixed = np.array([1, 0, 0, -1, 0, 1, 0, 0], dtype=np.int8)
    problem = problem_of(CUBE, [1.0], repeat=(2, 2, 2), axes=np.array([[0, 0, 1.0]]), fixed=fixed)
    best = anneal(problem, "ising", Schedule(8, 60), 0, 1).found[0]
    held = fixed != 0
    assert np.array_equal(best.moments[held, 2], fixed[held])
    expected = exhaustive(problem, 1)[0]
    assert problem.field.energy_eV(best.moments) == pytest.approx(problem.field.energy_eV(expected.moments), rel=1e-12)


def test_multiplicity_is_that_of_the_exhaustive_search():
    for axes in (None, np.array([[0, 0, 1.0]])):
        problem = problem_of(CUBE, [1.0], repeat=(2, 2, 2), axes=axes)
        one, two = anneal(problem, "ising", Schedule(8, 60), 0, 1).found[0], exhaustive(problem, 1)[0]
        assert one.multiplicity == two.multiplicity


@pytest.mark.slow
def test_many_moments():
    """A larger supercell only adds patterns: 512 moments along z reach what 8 do."""
    axes = np.array([[0, 0, 1.0]])
    problem = problem_of(CUBE, [1.0], repeat=(8, 8, 8), axes=axes)
    result = anneal(problem, "ising", Schedule.usual(512, False), 0, 1)
    assert result.restarts == 16
    energy = problem.field.energy_eV(result.found[0].moments) / 512
    assert energy / UNIT == pytest.approx(-2.6767886844, abs=1e-8)
    assert result.found[0].multiplicity == 2


@pytest.mark.parametrize("repeat", [(1, 1, 1), (2, 3, 4), (3, 1, 2)])
def test_tables_of_the_kernels(repeat):
    """One moment's field from the doubled table, and single couplings, against the dense form."""
    problem = problem_of(random_crystal(7, 3), [1.0, 2, 3], repeat=repeat)
    dense = problem.dense
    n = problem.n_units
    table = doubled(problem.table, repeat)
    change = np.array([0.3, -0.2, 0.5])
    for place in range(n):
        fields = np.zeros((3, n))
        add_vector_field(table, 3, *repeat, place, change, fields)
        one = np.zeros(n)
        add_field(table[3], 3, *repeat, place, 0.7, one)
        columns = np.array([[0, 5, 4], [5, 1, 3], [4, 3, 2]])
        expected = np.einsum("pab,b->ap", dense[:, place][:, columns], change)
        assert fields == pytest.approx(expected, abs=1e-18)
        assert one == pytest.approx(0.7 * dense[:, place, 3], abs=1e-18)
        assert [coupling_between(table[5], 3, *repeat, p, place) for p in range(n)] == dense[:, place, 5].tolist()


def test_settle_only_goes_down():
    problem = problem_of(random_crystal(9, 5), np.ones(5), repeat=(2, 1, 1))
    rng = np.random.default_rng(0)
    units = rng.normal(size=(10, 3))
    units /= np.linalg.norm(units, axis=1)[:, None]
    energy, settled = settle(problem, units, np.zeros((0, 2, 3)))
    assert energy < problem.field.energy_eV(units)
    assert energy == pytest.approx(problem.field.energy_eV(settled), rel=1e-12)
    # A stationary point: the field on each moment is along it.
    slope = problem.form_of(settled)[1]
    across = slope - np.einsum("pa,pa->p", slope, settled)[:, None] * settled
    assert np.abs(across).max() < 1e-6 * np.abs(slope).max()
