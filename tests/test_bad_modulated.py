"""Modulated structures that must be refused, each with its exact message."""

from __future__ import annotations

import dataclasses
import re
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import FileError
from tests.reference.superspace import BASE, STRUCTURES, A, loops, read_text, replaced, swap_series


def bad(*pairs, base=BASE):
    return replaced(base.text, *pairs)


PLAIN = dataclasses.replace(BASE, series={"Mn1": {1: ([1.5, 0, 0], [0.5, 0, 0])}})
DISPLACE = "loop_\n_atom_site_displace_Fourier.atom_site_label\n_atom_site_displace_Fourier_param.sin\nMn1 0.01\n"
NO_MODEL = (
    ", for which there is no model here. Give the average structure as [crystal] and the waves of the moments as k, "
    "cosine and sine in a study."
)
SERIES = "_atom_site_moment_Fourier_param"
BAD = {
    "two waves by dimension": (
        bad(("_cell_modulation_dimension 1", "_cell_modulation_dimension 2")),
        "this is a modulated structure in (3+2)D superspace (_cell_modulation_dimension 2), which is not read; (3+1)D, "
        "one independent wave vector, is. State its waves as components at several k from Python.",
    ),
    "two waves by rows": (
        bad(("1 0 0 0.2137\n", "1 0 0 0.2137\n2 0 0.2137 0\n")),
        "this is a modulated structure in (3+2)D superspace (2 rows of _cell_wave_vector.x), which is not read; "
        "(3+1)D, one independent wave vector, is. State its waves as components at several k from Python.",
    ),
    "three waves by operations": (
        bad(("_cell_modulation_dimension 1\n", ""), ("1 +1*x1,+1*x2,+1*x3,+1*x4,+1", "1 x1,x2,x3,x4,x5,x6,+1")),
        "this is a modulated structure in (3+3)D superspace (_space_group_symop_magn_ssg_operation.algebraic "
        "x1,x2,x3,x4,x5,x6,+1), which is not read; (3+1)D, one independent wave vector, is. State its waves as "
        "components at several k from Python.",
    ),
    "two waves by coefficients": (
        bad(("wave_vector.q1_coeff", "wave_vector.q2_coeff")),
        "this is a modulated structure in (3+2)D superspace (_atom_site_Fourier_wave_vector.q2_coeff), which is not "
        "read; (3+1)D, one independent wave vector, is. State its waves as components at several k from Python.",
    ),
    "dimension in words": (
        bad(("_cell_modulation_dimension 1", "_cell_modulation_dimension one")),
        "_cell_modulation_dimension is 'one', but the file describes a modulation; 1 is needed.",
    ),
    "composite": (
        BASE.text + "_cell_subsystems_number 2\n_cell_subsystem_code 1\n",
        "this is a composite of several lattices (_cell_subsystems_number), which is not read.",
    ),
    "sawtooth moments": (
        BASE.text + "_atom_site_moment_special_func.sawtooth_ax 1\n",
        "its moments follow a special function (_atom_site_moment_special_func.sawtooth_ax), which is not read. Give "
        "their Fourier series.",
    ),
    "displacive": (
        BASE.text + DISPLACE,
        f"it modulates the positions of atoms (_atom_site_displace_Fourier_param.sin){NO_MODEL}",
    ),
    "displacive, unknown amplitude": (
        BASE.text + DISPLACE.replace("0.01", "?"),
        f"it modulates the positions of atoms (_atom_site_displace_Fourier_param.sin){NO_MODEL}",
    ),
    "displacive, other function": (
        BASE.text + "_atom_site_displace_Legendre.coeff 0.1\n",
        f"it modulates the positions of atoms (_atom_site_displace_Legendre.coeff){NO_MODEL}",
    ),
    "displacive, flag": (
        BASE.text + "_atom_site_displace_modulation_flag yes\n",
        f"it modulates the positions of atoms (_atom_site_displace_modulation_flag){NO_MODEL}",
    ),
    "occupational": (
        BASE.text + "_atom_site_occ_special_func_crenel_c 0.5\n",
        f"it modulates the occupancies of atoms (_atom_site_occ_special_func_crenel_c){NO_MODEL}",
    ),
    "rigid groups": (
        BASE.text + "_atom_site_rot_Fourier_param.cos 0.5\n",
        f"it modulates the orientation of groups of atoms (_atom_site_rot_Fourier_param.cos){NO_MODEL}",
    ),
    "no operations": (
        "".join(part for part in loops(BASE.text) if "symop" not in part),
        "it describes a modulation (_cell_modulation_dimension), but lists no operations of a magnetic superspace "
        "group. Give _space_group_symop_magn_ssg_operation.algebraic; where all atoms of the cell are listed: "
        "'x1,x2,x3,x4,+1'.",
    ),
    "non-magnetic superspace operations": (
        "".join(part for part in loops(BASE.text) if "symop" not in part)
        + "_space_group_symop_ssg_operation_algebraic x1,x2,x3,x4\n",
        "it describes a modulation (_cell_modulation_dimension), and _space_group_symop_ssg_operation_algebraic alone "
        "does not say how that changes. Give _space_group_symop_magn_ssg_operation.algebraic; where all atoms of the "
        "cell are listed: 'x1,x2,x3,x4,+1'.",
    ),
    "three-dimensional operation": (
        bad(("1 +1*x1,+1*x2,+1*x3,+1*x4,+1\n2", "1 x1,x2,x3,+1\n2")),
        "_space_group_symop_magn_ssg_operation.algebraic 'x1,x2,x3,+1' in row 1 is not understood: it has 4 parts, not "
        "x1, x2, x3, x4 and time reversal +1 or -1.",
    ),
    "no time reversal": (
        bad(("1 +1*x1,+1*x2,+1*x3,+1*x4,+1\n2", "1 x1,x2,x3,x4,0\n2")),
        "_space_group_symop_magn_ssg_operation.algebraic 'x1,x2,x3,x4,0' in row 1 is not understood: its time reversal "
        "is '0', not +1 or -1.",
    ),
    "x4 in x3": (
        bad(("1 +1*x1,+1*x2,+1*x3,+1*x4,+1\n2", "1 x1,x2,x3+x4,x4,+1\n2")),
        "_space_group_symop_magn_ssg_operation.algebraic 'x1,x2,x3+x4,x4,+1' in row 1 is not understood: x4 must "
        "become x4 or -x4, and must not enter the parts of x1, x2, x3.",
    ),
    "large coefficient": (
        bad(("1 +1*x1,+1*x2,+1*x3,+1*x4,+1\n2", "1 1e9x1,x2,x3,x4,+1\n2")).replace("1e9", "1" + 9 * "0"),
        "_space_group_symop_magn_ssg_operation.algebraic '1000000000x1,x2,x3,x4,+1' in row 1 is not understood: its "
        "rotation part is not a matrix of whole numbers with determinant 1 or -1.",
    ),
    "long translation": (
        bad(("1 +1*x1,+1*x2,+1*x3,+1*x4,+1\n2", "1 x1,x2+1001,x3,x4,+1\n2")),
        "_space_group_symop_magn_ssg_operation.algebraic 'x1,x2+1001,x3,x4,+1' in row 1 is not understood: its "
        "translation is longer than 1000 cells.",
    ),
    "wave vector without values": (
        bad(("1 0 0 0.2137\nloop_", "loop_")),
        "_cell_wave_vector.x holds no value, but the modulation wave vector is needed.",
    ),
    "wave vector not applicable": (
        bad(("1 0 0 0.2137\nloop_", "1 . . .\nloop_")),
        "_cell_wave_vector.x holds no value, but the modulation wave vector is needed.",
    ),
    "no group": (
        bad(("3 +1*x1,-1*x2,-1*x3,-1*x4+0.25,-1\n", "")),
        "the operations of _space_group_symop_magn_ssg_operation.algebraic are no group: "
        "'-1*x1,+1*x2,-1*x3+0.5,-1*x4+0.75,-1' after '-1*x1,-1*x2,+1*x3+0.5,+1*x4+0.5,+1' is not among them. An "
        "operation or a centring is missing or misspelt.",
    ),
    "no identity": (
        bad(("\n1 +1*x1,+1*x2,+1*x3,+1*x4,+1\n2", "\n2")),
        "the operations of _space_group_symop_magn_ssg_operation.algebraic do not hold the identity x1,x2,x3,x4.",
    ),
    "wave vector that the operations turn": (
        bad(("1 0 0 0.2137\n", "1 0.1 0 0.2137\n")),
        "_space_group_symop_magn_ssg_operation.algebraic '-1*x1,-1*x2,+1*x3+0.5,+1*x4+0.5,+1' does not keep the "
        "modulation wave vector (0.1, 0, 0.2137): x4 would belong to (-0.1, 0, 0.2137). Check both.",
    ),
    "centring that turns": (
        bad(("_centering.algebraic\n1 +1*x1", "_centering.algebraic\n2 -x1,-x2,x3,x4,+1\n1 +1*x1")),
        "_space_group_symop_magn_ssg_centering.algebraic '-x1,-x2,x3,x4,+1' turns; a centring only translates.",
    ),
    "forbidden amplitude": (
        bad(("1 Mn1 1 x 1 0.5", "1 Mn1 1 x 1 0.5\n9 Mn1 1 z 1 0"), ("3 Mn1 1 z 0 0\n", ""),
            base=STRUCTURES["special position on an axis along the wave"]),
        "the modulation of Mn1 at 1 q, cosine (1, -2, 1) and sine (0.5, 3, 0) µB along a, b, c, is not allowed by the "
        "symmetry of its site, which leaves cosine (1, -2, 0) and sine (0.5, 3, 0). Check the amplitudes, the "
        "position, the wave vector and the operations.",
    ),
    "forbidden average": (
        bad(("_centering.algebraic\n", "_centering.algebraic\n2 x1,x2,x3,x4+1/2,-1\n")),
        "the moment of Mn1, (1, 2, 3) µB along a, b, c, is not allowed by the symmetry of its site, which leaves (0, "
        "0, 0). Check the moment, the position and the operations.",
    ),
    "flag without amplitudes": (
        bad(("_atom_site_moment.crystalaxis_z", "_atom_site_moment.crystalaxis_z\n_atom_site_moment.modulation_flag"),
            ("Mn1 1 2 3", "Mn1 1 2 3 yes\nFe1 0 0 0 n")),
        "_atom_site_moment.modulation_flag of Fe1 is 'n', but Fourier amplitudes of it are given.",
    ),
    "flag without Fourier": (
        swap_series(bad(("_atom_site_moment.crystalaxis_z",
            "_atom_site_moment.crystalaxis_z\n_atom_site_moment.modulation_flag"), ("Mn1 1 2 3", "Mn1 1 2 3 y")), ""),
        "_atom_site_moment.modulation_flag of Mn1 is 'y', but no Fourier amplitudes of it are given.",
    ),
    "unknown label": (
        bad((" Mn1 1 x", " Mn2 1 x")),
        "_atom_site_moment_Fourier.atom_site_label 'Mn2' is the label of no atom. Known are: Mn1, Fe1. Did you mean "
        "'Mn1'?",
    ),
    "unknown wave vector": (
        bad((" Mn1 1 x", " Mn1 2 x")),
        "_atom_site_moment_Fourier.wave_vector_seq_id of Mn1 is '2', which no Fourier wave vector has.",
    ),
    "no Fourier wave vectors": (
        "".join(part for part in loops(BASE.text) if "_atom_site_Fourier_wave_vector" not in part),
        "it lists no Fourier wave vectors (_atom_site_Fourier_wave_vector.seq_id and sisters).",
    ),
    "wave vector that is no multiple": (
        bad((".q1_coeff", ".other"), ("1 0 0 0.2137 1", "1 0 0 0.22 1")).replace("_atom_site_Fourier_wave_vector.other",
            "_a"),
        "Fourier wave vector 1, (0, 0, 0.22), is no multiple of the modulation wave vector (0, 0, 0.2137).",
    ),
    "wave vector against its coefficient": (
        bad(("1 0 0 0.2137 1", "1 0 0 0.2137 2")),
        "Fourier wave vector 1 is given as (0, 0, 0.2137), but also as 2 times the modulation wave vector (0, 0, "
        "0.2137). Keep the right one.",
    ),
    "fractional coefficient": (
        bad(("1 0 0 0.2137 1", "1 0 0 0.2137 0.5")),
        "_atom_site_Fourier_wave_vector.q1_coeff is '0.5' in row 1, but whole numbers are needed.",
    ),
    "wave vector listed twice": (
        bad(("3 0 0 0.6", "1 0 0 0.6")),
        "_atom_site_Fourier_wave_vector.seq_id is '1' in row 2; every wave vector needs its own.",
    ),
    "spherical axis": (
        bad((" Mn1 1 x", " Mn1 1 mod")),
        "_atom_site_moment_Fourier.axis of Mn1 is 'mod', a spherical component, whose Fourier series is not one of the "
        "moment; it is not read. Give components along x, y, z (crystal axes) or Cx, Cy, Cz (Cartesian).",
    ),
    "axis of its own": (
        bad((" Mn1 1 x", " Mn1 1 a1")),
        "_atom_site_moment_Fourier.axis of Mn1 is 'a1', an axis that the file describes in words "
        "(_atom_sites_moment_Fourier.axes_description); it is not read. Give components along x, y, z (crystal axes) "
        "or Cx, Cy, Cz (Cartesian).",
    ),
    "no axis": (
        bad((" Mn1 1 x", " Mn1 1 w")),
        "_atom_site_moment_Fourier.axis of Mn1 is 'w', no axis; it is not read. Give components along x, y, z (crystal "
        "axes) or Cx, Cy, Cz (Cartesian).",
    ),
    "mixed axes": (
        bad((" Mn1 1 x", " Mn1 1 Cx")),
        "the moment of Mn1 at Fourier wave vector 1 mixes components along crystal axes and Cartesian ones. Use one "
        "system.",
    ),
    "component twice": (
        bad((" Mn1 1 y", " Mn1 1 x")),
        "the x component of the moment of Mn1 at Fourier wave vector 1 stands in two rows. Keep one.",
    ),
    "cosine alone": (
        bad((f"{SERIES}.sin", "_a")),
        f"{SERIES}.sin is missing beside {SERIES}.cos.",
    ),
    "no amplitudes": (
        bad((f"{SERIES}.sin", "_a"), (f"{SERIES}.cos", "_b")),
        f"_atom_site_moment_Fourier.atom_site_label stands without amplitudes ({SERIES}.cos and .sin, or .modulus and "
        ".phase).",
    ),
    "amplitude not given": (
        bad(("1 Mn1 1 x 1.5 0.5", "1 Mn1 1 x . ."), base=PLAIN),
        "the amplitude of Mn1 in row 1 of its Fourier loop is not given.",
    ),
    "sine not a number": (
        bad(("Mn1 1 x 1.5 0.5", "Mn1 1 x 1.5 much"), base=PLAIN),
        f"{SERIES}.sin is 'much' in row 1, which is not a number.",
    ),
    "no labels": (
        bad(("_atom_site_moment_Fourier.atom_site_label", "_a")),
        "_atom_site_moment_Fourier.id stands without labels (_atom_site_moment_Fourier.atom_site_label).",
    ),
    "sine of a constant": (
        dataclasses.replace(BASE, series={"Mn1": {0: A}}).text,
        "the moment of Mn1 at Fourier wave vector 0, which is zero, has a sine part; it means nothing there. Remove "
        "it.",
    ),
    "phase in degrees": (
        bad((f"{SERIES}.cos", f"{SERIES}.modulus"), (f"{SERIES}.sin", f"{SERIES}.phase"), ("1 x 1.2", "1 x 1.2"),
            base=dataclasses.replace(BASE, series={"Mn1": {1: ([1.2, 0, 0], [45, 0, 0])}})),
        f"{SERIES}.phase of Mn1 is 45; a phase is given in cycles, between -1 and 1.",
    ),
    "two descriptions that differ": (
        bad((f"{SERIES}.sin", f"{SERIES}.sin\n{SERIES}.modulus\n{SERIES}.phase"), ("1 x 1.2", "1 x 1.2"),
            base=dataclasses.replace(BASE, series={"Mn1": {1: ([1.2, 0, 0], [0, 0, 0])}}))
        .replace("x 1.2 0", "x 1.2 0 1.2 0.5").replace("1 y 0 0", "1 y 0 0 . .").replace("1 z 0 0", "1 z 0 0 . ."),
        "cosine and sine of Mn1 in row 1 of its Fourier loop contradict modulus and phase. Keep the right ones.",
    ),
    "too large": (
        bad(("1 x 1.2", "1 x 1.2e7"), base=dataclasses.replace(BASE, series={"Mn1": {1: ([1.2, 0, 0], [0, 0, 0])}})),
        f"{SERIES}.cos of Mn1 is 1.2e+07, beyond 1e+06 µB.",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", BAD)
def test_what_is_refused(name, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    text, message = BAD[name]
    Path("bad.mcif").write_text(text)
    with pytest.raises(FileError) as caught:
        ld.read_ordering("bad.mcif")
    assert str(caught.value) == f"bad.mcif: {message}"


def test_parameters_in_a_loop_of_their_own_need_matching_ids(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    head = swap_series(BASE.text, "")
    rows = (
        "loop_\n_atom_site_moment_Fourier.id\n_atom_site_moment_Fourier.atom_site_label\n"
        "_atom_site_moment_Fourier.wave_vector_seq_id\n_atom_site_moment_Fourier.axis\na Mn1 1 x\n"
    )
    values = f"loop_\n{SERIES}.id\n{SERIES}.cos\n{SERIES}.sin\n"
    for text, message in (
        (rows + values + "b 1 0\n", f"_atom_site_moment_Fourier.id 'a' stands 0 times in {SERIES}.id."),
        (rows + values + "a 1 0\nb 1 0\n", f"{SERIES}.id 'b' belongs to no row of _atom_site_moment_Fourier.id."),
        (
            rows + values.replace(f"{SERIES}.id", "_a") + "a 1 0\n",
            f"{SERIES}.cos stands in another loop than _atom_site_moment_Fourier.atom_site_label, without "
            f"_atom_site_moment_Fourier.id and {SERIES}.id to connect their rows.",
        ),
    ):
        with pytest.raises(FileError) as caught:
            read_text(head + text, ".")
        assert str(caught.value) == f"a.mcif: {message}"
    assert read_text(head + rows + values + "a 1 0\n", ".").components[1].any()


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    name=st.sampled_from(sorted(STRUCTURES)),
    place=st.floats(0, 1, exclude_max=True),
    word=st.sampled_from(["?", ".", "0", "-1", "nan", "1e400", "x4", "[1 2]", "''", "1/0", "9" * 30, "loop_", "", "é"]),
)
def test_any_word_exchanged_is_read_or_refused(name, place, word, tmp_path):
    words = list(re.finditer(r"\S+", STRUCTURES[name].text))
    chosen = words[int(place * len(words))]
    text = STRUCTURES[name].text
    try:
        read_text(text[: chosen.start()] + word + text[chosen.end() :], tmp_path)
    except FileError as error:
        assert str(error).startswith(str(tmp_path))
