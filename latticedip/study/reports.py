"""Everything that a report of a study holds, in one document: what its commands give, and what was left out."""

from __future__ import annotations

import logging
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from latticedip.errors import LatticedipError
from latticedip.study import tasks
from latticedip.study.describe import describe_study, show_table
from latticedip.study.directions import direction_of
from latticedip.study.documents import document
from latticedip.study.drawings import drawing_of_study
from latticedip.study.rank_options import RankOptions
from latticedip.study.rankings import rank_table
from latticedip.study.schema import LARGEST_FILE, load_bytes
from latticedip.study.search import stated_sizes
from latticedip.study.spectra import SpectrumOptions

if TYPE_CHECKING:
    from latticedip.study.schema import Study

#: A study file longer than this (letters) is not printed in a report.
LONGEST_TEXT = 100_000
#: Spectra in a report at most, and magnetic ions up to which it holds the modes without being asked.
MOST_SPECTRA, MOST_IONS = 60, 8
#: P(t) is shown over so many turns of the slowest precession, at most over so many of the fastest, and at most this
#: long (µs). Frequencies below a part of the largest one do not count.
SLOW_TURNS, FAST_TURNS, LONGEST_US, NO_FREQUENCY = 4.0, 30.0, 10.0, 1e-3

_log = logging.getLogger(__name__)


@dataclass(frozen=True)
class ReportOptions:
    """What a report holds.

    orderings, probes: names of those that count; none: all. rotate: turn each pattern to its lowest energy, too.
    view: the crystal direction that drawings are seen from; None: that of `drawings`. spectra: spectra and P(t).
    time_us: the last moment of P(t); None: a few turns of the precessions. initial: the direction in the crystal that
    the spin starts along and is seen along; None: P(t) is that of a powder, in an applied field along it. modes: the
    dipolar modes; None: for up to 8 magnetic ions. tol: bound of the lattice sums.
    """

    orderings: tuple[str, ...] = ()
    probes: tuple[str, ...] = ()
    rotate: bool = False
    view: str | None = None
    spectra: bool = True
    time_us: float | None = None
    initial: str | None = None
    modes: bool | None = None
    tol: float = 1e-10


def report_document(study: Study, options: ReportOptions) -> dict[str, Any]:
    """The document of `report`: those of `show`, `rank`, `modes`, `field`, `spectrum`, `shift` and `linewidth`, and
    what drawings show.

    Rank, field and spectrum need orderings, field, spectrum, shift and linewidth probes, shift a susceptibility, modes
    the sizes of moments; what does not apply, and modes, a spectrum, a shift or a linewidth that is refused, is listed
    with the reason.

    Raises InputError for an unknown name, and for a view or an initial direction that is none; and what `show`, `rank`
    and `field` raise.
    """
    if options.initial is not None:
        direction_of(study.crystal, options.initial, "--initial")
    study = tasks.choose(study, orderings=options.orderings, probes=options.probes)
    sections: dict[str, Any] = {"show": describe_study(study)}
    left_out: list[dict[str, str]] = []

    def skip(section: str, reason: str) -> None:
        _log.info("report without %s: %s", section, reason)
        left_out.append({"section": section, "reason": reason})

    def skip_spectra(reason: str) -> None:
        skip("spectrum", reason)
        if asked := [name for name in ("time_us", "initial") if getattr(options, name) is not None]:
            named = " and ".join("--" + name.removesuffix("_us") for name in asked)
            skip("polarization", f"{named} {'has' if len(asked) == 1 else 'have'} no effect: {reason}")

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
    if (reason := _without_modes(study, options)) is not None:
        skip("modes", reason)
    else:
        attempt("modes", lambda: tasks.modes(study, tol=options.tol))
    if study.orderings and study.probes:
        sections["field"] = tasks.field(study, tol=options.tol)
        if (reason := _without_spectra(study, options)) is not None:
            skip_spectra(reason)
        else:
            wanted = _spectrum_options(options, sections["field"])
            attempt("spectrum", lambda: tasks.spectrum(study, wanted))
    else:
        reason = "the study has no probe" if study.orderings else "the study has no ordering"
        skip("field", reason)
        skip_spectra(reason)
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
            "spectra": options.spectra,
            "time_us": options.time_us,
            "initial": options.initial,
            "modes": options.modes,
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


def _without_modes(study: Study, options: ReportOptions) -> str | None:
    """Why a report has no modes; None where it has."""
    if options.modes is False:
        return "not asked for"
    if not any(size > 0 for size in study.moments.values()):
        return "the study states no moment sizes in [moments]"
    try:
        sizes = stated_sizes(study)
    except LatticedipError as error:
        return str(error)
    ions = sum(
        1 for pair in zip(study.crystal.labels, study.crystal.symbols, strict=True) if not sizes.keys().isdisjoint(pair)
    )
    if options.modes is None and ions > MOST_IONS:
        return f"{ions} magnetic ions in the cell take a while; ask for them with --modes"
    return None


def _without_spectra(study: Study, options: ReportOptions) -> str | None:
    """Why a report has no spectra; None where it has."""
    if not options.spectra:
        return "not asked for"
    count = len(study.orderings) * len(study.probes)
    if count > MOST_SPECTRA:
        return f"{count} spectra are more than {MOST_SPECTRA}. Name some with --ordering or --probe"
    return None


def _spectrum_options(options: ReportOptions, fields: Mapping[str, Any]) -> SpectrumOptions:
    """Spectra with P(t): of a powder or, where a direction is given, of a crystal."""
    return SpectrumOptions(
        powder=options.initial is None,
        time_us=options.time_us or shown_time(fields),
        initial=options.initial,
        tol=options.tol,
    )


def shown_time(fields: Mapping[str, Any]) -> float:
    """The last moment of P(t) in µs, a round number, from the frequencies in the home cell."""
    found = [row["frequency_MHz"] for entry in fields["orderings"] for row in entry["rows"]]
    found = [value for value in found if value is not None and math.isfinite(value)]
    turning = [value for value in found if value > NO_FREQUENCY * max(found)]
    if not turning:
        return LONGEST_US
    time = min(SLOW_TURNS / min(turning), FAST_TURNS / max(turning), LONGEST_US)
    step = 10.0 ** math.floor(math.log10(time))
    return step * max(round_number for round_number in (1.0, 2.0, 5.0) if round_number * step <= time * (1 + 1e-9))


def report_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a report document for CSV: those of its ranking or, without orderings, of what was understood."""
    sections = doc["sections"]
    return rank_table(sections["rank"]) if "rank" in sections else show_table(sections["show"])


def _study_text(study: Study) -> str | None:
    """The study file as it is; None where it is too long to print."""
    text = load_bytes(study.path, str(study.path))[:LARGEST_FILE].decode("utf-8-sig")
    return text if len(text) <= LONGEST_TEXT else None
