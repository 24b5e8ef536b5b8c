"""Spectra and polarizations as documents: per ordering and probe its lines, bands, histogram and P(t)."""

from __future__ import annotations

import dataclasses
import logging
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import InputError
from latticedip.observables.linewidth import linewidth
from latticedip.observables.polarization import TURNING, direction_at, polarization
from latticedip.observables.spectrum import Spectrum, spectrum
from latticedip.ordering.domains import Domain, domains
from latticedip.study.directions import direction_of
from latticedip.study.documents import document, ordering_head
from latticedip.study.fields import common_boundary
from latticedip.study.mixtures import histogram, mixed_entries, mixture_notes

if TYPE_CHECKING:
    from latticedip.ordering.model import Ordering
    from latticedip.probe import Probe
    from latticedip.study.schema import Study

DomainChoice = Literal["given", "list", "average"]

#: Most bins of a histogram and moments in time of a polarization.
MOST_BINS, MOST_POINTS = 100_000, 100_000
#: Moments in time where their number is not given: so many in a turn of the fastest precession, but at least.
POINTS_PER_TURN, LEAST_POINTS = 12, 401
#: With fewer moments than this in a turn of the fastest precession P(t) looks slower than it is.
RESOLVING_POINTS = 4

_log = logging.getLogger(__name__)


@dataclass(frozen=True)
class SpectrumOptions:
    """What is asked of the spectra of a study.

    powder: True for a powder. domains: the ordering as given, each of its domains, or their average. applied_T: in
    place of the study's applied field, Cartesian. bins: of the histogram. width_T: standard deviation of a Gaussian.
    nuclear_per_us: Δ of the static field of nuclear moments in 1/µs, or "auto" to work it out. time_us: the last
    moment of P(t); None: no P(t). points: moments in time; None: enough for the fastest precession. initial, detector:
    directions in a crystal, as `direction_of` takes them. angle_deg: for a powder in an applied field, between it and
    the direction the spin starts and is seen along; None: 0. seed: of the quasi-random phases.
    """

    powder: bool = False
    domains: DomainChoice = "given"
    applied_T: tuple[float, float, float] | None = None
    bins: int = 200
    width_T: float = 0.0
    nuclear_per_us: float | Literal["auto"] = 0.0
    time_us: float | None = None
    points: int | None = None
    initial: str | None = None
    detector: str | None = None
    angle_deg: float | None = None
    seed: int = 0
    tol: float = 1e-10


def spectrum_document(
    study: Study, options: SpectrumOptions, *, orderings: Sequence[str] = (), probes: Sequence[str] = ()
) -> dict[str, Any]:
    """The document of `spectrum` for all orderings and probes of a study.

    orderings, probes: the names that were asked for; none: all.

    Raises InputError for options that do not fit, and what the spectra raise.
    """
    _check(options)
    directions = _directions(study, options)
    of_nuclei = {probe.name: _nuclear_width(study, probe, options) for probe in study.probes}
    widths = {name: width for name, (width, _) in of_nuclei.items()}
    moving = [f"{name}: nuclear moments: {note}" for name, (_, notes) in of_nuclei.items() for note in notes]
    found = [_spectra(study, ordering, options, widths) for ordering in study.orderings]
    time = _times(options, [result for results in found for _, result in results])
    entries = []
    for ordering, results in zip(study.orderings, found, strict=True):
        placed_by = "" if ordering.reference is None else ordering.reference.how
        turning = options.powder and time is not None and np.any(results[0][1].applied_T)
        of_results = [note for _, result in results for note in result.notes]
        unresolved = _unresolved([result for _, result in results], time)
        told = [*unresolved, *of_results, *moving, *([TURNING] if turning else [])]
        notes = dict.fromkeys([*mixture_notes(study), *told])
        spectra = [
            _entry(result, domain, options, widths[result.probe.name], time, directions) for domain, result in results
        ]
        entries.append(
            {
                **ordering_head(ordering),
                "boundary": results[0][1].boundary,
                "spectra": [*spectra, *mixed_entries(study, results, spectra, options.bins)],
                "notes": [note for note in notes if note not in placed_by],
            }
        )
    return document(
        "spectrum",
        files=study.files,
        options={
            **dataclasses.asdict(options),
            "orderings": list(orderings) or None,
            "probes": list(probes) or None,
        },
        boundary=common_boundary([entry["boundary"] for entry in entries]),
        results={
            "title": study.title,
            "specimen": "powder" if options.powder else "crystal",
            "applied_T": list(study.sample.applied_T.tolist() if options.applied_T is None else options.applied_T),
            "sample": study.sample.to_dict(),
            "orderings": entries,
        },
    )


def spectrum_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a spectrum document for CSV: P(t) where it was asked for, else the histogram."""
    rows = []
    for entry in doc["orderings"]:
        for found in entry["spectra"]:
            lead = {"ordering": entry["ordering"], "k": entry["k"], "probe": found["probe"]}
            if found["domain"] is not None:
                lead |= {"domain": found["domain"]["number"]}
            if found["polarization"] is not None:
                signal = found["polarization"]
                columns = {"time_us": signal["time_us"], "polarization": signal["polarization"]}
            else:
                bins = found["histogram"]
                field, frequency = bins["field_limits_T"], bins["frequency_limits_MHz"]
                columns = {
                    "field_from_T": field[:-1],
                    "field_to_T": field[1:],
                    "frequency_from_MHz": frequency[:-1],
                    "frequency_to_MHz": frequency[1:],
                    "share": bins["share"],
                    "density_per_T": bins["density_per_T"],
                    "density_per_MHz": bins["density_per_MHz"],
                }
            for values in zip(*columns.values(), strict=True):
                rows.append({**lead, **dict(zip(columns, values, strict=True)), "boundary": entry["boundary"]})
    return rows


def _directions(study: Study, options: SpectrumOptions) -> dict[str, FloatArray | None]:
    """Cartesian directions that the spin starts along and is seen along, where they are stated."""
    if options.angle_deg is not None:
        if options.time_us is None:
            raise InputError("--angle belongs to the polarization P(t): ask for one with --time, or leave it out.")
        applied = study.sample.applied_T if options.applied_T is None else np.array(options.applied_T)
        if not options.powder or not np.any(applied):
            raise InputError("--angle is that between an applied field and the spin in a powder; leave it out here.")
        return {"initial": direction_at(applied, options.angle_deg), "detector": None}
    return {
        name: None if text is None else direction_of(study.crystal, text, f"--{name}")
        for name, text in (("initial", options.initial), ("detector", options.detector))
    }


def _spectra(
    study: Study, ordering: Ordering, options: SpectrumOptions, widths: Mapping[str, float]
) -> list[tuple[Domain | None, Spectrum]]:
    """The spectra of all probes under an ordering, where asked for in each of its domains."""
    listed: Sequence[Domain | None] = domains(ordering) if options.domains == "list" else (None,)
    found: list[tuple[Domain | None, Spectrum]] = []
    for probe in study.probes:
        for domain in listed:
            _log.info("spectrum of %s under %s", probe.name, ordering.name)
            result = spectrum(
                ordering if domain is None else domain.ordering,
                probe,
                moment_spread=study.moment_spread or None,
                sample=study.sample,
                applied_T=options.applied_T,
                powder=options.powder,
                average_domains=options.domains == "average",
                width_T=options.width_T,
                nuclear_width_T=widths[probe.name] / (2 * math.pi * probe.MHz_per_T),
                seed=options.seed,
                tol=options.tol,
            )
            found.append((domain, result))
    return found


def _times(options: SpectrumOptions, found: Sequence[Spectrum]) -> FloatArray | None:
    """Moments in time: as many as asked for, else enough for the fastest precession."""
    if options.time_us is None:
        return None
    points = options.points
    if points is None:
        fastest = max(result.distribution.support[1] * result.MHz_per_T for result in found)
        points = int(np.clip(POINTS_PER_TURN * fastest * options.time_us + 1, LEAST_POINTS, MOST_POINTS))
    return np.linspace(0.0, options.time_us, points)


def _unresolved(found: Sequence[Spectrum], time: FloatArray | None) -> list[str]:
    """A remark where the moments in time are too few for the fastest precession."""
    if time is None:
        return []
    fastest = max(part.edges[-1] * result.MHz_per_T for result in found for part in result.distribution.parts)
    turns = fastest * float(time[-1])
    if (len(time) - 1) >= RESOLVING_POINTS * turns:
        return []
    return [
        f"P(t) is unresolved: {len(time)} moments for {turns:.6g} turns of the fastest precession ({fastest:.6g} MHz) "
        f"are fewer than {RESOLVING_POINTS} in a turn, and what lies between them is not shown. Ask for a shorter time"
        + ("" if len(time) >= MOST_POINTS else " or more points")
    ]


def _entry(
    result: Spectrum,
    domain: Domain | None,
    options: SpectrumOptions,
    nuclear_per_us: float,
    time: FloatArray | None,
    directions: Mapping[str, FloatArray | None],
) -> dict[str, Any]:
    placed = None
    if domain is not None:
        placed = {
            "number": domain.number,
            "kind": domain.kind,
            "operation": domain.operation,
            "k": domain.ordering.k.tolist(),
        }
    signal = None
    if time is not None:
        values = polarization(
            result,
            time,
            initial=directions["initial"],
            detector=directions["detector"],
            nuclear_width_per_us=nuclear_per_us,
        ).values
        signal = {"time_us": time.tolist(), "polarization": values.tolist()}
    plain = result.to_dict()
    # The boundary and the notes are those of the ordering, and stand beside it.
    del plain["boundary"], plain["notes"]
    return {
        **plain,
        "nuclear_width_per_us": nuclear_per_us,
        "domain": placed,
        "histogram": histogram(*result.binned(options.bins), result.MHz_per_T),
        "polarization": signal,
    }


def _nuclear_width(study: Study, probe: Probe, options: SpectrumOptions) -> tuple[float, tuple[str, ...]]:
    """Δ of the nuclear moments round a probe in 1/µs, and what it takes for granted of the motion of the probe."""
    if options.nuclear_per_us != "auto":
        return options.nuclear_per_us, ()
    if probe.particle != "muon":
        raise InputError(
            f"{probe.name}: the static width of nuclear moments is worked out for muons only, and the probe is "
            f"{probe.particle}. Give the width as a number, or name the probes to take."
        )
    position = probe.position
    if probe.site is not None:
        position = study.crystal.positions[study.crystal.find(probe.site)[0]]
    found = linewidth(
        study.crystal,
        position,
        particle="muon",
        abundances=study.abundances,
        displaced=probe.displaced,
        spread=probe.spread,
    )
    assert found.zero_field_width_per_us is not None
    return found.zero_field_width_per_us, found.motion_notes


def _check(options: SpectrumOptions) -> None:
    for name, value, most in (("bins", options.bins, MOST_BINS), ("points", options.points, MOST_POINTS)):
        if value is not None and not 2 <= value <= most:
            raise InputError(f"{name} must lie between 2 and {most}, got {value}.")
    if options.time_us is not None and not (math.isfinite(options.time_us) and options.time_us > 0):
        raise InputError(f"the time must be a finite number of µs above 0, got {options.time_us}.")
    stated = (options.initial, options.detector)
    if options.time_us is None and any(value is not None for value in stated):
        raise InputError("an initial direction or a detector belongs to a polarization: ask for one with a time.")
    if options.powder and (options.initial is not None or options.detector is not None):
        raise InputError(
            "--initial and --detector are directions in a crystal, which a powder does not have. Leave them out; in an "
            "applied field --angle says how the spin starts to it."
        )
    if options.time_us is not None and not options.powder and options.initial is None:
        raise InputError(
            "the polarization in a crystal needs the direction in which the spin starts (--initial c, for "
            "example); "
            "for a powder say so (--powder)."
        )
