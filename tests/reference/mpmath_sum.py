"""High-precision Ewald evaluation of the dipole tensor, for the doubles exactly as they are given.

T(r; k) = Σ_R T(r − R) exp(−2πi k·R), T_ab(x) = (µ0/4π)(3 x_a x_b − x² δ_ab)/|x|^5, in T/µB. The source itself is left
out where r is closer than 1e-6 Å to a lattice vector; at k = 0 (modulo 1) the term G = 0 is dropped (N = 0).

With φ(r) = 1/r split into erfc(αr)/r + erf(αr)/r (Ewald, Ann. Phys. 369, 253 (1921)) and T = (µ0/4π) ∂∂φ:

real part        Σ_R [C(x) x x − B(x) 1] exp(−2πi k·R), x = r − R
                 B = erfc(αx)/x³ + (2α/√π) exp(−α²x²)/x²
                 C = 3 erfc(αx)/x⁵ + (2α/√π) exp(−α²x²)(2α²/x² + 3/x⁴)
reciprocal part  −(4π/V) Σ_G (q q/q²) exp(−q²/4α²) exp(iq·r), q = G − K, K = 2π k in Cartesian reciprocal space
source left out  −∂∂[erf(αd)/d] exp(−2πi k·R₀) for the lattice vector R₀ that r sits on, d = r − R₀

Cells are reduced (LLL) before anything is summed, in whole numbers, so the sum itself stays exact; lattice points
inside the cut-off sphere are found by recursive bounds on the triangular form of the basis (Fincke and Pohst 1985),
which no shape of cell can fool.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from mpmath import mp, mpf
from scipy import constants

#: A target this close (Å) to a source sits on it.
ON_SITE_A = 1e-6
COMPONENTS = ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))


def prefactor() -> Any:
    """µ0 µB/(4π Å³) in T/µB as an mpf."""
    return mpf(constants.mu_0) / (4 * mp.pi) * mpf(constants.value("Bohr magneton")) * mpf(10) ** 30


def tensors(
    cell: Any, offsets: Any, k: Sequence[float] = (0, 0, 0), *, digits: int = 18, alpha: float | None = None
) -> np.ndarray:
    """Shape (n, 3, 3) complex. The dipole tensors in T/µB, rounded to doubles; arguments as `tensors_mp`."""
    rows = tensors_mp(cell, offsets, k, digits=digits, alpha=alpha)
    return np.array([[[complex(x) for x in row] for row in tensor] for tensor in rows])


def tensors_mp(
    cell: Any, offsets: Any, k: Sequence[float] = (0, 0, 0), *, digits: int = 18, alpha: float | None = None
) -> list[list[list[Any]]]:
    """The same with mpmath numbers, absolute error about 10^−digits (relative where elements exceed 1).

    cell: Shape (3, 3), rows are the vectors in Å. offsets: Shape (n, 3), Cartesian Å from source to target.
    k: reduced coordinates. alpha: splitting in 1/Å; the cheapest where left out.
    """
    cell_float = np.asarray(cell, dtype=float)
    unimodular = reduction(cell_float)
    with mp.workdps(digits + 16):
        given = [[mpf(float(x)) for x in row] for row in cell_float]
        basis = [[mp.fdot(mp_ints(row), [g[a] for g in given]) for a in range(3)] for row in unimodular]
        volume, dual = dual_basis(basis)
        kappa = [mp.fdot(mp_ints(row), [mpf(float(x)) for x in k]) for row in unimodular]
        split = _Splitting(basis, dual, volume, kappa, digits, alpha, np.atleast_2d(offsets).shape[0])
        scale = prefactor()
        found = []
        for offset in np.atleast_2d(np.asarray(offsets, dtype=float)):
            six = split.tensor([mpf(float(x)) for x in offset])
            tensor = [[mpf(0)] * 3 for _ in range(3)]
            for (a, b), value in zip(COMPONENTS, six, strict=True):
                tensor[a][b] = tensor[b][a] = scale * value
            found.append(tensor)
    return found


class _Splitting:
    """Everything that the targets of one cell and one k share: reciprocal vectors and their weights."""

    def __init__(
        self, basis: Any, dual: Any, volume: Any, kappa: Any, digits: int, alpha: float | None, n_offsets: int
    ) -> None:
        self.basis, self.dual = basis, dual
        self.basis_float = as_doubles(basis)
        self.dual_float = as_doubles(dual)
        # Whole parts of k only rename the reciprocal vectors.
        self.kappa = [x - mp.nint(x) for x in kappa]
        # The Gaussians fall to 10^−digits with some room for the number of terms and the factors in front.
        self.reach = float(np.sqrt(np.log(10.0) * digits + 12.0))
        self.alpha = mpf(alpha if alpha is not None else self._cheapest(float(volume), n_offsets))
        self._collect_reciprocal(volume)
        self.phases: dict[tuple[int, ...], Any] = {}

    def _cheapest(self, volume: float, n_offsets: int) -> float:
        guess = np.sqrt(np.pi) / volume ** (1 / 3)
        costs = {}
        for alpha in guess * np.geomspace(0.2, 4.0, 14):
            real, wave = self.reach / alpha, 2 * alpha * self.reach / (2 * np.pi)
            # Upper bounds by the sides of boxes around the spheres: no point needs to be listed.
            real_size = np.prod(2 * real / gram_schmidt_lengths(self.basis_float) + 1)
            wave_size = np.prod(2 * wave / gram_schmidt_lengths(self.dual_float) + 1)
            costs[alpha] = n_offsets * 100 * real_size + (40 + 20 * n_offsets) * wave_size
        return min(costs, key=costs.__getitem__)

    def _collect_reciprocal(self, volume: Any) -> None:
        wave = 2 * float(self.alpha) * self.reach / (2 * np.pi)
        centre = np.array([float(x) for x in self.kappa])
        self.integers = points_within(self.dual_float, centre, wave)
        uniform = all(x == 0 for x in self.kappa)
        if uniform:
            self.integers = self.integers[np.any(self.integers != 0, axis=1)]
        self.weights: list[list[Any]] = [[] for _ in COMPONENTS]
        for h in self.integers:
            steps = [int(n) - x for n, x in zip(h, self.kappa, strict=True)]
            q = [2 * mp.pi * mp.fdot(steps, [g[a] for g in self.dual]) for a in range(3)]
            square = mp.fdot(q, q)
            weight = -4 * mp.pi / volume * mp.exp(-square / (4 * self.alpha**2)) / square
            for store, (a, b) in zip(self.weights, COMPONENTS, strict=True):
                store.append(weight * q[a] * q[b])

    def tensor(self, offset: Any) -> list[Any]:
        fractional = [mp.fdot(offset, g) for g in self.dual]
        cells = [mp.nint(x) for x in fractional]
        fractional = [x - n for x, n in zip(fractional, cells, strict=True)]
        local = [offset[a] - mp.fdot(cells, [b[a] for b in self.basis]) for a in range(3)]
        six = [
            real + wave
            for real, wave in zip(self.real_part(local, fractional), self.reciprocal_part(fractional), strict=True)
        ]
        turn = mp.expjpi(-2 * mp.fdot(self.kappa, cells))
        return [turn * x for x in six]

    def phase(self, cells: tuple[int, ...]) -> Any:
        """exp(−2πi k·R) of a lattice vector in the reduced basis."""
        if cells not in self.phases:
            self.phases[cells] = mp.expjpi(-2 * mp.fdot(self.kappa, mp_ints(cells)))
        return self.phases[cells]

    def real_part(self, local: Any, fractional: Any) -> list[Any]:
        centre = np.array([float(x) for x in fractional])
        images = points_within(self.basis_float, centre, self.reach / float(self.alpha))
        alpha, gauss = self.alpha, 2 * self.alpha / mp.sqrt(mp.pi)
        elements: list[list[Any]] = [[] for _ in COMPONENTS]
        cosines, sines = [], []
        for image in images:
            cells = tuple(int(n) for n in image)
            x = [local[a] - mp.fdot(mp_ints(cells), [b[a] for b in self.basis]) for a in range(3)]
            square = mp.fdot(x, x)
            if square < mpf(ON_SITE_A) ** 2:
                b, c = self._left_out(square)
            else:
                distance = mp.sqrt(square)
                tail = mp.erfc(alpha * distance) / (distance * square)
                bell = gauss * mp.exp(-(alpha**2) * square) / square
                b = tail + bell
                c = 3 * tail / square + bell * (2 * alpha**2 + 3 / square)
            for store, (i, j) in zip(elements, COMPONENTS, strict=True):
                store.append(c * x[i] * x[j] - (b if i == j else 0))
            turn = self.phase(cells)
            cosines.append(mp.re(turn))
            sines.append(mp.im(turn))
        return [mp.mpc(mp.fdot(store, cosines), mp.fdot(store, sines)) for store in elements]

    def _left_out(self, square: Any) -> tuple[Any, Any]:
        """B and C of −erf(αd)/d, by its series: (2α/√π) Σ_n (−1)^n (αd)^2n/(n! (2n + 1))."""
        # With u = d² and f(u) = −erf(αd)/d, ∂_a ∂_b f = 4 f'' x_a x_b + 2 f' δ_ab, so B = −2 f' and C = 4 f''.
        first = second = mpf(0)
        for n in range(1, 12):
            term = (
                -2 * self.alpha / mp.sqrt(mp.pi) * (-1) ** n * self.alpha ** (2 * n) / (mp.factorial(n) * (2 * n + 1))
            )
            first += n * term * square ** (n - 1)
            if n > 1:
                second += n * (n - 1) * term * square ** (n - 2)
        return -2 * first, 4 * second

    def reciprocal_part(self, fractional: Any) -> list[Any]:
        tables = []
        for axis in range(3):
            span = np.unique(self.integers[:, axis]) if len(self.integers) else []
            tables.append({int(n): mp.expjpi(2 * int(n) * fractional[axis]) for n in span})
        cosines, sines = [], []
        planes: dict[tuple[int, int], Any] = {}
        for h in self.integers:
            i, j, n = (int(x) for x in h)
            if (i, j) not in planes:
                planes[i, j] = tables[0][i] * tables[1][j]
            turn = planes[i, j] * tables[2][n]
            cosines.append(mp.re(turn))
            sines.append(mp.im(turn))
        shift = mp.expjpi(-2 * mp.fdot(self.kappa, fractional))
        return [shift * mp.mpc(mp.fdot(store, cosines), mp.fdot(store, sines)) for store in self.weights]


def mp_ints(values: Any) -> list[Any]:
    """Whole numbers as mpf."""
    return [mpf(int(n)) for n in values]


def as_doubles(rows: Any) -> np.ndarray:
    """Nested mpf as a float array."""
    return np.array([[float(x) for x in row] for row in rows])


def dual_basis(basis: Any) -> tuple[Any, Any]:
    """Volume and dual vectors d_i with d_i·b_j = δ_ij (no 2π)."""

    def cross(u: Any, v: Any) -> list[Any]:
        return [u[1] * v[2] - u[2] * v[1], u[2] * v[0] - u[0] * v[2], u[0] * v[1] - u[1] * v[0]]

    signed = mp.fdot(basis[0], cross(basis[1], basis[2]))
    dual = [[x / signed for x in cross(basis[(i + 1) % 3], basis[(i + 2) % 3])] for i in range(3)]
    return abs(signed), dual


def gram_schmidt_lengths(basis: np.ndarray) -> np.ndarray:
    """Lengths of the Gram-Schmidt vectors of the rows."""
    return np.abs(np.diag(np.linalg.qr(basis.T)[1]))


def reduction(cell: np.ndarray) -> np.ndarray:
    """Shape (3, 3) int. Unimodular U so that the rows of U·cell are LLL-reduced (Lenstra, Lenstra, Lovász 1982).

    Found in doubles; any unimodular U is exact, so rounding costs speed at worst.
    """
    unimodular = np.eye(3, dtype=int)
    i = 1
    for _ in range(1000):
        if i > 2:
            return unimodular
        basis = unimodular @ cell
        for j in range(i - 1, -1, -1):
            star = _stars(basis)
            step = int(np.round(basis[i] @ star[j] / (star[j] @ star[j])))
            unimodular[i] -= step * unimodular[j]
            basis = unimodular @ cell
        star = _stars(basis)
        mu = basis[i] @ star[i - 1] / (star[i - 1] @ star[i - 1])
        if star[i] @ star[i] >= (0.99 - mu**2) * (star[i - 1] @ star[i - 1]):
            i += 1
        else:
            unimodular[[i - 1, i]] = unimodular[[i, i - 1]]
            i = max(1, i - 1)
    raise ArithmeticError("the lattice reduction did not end")


def _stars(basis: np.ndarray) -> np.ndarray:
    star = np.array(basis, dtype=float)
    for i in range(1, 3):
        for j in range(i):
            star[i] -= (basis[i] @ star[j]) / (star[j] @ star[j]) * star[j]
    return star


def points_within(basis: np.ndarray, centre: np.ndarray, radius: float) -> np.ndarray:
    """Shape (n, 3) int. All whole h with |(h − centre)·basis| ≤ radius, and perhaps a few just outside.

    Fincke and Pohst, Math. Comput. 44, 463 (1985): with basis = L Q, L lower triangular, the last coordinate is
    bounded first, then the second given the last, then the first given both.
    """
    upper = np.linalg.qr(basis.T)[1]  # |v·basis|² = |upper @ v|²
    slack = radius * (1 + 1e-9) + 1e-12
    found = []
    for h2 in _whole(centre[2], slack / abs(upper[2, 2])):
        v2 = h2 - centre[2]
        left2 = slack**2 - (upper[2, 2] * v2) ** 2
        if left2 < 0:
            continue
        middle1 = centre[1] - upper[1, 2] * v2 / upper[1, 1]
        for h1 in _whole(middle1, np.sqrt(left2) / abs(upper[1, 1])):
            v1 = h1 - centre[1]
            left1 = left2 - (upper[1, 1] * v1 + upper[1, 2] * v2) ** 2
            if left1 < 0:
                continue
            middle0 = centre[0] - (upper[0, 1] * v1 + upper[0, 2] * v2) / upper[0, 0]
            found += [(h0, h1, h2) for h0 in _whole(middle0, np.sqrt(left1) / abs(upper[0, 0]))]
    return np.array(found, dtype=int).reshape(-1, 3)


def _whole(centre: float, half_width: float) -> range:
    return range(int(np.ceil(centre - half_width - 1e-9)), int(np.floor(centre + half_width + 1e-9)) + 1)
