"""Orderings as they are drawn: atoms and moments over the first cells, probes with their fields, all Cartesian."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.ordering.model import Ordering
from latticedip.physics.boundary import boundary_words
from latticedip.study.describe import FIRST_CELLS, first_cells
from latticedip.study.directions import direction_of
from latticedip.study.documents import NO_SUM, document, ordering_head
from latticedip.study.fields import common_boundary

if TYPE_CHECKING:
    from latticedip.study.schema import Study

#: Where a drawing is seen from unless it is said: from a, a little from b and from above.
VIEW = "8 3 2"
#: Cells of an ordering without a short period that are drawn along each axis.
ALONG = 4
#: An atom this close to a face of the cell (fractional) is drawn on the opposite face, too.
ON_FACE = 1e-6


def drawing_of_study(
    study: Study,
    *,
    view: str | None = None,
    orderings: Sequence[str] = (),
    probes: Sequence[str] = (),
    tol: float = 1e-10,
) -> dict[str, Any]:
    """What a drawing of the orderings of a study shows; where the study has none, its crystal.

    view: the crystal direction that the eye is in, as `direction_of` takes it. orderings, probes: the names that were
    asked for, recorded only.

    Raises InputError for a view that is no direction, and what `local_field` raises.
    """
    from latticedip.physics.field import local_field

    towards = view_of(study.crystal, view)
    entries = []
    for ordering in study.orderings:
        entry = _ordering(ordering)
        if study.probes:
            spread = study.moment_spread or None
            found = local_field(ordering, study.probes, moment_spread=spread, sample=study.sample, tol=tol)
            places = found.points @ ordering.crystal.cell
            entry["probes"] = [
                {"probe": name, "position_cart_A": place.tolist(), "field_T": field.tolist()}
                for name, place, field in zip(found.probe_names, places, found.total, strict=True)
            ]
        entry["boundary"] = boundary_words(ordering, study.sample)
        entries.append(entry)
    if not entries:
        entries.append(_bare(study.crystal, study))
    return document(
        "drawing",
        files=study.files,
        options={
            "view": view or VIEW,
            "orderings": list(orderings) or None,
            "probes": list(probes) or None,
            "tol": tol,
        },
        boundary=common_boundary([entry["boundary"] for entry in entries]),
        results={"title": study.title, "view": towards, "orderings": entries},
    )


def drawing_of_structure(path: Path, found: Crystal | Ordering, *, view: str | None = None) -> dict[str, Any]:
    """What a drawing of a structure file shows, with its moments where it has them; errors as `drawing_of_study`."""
    crystal = found.crystal if isinstance(found, Ordering) else found
    entry = _ordering(found) if isinstance(found, Ordering) else _bare(crystal, None)
    return document(
        "drawing",
        files={"structure": path},
        options={"view": view or VIEW},
        boundary=NO_SUM,
        results={"title": path.name, "view": view_of(crystal, view), "orderings": [entry]},
    )


def view_of(crystal: Crystal, view: str | None) -> dict[str, Any]:
    """The direction towards the eye, and the one that is up in the drawing: c, or b where the eye is on c.

    Raises InputError for a view that is no direction.
    """
    eye = direction_of(crystal, view or VIEW, "--view")
    axes = crystal.axes_unit
    up = axes[2] if np.linalg.norm(np.cross(axes[2], eye)) > 1e-3 else axes[1]
    return {
        "eye_cart": eye.tolist(),
        "eye_abc": crystal.to_crystal_axes(eye).tolist(),
        "up_cart": np.asarray(up).tolist(),
    }


def _ordering(ordering: Ordering) -> dict[str, Any]:
    crystal = ordering.crystal
    cells, words = first_cells(ordering)
    if words == FIRST_CELLS:
        cells = [cell for cell in cells if max(cell) < ALONG]
    atoms = []
    for site in range(crystal.n_sites):
        magnetic = bool(ordering.is_magnetic[site])
        listed = _with_faces(crystal, site, cells if magnetic else [(0, 0, 0)])
        moments = ordering.moments(listed)[:, site] if magnetic else np.zeros((len(listed), 3))
        atoms += [_atom(crystal, site, cell, moment, magnetic) for cell, moment in zip(listed, moments, strict=True)]
    return {
        **ordering_head(ordering),
        "cell_A": crystal.cell.tolist(),
        "cells": [list(cell) for cell in cells],
        "cells_are": words,
        "atoms": atoms,
        "probes": [],
        "boundary": NO_SUM,
    }


def _bare(crystal: Crystal, study: Study | None) -> dict[str, Any]:
    """A crystal without moments, and the probes of a study where they are given."""
    places: list[tuple[str, FloatArray]] = []
    for probe in study.probes if study is not None else ():
        points = [probe.position] if probe.site is None else [crystal.positions[i] for i in crystal.find(probe.site)]
        places += [(probe.name, np.asarray(point)) for point in points]
    return {
        "ordering": "no moments",
        "k": [],
        "cell_A": crystal.cell.tolist(),
        "cells": [[0, 0, 0]],
        "cells_are": "the cell",
        "atoms": [
            _atom(crystal, site, cell, np.zeros(3), False)
            for site in range(crystal.n_sites)
            for cell in _with_faces(crystal, site, [(0, 0, 0)])
        ],
        "probes": [
            {"probe": name, "position_cart_A": (point @ crystal.cell).tolist(), "field_T": None}
            for name, point in places
        ],
        "boundary": NO_SUM,
    }


def _with_faces(crystal: Crystal, site: int, cells: Sequence[tuple[int, ...]]) -> list[tuple[int, ...]]:
    """Cells that an atom is drawn in: those given, and the next ones where the atom lies on a face of its cell."""
    steps = [
        (0, 1) if periodic and abs(x) < ON_FACE else (0,)
        for x, periodic in zip(crystal.positions[site], crystal.pbc, strict=True)
    ]
    return list(
        dict.fromkeys(
            tuple(n + step for n, step in zip(cell, shift, strict=True))
            for cell in cells
            for shift in itertools.product(*steps)
        )
    )


def _atom(crystal: Crystal, site: int, cell: Sequence[int], moment: FloatArray, magnetic: bool) -> dict[str, Any]:
    return {
        "label": crystal.labels[site],
        "element": crystal.symbols[site],
        "magnetic": magnetic,
        "position_cart_A": ((crystal.positions[site] + np.array(cell)) @ crystal.cell).tolist(),
        "moment_muB": moment.tolist(),
    }
