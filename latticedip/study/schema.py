"""The study file: a crystal, orderings, probes and a sample, read from TOML into the objects the calls take.

Tables: title, [crystal], [moments], [moment_spread], [[ordering]], [[probe]], [sample], [susceptibility], [abundances],
[propose]. A key that is not known, a value of another type and a value that is missing are refused with the path of the
key, the value, what was expected and the nearest known word. Items are counted from 1. Paths are relative to the study
file.
"""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.errors import StudyError
from latticedip.observables.susceptibility import Susceptibility
from latticedip.ordering.model import Ordering
from latticedip.probe import Probe
from latticedip.sample import Sample
from latticedip.study.keys import Key
from latticedip.study.magnetism import magnetic_sites, read_abundances, read_moment_spread, read_susceptibility
from latticedip.study.orderings import existing_file, read_block, read_moments, read_orderings
from latticedip.study.probes import WeightedProbe, read_probes, read_sample
from latticedip.study.search import Search, read_search

STUDY_KEYS = (
    "title",
    "crystal",
    "moments",
    "moment_spread",
    "ordering",
    "probe",
    "sample",
    "susceptibility",
    "abundances",
    "propose",
)
CRYSTAL_KEYS = ("file", "block")
#: A study file larger than this (bytes) is some other file.
LARGEST_FILE = 10_000_000


@dataclass(frozen=True, eq=False)
class Study:
    """What a study file names, ready for `local_field`, `dipolar_energy` and `rank`; frozen.

    title: what the file calls itself; its own name where it gives none.
    path: the study file.
    crystal: the Crystal of [crystal]; its Cartesian frame is that of everything else.
    orderings: all [[ordering]]s, turned into that frame.
    probes: all [[probe]]s, positions in the cell of ``crystal``. weighted: which of them are one probe at several
        positions, and with which weights.
    sample: the Sample; N = 0 and no applied field where [sample] is left out.
    moments: sizes in µB as [moments] gives them, by site label or element. moments_su: their standard uncertainties in
        µB, of those that state one.
    moment_spread: rms extent in Å or covariance in Å² of the moments that are extended, by site label or element, as
        `local_field` takes it.
    susceptibility: of the magnetic ions in the paramagnetic state, by site label or element.
    abundances: fractions of an element's atoms that are an isotope, by its name, where not the natural ones.
    other_energies_meV_per_ion: energies from elsewhere (exchange, single ion) by the name of the ordering.
    search: what [propose] asks for.
    files: every file that was read, by the part it plays: "study", "crystal", "ordering 1".
    notes: sentences a report must repeat.
    """

    title: str
    path: Path
    crystal: Crystal
    orderings: tuple[Ordering, ...] = ()
    probes: tuple[Probe, ...] = ()
    sample: Sample = field(default_factory=Sample)
    moments: Mapping[str, float] = field(default_factory=dict)
    files: Mapping[str, Path] = field(default_factory=dict)
    notes: tuple[str, ...] = ()
    susceptibility: Mapping[str, Susceptibility] = field(default_factory=dict)
    abundances: Mapping[str, float] = field(default_factory=dict)
    other_energies_meV_per_ion: Mapping[str, float] = field(default_factory=dict)
    search: Search = field(default_factory=Search)
    moments_su: Mapping[str, float] = field(default_factory=dict)
    moment_spread: Mapping[str, float | FloatArray] = field(default_factory=dict)
    weighted: tuple[WeightedProbe, ...] = ()


def read_study(path: str | os.PathLike[str]) -> Study:
    """Read the study file (TOML) at ``path`` and every structure file that it names.

    Orderings that come with a cell of their own are turned into the frame of [crystal]: by the parent transformation
    that their file states, else by matching lattice and sites; ``ordering.reference`` and ``ordering.notes`` say how.

    Raises StudyError, one message that names the file, the key and the value.
    """
    from latticedip.files.read import read_crystal

    where = Path(path)
    root = Key(os.fspath(path), "", parse_tables(load_bytes(where, os.fspath(path)), os.fspath(path)))
    table = root.table(STUDY_KEYS)
    title = table["title"].text("a title in one line") if "title" in table else where.stem
    if "crystal" not in table:
        raise root.missing("crystal", 'a table [crystal] with a file, such as file = "compound.cif"')
    source = table["crystal"].table(CRYSTAL_KEYS, header='one table, headed [crystal], with file = "compound.cif"')
    if "file" not in source:
        raise table["crystal"].missing("file", "the path of a structure file")
    structure = existing_file(source["file"], where.parent, "the path of a structure file")
    block = read_block(source)
    with source["block" if block is not None else "file"].located():
        crystal = read_crystal(structure, block=block)
    return assemble(table, crystal, title=title, path=where, files={"study": where, "crystal": structure})


def assemble(table: Mapping[str, Key], crystal: Crystal, *, title: str, path: Path, files: dict[str, Path]) -> Study:
    """The study of a crystal that was read already, from the other tables of a study file.

    table: its keys, [crystal] and title left aside. path: the file that the paths in it are relative to.
    files: what was read so far, by role; the files of orderings are added.

    Raises StudyError as `read_study`.
    """
    sizes = read_moments(table.get("moments"), crystal)
    others: dict[str, float] = {}
    orderings = read_orderings(table.get("ordering"), crystal, sizes, path.parent, files, others)
    probes, weighted = read_probes(table.get("probe"), crystal)
    sample = read_sample(table.get("sample"), crystal)
    susceptibility = read_susceptibility(table.get("susceptibility"), crystal)
    magnetic = magnetic_sites(crystal, sizes.by_name, susceptibility, orderings)
    return Study(
        title,
        path,
        crystal,
        orderings,
        probes,
        sample,
        sizes.by_name,
        files,
        crystal.notes,
        susceptibility=susceptibility,
        abundances=read_abundances(table.get("abundances"), crystal),
        other_energies_meV_per_ion=others,
        search=read_search(table.get("propose"), crystal, sizes),
        moments_su=sizes.su_by_name,
        moment_spread=read_moment_spread(table.get("moment_spread"), crystal, magnetic),
        weighted=weighted,
    )


def load_bytes(path: Path, shown: str) -> bytes:
    """The bytes of a study file; raises StudyError where it cannot be read or is too large to be one."""
    try:
        with path.open("rb") as stream:
            raw = stream.read(LARGEST_FILE + 1)
    except OSError as error:
        raise StudyError(f"{shown}: cannot be read: {error.strerror or error}.") from None
    except ValueError as error:
        raise StudyError(f"{shown!r}: is no path: {error}.") from None
    if len(raw) > LARGEST_FILE:
        raise StudyError(f"{shown}: is larger than 10 MB and so no study file.")
    return raw


def parse_tables(raw: bytes, shown: str) -> dict[str, Any]:
    """The tables in the bytes of a study file; raises StudyError where they are not UTF-8 or not TOML."""
    try:
        # Some editors put a byte order mark in front of UTF-8.
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise StudyError(
            f"{shown}: line {line} holds the byte 0x{raw[error.start]:02x}, which is not UTF-8. Save the file as UTF-8."
        ) from None
    try:
        return tomllib.loads(text)
    except (ValueError, RecursionError) as error:
        # Whole numbers of thousands of digits and lists nested without end are refused outside tomllib's own error.
        deep = isinstance(error, RecursionError)
        reason = "lists or tables are nested too deeply" if deep else str(error).rstrip(".")
        raise StudyError(f"{shown}: is not valid TOML: {reason}.") from None
