"""Static dipolar linewidths of the probes of a study, as documents."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Literal

from latticedip.observables.linewidth import Linewidth, linewidth
from latticedip.study.directions import direction_of
from latticedip.study.documents import document
from latticedip.study.points import Point, points_of

if TYPE_CHECKING:
    from latticedip.study.schema import Study

#: What stands for the boundary: sums over r⁻⁶ converge absolutely.
BOUNDARY = "none needed: sums over r⁻⁶ do not depend on the shape of the sample"
#: Points of one probe whose widths differ by less than this part are listed once.
SAME_WIDTH = 1e-9
CONVENTIONS = (
    "M2 is the mean square dipolar field of the nuclei along a strong field, like spins ({like}) counted 9/4 times; "
    "√M2 is the standard deviation of a line, as a field in mT and as a frequency in kHz.",
    "Every place counts with its occupancy times the abundance of the isotope; the line is near a Gaussian where both "
    "are near 1.",
    "sigma = gamma √M2, as in exp(−sigma² t²/2), for a strong transverse field.",
)
LIKE_WORDS = {
    "isotope": "the probe's own isotope",
    "site": "the probe's own isotope on sites equivalent to its own; on others it is unlike",
}
MUON_CONVENTION = (
    "Delta, of the Kubo–Toyabe function in zero field: gamma times the standard deviation of one field component; with "
    "a direction, of the two components across it, which a polarization along it feels."
)
CAVEAT = (
    "Static nuclear dipoles only, in a field that is stronger than the quadrupole splittings. Left out: motion but for "
    "a spread that a probe states, moments and shielding of electrons, quadrupole effects, and the spread of the "
    "applied field."
)


def linewidth_document(
    study: Study,
    *,
    direction: str | None = None,
    nuclei: Sequence[str] = (),
    like: Literal["isotope", "site"] = "isotope",
    probes: Sequence[str] = (),
    all_equivalent: bool = False,
) -> dict[str, Any]:
    """The document of `linewidth`: one row per point of a probe, with what each isotope adds.

    direction: of the strong field, a crystal direction; None: powder. nuclei: isotopes or elements that count; none:
    all. like: as `linewidth`. probes: the names that were asked for; none: all. all_equivalent: as `points_of`. The
    spread of a probe counts as motion that is fast against the linewidth.

    Raises InputError for an unknown nucleus or direction, and what `linewidth` raises.
    """
    along = None if direction is None else direction_of(study.crystal, direction, "--direction")
    rows: list[dict[str, Any]] = []
    notes: list[str] = []
    for point in points_of(study.crystal, study.probes, all_equivalent=all_equivalent):
        found = linewidth(
            study.crystal,
            point.position,
            particle=point.probe.particle,
            nuclei=list(nuclei) or None,
            direction=along,
            abundances=study.abundances,
            displaced=point.displaced,
            like=like,
            spread=point.spread,
        )
        rows.append(_row(point, found))
        notes += point.notes(study.crystal, found.notes)
    _group(rows)
    muon = any(row["zero_field_width_per_us"] is not None for row in rows)
    stated = ", ".join(f"{name} {share:g}" for name, share in study.abundances.items())
    return document(
        "linewidth",
        files=study.files,
        options={
            "direction": direction,
            "nuclei": list(nuclei) or None,
            "like": like,
            "probes": list(probes) or None,
            "orbit": all_equivalent,
        },
        boundary=BOUNDARY,
        results={
            "title": study.title,
            "direction": None
            if along is None
            else {"cartesian": along.tolist(), "abc": study.crystal.to_crystal_axes(along).tolist()},
            "abundances": dict(study.abundances),
            "rows": rows,
            "conventions": [
                *(text.format(like=LIKE_WORDS[like]) for text in CONVENTIONS),
                *([MUON_CONVENTION] if muon else []),
            ],
            "notes": [
                *dict.fromkeys(notes),
                f"abundances: {f'{stated} as stated, the others natural' if stated else 'natural'}",
                CAVEAT,
            ],
        },
    )


def _row(point: Point, found: Linewidth) -> dict[str, Any]:
    plain = found.to_dict()
    plain.pop("notes")
    root = math.sqrt(found.second_moment_T2)
    contributions = [
        {**part, "share": part["second_moment_T2"] / found.second_moment_T2 if found.second_moment_T2 > 0 else 0.0}
        for part in plain.pop("contributions")
    ]
    per_mT = 2 * math.pi * found.MHz_per_T * 1e-3
    delta = found.zero_field_width_per_us
    return {
        **point.head(),
        **plain,
        "root_second_moment_kHz": 1e3 * found.MHz_per_T * root,
        "zero_field_width_mT": None if delta is None else delta / per_mT,
        "contributions": contributions,
    }


def _group(rows: list[dict[str, Any]]) -> None:
    """Number the points of each probe that have the same widths alike."""
    for name in dict.fromkeys(row["probe"] for row in rows):
        seen: list[tuple[float, float]] = []
        for row in (row for row in rows if row["probe"] == name):
            pair = (row["second_moment_T2"], row["zero_field_width_per_us"] or 0.0)
            same = [
                number
                for number, other in enumerate(seen, start=1)
                if all(abs(x - y) <= SAME_WIDTH * max(x, y) for x, y in zip(pair, other, strict=True))
            ]
            if not same:
                seen.append(pair)
            row["distinct"] = same[0] if same else len(seen)


def linewidth_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a linewidth document for CSV: one line per point for all nuclei, then one for each isotope."""
    table = []
    for row in doc["rows"]:
        head = {key: row[key] for key in ("probe", "particle", "position", "site", "multiplicity", "distinct")}
        whole = {
            key: row[key]
            for key in (
                "second_moment_T2",
                "root_second_moment_mT",
                "root_second_moment_kHz",
                "transverse_width_per_us",
                "zero_field_width_mT",
                "zero_field_width_per_us",
            )
        }
        table.append({**head, "nucleus": "all", "direction": row["direction"] or "powder", **whole})
        for part in row["contributions"]:
            line = {**head, "nucleus": part["isotope"], "like": part["like"], "atoms_per_cell": part["atoms_per_cell"]}
            table.append({**line, "second_moment_T2": part["second_moment_T2"], "share": part["share"]})
    return table
