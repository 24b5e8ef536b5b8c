"""Lowest dipolar modes in print, found without being told where to look.

Luttinger and Tisza, Phys. Rev. 70, 954 (1946), erratum 72, 257 (1947); Palmer and Chalker, PRB 62, 488 (2000), and
Misra and Felsteiner, PRB 15, 4309 (1977), from memory. Wave vectors of the prints are in units 2π/a of the cube.
"""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.analysis.modes import half_vectors, lowest_mode, lowest_modes, modes_at
from latticedip.analysis.modes_bands import eigenvalues
from tests.published.helpers import CENTRINGS, CUBIC
from tests.reference.constants import DIPOLE_EV

A, MOMENT = 3.7, 2.0
SITES = np.array([[0, 0, 0], [0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 4
AXES = np.array([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]]) / np.sqrt(3)
EDGE = np.sqrt(2) / 4


def array(name: str) -> ld.Crystal:
    return ld.Crystal(A * CUBIC[name][0], [[0, 0, 0]], ["Fe"])


def in_C(energy_eV: float, name: str) -> float:
    """E = C n µ², n dipoles per volume."""
    return energy_eV * A**3 / (DIPOLE_EV * MOMENT**2 * CUBIC[name][1])


def in_cube(k, name: str) -> list[float]:
    """Magnitudes in units 2π/a of the cube, sorted; the vector nearest to the origin that is the same modulo 1."""
    shifts = np.stack(np.meshgrid(*([-1, 0, 1],) * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    images = (np.asarray(k) + shifts) @ np.linalg.inv(CUBIC[name][0]).T
    return sorted(np.abs(images[np.argmin(np.linalg.norm(images, axis=1))]))


def pyrochlore(a: float = 10.1) -> ld.Crystal:
    primitive = CUBIC["fcc"][0]
    return ld.Crystal(a * primitive, SITES @ np.linalg.inv(primitive), ["Gd"] * 4)


def in_D(energy_eV: float, a: float = 10.1) -> float:
    return energy_eV * (EDGE * a) ** 3 / DIPOLE_EV


def test_simple_cubic():
    """−2.676 (printed), k = (½,½,0) with moments along [001]."""
    mode = lowest_mode(array("sc"), {"Fe": MOMENT})
    assert in_C(mode.energy_per_ion_eV, "sc") == pytest.approx(-2.676, abs=1e-3)
    assert in_C(mode.energy_per_ion_eV, "sc") == pytest.approx(-2.6767886844, abs=1e-9)
    assert sorted(np.abs(mode.k)) == [0, 0.5, 0.5]
    assert mode.equal_moments
    # The moment lies along the axis of the zero of k.
    assert np.abs(mode.components[0]) == pytest.approx(2 * (mode.k == 0), abs=1e-12)
    # The shape of the sample does not matter to it.
    sphere = lowest_mode(array("sc"), {"Fe": MOMENT}, sample=ld.Sample.sphere())
    assert sphere.energy_per_ion_eV == mode.energy_per_ion_eV
    assert sphere.k.tolist() == mode.k.tolist()


@pytest.mark.parametrize("name", ["bcc", "fcc"])
def test_ferromagnet_is_lowest_of_all(name):
    """−2π/3 at N = 0, at k = 0; in a sphere only approached by long transverse waves."""
    mode = lowest_mode(array(name), {"Fe": MOMENT})
    assert in_C(mode.energy_per_ion_eV, name) == pytest.approx(-2 * np.pi / 3, abs=1e-9)
    assert mode.k.tolist() == [0, 0, 0]
    assert mode.equal_moments
    sphere = lowest_mode(array(name), {"Fe": MOMENT}, sample=ld.Sample.sphere())
    assert sphere.k is None
    assert in_C(sphere.energy_per_ion_eV, name) == pytest.approx(-2 * np.pi / 3, abs=1e-9)
    assert in_C(sphere.uniform_energy_per_ion_eV, name) == pytest.approx(0, abs=1e-9)


@pytest.mark.parametrize(
    ("name", "printed", "digits", "k"),
    [("bcc", -1.986, -1.9859209288, [0, 0.5, 0.5]), ("fcc", -1.808, -1.8075736338, [0.5, 0.5, 0.5])],
)
def test_lowest_with_zero_net_moment(name, printed, digits, k):
    """Of the arrays that the print considers, those with 2k a lattice vector, the lowest without net moment."""
    found = modes_at(array(name), {"Fe": MOMENT}, half_vectors(include_zero=False))
    lowest = min(found, key=lambda mode: mode.energy_per_ion_eV)
    assert in_C(lowest.energy_per_ion_eV, name) == pytest.approx(printed, abs=5e-4)
    assert in_C(lowest.energy_per_ion_eV, name) == pytest.approx(digits, abs=1e-9)
    assert in_cube(lowest.k, name) == pytest.approx(k, abs=1e-12)
    assert lowest.equal_moments
    moment = lowest.components[0]
    vector = lowest.k @ np.linalg.inv(CUBIC[name][0]).T
    if name == "fcc":
        # In the plane across k, where the direction is free.
        assert lowest.degeneracy == 2
        assert abs(moment @ vector) < 1e-9
    else:
        # Along [1−10] for k = (½,½,0): in the plane of the two non-zero parts of k, across k.
        assert lowest.degeneracy == 1
        assert abs(moment @ vector) < 1e-9
        assert sorted(np.abs(moment)) == pytest.approx([0, np.sqrt(2), np.sqrt(2)], abs=1e-9)


def test_bands_of_the_table():
    """bcc (½,½,0) along z −1.3383943422; fcc (1,0,0) across −1.0834664177 and along +2.1669328354."""
    bcc = eigenvalues(array("bcc"), {"Fe": MOMENT}, [CUBIC["bcc"][0] @ [0.5, 0.5, 0]])[0]
    assert in_C(bcc[1], "bcc") == pytest.approx(-1.3383943422, abs=1e-9)
    fcc = eigenvalues(array("fcc"), {"Fe": MOMENT}, [CUBIC["fcc"][0] @ [1, 0, 0]])[0]
    assert [in_C(e, "fcc") for e in fcc] == pytest.approx([-1.0834664177, -1.0834664177, 2.1669328354], abs=1e-9)


@pytest.mark.parametrize("name", ["sc", "bcc", "fcc"])
def test_the_cubic_cell_gives_the_same(name):
    crystal = ld.Crystal(A * np.eye(3), CENTRINGS[name], ["Fe"] * len(CENTRINGS[name]))
    mode = lowest_mode(crystal, {"Fe": MOMENT})
    expected = {"sc": -2.6767886844, "bcc": -2 * np.pi / 3, "fcc": -2 * np.pi / 3}
    assert in_C(mode.energy_per_ion_eV, name) == pytest.approx(expected[name], abs=1e-9)
    assert mode.equal_moments


def test_rock_salt_moments_lie_in_the_plane():
    """Type-II antiferromagnet: Keffer and O'Sullivan, Phys. Rev. 108, 637 (1957), from memory.

    a = 4.4316 Å, 5 µB: moments in (111), degenerate there, 334.5 µeV below [111] (recomputed).
    """
    a = 4.4316
    crystal = ld.Crystal(a * CUBIC["fcc"][0], [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "O"])
    (mode,) = modes_at(crystal, {"Mn": 5.0}, [[0.5, 0.5, 0.5]])
    assert mode.degeneracy == 2
    assert mode.equal_moments
    assert abs(mode.components[0] @ np.ones(3)) < 1e-9
    assert mode.components[1].tolist() == [0, 0, 0]
    energies = eigenvalues(crystal, {"Mn": 5.0}, [[0.5, 0.5, 0.5]])[0]
    assert 1e6 * (energies[2] - energies[0]) == pytest.approx(334.5, abs=0.05)


def test_pyrochlore_without_a_demagnetizing_field():
    """The splayed ferromagnet, −2.54852 D (recomputed), is lowest over all k."""
    mode = lowest_mode(pyrochlore(), {"Gd": 1.0})
    assert mode.k.tolist() == [0, 0, 0]
    assert in_D(mode.energy_per_ion_eV) == pytest.approx(-2.54852, abs=6e-6)
    assert mode.equal_moments
    assert np.linalg.norm(mode.components.sum(axis=0)) > 3


def test_pyrochlore_in_a_sphere():
    """At k = 0 itself the state of Palmer and Chalker is lowest: −2.04427 D (recomputed), threefold, no net moment."""
    found = lowest_modes(pyrochlore(), {"Gd": 1.0}, sample=ld.Sample.sphere())
    assert found[0].k is None
    assert in_D(found[0].energy_per_ion_eV) == pytest.approx(-2.54852, abs=6e-6)
    (uniform,) = [mode for mode in found if mode.k is not None and not np.any(mode.k)]
    assert in_D(uniform.energy_per_ion_eV) == pytest.approx(-2.04427, abs=6e-6)
    assert uniform.degeneracy == 3
    assert uniform.equal_moments
    assert np.abs(uniform.components.sum(axis=0)).max() < 1e-9
    # Tangent to the circumsphere of the tetrahedron, in two antiparallel pairs along its edges.
    assert np.abs(np.einsum("ia,ia->i", uniform.components, AXES)).max() < 1e-7
    assert np.sort(np.abs(uniform.components), axis=1) == pytest.approx(
        np.tile([0, 1, 1] / np.sqrt(2), (4, 1)), abs=1e-7
    )


def test_free_moments_of_lierf4_order_along_c():
    """Misra and Felsteiner: of the arrays with 2k a lattice vector, the ferromagnet along c is lowest (N = 0)."""
    a, c = 5.162, 10.70
    body_centred = np.array([[-a, a, c], [a, -a, c], [a, a, -c]]) / 2
    sites = np.array([[0, 0, 0], [0, a / 2, c / 4]]) @ np.linalg.inv(body_centred)
    crystal = ld.Crystal(body_centred, sites, ["Er"] * 2)
    found = modes_at(crystal, {"Er": 1.0}, half_vectors())
    lowest = min(found, key=lambda mode: mode.energy_per_ion_eV)
    assert lowest.k.tolist() == [0, 0, 0]
    assert lowest.equal_moments
    assert np.abs(lowest.components) == pytest.approx(np.tile([0, 0, 1.0], (2, 1)), abs=1e-9)
    assert abs(lowest.components[:, 2].sum()) == pytest.approx(2, abs=1e-9)
    # A wave whose moments are not equal lies below it, and with it the bound.
    mode = lowest_mode(crystal, {"Er": 1.0})
    assert mode.energy_per_ion_eV < lowest.energy_per_ion_eV
    assert not mode.equal_moments
    assert ld.dipolar_energy(mode.ordering()).per_ion_eV == pytest.approx(mode.energy_per_ion_eV, abs=1e-13)
