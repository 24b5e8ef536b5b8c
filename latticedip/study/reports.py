"""Everything that a report of a study holds, in one document: what its commands give, and what was left out."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from latticedip.errors import LatticedipError
from latticedip.study import tasks
from latticedip.study.describe import describe_study, show_table
from latticedip.study.documents import document
from latticedip.study.drawings import drawing_of_study
from latticedip.study.rank_options import RankOptions
from latticedip.study.rankings import rank_table
from latticedip.study.schema import LARGEST_FILE, load_bytes

if TYPE_CHECKING:
    from latticedip.study.schema import Study

#: A study file longer than this (letters) is not printed in a report.
LONGEST_TEXT = 100_000

_log = logging.getLogger(__name__)


@dataclass(frozen=True)
class ReportOptions:
    """What a report holds.

    orderings, probes: names of those that count; none: all. rotate: turn each pattern to its lowest energy, too.
    view: the crystal direction that drawings are seen from; None: that of `drawings`. tol: bound of the lattice sums.
    """

    orderings: tuple[str, ...] = ()
    probes: tuple[str, ...] = ()
    rotate: bool = False
    view: str | None = None
    tol: float = 1e-10


def report_document(study: Study, options: ReportOptions) -> dict[str, Any]:
    """The document of `report`: those of `show`, `rank`, `field`, `shift` and `linewidth`, and what drawings show.

    Rank and field need orderings, field, shift and linewidth probes, shift a susceptibility; what does not apply, and
    a shift, a linewidth or a drawing that is refused, is listed with the reason.

    Raises InputError for an unknown name and for a view that is no direction, and what `show`, `rank` and `field`
    raise.
    """
    study = tasks.choose(study, orderings=options.orderings, probes=options.probes)
    sections: dict[str, Any] = {"show": describe_study(study)}
    left_out: list[dict[str, str]] = []

    def skip(section: str, reason: str) -> None:
        _log.info("report without %s: %s", section, reason)
        left_out.append({"section": section, "reason": reason})

    def attempt(section: str, make: Callable[[], dict[str, Any]]) -> None:
        try:
            sections[section] = make()
        except LatticedipError as error:
            skip(section, str(error))

    drawn = drawing_of_study(study, view=options.view, tol=options.tol)
    sections["drawing"] = drawn
    if study.orderings:
        sections["rank"] = tasks.rank(study, RankOptions(rotate=options.rotate, tol=options.tol))
    else:
        skip("rank", "the study has no ordering")
    if study.orderings and study.probes:
        sections["field"] = tasks.field(study, tol=options.tol)
    else:
        skip("field", "the study has no probe" if study.orderings else "the study has no ordering")
    if study.probes and study.susceptibility:
        attempt("shift", lambda: tasks.shift(study, tol=options.tol))
    else:
        skip("shift", "the study has no probe" if study.susceptibility else "the study states no susceptibility")
    if study.probes:
        attempt("linewidth", lambda: tasks.linewidth(study))
    else:
        skip("linewidth", "the study has no probe")
    main = sections.get("rank") or sections["show"]
    return document(
        "report",
        files=study.files,
        options={
            "orderings": list(options.orderings) or None,
            "probes": list(options.probes) or None,
            "rotate": options.rotate,
            "view": options.view,
            "tol": options.tol,
        },
        boundary=main["boundary"],
        results={
            "title": study.title,
            "study_text": _study_text(study),
            "sections": sections,
            "left_out": left_out,
        },
    )


def report_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a report document for CSV: those of its ranking or, without orderings, of what was understood."""
    sections = doc["sections"]
    return rank_table(sections["rank"]) if "rank" in sections else show_table(sections["show"])


def _study_text(study: Study) -> str | None:
    """The study file as it is; None where it is too long to print."""
    text = load_bytes(study.path, str(study.path))[:LARGEST_FILE].decode("utf-8-sig")
    return text if len(text) <= LONGEST_TEXT else None
