"""What every document of results carries, and how its rows become one flat table.

A document is a dict of plain values: ``schema``, ``version``, ``inputs`` (each file with the SHA-256 of its
bytes), ``boundary``, then the results, whose keys end in their units.
"""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from latticedip import __version__
from latticedip.errors import FileError, InputError

if TYPE_CHECKING:
    from latticedip.ordering.model import Ordering

#: The boundary of a document without any sum.
NO_SUM = "none: nothing was summed"
#: The ends of keys that are units; the letter of a component goes in front of them.
_UNITS = ("_T_per_A", "_G_per_A", "_muB_per_cell", "_muB_per_ion", "_muB", "_T", "_G", "_A")


def document(
    kind: str,
    *,
    files: Mapping[str, Path],
    options: Mapping[str, Any],
    boundary: str,
    results: Mapping[str, Any],
) -> dict[str, Any]:
    """Return a document of one kind ("rank", "field", ...).

    files: role and path of every file that was read. options: what was asked for.

    Raises FileError where a file cannot be read any more.
    """
    listed = [{"role": role, "path": str(path), "sha256": content_hash(path)} for role, path in files.items()]
    return {
        "schema": f"latticedip/{kind}/1",
        "version": __version__,
        "inputs": {"files": listed, "options": dict(options)},
        "boundary": boundary,
        **results,
    }


def content_hash(path: Path) -> str:
    """Return the SHA-256 of the bytes of a file; raises FileError where it cannot be read."""
    try:
        return hashlib.sha256(path.read_bytes()).hexdigest()
    except OSError as error:
        raise FileError(f"cannot read {os.fspath(path)!r}: {error.strerror or error}.") from None


def spare_inputs(path: Path, document: Mapping[str, Any]) -> None:
    """Raise InputError where writing to ``path`` would destroy a file that the document was made from."""
    for entry in document["inputs"]["files"]:
        if path.exists() and Path(entry["path"]).exists() and path.samefile(entry["path"]):
            raise InputError(f"{str(path)!r} is read here (as the {entry['role']}). Write to another file.")


def ordering_head(ordering: Ordering) -> dict[str, Any]:
    """What every document says of an ordering: its name, k, ions per cell, net moment and, if it has a cell of its
    own, how that was placed in the crystal of the study.
    """
    return {
        "ordering": ordering.name,
        "k": ordering.k.tolist(),
        "ions_per_cell": ordering.n_ions,
        "net_moment_muB_per_cell": ordering.net_moment.tolist(),
        "own_cell_placed": None if ordering.reference is None else ordering.reference.how,
    }


def home_cell_notes(orderings: Iterable[Ordering]) -> list[str]:
    """What must be said of fields under orderings whose moments differ from cell to cell."""
    moving = [ordering.name for ordering in orderings if not all(float(x).is_integer() for x in ordering.k.ravel())]
    if not moving:
        return []
    return [f"fields are those in the home cell; with k ≠ 0 they differ from cell to cell ({', '.join(moving)})"]


def flat(row: Mapping[str, Any]) -> dict[str, Any]:
    """Return a row with each vector spread over three columns, its unit kept at the end of their names.

    ``total_T`` becomes total_x_T, total_y_T, total_z_T; a key that holds ``_abc`` gets the letters a, b, c.
    A list of vectors (several k) becomes text.
    """
    spread: dict[str, Any] = {}
    for key, value in row.items():
        if not isinstance(value, (list, tuple)):
            spread[key] = value
        elif len(value) == 3 and all(v is None or isinstance(v, (int, float)) for v in value):
            unit = next((u for u in _UNITS if key.endswith(u)), "")
            base, letters = key.removesuffix(unit), "xyz"
            if base.endswith("_abc"):
                base, letters = base.removesuffix("_abc"), "abc"
            for letter, component in zip(letters, value, strict=True):
                spread[f"{base}_{letter}{unit}"] = component
        else:
            spread[key] = "; ".join(_vector_text(v) for v in value)
    return spread


def flat_rows(rows: Iterable[Mapping[str, Any]]) -> list[dict[str, Any]]:
    """Return every row flat."""
    return [flat(row) for row in rows]


def _vector_text(value: Any) -> str:
    if isinstance(value, (list, tuple)):
        return " ".join(repr(float(v)) for v in value)
    return str(value)
