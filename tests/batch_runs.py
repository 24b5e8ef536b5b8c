"""What tests of batches share: reading results, starting a batch as a process, waiting for it."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]


def lines(folder="out"):
    return sorted(Path(folder, "results.jsonl").read_bytes().splitlines(keepends=True))


def records(folder="out"):
    return {record["input"]: record for record in map(json.loads, lines(folder))}


def wait_for(condition, seconds=60):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "waited too long"
        time.sleep(0.02)


def start_batch(*arguments, **keywords):
    return subprocess.Popen(
        [sys.executable, "-m", "latticedip", "batch", *map(str, arguments)],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stderr=subprocess.PIPE,
        start_new_session=True,
        **keywords,
    )


def children(pid):
    found = Path(f"/proc/{pid}/task/{pid}/children").read_text(encoding="utf-8").split()
    return [int(child) for child in found]
