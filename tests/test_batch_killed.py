"""Batches whose processes are killed, hang, grow or meet a full disk: nothing is lost, and the end is the same."""

from __future__ import annotations

import json
import random
import resource
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

import latticedip as ld
from latticedip.study import batch_pool
from tests.batch_runs import children, lines, records, start_batch, wait_for
from tests.structure_files import TEMPLATE, write_files

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(sys.platform != "linux", reason="the processes are watched through /proc"),
]


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """A folder with 60 inputs (three of them broken), a template, and the results of an undisturbed run in ``out``."""
    folder = tmp_path_factory.mktemp("batch")
    write_files(folder / "in", 60)
    (folder / "t.toml").write_text(TEMPLATE, encoding="utf-8")
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        ld.run_batch("t.toml", ["in"], "out", workers=2)
    return folder


@pytest.fixture
def work(finished, tmp_path, monkeypatch):
    """A fresh copy of that folder, entered."""
    subprocess.run(["cp", "-r", f"{finished}/.", str(tmp_path)], check=True)
    monkeypatch.chdir(tmp_path)
    return tmp_path


#: A worker that misbehaves on inputs with telling names.
NAUGHTY = """
import json, os, sys, time
sys.path[:] = json.loads(sys.argv[1])
import latticedip.study.batch_record as record
sound = record.do_job
def do_job(template, job):
    if "hang" in job.input:
        time.sleep(600)
    if "grow" in job.input:
        hoard = [bytearray(50_000_000) for _ in range(40)]
        time.sleep(600)
    if "abort" in job.input:
        os.abort()
    print("a library speaks", flush=True)
    return sound(template, job)
record.do_job = do_job
from latticedip.study.batch_worker import main
main(int(sys.argv[2]))
"""


@pytest.fixture
def naughty(work, monkeypatch):
    monkeypatch.setattr(batch_pool, "START", NAUGHTY)
    data = Path("in/00001_rocksalt.cif").read_bytes()
    Path("mixed").mkdir()
    for name in ("a_hang", "b", "c_abort", "d", "e_grow", "f", "g"):
        Path("mixed", f"{name}.cif").write_bytes(data)
    return work


def test_inputs_that_hang_grow_or_crash_are_bounded_and_reported(naughty):
    result = ld.run_batch("t.toml", ["mixed"], "o", workers=2, timeout_s=8, memory_MB=900)
    assert (result.done, result.failed) == (4, 3)
    assert {name: (r["error"], r["reason"]) for name, r in records("o").items() if r["status"] == "failed"} == {
        "mixed/a_hang.cif": ("it took longer than 8 s and was stopped. Allow more, or leave it out.", "timeout"),
        "mixed/c_abort.cif": (
            "the process that worked at it ended without a word (SIGABRT). Leave it out, or report it.", "crash",
        ),
        "mixed/e_grow.cif": (
            "it took more than 900 MB of memory and was stopped. Allow more, or leave it out.", "memory",
        ),
    }  # fmt: skip


def test_workers_die_with_their_parent(work):
    process = start_batch("t.toml", "in", "-o", "o", "--workers", 2)
    wait_for(lambda: len(children(process.pid)) == 2)
    workers = children(process.pid)
    process.kill()
    process.communicate()
    wait_for(lambda: not any(Path(f"/proc/{pid}").exists() for pid in workers))


def test_a_full_disk_loses_nothing(work):
    """A limit on file size stands for the full disk: the last line is written in part, as on a real one."""
    before = lines()
    room = sum(map(len, before)) // 2
    process = start_batch(
        "t.toml", "in", "-o", "o", preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (room, room))
    )
    said = process.communicate(timeout=120)[1].decode()
    assert process.returncode == 2
    assert said == (
        "Error: cannot write 'o/results.jsonl': File too large. What was finished is kept: make room, then go on with "
        "--resume (resume=True).\n"
    )
    assert Path("o/results.jsonl").read_bytes().endswith(b"\n")
    assert ld.run_batch("t.toml", ["in"], "o", resume=True).reused > 0
    assert lines("o") == before


def test_killed_at_twenty_random_moments(work):
    """Killed and resumed over and over, then left alone: the same bytes as undisturbed, and nothing done twice."""
    rng = random.Random(7)
    for moment in range(20):
        process = start_batch("t.toml", "in", "-o", "o", "--resume", "--workers", 2)
        if moment % 2:
            # From the first record on, so that kills fall between and into records.
            size = Path("o/results.jsonl").stat().st_size if Path("o/results.jsonl").exists() else 0
            wait_for(lambda: process.poll() is not None or grown("o/results.jsonl", size))  # noqa: B023
            time.sleep(rng.uniform(0, 0.2))
        else:
            time.sleep(rng.uniform(0, 3))
        finished_before = whole_lines("o/results.jsonl")
        process.kill()
        process.communicate()
        assert whole_lines("o/results.jsonl")[: len(finished_before)] == finished_before
    process = start_batch("t.toml", "in", "-o", "o", "--resume", "--workers", 2)
    assert process.wait() == 1
    process.communicate()
    assert lines("o") == lines("out")
    assert Path("o/results.csv").read_bytes() == Path("out/results.csv").read_bytes()
    assert sorted(path.name for path in Path("o").iterdir()) == ["results.csv", "results.jsonl", "summary.json"]


def grown(path, size):
    return Path(path).exists() and Path(path).stat().st_size > size


def whole_lines(path):
    if not Path(path).exists():
        return []
    return [line for line in Path(path).read_bytes().splitlines(keepends=True) if line.endswith(b"\n")]


def test_a_record_cut_anywhere_is_mended(work):
    """Power cuts leave any beginning of the file behind, and sometimes zeros where a record should be."""
    data = Path("out/results.jsonl").read_bytes()
    rng = random.Random(3)
    for _ in range(3):
        cut = rng.randrange(len(data))
        Path("o").mkdir(exist_ok=True)
        Path("o/results.jsonl").write_bytes(data[:cut] + bytes(rng.choice((0, 100))))
        ld.run_batch("t.toml", ["in"], "o", resume=True, workers=2)
        assert lines("o") == lines("out")


def test_a_cluster_that_loses_a_worker(work):
    """A real scheduler with two workers in processes of their own; one is killed while it works."""
    pytest.importorskip("distributed", reason="dask.distributed is not installed")
    tool = [sys.executable, "-m", "distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", "0"]
    address_file = work / "scheduler.json"
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    scheduler = subprocess.Popen([*tool, "--no-dashboard", "--scheduler-file", str(address_file)], **quiet)
    workers = []
    try:
        wait_for(address_file.exists)
        time.sleep(0.5)
        address = json.loads(address_file.read_text(encoding="utf-8"))["address"]
        serve = [sys.executable, "-m", "distributed.cli.dask_worker", address, "--nthreads", "1", "--no-nanny"]
        workers = [subprocess.Popen([*serve, "--no-dashboard"], cwd=work, **quiet) for _ in range(2)]
        batch = start_batch("t.toml", "in", "-o", "o", "--cluster", address)
        wait_for(lambda: batch.poll() is not None or grown("o/results.jsonl", 0), 120)
        assert batch.poll() is None
        workers[0].send_signal(signal.SIGKILL)
        said = batch.communicate(timeout=240)[1].decode()
        assert batch.returncode == 1, said
        assert said.startswith("57 done, 3 failed. Wrote o.\n")
    finally:
        for process in (*workers, scheduler):
            process.kill()
            process.wait()
    assert lines("o") == lines("out")
    assert Path("o/results.csv").read_bytes() == Path("out/results.csv").read_bytes()
