"""Independent routes to one number agree: two splittings, planes, spheres, and latticedip."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

import latticedip as ld
from tests.reference.cells import case
from tests.reference.constants import DIPOLE_T, MUB_T_EV
from tests.reference.direct import sphere_tensor
from tests.reference.mpmath_sum import points_within, tensors, tensors_mp
from tests.reference.planewise import plane_tensor

CELLS = {
    "cubic": 5.0 * np.eye(3),
    "triclinic": np.array([[8.0, 0, 0], [1.3, 7.9, 0], [0.7, -1.1, 12.0]]),
    "left-handed": np.array([[3.0, 0, 0], [-1, 5, 0], [2, 1, -6]]),
    "flat": np.array([[30.0, 0, 0], [4, 35, 0], [1, 2, 4]]),
}
WAVES = [(0, 0, 0), (0.5, 0, 0.5), (0, 0, 0.31), (0.123, 0.37, -0.21)]
FRACTIONS = np.array([[0.31, 0.64, 0.42], [2.71, -3.62, 1.23], [0.5, 0.5, 0.5]])


@pytest.mark.parametrize("seed", range(0, 60, 7))
def test_high_precision_sum_does_not_depend_on_its_splitting(seed):
    cell, offsets, k = case(seed)
    scale = np.sqrt(np.pi) / abs(np.linalg.det(cell)) ** (1 / 3)
    rough, fine = (tensors_mp(cell, offsets[:4], k, digits=20, alpha=a * scale) for a in (0.9, 1.3))
    with mpmath.workdps(40):
        difference = max(
            abs(x - y)
            for one, other in zip(rough, fine, strict=True)
            for row, line in zip(one, other, strict=True)
            for x, y in zip(row, line, strict=True)
        )
    assert difference < 1e-20


def test_points_within_misses_none():
    basis = np.array([[3.0, 0, 0], [2.9, 0.8, 0], [-1.4, 0.3, 7.0]])
    centre, radius = np.array([0.3, -0.4, 0.2]), 9.0
    n = np.arange(-60, 61)
    box = np.stack(np.meshgrid(n, n, n[50:71], indexing="ij"), axis=-1).reshape(-1, 3)
    inside = box[np.linalg.norm((box - centre) @ basis, axis=1) <= radius]
    assert np.abs(inside).max() < 50
    assert {tuple(h) for h in inside} == {tuple(h) for h in points_within(basis, centre, radius)}


@pytest.mark.parametrize("name", CELLS)
@pytest.mark.parametrize("k", WAVES)
def test_planes_ewald_and_high_precision_agree(name, k):
    cell = CELLS[name]
    offsets = FRACTIONS @ cell
    exact = tensors(cell, offsets, k)
    found = ld.dipole_tensor(cell, offsets, k, tol=1e-12)
    assert np.abs(found - exact).max() < 1e-12
    for offset, tensor in zip(offsets, exact, strict=True):
        for stack in range(3):
            assert np.abs(plane_tensor(cell, offset, k, stack=stack) - tensor).max() < 2e-14


@pytest.mark.parametrize("name", ["cubic", "left-handed"])
@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, 0.5)])
def test_softened_sphere_agrees(name, k):
    cell = CELLS[name]
    for offset in (np.zeros(3), FRACTIONS[0] @ cell):
        found = ld.dipole_tensor(cell, [offset], k)[0]
        assert np.abs(sphere_tensor(cell, offset, k, radius=80.0) - found).max() < 5e-10


def test_sharp_sphere_converges_to_the_same_sum():
    cell = CELLS["triclinic"]
    offset = FRACTIONS[0] @ cell
    found = ld.dipole_tensor(cell, [offset])[0]
    errors = [np.abs(sphere_tensor(cell, offset, radius=r, soft=False) - found).max() for r in (20.0, 100.0)]
    assert errors[1] < 1e-4 < DIPOLE_T * 4 * np.pi / 3 / abs(np.linalg.det(cell))
    assert errors[1] < errors[0]


def ordering_at(k, seed=3):
    rng = np.random.default_rng(seed)
    positions = np.array([[0.1, 0.2, 0.15], [0.6, 0.1, 0.4], [0.4, 0.7, 0.8]])
    components = rng.normal(size=(3, 3)) + (1j * rng.normal(size=(3, 3)) if np.any(2 * np.array(k) % 1) else 0)
    return ld.Ordering(ld.Crystal(CELLS["triclinic"], positions, ["Mn"] * 3), components, k)


def field_by_reference(ordering, point_cart):
    """N = 0 field in T at a Cartesian point, from the high-precision tensors."""
    offsets = point_cart - ordering.crystal.positions_cart
    exact = tensors(ordering.crystal.cell, offsets, ordering.k[0])
    return np.einsum("jab,jb->a", exact, ordering.components[0]).real


@pytest.mark.parametrize("k", WAVES)
def test_local_field_and_its_gradient(k):
    ordering = ordering_at(k)
    point = np.array([0.83, 0.42, 0.55])
    found = ld.local_field(ordering, [point, [0.1, 0.2, 0.15]])
    for row, where in enumerate((point @ ordering.crystal.cell, ordering.crystal.positions_cart[0])):
        whole = found.dipolar[row] + found.lorentz[row]
        assert whole == pytest.approx(field_by_reference(ordering, where), abs=1e-10)
    # Central differences of |B| with steps h and h/2, the error in h² taken away.
    at = point @ ordering.crystal.cell

    def slope(axis, h):
        up, down = (np.linalg.norm(field_by_reference(ordering, at + s * h * np.eye(3)[axis])) for s in (1, -1))
        return (up - down) / (2 * h)

    expected = [(4 * slope(axis, 0.01) - slope(axis, 0.02)) / 3 for axis in range(3)]
    assert found.gradient_T_per_A[0] == pytest.approx(expected, abs=1e-7)


@pytest.mark.parametrize("k", WAVES)
def test_gradient_at_a_site(k):
    """The site's own dipole left out: the gradient of what the others make there."""
    ordering = ordering_at(k)
    site = ordering.crystal.positions_cart[0]
    found = ld.local_field(ordering, [[0.1, 0.2, 0.15]])

    def field(place):
        own = single_dipole(place - site, ordering.components[0, 0].real) if np.any(place != site) else 0.0
        return np.linalg.norm(field_by_reference(ordering, place) - own)

    def slope(axis, h):
        up, down = (field(site + s * h * np.eye(3)[axis]) for s in (1, -1))
        return (up - down) / (2 * h)

    expected = [(4 * slope(axis, 0.1) - slope(axis, 0.2)) / 3 for axis in range(3)]
    assert found.gradient_T_per_A[0] == pytest.approx(expected, abs=2e-6)


def single_dipole(x, moment):
    """Field in T of one moment in µB at distance x in Å."""
    r = np.linalg.norm(x)
    return DIPOLE_T * (3 * x * (x @ moment) / r**5 - moment / r**3)


@pytest.mark.parametrize("k", WAVES)
def test_energy_is_that_of_the_reference(k):
    ordering = ordering_at(k)
    components = ordering.components[0]
    summed = sum(
        (components[i].conj() @ tensor @ components[j]).real
        for i, here in enumerate(ordering.crystal.positions_cart)
        for j, tensor in enumerate(tensors(ordering.crystal.cell, here - ordering.crystal.positions_cart, k))
    )
    weight = 0.25 if np.any(2 * np.array(k) % 1) else 0.5
    assert ld.dipolar_energy(ordering).per_cell_eV == pytest.approx(-weight * MUB_T_EV * summed, abs=1e-14)
