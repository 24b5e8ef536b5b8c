"""Standard uncertainties of site positions: parameters behind them, read from files, carried, written, used."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.crystal.uncertain import carried_su, parameter_steps
from latticedip.errors import FileError, InputError
from latticedip.files.write import write_ordering
from tests.commands import box_cif

ATOMS = """Mn1 Mn 0 0 0.1230(4)
F1 F 0.2000(3) 0.4000(6) 0.41(1)
O1 O 0.13(2) 0.66 0.7
"""
HEXAGONAL = box_cif(ATOMS, 5.0, 5.0, 7.0, gamma=120, name="hexagonal", group="P 3 m 1")


def read(tmp_path, text: str, name: str = "a.cif") -> ld.Crystal:
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    return ld.read_crystal(path)


@pytest.mark.parametrize(
    ("allowed", "su", "steps"),
    [
        (np.eye(3), [0.1, 0.0, np.nan], [[0.1], [0], [0]]),
        # (x, x, x): one parameter, all coordinates together.
        (np.ones((3, 3)) / 3, [0.1, 0.1, 0.1], [[0.1], [0.1], [0.1]]),
        (np.ones((3, 3)) / 3, [0.1, np.nan, np.nan], [[0.1], [0.1], [0.1]]),
        # (x, 2x, z), with an uncertainty of 2x rounded to one digit.
        ([[0.2, 0.4, 0], [0.4, 0.8, 0], [0, 0, 1]], [0.004, 0.008, 0], [[0.004], [0.008], [0]]),
        # What is stated contradicts the symmetry: it is not that of the refinement.
        (np.diag([0.0, 0, 1]), [0.1, 0.2, 0.3], np.diag([0.1, 0.2, 0.3])),
        (np.eye(3), [np.nan] * 3, np.zeros((3, 0))),
        (np.zeros((3, 3)), [0.1, 0, 0], [[0.1], [0], [0]]),
    ],
)
def test_parameters_behind_coordinates(allowed, su, steps):
    found = parameter_steps(np.array(allowed), np.array(su))
    np.testing.assert_allclose(found @ found.T, np.array(steps) @ np.array(steps).T, atol=1e-12)
    assert found.shape[1] == np.shape(steps)[1]


def test_carried_by_an_operation():
    mirror = np.array([[0, -1.0, 0], [-1, 0, 0], [0, 0, 1]])
    np.testing.assert_allclose(carried_su(mirror, np.eye(3), np.array([0.1, 0.2, np.nan])), [0.2, 0.1, np.nan])
    turn = np.array([[0, -1.0, 0], [1, -1, 0], [0, 0, 1]])
    # x − 2x = −x is as certain as x, where the two are one parameter.
    special = np.array([[0.2, 0.4, 0], [0.4, 0.8, 0], [0, 0, 1]])
    np.testing.assert_allclose(carried_su(turn, special, np.array([0.1, 0.2, 0.3])), [0.2, 0.1, 0.3])
    np.testing.assert_allclose(carried_su(turn, np.eye(3), np.array([0.1, 0.2, 0.3])), [0.2, np.hypot(0.1, 0.2), 0.3])


def test_read_from_a_cif_and_carried_through_the_expansion(tmp_path):
    crystal = read(tmp_path, HEXAGONAL)
    np.testing.assert_allclose(crystal.position_su[crystal.find("Mn1")[0]], [np.nan, np.nan, 4e-4])
    fluorine = crystal.find("F1")
    assert len(fluorine) == 3
    for i in fluorine:
        x, y, _ = crystal.positions[i]
        # One parameter: coordinates are ±0.2 or ±0.4 and as uncertain as 0.2000(3), 0.4000(6).
        expected = [6e-4 if min(abs(c - 0.4), abs(c - 0.6)) < 1e-9 else 3e-4 for c in (x, y)]
        np.testing.assert_allclose(crystal.position_su[i], [*expected, 0.01])
    oxygen = list(crystal.find("O1"))
    known = ~np.isnan(crystal.position_su[oxygen])
    assert known[:, :2].any(axis=1).all() and not known[:, 2].any()


def test_columns_of_their_own(tmp_path):
    text = HEXAGONAL.split("loop_")[0] + (
        "loop_\n_atom_site.label\n_atom_site.type_symbol\n_atom_site.fract_x\n_atom_site.fract_x_su\n"
        "_atom_site.fract_y\n_atom_site.fract_z\n_atom_site.fract_z_su\nO1 O 0.13 0.02 0.56 0.7 .\n"
    )
    text = text.replace("'P 3 m 1'", "'P 1'")
    np.testing.assert_allclose(read(tmp_path, text).position_su, [[0.02, np.nan, np.nan]])
    with pytest.raises(FileError) as caught:
        read(tmp_path, text.replace("0.13 0.02", "0.13 -0.02"), "b.cif")
    assert str(caught.value) == (
        f"{tmp_path / 'b.cif'}: _atom_site.fract_x_su is -0.02 in row 1; an uncertainty is at least 0."
    )


def test_unknown_without_a_file():
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    assert np.isnan(crystal.position_su).all() and not crystal.position_su.flags.writeable
    assert np.isnan(ld.Crystal.from_ase(crystal.to_ase()).position_su).all()
    for bad in ([[0, 0]], [[0, 0, -0.1]], [[0, 0, np.inf]], [["a", "b", "c"]]):
        with pytest.raises(InputError) as caught:
            ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"], position_su=bad)
        assert str(caught.value) == "position_su must hold numbers of at least 0 or NaN in shape (1, 3)."


@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, 0), (0.21, 0, 0.1)], ids=["uniform", "doubled", "wave"])
def test_round_trip_through_a_magcif(tmp_path, k):
    crystal = read(tmp_path, HEXAGONAL)
    moments = np.where((np.array(crystal.symbols) == "Mn")[:, None], [0, 0, 3.0], 0)
    su = np.where((np.array(crystal.symbols) == "Mn")[:, None], [np.nan, np.nan, 0.1], np.nan)
    path = tmp_path / "out.mcif"
    write_ordering(ld.Ordering(crystal, moments, k, moment_su=su), path)
    back = ld.read_ordering(path)
    copies = back.crystal.n_sites // crystal.n_sites
    expected = np.tile(crystal.position_su / [copies, 1, 1], (copies, 1))
    np.testing.assert_allclose(back.crystal.position_su, expected, rtol=1e-15)
    if k[0] in (0, 0.5):
        np.testing.assert_allclose(back.moment_su, np.tile(su, (copies, 1)), rtol=1e-12)


def test_moments_on_a_line_that_symmetry_fixes(tmp_path):
    """(m, 2m, 0) on a mirror plane of a hexagonal cell: one parameter, carried to its images."""
    text = """data_m
_cell_length_a 5.0
_cell_length_b 5.0
_cell_length_c 7.0
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 120
loop_
_space_group_symop_magn_operation.id
_space_group_symop_magn_operation.xyz
1 x,y,z,+1
2 -y,x-y,z,+1
3 -x+y,-x,z,+1
4 -y,-x,-z,+1
5 -x+y,y,-z,+1
6 x,x-y,-z,+1
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
Mn1 Mn 0.3 0.6 0
loop_
_atom_site_moment.label
_atom_site_moment.crystalaxis_x
_atom_site_moment.crystalaxis_y
_atom_site_moment.crystalaxis_z
Mn1 1.0(1) 2.0(2) 0
"""
    path = tmp_path / "m.mcif"
    path.write_text(text, encoding="utf-8")
    ordering = ld.read_ordering(path)
    assert ordering.crystal.n_sites == 3
    for su, moment in zip(ordering.moment_su, ordering.crystal.to_crystal_axes(ordering.moments()[0]), strict=True):
        np.testing.assert_allclose(su[:2], 0.1 * np.abs(moment[:2]), atol=1e-12)
    # All moments are 1 ± 0.1 times themselves: so are the fields.
    found = ld.local_field(ordering, [[0.1, 0.3, 0.35]])
    np.testing.assert_allclose(found.size_su_T, 0.1 * found.size_T, rtol=1e-6)


def test_fields_take_the_uncertainties_of_the_sites(tmp_path):
    """Finite differences of the parameters of the file: z of Mn1, (x, 2x) and z of F1."""

    def build(mn_z: float = 0.123, x: float = 0.2, f_z: float = 0.41) -> ld.Crystal:
        text = HEXAGONAL.replace("0.1230(4)", f"{mn_z!r}(0)").replace("0.2000(3)", repr(x))
        text = text.replace("0.4000(6)", repr(2 * x)).replace("0.41(1)", repr(f_z))
        text = text.replace("0.13(2)", "0.13")
        return read(tmp_path, text, "moved.cif")

    def field(crystal: ld.Crystal) -> np.ndarray:
        ions = np.array([s in ("Mn", "F") for s in crystal.symbols])
        ordering = ld.Ordering(crystal, np.where(ions[:, None], [0.5, 0.2, 3.0], 0))
        probes = [ld.Probe(site=site, particle=nucleus) for site, nucleus in (("Mn1", "55Mn"), ("F1", "19F"))]
        probes.append(ld.Probe((0.45, 0.3, 0.1)))
        return ld.local_field(ordering, probes, tol=1e-12)

    base = field(read(tmp_path, HEXAGONAL.replace("0.13(2)", "0.13")))
    covariance = np.zeros((5, 3, 3))
    for name, value, su in (("mn_z", 0.123, 4e-4), ("x", 0.2, 3e-4), ("f_z", 0.41, 0.01)):
        step = 1e-5
        ends = [field(build(**{name: value + sign * step})).total for sign in (1, -1)]
        change = (ends[0] - ends[1]) / (2 * step) * su
        covariance += change[:, :, None] * change[:, None, :]
    np.testing.assert_allclose(base.uncertainty.covariance_T2, covariance, rtol=1e-4, atol=1e-12)
    assert np.isfinite(base.size_su_T).all()
    plain = field(build())
    assert np.isnan(plain.size_su_T).all()


def test_uncertainties_beyond_a_cell_are_refused(tmp_path):
    column = "_atom_site_fract_z\n"
    text = box_cif("Mn1 Mn 0 0 0.123 1e300\n", 5.0).replace(column, f"{column}_atom_site_fract_z_su\n")
    with pytest.raises(FileError) as caught:
        read(tmp_path, text)
    assert str(caught.value).endswith(
        "the standard uncertainty of a fractional coordinate of Mn1 is 1e+300; at most 1, a whole cell, is taken."
    )
    why = (
        "position_su holds a standard uncertainty of 1e+300 in a fractional coordinate; at most 1, a whole cell, is "
        "taken."
    )
    with pytest.raises(InputError) as caught:
        ld.Probe([0.1, 0.2, 0.3], position_su=[0, 0, 1e300])
    assert str(caught.value) == why
