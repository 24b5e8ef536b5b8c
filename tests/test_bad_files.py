"""Structure files that must be refused, each with its exact message."""

from pathlib import Path

import pytest

import latticedip as ld
from latticedip.errors import FileError

GOOD = """data_good
_cell_length_a 6
_cell_length_b 6
_cell_length_c 5
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 120
_parent_space_group.child_transform_Pp_abc 'a,b,c;0,0,0'
loop_
_space_group_symop_magn_operation.id
_space_group_symop_magn_operation.xyz
1 x,y,z,+1
2 -y,x-y,z,+1
3 -x+y,-x,z,+1
loop_
_space_group_symop_magn_centering.id
_space_group_symop_magn_centering.xyz
1 x,y,z,+1
2 x,y,z+1/2,-1
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
_atom_site_occupancy
Mn1 Mn 0.25 0 0 1
Fe1 Fe 0.3333 0.6667 0.1 1
loop_
_atom_site_moment.label
_atom_site_moment.crystalaxis_x
_atom_site_moment.crystalaxis_y
_atom_site_moment.crystalaxis_z
_atom_site_moment.magnitude
Mn1 4.0(1) 0 1 4.12
Fe1 0 0 2 2
"""


def change(*pairs):
    """The good file with texts exchanged, each of which must be there exactly once."""
    text = GOOD
    for old, new in pairs:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    return text


MAGCIF = {
    "cell length missing": (change(("_cell_length_b 6\n", "")), "bad.mcif: _cell_length_b is missing."),
    "cell length negative": (
        change(("_cell_length_b 6", "_cell_length_b -6")),
        "bad.mcif: _cell_length_b is -6; a length must be 0.01 to 1e6 Å.",
    ),
    "cell length not a number": (
        change(("_cell_length_c 5", "_cell_length_c nan")),
        "bad.mcif: _cell_length_c is 'nan', which is not a number.",
    ),
    "cell length unknown": (
        change(("_cell_length_c 5", "_cell_length_c ?")),
        "bad.mcif: _cell_length_c is '?', but a number is needed.",
    ),
    "cell angle of 180": (
        change(("gamma 120", "gamma 180")),
        "bad.mcif: _cell_angle_gamma is 180; an angle must lie between 0 and 180 degrees.",
    ),
    "cell that does not close": (
        change(("alpha 90", "alpha 40"), ("_cell_angle_beta 90", "_cell_angle_beta 40")),
        "bad.mcif: the cell angles 40, 40, 120 close no cell (its volume would be zero or imaginary).",
    ),
    "operation that does not fit the cell": (
        change(("gamma 120", "gamma 90")),
        "bad.mcif: _space_group_symop_magn_operation.xyz '-y,x-y,z,+1' does not fit the cell: it would "
        "change its lengths or angles. Check the cell and the setting of the operations.",
    ),
    "operation without time reversal": (
        change(("2 -y,x-y,z,+1", "2 -y,x-y,z")),
        "bad.mcif: _space_group_symop_magn_operation.xyz '-y,x-y,z' in row 2 is not understood: its "
        "fourth part, time reversal +1 or -1, is missing.",
    ),
    "operation with code": (
        change(("2 -y,x-y,z,+1", "2 \"__import__('os').getpid(),x-y,z,+1\"")),
        "bad.mcif: _space_group_symop_magn_operation.xyz \"__import__('os').getpid(),x-y,z,+1\" in row 2 "
        "is not understood: \"__import__('os').getpid()\" is not understood from "
        "\"__import__('os').getpid()\" on.",
    ),
    "operation that is not one": (
        change(("2 -y,x-y,z,+1", "2 -y,2x-y,z,+1")),
        "bad.mcif: _space_group_symop_magn_operation.xyz '-y,2x-y,z,+1' in row 2 is not understood: its "
        "rotation part is not a matrix of whole numbers with determinant 1 or -1.",
    ),
    "operation left empty": (
        change(("2 -y,x-y,z,+1", "2 .")),
        "bad.mcif: _space_group_symop_magn_operation.xyz is '.' in row 2, but an operation is needed.",
    ),
    "operations that are no group": (
        change(("3 -x+y,-x,z,+1\n", "")),
        "bad.mcif: the operations of _space_group_symop_magn_operation.xyz are no group: '-y,x-y,z,+1' "
        "after '-y,x-y,z,+1' is not among them. An operation or a centring is missing or misspelt.",
    ),
    "identity missing": (
        change(("1 x,y,z,+1\n2 -y", "2 -y"), ("1 x,y,z,+1\n2 x,y,z+1/2,-1", "2 x,y,z+1/2,-1")),
        "bad.mcif: the operations of _space_group_symop_magn_operation.xyz do not hold the identity x,y,z.",
    ),
    "centring that turns": (
        change(("2 x,y,z+1/2,-1", "2 -x,-y,z+1/2,-1")),
        "bad.mcif: _space_group_symop_magn_centering.xyz '-x,-y,z+1/2,-1' turns; a centring only translates.",
    ),
    "centring without operations": (
        change(
            ("_space_group_symop_magn_operation.xyz", "_other.xyz"),
            ("_space_group_symop_magn_operation.id", "_other.id"),
        ),
        "bad.mcif: _space_group_symop_magn_centering.xyz stands without _space_group_symop_magn_operation.xyz.",
    ),
    "moment of no atom": (
        change(("\nFe1 0 0 2 2", "\nFe2 0 0 2 2")),
        "bad.mcif: _atom_site_moment.label 'Fe2' is the label of no atom. Known are: Mn1, Fe1. Did you mean 'Fe1'?",
    ),
    "moment listed twice": (
        change(("\nFe1 0 0 2 2", "\nMn1 0 0 2 2")),
        "bad.mcif: _atom_site_moment.label 'Mn1' stands in two rows. One moment per site is needed.",
    ),
    "moment without label": (
        change(("\nFe1 0 0 2 2", "\n. 0 0 2 2")),
        "bad.mcif: _atom_site_moment.label is '.' in row 2; every moment needs a label.",
    ),
    "moment not allowed": (
        change(("\nFe1 0 0 2 2", "\nFe1 1 0 2 .")),
        "bad.mcif: the moment of Fe1, (1, 0, 2) µB along a, b, c, is not allowed by the symmetry of its "
        "site, which leaves (0, 0, 2). Check the moment, the position and the operations.",
    ),
    "moment not a number": (
        change(("\nFe1 0 0 2 2", "\nFe1 0 0 NaN 2")),
        "bad.mcif: _atom_site_moment.crystalaxis_z is 'NaN' in row 2, which is not a number.",
    ),
    "moment beyond reason": (
        change(("\nFe1 0 0 2 2", "\nFe1 0 0 1e30 .")),
        "bad.mcif: the moment of Fe1 is given as [0.0, 0.0, 1e+30], beyond 1e+06 µB.",
    ),
    "moment in part": (
        change(("\nFe1 0 0 2 2", "\nFe1 0 ? 2 2")),
        "bad.mcif: _atom_site_moment.crystalaxis_y of Fe1 is '?' although its other components are given.",
    ),
    "moment unknown": (
        change(("\nFe1 0 0 2 2", "\nFe1 ? ? ? .")),
        "bad.mcif: the moment of Fe1 is stated as unknown (_atom_site_moment.crystalaxis_x ?). Give its "
        "components, or . for none.",
    ),
    "moment that misses its magnitude": (
        change(("\nMn1 4.0(1) 0 1 4.12", "\nMn1 4.0(1) 0 1 5")),
        "bad.mcif: _atom_site_moment.magnitude of Mn1 is 5 µB, but its components make 4.123 µB. Correct "
        "the one that is wrong.",
    ),
    "component column missing": (
        change(
            ("_atom_site_moment.crystalaxis_y\n", ""),
            ("Mn1 4.0(1) 0 1", "Mn1 4.0(1) 1"),
            ("\nFe1 0 0 2 2", "\nFe1 0 2 2"),
        ),
        "bad.mcif: _atom_site_moment.crystalaxis_y is missing beside _atom_site_moment.crystalaxis_x.",
    ),
    "moments without label column": (
        change(("_atom_site_moment.label", "_my_label")),
        "bad.mcif: _atom_site_moment.crystalaxis_x stands in a loop without labels (_atom_site_moment.label).",
    ),
    "no moments": (
        GOOD[: GOOD.index("loop_\n_atom_site_moment")],
        "bad.mcif: it lists no moments (_atom_site_moment.crystalaxis_x and sisters).",
    ),
    "grey group": (
        change(("2 x,y,z+1/2,-1", "2 x,y,z,-1")),
        "bad.mcif: the moment of Mn1, (4, 0, 1) µB along a, b, c, is not allowed by the symmetry of its "
        "site, which leaves (0, 0, 0). Check the moment, the position and the operations.",
    ),
    "atom label twice": (
        change(("Fe1 Fe", "Mn1 Fe")),
        "bad.mcif: _atom_site_label 'Mn1' stands for two atoms (row 2). Labels must differ.",
    ),
    "atom label missing": (
        change(("Fe1 Fe", "? Fe")),
        "bad.mcif: _atom_site_label is '?' in row 2; every atom needs a label.",
    ),
    "element unknown": (
        change(("Fe1 Fe", "Fe1 Qq")),
        "bad.mcif: _atom_site_type_symbol of Fe1 is 'Qq', which is no element.",
    ),
    "coordinate not a number": (
        change(("0.3333 0.6667", "0.3333 1/3")),
        "bad.mcif: _atom_site_fract_y is '1/3' in row 2, which is not a number.",
    ),
    "coordinate missing": (
        change(("0.3333 0.6667", "0.3333 ?")),
        "bad.mcif: _atom_site_fract_y is '?' in row 2, but a number is needed.",
    ),
    "coordinate far away": (
        change(("0.3333 0.6667", "0.3333 66667")),
        "bad.mcif: the fractional coordinates of Fe1 are [0.3333, 66667.0, 0.1], far outside any cell.",
    ),
    "coordinate column missing": (
        change(("_atom_site_fract_y", "_atom_site_other")),
        "bad.mcif: _atom_site_fract_y is missing beside _atom_site_fract_x.",
    ),
    "occupancy above one": (
        change(("0.1 1\n", "0.1 1.2\n")),
        "bad.mcif: _atom_site_occupancy of Fe1 is 1.2; it must lie between 0 and 1.",
    ),
    "atoms on one place": (
        change(("Fe1 Fe 0.3333 0.6667 0.1", "Fe1 Fe 0 0.25 0")),
        "bad.mcif: atoms Mn1 (number 1) and Fe1 (number 9) are 0.0000 Å apart. Two atoms cannot share a "
        "place: remove one, or give occupancies that add up to at most 1.",
    ),
    "images too close": (
        change(("Fe1 Fe 0.3333 0.6667", "Fe1 Fe 0.3375 0.6667")),
        "bad.mcif: atoms Fe1 (number 7) and Fe1 (number 8) are 0.0431 Å apart. Two atoms cannot share a "
        "place: remove one, or give occupancies that add up to at most 1.",
    ),
    "parent transformation with code": (
        change(("'a,b,c;0,0,0'", "\"__import__('os').getcwd(),b,c;0,0,0\"")),
        "bad.mcif: _parent_space_group.child_transform_Pp_abc \"__import__('os').getcwd(),b,c;0,0,0\" is "
        "not understood: \"__import__('os').getcwd()\" is not understood from \"__import__('os').getcwd()\" "
        "on.",
    ),
    "parent transformation flat": (
        change(("'a,b,c;0,0,0'", "'a,a,c;0,0,0'")),
        "bad.mcif: _parent_space_group.child_transform_Pp_abc 'a,a,c;0,0,0' is not understood: its "
        "vectors span no volume.",
    ),
    "parent transformations that differ": (
        change(("'a,b,c;0,0,0'", "'a,b,c;0,0,0'\n_magnetic_space_group.transform_from_parent_Pp_abc 'a,b,2c;0,0,0'")),
        "bad.mcif: _parent_space_group.child_transform_Pp_abc and "
        "_magnetic_space_group.transform_from_parent_Pp_abc state different changes of cell. Keep the "
        "right one.",
    ),
    "modulated operations": (
        change(("_space_group_symop_magn_operation.xyz", "_space_group_symop_magn_ssg_operation.algebraic")),
        "bad.mcif: it describes a modulation (_space_group_symop_magn_ssg_operation.algebraic), but gives no "
        "modulation wave vector (_cell_wave_vector.x, .y and .z).",
    ),
    "modulated, prototype": (
        change(("_space_group_symop_magn_operation.xyz", "_space_group_symop.magn_ssg_operation_algebraic")),
        "bad.mcif: it describes a modulation (_space_group_symop.magn_ssg_operation_algebraic), but gives no "
        "modulation wave vector (_cell_wave_vector.x, .y and .z).",
    ),
    "modulated cell": (
        change(("loop_\n_space_group_symop_magn_operation.id", "_cell_wave_vector_x 0.2\nloop_\n_id")),
        "bad.mcif: _cell_wave_vector.y is missing beside _cell_wave_vector_x.",
    ),
    "modulation by dimension": (
        change(("_cell_length_a 6", "_cell_length_a 6\n_cell_modulation_dimension 1")),
        "bad.mcif: it describes a modulation (_cell_modulation_dimension), but gives no modulation "
        "wave vector (_cell_wave_vector.x, .y and .z).",
    ),
    "modulation without its operations": (
        change(("_cell_length_a 6", "_cell_length_a 6\n_cell_wave_vector.xyz [0 0 0.2]")),
        "bad.mcif: it describes a modulation (_cell_wave_vector.xyz), and _space_group_symop_magn_operation.xyz alone "
        "does not say how that changes. Give _space_group_symop_magn_ssg_operation.algebraic; where all atoms of the "
        "cell are listed: 'x1,x2,x3,x4,+1'.",
    ),
    "Fourier moments alone": (
        GOOD[: GOOD.index("loop_\n_atom_site_moment")] + "loop_\n_atom_site_moment_Fourier_param.cos\n1.0\n",
        "bad.mcif: it describes a modulation (_atom_site_moment_Fourier_param.cos), but gives no modulation "
        "wave vector (_cell_wave_vector.x, .y and .z).",
    ),
    "Fourier moments": (
        GOOD + "loop_\n_atom_site_moment_Fourier_param_cos\n1.0\n",
        "bad.mcif: it describes a modulation (_atom_site_moment_Fourier_param_cos), but gives no modulation "
        "wave vector (_cell_wave_vector.x, .y and .z).",
    ),
    "OG setting": (
        change(("_symop_magn_centering.xyz", "_symop_magn_OG_centering.xyz")),
        "bad.mcif: data block good is in the OG setting (_space_group_symop_magn_OG_centering.xyz), "
        "whose time reversals follow from a wave vector; it is not read. Give the same structure in the "
        "BNS setting.",
    ),
    "OG wave vector": (
        change(("_cell_length_a 6", "_cell_length_a 6\n_space_group_magn.OG_wavevector_kxkykz [0 0 1/2]")),
        "bad.mcif: data block good is in the OG setting (_space_group_magn.OG_wavevector_kxkykz), whose "
        "time reversals follow from a wave vector; it is not read. Give the same structure in the BNS "
        "setting.",
    ),
    "non-magnetic operations only": (
        change(
            ("_space_group_symop_magn_operation.xyz", "_space_group_symop_operation_xyz"),
            ("_space_group_symop_magn_operation.id", "_space_group_symop_id"),
            ("1 x,y,z,+1\n2 -y,x-y,z,+1\n3 -x+y,-x,z,+1", "1 x,y,z\n2 -y,x-y,z\n3 -x+y,-x,z"),
            ("_space_group_symop_magn_centering.id", "_a"),
            ("_space_group_symop_magn_centering.xyz", "_b"),
        ),
        "bad.mcif: it lists moments, but only non-magnetic symmetry (_space_group_symop_operation_xyz), "
        "which does not say how moments change. Give _space_group_symop_magn_operation.xyz, or all atoms "
        "in P 1.",
    ),
    "moment images that contradict": (
        change(
            (
                "_space_group_symop_magn_operation.xyz",
                "_space_group_symop_magn_operation.xyz\n_space_group_symop_magn_operation.mxmymz",
            ),
            (
                "1 x,y,z,+1\n2 -y,x-y,z,+1\n3 -x+y,-x,z,+1",
                "1 x,y,z,+1 mx,my,mz\n2 -y,x-y,z,+1 my,mx-my,mz\n3 -x+y,-x,z,+1 .",
            ),
        ),
        "bad.mcif: _space_group_symop_magn_operation.mxmymz 'my,mx-my,mz' in row 2 does not belong to "
        "the operation '-y,x-y,z,+1'.",
    ),
    "one item in two spellings": (
        change(("_cell_length_a 6", "_cell_length_a 6\n_cell.length_a 7")),
        "bad.mcif: _cell_length_a and _cell.length_a are two spellings of one item, but their values differ. Keep one.",
    ),
    "list not closed": (
        change(("_cell_length_a 6", "_k [0 0\n_cell_length_a 6")),
        "bad.mcif: line 2: a list that begins with '[' is not closed by ']' in '_k [0 0'.",
    ),
    "loop of the wrong length": (
        change(("\nFe1 0 0 2 2", "\nFe1 0 0 2")),
        "bad.mcif: line 29: the CIF syntax is broken (Wrong number of values in loop _atom_site_moment.*).",
    ),
    "string not closed": (
        change(("'a,b,c;0,0,0'", "'a,b,c;0,0,0")),
        "bad.mcif: line 8: the CIF syntax is broken (unterminated 'string') in "
        '"_parent_space_group.child_transform_Pp_abc \'a,b,c;0,0,0".',
    ),
    "tag twice": (
        change(("_cell_length_a 6", "_cell_length_a 6\n_cell_length_A 6")),
        "bad.mcif: line 3: the CIF syntax is broken (duplicate tag _cell_length_A) in '_cell_length_A 6'.",
    ),
    "zero bytes": (GOOD.encode() + b"\x00\x01", "bad.mcif: this is not a text file (it holds zero bytes)."),
    "UTF-16": (GOOD.encode("utf-16"), "bad.mcif: this is not a text file (it holds zero bytes)."),
    "two structures": (
        GOOD + GOOD.replace("data_good", "data_other"),
        "bad.mcif: 2 data blocks hold a structure: good, other. Say which with block.",
    ),
    "no structure": (
        "data_empty\n_x 1\n",
        "bad.mcif: no data block holds a structure (a cell, _cell_length_a, and atoms, _atom_site_fract_x).",
    ),
    "a page of text": (
        "Dear reader, this is no CIF.\n",
        "bad.mcif: line 1: the CIF syntax is broken (expected block header (data_)) in 'Dear reader, this is no CIF.'.",
    ),
    "empty": ("", "bad.mcif: the file is empty."),
    "only blanks": (" \n\n", "bad.mcif: the file is empty."),
    "spherical angle out of range": (
        change(
            ("crystalaxis_x", "spherical_modulus"),
            ("crystalaxis_y", "spherical_polar"),
            ("crystalaxis_z", "spherical_azimuthal"),
            ("Mn1 4.0(1) 0 1 4.12", "Mn1 4.0(1) 190 1 4.0"),
        ),
        "bad.mcif: the moment of Mn1 has modulus 4 and polar angle 190; they must be at least 0 and between 0 and 180.",
    ),
    "two systems that differ": (
        change(
            ("_atom_site_moment.magnitude", "_atom_site_moment.Cartn"),
            ("Mn1 4.0(1) 0 1 4.12", "Mn1 4.0(1) 0 1 [4 0 1]"),
            ("\nFe1 0 0 2 2", "\nFe1 0 0 2 [0 0 -2]"),
        ),
        "bad.mcif: the moment of Fe1 is given in two coordinate systems that differ by 4 µB. Keep the right one.",
    ),
    "list of two numbers": (
        GOOD[: GOOD.index("loop_\n_atom_site_moment")]
        + "loop_\n_atom_site_moment.label\n_atom_site_moment.crystalaxis\nMn1 [1 2]\n",
        "bad.mcif: _atom_site_moment.crystalaxis of Mn1 is '[1 2]', not a list of three numbers.",
    ),
}

HEAD = """data_plain
_cell_length_a 4
_cell_length_b 4
_cell_length_c 4
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
"""
ATOMS = "loop_\n_atom_site_label\n_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\n"

PLAIN = {
    "no symmetry": (
        HEAD + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: it gives no symmetry: neither operations nor a space group. List the operations "
        "(_space_group_symop_operation_xyz), or give a Hall symbol (_space_group_name_Hall). Where all "
        "atoms of the cell are listed: _space_group_name_H-M_alt 'P 1'.",
    ),
    "unknown symbol": (
        HEAD + "_space_group_name_H-M_alt 'Q 1 2 3'\n" + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: the space group symbol 'Q 1 2 3' is not known. List the operations "
        "(_space_group_symop_operation_xyz), or give a Hall symbol (_space_group_name_Hall).",
    ),
    "two origins": (
        HEAD + "_space_group_name_H-M_alt 'F d -3 m'\n" + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: the space group symbol 'F d -3 m' has two origins (F d -3 m:1, F d -3 m:2). List the "
        "operations (_space_group_symop_operation_xyz), or give a Hall symbol (_space_group_name_Hall).",
    ),
    "number with several settings": (
        HEAD + "_space_group_IT_number 62\n" + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: the space group number 62 has several settings (P n m a, P m n b, P b n m, P c m n, P "
        "m c n, P n a m). Give the symbol of the right one (_space_group_name_H-M_alt), or list the "
        "operations (_space_group_symop_operation_xyz).",
    ),
    "number unknown": (
        HEAD + "_space_group_IT_number 231\n" + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: the space group number '231' is not known. List the operations "
        "(_space_group_symop_operation_xyz), or give a Hall symbol (_space_group_name_Hall).",
    ),
    "Hall symbol unknown": (
        HEAD + "_space_group_name_Hall 'Q 1'\n" + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: the Hall symbol 'Q 1' is not understood: not a centring type: Q.",
    ),
    "symbol against operations": (
        HEAD
        + "_space_group_name_H-M_alt 'F m -3 m'\nloop_\n_symmetry_equiv_pos_as_xyz\nx,y,z\n"
        + ATOMS
        + "Ni1 0 0 0\n",
        "bad.cif: _symmetry_equiv_pos_as_xyz lists 1 operations, but the space group 'F m -3 m' has 192. "
        "Remove the one that is wrong.",
    ),
    "operation misspelt": (
        HEAD + "loop_\n_symmetry_equiv_pos_as_xyz\nx,y,z\n-x,-y,-w\n" + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: _symmetry_equiv_pos_as_xyz '-x,-y,-w' in row 2 is not understood: '-w' is not "
        "understood from '-w' on.",
    ),
    "magnetic operation among others": (
        HEAD + "loop_\n_symmetry_equiv_pos_as_xyz\nx,y,z,+1\n" + ATOMS + "Ni1 0 0 0\n",
        "bad.cif: _symmetry_equiv_pos_as_xyz 'x,y,z,+1' in row 1 is not understood: it has 4 parts, not 3.",
    ),
    "label of two elements": (
        HEAD + "_space_group_name_H-M_alt 'P 1'\n" + ATOMS + "CO1 0 0 0\n",
        "bad.cif: the label 'CO1' can mean C or Co. Say which with _atom_site_type_symbol.",
    ),
    "label of no element": (
        HEAD + "_space_group_name_H-M_alt 'P 1'\n" + ATOMS + "Wat1 0 0 0\n",
        "bad.cif: the label 'Wat1' names no element. Give it with _atom_site_type_symbol.",
    ),
    "atoms too close": (
        HEAD + "_space_group_name_H-M_alt 'P 1'\n" + ATOMS + "Ni1 0 0 0\nNi2 0 0 0.01\n",
        "bad.cif: atoms Ni1 (number 1) and Ni2 (number 2) are 0.0400 Å apart. Two atoms cannot share a "
        "place: remove one, or give occupancies that add up to at most 1.",
    ),
    "no labels": (
        HEAD + "_space_group_name_H-M_alt 'P 1'\n" + ATOMS.replace("_atom_site_label", "_id") + "1 0 0 0\n",
        "bad.cif: the atoms carry no labels (_atom_site_label).",
    ),
    "only dummies": (
        HEAD + "_space_group_name_H-M_alt 'P 1'\n" + ATOMS + "_atom_site_calc_flag\nX1 0 0 0 dum\n",
        "bad.cif: it lists no atoms.",
    ),
    "displacive modulation": (
        HEAD + "_space_group_name_H-M_alt 'P 1'\n" + ATOMS + "Ni1 0 0 0\nloop_\n_cell_wave_vector_seq_id\n1\n",
        "bad.cif: this is a modulated structure in superspace (_cell_wave_vector_seq_id), which is not "
        "read. Give a commensurate description in the magnetic cell, or the average structure as "
        "[crystal] and the modulation as k, cosine and sine in a study.",
    ),
}


@pytest.mark.parametrize("name", MAGCIF)
def test_bad_magcif(name, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    text, message = MAGCIF[name]
    Path("bad.mcif").write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(FileError) as caught:
        ld.read_ordering("bad.mcif")
    assert str(caught.value) == message


@pytest.mark.parametrize("name", PLAIN)
def test_bad_cif(name, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    text, message = PLAIN[name]
    Path("bad.cif").write_bytes(text.encode())
    with pytest.raises(FileError) as caught:
        ld.read_crystal("bad.cif")
    assert str(caught.value) == message


def test_the_good_file_is_read(tmp_path):
    path = tmp_path / "good.mcif"
    path.write_text(GOOD, encoding="utf-8")
    assert ld.read_ordering(path).crystal.n_sites == 8
