"""The inputs of a batch: files, patterns and folders turned into a list of files, each with a guess of its cost."""

from __future__ import annotations

import glob
import os
import re
from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path

from latticedip.errors import InputError
from latticedip.study.batch_record import Job

#: Files of a folder with these suffixes are taken for structures; a file named by itself is taken whatever its name.
STRUCTURE_SUFFIXES = frozenset(
    (".cif", ".mcif", ".magcif", ".xyz", ".extxyz", ".vasp", ".poscar", ".res", ".pdb", ".xsf", ".cell", ".gen")
)
STRUCTURE_NAMES = ("POSCAR", "CONTCAR")
#: Bytes of a file that its cost is guessed from, and the longest line that counts.
SCANNED, LONGEST_LINE = 1_000_000, 300

_NUMBER = re.compile(rb"-?\d*\.?\d+(\(\d+\))?")
_OPERATION = re.compile(rb"[^,]*[xyzXYZ][^,]*,[^,]*[xyzXYZ][^,]*,[^,]*[xyzXYZ]")


@dataclass
class Inputs:
    """jobs: in order of input, each file once. skipped: what was passed over, with the reason."""

    jobs: list[Job] = field(default_factory=list)
    skipped: list[dict[str, str]] = field(default_factory=list)


def collect(named: Iterable[str | os.PathLike[str]], output: Path) -> Inputs:
    """Turn what a user named into a list of files.

    named: files, patterns with * ? [ ] (** for folders within folders), and folders, which are searched with all
    their folders for files with the suffix of a structure. A file that is not there and a pattern that nothing
    matches stay in the list: each ends as a failed input of its own. output: the folder of results; it is not searched.

    Raises InputError where nothing is named.
    """
    inputs = Inputs()
    seen: dict[str, str] = {}
    results = os.path.realpath(output)
    count = 0
    for item in named:
        count += 1
        name = os.fspath(item)
        if not isinstance(name, str) or not name or "\0" in name:
            raise InputError(f"an input is the path of a file, a folder or a pattern, got {name!r}.")
        if os.path.isdir(name):
            _search(name, results, inputs, seen)
        elif not os.path.lexists(name) and glob.has_magic(name):
            found = sorted(glob.glob(name, recursive=True))
            for path in found or [name]:
                if os.path.isdir(path):
                    inputs.skipped.append({"input": path, "reason": "a folder that a pattern matched"})
                else:
                    _take(path, inputs, seen)
        else:
            _take(name, inputs, seen)
    if not count:
        raise InputError("there are no inputs: name structure files, patterns or folders.")
    inputs.jobs.sort(key=lambda job: job.input)
    inputs.skipped.sort(key=lambda entry: (entry["input"], entry["reason"]))
    return inputs


def _search(folder: str, results: str, inputs: Inputs, seen: dict[str, str]) -> None:
    for where, folders, files in os.walk(folder):
        for name in [n for n in folders if n.startswith(".") or os.path.realpath(os.path.join(where, n)) == results]:
            folders.remove(name)
            reason = "hidden" if name.startswith(".") else "the folder of results"
            inputs.skipped.append({"input": os.path.join(where, name), "reason": reason})
        folders.sort()
        if os.path.realpath(where) == results:
            continue
        for name in sorted(files):
            path = os.path.join(where, name)
            if name.startswith("."):
                inputs.skipped.append({"input": path, "reason": "hidden"})
            elif Path(name).suffix.lower() in STRUCTURE_SUFFIXES or name.upper().startswith(STRUCTURE_NAMES):
                _take(path, inputs, seen)
            else:
                inputs.skipped.append({"input": path, "reason": "not the name of a structure file"})


def _take(path: str, inputs: Inputs, seen: dict[str, str]) -> None:
    real = os.path.realpath(path)
    if real in seen:
        inputs.skipped.append({"input": path, "reason": f"the same file as {seen[real]}"})
        return
    seen[real] = path
    inputs.jobs.append(Job(path, os.path.abspath(path)))


def guess_cost(path: str) -> float:
    """A guess of how long a structure takes, in any unit, from lines of its file that look like atoms or operations.

    Only the order of inputs follows from it. A file that cannot be read costs nothing.
    """
    try:
        if not os.path.isfile(path):
            return 0.0
        with open(path, "rb") as stream:
            head = stream.read(SCANNED)
        more = os.path.getsize(path) / max(1, len(head))
    except OSError:
        return 0.0
    atoms = operations = 0
    for line in head.splitlines():
        if len(line) > LONGEST_LINE:
            continue
        if b"," in line:
            operations += _OPERATION.match(line) is not None
        else:
            atoms += sum(_NUMBER.fullmatch(word) is not None for word in line.split()) >= 3
    atoms = round(atoms * max(1.0, more))
    operations = max(1, operations)
    # Sites of a CIF lie on symmetry elements more often than not.
    sites = atoms * (1.0 + operations / 4)
    return 20.0 + sites + sites**2 / 100
