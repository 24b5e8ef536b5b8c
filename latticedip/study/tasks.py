"""One function per command: a study in, a result out, and the document that says all of it in plain values."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from latticedip.checks import FloatArray, check_tol
from latticedip.errors import InputError, StudyError
from latticedip.study.documents import document
from latticedip.units import T_PER_GAUSS

if TYPE_CHECKING:
    from latticedip.analysis.rank import Ranking, RankingRow
    from latticedip.crystal.model import Crystal
    from latticedip.ordering.model import Ordering
    from latticedip.physics.field import LocalField
    from latticedip.sample import Sample
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
UEV_PER_EV = 1e6
#: Fields at equivalent points that differ by less than this (relative to the largest) are listed once.
SAME_FIELD = 1e-6

_STRUCTURE_SUFFIXES = {".cif", ".mcif", ".xyz", ".extxyz", ".vasp", ".poscar", ".res", ".pdb"}


def is_study(path: Path) -> bool:
    """Return whether a path is meant as a study: its name ends in .toml."""
    return path.suffix.lower() == ".toml"


def open_study(path: Path) -> Study:
    """Read a study; a structure file in its place is refused with the command that makes a study of it.

    Raises StudyError, FileError and what else `read_study` raises.
    """
    from latticedip.study.schema import read_study

    if path.suffix.lower() in _STRUCTURE_SUFFIXES:
        raise StudyError(
            f"{str(path)!r} is a structure file, not a study. "
            f"Write a study for it with: latticedip start {path} -o study.toml"
        )
    return read_study(path)


def show(path: Path, *, block: str | None = None) -> dict[str, Any]:
    """The document of `show` for a study or a structure file.

    Raises what `read_study`, `read_crystal` and `read_ordering` raise.
    """
    from latticedip.files.read import read_file
    from latticedip.study.describe import describe_structure, describe_study

    if is_study(path):
        return describe_study(open_study(path))
    return describe_structure(path, read_file(path, block=block))


def show_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a show document for CSV: every moment in every cell listed, or the atoms where there is none."""
    moments = [
        {
            "ordering": entry["ordering"],
            "k": entry["k"],
            "site": atom["label"],
            "atom": atom["atom"],
            "position": atom["position"],
            "cell": cell,
            "moment_abc_muB": atom["moments_abc_muB"][i],
            "moment_size_muB": atom["sizes_muB"][i],
        }
        for entry in doc["orderings"]
        for atom in entry["atoms"]
        for i, cell in enumerate(entry["cells"])
    ]
    return moments or [
        {"site": site["label"], "element": ", ".join(site["elements"]), "atom": number, "position": position}
        for site in doc["sites"]
        for number, position in enumerate(site["positions"], start=1)
    ]


def start(
    path: Path, *, output: Path | None = None, sizes_muB: Mapping[str, float] | None = None, block: str | None = None
) -> dict[str, Any]:
    """The document of `start`: the text of a study for a structure file, and its magnetic sites as rows.

    output: where the study will be, which the path of the structure is made relative to; None: here.

    Raises what `read_crystal`, `read_ordering` and `starting_study` raise.
    """
    from latticedip.files.read import read_file
    from latticedip.ordering.model import Ordering
    from latticedip.study.start import magnetic_sites, starting_study

    if is_study(path):
        raise InputError(f"{str(path)!r} is a study already; start takes a structure file.")
    found = read_file(path, block=block)
    ordering = found if isinstance(found, Ordering) else None
    crystal = found.crystal if isinstance(found, Ordering) else found
    folder = Path.cwd() if output is None else output.absolute().parent
    file = Path(os.path.relpath(path.absolute(), folder)).as_posix()
    sizes = sizes_muB or {}
    rows = [
        {"site": site.label, "element": site.element, "moment_muB": site.size_muB, "known": site.known}
        for site in magnetic_sites(crystal, sizes, ordering)
    ]
    text = starting_study(crystal, file, sizes_muB=sizes, ordering=ordering, block=block)
    return document(
        "start",
        files={"structure": path},
        options={"moments_muB": dict(sizes)},
        boundary="",
        results={"study": text, "rows": rows},
    )


def field(study: Study, *, tol: float = 1e-10) -> list[LocalField]:
    """Local field at every probe of a study, one result per ordering, in the order of the file.

    Raises StudyError for a study without orderings or without probes, and what `local_field` raises.
    """
    from latticedip.physics.field import local_field

    check_tol(tol)
    _need_orderings(study)
    if not study.probes:
        raise StudyError(
            f"{str(study.path)!r} has no [[probe]], so there is no place to ask for a field. "
            'Add one with a position or a site, for example: [[probe]] position = [0.5, 0.5, 0.25]'
        )
    return [local_field(ordering, study.probes, sample=study.sample, tol=tol) for ordering in study.orderings]


def rank(study: Study, *, rotate: bool = False, tol: float = 1e-10) -> Ranking:
    """Rank the orderings of a study by their dipolar energy per magnetic ion, lowest first.

    Raises StudyError for a study without orderings, and what `latticedip.rank` raises.
    """
    from latticedip.analysis.rank import rank as rank_orderings

    check_tol(tol)
    _need_orderings(study)
    return rank_orderings(study.orderings, sample=study.sample, rotate=rotate, probes=study.probes, tol=tol)


def _need_orderings(study: Study) -> None:
    if not study.orderings:
        raise StudyError(
            f"{str(study.path)!r} has no [[ordering]], so there is nothing to compare. "
            "Add at least one; `latticedip start` writes a study with several."
        )


# --- fields as documents --------------------------------------------------------------------------------


def field_document(
    study: Study, fields: Sequence[LocalField], *, axes: Axes = "cartesian", unit: Unit = "T", tol: float = 1e-10
) -> dict[str, Any]:
    """The document of `field`: per ordering one row per probe and point, vectors in the axes and unit asked for."""
    orderings = []
    for ordering, result in zip(study.orderings, fields, strict=True):
        plain = result.to_dict()
        rows = [field_row(row, study.crystal, axes, unit) for row in plain["rows"]]
        orderings.append({**ordering_head(ordering), **plain, "rows": rows})
    return document(
        "field",
        files=study.files,
        options={"axes": axes, "unit": unit, "tol": tol},
        boundary=common_boundary([result.boundary for result in fields]),
        results={"title": study.title, "axes": axes, "sample": study.sample.to_dict(), "orderings": orderings},
    )


def field_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a field document as one list, each led by its ordering and boundary."""
    return [
        {"ordering": entry["ordering"], "k": entry["k"], **row, "boundary": entry["boundary"]}
        for entry in doc["orderings"]
        for row in entry["rows"]
    ]


def ordering_head(ordering: Ordering) -> dict[str, Any]:
    """What every document says of an ordering: its name, k, ions per cell and net moment."""
    return {
        "ordering": ordering.name,
        "k": ordering.k.tolist(),
        "ions_per_cell": ordering.n_ions,
        "net_moment_muB_per_cell": ordering.net_moment.tolist(),
    }


def field_row(row: dict[str, Any], crystal: Crystal, axes: Axes, unit: Unit) -> dict[str, Any]:
    """A row of `LocalField.to_dict` with its vectors in the axes and the unit asked for."""
    factor = 1.0 if unit == "T" else 1.0 / T_PER_GAUSS
    turned: dict[str, Any] = {}
    for key, value in row.items():
        base, suffix = next(((key.removesuffix(s), s) for s in ("_T_per_A", "_T") if key.endswith(s)), (key, ""))
        if not suffix:
            turned[key] = value
        elif isinstance(value, list):
            turned.update(vector_keys(base, np.array(value) * factor, crystal, axes, suffix.replace("_T", f"_{unit}")))
        else:
            turned[f"{base}_{unit}"] = value * factor
    slope = float(np.linalg.norm(row["gradient_of_size_T_per_A"])) * factor
    turned[f"gradient_of_size_length_{unit}_per_A"] = slope
    return turned


def vector_keys(name: str, vector: FloatArray, crystal: Crystal, axes: Axes, suffix: str) -> dict[str, Any]:
    """A vector as keys of a document: components, or its size with the angles from z and, in the xy plane, from x."""
    if axes == "cartesian":
        return {f"{name}{suffix}": vector.tolist()}
    if axes == "crystal":
        return {f"{name}_abc{suffix}": crystal.to_crystal_axes(vector).tolist()}
    size, theta, phi = polar(vector)
    return {f"{name}_size{suffix}": size, f"{name}_theta_deg": theta, f"{name}_phi_deg": phi}


def polar(vector: FloatArray) -> tuple[float, float | None, float | None]:
    """Size, angle from Cartesian z and angle of the projection from x (degrees); None where it has no meaning."""
    x, y, z = (float(v) for v in vector)
    size = float(np.linalg.norm(vector))
    if not size > 0.0:
        return size, None, None
    across = float(np.hypot(x, y))
    theta = float(np.degrees(np.arctan2(across, z)))
    if across <= 1e-9 * size:
        return size, theta, None
    return size, theta, float(np.degrees(np.arctan2(y, x))) % 360.0


def common_boundary(boundaries: Sequence[str]) -> str:
    """The one boundary that all results assume, or all that occur."""
    return "; ".join(dict.fromkeys(boundaries))


# --- rankings as documents ------------------------------------------------------------------------------


def rank_document(study: Study, ranking: Ranking, *, rotate: bool = False, tol: float = 1e-10) -> dict[str, Any]:
    """The document of `rank`: one row per ordering, lowest first, with the field at every probe."""
    rows = [_rank_row(number, row, study.crystal) for number, row in enumerate(ranking.rows, start=1)]
    return document(
        "rank",
        files=study.files,
        options={"rotate": rotate, "tol": tol},
        boundary=ranking.boundary,
        results={
            "title": study.title,
            "sample": study.sample.to_dict(),
            "rows": rows,
            "notes": list(ranking.notes),
        },
    )


def _rank_row(number: int, row: RankingRow, crystal: Crystal) -> dict[str, Any]:
    energy = row.energy
    per_ion = UEV_PER_EV / energy.n_ions
    plain: dict[str, Any] = {
        "rank": number,
        **ordering_head(row.ordering),
        "net_moment_muB_per_ion": float(np.linalg.norm(energy.net_moment)) / energy.n_ions,
        "energy_ueV_per_ion": energy.per_ion_eV * UEV_PER_EV,
        "energy_K_per_ion": energy.per_ion_K,
        "above_lowest_ueV_per_ion": row.above_lowest_eV * UEV_PER_EV,
        "tie": bool(row.tie),
        "dipolar_ueV_per_ion": energy.dipolar_eV * per_ion,
        "shape_ueV_per_ion": energy.shape_eV * per_ion,
        "applied_ueV_per_ion": energy.applied_eV * per_ion,
        "error_bound_ueV_per_ion": energy.error_bound_eV * per_ion,
        "energy_eV_per_cell": energy.per_cell_eV,
        "boundary": energy.boundary,
        "notes": list(energy.notes),
    }
    if row.orientation is not None:
        plain["axis_meaning"] = row.orientation.axis_meaning
        for word, direction in (("easy", row.easy_axis_cart), ("hard", row.hard_axis_cart)):
            plain[f"{word}_axis_cart"] = None if direction is None else direction.tolist()
            plain[f"{word}_axis_abc"] = None if direction is None else axis_in_crystal(direction, crystal).tolist()
        plain["rotation"] = row.orientation.easy_rotation.tolist()
        plain["anisotropy_ueV_per_ion"] = (row.anisotropy_eV_per_ion or 0.0) * UEV_PER_EV
        plain["anisotropy_J_per_m3"] = row.anisotropy_J_per_m3
        plain["orientation_notes"] = list(row.orientation.notes)
    plain["fields"] = {name: _brief_field(result) for name, result in row.fields.items()}
    return plain


def _brief_field(result: LocalField) -> list[dict[str, Any]]:
    """The whole field at each point of one probe; its parts are what `field` gives."""
    return [
        {
            "position": result.points[i].tolist(),
            "field_T": result.total[i].tolist(),
            "field_size_T": float(result.size_T[i]),
            "frequency_MHz": float(result.frequency_MHz[i]),
        }
        for i in range(len(result.points))
    ]


def field_levels(points: Sequence[dict[str, Any]]) -> list[tuple[float, float, int]]:
    """The distinct field sizes (T) of a probe's points, largest first, each with frequency (MHz) and number of points.

    Sizes within 1e-6 of the largest are one level: symmetry makes them equal, rounding does not keep them so.
    """
    ordered = sorted(points, key=lambda point: -point["field_size_T"])
    slack = SAME_FIELD * ordered[0]["field_size_T"] if ordered else 0.0
    levels: list[list[dict[str, Any]]] = []
    for point in ordered:
        if levels and levels[-1][0]["field_size_T"] - point["field_size_T"] <= slack:
            levels[-1].append(point)
        else:
            levels.append([point])
    return [(level[0]["field_size_T"], level[0]["frequency_MHz"], len(level)) for level in levels]


def axis_in_crystal(direction: FloatArray, crystal: Crystal) -> FloatArray:
    """A direction as components along unit vectors parallel to a, b, c (as `along` in a study), the largest 1."""
    components = crystal.to_crystal_axes(direction)
    return np.asarray(components / np.abs(components).max())


def rank_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a rank document with the field levels of each probe spread over columns, for CSV."""
    table = []
    for row in doc["rows"]:
        spread = {key: value for key, value in row.items() if key not in ("fields", "rotation", "boundary")}
        for i, line in enumerate(row.get("rotation", [])):
            spread.update({f"rotation_{i + 1}{j + 1}": value for j, value in enumerate(line)})
        for name, points in row["fields"].items():
            for number, (size, frequency, count) in enumerate(field_levels(points), start=1):
                lead = name if number == 1 else f"{name} ({number})"
                spread.update({f"{lead}: field_size_T": size, f"{lead}: frequency_MHz": frequency})
                spread[f"{lead}: points"] = count
        spread["boundary"] = row["boundary"]
        table.append(spread)
    return table


# --- shapes ---------------------------------------------------------------------------------------------

SHAPES = ("ellipsoid", "prism", "cylinder", "sphere", "plate", "needle")
_BODY_AXES = {
    "ellipsoid": ("axis 1", "axis 2", "axis 3"),
    "prism": ("edge 1", "edge 2", "edge 3"),
    "cylinder": ("across", "across", "along the cylinder"),
    "sphere": ("any", "any", "any"),
    "plate": ("in the plate", "in the plate", "along the normal"),
    "needle": ("across", "across", "along the needle"),
}


@dataclass(frozen=True)
class Shape:
    """A body alone: its demagnetizing factors along its own axes.

    lengths: of the axes, any unit; None where the shape has none. uniform: False where the factors are averages
    over the volume of the body.
    """

    kind: str
    description: str
    axes: tuple[str, ...]
    lengths: tuple[float | None, ...]
    factors: tuple[float, ...]
    uniform: bool


def demag(kind: str, lengths: Sequence[float] = ()) -> Shape:
    """Demagnetizing factors of a shape along its own axes; they add up to 1.

    kind: one of SHAPES. lengths: three axes or edges, or diameter and height of a cylinder.

    Raises InputError for an unknown shape or lengths that do not fit it.
    """
    from latticedip.sample import Sample

    sample: Sample
    shown: tuple[float | None, ...] = (None, None, None)
    if kind in ("ellipsoid", "prism"):
        sample = Sample.ellipsoid(lengths) if kind == "ellipsoid" else Sample.prism(lengths)
        shown = tuple(float(x) for x in lengths)
    elif kind == "cylinder":
        if len(lengths) != 2:
            raise InputError(f"a cylinder needs two lengths, diameter and height; got {len(lengths)}.")
        sample = Sample.cylinder(*lengths)
        shown = (float(lengths[0]), float(lengths[0]), float(lengths[1]))
    elif kind == "sphere":
        sample = Sample.sphere()
    elif kind == "plate":
        sample = Sample.plate((0, 0, 1))
    elif kind == "needle":
        sample = Sample.needle((0, 0, 1))
    else:
        raise InputError(f"unknown shape {kind!r}. Known are: {', '.join(SHAPES)}.")
    factors = tuple(float(n) for n in np.diag(sample.demagnetizing_tensor))
    return Shape(kind, sample.shape, _BODY_AXES[kind], shown, factors, bool(sample.uniform))


def demag_document(shape: Shape) -> dict[str, Any]:
    """The document of `demag`."""
    rows = [
        {"axis": axis, "length": length, "demagnetizing_factor": factor}
        for axis, length, factor in zip(shape.axes, shape.lengths, shape.factors, strict=True)
    ]
    averaged = "" if shape.uniform else ", volume average of a field that is not uniform"
    return document(
        "demag",
        files={},
        options={"shape": shape.kind, "lengths": [x for x in shape.lengths if x is not None]},
        boundary=f"{shape.description}{averaged}",
        results={"shape": shape.description, "uniform": shape.uniform, "rows": rows},
    )


def demag_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a demag document, for CSV."""
    return [{**row, "boundary": doc["boundary"]} for row in doc["rows"]]

