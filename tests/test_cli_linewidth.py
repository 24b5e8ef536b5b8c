"""``latticedip linewidth`` from end to end: widths against sums of pairs worked out here."""

from __future__ import annotations

import csv
import dataclasses
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy import constants

from latticedip import Displaced, Probe, linewidth, read_study
from latticedip.study import tasks
from tests.commands import Command, box_cif, enter

CELL_A = 3.0
CUBE = box_cif("H1 H 0 0 0\n", CELL_A)
STUDY = """title = "Protons"
[crystal]
file = "cube.cif"
[[probe]]
name = "muon"
position = [0.5, 0.5, 0.5]
[[probe]]
name = "proton"
particle = "1H"
site = "H1"
"""
#: No isotope but the proton, so that one sum gives everything.
PURE = "[abundances]\n1H = 1.0\n"
command = Command(("linewidth", "study.toml"))
run, document = command.run, command.document


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"cube.cif": CUBE})


def write(*parts: str) -> None:
    Path("study.toml").write_text(STUDY + "".join(parts), encoding="utf-8")


def pair_sums(offset: float, direction: tuple[float, float, float] | None) -> float:
    """Σ r⁻⁶ (1 − 3 cos²θ)² over a simple cubic lattice, or its powder average, in 1/Å⁶."""
    steps = np.arange(-25, 26)
    grid = np.stack(np.meshgrid(steps, steps, steps, indexing="ij"), axis=-1).reshape(-1, 3)
    x = CELL_A * (offset - grid)
    r = np.linalg.norm(x, axis=1)
    x, r = x[r > 0.1], r[r > 0.1]
    if direction is None:
        return float(4 / 5 * (r**-6.0).sum())
    cosine = x @ np.array(direction) / np.linalg.norm(direction) / r
    return float(((1 - 3 * cosine**2) ** 2 * r**-6.0).sum())


#: Van Vleck 1948 for spin 1/2: (1/3) I(I+1) = 1/4 for unlike spins, 9/4 times that for like ones.
FIELD_T_A3 = 1e-7 * constants.value("proton mag. mom.") / 0.5 * 1e30


@pytest.mark.parametrize(("option", "direction"), [(None, None), ("c", (0, 0, 1)), ("1,1,1", (1, 1, 1))])
def test_second_moments(option: str | None, direction: tuple[float, float, float] | None) -> None:
    write(PURE)
    doc = document(*([] if option is None else ["--direction", option]))
    assert doc["schema"] == "latticedip/linewidth/1"
    muon, proton = doc["rows"]
    unlike = FIELD_T_A3**2 / 4 * pair_sums(0.5, direction)
    like = 9 / 4 * FIELD_T_A3**2 / 4 * pair_sums(0.0, direction)
    # The sums here end at 75 Å, which costs a few parts in a hundred thousand.
    assert muon["second_moment_T2"] == pytest.approx(unlike, rel=3e-4)
    assert proton["second_moment_T2"] == pytest.approx(like, rel=3e-4)
    gamma = 2 * np.pi * muon["MHz_per_T"]
    assert muon["transverse_width_per_us"] == pytest.approx(gamma * unlike**0.5, rel=3e-4)
    assert muon["root_second_moment_mT"] == pytest.approx(1e3 * unlike**0.5, rel=3e-4)
    assert proton["root_second_moment_kHz"] == pytest.approx(42577.478 * like**0.5, rel=3e-4)
    # In zero field ⟨B²⟩ is 6/4 Σ r⁻⁶ (µ0/4π)² (µ/I)², in every direction alike at the centre of a cube.
    delta = FIELD_T_A3 * (0.5 * pair_sums(0.5, None) * 5 / 4) ** 0.5
    assert muon["zero_field_width_mT"] == pytest.approx(1e3 * delta, rel=3e-4)
    assert muon["zero_field_width_per_us"] == pytest.approx(gamma * delta, rel=3e-4)
    assert proton["zero_field_width_per_us"] is None
    assert [part["isotope"] for part in proton["contributions"]] == ["1H"]
    assert proton["contributions"][0]["like"] is True
    assert muon["contributions"][0]["share"] == pytest.approx(1)


def test_abundances_of_the_study_count() -> None:
    write(PURE)
    pure = document()["rows"][0]["second_moment_T2"]
    write("[abundances]\n1H = 0.25\n")
    doc = document()
    assert doc["rows"][0]["second_moment_T2"] == pytest.approx(pure / 4)
    assert doc["abundances"] == {"1H": 0.25}
    assert "abundances: 1H 0.25 as stated, the others natural" in doc["notes"]
    write()
    parts = document()["rows"][0]["contributions"]
    assert {part["isotope"] for part in parts} == {"1H", "2H"}
    assert "abundances: natural" in document()["notes"]


def test_named_nuclei_only() -> None:
    write()
    (part,) = document("--nucleus", "2H")["rows"][0]["contributions"]
    assert part["isotope"] == "2H"
    assert "nuclei: the crystal holds no '19F'" in run("--nucleus", "19F").stderr


def test_displaced_neighbours_count() -> None:
    write(PURE)
    study = read_study("study.toml")
    free = tasks.linewidth(study)["rows"][0]["second_moment_T2"]
    pushed = Probe([0.5, 0.5, 0.5], name="muon", displaced=Displaced(shell=1, factor=1.1))
    doc = tasks.linewidth(dataclasses.replace(study, probes=(pushed,)))
    r = CELL_A * 0.75**0.5
    change = 4 / 5 * FIELD_T_A3**2 / 4 * 8 * r**-6 * (1.1**-6 - 1)
    assert doc["rows"][0]["second_moment_T2"] == pytest.approx(free + change, rel=1e-6)
    assert "muon: displaced: atoms of shell 1: distance times 1.1" in doc["notes"]


@pytest.mark.parametrize(
    ("key", "spread", "words"),
    [
        ("spread_A = 0.7", 0.7, "0.7 Å rms along each axis"),
        ("covariance_A2 = [[0.01, 0, 0], [0, 0.02, 0], [0, 0, 0.05]]", np.diag([0.01, 0.02, 0.05]),
         "0.1, 0.1414, 0.2236 Å rms along its principal axes"),
    ],
)  # fmt: skip
def test_a_spread_of_the_probe_counts(key: str, spread: Any, words: str) -> None:
    text = STUDY.replace("position = [0.5, 0.5, 0.5]\n", f"position = [0.5, 0.45, 0.3]\n{key}\n")
    Path("study.toml").write_text(text + PURE, encoding="utf-8")
    doc = document("--direction", "c", "--probe", "muon")
    crystal = read_study("study.toml").crystal
    options = {"particle": "muon", "direction": [0, 0, 1], "abundances": {"1H": 1.0}}
    expected = linewidth(crystal, [0.5, 0.45, 0.3], spread=spread, **options)
    assert doc["rows"][0]["second_moment_T2"] == pytest.approx(expected.second_moment_T2, rel=1e-12)
    sharp = linewidth(crystal, [0.5, 0.45, 0.3], **options)
    assert abs(expected.second_moment_T2 / sharp.second_moment_T2 - 1) > 1e-3
    assert (
        f"muon: pair fields averaged over a Gaussian spread of {words}: motion that is fast against the linewidth; a "
        "slow one gives a distribution of widths instead"
    ) in doc["notes"]
    assert any("motion but for a spread that a probe states" in note for note in doc["notes"])


def test_on_screen_and_csv() -> None:
    write()
    result = run("--direction", "1 1 0")
    assert (result.exit_code, result.stderr) == (0, "")
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    for words in ("along [1 1 0] (along a b c)", "1/µs", "mT²", "like", "What each isotope adds", "Left out:"):
        assert words in result.stdout, words
    assert "powder average" in run().stdout
    rows = list(csv.DictReader(run("--csv", "-").stdout.splitlines()))
    assert [row["nucleus"] for row in rows] == ["all", "1H", "2H"] * 2
    assert float(rows[0]["transverse_width_per_us"]) > 0


def test_wrong_input() -> None:
    write()
    result = run("--direction", "x")
    assert (result.exit_code, result.stdout) == (2, "")
    assert result.stderr.startswith("Error: --direction: got 'x', expected a crystal direction: a, b, c,")
    write("[abundances]\n1H = 0.9\n2H = 0.3\n")
    assert run().stderr == "Error: study.toml: `abundances`: abundances of 1H, 2H add up to 1.2, more than 1.\n"
    Path("study.toml").write_text(STUDY.split("[[probe]]")[0], encoding="utf-8")
    assert "'study.toml' has no [[probe]], so there is no place to ask for a linewidth." in run().stderr


def test_like_spins_by_site(folder: Path) -> None:
    text = CUBE.replace("H1 H 0 0 0\n", "H1 H 0 0 0\nH2 H 0.5 0.5 0.2\nH3 H 0.5 0.5 0.8\n")
    Path("cube.cif").write_text(text, encoding="utf-8")
    write(PURE)
    both = document("--probe", "proton")
    apart = document("--probe", "proton", "--like", "site")
    assert both["inputs"]["options"]["like"] == "isotope" and apart["inputs"]["options"]["like"] == "site"
    assert [part["like"] for part in both["rows"][0]["contributions"]] == [True]
    assert [part["like"] for part in apart["rows"][0]["contributions"]] == [True, False]
    assert apart["rows"][0]["second_moment_T2"] < both["rows"][0]["second_moment_T2"]
    assert any("on sites equivalent to its own; on others it is unlike" in words for words in apart["conventions"])
    assert any("occupancy times the abundance" in words for words in apart["conventions"])
