"""Local fields against explicit sums over atoms, and what a point may not be."""

from __future__ import annotations

import itertools
import json
import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import InputError
from latticedip.ordering.model import ParentTransform, Reference
from latticedip.physics.field import BLOCK
from latticedip.units import MU0_T_A3_PER_MUB
from tests.reference.cells import random_rotation
from tests.reference.constants import DIPOLE_T
from tests.reference.magnets import bare_field, sphere_field, waves
from tests.reference.mpmath_sum import tensors

TRICLINIC = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = np.array([[0.05, 0.1, 0.2], [0.55, 0.42, 0.7], [0.3, 0.8, 0.45]])
OCCUPANCIES = [1.0, 0.6, 1.0]
S = np.random.default_rng(5).normal(size=(3, 3)) + 1j * np.random.default_rng(6).normal(size=(3, 3))
POINTS = np.array([[0.5, 0.15, 0.2], [0.8, 0.6, 0.1], [1.3, -2.4, 3.6]])
CASES = {
    "uniform": ([[0, 0, 0]], [S.real]),
    "zone boundary": ([[0.5, 0, 0.5]], [S.real]),
    "generic": ([[0.21, -0.34, 0.11]], [S]),
    "three waves": ([[0, 0, 0], [0, 0.5, 0], [0.3, 0, 0.17]], [S.imag, S.real, S[::-1]]),
}


def crystal(**options) -> ld.Crystal:
    options = {"occupancies": OCCUPANCIES, **options}
    return ld.Crystal(TRICLINIC, PLACES, ["Mn", "Fe", "O"], **options)


def ordering_of(name: str) -> ld.Ordering:
    k, components = CASES[name]
    return ld.Ordering(crystal(), components, k, name)


def cubic(moment=(0, 0, 2.0), a: float = 5.0) -> ld.Ordering:
    return ld.Ordering(ld.Crystal(a * np.eye(3), [[0, 0, 0]], ["Mn"]), [moment], name="cubic")


@pytest.mark.parametrize("name", CASES)
def test_dipolar_part_is_the_sphere_sum(name):
    ordering = ordering_of(name)
    k, components = CASES[name]
    found = ld.local_field(ordering, [POINTS[0], POINTS[2], PLACES[1], PLACES[0] + [2, 0, -1]])
    moments = waves(k, np.array(components), OCCUPANCIES)
    for point, field in zip(found.points, found.dipolar, strict=True):
        assert np.abs(sphere_field(TRICLINIC, PLACES, moments, point) - field).max() < 5e-8
    assert list(found.sites) == [-1, -1, 1, 0]


@pytest.mark.parametrize("name", CASES)
def test_whole_sum_in_high_precision(name):
    k, components = CASES[name]
    found = ld.local_field(ordering_of(name), POINTS)
    expected = np.zeros((len(POINTS), 3))
    for vector, part in zip(k, components, strict=True):
        for place, occupancy, s in zip(PLACES, OCCUPANCIES, part, strict=True):
            expected += occupancy * (tensors(TRICLINIC, (POINTS - place) @ TRICLINIC, vector) @ s).real
    assert np.abs(found.dipolar + found.lorentz - expected).max() < 1e-9
    assert np.all(np.abs(found.dipolar + found.lorentz - expected).max(axis=1) <= found.error_bound_T)


def test_five_parts():
    ordering = ordering_of("three waves")
    tensor = np.array([[0.2, 0.05, 0.0], [0.05, 0.3, -0.1], [0.0, -0.1, 0.5]])
    sample = ld.Sample(demagnetizing_tensor=tensor, applied_T=(0.3, -0.2, 1.5))
    density = np.array([0.01, 0.0, -0.02])
    probe = ld.Probe(POINTS[0], contact=ld.Contact(moment_density_muB_per_A3=density), name="muon A")
    found = ld.local_field(ordering, probe, sample=sample)
    net = (S.imag * np.array(OCCUPANCIES)[:, None]).sum(axis=0)
    magnetization = 4 * np.pi * DIPOLE_T * net / abs(np.linalg.det(TRICLINIC))
    assert np.allclose(ordering.net_moment, net, rtol=1e-14)
    assert np.allclose(found.lorentz, magnetization / 3, rtol=1e-13)
    assert np.allclose(found.demagnetizing, -tensor @ magnetization, rtol=1e-13)
    assert np.allclose(found.applied, [0.3, -0.2, 1.5])
    assert np.allclose(found.contact, 2 / 3 * 4 * np.pi * DIPOLE_T * density, rtol=1e-13)
    parts = found.dipolar + found.lorentz + found.demagnetizing + found.contact + found.applied
    assert np.array_equal(found.total, parts)
    assert found.frequency_MHz[0] == pytest.approx(135.53881 * np.linalg.norm(parts), rel=1e-7)
    assert found.probe_names == ("muon A",) and found.particles == ("muon",)


def test_sphere_sample_leaves_the_lorentz_sphere_sum():
    ordering = ordering_of("uniform")
    found = ld.local_field(ordering, POINTS, sample=ld.Sample.sphere())
    assert np.abs(found.lorentz + found.demagnetizing).max() < 1e-16
    assert np.abs(found.total - found.dipolar).max() < 1e-16


@pytest.mark.parametrize(
    ("k", "repeat"), [((1 / 3, 0, 0.5), (3, 1, 2)), ((0.5, 0.5, 0), (2, 2, 1)), ((0.25, 0, 1 / 3), (4, 1, 3))]
)
def test_supercell_of_explicit_moments_has_the_same_fields(k, repeat):
    real = bool(np.all(2 * np.array(k) == np.round(2 * np.array(k))))
    ordering = ld.Ordering(crystal(), [S.real if real else S, S.imag], [k, (0, 0, 0)])
    explicit = ld.Ordering.from_ase(ordering.to_ase(repeat))
    assert explicit.crystal.n_sites == 3 * np.prod(repeat)
    points = np.array([[0.5, 0.15, 0.2], [1.8, 0.6, 1.1], [-0.2, 0.6, 3.1]])
    sample = ld.Sample.plate((0, 1, 1))
    one = ld.local_field(ordering, points, sample=sample)
    other = ld.local_field(explicit, points / repeat, sample=sample)
    for part in ("dipolar", "lorentz", "demagnetizing", "total"):
        assert np.abs(getattr(one, part) - getattr(other, part)).max() < 1e-9
    assert np.allclose(one.gradient_T_per_A, other.gradient_T_per_A, atol=1e-8)
    # The sites in the home cell, and in the next one along the modulation.
    both = np.concatenate([PLACES, PLACES + np.array([1, 0, 0])])
    on, there = ld.local_field(ordering, both), ld.local_field(explicit, both / repeat)
    assert np.all(on.sites >= 0) and np.all(there.sites >= 0)
    assert np.abs(on.total - there.total).max() < 1e-9


def test_point_outside_the_home_cell_sees_the_phase():
    k = np.array([0.21, -0.34, 0.11])
    step = np.array([3, -2, 5])
    here = ld.local_field(ld.Ordering(crystal(), S, k), POINTS + step)
    carried = ld.local_field(ld.Ordering(crystal(), S * np.exp(-2j * np.pi * (k @ step)), k), POINTS)
    assert np.abs(here.total - carried.total).max() < 1e-10
    assert np.abs(here.total - ld.local_field(ld.Ordering(crystal(), S, k), POINTS).total).max() > 1e-3


def test_site_stored_outside_the_home_cell():
    k, step = np.array([0.21, -0.34, 0.11]), np.array([1, 0, -2])
    moved = PLACES.copy()
    moved[0] += step
    parts = S.copy()
    parts[0] = S[0] * np.exp(-2j * np.pi * (k @ step))  # the same magnet, written from another atom of the row
    one = ld.Ordering(crystal(), S, k)
    other = ld.Ordering(ld.Crystal(TRICLINIC, moved, ["Mn", "Fe", "O"], occupancies=OCCUPANCIES), parts, k)
    contact = ld.Contact(0.1, shell=2)
    found = ld.local_field(other, ld.Probe(site="Mn", particle="55Mn", contact=contact))
    expected = ld.local_field(one, ld.Probe(PLACES[0] + step, particle="55Mn", contact=contact))
    assert found.sites[0] == expected.sites[0] == 0
    assert np.allclose(found.points[0], PLACES[0] + step)
    assert np.abs(found.total - expected.total).max() < 1e-10
    assert np.abs(found.contact).max() > 0.01


@pytest.mark.parametrize("name", CASES)
def test_gradient_of_the_size_against_differences(name):
    ordering = ordering_of(name)
    sample = ld.Sample.needle((1, 0, 0), applied_T=(0.02, 0.1, 0))
    probes = [ld.Probe(p, contact=ld.Contact(0.05, shell=1), name=str(i)) for i, p in enumerate(POINTS)]
    found = ld.local_field(ordering, probes, sample=sample)
    h = 1e-3
    for point, gradient, contact in zip(POINTS, found.gradient_T_per_A, found.contact, strict=True):
        for axis in range(3):
            steps = np.array([-2, -1, 1, 2])[:, None] * h * np.eye(3)[axis]
            shifted = ld.local_field(ordering, point + steps @ np.linalg.inv(TRICLINIC), sample=sample, tol=1e-12)
            sizes = np.linalg.norm(shifted.total + contact, axis=1)
            assert np.array([1, -8, 8, -1]) @ sizes / (12 * h) == pytest.approx(gradient[axis], abs=2e-7)


@pytest.mark.parametrize("name", ["uniform", "generic"])
def test_gradient_on_a_site_leaves_the_site_out(name):
    ordering = ordering_of(name)
    found = ld.local_field(ordering, PLACES[:1])
    own = ordering.moments()[0, 0]
    estimates = []
    for h in (0.3, 0.15):
        steps = h * np.concatenate([np.eye(3), -np.eye(3)])
        fields = ld.local_field(ordering, PLACES[0] + steps @ np.linalg.inv(TRICLINIC)).total
        sizes = np.linalg.norm([f - bare_field(own, x) for f, x in zip(fields, steps, strict=True)], axis=1)
        estimates.append((sizes[:3] - sizes[3:]) / (2 * h))
    assert np.allclose((4 * estimates[1] - estimates[0]) / 3, found.gradient_T_per_A[0], rtol=2e-2, atol=2e-4)


def test_gradient_is_not_a_number_where_the_field_vanishes():
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    found = ld.local_field(ld.Ordering(crystal, [[0, 0, 1.0]], (0.5, 0.5, 0.5)), [[0.5, 0.5, 0.5], [0.2, 0.1, 0.3]])
    assert np.abs(found.total[0]).max() < 1e-12
    assert np.all(np.isnan(found.gradient_T_per_A[0])) and np.all(np.isfinite(found.gradient_T_per_A[1]))


def test_occupancy_scales_the_mean_moment():
    full, half = (
        ld.local_field(ld.Ordering(crystal(occupancies=[p] * 3), S.real), POINTS, sample=ld.Sample.plate((0, 0, 1)))
        for p in (1.0, 0.5)
    )
    assert np.allclose(half.total, full.total / 2, rtol=1e-12)
    balanced = ld.Ordering(crystal(occupancies=[1.0, 0.5, 1.0]), [[0, 0, 1], [0, 0, -2], [0, 0, 0]])
    assert np.array_equal(balanced.net_moment, np.zeros(3))
    assert ld.local_field(balanced, POINTS).boundary == (
        "no net moment: the shape of the sample does not matter (N = 0 sum)"
    )


def test_boundary_is_always_said():
    ferromagnet = cubic()
    points = [[0.5, 0.5, 0.5]]
    closed = "net moment without a stated shape: N = 0 assumed (a domain that closes its flux)"
    assert ld.local_field(ferromagnet, points).boundary == closed
    assert ld.local_field(ferromagnet, points, sample=ld.Sample(applied_T=(0, 0, 1))).boundary == closed
    assert ld.local_field(ferromagnet, points, sample=ld.Sample.sphere()).boundary == "sample shape: sphere"
    assert ld.local_field(ferromagnet, points, sample=ld.Sample.prism((1, 1, 2))).boundary == (
        "sample shape: prism 1 × 1 × 2; N is the volume average, the demagnetizing field is not uniform"
    )


# --- points near atoms -------------------------------------------------------------------------------------------


def test_snapping_to_a_site():
    ordering = cubic()
    exact = ld.local_field(ordering, [[0, 0, 0], [2, -1, 0]])
    near = ld.local_field(ordering, [[0.9e-3 / 5, 0, 0], [2, -1 - 0.9e-3 / 5, 0]])
    assert list(near.sites) == [0, 0]
    assert np.array_equal(near.points, [[0, 0, 0], [2, -1, 0]])
    assert np.array_equal(near.total, exact.total)
    assert near.to_dict()["rows"][0]["site"] == "Mn"


@pytest.mark.parametrize("distance", [1.1e-3, 0.05, 0.0999])
def test_point_too_close_to_an_atom(distance):
    with pytest.raises(InputError) as caught:
        ld.local_field(cubic(), [[0.5, 0.5, 0.5], [1 + distance / 5, 0, 0]])
    assert str(caught.value) == (
        f"point 2 at ({1 + distance / 5:.5g}, 0, 0) lies {distance:.4f} Å from atom Mn at (0, 0, 0). A point must be "
        "at least 0.1 Å from every atom, or on a site (within 0.001 Å)."
    )
    assert ld.local_field(cubic(), [[0.1001 / 5, 0, 0]]).sites[0] == -1


def test_atoms_without_moment_are_not_stood_upon_either():
    crystal = ld.Crystal(5 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "O"])
    ordering = ld.Ordering(crystal, [[0, 0, 1], [0, 0, 0]])
    with pytest.raises(InputError, match=r"^point 1 at .* lies 0.0500 Å from atom O at"):
        ld.local_field(ordering, [[0.51, 0.5, 0.5]])
    assert ld.local_field(ordering, [[0.5, 0.5, 0.5]]).sites[0] == 1


def test_nearest_image_in_a_badly_chosen_cell():
    # The same lattice as a cube of 5 Å, but planes 0.05 Å apart along the first vector.
    skewed = np.array([[5.0, 0, 0], [500.0, 5.0, 0], [0, 0, 5.0]])
    ordering = ld.Ordering(ld.Crystal(skewed, [[0, 0, 0]], ["Mn"]), [[0, 0, 2.0]])
    inverse = np.linalg.inv(skewed)
    with pytest.raises(InputError, match=r"lies 0\.0900 Å from atom Mn"):
        ld.local_field(ordering, [np.array([0, 5.09, 0]) @ inverse])
    on = ld.local_field(ordering, [np.array([5, 5.0009, 0]) @ inverse, np.array([1, 2, 3]) @ inverse])
    assert on.sites[0] == 0 and np.allclose(on.points[0] @ skewed, [5, 5, 0], atol=1e-9)
    off = ld.local_field(cubic(), [[0.2, 0.4, 0.6]])
    assert np.abs(on.total[1] - off.total[0]).max() < 1e-9


@pytest.mark.parametrize("gap", [0.0, 5e-4])
@pytest.mark.parametrize("first", [0, 1])
def test_two_kinds_of_atom_on_one_place(gap, first):
    places = np.array([[0, 0, 0], [gap / 5, 0, 0], [0.5, 0.5, 0.5]])
    symbols, occupancies = np.array(["Mn", "Fe", "Mn"]), np.array([0.5, 0.5, 1.0])
    moments = np.array([[0, 0, 4.0], [0, 0, 2.0], [0, 0, -3.0]])
    order = [first, 1 - first, 2]
    mixed = ld.Crystal(5 * np.eye(3), places[order], symbols[order], occupancies=occupancies[order])
    ordering = ld.Ordering(mixed, moments[order])
    simple = ld.Crystal(5 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "Mn"])
    mean = ld.Ordering(simple, [[0, 0, 3.0], [0, 0, -3.0]])
    expected = ld.local_field(mean, [[0, 0, 0], [0.5, 0.5, 0.5], [0.3, 0.1, 0.2]])
    found = ld.local_field(ordering, [[0, 0, 0], [0.5, 0.5, 0.5], [0.3, 0.1, 0.2]])
    assert np.abs(found.total - expected.total).max() < (1e-10 if gap == 0 else 1e-3)
    fe = ld.local_field(ordering, ld.Probe(site="Fe", particle="57Fe"))
    assert fe.crystal.symbols[fe.sites[0]] == "Fe"
    assert np.abs(fe.total[0] - expected.total[0]).max() < (1e-10 if gap == 0 else 1e-3)


@pytest.mark.parametrize("order", [[0, 1], [1, 0]])
def test_split_atoms(order):
    places = np.array([[0, 0, 0], [0.05 / 5, 0, 0]])[order]
    split = ld.Crystal(5 * np.eye(3), places, np.array(["Mn", "Fe"])[order], occupancies=[0.5, 0.5])
    one = ld.Ordering(split, np.array([[0, 0, 4.0], [0, 0, 0]])[order])
    # The split partner without a moment does no harm.
    assert ld.local_field(one, ld.Probe(site="Mn", particle="55Mn")).sites[0] == order.index(0)
    both = ld.Ordering(split, np.array([[0, 0, 4.0], [0, 0, 2.0]])[order])
    with pytest.raises(InputError) as caught:
        ld.local_field(both, ld.Probe(site="Mn", particle="55Mn"))
    assert str(caught.value) == (
        "55Mn at Mn sits on atom Mn at (0, 0, 0), 0.0500 Å from the magnetic atom Fe: only one of them is there at a "
        "time. Give both the same position."
    )
    with pytest.raises(InputError, match=r"lies 0\.0500 Å from atom"):
        ld.local_field(both, [[0.1 / 5, 0, 0]])


# --- probes ------------------------------------------------------------------------------------------------------


def test_probe_on_a_label_gives_one_row_per_atom_in_order():
    places = [[0.5, 0.9, 0], [0, 0, 0], [0.5, 0.1, 0], [0.99996, 0.5, 0.5]]
    crystal = ld.Crystal(6 * np.eye(3), places, ["F", "Mn", "F", "F"], ["F1", "Mn1", "F1", "F1"])
    found = ld.local_field(ld.Ordering(crystal, np.array([[0, 0, m] for m in (0, 1, 0, 0)])), ld.Probe(site="F1"))
    assert list(found.sites) == [3, 2, 0]
    assert list(found.multiplicity) == [3, 3, 3]


def test_a_reference_position_becomes_several():
    parent = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "F"])
    doubled = ld.Crystal(
        np.diag([4.0, 4, 8]),
        [[0, 0, 0], [0, 0, 0.5], [0.5, 0.5, 0.25], [0.5, 0.5, 0.7502]],
        ["Mn", "Mn", "F", "F"],
    )
    how = "by hand"
    reference = Reference(parent, ParentTransform(np.diag([1.0, 1, 2]), np.zeros(3)), how)
    ordering = ld.Ordering(doubled, [[0, 0, 1], [0, 0, -1], [0, 0, 0], [0, 0, 0]], reference=reference)
    k = ld.Ordering(parent, [[0, 0, 1], [0, 0, 0]], (0, 0, 0.5))
    found = ld.local_field(ordering, [ld.Probe((0.3, 0.2, 0.1), name="A"), ld.Probe((0, 0.5, 0.99996), name="B")])
    assert np.allclose(found.points, [[0.3, 0.2, 0.05], [0.3, 0.2, 0.55], [0, 0.5, 0.99998], [0, 0.5, 0.49998]])
    assert np.allclose(found.reference_points, [[0.3, 0.2, 0.1]] * 2 + [[0, 0.5, 0.99996]] * 2)
    assert list(found.multiplicity) == [2] * 4 and found.notes == (how,)
    expected = ld.local_field(k, [[0.3, 0.2, 0.1], [0.3, 0.2, 1.1], [0, 0.5, 1.99996], [0, 0.5, 0.99996]])
    assert np.abs(found.total - expected.total).max() < 1e-10
    # The fluorine of the other refinement is 0.0016 Å off: a site is found all the same, a bare position is not.
    fluorine = ld.local_field(ordering, ld.Probe(site="F", particle="19F"))
    assert list(fluorine.sites) == [2, 3] and np.allclose(fluorine.points[1], [0.5, 0.5, 0.7502])
    with pytest.raises(InputError, match=r"^muon at \(0.5, 0.5, 0.5\) at \(0.5, 0.5, 0.75\) lies 0.0016 Å from atom F"):
        ld.local_field(ordering, ld.Probe((0.5, 0.5, 0.5)))


def test_a_reference_site_that_is_not_there():
    parent = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "F"])
    child = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.4]], ["Mn", "F"])
    reference = Reference(parent, ParentTransform(np.eye(3), np.zeros(3)))
    ordering = ld.Ordering(child, [[0, 0, 1], [0, 0, 0]], name="off", reference=reference)
    with pytest.raises(InputError) as caught:
        ld.local_field(ordering, ld.Probe(site="F", particle="19F"))
    assert str(caught.value) == (
        "19F at F: the ordering 'off' has no F within 0.2 Å of (0.5, 0.5, 0.5), where the site comes to lie in its "
        "cell."
    )


# --- invariance --------------------------------------------------------------------------------------------------


@settings(max_examples=15, deadline=None)
@given(st.sampled_from(sorted(CASES)), st.integers(0, 10**6))
def test_turning_everything(name, seed):
    turn = random_rotation(np.random.default_rng(seed))
    k, components = CASES[name]
    tensor = np.diag([0.2, 0.3, 0.5])
    coupling = np.random.default_rng(seed).normal(size=(3, 3))

    def field(r):
        crystal = ld.Crystal(TRICLINIC @ r.T, PLACES, ["Mn", "Fe", "O"], occupancies=OCCUPANCIES)
        sample = ld.Sample(demagnetizing_tensor=r @ tensor @ r.T, applied_T=r @ [0.1, 0.2, 0.3])
        contact = ld.Contact(r @ coupling @ r.T, within=3.5)
        probe = ld.Probe(POINTS[0], contact=contact)
        return ld.local_field(ld.Ordering(crystal, np.array(components) @ r.T, k), probe, sample=sample)

    straight, turned = field(np.eye(3)), field(turn)
    for part in ("dipolar", "lorentz", "demagnetizing", "contact", "applied", "total", "gradient_T_per_A"):
        assert np.abs(getattr(turned, part) - getattr(straight, part) @ turn.T).max() < 2e-9


@settings(max_examples=15, deadline=None)
@given(
    st.sampled_from(sorted(CASES)),
    st.lists(st.floats(-3, 3), min_size=3, max_size=3),
    st.permutations(range(3)),
)
def test_other_origin_and_order_of_atoms(name, shift, order):
    k, components = CASES[name]
    order = list(order)
    moved = ld.Crystal(
        TRICLINIC,
        (PLACES + shift)[order],
        np.array(["Mn", "Fe", "O"])[order],
        occupancies=np.array(OCCUPANCIES)[order],
    )
    other = ld.Ordering(moved, np.array(components)[:, order], k)
    contact = ld.Contact(0.2, shell=1)
    one = ld.local_field(ordering_of(name), ld.Probe(POINTS[0], contact=contact))
    two = ld.local_field(other, ld.Probe(POINTS[0] + shift, contact=contact))
    assert np.abs(one.total - two.total).max() < 1e-9
    assert np.abs(one.gradient_T_per_A - two.gradient_T_per_A).max() < 1e-8


# --- shapes, objects, refusals -----------------------------------------------------------------------------------


def test_many_points_are_taken_in_blocks(monkeypatch):
    monkeypatch.setattr("latticedip.physics.field.FIELD_BLOCK", 100)
    points = np.random.default_rng(0).uniform(0.2, 0.8, (BLOCK + 3, 3))
    ordering = cubic()
    found = ld.local_field(ordering, points, tol=1e-10)
    assert found.total.shape == (BLOCK + 3, 3)
    # A point alone and one among many share no list of images: they agree within the tolerance.
    alone = ld.local_field(ordering, points[-3:], tol=1e-10)
    assert np.abs(found.total[-3:] - alone.total).max() < 2 * alone.error_bound_T.max()
    assert np.abs(found.gradient_T_per_A[-3:] - alone.gradient_T_per_A).max() < 1e-8


@pytest.mark.parametrize("points", [[], np.zeros((0, 3))])
def test_no_points(points):
    found = ld.local_field(cubic(), points)
    assert found.total.shape == (0, 3) and found.gradient_T_per_A.shape == (0, 3)
    assert found.to_dict()["rows"] == []


def test_moments_of_zero_make_no_field():
    found = ld.local_field(cubic((0, 0, 0)), [[0.1, 0.2, 0.3]], sample=ld.Sample(applied_T=(0, 0, 2)))
    assert np.array_equal(found.total, [[0, 0, 2]])
    assert np.array_equal(found.gradient_T_per_A, np.zeros((1, 3)))


def test_objects_survive_pickling_and_json():
    found = ld.local_field(cubic(), [ld.Probe((0.5, 0.5, 0.5)), ld.Probe(site="Mn", particle="55Mn")])
    again = pickle.loads(pickle.dumps(found))
    assert np.array_equal(again.total, found.total) and again.to_dict() == found.to_dict()
    document = json.loads(json.dumps(found.to_dict()))
    assert document["rows"][0]["field_T"] == found.total[0].tolist()
    assert [row["particle"] for row in document["rows"]] == ["muon", "55Mn"]
    assert {key for key in document["rows"][0] if key.endswith("_T")} == {
        f"{part}_T" for part in ("dipolar", "lorentz", "demagnetizing", "contact", "applied", "field", "field_size")
    } | {"error_bound_T"}
    for array in (found.total, found.dipolar, found.points, found.gradient_T_per_A):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0


SLAB = ld.Crystal(5 * np.eye(3), [[0, 0, 0]], ["Mn"], pbc=(True, True, False))
REFUSED = {
    "three numbers": (
        cubic(),
        [0.1, 0.2, 0.3],
        {},
        "points must have shape (n, 3), got (3,).",
    ),
    "nan": (cubic(), [[0.1, np.nan, 0.3]], {}, "points holds a value that is not finite: nan at index (0, 1)."),
    "mixture": (
        cubic(),
        [ld.Probe((0.1, 0.2, 0.3)), (0.1, 0.2, 0.3)],
        {},
        "points must be all Probes or all fractional positions, not a mixture.",
    ),
    "unknown site": (
        cubic(),
        ld.Probe(site="mn"),
        {},
        "no site has the label or element 'mn'. Known are: Mn. Did you mean 'Mn'?",
    ),
    "tol": (cubic(), [[0.1, 0.2, 0.3]], {"tol": 1e-13}, "tol must lie between 1e-12 and 0.01, got 1e-13."),
    "slab": (
        ld.Ordering(SLAB, [[0, 0, 1]]),
        [[0.1, 0.2, 0.3]],
        {},
        "the structure is periodic along (True, True, False) only; sums are available for three periodic directions.",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refusals(name):
    ordering, points, options, message = REFUSED[name]
    with pytest.raises(InputError) as caught:
        ld.local_field(ordering, points, **options)
    assert str(caught.value) == message
    assert str(pickle.loads(pickle.dumps(caught.value))) == message


def test_units_by_hand():
    # One moment of 2 µB in a huge cell, seen from 3 Å along it and across: µ0/4π (2m/r³) and −m/r³.
    ordering = cubic((0, 0, 2.0), a=400.0)
    found = ld.local_field(ordering, [[0, 0, 3 / 400], [3 / 400, 0, 0]])
    assert np.allclose(found.dipolar[0], [0, 0, 2 * 2 * 0.9274010 / 27], atol=1e-7)
    assert np.allclose(found.dipolar[1], [0, 0, -2 * 0.9274010 / 27], atol=1e-7)
    assert found.lorentz[0, 2] == pytest.approx(MU0_T_A3_PER_MUB * 2 / 400**3 / 3, rel=1e-12)


def test_every_atom_of_a_supercell_once():
    # A ferromagnet of doubled cells in all directions: sites of a label come in order, each with the same field.
    ordering = cubic()
    explicit = ld.Ordering.from_ase(ordering.to_ase((2, 2, 2)))
    found = ld.local_field(explicit, ld.Probe(site="Mn", particle="55Mn"))
    assert np.allclose(found.points, list(itertools.product((0, 0.5), repeat=3)))
    assert np.ptp(found.total, axis=0).max() < 1e-10
