"""Signs, directions and amplitudes become components; centrings give k the meaning a diffractionist expects."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latticedip.crystal.model import Crystal, Operations
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.ordering.patterns import Setting, phase_factor, read_signs, unit_direction

FCC = ((0, 0, 0), (0, 0.5, 0.5), (0.5, 0, 0.5), (0.5, 0.5, 0))
BCC = ((0, 0, 0), (0.5, 0.5, 0.5))
OBVERSE = ((0, 0, 0), (2 / 3, 1 / 3, 1 / 3), (1 / 3, 2 / 3, 2 / 3))
CELL = np.diag([4.0, 5.0, 7.0])
CELLS = np.array(list(itertools.product(range(3), repeat=3)))


def centred(centrings, basis=((0.0, 0.0, 0.0),), cell=CELL, labels=None):
    """A crystal of Mn at the basis positions and their centring images, with its operations stated."""
    shifts = np.array(centrings, dtype=float)
    positions = [(np.array(site) + shift) % 1.0 for site in basis for shift in shifts]
    operations = Operations(np.tile(np.eye(3, dtype=int), (len(shifts), 1, 1)), shifts)
    names = ["Mn1"] * len(positions) if labels is None else labels
    return Crystal(cell, np.array(positions), ("Mn",) * len(positions), tuple(names), operations=operations)


def signed(crystal, k, signs, along=(0, 0, 1), size=1.0):
    """The ordering of a sign list over all Mn1."""
    setting = Setting.of(crystal, k)
    sites = crystal.find("Mn1")
    components = np.zeros((crystal.n_sites, 3), dtype=complex)
    entries = setting.spread(sites, read_signs(signs))
    components[list(sites)] = size * entries[:, None] * unit_direction(crystal, along)
    return setting.finish(components)


def along_z(ordering, cells=CELLS):
    """Positions (fractional, absolute) and z components of every moment in some cells."""
    positions = (ordering.crystal.positions[None] + np.array(cells)[:, None]).reshape(-1, 3)
    return positions, ordering.moments(cells).reshape(-1, 3)[:, 2]


def test_type_two_order_alternates_along_every_111_plane_stack():
    positions, moments = along_z(signed(centred(FCC), (0.5, 0.5, 0.5), "+"))
    planes = np.round(positions.sum(axis=1)).astype(int)
    np.testing.assert_array_equal(moments, (-1.0) ** planes)


@pytest.mark.parametrize("k", [(0, 0, 1), (0, 0, -1), (1, 1, 0), (0, 0, 3)])
def test_type_one_order_alternates_along_the_planes_of_one_axis(k):
    positions, moments = along_z(signed(centred(FCC), k, "+"))
    planes = np.round(2 * positions[:, 2]).astype(int)
    np.testing.assert_array_equal(moments, (-1.0) ** planes)


def test_body_centred_antiferromagnet_from_k_001():
    ordering = signed(centred(BCC), (0, 0, 1), "+", size=2.5)
    np.testing.assert_array_equal(ordering.moments()[0, :, 2], [2.5, -2.5])
    assert np.all(ordering.net_moment == 0)


def test_a_list_for_the_whole_cell_is_taken_literally():
    ordering = signed(centred(BCC), (0, 0, 0.5), "++")
    np.testing.assert_array_equal(ordering.components[0, :, 2], [1, 1])
    np.testing.assert_array_equal(ordering.moments([(0, 0, 1)])[0, :, 2], [-1, -1])


def test_entries_go_to_the_first_atom_of_each_class_in_site_order():
    crystal = centred(BCC, basis=[(0.9, 0.1, 0.3), (0.2, 0.1, 0.3)])
    # In site order: x = 0.2 (second of the basis), 0.4 (image of the first), 0.7, 0.9.
    ordering = signed(crystal, (0, 0, 1), "+-")
    at = [round(float(x), 3) for x in crystal.positions[:, 0]]
    by_position = dict(zip(at, ordering.moments()[0, :, 2], strict=True))
    assert by_position == {0.2: 1.0, 0.7: -1.0, 0.4: -1.0, 0.9: 1.0}


@given(
    k=st.tuples(*[st.floats(-1, 1).map(lambda x: round(x, 3))] * 3),
    offsets=st.lists(st.tuples(*[st.integers(-2, 2)] * 3), min_size=6, max_size=6),
    centring=st.sampled_from([FCC, BCC, OBVERSE]),
)
@settings(max_examples=60, deadline=None)
def test_signs_follow_the_primitive_lattice_however_sites_are_wrapped(k, offsets, centring):
    """Every moment is that of its class head times the phase of the whole lattice vector between them."""
    crystal = centred(centring, basis=[(0.11, 0.2, 0.05), (0.3, 0.45, 0.62)])
    shifted = Crystal(
        crystal.cell,
        crystal.positions + np.resize(np.array(offsets), crystal.positions.shape),
        crystal.symbols,
        crystal.labels,
        operations=crystal.operations,
    )
    try:
        setting = Setting.of(shifted, k)
    except InputError:
        assert np.all(np.array(k) == np.round(k))
        return
    sites = shifted.find("Mn1")
    values = setting.spread(sites, [1.0, 1.0])
    for value, site in zip(values, sites, strict=True):
        ones = [s for s, v in zip(sites, values, strict=True) if v == 1.0]
        heads = [s for s in ones if _differ_by_centring(shifted, site, s, centring)]
        steps = [shifted.positions[site] - shifted.positions[head] for head in heads]
        assert any(abs(value - np.exp(-2j * np.pi * (setting.k @ step))) < 1e-9 for step in steps)


def _differ_by_centring(crystal, one, other, centring):
    gap = crystal.positions[one] - crystal.positions[other] - np.array(centring)
    return bool(np.any(np.all(np.abs(gap - np.round(gap)) < 1e-6, axis=1)))


def test_a_quarter_turn_from_centring_leaves_no_moment_and_says_so():
    """At k = (½,0,0) of a body-centred cell the amplitude is a cosine: m, 0, −m, 0 along a."""
    ordering = signed(centred(BCC), (0.5, 0, 0), "+")
    np.testing.assert_array_equal(ordering.moments([(0, 0, 0), (1, 0, 0)])[:, :, 2], [[1, 0], [-1, 0]])
    assert ordering.notes == (
        "the moment vanishes on 1 of 2 atoms of Mn1: at k = (0.5, 0, 0) their phase is a quarter turn, and one k "
        "carries the real part alone",
    )
    assert ordering.n_ions == 1


def test_thirds_written_with_five_digits_keep_exact_phases():
    rounded = [(0, 0, 0), (0.66667, 0.33333, 0.33333), (0.33333, 0.66667, 0.66667)]
    hexagonal = np.array([[5, 0, 0], [-2.5, 2.5 * np.sqrt(3), 0], [0, 0, 13.0]])
    ordering = signed(centred(rounded, cell=hexagonal), (0, 0, 1.5), "+")
    # Layers at z = 0, 1/3, 2/3 turn by half a turn each: the layer at 1/3 is (2/3, 1/3, 1/3).
    np.testing.assert_array_equal(ordering.components[0, :, 2], [1, -1, 1])


@pytest.mark.parametrize(
    ("crystal", "k"), [(centred([(0, 0, 0)]), (0, 0, 1)), (centred(FCC), (0, 0, 2)), (centred(BCC), (1, 1, 0))]
)
def test_a_whole_k_without_meaning_is_refused(crystal, k):
    with pytest.raises(InputError) as caught:
        Setting.of(crystal, k)
    written = "(" + ", ".join(str(x) for x in k) + ")"
    assert str(caught.value) == (
        f"k = {written} repeats in every cell and no centring of this crystal gives it another meaning: it is the same "
        "as (0, 0, 0). Write k = [0, 0, 0], or the k of the cell you mean."
    )


def test_sites_with_labels_of_their_own_are_not_copies():
    crystal = centred(BCC, labels=["Mn1", "Mn2"])
    setting = Setting.of(crystal, (0, 0, 0.5))
    assert len(setting.centrings) == 1
    assert setting.counts(crystal.find("Mn")) == (2, 2)


def test_k_along_a_direction_without_periodicity_is_refused():
    layer = Crystal(CELL, [[0, 0, 0]], ("Mn",), pbc=(True, True, False))
    with pytest.raises(InputError, match="k has a component along c, in which the crystal is not periodic"):
        Setting.of(layer, (0.5, 0, 0.5))
    assert Setting.of(layer, (0.5, 0.5, 0)).self_conjugate


def test_a_list_of_the_wrong_length_is_refused():
    setting = Setting.of(centred(FCC), (0, 0, 1))
    with pytest.raises(InputError) as caught:
        setting.spread(setting.crystal.find("Mn1"), [1.0, -1.0])
    assert str(caught.value) == (
        "2 entries, expected 1 (one per atom of the primitive cell) or 4 (one per atom of the whole cell)."
    )


def test_stated_operations_of_another_crystal_are_refused():
    crystal = Crystal(CELL, [[0, 0, 0], [0.5, 0.5, 0.4]], ("Mn", "Mn"), operations=centred(BCC).operations)
    with pytest.raises(InputError) as caught:
        Setting.of(crystal, (0, 0, 0.5))
    assert str(caught.value) == (
        "the centring translation (0.5, 0.5, 0.5) of the crystal maps atom 1 (Mn) onto no atom: the symmetry "
        "operations stated are not those of this crystal."
    )


@pytest.mark.parametrize("text", ["+-0", "+ - 0", "+−0"])
def test_signs_are_read(text):
    assert read_signs(text) == [1.0, -1.0, 0.0]


@pytest.mark.parametrize(
    ("text", "message"),
    [("+x", "'x' is no sign; signs are +, - and 0."), ("  ", "the list holds no sign; signs are +, - and 0.")],
)
def test_what_is_no_sign_is_refused(text, message):
    with pytest.raises(InputError) as caught:
        read_signs(text)
    assert str(caught.value) == message


def test_a_direction_is_along_unit_vectors_of_the_crystal_axes():
    crystal = centred([(0, 0, 0)], cell=np.diag([3.0, 4.0, 9.0]))
    np.testing.assert_allclose(unit_direction(crystal, [1, 1, 0]), [0.5**0.5, 0.5**0.5, 0])
    monoclinic = centred([(0, 0, 0)], cell=np.array([[3.0, 0, 0], [0, 4, 0], [-2, 0, 5]]))
    np.testing.assert_allclose(unit_direction(monoclinic, [0, 0, 7e-200]), np.array([-2, 0, 5]) / 29**0.5)


def test_phases_of_quarter_turns_are_exact():
    np.testing.assert_array_equal(phase_factor([0, 0.25, -0.5, 1.75]), [1, -1j, -1, 1j])


def test_nothing_left_is_refused():
    setting = Setting.of(centred(BCC), (0.5, 0, 0))
    with pytest.raises(InputError) as caught:
        setting.finish(np.array([[0, 0, 1j], [0, 0, 0]]))
    assert str(caught.value) == (
        "at k = (0.5, 0, 0) every moment vanishes: the phase of each atom is a quarter turn. Shift the phase (swap "
        'cosine and sine) or count cells with phase = "cell".'
    )
    with pytest.raises(InputError, match=r"^every moment is zero\.$"):
        setting.finish(np.zeros((2, 3), dtype=complex))


def test_a_centred_pattern_equals_the_same_pattern_in_the_primitive_cell():
    """The same k in the primitive reciprocal cell gives the same moment at every place."""
    crystal = centred(FCC, cell=np.eye(3) * 4.0)
    k = np.array([0.3, 0.1, 0.5])
    primitive_rows = np.array([[0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]])
    small = Ordering(Crystal(primitive_rows * 4.0, [[0, 0, 0]], ("Mn",)), [[0, 0, 1.0]], primitive_rows @ k)
    positions, moments = along_z(signed(crystal, k, "+"))
    cells = np.round(positions @ np.linalg.inv(primitive_rows))
    np.testing.assert_allclose(moments, small.moments(cells)[:, 0, 2], atol=1e-12)
