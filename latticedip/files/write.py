"""Orderings out: magCIF (in P 1, or in superspace) and extended XYZ, with 17 digits, so that they can be read again."""

from __future__ import annotations

import itertools
import os
import re
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.errors import FileError
from latticedip.files.ciftext import atom_lines, block_name, cell_lines, digits, loop, moment_lines, parent_lines
from latticedip.files.write_modulated import modulated_text
from latticedip.ordering.model import K_SNAP, Ordering, ParentTransform, is_self_conjugate

#: An ordering whose k repeats only beyond this many cells along an axis counts as incommensurate.
MAX_PERIOD = 64
#: Larger magnetic cells (atoms) are not written.
MAX_ATOMS = 20_000

MCIF_SUFFIXES = (".mcif", ".cif")
XYZ_SUFFIXES = (".xyz", ".extxyz")


@dataclass(frozen=True, eq=False)
class _MagneticCell:
    """An ordering in a cell that holds whole waves: every array runs over its atoms.

    cell: Shape (3, 3) Å. positions, position_su: Shape (n, 3) fractional. moments_cart, moment_su: Shape (n, 3) µB.
    """

    cell: FloatArray
    positions: FloatArray
    symbols: tuple[str, ...]
    labels: tuple[str, ...]
    occupancies: FloatArray
    position_su: FloatArray
    moments_cart: FloatArray
    moment_su: FloatArray
    magnetic: np.ndarray
    parent: ParentTransform | None


def write_ordering(
    ordering: Ordering, path: str | os.PathLike[str], *, overwrite: bool = False, superspace: bool | None = None
) -> None:
    """Write an ordering as magCIF (.mcif, .cif) or extended XYZ (.xyz, .extxyz).

    A commensurate k other than 0 is written in the supercell that holds whole waves; in a magCIF one wave of any k,
    with its harmonics and a part at k = 0, can also be written in its own cell as a modulation in (3+1)D superspace.
    The magCIF lists all atoms in P 1 with crystal-axis components in µB, standard uncertainties and the change of cell
    from the parent where they are known; it fixes lengths and angles, so that a turned cell comes back in the standard
    orientation. Uncertainties of the amplitudes of a wave are kept in superspace alone, of each number by itself; a
    comment in the file says what is lost. The extended XYZ keeps the cell vectors, labels, occupancies and Cartesian
    moments, but no uncertainties.

    path: its suffix chooses the format. overwrite: whether an existing file is replaced. The file appears whole
    or not at all. superspace: None writes a magCIF in superspace where there is no supercell of allowed size.

    Raises FileError where the suffix is unknown, the file exists (unless overwrite), there is no supercell of allowed
    size and no superspace description in (3+1)D, or the format cannot hold the ordering.
    """
    name = os.fspath(path)
    suffix = Path(name).suffix.lower()
    if suffix in MCIF_SUFFIXES:
        _refuse_as_cif(ordering.crystal, name)
        modulated = not _fits_supercell(ordering) if superspace is None else superspace
        text = modulated_text(ordering, name) if modulated else _as_mcif(ordering, name)
    elif superspace:
        raise FileError(f"{name}: only a magCIF ({', '.join(MCIF_SUFFIXES)}) can hold a modulation in superspace.")
    elif suffix in XYZ_SUFFIXES:
        text = _as_xyz(ordering, name)
    else:
        raise FileError(f"{name}: the suffix must be one of {', '.join(MCIF_SUFFIXES + XYZ_SUFFIXES)}.")
    _save(text, name, overwrite)


def _save(text: str, name: str, overwrite: bool) -> None:
    """Write under a temporary name beside the target, then rename."""
    if os.path.exists(name) and not overwrite:
        raise FileError(f"{name}: the file exists. Choose another name, or overwrite it with overwrite=True.")
    temporary = f"{name}.part{os.getpid()}"
    try:
        with open(temporary, "x", encoding="utf-8") as stream:
            stream.write(text)
        os.replace(temporary, name)
    except OSError as error:
        if os.path.exists(temporary):
            os.unlink(temporary)
        raise FileError(f"{name}: the file cannot be written ({error.strerror}).") from None


def _magnetic_cell(ordering: Ordering, name: str) -> _MagneticCell:
    """The ordering in the smallest multiple of its cell in which every k is a reciprocal lattice vector."""
    crystal = ordering.crystal
    counts = _periods(ordering.k)
    if isinstance(counts, np.ndarray):
        raise FileError(
            f"{name}: k = ({', '.join(f'{x:.6g}' for x in counts)}) repeats in no supercell of up to {MAX_PERIOD} "
            "cells along an axis. Write it as .mcif, in superspace, or take a commensurate k nearby."
        )
    cells = list(itertools.product(*(range(n) for n in counts)))
    if len(cells) * crystal.n_sites > MAX_ATOMS:
        raise FileError(
            f"{name}: the magnetic cell of {' × '.join(map(str, counts))} cells would hold "
            f"{len(cells) * crystal.n_sites} atoms; at most {MAX_ATOMS} are written."
        )
    lattice = np.array(cells, dtype=float)
    scale = np.array(counts, dtype=float)
    positions = ((crystal.positions[None] + lattice[:, None]) / scale).reshape(-1, 3)
    # Away from zone-boundary k a moment mixes two amplitudes, whose uncertainties are not those of the moment.
    su = _moment_su(ordering) if _keeps_su(ordering) else np.full((crystal.n_sites, 3), np.nan)
    parent = ordering.parent
    return _MagneticCell(
        crystal.cell * scale[:, None],
        positions,
        crystal.symbols * len(cells),
        crystal.labels * len(cells),
        np.tile(crystal.occupancies, len(cells)),
        np.tile(crystal.position_su / scale, (len(cells), 1)),
        ordering.moments(cells).reshape(-1, 3),
        np.tile(su, (len(cells), 1)),
        np.tile(ordering.is_magnetic, len(cells)),
        None if parent is None else ParentTransform(np.asarray(parent.P) * scale, parent.p),
    )


def _keeps_su(ordering: Ordering) -> bool:
    """True where every moment is an amplitude, up to its sign."""
    return len(ordering.k) == 1 and bool(is_self_conjugate(ordering.k)[0])


def _moment_su(ordering: Ordering) -> FloatArray:
    """Shape (n_sites, 3) float in µB. Of the crystal-axis components of single moments, at one k."""
    to_axes = np.linalg.inv(ordering.crystal.axes_unit)
    covariance = np.einsum("ba,nbc,cd->nad", to_axes, ordering.moments_covariance()[0], to_axes)
    su = np.sqrt(np.maximum(0.0, np.einsum("naa->na", covariance)))
    # What is nothing beside the others is exact.
    su[su <= 1e-9 * np.nanmax(su, axis=1, keepdims=True, initial=0.0)] = np.nan
    return np.where(np.isnan(covariance[:, 0, 0])[:, None], ordering.moment_su, su)


def _fits_supercell(ordering: Ordering) -> bool:
    """True where a supercell that may be written holds whole waves."""
    counts = _periods(ordering.k)
    return not isinstance(counts, np.ndarray) and int(np.prod(counts)) * ordering.crystal.n_sites <= MAX_ATOMS


def _periods(k: FloatArray) -> list[int] | FloatArray:
    """Cells along each axis that hold whole waves, or the first k (3,) that repeats in no supercell."""
    counts = [1, 1, 1]
    for vector in k:
        for axis, value in enumerate(vector):
            nearest = Fraction(float(value)).limit_denominator(MAX_PERIOD)
            if abs(float(nearest) - value) > K_SNAP:
                return np.asarray(vector)
            counts[axis] = int(np.lcm(counts[axis], nearest.denominator))
    return counts


def _refuse_as_cif(crystal: Crystal, name: str) -> None:
    if not all(crystal.pbc):
        raise FileError(f"{name}: a CIF repeats in three directions, this crystal does not. Write it as .xyz.")
    if np.linalg.det(crystal.cell) < 0:
        raise FileError(
            f"{name}: the cell vectors are left-handed, which a CIF cannot say. Write it as .xyz, "
            "or exchange two cell vectors."
        )


def _as_mcif(ordering: Ordering, name: str) -> str:
    magnetic = _magnetic_cell(ordering, name)
    axes = magnetic.cell / np.linalg.norm(magnetic.cell, axis=1)[:, None]
    components = magnetic.moments_cart @ np.linalg.inv(axes)
    lines = ["# Magnetic structure in P 1, written by latticedip"]
    if ordering.amplitude_su and not _keeps_su(ordering):
        lines += ["# Standard uncertainties of amplitudes are not written: a moment here mixes several amplitudes."]
    lines += [f"data_{block_name(ordering.name)}"]
    lines += cell_lines(magnetic.cell)
    lines += ["_space_group_magn.number_BNS '1.1'", "_space_group_magn.name_BNS 'P1'"]
    lines += parent_lines(magnetic.parent)
    lines += loop(
        ["_space_group_symop_magn_operation.id", "_space_group_symop_magn_operation.xyz"], [["1", "x,y,z,+1"]]
    )
    atoms, names = atom_lines(
        magnetic.labels, magnetic.symbols, magnetic.positions, magnetic.occupancies, magnetic.position_su, name
    )
    shown = np.flatnonzero(magnetic.magnetic | (not magnetic.magnetic.any()))
    lines += [*atoms, *moment_lines([names[i] for i in shown], components[shown], magnetic.moment_su[shown])]
    return "\n".join(lines) + "\n"


def _as_xyz(ordering: Ordering, name: str) -> str:
    magnetic = _magnetic_cell(ordering, name)
    for label in magnetic.labels:
        if not re.fullmatch(r"\S+", label):
            raise FileError(
                f"{name}: the label {label!r} is empty or holds a blank, which extended XYZ cannot keep. "
                "Write it as .mcif."
            )
    lattice = " ".join(digits(value) for value in magnetic.cell.ravel())
    pbc = " ".join("T" if periodic else "F" for periodic in ordering.crystal.pbc)
    positions = magnetic.positions @ magnetic.cell
    rows = [
        " ".join(
            [
                magnetic.symbols[i],
                *map(digits, positions[i]),
                *map(digits, magnetic.moments_cart[i]),
                magnetic.labels[i],
                digits(magnetic.occupancies[i]),
            ]
        )
        for i in range(len(magnetic.symbols))
    ]
    head = (
        f'Lattice="{lattice}" Properties=species:S:1:pos:R:3:initial_magmoms:R:3:labels:S:1:occupancies:R:1 pbc="{pbc}"'
    )
    return "\n".join([str(len(rows)), head, *rows]) + "\n"
