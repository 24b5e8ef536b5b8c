"""``latticedip propose`` from end to end: what it finds, what it writes, and what it refuses."""

from __future__ import annotations

import csv
import json
import tomllib
from pathlib import Path

import numpy as np
import pytest

from latticedip import Crystal, dipolar_energy, propose, read_ordering, read_study
from latticedip.study.written import toml_value
from latticedip.units import DIPOLE_EV_A3_PER_MUB2
from tests.commands import Command, box_cif, enter

CELL_A = 4.0
CUBE = box_cif("Mn1 Mn 0 0 0\nO1 O 0.5 0.5 0.5\n", CELL_A)
STUDY = """title = "A \\"cube\\""
[crystal]
file = "cube.cif"
[moments]
Mn = 2.0
[[probe]]
name = "muon"
position = [0.5, 0.5, 0.1]
contact = [{ shell = 1, coupling_T_per_muB = 0.02 }]
[sample]
ellipsoid = [1.0, 1.0, 0.3]
axes = ["a", "b"]
"""
#: Luttinger and Tisza, Phys. Rev. 70, 954 (1946).
RODS = -2.6767886844
UNIT_UEV = DIPOLE_EV_A3_PER_MUB2 * 4 / CELL_A**3 * 1e6
command = Command(("propose", "study.toml"), env={"COLUMNS": "80"})
run, document = command.run, command.document


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"cube.cif": CUBE, "study.toml": STUDY})


def test_it_finds_the_rods() -> None:
    doc = document("--supercell", "2", "2", "1", "--keep", "4")
    first = doc["rows"][0]
    assert doc["schema"] == "latticedip/propose/1"
    assert doc["inputs"]["options"]["supercell"] == [2, 2, 1]
    assert len(doc["rows"]) == 4
    assert first["energy_ueV_per_ion"] == pytest.approx(RODS * UNIT_UEV, rel=1e-9)
    assert first["k"] == [[0.5, 0.5, 0.0]]
    assert first["above_bound_ueV_per_ion"] == pytest.approx(0.0, abs=1e-6)
    assert first["net_moment_muB_per_ion"] == 0.0
    assert first["found_by"][0] == "exhaustive"
    assert first["bns_number"] == "127.397"
    assert first["moments"]["direction_abc"] in ([0, 0, 1], [0, 0, -1])
    assert doc["bound"]["energy_ueV_per_ion"] == pytest.approx(RODS * UNIT_UEV, rel=1e-9)


def test_on_screen() -> None:
    result = run("--supercell", "2", "2", "1")
    assert result.exit_code == 0
    assert result.stderr == ""
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    assert "2 × 2 × 1 cells; ± patterns each on its own best axis" in result.stdout
    assert "every sign pattern of 4 moments was tried (2^3)" in result.stdout
    head = [line.split() for line in result.stdout.splitlines() if line.startswith("candidate")]
    assert head == [["candidate", "energy", "lowest", "bound", "moment", "copies", "BNS", "found", "by"]]


def test_options_go_before_the_study() -> None:
    table = '[propose]\nk = [[0.5, 0.5, 0], [0, 0, "1/2"]]\nalong = [0, 0, 1]\nkeep = 7\nnet_zero = true\n'
    Path("study.toml").write_text(STUDY + table, encoding="utf-8")
    options = document()["inputs"]["options"]
    assert (options["k"], options["keep"], options["net_zero"]) == ([[0.5, 0.5, 0], [0, 0, 0.5]], 7, True)
    assert options["along"] == [0, 0, 1]
    options = document("--supercell", "2", "1", "1", "--along", "a", "--keep", "2")["inputs"]["options"]
    assert (options["k"], options["supercell"], options["along"], options["keep"]) == (None, [2, 1, 1], [1, 0, 0], 2)
    options = document("--k", "1/2 0 0", "--k", "0,0,0.5")["inputs"]["options"]
    assert options["k"] == [[0.5, 0, 0], [0, 0, 0.5]]


def test_fixed_signs_and_axes_go_by_atom() -> None:
    # Two atoms, listed against their order by position: entries count in the order of `show`.
    text = CUBE.replace("Mn1 Mn 0 0 0", "Mn1 Mn 0.5 0 0\nMn2 Mn 0 0 0.2")
    Path("cube.cif").write_text(text, encoding="utf-8")
    table = "[propose]\nfixed = { Mn = '+-' }\naxes = { Mn = [[0, 0, 2], [1, 1, 0]] }\n"
    Path("study.toml").write_text(STUDY + table, encoding="utf-8")
    doc = document()
    atoms = {atom["label"]: atom["moments_abc_muB"][0] for atom in doc["rows"][0]["moments"]["atoms"]}
    np.testing.assert_allclose(atoms["Mn2"], [0, 0, 2], atol=1e-12)
    np.testing.assert_allclose(atoms["Mn1"], [-(2**0.5), -(2**0.5), 0], atol=1e-12)


def test_a_written_study_gives_the_same_energies() -> None:
    Path("deeper").mkdir()
    result = run("--supercell", "2", "2", "2", "--keep", "8", "--write-study", "deeper/found.toml", "--json")
    assert result.exit_code == 0
    doc = json.loads(result.stdout)
    written = [Path(name).as_posix() for name in doc["written"]]
    assert written[0] == "deeper/found.toml"
    assert result.stderr == "".join(f"Wrote {name}.\n" for name in doc["written"])
    # An ordering with several k has a file of its own.
    several = sum(len(row["k"]) > 1 for row in doc["rows"])
    assert several > 0 and len(written) == 1 + several
    study = read_study("deeper/found.toml")
    assert study.title == 'A "cube": candidates'
    assert study.moments == {"Mn": 2.0}
    assert [probe.name for probe in study.probes] == ["muon"]
    assert len(study.probes[0].contact) == 1
    assert study.sample.shape == read_study("study.toml").sample.shape
    assert [ordering.name for ordering in study.orderings] == [row["ordering"] for row in doc["rows"]]
    for ordering, row in zip(study.orderings, doc["rows"], strict=True):
        energy = dipolar_energy(ordering, sample=study.sample)
        assert energy.per_ion_eV * 1e6 == pytest.approx(row["energy_ueV_per_ion"], rel=1e-9, abs=1e-9)


def test_free_moments_are_written_as_amplitudes() -> None:
    table = '[propose]\nmoments = "heisenberg"\nsupercell = [2, 1, 1]\nkeep = 3\nrestarts = 4\n'
    Path("cube.cif").write_text(CUBE.replace("Mn1 Mn 0 0 0", "Mn1 Mn 0.1 0.2 0\nMn2 Mn 0.3 0 0.7"), encoding="utf-8")
    Path("study.toml").write_text(STUDY + table, encoding="utf-8")
    assert run("--write-study", "found.toml").exit_code == 0
    rows = document()["rows"]
    study = read_study("found.toml")
    for ordering, row in zip(study.orderings, rows, strict=True):
        energy = dipolar_energy(ordering, sample=study.sample)
        assert energy.per_ion_eV * 1e6 == pytest.approx(row["energy_ueV_per_ion"], rel=1e-9)
    # What the search was asked for stays in the study.
    assert tomllib.loads(Path("found.toml").read_text(encoding="utf-8"))["propose"]["restarts"] == 4


def test_a_folder_of_files() -> None:
    result = run("--supercell", "1", "1", "2", "--keep", "2", "--write-folder", "found")
    assert result.exit_code == 0
    files = sorted(Path("found").iterdir())
    assert [file.name for file in files] == ["01-collinear.mcif", "02-collinear.mcif"]
    crystal = read_study("study.toml").crystal
    assert isinstance(crystal, Crystal)
    found = propose(crystal, {"Mn": 2.0}, supercell=(1, 1, 2), keep=2, sample=read_study("study.toml").sample)
    for file, row in zip(files, found.rows, strict=True):
        read = read_ordering(file)
        assert read.parent is not None
        energy = dipolar_energy(read, sample=read_study("study.toml").sample)
        assert energy.per_ion_eV == pytest.approx(row.energy.per_ion_eV, rel=1e-9)
    again = run("--supercell", "1", "1", "2", "--keep", "2", "--write-folder", "found")
    assert again.exit_code == 2
    assert again.stderr == (
        f"Error: {str(Path('found') / '01-collinear.mcif')!r} exists. "
        "Name another folder, or use --force to write over it.\n"
    )
    assert run("--supercell", "1", "1", "2", "--keep", "2", "--write-folder", "found", "--force").exit_code == 0


def test_csv() -> None:
    assert run("--supercell", "2", "2", "1", "--csv", "found.csv").exit_code == 0
    rows = list(csv.DictReader(Path("found.csv").read_text(encoding="utf-8").splitlines()))
    assert float(rows[0]["energy_ueV_per_ion"]) == pytest.approx(RODS * UNIT_UEV, rel=1e-9)
    assert rows[0]["bns_number"] == "127.397"
    assert rows[0]["found_by"].startswith("exhaustive")


@pytest.mark.parametrize(
    ("study", "arguments", "message"),
    [
        (
            STUDY.replace("[moments]\nMn = 2.0\n", ""),
            [],
            "Error: 'study.toml' states no moment sizes, which the search for orderings starts from. Add them, for "
            "example: [moments] Mn = 4.6\n",
        ),
        (STUDY, ["--supercell", "2", "1", "1", "--k", "0 0 1/2"], "give either --supercell or --k, not both.\n"),
        (
            STUDY,
            ["--k", "0 0"],
            "Error: Invalid value for '--k': '0 0' is not three numbers or fractions, such as \"0 0 1/2\".\n",
        ),
        (STUDY, ["--k", "0 0 1/0"], "'0 0 1/0' is not three numbers or fractions, such as \"0 0 1/2\".\n"),
        (
            STUDY,
            ["--along", "d"],
            "Error: --along: got 'd', expected a crystal direction: a, b, c, a*, b*, c*, or three components along the "
            'axes a, b, c, such as "1 1 0".\n',
        ),
        (
            STUDY,
            ["--net-zero", "--along", "c"],
            "Error: no arrangement of these moments has zero net moment here. Take a larger supercell, such as "
            "supercell=(2, 2, 2), or other constraints.\n",
        ),
        (
            STUDY,
            ["--supercell", "0", "1", "1"],
            "Error: Invalid value for '--supercell': 0 is not in the range x>=1.\n",
        ),
        (
            STUDY,
            ["--write-study", "study.toml"],
            "Error: 'study.toml' exists. Name another file, or use --force to write over it.\n",
        ),
        (
            STUDY,
            ["--moments", "heisenberg", "--along", "c"],
            'Error: moments="heisenberg" may point anywhere; leave out along and axes.\n',
        ),
    ],
)
def test_refusals(study: str, arguments: list[str], message: str) -> None:
    Path("study.toml").write_text(study, encoding="utf-8")
    assert command.refused(*arguments).endswith(message)


def test_values_are_written_as_toml() -> None:
    value = {"a b": ['x"\\', 1, 2.5, True], "c": {"d": "\x7f"}}
    assert tomllib.loads(f"v = {toml_value(value)}")["v"] == value
