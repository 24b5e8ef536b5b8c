"""Compiled loops: accuracy of their functions, threads, the cache on disk, and the same code with the compiler off."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import mpmath
import numpy as np
import pytest

import latticedip as ld
from latticedip.kernels import jit
from latticedip.kernels.phases import reduce_offsets
from latticedip.kernels.radial import U_MAX, exp_negative, radial_functions, scaled_erfc
from latticedip.sums.bulk import lattice_sum
from latticedip.sums.fields import field_plan, lattice_field
from latticedip.sums.lattice import stable_inverse

#: Names that would change what a child process does.
SETTINGS = ("NUMBA_NUM_THREADS", "OMP_NUM_THREADS", "NUMBA_DISABLE_JIT", "NUMBA_CACHE_DIR")

TENSORS = """
import json
import numpy as np
import latticedip as ld
cell = np.array([[3.0, 0, 0], [0.4, 3.3, 0], [-0.3, 0.2, 3.6]])
offsets = np.array([[0, 0, 0], [0.5, 0.7, 0.9], [10.3, -7.2, 5.1], [3.4, 3.3, 0]])
found = []
for k in [(0, 0, 0), (0.5, 0, 0.5), (0.21, -0.1, 0.3)]:
    tensors = ld.dipole_tensor(cell, offsets, k, tol=1e-6)
    found += [*np.real(tensors).ravel(), *np.imag(tensors).ravel()]
wave = ld.Ordering(ld.Crystal(cell, [[0, 0, 0]], ["Mn"]), [[1, 2j, 0]], (0.21, -0.1, 0.3))
field = ld.local_field(wave, [[0.3, 0.4, 0.5], [0, 0, 0]], tol=1e-6)
found += [*field.total.ravel(), *field.gradient_T_per_A.ravel()]
uniform = ld.Ordering(wave.crystal, [[1, 2, 0]])
found += [*ld.local_field(uniform, [[0.3, 0.4, 0.5]], tol=1e-6).gradient_T_per_A.ravel()]
found += [ld.dipolar_energy(wave, tol=1e-6).per_cell_eV]
print(json.dumps([float(x) for x in found]))
"""
ONE = """
import numpy as np
import latticedip as ld
print(ld.dipole_tensor(4 * np.eye(3), [[0.3, 0.1, 0.7]], tol=1e-6).tolist())
"""
MANY = """
import threading
import numpy as np
import latticedip as ld
ld.dipole_tensor(4 * np.eye(3), np.random.default_rng(0).uniform(0, 4, (5000, 3)), tol=1e-6)
print(threading.active_count() > 1)
"""
THREADS = """
import numba
from latticedip.kernels.jit import thread_count
found = [thread_count()]
numba.set_num_threads(1)
print([*found, thread_count()])
"""


def run(code: str, *flags: str, **settings: str) -> str:
    environment = {name: value for name, value in os.environ.items() if name not in SETTINGS} | settings
    command = [sys.executable, "-W", "error", *flags, "-c", code]
    root = Path(__file__).resolve().parents[1]
    done = subprocess.run(command, capture_output=True, text=True, env=environment, cwd=root, timeout=300)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    return done.stdout


@pytest.fixture(scope="module")
def compiled() -> np.ndarray:
    return np.array(json.loads(run(TENSORS)))


def test_the_same_with_the_compiler_off(compiled):
    plain = np.array(json.loads(run(TENSORS, NUMBA_DISABLE_JIT="1")))
    assert np.abs(plain - compiled).max() < 1e-13


def test_a_cache_that_cannot_be_written():
    assert run(ONE, NUMBA_CACHE_DIR="/dev/null/x") == run(ONE)


@pytest.mark.parametrize("k", [(0, 0, 0), (0.213, 0.1, -0.37)])
@pytest.mark.parametrize(("n_targets", "n_sources"), [(7, 300), (150, 40), (1500, 2), (5000, 3)])
@pytest.mark.parametrize("cell", [np.diag([2.0, 2.0, 200.0]), [[5, 0, 0], [4.7, 1.7, 0], [1.1, 0.3, 6.0]]])
def test_every_digit_is_the_same_on_one_thread(cell, n_targets, n_sources, k):
    rng = np.random.default_rng(n_targets)
    targets, sources = (rng.uniform(0, 1, (n, 3)) @ np.asarray(cell) for n in (n_targets, n_sources))
    moments = rng.normal(size=(n_sources, 3)) + 0j
    plan, splitting = lattice_sum(cell, k, 1e-6), field_plan(np.asarray(cell, dtype=float), np.array(k), 1e-6, 2, 1000)

    def tensors():
        return plan.tensors(plan.place(targets), plan.place(sources))

    def fields():
        return lattice_field(splitting, splitting.place(targets), splitting.place(sources), moments)[0]

    for sums in (tensors, fields):
        with jit.one_thread():
            alone = sums()
        assert np.array_equal(sums(), alone)


def test_fields_in_a_cell_much_smaller_than_the_boxes_are_finite():
    cell = np.diag([0.01, 0.01, 1.0])
    rng = np.random.default_rng(8)
    targets, sources = rng.uniform(0, 1, (2000, 3)) @ cell, rng.uniform(0, 1, (2, 3)) @ cell
    moments = rng.normal(size=(2, 3)) + 0j
    plan = field_plan(cell, np.zeros(3), 1e-10, 2, 2000)
    field, weight = lattice_field(plan, plan.place(targets), plan.place(sources), moments)
    tensors = lattice_sum(cell, (0, 0, 0), 1e-10)
    expected = np.einsum("tsab,sb->ta", tensors.tensors(tensors.place(targets[:50]), tensors.place(sources)), moments)
    assert np.all(np.isfinite(weight))
    assert np.abs(field[:50] - expected).max() < 1e-9 * np.abs(expected).max()


def test_an_error_in_a_block_of_rows_is_told_and_ends_the_work(monkeypatch):
    monkeypatch.setattr(jit, "thread_count", lambda: 2)
    done = []

    def fails(first, last):
        done.append((first, last))
        raise ValueError(f"rows {first} to {last}")

    with pytest.raises(ValueError, match=r"^rows \d+ to \d+$"):
        jit.over_rows(fails, 1000, at_least=1)
    assert len(done) <= 2


def test_a_kernel_is_compiled_once_its_code_is_on_disk(tmp_path):
    code = (
        "import latticedip as ld\nfrom latticedip.kernels.jit import is_compiled\n"
        "from latticedip.kernels.real import real_tensors\nfound = [is_compiled(real_tensors)]\n"
        "ld.dipole_tensor([[4, 0, 0], [0, 4, 0], [0, 0, 4]], [[1, 0, 0]], tol=1e-6)\n"
        "print([*found, is_compiled(real_tensors)])"
    )
    assert run(code, NUMBA_CACHE_DIR=str(tmp_path / "cache")).strip() == "[False, True]"
    assert run(code, NUMBA_DISABLE_JIT="1").strip() == "[True, True]"


@pytest.mark.slow
def test_caches_below_a_file_and_in_a_new_directory(compiled, tmp_path):
    below_a_file = tmp_path / "file"
    below_a_file.write_text("not a directory")
    new = tmp_path / "new" / "cache"
    for directory in (below_a_file / "x", new):
        assert np.array_equal(json.loads(run(TENSORS, NUMBA_CACHE_DIR=str(directory))), compiled)
    assert list(new.rglob("*.nbi"))


@pytest.mark.parametrize(
    ("settings", "counts"),
    [
        ({"NUMBA_NUM_THREADS": "4"}, "[4, 1]"),
        ({"NUMBA_NUM_THREADS": "4", "OMP_NUM_THREADS": "3"}, "[3, 1]"),
        ({"NUMBA_NUM_THREADS": "4", "OMP_NUM_THREADS": "2,1"}, "[2, 1]"),
        ({"NUMBA_NUM_THREADS": "2", "OMP_NUM_THREADS": "8"}, "[2, 1]"),
        ({"OMP_NUM_THREADS": "1"}, "[1, 1]"),
    ],
)
def test_thread_counts_are_respected(settings, counts):
    assert run(THREADS, **settings).strip() == counts


def test_a_count_that_is_no_number_counts_as_none(monkeypatch):
    for stated, expected in (("many", 4), ("", 4), ("0", 4), (" 3 ,2", 3)):
        monkeypatch.setenv("OMP_NUM_THREADS", stated)
        monkeypatch.setattr(jit.numba.config, "NUMBA_NUM_THREADS", 4)
        assert jit.thread_count() == expected


def test_no_threads_are_started_where_one_is_asked_for():
    assert run(MANY, OMP_NUM_THREADS="1").strip() == "False"
    assert run(MANY, OMP_NUM_THREADS="2", NUMBA_NUM_THREADS="2").strip() == "True"


def test_result_does_not_depend_on_the_number_of_threads(monkeypatch):
    cell = np.array([[8.0, 0, 0], [1.3, 7.9, 0], [0.7, -1.1, 12.0]])
    rng = np.random.default_rng(0)
    offsets = rng.uniform(0, 1, (501, 3)) @ cell
    crystal = ld.Crystal(cell, [[0, 0, 0], [0.5, 0.4, 0.3]], ["Mn", "Fe"])
    ordering = ld.Ordering(crystal, [[1, 2j, 0], [0, 1, 1]], (0.2, 0, 0.3))
    points = rng.uniform(0.1, 0.2, (101, 3))
    found = []
    for count in (1, 2, 3, 7):
        monkeypatch.setattr(jit, "thread_count", lambda count=count: count)
        field = ld.local_field(ordering, points)
        found.append([ld.dipole_tensor(cell, offsets, (0.1, 0.2, 0.3)), field.total, field.gradient_T_per_A])
    for other in found[1:]:
        for one, two in zip(found[0], other, strict=True):
            assert np.abs(one - two).max() <= 1e-13 * max(1.0, np.abs(one).max())


def test_every_row_is_done_once(monkeypatch):
    def mark(first: int, last: int, out: np.ndarray) -> None:
        out[first:last] += 1

    for threads in (1, 2, 5):
        monkeypatch.setattr(jit, "thread_count", lambda threads=threads: threads)
        for n in (0, 1, 3, 16, 17, 33, 100, 1001):
            out = np.zeros(n)
            jit.over_rows(mark, n, out, at_least=1)
            assert np.array_equal(out, np.ones(n))


def test_an_error_in_a_thread_comes_back(monkeypatch):
    def fail(first: int, last: int) -> None:
        raise ZeroDivisionError(f"{first}")

    monkeypatch.setattr(jit, "thread_count", lambda: 2)
    with pytest.raises(ZeroDivisionError):
        jit.over_rows(fail, 100, at_least=1)


# --- functions ---------------------------------------------------------------------------------------------------


def test_exponential():
    x = -np.concatenate([np.linspace(0, 1, 300), np.geomspace(1e-300, 690, 400), np.arange(50) * np.log(2)])
    with mpmath.workdps(30):
        for value in x:
            exact = mpmath.exp(mpmath.mpf(float(value)))
            assert abs(mpmath.mpf(float(exp_negative(value))) / exact - 1) < 5e-16


def test_scaled_complementary_error_function():
    with mpmath.workdps(30):
        for u in np.concatenate([np.linspace(0, U_MAX, 700), np.geomspace(1e-12, 1, 100)]):
            exact = mpmath.exp(mpmath.mpf(float(u)) ** 2) * mpmath.erfc(mpmath.mpf(float(u)))
            assert abs(mpmath.mpf(float(scaled_erfc(u))) / exact - 1) < 3e-15


@pytest.mark.parametrize("alpha", [0.05, 0.4, 2.0])
def test_radial_functions(alpha):
    r = np.concatenate([np.geomspace(1e-3, 1, 40), np.linspace(1, 6.9, 60)]) / alpha
    b1, b2 = np.empty(len(r)), np.empty(len(r))
    radial_functions(len(r), alpha, r * r, b1, b2)
    with mpmath.workdps(40):
        a = mpmath.mpf(alpha)
        for distance, one, two in zip(r, b1, b2, strict=True):
            x = mpmath.sqrt(mpmath.mpf(float(distance * distance)))
            # B₁ and B₂ as derivatives, taken by mpmath and not from a formula.
            slope, bend = (mpmath.diff(lambda y: mpmath.erfc(a * y) / y, x, n) for n in (1, 2))
            first = -slope / x
            second = (bend - slope / x) / x**2
            # The exponent −u² is itself rounded: its error grows with u².
            slack = 4e-15 * (1 + float(a * x) ** 2 / 10)
            assert abs(one / first - 1) < slack
            assert abs(two / second - 1) < slack


def test_offsets_are_reduced_exactly():
    rng = np.random.default_rng(4)
    cell = np.array([[3.1, 0.2, 0], [-1.7, 4.3, 0.6], [0.3, -0.9, 290.7]])
    plan = lattice_sum(cell, (0.21, -0.34, 0.11))
    offsets = rng.uniform(-9000, 9000, (200, 3))
    rest, cells, turns = np.empty((200, 3)), np.empty((200, 3)), np.empty(200)
    lattice = plan.lattice
    reduce_offsets(
        0, 200, offsets, cell, stable_inverse(cell), lattice.steps, lattice.inverse, plan.given_k, rest, cells, turns
    )
    assert np.array_equal(cells, np.round(cells)) and np.abs(cells).max() > 1000
    assert np.abs(rest @ lattice.inverse).max() < 0.5 + 1e-9
    with mpmath.workdps(40):
        for i in range(200):
            for c in range(3):
                exact = mpmath.mpf(float(offsets[i, c])) - sum(
                    int(cells[i, a]) * mpmath.mpf(float(cell[a, c])) for a in range(3)
                )
                assert abs(rest[i, c] - exact) <= abs(exact) * mpmath.mpf(2) ** -52
            turn = sum(int(cells[i, a]) * mpmath.mpf(float(plan.given_k[a])) for a in range(3)) - float(turns[i])
            assert abs(turn - mpmath.nint(turn)) < 1e-15
