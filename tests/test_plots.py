"""Pictures: the kinds of file, what is in them, one style for all, grey throughout."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from latticedip.errors import InputError
from latticedip.study import tasks
from latticedip.study.drawings import drawing_of_study, view_of
from latticedip.study.rank_options import RankOptions
from latticedip.study.schema import Study, read_study
from latticedip.study.spectra import SpectrumOptions
from tests.commands import LAYER_XYZ, Command, enter

pytest.importorskip("matplotlib")

from latticedip.report import plots
from latticedip.report.plots import curves, ordering, rank, spectrum, style

STUDY = """title = "Spiral <or> $wave$?"
[crystal]
file = "layer.xyz"
[moments]
Mn = 2.0
[[ordering]]
name = "stripes along a, moments along b"
k = ["1/2", 0, 0]
along = [0, 1, 0]
[[ordering]]
name = "stripes along b"
k = [0, "1/2", 0]
along = [1, 0, 0]
[[ordering]]
name = "ferromagnet"
k = [0, 0, 0]
along = [0, 0, 1]
other_energy_meV_per_ion = -0.001
[[ordering]]
name = "helix"
k = [0, 0, 0.213]
cosine = { Mn = [2.0, 0, 0] }
sine = { Mn = [0, 2.0, 0] }
[[probe]]
name = "muon A"
position = [0.5, 0.5, 0.12]
[[probe]]
name = "$19F"
particle = "19F"
site = "F"
[susceptibility]
Mn = { chi = [0.02, 0.015, 0.01], unit = "cm3/mol", temperatures_K = [50, 70, 100] }
"""
run = Command().run


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"layer.xyz": LAYER_XYZ, "study.toml": STUDY})


@pytest.fixture
def study(folder: Path) -> Study:
    return read_study(folder / "study.toml")


@pytest.fixture(scope="module")
def figures(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """One figure of every kind, made and laid out in the style of all of them."""
    from matplotlib import rc_context

    from latticedip.study.spectra import SpectrumOptions

    where = tmp_path_factory.mktemp("figures")
    (where / "layer.xyz").write_text(LAYER_XYZ, encoding="utf-8")
    (where / "study.toml").write_text(STUDY, encoding="utf-8")
    study = read_study(where / "study.toml")
    one = SpectrumOptions(powder=True, time_us=0.5, bins=20)
    with rc_context(style.STYLE):
        made = {
            "rank": plots.rank_figure(tasks.rank(study, RankOptions(rotate=True))),
            "field": plots.field_figure(tasks.field(study)),
            "orderings": plots.orderings_figure(drawing_of_study(study)),
            "orderings from c": plots.orderings_figure(drawing_of_study(study, view="c")),
            "shift": plots.shift_figure(tasks.shift(study)),
            "rotation": plots.shift_figure(tasks.shift(study, rotate_about="a")),
            "modes": curves.modes_figure(tasks.modes(study, points=30)),
            "directions": curves.directions_figure(tasks.directions(study, orderings=["ferromagnet"])),
            "spectrum": spectrum.spectrum_figure(tasks.spectrum(study, one, orderings=["helix"])),
        }
        for figure in made.values():
            figure.draw_without_rendering()
    return made


def laid_out(make: Callable[[], Any]) -> Any:
    """A figure in the style of all of them, its parts where they end up."""
    from matplotlib import rc_context

    with rc_context(style.STYLE):
        figure = make()
        figure.draw_without_rendering()
    return figure


def texts(figure: Any) -> Iterator[Any]:
    from matplotlib.text import Text

    return (item for item in figure.findobj(Text) if item.get_text().strip() and item.get_visible())


# --- files ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("suffix", "start"), [("png", b"\x89PNG"), ("SVG", b"<?xml"), ("pdf", b"%PDF")])
@pytest.mark.parametrize("command", ["rank", "field", "show"])
def test_the_suffix_says_what_kind_of_file(folder: Path, command: str, suffix: str, start: bytes) -> None:
    name = f"picture.{suffix}"
    result = run(command, "study.toml", "--plot", name)
    assert (result.exit_code, result.stderr) == (0, f"Wrote {name}.\n")
    first = (folder / name).read_bytes()
    assert first.startswith(start)
    if suffix == "SVG":
        assert run(command, "study.toml", "--plot", name).stdout == run(command, "study.toml").stdout
        assert (folder / name).read_bytes() == first
    assert sorted(path.name for path in folder.iterdir()) == ["layer.xyz", name, "study.toml"]


@pytest.mark.usefixtures("folder")
@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["rank", "study.toml", "--plot", "x.gif"], "Error: a picture ends in .png, .svg, .pdf, got 'x.gif'.\n"),
        (["field", "study.toml", "--plot", "x"], "Error: a picture ends in .png, .svg, .pdf, got 'x'.\n"),
        (["show", "layer.xyz", "--plot", "-"], "Error: a picture ends in .png, .svg, .pdf, got '-'.\n"),
        (["rank", "study.toml", "--plot", "no/x.png"], "Error: cannot write 'no/x.png': No such file or directory.\n"),
        (
            ["show", "study.toml", "--plot", "x.png", "--view", "up"],
            "Error: --view: got 'up', expected a crystal direction: a, b, c, a*, b*, c*, or three components along the "
            "axes a, b, c, such as \"1 1 0\".\n",
        ),
    ],
)  # fmt: skip
def test_what_cannot_be_drawn_is_one_message(arguments: list[str], message: str) -> None:
    result = run(*arguments)
    assert (result.exit_code, result.stdout, result.stderr) == (2, "", message)


@pytest.mark.usefixtures("folder")
def test_a_view_needs_a_picture() -> None:
    result = run("show", "study.toml", "--view", "a")
    assert result.exit_code == 2
    assert result.stderr.endswith("Error: --view goes with --plot.\n")


@pytest.mark.usefixtures("folder")
def test_some_orderings_and_probes_are_shown_and_drawn() -> None:
    chosen = ("--ordering", "helix", "--probe", "muon A")
    result = run("show", "study.toml", *chosen, "--plot", "x.svg", "--json")
    assert result.exit_code == 0
    document = json.loads(result.stdout)
    assert document["inputs"]["options"] == {"orderings": ["helix"], "probes": ["muon A"]}
    assert [entry["ordering"] for entry in document["orderings"]] == ["helix"]
    assert [probe["probe"] for probe in document["probes"]] == ["muon A"]
    drawn = tasks.drawing(Path("study.toml"), orderings=["helix"], probes=["muon A"])
    assert [entry["ordering"] for entry in drawn["orderings"]] == ["helix"]
    assert {probe["probe"] for probe in drawn["orderings"][0]["probes"]} == {"muon A"}
    result = run("show", "layer.xyz", "--probe", "muon A")
    assert result.exit_code == 2
    assert result.stderr.endswith("Error: --ordering and --probe go with a study.\n")


def test_an_input_is_never_drawn_over(folder: Path) -> None:
    os.link(folder / "layer.xyz", folder / "layer.png")
    for command in ("rank", "field", "show", "modes", "directions", "shift", "spectrum"):
        result = run(command, "study.toml", "--plot", "layer.png")
        assert result.exit_code == 2
        assert result.stderr == "Error: 'layer.png' is read here (as the crystal). Write to another file.\n"
    assert (folder / "layer.xyz").read_text(encoding="utf-8") == LAYER_XYZ


@pytest.mark.parametrize("command", ["rank", "field", "show"])
def test_without_matplotlib_the_message_says_what_to_install(folder: Path, command: str) -> None:
    code = (
        "import sys; sys.modules['matplotlib'] = None\n"
        "from latticedip.cli.main import main\n"
        f"main([{command!r}, 'study.toml', '--plot', 'x.png'])"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=folder)
    assert result.returncode == 2
    assert result.stderr == "Error: pictures need matplotlib. Install it with: pip install 'latticedip[plot]'\n"


def test_what_does_not_fit_is_refused(study: Study) -> None:
    ranked, fields, drawn = tasks.rank(study), tasks.field(study), drawing_of_study(study)
    cases = [
        (plots.rank_figure, {**ranked, "rows": ranked["rows"] * 16},
         "64 orderings do not fit into one picture of at most 60. Name some with --ordering."),
        (plots.field_figure, {**fields, "orderings": fields["orderings"] * 20},
         "2 probes under 80 orderings do not fit into one picture of at most 150 lines. Name some with --probe or "
         "--ordering."),
        (plots.orderings_figure, {**drawn, "orderings": drawn["orderings"] * 4},
         "16 orderings do not fit into one picture of at most 12. Name some with --ordering."),
        (plots.shift_figure, tasks.shift(study, temperatures_K=[60]),
         "there is no curve of a shift to draw. Ask for --rotate-about or --powder, or state chi as a table of "
         "temperatures in [susceptibility]."),
    ]  # fmt: skip
    for make, document, message in cases:
        with pytest.raises(InputError) as caught:
            make(document)
        assert str(caught.value) == message
    many = {
        **fields["orderings"][0],
        "rows": [{**fields["orderings"][0]["rows"][0], "probe": f"p{i}"} for i in range(13)],
    }
    with pytest.raises(InputError) as caught:
        plots.field_figure({**fields, "orderings": [many]})
    assert str(caught.value) == "13 probes do not fit into one picture of at most 12. Name some with --probe."


# --- one style ------------------------------------------------------------------------------------------


def test_all_pictures_share_their_fonts_and_nothing_overlaps(figures: dict[str, Any]) -> None:
    for name, figure in figures.items():
        sizes = {item.get_fontsize() for item in texts(figure)}
        assert sizes <= {7, 8, 9, 10}, name
        assert {item.get_fontfamily()[0] for item in texts(figure)} == {"DejaVu Sans"}, name
        for panel in figure.axes:
            for axis in (panel.xaxis, panel.yaxis):
                boxes = [label.get_window_extent() for label in axis.get_ticklabels() if label.get_text()]
                low, high = panel.viewLim.get_points()[:, 0 if axis is panel.xaxis else 1]
                places = list(axis.get_ticklocs())
                shown = [
                    box for box, at in zip(boxes, places, strict=False)
                    if panel.axison and min(low, high) <= at <= max(low, high)
                ]  # fmt: skip
                pairs = [(a, b) for i, a in enumerate(shown) for b in shown[i + 1 :]]
                assert not any(a.overlaps(b) for a, b in pairs), (name, axis)


def test_every_picture_is_grey(figures: dict[str, Any]) -> None:
    from matplotlib import rc_context
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    for name, figure in figures.items():
        with rc_context(style.STYLE):
            canvas = FigureCanvasAgg(figure)
            canvas.draw()
        pixels = np.asarray(canvas.buffer_rgba())[..., :3].astype(int)
        assert np.ptp(pixels, axis=2).max() == 0, name
        assert pixels.min() < 60, name


@pytest.mark.usefixtures("folder")
def test_text_of_a_study_is_no_formula() -> None:
    from matplotlib import rc_context

    document = tasks.field(tasks.open_study(Path("study.toml")))
    with rc_context({"svg.fonttype": "none"}):
        plots.draw_field(document, Path("x.svg"))
    text = Path("x.svg").read_text(encoding="utf-8")
    for words in ("Spiral &lt;or&gt; $wave$?", "$19F (19F)", "|B| in the home cell (T)", "frequency (MHz)", "helix"):
        assert words in text


# --- rankings -------------------------------------------------------------------------------------------


def test_a_ranking_has_one_dot_for_each_ordering(study: Study) -> None:
    document = tasks.rank(study)
    panel = plots.rank_figure(document).axes[0]
    dots = next(line for line in panel.lines if line.get_label() == "dipolar energy")
    assert dots.get_xdata() == pytest.approx([row["energy_ueV_per_ion"] for row in document["rows"]])
    assert list(dots.get_ydata()) == [0, 1, 2, 3]
    names = [label.get_text().replace("\n", " ") for label in panel.get_yticklabels()]
    assert names == [f"{row['rank']}  {row['ordering']}" for row in document["rows"]]
    # The lowest stands on top.
    assert panel.get_ylim()[0] > panel.get_ylim()[1]
    words = [item.get_text() for item in panel.texts]
    assert words.count("tie") == 1
    assert [row["tie"] for row in document["rows"]] == [True, True, False, False]
    labels = {line.get_label(): line for line in panel.lines}
    place = next(i for i, row in enumerate(document["rows"]) if row["ordering"] == "ferromagnet")
    square = labels["with the energy from elsewhere"]
    # -0.001 meV from elsewhere are -1 µeV.
    assert square.get_xdata() == pytest.approx([document["rows"][place]["energy_ueV_per_ion"] - 1.0])
    assert list(square.get_ydata()) == [place]
    bound = labels["lowest dipolar mode"].get_xdata()[0]
    assert bound == pytest.approx(document["bound"]["energy_ueV_per_ion"])
    assert bound <= min(row["energy_ueV_per_ion"] for row in document["rows"])


def test_neighbouring_ties_are_bands_of_their_own() -> None:
    def row(energy: float, tie: bool) -> dict[str, Any]:
        return {"energy_ueV_per_ion": energy, "tie": tie, "error_bound_ueV_per_ion": 1e-6}

    rows = [row(-3, True), row(-3, True), row(-3, True), row(-1, False), row(0, True), row(1e-7, True), row(2, True),
            row(2, True)]  # fmt: skip
    assert list(rank.tie_bands(rows)) == [(0, 2), (4, 5), (6, 7)]
    assert list(rank.tie_bands([row(1, False)])) == []


def test_long_names_make_room_for_themselves(study: Study) -> None:
    document = tasks.rank(study)
    name = "a pattern with moments along the longest axis and a propagation vector at the edge of the zone, number"
    long = {**document, "rows": [{**row, "ordering": f"{name} {i}"} for i, row in enumerate(document["rows"])]}
    fields = tasks.field(study)
    named = [{**entry, "ordering": f"{name} {i}"} for i, entry in enumerate(fields["orderings"])]
    title = "A title that is far too long for one line of a picture, so that it goes over several of them"
    for make, shown in ((plots.rank_figure, long), (plots.field_figure, {**fields, "orderings": named})):
        figure = laid_out(lambda make=make, shown=shown: make({**shown, "title": title}))
        boxes = [label.get_window_extent() for label in figure.axes[0].get_yticklabels()]
        assert len(boxes) == 4
        assert not any(a.overlaps(b) for i, a in enumerate(boxes) for b in boxes[i + 1 :])
        assert all(item.get_window_extent().x0 >= 0 for item in texts(figure))
    assert style.in_lines("one two three four five", 6) == "one\ntwo\nthree\nfour …"


# --- fields ---------------------------------------------------------------------------------------------


def test_fields_are_dots_with_the_number_of_points(study: Study) -> None:
    document = tasks.field(study, unit="G")
    first, second = (panel for panel in plots.field_figure(document).axes if panel.get_title("left"))
    assert first.get_title("left") == "muon A (muon)"
    assert second.get_title("left") == r"\$19F (19F)"
    for panel, probe in ((first, "muon A"), (second, "$19F")):
        for place, entry in enumerate(document["orderings"]):
            sizes = {round(row["field_size_G"], 6) for row in entry["rows"] if row["probe"] == probe}
            dots = [x for line in panel.lines for x, y in zip(*line.get_data(), strict=True) if y == place]
            assert {round(float(x), 6) for x in dots} == sizes
    # Both fluorines feel the same under a ferromagnet along c; stripes along a part them.
    counts = {text.xy[1]: text.get_text() for text in second.texts}
    assert counts[2] == "× 2"
    assert 0 not in counts


# --- spectra --------------------------------------------------------------------------------------------


def test_no_field_is_drawn_at_zero_on_the_scale_of_the_others(study: Study) -> None:
    document = tasks.spectrum(study, SpectrumOptions(), orderings=["ferromagnet"])
    (entry,) = document["orderings"]
    line = {**entry["spectra"][0]["lines"][0], "field_T": 1e-17, "share": 1.0}
    entry["spectra"][0] = {**entry["spectra"][0], "lines": [line]}
    largest = max(line["field_T"] for found in entry["spectra"] for line in found["lines"])
    panel = spectrum.spectrum_figure(document).axes[0]
    assert [item.get_text() for item in panel.texts] == ["0 T"]
    assert panel.get_xlim() == pytest.approx((-0.0216 * largest, 1.08 * largest))
    assert list(panel.lines[0].get_xdata()) == [0.0]
    assert max(panel.get_yticks()) <= 1.0


def test_labels_of_close_lines_stand_above_each_other(study: Study) -> None:
    document = tasks.spectrum(study, SpectrumOptions(), orderings=["ferromagnet"], probes=["muon A"])
    found = document["orderings"][0]["spectra"][0]
    line = found["lines"][0]
    found["lines"] = [{**line, "field_T": x, "share": 0.25} for x in (0.1, 0.5, 0.52, 0.54)]
    figure = laid_out(lambda: spectrum.spectrum_figure(document))
    boxes = [item.get_window_extent() for item in figure.axes[0].texts]
    assert len(boxes) == 4
    assert not any(a.overlaps(b) for i, a in enumerate(boxes) for b in boxes[i + 1 :])


def test_many_spectra_stand_in_two_columns(study: Study) -> None:
    document = tasks.spectrum(study, SpectrumOptions(bins=20))
    assert sum(len(entry["spectra"]) for entry in document["orderings"]) == 8
    figure = spectrum.spectrum_figure(document)
    places = [panel.get_subplotspec() for panel in figure.axes if panel.get_subplotspec() is not None]
    assert {(place.get_gridspec().nrows, place.get_gridspec().ncols) for place in places} == {(4, 2)}
    titles = [panel.get_title("left").replace("\n", " ") for panel in figure.axes if panel.get_title("left")]
    # The parts of a k stay on one line.
    blank = "\N{NO-BREAK SPACE}"
    assert titles[0] == "muon A: stripes along a, moments along b, " + "k = (1/2, 0, 0)".replace(" ", blank)


# --- drawings -------------------------------------------------------------------------------------------


def test_the_plane_of_a_drawing_is_right_handed(study: Study) -> None:
    view = ordering.View.of(view_of(study.crystal, "a"))
    # Seen from a, c is up and b to the right.
    assert view.flat([0, 1, 0]) == pytest.approx([1, 0])
    assert view.flat([0, 0, 1]) == pytest.approx([0, 1])
    assert view.flat([1, 0, 0]) == pytest.approx([0, 0])
    assert np.cross(view.right, view.up) == pytest.approx(view.eye)
    along_c = view_of(study.crystal, "c")
    assert along_c["up_cart"] == pytest.approx([0, 1, 0])


def test_arrows_are_projected_moments_and_fields(study: Study) -> None:
    from matplotlib.quiver import Quiver

    document = drawing_of_study(study, view="a")
    document["orderings"] = [entry for entry in document["orderings"] if entry["ordering"] == "ferromagnet"]
    (panel,) = plots.orderings_figure(document).axes
    moments, fields = panel.findobj(Quiver)
    # 2 µB along c on all eight corners; fields of both fluorines and of the muon.
    assert np.abs(moments.U).max() < 1e-12 and len(moments.U) == 8
    assert np.all(moments.V > 0) and np.ptp(moments.V) == pytest.approx(0)
    expected = {probe["probe"]: probe["field_T"] for probe in document["orderings"][0]["probes"]}
    scale = max(np.linalg.norm(field) for field in expected.values())
    drawn = sorted(fields.V / np.abs(fields.V).max())
    wanted = [probe["field_T"][2] for probe in document["orderings"][0]["probes"]]
    assert drawn == pytest.approx(sorted(np.array(wanted) / max(map(abs, wanted))))
    words = [item.get_text() for item in texts(panel.figure)]
    assert "moment (longest: 2 µB)" in words
    assert f"field (longest: {scale:.4g} T)" in words
    assert "Spiral <or> \\$wave\\$?\nseen from [1 0 0] (components along a, b, c)" in words


def test_long_names_of_probes_stand_in_the_legend(study: Study) -> None:
    document = drawing_of_study(study)
    for entry in document["orderings"]:
        for probe in entry["probes"]:
            probe["probe"] = probe["probe"].replace("muon A", "muon in the channel along the longest axis of the cell")
    figure = laid_out(lambda: plots.orderings_figure(document))
    for panel in figure.axes:
        words = [item.get_text() for item in panel.texts]
        assert words.count("1") == words.count("2") == 1
        assert not any("muon" in word for word in words)
        assert panel.get_window_extent().width > 0.2 * figure.bbox.width
    labels = [item.get_text() for item in figure.legends[0].get_texts()]
    assert labels[-2:] == ["muon in the channel along the longest axis …", r"\$19F"]


def test_a_wave_is_drawn_over_few_cells(study: Study) -> None:
    entries = {entry["ordering"]: entry for entry in drawing_of_study(study)["orderings"]}
    assert entries["helix"]["cells"] == [[0, 0, 0], [0, 0, 1], [0, 0, 2], [0, 0, 3]]


def test_moments_along_the_line_of_sight_are_rings(study: Study) -> None:
    document = drawing_of_study(study, view="c")
    document["orderings"] = [{**entry, "probes": []} for entry in document["orderings"] if entry["k"] == [[0, 0, 0]]]
    for sign, words in ((1, "points to the eye"), (-1, "points away from the eye")):
        for atom in document["orderings"][0]["atoms"]:
            atom["moment_muB"] = [sign * abs(x) for x in atom["moment_muB"]]
        figure = plots.orderings_figure(document)
        labels = [item.get_text() for item in figure.legends[0].get_texts()]
        assert labels == ["Mn, with a moment", "F", "moment (longest: 2 µB)", words]


def test_a_drawing_shows_all_cells_of_a_period_and_closes_the_home_cell(study: Study) -> None:
    entries = {entry["ordering"]: entry for entry in drawing_of_study(study)["orderings"]}
    stripes = entries["stripes along b"]
    assert stripes["cells"] == [[0, 0, 0], [0, 1, 0]]
    manganese = [atom for atom in stripes["atoms"] if atom["magnetic"]]
    # Corners of two cells that share a face, each once, with the moment of its own cell.
    assert len({tuple(atom["position_cart_A"]) for atom in manganese}) == len(manganese) == 12
    for atom in manganese:
        row = round(atom["position_cart_A"][1] / 4.2)
        assert atom["moment_muB"] == pytest.approx([2.0 * (-1) ** row, 0, 0])
    assert [probe["probe"] for probe in stripes["probes"]] == ["muon A", "$19F", "$19F"]


def test_a_structure_without_moments_is_drawn(folder: Path) -> None:
    assert run("show", "layer.xyz", "--plot", "x.svg").exit_code == 0
    (folder / "study.toml").write_text(
        STUDY[: STUDY.index("[[ordering]]")] + STUDY[STUDY.index("[[probe]]") :], "utf-8"
    )
    assert run("show", "study.toml", "--plot", "y.svg").exit_code == 0
    document = tasks.drawing(Path("study.toml"))
    (entry,) = document["orderings"]
    assert entry["ordering"] == "no moments"
    assert [probe["field_T"] for probe in entry["probes"]] == [None, None, None]
