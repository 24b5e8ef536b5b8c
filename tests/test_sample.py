"""Shapes against independent evaluations, and what a Sample refuses."""

from __future__ import annotations

import dataclasses
import decimal
import itertools
import pickle
from collections.abc import Callable

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latticedip.errors import InputError
from latticedip.sample import Sample
from latticedip.shapes import cylinder_factors, ellipsoid_factors, prism_factors

SIZE = st.floats(1e-3, 1e3)
RATIOS = [1e-6, 1e-4, 1e-3, 0.03, 0.4, 0.999, 1.0, 1.001, 2.7, 50.0, 1e3, 1e4, 1e6]


def ellipsoid_reference(semi_axes: tuple[float, float, float], axis: int) -> float:
    """N from the integral over the confocal parameter, in 40 digits (not Carlson's form)."""
    with mpmath.workdps(40):
        a = [mpmath.mpf(size) for size in semi_axes]

        # s = exp(u) turns the slow tail and the several scales of a flat body into a smooth integrand.
        def integrand(u: mpmath.mpf) -> mpmath.mpf:
            s = mpmath.exp(u)
            root = mpmath.sqrt((a[0] ** 2 + s) * (a[1] ** 2 + s) * (a[2] ** 2 + s))
            return s / ((a[axis] ** 2 + s) * root)

        low, high = 2 * mpmath.log(min(a)) - 45, 2 * mpmath.log(max(a)) + 35
        nodes = [low + (high - low) * i / 40 for i in range(41)]
        return float(a[0] * a[1] * a[2] / 2 * mpmath.quad(integrand, nodes))


def prism_reference(edges: tuple[float, float, float]) -> float:
    """N along the first edge as a second difference of one function of three lengths, in 80 digits.

    Source: A. J. Newell, W. Williams, D. J. Dunlop, J. Geophys. Res. 98, 9551 (1993), from memory.
    """
    with mpmath.workdps(80):
        mpf = mpmath.mpf

        def f(x: mpmath.mpf, y: mpmath.mpf, z: mpmath.mpf) -> mpmath.mpf:
            r = mpmath.sqrt(x * x + y * y + z * z)
            total = (2 * x * x - y * y - z * z) * r / 6
            if y and (x or z):
                total += y / 2 * (z * z - x * x) * mpmath.asinh(y / mpmath.sqrt(x * x + z * z))
            if z and (x or y):
                total += z / 2 * (y * y - x * x) * mpmath.asinh(z / mpmath.sqrt(x * x + y * y))
            if x and y and z:
                total -= x * y * z * mpmath.atan(y * z / (x * r))
            return total

        steps = (-1, 0, 1)
        total = mpf(0)
        for i, j, k in itertools.product(steps, steps, steps):
            weight = (-2 if i == 0 else 1) * (-2 if j == 0 else 1) * (-2 if k == 0 else 1)
            total += weight * f(*(step * mpf(edge) for step, edge in zip((i, j, k), edges, strict=True)))
        volume = mpf(edges[0]) * mpf(edges[1]) * mpf(edges[2])
        return float(-total / (4 * mpmath.pi * volume))


def prism_surface_charge(a: float, b: float, c: float) -> float:
    """N along c from the potential energy of the two charged faces, by quadrature."""
    with mpmath.workdps(20):

        def kernel(z: float) -> mpmath.mpf:
            # The integral over the separation y is done in closed form, the one over x by quadrature.
            def strip(x: mpmath.mpf) -> mpmath.mpf:
                q = x * x + z * z
                r = mpmath.sqrt(b * b + q)
                return (a - x) * (b * mpmath.log((b + r) / mpmath.sqrt(q)) - r + mpmath.sqrt(q))

            return 4 * mpmath.quad(strip, [0, a / 100, a / 10, a])

        return float((kernel(0.0) - kernel(c)) / (2 * mpmath.pi * a * b * c))


def cylinder_surface_charge(height: float) -> float:
    """N along the axis for diameter 1 from the potential energy of two charged discs, by quadrature."""
    with mpmath.workdps(30):
        h = mpmath.mpf(height)

        # The area common to two discs at lateral separation s is the weight of that separation.
        def integrand(s: mpmath.mpf) -> mpmath.mpf:
            common = mpmath.acos(s) / 2 - s / 2 * mpmath.sqrt(1 - s * s)
            # 1 − s/√(s² + h²), written without a difference.
            root = mpmath.sqrt(s * s + h * h)
            return common * h * h / (root * (root + s))

        nodes = [0, *sorted(x for x in (h / 10, h, 10 * h, mpmath.mpf("0.5")) if x < 1), 1]
        energy = 2 * mpmath.pi * mpmath.quad(integrand, nodes)
        return float(energy / (2 * mpmath.pi * mpmath.pi / 4 * h))


def cylinder_reference(height: float) -> float:
    """N along the axis for diameter 1: the closed form with mpmath's elliptic integrals, 80 digits."""
    with mpmath.workdps(80):
        t = mpmath.mpf(height)
        m = 1 / (1 + t * t)
        bracket = ((1 - t * t) * mpmath.ellipe(m) + t * t * mpmath.ellipk(m)) / mpmath.sqrt(m)
        return float(1 + 4 / (3 * mpmath.pi * t) * (1 - bracket))


@pytest.mark.parametrize("ratio", [1e-8, *RATIOS, 1e8])
def test_ellipsoid_against_integral(ratio: float) -> None:
    for axes in ((1.0, 1.0, ratio), (1.0, 1.3, ratio)):
        got = ellipsoid_factors(axes)
        for axis in range(3):
            assert got[axis] == pytest.approx(ellipsoid_reference(axes, axis), rel=2e-14, abs=0)


@pytest.mark.parametrize("ratio", RATIOS)
@pytest.mark.parametrize("second", [1.0, 1.7, 80.0])
def test_prism_against_another_closed_form(ratio: float, second: float) -> None:
    edges = (1.0, second, ratio)
    got = prism_factors(edges)
    for axis in range(3):
        cycled = (edges[axis], edges[(axis + 1) % 3], edges[(axis + 2) % 3])
        assert got[axis] == pytest.approx(prism_reference(cycled), rel=1e-15, abs=0)


@pytest.mark.parametrize("edges", [(1.0, 1.0, 1.0), (1.0, 2.0, 3.0), (3.0, 1.0, 0.2), (1.0, 4.0, 9.0)])
def test_prism_against_surface_charge(edges: tuple[float, float, float]) -> None:
    assert prism_factors(edges)[2] == pytest.approx(prism_surface_charge(*edges), rel=1e-11)


@pytest.mark.parametrize("height", RATIOS)
def test_cylinder_against_mpmath_and_surface_charge(height: float) -> None:
    across, also_across, along = cylinder_factors(1.0, height)
    assert across == also_across
    assert along == pytest.approx(cylinder_reference(height), rel=1e-15, abs=0)
    assert along == pytest.approx(cylinder_surface_charge(height), rel=1e-9, abs=0)


def test_flat_cylinder_keeps_the_digits_of_its_small_factor() -> None:
    with mpmath.workdps(60):
        t = mpmath.mpf(1e-9)
        m = 1 / (1 + t * t)
        bracket = ((1 - t * t) * mpmath.ellipe(m) + t * t * mpmath.ellipk(m)) / mpmath.sqrt(m)
        expected = float(-2 / (3 * mpmath.pi * t) * (1 - bracket))
    assert cylinder_factors(1.0, 1e-9)[0] == pytest.approx(expected, rel=1e-15)


@pytest.mark.parametrize("factors", [ellipsoid_factors, prism_factors])
def test_extreme_bodies_become_plate_and_needle(factors: Callable[..., tuple[float, float, float]]) -> None:
    assert factors((1e15, 1e15, 1.0)) == pytest.approx((0.0, 0.0, 1.0), abs=1e-13)
    assert factors((1e15, 1.0, 1.0)) == pytest.approx((0.0, 0.5, 0.5), abs=1e-13)
    assert cylinder_factors(1.0, 1e15) == pytest.approx((0.5, 0.5, 0.0), abs=1e-13)
    assert cylinder_factors(1e15, 1.0) == pytest.approx((0.0, 0.0, 1.0), abs=1e-13)


@settings(max_examples=40, deadline=None)
@given(SIZE, SIZE, SIZE, st.sampled_from([ellipsoid_factors, prism_factors]))
def test_factors_add_up_and_follow_the_lengths(
    a: float, b: float, c: float, factors: Callable[..., tuple[float, float, float]]
) -> None:
    got = factors((a, b, c))
    assert abs(sum(got) - 1) < 1e-14
    assert all(0 < n < 1 for n in got)
    shorter_first = [got[i] for i in np.argsort([a, b, c], kind="stable")]
    assert all(longer <= shorter + 1e-14 for shorter, longer in itertools.pairwise(shorter_first))
    assert factors((2 * b, 2 * c, 2 * a)) == pytest.approx((got[1], got[2], got[0]), rel=1e-13)


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 2**32 - 1), st.booleans())
def test_orientation_turns_the_tensor(seed: int, left_handed: bool) -> None:
    turn, _ = np.linalg.qr(np.random.default_rng(seed).normal(size=(3, 3)))
    if left_handed != (np.linalg.det(turn) < 0):
        turn[0] *= -1
    bodies = (
        (Sample.ellipsoid((1.0, 2.0, 0.3), orientation=turn), ellipsoid_factors((1.0, 2.0, 0.3))),
        (Sample.prism((1.0, 2.0, 0.3), orientation=turn), prism_factors((1.0, 2.0, 0.3))),
        (Sample.cylinder(1.0, 0.3, orientation=turn), cylinder_factors(1.0, 0.3)),
    )
    for sample, factors in bodies:
        tensor = sample.demagnetizing_tensor
        assert np.array_equal(tensor, tensor.T)
        assert np.trace(tensor) == pytest.approx(1, abs=1e-14)
        for row, factor in zip(turn, factors, strict=True):
            np.testing.assert_allclose(tensor @ row, factor * row, rtol=0, atol=1e-14)


def test_cylinder_height_lies_along_the_third_row() -> None:
    rod = Sample.cylinder(1.0, 100.0, orientation=[[0, 1, 0], [0, 0, 1], [1, 0, 0]])
    across, _, along = cylinder_factors(1.0, 100.0)
    np.testing.assert_allclose(rod.demagnetizing_tensor, np.diag([along, across, across]), atol=1e-15)


def test_orientation_is_made_orthonormal() -> None:
    rows = np.eye(3)
    rows[0, 1] = 4e-7
    tensor = Sample.prism((1, 2, 3), orientation=rows).demagnetizing_tensor
    assert np.trace(tensor) == pytest.approx(1, abs=1e-15)
    np.testing.assert_allclose(tensor, np.diag(prism_factors((1.0, 2.0, 3.0))), rtol=0, atol=1e-6)


@pytest.mark.parametrize("scale", [1e-200, 1.0, 1e200])
def test_only_the_direction_of_axis_and_normal_counts(scale: float) -> None:
    u = np.array([1.0, 2.0, 2.0]) / 3
    needle = Sample.needle([scale, 2 * scale, 2 * scale])
    plate = Sample.plate([scale, 2 * scale, 2 * scale])
    np.testing.assert_allclose(needle.demagnetizing_tensor, (np.eye(3) - np.outer(u, u)) / 2, atol=1e-15)
    np.testing.assert_allclose(plate.demagnetizing_tensor, np.outer(u, u), atol=1e-15)
    assert needle.shape == "needle along (0.333333, 0.666667, 0.666667)"


@pytest.mark.parametrize(
    ("sample", "words", "uniform"),
    [
        (Sample(), "no shape stated (N = 0)", True),
        (Sample(np.zeros((3, 3))), "demagnetizing tensor given as zero (N = 0)", True),
        (Sample(demagnetizing_tensor=np.diag([0.2, 0.3, 0.5])), "demagnetizing tensor given", True),
        (Sample.sphere(), "sphere", True),
        (Sample.needle([0, 0, -2]), "needle along (0, 0, -1)", True),
        (Sample.plate([0, 3, 0]), "plate with normal (0, 1, 0)", True),
        (Sample.ellipsoid([1, 1, 0.3]), "ellipsoid 1 × 1 × 0.3", True),
        (Sample.prism([1, 2, 3]), "prism 1 × 2 × 3", False),
        (Sample.cylinder(2, 0.5), "cylinder, diameter 2, height 0.5", False),
        (
            Sample.cylinder(2, 0.5, orientation=[[0, 1, 0], [0, 0, 1], [1, 0, 0]]),
            "cylinder, diameter 2, height 0.5, body axes (0, 1, 0), (0, 0, 1), (1, 0, 0)",
            False,
        ),
    ],
)
def test_shape_in_words(sample: Sample, words: str, uniform: bool) -> None:
    assert sample.shape == words
    assert sample.uniform is uniform
    assert sample.demagnetizing_tensor.shape == (3, 3)


def test_without_a_shape_there_is_neither_tensor_nor_field() -> None:
    np.testing.assert_array_equal(Sample().demagnetizing_tensor, np.zeros((3, 3)))
    np.testing.assert_array_equal(Sample().applied_T, np.zeros(3))


@pytest.mark.parametrize(
    "build",
    [
        lambda field: Sample(applied_T=field),
        lambda field: Sample.sphere(applied_T=field),
        lambda field: Sample.needle((1, 0, 0), applied_T=field),
        lambda field: Sample.plate((1, 0, 0), applied_T=field),
        lambda field: Sample.ellipsoid((1, 2, 3), applied_T=field),
        lambda field: Sample.prism((1, 2, 3), applied_T=field),
        lambda field: Sample.cylinder(1, 2, applied_T=field),
    ],
)
def test_every_shape_takes_an_applied_field(build: Callable[[object], Sample]) -> None:
    np.testing.assert_array_equal(build([0.1, 0, -2]).applied_T, [0.1, 0.0, -2.0])
    with pytest.raises(InputError, match="applied_T holds a value that is not finite"):
        build([0.0, np.nan, 0.0])


def test_frozen_and_read_only() -> None:
    given_tensor = np.diag([0.2, 0.3, 0.5])
    sample = Sample(given_tensor)
    given_tensor[0, 0] = 9.0
    assert sample.demagnetizing_tensor[0, 0] == 0.2
    with pytest.raises(ValueError, match="read-only"):
        sample.demagnetizing_tensor[0, 0] = 1.0
    with pytest.raises(ValueError, match="read-only"):
        sample.applied_T[0] = 1.0
    with pytest.raises(dataclasses.FrozenInstanceError):
        sample.shape = "cube"  # type: ignore[misc]


def test_pickles_and_becomes_a_dict() -> None:
    sample = pickle.loads(pickle.dumps(Sample.prism((1, 1, 1), applied_T=(0, 0, 1))))
    assert sample.shape == "prism 1 × 1 × 1"
    assert sample.to_dict() == {
        "shape": "prism 1 × 1 × 1",
        "uniform": False,
        "demagnetizing_tensor": sample.demagnetizing_tensor.tolist(),
        "applied_T": [0.0, 0.0, 1.0],
    }


def test_the_callers_decimal_settings_do_not_matter() -> None:
    expected = prism_factors((1.0, 2.0, 3.0))
    with decimal.localcontext(decimal.Context(prec=5, traps=[decimal.Inexact])):
        assert prism_factors((1.0, 2.0, 3.0)) == expected
        assert decimal.getcontext().prec == 5


def test_tensor_within_tolerance_is_accepted_and_made_symmetric() -> None:
    tensor = np.diag([0.2, 0.3, 0.5 + 5e-10])
    tensor[0, 1] = 5e-10
    stored = Sample(tensor).demagnetizing_tensor
    assert stored[0, 1] == stored[1, 0] == 2.5e-10


ORTHONORMAL = (
    "orientation must hold the directions of the body's axes as rows, Cartesian, each of length 1 "
    "and at right angles to the others (to 1e-06), got "
)


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (
            lambda: Sample([[0.5, 0.1, 0], [0, 0.5, 0], [0, 0, 0]]),
            "demagnetizing_tensor must be symmetric, got 0.1 in row 1, column 2 but 0.0 in row 2, column 1.",
        ),
        (
            lambda: Sample(np.diag([0.3, 0.3, 0.3])),
            "demagnetizing_tensor must have trace 1 (or be all zero), got trace 0.9.",
        ),
        (
            lambda: Sample(np.diag([0.5, -0.5, 0.0])),
            "demagnetizing_tensor must have trace 1 (or be all zero), got trace 0.",
        ),
        (
            lambda: Sample(np.diag([0.8, 0.4, -0.2])),
            "demagnetizing_tensor must have principal values between 0 and 1, got -0.2, 0.4, 0.8.",
        ),
        (
            lambda: Sample(4 * np.pi * np.eye(3) / 3),
            "demagnetizing_tensor must have elements between -1 and 1, got 4.1887902047863905 in row 1, "
            "column 1. Give N for SI units (trace 1), not 4πN.",
        ),
        (
            lambda: Sample([[1e308, -1e308, 0], [1e308, 0, 0], [0, 0, 0]]),
            "demagnetizing_tensor must have elements between -1 and 1, got 1e+308 in row 1, column 1. "
            "Give N for SI units (trace 1), not 4πN.",
        ),
        (lambda: Sample(np.eye(2)), "demagnetizing_tensor must have shape (3, 3), got (2, 2)."),
        (
            lambda: Sample([[np.nan, 0, 0], [0, 1, 0], [0, 0, 0]]),
            "demagnetizing_tensor holds a value that is not finite: nan at index (0, 0).",
        ),
        (lambda: Sample(applied_T=(0, 1)), "applied_T must have shape (3), got (2,)."),
        (lambda: Sample.needle((0, 0, 0)), "axis is the zero vector, which has no direction."),
        (lambda: Sample.plate((0, 0, 0)), "normal is the zero vector, which has no direction."),
        (lambda: Sample.plate((1, 0)), "normal must have shape (3), got (2,)."),
        (lambda: Sample.ellipsoid((1, 0, 2)), "semi_axes must be positive lengths, got 0.0 as number 2."),
        (lambda: Sample.prism((1, 2, -3)), "edges must be positive lengths, got -3.0 as number 3."),
        (lambda: Sample.prism((1, 2)), "edges must have shape (3), got (2,)."),
        (
            lambda: Sample.ellipsoid((1, np.inf, 2)),
            "semi_axes holds a value that is not finite: inf at index (1,).",
        ),
        (lambda: Sample.ellipsoid("flat"), "semi_axes must hold real numbers, got 'flat'."),
        (lambda: Sample.cylinder(0, 1), "diameter must be a positive length, got 0.0."),
        (lambda: Sample.cylinder(1, -2), "height must be a positive length, got -2.0."),
        (lambda: Sample.cylinder("1", 2), "diameter must be a finite number, got '1'."),  # type: ignore[arg-type]
        (
            lambda: Sample.prism((1, 1, 1e-16)),
            "edges: the lengths 1, 1, 1e-16 differ by more than a factor of 1e+15. "
            "Use a plate or a needle for such a body.",
        ),
        (
            lambda: Sample.cylinder(1e300, 1e-300),
            "diameter and height: the lengths 1e+300, 1e-300 differ by more than a factor of 1e+15. "
            "Use a plate or a needle for such a body.",
        ),
        (
            lambda: Sample.prism((1, 2, 3), orientation=[[1, 0, 0], [0, 1, 0], [0, 0, 2]]),
            ORTHONORMAL + "[[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 2.0]].",
        ),
        (
            lambda: Sample.ellipsoid((1, 2, 3), orientation=[[1, 0, 0], [0, 1, 0], [0, 1, 0]]),
            ORTHONORMAL + "[[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 1.0, 0.0]].",
        ),
        (
            lambda: Sample.ellipsoid((1, 2, 3), orientation=1e300 * np.ones((3, 3))),
            ORTHONORMAL + str((1e300 * np.ones((3, 3))).tolist()) + ".",
        ),
        (
            lambda: Sample.cylinder(1, 2, orientation=np.eye(2)),
            "orientation must have shape (3, 3), got (2, 2).",
        ),
    ],
)
def test_refuses(build: Callable[[], Sample], message: str) -> None:
    with pytest.raises(InputError) as caught:
        build()
    assert str(caught.value) == message


def test_an_applied_field_beyond_any_magnet_is_refused() -> None:
    with pytest.raises(
        InputError, match=r"^applied_T holds \[0.0, 0.0, 1e\+300\], beyond 1e\+06 T. Give it in tesla.$"
    ):
        Sample.sphere(applied_T=[0, 0, 1e300])
