"""Results to JSON and CSV, and text to files that are whole or not there at all."""

from __future__ import annotations

import csv
import io
import json
import math
import os
import secrets
import stat
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from latticedip.errors import FileError

#: A spreadsheet takes a cell that starts with one of these for a formula.
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def to_json(document: Mapping[str, Any]) -> str:
    """Return a document as JSON text, indented, keys in the order given, ending in a newline.

    Arrays become lists, complex numbers pairs [re, im], values that are not finite null, paths text. Only
    ASCII is written, so that no terminal encoding can break it.

    Raises TypeError for a value that has no such form.
    """
    return json.dumps(plain(document), indent=2, allow_nan=False) + "\n"


def plain(value: Any) -> Any:
    """Return a value made of dicts, lists, text, numbers, bools and None only; rules as in `to_json`."""
    if value is None or isinstance(value, (str, bool)):
        return str(value) if isinstance(value, str) else value
    if hasattr(value, "tolist") and hasattr(value, "dtype"):
        return plain(value.tolist())
    if isinstance(value, int):
        return int(value)
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, complex):
        return [plain(value.real), plain(value.imag)]
    if isinstance(value, Mapping):
        return {_key(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if isinstance(value, os.PathLike):
        return os.fspath(value)
    raise TypeError(f"a {type(value).__name__} has no form in JSON.")


def _key(key: Any) -> str:
    if not isinstance(key, str):
        raise TypeError(f"keys of a document are text, got {key!r}.")
    return key


def to_csv(rows: Iterable[Mapping[str, Any]]) -> str:
    """Return rows as CSV text with a head line; columns are all keys in the order in which they first appear.

    Numbers keep every digit; None and NaN are empty cells; bools are true or false. Text that a spreadsheet
    would take for a formula (it starts with =, +, -, @, tab or return) gets an apostrophe in front.

    Raises TypeError for a value that is neither text, number, bool nor None.
    """
    table = list(rows)
    columns = list(dict.fromkeys(key for row in table for key in row))
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow([csv_cell(column) for column in columns])
    for row in table:
        writer.writerow([csv_cell(row.get(column)) for column in columns])
    return buffer.getvalue()


def csv_cell(value: Any) -> str:
    """Return the text of one cell of a CSV table; rules and errors as `to_csv`."""
    if hasattr(value, "item") and getattr(value, "shape", None) == ():
        value = value.item()
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        guarded = "'" + value if value.startswith(_FORMULA_STARTS) else value
        # A bare carriage return is not quoted by every version of the csv module.
        return guarded.replace("\r\n", "\n").replace("\r", "\n")
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return "" if math.isnan(value) else repr(value)
    raise TypeError(f"a {type(value).__name__} does not fit into one cell of a CSV table.")


def write_csv(rows: Iterable[Mapping[str, Any]], path: str | os.PathLike[str]) -> None:
    """Write rows as a CSV file (see `to_csv`), whole or not at all.

    Raises FileError where the file cannot be written.
    """
    write_text_atomically(path, to_csv(rows))


def write_text_atomically(path: str | os.PathLike[str], text: str) -> None:
    """Write UTF-8 text as `write_bytes_atomically` writes bytes; FileError also for text that is no valid Unicode."""
    try:
        data = text.encode("utf-8")
    except UnicodeEncodeError:
        raise FileError(f"cannot write {os.fspath(path)!r}: it holds a name that is not valid Unicode.") from None
    write_bytes_atomically(path, data)


def write_bytes_atomically(path: str | os.PathLike[str], data: bytes) -> None:
    """Write bytes under a temporary name beside the target, then rename: no reader sees half a file.

    A link is followed; a device or pipe is written to directly; an existing file keeps its permissions.

    Raises FileError where the file cannot be written.
    """
    shown = os.fspath(path)
    target = Path(os.path.realpath(shown))
    try:
        mode = target.stat().st_mode if target.exists() else None
        if mode is not None and not stat.S_ISREG(mode) and not stat.S_ISDIR(mode):
            target.write_bytes(data)
            return
        if mode is not None and stat.S_ISDIR(mode):
            raise FileError(f"cannot write {shown!r}: it is a directory. Name a file.")
        temporary = target.with_name(f".{target.name[:80]}.{secrets.token_hex(6)}.tmp")
        try:
            # Not tempfile.mkstemp: its files are closed to everyone else whatever the user's umask says.
            with open(temporary, "xb") as stream:
                stream.write(data)
                stream.flush()
                os.fsync(stream.fileno())
            if mode is not None:
                os.chmod(temporary, stat.S_IMODE(mode))
            os.replace(temporary, target)
        except BaseException:
            temporary.unlink(missing_ok=True)
            raise
    except OSError as error:
        raise FileError(f"cannot write {shown!r}: {error.strerror or error}.") from None
