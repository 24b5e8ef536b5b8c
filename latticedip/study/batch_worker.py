"""A worker process of a batch: it reads jobs from its stdin, one line of JSON each, and writes outcomes to its stdout.

It is started as a program of its own, not forked: its thread counts are set before any library reads them, no thread
of the parent is half copied, and a script that runs a batch needs no guard against being run again. It ends when its
stdin does, and dies with its parent.
"""

from __future__ import annotations

import contextlib
import json
import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from typing import Any, BinaryIO

try:
    import fcntl
except ImportError:  # a system without advisory locks
    fcntl = None  # type: ignore[assignment]

#: One thread each: the processes fill the cores.
ONE_THREAD = dict.fromkeys(
    (
        "OMP_NUM_THREADS",
        "OPENBLAS_NUM_THREADS",
        "MKL_NUM_THREADS",
        "BLIS_NUM_THREADS",
        "VECLIB_MAXIMUM_THREADS",
        "NUMBA_NUM_THREADS",
    ),
    "1",
)
#: What the worker says when it can take jobs.
READY = b"ready\n"
#: The program text that starts a worker with the module search path of its parent.
START = (
    "import json, sys; sys.path[:] = json.loads(sys.argv[1]); "
    "from latticedip.study.batch_worker import main; main(int(sys.argv[2]))"
)
#: The program text that compiles kernels in a process of its own.
COMPILE = (
    "import json, sys; sys.path[:] = json.loads(sys.argv[1]); "
    "from latticedip.study.batch_worker import use_kernels; use_kernels()"
)
_PR_SET_PDEATHSIG = 1


def main(parent: int) -> None:
    """Serve until stdin ends. parent: the process id of the one who started this."""
    # Ctrl-C in a terminal reaches every process of the group; the parent alone decides what to do.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _die_with(parent)
    jobs, outcomes = sys.stdin.buffer, os.fdopen(os.dup(1), "wb")
    # Whatever a library prints must not land between the outcomes.
    os.dup2(2, 1)
    setup = jobs.readline()
    if setup:
        serve(json.loads(setup), jobs, outcomes)


def serve(setup: dict[str, Any], jobs: BinaryIO, outcomes: BinaryIO) -> None:
    """Do job after job; each answer is one line: seconds, 1 or 0 (done or failed), then the record."""
    from latticedip.study.batch_record import Job, do_job
    from latticedip.study.batch_template import Template

    template = Template(setup["file"], setup["folder"], bytes.fromhex(setup["raw"]))
    # What the template was when the batch began counts, also where an ordering file has changed since.
    template.__dict__["digest"] = setup["digest"]
    warm_up()
    outcomes.write(READY)
    outcomes.flush()
    for line in jobs:
        outcome = do_job(template, Job(**json.loads(line)))
        outcomes.write(f"{outcome.seconds:.6f} {int(outcome.done)} ".encode() + outcome.line)
        outcomes.flush()


def warm_up() -> None:
    """Load the libraries and the compiled kernels that almost every structure needs.

    One worker at a time, and what is not on disk is compiled by a process of its own: machine code that was just
    compiled and the same loaded from disk may differ in the order of additions, and so in the last digit of a result.
    """
    from latticedip.files import read
    from latticedip.kernels.fields import real_fields
    from latticedip.kernels.jit import is_compiled
    from latticedip.kernels.real import real_gradients, real_tensors
    from latticedip.kernels.reciprocal import reciprocal_fields, reciprocal_tensors
    from latticedip.study import fields, rankings

    assert read and fields and rankings
    kernels = (real_tensors, real_fields, real_gradients, reciprocal_tensors, reciprocal_fields)
    with _one_at_a_time():
        if not all(is_compiled(kernel) for kernel in kernels):
            command = [sys.executable, "-c", COMPILE, json.dumps(sys.path)]
            # Where that fails this process compiles for itself, or says why it cannot.
            subprocess.run(command, check=False, stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL)
        use_kernels()


def use_kernels() -> None:
    """Run once what most structures need, so that its kernels are loaded, or compiled and written to disk."""
    import numpy as np

    from latticedip.analysis.rank import rank
    from latticedip.crystal.model import Crystal
    from latticedip.crystal.symmetry import operations_of
    from latticedip.ordering.model import Ordering
    from latticedip.probe import Probe

    crystal = Crystal(np.eye(3) * 4.0, np.array([[0.0, 0, 0], [0.5, 0.5, 0.5]]), ("Mn", "O"))
    operations_of(crystal)
    orderings = [Ordering(crystal, [[0, 0, 1.0], [0, 0, 0]], k) for k in ((0, 0, 0), (0, 0, 0.5), (0, 0, 0.3))]
    assert len(rank(orderings, probes=[Probe([0.5, 0, 0])]).to_dict()["rows"]) == 3


@contextlib.contextmanager
def _one_at_a_time() -> Iterator[None]:
    """Hold a lock that all workers of this installation share; where the system has none, hold nothing."""
    if fcntl is None:
        yield
        return
    from latticedip.kernels import jit

    with open(jit.__file__, "rb") as held:
        fcntl.flock(held, fcntl.LOCK_EX)
        yield


def _die_with(parent: int) -> None:
    """Be killed when the parent is: a calculation of hours must not go on for nobody."""
    if sys.platform == "linux":
        import ctypes

        ctypes.CDLL(None).prctl(_PR_SET_PDEATHSIG, signal.SIGKILL, 0, 0, 0)
    if os.getppid() != parent:
        os._exit(1)
