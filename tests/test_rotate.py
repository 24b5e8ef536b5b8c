"""Rigid turns of a pattern against brute force: grids of directions and of rotations, and differences."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

import latticedip as ld
from latticedip.analysis.rotate import (
    Orientation,
    best_orientation,
    left_jacobian,
    quadratic_form,
    stationary_directions,
    turn,
)
from latticedip.errors import InputError
from tests.reference.cells import random_rotation

TRICLINIC = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = np.array([[0.05, 0.1, 0.2], [0.55, 0.42, 0.7], [0.3, 0.8, 0.45]])
CRYSTAL = ld.Crystal(TRICLINIC, PLACES, ["Mn", "Fe", "Mn"], occupancies=[1, 0.7, 1])
AXIS = np.array([2.0, -1, 2]) / 3


def energy(ordering: ld.Ordering, rotation: np.ndarray, sample: ld.Sample | None = None) -> float:
    return ld.dipolar_energy(ordering.rotated(rotation), sample=sample).per_cell_eV


def directions(n: int) -> np.ndarray:
    """Evenly spread unit vectors (Fibonacci lattice)."""
    i = np.arange(n) + 0.5
    z, angle = 1 - 2 * i / n, np.pi * (1 + 5**0.5) * i
    return np.stack([np.cos(angle) * np.sqrt(1 - z * z), np.sin(angle) * np.sqrt(1 - z * z), z], axis=1)


GRID = directions(20000)
COLLINEAR = {
    "ferromagnet": ([1.0, 2.0, 0.5], (0, 0, 0)),
    "antiferromagnet": ([1.0, -1.5, 0.05], (0, 0, 0)),
    "zone boundary": ([1.0, 0.4, -2.0], (0.5, 0, 0.5)),
    "modulated": ([1.0, 0.6j, -2.0 + 0.3j], (0.21, 0, 0.13)),
}
SAMPLES = {
    "no shape": None,
    "plate": ld.Sample.plate((0, 1, 1)),
    "weak field": ld.Sample.ellipsoid((1, 2, 3), applied_T=(0.01, 0.02, -0.005)),
    "middle field": ld.Sample.plate((0, 1, 1), applied_T=(0.1, -0.05, 0.1)),
    "strong field": ld.Sample(applied_T=(-20.0, 3.0, 1.0)),
}


def collinear(name: str) -> ld.Ordering:
    sizes, k = COLLINEAR[name]
    return ld.Ordering(CRYSTAL, np.outer(sizes, AXIS), k, name)


@pytest.mark.parametrize("shape", SAMPLES)
@pytest.mark.parametrize("name", COLLINEAR)
def test_collinear_against_a_grid_of_directions(name, shape):
    ordering, sample = collinear(name), SAMPLES[shape]
    found = best_orientation(ordering, sample=sample)
    assert found.axis_meaning == "moment"
    assert energy(ordering, found.easy_rotation, sample) == pytest.approx(found.easy_eV, abs=1e-14)
    assert energy(ordering, found.hard_rotation, sample) == pytest.approx(found.hard_eV, abs=1e-14)
    # The pattern points along ±axis as given; turned, along the easy axis.
    turned = ordering.rotated(found.easy_rotation)
    assert np.abs(np.cross(turned.components[0].real, found.easy_axis_cart)).max() < 1e-9
    # The form is quadratic, so a few energies fix it without the code under test; the grid then searches it.
    samples = GRID[::1500]
    values = np.array([energy(ordering, turn(AXIS, u), sample) for u in samples])
    basis = np.array([[*np.outer(u, u)[np.triu_indices(3)], *u] for u in samples])
    fitted = np.linalg.lstsq(basis, values, rcond=None)[0]
    on_grid = np.array([[*np.outer(u, u)[np.triu_indices(3)], *u] for u in GRID]) @ fitted
    span = np.ptp(on_grid)
    assert on_grid.min() >= found.easy_eV - 1e-9 * span and on_grid.max() <= found.hard_eV + 1e-9 * span
    assert on_grid.min() <= found.easy_eV + 3e-3 * span and on_grid.max() >= found.hard_eV - 3e-3 * span


@pytest.mark.parametrize("shape", SAMPLES)
@pytest.mark.parametrize("name", COLLINEAR)
def test_stationary_directions_are_stationary(name, shape):
    ordering, sample = collinear(name), SAMPLES[shape]
    found = best_orientation(ordering, sample=sample)
    axis = AXIS if ordering.net_moment @ AXIS >= -1e-9 else -AXIS
    values = [value for _, value in found.stationary]
    assert values == sorted(values) and len(values) in (2, 3, 4, 6)
    scale = max(abs(v) for v in values)
    for direction, value in found.stationary:
        r = turn(axis, direction)
        assert energy(ordering, r, sample) == pytest.approx(value, abs=1e-9 * scale)
        slopes = []
        for w in np.eye(3):
            up, down = (Rotation.from_rotvec(h * w).as_matrix() for h in (1e-4, -1e-4))
            slopes.append((energy(ordering, up @ r, sample) - energy(ordering, down @ r, sample)) / 2e-4)
        assert np.abs(slopes).max() < 1e-6 * scale


def quadratics() -> st.SearchStrategy[np.ndarray]:
    level = st.sampled_from([0.0, 1.0, 1.0 + 1e-12, -2.0, 0.3])
    return st.tuples(level, level, level, st.integers(0, 10**6)).map(
        lambda t: (lambda r: r @ np.diag(t[:3]) @ r.T)(
            random_rotation(np.random.default_rng(t[3])) if t[3] % 3 else np.eye(3)
        )
    )


linears = st.one_of(
    st.just(np.zeros(3)),
    st.tuples(st.sampled_from([1e-9, 1e-4, 0.3, 1.0, 4.0, 100.0]), st.integers(0, 10**6)).map(
        lambda t: t[0] * np.random.default_rng(t[1]).normal(size=3)
    ),
    st.tuples(st.sampled_from([1e-9, 1e-3, 0.5, 2.0, 4.0, 50.0]), st.integers(0, 2)).map(
        lambda t: t[0] * np.eye(3)[t[1]]
    ),
)


@settings(max_examples=300, deadline=None)
@given(quadratics(), linears)
def test_all_stationary_points_of_a_form(form, linear):
    form = 0.5 * (form + form.T)
    found = stationary_directions(form, linear)
    scale = max(np.abs(form).max(), np.abs(linear).max())
    values = np.einsum("na,ab,nb->n", GRID, form, GRID) - GRID @ linear
    # No direction of a fine grid lies below the lowest or above the highest.
    assert found[0][1] <= values.min() + 1e-9 * scale and found[-1][1] >= values.max() - 1e-9 * scale
    assert found[0][1] >= values.min() - 5e-3 * scale and found[-1][1] <= values.max() + 5e-3 * scale
    for u, value in found:
        assert np.linalg.norm(u) == pytest.approx(1, abs=1e-12)
        slope = 2 * form @ u - linear
        assert np.linalg.norm(slope - (slope @ u) * u) <= 1e-6 * scale
        assert value == pytest.approx(u @ form @ u - linear @ u, abs=1e-12 * scale)


@pytest.mark.parametrize(("size", "count"), [(0.01, 6), (2.5, 4), (50.0, 2)])
def test_number_of_stationary_points(size, count):
    # Six in a weak field (three axes, both ways), two in a strong one; the polynomial of degree six by hand.
    form, linear = np.diag([0.0, 1.0, 3.0]), size * np.array([0.3, 0.5, -0.4])
    q, h = np.diag(form), 0.5 * linear
    polynomial = np.poly1d([1.0])
    for level in q:
        polynomial = polynomial * np.poly1d([-1, level]) ** 2
    for i in range(3):
        others = [q[j] for j in range(3) if j != i]
        product = np.poly1d([1.0])
        for level in others:
            product = product * np.poly1d([-1, level]) ** 2
        polynomial = polynomial - h[i] ** 2 * product
    roots = polynomial.roots
    real = roots[np.abs(roots.imag) < 1e-9 * np.abs(roots).max()].real
    found = stationary_directions(form, linear)
    assert len(found) == len(real) == count
    expected = sorted(float(u @ form @ u - linear @ u) for u in (h / (q - lam) for lam in real))
    assert np.allclose([value for _, value in found], expected, rtol=1e-9)


def test_form_of_a_collinear_pattern_by_hand():
    # Simple cubic ferromagnet: isotropic at N = 0, and the shape adds (µ0/2V) M² N.
    cube = ld.Ordering(ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"]), [[0, 0, 3.0]])
    form, linear = quadratic_form(cube, ld.Sample.plate((1, 0, 0), applied_T=(0, 2, 0)), 1e-12, np.array([0, 0, 1.0]))
    scale = 2 * np.pi * 53.68151e-6 * 9 / 64
    assert np.allclose(form, scale * (np.diag([1.0, 0, 0]) - np.eye(3) / 3), rtol=1e-6, atol=1e-6 * scale)
    assert np.allclose(linear, [0, 3 * 2 * 5.7883818e-5, 0], rtol=1e-7)
    found = best_orientation(cube)
    assert found.notes == ("the energy does not depend on the direction of the moments",)
    assert np.array_equal(found.easy_axis_cart, [0, 0, 1]) and np.allclose(found.easy_rotation, np.eye(3))
    assert found.hard_eV - found.easy_eV < 1e-14
    plate = best_orientation(cube, sample=ld.Sample.plate((1, 0, 0)))
    assert plate.notes == ("the easy direction is free in a plane; the one nearest to the given direction is taken",)
    assert np.allclose(plate.easy_axis_cart, [0, 0, 1]) and np.allclose(np.abs(plate.hard_axis_cart), [1, 0, 0])


def test_antiferromagnetic_chains():
    # k = (½, ½, 0) on a simple cubic lattice: the moments stand along c (Luttinger and Tisza 1946).
    ordering = ld.Ordering(ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"]), [[1.0, 1.0, 0.0]], (0.5, 0.5, 0))
    found = best_orientation(ordering)
    assert np.allclose(np.abs(found.easy_axis_cart), [0, 0, 1])
    assert found.easy_eV == pytest.approx(-2.6767886844 * 53.681511e-6 * 2 / 64, rel=1e-8)
    assert found.hard_eV == pytest.approx(2.6767886844 / 2 * 53.681511e-6 * 2 / 64, rel=1e-8)
    assert found.notes == ("the hard direction is free in a plane; the one nearest to the given direction is taken",)


NONCOLLINEAR = {
    "coplanar": ([[1, 0, 0], [0, 2, 0], [-1, 1, 0]], (0, 0, 0)),
    "all directions": ([[1, 0, 0], [0, 2, 0], [0, 0.5, 1]], (0, 0, 0)),
    "helix": (np.outer([1, 0.5, 1j], [1, 1j, 0]), (0.2, 0, 0.1)),
    "cone": ([[0.3, 0, 1], [0, 0.3, 1], [-0.3, -0.1, 1]], (0, 0, 0)),
}


@pytest.mark.parametrize("shape", ["no shape", "middle field"])
@pytest.mark.parametrize("name", NONCOLLINEAR)
def test_other_patterns_against_a_grid_of_rotations(name, shape):
    components, k = NONCOLLINEAR[name]
    ordering, sample = ld.Ordering(CRYSTAL, components, k, name), SAMPLES[shape]
    found = best_orientation(ordering, sample=sample)
    for r, value in ((found.easy_rotation, found.easy_eV), (found.hard_rotation, found.hard_eV)):
        assert np.abs(r @ r.T - np.eye(3)).max() < 1e-13 and np.linalg.det(r) > 0
        assert energy(ordering, r, sample) == pytest.approx(value, abs=1e-13)
    # The energy is linear in the products of rotation elements: fitted on random turns, then searched on many.
    rng = np.random.default_rng(1)
    pairs = np.triu_indices(9)

    def features(turns: np.ndarray) -> np.ndarray:
        flat = turns.reshape(len(turns), 9)
        return np.concatenate([(flat[:, :, None] * flat[:, None, :])[:, pairs[0], pairs[1]], flat], axis=1)

    some = Rotation.random(90, random_state=2).as_matrix()
    fitted = np.linalg.lstsq(features(some), [energy(ordering, r, sample) for r in some], rcond=1e-12)[0]
    check = Rotation.random(5, random_state=3).as_matrix()
    span = found.hard_eV - found.easy_eV
    assert np.allclose(features(check) @ fitted, [energy(ordering, r, sample) for r in check], atol=1e-8 * span, rtol=0)
    many = Rotation.from_quat(rng.normal(size=(40000, 4))).as_matrix()
    values = features(many) @ fitted
    assert values.min() >= found.easy_eV - 1e-9 * span and values.max() <= found.hard_eV + 1e-9 * span
    assert values.min() <= found.easy_eV + 2e-2 * span and values.max() >= found.hard_eV - 2e-2 * span
    # Both ends are stationary: small turns change nothing in first order.
    for r in (found.easy_rotation, found.hard_rotation):
        for w in np.eye(3):
            up, down = (Rotation.from_rotvec(h * w).as_matrix() @ r for h in (1e-4, -1e-4))
            slope = (energy(ordering, up, sample) - energy(ordering, down, sample)) / 2e-4
            assert abs(slope) < 1e-6 * span
    if name in ("coplanar", "helix"):
        assert found.axis_meaning == "plane normal"
        assert np.allclose(found.easy_axis_cart, found.easy_rotation @ [0, 0, 1], atol=1e-9) or np.allclose(
            found.easy_axis_cart, -found.easy_rotation @ [0, 0, 1], atol=1e-9
        )
    else:
        assert found.axis_meaning == "none" and found.easy_axis_cart is None and found.hard_axis_cart is None


def test_result_does_not_depend_on_the_orientation_it_starts_from():
    sample = SAMPLES["middle field"]
    for components, k in (*NONCOLLINEAR.values(), (np.outer(*([1.0, -1.5, 0.05], AXIS)), (0, 0, 0))):
        ordering = ld.Ordering(CRYSTAL, components, k)
        one = best_orientation(ordering, sample=sample)
        for seed in (1, 2):
            other = best_orientation(ordering.rotated(random_rotation(np.random.default_rng(seed))), sample=sample)
            assert other.easy_eV == pytest.approx(one.easy_eV, abs=1e-8 * (one.hard_eV - one.easy_eV))
            assert other.hard_eV == pytest.approx(one.hard_eV, abs=1e-8 * (one.hard_eV - one.easy_eV))


def test_an_ordering_at_its_best_stays():
    for components, k in NONCOLLINEAR.values():
        first = best_orientation(ld.Ordering(CRYSTAL, components, k))
        again = best_orientation(ld.Ordering(CRYSTAL, components, k).rotated(first.easy_rotation))
        assert again.easy_eV == pytest.approx(first.easy_eV, abs=1e-9 * (first.hard_eV - first.easy_eV))


@settings(max_examples=200, deadline=None)
@given(st.integers(0, 10**6), st.sampled_from([0, 1e-16, 1e-14, 1e-12, 1e-8, 1e-5, 0.1, 1.5]), st.booleans())
def test_smallest_turn(seed, angle, opposite):
    rng = np.random.default_rng(seed)
    start, across = random_rotation(rng)[:2]
    end = np.cos(angle) * start + np.sin(angle) * across
    end = (-end if opposite else end) / np.linalg.norm(end)
    r = turn(start, end)
    assert np.abs(r @ start - end).max() < 1e-14
    assert np.abs(r @ r.T - np.eye(3)).max() < 1e-14 and np.linalg.det(r) > 0
    # No rotation that takes start to end turns by less than the angle between them.
    between = np.arctan2(np.linalg.norm(np.cross(start, end)), start @ end)
    assert np.linalg.norm(Rotation.from_matrix(r).as_rotvec()) == pytest.approx(between, abs=1e-7)


@pytest.mark.parametrize("w", [(0, 0, 0), (1e-9, 2e-9, 0), (1e-7, 0, -3e-7), (0.3, -0.2, 0.5), (2.0, 1.0, -2.0)])
def test_left_jacobian_against_differences(w):
    w, h = np.array(w, dtype=float), 1e-5
    for axis in range(3):
        step = h * np.eye(3)[axis]
        up, down = (Rotation.from_rotvec(w + s * step) for s in (1, -1))
        extra = (up * down.inv()).as_rotvec() / (2 * h)
        assert np.allclose(left_jacobian(w)[:, axis], extra, atol=1e-8)


def test_nothing_to_turn():
    with pytest.raises(InputError) as caught:
        best_orientation(ld.Ordering(CRYSTAL, np.zeros((3, 3)), name="empty"))
    assert str(caught.value) == "ordering 'empty' carries no moments: all components are zero."
    assert isinstance(best_orientation(collinear("ferromagnet")), Orientation)
