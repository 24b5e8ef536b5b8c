"""The folder of results of a batch: records appended as they come, mended after an interruption, merged at the end.

results.jsonl   one record per line, in the order in which inputs were finished
results.csv     the rows of all records, in order of input
summary.json    counts, reasons and times of the last run

A record is one `write` of its whole line at the end of the file, so that a process killed at any moment leaves at most
one incomplete line, the last, which the next run removes. What `write` has taken outlives the process; it outlives a
power cut once `fsync` returned, which is called every two seconds: often enough that little is done twice, rarely
enough that the disk does not set the pace.
"""

from __future__ import annotations

import csv
import fcntl
import io
import json
import logging
import os
import tempfile
import time
from array import array
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import suppress
from pathlib import Path
from types import TracebackType
from typing import Any

from latticedip.encode import csv_cell
from latticedip.errors import FileError, InputError

RESULTS, TABLE, SUMMARY = "results.jsonl", "results.csv", "summary.json"
#: Seconds between two calls of fsync.
SYNC_S = 2.0

Row = Mapping[str, Any]

_log = logging.getLogger(__name__)


class Journal:
    """The records in a folder, open for more; the folder is locked until `close`.

    finished: where in the file the record of each input begins.
    """

    def __init__(self, folder: Path, *, resume: bool) -> None:
        """Open the folder, made where there is none.

        Raises InputError where it holds results and resume is not asked for, or where another batch works in it;
        FileError where it cannot be made or written.
        """
        self.folder = folder
        self.path = folder / RESULTS
        self.finished: dict[str, int] = {}
        self._size = 0
        self._synced = time.monotonic()
        self._lock = -1
        self._file = -1
        with _told(folder):
            folder.mkdir(parents=True, exist_ok=True)
            # The folder itself is locked: no file of its own could be left behind by a killed run.
            self._lock = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            self._take_lock()
            self._open(resume)
        except BaseException:
            self.close()
            raise

    def _take_lock(self) -> None:
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            where = str(self.folder)
            raise InputError(f"another batch is writing to {where!r}. Wait for it, or name another folder.") from None
        except OSError:
            _log.info("the file system of %s knows no locks: nothing keeps a second batch out", self.folder)

    def _open(self, resume: bool) -> None:
        if not resume and any(_holds_something(self.folder / name) for name in (RESULTS, TABLE, SUMMARY)):
            raise InputError(
                f"{str(self.folder)!r} holds the results of an earlier run. Go on with it with --resume (resume=True), "
                "or name another folder."
            )
        with _told(self.path):
            for name in (TABLE, SUMMARY):
                # They are of the earlier run; those of this one come at its end.
                (self.folder / name).unlink(missing_ok=True)
            self._file = os.open(self.path, os.O_RDWR | os.O_CREAT | os.O_APPEND, 0o666)
            self._size = os.fstat(self._file).st_size

    def __enter__(self) -> Journal:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Bring what was written to the disk and give the folder free."""
        if self._file >= 0:
            with suppress(OSError):
                os.fsync(self._file)
            os.close(self._file)
            self._file = -1
        if self._lock >= 0:
            os.close(self._lock)
            self._lock = -1

    def mend(self, keep: Callable[[dict[str, Any]], bool]) -> int:
        """Remove lines that are not whole, and records that are not to be kept; returns how many lines went.

        The file is replaced by one without them in a single step. Of two records of one input the first is kept.
        """
        dropped = 0
        kept: list[tuple[int, int]] = []
        at = 0
        with _told(self.path), open(self.path, "rb") as stream:
            for line in stream:
                record = _record(line)
                if record is None or record["input"] in self.finished or not keep(record):
                    dropped += 1
                else:
                    self.finished[record["input"]] = at
                    kept.append((stream.tell() - len(line), len(line)))
                    at += len(line)
            if dropped:
                replace_file(self.path, (_piece(stream, start, length) for start, length in kept))
        if dropped:
            with _told(self.path):
                os.close(self._file)
                self._file = -1
                self._file = os.open(self.path, os.O_RDWR | os.O_APPEND)
                self._size = os.fstat(self._file).st_size
        return dropped

    def append(self, name: str, line: bytes) -> None:
        """Add the record of an input.

        Raises FileError where the disk is full or fails; nothing of the line is then left behind.
        """
        try:
            written = os.write(self._file, line)
            if written < len(line):
                # A full disk takes the beginning; trying the rest tells why.
                os.write(self._file, line[written:])
                raise OSError(0, "the line was written in two parts")
            if time.monotonic() - self._synced > SYNC_S:
                os.fsync(self._file)
                self._synced = time.monotonic()
        except OSError as error:
            with suppress(OSError):
                os.ftruncate(self._file, self._size)
            raise FileError(
                f"cannot write {str(self.path)!r}: {error.strerror or error}. What was finished is kept: make room, "
                "then go on with --resume (resume=True)."
            ) from None
        self.finished[name] = self._size
        self._size += len(line)

    def records(self) -> Iterator[dict[str, Any]]:
        """All records in order of input, one at a time."""
        with _told(self.path), open(self.path, "rb") as stream:
            for _, start in sorted(self.finished.items()):
                stream.seek(start)
                yield json.loads(stream.readline())

    def merge(self, rows_of: Callable[[dict[str, Any]], list[Row]]) -> None:
        """Write results.csv: the rows of every record, in order of input, with every column that any of them has.

        Rows wait in a temporary file until all columns are known, so that memory does not grow with their number.
        """
        columns: dict[str, int] = {}
        sizes, widths = array("Q"), array("Q")
        with _told(self.folder / TABLE), tempfile.TemporaryFile(dir=self.folder) as spool:
            for record in self.records():
                for row in rows_of(record):
                    for column in row:
                        columns.setdefault(column, len(columns))
                    line = _csv_line(row.get(column) for column in columns)
                    sizes.append(len(line))
                    widths.append(len(columns))
                    spool.write(line)
            spool.seek(0)

            def lines() -> Iterator[bytes]:
                yield _csv_line(columns) + b"\n"
                for size, width in zip(sizes, widths, strict=True):
                    yield spool.read(size) + b"," * (len(columns) - width) + b"\n"

            replace_file(self.folder / TABLE, lines())


def _holds_something(path: Path) -> bool:
    with _told(path):
        return path.exists() and path.stat().st_size > 0


def _csv_line(values: Iterable[Any]) -> bytes:
    """One row as CSV without its end; names that are no valid Unicode are written with escapes."""
    text = io.StringIO()
    csv.writer(text, lineterminator="").writerow([csv_cell(value) for value in values])
    return text.getvalue().encode("utf-8", "backslashreplace")


def replace_file(path: Path, pieces: Iterable[bytes]) -> None:
    """Write pieces under a temporary name beside the target, then rename; raises FileError where that fails.

    The temporary name is always the same: the folder is locked, and what a killed run left is written over.
    """
    temporary = path.with_name(f".{path.name}.tmp")
    try:
        with open(temporary, "wb") as stream:
            for piece in pieces:
                stream.write(piece)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(temporary, path)
    except OSError as error:
        with suppress(OSError):
            temporary.unlink(missing_ok=True)
        raise FileError(
            f"cannot write {str(path)!r}: {error.strerror or error}. Make room, then go on with --resume (resume=True)."
        ) from None


def _record(line: bytes) -> dict[str, Any] | None:
    """The record in a line; None where the line is not a whole one."""
    if not line.endswith(b"\n"):
        return None
    try:
        found = json.loads(line)
    except ValueError:
        return None
    return found if isinstance(found, dict) and isinstance(found.get("input"), str) else None


def _piece(stream: Any, start: int, length: int) -> bytes:
    stream.seek(start)
    return bytes(stream.read(length))


class _told:
    """Turns an OSError inside into a FileError that names the path."""

    def __init__(self, path: Path) -> None:
        self.path = path

    def __enter__(self) -> None:
        return None

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, _: TracebackType | None) -> None:
        if isinstance(error, OSError):
            raise FileError(f"{str(self.path)!r}: {error.strerror or error}.") from None
