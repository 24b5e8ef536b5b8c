"""One input of a batch, from its path to its line in the results. Runs in worker processes and on clusters.

Words used here and nowhere renamed:

input        the path of a structure file as the user named it
job          an input and what is needed to do it elsewhere
record       what is written of an input: one JSON object in one line, free of times and names of processes, so that
             the same input gives the same bytes whenever and wherever it is done
"""

from __future__ import annotations

import hashlib
import json
import os
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from latticedip import __version__
from latticedip.encode import plain
from latticedip.errors import FileError, LatticedipError
from latticedip.study.batch_template import Template

#: Why an input failed: what it holds, or what it did to the process that worked at it.
INPUT, TIMEOUT, MEMORY, CRASH = "input", "timeout", "memory", "crash"
#: Messages are cut here; a list of a thousand labels helps nobody.
LONGEST_ERROR = 1000


@dataclass(frozen=True)
class Job:
    """One input to do. path: absolute, where it is read from. cost: a guess, in any unit."""

    input: str
    path: str
    cost: float = 1.0


@dataclass(frozen=True)
class Outcome:
    """What became of a job: its record as a line of JSON that ends in a newline, and the seconds it took."""

    job: Job
    line: bytes
    seconds: float
    done: bool


def file_hash(path: str) -> str | None:
    """SHA-256 of an ordinary file, read in pieces; None where it cannot be read."""
    if not os.path.isfile(path):
        return None
    digest = hashlib.sha256()
    try:
        with open(path, "rb") as stream:
            while piece := stream.read(1 << 20):
                digest.update(piece)
    except OSError:
        return None
    return digest.hexdigest()


def record_line(
    job: Job, digest: str, *, sha256: str | None, error: str = "", reason: str = "", results: dict[str, Any]
) -> bytes:
    """The line of a record; with an error it is one of a failure."""
    record = {
        "input": job.input,
        "status": "failed" if error else "done",
        "error": error or None,
        "reason": reason or None,
        "sha256": sha256,
        "template_sha256": digest,
        "version": __version__,
        "results": results,
    }
    return json.dumps(plain(record), separators=(",", ":"), allow_nan=False).encode("ascii") + b"\n"


def failure(job: Job, digest: str, error: str, reason: str) -> Outcome:
    """The outcome of a job that could not finish by itself."""
    line = record_line(job, digest, sha256=file_hash(job.path), error=error, reason=reason, results={})
    return Outcome(job, line, 0.0, False)


def do_job(template: Template, job: Job) -> Outcome:
    """Read one structure, run the template on it and return its record; whatever is wrong with it becomes its error."""
    from latticedip.kernels.jit import one_thread

    started = time.perf_counter()
    digest = template.digest
    before = file_hash(job.path)
    error, reason, results = "", "", {}
    try:
        with one_thread():
            results = _results(template, job)
    except MemoryError as problem:
        # A limit of this program that was met before memory was taken is a property of the input.
        foreseen = isinstance(problem, LatticedipError)
        error = _one_line(problem, template, job) if foreseen else "there is not enough memory for it."
        reason = INPUT if foreseen else MEMORY
    except LatticedipError as problem:
        error, reason = _one_line(problem, template, job), INPUT
    except Exception as problem:  # a slip of this program on one input must not cost all the others
        error, reason = (
            f"internal error, please report it ({type(problem).__name__}: {_one_line(problem, template, job)})",
            CRASH,
        )
    if not error and file_hash(job.path) != before:
        error, reason, results = "the file was changed while it was being read. Run it again.", CRASH, {}
    line = record_line(job, digest, sha256=before, error=error, reason=reason, results=results)
    return Outcome(job, line, time.perf_counter() - started, not error)


def _results(template: Template, job: Job) -> dict[str, Any]:
    from latticedip.files.read import read_file
    from latticedip.ordering.model import Ordering

    if not os.path.lexists(job.path):
        raise FileError(f"{job.input}: there is no such file.")
    found = read_file(job.path)
    own = found if isinstance(found, Ordering) else None
    crystal = found.crystal if isinstance(found, Ordering) else found
    return template.run(template.study_for(crystal, own, Path(job.path)))


def _one_line(problem: BaseException, template: Template, job: Job) -> str:
    """A message in one line, with paths as the user named them and no character that JSON or a terminal minds."""
    text = str(problem).replace(job.path, job.input).replace(str(template.path), template.file)
    text = " ".join(text.split())
    text = "".join(c if c.isprintable() else "�" for c in text)
    return text if len(text) <= LONGEST_ERROR else text[: LONGEST_ERROR - 3] + "..."
