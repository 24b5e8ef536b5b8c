"""A study written from candidate orderings: its crystal, probes and sample are those of the study they came from."""

from __future__ import annotations

import json
import os
import re
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.encode import write_text_atomically
from latticedip.errors import FileError, LatticedipError
from latticedip.files.write import write_ordering
from latticedip.ordering.model import Ordering
from latticedip.study.proposals import in_parent
from latticedip.study.schema import load_bytes, parse_tables

if TYPE_CHECKING:
    from latticedip.crystal.model import Crystal
    from latticedip.study.schema import Study

_BARE = re.compile(r"[A-Za-z0-9_-]+")
#: Tables of a study that are written anew, not copied.
_OWN = ("title", "crystal", "ordering")
#: Moments this close to the stated size (relative) are written as signs along a direction.
SAME_SIZE = 1e-9


def write_study(
    study: Study, orderings: Sequence[Ordering], path: Path, *, overwrite: bool = False
) -> tuple[list[Path], list[tuple[str, str]]]:
    """Write a study that holds these orderings of the crystal of ``study``, and all its other tables.

    An ordering with several k is written as a magCIF beside it. Returns the files, the study first, and name and reason
    of the orderings that could not be written.

    Raises FileError where a file exists (unless overwrite) or cannot be written.
    """
    several = {number: path.with_name(f"{path.stem}-{number:02d}.mcif") for number in _several(orderings)}
    taken = [file for file in (path, *several.values()) if file.exists()]
    if taken and not overwrite:
        raise FileError(f"{str(taken[0])!r} exists. Name another file, or use --force to write over it.")
    tables = parse_tables(load_bytes(study.path, str(study.path)), str(study.path))
    blocks = [_head(study, tables, path)]
    blocks += [_block(name, table) for name, table in tables.items() if name == "moments"]
    written, refused = [path], []
    for number, ordering in enumerate(orderings, start=1):
        if number not in several:
            blocks.append(_block("ordering", [_pattern(study, ordering)]))
            continue
        try:
            write_ordering(in_parent(ordering), several[number], overwrite=overwrite)
        except LatticedipError as error:
            refused.append((ordering.name, str(error)))
            continue
        written.append(several[number])
        blocks.append(_block("ordering", [{"name": ordering.name, "file": several[number].name}]))
    blocks += [_block(name, table) for name, table in tables.items() if name not in (*_OWN, "moments")]
    write_text_atomically(path, "\n".join(blocks))
    return written, refused


def _several(orderings: Sequence[Ordering]) -> list[int]:
    return [number for number, ordering in enumerate(orderings, start=1) if len(ordering.k) > 1]


def _head(study: Study, tables: Mapping[str, Any], path: Path) -> str:
    crystal = dict(tables["crystal"])
    file = (study.path.absolute().parent / crystal["file"]).resolve()
    try:
        crystal["file"] = Path(os.path.relpath(file, path.absolute().parent.resolve())).as_posix()
    except ValueError:  # another drive: no relative path leads there
        crystal["file"] = file.as_posix()
    title = f"{study.title}: candidates"
    return f"title = {toml_value(title)}\n\n{_block('crystal', crystal)}"


def _pattern(study: Study, ordering: Ordering) -> dict[str, Any]:
    """An ordering at one k as the keys of an [[ordering]]: signs along a direction where that says it all."""
    crystal = ordering.crystal
    k, components = ordering.k[0], ordering.components[0]
    plain: dict[str, Any] = {"name": ordering.name, "k": [float(x) for x in k]}
    signs = _signs(study, components)
    if signs is not None:
        direction, by_site = signs
        plain["along"] = [float(x) for x in crystal.to_crystal_axes(direction)]
        letters = {1: "+", -1: "-", 0: "0"}
        plain["signs"] = {
            label: "".join(letters[int(by_site[i])] for i in crystal.find(label))
            for label in _labels(crystal, sized_sites(study))
        }
        return plain
    magnetic = np.flatnonzero(ordering.is_magnetic)
    for name, part in (("cosine", components.real), ("sine", components.imag)):
        if np.any(part):
            plain[name] = {
                label: [[float(x) + 0.0 for x in crystal.to_crystal_axes(part[i])] for i in crystal.find(label)]
                for label in _labels(crystal, magnetic)
            }
    # The amplitudes are those of the cells, as the program holds them.
    return {**plain, "phase": "cell"}


def _labels(crystal: Crystal, sites: np.ndarray) -> list[str]:
    return list(dict.fromkeys(crystal.labels[int(i)] for i in sites))


def sized_sites(study: Study) -> np.ndarray:
    """Indices of the sites that [moments] gives a size above zero."""
    return np.flatnonzero(_sizes(study))


def _sizes(study: Study) -> FloatArray:
    pairs = zip(study.crystal.labels, study.crystal.symbols, strict=True)
    return np.array([study.moments.get(label, study.moments.get(symbol, 0.0)) for label, symbol in pairs])


def _signs(study: Study, components: np.ndarray) -> tuple[FloatArray, np.ndarray] | None:
    """Direction (Cartesian unit vector) and sign of every site; None where the moments are not sizes times signs."""
    sizes = _sizes(study)
    lengths = np.linalg.norm(components, axis=1)
    carries = lengths > 0
    labels = set(_labels(study.crystal, np.flatnonzero(sizes)))
    mixed = any(label in labels and size == 0 for label, size in zip(study.crystal.labels, sizes, strict=True))
    if mixed or np.any(components.imag) or np.any(np.abs(lengths - sizes)[carries] > SAME_SIZE * lengths[carries]):
        return None
    first = int(np.argmax(carries))
    direction = components[first].real / lengths[first]
    along = components.real @ direction
    if np.abs(np.abs(along) - lengths).max() > SAME_SIZE * lengths.max():
        return None
    across = components.real - along[:, None] * direction
    if np.abs(across).max() > SAME_SIZE * lengths.max():
        return None
    return direction, np.sign(np.where(carries, along, 0.0))


def _block(name: str, table: Any) -> str:
    """A table, a list of tables or a value under its header."""
    if isinstance(table, list) and table and all(isinstance(item, dict) for item in table):
        return "\n".join(f"[[{_key(name)}]]\n{_lines(item)}" for item in table)
    if isinstance(table, dict):
        return f"[{_key(name)}]\n{_lines(table)}"
    return f"{_key(name)} = {toml_value(table)}\n"


def _lines(table: Mapping[str, Any]) -> str:
    return "".join(f"{_key(name)} = {toml_value(value)}\n" for name, value in table.items())


def toml_value(value: Any) -> str:
    """A value as TOML, in one line.

    Raises FileError for text that is not valid Unicode, TypeError for a value that has no such form.
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, (int, float)):
        return repr(value)
    if isinstance(value, str):
        try:
            value.encode("utf-8")
        except UnicodeEncodeError:
            raise FileError(f"the name {value!r} is not valid Unicode, so a study cannot hold it.") from None
        # JSON escapes what TOML asks for, except for the delete character.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, list):
        return "[" + ", ".join(toml_value(item) for item in value) + "]"
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{_key(name)} = {toml_value(item)}" for name, item in value.items()) + " }"
    raise TypeError(f"a {type(value).__name__} has no form in a study.")


def _key(name: str) -> str:
    return name if _BARE.fullmatch(name) else toml_value(name)
