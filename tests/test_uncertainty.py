"""Standard uncertainties of fields: derivatives against finite differences and random draws; how they are written."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.crystal.model import Operations
from latticedip.crystal.uncertain import tied_positions
from latticedip.ordering.model import ParentTransform, Reference, SizeUncertainty
from latticedip.physics.uncertainty import field_uncertainty, tied_moments
from latticedip.report.su import format_su
from tests.refusals import refusal

CELL = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = np.array([[0.05, 0.1, 0.2], [0.55, 0.42, 0.7], [0.3, 0.8, 0.45]])
POINT = np.array([0.5, 0.15, 0.2])
MOMENTS = np.array([[2.0, -1.0, 3.0], [0.5, 2.5, -1.0], [1.0, 0.4, 0.8]])
MOMENT_SU = np.array([[0.05, 0.02, 0.04], [0.03, np.nan, 0.06], [np.nan] * 3])
TILTED = np.array([[0.2, 0.05, 0], [0.05, 0.3, 0], [0, 0, 0.15]])
CONTACT = ld.Contact([[0.1, 0.02, 0], [0, 0.2, -0.03], [0.05, 0, 0.15]], within=3.0)
SAMPLE = ld.Sample.ellipsoid([1, 2, 0.4], applied_T=(0.2, 0, 0.1))
DISPLACED = ld.Displaced(within=3.3, vector_A=(0.1, 0.05, -0.1))


def crystal(places=PLACES) -> ld.Crystal:
    return ld.Crystal(CELL, places, ["Mn", "Fe", "O"], occupancies=[1.0, 0.6, 1.0])


def ordering_of(moments=MOMENTS, k=(0, 0, 0), su=MOMENT_SU, places=PLACES) -> ld.Ordering:
    """Crystal-axis components, as a magCIF gives them."""
    there = crystal(places)
    return ld.Ordering(there, there.to_cartesian(moments), k, moment_su=su)


def probe_of(point=POINT, **options) -> ld.Probe:
    return ld.Probe(point, name="A", contact=CONTACT, displaced=DISPLACED, **options)


@pytest.mark.parametrize("spread", [None, 0.1, TILTED], ids=["point", "ball", "tilted"])
@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, 0.5)], ids=["uniform", "zone boundary"])
def test_moments_by_finite_differences(k, spread):
    """The field is linear in the moments: every parameter moved by its uncertainty, squares added."""
    probes = [probe_of(spread=spread), ld.Probe(site="O", particle="17O", contact=CONTACT)]
    base = ld.local_field(ordering_of(k=k), probes, sample=SAMPLE)
    covariance = np.zeros((2, 3, 3))
    for site, axis in np.ndindex(3, 3):
        if np.isfinite(MOMENT_SU[site, axis]):
            moved = MOMENTS.copy()
            moved[site, axis] += MOMENT_SU[site, axis]
            change = ld.local_field(ordering_of(moved, k), probes, sample=SAMPLE).total - base.total
            covariance += change[:, :, None] * change[:, None, :]
    np.testing.assert_allclose(base.uncertainty.covariance_T2, covariance, rtol=1e-8, atol=1e-14)
    np.testing.assert_allclose(base.field_su_T, np.sqrt(np.einsum("naa->na", covariance)), rtol=1e-8)
    unit = base.total / base.size_T[:, None]
    np.testing.assert_allclose(base.size_su_T, np.sqrt(np.einsum("na,nab,nb->n", unit, covariance, unit)), rtol=1e-8)
    np.testing.assert_allclose(base.frequency_su_MHz, base.size_su_T * base.MHz_per_T)


@pytest.mark.parametrize("spread", [None, 0.1, TILTED], ids=["point", "ball", "tilted"])
@pytest.mark.parametrize("components", ["uniform", "wave"])
def test_positions_by_finite_differences(components, spread):
    def build(places=PLACES):
        if components == "uniform":
            return ordering_of(su=None, places=places)
        return ld.Ordering(crystal(places), MOMENTS + 1j * MOMENTS[::-1], (0.21, -0.34, 0.11))

    su = np.array([[1e-4, 2e-4, 0], [np.nan, 3e-4, 1e-4], [2e-4, 0, 1e-4]])
    probe_su = np.array([1e-4, 0, 3e-4])
    named = ld.Displaced(atom=(0, (0, 0, 0)), vector_A=(0.1, 0.05, -0.1))

    def field(places=PLACES, point=POINT):
        probes = [
            ld.Probe(point, name="A", displaced=named, spread=spread, position_su=probe_su),
            ld.Probe(site="O", particle="17O", spread=spread if np.ndim(spread) == 0 else None),
        ]
        return ld.local_field(build(places), probes, tol=1e-12)

    base = field()
    found = field_uncertainty(base, site_position_su=su)
    covariance = np.zeros((2, 3, 3))
    scale = 0.1
    for site, axis in np.ndindex(3, 3):
        if su[site, axis] > 0:
            step = np.zeros((3, 3))
            step[site, axis] = scale * su[site, axis]
            change = (field(PLACES + step).total - field(PLACES - step).total) / (2 * scale)
            covariance += change[:, :, None] * change[:, None, :]
    for axis in range(3):
        step = scale * probe_su[axis] * np.eye(3)[axis]
        change = (field(point=POINT + step).total - field(point=POINT - step).total) / (2 * scale)
        covariance += change[:, :, None] * change[:, None, :]
    np.testing.assert_allclose(found.covariance_T2, covariance, rtol=1e-5, atol=1e-14)
    # Without the sites only the probe that states a su has one.
    alone = field_uncertainty(base)
    assert np.all(np.isfinite(alone.field_su_T[0])) and np.all(np.isnan(alone.field_su_T[1]))
    assert np.array_equal(base.size_su_T, alone.size_su_T, equal_nan=True)


def test_random_draws_have_this_width():
    """Monte Carlo: moments, sites and probe drawn from their normal distributions, 1500 times."""
    rng = np.random.default_rng(20)
    site_su = np.full((3, 3), 5e-4)
    probe_su = np.array([1e-3, 5e-4, 8e-4])
    contact = ld.Contact(0.05, shell=1)
    base = ld.local_field(ordering_of(), ld.Probe(POINT, contact=contact, position_su=probe_su), sample=SAMPLE)
    found = field_uncertainty(base, site_position_su=site_su)
    draws = []
    for _ in range(1500):
        moments = MOMENTS + rng.normal(size=(3, 3)) * np.nan_to_num(MOMENT_SU)
        places = PLACES + rng.normal(size=(3, 3)) * site_su
        probe = ld.Probe(POINT + rng.normal(size=3) * probe_su, contact=contact)
        draws.append(ld.local_field(ordering_of(moments, places=places), probe, sample=SAMPLE, tol=1e-6).total[0])
    fields = np.array(draws)
    # The standard deviation of 1500 draws is uncertain by 1.8 %.
    np.testing.assert_allclose(fields.std(axis=0), found.field_su_T[0], rtol=0.05)
    np.testing.assert_allclose(np.linalg.norm(fields, axis=1).std(), found.size_su_T[0], rtol=0.05)
    correlation = found.covariance_T2[0] / np.outer(found.field_su_T[0], found.field_su_T[0])
    assert np.abs(np.corrcoef(fields.T) - correlation).max() < 0.06


def screw(labels=("Mn1",) * 4) -> ld.Ordering:
    """Four ions on a fourfold screw axis, their moments turned with it, every second one reversed."""
    quarter = np.array([[0, -1, 0], [1, 0, 0], [0, 0, 1]])
    turns = [np.linalg.matrix_power(quarter, n) for n in range(4)]
    operations = Operations(np.array(turns), np.array([[0, 0, n / 4] for n in range(4)]))
    places = np.array([t @ [0.2, 0.1, 0.05] + [0, 0, n / 4] for n, t in enumerate(turns)])
    there = ld.Crystal(np.diag([5.0, 5.0, 6.0]), places, ["Mn"] * 4, labels=labels, operations=operations)
    moments = np.array([(-1) ** n * t @ [1.0, 0.4, 2.0] for n, t in enumerate(turns)])
    return ld.Ordering(there, moments, moment_su=np.full((4, 3), 0.1))


def test_atoms_of_one_label_change_together():
    ordering = screw()
    (tied,) = tied_moments(ordering)
    assert list(tied.sites) == [0, 1, 2, 3]
    moments = ordering.crystal.to_crystal_axes(ordering.moments()[0])
    np.testing.assert_allclose(tied.turns @ moments[0], moments, atol=1e-12)
    (places,) = tied_positions(ordering.crystal)
    np.testing.assert_allclose(places.turns[1] @ [1, 0, 0], [0, 1, 0])
    point = np.array([[0.1, 0.3, 0.2]])
    found = ld.local_field(ordering, point)
    covariance = np.zeros((3, 3))
    for axis in range(3):
        moved = moments + 0.1 * tied.turns[:, :, axis]
        change = ld.local_field(ld.Ordering(ordering.crystal, moved), point).total[0] - found.total[0]
        covariance += np.outer(change, change)
    np.testing.assert_allclose(found.uncertainty.covariance_T2[0], covariance, rtol=1e-9, atol=1e-14)
    # Labels of their own: refined apart, so independent.
    apart = screw(("Mn1", "Mn2", "Mn3", "Mn4"))
    assert [list(t.sites) for t in tied_moments(apart)] == [[0], [1], [2], [3]]
    assert not np.allclose(ld.local_field(apart, point).size_su_T, found.size_su_T, rtol=0.01)
    # One label, but a moment that no operation carries there.
    free = ld.Ordering(ordering.crystal, ordering.moments()[0] * np.array([[1], [1], [1.5], [1]]))
    assert [list(t.sites) for t in tied_moments(free)] == [[0, 1, 3], [2]]


def test_nothing_stated_is_open():
    found = ld.local_field(ordering_of(su=None), [ld.Probe(POINT), ld.Probe(POINT + 0.1, position_su=(1e-3, 0, 0))])
    assert np.isnan(found.size_su_T[0]) and np.isfinite(found.size_su_T[1])
    rows = found.to_dict()["rows"]
    assert "field_size_su_T" not in rows[0] and "frequency_su_MHz" not in rows[0]
    assert rows[1]["field_size_su_T"] == found.size_su_T[1]
    assert rows[1]["frequency_su_MHz"] == pytest.approx(found.size_su_T[1] * found.MHz_per_T[1])
    bare = ld.local_field(ordering_of(), POINT[None])
    assert np.isfinite(bare.size_su_T[0]) and np.isnan(bare.frequency_su_MHz[0])
    empty = ld.local_field(ordering_of(), np.zeros((0, 3)))
    assert empty.field_su_T.shape == (0, 3)


def test_a_vanishing_field_has_no_direction():
    cubic = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    ordering = ld.Ordering(cubic, [[0, 0, 2.0]], (0.5, 0.5, 0.5), moment_su=[[0, 0, 0.1]])
    found = ld.local_field(ordering, [[0.5, 0.5, 0.5], [0.3, 0, 0]])
    assert np.isnan(found.size_su_T[0]) and found.size_su_T[1] == pytest.approx(0.05 * found.size_T[1])
    assert np.abs(found.field_su_T[0]).max() < 1e-10


def along_waves(k, phases, moments=MOMENTS, su=MOMENT_SU) -> ld.Ordering:
    """Amplitudes along one line for every site, each with a phase of its own."""
    there = crystal()
    amplitudes = there.to_cartesian(moments) * np.exp(1j * np.asarray(phases))[:, None]
    return ld.Ordering(there, amplitudes, k, moment_su=su)


@pytest.mark.parametrize("spread", [None, TILTED], ids=["point", "tilted"])
@pytest.mark.parametrize("phases", [(0, 0, 0), (0.3, -1.2, 2.5)], ids=["real", "with phases"])
def test_amplitudes_of_a_wave_by_finite_differences(phases, spread):
    k = (0.21, -0.34, 0.11)
    probes = [probe_of(spread=spread), ld.Probe(site="O", particle="17O", contact=CONTACT)]
    base = ld.local_field(along_waves(k, phases), probes, sample=SAMPLE)
    covariance = np.zeros((2, 3, 3))
    for site, axis in np.ndindex(3, 3):
        if np.isfinite(MOMENT_SU[site, axis]):
            moved = MOMENTS.copy()
            moved[site, axis] += MOMENT_SU[site, axis]
            change = ld.local_field(along_waves(k, phases, moved), probes, sample=SAMPLE).total - base.total
            covariance += change[:, :, None] * change[:, None, :]
    np.testing.assert_allclose(base.uncertainty.covariance_T2, covariance, rtol=1e-8, atol=1e-14)
    assert np.all(base.size_su_T > 0) and base.uncertainty.notes == ()


def test_still_moments_beside_a_wave():
    """Sites that have their moment at one of several k keep their uncertainty."""
    there = crystal()
    still, moving = there.to_cartesian(MOMENTS), there.to_cartesian(MOMENTS) * np.exp(0.4j)
    still[1], moving[0] = 0, 0
    alone = [
        ld.Ordering(there, part, k, moment_su=MOMENT_SU) for part, k in ((still, (0, 0, 0)), (moving, (0.2, 0.1, 0)))
    ]
    covered = np.array([[True] * 3, [True] * 3, [False] * 3])
    both = ld.Ordering(there, [still, moving], [(0, 0, 0), (0.2, 0.1, 0)], moment_su=np.where(covered, MOMENT_SU, 0))
    found = ld.local_field(both, POINT[None]).uncertainty.covariance_T2
    parts = [ld.local_field(one, POINT[None]).uncertainty.covariance_T2 for one in alone]
    np.testing.assert_allclose(found, parts[0] + parts[1], rtol=1e-9)


@pytest.mark.parametrize(
    "components",
    [MOMENTS + 1j * MOMENTS[::-1], np.array([MOMENTS, 0.5 * MOMENTS])],
    ids=["turning", "several k"],
)
def test_moments_that_turn_are_left_open_with_a_note(components):
    note = (
        "standard uncertainties are stated of moments that turn along a propagation vector, or have components at "
        "several: they do not say which component they belong to, so that field uncertainties are left open"
    )
    k = [(0.2, 0, 0), (0.3, 0, 0)] if np.ndim(components) == 3 else (0.2, 0, 0)
    wave = ld.Ordering(crystal(), components, k, moment_su=MOMENT_SU)
    found = ld.local_field(wave, ld.Probe(POINT, position_su=(1e-3, 0, 0)))
    assert np.isnan(found.size_su_T[0]) and found.uncertainty.notes == (note,)
    assert found.to_dict()["notes"][-1] == note


@pytest.mark.parametrize("several", [False, True], ids=["helix", "several k"])
def test_a_size_is_one_parameter_at_any_k(several):
    """Every component of the atoms of one size is multiplied by 1 ± su/size."""
    there = crystal()
    groups = (SizeUncertainty((0, 2), 0.05), SizeUncertainty((1,), 0.1))
    helix = MOMENTS + 1j * MOMENTS[::-1]
    k = [(0.2, 0.1, 0), (0.13, 0, 0.4)] if several else (0.2, 0.1, 0)

    def build(factors=(1.0, 1.0, 1.0), size_su=()):
        parts = helix * np.array(factors)[:, None]
        return ld.Ordering(there, [parts, 0.3 * parts[:, ::-1]] if several else parts, k, size_su=size_su)

    probe = probe_of()
    base = ld.local_field(build(size_su=groups), probe, sample=SAMPLE)
    covariance = np.zeros((3, 3))
    for factors in ((1.05, 1, 1.05), (1, 1.1, 1)):
        change = (ld.local_field(build(factors), probe, sample=SAMPLE).total - base.total)[0]
        covariance += np.outer(change, change)
    np.testing.assert_allclose(base.uncertainty.covariance_T2[0], covariance, rtol=1e-8, atol=1e-14)
    # Turning all moments leaves the sizes.
    turned = build(size_su=groups).rotated(np.diag([1.0, -1, -1]))
    assert turned.size_su == groups and np.isfinite(ld.local_field(turned, POINT[None]).size_su_T[0])


def test_moments_on_a_line_that_symmetry_fixes_are_one_parameter():
    """m = (1, 1, 0) m on a diagonal twofold axis: its size is as uncertain as the field, not less by √2."""
    cubic = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    su = [[0.1, 0.1, np.nan]]
    found = ld.local_field(ld.Ordering(cubic, [[1.0, 1.0, 0]], moment_su=su), [[0.3, 0.1, 0.2]])
    assert found.size_su_T[0] == pytest.approx(0.1 * found.size_T[0], rel=1e-9)
    # A third component that symmetry forbids, and that is stated all the same: the refinement had less symmetry.
    free = ld.local_field(ld.Ordering(cubic, [[1.0, 1.0, 0]], moment_su=[[0.1, 0.1, 0.1]]), [[0.3, 0.1, 0.2]])
    tensor = ld.dipole_tensor(4 * np.eye(3), [[1.2, 0.4, 0.8]])[0]
    np.testing.assert_allclose(free.uncertainty.covariance_T2[0], 0.01 * tensor @ tensor.T, rtol=1e-8)


def test_sizes_of_a_study_carry_their_uncertainty(tmp_path):
    from tests.test_study import study_of

    text = """[moments]
Co1 = { size = 2, su = 0.1 }
[[ordering]]
name = "one"
k = [0, 0, 0]
along = [0, 1, 1]
[[ordering]]
name = "wave"
k = [0.213, 0, 0]
along = [0, 0, 1]
[[ordering]]
name = "written out"
k = [0, 0, 0]
cosine = { Co1 = [0, 0, 2] }
[[probe]]
name = "A"
position = [0.1, 0.2, 0.3]
"""
    study = study_of(tmp_path, text)
    assert (dict(study.moments), dict(study.moments_su)) == ({"Co1": 2.0}, {"Co1": 0.1})
    for ordering in study.orderings[:2]:
        found = ld.local_field(ordering, study.probes)
        np.testing.assert_allclose(found.size_su_T, 0.05 * found.size_T, rtol=1e-9)
    ions = study.orderings[0].is_magnetic
    moments = study.crystal.to_crystal_axes(study.orderings[0].moments()[0])
    np.testing.assert_allclose(study.orderings[0].moment_su[ions], 0.05 * np.abs(moments[ions]), atol=1e-12)
    assert np.isnan(study.orderings[0].moment_su[~ions]).all()
    assert np.isnan(ld.local_field(study.orderings[2], study.probes).size_su_T).all()


def test_many_rows_are_worked_on_in_blocks(monkeypatch):
    from latticedip.physics import uncertainty

    points = np.random.default_rng(3).uniform(0.2, 0.8, (7, 3)) * [1, 0.1, 1] + [0, 0.6, 0]
    probes = [ld.Probe(p, position_su=(1e-3, 0, 0), displaced=DISPLACED, contact=CONTACT, name=str(p)) for p in points]
    whole = ld.local_field(ordering_of(), probes).uncertainty.covariance_T2
    monkeypatch.setattr(uncertainty, "BLOCK", 6)
    np.testing.assert_allclose(ld.local_field(ordering_of(), probes).uncertainty.covariance_T2, whole, rtol=1e-12)


def test_a_position_is_uncertain_in_the_cell_it_is_given_in():
    home = crystal()
    double = np.diag([2.0, 1, 1])
    places = np.vstack([(PLACES + np.array([n, 0, 0])) @ np.linalg.inv(double) for n in (0, 1)])
    big = ld.Crystal(double @ CELL, places, ["Mn", "Fe", "O"] * 2, occupancies=[1, 0.6, 1] * 2)
    moments = home.to_cartesian(MOMENTS)
    reference = Reference(home, ParentTransform(double.T, np.zeros(3)), "twice along a")
    two = ld.Ordering(big, np.vstack([moments, -moments]), reference=reference)
    one = ld.Ordering(home, moments, (0.5, 0, 0))
    probe = ld.Probe(POINT, position_su=(1e-3, 2e-3, 0))
    found, expected = ld.local_field(two, probe), ld.local_field(one, probe)
    np.testing.assert_allclose(found.size_su_T, np.repeat(expected.size_su_T, 2), rtol=1e-7)


BAD = {
    "shape": (
        lambda: field_uncertainty(ld.local_field(ordering_of(), POINT[None]), site_position_su=[[0, 0, 0]]),
        "site_position_su must hold numbers of at least 0 or NaN in shape (3, 3).",
    ),
    "negative": (
        lambda: field_uncertainty(ld.local_field(ordering_of(), POINT[None]), site_position_su=np.full((3, 3), -1.0)),
        "site_position_su must hold numbers of at least 0 or NaN in shape (3, 3).",
    ),
    "probe on a site": (
        lambda: ld.Probe(site="Mn", position_su=(0, 0, 0.1)),
        "position_su goes with position; a probe on a site has the uncertainty of that site.",
    ),
    "negative probe": (
        lambda: ld.Probe((0, 0, 0), position_su=(0, -0.1, 0)),
        "position_su must hold numbers of at least 0, got [0.0, -0.1, 0.0].",
    ),
    "two numbers": (lambda: ld.Probe((0, 0, 0), position_su=(0, 0.1)), "position_su must have shape (3), got (2,)."),
}


@pytest.mark.parametrize("case", BAD)
def test_refused(case):
    call, message = BAD[case]
    assert refusal(call) == message


@pytest.mark.parametrize(
    ("value", "su", "text"),
    [
        (0.1234, 0.0012, "0.1234(12)"),
        (0.1234, 0.0019, "0.1234(19)"),
        (0.1234, 0.0024, "0.123(2)"),
        (0.1234, 0.00196, "0.123(2)"),
        (0.1234, 0.0096, "0.123(10)"),
        (-3.0, 0.5, "-3.0(5)"),
        (-0.0001, 0.3, "0.0(3)"),
        (12345, 420, "12300(400)"),
        (12345, 1500, "12300(1500)"),
        (123.456, 12.3, "123(12)"),
        (1.5, 97, "0(100)"),
        (0, 0.02, "0.00(2)"),
        (1.5e-9, 2e-11, "1.50(2)e-9"),
        (1e22, 1e20, "1.000(10)e22"),
        (0.3, 1e-12, "0.3000000000000(10)"),
        (5.25, None, "5.25"),
        (5.25, float("nan"), "5.25"),
        (5.25, 0.0, "5.25"),
        (1 / 3, float("inf"), "0.333333"),
        (None, 0.1, "-"),
        (float("nan"), 0.1, "-"),
    ],
)
def test_value_with_its_uncertainty(value, su, text):
    assert format_su(value, su) == text


def test_a_negative_uncertainty():
    with pytest.raises(ValueError, match=r"^a standard uncertainty is at least 0, got -0\.1\.$"):
        format_su(1.0, -0.1)


def test_fields_on_screen_carry_their_uncertainty(tmp_path):
    from latticedip.report.field import field_text
    from latticedip.study.fields import field_document
    from tests.test_study import study_of

    text = '[moments]\nCo1 = 2\n[[ordering]]\nname = "one"\nk = [0, 0, 0]\nalong = [0, 0, 1]\n[[probe]]\nname = "A"\n'
    study = study_of(tmp_path, text + "position = [0.1, 0.2, 0.3]\nposition_su = [0.001, 0.002, 0]")
    (ordering,) = study.orderings
    found = ld.local_field(ordering, study.probes)
    for unit, factor in (("T", 1.0), ("G", 1e4)):
        document = field_document(study, [found], unit=unit)
        assert document["orderings"][0]["rows"][0][f"field_size_su_{unit}"] == pytest.approx(
            found.size_su_T[0] * factor
        )
        shown = field_text(document, width=100)
        assert format_su(found.size_T[0] * factor, found.size_su_T[0] * factor) in shown
        assert format_su(found.frequency_MHz[0], found.frequency_su_MHz[0]) in shown
