"""Modulated magnetic structures from magCIF, in (3+1)D superspace.

An operation (R, v; H, ε, δ; θ) takes the point x, x4 of superspace to R x + v, H·x + ε x4 + δ, with three whole numbers
H that belong to the part of q that R does not turn into ±q: H + ε q = q R. With x4 = q·r + t along real space, the
moment at the image of an atom at r is M'(x4') = θ det(R) R M(x4); for an amplitude A_n, M = Re[A_n exp(−2πi n x4)],

    A'_n = θ det(R) R A_n exp(2πi n (δ + H·r))     (ε = +1; the conjugate of A_n where ε = −1)

and all lattice translates of an atom share M. Counted in cells, the component at n q of the atom at τ is then
A_n exp(−2πi n (q·τ + t)) (IUCr dictionaries of modulated and of magnetic structures; Janner and Janssen 1980).
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from latticedip.checks import ComplexArray, FloatArray
from latticedip.crystal.model import Crystal
from latticedip.crystal.uncertain import parameter_steps
from latticedip.errors import InputError
from latticedip.files.cif import OPERATION_TAGS, Structure, expand, modulated_items, read_cell
from latticedip.files.cifsyntax import Block, Column, parse_number
from latticedip.files.expand import Group, build_group
from latticedip.files.fourier import (
    UncertainWave,
    harmonics,
    read_series,
    refuse_more_waves,
    triple,
    wave_vector,
)
from latticedip.files.magcif import (
    ALLOWED_FRACTION,
    ALLOWED_MUB,
    MAGNETIC_OPERATION_TAG,
    SILENT_MUB,
    expand_moment,
    is_magnetic,
    propagation_notes,
    read_parent,
)
from latticedip.files.moments import SiteMoment, has_moments, read_moments
from latticedip.files.symop import Operation, parse_superspace_operation
from latticedip.ordering.model import Ordering, is_self_conjugate, snap_k
from latticedip.ordering.uncertain import AmplitudeUncertainty

OPERATION_TAG = "_space_group_symop_magn_ssg_operation.algebraic"
CENTRING_TAG = "_space_group_symop_magn_ssg_centering.algebraic"
_NONMAGNETIC_TAGS = ("_space_group_symop_ssg_operation_algebraic", "_superspace_group_symop_operation_algebraic")
_MAGNETIC_ITEMS = ("_space_group_symop_magn_ssg", "_atom_site_moment_Fourier", "_atom_site_moment_special_func")
#: What a modulation of atoms themselves is called, by the beginning of its items.
_OTHER_MODULATIONS = {
    "_atom_site_displace": "the positions of atoms",
    "_atom_site_occ": "the occupancies of atoms",
    "_atom_site_rot_": "the orientation of groups of atoms",
}
#: The initial phase; an older alias of the first, with a prefix of its own, ends as the last one does.
_PHASE_TAGS = ("_atom_sites_modulation_global_phase_t_1", "_atom_sites_modulation_global_phase_list")
_PHASE_ENDING = "_cell_commen_t_section_1"
#: An operation may turn the wave vector away from what it must become by this much, rounded digits.
WAVE_TOLERANCE = 2e-3
#: Below this a correction of the wave vector is rounding.
SAME_WAVE = 1e-12


@dataclass(frozen=True, eq=False)
class _Superspace:
    """A structure with its group in superspace, one operation of ``structure.group`` for each of ``group``.

    q: Shape (3,) float, the wave vector. phase: t in cycles. notes: sentences a report must repeat.
    """

    structure: Structure
    group: Group
    q: FloatArray
    phase: float
    notes: tuple[str, ...]


def is_modulated(block: Block) -> bool:
    """True where a block describes moments (or their symmetry) in superspace."""
    if block.starting_with(*_MAGNETIC_ITEMS):
        return True
    return bool(modulated_items(block)) and (is_magnetic(block) or has_moments(block))


def read_modulated_crystal(block: Block, name: str) -> Crystal:
    """All atoms of the average cell. Raises FileError as `read_modulated_ordering` does."""
    return _superspace(block, name).structure.crystal


def read_modulated_ordering(block: Block, name: str) -> Ordering:
    """The ordering that a block describes: its average moments at k = 0 and harmonic n of the modulation at n q.

    Standard uncertainties are kept: in ``moment_su`` for sites without a modulation, in ``amplitude_su`` for the
    others, where every number that the file gives (cosine and sine, or modulus and phase, along each axis) is one
    parameter, or as many as the symmetry of the site leaves free, and moves all its atoms.

    Raises FileError naming file, item and value where something is missing, contradicts itself or is forbidden by the
    symmetry, for more than one independent wave vector, and for modulations other than that of the moments.
    """
    found = _superspace(block, name)
    structure, crystal = found.structure, found.structure.crystal
    labels = [site.label for site in structure.sites]
    orders = harmonics(block, found.q) if block.column("_atom_site_moment_Fourier_atom_site_label") else {}
    series = read_series(block, crystal.cell, labels, orders)
    if not series.amplitudes and not has_moments(block):
        raise block.error("it lists no moments (_atom_site_moment.crystalaxis_x, _atom_site_moment_Fourier_param.cos).")
    _check_flags(block, set(series.amplitudes))
    averages = read_moments(block, crystal.cell, labels)
    notes = list(found.notes)
    still: list[FloatArray] = []
    su: list[FloatArray] = []
    waves: dict[int, list[ComplexArray]] = {n: [] for n in _orders(series.amplitudes)}
    uncertain = {label: list(found) for label, found in series.uncertain.items()}
    for i, site in enumerate(structure.sites):
        mine = series.amplitudes.get(site.label, {})
        average = averages.get(site.label)
        if mine and average is not None:
            uncertain.setdefault(site.label, []).append(UncertainWave(0, np.eye(3, dtype=complex), average.su))
        if 0 in mine:
            known = SiteMoment(np.zeros(3), np.full(3, np.nan)) if average is None else average
            average = SiteMoment(known.crystal_axes + mine[0].real, known.su)
        atoms = expand_moment(block, structure, i, average, notes)
        still.append(atoms.components)
        su.append(np.full_like(atoms.su, np.nan) if mine else atoms.su)
        for n, parts in waves.items():
            parts.append(_expand_wave(block, found, i, n, mine.get(n, np.zeros(3, dtype=complex)), notes))
    k, components = [np.zeros(3)], [np.concatenate(still).astype(complex)]
    for n, parts in waves.items():
        k.append(snap_k(n * found.q))
        components.append(_counted_in_cells(found, n, np.concatenate(parts), crystal.positions))
    used = [i for i, component in enumerate(components) if np.any(component)] or [0]
    if not np.any(components[used[0]]):
        notes.append("every moment of the file is zero")
    parameters = _parameters(found, uncertain, [[0, *waves][i] for i in used], notes)
    parent = read_parent(block)
    notes.extend(series.notes)
    notes.extend(propagation_notes(block, parent, np.array([n * found.q for n in (*waves, 1)])))
    try:
        return Ordering(
            crystal,
            crystal.to_cartesian(np.array([components[i] for i in used])),
            np.array([k[i] for i in used]),
            name=name,
            moment_su=np.concatenate(su),
            parent=parent,
            notes=tuple(notes),
            amplitude_su=tuple(parameters),
        )
    except InputError as error:
        raise block.error(str(error)) from None


def _counted_in_cells(found: _Superspace, n: int, amplitudes: ComplexArray, positions: FloatArray) -> ComplexArray:
    """Components S = A_n exp(−2πi n (q·τ + t)) of amplitudes (..., m, 3) of atoms at positions (m, 3)."""
    if n == 0:
        return np.asarray(amplitudes.real.astype(complex))
    turns = (n * (positions @ found.q + found.phase)) % 1.0
    component = amplitudes * np.exp(-2j * np.pi * turns)[:, None]
    if is_self_conjugate(snap_k(n * found.q)[None])[0]:
        component = component.real.astype(complex)
    return np.asarray(component)


def _parameters(
    found: _Superspace, uncertain: dict[str, list[UncertainWave]], orders: list[int], notes: list[str]
) -> list[AmplitudeUncertainty]:
    """What is uncertain of the amplitudes: the numbers of a listed site, or as many as its symmetry leaves free.

    uncertain: by label of the site. orders: the harmonic at each k of the ordering.
    """
    structure, crystal = found.structure, found.structure.crystal
    parameters = []
    left_out = set()
    first = 0
    for i, site in enumerate(structure.sites):
        positions = structure.orbits[i].positions
        atoms = tuple(range(first, first + len(positions)))
        first += len(positions)
        for wave in uncertain.get(site.label, ()):
            if not np.any(np.nan_to_num(wave.su)):
                continue
            if wave.n not in orders:
                left_out.add(wave.n)
                continue
            steps = np.zeros((len(orders), len(atoms), 3), dtype=complex)
            for images in _uncertain_images(found, i, wave):
                step = _counted_in_cells(found, wave.n, images, positions)
                if np.any(step):
                    steps[orders.index(wave.n)] = crystal.to_cartesian(step)
                    parameters.append(AmplitudeUncertainty(atoms, steps))
    for n in sorted(left_out):
        what = f"amplitudes at {n} q" if n else "average moments of modulated sites"
        notes.append(f"standard uncertainties of {what} are not kept, since these are all zero")
    return parameters


def _uncertain_images(found: _Superspace, index: int, wave: UncertainWave) -> list[ComplexArray]:
    """Changes (m, 3) of A_n of the atoms of a site, one array for each independent parameter of its amplitude."""
    orbit = found.structure.orbits[index]

    def stack(vectors: ComplexArray) -> FloatArray:
        """Complex columns as real ones: an operation may conjugate, so that only real factors go through it."""
        return np.asarray(vectors.real if wave.n == 0 else np.vstack([vectors.real, vectors.imag]))

    kept = np.array([_images(found, index, wave.n, column)[orbit.stabilizer].mean(axis=0) for column in wave.basis.T]).T
    allowed = np.asarray(np.linalg.solve(stack(wave.basis), stack(kept)), dtype=np.float64)
    steps = wave.basis @ parameter_steps(allowed, wave.su)
    return [_images(found, index, wave.n, step)[orbit.carriers] for step in steps.T]


def _orders(amplitudes: dict[str, dict[int, ComplexArray]]) -> list[int]:
    return sorted({n for mine in amplitudes.values() for n in mine if n > 0})


def _expand_wave(
    block: Block, found: _Superspace, index: int, n: int, amplitude: ComplexArray, notes: list[str]
) -> ComplexArray:
    """Shape (m, 3) complex in µB along crystal axes. A_n of all atoms of a site; as `expand_moment` for averages."""
    structure = found.structure
    orbit, site, crystal = structure.orbits[index], structure.sites[index], structure.crystal
    if not np.any(amplitude):
        return np.zeros((len(orbit.positions), 3), dtype=complex)
    allowed = _images(found, index, n, amplitude)[orbit.stabilizer].mean(axis=0)
    miss = float(np.linalg.norm((amplitude - allowed) @ crystal.axes_unit))
    if miss > max(ALLOWED_MUB, ALLOWED_FRACTION * float(np.linalg.norm(amplitude @ crystal.axes_unit))):
        raise block.error(
            f"the modulation of {site.label} at {n} q, {_wave_words(amplitude)} µB along a, b, c, is not allowed by "
            f"the symmetry of its site, which leaves {_wave_words(allowed)}. Check the amplitudes, the position, the "
            "wave vector and the operations."
        )
    if miss > SILENT_MUB:
        notes.append(
            f"the modulation of {site.label} at {n} q misses what its site allows by {miss:.2g} µB; it is put right"
        )
    return _images(found, index, n, allowed)[orbit.carriers]


def _images(found: _Superspace, index: int, n: int, amplitude: ComplexArray) -> ComplexArray:
    """Shape (n_operations, 3) complex. What every operation makes of A_n (crystal axes) of a listed atom."""
    structure, group = found.structure, found.group
    orbit, site, crystal = structure.orbits[index], structure.sites[index], structure.crystal
    lengths = np.linalg.norm(crystal.cell, axis=1)
    turns = group.axial * lengths[:, None] / lengths[None, :]
    shifts = group.rotations[:, 3, :3] @ _listed_position(orbit.positions, site.position, crystal)
    phases = np.exp(2j * np.pi * ((n * (group.translations[:, 3] + shifts)) % 1.0))
    forward = group.rotations[:, 3, 3] > 0
    turned = np.einsum("gab,gb->ga", turns, np.where(forward[:, None], amplitude, amplitude.conj()))
    return np.asarray(phases[:, None] * turned)


def _listed_position(images: FloatArray, position: FloatArray, crystal: Crystal) -> FloatArray:
    """The image that is the listed atom itself, put onto its special position."""
    gaps = images - position
    return np.asarray(images[np.argmin(np.linalg.norm((gaps - np.round(gaps)) @ crystal.cell, axis=1))])


def _wave_words(amplitude: ComplexArray) -> str:
    parts = (np.round(amplitude.real, 9), np.round(amplitude.imag, 9))
    cosine, sine = ("(" + ", ".join(f"{x + 0.0:.4g}" for x in part) + ")" for part in parts)
    return f"cosine {cosine} and sine {sine}"


def _superspace(block: Block, name: str) -> _Superspace:
    _refuse_other_models(block)
    q = wave_vector(block)
    operations, centrings, tag = _operations(block)
    cell = read_cell(block)
    group = build_group(block, operations, centrings, cell, tag)
    notes: list[str] = []
    q = _fit(block, q, operations, group, tag, notes)
    structure = expand(block, name, cell, group.basic, magnetic=True)
    return _Superspace(structure, group, q, _phase(block), tuple(notes))


def _refuse_other_models(block: Block) -> None:
    """Raise FileError for what the model here has no place for: more waves, composites, other modulations."""
    dimension = block.value("_cell_modulation_dimension")
    if dimension is not None:
        if not dimension.isdecimal() or dimension == "0":
            raise block.error(
                f"_cell_modulation_dimension is {dimension!r}, but the file describes a modulation; 1 is needed."
            )
        if int(dimension) > 1:
            refuse_more_waves(block, int(dimension), f"_cell_modulation_dimension {dimension}")
    listed = block.column(OPERATION_TAG)
    for text in () if listed is None else listed.values[:1]:
        highest = max((int(number) for number in re.findall(r"[xX]([0-9])", text)), default=0)
        if highest > 4:
            refuse_more_waves(block, highest - 3, f"{listed.tag if listed else ''} {text}")
    composite = block.starting_with("_cell_subsystem", "_atom_site_subsystem_code")
    if composite:
        raise block.error(f"this is a composite of several lattices ({composite[0]}), which is not read.")
    special = block.starting_with("_atom_site_moment_special_func")
    if special:
        raise block.error(
            f"its moments follow a special function ({special[0]}), which is not read. Give their Fourier series."
        )
    for prefix, what in _OTHER_MODULATIONS.items():
        item = _modulates(block, prefix)
        if item:
            raise block.error(
                f"it modulates {what} ({item}), for which there is no model here. Give the average structure as "
                "[crystal] and the waves of the moments as k, cosine and sine in a study."
            )


def _modulates(block: Block, prefix: str) -> str | None:
    """The item by which a block modulates something with an amplitude other than zero."""
    folded = prefix.lower()
    flags = [key for key in block.items if key.startswith(folded) and key.endswith("_modulation_flag")]
    series = False
    for key, column in block.items.items():
        if not key.startswith(folded) or key in flags:
            continue
        if "_fourier" in key:
            series = True
            if key.endswith(("_param_cos", "_param_sin", "_param_modulus")):
                for row in range(len(column.values)):
                    if column.is_unknown(row) or (column.text(row) and block.number(column, row)[0] != 0):
                        return column.tag
        elif re.match(rf"{folded}_?(special_func|legendre|ortho|xharm|sawtooth|zigzag|crenel)", key) and any(
            column.text(row) for row in range(len(column.values))
        ):
            return column.tag
    for key in flags:
        column = block.items[key]
        if not series and any((column.text(row) or "").lower() in ("yes", "y") for row in range(len(column.values))):
            return column.tag
    return None


def _check_flags(block: Block, modulated: set[str]) -> None:
    """Sites said to be modulated must be, and the other way round."""
    flags = block.column("_atom_site_moment_modulation_flag")
    if flags is None:
        return
    labels = block.sibling(flags, "_atom_site_moment_label") or block.sibling(flags, "_atom_site_label")
    for row in range(len(flags.values)) if labels is not None else ():
        label, said = labels.text(row) if labels else None, (flags.text(row) or "").lower()
        if said in ("yes", "y") and label not in modulated:
            raise block.error(f"{flags.tag} of {label} is {said!r}, but no Fourier amplitudes of it are given.")
        if said in ("no", "n") and label in modulated:
            raise block.error(f"{flags.tag} of {label} is {said!r}, but Fourier amplitudes of it are given.")


def _operations(block: Block) -> tuple[list[Operation], list[Operation], str]:
    """Operations and centrings of the superspace group, and the item that lists the operations."""
    column, centring_column = block.column(OPERATION_TAG), block.column(CENTRING_TAG)
    if column is None:
        other = centring_column or block.column(MAGNETIC_OPERATION_TAG, *_NONMAGNETIC_TAGS, *OPERATION_TAGS)
        item = modulated_items(block)[0]
        listed = (
            f"it describes a modulation ({item}), but lists no operations of a magnetic superspace group"
            if other is None
            else f"it describes a modulation ({item}), and {other.tag} alone does not say how that changes"
        )
        raise block.error(f"{listed}. Give {OPERATION_TAG}; where all atoms of the cell are listed: 'x1,x2,x3,x4,+1'.")
    operations = _parse(block, column)
    centrings = [parse_superspace_operation("x1,x2,x3,x4,+1")]
    if centring_column is not None:
        centrings = _parse(block, centring_column)
        for centring in centrings:
            if np.any(centring.rotation != np.eye(4)):
                raise block.error(f"{centring_column.tag} {centring.text!r} turns; a centring only translates.")
    return operations, centrings, column.tag


def _parse(block: Block, column: Column) -> list[Operation]:
    operations = []
    for row in range(len(column.values)):
        text = column.text(row)
        if not text:
            raise block.error(f"{column.tag} is {column.values[row]!r} in row {row + 1}, but an operation is needed.")
        try:
            operations.append(parse_superspace_operation(text))
        except InputError as error:
            raise block.error(f"{column.tag} {text!r} in row {row + 1} is not understood: {error}.") from None
    if not operations:
        raise block.error(f"{column.tag} lists no operations.")
    return operations


def _fit(
    block: Block, q: FloatArray, operations: list[Operation], group: Group, tag: str, notes: list[str]
) -> FloatArray:
    """The wave vector that every operation keeps (q R = ε q + H), the mean of what they make of the one stated."""
    for operation in operations:
        image = operation.rotation[3, 3] * (q @ operation.rotation[:3, :3] - operation.rotation[3, :3])
        if np.abs(image - q).max() > WAVE_TOLERANCE:
            raise block.error(
                f"{tag} {operation.text!r} does not keep the modulation wave vector {triple(q)}: x4 would belong to "
                f"{triple(image)}. Check both."
            )
    rotations = group.rotations
    images = rotations[:, 3, 3, None] * (q @ rotations[:, :3, :3] - rotations[:, 3, :3])
    fitted = images.mean(axis=0)
    change = float(np.abs(fitted - q).max())
    if change <= SAME_WAVE:
        return q
    notes.append(f"the wave vector misses what the operations fix by {change:.2g}; it is put right: {triple(fitted)}")
    return np.asarray(fitted)


def _phase(block: Block) -> float:
    """The initial phase t in cycles; it tells commensurate structures apart, and only shifts incommensurate ones."""
    older = next((key for key in block.items if key.endswith(_PHASE_ENDING)), _PHASE_ENDING)
    column = block.column(*_PHASE_TAGS, older)
    text = column.text(0) if column is not None and column.values else None
    if column is None or not text:
        return 0.0
    number = parse_number(text.strip("[] "))
    if number is None:
        raise block.error(f"{column.tag} is {text!r}, which is not a number.")
    return number[0]
