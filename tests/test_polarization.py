"""Polarization of a spin in static fields: closed forms against averages over random fields and explicit precession."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.spatial.transform import Rotation
from scipy.special import j0

import latticedip as ld
from latticedip.errors import InputError
from latticedip.observables.polarization import kubo_toyabe, kubo_toyabe_along

CUBE = ld.Crystal(4.0 * np.eye(3), [[0, 0, 0]], ["Mn"])
Q = np.sqrt(2) - 1
FERROMAGNET = ld.Ordering(CUBE, [[0.2, 0.4, 1.0]])
TIME = np.linspace(0, 1.0, 41)
#: γ of the muon, rad/(µs T).
GAMMA = 2 * np.pi * ld.Probe([0, 0, 0.5]).MHz_per_T


def precession(field, start, sign=1.0, gamma=GAMMA):
    """Shape (n, 3). The equation of motion dS/dt = γ S × B, integrated."""
    found = solve_ivp(
        lambda t, s: sign * gamma * np.cross(s, field), (0, TIME[-1]), start, t_eval=TIME, rtol=1e-10, atol=1e-12
    )
    return found.y.T


@pytest.mark.parametrize(("particle", "sign"), [("muon", 1.0), ("17O", -1.0)])
def test_a_spin_turns_as_its_equation_of_motion_says(particle, sign):
    probe = ld.Probe([0.5, 0.5, 0.5], particle=particle)
    found = ld.spectrum(FERROMAGNET, probe)
    field = ld.local_field(FERROMAGNET, probe).total[0]
    start, seen = np.array([1.0, 0, 0]), np.array([0.0, 0.6, 0.8])
    expected = precession(field, start, sign, 2 * np.pi * probe.MHz_per_T) @ seen
    signal = ld.polarization(found, TIME, initial=start, detector=seen)
    assert signal.values == pytest.approx(expected, abs=1e-7)


def test_positions_cells_and_domains_are_averaged():
    ordering = ld.Ordering(CUBE, [[0, 0, 1]], [1 / 3, 0, 0])
    probe = ld.Probe([0.5, 0.2, 0])
    found = ld.spectrum(ordering, probe)
    start = np.array([0.0, 0.6, 0.8])
    expected = np.zeros(len(TIME))
    orbit = found.orbits[0]
    cells = np.array([[0, 0, 0], [1, 0, 0], [2, 0, 0]])
    for field in orbit.fields(cells).reshape(-1, 3):
        # dS/dt = γ S × B turns the spin about −B.
        expected += Rotation.from_rotvec(-GAMMA * np.outer(TIME, field)).apply(start) @ start
    expected /= 3 * len(orbit.positions)
    assert ld.polarization(found, TIME, initial=start).values == pytest.approx(expected, abs=1e-10)


def test_a_linear_wave_in_a_powder_gives_a_bessel_function():
    """1/3 + 2/3 J0(ω t): the field is an amplitude times the cosine of any phase."""
    found = ld.spectrum(ld.Ordering(CUBE, [[1, 0, 0]], [Q, 0.1, 0]), ld.Probe([0.5, 0.5, 0.5]), powder=True)
    amplitude = found.distribution.support[1]
    time = np.linspace(0, 20, 301)
    expected = 1 / 3 + 2 / 3 * j0(GAMMA * amplitude * time)
    assert ld.polarization(found, time).values == pytest.approx(expected, abs=1e-9)


@pytest.mark.parametrize("delta", [0.0, 0.4])
def test_a_powder_is_a_crystal_averaged_over_all_directions(delta):
    """One third of the signals along three directions at right angles."""
    ordering, probe = ld.Ordering(CUBE, [[1, 0.3j, 0]], [Q, 0.1, 0]), ld.Probe([0.5, 0.5, 0.12])
    crystal, powder = ld.spectrum(ordering, probe), ld.spectrum(ordering, probe, powder=True)
    mean = (
        sum(ld.polarization(crystal, TIME, initial=axis, nuclear_width_per_us=delta).values for axis in np.eye(3)) / 3
    )
    found = ld.polarization(powder, TIME, nuclear_width_per_us=delta).values
    assert found == pytest.approx(mean, abs=1e-10)
    assert found[0] == pytest.approx(1.0)


@pytest.mark.parametrize("ratio", [0.0, 0.05, 0.5, 4.0])
def test_a_random_field_is_averaged_as_random_numbers_are(ratio):
    """A steady field along z with 400,000 random ones added, all three kinds of signal."""
    delta = 0.5
    steady = ratio * delta / GAMMA
    ordering = ld.Ordering(CUBE, [[0, 0, 0]])
    found = ld.spectrum(ordering, ld.Probe([0.5, 0.5, 0.5]), applied_T=[0, 0, steady])
    vectors = delta * np.random.default_rng(2).normal(size=(400_000, 3)) + np.array([0, 0, ratio * delta])
    size = np.linalg.norm(vectors, axis=1)
    unit = vectors / size[:, None]
    for start, seen in ((2, 2), (0, 0), (0, 1), (1, 0)):
        p, d = np.eye(3)[start], np.eye(3)[seen]
        times = np.array([0.5, 2.0, 6.0, 15.0])
        both, crossed = unit[:, start] * unit[:, seen], np.cross(unit, p) @ d
        expected = [np.mean(both + (p @ d - both) * np.cos(size * t) - crossed * np.sin(size * t)) for t in times]
        signal = ld.polarization(found, times, initial=p, detector=d, nuclear_width_per_us=delta)
        assert signal.values == pytest.approx(np.array(expected), abs=4e-3)


def test_the_two_forms_along_a_field_meet():
    time = np.linspace(0, 30, 61)
    delta = 0.5
    low, high = (kubo_toyabe_along(time, delta, 0.1 * delta * (1 + x)) for x in (-1e-9, 1e-9))
    assert low == pytest.approx(high, abs=1e-9)
    assert kubo_toyabe_along(time, delta, 0.0) == pytest.approx(kubo_toyabe(time, delta), abs=1e-12)


def test_a_strong_longitudinal_field_decouples():
    """The recovered part tends to 1 − 2Δ²/ω² (leading order in a strong field)."""
    delta, omega = 0.3, 12.0
    assert kubo_toyabe_along(np.array([40.0]), delta, omega) == pytest.approx([1 - 2 * (delta / omega) ** 2], abs=1e-5)


@pytest.mark.parametrize(
    ("powder", "options", "message"),
    [
        (False, {}, "the polarization in a crystal needs the initial direction of the spin (Cartesian)."),
        (False, {"initial": [0, 0, 0]}, "initial is the zero vector, which has no direction."),
        (True, {"initial": [0, 0, 1]},
         "initial and detector are directions in a crystal; a powder has none. Leave them out."),
        (True, {"nuclear_width_per_us": -1.0}, "nuclear_width_per_us must lie between 0.0 and None, got -1.0."),
    ],
)  # fmt: skip
def test_what_does_not_fit_is_refused(powder, options, message):
    found = ld.spectrum(FERROMAGNET, ld.Probe([0.5, 0.5, 0.5]), powder=powder)
    with pytest.raises(InputError) as caught:
        ld.polarization(found, TIME, **options)
    assert str(caught.value) == message


def test_a_powder_in_a_field_and_negative_times_are_refused():
    probe = ld.Probe([0.5, 0.5, 0.5])
    for applied, time, message in (
        ([0, 0, 0.1], TIME, "the polarization of a powder is that without an applied field. Set the applied field to "
         "zero, or ask for a crystal."),
        ([0, 0, 0], -TIME, "time_us must not be below zero, got -1.0."),
    ):  # fmt: skip
        with pytest.raises(InputError) as caught:
            ld.polarization(ld.spectrum(FERROMAGNET, probe, powder=True, applied_T=applied), time)
        assert str(caught.value) == message


@pytest.mark.parametrize("delta", [0.0, 0.8])
@pytest.mark.parametrize("powder", [False, True])
def test_a_grid_of_frequencies_stands_for_many_fields(monkeypatch, powder, delta):
    """The same signal from every field by itself."""
    rng = np.random.default_rng(8)
    components = rng.normal(size=(2, 1, 3)) + 1j * rng.normal(size=(2, 1, 3))
    ordering = ld.Ordering(CUBE, 0.1 * components, [[Q, 0.1, 0], [0, Q, 0.2]])
    found = ld.spectrum(ordering, ld.Probe([0.1, 0.2, 0.4]), powder=powder, equivalent=False, samples=2**12)
    options = {"nuclear_width_per_us": delta} | ({} if powder else {"initial": [0, 1, 2], "detector": [1, 0, 1]})
    time = np.linspace(0, 3, 41)
    gridded = ld.polarization(found, time, **options).values
    monkeypatch.setattr("latticedip.observables.polarization._fewer", lambda lines, time: lines)
    assert gridded == pytest.approx(ld.polarization(found, time, **options).values, abs=1e-9)
