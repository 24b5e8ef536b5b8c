"""Many structures in one go: a template run on every input, on processes of this machine or on any executor.

Nothing that was finished is ever done again: records are appended as they come (`batch_journal`), a run that was
interrupted goes on with ``resume``, and inputs or a template that changed meanwhile are noticed by their content.
"""

from __future__ import annotations

import logging
import os
import queue
import statistics
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import BrokenExecutor, CancelledError, Executor, Future
from contextlib import contextmanager, suppress
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from latticedip import __version__
from latticedip.encode import to_json
from latticedip.errors import InputError, LatticedipError
from latticedip.study.batch_inputs import Inputs, collect, guess_cost
from latticedip.study.batch_journal import RESULTS, SUMMARY, TABLE, Journal, Row, replace_file
from latticedip.study.batch_pool import TICK_S, Pool
from latticedip.study.batch_record import CRASH, INPUT, Job, Outcome, do_job, failure, file_hash
from latticedip.study.batch_template import Template, check_limit
from latticedip.study.documents import NO_SUM

#: Jobs that an executor holds at one time; a cluster of a thousand cores stays busy with them.
MOST_SUBMITTED = 4000
#: Inputs that the summary lists as the slowest.
SLOWEST = 10
#: Seconds to wait for the scheduler of a cluster.
ANSWER_S = 20

_log = logging.getLogger(__name__)


@dataclass(frozen=True)
class Progress:
    """How far a batch is. reused: finished in an earlier run, counted in done and failed too.

    seconds_left: a guess from the cost of what is left; None before the first input is done.
    """

    total: int
    done: int
    failed: int
    reused: int
    per_second: float
    seconds_left: float | None


@dataclass(frozen=True)
class Batch:
    """What became of a batch; counts are of inputs.

    folder: holds results.jsonl, results.csv and summary.json. reused: those finished in an earlier run, counted in
    done and failed too. skipped: passed over, such as a file that was named twice. summary: what summary.json holds.
    """

    folder: Path
    done: int
    failed: int
    reused: int
    skipped: int
    summary: dict[str, Any]


def run_batch(
    template: str | os.PathLike[str],
    inputs: str | os.PathLike[str] | Iterable[str | os.PathLike[str]],
    folder: str | os.PathLike[str],
    *,
    executor: Executor | None = None,
    resume: bool = False,
    workers: int | None = None,
    timeout_s: float | None = None,
    memory_MB: float | None = None,
    progress: Callable[[Progress], None] | None = None,
) -> Batch:
    """Run a template on every input and write results.jsonl, results.csv and summary.json to a folder.

    template: a study file (TOML) without [crystal]; [batch] says what to do, see `batch_template`.
    inputs: structure files, patterns, and folders that are searched for them.
    folder: made where there is none; refused where it holds results already, unless ``resume``.
    executor: where inputs are worked at; its workers must see the same files under the same absolute paths. None:
        processes of this machine with one thread each, started for this call.
    resume: go on with an interrupted run. Inputs whose content and template are unchanged keep their record, except
        those that failed by a limit or a crash, which are tried again.
    workers: how many processes; None: one for each core this process may use. timeout_s, memory_MB: time (s) and
        resident size (MB) that one input may take before its process is stopped. These three go without an executor.
    progress: called now and then.

    A broken input never stops the others: its record has the status "failed" and an error of one line.

    Raises StudyError for a template that cannot be used, InputError for no inputs, for limits that are not positive,
    and where a result would be written over an input, FileError where the folder cannot be written, LatticedipError
    where the executor breaks down.
    """
    started = time.time()
    clock = time.perf_counter()
    plan = Template.load(template)
    _check(executor, workers, timeout_s, memory_MB)
    place = Path(folder)
    named = [inputs] if isinstance(inputs, (str, os.PathLike)) else list(inputs)
    found = collect(named, place)
    _refuse_overwriting(found, plan, place)
    with Journal(place, resume=resume) as journal:
        current = {job.input: job for job in found.jobs}
        states: dict[str, bool] = {}
        kept = _Kept(current, plan.digest, states)
        dropped = journal.mend(kept) if resume else 0
        pending = [job for job in found.jobs if job.input not in journal.finished]
        _log.info("%d inputs, %d finished before, %d records dropped", len(current), len(states), dropped)
        count = min(workers or _cores(), len(pending))
        seconds: dict[str, float] = {}
        meter = _Meter(len(current), dict(states), progress)
        with _engine(plan, executor, count, timeout_s, memory_MB) as run:
            pending = [replace(job, cost=guess_cost(job.path)) for job in pending]
            pending.sort(key=lambda job: (-job.cost, job.input))
            meter.begin(pending)
            for outcome in run(pending, meter.tick):
                journal.append(outcome.job.input, outcome.line)
                states[outcome.job.input] = outcome.done
                seconds[outcome.job.input] = outcome.seconds
                meter.count(outcome)
        worked = time.perf_counter() - clock
        summary = _summary(plan, found, journal, states, seconds)
        summary["times"] = {
            "started_unix_s": started,
            "seconds": time.perf_counter() - clock,
            "seconds_of_work": worked,
            "inputs_per_second": len(seconds) / worked if seconds else None,
            "median_seconds_per_input": statistics.median(seconds.values()) if seconds else None,
            "slowest": [
                {"input": name, "seconds": spent}
                for name, spent in sorted(seconds.items(), key=lambda entry: -entry[1])[:SLOWEST]
            ],
            "workers": None if executor is not None else count,
        }
        replace_file(place / SUMMARY, [to_json(summary).encode("ascii")])
    counts = summary["counts"]
    return Batch(place, counts["done"], counts["failed"], counts["reused"], counts["skipped"], summary)


def _summary(
    plan: Template, found: Inputs, journal: Journal, states: dict[str, bool], seconds: dict[str, float]
) -> dict[str, Any]:
    """Write results.csv and return the summary, its times left aside."""
    from latticedip.study.batch_tables import record_rows

    failed: list[dict[str, Any]] = []
    boundaries: dict[str, None] = {}

    def rows(record: dict[str, Any]) -> list[Row]:
        if record["status"] == "failed":
            failed.append({"input": record["input"], "error": record["error"], "reason": record["reason"]})
        for document in record["results"].values():
            boundaries.update(dict.fromkeys(document["boundary"].split("; ")))
        return [*record_rows(record)]

    journal.merge(rows)
    return {
        "schema": "latticedip/batch/1",
        "version": __version__,
        "inputs": {
            "files": [{"role": "template", "path": plan.file, "sha256": plan.digest}],
            "options": {"do": list(plan.do), **plan.options},
        },
        "boundary": "; ".join(boundaries) or NO_SUM,
        "counts": {
            "inputs": len(states),
            "done": sum(states.values()),
            "failed": len(states) - sum(states.values()),
            "reused": len(states) - len(seconds),
            "skipped": len(found.skipped),
        },
        "failed": failed,
        "skipped": found.skipped,
    }


class _Kept:
    """Whether a record of an earlier run still holds; fills ``states`` with those that do."""

    def __init__(self, current: dict[str, Job], digest: str, states: dict[str, bool]) -> None:
        self.current, self.digest, self.states = current, digest, states

    def __call__(self, record: dict[str, Any]) -> bool:
        job = self.current.get(record["input"])
        if job is None or record.get("template_sha256") != self.digest or record.get("version") != __version__:
            return False
        done = record.get("status") == "done"
        if not done and record.get("reason") != INPUT:
            return False
        if record.get("sha256") != file_hash(job.path):
            return False
        self.states[job.input] = done
        return True


class _Meter:
    """Counts what is finished and tells whoever wants to know."""

    def __init__(self, total: int, states: dict[str, bool], told: Callable[[Progress], None] | None) -> None:
        self.total, self.told = total, told
        self.done, self.failed = sum(states.values()), len(states) - sum(states.values())
        self.reused = len(states)
        self.begun = time.monotonic()
        self.cost_left = self.cost_done = 0.0
        self.first: float | None = None
        self.last_told = 0.0

    def begin(self, pending: Sequence[Job]) -> None:
        """Start the clock."""
        self.begun = time.monotonic()
        self.cost_left = sum(job.cost for job in pending)
        self.tick()

    def count(self, outcome: Outcome) -> None:
        """One more is finished."""
        self.done += outcome.done
        self.failed += not outcome.done
        self.cost_done += outcome.job.cost
        self.cost_left -= outcome.job.cost
        finished = self.done + self.failed == self.total
        if finished or time.monotonic() - self.last_told >= TICK_S / 2:
            self.tick()

    def tick(self) -> None:
        """Tell how far it is."""
        if self.told is None:
            return
        self.last_told = time.monotonic()
        spent = max(1e-9, self.last_told - self.begun)
        fresh = self.done + self.failed - self.reused
        left = spent * max(0.0, self.cost_left) / self.cost_done if self.cost_done > 0 else None
        self.told(Progress(self.total, self.done, self.failed, self.reused, fresh / spent, left))


Run = Callable[[Sequence[Job], Callable[[], None]], Iterator[Outcome]]


@contextmanager
def _engine(
    plan: Template, executor: Executor | None, count: int, timeout_s: float | None, memory_MB: float | None
) -> Iterator[Run]:
    """The function that does jobs; processes of our own begin to start at once and end with the context."""
    if executor is not None:
        yield lambda jobs, tick: _on_executor(plan, executor, jobs, tick)
    else:
        with Pool(plan, count, timeout_s, memory_MB) as pool:
            yield pool.run


def _on_executor(
    plan: Template, executor: Executor, jobs: Sequence[Job], tick: Callable[[], None]
) -> Iterator[Outcome]:
    """Do jobs on an executor, a bounded number of them submitted at one time; outcomes as they come."""
    waiting = iter(jobs)
    running: dict[Future[Outcome], Job] = {}
    finished: queue.SimpleQueue[Future[Outcome]] = queue.SimpleQueue()
    try:
        while True:
            while len(running) < MOST_SUBMITTED and (job := next(waiting, None)) is not None:
                future = executor.submit(do_job, plan, job)
                running[future] = job
                future.add_done_callback(finished.put)
            if not running:
                return
            try:
                future = finished.get(timeout=TICK_S)
            except queue.Empty:
                tick()
                continue
            yield _outcome(plan, future, running.pop(future))
    except (BrokenExecutor, CancelledError, RuntimeError) as error:
        raise LatticedipError(
            f"the executor broke down ({type(error).__name__}: {error}). What was finished is kept: go on with "
            "resume=True."
        ) from None
    finally:
        for future in running:
            future.cancel()


def _outcome(plan: Template, future: Future[Outcome], job: Job) -> Outcome:
    try:
        return future.result()
    except (BrokenExecutor, CancelledError):
        raise
    except Exception as error:  # what the engine says of a job whose worker died again and again
        text = " ".join(f"{type(error).__name__}: {error}".split())[:300]
        return failure(job, plan.digest, f"the executor could not finish it ({text}). Run it again.", CRASH)


@contextmanager
def cluster_executor(address: str) -> Iterator[Executor]:
    """An executor on a dask.distributed scheduler, whose workers must have this program and see the same files.

    address: such as "tcp://10.0.0.1:8786". A job whose worker dies goes to another one.

    Raises InputError where dask.distributed is not installed, or no scheduler answers within 20 s.
    """
    try:
        from distributed import Client
    except ImportError:
        raise InputError(
            "a cluster needs the library dask.distributed. Install it with: pip install 'latticedip[cluster]'"
        ) from None
    try:
        client = Client(address, timeout=ANSWER_S, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise InputError(f"no scheduler answers at {address!r} ({type(error).__name__}). Check the address.") from None
    try:
        with client.get_executor(pure=False) as executor:
            yield executor
    finally:
        with suppress(OSError, TimeoutError):
            client.close()


def _check(executor: Executor | None, workers: int | None, timeout_s: float | None, memory_MB: float | None) -> None:
    check_limit("timeout_s", timeout_s)
    check_limit("memory_MB", memory_MB)
    if workers is not None and (isinstance(workers, bool) or not isinstance(workers, int) or workers < 1):
        raise InputError(f"workers must be a whole number of at least 1, got {workers!r}.")
    if executor is None:
        return
    if not isinstance(executor, Executor):
        raise InputError(f"executor must be a concurrent.futures.Executor, got {type(executor).__name__}.")
    for name, value in (("workers", workers), ("timeout_s", timeout_s), ("memory_MB", memory_MB)):
        if value is not None:
            raise InputError(f"{name} is for the processes that a batch starts itself. With an executor, leave it out.")


def _refuse_overwriting(found: Inputs, plan: Template, place: Path) -> None:
    targets = {os.path.realpath(place / name) for name in (RESULTS, TABLE, SUMMARY)}
    for path in (plan.file, *(job.path for job in found.jobs)):
        if os.path.realpath(path) in targets:
            raise InputError(f"{path!r} is an input, and results would be written over it. Name another folder.")


def _cores() -> int:
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:  # not on this system
        return os.cpu_count() or 1
