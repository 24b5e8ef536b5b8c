"""Ranking: order, differences, ties, fields beside, rigid turns, and what is refused."""

from __future__ import annotations

import json
import pickle

import numpy as np
import pytest

import latticedip as ld
from latticedip.analysis.rank import CAVEAT
from latticedip.errors import InputError
from latticedip.units import J_PER_M3_PER_EV_A3
from tests.reference.constants import DIPOLE_EV

CUBE = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"], name="cube")
SCALE = DIPOLE_EV * 4 / 64  # µ0 µ²/(4π a³) for 2 µB and 4 Å
# Luttinger and Tisza, Phys. Rev. 70, 954 (1946): energies of the simple cubic lattice in that unit.
CHAINS_UP, CHAINS_ACROSS = -2.6767886844, 2.6767886844 / 2


def cube(moment, k=(0, 0, 0), name="") -> ld.Ordering:
    return ld.Ordering(CUBE, [moment], k, name)


UP = cube([0, 0, 2.0], (0.5, 0.5, 0), "chains up")
ACROSS = cube([2.0, 0, 0], (0.5, 0.5, 0), "chains across")
FERRO = cube([0, 0, 2.0], name="ferromagnet")


def test_order_and_differences():
    ranking = ld.rank([FERRO, ACROSS, UP])
    assert [row.ordering.name for row in ranking.rows] == ["chains up", "ferromagnet", "chains across"]
    energies = np.array([row.energy.per_ion_eV for row in ranking.rows])
    assert np.allclose(energies / SCALE, [CHAINS_UP, -2 * np.pi / 3, CHAINS_ACROSS], rtol=1e-8)
    assert np.allclose([row.above_lowest_eV for row in ranking.rows], energies - energies[0])
    assert ranking.rows[0].above_lowest_eV == 0
    assert not any(row.tie for row in ranking.rows)
    assert ranking.notes == (CAVEAT,) and not ranking.rotated
    row = ranking.rows[0]
    assert row.easy_axis_cart is row.hard_axis_cart is row.rotation is None
    assert row.anisotropy_eV_per_ion is row.anisotropy_J_per_m3 is None


def test_candidates_in_other_cells_count_per_ion():
    explicit = ld.Ordering.from_ase(UP.to_ase((2, 2, 1)), "supercell")
    ranking = ld.rank([ACROSS, explicit, UP])
    assert [row.tie for row in ranking.rows] == [True, True, False]
    assert {row.ordering.name for row in ranking.rows[:2]} == {"chains up", "supercell"}
    assert ranking.rows[1].above_lowest_eV < 1e-15
    assert sorted(row.energy.n_ions for row in ranking.rows) == [1, 1, 4]


def test_ties_are_neighbours_within_the_bound():
    # Domains of one ordering tie; a loose tolerance ties what a tight one tells apart.
    domains = [cube(m, k, str(k)) for m, k in (([0, 0, 2], (0.5, 0.5, 0)), ([2, 0, 0], (0, 0.5, 0.5)))]
    domains.append(cube([0, -2.0, 0], (0.5, 0, -0.5), "third"))
    assert [row.tie for row in ld.rank([*domains, FERRO]).rows] == [True, True, True, False]
    near = cube([0, 0, 2.0 * (1 + 1e-9)], (0.5, 0.5, 0), "larger by 1e-9")
    bound = ld.dipolar_energy(UP, tol=1e-12).error_bound_eV
    difference = abs(CHAINS_UP * SCALE) * 2e-9
    assert bound < difference / 10
    assert [row.tie for row in ld.rank([UP, near], tol=1e-12).rows] == [False, False]
    assert [row.tie for row in ld.rank([UP, near], tol=1e-4).rows] == [True, True]
    assert not ld.rank([UP]).rows[0].tie


def test_shape_and_field_decide():
    assert ld.rank([UP, FERRO], sample=ld.Sample.plate((0, 0, 1))).rows[0].ordering is UP
    sample = ld.Sample.plate((0, 0, 1), applied_T=(0, 0, 50.0))
    ranking = ld.rank([UP, FERRO], sample=sample)
    assert ranking.rows[0].ordering is FERRO
    energy = ranking.rows[0].energy
    assert energy.per_ion_eV == pytest.approx(SCALE * (4 * np.pi / 3) - 2 * 50 * 5.7883818e-5, rel=1e-7)
    assert ranking.boundary == "sample shape: plate with normal (0, 0, 1)"
    assert ld.rank([UP, FERRO]).boundary == (
        "net moment without a stated shape: N = 0 assumed (a domain that closes its flux)"
    )
    assert ld.rank([UP]).boundary == "no net moment: the shape of the sample does not matter (N = 0 sum)"


def test_fields_beside():
    probes = [ld.Probe((0.5, 0.5, 0.1), name="muon A"), ld.Probe(site="Mn", particle="55Mn")]
    sample = ld.Sample.sphere(applied_T=(0, 0, 0.1))
    for row in ld.rank([UP, FERRO], probes=probes, sample=sample).rows:
        assert list(row.fields) == ["muon A", "55Mn at Mn"]
        for probe in probes:
            expected = ld.local_field(row.ordering, probe, sample=sample)
            assert np.array_equal(row.fields[probe.name].total, expected.total)


def test_rotate():
    probe = ld.Probe((0.5, 0.5, 0.1), name="muon A")
    given = cube([2.0, 0, 0], (0.5, 0.5, 0), "chains")
    ranking = ld.rank([given, FERRO], rotate=True, probes=[probe])
    row = ranking.rows[0]
    assert ranking.rotated and row.ordering.name == "chains"
    assert np.allclose(np.abs(row.easy_axis_cart), [0, 0, 1])
    assert np.allclose(np.abs(row.hard_axis_cart), [1, 0, 0])  # the one in the hard plane nearest to the given moment
    # The ordering, its energy and the fields are those of the turned pattern; the one given stays as it was.
    assert np.allclose(np.abs(row.ordering.components[0, 0]), [0, 0, 2])
    assert np.allclose(row.rotation @ given.components[0, 0].real, row.ordering.components[0, 0].real)
    assert np.array_equal(given.components[0, 0], [2, 0, 0])
    assert row.energy.per_ion_eV == pytest.approx(CHAINS_UP * SCALE, rel=1e-8)
    assert np.array_equal(row.fields["muon A"].total, ld.local_field(row.ordering, probe).total)
    anisotropy = (CHAINS_ACROSS - CHAINS_UP) * SCALE
    assert row.anisotropy_eV_per_ion == pytest.approx(anisotropy, rel=1e-8)
    assert row.anisotropy_J_per_m3 == pytest.approx(anisotropy / 64 * J_PER_M3_PER_EV_A3, rel=1e-8)
    assert pytest.approx(1.602176634e11) == J_PER_M3_PER_EV_A3
    # Isotropic: no anisotropy, and the pattern stays.
    ferro = ranking.rows[1]
    assert abs(ferro.anisotropy_eV_per_ion) < 1e-14 and np.allclose(ferro.rotation, np.eye(3))


def test_rotation_can_change_the_order():
    explicit = ld.Ordering.from_ase(UP.to_ase((2, 2, 1)), "supercell across").rotated(
        [[0, 0, 1], [0, 1, 0], [-1, 0, 0]]
    )
    plain = ld.rank([explicit, FERRO])
    turned = ld.rank([explicit, FERRO], rotate=True)
    assert plain.rows[0].ordering.name == "ferromagnet" and turned.rows[0].ordering.name == "supercell across"
    assert turned.rows[0].anisotropy_eV_per_ion == pytest.approx((CHAINS_ACROSS - CHAINS_UP) * SCALE, rel=1e-8)


def test_rotate_a_helix():
    helix = ld.Ordering(CUBE, [[1, 1j, 0]], (0, 0, 0.2), "helix")
    row = ld.rank([helix], rotate=True).rows[0]
    assert row.orientation.axis_meaning == "plane normal"
    assert ld.dipolar_energy(helix).per_ion_eV >= row.energy.per_ion_eV
    document = row.to_dict()
    assert document["axis_meaning"] == "plane normal" and document["stationary_directions"] == []


def test_one_ordering_alone():
    assert ld.rank(UP).rows[0].ordering is UP


@pytest.mark.parametrize("rotate", [False, True])
def test_objects_survive_pickling_and_json(rotate):
    tilted = ld.Ordering(
        ld.Crystal(np.diag([4.0, 5, 6]), [[0, 0, 0], [0.5, 0.4, 0.5], [0.1, 0.5, 0.6]], ["Mn"] * 3),
        [[1, 0, 0], [0, 1, 0], [0, 0, 1]],
        name="tilted",
    )
    probes = [ld.Probe((0.3, 0.4, 0.1), name="muon A")]
    ranking = ld.rank([UP, FERRO, tilted], rotate=rotate, probes=probes, sample=ld.Sample.sphere())
    again = pickle.loads(pickle.dumps(ranking))
    assert again.to_dict() == ranking.to_dict()
    document = json.loads(json.dumps(ranking.to_dict(), allow_nan=False))
    assert document["rotated"] is rotate and len(document["rows"]) == 3
    row = document["rows"][0]
    expected = {"energy_ueV_per_ion", "energy_K_per_ion", "above_lowest_ueV_per_ion", "tie", "fields", "boundary"}
    assert expected <= set(row)
    assert ("easy_axis_cart" in row) is rotate


REFUSED = {
    "nothing": ([], {}, "there is no ordering to rank; give at least one."),
    "no moments": (
        [UP, cube([0, 0, 0], name="empty")],
        {},
        "ordering 'empty' carries no moments: all components are zero.",
    ),
    "two probes": (
        [UP],
        {"probes": [ld.Probe((0, 0, 0.5)), ld.Probe((0, 0, 0.5))]},
        "two probes are named 'muon at (0, 0, 0.5)'; names must differ.",
    ),
    "tol": ([UP], {"tol": float("nan")}, "tol must be a finite number, got nan."),
    "no ordering": ([UP, CUBE], {}, "rank takes Orderings, got Crystal as number 2."),
    "no probe": ([UP], {"probes": [(0, 0, 0.5)]}, "probes must be Probes, got (0, 0, 0.5)."),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refusals(name):
    orderings, options, message = REFUSED[name]
    with pytest.raises(InputError) as caught:
        ld.rank(orderings, **options)
    assert str(caught.value) == message


def test_one_probe_alone():
    probe = ld.Probe((0, 0, 0.5), name="muon A")
    assert list(ld.rank([UP], probes=probe).rows[0].fields) == ["muon A"]
