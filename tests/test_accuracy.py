"""The error bound that tol promises, against high-precision sums over random cells."""

from __future__ import annotations

import sys

import numpy as np
import pytest

import latticedip as ld
from tests.reference.cells import K_KINDS, case
from tests.reference.mpmath_sum import tensors

TOLERANCES = (1e-4, 1e-7, 1e-10, 1e-12)
N_QUICK = 60
N_ALL = 400

SEEDS = [*range(N_QUICK), *(pytest.param(seed, marks=pytest.mark.slow) for seed in range(N_QUICK, N_ALL))]


@pytest.fixture(scope="module")
def worst():
    ratios: dict[tuple[str, float], float] = {}
    yield ratios
    for (kind, tol), ratio in sorted(ratios.items()):
        sys.stdout.write(f"\nlargest error / bound, k {kind:16s} tol {tol:.0e}: {ratio:.3f}")


@pytest.mark.parametrize("seed", SEEDS)
def test_error_stays_within_tol(seed, worst):
    cell, offsets, k = case(seed)
    exact = tensors(cell, offsets, k, digits=16)
    bound = np.maximum(1.0, np.abs(exact).max(axis=(1, 2)))
    for tol in TOLERANCES:
        error = np.abs(ld.dipole_tensor(cell, offsets, k, tol=tol) - exact).max(axis=(1, 2)) / bound
        key = (K_KINDS[seed % len(K_KINDS)], tol)
        worst[key] = max(worst.get(key, 0.0), float(error.max()) / tol)
        assert error.max() <= tol, (
            f"tol {tol:g}, cell {cell.tolist()}, k {k.tolist()}, offset {offsets[error.argmax()].tolist()}: "
            f"error {error.max():.3g}"
        )


@pytest.mark.parametrize("seed", [0, 1, 2, 5])
def test_targets_alone_and_together_are_the_same_numbers(seed):
    cell, offsets, k = case(seed)
    together = ld.dipole_tensor(cell, offsets, k)
    for offset, tensor in zip(offsets, together, strict=True):
        alone = ld.dipole_tensor(cell, offset[None], k)[0]
        assert np.abs(alone - tensor).max() <= 1e-13 * max(1.0, np.abs(tensor).max())


def test_many_targets_in_one_call():
    cell = np.array([[8.0, 0.0, 0.0], [1.3, 7.9, 0.0], [0.7, -1.1, 12.0]])
    rng = np.random.default_rng(5)
    offsets = rng.uniform(-2, 2, (700, 3)) @ cell
    found = ld.dipole_tensor(cell, offsets, (0.2, 0.3, -0.4))
    for i in rng.integers(0, len(offsets), 5):
        exact = tensors(cell, offsets[i : i + 1], (0.2, 0.3, -0.4))[0]
        assert np.abs(found[i] - exact).max() <= 1e-10 * max(1.0, np.abs(exact).max())


@pytest.mark.parametrize(
    ("k", "is_real"), [((0, 0, 0), True), ((0.5, 0, 0.5), True), ((1, -2, 0), True), ((0.1, 0, 0), False)]
)
def test_real_where_k_is_its_own_opposite(k, is_real):
    found = ld.dipole_tensor(5 * np.eye(3), [[1.0, 0.4, 0.2]], k)
    assert found.shape == (1, 3, 3)
    assert np.isrealobj(found) == is_real
