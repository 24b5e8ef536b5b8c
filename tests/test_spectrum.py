"""Spectra: every distribution adds up to one, and equals the explicit sampling of a million cells."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import InputError
from latticedip.observables.distribution import FieldDistribution, Line, Sampled, Shell, Wave, mixture
from latticedip.physics.ellipse import field_ellipse

CUBE = ld.Crystal(4.0 * np.eye(3), [[0, 0, 0]], ["Mn"])
#: An irrational number.
Q = np.sqrt(2) - 1
MUON = ld.Probe([0.5, 0.5, 0.12], contact=ld.Contact(0.1, shell=1))


def wave(*rows: object) -> Wave:
    return Wave(np.array(rows, dtype=complex))


# --- parts ------------------------------------------------------------------------------------------------


def test_an_ellipse_has_the_distribution_of_overhauser():
    """p(B) = 2B/(π √((B² − b²)(a² − B²))) between the half axes, integrated in closed form."""
    a, b = 0.3, 0.1
    turned = np.exp(0.7j) * np.array([a, 1j * b, 0.0])
    found = wave([0, 0, 0], turned)
    assert found.edges == pytest.approx((b, a), rel=1e-14)
    x = np.array([b, 0.15, 0.2, 0.25, 0.29999, a])
    expected = 0.5 + np.arcsin((2 * x**2 - a**2 - b**2) / (a**2 - b**2)) / np.pi
    assert found.cumulative(x) == pytest.approx(expected, abs=1e-12)
    assert found.cumulative(np.array([b - 1e-9, a + 1e-9])).tolist() == [0.0, 1.0]


def test_a_linear_wave_starts_at_zero_and_ends_at_its_amplitude():
    found = wave([0, 0, 0], [0.1, 0.2, 0.2])
    assert found.edges == (0.0, pytest.approx(0.3, rel=1e-14))
    assert found.cumulative(np.array([0.15])) == pytest.approx([2 / np.pi * np.arcsin(0.5)], abs=1e-13)


@settings(max_examples=40, deadline=None)
@given(st.integers(1, 3), st.integers(0, 2**31))
def test_any_wave_is_distributed_as_its_phases(order, seed):
    rng = np.random.default_rng(seed)
    coefficients = rng.normal(size=(order + 1, 3)) + 1j * rng.normal(size=(order + 1, 3))
    coefficients[0] = coefficients[0].real
    found = Wave(coefficients)
    n = 200_000
    sizes = np.linalg.norm(found.field(2 * np.pi * (np.arange(n) + 0.5) / n), axis=1)
    assert found.edges[0] == pytest.approx(sizes.min(), abs=1e-6)
    assert found.edges[-1] == pytest.approx(sizes.max(), abs=1e-6)
    x = np.linspace(0.9 * found.edges[0], 1.05 * found.edges[-1], 41)
    # Counting n equally spaced phases is right to a few of them.
    assert found.cumulative(x) == pytest.approx(np.searchsorted(np.sort(sizes), x) / n, abs=2e-4)
    assert found.cumulative(np.array([found.edges[-1]])) == pytest.approx([1.0], abs=1e-12)


def test_a_powder_in_an_applied_field_is_uniform_in_the_square():
    found = Shell(np.array([0.3]), 0.1)
    assert found.edges == pytest.approx((0.2, 0.4))
    cosine = np.linspace(-1, 1, 21)
    sizes = np.sqrt(0.3**2 + 0.1**2 + 2 * 0.3 * 0.1 * cosine)
    assert found.cumulative(sizes) == pytest.approx((1 + cosine) / 2, abs=1e-12)
    assert Shell(np.array([0.1, 0.3]), 0.2, (0.1, 0.3)).edges == pytest.approx((0.0, 0.5))


def test_lines_within_the_error_are_one_and_equal_waves_are():
    one, other = wave([0, 0, 0], [0.3, 0.1j, 0]), wave([0, 0, 0], [0, 0.3j, 0.1])
    found = mixture(
        [(Line(0.2), 1.0), (Line(0.2 + 1e-9), 1.0), (one, 1.0), (other, 1.0), (Line(0.3), 2.0)], same_T=1e-8
    )
    assert found.lines == ((pytest.approx(0.2), pytest.approx(1 / 3)), (0.3, pytest.approx(1 / 3)))
    assert len(found.parts) == 3
    assert found.weights.sum() == pytest.approx(1.0)


@pytest.mark.parametrize(
    "part", [Line(0.2), Line(0.0), Sampled(np.linspace(0.1, 0.3, 4096)), wave([0.2, 0, 0], [0.1, 0, 0.05j])]
)
@pytest.mark.parametrize("kind", ["width_T", "nuclear_width_T"])
def test_a_smeared_part_is_that_of_random_numbers(part, kind):
    found = FieldDistribution((part,), np.ones(1), **{kind: 0.03})
    rng = np.random.default_rng(5)
    n = 400_000
    sizes = rng.choice(part.nodes(4096), n)
    if kind == "width_T":
        sampled = np.abs(sizes + 0.03 * rng.normal(size=n))
    else:
        vectors = 0.03 * rng.normal(size=(n, 3))
        vectors[:, 2] += sizes
        sampled = np.linalg.norm(vectors, axis=1)
    x = np.linspace(0, 0.45, 31)
    assert found.cumulative(x) == pytest.approx(np.searchsorted(np.sort(sampled), x) / n, abs=3e-3)
    assert found.binned(37)[1].sum() == pytest.approx(1.0, abs=1e-12)


def test_many_smeared_waves_are_put_on_a_grid_without_loss():
    parts = tuple(wave([0.1, 0, 0], [x, 0.02, 0.1j * x]) for x in np.linspace(0.1, 0.3, 7))
    found = FieldDistribution(parts, np.full(7, 1 / 7), width_T=1e-4)
    assert found._nodes[1].sum() == pytest.approx(1.0)
    x = np.linspace(0, 0.4, 9)
    single = sum(FieldDistribution((part,), np.ones(1), width_T=1e-4).cumulative(x) for part in parts)
    assert found.cumulative(x) == pytest.approx(single / 7, abs=1e-5)


# --- spectra ----------------------------------------------------------------------------------------------

ORDERINGS = {
    "ellipse": (ld.Ordering(CUBE, [[1, 0.3j, 0]], [Q, 0.1, 0]), None),
    "linear": (ld.Ordering(CUBE, [[1, 0, 0]], [Q, 0.1, 0]), None),
    "ellipse in a field": (ld.Ordering(CUBE, [[1, 0.3j, 0]], [Q, 0.1, 0]), [0.1, 0.05, 0.0]),
    "cone": (ld.Ordering(CUBE, [[[1, 1j, 0]], [[0, 0, 0.5]]], [[0, 0, Q], [0, 0, 0]]), None),
    "harmonic": (ld.Ordering(CUBE, [[[1, 0, 0]], [[0, 0.2, 0.1j]]], [[Q, 0.1, 0], [3 * Q, 0.3, 0]]), [0.1, 0.05, 0]),
    "with a commensurate part": (ld.Ordering(CUBE, [[[1, 0, 0]], [[0, 0.2, 0.1]]], [[Q, 0.1, 0], [0, 0.5, 0]]), None),
    "two waves": (ld.Ordering(CUBE, [[[1, 0, 0]], [[0, 0.2, 0.1j]]], [[Q, 0.1, 0], [0, Q, 0]]), None),
    "commensurate": (ld.Ordering(CUBE, [[0, 0, 1]], [1 / 3, 0, 0]), None),
}


@pytest.mark.parametrize("name", ORDERINGS)
def test_a_spectrum_is_that_of_a_million_cells(name):
    ordering, applied = ORDERINGS[name]
    sample = None if applied is None else ld.Sample(applied_T=applied)
    found = ld.spectrum(ordering, MUON, sample=sample)
    limits, share = found.binned(100)
    assert share.sum() == pytest.approx(1.0, abs=1e-12)
    orbit = found.orbits[0]
    cells = np.random.default_rng(11).integers(-(10**5), 10**5, (10**6 // len(orbit.positions), 3))
    sizes = np.linalg.norm(orbit.fields(cells), axis=2).ravel()
    counted = np.histogram(sizes, limits)[0] / len(sizes)
    # A million numbers leave an error of a thousandth in the sum of many bins.
    assert np.cumsum(share) == pytest.approx(np.cumsum(counted), abs=3e-3)
    low, high = found.distribution.support
    slack = 1e-4 if name == "two waves" else 1e-9
    assert low - slack <= sizes.min() and sizes.max() <= high + slack
    assert sizes.max() == pytest.approx(high, rel=1e-3)
    assert found.distribution.rms_T == pytest.approx(np.sqrt(np.mean(sizes**2)), rel=3e-3)


def test_edges_are_those_of_the_ellipse_of_the_field():
    """Singular values of the two conjugate diameters, taken from the explicit fields a quarter of a turn apart."""
    ordering = ld.Ordering(CUBE, [[1, 0.3j, 0]], [Q, 0.1, 0])
    probe = ld.Probe([0.5, 0.5, 0.12])
    found = ld.spectrum(ordering, probe, equivalent=False)
    turned = ld.Ordering(CUBE, -1j * ordering.components[0], ordering.k[0])
    diameters = np.vstack([ld.local_field(of, probe).total for of in (ordering, turned)])
    expected = np.linalg.svd(diameters, compute_uv=False)
    assert found.to_dict()["bands"][0]["edges_T"] == pytest.approx(sorted(expected[:2]), rel=1e-12)


@pytest.mark.parametrize("name", ["ellipse", "ellipse in a field", "cone", "commensurate"])
def test_edges_are_the_extremes_of_the_field_ellipse(name):
    ordering, applied = ORDERINGS[name]
    sample = None if applied is None else ld.Sample(applied_T=applied)
    ellipse = field_ellipse(ordering, MUON, sample=sample)
    low, high = ld.spectrum(ordering, MUON, sample=sample, equivalent=False).distribution.support
    assert low == pytest.approx(ellipse.minimum_T[0], rel=1e-9)
    assert high == pytest.approx(ellipse.maximum_T[0], rel=1e-9)


def test_a_circular_helix_shows_one_line():
    found = ld.spectrum(ld.Ordering(CUBE, [[1, 1j, 0]], [0, 0, Q]), ld.Probe([0, 0, 0.5]), equivalent=False)
    assert found.distribution.is_discrete
    assert len(found.distribution.lines) == 1


def test_frequencies_are_fields_times_the_ratio_of_the_particle():
    found = ld.spectrum(ld.Ordering(CUBE, [[0, 0, 1]]), ld.Probe([0.5, 0.5, 0])).to_dict()
    for line in found["lines"]:
        assert line["frequency_MHz"] == pytest.approx(135.53881 * line["field_T"], rel=1e-7)
    assert [line["share"] for line in found["lines"]] == pytest.approx([2 / 3, 1 / 3], abs=1e-12) or [
        line["share"] for line in found["lines"]
    ] == pytest.approx([1 / 3, 2 / 3], abs=1e-12)


@pytest.mark.parametrize("name", ["ellipse", "two waves", "commensurate"])
def test_a_powder_in_a_field_is_that_of_random_grains(name):
    ordering, _ = ORDERINGS[name]
    found = ld.spectrum(ordering, MUON, powder=True, applied_T=[0, 0.03, 0.04])
    limits, share = found.binned(60)
    assert share.sum() == pytest.approx(1.0, abs=1e-12)
    orbit = ld.orbit_field(ordering, MUON)
    rng = np.random.default_rng(4)
    cells = rng.integers(-(10**5), 10**5, (50_000, 3))
    internal = np.linalg.norm(orbit.fields(cells), axis=2).ravel()
    cosine = rng.uniform(-1, 1, len(internal))
    sizes = np.sqrt(internal**2 + 0.05**2 + 2 * 0.05 * internal * cosine)
    assert np.cumsum(share) == pytest.approx(np.cumsum(np.histogram(sizes, limits)[0]) / len(sizes), abs=4e-3)
    assert found.notes[-1] == "powder in an applied field: the moments keep their arrangement in every grain"


def test_without_a_field_a_powder_shows_what_a_crystal_does_and_domains_change_nothing():
    ordering = ld.Ordering(CUBE, [[1, 0.3j, 0]], [Q, 0.1, 0])
    crystal = ld.spectrum(ordering, MUON)
    limits, share = crystal.binned(50)
    assert ld.spectrum(ordering, MUON, powder=True).binned(50)[1] == pytest.approx(share, abs=1e-12)
    averaged = ld.spectrum(ordering, MUON, average_domains=True)
    assert len(averaged.domains) == 24
    assert averaged.distribution.cumulative(limits[1:-1]) == pytest.approx(np.cumsum(share)[:-1], abs=1e-7)


def test_domains_matter_in_an_applied_field():
    ferromagnet = ld.Ordering(CUBE, [[0, 0, 1]])
    probe = ld.Probe([0.5, 0.5, 0.5])
    one = ld.spectrum(ferromagnet, probe, applied_T=[0, 0, 0.1])
    all_six = ld.spectrum(ferromagnet, probe, applied_T=[0, 0, 0.1], average_domains=True)
    internal = float(np.linalg.norm(ld.local_field(ferromagnet, probe).total))
    assert one.distribution.lines == ((pytest.approx(internal + 0.1), 1.0),)
    assert [at for at, _ in all_six.distribution.lines] == pytest.approx(
        sorted([abs(internal - 0.1), np.hypot(internal, 0.1), internal + 0.1])
    )
    assert [share for _, share in all_six.distribution.lines] == pytest.approx([1 / 6, 4 / 6, 1 / 6])


def test_quasi_random_phases_are_drawn_alike_from_the_same_seed():
    ordering, _ = ORDERINGS["two waves"]
    first, again, other = (
        ld.spectrum(ordering, MUON, samples=1024, seed=seed).distribution.parts[0].sizes for seed in (1, 1, 2)
    )
    assert np.array_equal(first, again)
    assert not np.array_equal(first, other)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"width_T": -0.1}, "width_T must lie between 0.0 and None, got -0.1."),
        (
            {"width_T": 0.1, "nuclear_width_T": 0.1},
            "give either a width or a nuclear width, not both: one broadening is applied.",
        ),
        ({"samples": 1000}, "samples must be a power of two of at least 2, got 1000."),
        ({"applied_T": [0, 0]}, "applied_T must have shape (3), got (2,)."),
    ],
)
def test_options_that_do_not_fit_are_refused(options, message):
    with pytest.raises(InputError) as caught:
        ld.spectrum(ld.Ordering(CUBE, [[0, 0, 1]]), MUON, **options)
    assert str(caught.value) == message


def test_bins_must_hold_the_whole_spectrum():
    found = FieldDistribution((Line(0.25),), np.ones(1))
    for bins, span, message in (
        (0, None, "bins must be a whole number from 1 to 1000000, got 0."),
        (10, (0.3, 0.4), "span must go upwards and hold the whole spectrum, 0.25 to 0.25 T, got (0.3, 0.4)."),
    ):
        with pytest.raises(InputError) as caught:
            found.binned(bins, span)
        assert str(caught.value) == message
