"""Coupling tensors and shifts on screen, probe by probe."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.report.averages import weight_lines
from latticedip.report.points import kind_lines, kind_name, kinds
from latticedip.report.su import with_su
from latticedip.report.tables import (
    Column,
    bullets,
    decimals_for,
    direction,
    fixed,
    heading,
    pairs,
    paragraph,
    short,
    table,
    vector,
)
from latticedip.study.shifts import COUPLING_PARTS, SHIFT_PARTS

#: Elements of a symmetric tensor, and the others.
_SYMMETRIC = ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))
_LOWER = ((2, 1), (2, 0), (1, 0))
#: Step (degrees) and last angle of a rotation on screen; the shift repeats after half a turn.
SCREEN_STEP_DEG, LAST_DEG = 15.0, 180.0
PERCENT = 100.0
#: With more decimals than this the six elements of a tensor do not fit side by side: four digits have to do then.
MOST_DECIMALS = 6


def shift_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the coupling tensors of every probe, and its shifts where there is a susceptibility."""
    ions = ", ".join(f"{name} ({n} atom{'' if n == 1 else 's'})" for name, n in document["magnetic"].items())
    lead = [("magnetic ions", f"{ions}, from {document['magnetic_from']}"), ("boundary", document["boundary"])]
    if any(document["sample"]["applied_T"]):
        lead.append(("applied field", f"{vector(document['sample']['applied_T'])} T, Cartesian"))
    parts = [heading(document["title"]), "", pairs(lead, width=width)]
    rows = document["rows"]
    for group in kinds(rows):
        parts += ["", "", heading(kind_name(group, rows)), pairs(kind_lines(group), width=width)]
        for coupling in group[0]["couplings"]:
            parts += ["", f"Coupling to {coupling['ion']}, {short(coupling['ions_per_cell'])} per cell", ""]
            parts += [_coupling(coupling, width)]
        parts += _shifts(group[0]["shifts"], document, width)
    for mean in document["means"]:
        lines = [kind_lines([{**mean, "position": mean["positions"][0], "site": None}])[0], *weight_lines(mean)]
        parts += ["", "", heading(f"{mean['probe']}, mean over its positions"), pairs(lines, width=width)]
        for coupling in mean["couplings"]:
            parts += ["", f"Coupling to {coupling['ion']}, {short(coupling['ions_per_cell'])} per cell", ""]
            parts += [_coupling(coupling, width)]
        parts += _shifts(mean["shifts"], document, width)
    return "\n".join([*parts, "", bullets([*document["conventions"], *document["notes"]], width=width)])


def _coupling(coupling: Mapping[str, Any], width: int | None) -> str:
    tensors = {words: np.array(coupling[f"{part}_T_per_muB"]) for part, words in COUPLING_PARTS.items()}
    error = coupling["error_bound_T_per_muB"]
    values = [float(x) for tensor in tensors.values() for x in tensor.ravel()]
    digits = decimals_for(values, significant=5, error=error)
    if digits > MOST_DECIMALS:
        digits = max(MOST_DECIMALS, decimals_for(values, significant=4, error=error))
    lines = [_tensors(tensors, "T/µB", digits, width), ""]
    return "\n".join([*lines, _principal(coupling, "dipolar", "_T_per_muB", "T/µB", digits, 1.0, width)])


def _scaled(su: float | None, scale: float = PERCENT) -> float | None:
    return None if su is None else scale * su


def _tensors(tensors: Mapping[str, FloatArray], unit: str, digits: int, width: int | None) -> str:
    """Parts of a tensor, one line each; nine elements where one of them is not symmetric within the digits."""
    even = all(np.abs(tensor - tensor.T).max() < 0.5 * 10.0**-digits for tensor in tensors.values())
    elements = _SYMMETRIC if even else (*_SYMMETRIC, *_LOWER)
    columns = [Column("part", words=True), *(Column("xyz"[i] + "xyz"[j], unit) for i, j in elements)]
    cells = [[words, *(fixed(float(tensor[i, j]), digits) for i, j in elements)] for words, tensor in tensors.items()]
    return table(columns, cells, width=width, keys=1)


def _principal(
    entry: Mapping[str, Any], name: str, suffix: str, unit: str, digits: int, scale: float, width: int | None
) -> str:
    """Principal values with their axes, and the asymmetry in words."""
    values = [scale * value for value in entry[f"{name}_principal_values{suffix}"]]
    uncertain = entry[f"{name}_principal_values_su{suffix}"] or [None] * 3
    free = entry[f"{name}_principal_axes_free"]
    if all(free) or max(abs(v - sum(values) / 3) for v in values) < 0.5 * 10.0**-digits:
        return paragraph(f"The {name} tensor is isotropic within its accuracy.", width=width)
    axes = [entry[f"{name}_principal_axes_abc"], entry[f"{name}_principal_axes"]]
    frames = ["along a b c", "Cartesian"]
    if np.allclose(axes[0], axes[1], rtol=0, atol=1e-9):
        axes, frames = axes[:1], frames[:1]
    columns = [Column("principal value", words=True), Column(name, unit)]
    columns += [Column("axis", frame, words=True, whole=True) for frame in frames]
    cells = []
    for i, letter in enumerate(("xx", "yy", "zz")):
        shown = ["any across" if j == 0 else "" for j in range(len(axes))]
        if not free[i]:
            shown = [_headless(frame[i], axes[0][i]) for frame in axes]
        cells.append([letter, with_su(values[i], digits, _scaled(uncertain[i], scale)), *shown])
    asymmetry = f"asymmetry {fixed(entry[f'{name}_asymmetry'], 4)}"
    return table(columns, cells, width=width, keys=1) + "\n" + asymmetry


def _headless(axis: Sequence[float], like: Sequence[float]) -> str:
    """An axis has no head: the largest component of ``like``, the same axis in another frame, is shown positive."""
    return direction(axis if max(like, key=abs) > 0 else [-x for x in axis])


def _shifts(shifts: Sequence[Mapping[str, Any]], document: Mapping[str, Any], width: int | None) -> list[str]:
    if not shifts:
        return []
    lines: list[str] = []
    if len(shifts) == 1:
        lines += ["", *_one_shift(shifts[0], width)]
    else:
        lines += ["", "Shift against temperature", "", _curve(shifts, width)]
        lines += ["", paragraph("One --temperature gives its tensors and their parts.", width=width)]
    if "powder" in shifts[0]:
        lines += ["", "Line of a powder", "", _powder(shifts, width)]
    if document["rotate_about"] is not None:
        lines += ["", *_rotation(shifts, document, width)]
    return lines


def _at(shift: Mapping[str, Any]) -> str:
    return "" if shift["temperature_K"] is None else f" at {short(shift['temperature_K'])} K"


def _one_shift(shift: Mapping[str, Any], width: int | None) -> list[str]:
    # To first order only the symmetric part of K shifts a line.
    tensors = {}
    for part, words in SHIFT_PARTS.items():
        tensor = PERCENT * np.array(shift[part])
        tensors[words] = (tensor + tensor.T) / 2
    digits = decimals_for([float(x) for tensor in tensors.values() for x in tensor.ravel()], significant=5)
    chi = f"{short(shift['chi_cm3_per_mol'])} cm³/mol of ions (mean, cgs)"
    lines = [
        f"Shift{_at(shift)}, chi = {chi}",
        "",
        _tensors(tensors, "%", digits, width),
        "",
        f"isotropic  {with_su(PERCENT * shift['shift_isotropic'], digits, _scaled(shift['shift_isotropic_su']))} %",
        "",
        _principal(shift, "shift", "", "%", digits, PERCENT, width),
    ]
    if shift["shift_along_applied"] is not None:
        su = _scaled(shift["shift_along_applied_su"])
        along = with_su(PERCENT * shift["shift_along_applied"], digits, su)
        lines.append(f"along the applied field  {along} %")
    return lines


def _curve(shifts: Sequence[Mapping[str, Any]], width: int | None) -> str:
    along = shifts[0]["shift_along_applied"] is not None
    columns = [
        Column("temperature", "K"),
        Column("chi", "cm³/mol"),
        Column("isotropic", "%"),
        *(Column(f"principal\n{letter}", "%") for letter in ("xx", "yy", "zz")),
    ]
    columns += [Column("along the\nfield", "%")] if along else []
    listed = [[s["shift_isotropic"], *s["shift_principal_values"]] for s in shifts]
    digits = decimals_for([PERCENT * x for values in listed for x in values], significant=5)
    chi_digits = decimals_for([s["chi_cm3_per_mol"] for s in shifts], significant=5)
    cells = []
    for shift, values in zip(shifts, listed, strict=True):
        shown = [*values, shift["shift_along_applied"]] if along else values
        uncertain = [shift["shift_isotropic_su"], *(shift["shift_principal_values_su"] or [None] * 3)]
        uncertain += [shift["shift_along_applied_su"]] if along else []
        lead = [short(shift["temperature_K"]), fixed(shift["chi_cm3_per_mol"], chi_digits)]
        pairs_shown = zip(shown, uncertain, strict=True)
        cells.append([*lead, *(with_su(PERCENT * x, digits, _scaled(su)) for x, su in pairs_shown)])
    return table(columns, cells, width=width, keys=1)


def _powder(shifts: Sequence[Mapping[str, Any]], width: int | None) -> str:
    columns = [
        Column("temperature", "K"),
        Column("lower\nedge", "%"),
        Column("singularity", "%"),
        Column("upper\nedge", "%"),
        Column("mean", "%"),
        Column("standard\ndeviation", "%"),
    ]
    values = [[*s["powder_edges"], s["powder"]["mean"], s["powder"]["rms_deviation"]] for s in shifts]
    digits = decimals_for([PERCENT * x for row in values for x in row], significant=5)
    cells = [
        ["" if s["temperature_K"] is None else short(s["temperature_K"]), *(fixed(PERCENT * x, digits) for x in row)]
        for s, row in zip(shifts, values, strict=True)
    ]
    skip = 1 if shifts[0]["temperature_K"] is None else 0
    return table(columns[skip:], [row[skip:] for row in cells], width=width, keys=1)


def _rotation(shifts: Sequence[Mapping[str, Any]], document: Mapping[str, Any], width: int | None) -> list[str]:
    about, start = document["rotate_about"], shifts[0]["rotation"]
    lines = [
        paragraph(
            f"Shift against rotation about {direction(about['abc'])} (along a b c), the field across it. Angle 0: "
            f"field along {direction(start['start_abc'])} (along a b c), {direction(start['start'])} Cartesian; seen "
            "from the crystal the field turns right-handed about the axis.",
            width=width,
        ),
        "",
    ]
    kept = [
        i
        for i, angle in enumerate(start["angles_deg"])
        if angle <= LAST_DEG and abs(angle / SCREEN_STEP_DEG - round(angle / SCREEN_STEP_DEG)) < 1e-9
    ]
    values = [[PERCENT * shift["rotation"]["shift"][i] for i in kept] for shift in shifts]
    digits = decimals_for([x for column in values for x in column], significant=5)
    columns = [
        Column("angle", "degrees"),
        *(Column("shift" + _at(shift).replace(" at ", "\n"), "%") for shift in shifts),
    ]
    cells = [
        [short(start["angles_deg"][i]), *(fixed(column[row], digits) for column in values)]
        for row, i in enumerate(kept)
    ]
    formulas = []
    for shift in shifts:
        turn = shift["rotation"]
        terms = [fixed(PERCENT * turn["constant"], digits)]
        for key, function in (("cosine", "cos"), ("sine", "sin")):
            size = fixed(PERCENT * turn[key], digits)
            terms.append(f"{'-' if size.startswith('-') else '+'} {size.lstrip('-')} {function} 2phi")
        formulas.append(f"K(phi){_at(shift)} = {' '.join(terms)}, in %")
    return [*lines, table(columns, cells, width=width, keys=1), "", bullets(formulas, width=width)]
