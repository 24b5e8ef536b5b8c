"""One decorator for every compiled loop, and the one place that reads the thread count.

Kernels release the interpreter lock and are spread over targets by a small pool of ordinary threads. No numba
thread layer is started: beside a threaded BLAS on two cores such a layer spins, and both run at half speed.
"""

from __future__ import annotations

import os
import tempfile
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from functools import cache
from itertools import pairwise
from typing import Any

import numba

#: Fast-math flags that keep the order of operations: rounding tricks such as the one in `exp_negative` survive.
ORDERED = {"nnan", "ninf", "nsz", "contract", "arcp"}


def kernel(*, fastmath: Any = False, inline: bool = False) -> Callable[[Callable[..., Any]], Any]:
    """Compile a function with numba: no interpreter lock, cached on disk where a directory can be written.

    fastmath: what numba takes. inline: for small functions that only other kernels call.
    """

    def decorate(function: Callable[..., Any]) -> Any:
        # numpy division: without the check for zero that keeps a loop from being vectorised.
        options = {"nogil": True, "fastmath": fastmath, "error_model": "numpy"}
        if inline:
            # Called from other kernels only: compiled and cached with them.
            return numba.njit(**options)(function)
        try:
            return numba.njit(cache=_cache_is_usable(), **options)(function)
        except RuntimeError:
            # numba found no directory it may write to; compiling anew each time is slower but right.
            return numba.njit(**options)(function)

    return decorate


@cache
def _cache_is_usable() -> bool:
    directory = numba.config.CACHE_DIR
    if not directory:
        return True
    try:
        os.makedirs(directory, exist_ok=True)
        tempfile.TemporaryFile(dir=directory).close()
    except OSError:
        return False
    return True


def is_compiled(kernel: Any) -> bool:
    """True where a kernel's machine code is on disk, newer than its source, or cannot be kept there at all."""
    folder = getattr(kernel, "_cache", None) and kernel._cache.cache_path
    if not folder:
        return True
    written = os.path.getmtime(kernel.py_func.__code__.co_filename)
    name = f".{kernel.py_func.__name__}-"
    found = [entry for entry in os.scandir(folder) if name in entry.name and entry.name.endswith(".nbi")]
    return any(entry.stat().st_mtime >= written for entry in found)


_in_this_thread = threading.local()


@contextmanager
def one_thread() -> Iterator[None]:
    """Let kernels called by this thread use no other: for work that is already spread over processes or threads."""
    before = getattr(_in_this_thread, "single", False)
    _in_this_thread.single = True
    try:
        yield
    finally:
        _in_this_thread.single = before


def thread_count() -> int:
    """Threads to use: what the user set (numba.set_num_threads, NUMBA_NUM_THREADS, OMP_NUM_THREADS), else all cores."""
    if getattr(_in_this_thread, "single", False):
        return 1
    try:
        numba.threading_layer()
    except ValueError:
        count = int(numba.config.NUMBA_NUM_THREADS)
    else:
        count = int(numba.get_num_threads())
    # OpenMP takes a list, one count per level of nesting; the first is that of the outermost.
    stated = os.environ.get("OMP_NUM_THREADS", "").split(",")[0].strip()
    if stated.isdigit() and int(stated) > 0:
        count = min(count, int(stated))
    return max(1, count)


@cache
def _pool(threads: int, process: int) -> ThreadPoolExecutor:
    # The process id is part of the key: a forked child must not use its parent's threads.
    return ThreadPoolExecutor(threads, thread_name_prefix="latticedip")


def over_rows(function: Callable[..., Any], n_rows: int, *arguments: Any, at_least: int = 16) -> None:
    """Call ``function(first, last, *arguments)`` for blocks of rows, on all threads.

    Every row is written by one call only, so the result does not depend on the number of threads.
    at_least: with fewer rows than this the call is made directly.
    """
    threads = min(thread_count(), max(1, n_rows // max(1, at_least)))
    if threads == 1:
        function(0, n_rows, *arguments)
        return
    # Several blocks per thread even out rows of unequal cost.
    blocks = min(n_rows, 4 * threads)
    # Edges at multiples of four: kernels that take four rows at a time then never see a broken group inside.
    edges = [min(n_rows, (n_rows * i // blocks + 3) // 4 * 4) for i in range(blocks)] + [n_rows]
    # Every thread, this one among them, takes the next block until none is left.
    waiting = iter([(a, b) for a, b in pairwise(edges) if a < b])
    helpers = [_pool(threads, os.getpid()).submit(_work, function, waiting, arguments) for _ in range(threads - 1)]
    try:
        _work(function, waiting, arguments)
    finally:
        for helper in helpers:
            helper.result()


def _work(function: Callable[..., Any], waiting: Iterator[tuple[int, int]], arguments: tuple[Any, ...]) -> None:
    # Taking from a list's iterator is one step of the interpreter: no two threads get the same block.
    try:
        for first, last in waiting:
            function(first, last, *arguments)
    except BaseException:
        # Nothing more is worth doing, for the other threads either.
        for _ in waiting:
            pass
        raise
