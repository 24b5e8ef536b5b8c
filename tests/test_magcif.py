"""magCIF: operations on unit-vector components, centrings, spellings, uncertainties, the parent's cell."""

import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import FileError
from latticedip.files.cifsyntax import parse_blocks
from latticedip.files.magcif import read_magnetic_ordering

DATA = Path(__file__).parent / "data"


def atom(ordering, label, position):
    """Index of the atom of a label at a fractional position."""
    difference = ordering.crystal.positions - np.array(position)
    difference -= np.round(difference)
    close = np.abs(difference).max(axis=1) < 1e-6
    (index,) = [i for i in np.flatnonzero(close) if ordering.crystal.labels[i] == label]
    return index


def crystal_axes(ordering):
    return ordering.crystal.to_crystal_axes(ordering.moments()[0])


def read_text(text):
    return read_magnetic_ordering(parse_blocks(text.encode(), "x.mcif")[0], "x")


def test_a_three_fold_axis_turns_unit_vector_components():
    # Written out by hand: the moment along a goes to one along b, then to one along -a-b; the c component stays.
    ordering = ld.read_ordering(DATA / "hexagonal.mcif")
    moments, su = crystal_axes(ordering), ordering.moment_su
    first, second, third = (atom(ordering, "Mn1", x) for x in ((0.25, 0, 0), (0, 0.25, 0), (0.75, 0.75, 0)))
    assert moments[first] == pytest.approx([4, 0, 1], abs=1e-14)
    assert moments[second] == pytest.approx([0, 4, 1], abs=1e-14)
    assert moments[third] == pytest.approx([-4, -4, 1], abs=1e-14)
    # In Cartesian axes the same three moments: 4 µB at 0, 120 and 240 degrees.
    cart = ordering.moments()[0]
    assert cart[second] == pytest.approx([-2, 2 * np.sqrt(3), 1], abs=1e-14)
    assert cart[third] == pytest.approx([-2, -2 * np.sqrt(3), 1], abs=1e-14)
    assert su[first] == pytest.approx([0.1, np.nan, 0.05], nan_ok=True)
    assert su[second] == pytest.approx([np.nan, 0.1, 0.05], nan_ok=True)
    assert su[third] == pytest.approx([0.1, 0.1, 0.05], nan_ok=True)
    fe = atom(ordering, "Fe1", (1 / 3, 2 / 3, 0.5))
    assert moments[fe] == pytest.approx([0, 0, -2.5], abs=1e-14)
    assert ordering.crystal.labels.count("O1") == 3
    assert ordering.net_moment == pytest.approx([0, 0, 3 - 0.9 * 2.5], abs=1e-14)
    assert ordering.crystal.notes == (
        "partial occupancy (Fe1 0.9): every sum takes the mean moment, occupancy times moment",
    )


def test_the_plain_matrix_would_be_wrong_where_axes_differ():
    # A diagonal two-fold axis of a primitive cell of a centred lattice mixes axes of unequal length:
    # a' = (1, 0, 0), b' = (1/2, 1, 0) in units with |a'| = 4, |b'| = sqrt(4 + 9). Turning by 180 degrees about
    # x takes a' to itself and b' to a' - b'.
    b = np.sqrt(13.0)
    gamma = np.degrees(np.arccos(2 / b))
    text = f"""data_x
_cell_length_a 4
_cell_length_b {b:.17g}
_cell_length_c 5
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma {gamma:.17g}
loop_
_space_group_symop_magn_operation.xyz
x,y,z,+1
x+y,-y,-z,+1
loop_
_atom_site_label
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
Mn1 0.1 0.2 0.3
loop_
_atom_site_moment.label
_atom_site_moment.Cartn_x
_atom_site_moment.Cartn_y
_atom_site_moment.Cartn_z
Mn1 1 2 3
"""
    moments = read_text(text).moments()[0]
    assert moments[0] == pytest.approx([1, 2, 3], abs=1e-13)
    assert moments[1] == pytest.approx([1, -2, -3], abs=1e-13)
    assert np.linalg.norm(moments, axis=1) == pytest.approx(np.full(2, np.sqrt(14)), rel=1e-13)


def test_prototype_tags_anti_centring_latin_1_and_lists():
    ordering = ld.read_ordering(DATA / "monoclinic.mcif")
    moments = crystal_axes(ordering)
    # Two-fold axis along b: an axial vector keeps its b component; the anti-centring reverses all.
    for position, expected in (
        ((0.1, 0.2, 0.05), (1, 0.5, 2)),
        ((0.9, 0.2, 0.95), (-1, 0.5, -2)),
        ((0.1, 0.2, 0.55), (-1, -0.5, -2)),
        ((0.9, 0.2, 0.45), (1, -0.5, 2)),
    ):
        assert moments[atom(ordering, "Co1", position)] == pytest.approx(expected, abs=1e-14)
    assert moments[atom(ordering, "Co2", (0, 0.7, 0))] == pytest.approx([0, 3, 0], abs=1e-14)
    assert moments[atom(ordering, "Co2", (0, 0.7, 0.5))] == pytest.approx([0, -3, 0], abs=1e-14)
    assert ordering.moment_su[:4] == pytest.approx(np.tile([np.nan, 0.25, np.nan], (4, 1)), nan_ok=True)
    assert ordering.n_ions == 6
    assert ordering.notes == ("propagation vector of the parent cell: [0 0 1/2]",)
    assert ordering.crystal.n_sites == 10


def test_the_parent_transform_points_from_child_to_parent_coordinates():
    parent = ld.read_ordering(DATA / "monoclinic.mcif").parent
    # The child cell is twice the parent along c, its origin at (0, 1/2, 0) of the parent. A point half way up the
    # child cell is a whole parent cell up: (0, 0, 1/2) of the child is (0, 1/2, 1) of the parent.
    assert parent.P @ [0, 0, 0.5] + parent.p == pytest.approx([0, 0.5, 1])
    assert parent.P @ [0.25, 0.5, 0.1] + parent.p == pytest.approx([0.25, 1.0, 0.2])


def test_columns_of_P_are_the_child_vectors():
    text = minimal(extra="_parent_space_group.child_transform_Pp_abc 'a-b,a+b,c;1/4,0,0'")
    parent = read_text(text).parent
    # One step along the child's a is one along the parent's a and one back along its b.
    step = parent.P @ [1, 0, 0]
    assert step == pytest.approx([1, -1, 0])
    assert parent.P @ [0, 1, 0] + parent.p == pytest.approx([1.25, 1, 0])


def minimal(
    moment="_atom_site_moment_crystalaxis_x _atom_site_moment_crystalaxis_y _atom_site_moment_crystalaxis_z",
    values="0 0 2",
    extra="",
    operations="x,y,z,+1",
    position="0.1 0.2 0.3",
    cell="4 5 6 90 90 90",
):
    names = ("length_a", "length_b", "length_c", "angle_alpha", "angle_beta", "angle_gamma")
    lines = ["data_x"]
    lines += [f"_cell_{name} {value}" for name, value in zip(names, cell.split(), strict=True)]
    lines += ["loop_", "_space_group_symop_magn_operation.xyz", *operations.split(), extra]
    lines += ["loop_", *(f"_atom_site_{n}" for n in ("label", "fract_x", "fract_y", "fract_z")), f"Mn1 {position}"]
    lines += ["loop_", "_atom_site_moment_label", *moment.split(), f"Mn1 {values}", ""]
    return "\n".join(lines)


CARTN = "_atom_site_moment.Cartn_x _atom_site_moment.Cartn_y _atom_site_moment.Cartn_z"
SPHERICAL = (
    "_atom_site_moment.spherical_modulus _atom_site_moment.spherical_polar _atom_site_moment.spherical_azimuthal"
)
SKEW = "4 5 6 80 95 105"


def test_cartesian_components_stand_on_a_and_c_star():
    ordering = read_text(minimal(CARTN, "1.5 -0.5 2.0(3)", cell=SKEW))
    cell = ordering.crystal.cell
    x = cell[0] / np.linalg.norm(cell[0])
    z = np.cross(cell[0], cell[1])
    z = z / np.linalg.norm(z)
    assert ordering.moments()[0, 0] == pytest.approx(1.5 * x - 0.5 * np.cross(z, x) + 2 * z, abs=1e-14)
    # Only z is uncertain: the crystal-axis components move along with it as z itself does.
    assert ordering.moment_su[0] == pytest.approx(0.3 * np.abs(ordering.crystal.to_crystal_axes(z)), rel=1e-12)


def test_spherical_components():
    ordering = read_text(minimal(SPHERICAL, "2.0(1) 60 30(1)"))
    polar, azimuth = np.deg2rad([60, 30])
    direction = np.array([np.sin(polar) * np.cos(azimuth), np.sin(polar) * np.sin(azimuth), np.cos(polar)])
    assert ordering.moments()[0, 0] == pytest.approx(2 * direction, abs=1e-14)
    by_azimuth = 2 * np.sin(polar) * np.array([-np.sin(azimuth), np.cos(azimuth), 0]) * np.deg2rad(1)
    assert ordering.moment_su[0] == pytest.approx(np.hypot(0.1 * direction, by_azimuth), rel=1e-12)


def test_a_spherical_moment_of_size_zero_needs_no_angles():
    assert read_text(minimal(SPHERICAL, "0 . .")).moments()[0, 0].tolist() == [0, 0, 0]


def test_lists_and_separate_uncertainties():
    ordering = read_text(
        minimal("_atom_site_moment.crystalaxis _atom_site_moment.crystalaxis_su", "[1 0. -2] [0.1 0 0.2]")
    )
    assert crystal_axes(ordering)[0] == pytest.approx([1, 0, -2], abs=1e-15)
    assert ordering.moment_su[0] == pytest.approx([0.1, 0, 0.2])
    ordering = read_text(minimal("_atom_site_moment_Cartn", "[1 0 -2.0(2)]"))
    assert ordering.moments()[0, 0] == pytest.approx([1, 0, -2], abs=1e-15)
    assert ordering.moment_su[0] == pytest.approx([np.nan, np.nan, 0.2], nan_ok=True)


def test_two_systems_that_agree_are_read_once():
    axes = "_atom_site_moment_crystalaxis_x _atom_site_moment_crystalaxis_y _atom_site_moment_crystalaxis_z"
    assert read_text(minimal(f"{axes} {CARTN}", "1 0 2 1.01 0 1.99")).moments()[0, 0] == pytest.approx([1, 0, 2])


def test_moments_inside_the_atom_list_and_as_single_items():
    text = minimal().split("loop_\n_atom_site_label")[0]
    in_list = (
        "loop_\n_atom_site_label\n_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\n"
        "_atom_site_moment.crystalaxis_x\n_atom_site_moment_crystalaxis_y\n_atom_site_moment.crystalaxis_z\n"
        "Mn1 0 0 0 1. 2. 3.\nO1 0.5 0 0 . . .\n"
    )
    ordering = read_text(text + in_list)
    assert crystal_axes(ordering) == pytest.approx(np.array([[1, 2, 3], [0, 0, 0]]), abs=1e-14)
    single = (
        "_atom_site_label Mn1\n_atom_site_fract_x 0\n_atom_site_fract_y 0\n_atom_site_fract_z 0\n"
        "_atom_site_moment.label Mn1\n_atom_site_moment.crystalaxis_x 1\n_atom_site_moment.crystalaxis_y 0\n"
        "_atom_site_moment.crystalaxis_z 0\n"
    )
    assert crystal_axes(read_text(text + single)) == pytest.approx(np.array([[1, 0, 0]]), abs=1e-14)


def test_p1_needs_no_magnetic_operations():
    text = minimal().replace(
        "loop_\n_space_group_symop_magn_operation.xyz\nx,y,z,+1", "_space_group_name_H-M_alt 'P 1'"
    )
    assert crystal_axes(read_text(text))[0] == pytest.approx([0, 0, 2])


def test_small_misses_of_the_site_symmetry_are_put_right_and_said():
    # On the two-fold axis along c only the c component is allowed.
    ordering = read_text(minimal(values="0.01 0 2", operations="x,y,z,+1 -x,-y,z,+1", position="0 0 0.3"))
    assert crystal_axes(ordering) == pytest.approx(np.array([[0, 0, 2]]), abs=1e-15)
    assert ordering.notes == ("the moment of Mn1 misses what its site allows by 0.01 µB; it is put right",)


def test_improper_operations_act_as_on_axial_vectors():
    # A mirror plane through the moment reverses it, one across leaves it; inversion leaves it.
    mirror = read_text(minimal(values="1 0 2", operations="x,y,z,+1 x,-y,z,+1"))
    assert crystal_axes(mirror)[1] == pytest.approx([-1, 0, -2], abs=1e-15)
    inversion = read_text(minimal(values="1 0 2", operations="x,y,z,+1 -x,-y,-z,+1"))
    assert crystal_axes(inversion)[1] == pytest.approx([1, 0, 2], abs=1e-15)
    reversed_inversion = read_text(minimal(values="1 0 2", operations="x,y,z,+1 -x,-y,-z,-1"))
    assert crystal_axes(reversed_inversion)[1] == pytest.approx([-1, 0, -2], abs=1e-15)


def test_a_propagation_vector_that_misses_the_cell_is_said():
    extra = "_parent_space_group.child_transform_Pp_abc 'a,b,c;0,0,0'\n_parent_propagation_vector.kxkykz [0 0 0.5]"
    assert read_text(minimal(extra=extra)).notes == (
        "propagation vector of the parent cell: [0 0 0.5]; it does not fit the magnetic cell that the file states",
    )
    extra = "_parent_propagation_vector.kxkykz '[0 0 g]'"
    assert read_text(minimal(extra=extra)).notes == (
        "propagation vector of the parent cell: [0 0 g] (kept as text; it is no triple of numbers)",
    )


def test_several_blocks_and_the_og_setting():
    path = DATA / "settings.mcif"
    assert ld.read_ordering(path, block="bns").moments()[0].tolist() == [[0, 0, 2], [0, 0, -2]]
    with pytest.raises(
        FileError, match=f"^{re.escape(str(path))}: 2 data blocks hold a structure: BNS, OG. Say which with block.$"
    ):
        ld.read_ordering(path)
    message = (
        f"{path}: data block OG is in the OG setting (_space_group.magn_OG_wavevector_kxkykz), whose time reversals "
        "follow from a wave vector; it is not read. Give the same structure in the BNS setting."
    )
    for read in (ld.read_ordering, ld.read_crystal):
        with pytest.raises(FileError, match=f"^{re.escape(message)}$"):
            read(path, block="OG")


def test_read_crystal_gives_all_atoms_of_the_magnetic_cell():
    crystal = ld.read_crystal(DATA / "monoclinic.mcif")
    assert crystal.n_sites == 10
    assert crystal.positions.tolist() == ld.read_ordering(DATA / "monoclinic.mcif").crystal.positions.tolist()


TETRAGONAL = "x,y,z,+1 -x,-y,z,+1 -y,x,z+1/2,-1 y,-x,z+1/2,-1 -x,-y,-z,+1 x,y,-z,+1 y,-x,-z+1/2,-1 -y,x,-z+1/2,-1"
TRIGONAL = "x,y,z,+1 -y,x-y,z,+1 -x+y,-x,z,+1 y,x,-z,-1 x-y,-y,-z,-1 -x,-x+y,-z,-1"


@settings(max_examples=60, deadline=None)
@given(
    st.sampled_from([(TETRAGONAL, "5 5 7 90 90 90"), (TRIGONAL, "5 5 7 90 90 120")]),
    st.tuples(*[st.floats(0.05, 0.2)] * 3),
    st.tuples(*[st.floats(-5, 5)] * 3),
    st.integers(0, 5),
)
def test_any_image_may_represent_its_orbit(group, position, moment, choice):
    def expand(x, m):
        numbers = [" ".join(f"{value:.17g}" for value in vector) for vector in (x, m)]
        return read_text(minimal(values=numbers[1], operations=group[0], position=numbers[0], cell=group[1]))

    first = expand(position, moment)
    other = expand(first.crystal.positions[choice], crystal_axes(first)[choice])
    assert other.crystal.n_sites == first.crystal.n_sites
    for x, m in zip(other.crystal.positions, other.moments()[0], strict=True):
        i = atom(first, "Mn1", x)
        assert m == pytest.approx(first.moments()[0, i], abs=1e-12)


@settings(max_examples=150, deadline=None)
@given(st.data())
def test_a_damaged_file_is_read_or_refused(data):
    text = (DATA / "hexagonal.mcif").read_text(encoding="utf-8")
    start = data.draw(st.integers(0, len(text) - 1))
    length = data.draw(st.integers(0, 6))
    insert = data.draw(st.text(alphabet="[]'\"#;_.,+-0123456789xyzab \n", max_size=4))
    damaged = text[:start] + insert + text[start + length :]
    try:
        for block in parse_blocks(damaged.encode(), "x.mcif"):
            read_magnetic_ordering(block, "x")
    except FileError as error:
        assert str(error).startswith("x.mcif: ")
