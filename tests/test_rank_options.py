"""What ``latticedip rank`` gives beside the energies: bound, parts, equal candidates; and ``latticedip directions``."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

import pytest
from click.testing import Result

from latticedip.units import DIPOLE_EV_A3_PER_MUB2
from tests.commands import Command, box_cif, enter

CUBE = box_cif("Mn1 Mn 0 0 0\nO1 O 0.5 0.5 0.5\n", 4.4, name="rock_salt", group="F m -3 m")
STUDY = """title = "Rock salt"
[crystal]
file = "rock.cif"
[moments]
Mn = 5.0
[[ordering]]
name = "first"
k = ["1/2", "1/2", "1/2"]
along = [1, -1, 0]
other_energy_meV_per_ion = -30.0
[[ordering]]
name = "turned"
k = ["1/2", "1/2", "1/2"]
along = [1, 1, -2]
[[ordering]]
name = "other arm"
k = ["1/2", "1/2", "-1/2"]
along = [1, -1, 0]
other_energy_meV_per_ion = -29.9
[[ordering]]
name = "across"
k = ["1/2", "1/2", "1/2"]
along = [1, 1, 1]
other_energy_meV_per_ion = -31.0
"""
#: Luttinger and Tisza, Phys. Rev. 70, 954 (1946): type II of the fcc array, n = 4 per a³; a ferromagnet has −2π/3.
TYPE_TWO, FERRO = -1.8075736338, -2.0943951024
UNIT_UEV = 4 * DIPOLE_EV_A3_PER_MUB2 * 25 / 4.4**3 * 1e6
#: Every call names its command first.
CALLS = Command(env={"COLUMNS": "80"})


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"rock.cif": CUBE, "study.toml": STUDY})


def run(command: str, *arguments: str) -> Result:
    return CALLS.run(command, "study.toml", *arguments)


def document(command: str, *arguments: str) -> dict[str, Any]:
    return CALLS.document(command, "study.toml", *arguments)


def test_the_bound_is_there_by_itself() -> None:
    doc = document("rank")
    assert doc["bound"]["energy_ueV_per_ion"] == pytest.approx(FERRO * UNIT_UEV, rel=1e-9)
    assert doc["bound"]["k"] == [[0, 0, 0]]
    assert doc["bound_note"] is None
    expected = (TYPE_TWO - FERRO) * UNIT_UEV
    assert doc["rows"][0]["above_bound_ueV_per_ion"] == pytest.approx(expected, rel=1e-8)
    doc = document("rank", "--no-bound")
    assert (doc["bound"], doc["bound_note"]) == (None, "not asked for")
    assert doc["rows"][0]["above_bound_ueV_per_ion"] is None
    text = run("rank", "--no-bound").stdout
    assert "  bound  " not in text
    assert "lies below the bound" not in text


def test_many_sites_are_left_to_the_user() -> None:
    extra = "".join(f"Mn{i} Mn 0.{i} 0.1{i} 0.0{i}\n" for i in range(2, 9))
    text = CUBE.replace("'F m -3 m'", "'P -1'").replace("O1 O 0.5 0.5 0.5\n", extra + "Mn9 Mn 0.35 0.4 0.8\n")
    Path("rock.cif").write_text(text, encoding="utf-8")
    lone = '[[ordering]]\nname = "up"\nk = [0, 0, 0]\nalong = [0, 0, 1]\n'
    Path("study.toml").write_text(STUDY.split("[[ordering]]")[0] + lone, encoding="utf-8")
    note = (
        "how far the orderings stand above the lowest possible dipolar energy was not worked out for 17 magnetic sites "
        "(more than 16); ask for it with --bound"
    )
    doc = document("rank")
    assert (doc["bound"], doc["bound_note"]) == (None, note)
    assert note in " ".join(run("rank").stdout.split())


def test_a_bound_needs_sizes() -> None:
    wave = '[[ordering]]\nname = "wave"\nk = [0.2, 0, 0]\ncosine = { Mn1 = [0, 0, 5] }\n'
    Path("study.toml").write_text('[crystal]\nfile = "rock.cif"\n' + wave, encoding="utf-8")
    doc = document("rank")
    assert doc["bound_note"] == "no bound: [moments] states no sizes"
    result = run("rank", "--bound")
    assert result.exit_code == 2
    assert result.stderr == (
        "Error: 'study.toml' states no moment sizes, which the search for orderings starts from. "
        "Add them, for example: [moments] Mn = 4.6\n"
    )
    Path("study.toml").write_text('[crystal]\nfile = "rock.cif"\n[moments]\nMn = 5\n' + wave, encoding="utf-8")
    doc = document("rank")
    assert doc["rows"][0]["bound_ueV_per_ion"] == pytest.approx(0.5 * FERRO * UNIT_UEV, rel=1e-9)
    assert "the mean square moments of wave are not those of [moments]" in " ".join(doc["bound"]["notes"])


def test_equal_candidates_are_named() -> None:
    rows = {row["ordering"]: row for row in document("rank")["rows"]}
    assert rows["first"]["same_as"] is None
    assert rows["turned"]["same_as"]["kind"] == "family"
    assert rows["other arm"]["same_as"]["ordering"] == "first"
    assert rows["other arm"]["same_as"]["domain"] == "k-domain"
    assert rows["first"]["free_turns"]["kind"] == "axis"
    assert rows["across"]["free_turns"]["kind"] == "none"
    text = " ".join(run("rank").stdout.split())
    assert "- other arm: the same ordering as first up to symmetry: k-domain, another arm of the star (by " in text
    assert "- turned: the same pattern as first, turned by 90° about [1 1 1] within a continuous family" in text
    assert "- first: continuously degenerate: all moments may be turned about [1 1 1] (Cartesian)" in text


def test_other_energies_stand_beside() -> None:
    doc = document("rank")
    rows = {row["ordering"]: row for row in doc["rows"]}
    # The ranking itself leaves them out.
    assert [row["ordering"] for row in doc["rows"]] == ["first", "turned", "other arm", "across"]
    assert rows["first"]["energy_ueV_per_ion"] == pytest.approx(TYPE_TWO * UNIT_UEV, rel=1e-8)
    assert rows["across"]["rank_by_sum"] == 1
    assert rows["first"]["rank_by_sum"] == 2
    assert rows["other arm"]["rank_by_sum"] == 3
    assert rows["turned"]["rank_by_sum"] is None
    assert rows["turned"]["sum_with_other_ueV_per_ion"] is None
    assert rows["across"]["sum_with_other_ueV_per_ion"] == pytest.approx(-31000 - 2 * TYPE_TWO * UNIT_UEV, rel=1e-9)
    assert rows["other arm"]["sum_above_lowest_ueV_per_ion"] == pytest.approx(1100 + 3 * TYPE_TWO * UNIT_UEV, rel=1e-6)
    text = run("rank").stdout
    assert "With the energies from elsewhere" in text
    assert "the study states no other energy for turned: not among the sums" in " ".join(text.split())
    assert "energies from elsewhere are taken as the same for every" in " ".join(run("rank", "--rotate").stdout.split())
    assert run("rank", "--csv", "rows.csv").exit_code == 0
    table = {row["ordering"]: row for row in csv.DictReader(Path("rows.csv").read_text(encoding="utf-8").splitlines())}
    assert table["across"]["rank_by_sum"] == "1"
    assert table["turned"]["other_energy_meV_per_ion"] == ""
    assert table["other arm"]["same_as"] == "first: k-domain"
    assert table["first"]["free_turns"] == "axis"


def test_without_other_energies_nothing_is_said() -> None:
    lines = [line for line in STUDY.splitlines() if not line.startswith("other")]
    Path("study.toml").write_text("\n".join(lines), encoding="utf-8")
    assert "elsewhere" not in run("rank").stdout
    assert "rank_by_sum" not in document("rank")["rows"][0]


def test_parts() -> None:
    doc = document("rank", "--parts", "--shells", "3", "--ordering", "first")
    (row,) = doc["rows"]
    parts = row["parts"]
    assert sum(pair["dipolar_ueV_per_ion"] for pair in parts["pairs"]) == pytest.approx(row["dipolar_ueV_per_ion"])
    assert len(parts["shells"]) == 4
    assert parts["shells"][-1]["sum_ueV_per_ion"] == pytest.approx(row["dipolar_ueV_per_ion"], rel=1e-12)
    assert [shell["neighbours_per_ion"] for shell in parts["shells"][:3]] == [12, 6, 24]
    assert document("rank")["rows"][0]["parts"] is None
    text = run("rank", "--parts", "--shells", "3").stdout
    assert "first: what the energy is made of\n" in text
    assert "  beyond  " in text
    assert max(len(line) for line in text.splitlines()) <= 80


def test_anisotropy_field_of_a_turned_pattern() -> None:
    rows = document("rank", "--rotate", "--ordering", "first")["rows"]
    expected = 2 * -3 * TYPE_TWO * UNIT_UEV * 1e-6 / (5 * 5.7883818060e-5)
    assert rows[0]["anisotropy_field_T"] == pytest.approx(expected, rel=1e-7)


def test_directions() -> None:
    doc = document("directions", "--steps", "4", "--ordering", "across")
    (entry,) = doc["orderings"]
    assert doc["schema"] == "latticedip/directions/1"
    assert [axis["axis"] for axis in entry["axes"]] == ["easy", "middle", "hard"]
    assert entry["axes"][2]["direction_abc"] == pytest.approx([3**-0.5] * 3)
    assert entry["axes"][0]["energy_without_field_ueV_per_ion"] == pytest.approx(TYPE_TWO * UNIT_UEV, rel=1e-8)
    hard = [row for row in entry["rows"] if (row["from"], row["towards"]) == ("easy", "hard")]
    assert [row["angle_deg"] for row in hard] == [0, 45, 90, 135, 180]
    assert hard[2]["above_lowest_ueV_per_ion"] == pytest.approx(-3 * TYPE_TWO * UNIT_UEV, rel=1e-8)
    assert hard[1]["above_lowest_ueV_per_ion"] == pytest.approx(-1.5 * TYPE_TWO * UNIT_UEV, rel=1e-8)
    result = run("directions", "--csv", "rows.csv")
    assert result.exit_code == 0
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    rows = list(csv.DictReader(Path("rows.csv").read_text(encoding="utf-8").splitlines()))
    assert len(rows) == 4 * 3 * 19
    assert {"direction_cart_x", "direction_a", "energy_ueV_per_ion", "boundary"} <= set(rows[0])


def test_directions_plot() -> None:
    pytest.importorskip("matplotlib")
    result = run("directions", "--plot", "directions.svg", "--steps", "6")
    assert (result.exit_code, result.stderr) == (0, "Wrote directions.svg.\n")
    assert Path("directions.svg").stat().st_size > 1000


def test_directions_need_a_collinear_pattern() -> None:
    helix = '[[ordering]]\nname = "helix"\nk = [0, 0, 0.2]\ncosine = { Mn1 = [5, 0, 0] }\nsine = { Mn1 = [0, 5, 0] }\n'
    Path("study.toml").write_text(STUDY + helix, encoding="utf-8")
    assert document("directions")["notes"] == [
        "not collinear, so left out: helix; `rank --rotate` turns them as a whole"
    ]
    result = run("directions", "--ordering", "helix")
    assert result.exit_code == 2
    assert result.stderr == (
        "Error: no ordering here is collinear (helix), so that none has one direction to turn. "
        "`latticedip rank --rotate` turns patterns of any kind.\n"
    )
