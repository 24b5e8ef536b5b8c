"""Start-up times of the command line: help, and a ranking of the example with a warm and an empty compile cache.

Run as ``python benchmarks/bench_startup.py [STUDY]``. Each figure is a median over fresh processes.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from statistics import median

ROOT = Path(__file__).resolve().parents[1]
COMMAND = [sys.executable, "-m", "latticedip"]


def seconds(arguments: list[str], rounds: int, cache: Path | None = None) -> float:
    """Median wall time of a command in a fresh process; with ``cache``, each round starts with an empty folder."""
    spent = []
    for i in range(rounds):
        environment = dict(os.environ)
        if cache is not None:
            environment["NUMBA_CACHE_DIR"] = str(cache / str(i))
        start = time.perf_counter()
        subprocess.run([*COMMAND, *arguments], env=environment, cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
        spent.append(time.perf_counter() - start)
    return median(spent)


def read_only_cache(study: str) -> float:
    """Wall time of a ranking where the folder for compiled code cannot be written."""
    with tempfile.TemporaryDirectory() as folder:
        blocked = Path(folder) / "blocked"
        blocked.write_text("a file where a folder is expected\n", encoding="utf-8")
        environment = os.environ | {"NUMBA_CACHE_DIR": str(blocked)}
        start = time.perf_counter()
        subprocess.run([*COMMAND, "rank", study], env=environment, cwd=ROOT, check=True, stdout=subprocess.DEVNULL)
        return time.perf_counter() - start


def main() -> None:
    """Print all figures beside what is wanted."""
    found = sys.argv[1:] or [str(path) for path in sorted((ROOT / "examples").rglob("*.toml"))]
    if not found:
        raise SystemExit("no study file: give one")
    study = found[0]
    bare = []
    for _ in range(7):
        start = time.perf_counter()
        subprocess.run([sys.executable, "-c", "pass"], check=True)
        bare.append(time.perf_counter() - start)
    print(f"python alone                        {median(bare):7.3f} s")
    print(f"latticedip --help                   {seconds(['--help'], 9):7.3f} s   wanted under 0.25 s")
    seconds(["rank", study], 1)
    print(f"rank, warm compile cache            {seconds(['rank', study], 7):7.3f} s   wanted under 2 s")
    with tempfile.TemporaryDirectory() as folder:
        first = seconds(["rank", study], 3, Path(folder))
    print(f"rank, empty compile cache           {first:7.3f} s   wanted under 20 s")
    print(f"rank, cache that cannot be written  {read_only_cache(study):7.3f} s   must run")


if __name__ == "__main__":
    main()
