"""Proposed orderings: the surface, the constraints, and what is said of them."""

from __future__ import annotations

import json

import numpy as np
import pytest

import latticedip as ld
from latticedip.analysis.problem import SearchProblem
from latticedip.analysis.symmetry_patterns import commensurate_waves, little_group, sign_characters, subgroups
from latticedip.encode import to_json
from latticedip.errors import InputError, LimitError
from latticedip.ordering.symmetry import SupercellSymmetry
from latticedip.physics.supercell import Supercell
from tests.test_exhaustive import random_crystal

CUBE = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "O"])
RUTILE = ld.Crystal(
    np.diag([4.87, 4.87, 3.31]),
    [[0, 0, 0], [0.5, 0.5, 0.5], [0.305, 0.305, 0], [0.695, 0.695, 0], [0.805, 0.195, 0.5], [0.195, 0.805, 0.5]],
    ["Mn", "Mn", "F", "F", "F", "F"],
)


def test_is_a_ranking_of_orderings_on_the_crystal():
    result = ld.propose(CUBE, {"Mn": 2.0}, supercell=(2, 2, 2), keep=6)
    assert isinstance(result, ld.Ranking)
    assert len(result.rows) == 6
    energies = [row.energy.per_ion_eV for row in result.rows]
    # Rows whose energies are equal within the error bounds are tied, in any order.
    assert np.all(np.diff(energies) > -1e-9 * abs(energies[0]))
    names = [row.ordering.name for row in result.rows]
    assert len(set(names)) == 6
    for row in result.rows:
        assert row.ordering.crystal is CUBE
        again = ld.dipolar_energy(row.ordering)
        assert row.energy.per_ion_eV == pytest.approx(again.per_ion_eV, rel=1e-12)
        assert row.above_lowest_eV == pytest.approx(again.per_ion_eV - energies[0], abs=1e-12 * abs(energies[0]))
        sizes = np.linalg.norm(row.ordering.moments(np.indices((2, 2, 2)).reshape(3, -1).T), axis=-1)
        assert sizes[:, 0] == pytest.approx(np.full(8, 2.0), abs=1e-9)
        assert np.all(sizes[:, 1] == 0)
    # The same through the ranking of given orderings, and with fields.
    probe = ld.Probe(position=(0.5, 0.5, 0), name="muon")
    ranked = ld.rank([row.ordering for row in result.rows], probes=[probe])
    assert [row.energy.per_ion_eV for row in ranked.rows] == pytest.approx(energies, rel=1e-12)
    document = json.loads(to_json(result.to_dict()))
    assert document["rows"][0]["origins"] == ["exhaustive", "symmetry", "mode"]
    assert document["rows"][0]["bns_number"] == "127.397"
    assert document["rows"][0]["multiplicity"] == 6
    assert document["lowest_mode"]["equal_moments"] is True


def test_what_is_said():
    result = ld.propose(CUBE, {"Mn": 2.0}, supercell=(2, 2, 1), keep=3)
    assert result.rows[0].ordering.name == "1: collinear, k = (1/2, 1/2, 0)"
    assert result.notes[1] == "every sign pattern of 4 moments was tried (2^3)"
    assert result.notes[2].startswith("no ordering of these moments lies below ")
    assert result.notes[2].endswith(" µeV per ion, the lowest mode, at k = (1/2, 1/2, 0)")
    assert result.boundary.startswith("no net moment")
    assert result.restarts == 0
    annealed = ld.propose(
        CUBE, {"Mn": 2.0}, supercell=(2, 2, 1), method="annealing", restarts=4, sweeps=20, along=(0, 0, 1)
    )
    assert annealed.restarts == 4
    assert annealed.rows[0].origins == ("annealing",)
    best = annealed.restarts_at_best
    assert annealed.rows[0].ordering.notes[0] == f"simulated annealing: {best} of 4 restarts found the best"
    assert annealed.notes[1] == (
        f"ising moments were annealed: {best} of 4 restarts (20 sweeps each) found the best; a lower state may exist"
    )
    assert annealed.mode is None


def test_mode_in_a_larger_cell_is_proposed():
    """One moment per cell: the lowest ordering doubles it, and comes from the mode."""
    result = ld.propose(CUBE, {"Mn": 1.0})
    assert result.rows[0].origins == ("mode",)
    assert result.rows[0].ordering.k.tolist() == [[0.5, 0.5, 0]]
    assert result.rows[0].multiplicity == 2 or result.rows[0].multiplicity == 6


def test_sizes_by_label_and_element():
    crystal = ld.Crystal(np.diag([5.0, 6, 7]), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "Mn"], labels=["Mn1", "Mn2"])
    row = ld.propose(crystal, {"Mn": 2.0, "Mn2": 3.0}, along=(0, 0, 1)).rows[0]
    assert np.abs(row.ordering.components[0, :, 2].real).tolist() == [2.0, 3.0]


def test_along_an_axis_nothing_else_is_proposed():
    result = ld.propose(RUTILE, {"Mn": 5.0}, along=(0, 0, 1))
    assert [row.origins for row in result.rows] == [("exhaustive",)] * 2
    assert all(np.all(row.ordering.components[..., :2] == 0) for row in result.rows)
    # MnF2: P4₂'/mnm' (136.499) for the antiferromagnet, P4₂/mn'm' (136.501) for the ferromagnet along c.
    assert {row.bns_number for row in result.rows} == {"136.499", "136.501"}


def test_fixed_signs():
    result = ld.propose(RUTILE, {"Mn": 5.0}, along=(0, 0, 1), fixed=[1, 1])
    assert len(result.rows) == 1
    assert result.rows[0].ordering.net_moment.tolist() == [0, 0, 10.0]
    doubled = ld.propose(RUTILE, {"Mn": 5.0}, along=(0, 0, 1), fixed=[1, -1, 0, 0], supercell=(1, 1, 2), keep=20)
    assert sum(row.multiplicity for row in doubled.rows) == 4
    for row in doubled.rows:
        assert row.ordering.moments([(0, 0, 0)])[0, :2, 2] == pytest.approx([5, -5], abs=1e-12)
    free = ld.propose(RUTILE, {"Mn": 5.0}, fixed=[1, -1])
    assert len(free.rows) == 1
    assert np.abs(free.rows[0].ordering.net_moment).max() < 1e-12


def test_given_k():
    result = ld.propose(RUTILE, {"Mn": 5.0}, k=(0, 0, 0.5))
    assert all(row.ordering.k.tolist() == [[0, 0, 0.5]] for row in result.rows)
    both = ld.propose(RUTILE, {"Mn": 5.0}, k=[(0, 0, 0.5), (0, 0, 0)], along=(0, 0, 1), keep=20)
    assert sorted(row.ordering.k.tolist()[0][2] for row in both.rows) == [0, 0, 0.5]
    whole = ld.propose(RUTILE, {"Mn": 5.0}, supercell=(1, 1, 2), along=(0, 0, 1), keep=20)
    energies = [row.energy.per_ion_eV for row in whole.rows]
    for row in both.rows:
        assert min(abs(row.energy.per_ion_eV - e) for e in energies) < 1e-12


def test_net_zero_and_shape():
    uniform = ld.propose(CUBE, {"Mn": 1.0}, along=(0, 0, 1)).rows[0]
    assert uniform.ordering.net_moment.tolist() == [0, 0, 1.0]
    result = ld.propose(CUBE, {"Mn": 1.0}, supercell=(2, 2, 2), net_zero=True, keep=30)
    assert all(np.linalg.norm(row.ordering.net_moment) < 1e-6 for row in result.rows)
    plate = ld.Sample.plate((0, 0, 1), applied_T=(0, 0, 0.002))
    shaped = ld.propose(CUBE, {"Mn": 1.0}, supercell=(2, 1, 1), sample=plate, keep=30)
    for row in shaped.rows:
        again = ld.dipolar_energy(row.ordering, sample=plate)
        assert row.energy.per_cell_eV == pytest.approx(again.per_cell_eV, rel=1e-9)
    # Lowest of all with a moment: in the plane but for the turn that the field makes.
    with_moment = next(row for row in shaped.rows if np.linalg.norm(row.ordering.net_moment) > 0.5)
    assert abs(with_moment.ordering.net_moment[2]) < 0.2


@pytest.mark.parametrize("kind", ["ising", "heisenberg"])
def test_same_seed_same_rows(kind):
    crystal = random_crystal(3, 5)
    options = {"moments": kind, "method": "annealing", "restarts": 4, "sweeps": 30, "seed": 7}
    one, two = (ld.propose(crystal, {"Mn": 1.0}, **options) for _ in range(2))
    for first, second in zip(one.rows, two.rows, strict=True):
        assert np.array_equal(first.ordering.components, second.ordering.components)


def test_free_moments_lie_below_collinear_ones():
    crystal = random_crystal(4, 4)
    free = ld.propose(crystal, {"Mn": 1.0}, moments="heisenberg", restarts=8, sweeps=100).rows[0].energy.per_ion_eV
    planar = ld.propose(crystal, {"Mn": 1.0}, moments="planar", along=(0, 0, 1), restarts=8, sweeps=100)
    flat = planar.rows[0].energy.per_ion_eV
    ising = ld.propose(crystal, {"Mn": 1.0}, along=(1, 0, 0)).rows[0].energy.per_ion_eV
    assert free < flat < ising
    mode = ld.lowest_mode(crystal, {"Mn": 1.0})
    assert mode.energy_per_ion_eV <= free


def test_many_k_take_the_table_of_the_supercell():
    result = ld.propose(CUBE, {"Mn": 1.0}, supercell=(5, 5, 4), along=(0, 0, 1), restarts=4, sweeps=50, keep=1)
    row = result.rows[0]
    expected = ld.dipolar_energy(row.ordering).per_ion_eV
    assert row.energy.per_ion_eV == pytest.approx(expected, abs=row.energy.error_bound_eV)


def test_partial_occupancy():
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"], occupancies=[0.5])
    row = ld.propose(crystal, {"Mn": 2.0}, along=(0, 0, 1), supercell=(2, 2, 1)).rows[0]
    assert row.energy.n_ions == 0.5
    assert row.energy.per_cell_eV == pytest.approx(ld.dipolar_energy(row.ordering).per_cell_eV, rel=1e-10)


def test_characters_of_a_cubic_point_group():
    """m-3m: 33 classes of subgroups and four real one-dimensional representations; 4/mmm: eight."""
    supercell = Supercell(CUBE, (2, 2, 2), (0,))
    problem = SearchProblem(supercell, np.ones(1), ld.Sample(), supercell.tensors())
    waves = commensurate_waves(problem)
    assert [wave.tolist() for wave in waves] == [[0, 0, 0], [0, 0, 0.5], [0, 0.5, 0.5], [0.5, 0.5, 0.5]]
    uniform = little_group(problem, waves[0])
    assert len(uniform.operations) == 48
    assert len(subgroups(uniform.product)) == 33
    assert len(sign_characters(uniform, list(range(48)))) == 4
    face = little_group(problem, waves[1])
    assert len(face.operations) == 16
    assert len(sign_characters(face, list(range(16)))) == 8


def test_waves_of_a_centred_cell():
    """fcc written as a cube: Γ and one X point, a whole-number k that only the centring tells from zero."""
    centred = ld.Crystal(4 * np.eye(3), np.array([[0, 0, 0], [0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 2, ["Mn"] * 4)
    supercell = Supercell(centred, (1, 1, 1), (0, 1, 2, 3))
    problem = SearchProblem(supercell, np.ones(4), ld.Sample(), supercell.tensors())
    waves = commensurate_waves(problem)
    assert len(waves) == 2
    assert waves[0].tolist() == [0, 0, 0]
    assert sorted(np.abs(waves[1]).tolist()) == [0, 0, 1]
    found = ld.propose(centred, {"Mn": 1.0}, net_zero=True, keep=3).rows
    primitive = ld.Crystal(2 * np.array([[0, 1, 1], [1, 0, 1], [1, 1, 0]]), [[0, 0, 0]], ["Mn"])
    other = ld.propose(primitive, {"Mn": 1.0}, k=(0.5, 0.5, 0)).rows
    assert found[0].energy.per_ion_eV == pytest.approx(other[0].energy.per_ion_eV, rel=1e-9)
    # Moments across k are free to turn, and rounding decides which of the equal orderings comes first.
    assert groups_of_the_lowest(found) & groups_of_the_lowest(other)


def groups_of_the_lowest(rows):
    lowest = rows[0].energy.per_ion_eV
    return {row.bns_number for row in rows if row.energy.per_ion_eV == pytest.approx(lowest, rel=1e-9)}


def test_orbits_of_moments():
    symmetry = SupercellSymmetry.of(CUBE, (2, 2, 2), (0,), np.ones(1))
    cells = symmetry.cells
    rods = np.zeros((8, 3))
    rods[:, 2] = (-1.0) ** (cells[:, 0] + cells[:, 1])
    turned = np.zeros((8, 3))
    turned[:, 0] = (-1.0) ** (cells[:, 1] + cells[:, 2])
    assert symmetry.are_same(rods, turned)
    # Three directions, two senses.
    assert symmetry.orbit_size(rods) == 6
    turned[0] *= -1
    assert not symmetry.are_same(rods, turned)
    held = SupercellSymmetry.of(CUBE, (2, 2, 2), (0,), np.ones(1), field=np.array([0, 0, 1.0]))
    # 4/mm'm' with its eight translations: the reverse of the rods is their copy one cell on.
    assert len(held.operations) == 16
    assert held.orbit_size(rods) == 2
    shaped = SupercellSymmetry.of(CUBE, (2, 2, 2), (0,), np.ones(1), tensor=np.diag([0, 0, 1.0]))
    assert len(shaped.operations) == 16
    assert len(SupercellSymmetry.of(CUBE, (1, 1, 2), (0,), np.ones(1)).operations) == 16


REFUSED = [
    ({"sizes": {}}, "sizes is empty: no site is magnetic. Give a moment in µB by label or element."),
    ({"supercell": (0, 1, 1)}, "supercell must be three whole numbers of at least 1, got (0, 1, 1)."),
    ({"supercell": (2, 1, 1), "k": (0.5, 0, 0)}, "give either a supercell or k, not both."),
    ({"along": (0, 0, 0)}, "along is the zero vector, which has no direction."),
    (
        {"along": (0, 0, 1), "axes": [(0, 0, 1)]},
        "give either along (one direction for all) or axes (one per magnetic site), not both.",
    ),
    ({"axes": [(0, 0, 1)] * 2}, "axes must hold one direction per magnetic site (1), got 2."),
    ({"axes": [(0, 0, 0)]}, "axes holds a zero vector (entry 1), which has no direction."),
    ({"fixed": [1, 1]}, "fixed must hold 1 signs (1, -1, or 0 where free), got shape (2,)."),
    (
        {"fixed": [1, 1], "supercell": (3, 1, 1)},
        "fixed must hold 1 (one per magnetic site) or 3 signs (1, -1, or 0 where free), got shape (2,).",
    ),
    ({"fixed": [2]}, "fixed may hold 1, -1 and 0 only, got [2]."),
    ({"keep": 0}, "keep must be a whole number of at least 1, got 0."),
    ({"seed": -1}, "seed must be a whole number of at least 0, got -1."),
    ({"restarts": 1.5}, "restarts must be a whole number of at least 1, got 1.5."),
    ({"moments": "xy"}, "moments must be one of ising, planar, heisenberg; got 'xy'."),
    ({"method": "fast"}, "method must be one of auto, exhaustive, annealing; got 'fast'."),
    (
        {"moments": "planar"},
        'moments="planar" needs the normal of the plane: give along, or axes for one per magnetic site.',
    ),
    (
        {"moments": "heisenberg", "along": (0, 0, 1)},
        'moments="heisenberg" may point anywhere; leave out along and axes.',
    ),
    (
        {"moments": "heisenberg", "method": "exhaustive"},
        'method="exhaustive" tries ± patterns; moments="heisenberg" are annealed.',
    ),
    (
        {"moments": "heisenberg", "fixed": [1]},
        'fixed signs have no meaning for moments="heisenberg"; leave them out.',
    ),
    (
        {"k": (0.25, 0, 0)},
        "k = [0.25, 0.0, 0.0]: a pattern of signs follows k only where every coordinate is a whole number or a half. "
        "Search a supercell instead, or look for modes.",
    ),
    (
        {"net_zero": True, "along": (0, 0, 1)},
        "no arrangement of these moments has zero net moment here. Take a larger supercell, such as "
        "supercell=(2, 2, 2), or other constraints.",
    ),
]


@pytest.mark.parametrize(("options", "message"), REFUSED, ids=[str(i) for i in range(len(REFUSED))])
def test_refuses(options, message):
    given = {"sizes": {"Mn": 1.0}, **options}
    with pytest.raises(InputError) as caught:
        ld.propose(CUBE, **given)
    assert str(caught.value) == message


def test_refuses_zero_moments():
    with pytest.raises(InputError) as caught:
        ld.propose(CUBE, {"Mn": 0})
    assert str(caught.value) == (
        "sizes['Mn'] must be a moment above zero in µB, got 0. Leave out sites without a moment."
    )


def test_refuses_too_large():
    with pytest.raises(LimitError) as caught:
        ld.propose(CUBE, {"Mn": 1.0}, supercell=(30, 30, 30))
    assert str(caught.value) == (
        "a supercell of 30 × 30 × 30 cells holds 27,000 moments, more than 10,000. Take a smaller supercell."
    )
