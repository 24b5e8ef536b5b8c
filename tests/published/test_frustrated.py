"""Pyrochlores, LiHoF4 and its sisters, gadolinium: dipolar energies and scales in print."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

import latticedip as ld
from latticedip import units
from tests.published.helpers import CUBIC, coupling_matrix, ordering, reduced_energy, reduced_field
from tests.reference.constants import DIPOLE_EV, DIPOLE_K

#: Pyrochlore sites in the cube and their local axes.
SITES = np.array([[0, 0, 0], [0, 1, 1], [1, 0, 1], [1, 1, 0]]) / 4
AXES = np.array([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]]) / np.sqrt(3)
PRIMITIVE = CUBIC["fcc"][0]
#: A tetrahedron edge (nearest-neighbour distance) of a cube of edge 1.
EDGE = np.sqrt(2) / 4
A = 10.1


def pyrochlore(moments, k_cube=(0, 0, 0)):
    """One moment per site of the primitive cell, at a wave vector in units 2π/a of the cube."""
    sites = SITES @ np.linalg.inv(PRIMITIVE)
    return ordering(A * PRIMITIVE, sites, moments, PRIMITIVE @ np.asarray(k_cube, dtype=float), "Dy")


def in_D(array) -> float:
    """Energy per spin over D = µ0µ²/(4π r³) of nearest neighbours, moments of 1 µB."""
    return reduced_energy(array, EDGE * A)


def scale_K(moment_muB: float, distance_A: float) -> float:
    """µ0µ²/(4π r³) in kelvin."""
    return units.DIPOLE_EV_A3_PER_MUB2 * units.K_PER_EV * moment_muB**2 / distance_A**3


@pytest.mark.parametrize(
    ("moment_muB", "distance_A", "printed_K", "relative"),
    [
        # den Hertog and Gingras, PRL 84, 3430 (2000): D = 1.41 K for 10 µB and r = 3.54 Å; from memory. With today's
        # constants 1.404 K.
        (10.0, 3.54, 1.41, 5e-3),
        # Yavors'kii et al., PRL 101, 037204 (2008): 1.3224 K with a = 10.124 Å and 9.87 µB; from memory.
        (9.87, 10.124 * EDGE, 1.3224, 1e-3),
        # Raju et al., PRB 59, 14489 (1999): Gd2Ti2O7, (gµB)² D = 0.0534 K at r = 3.60059 Å, g = 2; from memory.
        (2.0, 3.60059, 0.0534, 1e-3),
        # Del Maestro and Gingras, J. Phys.: Condens. Matter 16, 3339 (2004): 0.84 K with µ² = 63 µB²; from memory.
        (np.sqrt(63.0), 3.60059, 0.84, 5e-3),
        # Biltmo and Henelius, PRB 76, 054423 (2007): LiHoF4, D = (gµB/2)²/a³ = 0.214 K, 6.9 µB, 5.175 Å; from memory.
        (6.9, 5.175, 0.214, 2e-3),
    ],
)
def test_dipolar_scale(moment_muB, distance_A, printed_K, relative):
    assert scale_K(moment_muB, distance_A) == pytest.approx(printed_K, rel=relative)


def test_spin_ice_nearest_neighbour_energy():
    """D_nn = 5D/3 = 2.35 K (den Hertog and Gingras 2000, from memory): the pair of local axes has m1·T·m2 = 5D/3."""
    pair = AXES[0] @ pair_tensor(SITES[0] - SITES[1]) @ AXES[1]
    assert abs(pair) == pytest.approx(5 / 3, rel=1e-12)
    assert abs(pair) * scale_K(10.0, 3.54) == pytest.approx(2.35, rel=5e-3)


def pair_tensor(vector):
    """Tensor of one pair over µ0/(4π r³)."""
    unit = vector / np.linalg.norm(vector)
    return 3 * np.outer(unit, unit) - np.eye(3)


def test_spin_ice_ground_state():
    """Melko, den Hertog and Gingras, PRL 87, 067203 (2001), from memory: the ground state orders at (0,0,1) 2π/a.

    Energy per spin −1.947566 D, all-in-all-out +4.088548 D at N = 0 (recomputed).
    """
    patterns = [np.array((1, *signs)) for signs in itertools.product((1, -1), repeat=3)]
    energies = {
        (k, tuple(signs)): in_D(pyrochlore(signs[:, None] * AXES, k))
        for k in ((0, 0, 0), (0, 0, 1), (0.5, 0.5, 0.5))
        for signs in patterns
    }
    lowest = min(energies, key=energies.__getitem__)
    assert lowest[0] == (0, 0, 1)
    assert energies[lowest] == pytest.approx(-1.947566, abs=5e-7)
    # Two in, two out on the tetrahedron of the cell.
    assert sum(lowest[1]) == 0
    assert energies[(0, 0, 0), (1, 1, 1, 1)] == pytest.approx(4.088548, abs=5e-7)


def test_local_axes_order_at_001():
    """The same from the four bands of the Ising matrix: none on a mesh of k lies below (0,0,1)."""
    sites = SITES @ np.linalg.inv(PRIMITIVE)
    lowest = {}
    for k in itertools.product(np.arange(0, 1.01, 0.25), repeat=3):
        if k[0] <= k[1] <= k[2] and any(k):
            full = coupling_matrix(PRIMITIVE, sites, PRIMITIVE @ np.array(k)).reshape(4, 3, 4, 3)
            ising = np.einsum("ia,iajb,jb->ij", AXES, full, AXES)
            lowest[k] = -0.5 * np.linalg.eigvalsh(ising)[-1] * EDGE**3
    best = min(lowest, key=lowest.__getitem__)
    assert best == (0, 0, 1)
    assert lowest[best] == pytest.approx(-1.947566, abs=5e-7)


def palmer_chalker():
    """Moments tangent to the circumsphere of a tetrahedron, in pairs antiparallel and parallel to opposite edges."""
    u, v = np.array([1, -1, 0]) / np.sqrt(2), np.array([1, 1, 0]) / np.sqrt(2)
    return [np.array([u, s * v, -s * v, -u]) for s in (1, -1)]


def test_palmer_chalker_state():
    """Palmer and Chalker, PRB 62, 488 (2000): the state from memory; −2.04427 D per spin, threefold (recomputed)."""
    states = palmer_chalker()
    energies = [in_D(pyrochlore(state)) for state in states]
    assert min(energies) == pytest.approx(-2.04427, abs=6e-6)
    state = states[int(np.argmin(energies))]
    assert np.abs(state.sum(axis=0)).max() < 1e-15
    assert np.abs(np.einsum("ia,ia->i", state, AXES)).max() < 1e-15
    # Lowest of all at k = 0 for a sphere, three times; that sample adds (µ0/6V) M² to the energy.
    matrix = coupling_matrix(PRIMITIVE, SITES @ np.linalg.inv(PRIMITIVE))
    volume = abs(np.linalg.det(PRIMITIVE))
    sphere = matrix - 4 * np.pi / (3 * volume) * np.tile(np.eye(3), (4, 4))
    bands = np.sort(-0.5 * np.linalg.eigvalsh(sphere) * EDGE**3)
    assert bands[:3] == pytest.approx([-2.04427] * 3, abs=6e-6)
    assert bands[3] > -2.0442
    as_sphere = ld.dipolar_energy(pyrochlore(state), sample=ld.Sample.sphere()).per_ion_eV
    assert as_sphere * (EDGE * A) ** 3 / DIPOLE_EV == pytest.approx(-2.04427, abs=6e-6)


def test_splayed_ferromagnet_lies_lower_without_demagnetizing_field():
    """−2.54852 D per spin at N = 0 (recomputed): moments near one cube axis, tilted alternately."""
    matrix = coupling_matrix(PRIMITIVE, SITES @ np.linalg.inv(PRIMITIVE))
    values, vectors = np.linalg.eigh(matrix)
    assert -0.5 * values[-1] * EDGE**3 == pytest.approx(-2.54852, abs=6e-6)
    # One of the three vectors has its net moment along z; all four of its moments are equally long.
    space = vectors[:, -3:]
    net = np.tile(np.eye(3), 4) @ space
    state = (space @ np.linalg.solve(net, [0, 0, 1.0])).reshape(4, 3)
    state /= np.linalg.norm(state, axis=1)[0]
    assert np.linalg.norm(state, axis=1) == pytest.approx(np.ones(4), abs=1e-9)
    assert in_D(pyrochlore(state)) == pytest.approx(-2.54852, abs=6e-6)


#: Rare-earth sites of the scheelite cell.
SCHEELITE = np.array([[0, 0, 0], [0, 0.5, 0.25], [0.5, 0.5, 0.5], [0.5, 0, 0.75]])


def scheelite(a, c, moments):
    return ordering(np.diag([a, a, c]), SCHEELITE, moments, symbol="Ho")


def test_sphere_sum_of_liho():
    """Rønnow et al., PRB 75, 054426 (2007), from memory: D_zz/n = 1.6646 (sphere), J_D = (gµB)² n = 1.1654 µeV.

    The cell of the print, 5.175 and 10.75 Å, fixes D_zz/n to a thousandth only (0.0019 per 0.01 Å of c).
    """
    a, c = 5.175, 10.75
    density = 4 / (a * a * c)
    found = ld.local_field(scheelite(a, c, [0, 0, 1.0]), SCHEELITE).dipolar
    assert reduced_field(found[:, 2], 1.0) / density == pytest.approx([1.6646] * 4, abs=2e-4)
    assert 1e6 * DIPOLE_EV * 1.25**2 * density == pytest.approx(1.1654, abs=5e-5)


def test_order_of_lierf4_and_lihof4():
    """Misra and Felsteiner, PRB 15, 4309 (1977), from memory.

    In-plane moments: a layered antiferromagnet lies lowest; moments free: the ferromagnet along c (N = 0).
    """
    a, c = 5.162, 10.70
    body_centred = np.array([[-a, a, c], [a, -a, c], [a, a, -c]]) / 2
    sites = np.array([[0, 0, 0], [0, a / 2, c / 4]]) @ np.linalg.inv(body_centred)
    planar, free = {}, {}
    # Arrays that repeat after two primitive translations, the class that was searched in print.
    for k in itertools.product((0, 0.5), repeat=3):
        matrix = coupling_matrix(body_centred, sites, k).reshape(2, 3, 2, 3)
        planar[k] = -0.5 * np.linalg.eigvalsh(matrix[:, :2, :, :2].reshape(4, 4))[-1]
        free[k] = -0.5 * np.linalg.eigvalsh(matrix.reshape(6, 6))[-1]
    # (½,½,½) of the primitive cell is (1,0,0) of the tetragonal one: the body-centring points are opposite.
    assert min(planar, key=planar.__getitem__) == (0.5, 0.5, 0.5)
    assert min(free, key=free.__getitem__) == (0, 0, 0)
    # Sheets of parallel moments along a, stacked up and down along b.
    sheets = np.array([[1.0], [-1], [-1], [1]])
    layered, uniform_a, uniform_c = (
        ld.dipolar_energy(scheelite(a, c, m)).per_ion_eV / DIPOLE_EV for m in (sheets * [1, 0, 0], [1, 0, 0], [0, 0, 1])
    )
    assert layered == pytest.approx(planar[0.5, 0.5, 0.5], abs=1e-11)
    assert uniform_c == pytest.approx(free[0, 0, 0], abs=1e-11)
    assert uniform_c < layered < uniform_a


def test_easy_axis_of_gadolinium():
    """Colarieti-Tosti et al., PRL 91, 157201 (2003): dipolar anisotropy 7.5 µeV, easy axis c; tolerance 8 %.

    hcp 3.636, 5.783 Å, 7 µB: 7.97 µeV (recomputed).
    """
    a, c = 3.636, 5.783
    cell = np.array([[a, 0, 0], [-a / 2, a * np.sqrt(0.75), 0], [0, 0, c]])
    sites = np.array([[1 / 3, 2 / 3, 0.25], [2 / 3, 1 / 3, 0.75]])
    row = ld.rank([ordering(cell, sites, [7.0, 0, 0], symbol="Gd")], rotate=True).rows[0]
    assert 1e6 * row.anisotropy_eV_per_ion == pytest.approx(7.97, abs=5e-3)
    assert 1e6 * row.anisotropy_eV_per_ion == pytest.approx(7.5, rel=0.08)
    assert abs(row.easy_axis_cart[2]) == pytest.approx(1.0, abs=1e-9)
    across, along = (
        ld.dipolar_energy(ordering(cell, sites, m, symbol="Gd")).per_ion_eV for m in ([7.0, 0, 0], [0, 0, 7.0])
    )
    assert 1e6 * (across - along) == pytest.approx(7.97, abs=5e-3)


def test_constants_of_the_references_are_those_of_the_program():
    assert pytest.approx(DIPOLE_EV, rel=1e-14) == units.DIPOLE_EV_A3_PER_MUB2
    assert pytest.approx(DIPOLE_K, rel=1e-14) == units.DIPOLE_EV_A3_PER_MUB2 * units.K_PER_EV
