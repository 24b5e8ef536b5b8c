"""Every reader and the study file against broken inputs: refused with one message or read whole; no traceback, no hang.

A few hundred cases always, 20,000 with ``-m slow``; LATTICEDIP_FUZZ sets another number, LATTICEDIP_FUZZ_SEED another
stretch of cases. Every case follows from its seed and number alone.
"""

from __future__ import annotations

import os
import pickle
import random
import resource
import shutil
import signal
import tomllib
import traceback
from collections.abc import Callable
from pathlib import Path

import gemmi
import numpy as np
import pytest
from ase.data import chemical_symbols
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.crystal.neighbours import close_pairs
from latticedip.encode import to_json
from latticedip.errors import LatticedipError, LimitError
from latticedip.files.read import read_file
from latticedip.study import tasks
from latticedip.study.batch_journal import RESULTS, Journal
from latticedip.study.batch_template import Template
from tests.commands import box_cif
from tests.fuzzing import as_toml, broken, broken_study, corpus, places

DATA = Path(__file__).parent / "data"
SEED = int(os.environ.get("LATTICEDIP_FUZZ_SEED", "1"))
#: A case that takes longer (s) hangs.
ALARM_S = 10
#: Memory (MB) that all cases together may add to the process.
MOST_GROWTH_MB = 1000
#: A message longer than this is not one a person reads.
LONGEST_MESSAGE = 3000
KINDS = ("cif", "cif", "cif", "other", "other", "study", "study", "template")


class Hang(BaseException):
    """The alarm; no `except Exception` on the way may catch it."""


def ring(*_):
    raise Hang


class Finding(AssertionError):
    """What a reader did that it must not do."""


def check_crystal(crystal: ld.Crystal) -> None:
    """What holds of every crystal that was read."""
    if not (np.all(np.isfinite(crystal.cell)) and np.all(np.isfinite(crystal.positions)) and crystal.n_sites > 0):
        raise Finding("a crystal with numbers that are not finite, or without atoms")
    if not np.all((crystal.occupancies > 0) & (crystal.occupancies <= 1)):
        raise Finding("occupancies outside (0, 1]")
    if not set(crystal.symbols) <= set(chemical_symbols[1:]) | {"D", "T"}:
        raise Finding(f"elements that are none: {set(crystal.symbols) - set(chemical_symbols)}")
    if not crystal.n_sites == len(crystal.symbols) == len(crystal.labels):
        raise Finding("lists of unequal length")


def check_whole(path: Path, crystal: ld.Crystal) -> None:
    """No atom of the file is left out: rows counted by other means than the reader's."""
    data = path.read_bytes()
    if path.suffix in (".cif", ".mcif"):
        try:
            text = data.decode("utf-8-sig")
        except UnicodeDecodeError:
            text = data.decode("latin-1")
        try:
            document = gemmi.cif.read_string(text.replace("\r\n", "\n").replace("\r", "\n"))
        except ValueError:
            return  # lists of the second CIF standard, which this library does not know: nothing to compare with
        blocks = [b for b in document if b.find_values("_atom_site_fract_x") or b.find_values("_atom_site.fract_x")]
        labels: set[str] = set()
        for block in blocks:
            for tag in ("_atom_site_label", "_atom_site.label"):
                labels |= {gemmi.cif.as_string(value) for value in block.find_values(tag)}
        if len(blocks) == 1 and not set(crystal.labels) <= labels:
            raise Finding(f"labels that the file does not list: {set(crystal.labels) - labels}")
        dummies = any(tag in data.lower() for tag in (b"calc_flag", b"dummy"))
        if len(blocks) == 1 and not dummies and labels - set(crystal.labels):
            raise Finding(f"labels of the file that were dropped: {labels - set(crystal.labels)}")
    elif path.suffix in (".xyz", ".extxyz"):
        first = data.decode("utf-8", "replace").lstrip("\ufeff").splitlines()[0].split()
        if first and first[0].isdecimal() and int(first[0]) != crystal.n_sites:
            raise Finding(f"{crystal.n_sites} atoms of {first[0]}")


def check_round_trip(ordering: ld.Ordering, folder: Path) -> None:
    """What is read can be written and read again, and is the same."""
    path = folder / "again.mcif"
    path.unlink(missing_ok=True)
    try:
        ld.write_ordering(ordering, path)
    except LatticedipError:
        return
    again = ld.read_ordering(path)
    first = np.linalg.norm(ordering.moments()[0], axis=1).sum()
    second = np.linalg.norm(again.moments()[0], axis=1).sum()
    ratio = again.crystal.n_sites / ordering.crystal.n_sites
    if abs(ratio - round(ratio)) > 1e-12 or (ratio == 1 and abs(first - second) > 1e-6 * max(1.0, first)):
        raise Finding(f"moments changed by writing: {first} became {second}")


def read_structure(path: Path, rng: random.Random) -> None:
    found = rng.choice((read_file, read_file, ld.read_crystal, ld.read_ordering))(path)
    crystal = found.crystal if isinstance(found, ld.Ordering) else found
    check_crystal(crystal)
    check_whole(path, crystal)
    if isinstance(found, ld.Ordering):
        if not np.all(np.isfinite(found.components)):
            raise Finding("moments that are not finite")
        if rng.random() < 0.3:
            check_round_trip(found, path.parent)
    if rng.random() < 0.05:
        to_json(tasks.show(path))


def read_study(path: Path, rng: random.Random) -> None:
    study = ld.read_study(path)
    check_crystal(study.crystal)
    for ordering in study.orderings:
        if not np.all(np.isfinite(ordering.components)):
            raise Finding("moments that are not finite")
    names = [ordering.name for ordering in study.orderings]
    if len(set(names)) != len(names) or not np.all(np.isfinite(study.sample.demagnetizing_tensor)):
        raise Finding("names that are not distinct, or a sample that is not finite")
    if rng.random() < 0.1:
        to_json(tasks.show(path))


def read_template(path: Path, rng: random.Random) -> None:
    Template.load(path)


def attempt(number: int, sound, folder: Path) -> str | None:
    """Run one case; returns what went wrong, or nothing."""
    rng = random.Random(f"{SEED}:{number}")
    kind = rng.choice(KINDS)
    suffix, data = rng.choice(sound[kind])
    if kind in ("study", "template") and rng.random() < 0.75:
        data = broken_study(rng, data)
    else:
        data = broken(rng, data, [other for _, other in sound[kind]])
    path = folder / f"case{suffix}"
    path.write_bytes(data)
    read: Callable[[Path, random.Random], None] = {"study": read_study, "template": read_template}.get(
        kind, read_structure
    )
    signal.setitimer(signal.ITIMER_REAL, ALARM_S)
    try:
        read(path, rng)
    except LatticedipError as error:
        message = str(error)
        if not message or len(message) > LONGEST_MESSAGE or "\n" in message or "Traceback" in message:
            return f"a message of {len(message)} characters: {message[:300]!r}"
        return None
    except Hang:
        return f"no answer within {ALARM_S} s"
    except Exception as error:
        place = traceback.extract_tb(error.__traceback__)[-1]
        return f"{type(error).__name__} at {Path(place.filename).name}:{place.lineno}: {str(error)[:300]}"
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
    return None


def run_cases(first: int, last: int, folder: Path) -> None:
    for name in ("tetragonal.cif", "centred.cif", "doubled.mcif"):
        shutil.copy(DATA / "study" / name, folder)
    sound = corpus()
    findings: dict[str, int] = {}
    handler = signal.signal(signal.SIGALRM, ring)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1000
    try:
        for number in range(first, last):
            wrong = attempt(number, sound, folder)
            if wrong is not None:
                kept = folder / f"kept_{number}"
                shutil.copy(next(folder.glob("case*")), kept)
                findings.setdefault(wrong, number)
                if len(findings) >= 20:
                    break
            for path in folder.glob("case*"):
                path.unlink()
    finally:
        signal.signal(signal.SIGALRM, handler)
    assert not findings, "\n".join(f"case {number} of seed {SEED}: {wrong}" for wrong, number in findings.items())
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1000 - before < MOST_GROWTH_MB


def test_some_broken_inputs(tmp_path):
    run_cases(0, 500, tmp_path)


@pytest.mark.slow
def test_twenty_thousand_broken_inputs(tmp_path):
    run_cases(500, 500 + int(os.environ.get("LATTICEDIP_FUZZ", "20000")), tmp_path)


# Wrong acceptance: words that are no number, in every place where a number counts

NO_NUMBERS = ("nan", "inf", "abc", "1.2.3", "0x10", "1_000", "--1", "1e999", "1,5", "?", "½", "=1", "1(x)")


def number_places(text: str) -> list[tuple[int, int]]:
    """(line, word) of the numbers of cell, positions, occupancies and moments of a CIF."""
    places, columns = [], []
    for i, line in enumerate(text.split("\n")):
        words = line.split(" ")
        if line.startswith(("_cell_length", "_cell_angle")):
            places.append((i, 1))
        if line == "loop_":
            columns = []
        elif line.startswith("_"):
            columns.append(line)
        elif columns and columns[0].startswith("_atom_site") and len(words) == len(columns):
            counts = ("fract", "occupancy", "crystalaxis_x", "crystalaxis_y", "crystalaxis_z")
            places += [(i, w) for w, column in enumerate(columns) if column.endswith(counts) or "_fract_" in column]
    return places


@pytest.mark.parametrize("word", NO_NUMBERS)
def test_what_is_no_number_is_never_taken_for_one(tmp_path, word):
    path = tmp_path / "x.mcif"
    text = (DATA / "hexagonal.mcif").read_text(encoding="utf-8")
    places = number_places(text)
    assert len(places) > 20
    lines = text.split("\n")
    for i, w in places:
        words = lines[i].split(" ")
        if not words[w].strip("'()0123456789.-"):
            words[w] = word
            path.write_text("\n".join([*lines[:i], " ".join(words), *lines[i + 1 :]]), encoding="utf-8")
            try:
                found = ld.read_ordering(path)
            except LatticedipError as error:
                assert str(error).startswith(f"{path}: ")
            else:
                # An unknown occupancy is the one thing that may be assumed, and then it is said.
                assert f"occupancies stated as unknown (?) are taken as 1: {words[0]}" in found.crystal.notes


@pytest.mark.parametrize("wrong", [True, float("nan"), float("inf"), {"x": {}}, "", 1979, [[[]]]], ids=repr)
def test_a_value_of_another_kind_is_never_taken_in_a_study(tmp_path, wrong):
    """Every value of a sound study replaced by one that no key of its kind can mean."""
    for name in ("tetragonal.cif", "doubled.mcif"):
        shutil.copy(DATA / "study" / name, tmp_path)
    path = tmp_path / "s.toml"
    source = (DATA / "study" / "chains.toml").read_text(encoding="utf-8")
    for n in range(len(places(tomllib.loads(source)))):
        document = tomllib.loads(source)
        place, key = places(document)[n]
        sound = place[key]
        # A number may stand for another one, for a fraction such as "1/3", and for a tensor that is a multiple of one.
        if wrong == 1979 and (
            isinstance(sound, (int, float)) or key == "coupling_T_per_muB" or sound in ("1/2", "1/3")
        ):
            continue
        place[key] = wrong
        path.write_text(as_toml(document), encoding="utf-8")
        with pytest.raises(LatticedipError) as caught:
            ld.read_study(path)
        assert str(caught.value).startswith(f"{path}: ")


def test_a_pickle_is_never_run(tmp_path):
    """Old trajectories held pickled objects, which do what they like when they are read."""

    class Harm:
        def __reduce__(self):
            return os.mkdir, (str(tmp_path / "harm"),)

    for suffix in (".traj", ".trj", ".pckl", ".xyz", ".cif", ""):
        path = tmp_path / f"x{suffix}"
        path.write_bytes(b"PickleTrajectory" + pickle.dumps(Harm()))
        with pytest.raises(LatticedipError):
            ld.read_crystal(path)
    assert not (tmp_path / "harm").exists()


@pytest.mark.parametrize(
    ("name", "text", "message"),
    [
        ("x.xyz", "99999999999\n\nMn 0 0 0\n", "line 1 announces 99999999999 atoms, but only 4 lines are there."),
        ("x.xyz", "1\n\nMn 0 0 0\n88\n\nMn 0 0 0\n", "line 4 announces 88 atoms, but only 4 lines are there."),
        ("x.vasp", "x\n1\n4 0 0\n0 4 0\n0 0 4\nMn\n1000000000\nDirect\n0 0 0\n", "line 7 announces 1000000000 atoms"),
        ("x.gen", "1000000000 F\nMn\n1 1 0 0 0\n", "line 1 announces 1000000000 atoms"),
        ("x.xsf", "CRYSTAL\nPRIMVEC\n4 0 0\n0 4 0\n0 0 4\nPRIMCOORD\n1000000000 1\n25 0 0 0\n", "line 7 announces"),
        ("x.xyz", "9" * 5000 + "\n\nMn 0 0 0\n", "line 1 announces more than 1e+18 atoms"),
        ("x.pdb", "CRYST1    4.000    4.000    9.000  90.00  90.00  90.00 P 1\nEND\n", "ASE finds no atoms in it"),
    ],
)  # fmt: skip
def test_a_count_that_the_file_does_not_keep_is_refused(tmp_path, name, text, message):
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    with pytest.raises(LatticedipError) as caught:
        ld.read_crystal(path)
    assert str(caught.value).startswith(f"{path}: {message}")


# Limits of size, before memory is taken


@pytest.fixture
def little_room():
    """At most 2 GB more than now: what asks for more fails as a full machine would."""
    used = int(Path("/proc/self/statm").read_text(encoding="utf-8").split()[0]) * os.sysconf("SC_PAGESIZE")
    soft, hard = resource.getrlimit(resource.RLIMIT_AS)
    resource.setrlimit(resource.RLIMIT_AS, (used + 2_000_000_000, hard))
    yield
    resource.setrlimit(resource.RLIMIT_AS, (soft, hard))


@pytest.mark.usefixtures("little_room")
@pytest.mark.parametrize("cell", [(1e6, 1e6, 1e6), (1e6, 0.02, 0.02), (0.2, 0.2, 1e6), (1e7, 4, 4), (4, 4, 1e5)])
def test_enormous_cells_are_read_or_refused(tmp_path, cell):
    path = tmp_path / "x.cif"
    path.write_text(box_cif("Mn1 Mn 0 0 0\n", *cell), encoding="utf-8")
    try:
        crystal = ld.read_crystal(path)
        ld.dipolar_energy(ld.Ordering(crystal, [[0, 0, 1.0]]))
    except LatticedipError as error:
        assert "\n" not in str(error)


@pytest.mark.usefixtures("little_room")
def test_a_thousand_million_grid_points_are_refused(tmp_path):
    (tmp_path / "x.cif").write_text(box_cif("Mn1 Mn 0 0 0\n", 1000), encoding="utf-8")
    (tmp_path / "s.toml").write_text(
        '[crystal]\nfile = "x.cif"\n[[probe]]\nrule = "points at least 1 Å from any atom"\n', encoding="utf-8"
    )
    with pytest.raises(LatticedipError) as caught:
        ld.read_study(tmp_path / "s.toml")
    assert str(caught.value) == (
        f"{tmp_path / 's.toml'}: `probe[1].rule`: points every 1 Å would make 1e+09 points in this cell; at most "
        "10000000 are tried. Use a larger spacing_A."
    )


@pytest.mark.usefixtures("little_room")
def test_a_search_among_too_many_images_is_refused():
    crystal = ld.Crystal(np.diag([0.3, 0.3, 1e5]), [[0, 0, 0]], ("Mn",))
    with pytest.raises(LimitError, match="images of atoms in the cell"):
        close_pairs(crystal, 1000.0)


# The journal of a batch: whatever follows or replaces its records, whole ones stay and everything else goes


@settings(max_examples=100, deadline=None)
@given(data=st.data())
def test_a_journal_keeps_whole_records_only(tmp_path_factory, data):
    folder = tmp_path_factory.mktemp("journal")
    sound = [f'{{"input":"{name}","results":{{}}}}\n'.encode() for name in "abcde"]
    junk = st.binary(max_size=20).map(lambda raw: raw.replace(b"\n", b"?") + b"\n")
    pieces = data.draw(st.permutations([*sound, *data.draw(st.lists(junk, max_size=3))]))
    tail = data.draw(st.sampled_from([b"", b"\0" * 30, sound[0][:-1], sound[1][:9]]))
    (folder / RESULTS).write_bytes(b"".join(pieces) + tail)
    with Journal(folder, resume=True) as journal:
        journal.mend(lambda record: True)
        journal.append("f", b'{"input":"f","results":{}}\n')
        assert [record["input"] for record in journal.records()] == list("abcdef")
    kept = (folder / RESULTS).read_bytes()
    assert sorted(kept.splitlines(keepends=True)) == sorted([*sound, b'{"input":"f","results":{}}\n'])
