"""Which arrangements of moments are the same by symmetry: space-group operations, translations and reversal.

An operation (R, t) carries the moment m at x to R x + t and turns it as an axial vector, det(R) R m; time reversal
turns it round. Moments run over the cells of a supercell, sites inside a cell fastest (see `physics.supercell`).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy import fft

from latticedip.checks import FloatArray, frozen
from latticedip.crystal.model import Crystal
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import InputError

#: Distance (Å) within which an operation must carry a site onto a site; readers merge images up to 0.02 Å.
SITE_TOLERANCE_A = 0.05
#: Two arrangements are the same when their moments differ by less than this part (rms).
SAME_MOMENTS = 1e-4
#: Relative size that a change of a tensor, a field or an axis may have and still count as none.
SAME_VECTOR = 1e-6


@dataclass(frozen=True, eq=False)
class SiteOperations:
    """Operations of a crystal as they act on some of its sites.

    rotations: Shape (n_ops, 3, 3) int, on fractional coordinates. translations: Shape (n_ops, 3) float.
    axial: Shape (n_ops, 3, 3) float. det(R) R in Cartesian coordinates.
    targets: Shape (n_ops, n) int. Place, in the list of sites, of the site that the image lies on.
    shifts: Shape (n_ops, n, 3) int. The lattice vector from that site to the image.
    """

    rotations: np.ndarray
    translations: FloatArray
    axial: FloatArray
    targets: np.ndarray
    shifts: np.ndarray

    def __len__(self) -> int:
        return len(self.rotations)

    def chosen(self, which: np.ndarray) -> SiteOperations:
        """Some of the operations, by a mask or by indices."""
        return SiteOperations(
            self.rotations[which], self.translations[which], self.axial[which], self.targets[which], self.shifts[which]
        )


def site_operations(crystal: Crystal, sites: tuple[int, ...], sizes: FloatArray) -> SiteOperations:
    """The operations of a crystal that carry the given sites onto one another, each onto one of the same size.

    sizes: Shape (n,) float; what must agree between a site and its image (moment times occupancy).

    Raises InputError where a stated operation carries a site onto no site of the crystal.
    """
    operations = operations_of(crystal)
    positions = crystal.positions[list(sites)]
    kept, targets, shifts = [], [], []
    for number, (rotation, translation) in enumerate(zip(operations.rotations, operations.translations, strict=True)):
        images = positions @ rotation.T + translation
        gaps = images[:, None] - positions[None]
        whole = np.round(gaps)
        distances = np.linalg.norm((gaps - whole) @ crystal.cell, axis=-1)
        nearest = np.argmin(distances, axis=1)
        rows = np.arange(len(sites))
        far = distances[rows, nearest] > SITE_TOLERANCE_A
        if np.any(far):
            _refuse_foreign(crystal, images[far][0], sites[int(np.flatnonzero(far)[0])])
            continue
        if np.allclose(sizes[nearest], sizes, rtol=1e-9, atol=0.0) and len(np.unique(nearest)) == len(sites):
            kept.append(number)
            targets.append(nearest)
            shifts.append(whole[rows, nearest].astype(np.int64))
    rotations = operations.rotations[kept]
    turn = crystal.cell.T @ rotations @ np.linalg.inv(crystal.cell.T)
    # The nearest orthogonal matrix: a cell agrees with its symmetry only to the digits of its file.
    left, _, right = np.linalg.svd(turn)
    proper = left @ right
    axial = np.round(np.linalg.det(proper))[:, None, None] * proper
    return SiteOperations(rotations, operations.translations[kept], axial, np.array(targets), np.array(shifts))


def _refuse_foreign(crystal: Crystal, image: FloatArray, site: int) -> None:
    gaps = crystal.positions - image
    nearest = np.linalg.norm((gaps - np.round(gaps)) @ crystal.cell, axis=1).min()
    if nearest > SITE_TOLERANCE_A:
        raise InputError(
            f"a symmetry operation of the crystal maps atom {site + 1} ({crystal.labels[site]}) onto no atom: the "
            "operations stated are not those of this crystal."
        )


@dataclass(frozen=True, eq=False)
class SupercellSymmetry:
    """Operations that map the moments of a supercell onto one another, with its translations and time reversal.

    repeat: three whole numbers, the cells in the supercell.
    operations: those that keep the lattice of the supercell and, where given, a tensor and a field.
    signs: Shape (n_ops, 2) bool. Whether each may be taken without, and with, time reversal.
    """

    repeat: tuple[int, int, int]
    operations: SiteOperations
    signs: np.ndarray

    @classmethod
    def of(
        cls,
        crystal: Crystal,
        repeat: tuple[int, int, int],
        sites: tuple[int, ...],
        sizes: FloatArray,
        *,
        tensor: FloatArray | None = None,
        field: FloatArray | None = None,
    ) -> SupercellSymmetry:
        """Find the operations.

        tensor: Shape (3, 3) Cartesian; operations that change it are left out (the shape of a sample).
        field: Shape (3,) Cartesian, an applied field: axial, and turned round by time reversal.
        """
        found = site_operations(crystal, sites, sizes)
        counts = np.array(repeat)
        scaled = found.rotations * counts[None, None, :] / counts[None, :, None]
        keeps: np.ndarray = np.asarray(np.all(scaled == np.round(scaled), axis=(1, 2)))
        if tensor is not None:
            turned = found.axial @ tensor @ found.axial.transpose(0, 2, 1)
            slack = SAME_VECTOR * max(1.0, float(np.abs(tensor).max()))
            keeps = np.asarray(keeps & (np.abs(turned - tensor).max(axis=(1, 2)) <= slack))
        found = found.chosen(keeps)
        signs = np.ones((len(found), 2), dtype=bool)
        if field is not None and np.any(field):
            turned = found.axial @ field
            size = SAME_VECTOR * float(np.linalg.norm(field))
            signs = np.stack([np.linalg.norm(turned - s * field, axis=1) <= size for s in (1, -1)], axis=1)
            allowed = np.asarray(signs.any(axis=1))
            found, signs = found.chosen(allowed), signs[allowed]
        return cls(repeat, found, signs)

    @cached_property
    def n_cells(self) -> int:
        """Cells in the supercell."""
        return int(np.prod(self.repeat))

    @cached_property
    def cells(self) -> np.ndarray:
        """Shape (n_cells, 3) int. The cells in order, the last index fastest."""
        return frozen(np.stack(np.unravel_index(np.arange(self.n_cells), self.repeat), axis=-1).astype(np.int64))

    def moved(self, operation: int) -> np.ndarray:
        """Shape (n_moments,) int. Where an operation carries every moment."""
        found = self.operations
        cells = self.cells @ found.rotations[operation].T
        images = (cells[:, None] + found.shifts[operation][None]) % np.array(self.repeat)
        places = np.ravel_multi_index(tuple(np.moveaxis(images, -1, 0)), self.repeat)
        return np.asarray((places * found.targets.shape[1] + found.targets[operation][None]).ravel())

    def image(self, moments: FloatArray, operation: int) -> FloatArray:
        """Shape (n_moments, 3) float. The arrangement that an operation makes of another one."""
        out = np.empty_like(moments)
        out[self.moved(operation)] = moments @ self.operations.axial[operation].T
        return out

    def signed_permutations(self, axes: FloatArray | None) -> tuple[np.ndarray, np.ndarray]:
        """How operations act on sign patterns: (inverse, factors), shapes (n, n_moments) int64 and int8.

        The image of a pattern s has factors[g, p] s[inverse[g, p]] at p.
        axes: Shape (n_moments, 3) unit vectors of the moments; operations that turn one out of its line are left out.
            None: the axis is common and follows the operation, so that a pattern and its reverse are the same.
        Every distinct action is listed once, the identity left out.
        """
        n_sites = self.operations.targets.shape[1]
        n = self.n_cells * n_sites
        found = []
        for operation in range(len(self.operations)):
            moved = self.moved(operation)
            if axes is None:
                factor = np.ones(n, dtype=np.int8)
                allowed: tuple[int, ...] = (1, -1)
            else:
                along = np.einsum("pa,pa->p", axes[moved], axes @ self.operations.axial[operation].T)
                if np.any(np.abs(np.abs(along) - 1) > SAME_VECTOR):
                    continue
                factor = np.where(along > 0, 1, -1).astype(np.int8)
                allowed = tuple(s for s, may in zip((1, -1), self.signs[operation], strict=True) if may)
            for cell in self.cells:
                steps = np.ravel_multi_index(tuple(((self.cells + cell) % np.array(self.repeat)).T), self.repeat)
                target = steps[moved // n_sites] * n_sites + moved % n_sites
                inverse = np.empty(n, dtype=np.int64)
                inverse[target] = np.arange(n)
                for sign in allowed:
                    found.append(np.concatenate([inverse, sign * factor[inverse].astype(np.int64)]))
        distinct = np.unique(np.array(found, dtype=np.int64).reshape(-1, 2 * n), axis=0)
        same = np.concatenate([np.arange(n), np.ones(n, dtype=np.int64)])
        distinct = distinct[np.any(distinct != same, axis=1)]
        return np.ascontiguousarray(distinct[:, :n]), np.ascontiguousarray(distinct[:, n:].astype(np.int8))

    def keeping_axes(self, axes: FloatArray) -> SupercellSymmetry:
        """The operations that turn no moment out of its line; axes: Shape (n_moments, 3) unit vectors."""
        keeps = [
            bool(np.all(np.abs(np.abs(np.einsum("pa,pa->p", axes[self.moved(i)], axes @ turn.T)) - 1) <= SAME_VECTOR))
            for i, turn in enumerate(self.operations.axial)
        ]
        return SupercellSymmetry(self.repeat, self.operations.chosen(np.array(keeps)), self.signs[np.array(keeps)])

    def of_signs(self) -> SupercellSymmetry:
        """The operations as they act on signs whose axis follows: nothing is turned, all signs may be."""
        unturned = replace(self.operations, axial=np.tile(np.eye(3), (len(self.operations), 1, 1)))
        return SupercellSymmetry(self.repeat, unturned, np.ones_like(self.signs))

    def _overlaps(self, first: FloatArray, second: FloatArray) -> FloatArray:
        """Shape (n_ops, n_cells). Σ m'·m of an image of ``first``, moved on by every cell, with ``second``."""
        n = self.operations.targets.shape[1]
        shape = (*self.repeat, n, 3)
        fixed = fft.rfftn(second.reshape(shape), axes=(0, 1, 2))
        out = np.empty((len(self.operations), self.n_cells))
        for operation in range(len(self.operations)):
            turned = fft.rfftn(self.image(first, operation).reshape(shape), axes=(0, 1, 2))
            product = np.einsum("xyzia,xyzia->xyz", turned.conj(), fixed)
            out[operation] = fft.irfftn(product, s=self.repeat, axes=(0, 1, 2)).ravel()
        return out

    def are_same(self, first: FloatArray, second: FloatArray) -> bool:
        """True where an operation carries one arrangement (n_moments, 3) into the other."""
        size = 0.5 * (float(np.vdot(first, first)) + float(np.vdot(second, second)))
        overlaps = self._overlaps(first, second)
        best = max(overlaps[self.signs[:, 0]].max(initial=-np.inf), (-overlaps[self.signs[:, 1]]).max(initial=-np.inf))
        return bool(best >= size * (1 - 0.5 * SAME_MOMENTS**2))

    def orbit_size(self, moments: FloatArray) -> int:
        """Number of different arrangements (n_moments, 3) that the operations make of one, itself included."""
        bar = float(np.vdot(moments, moments)) * (1 - 0.5 * SAME_MOMENTS**2)
        overlaps = self._overlaps(moments, moments)
        fixing = np.sum(overlaps[self.signs[:, 0]] >= bar) + np.sum(-overlaps[self.signs[:, 1]] >= bar)
        return round(float(self.signs.sum()) * self.n_cells / float(fixing))


def pattern_orbit(signs: np.ndarray, inverse: np.ndarray, factors: np.ndarray) -> int:
    """Number of different sign patterns that signed permutations make of one, itself included."""
    images = factors * signs[inverse] if len(inverse) else np.zeros((0, len(signs)), dtype=signs.dtype)
    return len(np.unique(np.concatenate([signs[None], images]), axis=0))
