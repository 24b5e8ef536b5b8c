"""What latticedip is measured against: plain compiled loops, each as good as it is without a new idea.

`ewald_tensors`: Ewald's sum term by term, one erfc, exp or cosine per term, compiled with fast-math and spread over the
targets; cut-offs by the usual rms estimates for the same tolerance, at the splitting that runs fastest.
`SphereSum`: the direct sum over all points within a radius of the target, vectorised, on all threads.
"""

from __future__ import annotations

import math
import statistics
import time
from dataclasses import dataclass

import numpy as np
from numba import config, njit, prange
from scipy import constants

# The OpenMP layer spins beside other threads and then takes steps of 8 ms; this one does not.
config.THREADING_LAYER = "workqueue"

DIPOLE_T = constants.mu_0 / (4 * np.pi) * constants.value("Bohr magneton") * 1e30


@njit(parallel=True, fastmath=True, cache=True, error_model="numpy")
def _ewald(targets, sources, cell, inverse, images, q, weights, alpha, cutoff, out):  # type: ignore[no-untyped-def]
    """Tensors over C of every pair at k = 0, weights with the factor 2 for ±q and sign: term by term."""
    a1 = 2 * alpha / math.sqrt(math.pi)
    for t in prange(targets.shape[0]):
        for s in range(sources.shape[0]):
            dx = targets[t, 0] - sources[s, 0]
            dy = targets[t, 1] - sources[s, 1]
            dz = targets[t, 2] - sources[s, 2]
            for axis in range(3):
                n = round(dx * inverse[0, axis] + dy * inverse[1, axis] + dz * inverse[2, axis])
                dx -= n * cell[axis, 0]
                dy -= n * cell[axis, 1]
                dz -= n * cell[axis, 2]
            xx = yy = xy = xz = yz = 0.0
            for i in range(images.shape[0]):
                x = dx - images[i, 0]
                y = dy - images[i, 1]
                z = dz - images[i, 2]
                r2 = x * x + y * y + z * z
                if r2 < cutoff * cutoff:
                    r = math.sqrt(r2)
                    gauss = a1 * math.exp(-alpha * alpha * r2)
                    b1 = (math.erfc(alpha * r) / r + gauss) / r2
                    b2 = (3 * b1 + 2 * alpha * alpha * gauss) / r2
                    xx += b2 * x * x - b1
                    yy += b2 * y * y - b1
                    xy += b2 * x * y
                    xz += b2 * x * z
                    yz += b2 * y * z
            for i in range(q.shape[0]):
                c = math.cos(q[i, 0] * dx + q[i, 1] * dy + q[i, 2] * dz)
                xx += weights[i, 0] * c
                yy += weights[i, 1] * c
                xy += weights[i, 2] * c
                xz += weights[i, 3] * c
                yz += weights[i, 4] * c
            out[t, s, 0] = xx
            out[t, s, 1] = yy
            out[t, s, 2] = xy
            out[t, s, 3] = xz
            out[t, s, 4] = yz


@dataclass
class PlainEwald:
    """A term-by-term Ewald sum at k = 0 with its lists made beforehand; on-site pairs are not handled."""

    cell: np.ndarray
    tol: float
    alpha: float

    def __post_init__(self) -> None:
        self.inverse = np.linalg.inv(self.cell)
        self.volume = abs(np.linalg.det(self.cell))
        self.cutoff = (
            self._solve(lambda s: 4 * self.alpha**3 * math.exp(-s * s) * math.sqrt(self._shell(s))) / self.alpha
        )
        self.wave_cutoff = (
            2
            * self.alpha
            * self._solve(lambda s: 4 * np.pi / self.volume * math.exp(-s * s) * math.sqrt(self._wave_shell(s)))
        )
        box = self._points(self.cell, self.cutoff + 0.5 * np.linalg.norm(self.cell, axis=1).sum())
        # Only images that some separation inside the cell can bring within the cut-off.
        corners = np.array([[i, j, k] for i in (-0.5, 0.5) for j in (-0.5, 0.5) for k in (-0.5, 0.5)]) @ self.cell
        self.images = box[np.linalg.norm(box, axis=1) <= self.cutoff + np.linalg.norm(corners, axis=1).max()]
        q = self._points(2 * np.pi * self.inverse.T, self.wave_cutoff)
        square = np.sum(q**2, axis=1)
        half = (q[:, 2] > 1e-9) | (
            (abs(q[:, 2]) < 1e-9) & ((q[:, 1] > 1e-9) | ((abs(q[:, 1]) < 1e-9) & (q[:, 0] > 1e-9)))
        )
        keep = half & (square <= self.wave_cutoff**2)
        q, square = q[keep], square[keep]
        factor = -2 * 4 * np.pi / self.volume * np.exp(-square / (4 * self.alpha**2)) / square
        self.q = np.ascontiguousarray(q)
        self.weights = np.ascontiguousarray(q[:, [0, 1, 0, 0, 1]] * q[:, [0, 1, 1, 2, 2]] * factor[:, None])

    def _shell(self, s: float) -> float:
        """Points in a shell of thickness 1/(2 α s) at the real cut-off: those that the rms error counts."""
        return max(1.0, 4 * np.pi * (s / self.alpha) ** 2 / (2 * self.alpha * s) / self.volume)

    def _wave_shell(self, s: float) -> float:
        return max(1.0, 4 * np.pi * (2 * self.alpha * s) ** 2 * self.alpha / s * self.volume / (2 * np.pi) ** 3)

    def _solve(self, error) -> float:  # type: ignore[no-untyped-def]
        low, high = 1.0, 9.0
        for _ in range(60):
            middle = (low + high) / 2
            low, high = (middle, high) if DIPOLE_T * error(middle) > 0.3 * self.tol else (low, middle)
        return high

    @staticmethod
    def _points(rows: np.ndarray, radius: float) -> np.ndarray:
        reach = np.ceil(radius * np.linalg.norm(np.linalg.inv(rows), axis=0)).astype(int)
        grid = np.stack(np.meshgrid(*(np.arange(-n, n + 1) for n in reach), indexing="ij"), axis=-1).reshape(-1, 3)
        return np.asarray(grid @ rows)

    def tensors(self, targets: np.ndarray, sources: np.ndarray) -> np.ndarray:
        """Shape (n_t, n_s, 3, 3) in T/µB."""
        flat = np.empty((len(targets), len(sources), 5))
        _ewald(
            targets, sources, self.cell, self.inverse, self.images, self.q, self.weights, self.alpha, self.cutoff, flat
        )
        out = np.empty((len(targets), len(sources), 3, 3))
        out[..., 0, 0], out[..., 1, 1] = flat[..., 0], flat[..., 1]
        out[..., 2, 2] = 4 * np.pi / self.volume - flat[..., 0] - flat[..., 1]
        out[..., 0, 1] = out[..., 1, 0] = flat[..., 2]
        out[..., 0, 2] = out[..., 2, 0] = flat[..., 3]
        out[..., 1, 2] = out[..., 2, 1] = flat[..., 4]
        out *= DIPOLE_T
        return out


def best_plain_ewald(cell: np.ndarray, tol: float, targets: np.ndarray, sources: np.ndarray) -> PlainEwald:
    """The plain sum at the splitting that runs fastest for these pairs."""
    scale = math.sqrt(math.pi) / abs(np.linalg.det(cell)) ** (1 / 3)
    best, shortest = None, math.inf
    for factor in (0.8, 0.9, 1.0, 1.1, 1.2, 1.3, 1.5, 1.7, 2.0):
        plan = PlainEwald(cell, tol, factor * scale)
        plan.tensors(targets[:8], sources)
        for _ in range(5):
            start = time.perf_counter()
            plan.tensors(targets, sources)
            spent = time.perf_counter() - start
            if spent < shortest:
                best, shortest = plan, spent
    assert best is not None
    return best


@njit(fastmath=True, cache=True, error_model="numpy")
def _block(px, py, pz, dx, dy, dz, mx, my, mz, radius2):  # type: ignore[no-untyped-def]
    """Field over C of one source's images at the given lattice points, those within the radius."""
    bx = by = bz = 0.0
    for i in range(px.shape[0]):
        x = dx - px[i]
        y = dy - py[i]
        z = dz - pz[i]
        r2 = x * x + y * y + z * z
        inverse2 = 1.0 / r2
        inverse3 = inverse2 * math.sqrt(inverse2) if r2 <= radius2 else 0.0
        along = 3.0 * (x * mx + y * my + z * mz) * inverse2
        bx += (along * x - mx) * inverse3
        by += (along * y - my) * inverse3
        bz += (along * z - mz) * inverse3
    return bx, by, bz


def _all_blocks(px, py, pz, stops, vectors, moments, radius2, parts):  # type: ignore[no-untyped-def]
    """Partial fields of every source, its lattice points in two blocks. Slices, so that the loop is vectorised."""
    for task in prange(2 * vectors.shape[0]):
        s = task // 2
        half = stops[s] // 2
        first = half if task % 2 else 0
        last = stops[s] if task % 2 else half
        parts[task, 0], parts[task, 1], parts[task, 2] = _block(
            px[first:last], py[first:last], pz[first:last],
            vectors[s, 0], vectors[s, 1], vectors[s, 2], moments[s, 0], moments[s, 1], moments[s, 2], radius2,
        )  # fmt: skip


_sphere_two_threads = njit(parallel=True, fastmath=True, error_model="numpy")(_all_blocks)
_sphere_one_thread = njit(fastmath=True, error_model="numpy")(_all_blocks)


class SphereSum:
    """Direct sum within ``radius`` Å of the target; the lattice points are listed once, by increasing length."""

    def __init__(self, cell: np.ndarray, sources: np.ndarray, moments: np.ndarray, radius: float) -> None:
        self.cell, self.inverse, self.radius = cell, np.linalg.inv(cell), radius
        self.sources, self.moments = sources, np.ascontiguousarray(moments)
        points = PlainEwald._points(cell, radius + 0.5 * np.linalg.norm(cell, axis=1).sum())
        length = np.linalg.norm(points, axis=1)
        order = np.argsort(length, kind="stable")
        self.length = length[order]
        self.px, self.py, self.pz = (np.ascontiguousarray(points[order, axis]) for axis in range(3))
        self.parts = np.empty((2 * len(sources), 3))
        self.kernel = _sphere_two_threads

    def field(self, target: np.ndarray) -> np.ndarray:
        """Shape (3,) in T. Field of all sources at one Cartesian target, without the Lorentz field."""
        vectors = target - self.sources
        vectors -= np.round(vectors @ self.inverse) @ self.cell
        # Points farther than this from the origin cannot lie within the radius of the target.
        stops = np.searchsorted(self.length, self.radius + np.linalg.norm(vectors, axis=1))
        self.kernel(self.px, self.py, self.pz, stops, vectors, self.moments, self.radius**2, self.parts)
        return np.asarray(DIPOLE_T * self.parts.sum(axis=0))

    def take_faster_kernel(self, target: np.ndarray) -> None:
        """Starting threads costs more than it brings on some machines: keep whichever is faster here."""
        spent = {}
        for kernel in (_sphere_two_threads, _sphere_one_thread):
            self.kernel = kernel
            self.field(target)
            rounds = []
            for _ in range(60):
                start = time.perf_counter()
                self.field(target)
                rounds.append(time.perf_counter() - start)
            spent[kernel] = statistics.median(rounds)
        self.kernel = min(spent, key=spent.__getitem__)
