"""Moments of a supercell: couplings by translational symmetry, and the way to Fourier components and back.

Words used here, beside those of the model:

repeat       whole numbers (n₁, n₂, n₃): the supercell has the vectors n_i a_i
cells        the n₁n₂n₃ cells of the crystal in it, the last index fastest
moment       one magnetic site in one cell; moments run over cells, sites inside a cell fastest

The tensor between two moments depends on the difference of their cells only, so a table of n_cells × n_sites² tensors
holds them all: T_ij(d) = Σ_R T(τ_i + d − τ_j − R) over the supercell lattice R.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from scipy import fft

from latticedip.checks import ComplexArray, FloatArray, frozen
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError, LimitError
from latticedip.ordering.model import Ordering, is_self_conjugate, snap_k
from latticedip.physics.coupling import refuse_split_ions, require_bulk
from latticedip.sample import Sample
from latticedip.sums.bulk import lattice_sum
from latticedip.units import EV_PER_MUB_T, MU0_T_A3_PER_MUB

#: Most moments in one supercell.
MAX_MOMENTS = 10_000
#: Largest table of tensors, in bytes.
MAX_TABLE_BYTES = 5 * 2**30
#: Elements of a symmetric tensor in the order xx, yy, zz, yz, xz, xy.
ROWS, COLUMNS = np.array([0, 1, 2, 1, 0, 0]), np.array([0, 1, 2, 2, 2, 1])
#: Tensors summed in one go.
BLOCK = 200_000
#: A Fourier component below this part of the largest counts as zero.
VANISHING = 1e-12


def check_repeat(repeat: Any) -> tuple[int, int, int]:
    """Return the supercell as three whole numbers; raises InputError when they are not, or below 1."""
    try:
        counts = tuple(int(n) for n in repeat)
        good = len(counts) == 3 and all(n >= 1 and n == r for n, r in zip(counts, repeat, strict=True))
    except (TypeError, ValueError):
        good = False
    if not good:
        raise InputError(f"supercell must be three whole numbers of at least 1, got {repeat!r}.")
    return counts[0], counts[1], counts[2]


@dataclass(frozen=True, eq=False)
class Supercell:
    """The magnetic sites of n₁ × n₂ × n₃ cells of a crystal.

    crystal: the Crystal, periodic in three directions. repeat: three whole numbers.
    sites: indices of the magnetic sites in the crystal, ascending.

    Raises InputError for a crystal that is not periodic in three directions, or without sites; LimitError for more
    than 10,000 moments.
    """

    crystal: Crystal
    repeat: tuple[int, int, int]
    sites: tuple[int, ...]

    def __post_init__(self) -> None:
        require_bulk(self.crystal)
        if not self.sites:
            raise InputError("no site of the crystal carries a moment; give a size for at least one label or element.")
        if self.n_moments > MAX_MOMENTS:
            raise LimitError(
                f"a supercell of {' × '.join(map(str, self.repeat))} cells holds {self.n_moments:,} moments, more than "
                f"{MAX_MOMENTS:,}. Take a smaller supercell."
            )
        refuse_split_ions(self.crystal, np.array(self.sites))
        refuse_split_ions(self.crystal, np.array(self.sites))

    @property
    def n_cells(self) -> int:
        """Cells of the crystal in the supercell."""
        return int(np.prod([int(n) for n in self.repeat]))

    @property
    def n_moments(self) -> int:
        """Magnetic sites in the supercell."""
        return self.n_cells * len(self.sites)

    @cached_property
    def cells(self) -> np.ndarray:
        """Shape (n_cells, 3) int. The cells in order, the last index fastest."""
        return frozen(np.stack(np.unravel_index(np.arange(self.n_cells), self.repeat), axis=-1).astype(np.int64))

    @cached_property
    def cell(self) -> FloatArray:
        """Shape (3, 3) float in Å. Vectors of the supercell, in rows."""
        return frozen(np.array(self.repeat)[:, None] * self.crystal.cell)

    @cached_property
    def volume_A3(self) -> float:
        """Volume of the supercell in Å³."""
        return self.n_cells * self.crystal.volume_A3

    @cached_property
    def occupancies(self) -> FloatArray:
        """Shape (n_moments,) float. Occupancy of the site of every moment."""
        return frozen(np.tile(self.crystal.occupancies[list(self.sites)], self.n_cells))

    def tensors(self, sample: Sample | None = None, tol: float = 1e-10) -> FloatArray:
        """Shape (n_cells, n, n, 6) float in T/µB. [d, i, j]: field at site i, d cells on, of site j; N = 0 and shape.

        Elements in the order xx, yy, zz, yz, xz, xy. The demagnetizing field −µ0 N/V of each moment is part of it
        where a sample is given. Its own images act on a moment, itself does not (shape apart).

        Raises LimitError for a table beyond 5 GiB, and what a lattice sum raises.
        """
        n = len(self.sites)
        if 48 * self.n_cells * n * n > MAX_TABLE_BYTES:
            raise LimitError(
                f"{n} magnetic sites in {self.n_cells} cells need a table of tensors larger than "
                f"{MAX_TABLE_BYTES // 2**30} GiB. Take a primitive cell or a smaller supercell."
            )
        plan = lattice_sum(self.cell, (0.0, 0.0, 0.0), tol)
        home = self.crystal.places_cart[list(self.sites)]
        targets = (home[None] + (self.cells @ self.crystal.cell)[:, None]).reshape(-1, 3)
        sources = plan.place(home)
        out = np.empty((self.n_cells * n, n, 6))
        step = max(1, BLOCK // n)
        for start in range(0, len(targets), step):
            block = plan.tensors(plan.place(targets[start : start + step]), sources)
            out[start : start + step] = block[..., ROWS, COLUMNS]
        if sample is not None:
            out -= MU0_T_A3_PER_MUB / self.volume_A3 * sample.demagnetizing_tensor[ROWS, COLUMNS]
        return out.reshape(self.n_cells, n, n, 6)

    def differences(self) -> np.ndarray:
        """Shape (n_cells, n_cells) int. Place in the table of the difference of two cells; for small supercells."""
        gaps = (self.cells[:, None] - self.cells[None]) % np.array(self.repeat)
        return np.asarray(np.ravel_multi_index(tuple(np.moveaxis(gaps, -1, 0)), self.repeat))

    def waves(self) -> FloatArray:
        """Shape (n_k, 3) float in [0, 1). The k that the supercell allows, one of each pair ±k."""
        numbers = self.cells
        opposite = (-numbers) % np.array(self.repeat)
        here = np.ravel_multi_index(tuple(numbers.T), self.repeat)
        there = np.ravel_multi_index(tuple(opposite.T), self.repeat)
        return np.asarray((numbers / np.array(self.repeat))[here <= there])

    def ordering(self, moments: FloatArray, name: str = "", notes: Sequence[str] = ()) -> Ordering:
        """The Ordering, on the crystal's own cell, of moments (n_moments, 3) in µB: components at commensurate k."""
        n = len(self.sites)
        grid = moments.reshape(*self.repeat, n, 3)
        # m(R) = Σ_q M(q) exp(−2πi q·R): the inverse transform with the sign of its exponent as scipy has it forward.
        spectrum = fft.ifftn(grid, axes=(0, 1, 2)).reshape(self.n_cells, n, 3)
        waves = snap_k(self.waves())
        places = np.ravel_multi_index(
            tuple(np.round(waves * np.array(self.repeat)).astype(np.int64).T % np.array(self.repeat)[:, None]),
            self.repeat,
        )
        parts = spectrum[places]
        own = is_self_conjugate(waves)
        parts[own] = parts[own].real
        parts[~own] *= 2
        size = np.abs(parts).max(axis=(1, 2))
        kept = np.flatnonzero(size > VANISHING * size.max())
        # Rounding in the transform must not turn a site without moment, or a real direction, into a small one.
        parts = parts[kept]
        floor = VANISHING * size.max()
        parts.real[np.abs(parts.real) < floor] = 0.0
        parts.imag[np.abs(parts.imag) < floor] = 0.0
        components = np.zeros((len(kept), self.crystal.n_sites, 3), dtype=complex)
        components[:, list(self.sites)] = parts
        # The wave of least length stands for k: (¾, 0, 0) reads −¼.
        centred = waves[kept] - np.ceil(waves[kept] - 0.5)
        return Ordering(self.crystal, components, centred, name, notes=tuple(notes))


@dataclass(frozen=True, eq=False)
class SupercellField:
    """Fields and energies of all moments of a supercell, one product in Fourier space each.

    supercell: the Supercell. tensors: its table, shape included. applied_T: Shape (3,).
    """

    supercell: Supercell
    tensors: FloatArray
    applied_T: FloatArray

    @cached_property
    def _spectrum(self) -> ComplexArray:
        n = len(self.supercell.sites)
        return fft.rfftn(self.tensors.reshape(*self.supercell.repeat, n, n, 6), axes=(0, 1, 2))

    def fields(self, moments: FloatArray) -> FloatArray:
        """Shape (n_moments, 3) float in T. Field of all moments at each, demagnetizing field included, applied not.

        moments: Shape (n_moments, 3) in µB; occupancy is applied here.
        """
        n = len(self.supercell.sites)
        mean = moments * self.supercell.occupancies[:, None]
        if self.supercell.n_cells == 1:
            return _apply(self.tensors[0], mean)
        shape = self.supercell.repeat
        spectrum = fft.rfftn(mean.reshape(*shape, n, 3), axes=(0, 1, 2))
        t = self._spectrum
        out = np.empty(spectrum.shape, dtype=complex)
        for a, columns in enumerate(((0, 5, 4), (5, 1, 3), (4, 3, 2))):
            out[..., a] = sum(np.matmul(t[..., c], spectrum[..., b, None])[..., 0] for b, c in enumerate(columns))
        return np.asarray(fft.irfftn(out, s=shape, axes=(0, 1, 2)).reshape(-1, 3))

    def energy_eV(self, moments: FloatArray) -> float:
        """Energy of the supercell in eV: −½ Σ m·B − M·B_applied."""
        mean = moments * self.supercell.occupancies[:, None]
        return float(EV_PER_MUB_T * (-0.5 * np.vdot(mean, self.fields(moments)) - mean.sum(axis=0) @ self.applied_T))


def _apply(tensors: FloatArray, moments: FloatArray) -> FloatArray:
    """Shape (n, 3). Σ_j T_ij m_j of symmetric tensors (n, n, 6)."""
    x, y, z = moments.T
    t = np.moveaxis(tensors, -1, 0)
    return np.stack([t[0] @ x + t[5] @ y + t[4] @ z, t[5] @ x + t[1] @ y + t[3] @ z, t[4] @ x + t[3] @ y + t[2] @ z], 1)
