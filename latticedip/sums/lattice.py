"""Reduction of a lattice basis, exact for the doubles as given.

A skewed cell makes a lattice sum long and its cut-offs loose. Any sum over the lattice is the same in a reduced
basis A' = P A with a unimodular whole-number matrix P, where a propagation vector reads k' = P k.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property, lru_cache

import numpy as np

from latticedip.checks import FloatArray, frozen
from latticedip.errors import AccuracyError


@dataclass(frozen=True, eq=False)
class ReducedLattice:
    """A reduced basis of a three-dimensional lattice.

    cell: Shape (3, 3) float in Å. Rows are the reduced vectors, correct to the last place.
    steps: Shape (3, 3) float holding whole numbers. cell = steps @ given cell.
    """

    cell: FloatArray
    steps: FloatArray

    @cached_property
    def inverse(self) -> FloatArray:
        """Shape (3, 3) float in 1/Å. Cartesian to fractional: x @ inverse."""
        return stable_inverse(self.cell)

    @cached_property
    def waves(self) -> FloatArray:
        """Shape (3, 3) float in 1/Å. Rows are the reciprocal vectors, 2π included."""
        return np.ascontiguousarray(2 * np.pi * stable_inverse(self.cell).T)

    @cached_property
    def volume(self) -> float:
        """Cell volume in Å³."""
        return float(abs(np.dot(self.cell[0], np.cross(self.cell[1], self.cell[2]))))

    @cached_property
    def layer_distances(self) -> FloatArray:
        """Shape (3,) float in Å. Gram–Schmidt lengths of the basis, shortest vector first; their product is V."""
        return np.abs(np.diag(np.linalg.qr(self.cell.T, mode="r")))


def stable_inverse(cell: FloatArray) -> FloatArray:
    """Inverse of a cell by cross products: each column keeps its relative accuracy in cells of any aspect."""
    normal = np.cross(cell[[1, 2, 0]], cell[[2, 0, 1]])
    return np.ascontiguousarray((normal / np.einsum("ij,ij->i", normal, cell)[:, None]).T)


def reduce_cell(cell: FloatArray) -> ReducedLattice:
    """Return a Minkowski-reduced basis (Semaev, Lect. Notes Comput. Sci. 2146, 181 (2001)), shortest vector first.

    Raises AccuracyError where the reduction needs whole numbers beyond 2²⁰: such a cell is not a structure.
    """
    return _reduced(np.ascontiguousarray(cell, dtype=float).tobytes())


@lru_cache(maxsize=64)
def _reduced(cell_bytes: bytes) -> ReducedLattice:
    cell = np.frombuffer(cell_bytes).reshape(3, 3)
    steps = np.eye(3)
    for _ in range(1000):
        basis = steps @ cell
        order = np.argsort(np.einsum("ij,ij->i", basis, basis), kind="stable")
        steps, basis = steps[order], basis[order]
        # Shorten the longest by the best combination of the other two, the second by the first.
        change = _shortening(basis)
        if change is None:
            break
        row, combination = change
        steps[row] += combination @ steps
    else:
        raise AccuracyError(f"the cell {cell.tolist()} could not be reduced; its vectors are almost dependent.")
    if np.abs(steps).max() > 2**20:
        raise AccuracyError(f"the cell {cell.tolist()} is too skewed: its vectors are almost dependent.")
    if np.linalg.det(steps @ cell) < 0:
        steps = -steps
    return ReducedLattice(frozen(_exact_product(steps, cell)), frozen(np.ascontiguousarray(steps)))


def _shortening(basis: FloatArray) -> tuple[int, FloatArray] | None:
    first, second, third = basis
    mu = np.rint(second @ first / (first @ first))
    candidate = second - mu * first
    if candidate @ candidate < (second @ second) * (1 - 1e-12):
        return 1, np.array([-mu, 0.0, 0.0])
    gram = np.array([[first @ first, first @ second], [first @ second, second @ second]])
    centre = np.linalg.solve(gram, np.array([third @ first, third @ second]))
    best: tuple[float, FloatArray] | None = None
    for i in (np.floor(centre[0]), np.floor(centre[0]) + 1):
        for j in (np.floor(centre[1]), np.floor(centre[1]) + 1):
            rest = third - i * first - j * second
            size = float(rest @ rest)
            if best is None or size < best[0]:
                best = size, np.array([-i, -j, 0.0])
    assert best is not None
    return (2, best[1]) if best[0] < (third @ third) * (1 - 1e-12) else None


def _exact_product(steps: FloatArray, cell: FloatArray) -> FloatArray:
    if np.array_equal(np.abs(steps).sum(axis=1), np.ones(3)):
        return np.ascontiguousarray(steps @ cell)
    exact = [[Fraction(float(x)) for x in row] for row in cell]
    return np.array(
        [[float(sum(int(step) * exact[l][c] for l, step in enumerate(row))) for c in range(3)] for row in steps]
    )


def reduce_k(steps: FloatArray, k: FloatArray) -> FloatArray:
    """Return k' = P k in [−½, ½], exact for the doubles as given."""
    exact = [Fraction(float(x)) for x in k]
    turned = [sum(int(step) * exact[l] for l, step in enumerate(row)) for row in steps]
    return np.array([float(x - round(x)) for x in turned])
