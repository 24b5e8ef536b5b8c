"""Magnetic structures of the literature written as magCIF and expanded.

Cells, coordinates and moments are from memory of the papers named beside each; what is checked is the arrangement of
the moments, which is beyond doubt, not the last digit of a parameter.
"""

import numpy as np
import pytest

import latticedip as ld

# MnF2, P4_2'/mnm' (BNS 136.499). Rutile structure; moments along c, the corner up and the body centre down:
# R. A. Erickson, Phys. Rev. 90, 779 (1953). a, c and u after Jauch, Schneider and Dachs, Solid State Commun. 1983.
MNF2 = """data_MnF2
_cell_length_a 4.8734
_cell_length_b 4.8734
_cell_length_c 3.3099
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_magn.number_BNS '136.499'
loop_
_space_group_symop_magn_operation.id
_space_group_symop_magn_operation.xyz
1 x,y,z,+1
2 -x,-y,z,+1
3 -y+1/2,x+1/2,z+1/2,-1
4 y+1/2,-x+1/2,z+1/2,-1
5 -x+1/2,y+1/2,-z+1/2,+1
6 x+1/2,-y+1/2,-z+1/2,+1
7 y,x,-z,-1
8 -y,-x,-z,-1
9 -x,-y,-z,+1
10 x,y,-z,+1
11 y+1/2,-x+1/2,-z+1/2,-1
12 -y+1/2,x+1/2,-z+1/2,-1
13 x+1/2,-y+1/2,z+1/2,+1
14 -x+1/2,y+1/2,z+1/2,+1
15 -y,-x,z,-1
16 y,x,z,-1
loop_
_atom_site_label
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
Mn1 0 0 0
F1 0.305 0.305 0
loop_
_atom_site_moment.label
_atom_site_moment.crystalaxis_x
_atom_site_moment.crystalaxis_y
_atom_site_moment.crystalaxis_z
Mn1 0 0 5
"""

# LaMnO3, Pn'ma' (BNS 62.448): ferromagnetic planes across b of Pnma, stacked antiferromagnetically, moments along a
# (the b axis of Pbnm): E. O. Wollan and W. C. Koehler, Phys. Rev. 100, 545 (1955); size after
# F. Moussa et al., Phys. Rev. B 54, 15149 (1996).
LAMNO3 = """data_LaMnO3
_cell_length_a 5.742
_cell_length_b 7.668
_cell_length_c 5.532
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_magn.number_BNS '62.448'
loop_
_space_group_symop_magn_operation.id
_space_group_symop_magn_operation.xyz
1 x,y,z,+1
2 -x+1/2,-y,z+1/2,-1
3 -x,y+1/2,-z,+1
4 x+1/2,-y+1/2,-z+1/2,-1
5 -x,-y,-z,+1
6 x+1/2,y,-z+1/2,-1
7 x,-y+1/2,z,+1
8 -x+1/2,y+1/2,z+1/2,-1
loop_
_atom_site_label
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
La1 0.549 0.25 0.01
Mn1 0 0 0.5
O1 -0.014 0.25 -0.07
O2 0.309 0.039 0.224
loop_
_atom_site_moment.label
_atom_site_moment.crystalaxis_x
_atom_site_moment.crystalaxis_y
_atom_site_moment.crystalaxis_z
Mn1 3.87(3) 0 0
"""


def read(tmp_path, text):
    path = tmp_path / "published.mcif"
    path.write_text(text, encoding="utf-8")
    return ld.read_ordering(path)


def test_mnf2_is_a_two_sublattice_antiferromagnet_along_c(tmp_path):
    ordering = read(tmp_path, MNF2)
    crystal = ordering.crystal
    manganese, fluorine = crystal.find("Mn1"), crystal.find("F1")
    assert crystal.positions[list(manganese)] == pytest.approx(np.array([[0, 0, 0], [0.5, 0.5, 0.5]]))
    assert ordering.moments()[0, list(manganese)] == pytest.approx(np.array([[0, 0, 5], [0, 0, -5]]))
    # Rutile: fluorine at ±(u, u, 0) and ±(1/2 + u, 1/2 - u, 1/2).
    u = 0.305
    expected = np.array([[0.5 - u, 0.5 + u, 0.5], [u, u, 0], [1 - u, 1 - u, 0], [0.5 + u, 0.5 - u, 0.5]])
    assert crystal.positions[list(fluorine)] == pytest.approx(expected)


def test_lamno3_stacks_ferromagnetic_planes_along_b(tmp_path):
    ordering = read(tmp_path, LAMNO3)
    crystal = ordering.crystal
    assert crystal.n_sites == 20
    manganese = list(crystal.find("Mn1"))
    assert len(manganese) == 4
    for i in manganese:
        sign = 1 if crystal.positions[i, 1] == 0 else -1
        assert ordering.moments()[0, i] == pytest.approx([3.87 * sign, 0, 0])
        assert ordering.moment_su[i] == pytest.approx([0.03, np.nan, np.nan], nan_ok=True)
    assert ordering.net_moment == pytest.approx([0, 0, 0], abs=1e-12)
