"""Commensurate magnetic structures from magCIF: the magnetic group, the moments, the cell they came from.

The group is the product of the operation loop and the centring loop (anti-centrings included). Lattice components
of a moment transform as u' = θ det(R) R u, so the crystal-axis components of a file, along unit vectors, transform
as m' = θ det(R) L R L⁻¹ m with L = diag(a, b, c) (IUCr magnetic dictionary; moments are axial vectors).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.crystal.uncertain import carried_su
from latticedip.errors import InputError
from latticedip.files.cif import (
    OPERATION_TAGS,
    Structure,
    expand,
    nonmagnetic_group,
    parse_column,
    read_cell,
    refuse_modulated,
)
from latticedip.files.cifsyntax import Block, Column
from latticedip.files.expand import Group, build_group
from latticedip.files.moments import SiteMoment, has_moments, read_moments
from latticedip.files.symop import Operation, parse_moment_image, parse_operation, parse_transform, parse_vector
from latticedip.ordering.model import Ordering, ParentTransform

#: The dictionary's dotted names; the prototype's ``_space_group_symop.magn_operation_xyz`` folds onto the same.
MAGNETIC_OPERATION_TAG = "_space_group_symop_magn_operation.xyz"
MAGNETIC_CENTRING_TAG = "_space_group_symop_magn_centering.xyz"
_PARENT_TAGS = ("_parent_space_group.child_transform_Pp_abc", "_magnetic_space_group.transform_from_parent_Pp_abc")
_K_TAGS = ("_parent_propagation_vector.kxkykz", "_magnetic_propagation_vector_kxkykz")
#: A moment may miss what its site allows by this much (µB) or fraction; it is then projected, and a note says so.
ALLOWED_MUB, ALLOWED_FRACTION = 0.02, 0.02
#: Below this (µB) a projection is rounding and needs no note.
SILENT_MUB = 1e-6


@dataclass(frozen=True, eq=False)
class AtomMoments:
    """Crystal-axis components and standard uncertainties (m, 3) in µB of the atoms of one listed site."""

    components: FloatArray
    su: FloatArray


def is_magnetic(block: Block) -> bool:
    """True where the symmetry the block states is a magnetic one."""
    return bool(block.starting_with("_space_group_symop_magn_"))


def read_magnetic_crystal(block: Block, name: str) -> Crystal:
    """All atoms of the magnetic cell; the symmetry without moments is left to be found from them."""
    return _structure(block, name).crystal


def read_magnetic_ordering(block: Block, name: str) -> Ordering:
    """The ordering (k = 0 in the magnetic cell) that a block describes.

    Raises FileError naming file, item and value where something is missing, contradicts itself, or has no model
    here (the OG setting; structures in superspace have a reader of their own).
    """
    structure = _structure(block, name)
    if not has_moments(block):
        raise block.error("it lists no moments (_atom_site_moment.crystalaxis_x and sisters).")
    cell = structure.crystal.cell
    moments = read_moments(block, cell, [site.label for site in structure.sites])
    notes: list[str] = []
    components: list[FloatArray] = []
    su: list[FloatArray] = []
    for i, site in enumerate(structure.sites):
        atoms = expand_moment(block, structure, i, moments.get(site.label), notes)
        components.append(atoms.components)
        su.append(atoms.su)
    crystal_axes = np.concatenate(components)
    if not np.any(crystal_axes):
        notes.append("every moment of the file is zero")
    parent = read_parent(block)
    notes.extend(propagation_notes(block, parent))
    return Ordering(
        structure.crystal,
        structure.crystal.to_cartesian(crystal_axes),
        name=name,
        moment_su=np.concatenate(su),
        parent=parent,
        notes=tuple(notes),
    )


def _structure(block: Block, name: str) -> Structure:
    refuse_modulated(block)
    og = block.starting_with("_space_group_symop_magn_OG_centering", "_space_group_magn_OG_wavevector")
    if og:
        raise block.error(
            f"data block {block.name} is in the OG setting ({og[0]}), whose time reversals follow from a wave vector; "
            "it is not read. Give the same structure in the BNS setting."
        )
    cell = read_cell(block)
    return expand(block, name, cell, _magnetic_group(block, cell), magnetic=True)


def _magnetic_group(block: Block, cell: FloatArray) -> Group:
    identity = parse_operation("x,y,z,+1", time=True)
    column = block.column(MAGNETIC_OPERATION_TAG)
    centring_column = block.column(MAGNETIC_CENTRING_TAG)
    if column is None and centring_column is None:
        group = nonmagnetic_group(block, cell)
        if not group.is_trivial:
            listed = block.column(*OPERATION_TAGS)
            where = "a space group symbol" if listed is None else listed.tag
            raise block.error(
                f"it lists moments, but only non-magnetic symmetry ({where}), which does not say how moments change. "
                f"Give {MAGNETIC_OPERATION_TAG}, or all atoms in P 1."
            )
        return group
    if column is None:
        raise block.error(f"{centring_column.tag if centring_column else ''} stands without {MAGNETIC_OPERATION_TAG}.")
    operations = parse_column(block, column, time=True)
    _check_moment_images(block, column, operations)
    centrings = [identity]
    if centring_column is not None:
        centrings = parse_column(block, centring_column, time=True)
        for centring in centrings:
            if np.any(centring.rotation != np.eye(3)):
                raise block.error(f"{centring_column.tag} {centring.text!r} turns; a centring only translates.")
    return build_group(block, operations, centrings, cell, column.tag)


def _check_moment_images(block: Block, column: Column, operations: list[Operation]) -> None:
    """Where the file also writes out how a moment changes (mx,my,mz), it must agree with the operation."""
    images = block.sibling(column, "_space_group_symop_magn_operation_mxmymz")
    if images is None:
        return
    for row, operation in enumerate(operations):
        text = images.text(row)
        if text is None:
            continue
        try:
            matrix = parse_moment_image(text)
        except InputError as error:
            raise block.error(f"{images.tag} {text!r} in row {row + 1} is not understood: {error}.") from None
        if np.any(matrix != operation.axial):
            raise block.error(
                f"{images.tag} {text!r} in row {row + 1} does not belong to the operation {operation.text!r}."
            )


def expand_moment(
    block: Block, structure: Structure, index: int, moment: SiteMoment | None, notes: list[str]
) -> AtomMoments:
    """Moments of all atoms of a site: projected onto what the site allows, then carried by the operations."""
    orbit, site, crystal = structure.orbits[index], structure.sites[index], structure.crystal
    n = len(orbit.positions)
    if moment is None:
        return AtomMoments(np.zeros((n, 3)), np.full((n, 3), np.nan))
    lengths = np.linalg.norm(crystal.cell, axis=1)
    # θ det(R) L R L⁻¹ for every operation of the group.
    turns = structure.group.axial * lengths[:, None] / lengths[None, :]
    projector = turns[orbit.stabilizer].mean(axis=0)
    allowed = projector @ moment.crystal_axes
    miss = float(np.linalg.norm((moment.crystal_axes - allowed) @ crystal.axes_unit))
    size = float(np.linalg.norm(moment.crystal_axes @ crystal.axes_unit))
    if miss > max(ALLOWED_MUB, ALLOWED_FRACTION * size):
        given, kept = (", ".join(f"{x:.4g}" for x in vector) for vector in (moment.crystal_axes, allowed + 0.0))
        raise block.error(
            f"the moment of {site.label}, ({given}) µB along a, b, c, is not allowed by the symmetry of its site, "
            f"which leaves ({kept}). Check the moment, the position and the operations."
        )
    if miss > SILENT_MUB:
        notes.append(f"the moment of {site.label} misses what its site allows by {miss:.2g} µB; it is put right")
    components = turns[orbit.carriers] @ allowed
    su = np.array([carried_su(turn, projector, moment.su) for turn in turns[orbit.carriers]])
    return AtomMoments(components, su)


def read_parent(block: Block) -> ParentTransform | None:
    """The change from the parent's basis to the present one, where the file states it."""
    found: list[tuple[str, ParentTransform]] = []
    for tag in _PARENT_TAGS:
        text = block.value(tag)
        if text is None:
            continue
        try:
            found.append((tag, ParentTransform(*parse_transform(text))))
        except InputError as error:
            raise block.error(f"{tag} {text!r} is not understood: {error}.") from None
    if len(found) == 2:
        (_, first), (_, second) = found
        if np.abs(first.P - second.P).max() > 1e-6 or np.abs(first.p - second.p).max() > 1e-6:
            raise block.error(f"{found[0][0]} and {found[1][0]} state different changes of cell. Keep the right one.")
    return found[0][1] if found else None


def propagation_notes(block: Block, parent: ParentTransform | None, waves: FloatArray | None = None) -> list[str]:
    """The propagation vectors of the file in words, and whether the magnetic cell holds whole waves of each.

    waves: Shape (n, 3). Wave vectors, in the reciprocal magnetic cell, that the structure has beyond that cell.
    """
    present = np.zeros((1, 3)) if waves is None else np.concatenate([np.zeros((1, 3)), waves, -waves])
    notes = []
    for tag in _K_TAGS:
        column = block.column(tag)
        if column is None:
            continue
        for row in range(len(column.values)):
            text = column.text(row)
            if not text:
                continue
            note = f"propagation vector of the parent cell: {text}"
            try:
                k = parse_vector(text)
            except InputError:
                note += " (kept as text; it is no triple of numbers)"
            else:
                left = (k @ parent.P if parent is not None else np.zeros(3)) - present
                if np.abs(left - np.round(left)).max(axis=1).min() > 1e-3:
                    note += "; it does not fit the magnetic cell that the file states"
            if note not in notes:
                notes.append(note)
    return notes
