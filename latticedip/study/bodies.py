"""Bodies without a crystal: their demagnetizing factors along their own axes, as documents."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.errors import InputError
from latticedip.sample import Sample
from latticedip.study.documents import document

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
class Body:
    """A body: its demagnetizing factors along its own axes.

    lengths: of the axes, any unit; None where the shape has none. uniform: False where the factors are averages
    over the volume of the body.
    """

    kind: str
    description: str
    axes: tuple[str, ...]
    lengths: tuple[float | None, ...]
    factors: tuple[float, ...]
    uniform: bool


def body_of(kind: str, lengths: Sequence[float] = ()) -> Body:
    """Demagnetizing factors of a shape along its own axes; they add up to 1.

    kind: one of SHAPES. lengths: three axes or edges, or diameter and height of a cylinder.

    Raises InputError for an unknown shape or lengths that do not fit it.
    """
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
    return Body(kind, sample.shape, _BODY_AXES[kind], shown, factors, bool(sample.uniform))


def demag_document(body: Body) -> dict[str, Any]:
    """The document of `demag`."""
    rows = [
        {"axis": axis, "length": length, "demagnetizing_factor": factor}
        for axis, length, factor in zip(body.axes, body.lengths, body.factors, strict=True)
    ]
    averaged = "" if body.uniform else ", volume average of a field that is not uniform"
    return document(
        "demag",
        files={},
        options={"shape": body.kind, "lengths": [x for x in body.lengths if x is not None]},
        boundary=f"{body.description}{averaged}",
        results={"shape": body.description, "uniform": body.uniform, "rows": rows},
    )


def demag_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a demag document, for CSV."""
    return [{**row, "boundary": doc["boundary"]} for row in doc["rows"]]
