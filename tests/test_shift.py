"""Coupling tensors of a probe, paramagnetic shifts and powder lines."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants
from scipy.integrate import quad

import latticedip as ld
from latticedip.errors import InputError
from latticedip.observables.powder import PowderLine
from latticedip.observables.tensor import principal_frame
from tests.reference.cells import random_rotation
from tests.reference.constants import DIPOLE_T

FCC = np.array([[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]])
CELL = np.array([[5.0, 0, 0], [0.6, 6.0, 0], [-0.4, 0.8, 7.0]])
SITES = [[0.1, 0.2, 0.3], [0.6, 0.5, 0.2], [0.3, 0.8, 0.7], [0.8, 0.1, 0.75]]
CRYSTAL = ld.Crystal(CELL, SITES, ["Mn", "Mn", "O", "Fe"], ["Mn1", "Mn2", "O1", "Fe1"], [1.0, 0.6, 1.0, 1.0])
POINT = (0.45, 0.3, 0.55)
PLATE = ld.Sample.plate([1, 2, 3])
SHELL = ld.Contact(0.3, shell=1)
TENSOR = ld.Contact([[0.1, 0.02, 0], [0.02, 0.3, 0], [0, 0, -0.2]], within=4.0)


def unit_moments(crystal: ld.Crystal, sites, moment) -> ld.Ordering:
    components = np.zeros((crystal.n_sites, 3))
    components[list(sites)] = moment
    return ld.Ordering(crystal, components)


@pytest.mark.parametrize(("magnetic", "sites"), [("Mn", (0, 1)), ("Mn2", (1,)), (["Mn1", "Fe"], (0, 3))])
@pytest.mark.parametrize("sample", [None, PLATE])
@pytest.mark.parametrize("contact", [(), SHELL, (SHELL, TENSOR)])
@pytest.mark.parametrize("position", [POINT, SITES[1], SITES[2]])
def test_coupling_tensor_is_the_local_field_of_unit_moments(magnetic, sites, sample, contact, position):
    if contact == (SHELL, TENSOR) and magnetic == "Mn2":
        contact = SHELL
    found = ld.coupling_tensor(CRYSTAL, position, magnetic=magnetic, sample=sample, contact=contact)
    for axis, moment in enumerate(np.eye(3)):
        ordering = unit_moments(CRYSTAL, sites, moment)
        field = ld.local_field(ordering, ld.Probe(position, contact=contact), sample=sample)
        for part in ("dipolar", "lorentz", "demagnetizing", "contact", "total"):
            assert getattr(found, part)[:, axis] == pytest.approx(getattr(field, part)[0], abs=1e-9), part
    assert abs(np.trace(found.dipolar)) < 1e-9
    assert found.n_ions == pytest.approx(CRYSTAL.occupancies[list(sites)].sum())


def test_orbit_average_of_a_cubic_crystal_is_zero():
    ni = ld.Crystal(3.52 * np.eye(3), FCC, ["Ni"] * 4)
    tensors = [ld.coupling_tensor(ni, p, magnetic="Ni").dipolar for p in ld.orbit(ni, (0.1, 0.23, 0.4))[::1]]
    assert np.abs(tensors[0]).max() > 0.1
    assert np.abs(np.mean(tensors, axis=0)).max() < 1e-10


@pytest.mark.parametrize("position", [POINT, SITES[3]])
def test_displaced_neighbours_exchange_pair_terms(position):
    """The difference is that of the pairs, evaluated here by hand; other sites do not count."""
    rigid = ld.coupling_tensor(CRYSTAL, position, magnetic="Mn")
    term = ld.Displaced(shell=1, of="Mn", factor=1.1)
    moved = ld.coupling_tensor(CRYSTAL, position, magnetic="Mn", displaced=term)
    cells = np.array(np.meshgrid(*[[-1, 0, 1]] * 3)).reshape(3, -1).T
    pairs = [(CRYSTAL.occupancies[i], (np.array(position) - SITES[i] - cell) @ CELL) for i in (0, 1) for cell in cells]
    weight, r = min(pairs, key=lambda pair: np.linalg.norm(pair[1]))
    length = np.linalg.norm(r)
    tensor = weight * DIPOLE_T * (3 * np.outer(r, r) - length**2 * np.eye(3)) / length**5
    assert moved.dipolar - rigid.dipolar == pytest.approx(tensor * (1.1**-3 - 1), abs=1e-9)
    assert moved.notes[-1 if position == POINT else -2] == "displaced: Mn atoms of shell 1: distance times 1.1"
    other = ld.coupling_tensor(CRYSTAL, position, magnetic="Fe", displaced=term)
    assert np.array_equal(other.dipolar, ld.coupling_tensor(CRYSTAL, position, magnetic="Fe").dipolar)


def test_principal_frame_rebuilds_the_tensor():
    rng = np.random.default_rng(3)
    for _ in range(20):
        a = rng.normal(size=(3, 3))
        a = a + a.T
        frame = principal_frame(a)
        assert frame.axes.T @ np.diag(frame.values) @ frame.axes == pytest.approx(a, abs=1e-12)
        assert np.linalg.det(frame.axes) == pytest.approx(1)
        off = np.abs(frame.values - frame.isotropic)
        assert off[2] >= off[0] >= off[1]
        assert 0 <= frame.asymmetry <= 1
        assert frame.anisotropy == pytest.approx(1.5 * (frame.values[2] - frame.isotropic))
    assert principal_frame(np.diag([1.0, 1.0, -2.0])).asymmetry == 0
    assert principal_frame(np.diag([1.0, -1.0, 0.0])).asymmetry == pytest.approx(1)
    assert principal_frame(1e-14 * np.diag([1.0, 0.4, -1.4]), 1e-12).asymmetry == 0


def test_axial_and_rhombic_coupling():
    fe = ld.Crystal(2.87 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Fe"] * 2)
    octahedral = ld.coupling_tensor(fe, (0.5, 0.5, 0), magnetic="Fe")
    assert octahedral.asymmetry == 0
    assert octahedral.principal_axes[2] == pytest.approx([0, 0, 1])
    assert octahedral.principal_values[2] == pytest.approx(-2 * octahedral.principal_values[0])
    at_site = ld.coupling_tensor(fe, (0, 0, 0), magnetic="Fe")
    assert at_site.asymmetry == 0
    assert at_site.site == "Fe"


# --- shifts


def test_units_of_susceptibility():
    """1 µB per tesla and ion is 5584.94 emu per mole and 10⁴ Oe; SI molar is 4π·10⁻⁶ of cgs molar."""
    one = ld.Susceptibility(5584.94e-4, "cm3/mol").at()
    assert one == pytest.approx(1, rel=1e-6)
    assert ld.Susceptibility(4e-6 * np.pi, "m3/mol").at() == pytest.approx(ld.Susceptibility(1.0).at(), rel=1e-9)
    assert ld.Susceptibility(0.3, "muB/T").at() == pytest.approx(0.3)


@pytest.mark.parametrize("sample", [None, PLATE, ld.Sample.sphere()])
def test_shift_is_the_field_of_induced_moments(sample):
    """K h is the local field of the moments χ_j h (µB at 1 T) over 1 T, part by part."""
    chi = {
        "Mn": ld.Susceptibility([np.diag([0.01, 0.02, 0.03]), [[0.03, 0.01, 0], [0.01, 0.02, 0], [0, 0, 0]]], "muB/T"),
        "Fe1": ld.Susceptibility(0.004, "muB/T"),
    }
    found = ld.paramagnetic_shift(CRYSTAL, POINT, chi, sample=sample, contact=[SHELL, TENSOR])
    h = np.array([2.0, -1.0, 2.0]) / 3
    components = np.zeros((4, 3))
    components[0] = np.diag([0.01, 0.02, 0.03]) @ h
    components[1] = np.array([[0.03, 0.01, 0], [0.01, 0.02, 0], [0, 0, 0]]) @ h
    components[3] = 0.004 * h
    field = ld.local_field(ld.Ordering(CRYSTAL, components), ld.Probe(POINT, contact=[SHELL, TENSOR]), sample=sample)
    for part in ("dipolar", "lorentz", "demagnetizing", "contact", "total"):
        assert getattr(found, part) @ h == pytest.approx(getattr(field, part)[0], abs=1e-10), part
    assert found.along([2, -1, 2]) == pytest.approx(float(h @ field.total[0]), abs=1e-10)
    assert found.along([-4, 2, -4]) == pytest.approx(found.along(h), abs=1e-15)


def test_isotropic_susceptibility_gives_coupling_times_chi():
    tensor = ld.coupling_tensor(CRYSTAL, POINT, magnetic="Mn", sample=PLATE, contact=SHELL)
    shift = ld.paramagnetic_shift(CRYSTAL, POINT, {"Mn": ld.Susceptibility(0.02)}, sample=PLATE, contact=SHELL)
    per_tesla = 0.02 * 10 / constants.N_A / constants.value("Bohr magneton")
    assert shift.total == pytest.approx(tensor.total * per_tesla, rel=1e-9)
    assert shift.chi_cm3_per_mol == pytest.approx(0.02)
    volume = 4 * np.pi * 0.02 * 1.6 / (constants.N_A * np.linalg.det(CELL) * 1e-24)
    assert shift.volume_susceptibility == pytest.approx(volume * np.eye(3), rel=1e-9)
    assert shift.lorentz == pytest.approx(volume / 3 * np.eye(3), rel=1e-9)
    # The dipolar part has no trace, so contact, Lorentz and demagnetizing parts alone make the isotropic shift.
    rest = np.trace(shift.contact + shift.lorentz + shift.demagnetizing) / 3
    assert shift.isotropic == pytest.approx(rest, abs=1e-12)


def test_sphere_has_no_lorentz_and_demagnetizing_shift_together():
    shift = ld.paramagnetic_shift(CRYSTAL, POINT, {"Mn": ld.Susceptibility(0.02)}, sample=ld.Sample.sphere())
    assert shift.lorentz + shift.demagnetizing == pytest.approx(np.zeros((3, 3)), abs=1e-15)


def test_rotation_pattern_is_the_shift_along_the_turning_field():
    shift = ld.paramagnetic_shift(CRYSTAL, POINT, {"Mn": ld.Susceptibility(0.02)}, contact=TENSOR, sample=PLATE)
    axis = np.array([1.0, 1.0, -0.5])
    pattern = shift.rotation(axis, [0, 30, 90, 143, 180], start=[0, 0, 1])
    assert pattern.axis @ pattern.start == pytest.approx(0, abs=1e-15)
    second = np.cross(pattern.axis, pattern.start)
    for angle, value in zip(np.radians(pattern.angles_deg), pattern.shift, strict=True):
        assert shift.along(np.cos(angle) * pattern.start + np.sin(angle) * second) == pytest.approx(value, abs=1e-14)
    assert len(shift.rotation(axis).shift) == 73
    assert shift.rotation([1, 0, 0]).start.tolist() == [0, 1, 0]
    # Over three perpendicular axes the constants add up to the trace.
    total = sum(shift.rotation(a).constant for a in np.eye(3))
    assert total == pytest.approx(np.trace(shift.total), abs=1e-14)
    with pytest.raises(InputError) as caught:
        shift.rotation([0, 0, 1], start=[0, 0, -2])
    assert str(caught.value) == ("start lies along the axis of rotation [0.0, 0.0, 1.0]; give a direction across it.")


def test_curve_follows_the_table():
    table = ld.Susceptibility([0.03, 0.01, 0.02], temperatures_K=[50, 200, 100])
    curve = ld.shift_curve(CRYSTAL, POINT, {"Mn": table, "Fe": ld.Susceptibility(0.001)}, contact=SHELL)
    assert curve.temperatures_K.tolist() == [50, 100, 200]
    assert curve.chi_cm3_per_mol * 2.6 == pytest.approx(np.array([0.03, 0.02, 0.01]) * 1.6 + 0.001)
    # Linear in χ(T): K against χ is a straight line.
    slope = np.diff(curve.along([0, 0, 1])) / np.diff(curve.chi_cm3_per_mol)
    assert slope[0] == pytest.approx(slope[1], rel=1e-9)
    between = ld.shift_curve(CRYSTAL, POINT, {"Mn": table}, [75.0])
    assert between.chi_cm3_per_mol == pytest.approx([0.025])
    one = ld.paramagnetic_shift(CRYSTAL, POINT, {"Mn": table}, temperature_K=75)
    assert one.total == pytest.approx(between.shifts[0].total, rel=1e-12)
    assert curve.principal_values.shape == (3, 3)
    assert curve.to_dict()["rows"][1]["temperature_K"] == 100
    tensors = ld.Susceptibility([np.diag([1, 2, 3.0]), np.diag([3, 4, 5.0])], temperatures_K=[10, 20])
    assert tensors.at(15) == pytest.approx(np.diag([2, 3, 4]) * ld.Susceptibility(1.0).at())
    single = ld.Susceptibility([0.02], temperatures_K=[300])
    assert single.at(300) == pytest.approx(ld.Susceptibility(0.02).at())


def test_local_tensors_are_carried_by_the_symmetry():
    """Pyrochlore: the axis of each ion is its own ⟨111⟩ direction, so a local axial tensor turns with it."""
    corners = np.array([[0, 0, 0], [0, 0.25, 0.25], [0.25, 0, 0.25], [0.25, 0.25, 0]])
    sites = (corners[None] + FCC[:, None]).reshape(-1, 3)
    crystal = ld.Crystal(10.1 * np.eye(3), sites, ["Dy"] * 16)
    axes = np.array([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]]) / np.sqrt(3)
    local = ld.Susceptibility(0.1 * np.eye(3) + 3 * np.outer(axes[0], axes[0]), "muB/T", local=True)
    found = local.of_atoms(crystal, "Dy")
    order = crystal.find("Dy")
    for tensor, site in zip(found, order, strict=True):
        axis = axes[site % 4]
        assert tensor == pytest.approx(0.1 * np.eye(3) + 3 * np.outer(axis, axis), abs=1e-9)
    # At the centre of a cubic hexagon of ions the sum has the symmetry of the place, along (1, 1, 1).
    shift = ld.paramagnetic_shift(crystal, (0.625, 0.625, 0.625), {"Dy": local})
    assert shift.principal.asymmetry < 1e-9
    with pytest.raises(InputError) as caught:
        ld.Susceptibility(np.diag([1.0, 2.0, 3.0]), "muB/T", local=True).of_atoms(crystal, "Dy")
    assert str(caught.value).startswith(
        "Dy: the local susceptibility does not have the symmetry of its site (an operation changes it by "
    )
    with pytest.raises(InputError) as caught:
        ld.Susceptibility(np.eye(3), local=True).of_atoms(CRYSTAL, "Mn")
    assert str(caught.value) == (
        "Mn: no operation of the crystal carries its first atom onto number 2, so a local susceptibility cannot be "
        "carried over. Name the distinct sites one by one."
    )


@settings(max_examples=10, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_turning_everything_turns_the_shift(seed):
    rng = np.random.default_rng(seed)
    turn = random_rotation(rng)
    chi = np.diag([0.01, 0.02, 0.05])
    one = ld.paramagnetic_shift(CRYSTAL, POINT, {"Mn": ld.Susceptibility(chi)}, sample=PLATE)
    turned = ld.Crystal(CELL @ turn.T, SITES, CRYSTAL.symbols, CRYSTAL.labels, CRYSTAL.occupancies)
    chi_turned = turn @ chi @ turn.T
    sample = ld.Sample.plate(turn @ [1, 2, 3])
    two = ld.paramagnetic_shift(turned, POINT, {"Mn": ld.Susceptibility(chi_turned)}, sample=sample)
    assert two.total == pytest.approx(turn @ one.total @ turn.T, abs=1e-10)
    assert two.principal.values == pytest.approx(one.principal.values, abs=1e-10)


def test_result_as_a_dict():
    shift = ld.paramagnetic_shift(CRYSTAL, SITES[2], {"Mn": ld.Susceptibility(0.02)}, sample=PLATE)
    document = shift.to_dict()
    assert document["site"] == "O1"
    assert document["boundary"].startswith("sample shape: plate")
    parts = ("shift_dipolar", "shift_contact", "shift_lorentz", "shift_demagnetizing")
    assert sum(np.array(document[part]) for part in parts) == pytest.approx(np.array(document["shift"]))
    assert document["powder_edges"] == sorted(document["shift_principal_values"])
    assert "the position is that of atom O1, which does not act on itself" in document["notes"]
    couple = ld.coupling_tensor(CRYSTAL, POINT, magnetic="Mn").to_dict()
    assert couple["boundary"] == "net moment without a stated shape: N = 0 assumed (a domain that closes its flux)"
    assert couple["dipolar_asymmetry"] == principal_frame(np.array(couple["dipolar_T_per_muB"])).asymmetry


# --- powder lines

LINES = [
    (-1.0, 0.2, 0.8),
    (-2.0, 1.0, 1.0),
    (-1.0, -1.0, 2.0),
    (0.1, 0.11, 5.0),
    (-3.0, 4.999, 5.0),
    (1e-3, 2e-3, 4e-3),
]


@pytest.mark.parametrize("edges", LINES)
def test_density_integrates_to_the_cumulative_form_and_to_one(edges):
    line = PowderLine(edges)
    low, middle, high = line.edges
    assert line.cumulative([low - 1, low, high, high + 1]) == pytest.approx([0, 0, 1, 1], abs=1e-14)

    def stretch(a: float, b: float, moment: int = 0) -> float:
        # The variable s = ±(K − K₂)^(1/2) takes the singularity at K₂ away, but for a logarithm.
        sign = 1.0 if a >= middle else -1.0
        ends = sorted((np.sqrt(abs(a - middle)), np.sqrt(abs(b - middle))))

        def integrand(s: float) -> float:
            k = middle + sign * s * s
            return 2 * s * float(line.density([k])[0]) * k**moment if low <= k <= high and k != middle else 0.0

        return quad(integrand, *ends, epsabs=1e-13, epsrel=1e-11, limit=400)[0]

    total = sum(stretch(a, b) for a, b in ((low, middle), (middle, high)) if b > a)
    assert total == pytest.approx(1, abs=1e-9)
    mean = sum(stretch(a, b, 1) for a, b in ((low, middle), (middle, high)) if b > a)
    assert mean == pytest.approx(line.mean, abs=1e-9 * (high - low) + 1e-9 * abs(line.mean))
    square = sum(stretch(a, b, 2) for a, b in ((low, middle), (middle, high)) if b > a)
    assert square - mean**2 == pytest.approx(line.variance, rel=1e-7)
    for share in (0.07, 0.35, 0.6, 0.93):
        k = low + share * (high - low)
        part = stretch(low, k) if k <= middle else (stretch(low, middle) if middle > low else 0.0) + stretch(middle, k)
        assert float(line.cumulative([k])[0]) == pytest.approx(part, abs=1e-9)


def test_axial_line_in_closed_form():
    line = PowderLine((2.0, 2.0, 5.0))
    k = np.array([2.1, 3.0, 4.9])
    assert line.density(k) == pytest.approx(1 / (2 * np.sqrt(3.0 * (k - 2))), rel=1e-12)
    assert line.cumulative(k) == pytest.approx(np.sqrt((k - 2) / 3), rel=1e-12)
    mirrored = PowderLine((-5.0, -2.0, -2.0))
    assert mirrored.density(-k) == pytest.approx(line.density(k), rel=1e-12)
    assert np.isinf(line.density([2.0])[0])
    assert line.density([1.999, 5.001]).tolist() == [0, 0]


@pytest.mark.parametrize("edges", LINES)
def test_cumulative_against_an_even_grid_of_directions(edges):
    """cos θ and φ sampled at midpoints: the fraction of directions below each value."""
    n = 1200
    z = (np.arange(n) + 0.5) / n
    phi = (np.arange(n) + 0.5) / n * np.pi / 2
    e = np.array(edges)
    shift = e[2] * z[:, None] ** 2 + (1 - z[:, None] ** 2) * (e[0] * np.cos(phi) ** 2 + e[1] * np.sin(phi) ** 2)
    values = np.quantile(shift, [0.02, 0.2, 0.5, 0.8, 0.98])
    counted = [float((shift <= value).mean()) for value in values]
    assert PowderLine(edges).cumulative(values) == pytest.approx(counted, abs=1e-3)


def test_bins_add_up_to_one_and_follow_the_density():
    line = PowderLine((-1.0, 0.2, 0.8))
    limits, heights = line.binned(400)
    assert (heights * np.diff(limits)).sum() == pytest.approx(1, abs=1e-14)
    assert limits[0] < -1
    assert limits[-1] > 0.8
    middle = (limits[1:] + limits[:-1]) / 2
    smooth = (np.abs(middle - 0.2) > 0.05) & (middle > -0.99) & (middle < 0.79)
    assert heights[smooth] == pytest.approx(line.density(middle[smooth]), rel=1e-3)
    flat = PowderLine((0.3, 0.3, 0.3))
    limits, heights = flat.binned(7)
    assert (heights * np.diff(limits)).sum() == pytest.approx(1)
    assert flat.cumulative([0.29, 0.3, 0.31]).tolist() == [0, 1, 1]
    with pytest.raises(InputError) as caught:
        flat.density([0.3])
    assert str(caught.value) == "the line has no width: every grain shows 0.3. Use its cumulative form."
    with pytest.raises(InputError) as caught:
        line.binned(10, span=(-0.5, 2))
    assert str(caught.value) == "span must go upwards and hold the whole line, -1.0 to 0.8, got (-0.5, 2)."


@pytest.mark.parametrize("gap", [1e-3, 1e-6, 1e-9, 1e-12, 1e-15])
def test_nothing_is_lost_next_to_the_singularity(gap):
    line = PowderLine((-1.0, 0.0, 2.0))
    below, at, above = line.cumulative([-gap, 0.0, gap])
    assert below - 1e-14 <= at <= above + 1e-14
    # At K₂ the cone is a pair of planes: the fraction is (2/π) arctan √((K₂ − K₁)/(K₃ − K₂)).
    assert at == pytest.approx(2 / np.pi * np.arctan(np.sqrt(0.5)), abs=1e-14)
    assert above - below < 4 * gap * (2 + abs(np.log(gap))) + 1e-14


# --- refusals


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"chi": 0.1, "unit": "emu/mol"}, "unknown unit of susceptibility 'emu/mol'. Known are: cm3/mol (cgs, "
         "emu per oersted and mole), m3/mol, muB/T."),
        ({"chi": [0.1, 0.2]}, "chi must be a number, a (3, 3) tensor or (n_atoms, 3, 3) tensors, got shape (2,)."),
        ({"chi": [[0, 1.0, 0], [0, 0, 0], [0, 0, 0]]}, "chi must be symmetric, its elements across the diagonal differ "
         "by 1."),
        ({"chi": 0.1, "local": True}, "a local susceptibility is one (3, 3) tensor, that of the first atom of its "
         "label."),
        ({"chi": [0.1, 0.2], "temperatures_K": [1.0]}, "temperatures_K has 1 values, but chi is for 2."),
        ({"chi": [0.1, 0.2], "temperatures_K": [5.0, 5.0]}, "temperatures_K holds 5.0 twice."),
        ({"chi": [0.1, 0.2], "temperatures_K": [5.0, -1.0]}, "temperatures_K must be positive, got -1.0."),
    ],
)  # fmt: skip
def test_susceptibilities_that_mean_nothing(arguments, message):
    with pytest.raises(InputError) as caught:
        ld.Susceptibility(**arguments)
    assert str(caught.value) == message


TABLE = ld.Susceptibility([0.1, 0.2], temperatures_K=[10.0, 300.0])


@pytest.mark.parametrize(
    ("susceptibility", "options", "message"),
    [
        ({}, {}, "susceptibility names no magnetic label or element."),
        ({"Mn": 0.1}, {}, "susceptibility of Mn must be a Susceptibility, got 0.1."),
        ({"Mn": TABLE}, {}, "the susceptibility is a table from 10 to 300 K: give temperature_K."),
        ({"Mn": TABLE}, {"temperature_K": 5.0}, "temperature_K = 5.0 lies outside the table of the susceptibility, "
         "10 to 300 K."),
        ({"Mn": ld.Susceptibility(0.1)}, {"temperature_K": 5.0}, "the susceptibility is a single value, so "
         "temperature_K = 5.0 has no meaning. Leave it out, or give temperatures_K with a table."),
        ({"Mn": TABLE, "Mn2": TABLE}, {"temperature_K": 20}, "susceptibility: 'Mn2' means atom Mn2, which is named "
         "before."),
        ({"Mn": ld.Susceptibility(np.tile(np.eye(3), (3, 1, 1)))}, {}, "Mn: 3 susceptibility tensors for 2 atoms."),
        ({"Mx": TABLE}, {"temperature_K": 20}, "no site has the label or element 'Mx'. Known are: Mn1, Mn2, O1, Fe1, "
         "Mn, O, Fe."),
        ({"Mn": ld.Susceptibility(0.1)}, {"contact": ld.Contact(moment_density_muB_per_A3=[0, 0, 0.1])}, "contact: a "
         "moment density is not a coupling to moments, so it adds nothing to a coupling tensor or a shift. Give "
         "coupling_T_per_muB with shell or within."),
        ({"Mn": ld.Susceptibility(0.1)}, {"contact": "x"}, "contact must hold Contact objects, got 'x'."),
    ],
)  # fmt: skip
def test_refusals(susceptibility, options, message):
    with pytest.raises(InputError) as caught:
        ld.paramagnetic_shift(CRYSTAL, POINT, susceptibility, **options)
    assert str(caught.value) == message


def test_a_curve_needs_a_table():
    with pytest.raises(InputError) as caught:
        ld.shift_curve(CRYSTAL, POINT, {"Mn": ld.Susceptibility(0.1)})
    assert str(caught.value) == (
        "a curve needs a susceptibility against temperature: give temperatures_K with its values."
    )


def test_coupling_refusals():
    with pytest.raises(InputError) as caught:
        ld.coupling_tensor(CRYSTAL, POINT, magnetic=[])
    assert str(caught.value) == "magnetic names no label or element."
    split = ld.Crystal(5 * np.eye(3), [[0, 0, 0], [0.01, 0, 0]], ["O", "Mn"], occupancies=[0.5, 0.5])
    with pytest.raises(InputError) as caught:
        ld.coupling_tensor(split, (0, 0, 0), magnetic="Mn")
    assert str(caught.value) == (
        "position sits on atom O, 0.0500 Å from the magnetic atom Mn: only one of them is there at a time. Give both "
        "the same position."
    )
