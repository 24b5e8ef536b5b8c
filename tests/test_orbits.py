"""Fields on orbits: levels with their multiplicities, waves from cell to cell, what is turned with a position."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError
from tests.reference.magnets import sphere_field, waves

CUBIC = ld.Crystal(4.0 * np.eye(3), [[0, 0, 0]], ["Mn"])
BCC = ld.Crystal(2.866 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Fe", "Fe"])


def levels(ordering, probe, **options):
    return [(level.field_T, level.number) for level in ld.orbit_field(ordering, probe, **options).levels]


def test_the_orbit_of_an_interstitial_site_splits_into_published_levels():
    """bcc iron: tetrahedral 0.263 T on 2/3 and 0.526 T on 1/3, octahedral 1.856 T on 1/3 and 0.928 T on 2/3
    (Seeger 1978, Schenck 1985; from memory), in a sphere so that Lorentz and demagnetizing field cancel."""
    iron = ld.Ordering(BCC, [[0, 0, 2.2]] * 2)
    for position, expected in (
        ([0.5, 0.25, 0], [(0.263, 8), (0.526, 4)]),
        ([0.5, 0.5, 0], [(0.928, 4), (1.856, 2)]),
    ):
        found = levels(iron, ld.Probe(position), sample=ld.Sample.sphere())
        assert [number for _, number in found] == [number for _, number in expected]
        assert [field for field, _ in found] == pytest.approx([field for field, _ in expected], abs=6e-4)


def test_the_field_of_every_cell_is_that_of_the_explicit_moments():
    k, parts = [0.213, 0.1, 0.0], np.array([[1.0, 0.3j, 0.2]])
    found = ld.orbit_field(ld.Ordering(CUBIC, parts, k), ld.Probe([0.5, 0.5, 0.12]))
    cells = np.array([[0, 0, 0], [3, -2, 1], [11, 7, 0]])
    fields = found.fields(cells)
    for i, point in enumerate(found.positions):
        for j, cell in enumerate(cells):
            expected = sphere_field(CUBIC.cell, CUBIC.positions, waves(k, parts[None]), point + cell, radius=100.0)
            assert fields[i, j] == pytest.approx(expected, abs=2e-5)


def test_several_waves_with_contact_add_up_to_the_local_field():
    """Shells count the ions of the whole ordering, not those of one wave."""
    crystal = ld.Crystal(np.diag([4.0, 4.0, 5.0]), [[0, 0, 0], [0.5, 0.5, 0.4]], ["Mn", "Mn"])
    components = np.array([[[1, 0, 0.5], [0, 0, 0]], [[0, 0, 0], [0, 1j, 1]], [[0, 0, 0.7], [0, 0, 0.2]]])
    k = [[0.2, 0.1, 0], [0.3, 0, 0.11], [0, 0, 0]]
    probe = ld.Probe([0.3, 0.1, 0.7], contact=[ld.Contact(0.05, shell=1), ld.Contact(0.02, within=4.0)])
    sample = ld.Sample.sphere(applied_T=[0.1, 0, 0.3])
    ordering = ld.Ordering(crystal, components, k)
    found = ld.orbit_field(ordering, probe, sample=sample, equivalent=False)
    expected = ld.local_field(ordering, probe, sample=sample).total
    assert found.fields([[0, 0, 0]])[:, 0] == pytest.approx(expected, abs=1e-12)
    assert len(found.k) == 2


def test_a_site_stands_for_all_atoms_that_symmetry_relates():
    crystal = ld.Crystal(
        4.0 * np.eye(3),
        [[0, 0, 0], [0.5, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0.5], [0.5, 0.5, 0.5]],
        ["Mn", "F", "F", "F", "F"],
        labels=("Mn1", "F1", "F1", "F2", "F3"),
    )
    ordering = ld.Ordering(crystal, [[0, 0, 1]] + [[0, 0, 0]] * 4)
    found = ld.orbit_field(ordering, ld.Probe(site="F1", particle="19F"))
    assert (found.multiplicity, len(found.positions)) == (3, 3)
    assert sorted(level.number for level in found.levels) == [1, 2]
    alone = ld.orbit_field(ordering, ld.Probe(site="F1", particle="19F"), equivalent=False)
    assert (alone.multiplicity, len(alone.positions)) == (2, 2)


def test_a_contact_tensor_turns_with_its_position():
    """Along the bond the coupling is 1 T/µB: with moments along z the site on the z axis feels it and no other."""
    tensor = np.diag([0.0, 0.0, 1.0])
    ordering = ld.Ordering(CUBIC, [[0, 0, 1]])
    bare = ld.orbit_field(ordering, ld.Probe([0, 0, 0.5]))
    found = ld.orbit_field(ordering, ld.Probe([0, 0, 0.5], contact=ld.Contact(tensor, shell=1)))
    extra = found.steady - bare.steady
    on_axis = np.isclose(found.positions[:, 2], 0.5)
    assert found.multiplicity == 3
    assert extra[on_axis] == pytest.approx(np.array([[0, 0, 2.0]]))
    assert extra[~on_axis] == pytest.approx(np.zeros((2, 3)), abs=1e-12)


def test_a_tensor_below_the_symmetry_of_its_position_lies_in_several_ways():
    """A tensor across the bond breaks the fourfold axis: two ways at each of three positions."""
    tensor = np.diag([1.0, 0.0, 0.0])
    found = ld.orbit_field(ld.Ordering(CUBIC, [[0, 0, 1]]), ld.Probe([0, 0, 0.5], contact=ld.Contact(tensor, shell=1)))
    assert found.multiplicity == 6
    site = ld.Probe(site="Mn", particle="55Mn", contact=ld.Contact(tensor, shell=1))
    with pytest.raises(InputError) as caught:
        ld.orbit_field(ld.Ordering(CUBIC, [[0, 0, 1]]), site)
    assert str(caught.value) == (
        "55Mn at Mn: its contact tensor is stated for the first atom and does not have the symmetry of that site, so "
        "that the other atoms have none of their own. Symmetrize it, or give a number."
    )


def test_a_moment_density_holds_at_one_position():
    density = ld.Contact(moment_density_muB_per_A3=[0, 0, 0.01])
    ordering = ld.Ordering(CUBIC, [[0, 0, 1]])
    found = ld.orbit_field(ordering, ld.Probe([0.5, 0.5, 0.5], contact=density))
    expected = ld.local_field(ordering, ld.Probe([0.5, 0.5, 0.5], contact=density)).total
    assert found.steady == pytest.approx(expected)
    with pytest.raises(InputError) as caught:
        ld.orbit_field(ordering, ld.Probe([0, 0, 0.5], contact=density))
    assert str(caught.value) == (
        "muon at (0, 0, 0.5): a moment density holds at one position in one cell, and under this ordering the probe "
        "feels different fields in several. Give a coupling with shell or within instead."
    )


def test_a_decimal_near_a_fraction_is_remarked_on():
    found = ld.orbit_field(ld.Ordering(CUBIC, [[0, 0, 1]], [0.3333, 0, 0]), ld.Probe([0.5, 0.5, 0.5]))
    assert found.notes == ('the coordinate 0.3333 of k is taken as it stands; for a commensurate ordering write "1/3"',)
    assert not found.is_commensurate
    with pytest.raises(InputError) as caught:
        _ = found.levels
    assert str(caught.value) == ("the ordering is incommensurate: its fields fill curves and cannot be listed.")


def test_motion_and_displaced_neighbours_turn_with_the_position():
    """On the z axis and on the x axis: the same tensor and push, seen from the position."""
    stretched = np.diag([1e-2, 1e-2, 9e-2])
    push = ld.Displaced(atom=(0, (0, 0, 0)), vector_A=[0, 0, -0.2])
    probe = ld.Probe([0, 0, 0.5], spread=stretched, displaced=push)
    found = ld.orbit_field(ld.Ordering(CUBIC, [[0, 0, 1]]), probe)
    # The push to one side only: two ways at each of three positions.
    assert found.multiplicity == 6
    for axis in range(3):
        moment = np.eye(3)[[axis]]
        alone = ld.orbit_field(ld.Ordering(CUBIC, moment), probe)
        assert sorted(x.field_T for x in alone.levels) == pytest.approx([x.field_T for x in found.levels], rel=1e-9)
    assert sum("displaced atom" in note for note in found.notes) == 1
