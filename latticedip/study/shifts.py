"""Coupling tensors and paramagnetic shifts of the probes of a study, as documents."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import InputError
from latticedip.observables.coupling_tensor import CouplingTensor, averaged, site_couplings, summed
from latticedip.observables.shift import Rotation, Shift, averaged_shift, shifts_at
from latticedip.observables.tensor import PrincipalFrame
from latticedip.physics.spread import moment_spread_words, named_clouds
from latticedip.study.directions import direction_of
from latticedip.study.documents import document
from latticedip.study.fields import common_boundary
from latticedip.study.magnetism import common_temperatures, magnetic_groups
from latticedip.study.points import Point, alike, points_of

if TYPE_CHECKING:
    from latticedip.study.probes import WeightedProbe
    from latticedip.study.schema import Study

_Found = tuple[Point, dict[str, CouplingTensor], list[Shift]]

#: Step (degrees) at which a shift against rotation is listed.
STEP_DEG = 5.0
COUPLING_PARTS = {
    "dipolar": "dipolar",
    "lorentz": "Lorentz",
    "demagnetizing": "demagnetizing",
    "contact": "contact",
    "coupling": "total",
}
SHIFT_PARTS = {
    "shift_dipolar": "dipolar",
    "shift_lorentz": "Lorentz",
    "shift_demagnetizing": "demagnetizing",
    "shift_contact": "contact",
    "shift": "total",
}
COUPLING_CONVENTIONS = (
    "B = A m: field at the probe when every ion of that kind carries the same moment m, parallel in all cells; "
    "A > 0 means a field along the moment.",
    "dipolar is the sum inside the Lorentz sphere, its trace is zero; Lorentz is µ0/3V per ion, demagnetizing −µ0 N/V.",
    "Principal values: |zz| ≥ |xx| ≥ |yy| of the dipolar part, asymmetry (yy − xx)/zz.",
)
SHIFT_CONVENTIONS = (
    "K = (B along the applied field − B applied)/B applied: the reference is the bare particle in the applied field, "
    "K > 0 means a larger field and a higher frequency.",
    "Principal values of the symmetric part, |zz − iso| ≥ |xx − iso| ≥ |yy − iso|; asymmetry (yy − xx)/(zz − iso). "
    "They are the edges and the singularity of the line of a powder whose grains all have the stated shape and "
    "orientation.",
)
COUPLING_CAVEAT = (
    "Left out: moments on other sites, the spread of the moment over its ion, and the probe's own effect on the "
    "moments around it."
)
#: The same where the study states the spread of the moments of every magnetic ion.
COUPLING_CAVEAT_EXTENDED = "Left out: moments on other sites, and the probe's own effect on the moments around it."
MEANS_NOTE = (
    "Means over positions with weights are those of a probe that hops between them fast; one that stays at a position "
    "has the tensors there."
)
SHIFT_CAVEAT = (
    "Left out: shielding by the probe's own electrons (chemical shift), conduction electrons and moments on other "
    "sites but for the contact couplings stated, and everything beyond first order in the field."
)


SU_NOTE = (
    "Digits in brackets are the standard uncertainty of the last ones, from those stated of positions and "
    "susceptibilities, to first order; everything else counts as exact."
)


def shift_document(
    study: Study,
    *,
    temperatures_K: Sequence[float] = (),
    rotate_about: str | None = None,
    powder_bins: int | None = None,
    probes: Sequence[str] = (),
    all_equivalent: bool = False,
    tol: float = 1e-10,
) -> dict[str, Any]:
    """The document of `shift`: one row per point of a probe, its coupling tensors and, with χ given, its shifts.

    temperatures_K: where a susceptibility is a table; none: those of the tables. rotate_about: a crystal direction.
    powder_bins: also the line of a powder, in so many bins; None: no line. probes: the names that were asked for; none:
    all. all_equivalent: as `points_of`.

    Raises StudyError where nothing names the magnetic ions, InputError for a temperature, an axis or a powder without a
    susceptibility or outside its table, for an axis together with a powder, and what `site_couplings` raises.
    """
    groups, source = magnetic_groups(study)
    temperatures = _temperatures(study, temperatures_K)
    axis = None
    if rotate_about is not None:
        if not study.susceptibility:
            raise InputError("--rotate-about needs a susceptibility: add a table [susceptibility] to the study.")
        axis = direction_of(study.crystal, rotate_about, "--rotate-about")
    if powder_bins is not None:
        if not study.susceptibility:
            raise InputError("--powder needs a susceptibility: add a table [susceptibility] to the study.")
        if axis is not None:
            raise InputError("--powder and --rotate-about are of a powder and of a crystal. Leave one out.")
    rows: list[dict[str, Any]] = []
    kept: list[_Found] = []
    extended = moment_spread_words(_counting_spread(study, groups))
    boundaries: list[str] = []
    notes: list[str] = []
    for point in points_of(study.crystal, study.probes, all_equivalent=all_equivalent):
        couplings, found = _couplings(study, point, groups, tol)
        shifts = _shifts(study, point, temperatures, tol)
        boundaries += [coupling.boundary for coupling in couplings.values()]
        notes += point.notes(study.crystal, (text for text in found if text not in extended))
        rows.append(
            {
                **point.head(),
                "position": point.position.tolist(),
                "site": next(iter(couplings.values())).site or None,
                "couplings": [_coupling_row(study, name, coupling) for name, coupling in couplings.items()],
                "shifts": [_shift_row(study, shift, axis, powder_bins) for shift in shifts],
            }
        )
        kept.append((point, couplings, shifts))
    means = []
    for whole in study.weighted:
        if all_equivalent:
            notes.append(f"{whole.name}: no mean over its positions beside those equivalent to each; leave --orbit out")
            continue
        members = [next(one for one in kept if one[0].probe.name == member) for member in whole.members]
        means.append(_mean_row(study, whole, members, axis, powder_bins))
    _group(rows)
    shifted = bool(study.susceptibility)
    return document(
        "shift",
        files=study.files,
        options={
            "temperatures_K": list(temperatures_K) or None,
            "rotate_about": rotate_about,
            "powder_bins": powder_bins,
            "probes": list(probes) or None,
            "orbit": all_equivalent,
            "tol": tol,
        },
        boundary=common_boundary(boundaries),
        results={
            "title": study.title,
            "sample": study.sample.to_dict(),
            "magnetic": {name: len(sites) for name, sites in groups.items()},
            "magnetic_from": source,
            "rotate_about": None if axis is None else _direction_row(study, axis),
            "rows": rows,
            "means": means,
            "conventions": [*COUPLING_CONVENTIONS, *(SHIFT_CONVENTIONS if shifted else ())],
            "notes": [
                *dict.fromkeys(notes),
                *extended,
                *([MEANS_NOTE] if means else []),
                *_su_notes(rows),
                SHIFT_CAVEAT if shifted else _coupling_caveat(study, groups),
            ],
        },
    )


def _counting_spread(study: Study, groups: Mapping[str, Sequence[int]]) -> dict[str, Any]:
    """The spreads of moments that the study states of the ions in some groups; a label wins over its element."""
    crystal, stated = study.crystal, study.moment_spread
    sites = [site for group in groups.values() for site in group]
    named = {crystal.labels[i] if crystal.labels[i] in stated else crystal.symbols[i] for i in sites}
    return {name: value for name, value in stated.items() if name in named}


def _coupling_caveat(study: Study, groups: Mapping[str, Sequence[int]]) -> str:
    clouds = named_clouds(study.crystal, study.moment_spread)
    extended = all(np.any(clouds[site]) for group in groups.values() for site in group)
    return COUPLING_CAVEAT_EXTENDED if extended else COUPLING_CAVEAT


def _mean_row(
    study: Study, whole: WeightedProbe, found: Sequence[_Found], axis: FloatArray | None, powder_bins: int | None
) -> dict[str, Any]:
    """The mean of the tensors of a probe over its positions; found: at each of them."""
    couplings = {name: averaged([one[1][name] for one in found], whole.weights) for name in found[0][1]}
    shifts = [averaged_shift(at, whole.weights) for at in zip(*(one[2] for one in found), strict=True)]
    return {
        **found[0][0].head(),
        "probe": whole.name,
        "multiplicity": len(found),
        "positions": [one[0].position.tolist() for one in found],
        "weights": whole.weights.tolist(),
        "couplings": [_coupling_row(study, name, coupling) for name, coupling in couplings.items()],
        "shifts": [_shift_row(study, shift, axis, powder_bins) for shift in shifts],
    }


def _su_notes(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    """Where the numbers in brackets come from, if there are any."""
    stated = any(
        entry[key] is not None and np.any(entry[key])
        for row in rows
        for entries, key in ((row["couplings"], "dipolar_su_T_per_muB"), (row["shifts"], "shift_su"))
        for entry in entries
    )
    return [SU_NOTE] if stated else []


def _temperatures(study: Study, asked: Sequence[float]) -> list[float | None]:
    """Temperatures of the shifts of every point; [None] for single values, none without a susceptibility."""
    known = common_temperatures(study.susceptibility)
    tables = any(chi.temperatures_K is not None for chi in study.susceptibility.values())
    if asked and not tables:
        reason = "the susceptibility is a single value" if study.susceptibility else "it has no [susceptibility]"
        raise InputError(f"--temperature has no meaning for this study: {reason}. Leave it out, or state a table.")
    if not study.susceptibility:
        return []
    if not tables:
        return [None]
    if not asked and not known:
        raise InputError("the tables of the susceptibilities have no range of temperatures in common.")
    return list(asked or known)


def _couplings(
    study: Study, point: Point, groups: Mapping[str, Sequence[int]], tol: float
) -> tuple[dict[str, CouplingTensor], tuple[str, ...]]:
    """Coupling tensor to each kind of ion; shells of contact terms count the ions of all kinds together."""
    sites = sorted(site for group in groups.values() for site in group)
    parts = site_couplings(study.crystal, point.position, sites, tol=tol, **_surroundings(study, point))
    tensors = {
        name: summed(study.crystal, parts, np.searchsorted(sites, sorted(group)), (name,), study.sample)
        for name, group in groups.items()
    }
    return tensors, parts.notes


def _shifts(study: Study, point: Point, temperatures: Sequence[float | None], tol: float) -> list[Shift]:
    if not temperatures:
        return []
    return shifts_at(
        study.crystal,
        point.position,
        study.susceptibility,
        temperatures,
        sample=study.sample,
        tol=tol,
        **_surroundings(study, point),
    )


def _surroundings(study: Study, point: Point) -> dict[str, Any]:
    """What a point brings to the sums (contact terms, spread, displaced neighbours, uncertainty), and extended ions."""
    return {
        "moment_spread": study.moment_spread or None,
        "contact": point.contact,
        "spread": point.spread,
        "displaced": point.displaced,
        "position_su": point.position_su,
    }


def _coupling_row(study: Study, name: str, coupling: CouplingTensor) -> dict[str, Any]:
    plain = coupling.to_dict()
    kept = {key: value for key, value in plain.items() if key not in ("position", "site", "magnetic", "notes")}
    return {
        "ion": name,
        **kept,
        "dipolar_principal_axes_abc": study.crystal.to_crystal_axes(coupling.principal_axes).tolist(),
        "dipolar_principal_axes_free": free_axes(coupling.principal),
    }


def _shift_row(study: Study, shift: Shift, axis: FloatArray | None, powder_bins: int | None) -> dict[str, Any]:
    plain = shift.to_dict()
    kept = {key: value for key, value in plain.items() if key not in ("position", "site", "boundary", "notes")}
    row = {
        **kept,
        "shift_principal_axes_abc": study.crystal.to_crystal_axes(shift.principal.axes).tolist(),
        "shift_principal_axes_free": free_axes(shift.principal),
    }
    field = float(np.linalg.norm(study.sample.applied_T))
    row["shift_along_applied"] = shift.along(study.sample.applied_T) if field > 0 else None
    su = shift.su_along(study.sample.applied_T) if field > 0 else np.nan
    row["shift_along_applied_su"] = None if np.isnan(su) else su
    if powder_bins is not None:
        limits, density = shift.powder.binned(powder_bins)
        row["powder"] = {
            "shift_limits": limits.tolist(),
            "density": density.tolist(),
            "share": (density * np.diff(limits)).tolist(),
            "mean": shift.powder.mean,
            "rms_deviation": float(np.sqrt(shift.powder.variance)),
        }
    if axis is not None:
        turned: Rotation = shift.rotation(axis, np.arange(0.0, 360.0 + STEP_DEG / 2, STEP_DEG))
        row["rotation"] = {**turned.to_dict(), "start_abc": _direction_row(study, turned.start)["abc"]}
    return row


def free_axes(frame: PrincipalFrame) -> list[bool]:
    """Which principal axes may point anywhere across the others, since another principal value is the same."""
    values = frame.values
    slack = max(2 * frame.zero, 1e-9 * float(np.abs(values).max(initial=0.0)))
    return [any(abs(values[i] - values[j]) <= slack for j in range(3) if j != i) for i in range(3)]


def _direction_row(study: Study, direction: FloatArray) -> dict[str, Any]:
    return {"cartesian": direction.tolist(), "abc": study.crystal.to_crystal_axes(direction).tolist()}


def _group(rows: list[dict[str, Any]]) -> None:
    """Number the points of each probe that have the same tensors alike."""
    for name in dict.fromkeys(row["probe"] for row in rows):
        mine = [row for row in rows if row["probe"] == name]
        signatures = [
            np.array(
                [c[f"{part}_T_per_muB"] for c in row["couplings"] for part in ("dipolar", "contact")]
                + [s["shift"] for s in row["shifts"]]
            )
            for row in mine
        ]
        error = max((c["error_bound_T_per_muB"] for row in mine for c in row["couplings"]), default=0.0)
        for number, group in enumerate(alike(signatures, error), start=1):
            for index in group:
                mine[index]["distinct"] = number


def shift_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a shift document for CSV: shifts at every angle, or the bins of a powder line, or shifts, or else
    coupling tensors.
    """
    table: list[dict[str, Any]] = []
    for row in [*doc["rows"], *doc["means"]]:
        head = {key: row.get(key) for key in ("probe", "particle", "position", "site", "multiplicity", "distinct")}
        # The mean over positions has none of its own.
        head["position"] = head["position"] or [None, None, None]
        for shift in row["shifts"]:
            lead = {**head, "temperature_K": shift["temperature_K"], "chi_cm3_per_mol": shift["chi_cm3_per_mol"]}
            if "rotation" in shift:
                pairs = zip(shift["rotation"]["angles_deg"], shift["rotation"]["shift"], strict=True)
                boundary = doc["boundary"]
                table += [{**lead, "angle_deg": angle, "shift": k, "boundary": boundary} for angle, k in pairs]
                continue
            if "powder" in shift:
                line = shift["powder"]
                bins = zip(line["shift_limits"], line["shift_limits"][1:], line["share"], line["density"], strict=False)
                table += [
                    {**lead, "shift_from": low, "shift_to": high, "share": share, "density": density}
                    | {"boundary": doc["boundary"]}
                    for low, high, share, density in bins
                ]
                continue
            line = {**lead, "shift_isotropic": shift["shift_isotropic"]}
            line["shift_isotropic_su"] = shift["shift_isotropic_su"]
            line |= _spread("shift", shift, SHIFT_PARTS, "")
            line["shift_along_applied"] = shift["shift_along_applied"]
            line["shift_along_applied_su"] = shift["shift_along_applied_su"]
            table.append({**line, "boundary": doc["boundary"]})
        for coupling in [] if row["shifts"] else row["couplings"]:
            line = {**head, "ion": coupling["ion"], "ions_per_cell": coupling["ions_per_cell"]}
            line |= _spread("dipolar", coupling, COUPLING_PARTS, "_T_per_muB")
            table.append({**line, "boundary": coupling["boundary"]})
    return table


def _spread(name: str, entry: dict[str, Any], parts: Mapping[str, str], unit: str) -> dict[str, Any]:
    """Principal values and axes of a tensor, and all elements of its parts, as columns."""
    line: dict[str, Any] = {}
    letters = ("xx", "yy", "zz")
    for word, value in zip(letters, entry[f"{name}_principal_values{unit}"], strict=True):
        line[f"{name}_principal_{word}{unit}"] = value
    for word, su in zip(letters, entry[f"{name}_principal_values_su{unit}"] or [None] * 3, strict=True):
        line[f"{name}_principal_{word}_su{unit}"] = su
    for word, axis in zip(letters, entry[f"{name}_principal_axes"], strict=True):
        line[f"{name}_axis_{word}"] = axis
    line[f"{name}_asymmetry"] = entry[f"{name}_asymmetry"]
    for part in parts:
        for i, first in enumerate("xyz"):
            for j, second in enumerate("xyz"):
                line[f"{part}_{first}{second}{unit}"] = entry[f"{part}{unit}"][i][j]
    return line
