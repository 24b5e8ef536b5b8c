"""Proposed orderings as documents, as a study that holds them, and as magCIF files."""

from __future__ import annotations

import dataclasses
import logging
import re
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.analysis.bounds import Bound
from latticedip.analysis.propose import ProposalRow, propose
from latticedip.errors import FileError, LatticedipError
from latticedip.files.write import write_ordering
from latticedip.ordering.model import Ordering, ParentTransform
from latticedip.study.describe import describe_ordering
from latticedip.study.documents import document, ordering_head
from latticedip.study.search import Search, stated_sizes

if TYPE_CHECKING:
    from latticedip.analysis.propose import Proposal
    from latticedip.study.schema import Study

_log = logging.getLogger(__name__)
UEV_PER_EV = 1e6


def propose_document(study: Study, search: Search, *, tol: float = 1e-10) -> tuple[dict[str, Any], Proposal]:
    """The document of `propose`, and the Proposal that it shows: candidates found, lowest first.

    Raises StudyError where [moments] states no sizes, InputError where the constraints do not fit, and what
    `latticedip.propose` raises.
    """
    sizes = stated_sizes(study)
    _log.info("searching")
    found = propose(study.crystal, sizes, sample=study.sample, tol=tol, **search.arguments())
    bound = None if found.mode is None else Bound(study.crystal, sizes, study.sample, tol)
    rows = [_row(number, row, bound) for number, row in enumerate(found.rows, start=1) if isinstance(row, ProposalRow)]
    options = {name: _plain(value) for name, value in search.arguments().items()}
    plain = document(
        "propose",
        files=study.files,
        options={**options, "tol": tol},
        boundary=found.boundary,
        results={
            "title": study.title,
            "sample": study.sample.to_dict(),
            "sizes_muB": sizes,
            "bound": None if bound is None else bound.to_dict(),
            "annealing_restarts": found.restarts,
            "annealing_restarts_at_best": found.restarts_at_best,
            "rows": rows,
            "written": [],
            "not_written": [],
            "notes": list(dict.fromkeys(found.notes)),
        },
    )
    return plain, found


def _plain(value: Any) -> Any:
    return value.tolist() if isinstance(value, np.ndarray) else value


def _row(number: int, row: ProposalRow, bound: Bound | None) -> dict[str, Any]:
    energy = row.energy
    above = None if bound is None else bound.above(row.ordering, energy)
    per_ion = UEV_PER_EV / energy.n_ions
    return {
        "rank": number,
        **ordering_head(row.ordering),
        "net_moment_muB_per_ion": float(np.linalg.norm(energy.net_moment)) / energy.n_ions,
        "energy_ueV_per_ion": energy.per_ion_eV * UEV_PER_EV,
        "energy_K_per_ion": energy.per_ion_K,
        "above_lowest_ueV_per_ion": row.above_lowest_eV * UEV_PER_EV,
        "above_bound_ueV_per_ion": None if above is None else above.above_eV * UEV_PER_EV,
        "tie": bool(row.tie),
        "dipolar_ueV_per_ion": energy.dipolar_eV * per_ion,
        "shape_ueV_per_ion": energy.shape_eV * per_ion,
        "applied_ueV_per_ion": energy.applied_eV * per_ion,
        "error_bound_ueV_per_ion": energy.error_bound_eV * per_ion,
        "multiplicity": row.multiplicity,
        "bns_number": row.bns_number,
        "found_by": list(row.origins),
        "boundary": energy.boundary,
        "moments": describe_ordering(row.ordering),
        "notes": list(energy.notes),
    }


def propose_table(doc: dict[str, Any]) -> list[dict[str, Any]]:
    """The rows of a propose document, for CSV; the moments themselves are left to the document and the files."""
    return [
        {key: (", ".join(value) if key == "found_by" else value) for key, value in row.items() if key != "moments"}
        for row in doc["rows"]
    ]


def candidate_files(orderings: list[Ordering], folder: Path) -> list[Path]:
    """The magCIF files that `write_candidates` writes: "01-collinear.mcif" and so on."""
    digits = max(2, len(str(len(orderings))))
    names = []
    for number, ordering in enumerate(orderings, start=1):
        word = re.sub(r"[^A-Za-z]+", "-", ordering.name.partition(": ")[2].partition(",")[0]).strip("-") or "ordering"
        names.append(folder / f"{number:0{digits}d}-{word}.mcif")
    return names


def write_candidates(
    orderings: list[Ordering], folder: Path, *, overwrite: bool = False
) -> tuple[list[Path], list[tuple[str, str]]]:
    """Write every ordering as a magCIF file; returns the files, and name and reason of those that cannot be written.

    The folder is made where it is missing. Raises FileError where it cannot be, or a file exists (unless overwrite).
    """
    paths = candidate_files(orderings, folder)
    taken = [path for path in paths if path.exists()]
    if taken and not overwrite:
        raise FileError(f"{str(taken[0])!r} exists. Name another folder, or use --force to write over it.")
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise FileError(f"cannot make the folder {str(folder)!r}: {error.strerror or error}.") from None
    written, refused = [], []
    for ordering, path in zip(orderings, paths, strict=True):
        try:
            write_ordering(in_parent(ordering), path, overwrite=overwrite)
        except LatticedipError as error:
            refused.append((ordering.name, str(error)))
        else:
            written.append(path)
    return written, refused


def in_parent(ordering: Ordering) -> Ordering:
    """An ordering that says its cell is that of the crystal itself: files then say how their cell comes from it."""
    return dataclasses.replace(ordering, parent=ParentTransform(np.eye(3), np.zeros(3)))
