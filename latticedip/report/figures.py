"""The figures of a page: drawn as SVG within it, numbered, each with a caption that says what it leaves out."""

from __future__ import annotations

import html
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any, TypeVar

from latticedip.errors import LatticedipError
from latticedip.report.spectrum import field_words
from latticedip.report.tables import clean, direction

if TYPE_CHECKING:
    from matplotlib.figure import Figure

#: Orderings in one drawing, lines in one figure of fields with its probes, and spectra in one figure.
DRAWN_TOGETHER, LINES_TOGETHER, PROBES_TOGETHER, SPECTRA_TOGETHER = 6, 60, 5, 6
#: Figures of one kind at most.
MOST_ALIKE = 12
ENERGIES_ONLY = "Exchange and crystal field are left out."
FIELDS_ONLY = "Exchange, crystal field and the probe's own distortion of its surroundings are left out."

Part = tuple[Callable[[], "Figure"], str]
T = TypeVar("T")


class Figures:
    """Numbers figures and keeps the names inside one drawing apart from those of the others."""

    def __init__(self) -> None:
        self.count = 0

    def of_section(self, name: str, sections: Mapping[str, Any]) -> tuple[str, list[str]]:
        """The figures of one section as HTML, and why others are not there."""
        drawn, refused = [], []
        for parts in _pictures(name, sections):
            if len(parts) > MOST_ALIKE:
                refused.append(
                    f"{len(parts)} figures of this kind are more than {MOST_ALIKE}. Name some orderings or probes"
                )
                continue
            for number, (make, caption) in enumerate(parts, start=1):
                part = f" (Part {number} of {len(parts)}.)" if len(parts) > 1 else ""
                try:
                    drawn.append(self._add(make, caption + part))
                except LatticedipError as error:
                    refused.append(str(error))
        return "\n".join(drawn), refused

    def _add(self, make: Callable[[], Figure], caption: str) -> str:
        """A drawing with its caption; raises LatticedipError where it is refused."""
        from latticedip.report.plots import render

        drawn = render(make, "svg").decode("utf-8")
        self.count += 1
        words = clean(f"Figure {self.count}. {caption}")
        inline = inline_svg(drawn, f"f{self.count}-", words)
        return f"<figure>\n{inline}\n<figcaption>{html.escape(words)}</figcaption></figure>"


def inline_svg(svg: str, prefix: str, words: str) -> str:
    """An SVG file as an element of a page: no prologue, comments or metadata, its names with a prefix of their own."""
    body = svg[svg.index("<svg") :].strip()
    body = re.sub(r"<!--.*?-->|<metadata>.*?</metadata>", "", body, flags=re.DOTALL)
    body = re.sub(r'\bid="', f'id="{prefix}', body)
    body = re.sub(r'href="#', f'href="#{prefix}', body)
    body = body.replace("url(#", f"url(#{prefix}")
    body = "\n".join(line for line in body.split("\n") if line.strip())
    return body.replace("<svg", f'<svg role="img" aria-label="{html.escape(clean(words))}"', 1)


def _pictures(name: str, sections: Mapping[str, Any]) -> Iterator[list[Part]]:
    """The figures of a section, those of one kind together."""
    if name == "show":
        yield _drawings(sections["drawing"])
    elif name == "rank":
        yield _ranking(sections["rank"])
    elif name == "modes" and sections["modes"]["bands"] is not None:
        yield _modes(sections["modes"])
    elif name == "field":
        yield _fields(sections["field"])
    elif name == "spectrum":
        yield _spectra(sections["spectrum"])
    elif name == "shift":
        yield _shifts(sections["shift"])


def _drawings(drawing: Mapping[str, Any]) -> list[Part]:
    from latticedip.report.plots import orderings_figure

    seen = direction(drawing["view"]["eye_abc"])
    caption = (
        f"Orderings as given, seen from {seen} (components along a, b, c). Black arrows are moments, centred on their "
        "ions; open arrows are fields, beginning at the probes; both on one scale for all orderings. The home cell is "
        f"black. {FIELDS_ONLY}"
    )
    return [
        _part(orderings_figure, {**drawing, "orderings": some}, caption)
        for some in _in_parts(drawing["orderings"], DRAWN_TOGETHER)
    ]


def _ranking(ranking: Mapping[str, Any]) -> list[Part]:
    from latticedip.report.plots import rank_figure

    ties = "; grey bands join ties" if any(row["tie"] for row in ranking["rows"]) else ""
    return [_part(rank_figure, ranking, f"Energies per magnetic ion, lowest on top{ties}. {ENERGIES_ONLY}")]


def _modes(modes: Mapping[str, Any]) -> list[Part]:
    from latticedip.report.plots import modes_figure

    caption = (
        "Energies of all dipolar modes along the band path; the dashed line is the lowest one anywhere, a lower bound "
        f"for every ordering of moments of these sizes. {ENERGIES_ONLY}"
    )
    return [_part(modes_figure, modes, caption)]


def _fields(fields: Mapping[str, Any]) -> list[Part]:
    from latticedip.report.plots import field_figure

    caption = (
        f"Size of the local field at each probe; × n: at n of its points; bars: standard uncertainties. {FIELDS_ONLY}"
    )
    probes = list(dict.fromkeys(row["probe"] for entry in fields["orderings"] for row in entry["rows"]))
    parts = []
    for entries in _in_parts(fields["orderings"], LINES_TOGETHER):
        together = max(1, min(PROBES_TOGETHER, LINES_TOGETHER // len(entries)))
        for names in _in_parts(probes, together):
            some = [{**entry, "rows": [row for row in entry["rows"] if row["probe"] in names]} for entry in entries]
            parts.append(_part(field_figure, {**fields, "orderings": some}, caption))
    return parts


def _spectra(spectra: Mapping[str, Any]) -> list[Part]:
    from latticedip.report.plots import spectrum_figure

    caption = (
        "Spectra of |B| and frequency: lines as stems as high as their share of all positions equivalent to the probe, "
        f"bands as densities{_signal_words(spectra)}. {FIELDS_ONLY}"
    )
    parts: list[list[dict[str, Any]]] = []
    room = 0
    for entry in spectra["orderings"]:
        for some in _in_parts(entry["spectra"], SPECTRA_TOGETHER):
            if len(some) > room:
                parts.append([])
                room = SPECTRA_TOGETHER
            parts[-1].append({**entry, "spectra": some})
            room -= len(some)
    return [_part(spectrum_figure, {**spectra, "orderings": some}, caption) for some in parts]


def _signal_words(spectra: Mapping[str, Any]) -> str:
    options = spectra["inputs"]["options"]
    if options["time_us"] is None:
        return ""
    if spectra["specimen"] == "powder":
        where = f"in a powder{field_words(spectra)}" if field_words(spectra) else "in a powder in zero field"
    else:
        where = f"in a crystal, for a spin that starts along {options['initial']} and is seen along it"
    return f"; beside them the polarization {where}, without relaxation and nuclear moments"


def _shifts(shifts: Mapping[str, Any]) -> list[Part]:
    from latticedip.report.plots import shift_figure, shift_has_curve

    caption = (
        "Shifts against temperature and against the susceptibility. The chemical shift of the probe's own electrons "
        "and its own distortion of its surroundings are left out."
    )
    return [_part(shift_figure, shifts, caption)] if shift_has_curve(shifts) else []


def _part(make: Callable[[Mapping[str, Any]], Figure], document: Mapping[str, Any], caption: str) -> Part:
    """A figure without the title, which is that of the page."""
    return lambda: make({**document, "title": ""}), caption


def _in_parts(items: Sequence[T], size: int) -> list[Sequence[T]]:
    return [items[first : first + size] for first in range(0, len(items), size)]
