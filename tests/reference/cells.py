"""Random cells, offsets and wave vectors as hard as a user may bring them; and cells that doubles hold exactly."""

from __future__ import annotations

from typing import Any

import numpy as np

from tests.reference.mpmath_sum import reduction

#: The kinds of k that take turns over the random cells.
K_KINDS = ("zero", "zone boundary", "generic", "tiny 1e-4", "tiny 1e-8", "whole cells away")


def random_cell(rng: np.random.Generator) -> np.ndarray:
    """Lengths 3 to 300 Å (so aspects to 1:100), angles 20° to 160°, turned at random, no two points within 1.5 Å."""
    while True:
        lengths = 3.0 * 100.0 ** rng.uniform(0, 1, 3)
        if rng.random() < 0.5:
            lengths[rng.integers(3)] = 3.0
        if rng.random() < 0.5:
            lengths[rng.integers(3)] = 300.0
        angles = rng.uniform(20.0, 160.0, 3)
        if rng.random() < 0.5:
            angles[rng.integers(3)] = 20.0
        cosine = np.cos(np.radians(angles))
        gram = np.outer(lengths, lengths) * (np.eye(3))
        for (i, j), c in zip(((1, 2), (0, 2), (0, 1)), cosine, strict=True):
            gram[i, j] = gram[j, i] = lengths[i] * lengths[j] * c
        if np.linalg.eigvalsh(gram / np.outer(lengths, lengths)).min() < 1e-3:
            continue
        cell = np.linalg.cholesky(gram) @ random_rotation(rng)
        if np.linalg.norm(reduction(cell) @ cell, axis=1).min() > 1.5:
            return cell


def random_rotation(rng: np.random.Generator) -> np.ndarray:
    """A rotation matrix drawn evenly (QR of a normal matrix)."""
    q, r = np.linalg.qr(rng.normal(size=(3, 3)))
    q = q * np.sign(np.diag(r))
    return q if np.linalg.det(q) > 0 else -q


def random_offsets(rng: np.random.Generator, cell: np.ndarray) -> np.ndarray:
    """On a source (two ways), 0.3 Å from one, in the cell, cells away, thousands of Å away, near a distant source."""

    def direction() -> Any:
        v = rng.normal(size=3)
        return v / np.linalg.norm(v)

    return np.array(
        [
            np.zeros(3),
            rng.integers(-3, 4, 3) @ cell,
            0.3 * direction(),
            rng.uniform(0, 1, 3) @ cell,
            rng.uniform(-8, 8, 3) @ cell,
            rng.uniform(2000, 9000) * direction(),
            rng.integers(-20, 21, 3) @ cell + rng.uniform(0.3, 1.0) * direction(),
        ]
    )


def random_k(rng: np.random.Generator, kind: str) -> np.ndarray:
    """One k of the kind."""
    if kind == "zero":
        return np.zeros(3)
    if kind == "zone boundary":
        return np.array([(0.5, 0, 0), (0, 0.5, 0.5), (0.5, 0.5, 0.5), (0, 0, -0.5)][rng.integers(4)])
    if kind == "generic":
        return rng.uniform(-0.5, 0.5, 3)
    if kind.startswith("tiny"):
        return float(kind.split()[1]) * rng.choice([-1, 0, 1, 0.7], 3) + [0, 0, float(kind.split()[1])]
    return rng.integers(-3, 4, 3) + rng.choice([0.0, 0.5, 0.25, 1 / 3], 3)


def case(seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cell, offsets and k number ``seed``."""
    rng = np.random.default_rng([20240229, seed])
    cell = random_cell(rng)
    return cell, random_offsets(rng, cell), random_k(rng, K_KINDS[seed % len(K_KINDS)])
