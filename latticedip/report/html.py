"""A report of a study as one HTML page that needs nothing else: no network, no script; pictures are drawn in it."""

from __future__ import annotations

import dataclasses
import html
import re
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from latticedip.report.field import field_text
from latticedip.report.figures import Figures
from latticedip.report.linewidth import linewidth_text
from latticedip.report.modes import modes_text
from latticedip.report.rank import rank_text
from latticedip.report.shift import shift_text
from latticedip.report.show import show_text
from latticedip.report.spectrum import spectrum_text
from latticedip.report.tables import (
    GAP,
    Column,
    blocks_of,
    clean,
    fixed,
    set_by,
    short,
    vector,
    widest,
)

#: Letters across a table of a page; a wider one is cut into several. Columns of words up to so many letters never wrap.
TABLE_LETTERS, SHORT_WORDS = 116, 24
SECTIONS: dict[str, tuple[str, Callable[[Mapping[str, Any]], str]]] = {
    "show": ("What was understood", show_text),
    "rank": ("Ranking by dipolar energy", rank_text),
    "modes": ("Dipolar modes", modes_text),
    "field": ("Local fields", field_text),
    "spectrum": ("Spectra and polarization", spectrum_text),
    "shift": ("Paramagnetic shifts", shift_text),
    "linewidth": ("Static widths from nuclear moments", linewidth_text),
}
#: Nothing may be fetched or run; the page and its pictures carry their own styles.
POLICY = "default-src 'none'; style-src 'unsafe-inline'"
STYLE = """
body { font: 0.94rem/1.45 "DejaVu Sans", Arial, Helvetica, sans-serif; color: #000; background: #fff;
  max-width: 62rem; margin: 2rem auto; padding: 0 1rem; }
h1 { font-size: 1.6rem; margin-bottom: 0.2rem; }
h2 { font-size: 1.25rem; margin-top: 2.4rem; border-bottom: 1px solid #000; padding-bottom: 0.15rem; }
h3 { font-size: 1.05rem; margin: 1.6rem 0 0.4rem; }
h4 { font-size: 0.95rem; margin: 1.2rem 0 0.3rem; }
p, ul, dl { margin: 0.5rem 0; }
nav ul { list-style: none; padding: 0; display: flex; flex-wrap: wrap; gap: 0.2rem 1.2rem; }
a { color: #000; }
.summary { border: 1px solid #000; padding: 0.5rem 1rem; margin: 1rem 0; }
.wide { overflow-x: auto; margin: 0.5rem 0 1rem; }
table { border-collapse: collapse; font-size: 0.87rem; }
th, td { padding: 0.12rem 0.7rem 0.12rem 0; text-align: right; vertical-align: top; font-weight: normal;
  font-variant-numeric: tabular-nums; white-space: nowrap; }
th.w, td.w { text-align: left; white-space: normal; max-width: 24rem; }
th.whole, td.whole { white-space: nowrap; max-width: none; }
thead th { vertical-align: bottom; font-weight: bold; border-bottom: 1px solid #000; }
thead .unit { display: block; font-weight: normal; color: #444; }
tbody tr:nth-child(even) { background: #f2f2f2; }
dl { display: grid; grid-template-columns: max-content 1fr; gap: 0.1rem 1.2rem; font-size: 0.92rem; }
dt { color: #444; } dd { margin: 0; overflow-wrap: anywhere; }
pre { font: 0.82rem/1.35 "DejaVu Sans Mono", monospace; background: #f2f2f2; padding: 0.6rem 0.8rem; overflow-x: auto; }
code { font: 0.82rem "DejaVu Sans Mono", monospace; }
figure { margin: 1rem 0 1.6rem; overflow-x: auto; } figure svg { max-width: 100%; min-width: 36rem; height: auto; }
figcaption { font-size: 0.87rem; color: #222; max-width: 46rem; }
.warning { border-left: 4px solid #000; padding-left: 0.8rem; }
@media print { html { font-size: 12px; } body { margin: 0; max-width: none; } h2, h3, h4 { break-after: avoid; }
  figure, tr { break-inside: avoid; } figure, .wide { overflow: visible; }
  figure svg { min-width: 0; max-height: 230mm; }
  pre { white-space: pre-wrap; overflow-wrap: anywhere; } .whole { white-space: normal; } nav { display: none; } }
"""


def report_html(document: Mapping[str, Any], *, pictures: bool = True) -> str:
    """Return the page of a report document. All text of the study and its files is escaped.

    pictures: draw them, as SVG within the page.

    Raises InputError where pictures are asked for and matplotlib is missing.
    """
    figures = Figures()
    left_out = [(_section_title(entry["section"]), entry["reason"]) for entry in document["left_out"]]
    if pictures:
        from latticedip.report.plots import check_library

        check_library()
    sections = document["sections"]
    parts: list[tuple[str, str, str]] = [
        ("inputs", "Inputs", _inputs(document)),
        ("assumptions", "Assumptions", _assumptions(document)),
    ]
    for name, (title, text) in SECTIONS.items():
        if name not in sections:
            continue
        if name == "spectrum" and pictures:
            text = _without_signals
        body = set_as_html(text, sections[name], document["title"])
        if pictures:
            drawn, refused = figures.of_section(name, sections)
            left_out += [(title + ", picture", reason) for reason in refused]
            body = drawn + body if name != "show" else body + drawn
        if name in ("field", "spectrum") and document["inputs"]["options"]["rotate"]:
            body = "<p>Orderings as given: not turned as in the ranking.</p>\n" + body
        parts.append((name, title, body))
    parts.append(("caveats", "What this does not say", _caveats(document, left_out)))
    listed = "".join(f'<li><a href="#{name}">{title}</a></li>' for name, title, _ in parts)
    body = "\n".join(f'<section id="{name}">\n<h2>{title}</h2>\n{text}\n</section>' for name, title, text in parts)
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{POLICY}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{escaped(document['title'])}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n"
        f"<h1>{escaped(document['title'])}</h1>\n<p>Report of latticedip {escaped(document['version'])}.</p>\n"
        f"{_summary(document)}\n<nav><ul>{listed}</ul></nav>\n{body}\n</body>\n</html>\n"
    )


def _section_title(name: str) -> str:
    return "Polarization with time" if name == "polarization" else SECTIONS[name][0]


def _without_signals(document: Mapping[str, Any]) -> str:
    """The spectra without a table of P(t), which is drawn."""
    return spectrum_text(document, signals=False)


def escaped(text: str) -> str:
    """Text as HTML: nothing of it is taken for markup; control characters are gone."""
    return html.escape(clean(text), quote=True)


# --- tables and sentences -------------------------------------------------------------------------------


class HtmlSetter:
    """Sets what the text reports consist of as HTML; leaves a mark in the text for every piece."""

    def __init__(self) -> None:
        self.pieces: list[str] = []

    def _keep(self, piece: str) -> str:
        self.pieces.append(piece)
        return f"\0{len(self.pieces) - 1}\0"

    def table(self, columns: Sequence[Column], rows: Sequence[Sequence[str]], keys: int) -> str:
        """Set a table whose first ``keys`` columns name the line; a wide one as several."""
        sizes = [
            max(widest(text) for text in (column.head, column.unit, *(row[i] for row in rows)))
            for i, column in enumerate(columns)
        ]
        kept = [
            dataclasses.replace(column, whole=column.whole or (column.words and size <= SHORT_WORDS))
            for column, size in zip(columns, sizes, strict=True)
        ]
        least = [
            SHORT_WORDS if column.words and not column.whole else size for column, size in zip(kept, sizes, strict=True)
        ]
        blocks = blocks_of(least, TABLE_LETTERS - GAP, keys)
        return self._keep(
            "\n".join(
                html_table([kept[i] for i in block], [[row[i] for i in block] for row in rows], keys)
                for block in blocks
            )
        )

    def pairs(self, items: Sequence[tuple[str, str]]) -> str:
        """Set names and values."""
        return self._keep(_pairs(items))

    def paragraph(self, text: str) -> str:
        """Set running text."""
        return self._keep(f"<p>{escaped(text)}</p>")

    def bullets(self, sentences: Sequence[str]) -> str:
        """Set a list of sentences."""
        return self._keep(_bullets(sentences))

    def heading(self, text: str) -> str:
        """Set a heading."""
        return self._keep(f"<h3>{escaped(text)}</h3>")


def set_as_html(text: Callable[[Mapping[str, Any]], str], document: Mapping[str, Any], title: str) -> str:
    """A text report as HTML, without the heading that repeats the title of the page.

    Lines of their own in front of a piece become its heading, other lines paragraphs.
    """
    setter = HtmlSetter()
    with set_by(setter):
        lines = [line for line in text(document).split("\n") if line.strip()]
    pieces = [setter.pieces[int(line.strip("\0"))] if re.fullmatch("\0[0-9]+\0", line) else None for line in lines]
    out = []
    for number, (line, piece) in enumerate(zip(lines, pieces, strict=True)):
        if piece is not None:
            out.append(piece)
            continue
        leads = number + 1 < len(lines) and pieces[number + 1] is not None and not line.rstrip().endswith(".")
        out.append(f"<h4>{escaped(line.strip())}</h4>" if leads else f"<p>{escaped(line.strip())}</p>")
    if out and out[0] == f"<h3>{escaped(title)}</h3>":
        del out[0]
    return "\n".join(out)


def html_table(columns: Sequence[Column], rows: Sequence[Sequence[str]], keys: int = 1) -> str:
    """A table as HTML; the first ``keys`` columns name the line."""
    units = any(column.unit for column in columns)
    head = []
    for column in columns:
        unit = f'<span class="unit">{escaped(column.unit) or "&nbsp;"}</span>' if units else ""
        head.append(f'<th scope="col"{_class(column)}>{_lines(column.head)}{unit}</th>')
    lines = []
    for row in rows:
        cells = []
        for place, (column, cell) in enumerate(zip(columns, row, strict=True)):
            tag, scope = ("th", ' scope="row"') if place < keys else ("td", "")
            cells.append(f"<{tag}{scope}{_class(column)}>{_lines(cell)}</{tag}>")
        lines.append(f"<tr>{''.join(cells)}</tr>")
    return (
        f'<div class="wide"><table>\n<thead><tr>{"".join(head)}</tr></thead>\n<tbody>\n'
        + "\n".join(lines)
        + "\n</tbody></table></div>"
    )


def _class(column: Column) -> str:
    if not column.words:
        return ""
    return ' class="w whole"' if column.whole else ' class="w"'


def _lines(text: str) -> str:
    return "<br>".join(escaped(line) for line in text.split("\n"))


def _pairs(items: Sequence[tuple[str, str]]) -> str:
    return "<dl>" + "".join(f"<dt>{escaped(name)}</dt><dd>{escaped(value)}</dd>" for name, value in items) + "</dl>"


def _bullets(sentences: Sequence[str]) -> str:
    return "<ul>" + "".join(f"<li>{escaped(sentence)}</li>" for sentence in sentences) + "</ul>"


# --- what is said beside the results --------------------------------------------------------------------


def summary_sentences(document: Mapping[str, Any]) -> list[str]:
    """The outcome of a report document in a few sentences: which ordering is lowest, boundary, warnings."""
    sentences = []
    rank = document["sections"].get("rank")
    if rank is not None:
        rows = rank["rows"]
        tied = [row["ordering"] for row in rows if row["tie"] and row["above_lowest_ueV_per_ion"] <= _bound(rows)]
        turned = ", each pattern turned to its lowest energy" if rank["inputs"]["options"]["rotate"] else ""
        first = rows[0]
        if len(rows) == 1:
            sentences.append(f"The dipolar energy of {first['ordering']} is {_energy(first)}.")
        elif len(tied) > 1:
            sentences.append(f"Of {len(rows)} orderings, {', '.join(tied)} share the lowest dipolar energy{turned}.")
        else:
            sentences.append(
                f"Of {len(rows)} orderings, the dipolar energy is lowest for {first['ordering']}{turned}: "
                f"{_energy(first)}, {short(rows[1]['above_lowest_ueV_per_ion'], 5)} µeV per ion below "
                f"{rows[1]['ordering']}."
            )
    sentences.append(f"Boundary assumed: {document['boundary']}.")
    sentences += [f"{entry['reason']}." for entry in document["left_out"] if entry["section"] == "polarization"]
    warnings = len(document["sections"]["show"]["warnings"])
    if warnings:
        sentences.append(f"{warnings} warning{'s' if warnings > 1 else ''}, listed at the end.")
    return sentences


def _summary(document: Mapping[str, Any]) -> str:
    sentences = "".join(f"<p>{escaped(sentence)}</p>" for sentence in summary_sentences(document))
    return f'<div class="summary">{sentences}</div>'


def _bound(rows: Sequence[Mapping[str, Any]]) -> float:
    return 2 * max(row["error_bound_ueV_per_ion"] for row in rows) + 1e-12 * abs(rows[0]["energy_ueV_per_ion"])


def _energy(row: Mapping[str, Any]) -> str:
    micro, kelvin = short(row["energy_ueV_per_ion"], 5), short(row["energy_K_per_ion"], 4)
    return f"{micro} µeV ({kelvin} K) per magnetic ion".replace("-", "−")


def _inputs(document: Mapping[str, Any]) -> str:
    columns = [
        Column("role", words=True, whole=True),
        Column("file", words=True),
        Column("SHA-256 of its content", words=True, whole=True),
    ]
    rows = [[entry["role"], entry["path"], entry["sha256"]] for entry in document["inputs"]["files"]]
    asked = {key: value for key, value in document["inputs"]["options"].items() if value not in (None, False)}
    parts = [html_table(columns, rows), _pairs([(key, _option(value)) for key, value in asked.items()])]
    text = document["study_text"]
    if text is None:
        parts.append("<p>The study file is too long to be printed here.</p>")
    else:
        # The lines of a file end in what its system ends them in; tabs are blanks on paper.
        shown = "\n".join(escaped(line.expandtabs(4)) for line in text.splitlines())
        parts += ["<h3>The study file</h3>", f"<pre>{shown}</pre>"]
    return "\n".join(parts)


def _option(value: Any) -> str:
    if isinstance(value, list):
        return ", ".join(str(item) for item in value)
    return "yes" if value is True else str(value)


def _assumptions(document: Mapping[str, Any]) -> str:
    sample = document["sections"]["show"]["sample"]
    tol = document["inputs"]["options"]["tol"]
    items = [("boundary", document["boundary"]), ("shape of the sample", sample["shape"])]
    if any(any(row) for row in sample["demagnetizing_tensor"]):
        tensor = "; ".join(" ".join(fixed(x, 6) for x in row) for row in sample["demagnetizing_tensor"])
        items.append(("demagnetizing tensor N", f"{tensor} (rows, Cartesian)"))
    if not sample["uniform"]:
        items.append(("N is", "the volume average; the demagnetizing field is not uniform"))
    items += [
        ("applied field", f"{vector(sample['applied_T'])} T, Cartesian"),
        ("tol", f"{tol:g}: every lattice sum is right to tol times the larger of 1 T/µB and its largest element"),
        ("sum at k = 0", "that without a demagnetizing field (N = 0); shape and Lorentz field are parts of their own"),
        ("phases", "m(R) = Re[S exp(−2πi k·R)]: the phase counts cells"),
        ("frame", "Cartesian vectors are in the frame of the crystal; a b c are unit vectors along its axes"),
    ]
    return _pairs(items)


def _caveats(document: Mapping[str, Any], left_out: Sequence[tuple[str, str]]) -> str:
    sections = document["sections"]
    notes = [
        note for name in ("rank", "modes", "shift", "linewidth") if name in sections for note in sections[name]["notes"]
    ]
    parts = [_bullets(list(dict.fromkeys(notes)))] if notes else []
    warnings = sections["show"]["warnings"]
    if warnings:
        parts += ["<h3>Warnings</h3>", f'<div class="warning">{_bullets(warnings)}</div>']
    if left_out:
        sentences = [f"{title}: {reason.rstrip('.')}." for title, reason in left_out]
        parts += ["<h3>Left out of this report</h3>", _bullets(sentences)]
    return "\n".join(parts) or "<p>Nothing was left out.</p>"
