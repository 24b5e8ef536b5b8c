"""The non-magnetic content of a CIF: cell, sites, operations, and the Crystal they make."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import gemmi
import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal, Operations
from latticedip.crystal.uncertain import LARGEST_SU, carried_su
from latticedip.errors import FileError, InputError
from latticedip.files.cifsyntax import Block, Column
from latticedip.files.expand import Group, Orbit, build_group, orbit_of
from latticedip.files.symop import Operation, parse_operation

#: What the core dictionary (and its older names) calls an operation.
OPERATION_TAGS = ("_space_group_symop_operation_xyz", "_symmetry_equiv_pos_as_xyz")
_HALL_TAGS = ("_space_group_name_Hall", "_symmetry_space_group_name_Hall")
_SYMBOL_TAGS = (
    "_space_group_name_H-M_alt",
    "_symmetry_space_group_name_H-M",
    "_space_group_name_H-M_full",
    "_space_group_name_H-M_ref",
)
_NUMBER_TAGS = ("_space_group_IT_number", "_symmetry_Int_Tables_number")
#: Items of modulated structures in more than three dimensions.
_MODULATED_TAGS = (
    "_cell_wave_vector",
    "_space_group_symop_magn_ssg",
    "_space_group_symop_ssg",
    "_space_group_ssg",
    "_space_group_magn_ssg",
    "_atom_site_moment_Fourier",
    "_atom_site_moment_special_func",
    "_atom_site_Fourier_wave_vector",
    "_atom_site_displace",
    "_atom_site_occ_Fourier",
    "_atom_site_occ_special_func",
)
#: An occupancy that exceeds 1 by rounding is taken as 1 up to here.
OCCUPANCY_SLACK = 1e-3


@dataclass(frozen=True, eq=False)
class Site:
    """One row of the atom list: label, element, fractional position, occupancy, multiplicity where stated.

    position_su: Shape (3,) float, standard uncertainties of the coordinates, NaN where none is stated.
    """

    label: str
    symbol: str
    position: FloatArray
    position_su: FloatArray
    occupancy: float
    multiplicity: int | None
    shown: str


@dataclass(frozen=True, eq=False)
class Structure:
    """A crystal as a file lists it, before and after expansion.

    orbits[i] are the atoms of sites[i]; in ``crystal`` the atoms of one site follow each other.
    """

    crystal: Crystal
    sites: tuple[Site, ...]
    group: Group
    orbits: tuple[Orbit, ...]


def read_structure(block: Block, name: str) -> Structure:
    """The crystal of a data block without magnetic operations, symmetry expanded.

    Raises FileError naming file, item and value for whatever cannot be understood.
    """
    refuse_modulated(block)
    cell = read_cell(block)
    group = nonmagnetic_group(block, cell)
    return expand(block, name, cell, group, magnetic=False)


def expand(block: Block, name: str, cell: FloatArray, group: Group, *, magnetic: bool) -> Structure:
    """Expand the listed sites by a group and build the Crystal.

    The operations are kept on the Crystal where they are those of a non-magnetic structure and more than the
    identity; elsewhere the symmetry is left to be found from the atoms.
    """
    sites, notes = read_sites(block, magnetic=magnetic)
    orbits = tuple(orbit_of(block, group, site.position, cell, site.label) for site in sites)
    for site, orbit in zip(sites, orbits, strict=True):
        # In a magCIF a stated multiplicity may count in the parent's cell, so it is compared in plain CIFs only.
        if site.multiplicity is not None and site.multiplicity != len(orbit.positions) and not magnetic:
            raise block.error(
                f"site {site.label} is said to have multiplicity {site.multiplicity}, but the operations give "
                f"{len(orbit.positions)} atoms. Check its coordinates, the operations and the choice of origin."
            )
    counts = [len(orbit.positions) for orbit in orbits]
    keep = not magnetic and not group.is_trivial
    try:
        crystal = Crystal(
            cell,
            np.concatenate([orbit.positions for orbit in orbits]),
            tuple(np.repeat([site.symbol for site in sites], counts)),
            tuple(np.repeat([site.shown for site in sites], counts)),
            np.repeat([site.occupancy for site in sites], counts),
            operations=Operations(group.rotations, group.translations) if keep else None,
            name=name,
            notes=notes,
            position_su=np.concatenate([_orbit_su(group, *pair) for pair in zip(sites, orbits, strict=True)]),
        )
    except FileError:
        raise
    except InputError as error:
        raise block.error(str(error)) from None
    return Structure(crystal, sites, group, orbits)


def _orbit_su(group: Group, site: Site, orbit: Orbit) -> FloatArray:
    """Shape (m, 3) float. Standard uncertainties of the positions of all atoms of a site."""
    allowed = group.rotations[orbit.stabilizer].mean(axis=0)
    turns = group.rotations[orbit.carriers].astype(float)
    return np.array([carried_su(turn, allowed, site.position_su) for turn in turns])


def modulated_items(block: Block) -> list[str]:
    """The items of a block that belong to modulated structures in superspace, as the file spells them."""
    found = block.starting_with(*_MODULATED_TAGS)
    if block.value("_cell_modulation_dimension") not in (None, "0"):
        found.insert(0, "_cell_modulation_dimension")
    return found


def refuse_modulated(block: Block) -> None:
    """Raise FileError for modulated structures in superspace, which are not read as ordinary ones."""
    found = modulated_items(block)
    if found:
        raise block.error(
            f"this is a modulated structure in superspace ({found[0]}), which is not read. Give a commensurate "
            "description in the magnetic cell, or the average structure as [crystal] and the modulation as "
            "k, cosine and sine in a study."
        )


def read_cell(block: Block) -> FloatArray:
    """Shape (3, 3) float in Å. Rows are a along x, b in the xy plane, c with positive z.

    Raises FileError for missing, non-numeric or impossible lengths and angles.
    """
    values = []
    for item in ("length_a", "length_b", "length_c", "angle_alpha", "angle_beta", "angle_gamma"):
        column = block.column(f"_cell_{item}")
        if column is None:
            raise block.error(f"_cell_{item} is missing.")
        value, _ = block.number(column, 0)
        if item.startswith("length") and not 0.01 <= value <= 1e6:
            raise block.error(f"{column.tag} is {value:g}; a length must be 0.01 to 1e6 Å.")
        if item.startswith("angle") and not 0 < value < 180:
            raise block.error(f"{column.tag} is {value:g}; an angle must lie between 0 and 180 degrees.")
        values.append(value)
    return cell_from_parameters(block, values)


def cell_from_parameters(block: Block, values: list[float]) -> FloatArray:
    """Cell vectors from lengths (Å) and angles (degrees); raises FileError where the angles close no cell."""
    a, b, c, *angles = values
    cos_alpha, cos_beta, cos_gamma = (_cosine(angle) for angle in angles)
    sin_gamma = np.sqrt(1 - cos_gamma**2)
    square = 1 - cos_alpha**2 - cos_beta**2 - cos_gamma**2 + 2 * cos_alpha * cos_beta * cos_gamma
    if square < 1e-12:
        raise block.error(
            f"the cell angles {angles[0]:g}, {angles[1]:g}, {angles[2]:g} close no cell "
            "(its volume would be zero or imaginary)."
        )
    along = (cos_alpha - cos_beta * cos_gamma) / sin_gamma
    return np.array(
        [
            [a, 0.0, 0.0],
            [b * cos_gamma, b * sin_gamma, 0.0],
            [c * cos_beta, c * along, c * np.sqrt(square) / sin_gamma],
        ]
    )


def _cosine(angle: float) -> float:
    """Cosine of an angle in degrees, exact for 60, 90 and 120."""
    exact = {60.0: 0.5, 90.0: 0.0, 120.0: -0.5}
    return exact.get(angle, float(np.cos(np.deg2rad(angle))))


def nonmagnetic_group(block: Block, cell: FloatArray) -> Group:
    """The operations a file lists or, where it lists none, those its symbol or number stands for.

    Raises FileError where they do not parse, contradict the symbol, or cannot be told without guessing.
    """
    column = block.column(*OPERATION_TAGS)
    identity = parse_operation("x,y,z", time=False)
    if column is None:
        operations, tag = _operations_by_name(block, cell), "the space group"
        return build_group(block, operations, [identity], cell, tag)
    operations = parse_column(block, column, time=False)
    group = build_group(block, operations, [identity], cell, column.tag)
    symbol = block.value(*_SYMBOL_TAGS)
    named = _space_group(symbol, cell) if symbol else None
    if named is not None and symbol is not None and named.hm[0] != "R" and len(named.operations()) != len(group.times):
        raise block.error(
            f"{column.tag} lists {len(group.times)} operations, but the space group {symbol!r} has "
            f"{len(named.operations())}. Remove the one that is wrong."
        )
    return group


def parse_column(block: Block, column: Column, *, time: bool) -> list[Operation]:
    """All operations of a column; raises FileError naming file, item and value where one does not parse."""
    operations = []
    for row in range(len(column.values)):
        text = column.text(row)
        if not text:
            raise block.error(f"{column.tag} is {column.values[row]!r} in row {row + 1}, but an operation is needed.")
        try:
            operations.append(parse_operation(text, time=time))
        except InputError as error:
            raise block.error(f"{column.tag} {text!r} in row {row + 1} is not understood: {error}.") from None
    if not operations:
        raise block.error(f"{column.tag} lists no operations.")
    return operations


def _operations_by_name(block: Block, cell: FloatArray) -> list[Operation]:
    hall = block.value(*_HALL_TAGS)
    if hall:
        try:
            return _from_gemmi(gemmi.symops_from_hall(hall))
        except RuntimeError as error:
            raise block.error(f"the Hall symbol {hall!r} is not understood: {error}.") from None
    advice = f"List the operations ({OPERATION_TAGS[0]}), or give a Hall symbol ({_HALL_TAGS[0]})."
    symbol = block.value(*_SYMBOL_TAGS)
    if symbol:
        group = _space_group(symbol, cell)
        if group is None:
            raise block.error(f"the space group symbol {symbol!r} is not known. {advice}")
        settings = [s.xhm() for s in gemmi.spacegroup_table() if s.hm == group.hm and s.ext in ("1", "2")]
        if len(settings) > 1 and ":" not in _plain_symbol(symbol):
            raise block.error(f"the space group symbol {symbol!r} has two origins ({', '.join(settings)}). {advice}")
        return _from_gemmi(group.operations())
    number = block.value(*_NUMBER_TAGS)
    if number:
        settings = [s.xhm() for s in gemmi.spacegroup_table() if str(s.number) == number]
        if not settings:
            raise block.error(f"the space group number {number!r} is not known. {advice}")
        if len(settings) > 1:
            listed = ", ".join(settings[:6]) + (", ..." if len(settings) > 6 else "")
            raise block.error(
                f"the space group number {number} has several settings ({listed}). Give the symbol of the right one "
                f"({_SYMBOL_TAGS[0]}), or list the operations ({OPERATION_TAGS[0]})."
            )
        return _from_gemmi(gemmi.find_spacegroup_by_name(settings[0]).operations())
    raise block.error(
        f"it gives no symmetry: neither operations nor a space group. {advice} Where all atoms of the cell are listed: "
        "_space_group_name_H-M_alt 'P 1'."
    )


def _plain_symbol(symbol: str) -> str:
    """A symbol with the database endings S, Z, H, R for settings written as :1, :2, :H, :R."""
    ending = re.fullmatch(r"(.*\S)\s+([SZHR])", symbol)
    if ending is None:
        return symbol
    return f"{ending[1]}:{ {'S': '1', 'Z': '2'}.get(ending[2], ending[2]) }"


def _space_group(symbol: str, cell: FloatArray) -> gemmi.SpaceGroup | None:
    """The space group of a symbol, or None; hexagonal or rhombohedral axes as the angles of the cell say."""
    directions = cell / np.linalg.norm(cell, axis=1)[:, None]
    alpha, gamma = (float(np.degrees(np.arccos(directions[i] @ directions[j]))) for i, j in ((1, 2), (0, 1)))
    plain = _plain_symbol(symbol)
    for spelling in (plain, plain.replace("_", ""), plain.replace("_", " ")):
        group = gemmi.find_spacegroup_by_name(spelling, alpha, gamma)
        if group is not None:
            return group
    return None


def _from_gemmi(operations: gemmi.GroupOps) -> list[Operation]:
    return [
        Operation(np.array(op.rot) // gemmi.Op.DEN, np.array(op.tran) / gemmi.Op.DEN, 0, op.triplet())
        for op in operations
    ]


def read_sites(block: Block, *, magnetic: bool = True) -> tuple[tuple[Site, ...], tuple[str, ...]]:
    """The listed sites, and what has to be said about them (partial occupancy, deuterium, rows left out).

    Without moments nothing refers to a label, so that atoms of one element may share one: it then covers them all.

    Raises FileError for missing or duplicate labels, unknown elements, missing coordinates and occupancies
    outside 0 to 1.
    """
    x = block.column("_atom_site_fract_x")
    if x is None:
        raise block.error("it lists no fractional coordinates (_atom_site_fract_x).")
    coordinates = [x]
    for axis in "yz":
        column = block.sibling(x, f"_atom_site_fract_{axis}")
        if column is None:
            raise block.error(f"_atom_site_fract_{axis} is missing beside {x.tag}.")
        coordinates.append(column)
    labels = block.sibling(x, "_atom_site_label")
    if labels is None:
        raise block.error("the atoms carry no labels (_atom_site_label).")
    optional = {
        key: block.sibling(x, f"_atom_site_{key}")
        for key in ("type_symbol", "occupancy", "calc_flag", "symmetry_multiplicity", "site_symmetry_multiplicity")
    }
    shown = block.sibling(x, "_latticedip_site_label")
    sites: dict[str, Site] = {}
    dummies: list[str] = []
    empty: list[str] = []
    unknown: list[str] = []
    notes: list[str] = []
    for row in range(len(x.values)):
        label = labels.text(row)
        if not label:
            raise block.error(f"{labels.tag} is {labels.values[row]!r} in row {row + 1}; every atom needs a label.")
        known = sites.get(label)
        if known is not None and not magnetic and known.symbol == _element(block, optional["type_symbol"], row, label):
            # Files that list every atom often call all of one element alike.
            shared, label = label, f"{label} (row {row + 1})"
        else:
            shared = None
        if label in sites or label in dummies or label in empty:
            raise block.error(f"{labels.tag} {label!r} stands for two atoms (row {row + 1}). Labels must differ.")
        if (_optional(optional["calc_flag"], row) or "").lower() == "dum":
            dummies.append(label)
            continue
        column = optional["occupancy"]
        occupancy = _occupancy(block, column, row, label)
        if column is not None and column.is_unknown(row):
            unknown.append(label)
        if occupancy == 0:
            empty.append(label)
            continue
        symbol = _element(block, optional["type_symbol"], row, label)
        position, su = np.array([read_with_su(block, column, row) for column in coordinates]).T
        if np.abs(position).max() > 1000:
            raise block.error(f"the fractional coordinates of {label} are {position.tolist()}, far outside any cell.")
        if np.any(su > LARGEST_SU):
            raise block.error(
                f"the standard uncertainty of a fractional coordinate of {label} is {np.nanmax(su):g}; at most "
                f"{LARGEST_SU:g}, a whole cell, is taken."
            )
        multiplicity = _optional(optional["symmetry_multiplicity"] or optional["site_symmetry_multiplicity"], row)
        sites[label] = Site(
            label,
            "H" if symbol == "D" else symbol,
            position,
            su,
            occupancy,
            int(multiplicity) if multiplicity and multiplicity.isdecimal() else None,
            _optional(shown, row) or shared or label,
        )
        if symbol == "D":
            notes.append(f"{label} is deuterium; it is counted as hydrogen")
    if not sites:
        raise block.error("it lists no atoms.")
    notes.extend(occupancy_notes([site.shown for site in sites.values()], [site.occupancy for site in sites.values()]))
    if unknown:
        notes.append(f"occupancies stated as unknown (?) are taken as 1: {', '.join(unknown)}")
    if dummies:
        notes.append(f"dummy atoms are left out: {', '.join(dummies)}")
    if empty:
        notes.append(f"atoms of occupancy 0 are left out: {', '.join(empty)}")
    return tuple(sites.values()), tuple(notes)


def read_with_su(block: Block, column: Column, row: int) -> tuple[float, float]:
    """A number and its standard uncertainty, in brackets or in a column of its own (``_su``); NaN where there is none.

    Raises FileError naming file, item and value where one is not a number, or an uncertainty is negative.
    """
    value, su = block.number(column, row)
    separate = block.sibling(column, f"{column.tag}_su")
    if separate is not None and separate.text(row) is not None:
        su = block.number(separate, row)[0]
        if su < 0:
            raise block.error(f"{separate.tag} is {su:g} in row {row + 1}; an uncertainty is at least 0.")
    return value, su


def occupancy_notes(labels: Sequence[str], occupancies: Sequence[float]) -> tuple[str, ...]:
    """What has to be said where atoms are there only in part; nothing where all are."""
    partial = dict.fromkeys(f"{name} {p:g}" for name, p in zip(labels, occupancies, strict=True) if p < 1)
    if not partial:
        return ()
    return (f"partial occupancy ({', '.join(partial)}): every sum takes the mean moment, occupancy times moment",)


def _optional(column: Column | None, row: int) -> str | None:
    return None if column is None else column.text(row)


def _occupancy(block: Block, column: Column | None, row: int, label: str) -> float:
    if column is None or column.text(row) is None:
        return 1.0
    value, su = block.number(column, row)
    slack = max(OCCUPANCY_SLACK, 0.0 if np.isnan(su) else 3 * su)
    if not 0 <= value <= 1 + slack:
        raise block.error(f"{column.tag} of {label} is {value:g}; it must lie between 0 and 1.")
    return min(value, 1.0)


def _element(block: Block, column: Column | None, row: int, label: str) -> str:
    """Element of a row, from its type symbol (charge left off), else from the letters its label begins with."""
    stated = _optional(column, row)
    if column is not None and stated:
        match = re.match(r"([A-Za-z]{1,2})(?![A-Za-z])", stated)
        symbol = match[1].capitalize() if match else ""
        if not _is_element(symbol):
            raise block.error(f"{column.tag} of {label} is {stated!r}, which is no element.")
        return symbol
    match = re.match(r"[A-Za-z]+", label)
    letters = match[0] if match else ""
    one, two = letters[:1].upper(), letters[:2].capitalize()
    has_two = len(letters) > 1 and _is_element(two)
    has_one = _is_element(one) and (one != "D" or len(letters) == 1)
    if has_two and (not has_one or letters[1].islower()):
        return two
    if has_two:
        raise block.error(f"the label {label!r} can mean {one} or {two}. Say which with _atom_site_type_symbol.")
    if not has_one or len(letters) > 2:
        raise block.error(f"the label {label!r} names no element. Give it with _atom_site_type_symbol.")
    return one


def _is_element(symbol: str) -> bool:
    return symbol != "X" and gemmi.Element(symbol).atomic_number > 0
