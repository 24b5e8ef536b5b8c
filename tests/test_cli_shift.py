"""``latticedip shift`` from end to end: coupling tensors and shifts against sums and units worked out here."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest
from scipy import constants

from latticedip.report.su import format_su
from tests.commands import Command, box_cif, enter

CELL_A = 4.0
CUBE = box_cif("Mn1 Mn 0 0 0\nF1 F 0.5 0 0\nF2 F 0 0.5 0\nF3 F 0 0 0.5\n", CELL_A)
STUDY = """title = "A cube"
[crystal]
file = "cube.cif"
[[probe]]
name = "centre"
position = [0.5, 0.5, 0.5]
contact = [{ shell = 1, coupling_T_per_muB = 0.05 }]
[[probe]]
name = "fluorine"
particle = "19F"
site = "F"
"""
MOMENTS = "[moments]\nMn = 3.0\n"
CHI = '[susceptibility]\nMn = { chi = 0.01, unit = "cm3/mol" }\n'
TABLE = '[susceptibility]\nMn = { chi = [0.04, 0.02, 0.01], unit = "cm3/mol", temperatures_K = [50, 100, 200] }\n'
NEEDLE = '[sample]\nneedle = true\naxes = ["c"]\n'

MUB = constants.value("Bohr magneton")
#: µ0 µB per cell in T.
MAGNETIZATION_T = constants.mu_0 * MUB / (CELL_A * 1e-10) ** 3
#: 0.01 cm³/mol: a mole of ions has 0.01 emu = 1e-5 A m² in a field of 1 Oe = 1e-4 T.
INDUCED_MUB_PER_T = 1e-5 / 1e-4 / (constants.N_A * MUB)
command = Command(("shift", "study.toml"))
run, document, refused = command.run, command.document, command.refused


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"cube.cif": CUBE})


def write(*parts: str) -> None:
    Path("study.toml").write_text(STUDY + "".join(parts), encoding="utf-8")


def sphere_sum(offset: tuple[float, float, float]) -> np.ndarray:
    """Dipole tensor (T/µB) summed term by term over a simple cubic lattice in a sphere round the point."""
    steps = np.arange(-30, 31)
    grid = np.stack(np.meshgrid(steps, steps, steps, indexing="ij"), axis=-1).reshape(-1, 3)
    x = CELL_A * (np.array(offset) - grid)
    r = np.linalg.norm(x, axis=1)
    x, r = x[r < 29 * CELL_A], r[r < 29 * CELL_A]
    terms = 3 * np.einsum("na,nb->ab", x / r[:, None] ** 5, x) - np.eye(3) * (1 / r**3).sum()
    return np.asarray(1e-7 * MUB * 1e30 * terms)


def test_coupling_tensors_of_a_cube(folder: Path) -> None:
    write(MOMENTS)
    doc = document()
    assert doc["schema"] == "latticedip/shift/1"
    assert (doc["magnetic"], doc["magnetic_from"]) == ({"Mn": 1}, "[moments]")
    centre, *fluorine = doc["rows"]
    (coupling,) = centre["couplings"]
    np.testing.assert_allclose(coupling["dipolar_T_per_muB"], np.zeros((3, 3)), atol=1e-9)
    np.testing.assert_allclose(coupling["lorentz_T_per_muB"], MAGNETIZATION_T / 3 * np.eye(3), rtol=1e-6, atol=1e-15)
    np.testing.assert_allclose(coupling["contact_T_per_muB"], 8 * 0.05 * np.eye(3), rtol=1e-12)
    assert coupling["demagnetizing_T_per_muB"] == [[0, 0, 0]] * 3
    assert [row["multiplicity"] for row in fluorine] == [3, 3, 3]
    assert [row["distinct"] for row in fluorine] == [1, 2, 3]
    for row in fluorine:
        (coupling,) = row["couplings"]
        expected = sphere_sum(tuple(row["position"]))
        np.testing.assert_allclose(coupling["dipolar_T_per_muB"], expected, atol=2e-4)
        # The axis runs through the two nearest ions, across it all directions are alike.
        along = [0.0 if x == 0 else 1.0 for x in row["position"]]
        assert coupling["dipolar_principal_axes"][2] == pytest.approx(along, abs=1e-9)
        assert coupling["dipolar_principal_axes_free"] == [True, True, False]
        assert coupling["dipolar_asymmetry"] == 0
        assert row["shifts"] == []
    assert any("its trace is zero" in text for text in doc["conventions"])
    assert doc["notes"][-1].startswith("Left out: ")


def test_shift_and_its_parts(folder: Path) -> None:
    write(CHI, NEEDLE)
    doc = document()
    assert doc["magnetic_from"] == "[susceptibility]"
    (shift,) = doc["rows"][0]["shifts"]
    chi = INDUCED_MUB_PER_T
    assert shift["temperature_K"] is None
    assert shift["chi_cm3_per_mol"] == pytest.approx(0.01)
    np.testing.assert_allclose(shift["shift_dipolar"], np.zeros((3, 3)), atol=1e-10)
    np.testing.assert_allclose(shift["shift_lorentz"], chi * MAGNETIZATION_T / 3 * np.eye(3), rtol=1e-6, atol=1e-15)
    needle = -chi * MAGNETIZATION_T * np.diag([0.5, 0.5, 0])
    np.testing.assert_allclose(shift["shift_demagnetizing"], needle, rtol=1e-6, atol=1e-15)
    np.testing.assert_allclose(shift["shift_contact"], chi * 0.4 * np.eye(3), rtol=1e-6, atol=1e-15)
    # Lorentz and demagnetizing part have opposite traces in every body.
    assert shift["shift_isotropic"] == pytest.approx(chi * 0.4, rel=1e-6)
    assert shift["shift_principal_axes_abc"][2] == pytest.approx([0, 0, 1], abs=1e-9)
    assert any("K > 0 means a larger field" in text for text in doc["conventions"])
    assert any("chemical shift" in text for text in doc["notes"])


def test_units_of_susceptibility_agree(folder: Path) -> None:
    found = []
    for value, unit in ((0.01, "cm3/mol"), (0.01 * 4e-6 * np.pi, "m3/mol"), (INDUCED_MUB_PER_T, "muB/T")):
        write(f'[susceptibility]\nMn = {{ chi = {value!r}, unit = "{unit}" }}\n')
        found.append(document()["rows"][0]["shifts"][0]["shift_isotropic"])
    assert found[1] == pytest.approx(found[0], rel=1e-8)
    assert found[2] == pytest.approx(found[0], rel=1e-8)


def test_temperatures(folder: Path) -> None:
    write(TABLE)
    shifts = document()["rows"][0]["shifts"]
    assert [shift["temperature_K"] for shift in shifts] == [50, 100, 200]
    ratio = [shift["shift_isotropic"] / shifts[2]["shift_isotropic"] for shift in shifts]
    assert ratio == pytest.approx([4, 2, 1])
    (between,) = document("--temperature", "75")["rows"][0]["shifts"]
    assert between["chi_cm3_per_mol"] == pytest.approx(0.03)
    assert refused("--temperature", "10") == (
        "Error: temperature_K = 10.0 lies outside the table of the susceptibility, 50 to 200 K.\n"
    )
    text = run().stdout
    assert "Shift against temperature" in text
    assert max(len(line) for line in text.splitlines()) <= 80
    assert "Shift at 75 K, chi = 0.03 cm³/mol of ions (mean, cgs)" in run("--temperature", "75").stdout


def test_rotation_of_the_crystal_in_the_field(folder: Path) -> None:
    write(CHI)
    doc = document("--rotate-about", "c", "--probe", "fluorine")
    assert doc["rotate_about"]["cartesian"] == [0, 0, 1]
    for row in doc["rows"]:
        shift = row["shifts"][0]
        turned = shift["rotation"]
        assert turned["start"] == [1, 0, 0]
        assert turned["angles_deg"][:2] == [0, 5] and turned["angles_deg"][-1] == 360
        angles = np.radians(turned["angles_deg"])
        h = np.stack([np.cos(angles), np.sin(angles), np.zeros_like(angles)], axis=1)
        expected = np.einsum("na,ab,nb->n", h, np.array(shift["shift"]), h)
        np.testing.assert_allclose(turned["shift"], expected, atol=1e-15)
    text = run("--rotate-about", "1 1 0").stdout
    assert "Shift against rotation about [1 1 0] (along a b c), the field across it." in text
    assert "K(phi) = " in text
    rows = list(csv.DictReader(run("--rotate-about", "c", "--csv", "-").stdout.splitlines()))
    assert len(rows) == 4 * 73
    assert rows[1]["angle_deg"] == "5.0" and rows[1]["boundary"]


def test_shift_along_the_applied_field(folder: Path) -> None:
    write(CHI, NEEDLE, "applied_T = [0, 3, 0]\n")
    shift = document()["rows"][0]["shifts"][0]
    assert shift["shift_along_applied"] == pytest.approx(shift["shift"][1][1])
    assert "along the applied field" in run().stdout


def test_equivalent_positions(folder: Path) -> None:
    write(MOMENTS, '[[probe]]\nname = "muon"\nposition = [0.3, 0, 0]\n')
    assert len(document("--probe", "muon")["rows"]) == 1
    rows = document("--probe", "muon", "--orbit")["rows"]
    assert len(rows) == 6
    assert sorted(row["distinct"] for row in rows) == [1, 1, 2, 2, 3, 3]
    traceless = sum(np.array(row["couplings"][0]["dipolar_T_per_muB"]) for row in rows)
    np.testing.assert_allclose(traceless, np.zeros((3, 3)), atol=1e-8)


def test_tensors_and_uncertainties_turn_with_equivalent_positions(folder: Path) -> None:
    tensor = "[[0.1, 0, 0], [0, 0, 0], [0, 0, 0]]"
    probe = '[[probe]]\nname = "muon"\nposition = [0.3, 0, 0]\nposition_su = [0.002, 0, 0]\n'
    spread = "covariance_A2 = [[0.02, 0, 0], [0, 0.01, 0], [0, 0, 0.01]]\n"
    write(MOMENTS, probe, spread, f"contact = [{{ shell = 1, coupling_T_per_muB = {tensor} }}]\n")
    rows = document("--orbit", "--probe", "muon")["rows"]
    assert len(rows) == 6
    alone = document("--probe", "muon")["rows"][0]["couplings"][0]
    for row in rows:
        (coupling,) = row["couplings"]
        along = int(np.argmax(np.abs(np.array(row["position"]) - np.round(row["position"]))))
        # From the axis of the position to x, with the other two axes after it.
        order = np.roll(range(3), -along)
        for key in ("contact_T_per_muB", "dipolar_T_per_muB", "dipolar_su_T_per_muB"):
            turned = np.array(coupling[key])[np.ix_(order, order)]
            np.testing.assert_allclose(turned, alone[key], atol=1e-9)
    assert alone["dipolar_su_T_per_muB"][0][0] > 0


def test_a_moving_probe(folder: Path) -> None:
    from latticedip import coupling_tensor, read_crystal

    probe = '[[probe]]\nname = "muon"\nposition = [0.3, 0.1, 0.2]\n'
    write(MOMENTS, probe, "Uij = [0.02, 0.01, 0.03, 0.005, 0, 0]\n")
    doc = document("--probe", "muon")
    spread = [[0.02, 0.005, 0], [0.005, 0.01, 0], [0, 0, 0.03]]
    expected = coupling_tensor(read_crystal("cube.cif"), (0.3, 0.1, 0.2), magnetic="Mn", spread=spread)
    np.testing.assert_allclose(doc["rows"][0]["couplings"][0]["dipolar_T_per_muB"], expected.dipolar, atol=1e-12)
    assert any(note.startswith("muon: field averaged over a Gaussian spread of ") for note in doc["notes"])
    # The tensor of an atom is turned for the others: along its own bond each time.
    write(MOMENTS)
    text = Path("study.toml").read_text(encoding="utf-8")
    Path("study.toml").write_text(text.replace('site = "F"', 'site = "F1"\nspread_A = 0.1'), encoding="utf-8")
    found = document("--probe", "fluorine")["rows"][0]["couplings"][0]["dipolar_T_per_muB"]
    wide = coupling_tensor(read_crystal("cube.cif"), (0.5, 0, 0), magnetic="Mn", spread=0.1)
    np.testing.assert_allclose(found, wide.dipolar, atol=1e-12)


def test_the_line_of_a_powder(folder: Path) -> None:
    write(TABLE, NEEDLE)
    doc = document("--powder", "--bins", "50", "--temperature", "100", "--probe", "fluorine")
    (shift,) = doc["rows"][0]["shifts"]
    line = shift["powder"]
    assert len(line["share"]) == 50 and sum(line["share"]) == pytest.approx(1, abs=1e-12)
    widths = np.diff(line["shift_limits"])
    np.testing.assert_allclose(np.array(line["density"]) * widths, line["share"], rtol=1e-12)
    assert line["mean"] == pytest.approx(shift["shift_isotropic"], abs=1e-12)
    middle = np.array(line["shift_limits"][:-1]) + widths / 2
    assert middle @ line["share"] == pytest.approx(line["mean"], abs=0.02 * np.ptp(shift["powder_edges"]))
    rows = list(csv.DictReader(run("--powder", "--bins", "50", "--csv", "-").stdout.splitlines()))
    assert len(rows) == 4 * 3 * 50
    assert {"shift_from", "shift_to", "share", "density", "temperature_K", "boundary"} <= set(rows[0])
    text = run("--powder", "--temperature", "100").stdout
    assert "Line of a powder" in text and "singularity" in text
    assert max(len(part) for part in text.splitlines()) <= 80


def test_a_powder_has_no_shift_but_the_isotropic_one(folder: Path) -> None:
    """Without contact, in a sphere: the dipolar part has no trace, so the line has its mean at zero."""
    write(CHI, "[sample]\nsphere = true\n")
    for row in document("--powder", "--probe", "fluorine")["rows"]:
        (shift,) = row["shifts"]
        assert np.ptp(shift["powder_edges"]) > 1e-4
        assert abs(shift["powder"]["mean"]) < 1e-12


@pytest.mark.parametrize(
    ("table", "arguments"),
    [
        (TABLE, []),
        (TABLE, ["--rotate-about", "c"]),
        (TABLE, ["--powder"]),
        (CHI, ["--powder"]),
        (CHI, ["--rotate-about", "1 1 0"]),
    ],
    ids=["temperature", "rotation", "powders", "powder", "one rotation"],
)
def test_pictures(folder: Path, table: str, arguments: list[str]) -> None:
    pytest.importorskip("matplotlib")
    write(table, NEEDLE)
    for suffix, start in (("png", b"\x89PNG"), ("svg", b"<?xml"), ("pdf", b"%PDF")):
        result = run(*arguments, "--plot", f"shift.{suffix}")
        assert (result.exit_code, result.stderr) == (0, f"Wrote shift.{suffix}.\n")
        assert Path(f"shift.{suffix}").read_bytes().startswith(start)


def test_uncertainties_on_screen_and_in_files(folder: Path) -> None:
    uncertain = CUBE.replace("F1 F 0.5 0 0\n", "F1 F 0.5(0) 0.010(2) 0\n")
    Path("cube.cif").write_text(uncertain, encoding="utf-8")
    chi = '[susceptibility]\nMn = { chi = 0.01, chi_su = 0.0002, unit = "cm3/mol" }\n'
    write(chi, NEEDLE, "applied_T = [0, 0, 1]\n")
    doc = document()
    contact = 0.05 * 8 * INDUCED_MUB_PER_T
    (shift,) = doc["rows"][0]["shifts"]
    assert shift["shift_isotropic_su"] == pytest.approx(0.02 * contact, rel=1e-6)
    assert shift["shift_along_applied_su"] > 0
    known = {row["site"]: row["couplings"][0]["dipolar_principal_values_su_T_per_muB"] for row in doc["rows"][1:]}
    assert max(known["F1"]) > 0 and max(known["F2"]) == 0
    assert sum(note.startswith("Digits in brackets are the standard uncertainty") for note in doc["notes"]) == 1
    text = run().stdout
    assert f"isotropic  {format_su(100 * shift['shift_isotropic'], 100 * shift['shift_isotropic_su'])} %" in text
    along = format_su(100 * shift["shift_along_applied"], 100 * shift["shift_along_applied_su"])
    assert f"along the applied field  {along} %" in text
    rows = list(csv.DictReader(run("--csv", "-").stdout.splitlines()))
    assert float(rows[0]["shift_isotropic_su"]) == shift["shift_isotropic_su"]
    assert float(rows[0]["shift_principal_zz_su"]) == shift["shift_principal_values_su"][2]
    # Nothing stated: no brackets, empty cells.
    Path("cube.cif").write_text(CUBE, encoding="utf-8")
    write(CHI, NEEDLE)
    doc = document()
    assert doc["rows"][0]["shifts"][0]["shift_isotropic_su"] is None
    assert not any(note.startswith("Digits in brackets") for note in doc["notes"])
    rows = list(csv.DictReader(run("--csv", "-").stdout.splitlines()))
    assert rows[0]["shift_isotropic_su"] == "" and rows[0]["shift_principal_zz_su"] == ""


def test_a_table_of_uncertain_susceptibilities(folder: Path) -> None:
    write(TABLE.replace("chi = [", "chi_su = [0.002, 0.001, 0.001], chi = ["))
    shifts = document("--probe", "centre")["rows"][0]["shifts"]
    relative = [s["shift_isotropic_su"] / s["shift_isotropic"] for s in shifts]
    assert relative == pytest.approx([0.05, 0.05, 0.1], rel=1e-6)
    lines = run("--probe", "centre").stdout.splitlines()
    shown = format_su(100 * shifts[0]["shift_isotropic"], 100 * shifts[0]["shift_isotropic_su"])
    assert any(line.split()[:1] == ["50"] and shown in line for line in lines)


def test_shells_of_contact_terms_count_all_kinds_of_ions(folder: Path) -> None:
    Path("cube.cif").write_text(CUBE.replace("F1 F 0.5 0 0\n", "F1 F 0.5 0 0\nNi1 Ni 0.5 0.5 0.3\n"), encoding="utf-8")
    write("[moments]\nMn = 3.0\nNi = 2.0\n")
    manganese, nickel = document("--probe", "centre")["rows"][0]["couplings"]
    assert (manganese["ion"], nickel["ion"]) == ("Mn", "Ni")
    assert manganese["contact_T_per_muB"] == [[0, 0, 0]] * 3
    np.testing.assert_allclose(nickel["contact_T_per_muB"], 0.05 * np.eye(3))


def test_on_screen_and_csv(folder: Path) -> None:
    write(CHI, NEEDLE)
    result = run()
    assert (result.exit_code, result.stderr) == (0, "")
    lines = result.stdout.splitlines()
    assert max(len(line) for line in lines) <= 80
    for words in ("Coupling to Mn, 1 per cell", "fluorine (3)", "1 of 3 points: 0.5 0 0 (on F1)", "any across", "T/µB"):
        assert words in result.stdout, words
    assert "The dipolar tensor is isotropic within its accuracy." in result.stdout
    rows = list(csv.DictReader(run("--csv", "-").stdout.splitlines()))
    assert len(rows) == 4
    assert {"shift_isotropic", "shift_lorentz_zz", "shift_axis_zz_x", "boundary"} <= set(rows[0])
    write(MOMENTS)
    rows = list(csv.DictReader(run("--csv", "-").stdout.splitlines()))
    assert rows[0]["ion"] == "Mn"
    assert float(rows[0]["contact_xx_T_per_muB"]) == pytest.approx(0.4)


def test_the_ions_of_the_orderings_count_where_nothing_else_names_them(folder: Path) -> None:
    write("[[ordering]]\nk = [0, 0, 0]\ncosine = { Mn1 = [0, 0, 3] }\n")
    doc = document()
    assert (doc["magnetic"], doc["magnetic_from"]) == ({"Mn1": 1}, "the orderings")


@pytest.mark.parametrize(
    ("parts", "arguments", "message"),
    [
        (
            [],
            [],
            "'study.toml' does not say which ions are magnetic. Give them a size in [moments], such as [moments] "
            'Mn = 4.6, or a susceptibility, such as [susceptibility] Mn = { chi = 0.012, unit = "cm3/mol" }',
        ),
        (
            [MOMENTS],
            ["--temperature", "50"],
            "--temperature has no meaning for this study: it has no [susceptibility]. Leave it out, or state a table.",
        ),
        (
            [CHI],
            ["--temperature", "50"],
            "--temperature has no meaning for this study: the susceptibility is a single value. Leave it out, or state "
            "a table.",
        ),
        (
            [MOMENTS],
            ["--rotate-about", "c"],
            "--rotate-about needs a susceptibility: add a table [susceptibility] to the study.",
        ),
        (
            [CHI],
            ["--rotate-about", "d"],
            "--rotate-about: got 'd', expected a crystal direction: a, b, c, a*, b*, c*, or three components along the "
            'axes a, b, c, such as "1 1 0".',
        ),
        ([MOMENTS], ["--powder"], "--powder needs a susceptibility: add a table [susceptibility] to the study."),
        (
            [CHI],
            ["--powder", "--rotate-about", "c"],
            "--powder and --rotate-about are of a powder and of a crystal. Leave one out.",
        ),
        (
            [CHI],
            ["--plot", "shift.png"],
            "there is no curve of a shift to draw. Ask for --rotate-about or --powder, or state chi as a table of "
            "temperatures in [susceptibility].",
        ),
        ([CHI], ["--plot", "shift.gif"], "a picture ends in .png, .svg, .pdf, got 'shift.gif'."),
        (
            [CHI.replace("0.01,", "0.01, chi_su = -1,")],
            [],
            "study.toml: `susceptibility.Mn.chi_su`: chi_su must hold numbers of at least 0, got -1.0.",
        ),
        (
            [TABLE.replace("chi = [", "chi_su = [0.1], chi = [")],
            [],
            "study.toml: `susceptibility.Mn.chi_su`: chi_su must have shape (3), got (1,).",
        ),
        ([CHI], ["--rotate-about", "0 0 0"], "--rotate-about: got '0 0 0': [0, 0, 0] has no direction."),
        (
            [CHI],
            ["--probe", "flourine"],
            "the study has no probe named 'flourine'. Those it has: 'centre', 'fluorine'. Did you mean 'fluorine'?",
        ),
    ],
)
def test_wrong_input(folder: Path, parts: list[str], arguments: list[str], message: str) -> None:
    write(*parts)
    assert refused(*arguments) == f"Error: {message}\n"
