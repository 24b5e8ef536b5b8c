"""Orderings out and in again."""

import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import FileError
from latticedip.files.ciftext import format_transform
from latticedip.files.symop import parse_transform
from latticedip.ordering.model import ParentTransform

DATA = Path(__file__).parent / "data"
SUFFIXES = (".mcif", ".cif", ".xyz", ".extxyz")


def skew_ordering(k=(0, 0, 0), components=None, **options):
    """Three sites in a triclinic cell in the standard orientation; two share a label."""
    cell = [[4.1, 0, 0], [-0.7, 5.2, 0], [0.9, 0.4, 6.3]]
    positions = [[0.1, 0.2, 0.3], [0.6, 0.7, 1 / 3], [0.05, 0.5, 0.9]]
    crystal = ld.Crystal(cell, positions, ("Mn", "Mn", "O"), ("Mn1", "Mn1", "O(1)'"), occupancies=[1, 0.7, 1])
    if components is None:
        components = np.array([[1 / 3, -2, 0.7], [1e-3, 4 / 7, -1], [0, 0, 0]])
    return ld.Ordering(crystal, components, k, **options)


def crystal_axes(ordering):
    return ordering.crystal.to_crystal_axes(ordering.moments()[0])


@pytest.mark.parametrize("name", ["hexagonal.mcif", "monoclinic.mcif"])
@pytest.mark.parametrize("suffix", SUFFIXES)
def test_what_was_read_can_be_written_and_read_again(tmp_path, name, suffix):
    first = ld.read_ordering(DATA / name)
    path = tmp_path / f"again{suffix}"
    ld.write_ordering(first, path)
    second = ld.read_ordering(path)
    assert second.crystal.cell == pytest.approx(first.crystal.cell, rel=1e-14, abs=1e-14)
    assert second.crystal.positions == pytest.approx(first.crystal.positions, rel=1e-14, abs=1e-15)
    assert crystal_axes(second) == pytest.approx(crystal_axes(first), rel=1e-14, abs=1e-14)
    assert second.crystal.labels == first.crystal.labels
    assert second.crystal.symbols == first.crystal.symbols
    assert second.crystal.occupancies.tolist() == first.crystal.occupancies.tolist()
    assert second.crystal.notes == first.crystal.notes
    if suffix in (".mcif", ".cif"):
        assert second.moment_su == pytest.approx(first.moment_su, rel=1e-14, nan_ok=True)
        if first.parent is not None:
            assert second.parent.P.tolist() == first.parent.P.tolist()
            assert second.parent.p.tolist() == first.parent.p.tolist()


def test_a_turned_cell_comes_back_in_the_standard_orientation(tmp_path):
    first = skew_ordering()
    turn, _ = np.linalg.qr(np.random.default_rng(3).normal(size=(3, 3)))
    turn *= np.sign(np.linalg.det(turn))
    crystal = ld.Crystal(
        first.crystal.cell @ turn.T, first.crystal.positions, first.crystal.symbols, first.crystal.labels
    )
    turned = ld.Ordering(crystal, first.components[0] @ turn.T)
    ld.write_ordering(turned, tmp_path / "a.mcif")
    second = ld.read_ordering(tmp_path / "a.mcif")
    assert second.crystal.cell == pytest.approx(first.crystal.cell, rel=1e-13, abs=1e-13)
    assert crystal_axes(second) == pytest.approx(crystal_axes(first), rel=1e-13, abs=1e-13)


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_commensurate_wave_is_written_in_its_supercell(tmp_path, suffix):
    components = np.array([[1, 1j, 0], [0.5, 0, 0.5j], [0, 0, 0]])
    first = skew_ordering((1 / 3, 0, 0.25), components)
    ld.write_ordering(first, tmp_path / f"a{suffix}")
    second = ld.read_ordering(tmp_path / f"a{suffix}")
    assert second.crystal.n_sites == 36
    assert second.crystal.cell == pytest.approx(first.crystal.cell * [[3], [1], [4]], rel=1e-14)
    for cell in np.ndindex(3, 1, 4):
        for site in range(3):
            place = (first.crystal.positions[site] + cell) / [3, 1, 4]
            (index,) = np.flatnonzero(np.abs(second.crystal.positions - place).max(axis=1) < 1e-12)
            assert second.crystal.labels[index] == first.crystal.labels[site]
            expected = first.moments([cell])[0, site]
            assert second.moments()[0, index] == pytest.approx(expected, abs=1e-13)


def test_uncertainties_and_parent_follow_into_the_supercell(tmp_path):
    su = np.array([[0.1, np.nan, 0.2], [np.nan] * 3, [np.nan] * 3])
    parent = ParentTransform(np.array([[1.0, 1, 0], [-1, 1, 0], [0, 0, 1]]), np.array([0.25, 0, 1 / 3]))
    ld.write_ordering(skew_ordering((0.5, 0, 0), moment_su=su, parent=parent), tmp_path / "a.mcif")
    second = ld.read_ordering(tmp_path / "a.mcif")
    assert second.moment_su == pytest.approx(np.vstack([su, su]), nan_ok=True)
    # a' = 2 (a - b) of the parent, b' = a + b.
    assert second.parent.P.tolist() == [[2, 1, 0], [-2, 1, 0], [0, 0, 1]]
    assert second.parent.p.tolist() == [0.25, 0, 1 / 3]


def test_the_text_of_a_magcif(tmp_path):
    crystal = ld.Crystal(np.diag([3.0, 4.0, 0.1 + 0.2 + 5]), [[0, 0, 0.1]], ("Co",), ("Co1",))
    ld.write_ordering(ld.Ordering(crystal, [[0, 0, -1.5]], name="up and down"), tmp_path / "a.mcif")
    assert (
        (tmp_path / "a.mcif").read_text(encoding="utf-8")
        == """# Magnetic structure in P 1, written by latticedip
data_up_and_down
_cell_length_a 3
_cell_length_b 4
_cell_length_c 5.2999999999999998
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_magn.number_BNS '1.1'
_space_group_magn.name_BNS 'P1'
loop_
_space_group_symop_magn_operation.id
_space_group_symop_magn_operation.xyz
1 x,y,z,+1
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
_atom_site_occupancy
'Co1' Co 0 0 0.10000000000000001 1
loop_
_atom_site_moment.label
_atom_site_moment.crystalaxis_x
_atom_site_moment.crystalaxis_y
_atom_site_moment.crystalaxis_z
'Co1' 0 0 -1.5
"""
    )


def test_shared_labels_get_names_of_their_own(tmp_path):
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0.5, 0, 0], [0, 0.5, 0]], ("Fe",) * 3, ("Fe", "Fe", "Fe_1"))
    ld.write_ordering(ld.Ordering(crystal, np.eye(3)), tmp_path / "a.mcif")
    text = (tmp_path / "a.mcif").read_text(encoding="utf-8")
    assert [line.split()[0] for line in text.splitlines() if " Fe " in line] == ["'Fe_2'", "'Fe_3'", "'Fe_1'"]
    second = ld.read_ordering(tmp_path / "a.mcif")
    assert second.crystal.labels == ("Fe", "Fe", "Fe_1")
    assert second.moments()[0] == pytest.approx(np.eye(3))


def test_an_ordering_without_moments_is_written_too(tmp_path):
    ld.write_ordering(skew_ordering(components=np.zeros((3, 3))), tmp_path / "a.mcif")
    second = ld.read_ordering(tmp_path / "a.mcif")
    assert not second.is_magnetic.any()
    assert second.notes == ("every moment of the file is zero",)


def test_slabs_keep_their_periodic_directions_in_xyz(tmp_path):
    crystal = ld.Crystal(np.diag([3.0, 4.0, 20.0]), [[0, 0, 0.5]], ("Cr",), pbc=(True, True, False))
    ordering = ld.Ordering(crystal, [[0, 0, 3]])
    ld.write_ordering(ordering, tmp_path / "a.xyz")
    assert ld.read_ordering(tmp_path / "a.xyz").crystal.pbc == (True, True, False)
    with pytest.raises(
        FileError, match=r"a\.mcif: a CIF repeats in three directions, this crystal does not\. Write it as \.xyz\.$"
    ):
        ld.write_ordering(ordering, tmp_path / "a.mcif")


def refuses(ordering, path, message):
    with pytest.raises(FileError, match=f"^{re.escape(f'{path}: {message}')}$"):
        ld.write_ordering(ordering, path)


def test_what_cannot_be_written_is_refused(tmp_path):
    ordering = skew_ordering()
    refuses(ordering, tmp_path / "a.txt", "the suffix must be one of .mcif, .cif, .xyz, .extxyz.")
    refuses(ordering, tmp_path / "no" / "a.xyz", "the file cannot be written (No such file or directory).")
    refuses(
        skew_ordering((0.2137, 0, 0)),
        tmp_path / "a.xyz",
        "k = (0.2137, 0, 0) repeats in no supercell of up to 64 cells along an axis. Write it as .mcif, in superspace, "
        "or take a commensurate k nearby.",
    )
    refuses(
        skew_ordering((1 / 61, 1 / 59, 1 / 2)),
        tmp_path / "a.xyz",
        "the magnetic cell of 61 × 59 × 2 cells would hold 21594 atoms; at most 20000 are written.",
    )
    left = ld.Crystal(np.diag([3.0, 4.0, -5.0]), [[0, 0, 0]], ("Mn",))
    refuses(
        ld.Ordering(left, [[0, 0, 1]]),
        tmp_path / "a.mcif",
        "the cell vectors are left-handed, which a CIF cannot say. Write it as .xyz, or exchange two cell vectors.",
    )
    blank = ld.Ordering(ld.Crystal(3 * np.eye(3), [[0, 0, 0]], ("Mn",), ("Mn 1",)), [[0, 0, 1]])
    refuses(
        blank,
        tmp_path / "a.xyz",
        "the label 'Mn 1' is empty or holds a blank, which extended XYZ cannot keep. Write it as .mcif.",
    )
    line = ld.Ordering(ld.Crystal(3 * np.eye(3), [[0, 0, 0]], ("Mn",), ("Mn\n1",)), [[0, 0, 1]])
    refuses(line, tmp_path / "a.mcif", "the label 'Mn\\n1' cannot be written in a CIF. Rename the site.")
    assert list(tmp_path.iterdir()) == []


def test_a_file_that_exists_is_kept_unless_told(tmp_path):
    path = tmp_path / "a.mcif"
    path.write_text("mine", encoding="utf-8")
    refuses(skew_ordering(), path, "the file exists. Choose another name, or overwrite it with overwrite=True.")
    assert path.read_text(encoding="utf-8") == "mine"
    ld.write_ordering(skew_ordering(), path, overwrite=True)
    assert ld.read_ordering(path).n_ions == pytest.approx(1.7)
    assert [entry.name for entry in tmp_path.iterdir()] == ["a.mcif"]


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.sampled_from([-2.0, -1.0, -0.5, -1 / 3, 0.0, 0.0, 0.123456789, 1.0, 2.0, 3.0]), min_size=12, max_size=12
    )
)
def test_changes_of_cell_are_written_as_they_are_read(values):
    matrix, shift = np.array(values[:9]).reshape(3, 3), np.array(values[9:])
    if abs(np.linalg.det(matrix)) < 1e-6:
        return
    columns, origin = parse_transform(format_transform(ParentTransform(matrix, shift)))
    assert columns == pytest.approx(matrix, abs=1e-15)
    assert origin == pytest.approx(shift, abs=1e-15)
