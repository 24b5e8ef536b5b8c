"""The page of a study: complete, escaped, on its own, and opened in a browser."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import subprocess
import sys
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest

from latticedip.errors import InputError
from latticedip.report.figures import inline_svg
from latticedip.report.html import HtmlSetter, escaped, html_table, report_html, set_as_html
from latticedip.report.tables import Column, bullets, heading, pairs, paragraph, set_by, table
from latticedip.study import tasks
from latticedip.study.reports import ReportOptions, report_document, shown_time
from latticedip.study.spectra import SpectrumOptions
from tests.commands import LAYER_XYZ, Command, enter

TITLE = "Layers & <script>alert(1)</script> \\u0022quoted\\u0022"
STUDY = f"""title = "{TITLE}"
[crystal]
file = "layer.xyz"
[moments]
Mn = 2.0
[[ordering]]
name = "stripes <img src=x onerror=alert(1)>"
k = ["1/2", 0, 0]
along = [0, 1, 0]
[[ordering]]
name = "ferromagnet"
k = [0, 0, 0]
along = [0, 0, 1]
[[probe]]
name = "muon <b>A"
position = [0.5, 0.5, 0.12]
[[probe]]
name = "fluorine"
particle = "19F"
site = "F"
[susceptibility]
Mn = {{ chi = [0.02, 0.015], unit = "cm3/mol", temperatures_K = [50, 70] }}
"""
VOID = {"meta", "br", "use", "path", "rect"}
CHROMIUM = next(
    (found for found in map(shutil.which, ("chromium", "chromium-browser", "google-chrome")) if found), None
)
run = Command(("report",)).run


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"layer.xyz": LAYER_XYZ, "study.toml": STUDY})


class Page(HTMLParser):
    """Tags, attributes and text of a page; says where tags do not close."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text: list[str] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if tag not in VOID:
            assert self.open and self.open[-1] == tag, f"</{tag}> closes {self.open[-1:]}"
            self.open.pop()

    def handle_data(self, data: str) -> None:
        if self.open[-1:] not in (["style"],):
            self.text.append(data)

    def words(self) -> str:
        return " ".join(" ".join(self.text).split())


@pytest.fixture(scope="module")
def written(tmp_path_factory: pytest.TempPathFactory) -> str:
    """The page of the study, made once."""
    pytest.importorskip("matplotlib")
    where = tmp_path_factory.mktemp("page")
    with pytest.MonkeyPatch.context() as patch:
        enter(where, patch, {"layer.xyz": LAYER_XYZ, "study.toml": STUDY})
        result = run("study.toml", "-o", "report.html")
    assert (result.exit_code, result.stderr) == (0, "Wrote report.html.\n")
    assert result.stdout.startswith("Of 2 orderings, the dipolar energy is lowest for stripes <img src=x\nonerror=")
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    return (where / "report.html").read_text(encoding="utf-8")


@pytest.fixture
def page(folder: Path, written: str) -> Page:
    (folder / "report.html").write_text(written, encoding="utf-8")
    return Page(written)


# --- the page -------------------------------------------------------------------------------------------


def test_the_page_needs_nothing_else(page: Page, folder: Path) -> None:
    assert page.open == []
    assert not {tag for tag, _ in page.tags} & {"script", "link", "img", "iframe", "object", "embed", "base", "form"}
    ids = [attributes["id"] for _, attributes in page.tags if "id" in attributes]
    assert len(ids) == len(set(ids))
    for tag, attributes in page.tags:
        assert not [name for name in attributes if name.startswith("on")], tag
        for name in ("src", "href", "xlink:href"):
            if name in attributes:
                target = attributes[name] or ""
                assert target.startswith("#") and target[1:] in ids, (tag, target)
    text = (folder / "report.html").read_text(encoding="utf-8")
    assert text.count("url(") == text.count("url(#")
    assert "@import" not in text
    policy = next(attributes for tag, attributes in page.tags if "http-equiv" in attributes)
    assert policy["content"] == "default-src 'none'; style-src 'unsafe-inline'"


def test_all_text_is_escaped(page: Page) -> None:
    words = page.words()
    assert 'Layers & <script>alert(1)</script> "quoted"' in words
    assert "stripes <img src=x onerror=alert(1)>" in words
    assert "muon <b>A" in words


def test_inputs_assumptions_and_caveats(page: Page, folder: Path) -> None:
    words = page.words()
    for name in ("study.toml", "layer.xyz"):
        assert hashlib.sha256((folder / name).read_bytes()).hexdigest() in words
    assert 'name = "stripes <img src=x onerror=alert(1)>"' in words
    boundary = "net moment without a stated shape: N = 0 assumed (a domain that closes its flux)"
    assert f"Boundary assumed: {boundary}." in words
    assert "1e-10: every lattice sum is right to tol times the larger of 1 T/µB and its largest element" in words
    assert "A ranking is no proof of an ordering." in words
    assert "Left out: shielding by the probe's own electrons (chemical shift)" in words
    assert "Static nuclear dipoles only" in words
    assert "net moment without a shape of the sample (ferromagnet): N = 0 is assumed." in words


def test_tables_hold_what_the_commands_print(page: Page) -> None:
    study = tasks.open_study(Path("study.toml"))
    words = page.words()
    for row in tasks.rank(study)["rows"]:
        assert f"{row['energy_ueV_per_ion']:.4f}" in words
    for entry in tasks.field(study)["orderings"]:
        for row in entry["rows"]:
            assert f"{row['frequency_MHz']:.6f}"[:5] in words
    for row in tasks.linewidth(study)["rows"]:
        assert f"{row['transverse_width_per_us']:.8f}"[:5] in words
    for row in tasks.shift(study)["rows"]:
        for shift in row["shifts"]:
            assert f"{100 * shift['shift_isotropic']:.6f}"[:6] in words
    for entry in tasks.spectrum(study, SpectrumOptions(powder=True))["orderings"]:
        for found in entry["spectra"]:
            for line in found["lines"]:
                assert f"{line['frequency_MHz']:.6f}"[:6] in words
    for mode in tasks.modes(study)["modes"]:
        assert f"{mode['energy_ueV_per_ion']:.3f}" in words
    headings = (
        "Inputs", "Assumptions", "What was understood", "Ranking by dipolar energy", "Dipolar modes", "Local fields",
        "Spectra and polarization", "Paramagnetic shifts", "Static widths from nuclear moments",
        "What this does not say",
    )  # fmt: skip
    places = [words.index(name) for name in headings]
    assert places == sorted(places)
    assert "Of 2 orderings, the dipolar energy is lowest for stripes <img src=x onerror=alert(1)>: −" in words


def test_pictures_are_drawn_in_the_page(page: Page) -> None:
    drawings = [attributes for tag, attributes in page.tags if tag == "svg"]
    assert len(drawings) == 6
    assert all(attributes["role"] == "img" and attributes["aria-label"] for attributes in drawings)
    words = page.words()
    assert "Figure 1. Orderings as given, seen from [8 3 2] (components along a, b, c)." in words
    assert "Figure 2. Energies per magnetic ion, lowest on top. Exchange and crystal field are left out." in words
    assert "Figure 3. Energies of all dipolar modes along the band path; the dashed line is the lowest one" in words
    assert "Figure 5. Spectra of |B| and frequency: lines as stems as high as their share" in words
    assert "beside them the polarization in a powder in zero field, without relaxation and nuclear moments" in words
    assert "Figure 6. Shifts against temperature and against the susceptibility." in words


def test_every_figure_says_what_it_leaves_out(page: Page) -> None:
    captions = [attributes["aria-label"] or "" for tag, attributes in page.tags if tag == "svg"]
    words = page.words()
    for caption in captions:
        assert caption in words
        assert caption.rstrip(".").endswith("left out")
        assert "distortion" in caption or "Exchange and crystal field are left out." in caption


def test_the_same_inputs_give_the_same_page(folder: Path) -> None:
    pytest.importorskip("matplotlib")
    run("study.toml", "-o", "a.html")
    run("study.toml", "-o", "a.html")
    run("study.toml", "-o", "b.HTM")
    assert (folder / "a.html").read_bytes() == (folder / "b.HTM").read_bytes()
    assert sorted(path.name for path in folder.iterdir()) == ["a.html", "b.HTM", "layer.xyz", "study.toml"]


@pytest.mark.usefixtures("folder")
def test_the_csv_file_holds_the_ranking() -> None:
    result = run("study.toml", "-o", "x.html", "--no-pictures", "--csv", "-")
    assert result.exit_code == 0
    expected = Command().run("rank", "study.toml", "--csv", "-")
    assert result.stdout == expected.stdout


@pytest.mark.usefixtures("folder")
def test_json_and_choices() -> None:
    result = run("study.toml", "-o", "x.html", "--no-pictures", "--json", "--ordering", "ferromagnet", "--rotate",
                 "--probe", "fluorine", "--tol", "1e-8", "--view", "b")  # fmt: skip
    assert result.exit_code == 0
    document = json.loads(result.stdout)
    assert document["schema"] == "latticedip/report/1"
    assert document["inputs"]["options"] == {
        "orderings": ["ferromagnet"], "probes": ["fluorine"], "rotate": True, "view": "b", "spectra": True,
        "time_us": None, "initial": None, "modes": None, "tol": 1e-8,
    }  # fmt: skip
    assert set(document["sections"]) == {
        "show", "drawing", "rank", "modes", "field", "spectrum", "shift", "linewidth",
    }  # fmt: skip
    assert [row["ordering"] for row in document["sections"]["rank"]["rows"]] == ["ferromagnet"]
    assert document["sections"]["rank"]["rows"][0]["easy_axis_cart"] is not None
    assert document["sections"]["field"]["inputs"]["options"]["tol"] == 1e-8
    text = Path("x.html").read_text(encoding="utf-8")
    assert "<svg" not in text
    assert "The dipolar energy of ferromagnet is −" in text


def test_what_does_not_apply_is_said(folder: Path) -> None:
    (folder / "study.toml").write_text('[crystal]\nfile = "layer.xyz"\n', encoding="utf-8")
    document = report_document(tasks.open_study(Path("study.toml")), ReportOptions())
    assert document["left_out"] == [
        {"section": "rank", "reason": "the study has no ordering"},
        {"section": "modes", "reason": "the study states no moment sizes in [moments]"},
        {"section": "field", "reason": "the study has no ordering"},
        {"section": "spectrum", "reason": "the study has no ordering"},
        {"section": "shift", "reason": "the study states no susceptibility"},
        {"section": "linewidth", "reason": "the study has no probe"},
    ]
    words = Page(report_html(document, pictures=False)).words()
    assert "Paramagnetic shifts: the study states no susceptibility." in words
    assert "Boundary assumed: none: nothing was summed." in words


def test_a_refused_section_is_named_with_its_reason(folder: Path) -> None:
    sheet = LAYER_XYZ.replace('pbc="T T T"', 'pbc="T T F"')
    (folder / "layer.xyz").write_text(sheet, encoding="utf-8")
    text = STUDY[: STUDY.index("[[ordering]]")] + STUDY[STUDY.index("[[probe]]") : STUDY.index("[susceptibility]")]
    (folder / "study.toml").write_text(text, encoding="utf-8")
    study = tasks.open_study(Path("study.toml"))
    with pytest.raises(ValueError) as caught:
        tasks.linewidth(study)
    reason = str(caught.value)
    document = report_document(study, ReportOptions())
    assert {"section": "linewidth", "reason": reason} in document["left_out"]
    assert f"Static widths from nuclear moments: {reason}" in Page(report_html(document, pictures=False)).words()


# --- spectra, polarization and modes --------------------------------------------------------------------


@pytest.mark.usefixtures("folder")
def test_polarization_of_a_powder_and_of_a_crystal() -> None:
    study = tasks.open_study(Path("study.toml"))
    powder = report_document(study, ReportOptions(time_us=0.3))["sections"]["spectrum"]
    assert powder == tasks.spectrum(study, SpectrumOptions(powder=True, time_us=0.3))
    crystal = report_document(study, ReportOptions(time_us=0.3, initial="b"))["sections"]["spectrum"]
    assert crystal == tasks.spectrum(study, SpectrumOptions(initial="b", time_us=0.3))


@pytest.mark.parametrize(
    ("frequencies", "time"),
    [
        # Four turns of the slowest; thirty of the fastest; what does not turn; the lifetime of a muon.
        ([10.0, 20.0], 0.2),
        ([1.0, 100.0], 0.2),
        ([0.0, 1e-9, 50.0, None, float("nan")], 0.05),
        ([0.01], 10.0),
        ([0.0], 10.0),
    ],
)
def test_the_time_of_the_polarization_is_round(frequencies: list[float | None], time: float) -> None:
    rows = [{"frequency_MHz": value} for value in frequencies]
    assert shown_time({"orderings": [{"rows": rows[:1]}, {"rows": rows[1:]}]}) == pytest.approx(time)


def test_in_an_applied_field_the_polarization_is_that_of_a_powder(folder: Path) -> None:
    (folder / "study.toml").write_text(STUDY + "[sample]\nsphere = true\napplied_T = [0, 0, 0.1]\n", encoding="utf-8")
    study = tasks.open_study(Path("study.toml"))
    document = report_document(study, ReportOptions(modes=False, time_us=0.5))
    assert document["sections"]["spectrum"] == tasks.spectrum(study, SpectrumOptions(powder=True, time_us=0.5))
    assert document["left_out"] == [{"section": "modes", "reason": "not asked for"}]
    words = Page(report_html(document, pictures=False)).words()
    assert "Polarization in a powder, along the applied field" in words
    turned = report_document(study, ReportOptions(modes=False, initial="a", time_us=0.5))
    assert turned["sections"]["spectrum"] == tasks.spectrum(study, SpectrumOptions(initial="a", time_us=0.5))
    assert [entry["section"] for entry in turned["left_out"]] == ["modes"]


def test_without_orderings_the_options_of_the_polarization_are_told_to_have_no_effect(folder: Path) -> None:
    text = STUDY[: STUDY.index("[[ordering]]")] + STUDY[STUDY.index("[[probe]]") :]
    (folder / "study.toml").write_text(text, encoding="utf-8")
    both = "--time and --initial have"
    for options, names in ((["--time", "2"], "--time has"), (["--time", "2", "--initial", "c"], both)):
        result = run("study.toml", "-o", "x.html", "--no-pictures", *options)
        assert f"{names} no effect: the study has no ordering." in " ".join(result.stdout.split())
        words = Page(Path("x.html").read_text(encoding="utf-8")).words()
        assert f"Polarization with time: {names} no effect: the study has no ordering." in words
    assert "no effect" not in run("study.toml", "-o", "x.html", "--no-pictures").stdout


@pytest.mark.usefixtures("folder")
def test_costly_sections_wait_to_be_asked_for(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("latticedip.study.reports.MOST_IONS", 0)
    monkeypatch.setattr("latticedip.study.reports.MOST_SPECTRA", 3)
    study = tasks.open_study(Path("study.toml"))
    document = report_document(study, ReportOptions())
    assert document["left_out"] == [
        {"section": "modes", "reason": "1 magnetic ions in the cell take a while; ask for them with --modes"},
        {"section": "spectrum", "reason": "4 spectra are more than 3. Name some with --ordering or --probe"},
    ]
    asked = report_document(study, ReportOptions(modes=True, probes=("fluorine",)))
    assert asked["left_out"] == []
    assert {"modes", "spectrum"} <= set(asked["sections"])


@pytest.mark.usefixtures("folder")
def test_sizes_that_modes_cannot_take_are_told(monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(study: Any) -> dict[str, float]:
        raise InputError("the label 'X1' covers atoms of different moments; give each its size by label.")

    monkeypatch.setattr("latticedip.study.reports.stated_sizes", refuse)
    document = report_document(tasks.open_study(Path("study.toml")), ReportOptions(modes=True))
    reason = "the label 'X1' covers atoms of different moments; give each its size by label."
    assert document["left_out"] == [{"section": "modes", "reason": reason}]


@pytest.mark.usefixtures("folder")
def test_spectra_and_modes_can_be_left_out() -> None:
    result = run("study.toml", "-o", "x.html", "--no-pictures", "--no-spectra", "--no-modes", "--json")
    document = json.loads(result.stdout)
    assert not {"spectrum", "modes"} & set(document["sections"])
    assert {"section": "spectrum", "reason": "not asked for"} in document["left_out"]
    result = run("study.toml", "-o", "x.html", "--no-pictures", "--no-spectra", "--time", "1")
    assert result.exit_code == 2
    assert result.stderr.endswith("Error: --time and --initial go with spectra: leave out --no-spectra.\n")
    result = run("study.toml", "-o", "x.html", "--no-pictures", "--time", "2", "--initial", "1 1 0", "--json")
    options = json.loads(result.stdout)["sections"]["spectrum"]["inputs"]["options"]
    assert (options["time_us"], options["initial"], options["powder"]) == (2.0, "1 1 0", False)


def test_many_probes_with_long_names_are_drawn_in_parts(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("matplotlib")
    place = "in the middle of the channel that runs along the longest axis of the cell"
    probes = "".join(f'[[probe]]\nname = "muon {i} {place}"\nposition = [0.5, 0.5, 0.1{i}]\n' for i in range(7))
    text = STUDY[: STUDY.index("[[probe]]")] + probes
    (folder / "study.toml").write_text(text, encoding="utf-8")
    document = report_document(tasks.open_study(Path("study.toml")), ReportOptions(rotate=True))
    words = Page(report_html(document)).words()
    # Five probes and two, and spectra of seven probes under two orderings, up to six in a figure.
    assert words.count("Size of the local field at each probe") == 2
    assert "(Part 2 of 2.)" in words
    assert words.count("Spectra of |B| and frequency:") == 4
    assert words.count("Orderings as given: not turned as in the ranking.") == 2
    assert "picture:" not in words
    monkeypatch.setattr("latticedip.report.figures.MOST_ALIKE", 3)
    words = Page(report_html(document)).words()
    assert "Spectra of |B| and frequency:" not in words
    told = "Spectra and polarization, picture: 4 figures of this kind are more than 3. Name some orderings or probes."
    assert told in words


# --- files ----------------------------------------------------------------------------------------------


@pytest.mark.usefixtures("folder")
@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["study.toml", "-o", "x.pdf"], "Error: a report ends in .html or .htm, got 'x.pdf'.\n"),
        (["study.toml", "-o", "study.toml"], "Error: a report ends in .html or .htm, got 'study.toml'.\n"),
        (["study.toml", "-o", "no/x.html"], "Error: cannot write 'no/x.html': No such file or directory.\n"),
        (
            ["layer.xyz", "-o", "x.html"],
            "Error: 'layer.xyz' is a structure file, not a study. Write a study for it with: latticedip start "
            "layer.xyz -o study.toml\n",
        ),
        (
            ["study.toml", "-o", "x.html", "--view", "0 0 0"],
            "Error: --view: got '0 0 0': [0, 0, 0] has no direction.\n",
        ),
        (
            ["study.toml", "-o", "x.html", "--initial", "up"],
            "Error: --initial: got 'up', expected a crystal direction: a, b, c, a*, b*, c*, or three components along "
            "the axes a, b, c, such as \"1 1 0\".\n",
        ),
        (
            ["study.toml", "-o", "x.html", "--ordering", "feromagnet"],
            "Error: the study has no ordering named 'feromagnet'. Those it has: 'stripes <img src=x "
            "onerror=alert(1)>', 'ferromagnet'. Did you mean 'ferromagnet'?\n",
        ),
    ],
)  # fmt: skip
def test_what_cannot_be_reported_is_one_message(folder: Path, arguments: list[str], message: str) -> None:
    result = run(*arguments, "--no-pictures")
    assert (result.exit_code, result.stdout, result.stderr) == (2, "", message)
    assert sorted(path.name for path in folder.iterdir()) == ["layer.xyz", "study.toml"]


def test_an_input_is_never_written_over(folder: Path) -> None:
    os.link(folder / "layer.xyz", folder / "layer.html")
    result = run("study.toml", "-o", "layer.html", "--no-pictures")
    assert result.exit_code == 2
    assert result.stderr == "Error: 'layer.html' is read here (as the crystal). Write to another file.\n"
    assert (folder / "layer.xyz").read_text(encoding="utf-8") == LAYER_XYZ


def test_without_matplotlib_the_message_says_what_to_do(folder: Path) -> None:
    def started(*arguments: str) -> subprocess.CompletedProcess[str]:
        code = (
            "import sys; sys.modules['matplotlib'] = None\n"
            "from latticedip.cli.main import main\n"
            f"main(['report', 'study.toml', '-o', 'x.html', *{arguments!r}])"
        )
        return subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=folder)

    result = started()
    assert result.returncode == 2
    assert result.stderr == (
        "Error: pictures need matplotlib. Install it with: pip install 'latticedip[plot]'. Or leave them out with "
        "--no-pictures.\n"
    )
    assert started("--no-pictures").returncode == 0


# --- pieces ---------------------------------------------------------------------------------------------


def test_tables_as_html() -> None:
    columns = [Column("name", words=True), Column("size\nof it", "µB"), Column("place", words=True, whole=True)]
    assert html_table(columns, [["<a>", "1.5\n2", "0 0 1"]]) == (
        '<div class="wide"><table>\n<thead><tr><th scope="col" class="w">name<span class="unit">&nbsp;</span></th>'
        '<th scope="col">size<br>of it<span class="unit">µB</span></th>'
        '<th scope="col" class="w whole">place<span class="unit">&nbsp;</span></th></tr></thead>\n<tbody>\n'
        '<tr><th scope="row" class="w">&lt;a&gt;</th><td>1.5<br>2</td><td class="w whole">0 0 1</td></tr>\n'
        "</tbody></table></div>"
    )


def test_wide_tables_are_cut_and_short_words_kept_together() -> None:
    columns = [Column("site", words=True), *(Column(f"cell {i}", "µB") for i in range(14)), Column("why", words=True)]
    setter = HtmlSetter()
    setter.table(columns, [["Mn 1", *(["-0.123456"] * 14), "because " * 20]], 1)
    (piece,) = setter.pieces
    blocks = piece.split("\n</tbody></table></div>")[:-1]
    # Eleven columns and a gap each are as wide as a page has letters; the first column leads both tables.
    assert [block.count("<td") for block in blocks] == [10, 5]
    assert all('<th scope="row" class="w whole">Mn 1</th>' in block for block in blocks)
    assert '<td class="w">because' in blocks[1]


def test_a_text_report_is_set_as_html() -> None:
    def text(document: Any) -> str:
        parts = [heading("T & U"), pairs([("k", "<0>")]), "", "Sites", "", table([Column("x")], [["1"]]), "A line."]
        return "\n".join(
            [*parts, paragraph("p < q"), bullets(["one", "one", "two"]), heading("next"), "\x001\x00 & more"]
        )

    assert set_as_html(text, {}, "T & U").split("\n") == [
        "<dl><dt>k</dt><dd>&lt;0&gt;</dd></dl>",
        "<h4>Sites</h4>",
        '<div class="wide"><table>',
        '<thead><tr><th scope="col">x</th></tr></thead>',
        "<tbody>",
        '<tr><th scope="row">1</th></tr>',
        "</tbody></table></div>",
        "<p>A line.</p>",
        "<p>p &lt; q</p>",
        "<ul><li>one</li><li>two</li></ul>",
        "<h3>next</h3>",
        "<p>?1? &amp; more</p>",
    ]
    # Outside, everything is text again, also after an error.
    with pytest.raises(ZeroDivisionError), set_by(HtmlSetter()):
        1 / 0  # noqa: B018
    assert heading("x") == "x\n="


def test_escaping() -> None:
    assert escaped("a<b>\x1b[31m\"'&\u202e") == "a&lt;b&gt;?[31m&quot;&#x27;&amp;?"


def test_drawings_in_one_page_keep_their_names_apart() -> None:
    svg = (
        '<?xml version="1.0"?>\n<!DOCTYPE svg>\n<svg xmlns="u">\n<metadata><a id="m"/></metadata><!-- "x" -->\n'
        '<defs><path id="p1"/></defs><use xlink:href="#p1"/><g clip-path="url(#p1)"/>\n</svg>\n'
    )
    assert inline_svg(svg, "f2-", 'a "b"') == (
        '<svg role="img" aria-label="a &quot;b&quot;" xmlns="u">\n'
        '<defs><path id="f2-p1"/></defs><use xlink:href="#f2-p1"/><g clip-path="url(#f2-p1)"/>\n</svg>'
    )


# --- a browser ------------------------------------------------------------------------------------------


@pytest.mark.slow
@pytest.mark.skipif(CHROMIUM is None, reason="there is no Chromium on this machine")
def test_the_page_opens_in_a_browser(page: Page, folder: Path) -> None:
    assert CHROMIUM is not None
    size = (1000, 6000)
    flags = [
        "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
        "--disable-background-networking", "--disable-component-update", "--disable-sync", "--hide-scrollbars",
        f"--user-data-dir={folder / 'browser'}", f"--window-size={size[0]},{size[1]}",
    ]  # fmt: skip
    target = (folder / "report.html").as_uri()
    shot = folder / "shot.png"
    subprocess.run([CHROMIUM, *flags, f"--screenshot={shot}", target], check=True, capture_output=True, timeout=180)
    image = pytest.importorskip("matplotlib.image").imread(shot)
    assert image.shape[:2] == (size[1], size[0])
    # Black text on white, from the title down to the end of the window, and no broken picture in colour.
    grey = image[..., :3]
    assert float((grey.max(axis=2) - grey.min(axis=2)).max()) < 0.02
    dark = (grey.min(axis=2) < 0.5).any(axis=1)
    assert all(dark[top : top + 600].any() for top in range(0, size[1], 600))
    tree = subprocess.run([CHROMIUM, *flags, "--dump-dom", target], check=True, capture_output=True, timeout=180)
    shown = Page(tree.stdout.decode("utf-8"))
    assert [tag for tag, _ in shown.tags].count("svg") == 6
    assert not {tag for tag, _ in shown.tags} & {"script", "img"}
    assert 'Layers & <script>alert(1)</script> "quoted"' in shown.words()
