"""The moments a magCIF lists, in any of its three coordinate systems, as crystal-axis components in µB.

Components along unit vectors parallel to a, b, c (crystalaxis) are what the rest of the reader works with;
Cartesian axes are x along a, z along c*, y completing the right-handed set, which is also the frame of `read_cell`;
spherical angles are the polar angle from +z and the azimuth from +x towards +y (IUCr magnetic dictionary).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import InputError, near_match
from latticedip.files.cifsyntax import Block, Column, parse_number
from latticedip.files.symop import parse_vector

#: Each system with its three components and the column that may hold all three as one list.
SYSTEMS = {
    "crystalaxis": (("crystalaxis_x", "crystalaxis_y", "crystalaxis_z"), "crystalaxis"),
    "Cartn": (("Cartn_x", "Cartn_y", "Cartn_z"), "Cartn"),
    "spherical": (("spherical_modulus", "spherical_polar", "spherical_azimuthal"), None),
}
#: A stated magnitude, or a second system, may differ from the components by this much (µB) or fraction.
AGREE_MUB, AGREE_FRACTION = 0.05, 0.02
#: Larger numbers (µB, degrees) are slips.
LARGEST = 1e6


@dataclass(frozen=True, eq=False)
class SiteMoment:
    """The moment of one listed site.

    crystal_axes: Shape (3,) float in µB. su: Shape (3,) float in µB, NaN where the file states none.
    """

    crystal_axes: FloatArray
    su: FloatArray


def has_moments(block: Block) -> bool:
    """True where the block holds an item of any of the three coordinate systems."""
    return any(_columns(block, system) for system in SYSTEMS)


def read_moments(block: Block, cell: FloatArray, labels: list[str]) -> dict[str, SiteMoment]:
    """Moments by site label; rows whose components are all ``.`` carry none.

    Raises FileError for a label without a site or listed twice, incomplete or non-numeric components, unknown
    values (``?``), and components that contradict a stated magnitude or a second coordinate system.
    """
    axes = cell / np.linalg.norm(cell, axis=1)[:, None]
    moments: dict[str, SiteMoment] = {}
    for system in SYSTEMS:
        columns = _columns(block, system)
        if not columns:
            continue
        label_column = block.sibling(columns[0], "_atom_site_moment_label") or block.sibling(
            columns[0], "_atom_site_label"
        )
        if label_column is None:
            raise block.error(f"{columns[0].tag} stands in a loop without labels (_atom_site_moment.label).")
        seen: set[str] = set()
        for row in range(len(label_column.values)):
            label = label_column.text(row)
            if not label:
                raise block.error(
                    f"{label_column.tag} is {label_column.values[row]!r} in row {row + 1}; every moment needs a label."
                )
            values = _components(block, system, columns, row, label)
            if values is None:
                continue
            if label not in labels:
                raise block.error(
                    f"{label_column.tag} {label!r} is the label of no atom. Known are: {', '.join(labels)}."
                    + near_match(label, labels)
                )
            if label in seen:
                raise block.error(f"{label_column.tag} {label!r} stands in two rows. One moment per site is needed.")
            seen.add(label)
            moment = _to_crystal_axes(block, system, values, axes, label)
            _compare_magnitude(block, columns[0], row, label, moment, axes)
            known = moments.setdefault(label, moment)
            _compare_systems(block, label, known, moment, axes)
    return moments


def _columns(block: Block, system: str) -> list[Column]:
    """The three component columns of a system, or the one column of lists; nothing where it has none."""
    names, together = SYSTEMS[system]
    found = [block.column(f"_atom_site_moment_{name}") for name in names]
    present = [column for column in found if column is not None]
    if present and len(present) < 3:
        missing = next(name for name, column in zip(names, found, strict=True) if column is None)
        raise block.error(f"_atom_site_moment.{missing} is missing beside {present[0].tag}.")
    if any(column.loop != present[0].loop for column in present):
        raise block.error(f"{present[0].tag} and its sister components stand in different loops.")
    if not present and together is not None:
        single = block.column(f"_atom_site_moment_{together}")
        present = [single] if single is not None else []
    return present


def _components(
    block: Block, system: str, columns: list[Column], row: int, label: str
) -> tuple[FloatArray, FloatArray] | None:
    """The three numbers of a row and their standard uncertainties, or None where every one is ``.``."""
    texts = [column.text(row) for column in columns]
    if not any(texts):
        if any(column.is_unknown(row) for column in columns):
            raise block.error(
                f"the moment of {label} is stated as unknown ({columns[0].tag} ?). Give its components, or . for none."
            )
        return None
    if len(columns) == 1:
        return _from_list(block, columns[0], row, label)
    values, su = np.zeros(3), np.full(3, np.nan)
    for i, column in enumerate(columns):
        if texts[i] is None and system == "spherical" and i > 0 and values[0] == 0.0:
            continue  # a moment of size zero has no direction
        if texts[i] is None:
            raise block.error(
                f"{column.tag} of {label} is {column.values[row]!r} although its other components are given."
            )
        values[i], su[i] = block.number(column, row)
        separate = block.sibling(column, f"{column.tag}_su")
        if separate is not None and separate.text(row) is not None:
            su[i] = block.number(separate, row)[0]
    return values, su


def _from_list(block: Block, column: Column, row: int, label: str) -> tuple[FloatArray, FloatArray]:
    """Components given as one CIF 2 list such as ``[0 0 3.2(1)]``."""
    parts = (column.text(row) or "").strip("[]").replace(",", " ").split()
    parsed = [parse_number(part) for part in parts]
    numbers = [number for number in parsed if number is not None]
    if len(parts) != 3 or len(numbers) != 3:
        raise block.error(f"{column.tag} of {label} is {column.text(row)!r}, not a list of three numbers.")
    values, su = np.array([n[0] for n in numbers]), np.array([n[1] for n in numbers])
    separate = block.sibling(column, f"{column.tag}_su")
    if separate is not None and separate.text(row) is not None:
        try:
            su = parse_vector(separate.text(row) or "")
        except InputError as error:
            raise block.error(
                f"{separate.tag} of {label} is {separate.text(row)!r}, which is not understood: {error}."
            ) from None
    return values, su


def _to_crystal_axes(
    block: Block, system: str, values: tuple[FloatArray, FloatArray], axes: FloatArray, label: str
) -> SiteMoment:
    """Components of one system as crystal-axis components; uncertainties propagated as uncorrelated ones."""
    numbers, su = values
    if np.any(su > LARGEST):
        raise block.error(
            f"the moment of {label} has a standard uncertainty of {np.nanmax(su):g}, beyond {LARGEST:g} µB."
        )
    if np.abs(numbers).max() > LARGEST:
        raise block.error(f"the moment of {label} is given as {numbers.tolist()}, beyond {LARGEST:g} µB.")
    if system == "crystalaxis":
        return SiteMoment(numbers, su)
    from_cartesian: FloatArray = np.asarray(np.linalg.inv(axes).T, dtype=np.float64)
    if system == "Cartn":
        return SiteMoment(from_cartesian @ numbers, combine_su(from_cartesian, su))
    modulus, polar, azimuth = numbers
    if modulus < 0 or not 0 <= polar <= 180:
        raise block.error(
            f"the moment of {label} has modulus {modulus:g} and polar angle {polar:g}; "
            "they must be at least 0 and between 0 and 180."
        )
    theta, phi = np.deg2rad([polar, azimuth])
    direction = np.array([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)])
    by_theta = modulus * np.array([np.cos(theta) * np.cos(phi), np.cos(theta) * np.sin(phi), -np.sin(theta)])
    by_phi = modulus * np.array([-np.sin(theta) * np.sin(phi), np.sin(theta) * np.cos(phi), 0.0])
    jacobian = np.column_stack([direction, np.deg2rad(1.0) * by_theta, np.deg2rad(1.0) * by_phi])
    propagation: FloatArray = np.asarray(from_cartesian @ jacobian, dtype=np.float64)
    return SiteMoment(from_cartesian @ (modulus * direction), combine_su(propagation, su))


def combine_su(matrix: FloatArray, su: FloatArray) -> FloatArray:
    """Standard uncertainties of ``matrix @ x`` for uncorrelated components of x with uncertainties su.

    A component without an uncertainty counts as exact beside others that have one; where none of those that
    enter has one, the result is NaN.
    """
    known = ~np.isnan(su)
    enters = np.abs(matrix) > 1e-9 * np.abs(matrix).max()
    combined = np.sqrt((matrix**2) @ np.where(known, su, 0.0) ** 2)
    return np.where((enters & known).any(axis=1), combined, np.nan)


def _compare_magnitude(
    block: Block, column: Column, row: int, label: str, moment: SiteMoment, axes: FloatArray
) -> None:
    stated = block.sibling(column, "_atom_site_moment_magnitude")
    if stated is None or stated.text(row) is None:
        return
    value, su = block.number(stated, row)
    size = float(np.linalg.norm(moment.crystal_axes @ axes))
    if abs(value - size) > max(AGREE_MUB, AGREE_FRACTION * size, 0.0 if np.isnan(su) else 3 * su):
        raise block.error(
            f"{stated.tag} of {label} is {value:g} µB, but its components make {size:.4g} µB. "
            "Correct the one that is wrong."
        )


def _compare_systems(block: Block, label: str, first: SiteMoment, second: SiteMoment, axes: FloatArray) -> None:
    gap = float(np.linalg.norm((first.crystal_axes - second.crystal_axes) @ axes))
    size = float(np.linalg.norm(first.crystal_axes @ axes))
    if gap > max(AGREE_MUB, AGREE_FRACTION * size):
        raise block.error(
            f"the moment of {label} is given in two coordinate systems that differ by {gap:.4g} µB. Keep the right one."
        )
