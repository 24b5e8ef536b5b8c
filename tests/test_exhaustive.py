"""Exhaustive search over sign patterns against brute force."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.analysis.exhaustive import exhaustive
from latticedip.analysis.problem import SearchProblem
from latticedip.errors import LimitError
from latticedip.kernels.patterns import FAR, low_tables, lowest_on_sphere, search_along
from latticedip.physics.supercell import Supercell
from latticedip.units import EV_PER_MUB_T, MU0_T_A3_PER_MUB


def random_crystal(seed: int, n: int) -> ld.Crystal:
    """Atoms near the points of a grid in a triclinic cell."""
    rng = np.random.default_rng(seed)
    grid = np.array(list(itertools.product(range(3), repeat=3)))[rng.permutation(27)[:n]] / 3
    cell = np.array([[8.0, 0, 0], [1.0, 9.0, 0], [-1.5, 0.7, 10.0]]) + rng.uniform(-0.5, 0.5, (3, 3))
    return ld.Crystal(cell, grid + rng.uniform(-0.08, 0.08, (n, 3)), ["Mn"] * n)


def problem_of(crystal, sizes, repeat=(1, 1, 1), sample=None, **options) -> SearchProblem:
    supercell = Supercell(crystal, repeat, tuple(range(crystal.n_sites)))
    specimen = sample or ld.Sample()
    return SearchProblem(supercell, np.asarray(sizes, dtype=float), specimen, supercell.tensors(specimen), **options)


def all_signs(n: int) -> np.ndarray:
    return np.array(list(itertools.product((1, -1), repeat=n)))


def brute_energies(crystal, sizes, signs, axes, sample) -> np.ndarray:
    """Energies in eV per cell of patterns along given axes, from the coupling of the crystal."""
    moments = signs[:, :, None] * (np.asarray(sizes)[:, None] * axes)[None]
    net = moments.sum(axis=1)
    shape = 0.5 * MU0_T_A3_PER_MUB / crystal.volume_A3 * np.einsum("ca,ab,cb->c", net, sample.demagnetizing_tensor, net)
    return ld.Coupling(crystal).energies(moments) + EV_PER_MUB_T * (shape - net @ sample.applied_T)


def brute_best_axis(crystal, sizes, signs, sample) -> np.ndarray:
    """Energies of patterns along their best axes: dense sampling of the sphere would do; here eigenvalues."""
    amounts = signs * np.asarray(sizes)[None]
    form = -0.5 * np.einsum("ci,ijab,cj->cab", amounts, ld.Coupling(crystal).tensors, amounts)
    net = amounts.sum(axis=1)
    form = form + 0.5 * MU0_T_A3_PER_MUB / crystal.volume_A3 * net[:, None, None] ** 2 * sample.demagnetizing_tensor
    return EV_PER_MUB_T * np.linalg.eigvalsh(form)[:, 0]


def energies_of(problem, found) -> np.ndarray:
    return np.array([problem.field.energy_eV(f.moments) for f in found])


SAMPLES = {
    "N = 0": ld.Sample(),
    "plate": ld.Sample.plate((1, 2, 3)),
    "field": ld.Sample.sphere(applied_T=(0.02, -0.01, 0.03)),
}


@pytest.mark.parametrize("sample", SAMPLES)
@pytest.mark.parametrize("n", [1, 2, 5, 9, 12])
@pytest.mark.parametrize("local", [False, True])
def test_along_given_axes(n, sample, local):
    crystal = random_crystal(n, n)
    rng = np.random.default_rng(n + 100)
    sizes = rng.uniform(1, 3, n)
    axes = rng.normal(size=(n, 3)) if local else np.tile(rng.normal(size=3), (n, 1))
    axes /= np.linalg.norm(axes, axis=1)[:, None]
    specimen = SAMPLES[sample]
    problem = problem_of(crystal, sizes, sample=specimen, axes=axes)
    found = exhaustive(problem, 20)
    brute = np.sort(brute_energies(crystal, sizes, all_signs(n), axes, specimen))
    # Without a field a pattern and its reverse are one.
    expected = brute if sample == "field" else brute[::2]
    scale = np.abs(expected).max()
    got = energies_of(problem, found)
    assert len(got) == min(20, len(expected))
    assert got == pytest.approx(expected[: len(got)], abs=1e-9 * scale)
    assert [f.multiplicity for f in found] == [1 if sample == "field" else 2] * len(found)


@pytest.mark.parametrize("sample", ["N = 0", "plate"])
@pytest.mark.parametrize("n", [1, 2, 5, 9, 12])
def test_along_best_axes(n, sample):
    crystal = random_crystal(n, n)
    sizes = np.random.default_rng(n + 100).uniform(1, 3, n)
    specimen = SAMPLES[sample]
    problem = problem_of(crystal, sizes, sample=specimen)
    found = exhaustive(problem, 20)
    expected = np.sort(brute_best_axis(crystal, sizes, all_signs(n), specimen))[::2]
    got = energies_of(problem, found)
    assert got == pytest.approx(expected[: len(got)], abs=1e-9 * np.abs(expected).max())


def test_best_axes_in_a_field():
    """Against the best of many axes, each pattern turned to it by the general routine of `rank`."""
    n = 5
    crystal = random_crystal(3, n)
    sizes = np.linspace(1, 2, n)
    sample = ld.Sample.sphere(applied_T=(0.3, -0.1, 0.2))
    problem = problem_of(crystal, sizes, sample=sample)
    got = energies_of(problem, exhaustive(problem, 16))
    patterns = [
        ld.Ordering(crystal, signs[:, None] * sizes[:, None] * [0, 0, 1.0]) for signs in all_signs(n) if signs[0] == 1
    ]
    ranked = ld.rank(patterns, sample=sample, rotate=True)
    expected = [row.energy.per_cell_eV for row in ranked.rows]
    assert got == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("axes", ["common", "local", None])
def test_without_net_moment(axes):
    n = 8
    crystal = random_crystal(4, n)
    sizes = np.array([1.0, 1, 2, 2, 1, 1, 2, 2])
    directions = np.tile([0.0, 0.6, 0.8], (n, 1))
    if axes == "local":
        # Two directions only, so that some patterns cancel.
        directions[::2] = [1.0, 0, 0]
    problem = problem_of(crystal, sizes, axes=None if axes is None else directions, net_zero=True)
    found = exhaustive(problem, 10)
    signs = all_signs(n)
    net = np.einsum("cp,p,pa->ca", signs, sizes, directions)
    signs = signs[np.linalg.norm(net, axis=1) < 1e-9]
    if axes is None:
        expected = brute_best_axis(crystal, sizes, signs, ld.Sample())
    else:
        expected = brute_energies(crystal, sizes, signs, directions, ld.Sample())
    expected = np.sort(expected)[::2][:10]
    assert energies_of(problem, found) == pytest.approx(expected, rel=1e-9)
    assert all(np.abs(f.moments.sum(axis=0)).max() < 1e-12 for f in found)


@pytest.mark.parametrize("along", [True, False])
def test_fixed_signs(along):
    n = 7
    crystal = random_crystal(5, n)
    sizes = np.ones(n)
    axes = np.tile([0.0, 0.0, 1.0], (n, 1))
    fixed = np.array([0, 1, 0, -1, 0, 0, -1], dtype=np.int8)
    problem = problem_of(crystal, sizes, axes=axes if along else None, fixed=fixed)
    signs = all_signs(n)
    signs = signs[np.all(signs[:, fixed != 0] == fixed[fixed != 0], axis=1)]
    if along:
        expected = brute_energies(crystal, sizes, signs, axes, ld.Sample())
    else:
        expected = brute_best_axis(crystal, sizes, signs, ld.Sample())
    found = exhaustive(problem, 30)
    assert energies_of(problem, found) == pytest.approx(np.sort(expected), abs=1e-9 * np.abs(expected).max())
    assert all(f.multiplicity == 1 for f in found)


@pytest.mark.parametrize(
    ("repeat", "axes"), [((2, 2, 2), None), ((2, 2, 2), (0, 0, 1)), ((2, 2, 2), (1, 1, 1)), ((3, 2, 1), (0, 0, 1))]
)
def test_every_pattern_belongs_to_one_family(repeat, axes):
    """The families of a symmetric crystal add up to all patterns, and energies are the same inside each."""
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    directions = None if axes is None else np.array([axes]) / np.linalg.norm(axes)
    problem = problem_of(crystal, [1.0], repeat=repeat, axes=directions)
    n = int(np.prod(repeat))
    found = exhaustive(problem, 2**n)
    assert sum(f.multiplicity for f in found) == 2**n
    energies = energies_of(problem, found)
    assert np.all(np.diff(energies) > -1e-12 * np.abs(energies).max())
    large = ld.Crystal(np.array(repeat)[:, None] * crystal.cell, problem.supercell.cells / np.array(repeat), ["Mn"] * n)
    if axes is None:
        brute = brute_best_axis(large, np.ones(n), all_signs(n), ld.Sample())
    else:
        brute = brute_energies(large, np.ones(n), all_signs(n), np.tile(directions, (n, 1)), ld.Sample())
    counted = np.sort(np.repeat(energies, [f.multiplicity for f in found]))
    assert counted == pytest.approx(np.sort(brute), abs=1e-9 * np.abs(brute).max())


@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, 0), (0.5, 0.5, 0.5)])
@pytest.mark.parametrize("along", [True, False])
def test_at_a_given_k(k, along):
    n = 5
    crystal = random_crystal(6, n)
    sizes = np.linspace(1, 2, n)
    axes = np.tile([0.0, 0.6, 0.8], (n, 1))
    repeat = tuple(2 if x else 1 for x in k)
    problem = problem_of(crystal, sizes, repeat=repeat, axes=axes if along else None, k=np.array(k, dtype=float))
    found = exhaustive(problem, 8)
    signs = all_signs(n)
    coupling = ld.Coupling(crystal, k)
    if along:
        expected = coupling.energies(signs[:, :, None] * (sizes[:, None] * axes)[None])
    else:
        amounts = signs * sizes
        form = -0.5 * np.einsum("ci,ijab,cj->cab", amounts, coupling.tensors, amounts)
        expected = EV_PER_MUB_T * np.linalg.eigvalsh(form)[:, 0]
    got = energies_of(problem, found) / problem.supercell.n_cells
    assert got == pytest.approx(np.sort(expected)[::2][:8], abs=1e-9 * np.abs(expected).max())
    for f in found:
        ordering = problem.supercell.ordering(f.moments)
        assert ordering.k.tolist() == [list(k)]


def test_direction_of_a_free_axis_is_a_lattice_direction():
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    uniform = exhaustive(problem_of(crystal, [2.0]), 1)[0]
    assert uniform.moments.tolist() == [[0, 0, 2.0]]
    assert uniform.notes == ("the direction of the moments is free in space; one short lattice direction is taken",)


def test_refuses_too_many_patterns():
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    with pytest.raises(LimitError) as caught:
        exhaustive(problem_of(crystal, [1.0], repeat=(4, 4, 4)), 1)
    assert str(caught.value) == (
        "2^63 sign patterns are too many to try one by one. Take a smaller supercell, fix signs, or use "
        'method="annealing".'
    )


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from(["general", "hard", "no pull"]))
def test_lowest_on_sphere(seed, kind):
    """Against the best of many unit vectors, each followed downhill by the power iteration of the shifted form."""
    rng = np.random.default_rng(seed)
    matrix = rng.normal(size=(3, 3))
    matrix = matrix + matrix.T
    pull = rng.normal(size=3)
    if kind == "hard":
        pull = np.linalg.eigh(matrix)[1][:, 2] * 0.1
    elif kind == "no pull":
        pull = np.zeros(3)
    form = matrix[[0, 1, 2, 1, 0, 0], [0, 1, 2, 2, 2, 1]]
    got = lowest_on_sphere(form, pull, np.empty(3), np.empty((3, 3)))
    u = rng.normal(size=(200, 3))
    u /= np.linalg.norm(u, axis=1)[:, None]
    shift = 2 * np.abs(np.linalg.eigvalsh(matrix)).max()
    for _ in range(3000):
        u = u @ (shift * np.eye(3) - matrix) + pull / 2
        u /= np.linalg.norm(u, axis=1)[:, None]
    best = np.min(np.einsum("na,ab,nb->n", u, matrix, u) - u @ pull)
    assert got == pytest.approx(best, abs=1e-9)


def test_kernel_without_the_compiler():
    rng = np.random.default_rng(8)
    n = 6
    form = rng.normal(size=(n, n))
    form = form + form.T
    np.fill_diagonal(form, 0)
    linear = rng.normal(size=n)
    table = np.empty((1, 2, 4))
    low_tables.py_func(1, 2, form[None], linear[None], table)
    energies, codes = np.full((1, 5), FAR), np.zeros((1, 5), dtype=np.int64)
    none = np.zeros((0, n), dtype=np.int64)
    search_along.py_func(
        0, 1, 1, 1, 2, form, linear, table[0], np.arange(n), np.ones(n, dtype=np.int8), np.zeros((0, n)), 0.0, none,
        none.astype(np.int8), FAR, energies, codes,
    )  # fmt: skip
    signs = all_signs(n)
    brute = np.sort(0.5 * np.einsum("ci,ij,cj->c", signs, form, signs) + signs @ linear)
    assert energies[0] == pytest.approx(brute[:5], abs=1e-12)
    decoded = 1 - 2 * ((codes[0][:, None] >> np.arange(n)) & 1)
    again = 0.5 * np.einsum("ci,ij,cj->c", decoded, form, decoded) + decoded @ linear
    assert again == pytest.approx(brute[:5], abs=1e-12)
