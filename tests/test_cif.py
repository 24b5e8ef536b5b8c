"""Non-magnetic CIFs: cell, elements, symmetry, special positions, occupancies."""

import re
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import FileError

CELL = """data_test
_cell_length_a {a}
_cell_length_b {b}
_cell_length_c {c}
_cell_angle_alpha {alpha}
_cell_angle_beta {beta}
_cell_angle_gamma {gamma}
"""


def cif(atoms, symmetry="_space_group_name_H-M_alt 'P 1'", columns="label fract_x fract_y fract_z", **cell):
    values = {"a": 4, "b": 4, "c": 4, "alpha": 90, "beta": 90, "gamma": 90} | cell
    tags = "\n".join(f"_atom_site_{column}" for column in columns.split())
    return f"{CELL.format(**values)}{symmetry}\nloop_\n{tags}\n{atoms}\n"


@pytest.fixture
def read(tmp_path, monkeypatch):
    """Write a text as x.cif in an empty directory and read it from there."""
    monkeypatch.chdir(tmp_path)

    def reader(text):
        Path("x.cif").write_text(text, encoding="utf-8")
        return ld.read_crystal("x.cif")

    return reader


def test_the_cell_stands_in_the_standard_orientation(read):
    crystal = read(cif("Mn1 0 0 0", a=3.1, b="4.2(1)", c=5.3, alpha=80, beta=95, gamma=105))
    assert crystal.cell[0] == pytest.approx([3.1, 0, 0], abs=1e-15)
    assert crystal.cell[1, 2] == 0
    assert crystal.cell[1, 1] > 0
    assert crystal.cell[2, 2] > 0
    assert np.linalg.norm(crystal.cell, axis=1) == pytest.approx([3.1, 4.2, 5.3], rel=1e-14)
    directions = crystal.axes_unit
    cosines = [directions[1] @ directions[2], directions[0] @ directions[2], directions[0] @ directions[1]]
    assert np.degrees(np.arccos(cosines)) == pytest.approx([80, 95, 105], rel=1e-14)


@pytest.mark.parametrize(
    ("symmetry", "count"),
    [
        ("_space_group_name_H-M_alt 'F m -3 m'", 4),
        ("_symmetry_space_group_name_H-M 'Fm-3m'", 4),
        ("_space_group_name_Hall '-F 4 2 3'", 4),
        ("_space_group_IT_number 225", 4),
        ("_space_group_name_H-M_alt 'I m -3 m'", 2),
        ("_space_group_name_H-M_alt 'F d -3 m:1'", 8),
        ("_space_group_name_H-M_alt 'F d -3 m S'", 8),
        ("loop_\n_symmetry_equiv_pos_as_xyz\nx,y,z\n'x+1/2, y+1/2, z'", 2),
        ("loop_\n_space_group_symop_id\n_space_group_symop.operation_xyz\n1 x,y,z\n2 x+.5,y,z+.5", 2),
    ],
)
def test_every_way_to_state_symmetry(read, symmetry, count):
    assert read(cif("Ni1 0 0 0", symmetry)).n_sites == count


def test_rhombohedral_groups_follow_the_axes_of_the_cell(read):
    symbol = "_space_group_name_H-M_alt 'R -3 m'"
    assert read(cif("Cr1 0 0 0", symbol, c=12, gamma=120)).n_sites == 3
    assert read(cif("Cr1 0 0 0", symbol, alpha=70, beta=70, gamma=70)).n_sites == 1


def test_four_digit_thirds_meet_on_the_special_position(read):
    crystal = read(cif("Fe1 0.3333 0.6667 0.2500", "_space_group_name_H-M_alt 'P 63/m m c'", c=5, gamma=120))
    assert crystal.n_sites == 2
    expected = {(1 / 3, 2 / 3, 1 / 4), (2 / 3, 1 / 3, 3 / 4)}
    for position in crystal.positions:
        assert min(np.abs(position - np.array(p)).max() for p in expected) < 1e-14


def test_stated_operations_are_kept_and_the_identity_alone_is_not(read):
    assert read(cif("Ni1 0 0 0", "_space_group_name_H-M_alt 'F m -3 m'")).operations.centrings().shape == (4, 3)
    assert read(cif("Ni1 0 0 0")).operations is None


def test_positions_come_into_the_cell(read):
    crystal = read(cif("Ni1 -0.25 1.5 -1e-17"))
    assert crystal.positions.tolist() == [[0.75, 0.5, 0.0]]


@pytest.mark.parametrize(
    ("row", "symbol"),
    [
        ("Mn1 .", "Mn"),
        ("MN1 ?", "Mn"),
        ("Fe1A .", "Fe"),
        ("O1 .", "O"),
        ("OW2 .", "O"),
        ("C12 .", "C"),
        ("Ca1 .", "Ca"),
        ("CA1 Ca2+", "Ca"),
        ("CA1 C", "C"),
        ("X1 Mn", "Mn"),
        ("M1 FE3+", "Fe"),
        ("M1 O2-", "O"),
        ("M1 Fe(III)", "Fe"),
    ],
)
def test_elements_from_type_symbols_and_labels(read, row, symbol):
    crystal = read(cif(f"{row} 0 0 0", columns="label type_symbol fract_x fract_y fract_z"))
    assert crystal.symbols == (symbol,)


def test_what_is_left_out_or_changed_is_said(read):
    text = cif(
        "D1 D 0 0 0 1 .\nFe1 Fe 0.5 0 0 0.75(2) .\nCo1 Co 0.5 0 0 0.25 .\nX1 . 0.5 0.5 0.5 1 dum\nO9 O 0.2 0.2 0.2 0 .",
        columns="label type_symbol fract_x fract_y fract_z occupancy calc_flag",
    )
    crystal = read(text)
    assert crystal.symbols == ("H", "Fe", "Co")
    assert crystal.occupancies.tolist() == [1, 0.75, 0.25]
    assert crystal.notes == (
        "D1 is deuterium; it is counted as hydrogen",
        "partial occupancy (Fe1 0.75, Co1 0.25): every sum takes the mean moment, occupancy times moment",
        "dummy atoms are left out: X1",
        "atoms of occupancy 0 are left out: O9",
    )


def test_an_occupancy_above_one_by_its_uncertainty_is_one(read):
    crystal = read(cif("Fe1 0 0 0 1.004(3)", columns="label fract_x fract_y fract_z occupancy"))
    assert crystal.occupancies.tolist() == [1.0]


def test_stated_multiplicity_is_compared(read):
    columns = "label fract_x fract_y fract_z symmetry_multiplicity"
    symmetry = "_space_group_name_H-M_alt 'F m -3 m'"
    assert read(cif("Ni1 0 0 0 4", symmetry, columns)).n_sites == 4
    message = (
        "x.cif: site Ni1 is said to have multiplicity 8, but the operations give 4 atoms. Check its coordinates, the "
        "operations and the choice of origin."
    )
    with pytest.raises(FileError, match=f"^{re.escape(message)}$"):
        read(cif("Ni1 0 0 0 8", symmetry, columns))


@settings(max_examples=40, deadline=None)
@given(
    st.sampled_from(["P 63/m m c", "R -3 m", "P -3 c 1"]),
    st.tuples(*[st.sampled_from([0.0, 0.11, 0.25, 1 / 3, 0.5, 2 / 3, 0.58, 0.875])] * 3),
    st.integers(0, 10_000),
)
def test_any_image_may_represent_its_orbit(symbol, position, seed):
    from latticedip.files.cif import read_structure
    from latticedip.files.cifsyntax import parse_blocks

    def expand(x):
        symmetry = f"_space_group_name_H-M_alt '{symbol}'"
        text = cif(f"Mn1 {x[0]:.17g} {x[1]:.17g} {x[2]:.17g}", symmetry, a=8, b=8, c=14, gamma=120)
        return read_structure(parse_blocks(text.encode(), "x.cif")[0], "x").crystal

    try:
        first = expand(position)
    except FileError as error:
        # A position a hair off a special one: its images lie too close together, and the reader says so.
        assert "apart" in str(error)
        return
    rng = np.random.default_rng(seed)
    other = expand(first.positions[rng.integers(first.n_sites)] + rng.integers(-2, 3, 3))
    assert other.n_sites == first.n_sites
    for x in other.positions:
        difference = first.positions - x
        difference -= np.round(difference)
        assert np.linalg.norm(difference @ first.cell, axis=1).min() < 1e-12


def test_atoms_of_one_element_may_share_a_label(tmp_path):
    text = (
        "data_x\n_cell_length_a 4\n_cell_length_b 5\n_cell_length_c 6\n_cell_angle_alpha 90\n_cell_angle_beta 90\n"
        "_cell_angle_gamma 90\n_space_group_name_H-M_alt 'P 1'\nloop_\n_atom_site_label\n_atom_site_fract_x\n"
        "_atom_site_fract_y\n_atom_site_fract_z\nMn 0 0 0\nMn 0.5 0.5 0.5\nF 0.25 0.25 0.25\n"
    )
    path = tmp_path / "alike.cif"
    path.write_text(text)
    crystal = ld.read_crystal(path)
    assert crystal.labels == ("Mn", "Mn", "F")
    assert crystal.find("Mn") == (0, 1)
    path.write_text(text.replace("F 0.25", "Mn 0.25").replace("Mn 0.5 0.5 0.5", "Mn 0.25 0.25 0.25"))
    with pytest.raises(ld.LatticedipError, match="apart"):
        ld.read_crystal(path)
