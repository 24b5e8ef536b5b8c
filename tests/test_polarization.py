"""Polarization of a spin in static fields: closed forms against averages over random fields and explicit precession."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad, solve_ivp
from scipy.spatial.transform import Rotation
from scipy.special import j0

import latticedip as ld
from latticedip.errors import InputError, LimitError
from latticedip.observables.polarization import direction_at, kubo_toyabe, kubo_toyabe_along

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


def test_negative_times_are_refused():
    for applied in ([0, 0, 0.1], [0, 0, 0]):
        found = ld.spectrum(FERROMAGNET, ld.Probe([0.5, 0.5, 0.5]), powder=True, applied_T=applied)
        with pytest.raises(InputError) as caught:
            ld.polarization(found, -TIME)
        assert str(caught.value) == "time_us must not be below zero, got -1.0."


# --- a powder in an applied field -------------------------------------------------------------------------------

#: One position of which all are alike, so that there is one internal field.
CENTRE = ld.Probe([0.5, 0.5, 0.5])
INSIDE = float(np.linalg.norm(ld.local_field(FERROMAGNET, CENTRE).total))


def grains_by_quadrature(time, applied, inside, across=False):
    """⟨c² + s² cos ωt⟩ along, ⟨s²/2 + (1 − s²/2) cos ωt⟩ across the field, over u by an adaptive quadrature.

    The substitution u = v² − 1 takes the root out of B where both fields are alike.
    """

    def integrand(v, t):
        u = v**2 - 1
        size2 = (applied - inside) ** 2 + 2 * applied * inside * v**2
        sine2 = inside**2 * (1 - u**2) / size2 if size2 else 1.0
        wave = np.cos(GAMMA * np.sqrt(size2) * t)
        stays = sine2 / 2 if across else 1 - sine2
        return v * (stays + (1 - stays) * wave)

    return np.array(
        [
            sum(quad(integrand, a, b, (t,), epsabs=1e-12, limit=4000)[0] for a, b in ((0, 0.02), (0.02, np.sqrt(2))))
            for t in time
        ]
    )


@pytest.mark.parametrize("ratio", [1e-3, 0.3, 0.999, 1.0, 1.0 + 1e-9, 1.2, 5.0, 300.0])
def test_a_powder_in_a_field_against_an_adaptive_quadrature(ratio):
    """Along and across the field to 1e-9, also where the two fields nearly cancel in some grains."""
    found = ld.spectrum(FERROMAGNET, CENTRE, powder=True, applied_T=[0, 0.6 * ratio * INSIDE, 0.8 * ratio * INSIDE])
    time = np.array([0.0, 0.013, 0.2, 0.71, 1.3]) * min(1.0, 10 / ratio)
    along = ld.polarization(found, time)
    assert along.initial == pytest.approx([0, 0.6, 0.8])
    assert along.values == pytest.approx(grains_by_quadrature(time, ratio * INSIDE, INSIDE), abs=1e-9)
    across = ld.polarization(found, time, initial=[2, 0, 0])
    assert across.values == pytest.approx(grains_by_quadrature(time, ratio * INSIDE, INSIDE, True), abs=1e-9)
    # At an angle it is the mixture, with the direction seen the same: nothing mixed is even in the azimuth.
    tilted = ld.polarization(found, time, initial=direction_at(found.applied_T, 30.0))
    assert tilted.values == pytest.approx(0.75 * along.values + 0.25 * across.values, abs=1e-12)


@pytest.mark.parametrize("beta", [0.01, 0.4, 0.95, 1.0, 1.7, 20.0])
def test_what_stays_of_a_powder_along_the_field(beta):
    """Pratt, J. Phys.: Condens. Matter 19, 456207 (2007), from memory; 1/3 without a field, all in a strong one."""
    found = ld.spectrum(FERROMAGNET, CENTRE, powder=True, applied_T=[beta * INSIDE, 0, 0])
    rest = 0.0 if beta == 1.0 else (beta**2 - 1) ** 2 / (8 * beta**3) * np.log(abs((beta + 1) / (beta - 1)))
    steps = np.linspace(0, 1, 4001)
    window = np.sin(np.pi * steps) ** 8
    # A smooth window over many turns leaves what does not turn, but for the few grains near β = 1 that turn slowly.
    kept = ld.polarization(found, 20.0 * steps).values @ window / window.sum()
    assert kept == pytest.approx(3 / 4 - 1 / (4 * beta**2) + rest, abs=2e-4)


def random_grains(ordering, applied, start, seen, times, sign=1.0, gamma=GAMMA, delta=0.0, n=200_000):
    """Mean and its standard error over grains turned at random, with explicit rotations of the spin."""
    rng = np.random.default_rng(11)
    orbit = ld.orbit_field(ordering, ld.Probe([0.5, 0.5, 0.12]))
    cells = rng.integers(-(10**5), 10**5, (n // len(orbit.positions), 3))
    fields = orbit.fields(cells).reshape(-1, 3)
    fields = Rotation.random(len(fields), rng=rng).apply(fields) + applied
    fields = fields + delta / gamma * rng.normal(size=fields.shape)
    values = [Rotation.from_rotvec(-sign * gamma * t * fields).apply(start) @ seen for t in times]
    return np.mean(values, axis=1), np.std(values, axis=1) / np.sqrt(len(fields))


@pytest.mark.parametrize("delta", [0.0, 3.0])
@pytest.mark.parametrize(
    "ordering",
    [FERROMAGNET, ld.Ordering(CUBE, [[1, 0.3j, 0]], [Q, 0.1, 0]), ld.Ordering(CUBE, [[0, 0, 1]], [1 / 3, 0, 0]),
     ld.Ordering(CUBE, [[[0.3, 0, 0]], [[0, 0.2j, 0.1]]], [[Q, 0.1, 0], [0, Q, 0.2]])],
    ids=["ferromagnet", "ellipse", "commensurate", "two waves"],
)  # fmt: skip
def test_a_powder_in_a_field_is_that_of_grains_turned_at_random(ordering, delta):
    """200,000 grains; five standard errors, 0.01 at most."""
    probe = ld.Probe([0.5, 0.5, 0.12])
    applied = np.array([0.02, 0.03, -0.04])
    found = ld.spectrum(ordering, probe, powder=True, applied_T=applied)
    times = np.array([0.05, 0.2, 0.5])
    start, seen = np.array([1.0, 2, 2]) / 3, np.array([0.0, 0.6, 0.8])
    for p, d in ((applied / np.linalg.norm(applied), None), (start, None), (start, seen)):
        expected, error = random_grains(ordering, applied, p, p if d is None else d, times, delta=delta)
        signal = ld.polarization(found, times, initial=p, detector=d, nuclear_width_per_us=delta)
        assert np.all(np.abs(signal.values - expected) < 5 * error)
        assert error.max() < 2e-3


def test_the_sense_of_turning_of_a_powder_is_that_of_the_particle():
    """17O turns the other way; with a strong field every grain turns about it."""
    for particle, sign in (("muon", 1.0), ("17O", -1.0)):
        probe = ld.Probe([0.5, 0.5, 0.5], particle=particle)
        found = ld.spectrum(FERROMAGNET, probe, powder=True, applied_T=[0, 0, 500 * INSIDE])
        angle = 2 * np.pi * probe.MHz_per_T * 500 * INSIDE * 1e-3
        quarter = np.pi / 2 / angle * 1e-3
        signal = ld.polarization(found, np.array([0.0, quarter]), initial=[1, 0, 0], detector=[0, 1, 0])
        # dS/dt = γ S × B takes x to −y for γ > 0.
        assert signal.values == pytest.approx([0.0, -sign], abs=1e-4)


def test_limits_of_a_powder_in_a_field():
    free = ld.polarization(ld.spectrum(FERROMAGNET, CENTRE, powder=True), TIME).values
    weak = ld.spectrum(FERROMAGNET, CENTRE, powder=True, applied_T=[0, 0, 1e-7 * INSIDE])
    for start in ([0, 0, 1], [1, 0, 1]):
        assert ld.polarization(weak, TIME, initial=start).values == pytest.approx(free, abs=1e-6)
    strong = ld.spectrum(FERROMAGNET, CENTRE, powder=True, applied_T=[0, 0, 300 * INSIDE])
    held = ld.polarization(strong, np.linspace(0, 2 * np.pi / (300 * GAMMA * INSIDE), 201)).values
    # 1 − ⟨s²⟩(1 − cos ωt), and ⟨s²⟩ = (2/3)(I/A)² in leading order.
    assert 1 - held.min() == pytest.approx(4 / 3 / 300**2, rel=0.02)
    short = np.array([1e-4])
    moment = ld.polarization(ld.spectrum(FERROMAGNET, CENTRE, powder=True, applied_T=[0, 0, INSIDE]), short).values[0]
    # P = 1 − γ²⟨B²_across⟩t²/2, of which the applied field has none along itself.
    assert 1 - moment == pytest.approx((GAMMA * INSIDE * 1e-4) ** 2 / 3, rel=1e-3)
    nothing = ld.Ordering(CUBE, [[0, 0, 0]])
    alone = ld.spectrum(nothing, CENTRE, powder=True, applied_T=[0, 0, 0.1])
    assert ld.polarization(alone, TIME).values == pytest.approx(1.0, abs=1e-14)
    turned = ld.polarization(alone, TIME, initial=[1, 0, 0]).values
    assert turned == pytest.approx(np.cos(GAMMA * 0.1 * TIME), abs=1e-12)
    decoupled = ld.polarization(alone, TIME, nuclear_width_per_us=0.7).values
    assert decoupled == pytest.approx(kubo_toyabe_along(TIME, 0.7, GAMMA * 0.1), abs=1e-12)


def test_a_grid_of_internal_fields_stands_for_all(monkeypatch):
    components = [[[0.3, 0, 0]], [[0, 0.2j, 0.1]]]
    ordering = ld.Ordering(CUBE, components, [[Q, 0.1, 0], [0, Q, 0.2]])
    found = ld.spectrum(
        ordering, ld.Probe([0.1, 0.2, 0.4]), powder=True, equivalent=False, samples=2**10, applied_T=[0, 0, 0.03]
    )
    options = {"initial": [0, 1, 2], "detector": [1, 0, 1], "nuclear_width_per_us": 0.8}
    time = np.linspace(0, 3, 41)
    gridded = ld.polarization(found, time, **options).values
    monkeypatch.setattr("latticedip.observables.polarization._fewer", lambda lines, time: lines)
    assert gridded == pytest.approx(ld.polarization(found, time, **options).values, abs=1e-9)


@pytest.mark.parametrize("applied", [0.001, 0.05, 0.3, 4.0])
def test_densities_of_many_internal_fields_are_added_up(monkeypatch, applied):
    """The same signal from every internal field by itself; a wave through zero, and fields that nearly cancel."""
    ordering = ld.Ordering(CUBE, [[0.7, 0.3j, 0]], [Q, 0.1, 0])
    found = ld.spectrum(ordering, ld.Probe([0.1, 0.2, 0.4]), powder=True, applied_T=[0, 0, applied])
    options = {"initial": [0, 1, 2], "detector": [1, 0, 1], "nuclear_width_per_us": 0.8}
    time = np.linspace(0, min(1.5, 1 / applied), 41)
    single = ld.polarization(found, time, **options).values
    monkeypatch.setattr("latticedip.observables.polarization.MANY_FIELDS", 0)
    assert ld.polarization(found, time, **options).values == pytest.approx(single, abs=1e-9)


def test_the_notes_say_what_turns_with_a_grain():
    found = ld.spectrum(FERROMAGNET, CENTRE, powder=True, applied_T=[0, 0, 0.1])
    assert ld.polarization(found, TIME).notes == (
        *found.notes,
        "polarization of a powder in an applied field: the whole internal field, with its Lorentz and demagnetizing "
        "parts, turns with the grain; moments that an applied field has turned in the crystal turn along",
    )
    with pytest.raises(InputError) as caught:
        direction_at([0, 0, 1], 200.0)
    assert str(caught.value) == "angle_deg must lie between 0.0 and 180.0, got 200.0."


def test_a_powder_that_turns_too_often_is_refused():
    found = ld.spectrum(FERROMAGNET, CENTRE, powder=True, applied_T=[0, 0, INSIDE])
    with pytest.raises(LimitError, match=r"^the polarization of this powder up to 1e\+09 µs needs") as caught:
        ld.polarization(found, np.array([0.0, 1e9]))
    assert str(caught.value).endswith(" fields, more than 3.4e+07. Ask for a shorter time.")


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
