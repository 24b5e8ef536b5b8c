"""Points of a probe on screen: those with the same answer together."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from latticedip.report.field import coordinates
from latticedip.report.tables import fixed

#: Positions listed of points that are alike.
MOST_POSITIONS = 12

Rows = Sequence[Mapping[str, Any]]


def kinds(rows: Rows) -> list[list[Mapping[str, Any]]]:
    """Rows of the same probe whose answers are the same, in the order in which they come."""
    groups: dict[tuple[str, int], list[Mapping[str, Any]]] = {}
    for row in rows:
        groups.setdefault((row["probe"], row["distinct"]), []).append(row)
    return list(groups.values())


def kind_name(group: Rows, rows: Rows) -> str:
    """The probe, with a number where its points are of several kinds."""
    first = group[0]
    several = any(row["probe"] == first["probe"] and row["distinct"] > 1 for row in rows)
    return first["probe"] + (f" ({first['distinct']})" if several else "")


def kind_lines(group: Rows) -> list[tuple[str, str]]:
    """Particle and positions of points that are alike."""
    first = group[0]
    shown = "; ".join(coordinates(row["position"]) for row in group[:MOST_POSITIONS])
    shown += f"; and {len(group) - MOST_POSITIONS} more" if len(group) > MOST_POSITIONS else ""
    whole = "" if first["multiplicity"] == 1 else f"{len(group)} of {first['multiplicity']} points: "
    on = f" (on {first['site']})" if first["site"] else ""
    return [
        ("particle", f"{first['particle']}, {fixed(first['MHz_per_T'], 4)} MHz/T"),
        ("position" if len(group) == 1 else "positions", f"{whole}{shown}{on}"),
    ]
