"""Worker processes of a batch: handed jobs one by one, watched, killed and replaced where one hangs or grows.

A worker holds the job it works at and one more, so that it never waits for the parent. A killed worker takes only the
job it worked at with it; the other one goes to the next worker.
"""

from __future__ import annotations

import json
import os
import selectors
import signal
import subprocess
import sys
import tempfile
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import suppress
from typing import IO, Any

from latticedip.errors import InputError, LatticedipError
from latticedip.study.batch_record import CRASH, MEMORY, TIMEOUT, Job, Outcome, failure
from latticedip.study.batch_template import Template
from latticedip.study.batch_worker import ONE_THREAD, READY, START

#: Jobs a worker holds at one time.
HELD = 2
#: Seconds between two looks at the memory of the workers, and between two calls of the ticker.
LOOK_S, TICK_S = 0.05, 0.5
#: Bytes taken from a worker at one time.
PIECE = 1 << 18


class Worker:
    """One worker process, the jobs it holds (the first is being done) and what it has said so far.

    first: a job that it was started for.
    """

    def __init__(self, setup: bytes, first: Job | None = None) -> None:
        self.first = first
        self.held: deque[Job] = deque()
        self.since = 0.0
        self.ready = False
        self.served = 0
        self.said = bytearray()
        self.log: IO[bytes] = tempfile.TemporaryFile()  # noqa: SIM115 - closed with the worker
        self.process = subprocess.Popen(
            [sys.executable, "-c", START, json.dumps(sys.path), str(os.getpid())],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=self.log,
            env={**os.environ, **ONE_THREAD},
            bufsize=0,
        )
        self.say(setup)

    def say(self, line: bytes) -> None:
        """Send a line; one that has died meanwhile shows it on its other end."""
        assert self.process.stdin is not None
        view = memoryview(line)
        with suppress(BrokenPipeError):
            while view:
                view = view[self.process.stdin.write(view) or 0 :]

    def give(self, job: Job) -> None:
        """Add a job to those it holds."""
        if not self.held:
            self.since = time.monotonic()
        self.held.append(job)
        self.say(json.dumps({"input": job.input, "path": job.path}).encode("ascii") + b"\n")

    def lines(self) -> list[bytes]:
        """The whole lines it has said since the last call; raises EOFError where it has ended."""
        assert self.process.stdout is not None
        piece = os.read(self.process.stdout.fileno(), PIECE)
        if not piece:
            raise EOFError
        start = len(self.said)
        self.said += piece
        end = self.said.rfind(b"\n", start) + 1
        if not end:
            return []
        found = bytes(self.said[:end]).splitlines(keepends=True)
        del self.said[:end]
        return found

    def memory_MB(self) -> float:
        """Its resident size; 0 where it has ended."""
        try:
            with open(f"/proc/{self.process.pid}/statm", "rb") as stream:
                return int(stream.read().split()[1]) * os.sysconf("SC_PAGESIZE") / 1e6
        except (OSError, IndexError):
            return 0.0

    def last_words(self) -> str:
        """The end of what it wrote to stderr, in one line."""
        self.log.seek(0)
        lines = self.log.read()[-2000:].decode("utf-8", "replace").strip().splitlines()
        return lines[-1] if lines else "it said nothing"

    def stop(self) -> None:
        """End it at once."""
        with suppress(OSError):
            self.process.kill()
        self.process.wait()
        for stream in (self.process.stdin, self.process.stdout, self.log):
            if stream is not None:
                with suppress(OSError):
                    stream.close()


class Pool:
    """A number of workers with their limits.

    timeout_s: seconds one job may take. memory_MB: resident size a worker may reach (Linux). Without: no limit.
    """

    def __init__(self, template: Template, count: int, timeout_s: float | None, memory_MB: float | None) -> None:
        self.template = template
        self.timeout_s = timeout_s
        self.memory_MB = memory_MB
        if memory_MB is not None and not os.path.exists("/proc/self/statm"):
            raise InputError("a limit of memory needs /proc, which this system does not have. Leave it out.")
        setup = {"file": template.file, "folder": template.folder, "raw": template.raw.hex(), "digest": template.digest}
        self._setup = json.dumps(setup).encode("ascii") + b"\n"
        self._workers: list[Worker] = []
        self._selector = selectors.DefaultSelector()
        for _ in range(count):
            self._start()

    def __enter__(self) -> Pool:
        return self

    def __exit__(self, *_: Any) -> None:
        for worker in self._workers:
            worker.stop()
        self._selector.close()

    def _start(self, first: Job | None = None) -> None:
        worker = Worker(self._setup, first)
        self._workers.append(worker)
        self._selector.register(worker.process.stdout or -1, selectors.EVENT_READ, worker)

    def run(self, jobs: Sequence[Job], tick: Callable[[], None] = lambda: None) -> Iterator[Outcome]:
        """Do all jobs, the first ones first, and yield outcomes as they come. tick: called twice a second.

        Raises InputError for a limit of memory that a worker needs without any job, LatticedipError where no worker
        can be started.
        """
        waiting = deque(jobs)
        left = len(waiting)
        next_tick = 0.0
        while left:
            self._hand_out(waiting)
            heard = self._selector.select(self._patience())
            # Taken before anything is yielded: who takes an outcome may be slow, and no worker pays for that.
            now = time.monotonic()
            for key, _ in heard:
                for outcome in self._hear(key.data, waiting):
                    left -= 1
                    yield outcome
            for outcome in self._watch(waiting, now):
                left -= 1
                yield outcome
            if now >= next_tick:
                next_tick = now + TICK_S
                tick()

    def _hand_out(self, waiting: deque[Job]) -> None:
        for depth in range(HELD):
            # Near the end nobody holds back a job that another could do.
            if depth and len(waiting) <= len(self._workers):
                return
            for worker in self._workers:
                if waiting and worker.ready and len(worker.held) <= depth:
                    worker.give(waiting.popleft())

    def _patience(self) -> float:
        """Seconds until something must be looked at."""
        patience = TICK_S if self.memory_MB is None else LOOK_S
        if self.timeout_s is not None:
            now = time.monotonic()
            for worker in self._workers:
                if worker.held:
                    patience = min(patience, max(0.0, worker.since + self.timeout_s - now) + 0.001)
        return patience

    def _hear(self, worker: Worker, waiting: deque[Job]) -> Iterator[Outcome]:
        try:
            lines = worker.lines()
        except EOFError:
            yield from self._dead(worker, waiting)
            return
        for line in lines:
            if not worker.ready:
                self._now_ready(worker, line)
                continue
            seconds, done, record = line.split(b" ", 2)
            job = worker.held.popleft()
            worker.since = time.monotonic()
            worker.served += 1
            yield Outcome(job, record, float(seconds), done == b"1")

    def _now_ready(self, worker: Worker, line: bytes) -> None:
        if line != READY:
            raise LatticedipError(f"a worker process said {line[:60]!r} instead of being ready.")
        worker.ready = True
        size = worker.memory_MB()
        if self.memory_MB is not None and size >= self.memory_MB:
            raise InputError(
                f"a worker takes {size:.0f} MB before it reads any structure, so that a limit of {self.memory_MB:g} MB "
                "leaves nothing. Use a larger one."
            )
        if worker.first is not None:
            worker.give(worker.first)

    def _watch(self, waiting: deque[Job], now: float) -> Iterator[Outcome]:
        for worker in list(self._workers):
            if not worker.held:
                continue
            if self.timeout_s is not None and now - worker.since > self.timeout_s:
                error = f"it took longer than {self.timeout_s:g} s and was stopped. Allow more, or leave it out."
                yield self._replace(worker, waiting, error, TIMEOUT)
            elif self.memory_MB is not None and worker.memory_MB() > self.memory_MB:
                error = (
                    f"it took more than {self.memory_MB:g} MB of memory and was stopped. Allow more, or leave it out."
                )
                if not self._try_again(worker, waiting):
                    yield self._replace(worker, waiting, error, MEMORY)

    def _dead(self, worker: Worker, waiting: deque[Job]) -> Iterator[Outcome]:
        """What to do about a worker that ended by itself."""
        status = worker.process.wait()
        if not worker.ready:
            raise LatticedipError(f"a worker process cannot start: {worker.last_words()}")
        if not worker.held:
            self._remove(worker)
            self._start()
        elif not self._try_again(worker, waiting):
            how = signal.Signals(-status).name if status < 0 else f"status {status}"
            error = f"the process that worked at it ended without a word ({how}). Leave it out, or report it."
            yield self._replace(worker, waiting, error, CRASH)

    def _try_again(self, worker: Worker, waiting: deque[Job]) -> bool:
        """Give the job to a fresh worker where this one had done others, whose traces could be the cause."""
        if not worker.served:
            return False
        job = worker.held.popleft()
        waiting.extendleft(reversed(worker.held))
        self._remove(worker)
        self._start(first=job)
        return True

    def _replace(self, worker: Worker, waiting: deque[Job], error: str, reason: str) -> Outcome:
        job = worker.held.popleft()
        waiting.extendleft(reversed(worker.held))
        self._remove(worker)
        self._start()
        return failure(job, self.template.digest, error, reason)

    def _remove(self, worker: Worker) -> None:
        self._selector.unregister(worker.process.stdout or -1)
        self._workers.remove(worker)
        worker.stop()
