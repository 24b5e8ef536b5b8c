"""``latticedip modes`` from end to end, on the cubic arrays of Luttinger and Tisza (1946)."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest

from latticedip.units import DIPOLE_EV_A3_PER_MUB2, K_PER_EV
from tests.commands import Command, box_cif, enter

CELL_A = 4.0
CUBE = box_cif("Mn1 Mn 0 0 0\n", CELL_A)
STUDY = """title = "A cube"
[crystal]
file = "cube.cif"
[moments]
Mn1 = 2.0
"""
#: Energy per dipole in m²/a³ of the simple cubic array, k = (½,½,0): Luttinger and Tisza, Phys. Rev. 70, 954 (1946).
RODS = -2.6767886844
UNIT_UEV = DIPOLE_EV_A3_PER_MUB2 * 4 / CELL_A**3 * 1e6
command = Command(("modes", "study.toml"), env={"COLUMNS": "80"})
run, document = command.run, command.document


@pytest.fixture(autouse=True)
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"cube.cif": CUBE, "study.toml": STUDY})


def test_document() -> None:
    doc = document("--points", "60")
    lowest = doc["lowest"]
    assert doc["schema"] == "latticedip/modes/1"
    assert lowest["energy_ueV_per_ion"] == pytest.approx(RODS * UNIT_UEV, rel=1e-9)
    assert lowest["energy_K_per_ion"] == pytest.approx(RODS * UNIT_UEV * 1e-6 * K_PER_EV, rel=1e-9)
    assert sorted(abs(x) for x in lowest["k"][0]) == [0.0, 0.5, 0.5]
    assert lowest["equal_moments"] is True
    assert len(lowest["star"]) == 3
    # Rods along the axis in which k has no part.
    axis = lowest["k"][0].index(0.0)
    assert [abs(x) for x in lowest["atoms"][0]["cosine_abc_muB"]] == [2.0 if i == axis else 0.0 for i in range(3)]
    assert doc["bound"] is None
    assert doc["sizes_muB"] == {"Mn1": 2.0}
    uniform = [mode for mode in doc["modes"] if mode["k"] == [[0, 0, 0]]]
    assert uniform[0]["energy_ueV_per_ion"] == pytest.approx(-2.0943951024 * UNIT_UEV, rel=1e-9)
    bands = doc["bands"]
    assert 55 <= len(bands["k"]) <= 65
    assert set(bands["special_points"]) == {"G", "M", "R", "X"}


def test_csv_holds_the_path() -> None:
    result = run("--csv", "modes.csv", "--points", "40")
    assert result.exit_code == 0
    assert result.stderr == "Wrote modes.csv.\n"
    rows = list(csv.DictReader(Path("modes.csv").read_text(encoding="utf-8").splitlines()))
    assert {row["band"] for row in rows} == {"1", "2", "3"}
    at_m = [row for row in rows if (row["k1"], row["k2"], row["k3"]) == ("0.5", "0.5", "0.0")]
    assert float(at_m[0]["energy_ueV_per_ion"]) == pytest.approx(RODS * UNIT_UEV, rel=1e-9)
    # k → 0 along the path: the longitudinal wave has +4π/3 · 2, the transverse ones −2π/3.
    limits = [float(row["energy_ueV_per_ion"]) for row in rows if row["limit_k_to_0"] == "true"][:3]
    assert limits == pytest.approx([-2.0943951024 * UNIT_UEV] * 2 + [4.1887902048 * UNIT_UEV], rel=1e-9)


def test_on_screen() -> None:
    result = run()
    assert result.exit_code == 0
    assert result.stderr == ""
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    assert "  moments        Mn1 2 µB, 1 ion per cell\n" in result.stdout
    assert "  lowest mode    -8.9809 µeV per ion, -0.10422 K: a lower bound for every\n" in result.stdout
    assert "  equal moments  yes: an ordering reaches the bound\n" in result.stdout
    assert "  degeneracy     1 mode at each of 3 arms of the star (±k one arm)\n" in result.stdout
    assert "limit along the path to X, M, R" in result.stdout
    assert "no ordering of moments of these sizes has a dipolar energy below" in result.stdout


def test_a_shape_makes_the_limit_lowest() -> None:
    # Body-centred: a ferromagnet is lowest at N = 0, and only approached in a sphere.
    body = CUBE + "Mn2 Mn 0.5 0.5 0.5\n"
    Path("cube.cif").write_text(body, encoding="utf-8")
    Path("study.toml").write_text(STUDY.replace("Mn1 =", "Mn =") + "[sample]\nsphere = true\n", encoding="utf-8")
    lowest = document("--points", "20")["lowest"]
    assert lowest["k"] is None
    assert lowest["energy_ueV_per_ion"] == pytest.approx(-2 * 2.0943951024 * UNIT_UEV, rel=1e-9)
    assert abs(lowest["uniform_energy_ueV_per_ion"]) < 1e-6
    text = " ".join(run("--points", "20").stdout.split())
    assert "k → 0 along [" in text
    assert "approached only: k = 0 itself pays for its net moment" in text


def test_plot() -> None:
    pytest.importorskip("matplotlib")
    for name in ("modes.png", "modes.svg", "modes.pdf"):
        result = run("--plot", name, "--points", "20")
        assert result.exit_code == 0
        assert result.stderr == f"Wrote {name}.\n"
        assert Path(name).stat().st_size > 1000


@pytest.mark.parametrize(
    ("study", "arguments", "message"),
    [
        (
            STUDY.split("[moments]")[0],
            [],
            "Error: 'study.toml' states no moment sizes, which the search for orderings starts from. Add them, for "
            "example: [moments] Mn = 4.6\n",
        ),
        (
            STUDY.replace("2.0", "0"),
            [],
            "Error: 'study.toml' states no moment sizes, which the search for orderings starts from. Add them, for "
            "example: [moments] Mn = 4.6\n",
        ),
        (STUDY, ["--plot", "modes.jpg"], "Error: a picture ends in .png, .svg, .pdf, got 'modes.jpg'.\n"),
        (
            STUDY,
            ["--points", "1"],
            "Error: Invalid value for '--points': 1 is not in the range 2<=x<=100000.\n",
        ),
    ],
)
def test_refusals(study: str, arguments: list[str], message: str) -> None:
    Path("study.toml").write_text(study, encoding="utf-8")
    assert command.refused(*arguments).endswith(message)


def test_a_label_of_size_zero_is_left_out() -> None:
    Path("cube.cif").write_text(CUBE + "Mn2 Mn 0.5 0.5 0.5\n", encoding="utf-8")
    Path("study.toml").write_text(STUDY.replace("Mn1 = 2.0", "Mn = 2.0\nMn2 = 0"), encoding="utf-8")
    doc = document("--points", "20")
    assert doc["sizes_muB"] == {"Mn1": 2.0}
    assert doc["lowest"]["energy_ueV_per_ion"] == pytest.approx(RODS * UNIT_UEV, rel=1e-9)
