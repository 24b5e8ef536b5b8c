"""Local fields as documents: one row per probe and point, vectors in the axes and the unit asked for."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from latticedip.checks import FloatArray
from latticedip.physics.weighted import weighted_rows
from latticedip.study.documents import document, home_cell_notes, ordering_head
from latticedip.units import T_PER_GAUSS

if TYPE_CHECKING:
    from latticedip.crystal.model import Crystal
    from latticedip.physics.field import LocalField
    from latticedip.study.schema import Study

Axes = Literal["cartesian", "crystal", "polar"]
Unit = Literal["T", "G"]

#: The parts of a field by the keys of a document, in the order in which they are reported, and their names in words.
PARTS = {
    "dipolar": "dipolar",
    "lorentz": "Lorentz",
    "demagnetizing": "demagnetizing",
    "contact": "contact",
    "applied": "applied",
    "field": "total",
}
#: What stands beside averages over positions.
AVERAGES_NOTE = (
    "averages over positions with weights: the mean field is what a probe feels that hops between them much faster "
    "than it precesses; one that stays feels one of the fields (see `spectrum`); averages carry no uncertainty"
)
#: What stands beside a field with an uncertainty.
SU_NOTE = (
    "digits in brackets are the standard uncertainty of the last ones, from those stated of moments, sites and probes, "
    "to first order; everything else counts as exact"
)


def field_document(
    study: Study,
    fields: Sequence[LocalField],
    *,
    axes: Axes = "cartesian",
    unit: Unit = "T",
    orderings: Sequence[str] = (),
    probes: Sequence[str] = (),
    tol: float = 1e-10,
) -> dict[str, Any]:
    """The document of `field`: per ordering one row per probe and point, vectors in the axes and unit asked for.

    orderings, probes: the names that were asked for; none: all.
    """
    entries = []
    for ordering, result in zip(study.orderings, fields, strict=True):
        plain = result.to_dict()
        rows = [field_row(row, study.crystal, axes, unit) for row in plain["rows"]]
        averages = _averages(study, result, axes, unit)
        _add_averages(rows, study, averages)
        placed = "" if ordering.reference is None else ordering.reference.how
        uncertain = [SU_NOTE] if any(row.get("field_size_su_T") for row in plain["rows"]) else []
        notes = [note for note in [*plain["notes"], *uncertain, *home_cell_notes([ordering])] if note not in placed]
        notes += [AVERAGES_NOTE] if averages else []
        entries.append({**ordering_head(ordering), **plain, "rows": rows, "averages": averages, "notes": notes})
    return document(
        "field",
        files=study.files,
        options={
            "axes": axes,
            "unit": unit,
            "orderings": list(orderings) or None,
            "probes": list(probes) or None,
            "tol": tol,
        },
        boundary=common_boundary([result.boundary for result in fields]),
        results={"title": study.title, "axes": axes, "sample": study.sample.to_dict(), "orderings": entries},
    )


def _averages(study: Study, result: LocalField, axes: Axes, unit: Unit) -> list[dict[str, Any]]:
    """One entry per probe at several positions, or per copy of these in the cell of the ordering."""
    factor = 1.0 if unit == "T" else 1.0 / T_PER_GAUSS
    entries = []
    for whole in study.weighted:
        copies = weighted_rows(result, whole.members, whole.weights)
        for number, found in enumerate(copies, start=1):
            chosen = np.arange(len(result.points)) if found.rows is None else found.rows
            zero = 3**0.5 * float(whole.weights @ result.error_bound_T[chosen]) * factor
            size = float(np.linalg.norm(found.mean_T))
            per_T = float(result.MHz_per_T[chosen[0]])
            entries.append(
                {
                    "probe": whole.name,
                    "copy": number,
                    "copies": len(copies),
                    "points": [int(row) + 1 for row in chosen],
                    "weights": whole.weights.tolist(),
                    **vector_keys("mean_field", found.mean_T * factor, study.crystal, axes, f"_{unit}", zero),
                    f"size_of_mean_field_{unit}": size * factor,
                    "frequency_of_mean_field_MHz": size * per_T,
                    f"mean_size_{unit}": found.mean_size_T * factor,
                    "mean_frequency_MHz": found.mean_size_T * per_T,
                    f"rms_size_{unit}": found.rms_size_T * factor,
                    f"rms_deviation_{unit}": found.rms_deviation_T * factor,
                    f"mean_error_bound_{unit}": zero / 3**0.5,
                }
            )
    return entries


def _add_averages(rows: list[dict[str, Any]], study: Study, averages: Sequence[dict[str, Any]]) -> None:
    """Give every row its weight (None for a probe at one place) and the averages it belongs to, for flat tables.

    Studies whose probes are all at one place have no such keys.
    """
    if not averages:
        return
    members = {member for whole in study.weighted for member in whole.members}
    told = [key for key in averages[0] if key not in ("probe", "points", "weights")]
    for number, row in enumerate(rows, start=1):
        row |= {"weight": None, "of_probe": None}
        row |= {key: [None] * 3 if isinstance(averages[0][key], list) else None for key in told}
        if row["probe"] not in members:
            continue
        entry = next(entry for entry in averages if number in entry["points"])
        row["weight"] = entry["weights"][entry["points"].index(number)]
        row |= {"of_probe": entry["probe"], **{key: entry[key] for key in told}}


def field_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a field document as one list, each led by its ordering and boundary."""
    return [
        {"ordering": entry["ordering"], "k": entry["k"], **row, "boundary": entry["boundary"]}
        for entry in doc["orderings"]
        for row in entry["rows"]
    ]


def field_row(row: dict[str, Any], crystal: Crystal, axes: Axes, unit: Unit) -> dict[str, Any]:
    """A row of `LocalField.to_dict` with its vectors in the axes and the unit asked for."""
    factor = 1.0 if unit == "T" else 1.0 / T_PER_GAUSS
    turned: dict[str, Any] = {}
    for key, value in row.items():
        base, suffix = next(((key.removesuffix(s), s) for s in ("_T_per_A", "_T") if key.endswith(s)), (key, ""))
        if not suffix:
            turned[key] = value
        elif isinstance(value, list):
            vector = np.array(value) * factor
            # The bound holds for each of three components; below it a vector has no direction.
            zero = 3**0.5 * row["error_bound_T"] * factor if base in ("dipolar", "field") else 0.0
            keys = vector_keys(base, vector, crystal, axes, suffix.replace("_T", f"_{unit}"), zero)
            # Its size in polar axes is the length that stands below.
            keys.pop(f"gradient_of_size_size_{unit}_per_A", None)
            turned.update(keys)
        else:
            turned[f"{base}_{unit}"] = value * factor
    slope = float(np.linalg.norm(row["gradient_of_size_T_per_A"])) * factor
    turned[f"gradient_of_size_length_{unit}_per_A"] = slope
    return turned


def vector_keys(
    name: str, vector: FloatArray, crystal: Crystal, axes: Axes, suffix: str, zero: float = 0.0
) -> dict[str, Any]:
    """A vector as keys of a document: components, or its size with the angles from z and, in the xy plane, from x.

    zero: up to this size it has no direction.
    """
    if axes == "cartesian":
        return {f"{name}{suffix}": vector.tolist()}
    if axes == "crystal":
        return {f"{name}_abc{suffix}": crystal.to_crystal_axes(vector).tolist()}
    size, theta, phi = polar(vector, zero)
    return {f"{name}_size{suffix}": size, f"{name}_theta_deg": theta, f"{name}_phi_deg": phi}


def polar(vector: FloatArray, zero: float = 0.0) -> tuple[float, float | None, float | None]:
    """Size, angle from Cartesian z and angle of the projection from x (degrees); None where it has no meaning.

    zero: up to this size the vector has no direction.
    """
    x, y, z = (float(v) for v in vector)
    size = float(np.linalg.norm(vector))
    if not size > zero:
        return size, None, None
    across = float(np.hypot(x, y))
    theta = float(np.degrees(np.arctan2(across, z)))
    if across <= 1e-9 * size:
        return size, theta, None
    phi = float(np.degrees(np.arctan2(y, x))) % 360.0
    # A rounding error below 0 is not a whole turn.
    return size, theta, phi if phi < 360.0 - 1e-7 else 0.0


def common_boundary(boundaries: Sequence[str]) -> str:
    """The one boundary that all results assume, or all that occur."""
    return "; ".join(dict.fromkeys(boundaries))
