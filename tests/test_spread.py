"""Fields averaged over the motion of a probe: against quadrature, sums of waves alone, and each other."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.crystal.model import Operations
from latticedip.crystal.spread import covariance_from_Uij
from latticedip.errors import InputError
from latticedip.ordering.model import ParentTransform, Reference
from latticedip.sums.smear import smeared_pair_tensors, smeared_sum
from latticedip.units import DIPOLE_T_A3_PER_MUB
from tests.reference.clouds import nodes, principal_value, wave_sum
from tests.refusals import refusal
from tests.test_study import study_of

CELL = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = np.array([[0.05, 0.1, 0.2], [0.55, 0.42, 0.7], [0.3, 0.8, 0.45]])
POINTS = np.array([[0.5, 0.15, 0.2], [1.8, -0.4, 0.1]])
S = np.random.default_rng(5).normal(size=(3, 3)) + 1j * np.random.default_rng(6).normal(size=(3, 3))
CASES = {
    "uniform": ([[0, 0, 0]], [S.real]),
    "zone boundary": ([[0.5, 0, 0.5]], [S.real]),
    "generic": ([[0.21, -0.34, 0.11]], [S]),
    "two waves": ([[0, 0, 0], [0.3, 0, 0.17]], [S.imag, S]),
}
TILTED = np.array([[0.02, 0.006, -0.004], [0.006, 0.011, 0.003], [-0.004, 0.003, 0.007]])
LINE = 0.01 * np.outer([1, 2, -1], [1, 2, -1]) / 6
DISC = 0.01 * np.eye(3) - LINE


def ordering_of(name: str) -> ld.Ordering:
    k, components = CASES[name]
    crystal = ld.Crystal(CELL, PLACES, ["Mn", "Fe", "O"], occupancies=[1.0, 0.6, 1.0])
    return ld.Ordering(crystal, components, k, name)


def cubic(moment=(0, 0, 2.0), a: float = 4.0) -> ld.Ordering:
    return ld.Ordering(ld.Crystal(a * np.eye(3), [[0, 0, 0]], ["Mn"]), [moment], name="cubic")


@pytest.mark.parametrize("spread", [0.12, TILTED, DISC, LINE], ids=["ball", "tilted", "disc", "line"])
@pytest.mark.parametrize("name", CASES)
def test_average_is_the_quadrature_of_the_point_result(name, spread):
    ordering = ordering_of(name)
    found = ld.local_field(ordering, POINTS, spread=spread)
    covariance = spread**2 * np.eye(3) if np.ndim(spread) == 0 else spread
    steps, weights = nodes(covariance, 10)
    for point, field in zip(POINTS, found.total, strict=True):
        around = ld.local_field(ordering, point + steps @ np.linalg.inv(CELL)).total
        assert np.abs(weights @ around - field).max() < 1e-8


def test_an_isotropic_spread_changes_nothing_until_it_reaches_an_ion():
    ordering = ordering_of("generic")
    point = ld.local_field(ordering, POINTS).total
    assert np.abs(ld.local_field(ordering, POINTS, spread=0.2).total - point).max() < 1e-12
    assert np.abs(ld.local_field(ordering, POINTS, spread=0.5).total - point).max() > 1e-5
    assert np.abs(ld.local_field(ordering, POINTS, spread=TILTED).total - point).max() > 1e-4


@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, 0.5), (0.13, -0.2, 0.31)])
@pytest.mark.parametrize(
    "covariance",
    [0.3 * np.eye(3), 0.2 * np.eye(3) + 10 * TILTED, np.diag([0.2, 0.2, 0.9]), np.diag([0.3, 0.7, 0.7])],
    ids=["ball", "tilted", "needle", "disc"],
)
def test_wide_clouds_are_sums_of_waves_alone(k, covariance):
    offsets = np.array([[1.3, 0.9, 1.1], [0.3, 0.2, 0.4], [-8.0, 3.1, 20.2]])
    plan = smeared_sum(CELL, np.array(k, dtype=float), 1e-12, covariance)
    tensors, _, _ = plan.tensors(plan.place(offsets), plan.place(np.zeros((1, 3))))
    assert np.abs(tensors[:, 0] - wave_sum(CELL, np.array(k), offsets, covariance)).max() < 1e-12


@pytest.mark.parametrize("covariance", [0.16 * np.eye(3), 0.1 * np.eye(3) + 5 * TILTED], ids=["ball", "tilted"])
def test_a_reached_source_in_the_principal_value_sense(covariance):
    offsets = np.array([[0.5, -0.3, 0.4], [0.1, 0.0, 0.05], [1.5, 0.2, 0.3]])
    found, _, _ = smeared_pair_tensors(offsets, covariance)
    assert np.abs(np.trace(found, axis1=1, axis2=2)).max() < 1e-12
    for offset, tensor in zip(offsets, found, strict=True):
        assert np.abs(principal_value(offset, covariance) - tensor).max() < 1e-9


def test_closed_form_of_a_pair_in_an_isotropic_cloud():
    """Along the pair: (2/r³)[erf u − (2u/√π) (1 + 2u²/3) exp(−u²)], u = r/(√2 σ); by hand."""
    from math import erf, exp, pi, sqrt

    for r, sigma in [(0.2, 0.3), (1.0, 0.4), (2.0, 0.1)]:
        u = r / (sqrt(2) * sigma)
        along = 2 / r**3 * (erf(u) - 2 * u / sqrt(pi) * (1 + 2 * u * u / 3) * exp(-u * u))
        tensor = smeared_pair_tensors(np.array([[0, 0, r]]), sigma**2 * np.eye(3))[0][0]
        expected = DIPOLE_T_A3_PER_MUB * along * np.diag([-0.5, -0.5, 1.0])
        np.testing.assert_allclose(tensor, expected, rtol=1e-12, atol=1e-14)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6))
@example(71363)
def test_the_tolerance_is_kept(seed):
    rng = np.random.default_rng(seed)
    cell = np.diag(rng.uniform(2.5, 9, 3)) + rng.uniform(-1, 1, (3, 3))
    half = rng.normal(size=(3, 3)) * 10 ** rng.uniform(-1.5, -0.3)
    covariance = half @ half.T + rng.uniform(0, 0.05) * np.eye(3)
    k = rng.choice([0.0, 0.5, 0.21, -0.37], 3)
    offsets = rng.uniform(-10, 10, (4, 3))
    found = []
    for tol in (1e-4, 1e-7, 1e-12):
        plan = smeared_sum(cell, k, tol, covariance)
        found.append(plan.tensors(plan.place(offsets), plan.place(np.zeros((1, 3))))[0][:, 0])
    size = np.maximum(1.0, np.abs(found[-1]).max(axis=(1, 2)))
    for tensors, tol in zip(found, (1e-4, 1e-7), strict=False):
        assert np.all(np.abs(tensors - found[-1]).max(axis=(1, 2)) <= tol * size)
    # Averages keep the trace of the background, 4π/V at k = 0.
    background = 4 * np.pi * DIPOLE_T_A3_PER_MUB / abs(np.linalg.det(cell)) if not np.any(k) else 0.0
    assert np.abs(np.trace(found[-1], axis1=1, axis2=2) - background).max() < 1e-11 * size.max()


def test_no_spread_is_the_point():
    ordering = ordering_of("two waves")
    point = ld.local_field(ordering, POINTS)
    for spread in (0.0, 1e-7, np.zeros((3, 3)), 1e-14 * TILTED, 1e-3):
        assert np.abs(ld.local_field(ordering, POINTS, spread=spread).total - point.total).max() < 1e-11
    # For a small anisotropic cloud the change is ½ U_ab ∂_a∂_b B: a hundredth of the tensor, a hundredth of the change.
    changes = [ld.local_field(ordering, POINTS, spread=s * TILTED).total - point.total for s in (1e-4, 1e-2)]
    assert np.abs(changes[1] / changes[0] - 100).max() < 0.1


@pytest.mark.parametrize("sigma", [0.05, 0.3, 0.8])
def test_an_isotropic_tensor_is_the_number(sigma):
    ordering = ordering_of("generic")
    one = ld.local_field(ordering, POINTS, spread=sigma)
    two = ld.local_field(ordering, POINTS, spread=sigma**2 * np.eye(3))
    assert np.array_equal(one.total, two.total) and np.array_equal(one.gradient_T_per_A, two.gradient_T_per_A)
    # Nearly isotropic: the quadrature against the closed form.
    near = ld.local_field(ordering, POINTS, spread=sigma**2 * np.diag([1, 1, 1 + 1e-11]))
    assert np.abs(near.total - one.total).max() < 1e-10


def test_extended_moments_are_a_spread_probe():
    ordering = ordering_of("generic")
    wide = np.array([[0.2, 0.05, 0], [0.05, 0.3, 0], [0, 0, 0.15]])
    one = ld.local_field(ordering, POINTS, spread=wide)
    two = ld.local_field(ordering, POINTS, moment_spread=wide)
    three = ld.local_field(ordering, POINTS, spread=0.25 * wide, moment_spread=0.75 * wide)
    assert np.abs(two.total - one.total).max() < 1e-14 and np.abs(three.total - one.total).max() < 1e-11
    np.testing.assert_allclose(two.gradient_T_per_A, one.gradient_T_per_A, atol=1e-12)
    each = ld.local_field(ordering, POINTS, moment_spread={"Mn": 0.7, "Fe": 0.5})
    parts = []
    for site, spread in ((0, 0.7), (1, 0.5), (2, None)):
        components = np.zeros((1, 3, 3), complex)
        components[0, site] = S[site]
        alone = ld.Ordering(ordering.crystal, components, ordering.k)
        parts.append(ld.local_field(alone, POINTS, moment_spread=spread).total)
    assert np.abs(sum(parts) - each.total).max() < 1e-11
    assert each.notes[0] == (
        "moments are extended: Gaussian spread of Mn 0.7 Å rms along each axis; Fe 0.5 Å rms along each axis"
    )


@pytest.mark.parametrize("name", CASES)
def test_an_atom_stays_left_out_of_its_own_field(name):
    """On a site: what the cloud feels of all other atoms, also its own images."""
    ordering = ordering_of(name)
    covariance = 0.2 * np.eye(3) + 5 * TILTED
    found = ld.local_field(ordering, PLACES[1:2], spread=covariance)
    assert found.sites[0] == 1
    expected = np.zeros(3)
    for k, components in zip(ordering.k, ordering.mean_components, strict=True):
        for site, s in enumerate(components):
            tensor = wave_sum(CELL, k, (PLACES[1] - PLACES[site])[None] @ CELL, covariance)[0]
            if site == 1:
                # ∫ of the tensor over the cloud about the source itself.
                tensor = tensor - principal_value(np.full(3, 1e-9), covariance)
            expected += (tensor @ s).real
    assert np.abs(found.dipolar[0] + found.lorentz[0] - expected).max() < 1e-9


@pytest.mark.parametrize("spread", [0.1, 0.6, TILTED, 20 * TILTED], ids=["ball", "wide ball", "tilted", "wide tilted"])
def test_gradient_is_the_slope_of_the_averaged_field(spread):
    ordering = ordering_of("two waves")
    found = ld.local_field(ordering, POINTS, spread=spread)
    h = 1e-4
    for axis in range(3):
        step = h * np.eye(3)[axis] @ np.linalg.inv(CELL)
        up = ld.local_field(ordering, POINTS + step, spread=spread, tol=1e-12).size_T
        down = ld.local_field(ordering, POINTS - step, spread=spread, tol=1e-12).size_T
        assert np.abs((up - down) / (2 * h) - found.gradient_T_per_A[:, axis]).max() < 1e-6


def test_a_probe_carries_its_own_spread():
    ordering = ordering_of("uniform")
    probes = [ld.Probe(POINTS[0], name="A", spread=0.5), ld.Probe(POINTS[0], name="B"), ld.Probe(POINTS[0], spread=0)]
    found = ld.local_field(ordering, probes, spread=TILTED)
    assert np.array_equal(found.total[0], ld.local_field(ordering, POINTS[:1], spread=0.5).total[0])
    assert np.array_equal(found.total[1], ld.local_field(ordering, POINTS[:1], spread=TILTED).total[0])
    assert np.array_equal(found.total[2], ld.local_field(ordering, POINTS[:1]).total[0])
    assert "A: field averaged over a Gaussian spread of 0.5 Å rms along each axis" in found.notes
    widths = ", ".join(f"{x:.4g}" for x in np.sqrt(np.linalg.eigvalsh(TILTED)))
    assert f"B: field averaged over a Gaussian spread of {widths} Å rms along its principal axes" in found.notes
    near = "the spread of A reaches atom Mn: the traceless (principal-value) part is given; the rest is contact"
    assert near in found.notes
    assert not any("reaches" in note for note in ld.local_field(ordering, POINTS, spread=TILTED).notes)


def test_both_frames_of_an_ordering_agree():
    """A doubled cell with probes given in the single one: the cloud is that of the Cartesian frame."""
    home = ld.Crystal(CELL, PLACES, ["Mn", "Fe", "O"])
    one = ld.Ordering(home, S.real, (0.5, 0, 0))
    double = np.diag([2.0, 1, 1])
    places = np.vstack([(PLACES + np.array([n, 0, 0])) @ np.linalg.inv(double) for n in (0, 1)])
    crystal = ld.Crystal(double @ CELL, places, ["Mn", "Fe", "O"] * 2)
    two = ld.Ordering(
        crystal,
        np.vstack([S.real, -S.real]),
        reference=Reference(home, ParentTransform(double.T, np.zeros(3)), "twice along a"),
    )
    for probe in (ld.Probe(POINTS[0], spread=20 * TILTED), ld.Probe(site="Fe", particle="57Fe", spread=20 * TILTED)):
        found, expected = ld.local_field(two, probe), ld.local_field(one, probe)
        assert found.multiplicity[0] == 2
        assert np.abs(np.abs(found.total) - np.abs(expected.total)).max() < 1e-9


def test_a_tensor_on_a_site_is_carried_to_the_other_atoms():
    """Two atoms that a fourfold screw relates: their clouds are turned against each other."""
    cell = np.diag([5.0, 5.0, 6.0])
    quarter = np.array([[0, -1, 0], [1, 0, 0], [0, 0, 1]])
    turns = [np.linalg.matrix_power(quarter, n) for n in range(4)]
    operations = Operations(np.array(turns), np.array([[0, 0, n / 4] for n in range(4)]))
    start = np.array([0.2, 0.1, 0.05])
    places = np.array([t @ start + [0, 0, n / 4] for n, t in enumerate(turns)])
    ions = np.array([t @ [0.45, 0.35, 0.0] + [0, 0, n / 4] for n, t in enumerate(turns)])
    crystal = ld.Crystal(cell, np.vstack([places, ions]), ["F"] * 4 + ["Mn"] * 4, operations=operations)
    moments = np.vstack([np.zeros((4, 3)), [t @ [1.0, 0.4, 0.7] for t in turns]])
    probe = ld.Probe(site="F", particle="19F", spread=10 * TILTED)
    found = ld.local_field(ld.Ordering(crystal, moments), probe)
    order = crystal.find("F")
    back = {site: turns[site].T @ field for site, field in zip(order, found.total, strict=True)}
    assert all(np.abs(back[site] - back[0]).max() < 1e-10 for site in order)
    literal = ld.local_field(ld.Ordering(crystal, moments), places[order[1]][None], spread=10 * TILTED)
    assert np.abs(literal.total[0] - found.total[1]).max() > 1e-3
    alone = ld.Crystal(
        cell, np.vstack([places, ions]), ["F"] * 4 + ["Mn"] * 4, operations=Operations([np.eye(3)], [[0] * 3])
    )
    with pytest.raises(InputError) as caught:
        ld.local_field(ld.Ordering(alone, moments), probe)
    second = order[1]
    assert str(caught.value) == (
        "19F at F: a covariance is stated for the first of 4 atoms, but no operation of the crystal carries it to atom "
        f"F (number {second + 1}). Give that atom a probe of its own."
    )


def test_a_tensor_without_the_symmetry_of_its_site():
    crystal = ld.Crystal(np.diag([4.0, 4.0, 5.0]), [[0, 0, 0], [0.5, 0, 0], [0, 0.5, 0]], ["Mn", "F", "F"])
    ordering = ld.Ordering(crystal, [[0, 0, 1.0], [0, 0, 0], [0, 0, 0]])
    fine = ld.local_field(ordering, ld.Probe(site="F", particle="19F", spread=np.diag([0.02, 0.01, 0.03])))
    np.testing.assert_allclose(np.array([np.diag(c) for c in fine.clouds_A2])[:, 2], 0.03)
    assert sorted(fine.clouds_A2[:, 0, 0]) == pytest.approx([0.01, 0.02])
    with pytest.raises(InputError) as caught:
        ld.local_field(ordering, ld.Probe(site="F", particle="19F", spread=np.diag([0.02, 0.01, 0.03]) + 0.001))
    assert "does not have the symmetry of its site F, so that it does not say how the other 1 atoms move." in str(
        caught.value
    )


def test_displacement_tensors_of_crystallography():
    """U_ij in a hexagonal cell: with U12 = U11/2 the cloud is isotropic in the plane."""
    cell = np.array([[3.0, 0, 0], [-1.5, 1.5 * 3**0.5, 0], [0, 0, 5.0]])
    crystal = ld.Crystal(cell, [[0, 0, 0]], ["Mn"])
    np.testing.assert_allclose(
        covariance_from_Uij(crystal, [0.02, 0.02, 0.03, 0.01, 0, 0]), np.diag([0.02, 0.02, 0.03]), atol=1e-15
    )
    # The definition: the mean square displacement along a reciprocal vector h is Σ h_i h_j a*_i a*_j U_ij/|h|².
    skew = ld.Crystal(CELL, [[0, 0, 0]], ["Mn"])
    u = [0.02, 0.03, 0.025, 0.004, -0.003, 0.002]
    covariance = covariance_from_Uij(skew, u)
    star = np.linalg.inv(CELL).T
    lengths = np.linalg.norm(star, axis=1)
    matrix = np.array([[u[0], u[3], u[4]], [u[3], u[1], u[5]], [u[4], u[5], u[2]]]) * np.outer(lengths, lengths)
    for h in ([1, 0, 0], [1, -2, 3], [0, 1, 1]):
        h = np.array(h)
        assert (h @ star) @ covariance @ (h @ star) == pytest.approx(h @ matrix @ h, rel=1e-12)


def test_averages_over_weighted_positions():
    ordering = ordering_of("uniform")
    found = ld.weighted_field(ordering, POINTS, [1, 3])
    fields = ld.local_field(ordering, POINTS)
    assert np.array_equal(found.weights, [0.25, 0.75]) and np.array_equal(found.fields.total, fields.total)
    np.testing.assert_allclose(found.mean_T, 0.25 * fields.total[0] + 0.75 * fields.total[1])
    assert found.mean_size_T == pytest.approx(0.25 * fields.size_T[0] + 0.75 * fields.size_T[1])
    assert found.rms_size_T**2 == pytest.approx(0.25 * fields.size_T[0] ** 2 + 0.75 * fields.size_T[1] ** 2)
    assert found.rms_size_T**2 == pytest.approx(found.rms_deviation_T**2 + found.mean_T @ found.mean_T)
    assert found.to_dict()["mean_field_T"] == found.mean_T.tolist()
    # The nodes of a quadrature are such a list.
    steps, weights = nodes(TILTED, 8)
    listed = ld.weighted_field(ordering, POINTS[0] + steps @ np.linalg.inv(CELL), weights)
    assert np.abs(listed.mean_T - ld.local_field(ordering, POINTS[:1], spread=TILTED).total[0]).max() < 1e-7


BAD = {
    "negative": (
        lambda: ld.local_field(cubic(), POINTS, spread=-0.1),
        "spread (rms displacement along each axis in Å) must lie between 0.0 and 5.0, got -0.1.",
    ),
    "too wide": (
        lambda: ld.local_field(cubic(), POINTS, spread=7),
        "spread (rms displacement along each axis in Å) must lie between 0.0 and 5.0, got 7.0.",
    ),
    "no number": (
        lambda: ld.Probe((0, 0, 0.5), spread="wide"),
        "spread (rms displacement along each axis in Å) must be a finite number, got 'wide'.",
    ),
    "wrong shape": (
        lambda: ld.Probe((0, 0, 0.5), spread=[0.1, 0.1, 0.1]),
        "spread must have shape (3, 3), got (3,).",
    ),
    "not symmetric": (
        lambda: ld.Probe((0, 0, 0.5), spread=[[0.1, 0.02, 0], [0, 0.1, 0], [0, 0, 0.1]]),
        "spread must be a symmetric covariance in Å², got [[0.1, 0.02, 0.0], [0.0, 0.1, 0.0], [0.0, 0.0, 0.1]].",
    ),
    "negative eigenvalue": (
        lambda: ld.Probe((0, 0, 0.5), spread=np.diag([0.1, 0.1, -0.02])),
        "spread must be a covariance in Å² without negative eigenvalues, got "
        "[[0.1, 0.0, 0.0], [0.0, 0.1, 0.0], [0.0, 0.0, -0.02]] with the eigenvalue -0.02.",
    ),
    "huge tensor": (
        lambda: ld.Probe((0, 0, 0.5), spread=np.diag([0.1, 0.1, 30])),
        "spread holds a mean square displacement of 30 Å²; at most 25 Å² are taken for motion about one position.",
    ),
    "flat": (
        lambda: ld.local_field(cubic(), ld.Probe((0, 0, 0.5), name="A", spread=np.diag([0, 0, 0.5]))),
        "A: its spread is flat (less than 0.001 Å along one direction) and reaches atom Mn, where the average of a "
        "dipole field over a plane or a line has no finite value. Give the spread an extent along every direction.",
    ),
    "unknown label": (
        lambda: ld.local_field(cubic(), POINTS, moment_spread={"Fe": 0.3}),
        "no site has the label or element 'Fe'. Known are: Mn.",
    ),
    "moment spread": (
        lambda: ld.local_field(cubic(), POINTS, moment_spread={"Mn": -1}),
        "moment_spread of Mn (rms displacement along each axis in Å) must lie between 0.0 and 5.0, got -1.0.",
    ),
    "weights": (
        lambda: ld.weighted_field(cubic(), POINTS, [1]),
        "weights must hold one number per position, got 1 for 2 positions.",
    ),
    "negative weight": (
        lambda: ld.weighted_field(cubic(), POINTS, [1, -1]),
        "weights must be at least 0, got -1.0 for position 2.",
    ),
    "no weight": (
        lambda: ld.weighted_field(cubic(), POINTS, [0, 0]),
        "weights are all 0: at least one position must count.",
    ),
}


@pytest.mark.parametrize("case", BAD)
def test_refused(case):
    call, message = BAD[case]
    assert refusal(call) == message


def test_flat_spreads_are_taken_where_they_reach_nothing():
    """Motion along a line through no ion: exact, and the same as with a hair of extent across."""
    ordering = cubic()
    flat, hair = np.diag([0.04, 0, 0]), np.diag([0.04, 1e-9, 1e-9])
    point = [[0.1, 0.5, 0.45]]
    assert (
        np.abs(
            ld.local_field(ordering, point, spread=flat).total - ld.local_field(ordering, point, spread=hair).total
        ).max()
        < 1e-8
    )


STUDY = """
[[ordering]]
name = "one"
k = [0, 0, 0]
along = [0, 0, 1]
[moments]
Co1 = 2
[[probe]]
position = [0.1, 0.2, 0.3]
"""


def test_study_keys(tmp_path):
    probe = study_of(tmp_path, STUDY + "spread_A = 0.15").probes[0]
    assert probe.spread == 0.15
    tensor = [[0.02, 0.001, 0.0], [0.001, 0.03, 0.0], [0.0, 0.0, 0.01]]
    assert np.array_equal(study_of(tmp_path, STUDY + f"covariance_A2 = {tensor}").probes[0].spread, tensor)
    study = study_of(tmp_path, STUDY + "Uij = [0.01, 0.02, 0.03, 0.001, 0.002, 0]")
    expected = covariance_from_Uij(study.crystal, [0.01, 0.02, 0.03, 0.001, 0.002, 0])
    assert np.array_equal(study.probes[0].spread, expected)
    assert np.array_equal(
        study_of(tmp_path, STUDY + "position_su = [0.001, 0, 0.002]").probes[0].position_su, [0.001, 0, 0.002]
    )


STUDY_BAD = {
    "spread_A = -1": "`probe[1].spread_A`: got -1, expected the rms displacement along each axis in Å, at least 0.",
    "spread_A = 9": "`probe[1].spread_A`: spread_A (rms displacement along each axis in Å) must lie between 0.0 and "
    "5.0, got 9.0.",
    "spread_A = 0.1\nUij = [0, 0, 0, 0, 0, 0]": "`probe[1]`: `spread_A` and `Uij` are two spreads. Leave one out.",
    "Uij = [0.1]": "`probe[1].Uij`: got [0.1], expected six numbers in Å²: U11, U22, U33, U12, U13, U23.",
    "covariance_A2 = 3": "`probe[1].covariance_A2`: got 3, expected three lists of three numbers (Cartesian): the "
    "covariance of the position in Å².",
    "position_su = [0.1, -0.1, 0]": "`probe[1].position_su`: got [0.1, -0.1, 0], expected three standard uncertainties "
    "of the fractional coordinates, each from 0 to 1.",
}


@pytest.mark.parametrize("text", STUDY_BAD)
def test_study_refuses(tmp_path, text):
    with pytest.raises(InputError) as caught:
        study_of(tmp_path, STUDY + text)
    assert str(caught.value) == f"{tmp_path / 'study.toml'}: {STUDY_BAD[text]}"
