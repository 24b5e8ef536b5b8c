"""Demagnetizing factors on screen."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from latticedip.report.tables import Column, fixed, heading, paragraph, short, table

#: Decimals of a demagnetizing factor on screen.
DECIMALS = 10

NOT_UNIFORM = (
    "These are averages over the volume of the body (the magnetometric factors): inside a body of this shape the "
    "demagnetizing field differs from point to point."
)


def demag_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the factors of a shape as a table."""
    rows = document["rows"]
    sized = any(row["length"] is not None for row in rows)
    columns = [Column("body axis", words=True)]
    columns += [Column("length", "any unit")] if sized else []
    columns += [Column("N"), Column("4π N")]
    cells = []
    for row in rows:
        factor = row["demagnetizing_factor"]
        line = [row["axis"]] + ([short(row["length"])] if sized else [])
        cells.append([*line, fixed(factor, DECIMALS), fixed(4 * math.pi * factor, DECIMALS - 1)])
    parts = [
        heading("Demagnetizing factors: " + document["shape"]),
        "",
        table(columns, cells, width=width),
        "",
        paragraph(
            "B_demagnetizing = -µ0 N M along each axis; the factors N add up to 1. 4πN is the same in Gaussian units.",
            width=width,
        ),
    ]
    if not document["uniform"]:
        parts += ["", paragraph(NOT_UNIFORM, width=width)]
    return "\n".join(parts)
