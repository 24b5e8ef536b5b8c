"""The command line from end to end, on invented compounds and on arrays whose sums are known in closed form."""

from __future__ import annotations

import csv
import hashlib
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

import latticedip
from latticedip.cli.main import COMMANDS
from latticedip.study.rankings import rank_table
from latticedip.units import K_PER_EV
from tests.commands import Command, box_cif, enter

# Simple cubic, 2 µB, 4 Å.
CUBE = box_cif("Mn1 Mn 0 0 0\n", 4.0)
STUDY = """title = "A cube"
[crystal]
file = "cube.cif"
[moments]
Mn1 = 2.0
[[ordering]]
name = "ferromagnet"
k = [0, 0, 0]
along = [0, 0, 1]
[[ordering]]
name = "=rods"
k = [0.5, 0.5, 0]
along = [0, 0, 1]
[[ordering]]
name = "rods turned over"
k = ["1/2", "1/2", 0]
along = [0, 0, -1]
[[probe]]
name = "muon A"
position = [0.5, 0.5, 0.5]
[[probe]]
name = "on site"
particle = "55Mn"
site = "Mn1"
"""
#: Energy per dipole of simple cubic k = (½,½,0) in n µ²: Luttinger and Tisza, Phys. Rev. 70, 954 (1946).
RODS = -2.6767886844
#: µ0 µB²/(4π Å³) in µeV.
UEV = 53.68151
command = Command()
run, document, refused = command.run, command.document, command.refused


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"cube.cif": CUBE, "study.toml": STUDY})


# --- rank -----------------------------------------------------------------------------------------------


def test_rank_gives_the_published_energy(folder: Path) -> None:
    rows = document("rank", "study.toml")["rows"]
    expected = RODS * 2.0**2 / 4.0**3 * UEV
    assert {row["ordering"] for row in rows[:2]} == {"=rods", "rods turned over"}
    assert [row["rank"] for row in rows] == [1, 2, 3]
    for row in rows[:2]:
        assert row["energy_ueV_per_ion"] == pytest.approx(expected, rel=1e-6)
        assert row["energy_K_per_ion"] == pytest.approx(expected * 1e-6 * K_PER_EV, rel=1e-6)
        assert row["tie"] is True
        assert row["net_moment_muB_per_cell"] == [0, 0, 0]
    # A ferromagnet with N = 0 has −2π/3 (Lorentz).
    assert rows[2]["energy_ueV_per_ion"] == pytest.approx(-2.0943951024 * 4 / 64 * UEV, rel=1e-6)
    assert rows[2]["above_lowest_ueV_per_ion"] == pytest.approx((2.6767886844 - 2.0943951024) * 4 / 64 * UEV, rel=1e-6)
    assert rows[2]["tie"] is False
    assert rows[2]["net_moment_muB_per_ion"] == pytest.approx(2.0)


def test_rank_document_says_what_it_rests_on(folder: Path) -> None:
    doc = document("rank", "study.toml", "--tol", "1e-6")
    assert list(doc)[:4] == ["schema", "version", "inputs", "boundary"]
    assert doc["schema"] == "latticedip/rank/1"
    assert doc["version"] == latticedip.__version__
    assert doc["inputs"]["options"] == {
        "rotate": False,
        "bound": None,
        "parts": False,
        "shells": None,
        "orderings": None,
        "tol": 1e-6,
    }
    assert doc["inputs"]["files"] == [
        {"role": "study", "path": "study.toml", "sha256": hashlib.sha256(STUDY.encode()).hexdigest()},
        {"role": "crystal", "path": "cube.cif", "sha256": hashlib.sha256(CUBE.encode()).hexdigest()},
    ]
    assert doc["boundary"] == "net moment without a stated shape: N = 0 assumed (a domain that closes its flux)"
    assert set(doc["rows"][0]["fields"]) == {"muon A", "on site"}


def test_rank_on_screen(folder: Path) -> None:
    result = run("rank", "study.toml")
    assert result.exit_code == 0
    assert result.stderr == ""
    lines = result.stdout.splitlines()
    assert lines[0] == "A cube"
    assert max(len(line) for line in lines) <= 80
    assert "µeV/ion" in result.stdout
    energies = [line for line in lines if line.startswith("   1  ")]
    assert "-8.9809" in energies[0]
    assert energies[0].split()[-2] == "="
    assert "no proof of an ordering" in " ".join(result.stdout.split())
    assert "boundary  net moment without a stated shape: N = 0" in result.stdout


def test_tied_rows_keep_the_order_of_the_file(folder: Path) -> None:
    assert [row["ordering"] for row in document("rank", "study.toml")["rows"][:2]] == ["=rods", "rods turned over"]
    head, rest = STUDY.split("[[ordering]]", 1)
    ferromagnet, rods, turned = rest.split("[[probe]]", 1)[0].split("[[ordering]]")
    Path("study.toml").write_text("[[ordering]]".join([head, turned, rods, ferromagnet]), encoding="utf-8")
    assert [row["ordering"] for row in document("rank", "study.toml")["rows"][:2]] == ["rods turned over", "=rods"]


def test_parts_of_the_energy_that_are_zero_are_left_out_with_a_reason(folder: Path) -> None:
    shape = "no energy of the shape: no demagnetizing field for any of these orderings"
    applied = "no energy in an applied field: no field is applied"
    assert document("rank", "study.toml")["zero_parts"] == {"shape": shape, "applied": applied}
    text = " ".join(run("rank", "study.toml").stdout.split())
    assert shape in text and applied in text and "Parts of the energy" not in text
    Path("study.toml").write_text(STUDY + "[sample]\nsphere = true\n", encoding="utf-8")
    assert document("rank", "study.toml")["zero_parts"] == {"applied": applied}
    lines = run("rank", "study.toml").stdout.split("Parts of the energy")[1].splitlines()
    assert lines[2].split() == ["rank", "ordering", "dipolar", "shape"]
    Path("study.toml").write_text(STUDY + "[sample]\nsphere = true\napplied_T = [0, 0, 1]\n", encoding="utf-8")
    assert document("rank", "study.toml")["zero_parts"] == {}
    Path("study.toml").write_text(STUDY + "[sample]\nsphere = true\napplied_T = [1, 0, 0]\n", encoding="utf-8")
    assert document("rank", "study.toml")["zero_parts"] == {
        "applied": "no energy in an applied field: no ordering has a net moment along it"
    }


def test_fields_that_vanish_are_one_row(folder: Path) -> None:
    """Two points between antiparallel moments: both fields are rounding errors of different size."""
    moments = "loop_\n_atom_site_moment.label\n" + "".join(f"_atom_site_moment.crystalaxis_{x}\n" for x in "xyz")
    doubled = CUBE.replace("_cell_length_c 4.0", "_cell_length_c 8.0") + "Mn2 Mn 0 0 0.5\n"
    Path("doubled.mcif").write_text(doubled + moments + "Mn1 0 0 2\nMn2 0 0 -2\n", encoding="utf-8")
    Path("study.toml").write_text(STUDY + '[[ordering]]\nname = "doubled"\nfile = "doubled.mcif"\n', encoding="utf-8")
    result = run("rank", "study.toml", "--ordering", "doubled")
    assert result.exit_code == 0, result.stderr
    (line,) = [line for line in result.stdout.splitlines() if "muon A" in line]
    assert line.split()[-1] == "2" and float(line.split()[-3]) == 0
    rows = list(csv.DictReader(run("rank", "study.toml", "--ordering", "doubled", "--csv", "-").stdout.splitlines()))
    assert rows[0]["muon A: points"] == "2"


def test_an_ordering_in_its_own_cell_says_where_it_was_evaluated(folder: Path) -> None:
    moments = "loop_\n_atom_site_moment.label\n" + "".join(f"_atom_site_moment.crystalaxis_{x}\n" for x in "xyz")
    doubled = CUBE.replace("_cell_length_c 4.0", "_cell_length_c 8.0") + "Mn2 Mn 0 0 0.5\n"
    Path("doubled.mcif").write_text(doubled + moments + "Mn1 0 0 2\nMn2 0 0 -2\n", encoding="utf-8")
    Path("study.toml").write_text(STUDY + '[[ordering]]\nname = "doubled"\nfile = "doubled.mcif"\n', encoding="utf-8")
    (entry,) = document("field", "study.toml", "--ordering", "doubled", "--probe", "muon A")["orderings"]
    assert entry["own_cell_placed"].startswith("matched to [crystal] by lattice and sites (a,b,2c;0,0,0; ")
    positions = [(row["position_in_reference_cell"], row["position"], row["multiplicity"]) for row in entry["rows"]]
    assert positions == [([0.5, 0.5, 0.5], [0.5, 0.5, 0.25], 2), ([0.5, 0.5, 0.5], [0.5, 0.5, 0.75], 2)]
    ranked = document("rank", "study.toml")["rows"]
    placed = {row["ordering"]: row["own_cell_placed"] for row in ranked}
    assert placed == {"ferromagnet": None, "=rods": None, "rods turned over": None, "doubled": entry["own_cell_placed"]}
    point = next(row for row in ranked if row["ordering"] == "doubled")["fields"]["muon A"][0]
    assert (point["position"], point["position_in_reference_cell"]) == ([0.5, 0.5, 0.25], [0.5, 0.5, 0.5])
    words = "doubled: has a cell of its own, matched to [crystal] by lattice and sites (a,b,2c;0,0,0;"
    assert words in " ".join(run("rank", "study.toml").stdout.split())
    text = " ".join(run("field", "study.toml", "--ordering", "doubled").stdout.split())
    assert "its own cell matched to [crystal] by lattice and sites (a,b,2c;0,0,0;" in text
    assert "muon A, 1 of 2" in text and "in its own cell" in text


def test_only_the_orderings_and_probes_that_are_named(folder: Path) -> None:
    doc = document("rank", "study.toml", "--ordering", "rods turned over", "--ordering", "ferromagnet")
    assert [row["ordering"] for row in doc["rows"]] == ["rods turned over", "ferromagnet"]
    assert doc["inputs"]["options"]["orderings"] == ["rods turned over", "ferromagnet"]
    doc = document("field", "study.toml", "--ordering", "=rods", "--probe", "on site")
    assert [(o["ordering"], [row["probe"] for row in o["rows"]]) for o in doc["orderings"]] == [("=rods", ["on site"])]
    assert refused("rank", "study.toml", "--ordering", "ferromagnt") == (
        "Error: the study has no ordering named 'ferromagnt'. "
        "Those it has: 'ferromagnet', '=rods', 'rods turned over'. Did you mean 'ferromagnet'?\n"
    )
    assert refused("field", "study.toml", "--probe", "muon B") == (
        "Error: the study has no probe named 'muon B'. Those it has: 'muon A', 'on site'. Did you mean 'muon A'?\n"
    )


def test_rotate_finds_the_cubic_directions(folder: Path) -> None:
    doc = document("rank", "study.toml", "--rotate")
    by_name = {row["ordering"]: row for row in doc["rows"]}
    rods = by_name["=rods"]
    assert rods["axis_meaning"] == "moment"
    assert [abs(x) for x in rods["easy_axis_abc"]] == pytest.approx([0, 0, 1], abs=1e-6)
    # Trace zero and the symmetry between a and b: the two other directions cost −½ of the easy energy.
    assert rods["anisotropy_ueV_per_ion"] == pytest.approx(1.5 * 2.6767886844 * 4 / 64 * UEV, rel=1e-6)
    # 1 µeV per 64 Å³ is 2503.4 J/m³.
    assert rods["anisotropy_J_per_m3"] == pytest.approx(rods["anisotropy_ueV_per_ion"] * 2503.402, rel=1e-5)
    assert by_name["ferromagnet"]["anisotropy_ueV_per_ion"] == pytest.approx(0, abs=1e-6)
    text = run("rank", "study.toml", "--rotate").stdout
    assert "easy axis" in text and "hard axis" in text and "J/m³" in text
    assert "[0 0 1]" in text


def test_digits_stop_where_the_error_bound_is(folder: Path) -> None:
    def shown(tol: str) -> str:
        lines = run("rank", "study.toml", "--tol", tol).stdout.splitlines()
        return next(line.split()[2] for line in lines if "=rods" in line)

    assert shown("1e-10") == "-8.9809"
    # The bound is ½ (2 µB)² × 1e-2 T/µB = 0.02 µB T, which is 1.16 µeV: no digit behind the point is certain.
    assert shown("1e-2").startswith("-9") and "." not in shown("1e-2")


def test_fields_that_change_from_cell_to_cell_are_said_to_be_of_one(folder: Path) -> None:
    sentence = "fields are those in the home cell; with k ≠ 0 they differ from cell to cell"
    assert any(sentence in note for note in document("rank", "study.toml")["notes"])
    ferromagnet, rods, _ = document("field", "study.toml")["orderings"]
    assert not any(sentence in note for note in ferromagnet["notes"])
    assert any(sentence in note for note in rods["notes"])


def test_rank_csv_keeps_the_levels_of_a_probe_together(folder: Path) -> None:
    doc = document("rank", "study.toml")
    points = doc["rows"][-1]["fields"]["muon A"]
    points.append({**points[0], "field_size_T": 7.0, "frequency_MHz": 70.0})
    first, *_, last = rank_table(doc)
    what = ("field_size_T", "frequency_MHz", "points")
    columns = [name for name in first if name.startswith(("muon A: ", "on site: "))]
    assert columns == [
        *(f"muon A: {name}" for name in what),
        *(f"muon A: {name} (2)" for name in what),
        *(f"on site: {name}" for name in what),
    ]
    assert list(first) == list(last) and list(first)[-1] == "boundary"
    assert [first[f"muon A: {name} (2)"] for name in what] == [None] * 3
    assert [last[f"muon A: {name}"] for name in what] == [7.0, 70.0, 1]
    assert last["muon A: points (2)"] == 1


def test_rank_csv(folder: Path) -> None:
    result = run("rank", "study.toml", "--rotate", "--csv", "out.csv")
    assert result.exit_code == 0
    assert result.stderr == "Wrote out.csv.\n"
    assert result.stdout.startswith("A cube")
    with open("out.csv", encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == 3
    assert "'=rods" in {row["ordering"] for row in rows}
    for column in ("energy_ueV_per_ion", "muon A: field_size_T", "easy_axis_cart_x", "boundary", "k"):
        assert column in rows[0], list(rows[0])
    assert run("rank", "study.toml", "--rotate", "--csv", "-").stdout == Path("out.csv").read_text(encoding="utf-8")


# --- field ----------------------------------------------------------------------------------------------


def test_field_in_a_ferromagnetic_sphere(folder: Path) -> None:
    Path("study.toml").write_text(STUDY + "[sample]\nsphere = true\n", encoding="utf-8")
    doc = document("field", "study.toml")
    assert doc["schema"] == "latticedip/field/1"
    ferromagnet = doc["orderings"][0]
    assert ferromagnet["boundary"] == "sample shape: sphere"
    lorentz = 2 / 64 * 0.9274010 * 4 * 3.141592653589793 / 3
    assert [row["probe"] for row in ferromagnet["rows"]] == ["muon A", "on site"]
    for row in ferromagnet["rows"]:
        # The Lorentz sum vanishes at the cube's sites and at its centre; Lorentz and demagnetizing field cancel.
        assert row["dipolar_T"] == pytest.approx([0, 0, 0], abs=1e-8)
        assert row["lorentz_T"] == pytest.approx([0, 0, lorentz], rel=1e-6)
        assert row["demagnetizing_T"] == pytest.approx([0, 0, -lorentz], rel=1e-6)
        assert row["contact_T"] == row["applied_T"] == [0, 0, 0]
        assert row["field_size_T"] == pytest.approx(0, abs=1e-8)


@pytest.mark.parametrize("axes", ["cartesian", "crystal", "polar"])
@pytest.mark.parametrize("unit", ["T", "G"])
def test_field_axes_and_units(folder: Path, axes: str, unit: str) -> None:
    result = run("field", "study.toml", "--axes", axes, "--unit", unit)
    assert result.exit_code == 0
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    row = document("field", "study.toml", "--axes", axes, "--unit", unit)["orderings"][1]["rows"][1]
    # At its own site a dipole of the rods feels B = 2 |E| / m along its moment.
    field = 2 * 2.6767886844 * 2 / 64 * 0.9274010 * (1 if unit == "T" else 1e4)
    assert row[f"field_size_{unit}"] == pytest.approx(field, rel=1e-6)
    assert row["frequency_MHz"] > 0
    if axes == "polar":
        assert row[f"field_size_{unit}"] == pytest.approx(field, rel=1e-6)
        assert row["field_theta_deg"] == pytest.approx(0, abs=1e-6)
        assert row["lorentz_theta_deg"] is None
        # The gradient has one size, whatever the axes.
        assert not [key for key in row if "size_size" in key]
        assert row[f"gradient_of_size_length_{unit}_per_A"] == pytest.approx(0, abs=1e-6 * field)
        assert {"gradient_of_size_theta_deg", "gradient_of_size_phi_deg"} <= set(row)
    else:
        key = f"field_{unit}" if axes == "cartesian" else f"field_abc_{unit}"
        assert row[key] == pytest.approx([0, 0, field], rel=1e-6, abs=1e-8 * field)


def test_a_field_within_its_error_has_no_direction(folder: Path) -> None:
    row = document("field", "study.toml", "--ordering", "=rods", "--axes", "polar")["orderings"][0]["rows"][0]
    assert row["field_size_T"] == pytest.approx(0, abs=1e-9)
    assert row["field_theta_deg"] is None and row["dipolar_phi_deg"] is None


def test_crystal_axes_of_an_oblique_cell(folder: Path) -> None:
    text = CUBE.replace("_gamma 90", "_gamma 60")
    Path("cube.cif").write_text(text, encoding="utf-8")
    Path("study.toml").write_text(STUDY + "[sample]\napplied_T = [0, 1, 0]\n", encoding="utf-8")
    row = document("field", "study.toml", "--axes", "crystal")["orderings"][0]["rows"][0]
    # y = (2 b − a)/√3 along unit vectors a, b at 60 degrees.
    assert row["applied_abc_T"] == pytest.approx([-1 / 3**0.5, 2 / 3**0.5, 0], abs=1e-9)


def test_field_csv_has_units_in_its_columns(folder: Path) -> None:
    result = run("field", "study.toml", "--csv", "-", "--unit", "G", "--axes", "crystal")
    rows = list(csv.DictReader(result.stdout.splitlines()))
    assert len(rows) == 6
    assert {"dipolar_a_G", "field_c_G", "frequency_MHz", "gradient_of_size_a_G_per_A", "boundary"} <= set(rows[0])


# --- show -----------------------------------------------------------------------------------------------


def test_show_a_study(folder: Path) -> None:
    doc = document("show", "study.toml")
    assert doc["schema"] == "latticedip/show/1"
    assert doc["crystal"]["volume_A3"] == pytest.approx(64)
    nearest = doc["neighbours"][0]
    assert (nearest["site"], nearest["neighbour"], nearest["count"]) == ("Mn1", "Mn1", 6)
    assert nearest["distance_A"] == pytest.approx(4.0)
    assert nearest["dipolar_scale_ueV"] == pytest.approx(UEV * 4 / 64, rel=1e-6)
    assert nearest["dipolar_scale_K"] == pytest.approx(0.622948 * 4 / 64, rel=1e-5)
    rods = doc["orderings"][1]
    assert rods["cells"] == [[0, 0, 0], [0, 1, 0], [1, 0, 0], [1, 1, 0]]
    assert rods["atoms"][0]["along_muB"] == pytest.approx([2, -2, -2, 2])
    assert doc["probes"][0]["nearest_atom_A"] == pytest.approx(4 * 0.75**0.5)
    text = run("show", "study.toml").stdout
    assert max(len(line) for line in text.splitlines()) <= 80
    for words in ("dipolar scale", "net moment without a shape of the sample (ferromagnet)", "Mn1", "µeV"):
        assert words in " ".join(text.split()), words


def test_show_prints_every_moment_of_a_long_period(folder: Path) -> None:
    Path("study.toml").write_text(
        STUDY + '[[ordering]]\nname = "quarter"\nk = [0, 0, 0.25]\ncosine = { Mn1 = [0, 0, 2] }\n', encoding="utf-8"
    )
    quarter = document("show", "study.toml")["orderings"][3]
    assert quarter["atoms"][0]["along_muB"] == pytest.approx([2, 0, -2, 0], abs=1e-12)
    assert quarter["cells_are"] == "all cells of one magnetic period"


def test_show_a_structure_with_and_without_moments(folder: Path) -> None:
    plain = document("show", "cube.cif")
    assert plain["orderings"] == []
    assert plain["sites"][0]["label"] == "Mn1"
    moments = "loop_\n_atom_site_moment.label\n" + "".join(f"_atom_site_moment.crystalaxis_{x}\n" for x in "xyz")
    Path("cube.mcif").write_text(CUBE + moments + "Mn1 0 3 4\n", encoding="utf-8")
    magnetic = document("show", "cube.mcif")
    assert magnetic["orderings"][0]["atoms"][0]["sizes_muB"] == pytest.approx([5])
    assert "5.0000" in run("show", "cube.mcif").stdout
    rows = list(csv.DictReader(run("show", "cube.cif", "--csv", "-").stdout.splitlines()))
    assert list(rows[0].values()) == ["Mn1", "Mn", "1", "0.0", "0.0", "0.0"]
    rows = list(csv.DictReader(run("show", "cube.mcif", "--csv", "-").stdout.splitlines()))
    assert rows[0]["moment_a_muB"] == "0.0" and rows[0]["moment_size_muB"] == "5.0"


def test_show_a_broken_magnetic_file_is_refused(folder: Path) -> None:
    moments = "loop_\n_atom_site_moment.label\n" + "".join(f"_atom_site_moment.crystalaxis_{x}\n" for x in "xyz")
    Path("cube.mcif").write_text(CUBE + moments + "Mn2 0 3 4\n", encoding="utf-8")
    assert "Mn2" in refused("show", "cube.mcif")


def test_show_warns_of_short_distances_and_forgotten_ions(folder: Path) -> None:
    Path("cube.cif").write_text(CUBE + "Ni1 Ni 0.5 0.5 0.4\nO1 O 0.5 0.5 0.55\nO2 O 0.5 0.5 0.7\n", encoding="utf-8")
    warnings = " ".join(document("show", "study.toml")["warnings"])
    assert "O1 and O2 are only 0.600 Å apart" in warnings
    assert "Ni1 holds Ni, which often carries a moment, but no ordering gives it one." in warnings
    assert "muon A lies only 0.200 Å from O1." in warnings


CONTACT = """
[[probe]]
name = "coupled"
position = [0.5, 0, 0]
contact = [{ shell = 1, coupling_T_per_muB = 0.05 }, { within = 1.0, coupling_T_per_muB = 0.1 }]
"""


def test_show_says_which_ions_a_contact_term_couples_to(folder: Path) -> None:
    Path("study.toml").write_text(STUDY + CONTACT, encoding="utf-8")
    first, second = document("show", "study.toml")["probes"][2]["contact"]
    assert first["neighbours"] == [{"site": "Mn1", "distance_A": 2.0, "count": 2}]
    assert second["refused"] == "contact: no magnetic ion lies within 1 Å of the probe."
    text = " ".join(run("show", "study.toml").stdout.split())
    assert "- coupled: 0.05 T/µB for each ion of shell 1: 2 Mn1 at 2.000 Å" in text
    assert "contact: no magnetic ion lies within 1 Å of the probe." in text


# --- start ----------------------------------------------------------------------------------------------


def test_start_writes_a_study_that_runs(folder: Path) -> None:
    result = run("start", "cube.cif", "--moment", "Mn=2", "-o", "new.toml")
    assert (result.exit_code, result.stdout, result.stderr) == (0, "", "Wrote new.toml.\n")
    rows = document("rank", "new.toml")["rows"]
    assert rows[0]["energy_ueV_per_ion"] == pytest.approx(RODS * 4 / 64 * UEV, rel=1e-6)
    assert run("start", "cube.cif", "--moment", "Mn=2").stdout == Path("new.toml").read_text(encoding="utf-8")


def test_start_does_not_overwrite(folder: Path) -> None:
    assert refused("start", "cube.cif", "-o", "study.toml") == (
        "Error: 'study.toml' exists. Name another file, or use --force to write over it.\n"
    )
    assert Path("study.toml").read_text(encoding="utf-8") == STUDY
    assert run("start", "cube.cif", "-o", "study.toml", "--force").exit_code == 0
    assert Path("study.toml").read_text(encoding="utf-8") != STUDY


def test_start_document(folder: Path) -> None:
    doc = document("start", "cube.cif")
    assert doc["rows"] == [{"site": "Mn1", "element": "Mn", "moment_muB": 1.0, "known": False}]
    assert "[crystal]" in doc["study"]


# --- demag ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "factors"),
    [
        (["--sphere"], [1 / 3, 1 / 3, 1 / 3]),
        (["--plate"], [0, 0, 1]),
        (["--needle"], [0.5, 0.5, 0]),
        # Osborn (1945): prolate spheroid of aspect 2; Aharoni (1998): prism 1 × 2 × 3.
        (["--ellipsoid", "1", "1", "2"], [0.41324, 0.41324, 0.17352]),
        (["--prism", "1", "2", "3"], [0.5387903059, 0.2783917160, 0.1828179780]),
        # Joseph (1966): cylinder as high as wide.
        (["--cylinder", "1", "1"], [0.3442, 0.3442, 0.3116]),
    ],
)
def test_demag(arguments: list[str], factors: list[float]) -> None:
    doc = document("demag", *arguments)
    assert doc["schema"] == "latticedip/demag/1"
    assert [row["demagnetizing_factor"] for row in doc["rows"]] == pytest.approx(factors, abs=1e-4)
    assert doc["uniform"] is (arguments[0] not in ("--prism", "--cylinder"))
    text = run("demag", *arguments).stdout
    assert all(f"{row['demagnetizing_factor']:.10f}" in text for row in doc["rows"])
    assert ("averages over the volume" in text) is not doc["uniform"]


# --- wrong input ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["rank", "none.toml"], "Error: none.toml: cannot be read: No such file or directory.\n"),
        (["show", "none.cif"], "Error: none.cif: there is no such file.\n"),
        (
            ["rank", "cube.cif"],
            "Error: 'cube.cif' is a structure file, not a study. Write a study for it with: latticedip start cube.cif "
            "-o study.toml\n",
        ),
        (
            ["field", "my cube.cif"],
            "Error: 'my cube.cif' is a structure file, not a study. Write a study for it with: latticedip start "
            "'my cube.cif' -o study.toml\n",
        ),
        (["start", "study.toml"], "Error: 'study.toml' is a study already; start takes a structure file.\n"),
        (["demag", "--prism", "1", "-2", "3"], "Error: edges must be positive lengths, got -2.0 as number 2.\n"),
        (
            ["field", "study.toml", "--csv", "no/such/folder.csv"],
            "Error: cannot write 'no/such/folder.csv': No such file or directory.\n",
        ),
    ],
)
def test_wrong_input_is_one_message(folder: Path, arguments: list[str], message: str) -> None:
    assert refused(*arguments) == message


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["rnak"], f"no command 'rnak'. Commands are: {', '.join(COMMANDS)}. Did you mean 'rank'?"),
        (["rank"], "Missing argument 'STUDY'."),
        (["rank", "study.toml", "--tol", "1e-20"], "Invalid value for '--tol': 1e-20 is not between 1e-12 and 1e-2."),
        (["rank", "study.toml", "--tol", "fine"], "Invalid value for '--tol': 'fine' is not a number."),
        (["rank", "study.toml", "--json", "--csv", "-"], "--json and --csv - cannot both go to stdout: name a file"),
        (["demag"], "exactly one shape is needed"),
        (["demag", "--sphere", "--plate"], "got --sphere and --plate."),
        (["start", "cube.cif", "--moment", "Mn"], "'Mn' is not of the form LABEL=SIZE, such as Mn1=4.6."),
        (["start", "cube.cif", "--moment", "Mn=1", "--moment", "Mn=2"], "--moment gives 'Mn' twice."),
        (["show", "study.toml", "--block", "x"], "--block goes with a structure file"),
        (["field", "study.toml", "--unit", "Oe"], "'Oe' is not one of 'T', 'G'."),
    ],
)
def test_wrong_usage(folder: Path, arguments: list[str], message: str) -> None:
    assert message in " ".join(refused(*arguments).split())


def test_studies_without_orderings_or_probes(folder: Path) -> None:
    Path("study.toml").write_text('[crystal]\nfile = "cube.cif"\n', encoding="utf-8")
    assert "'study.toml' has no [[ordering]], so there is nothing to compare." in refused("rank", "study.toml")
    Path("study.toml").write_text(STUDY.split("[[probe]]")[0], encoding="utf-8")
    assert "'study.toml' has no [[probe]], so there is no place to ask for a field." in refused("field", "study.toml")
    assert run("rank", "study.toml").exit_code == 0
    assert run("show", "study.toml").exit_code == 0


# --- the frame of the program ---------------------------------------------------------------------------


def test_help_of_every_command_holds_an_example() -> None:
    for name in COMMANDS:
        result = run(name, "--help")
        assert result.exit_code == 0
        assert f"Example:\n    latticedip {name} " in result.stdout
        assert "--json" in result.stdout and "--csv" in result.stdout
    top = run("--help").stdout
    assert all(f"  {name} " in top for name in COMMANDS)
    assert "_LATTICEDIP_COMPLETE=bash_source" in top


def test_verbose_reports_on_stderr(folder: Path) -> None:
    result = run("--verbose", "rank", "study.toml")
    lead = "read study.toml: 1 sites, 3 orderings, 2 probes\nsymmetry: 48 operations of the structure without moments\n"
    assert result.stderr.startswith(lead)
    assert result.stderr.splitlines()[-1].startswith("done in ")
    assert run("rank", "study.toml").stderr == ""
    assert run("rank", "study.toml").stdout == result.stdout
    behind = run("rank", "study.toml", "-v", "--tol", "3.1e-9")
    assert behind.stderr.startswith(lead)
    # What was decided of the lattice sums is told once for a cell and a bound.
    assert "\nlattice sum over a cell of " in behind.stderr
    assert "\nsums at many k between 1 sites: splitting " in behind.stderr
    assert run("rank", "study.toml").stderr == ""


def test_version() -> None:
    assert run("--version").stdout == f"latticedip, version {latticedip.__version__}\n"


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="this system has no device that is always full")
def test_a_full_disk_is_one_message(folder: Path) -> None:
    with open("/dev/full", "w", encoding="utf-8") as full:
        result = subprocess.run(
            [sys.executable, "-m", "latticedip", "demag", "--sphere"],
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
            check=False,
            timeout=120,
        )
    assert (result.returncode, result.stderr) == (2, "Error: No space left on device.\n")


def test_interruption_ends_quietly(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupt(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("latticedip.study.tasks.open_study", interrupt)
    result = run("rank", "study.toml")
    assert (result.exit_code, result.stdout, result.stderr) == (130, "", "Interrupted.\n")


def started(*arguments: str, **options: Any) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, *arguments]
    return subprocess.run(command, capture_output=True, text=True, check=False, timeout=120, **options)


HEAVY = ("numpy", "numba", "scipy", "ase", "spglib", "gemmi", "matplotlib", "tomllib")


@pytest.mark.parametrize("arguments", [["--help"], ["--version"], ["rank", "--help"]])
def test_help_imports_nothing_heavy(arguments: list[str]) -> None:
    code = (
        "import sys\n"
        "from latticedip.cli.main import main\n"
        f"try:\n    main({arguments!r})\nexcept SystemExit:\n    pass\n"
        f"print(','.join(name for name in {HEAVY!r} if name in sys.modules), file=sys.stderr)\n"
    )
    result = started("-c", code)
    assert result.stdout
    assert result.stderr.strip() == ""


def test_module_and_completion(folder: Path) -> None:
    result = started("-m", "latticedip", "demag", "--sphere")
    assert result.returncode == 0
    assert "0.3333333333" in result.stdout
    asked = {"_LATTICEDIP_COMPLETE": "bash_complete", "COMP_WORDS": "latticedip ra", "COMP_CWORD": "1"}
    completed = started("-m", "latticedip", env={**os.environ, **asked})
    assert "rank" in completed.stdout


def test_a_terminal_without_greek() -> None:
    result = started("-m", "latticedip", "demag", "--sphere", env={**os.environ, "PYTHONIOENCODING": "ascii"})
    assert (result.returncode, result.stderr) == (0, "")
    assert "0.3333333333" in result.stdout


def test_a_reader_that_goes_away() -> None:
    reader, writer = os.pipe()
    os.close(reader)
    process = subprocess.Popen(
        [sys.executable, "-m", "latticedip", "demag", "--sphere"], stdout=writer, stderr=subprocess.PIPE, text=True
    )
    os.close(writer)
    _, errors = process.communicate(timeout=120)
    assert (process.returncode, errors) == (141, "")


def test_a_crowded_structure_is_shown_without_a_flood(folder: Path) -> None:
    atoms = "".join(f"O{i} O {0.3 + i % 9 * 0.05} {0.3 + i // 9 * 0.05} 0.3\n" for i in range(81))
    Path("cube.cif").write_text(CUBE + atoms, encoding="utf-8")
    warnings = document("show", "cube.cif")["warnings"]
    assert len(warnings) == 11
    assert warnings[-1].startswith("and ") and warnings[-1].endswith(" more pairs of atoms that are too close.")


@pytest.mark.parametrize(
    ("arguments", "option"),
    [
        (["spectrum", "study.toml", "--powder", "--time", "nan"], "--time"),
        (["spectrum", "study.toml", "--width", "inf"], "--width"),
        (["spectrum", "study.toml", "--applied", "0", "nan", "0"], "--applied"),
        (["spectrum", "study.toml", "--powder", "--time", "1", "--angle", "nan"], "--angle"),
        (["report", "study.toml", "-o", "x.html", "--time", "nan"], "--time"),
        (["shift", "study.toml", "--temperature", "nan"], "--temperature"),
        (["demag", "--ellipsoid", "1", "nan", "1"], "--ellipsoid"),
        (["batch", "study.toml", "x.cif", "-o", "out", "--timeout", "nan"], "--timeout"),
        (["batch", "study.toml", "x.cif", "-o", "out", "--memory", "inf"], "--memory"),
    ],
)
def test_a_number_without_end_is_refused(arguments, option):
    result = run(*arguments)
    assert result.exit_code == 2 and result.stdout == ""
    value = next(x for x in arguments if x in ("nan", "inf"))
    number = "nan" if value == "nan" else "inf"
    assert result.stderr.endswith(f"Error: Invalid value for '{option}': {number} is not a finite number.\n")
