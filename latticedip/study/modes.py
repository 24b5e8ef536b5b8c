"""The dipolar modes of a study as a document: the lowest ones, and all of them along the band path."""

from __future__ import annotations

import logging
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.analysis.modes import LowestMode, balanced_mode, lowest_mode, lowest_modes
from latticedip.analysis.modes_bands import bands
from latticedip.errors import InputError
from latticedip.study.documents import document
from latticedip.study.search import stated_sizes
from latticedip.units import K_PER_EV

if TYPE_CHECKING:
    from latticedip.study.schema import Study

#: Most points along the path.
MOST_POINTS = 100_000

_log = logging.getLogger(__name__)


def modes_document(
    study: Study, *, points: int = 200, keep: int = 6, need_path: bool = False, tol: float = 1e-10
) -> dict[str, Any]:
    """The document of `modes`: `lowest`, `modes` (minima over k, lowest first) and `bands` along the path.

    points: about so many k along the path. keep: minima at k ≠ 0 that are listed. need_path: refuse a lattice that has
    no band path; else `bands` is None and a note says why.

    Raises StudyError where [moments] states no sizes, InputError for numbers out of range, and as `lowest_mode` does.
    """
    sizes = stated_sizes(study)
    if not 2 <= points <= MOST_POINTS:
        raise InputError(f"points must lie between 2 and {MOST_POINTS}, got {points}.")
    crystal, sample = study.crystal, study.sample
    notes = [
        "no ordering of moments of these sizes has a dipolar energy below that of the lowest mode (Luttinger and Tisza "
        "1946); the minima over k are searched, not proved"
    ]
    path = None
    try:
        path = bands(crystal, sizes, n_points=points, sample=sample, tol=tol)
    except InputError as error:
        # The modes themselves need no path; what else is wrong with the crystal they say as well.
        if need_path:
            raise
        notes.append(f"no modes along a path: {error}")
    _log.info("looking for the lowest modes")
    lowest = lowest_mode(crystal, sizes, sample=sample, tol=tol)
    found = lowest_modes(crystal, sizes, sample=sample, keep=keep, tol=tol)
    better = balanced_mode(crystal, sizes, sample=sample, tol=tol)
    raised = better.energy_per_ion_eV > lowest.energy_per_ion_eV + 10 * lowest.error_bound_eV + 1e-9 * abs(
        lowest.energy_per_ion_eV
    )
    return document(
        "modes",
        files=study.files,
        options={"points": points, "keep": keep, "tol": tol},
        boundary=lowest.boundary,
        results={
            "title": study.title,
            "sample": study.sample.to_dict(),
            "sizes_muB": sizes,
            "ions_per_cell": lowest.n_ions,
            "lowest": _mode(study, lowest),
            "bound": _mode(study, better) if raised else None,
            "modes": [_mode(study, mode) for mode in found],
            "bands": None
            if path is None
            else {**path.to_dict(), "segment": path.path.segment.tolist(), "rows": path.rows()},
            "notes": [*dict.fromkeys([*lowest.notes, *notes])],
        },
    )


def _mode(study: Study, mode: LowestMode) -> dict[str, Any]:
    """A mode with its components along a, b, c, one entry per magnetic site and k."""
    crystal = study.crystal
    several = mode.components.ndim == 3
    parts = mode.components if several else mode.components[None]
    vectors = np.zeros((1, 3)) if mode.k is None else np.atleast_2d(mode.k)
    atoms = []
    for label in dict.fromkeys(crystal.labels):
        for number, site in enumerate(crystal.find(label), start=1):
            if mode.sizes[site] == 0:
                continue
            for k, part in zip(vectors, parts, strict=True):
                atoms.append(
                    {
                        "label": label,
                        "atom": number,
                        "position": crystal.positions[site].tolist(),
                        "k": k.tolist(),
                        "cosine_abc_muB": crystal.to_crystal_axes(part[site].real).tolist(),
                        "sine_abc_muB": crystal.to_crystal_axes(part[site].imag).tolist(),
                    }
                )
    plain = mode.to_dict()
    plain.pop("sizes_muB")
    direction = mode.direction
    return {
        **plain,
        "k": None if mode.k is None else vectors.tolist(),
        "direction_abc": None if direction is None else crystal.to_crystal_axes(direction).tolist(),
        "energy_K_per_ion": mode.energy_per_ion_eV * K_PER_EV,
        "atoms": atoms,
    }


def modes_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a modes document, for CSV: one per k of the path and band; without a path, one per minimum."""
    if doc["bands"] is not None:
        return [{**row, "boundary": doc["boundary"]} for row in doc["bands"]["rows"]]
    keys = ("k", "energy_ueV_per_ion", "energy_K_per_ion", "equal_moments", "degeneracy", "boundary")
    return [{"number": number, **{key: mode[key] for key in keys}} for number, mode in enumerate(doc["modes"], start=1)]
