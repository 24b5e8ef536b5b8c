"""Dipolar modes: eigenvalues, the limit k → 0, the lowest mode as a bound, equal moments."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.analysis import modes_bands
from latticedip.analysis.modes import balanced_mode, bound_above, half_vectors, lowest_mode, lowest_modes, modes_at
from latticedip.analysis.modes_bands import bands, eigenvalues, limit_eigenvalues, magnetic_sites, uniform_eigenvalues
from latticedip.crystal.bandpath import band_path
from latticedip.crystal.kpoints import star, symmetric_mesh, symmetrized, wave_rotations
from latticedip.encode import to_json
from latticedip.errors import InputError, LimitError
from latticedip.sums.many_k import many_k

FCC = np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 2
SC = ld.Crystal(3.0 * np.eye(3), [[0, 0, 0]], ["Fe"])


def random_crystal(seed: int, n: int, **options) -> ld.Crystal:
    """n sites well apart in a triclinic cell."""
    rng = np.random.default_rng(seed)
    cell = np.diag([4.0, 4.5, 5.0]) * (n / 2) ** (1 / 3) + rng.uniform(-0.5, 0.5, (3, 3))
    side = int(np.ceil(n ** (1 / 3)))
    grid = np.stack(np.meshgrid(*(np.arange(side) / side,) * 3, indexing="ij"), axis=-1).reshape(-1, 3)[:n]
    return ld.Crystal(cell, grid + rng.uniform(-0.2, 0.2, (n, 3)) / side + [2, -1, 0], ["Fe"] * n, **options)


# Tensors at many k.


@pytest.mark.parametrize("tol", [1e-12, 1e-10, 1e-5])
@pytest.mark.parametrize(
    "crystal",
    [
        SC,
        random_crystal(1, 5),
        ld.Crystal([[3, 0, 0], [40, 3, 0], [1, 17, 25]], [[0, 0, 0], [1.3, 0.4, -0.2]], ["Fe"] * 2),
        ld.Crystal(
            5 * np.eye(3), [[0.1] * 3, [0.1] * 3, [0.6] * 3], ["Fe", "Mn", "Fe"], occupancies=np.array([0.5, 0.5, 1])
        ),
    ],
)
def test_tensors_at_many_k_keep_the_tolerance(crystal, tol):
    plan = many_k(crystal.cell, crystal.places_cart, tol)
    k = np.vstack(
        [half_vectors(), [[1e-5, 0, 2e-5], [3, -2, 1], [1.25, 0.5, -7.1]], np.random.default_rng(0).random((8, 3))]
    )
    found = plan.matrices(k).transpose(0, 1, 3, 2, 4)
    for vector, tensors in zip(k, found, strict=True):
        exact = ld.Coupling(crystal, vector, tol=1e-12).tensors
        allowed = (tol + 1e-12) * np.maximum(1.0, np.abs(exact).max(axis=(2, 3)))
        assert np.all(np.abs(tensors - exact).max(axis=(2, 3)) <= allowed)


def test_splitting_does_not_matter():
    crystal = random_crystal(2, 3)
    k = np.random.default_rng(0).normal(size=(5, 3))
    first, second = (many_k(crystal.cell, crystal.places_cart, 1e-11, alpha).matrices(k) for alpha in (0.35, 0.7))
    assert np.abs(first - second).max() < 4e-11


def test_too_many_sites_are_refused(monkeypatch):
    monkeypatch.setattr("latticedip.sums.many_k.MAX_TABLE_BYTES", 2**20)
    with pytest.raises(LimitError, match="16 sites need tables larger than 0 GiB for sums at many k"):
        eigenvalues(random_crystal(0, 16), {"Fe": 1}, [[0, 0, 0]])


# Eigenvalues.


def test_eigenvalues_are_those_of_the_coupling():
    crystal = random_crystal(3, 4, occupancies=np.array([1, 0.5, 0.25, 1]), labels=("A", "A", "B", "C"))
    k = np.vstack([np.zeros(3), np.random.default_rng(1).normal(size=(6, 3))])
    found = eigenvalues(crystal, {"Fe": 2.0, "B": 3.0}, k)
    means = np.repeat(crystal.occupancies * [2, 2, 3, 2], 3)
    for vector, row in zip(k, found, strict=True):
        matrix = ld.Coupling(crystal, vector).tensors.transpose(0, 2, 1, 3).reshape(12, 12)
        energies = -0.5 * ld.units.EV_PER_MUB_T * 4 / 2.75 * np.linalg.eigvalsh(matrix * np.outer(means, means))
        assert row == pytest.approx(np.sort(energies), abs=1e-12)


def test_unnamed_sites_carry_no_moment():
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "O"])
    alone = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    k = [[0.1, 0.2, 0.3]]
    assert eigenvalues(crystal, {"Mn": 2}, k) == pytest.approx(eigenvalues(alone, {"Mn": 2}, k), rel=1e-12)


def test_long_waves_approach_the_limit_along_their_direction():
    crystal = random_crystal(4, 3)
    reciprocal = 2 * np.pi * np.linalg.inv(crystal.cell).T
    directions = np.random.default_rng(2).normal(size=(4, 3))
    k = 1e-4 * directions @ np.linalg.inv(reciprocal)
    limit = limit_eigenvalues(crystal, {"Fe": 1}, directions)
    assert np.abs(eigenvalues(crystal, {"Fe": 1}, k) - limit).max() < 1e-6 * np.abs(limit).max()
    # A plate with its normal along k is the same boundary.
    plate = uniform_eigenvalues(crystal, {"Fe": 1}, sample=ld.Sample.plate(directions[0]))
    assert plate == pytest.approx(limit[0], abs=1e-15)


def test_uniform_eigenvalues_are_energies_in_the_sample():
    sphere = ld.Sample.sphere()
    found = uniform_eigenvalues(SC, {"Fe": 2}, sample=sphere)
    wanted = ld.dipolar_energy(ld.Ordering(SC, [[0, 0, 2.0]]), sample=sphere).per_ion_eV
    assert found == pytest.approx([wanted] * 3, abs=1e-12)


# The lowest mode.


def test_it_is_promised():
    assert ld.lowest_mode is lowest_mode


@settings(max_examples=12, deadline=None)
@given(st.integers(0, 10_000), st.integers(1, 3))
def test_no_ordering_lies_below_the_lowest_mode(seed, n):
    rng = np.random.default_rng(seed)
    labels = tuple(f"Fe{i}" for i in range(n))
    crystal = random_crystal(seed, n, labels=labels, occupancies=rng.choice([0.3, 1.0], n))
    sizes = dict(zip(labels, rng.uniform(0.5, 3, n), strict=True))
    mode = lowest_mode(crystal, sizes)
    best = balanced_mode(crystal, sizes)
    assert best.energy_per_ion_eV >= mode.energy_per_ion_eV - 1e-12
    length = np.array(list(sizes.values()))[:, None]
    for _ in range(20):
        k = rng.choice([0, 0.5, 0.25, rng.random()], 3)
        first, second = np.linalg.qr(rng.normal(size=(n, 3, 2)))[0].transpose(2, 0, 1)
        helix = not np.all(2 * k == np.round(2 * k))
        ordering = ld.Ordering(crystal, length * (first + 1j * second if helix else first), k)
        energy = ld.dipolar_energy(ordering).per_ion_eV
        assert energy >= best.energy_per_ion_eV - best.error_bound_eV


@pytest.mark.parametrize("seed", range(3))
def test_its_components_have_its_energy(seed):
    labels = ("A", "B", "C")
    crystal = random_crystal(seed, 3, labels=labels, occupancies=np.array([1, 0.7, 0.4]))
    sizes = {"A": 1.0, "B": 2.5, "C": 0.5}
    for mode in lowest_modes(crystal, sizes):
        energy = ld.dipolar_energy(mode.ordering("x"))
        assert energy.per_cell_eV / mode.n_ions == pytest.approx(mode.energy_per_ion_eV, abs=1e-12)
        weight = 1.0 if np.isrealobj(mode.components) else 0.5
        square = weight * np.sum(np.abs(mode.components) ** 2, axis=1) / np.array([1.0, 2.5, 0.5]) ** 2
        assert square.sum() == pytest.approx(3, rel=1e-12)


@pytest.mark.parametrize("seed", range(3))
def test_it_is_the_lowest_of_a_fine_mesh(seed):
    crystal = random_crystal(seed + 20, 2)
    mode = lowest_mode(crystal, {"Fe": 1})
    k = np.random.default_rng(seed).random((4000, 3))
    lowest = eigenvalues(crystal, {"Fe": 1}, k)[:, 0].min()
    assert mode.energy_per_ion_eV <= lowest + 1e-12
    # and the mesh comes close to it.
    assert lowest - mode.energy_per_ion_eV < 0.05 * abs(mode.energy_per_ion_eV)


def test_cell_choice_and_orientation_do_not_matter():
    turn, _ = np.linalg.qr(np.random.default_rng(5).normal(size=(3, 3)))
    primitive = ld.Crystal(4 * FCC @ turn, [[0, 0, 0]], ["Fe"])
    cube = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]], ["Fe"] * 4)
    shifted = ld.Crystal(
        cube.cell, cube.positions + np.array([[3, 0, 0], [0, -2, 0], [0, 0, 1], [0, 0, 0]]), ["Fe"] * 4
    )
    tall = ld.Crystal(np.diag([3.0, 3, 6]), [[0, 0, 0], [0, 0, 0.5]], ["Fe"] * 2)
    for first, *others in ((primitive, cube, shifted), (SC, tall)):
        wanted = lowest_mode(first, {"Fe": 1})
        for other in others:
            found = lowest_mode(other, {"Fe": 1})
            assert found.energy_per_ion_eV == pytest.approx(wanted.energy_per_ion_eV, abs=1e-12)
            assert found.equal_moments


def test_a_sphere_is_only_approached():
    crystal = ld.Crystal(4 * FCC, [[0, 0, 0]], ["Fe"])
    free = lowest_mode(crystal, {"Fe": 2})
    assert free.k.tolist() == [0, 0, 0]
    assert free.direction is None
    assert free.uniform_energy_per_ion_eV == free.energy_per_ion_eV
    mode = lowest_mode(crystal, {"Fe": 2}, sample=ld.Sample.sphere())
    assert mode.k is None
    assert mode.energy_per_ion_eV == pytest.approx(free.energy_per_ion_eV, abs=1e-15)
    assert mode.uniform_energy_per_ion_eV == pytest.approx(0, abs=1e-12)
    assert abs(mode.direction @ mode.components.sum(axis=0)) < 1e-12
    assert np.linalg.norm(mode.direction) == pytest.approx(1, rel=1e-14)
    assert limit_eigenvalues(crystal, {"Fe": 2}, [mode.direction])[0, 0] == pytest.approx(mode.energy_per_ion_eV)
    assert ld.dipolar_energy(mode.ordering()).per_ion_eV == pytest.approx(mode.energy_per_ion_eV, abs=1e-12)
    assert mode.boundary == (
        "k = 0 itself: sphere; k → 0: along the direction of k, transverse waves at the N = 0 value"
    )


def test_a_needle_along_the_moments_reaches_it():
    # Columns along z: the ferromagnet along z, which a needle along z does not demagnetize.
    crystal = ld.Crystal([[5, 0, 0], [-2.5, 5 * np.sqrt(0.75), 0], [0, 0, 2.5]], [[0, 0, 0]], ["Fe"])
    along = {m.k is None: m for m in lowest_modes(crystal, {"Fe": 1}, sample=ld.Sample.needle([0, 0, 1]))}
    assert True not in along
    across = [m for m in lowest_modes(crystal, {"Fe": 1}, sample=ld.Sample.needle([1, 0, 0])) if m.k is None]
    assert len(across) == 1
    assert across[0].direction[2] == 0


def test_an_applied_field_is_said_to_play_no_part():
    mode = lowest_mode(SC, {"Fe": 1}, sample=ld.Sample.sphere(applied_T=(0, 0, 5)))
    assert mode.notes == ("the applied field plays no part in the energies of the modes",)


# Equal moments.


@pytest.mark.parametrize("k", [(0, 0, 0.3137), (0, 0, 0.25), (0, 0, 1 / 3), (0.21, 0.21, 0.21)])
def test_a_helix_has_equal_moments(k):
    (mode,) = modes_at(SC, {"Fe": 2}, [k])
    assert mode.equal_moments
    assert mode.degeneracy == 2
    cells = np.random.default_rng(0).integers(-50, 50, (60, 3))
    moments = mode.ordering().moments(cells)
    assert np.linalg.norm(moments, axis=2) == pytest.approx(np.full((60, 1), 2.0), abs=1e-6)
    assert ld.dipolar_energy(mode.ordering()).per_ion_eV == pytest.approx(mode.energy_per_ion_eV, abs=1e-12)


def test_a_wave_along_one_axis_has_not():
    (mode,) = modes_at(SC, {"Fe": 2}, [(0.1, 0.2, 0.3)])
    assert not mode.equal_moments


def test_arms_of_a_star_together_have_equal_moments():
    # Edge centres of a cube: at (½, 0, 0) inversion forbids one of the three sites to mix, and its moment is zero.
    crystal = ld.Crystal(4 * np.eye(3), [[0.5, 0, 0], [0, 0.5, 0], [0, 0, 0.5]], ["Fe"] * 3)
    (mode,) = modes_at(crystal, {"Fe": 2}, [(0.5, 0, 0)])
    assert mode.equal_moments
    assert mode.k.shape == (3, 3)
    assert mode.components.shape == (3, 3, 3)
    moments = mode.ordering().moments([[0, 0, 0], [1, 0, 0], [0, 1, 0], [1, 1, 1]])
    assert np.linalg.norm(moments, axis=2) == pytest.approx(np.full((4, 3), 2.0), abs=1e-6)
    assert ld.dipolar_energy(mode.ordering()).per_ion_eV == pytest.approx(mode.energy_per_ion_eV, abs=1e-12)


def test_balanced_weights_raise_the_bound_of_unlike_sites():
    # Close pairs beside a lone site: the plain mode leaves the lone site empty.
    positions = [[0, 0, 0], [0, 0, 0.25], [0.5, 0.5, 0.6]]
    crystal = ld.Crystal(np.diag([8.0, 8, 9]), positions, ["Fe"] * 3)
    plain, balanced = lowest_mode(crystal, {"Fe": 1}), balanced_mode(crystal, {"Fe": 1})
    assert not plain.equal_moments
    assert balanced.energy_per_ion_eV > 0.8 * plain.energy_per_ion_eV
    assert balanced.equal_moments
    energy = ld.dipolar_energy(balanced.ordering()).per_ion_eV
    assert energy == pytest.approx(balanced.energy_per_ion_eV, abs=1e-11)
    assert balanced_mode(SC, {"Fe": 1}).energy_per_ion_eV == lowest_mode(SC, {"Fe": 1}).energy_per_ion_eV


def test_height_above_the_bound():
    moments = {"up": [[0, 0, 2.0]], "across": [[2.0, 0, 0]]}
    orderings = [ld.Ordering(SC, m, (0.5, 0.5, 0), name) for name, m in moments.items()]
    mode = lowest_mode(SC, {"Fe": 2})
    ranking = ld.rank(orderings)
    above = bound_above(ranking, mode)
    assert above[0] == pytest.approx(0, abs=1e-12)
    assert above[1] == pytest.approx(ranking.rows[1].above_lowest_eV, abs=1e-12)
    assert above[1] > 1e-6
    with pytest.raises(InputError) as caught:
        bound_above(ranking, lowest_mode(SC, {"Fe": 3}))
    assert str(caught.value) == (
        "ordering 'up' has a root-mean-square moment of 2 µB, the mode one of 3 µB: the bound holds for equal sizes "
        "alone. Make a mode with the sizes of the ordering."
    )


def test_as_a_dict():
    document = lowest_mode(ld.Crystal(4 * FCC, [[0, 0, 0]], ["Fe"]), {"Fe": 1}, sample=ld.Sample.sphere()).to_dict()
    assert document["k"] is None
    assert document["equal_moments"] is True
    (helix,) = modes_at(SC, {"Fe": 2}, [(0, 0, 0.3)])
    assert '"components_muB"' in to_json(helix.to_dict())


# Bands and the path.


def test_bands_show_the_limits_on_both_sides_of_k_0():
    found = bands(SC, {"Fe": 1}, n_points=60, sample=ld.Sample.sphere())
    assert found.energies_eV_per_ion.shape == (len(found.path.k), 3)
    at_zero = np.flatnonzero(found.is_limit)
    assert len(at_zero) == 3
    # Along every direction of a cube: two transverse waves at the N = 0 value, one longitudinal above.
    free = eigenvalues(SC, {"Fe": 1}, [[0, 0, 0]])[0]
    for row in found.energies_eV_per_ion[at_zero]:
        assert row == pytest.approx([free[0], free[0], -2 * free[0]], rel=1e-9)
    assert found.uniform_eV_per_ion == pytest.approx([0, 0, 0], abs=1e-12)
    assert len(found.rows()) == 3 * len(found.path.k)
    assert [name for _, name in found.path.ticks] == ["G", "X", "M", "G", "R", "X|M", "R"]
    assert found.to_dict()["limit_k_to_0"] == found.is_limit.tolist()


def test_band_path_runs_on():
    path = band_path(ld.Crystal(4 * FCC, [[0, 0, 0]], ["Fe"]), 100)
    reciprocal = 2 * np.pi * np.linalg.inv(4 * FCC).T
    for segment in np.unique(path.segment):
        rows = path.segment == segment
        steps = np.linalg.norm(np.diff(path.k[rows] @ reciprocal, axis=0), axis=1)
        assert steps == pytest.approx(np.diff(path.distance[rows]), abs=1e-12)
    assert np.all(np.diff(path.distance) >= 0)


def test_left_handed_cells_have_no_path_but_a_lowest_mode():
    crystal = ld.Crystal(np.diag([3.0, 3, -3]), [[0, 0, 0]], ["Fe"])
    with pytest.raises(InputError, match=r"^the cell vectors are left-handed: a band path needs right-handed ones\."):
        bands(crystal, {"Fe": 1})
    assert lowest_mode(crystal, {"Fe": 1}).energy_per_ion_eV == pytest.approx(
        lowest_mode(SC, {"Fe": 1}).energy_per_ion_eV, abs=1e-12
    )


@pytest.mark.parametrize(
    ("cell", "operations"),
    [
        (np.eye(3), 48),
        (FCC, 48),
        (np.array([[1, 0, 0], [-0.5, np.sqrt(0.75), 0], [0, 0, 1.7]]), 24),
        (np.diag([1, 1.2, 1.5]), 8),
    ],
)
def test_the_mesh_stands_for_the_whole_one(cell, operations):
    crystal = ld.Crystal(4 * cell, [[0, 0, 0]], ["Fe"])
    rotations = wave_rotations(crystal)
    assert len(rotations) == operations
    kept, step = symmetric_mesh(crystal, 300, rotations)
    numbers = np.round(1 / step).astype(int)
    whole = np.stack(np.meshgrid(*(np.arange(n) / n for n in numbers), indexing="ij"), axis=-1).reshape(-1, 3)
    assert kept[0].tolist() == [0, 0, 0]
    assert len(kept) < len(whole)
    of_all = np.unique(np.round(eigenvalues(crystal, {"Fe": 1}, whole) / 1e-9), axis=0)
    of_kept = np.unique(np.round(eigenvalues(crystal, {"Fe": 1}, kept) / 1e-9), axis=0)
    assert np.array_equal(of_all, of_kept)
    assert sum(2 * len(star(k, rotations)) - _own(star(k, rotations)) for k in kept) == len(whole)


def _own(arms) -> int:
    """Arms that are their own opposite."""
    return int(np.sum(np.all(np.abs(2 * arms - np.round(2 * arms)) < 1e-9, axis=1)))


def test_projection_onto_symmetric_vectors():
    hexagonal = 3.0 * np.array([[1, 0, 0], [-0.5, np.sqrt(0.75), 0], [0, 0, 1.7]])
    rotations = wave_rotations(ld.Crystal(hexagonal, [[0, 0, 0]], ["Fe"]))
    near = symmetrized(np.array([0.33334, 0.33333, 0.50001]), rotations, 1e-3)
    assert near == pytest.approx([1 / 3, 1 / 3, 0.5], abs=1e-12)
    free = np.array([0.11, 0.23, 0.31])
    assert symmetrized(free, rotations, 1e-3) == pytest.approx(free, abs=1e-15)


# Input.


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: lowest_mode(SC, {}), "sizes is empty: no site is magnetic. Give a moment in µB by label or element."),
        (
            lambda: lowest_mode(SC, [2.0]),
            "sizes must map labels or elements to moments in µB, such as {'Mn': 4.6}, got [2.0].",
        ),
        (
            lambda: lowest_mode(SC, {"Fe": 0}),
            "sizes['Fe'] must be a moment above zero in µB, got 0. Leave out sites without a moment.",
        ),
        (
            lambda: lowest_mode(SC, {"Fe": "2"}),
            "sizes['Fe'] must be a moment above zero in µB, got '2'. Leave out sites without a moment.",
        ),
        (lambda: lowest_mode(SC, {"Mn": 2}), "no site has the label or element 'Mn'. Known are: Fe."),
        (lambda: eigenvalues(SC, {"Fe": 1}, [0, 0, 0]), "k_points must have shape (n, 3), got (3,)."),
        (
            lambda: limit_eigenvalues(SC, {"Fe": 1}, [[1, 0, 0], [0, 0, 0]]),
            "directions: number 2 is the zero vector, which has no direction.",
        ),
        (lambda: lowest_modes(SC, {"Fe": 1}, keep=-1), "keep must be a whole number, at least 0, got -1."),
        (lambda: bands(SC, {"Fe": 1}, n_points=1), "n_points must be a whole number of at least 2, got 1."),
        (lambda: lowest_mode(SC, {"Fe": 1}, tol=1), "tol must lie between 1e-12 and 0.01, got 1.0."),
        (
            lambda: lowest_mode(ld.Crystal(np.eye(3) * 9, [[0, 0, 0]], ["Fe"], pbc=(True, True, False)), {"Fe": 1}),
            "the structure is periodic along (True, True, False) only; sums are available for three periodic "
            "directions.",
        ),
    ],
)
def test_refusals(call, message):
    with pytest.raises(InputError) as caught:
        call()
    assert str(caught.value) == message


def test_a_label_goes_before_its_element():
    crystal = ld.Crystal(5 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "Mn"], ("Mn1", "Mn2"))
    assert magnetic_sites(crystal, {"Mn2": 3, "Mn": 1}).of_site.tolist() == [1, 3]


def test_tables_are_shared_between_calls():
    modes_bands._plan.cache_clear()
    for _ in range(3):
        eigenvalues(SC, {"Fe": 1}, [[0, 0, 0]])
    assert modes_bands._plan.cache_info().misses == 1
