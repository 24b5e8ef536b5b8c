"""Slips that `show` warns of, and files that no command writes over."""

from __future__ import annotations

from pathlib import Path

import pytest

from latticedip.study.schema import read_study
from latticedip.study.warnings import crystal_warnings, study_warnings
from tests.commands import Command, box_cif, enter

CRYSTAL = box_cif("Mn1 Mn 0.25 0 0\nCo1 Co 0 0 0.5\nO1 O 0.5 0.45 0.5\n", 6, 7, 8, name="pair", group="P -1")
#: Co carries no moment in this file.
MANGANESE_ONLY = """8
Lattice="6 0 0 0 7 0 0 0 8" Properties=species:S:1:pos:R:3:initial_magmoms:R:3 pbc="T T T"
Mn 1.5 0 0 0 0 3
Mn 4.5 0 0 0 0 3
Co 0 0 4 0 0 0
O 3 3.15 4 0 0 0
O 3 3.85 4 0 0 0
"""
STUDY = """[crystal]
file = "pair.cif"
[moments]
Mn = 3.0
Co = 46.0
[[ordering]]
name = "both"
k = [0, 0, 0]
along = [0, 0, 1]
[[probe]]
name = "muon A"
position = [0, 0.1, 0.45]
contact = [{ shell = 1, coupling_T_per_muB = 0.03 }]
[[probe]]
name = "muon B"
position = [0, 0, 0.5]
[[probe]]
name = "muon C"
position = [0.25, 0.08, 0]
[[probe]]
name = "nucleus"
particle = "55Mn"
site = "O1"
"""
command_line = Command()


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"pair.cif": CRYSTAL, "study.toml": STUDY})


def test_a_study_with_slips(folder: Path) -> None:
    study = read_study("study.toml")
    assert study_warnings(study, {"Mn1": 3.0, "Co1": 46.0}) == [
        "O1 (atom 1) and O1 (atom 2) are only 0.700 Å apart: check the cell and the positions.",
        "Co1 has a moment of 46 µB, more than any ion: check it.",
        "net moment without a shape of the sample (both): N = 0 is assumed. State [sample] where the sample has a "
        "shape of its own.",
        "muon B sits on an atom of Co1, whose own moment is left out of the field there.",
        "muon C lies only 0.560 Å from Mn1.",
        "nucleus: 55Mn is no isotope of O, the element of O1.",
    ]


def test_a_contact_term_that_means_other_ions_in_another_ordering(folder: Path) -> None:
    Path("manganese.extxyz").write_text(MANGANESE_ONLY.replace("8\n", "5\n", 1), encoding="utf-8")
    extra = '[[ordering]]\nname = "manganese"\nfile = "manganese.extxyz"\n'
    Path("study.toml").write_text(STUDY.replace("[[probe]]", extra + "[[probe]]", 1), encoding="utf-8")
    found = [words for words in study_warnings(read_study("study.toml"), {}) if "contact" in words]
    assert found == [
        "muon A: the contact term of shell 1 couples to different ions: 1 Co at 0.81 Å under both; "
        "2 Mn at 3.96 Å under manganese."
    ]


def test_crystal_warnings_are_those_of_show(folder: Path) -> None:
    shown = command_line.run("show", "pair.cif").stdout
    for words in crystal_warnings(read_study("study.toml").crystal):
        assert words in " ".join(shown.split())


@pytest.mark.parametrize(("name", "role"), [("study.toml", "study"), ("pair.cif", "crystal"), ("link", "study")])
@pytest.mark.parametrize("command", ["rank", "field", "show"])
def test_no_csv_over_a_file_that_was_read(folder: Path, command: str, name: str, role: str) -> None:
    Path("link").symlink_to("study.toml")
    before = Path(name).read_bytes()
    message = command_line.refused(command, "study.toml", "--csv", name)
    assert message == f"Error: '{name}' is read here (as the {role}). Write to another file.\n"
    assert Path(name).read_bytes() == before


def test_start_does_not_write_over_its_structure(folder: Path) -> None:
    message = command_line.refused("start", "pair.cif", "-o", "pair.cif", "--force")
    assert message == "Error: 'pair.cif' is read here (as the structure). Write to another file.\n"
    assert Path("pair.cif").read_text(encoding="utf-8") == CRYSTAL


#: Rock salt in its primitive cell and in its conventional one.
PRIMITIVE = """2
Lattice="0 2.2 2.2 2.2 0 2.2 2.2 2.2 0" Properties=species:S:1:pos:R:3 pbc="T T T"
Mn 0 0 0
O 2.2 2.2 2.2
"""
CONVENTIONAL = """8
Lattice="4.4 0 0 0 4.4 0 0 0 4.4" Properties=species:S:1:pos:R:3 pbc="T T T"
Mn 0 0 0
Mn 0 2.2 2.2
Mn 2.2 0 2.2
Mn 2.2 2.2 0
O 2.2 2.2 2.2
O 2.2 0 0
O 0 2.2 0
O 0 0 2.2
"""
LAYERS = """[crystal]
file = "salt.xyz"
[moments]
Mn = 2.0
[[ordering]]
name = "layers"
k = ["1/2", "1/2", "1/2"]
along = [0, 0, 1]
"""


@pytest.mark.parametrize(
    ("crystal", "study", "warnings"),
    [
        (
            PRIMITIVE,
            LAYERS,
            [
                "the cell is primitive, the conventional one holds 4 of it: k counts in the reciprocal vectors of this "
                "cell, not of the conventional one (layers)."
            ],
        ),
        (
            CONVENTIONAL,
            LAYERS,
            [
                "the cell holds 4 primitive cells: k counts in the reciprocal vectors of this cell, not of a primitive "
                "one (layers)."
            ],
        ),
        # At k = 0 every cell gives the same.
        (PRIMITIVE, LAYERS.replace('["1/2", "1/2", "1/2"]', "[0, 0, 0]") + "[sample]\nsphere = true\n", []),
    ],
)
def test_k_that_could_be_meant_in_another_cell(folder: Path, crystal: str, study: str, warnings: list[str]) -> None:
    (folder / "salt.xyz").write_text(crystal, encoding="utf-8")
    (folder / "study.toml").write_text(study, encoding="utf-8")
    assert study_warnings(read_study("study.toml"), {"Mn1": 2.0}) == warnings
