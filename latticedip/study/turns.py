"""Energies of collinear orderings against the direction of their moments, as documents."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.analysis.directions import energy_against_direction
from latticedip.analysis.families import common_axis, freedom
from latticedip.errors import InputError
from latticedip.study.documents import document, ordering_head
from latticedip.study.fields import common_boundary

if TYPE_CHECKING:
    from latticedip.study.schema import Study


def directions_document(
    study: Study, *, steps: int = 18, orderings: Sequence[str] = (), tol: float = 1e-10
) -> dict[str, Any]:
    """The document of `directions` for all collinear orderings of a study; directions along a, b, c of its crystal.

    steps: of half a turn. orderings: the names that were asked for; none: all.

    Raises InputError where no ordering is collinear, and as `energy_against_direction` does.
    """
    entries, left_out = [], []
    for ordering in study.orderings:
        if common_axis(ordering) is None:
            left_out.append(ordering.name)
            continue
        found = energy_against_direction(ordering, sample=study.sample, steps=steps, tol=tol)
        plain = found.to_dict()
        for item in [*plain["rows"], *plain["axes"]]:
            item["direction_abc"] = study.crystal.to_crystal_axes(np.array(item["direction_cart"])).tolist()
        free = freedom(ordering, sample=study.sample, tol=tol)
        given = common_axis(ordering)
        assert given is not None
        head = {**ordering_head(ordering), "given_direction_abc": study.crystal.to_crystal_axes(given).tolist()}
        entries.append({**head, **plain, "free_turns": free.to_dict()})
    if not entries:
        raise InputError(
            f"no ordering here is collinear ({', '.join(left_out)}), so that none has one direction to turn. "
            "`latticedip rank --rotate` turns patterns of any kind."
        )
    notes = []
    if left_out:
        notes.append(f"not collinear, so left out: {', '.join(left_out)}; `rank --rotate` turns them as a whole")
    return document(
        "directions",
        files=study.files,
        options={"steps": steps, "orderings": list(orderings) or None, "tol": tol},
        boundary=common_boundary([entry["boundary"] for entry in entries]),
        results={"title": study.title, "sample": study.sample.to_dict(), "orderings": entries, "notes": notes},
    )


def directions_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a directions document, for CSV: one per ordering, circle and angle."""
    return [{**row, "boundary": entry["boundary"]} for entry in doc["orderings"] for row in entry["rows"]]
