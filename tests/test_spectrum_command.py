"""``latticedip spectrum`` from end to end, with its pictures, on an invented compound."""

from __future__ import annotations

import csv
import io
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError
from latticedip.report import plots
from tests.commands import Command, enter

CRYSTAL = """1
Lattice="4.2 0 0 0 4.2 0 0 0 5.1" Properties=species:S:1:pos:R:3 pbc="T T T"
Mn 0 0 0
"""
STUDY = """title = "Spiral or $wave$?"
[crystal]
file = "layer.xyz"
[[ordering]]
name = "wave"
k = [0.213, 0, 0]
cosine = { Mn = [0, 0, 2.0] }
[[ordering]]
name = "third"
k = ["1/3", 0, 0]
cosine = { Mn = [0, 0, 2.0] }
[[probe]]
name = "muon A"
position = [0.5, 0.5, 0.12]
[[probe]]
name = "nucleus"
particle = "55Mn"
site = "Mn"
"""
command = Command(("spectrum", "study.toml"))
run, document = command.run, command.document


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"layer.xyz": CRYSTAL, "study.toml": STUDY})


def spectra(doc: dict[str, Any]) -> list[dict[str, Any]]:
    return [found for entry in doc["orderings"] for found in entry["spectra"]]


@pytest.mark.usefixtures("folder")
def test_the_document_holds_lines_bands_and_histograms_that_add_up() -> None:
    doc = document("--bins", "50")
    assert doc["schema"] == "latticedip/spectrum/1"
    assert (doc["title"], doc["specimen"], doc["applied_T"]) == ("Spiral or $wave$?", "crystal", [0, 0, 0])
    assert doc["inputs"]["options"]["bins"] == 50
    for found in spectra(doc):
        bins = found["histogram"]
        assert len(bins["share"]) == 50
        assert sum(bins["share"]) == pytest.approx(1.0, abs=1e-12)
        widths = np.diff(bins["field_limits_T"])
        assert np.array(bins["density_per_T"]) @ widths == pytest.approx(1.0)
        assert np.array(bins["density_per_MHz"]) @ np.diff(bins["frequency_limits_MHz"]) == pytest.approx(1.0)
        total = sum(row["share"] for row in [*found["lines"], *found["bands"]])
        assert total == pytest.approx(1.0)
    wave, third = doc["orderings"]
    assert not wave["spectra"][0]["lines"] and len(wave["spectra"][0]["bands"]) == 1
    assert [line["share"] for line in third["spectra"][0]["lines"]] == pytest.approx([1 / 3, 2 / 3])
    # The nucleus sits on the moment itself: a wave that passes zero.
    assert wave["spectra"][1]["bands"][0]["edges_T"][0] == 0.0


@pytest.mark.usefixtures("folder")
def test_the_screen_shows_them_with_units() -> None:
    result = run("--probe", "muon A")
    assert result.exit_code == 0
    assert result.stderr == ""
    lines = result.stdout.splitlines()
    assert lines[0] == "Spiral or $wave$?"
    assert "  field          incommensurate: every phase of one wave, in closed form" in lines
    assert "  field          repeats after 3 cells" in lines
    assert any(line.split() == ["T", "T", "MHz", "MHz", "%"] for line in lines)
    assert any(line.split() == ["T", "MHz", "%"] for line in lines)
    assert max(len(line) for line in lines) <= 80


@pytest.mark.usefixtures("folder")
def test_the_polarization_is_that_of_the_api(folder: Path) -> None:
    doc = document("--ordering", "third", "--probe", "muon A", "--time", "2", "--points", "21", "--initial", "c",
                   "--detector", "1 0 1", "--nuclear", "0.3")  # fmt: skip
    signal = spectra(doc)[0]["polarization"]
    study = ld.read_study(folder / "study.toml")
    expected = ld.polarization(
        ld.spectrum(study.orderings[1], study.probes[0]),
        np.linspace(0, 2, 21),
        initial=[0, 0, 1],
        detector=[1, 0, 1],
        nuclear_width_per_us=0.3,
    )
    assert signal["time_us"] == pytest.approx(np.linspace(0, 2, 21))
    assert signal["polarization"] == pytest.approx(expected.values, abs=1e-12)
    text = run("--ordering", "third", "--probe", "muon A", "--time", "2", "--powder").stdout
    assert "Polarization in a powder" in text
    # Enough moments for the fastest precession: 12 in a turn.
    shown = document("--time", "200", "--powder", "--ordering", "third", "--probe", "muon A")
    fastest = spectra(shown)[0]["histogram"]["frequency_limits_MHz"][-1]
    assert len(spectra(shown)[0]["polarization"]["time_us"]) > 10 * fastest * 200 / 1.1


@pytest.mark.usefixtures("folder")
def test_a_powder_in_an_applied_field(folder: Path) -> None:
    """Along the field, and at an angle to it; the study's applied field counts as that of the option does."""
    options = (
        "--ordering",
        "third",
        "--probe",
        "muon A",
        "--powder",
        "--time",
        "1",
        "--points",
        "11",
        "--nuclear",
        "1",
    )
    study = ld.read_study(folder / "study.toml")
    found = ld.spectrum(study.orderings[1], study.probes[0], powder=True, applied_T=[0, 0.03, 0.04])
    for angle, start in (([], [0, 3, 4]), (["--angle", "90"], [1, 0, 0])):
        doc = document(*options, "--applied", "0", "0.03", "0.04", *angle)
        signal = spectra(doc)[0]["polarization"]
        expected = ld.polarization(found, np.linspace(0, 1, 11), initial=start, nuclear_width_per_us=1.0)
        assert signal["polarization"] == pytest.approx(expected.values, abs=1e-12)
        assert doc["orderings"][0]["notes"][-2:] == list(expected.notes[-2:])
        assert doc["inputs"]["options"]["angle_deg"] == (90.0 if angle else None)
    text = " ".join(run(*options, "--applied", "0", "0.03", "0.04").stdout.split())
    assert "Polarization in a powder, along the applied field, nuclear moments with a width of 1 1/µs" in text
    assert "the whole internal field" in text
    (folder / "study.toml").write_text(STUDY + "[sample]\napplied_T = [0, 0.03, 0.04]\n", encoding="utf-8")
    again = spectra(document(*options, "--angle", "90"))[0]["polarization"]
    assert again["polarization"] == pytest.approx(signal["polarization"], abs=1e-12)
    assert "Polarization in a powder, at 90° to the applied field" in run(*options, "--angle", "90").stdout


@pytest.mark.usefixtures("folder")
def test_the_width_of_nuclear_moments_is_worked_out(folder: Path) -> None:
    found = spectra(document("--nuclear", "auto", "--probe", "muon A", "--ordering", "third"))[0]
    study = ld.read_study(folder / "study.toml")
    expected = ld.linewidth(study.crystal, [0.5, 0.5, 0.12], particle="muon").zero_field_width_per_us
    assert found["nuclear_width_per_us"] == pytest.approx(expected)
    assert found["nuclear_width_T"] == pytest.approx(expected / (2 * np.pi * 135.53881), rel=1e-7)
    (folder / "study.toml").write_text(STUDY.replace("0.12]\n", "0.12]\nspread_A = 1.2\n"), encoding="utf-8")
    moving = spectra(document("--nuclear", "auto", "--probe", "muon A", "--ordering", "third"))[0]
    expected = ld.linewidth(study.crystal, [0.5, 0.5, 0.12], particle="muon", spread=1.2).zero_field_width_per_us
    assert moving["nuclear_width_per_us"] == pytest.approx(expected)
    assert moving["nuclear_width_per_us"] < 0.99 * found["nuclear_width_per_us"]


@pytest.mark.usefixtures("folder")
def test_the_csv_file_holds_the_histogram_or_the_polarization() -> None:
    rows = list(csv.DictReader(io.StringIO(run("--csv", "-", "--bins", "10").stdout)))
    assert len(rows) == 4 * 10
    assert list(rows[0]) == [
        "ordering", "k", "probe", "field_from_T", "field_to_T", "frequency_from_MHz", "frequency_to_MHz", "share",
        "density_per_T", "density_per_MHz", "boundary",
    ]  # fmt: skip
    assert sum(float(row["share"]) for row in rows) == pytest.approx(4.0)
    rows = list(csv.DictReader(io.StringIO(run("--csv", "-", "--powder", "--time", "1", "--points", "5").stdout)))
    assert list(rows[0]) == ["ordering", "k", "probe", "time_us", "polarization", "boundary"]
    assert [float(row["time_us"]) for row in rows[:5]] == [0, 0.25, 0.5, 0.75, 1.0]


@pytest.mark.usefixtures("folder")
def test_domains_are_listed_or_averaged() -> None:
    listed = spectra(document("--domains", "list", "--ordering", "third", "--probe", "muon A"))
    assert [found["domain"]["kind"] for found in listed] == ["as given", "time-reversed", "k-domain", "k-domain"]
    text = run("--domains", "list", "--ordering", "third", "--probe", "muon A").stdout
    assert "(0, 1/3, 0)" in text
    averaged = spectra(document("--domains", "average", "--ordering", "third", "--probe", "muon A"))
    assert averaged[0]["domains"] == 4
    assert [line["field_T"] for line in averaged[0]["lines"]] == pytest.approx(
        [line["field_T"] for line in listed[0]["lines"]]
    )


@pytest.mark.usefixtures("folder")
@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--time", "2"], "Error: the polarization in a crystal needs the direction in which the spin starts "
         "(--initial c, for example); for a powder say so (--powder).\n"),
        (["--initial", "c"], "Error: an initial direction or a detector belongs to a polarization: ask for one with a "
         "time.\n"),
        (["--time", "1", "--powder", "--initial", "c"], "Error: --initial and --detector are directions in a crystal, "
         "which a powder does not have. Leave them out; in an applied field --angle says how the spin starts to it.\n"),
        (["--time", "1", "--powder", "--angle", "90"], "Error: --angle is that between an applied field and the spin "
         "in a powder; leave it out here.\n"),
        (["--time", "1", "--initial", "c", "--angle", "90", "--applied", "0", "0", "1"], "Error: --angle is that "
         "between an applied field and the spin in a powder; leave it out here.\n"),
        (["--powder", "--angle", "90", "--applied", "0", "0", "1"], "Error: --angle belongs to the polarization P(t): "
         "ask for one with --time, or leave it out.\n"),
        (["--time", "-1", "--powder"], "Error: the time must be a finite number of µs above 0, got -1.0.\n"),
        (["--bins", "1"], "Error: bins must lie between 2 and 100000, got 1.\n"),
        (["--points", "1", "--time", "1", "--powder"], "Error: points must lie between 2 and 100000, got 1.\n"),
        (["--nuclear", "auto"], "Error: nucleus: the static width of nuclear moments is worked out for muons only, and "
         "the probe is 55Mn. Give the width as a number, or name the probes to take.\n"),
        (["--plot", "x.gif"], "Error: a picture ends in .png, .svg, .pdf, got 'x.gif'.\n"),
        (["--time", "1", "--initial", "up"], "Error: --initial: got 'up', expected a crystal direction: a, b, c, a*, "
         "b*, c*, or three components along the axes a, b, c, such as \"1 1 0\".\n"),
        (["--probe", "muon"], "Error: the study has no probe named 'muon'. Those it has: 'muon A', 'nucleus'. Did you "
         "mean 'muon A'?\n"),
        (["--width", "0.1", "--nuclear", "1"], "Error: give either a width or a nuclear width, not both: one "
         "broadening is applied.\n"),
    ],
)  # fmt: skip
def test_what_does_not_fit_is_refused(arguments: list[str], message: str) -> None:
    result = run(*arguments)
    assert (result.exit_code, result.stdout, result.stderr) == (2, "", message)


@pytest.mark.usefixtures("folder")
def test_a_width_that_is_no_number_is_refused() -> None:
    result = run("--nuclear", "wide")
    assert result.exit_code == 2
    assert "'wide' is neither a number nor auto." in result.stderr


def test_a_study_without_probes_is_refused(folder: Path) -> None:
    (folder / "study.toml").write_text(STUDY[: STUDY.index("[[probe]]")], encoding="utf-8")
    assert run().stderr == (
        "Error: 'study.toml' has no [[probe]], so there is no place to ask for a spectrum. Add one with a position or "
        "a site, for example: [[probe]] position = [0.5, 0.5, 0.25]\n"
    )


@pytest.mark.parametrize(("suffix", "start"), [("png", b"\x89PNG"), ("svg", b"<?xml"), ("pdf", b"%PDF")])
def test_pictures_are_drawn(folder: Path, suffix: str, start: bytes) -> None:
    pytest.importorskip("matplotlib")
    name = f"picture.{suffix}"
    result = run("--time", "1", "--powder", "--plot", name)
    assert result.exit_code == 0, result.stderr
    assert result.stderr == f"Wrote {name}.\n"
    first = (folder / name).read_bytes()
    assert first.startswith(start)
    run("--time", "1", "--powder", "--plot", name)
    assert (folder / name).read_bytes() == first


@pytest.mark.usefixtures("folder")
def test_axes_carry_units() -> None:
    """Text is kept as text in an SVG whose fonts are not outlined."""
    matplotlib = pytest.importorskip("matplotlib")
    with matplotlib.rc_context({"svg.fonttype": "none"}):
        plots.draw_spectrum(document("--time", "1", "--initial", "c", "--width", "0.001"), Path("picture.svg"))
    text = Path("picture.svg").read_text(encoding="utf-8")
    for words in ("|B| (T)", "frequency (MHz)", "density (1/T)", "time (µs)", "polarization", "Spiral or $wave$?"):
        assert words in text


@pytest.mark.usefixtures("folder")
def test_too_many_panels_are_refused() -> None:
    pytest.importorskip("matplotlib")
    doc = document()
    doc["orderings"] = doc["orderings"] * 8
    with pytest.raises(InputError) as caught:
        plots.draw_spectrum(doc, Path("picture.png"))
    assert str(caught.value) == ("32 spectra do not fit into one picture of at most 24. Name an ordering or a probe.")


def test_without_matplotlib_the_message_says_what_to_install(folder: Path) -> None:
    code = (
        "import sys; sys.modules['matplotlib'] = None\n"
        "from latticedip.cli.main import main\n"
        "main(['spectrum', 'study.toml', '--plot', 'x.png'])"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=folder)
    assert result.returncode == 2
    assert result.stderr == "Error: pictures need matplotlib. Install it with: pip install 'latticedip[plot]'\n"


STAGGERED = """title = "residue"
[crystal]
file = "layer.xyz"
[[ordering]]
name = "AFM"
k = [0, 0, 0.5]
cosine = { Mn = [0, 0, 3.1] }
[[probe]]
name = "c"
position = [0.5, 0.5, 0.5]
[sample]
applied_T = [0, 0, 0.1]
"""


@pytest.mark.parametrize("powder", ["--powder", "--crystal"])
def test_a_field_that_symmetry_cancels_leaves_the_applied_one(folder: Path, powder: str) -> None:
    """Between two planes of opposite moments nothing is left but rounding: one line at the applied field."""
    (folder / "study.toml").write_text(STAGGERED, encoding="utf-8")
    (found,) = spectra(document(powder, "--plot", "z.svg"))
    assert found["bands"] == [] and Path("z.svg").stat().st_size > 0
    ((field, share),) = [(line["field_T"], line["share"]) for line in found["lines"]]
    assert field == pytest.approx(0.1, abs=1e-12) and share == pytest.approx(1)
    assert sum(found["histogram"]["share"]) == pytest.approx(1) and None not in found["histogram"]["density_per_T"]


MIXTURE = """[[probe]]
name = "a muon with a long name"
positions = [[0.5, 0.5, 0.12], [0.5, 0.1, 0.4], [0.2, 0.3, 0.4]]
weights = [2, 1, 0]
spread_A = 0.3
"""


def test_nuclear_moments_of_a_mixture(folder: Path) -> None:
    """A heading that fits the screen, the widths that P(t) has, what is told of the motion; positions that count."""
    head = STUDY[: STUDY.index("[[probe]]")]
    (folder / "study.toml").write_text(head + MIXTURE, encoding="utf-8")
    asked = ("--ordering", "third", "--powder", "--nuclear", "auto", "--time", "0.1", "--points", "101")
    doc = document(*asked)
    *places, whole = spectra(doc)
    assert whole["equivalent_positions"] == places[0]["equivalent_positions"] + places[1]["equivalent_positions"]
    text = run(*asked).stdout
    assert max(map(len, text.splitlines())) <= 80
    words = " ".join(text.split())
    widths = [f"{width:.4g}" for width in sorted(place["nuclear_width_per_us"] for place in places)]
    title = f"nuclear moments with a width of {', '.join(dict.fromkeys(widths[:-1]))} and {widths[-1]} 1/µs"
    assert title in words and f"{whole['nuclear_width_per_us']:.4g} 1/µs" not in words
    motion = (
        "nuclear moments: pair fields averaged over a Gaussian spread of 0.3 Å rms along each axis: motion that is "
        "fast against the linewidth; a slow one gives a distribution of widths instead"
    )
    for place in places:
        assert f"{place['probe']}: {motion}" in doc["orderings"][0]["notes"]


def test_abundances_of_a_study_count_in_the_nuclear_width(folder: Path) -> None:
    text = STUDY[: STUDY.index("[[probe]]")] + "[[probe]]\nposition = [0.5, 0.5, 0.12]\n[abundances]\n"
    widths = []
    for share in (1.0, 0.25):
        (folder / "study.toml").write_text(f"{text}55Mn = {share}\n", encoding="utf-8")
        widths.append(spectra(document("--ordering", "third", "--nuclear", "auto"))[0]["nuclear_width_per_us"])
    # A mean square is proportional to the share of the nuclei.
    assert widths[1] == pytest.approx(widths[0] / 2)


@pytest.mark.usefixtures("folder")
def test_too_few_moments_in_time_are_told() -> None:
    asked = ("--powder", "--probe", "muon A", "--ordering", "third", "--time")
    fastest = max(line["frequency_MHz"] for line in spectra(document(*asked, "1"))[0]["lines"])
    (note,) = [x for x in document(*asked, "1e5")["orderings"][0]["notes"] if "unresolved" in x]
    assert note == (
        f"P(t) is unresolved: 100000 moments for {fastest * 1e5:.6g} turns of the fastest precession "
        f"({fastest:.6g} MHz) are fewer than 4 in a turn, and what lies between them is not shown. Ask for a shorter "
        "time"
    )
    for points, told in ((int(4 * fastest) + 2, False), (int(4 * fastest) - 1, True)):
        notes = document(*asked, "1", "--points", str(points))["orderings"][0]["notes"]
        assert any(note.endswith("Ask for a shorter time or more points") for note in notes) is told


@pytest.mark.usefixtures("folder")
def test_a_powder_that_turns_without_end_is_refused_at_once() -> None:
    result = run("--powder", "--probe", "muon A", "--ordering", "third", "--time", "1", "--applied", "0", "0", "1e9")
    assert (result.exit_code, result.stdout) == (2, "")
    assert result.stderr == (
        "Error: the polarization of this powder up to 1 µs turns by 8.5e+11 rad, more than 1.7e+07. Ask for a shorter "
        "time or a smaller field.\n"
    )
