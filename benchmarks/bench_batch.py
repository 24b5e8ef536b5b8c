"""Batches of 2,000 invented structure files, 5 % of them broken: throughput, efficiency of two workers, memory.

Run as ``python benchmarks/bench_batch.py [FILES] [ROUNDS]``. Every figure is of whole commands, start-up included;
rounds with one and two workers alternate, so that other load on the machine falls on both.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import tempfile
import threading
import time
from pathlib import Path
from statistics import median

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT))

from tests.structure_files import TEMPLATE, write_files  # noqa: E402


def resident_MB(pid: int) -> float:
    """Resident size of a process; 0 where it has ended."""
    try:
        pages = int(Path(f"/proc/{pid}/statm").read_text(encoding="utf-8").split()[1])
    except OSError:
        return 0.0
    return pages * os.sysconf("SC_PAGESIZE") / 1e6


def watch(process: subprocess.Popen[bytes], sizes: list[tuple[float, float, float]]) -> None:
    """Note the time and the sizes of parent and largest worker, five times a second."""
    start = time.perf_counter()
    children = Path(f"/proc/{process.pid}/task/{process.pid}/children")
    while process.poll() is None:
        try:
            workers = [int(pid) for pid in children.read_text(encoding="utf-8").split()]
        except OSError:
            break
        largest = max((resident_MB(pid) for pid in workers), default=0.0)
        sizes.append((time.perf_counter() - start, resident_MB(process.pid), largest))
        time.sleep(0.2)


def run(folder: Path, workers: int, round_number: int) -> tuple[float, float, list[tuple[float, float, float]]]:
    """Wall and CPU seconds of one batch command, and the sizes of its processes over time."""
    out = folder / f"out_{workers}_{round_number}"
    command = [sys.executable, "-m", "latticedip", "batch", "t.toml", "in", "-o", str(out), "--quiet"]
    sizes: list[tuple[float, float, float]] = []
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    start = time.perf_counter()
    process = subprocess.Popen(
        [*command, "--workers", str(workers)], cwd=folder, env=os.environ | {"PYTHONPATH": str(ROOT)}
    )
    watcher = threading.Thread(target=watch, args=(process, sizes))
    watcher.start()
    process.wait()
    spent = time.perf_counter() - start
    watcher.join()
    counts = json.loads((out / "summary.json").read_text(encoding="utf-8"))["counts"]
    assert counts["done"] + counts["failed"] == counts["inputs"] and process.returncode == 1, counts
    now = resource.getrusage(resource.RUSAGE_CHILDREN)
    return spent, now.ru_utime + now.ru_stime - used.ru_utime - used.ru_stime, sizes


def level(sizes: list[tuple[float, float, float]], column: int, first: float, last: float) -> float:
    """Median size in a part of the run, given as fractions of its length."""
    end = sizes[-1][0]
    part = [row[column] for row in sizes if first * end <= row[0] <= last * end and row[column] > 0]
    return median(part)


def main() -> None:
    """Print all figures beside what is wanted."""
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 2000
    rounds = int(sys.argv[2]) if len(sys.argv) > 2 else 5
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        write_files(folder / "in", n)
        (folder / "t.toml").write_text(TEMPLATE, encoding="utf-8")
        one, two, cpu_one, cpu_two = [], [], [], []
        for number in range(rounds):
            spent, cpu, sizes = run(folder, 1, number)
            one.append(spent)
            cpu_one.append(cpu)
            spent, cpu, _ = run(folder, 2, number)
            two.append(spent)
            cpu_two.append(cpu)
            print(
                f"round {number + 1}: one worker {one[-1]:.1f} s ({cpu_one[-1]:.1f} s CPU), "
                f"two workers {two[-1]:.1f} s ({cpu_two[-1]:.1f} s CPU)",
                flush=True,
            )
        lines = {(folder / f"out_{w}_0" / "results.jsonl").stat().st_size for w in (1, 2)}
        tables = {(folder / f"out_{w}_0" / "results.csv").read_bytes() for w in (1, 2)}
        bytes_of_results = max(lines)
    first, second = median(one), median(two)
    efficiency = median(a / (2 * b) for a, b in zip(one, two, strict=True))
    print(f"one worker                        {first:8.1f} s   {n / first:6.1f} files/s")
    print(f"two workers                       {second:8.1f} s   {n / second:6.1f} files/s")
    print(f"parallel efficiency               {efficiency:8.2f}     wanted at least 0.85 (median over rounds)")
    print(
        f"results                           {bytes_of_results / 1e6:8.1f} MB  tables of both alike: {len(tables) == 1}"
    )
    for column, what in ((1, "parent"), (2, "worker")):
        early, late = level(sizes, column, 0.2, 0.4), level(sizes, column, 0.7, 0.9)
        print(f"memory of the {what}, early and late {early:7.0f} MB  {late:6.0f} MB   wanted flat")


if __name__ == "__main__":
    main()
