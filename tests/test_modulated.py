"""Modulated structures in (3+1)D superspace, read and expanded."""

from __future__ import annotations

import dataclasses
import re

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import FileError
from latticedip.files.read import read_file
from latticedip.files.symop import parse_superspace_operation
from tests.reference.superspace import (
    BASE,
    CELLS,
    ONE,
    STRUCTURES,
    A,
    Operation,
    Structure,
    check,
    formula,
    fourier_rows,
    loops,
    read_text,
    replaced,
    same,
    swap_series,
)


@pytest.mark.parametrize("name", STRUCTURES)
def test_expanded_as_the_superspace_operations_say(name, tmp_path):
    structure = STRUCTURES[name]
    ordering = structure.read(tmp_path)
    orders = sorted({n for waves in structure.series.values() for n in waves})
    waves = [n * np.array(structure.q) for n in orders]
    expected = [np.zeros(3), *waves] if structure.averages else waves
    assert ordering.k == pytest.approx(np.array(expected), abs=1e-12)
    assert ordering.name == "wave"
    check(structure, ordering)
    # Written out in P1 superspace and read again.
    ld.write_ordering(ordering, tmp_path / "again.mcif", superspace=True)
    again = ld.read_ordering(tmp_path / "again.mcif")
    assert again.crystal.labels == ordering.crystal.labels
    assert again.crystal.positions == pytest.approx(ordering.crystal.positions, abs=1e-15)
    assert again.moments(CELLS) == pytest.approx(ordering.moments(CELLS), abs=1e-12)


def test_a_helix_turns_from_cosine_to_sine_along_q(tmp_path):
    """m (cos 2πx4, sin 2πx4, 0) with q = (0, 0, 1/8): a right-handed screw, 45° further in every cell."""
    structure = Structure((4, 4, 6, 90, 90, 90), (0, 0, 0.125), [Operation(ONE)], {"Mn1": (0, 0, 0)},
        {"Mn1": {1: ([2, 0, 0], [0, 2, 0])}})  # fmt: skip
    ordering = structure.read(tmp_path)
    r = 2 / np.sqrt(2)
    assert ordering.moments([[0, 0, i] for i in range(4)])[:, 0] == pytest.approx(
        np.array([[2, 0, 0], [r, r, 0], [0, 2, 0], [-r, r, 0]])
    )
    # S = m (u + i v) turns from u to v as R advances along k.
    assert ordering.components[0, 0] == pytest.approx(np.array([2, 2j, 0]))
    # The second atom of the cell, a quarter of it further along q, is a quarter of the 45° further.
    structure.sites = {"Mn1": (0, 0, 0.25)}
    angle = np.pi / 16
    assert structure.read(tmp_path).moments()[0, 0] == pytest.approx(2 * np.array([np.cos(angle), np.sin(angle), 0]))


def test_spellings(tmp_path):
    reference = BASE.read(tmp_path)
    text = BASE.text
    flat = replaced(
        text, *((f"{x}.", f"{x}_") for x in ("_cell_wave_vector", "_atom_site_Fourier_wave_vector",
        "_atom_site_moment_Fourier", "_atom_site_moment_Fourier_param", "_atom_site_moment"))
    )  # fmt: skip
    prototype = replaced(
        text,
        ("_space_group_symop_magn_ssg_operation.algebraic", "_space_group_symop.magn_ssg_operation_algebraic"),
        ("_space_group_symop_magn_ssg_operation.id", "_space_group_symop.magn_ssg_operation_id"),
        ("_space_group_symop_magn_ssg_centering.algebraic", "_space_group_symop.magn_ssg_centering_algebraic"),
        ("_space_group_symop_magn_ssg_centering.id", "_space_group_symop.magn_ssg_centering_id"),
    )
    blanks = re.sub(r"(?m)^(\d+) (\S*x1\S*)$", lambda m: f"{m[1]} '{m[2].replace(',', ' ').upper()}'", text)
    assert "'+1*X1 +1*X2 +1*X3 +1*X4 +1'" in blanks
    by_vector = text.replace("_atom_site_Fourier_wave_vector.q1_coeff", "_other.thing")
    by_alias = text.replace("_atom_site_Fourier_wave_vector.q1_coeff", "_older_atom_site_Fourier_wave_vector_q1_coeff")
    lists = "".join(
        "loop_\n_atom_site_Fourier_wave_vector.seq_id\n_atom_site_Fourier_wave_vector.q_coeff_seq_id\n"
        "_atom_site_Fourier_wave_vector.q_coeff\n1 [1] [1]\n3 [1] [3]\n"
        if "_Fourier_wave_vector" in part
        else "loop_\n_cell_wave_vector.seq_id\n_cell_wave_vector.xyz\n1 [0 0 0.2137]\n"
        if "_cell_wave_vector" in part
        else part
        for part in loops(text)
    )
    rows = fourier_rows(text)
    apart = swap_series(
        text,
        "loop_\n_atom_site_moment_Fourier.id\n_atom_site_moment_Fourier.atom_site_label\n"
        "_atom_site_moment_Fourier.wave_vector_seq_id\n_atom_site_moment_Fourier.axis\n"
        + "".join(" ".join(row[:4]) + "\n" for row in rows)
        + "loop_\n_atom_site_moment_Fourier_param.id\n_atom_site_moment_Fourier_param.cos\n"
        "_atom_site_moment_Fourier_param.sin\n" + "".join(f"{row[0]} {row[4]} {row[5]}\n" for row in reversed(rows)),
    )
    head = (
        "loop_\n_atom_site_moment_Fourier.id\n_atom_site_moment_Fourier.atom_site_label\n"
        "_atom_site_moment_Fourier.wave_vector_seq_id\n_atom_site_moment_Fourier.axis\n"
    )
    polar = swap_series(
        text,
        head
        + "_atom_site_moment_Fourier_param.modulus\n_atom_site_moment_Fourier_param.phase\n"
        # |M| cos(2πn x4 + φ): M_c = |M| cos φ, M_s = −|M| sin φ.
        + "".join(
            " ".join(row[:4])
            + f" {np.hypot(float(row[4]), float(row[5])):.17g}"
            + f" {np.arctan2(-float(row[5]), float(row[4])) / (2 * np.pi):.17g}\n"
            for row in rows
        ),
    )
    backwards = swap_series(
        text,
        head
        + "_atom_site_moment_Fourier_param.cos\n_atom_site_moment_Fourier_param.sin\n"
        + "".join(" ".join([*row[:5], f"{-float(row[5]):.17g}"]) + "\n" for row in rows),
    )
    backwards = re.sub(r"(?m)^(\d) 0 0 (\S+) (\d)$", r"\1 0 0 -\2 -\3", backwards)
    assert "1 0 0 -0.2137 -1\n" in backwards
    for other in (flat, prototype, blanks, by_vector, by_alias, lists, apart, polar, backwards):
        assert other != text
        same(read_text(other, tmp_path), reference)


def test_cartesian_axes(tmp_path):
    """Cx along a, Cz along c*, as the dictionary defines Cartesian moments; that is the frame of the crystal."""
    structure = dataclasses.replace(
        STRUCTURES["triclinic, two atoms, three harmonics, average"], averages={}, axes="Cx Cy Cz"
    )
    ordering = structure.read(tmp_path)
    x4 = (np.array(structure.sites["Fe1"]) + CELLS) @ structure.q
    assert ordering.moments(CELLS)[:, 1] == pytest.approx(formula(structure, "Fe1", x4), abs=1e-12)


def test_a_constant_term_of_the_series_adds_to_the_average(tmp_path):
    structure = dataclasses.replace(BASE, series={"Mn1": {1: A, 0: ([0.5, 0.25, -1], [0, 0, 0])}})
    other = dataclasses.replace(BASE, series={"Mn1": {1: A}}, averages={"Mn1": (1.5, 2.25, 2)})
    same(structure.read(tmp_path), other.read(tmp_path))


def test_rounded_wave_vectors_and_positions_are_put_right(tmp_path):
    structure = dataclasses.replace(STRUCTURES["threefold axis with q = (1/3, 1/3, g)"], q=(0.3333, 0.3333, 0.0821))
    ordering = structure.read(tmp_path)
    assert ordering.k[1] == pytest.approx([1 / 3, 1 / 3, 0.0821], abs=1e-15)
    assert (
        "the wave vector misses what the operations fix by 3.3e-05; it is put right: (0.333333, 0.333333, 0.0821)"
        in (ordering.notes)
    )
    special = STRUCTURES["special position on an axis along the wave"]
    moved = dataclasses.replace(special, sites={"Mn1": (0.4998, 0, 0.2)})
    assert moved.read(tmp_path).components == pytest.approx(special.read(tmp_path).components, abs=1e-12)
    slip = dataclasses.replace(special, series={"Mn1": {1: ([1, -2, 0.01], [0.5, 3, 0])}})
    assert slip.read(tmp_path).notes == (
        "the modulation of Mn1 at 1 q misses what its site allows by 0.01 µB; it is put right",
    )


def test_commensurate_waves_and_the_initial_phase(tmp_path):
    """q = c*/2 with phase t: M_c cos 2π(z/2 + t) + M_s sin 2π(z/2 + t), a real component."""
    structure = Structure((4, 5, 6, 90, 90, 90), (0, 0, 0.5), [Operation(ONE)], {"Mn1": (0, 0, 0.25)},
        {"Mn1": {1: ([2, 0, 0], [0, 3, 0]), 2: ([0, 0, 1], [0, 0, 4])}})  # fmt: skip
    for tag, value in (
        ("_atom_sites_modulation.global_phase_t_1", "0.125"),
        ("_atom_sites_modulation_global_phase_list", "[0.125]"),
        ("_older_cell_commen_t_section_1", "0.125(1)"),
    ):
        structure.extra = f"{tag} {value}\n"
        ordering = structure.read(tmp_path)
        x4 = 0.125 + (CELLS[:, 2] + 0.25) / 2
        assert ordering.moments(CELLS)[:, 0] == pytest.approx(formula(structure, "Mn1", x4), abs=1e-12)
        assert ordering.k.tolist() == [[0, 0, 0.5], [0, 0, 1]]
    structure.extra = "_atom_sites_modulation.global_phase_t_1 much\n"
    with pytest.raises(
        FileError, match=r"_atom_sites_modulation\.global_phase_t_1 is 'much', which is not a number\.$"
    ):
        structure.read(tmp_path)


def test_average_moments_and_amplitudes_keep_their_uncertainties(tmp_path):
    text = replaced(
        STRUCTURES["triclinic, two atoms, three harmonics, average"].text,
        ("\nFe1 1 0 0\n", "\nFe1 1.0(2) 0 0\n"), ("\nMn1 0.5", "\nMn1 0.50(3)"),
        ("\n10 Fe1 2 x 1.2", "\n10 Fe1 2 x 1.20(4)"),
    )  # fmt: skip
    ordering = read_text(text, tmp_path)
    assert np.isnan(ordering.moment_su).all()
    assert ordering.notes == ()
    # Where a site is modulated its average counts among the amplitudes; x of Fe1 at 0 and 2q, of Mn1 at 0.
    sizes = sorted((one.sites, np.abs(one.steps).max(axis=(1, 2)).tolist()) for one in ordering.amplitude_su)
    assert sizes == [
        ((0,), pytest.approx([0.03, 0, 0, 0])),
        ((1,), pytest.approx([0, 0, 0.04, 0])),
        ((1,), pytest.approx([0.2, 0, 0, 0])),
    ]
    still = "".join(line + "\n" for line in text.splitlines() if not re.match(r"1[0-2] Fe1", line))
    ordering = read_text(still, tmp_path)
    assert ordering.moment_su[1, 0] == pytest.approx(0.2)
    assert np.isnan(ordering.moment_su[0]).all()
    ld.write_ordering(ordering, tmp_path / "su.mcif")
    assert ld.read_ordering(tmp_path / "su.mcif").moment_su == pytest.approx(ordering.moment_su, nan_ok=True)


def test_stated_forms_are_compared(tmp_path):
    text = swap_series(
        STRUCTURES["one atom, one helix"].text,
        "loop_\n_atom_site_moment_Fourier.atom_site_label\n_atom_site_moment_Fourier.wave_vector_seq_id\n"
        "_atom_site_moment_Fourier.axis\n_atom_site_moment_Fourier_param.cos\n_atom_site_moment_Fourier_param.sin\n"
        "_atom_site_moment_Fourier_param.cos_symmform\n_atom_site_moment_Fourier_param.sin_symmform\n"
        "Mn1 1 x 0 0.84852 0 mxs1\nMn1 1 y 0 0.42426 0 0.50000*mxs1\nMn1 1 z 0.84852 0 -mxs1 0\n",
    )
    assert read_text(text.replace("z 0.84852", "z -0.84852"), tmp_path).notes == ()
    assert read_text(text, tmp_path).notes == (
        "the Fourier amplitudes of Mn1 do not have the form that the file states for them (symmform); the numbers "
        "are taken",
    )


def test_propagation_vectors_of_the_parent(tmp_path):
    head = "_parent_space_group.child_transform_Pp_abc 'a,b,2c;0,0,0'\n_parent_propagation_vector.kxkykz '0 0 {}'\n"
    structure = dataclasses.replace(STRUCTURES["one atom, one helix"])
    structure.extra = head.format("0.10685")
    ordering = structure.read(tmp_path)
    assert ordering.notes == ("propagation vector of the parent cell: 0 0 0.10685",)
    assert pytest.approx(np.diag([1, 1, 2])) == ordering.parent.P
    structure.extra = head.format("0.2")
    assert structure.read(tmp_path).notes == (
        "propagation vector of the parent cell: 0 0 0.2; it does not fit the magnetic cell that the file states",
    )


def test_other_ways_in(tmp_path):
    ordering = BASE.read(tmp_path)
    crystal = ld.read_crystal(tmp_path / "wave.mcif")
    assert crystal.positions == pytest.approx(ordering.crystal.positions)
    assert isinstance(read_file(tmp_path / "wave.mcif"), ld.Ordering)
    # Without moments: the average crystal, and no ordering.
    bare = replaced(swap_series(BASE.text, ""))
    bare = "".join(part for part in loops(bare) if "_atom_site_moment" not in part)
    (tmp_path / "bare.mcif").write_text(bare)
    assert read_file(tmp_path / "bare.mcif").positions == pytest.approx(crystal.positions)
    with pytest.raises(
        FileError,
        match=r"it lists no moments \(_atom_site_moment\.crystalaxis_x, _atom_site_moment_Fourier_param\.cos\)\.$",
    ):
        ld.read_ordering(tmp_path / "bare.mcif")
    # Average moments alone, and all zero.
    still = swap_series(BASE.text, "")
    assert read_text(still, tmp_path).k.tolist() == [[0, 0, 0]]
    assert read_text(still.replace("Mn1 1 2 3", "Mn1 0 0 0"), tmp_path).notes == ("every moment of the file is zero",)


def test_modulations_of_zero_amplitude_are_none(tmp_path):
    text = BASE.text + (
        "_atom_site_displace_modulation_flag no\n_atom_site_occ_modulation_flag n\n"
        "loop_\n_atom_site_displace_Fourier.id\n_atom_site_displace_Fourier.atom_site_label\n"
        "_atom_site_displace_Fourier.axis\n_atom_site_displace_Fourier.wave_vector_seq_id\n"
        "_atom_site_displace_Fourier_param.cos\n_atom_site_displace_Fourier_param.sin\n1 Mn1 x 1 0 0.000(2)\n"
        "loop_\n_atom_site_U_Fourier.id\n_atom_site_U_Fourier_param.cos\n1 0.3\n"
    )
    same(read_text(text, tmp_path), BASE.read(tmp_path))


def test_operations_of_superspace():
    operation = parse_superspace_operation("x1-x2+1/2,x1,-x3,-x4+2x1-x2+0.3333,-1")
    assert operation.rotation.tolist() == [[1, -1, 0, 0], [1, 0, 0, 0], [0, 0, -1, 0], [2, -1, 0, -1]]
    assert operation.translation == pytest.approx([0.5, 0, 0, 1 / 3])
    assert operation.time == -1
