"""Local fields as documents: one row per probe and point, vectors in the axes and the unit asked for."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from latticedip.checks import FloatArray
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
        placed = "" if ordering.reference is None else ordering.reference.how
        uncertain = [SU_NOTE] if any("field_size_su_T" in row for row in plain["rows"]) else []
        notes = [note for note in [*plain["notes"], *uncertain, *home_cell_notes([ordering])] if note not in placed]
        entries.append({**ordering_head(ordering), **plain, "rows": rows, "notes": notes})
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
            turned.update(vector_keys(base, vector, crystal, axes, suffix.replace("_T", f"_{unit}"), zero))
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
