"""Energies against the fields at the sites, explicit supercells and sums over atoms."""

from __future__ import annotations

import itertools
import json
import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

import latticedip as ld
from latticedip.errors import InputError
from tests.reference.cells import random_rotation
from tests.reference.constants import DIPOLE_EV, DIPOLE_K, DIPOLE_T, MUB_T_EV
from tests.reference.magnets import sphere_field, waves

TRICLINIC = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
VOLUME = abs(np.linalg.det(TRICLINIC))
PLACES = np.array([[0.05, 0.1, 0.2], [0.55, 0.42, 0.7], [1.3, -0.2, 0.45]])
OCCUPANCIES = np.array([1.0, 0.6, 0.8])
S = np.random.default_rng(7).normal(size=(3, 3)) + 1j * np.random.default_rng(8).normal(size=(3, 3))
# Waves that repeat after the given number of cells, so that an average over cells is exact.
CASES = {
    "uniform": ([[0, 0, 0]], [S.real], (1, 1, 1)),
    "zone boundary": ([[0.5, 0, 0.5]], [S.real], (2, 1, 2)),
    "pair": ([[0.25, 0, 1 / 3]], [S], (4, 1, 3)),
    "several": ([[0, 0, 0], [0, 0.5, 0], [1 / 3, 0, 0], [0, -0.25, 0]], [S.imag, S.real, S[::-1], 0.7 * S], (3, 4, 1)),
}
SAMPLE = ld.Sample(demagnetizing_tensor=np.diag([0.1, 0.3, 0.6]), applied_T=(0.4, -1.0, 0.3))


def ordering_of(name: str, **options) -> ld.Ordering:
    k, components, _ = CASES[name]
    crystal = ld.Crystal(TRICLINIC, PLACES, ["Mn", "Fe", "Co"], occupancies=options.pop("occupancies", OCCUPANCIES))
    return ld.Ordering(crystal, components, k, name)


@pytest.mark.parametrize("name", CASES)
def test_energy_is_that_of_the_moments_in_the_fields_averaged_over_cells(name):
    ordering, repeat = ordering_of(name), CASES[name][2]
    cells = np.array(list(itertools.product(*(range(n) for n in repeat))))
    dipolar = shape = applied = 0.0
    for cell in cells:
        moments = ordering.moments([cell])[0] * OCCUPANCIES[:, None]
        found = ld.local_field(ordering, PLACES + cell, sample=SAMPLE)
        assert list(found.sites) == [0, 1, 2]
        dipolar -= 0.5 * np.sum(moments * (found.dipolar + found.lorentz)) * MUB_T_EV / len(cells)
        shape -= 0.5 * np.sum(moments * found.demagnetizing) * MUB_T_EV / len(cells)
        applied -= np.sum(moments * found.applied) * MUB_T_EV / len(cells)
    energy = ld.dipolar_energy(ordering, sample=SAMPLE)
    assert energy.dipolar_eV == pytest.approx(dipolar, abs=1e-14)
    assert energy.shape_eV == pytest.approx(shape, abs=1e-15)
    assert energy.applied_eV == pytest.approx(applied, abs=1e-14)
    assert energy.per_cell_eV == pytest.approx(dipolar + shape + applied, abs=2e-14)
    assert abs(energy.dipolar_eV - dipolar) <= 2 * energy.error_bound_eV


@pytest.mark.parametrize("name", CASES)
def test_energy_of_an_explicit_supercell(name):
    ordering, repeat = ordering_of(name), CASES[name][2]
    explicit = ld.Ordering.from_ase(ordering.to_ase(repeat))
    one = ld.dipolar_energy(ordering, sample=SAMPLE, tol=1e-12)
    other = ld.dipolar_energy(explicit, sample=SAMPLE, tol=1e-12)
    cells = np.prod(repeat)
    assert one.n_ions == pytest.approx(2.4) and other.n_ions == pytest.approx(2.4 * cells)
    for part in ("dipolar_eV", "shape_eV", "applied_eV"):
        assert getattr(other, part) / cells == pytest.approx(getattr(one, part), abs=1e-15)
    assert other.per_ion_eV == pytest.approx(one.per_ion_eV, rel=1e-9)


@pytest.mark.parametrize("name", ["uniform", "zone boundary"])
def test_energy_by_sums_over_atoms(name):
    k, components, repeat = CASES[name]
    moments = waves(k, np.array(components), OCCUPANCIES)
    cells = np.array(list(itertools.product(*(range(n) for n in repeat))))
    total = 0.0
    for cell in cells:
        own = moments(cell[None])[0]
        fields = [sphere_field(TRICLINIC, PLACES, moments, place + cell, radius=70) for place in PLACES]
        total -= 0.5 * np.sum(own * fields)
    net = moments(cells).sum(axis=(0, 1)) / len(cells)
    lorentz = -0.5 * 4 * np.pi / 3 * DIPOLE_T * net @ net / VOLUME
    expected = (total / len(cells) + lorentz) * MUB_T_EV
    assert ld.dipolar_energy(ordering_of(name)).dipolar_eV == pytest.approx(expected, abs=3e-10)


def test_two_moments_by_hand():
    # A pair 3 Å apart in a huge cell: −2 m² along the line, +m² across, −m1·T·m2 each.
    crystal = ld.Crystal(900 * np.eye(3), [[0, 0, 0], [0, 0, 1 / 300]], ["Mn", "Mn"])
    scale = 53.68151e-6 * 2 * 5 / 27
    for moments, factor in (
        ([[0, 0, 2], [0, 0, 5]], -2),
        ([[0, 0, 2], [0, 0, -5]], 2),
        ([[2, 0, 0], [5, 0, 0]], 1),
        ([[2, 0, 0], [0, 5, 0]], 0),
    ):
        energy = ld.dipolar_energy(ld.Ordering(crystal, moments))
        assert energy.per_cell_eV == pytest.approx(factor * scale, abs=3e-6 * scale)
        assert energy.per_ion_eV == energy.per_cell_eV / 2


def test_units_of_kelvin_and_the_ferromagnetic_cube():
    # Without a demagnetizing field a cubic lattice has −(2π/3) µ²/a³ per moment.
    energy = ld.dipolar_energy(ld.Ordering(ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"]), [[0, 3.0, 0]]))
    assert energy.per_ion_K == pytest.approx(-2 * np.pi / 3 * DIPOLE_K * 9 / 64, rel=1e-9)
    assert energy.per_ion_eV * constants.e / constants.k == pytest.approx(energy.per_ion_K, rel=1e-14)


@pytest.mark.parametrize(
    ("sample", "factor"),
    [
        (ld.Sample.sphere(), 1 / 3),
        (ld.Sample.plate((1, 0, 0)), 1.0),
        (ld.Sample.plate((0, 1, 0)), 0.0),
        (ld.Sample.needle((1, 0, 0)), 0.0),
        (ld.Sample.needle((0, 0, 1)), 0.5),
    ],
)
def test_shape_energy(sample, factor):
    ordering = ld.Ordering(ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"]), [[3.0, 0, 0]])
    energy = ld.dipolar_energy(ordering, sample=sample)
    assert energy.shape_eV == pytest.approx(2 * np.pi * factor * DIPOLE_EV * 9 / 64, rel=1e-12, abs=1e-20)
    # A ferromagnetic sphere of a cubic lattice has no dipolar energy at all.
    if factor == 1 / 3:
        assert energy.per_cell_eV == pytest.approx(0, abs=1e-14)


def test_occupancy_scales_energy_by_its_square_and_ions_by_itself():
    full = ld.dipolar_energy(ordering_of("several", occupancies=[1.0] * 3), sample=SAMPLE)
    half = ld.dipolar_energy(ordering_of("several", occupancies=[0.5] * 3), sample=SAMPLE)
    assert half.n_ions == 1.5 and full.n_ions == 3
    assert half.dipolar_eV == pytest.approx(full.dipolar_eV / 4, rel=1e-12)
    assert half.shape_eV == pytest.approx(full.shape_eV / 4, rel=1e-12)
    assert half.applied_eV == pytest.approx(full.applied_eV / 2, rel=1e-12)
    assert np.allclose(half.net_moment, full.net_moment / 2)


def test_ions_are_sites_whose_component_is_not_zero():
    chain = ld.Crystal(4 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "Mn"])
    # m, 0, −m, 0 along c: every Mn of the first kind counts, also where its moment vanishes.
    energy = ld.dipolar_energy(ld.Ordering(chain, [[0, 0, 2], [0, 0, 0]], (0, 0, 0.25)))
    assert energy.n_ions == 1


@pytest.mark.parametrize("tol", [1e-2, 1e-4, 1e-7])
@pytest.mark.parametrize("name", CASES)
def test_error_stays_within_its_bound(name, tol):
    exact = ld.dipolar_energy(ordering_of(name), tol=1e-12)
    found = ld.dipolar_energy(ordering_of(name), tol=tol)
    assert abs(found.dipolar_eV - exact.dipolar_eV) <= found.error_bound_eV
    size = np.abs(np.array(CASES[name][1])).sum(axis=(0, 2)) * OCCUPANCIES
    assert found.error_bound_eV <= tol * MUB_T_EV * size.sum() ** 2


def test_atoms_on_one_place_do_not_feel_each_other():
    for gap in (0.0, 5e-4):
        mixed = ld.Crystal(5 * np.eye(3), [[0, 0, 0], [1 + gap / 5, 0, 0]], ["Mn", "Fe"], occupancies=[0.5, 0.5])
        energy = ld.dipolar_energy(ld.Ordering(mixed, [[0, 0, 4], [0, 0, 2]]))
        assert energy.dipolar_eV == pytest.approx(-2 * np.pi / 3 * DIPOLE_EV * 9 / 125, rel=1e-8)
        assert energy.n_ions == 1
    split = ld.Crystal(5 * np.eye(3), [[0, 0, 0], [0.01, 0, 0]], ["Mn", "Fe"], occupancies=[0.5, 0.5])
    with pytest.raises(InputError) as caught:
        ld.dipolar_energy(ld.Ordering(split, [[0, 0, 4], [0, 0, 2]]))
    assert str(caught.value) == (
        "the magnetic atoms Mn (number 1) and Fe (number 2) are 0.0500 Å apart, so that only one is there at a time. "
        "Give both the same position."
    )
    assert ld.dipolar_energy(ld.Ordering(split, [[0, 0, 4], [0, 0, 0]])).n_ions == 0.5


@settings(max_examples=15, deadline=None)
@given(
    st.sampled_from(sorted(CASES)),
    st.integers(0, 10**6),
    st.lists(st.floats(-3, 3), min_size=3, max_size=3),
    st.permutations(range(3)),
)
def test_turned_moved_reordered(name, seed, shift, order):
    order, r = list(order), random_rotation(np.random.default_rng(seed))
    k, components, _ = CASES[name]
    tensor, applied = SAMPLE.demagnetizing_tensor, SAMPLE.applied_T
    sample = ld.Sample(demagnetizing_tensor=r @ tensor @ r.T, applied_T=r @ applied)
    crystal = ld.Crystal(TRICLINIC @ r.T, (PLACES + shift)[order], ["Mn"] * 3, occupancies=OCCUPANCIES[order])
    other = ld.dipolar_energy(ld.Ordering(crystal, (np.array(components) @ r.T)[:, order], k), sample=sample)
    one = ld.dipolar_energy(ordering_of(name), sample=SAMPLE)
    for part in ("dipolar_eV", "shape_eV", "applied_eV"):
        assert getattr(other, part) == pytest.approx(getattr(one, part), abs=5e-14)


@pytest.mark.parametrize("name", CASES)
def test_reversal_of_k_conjugates(name):
    k, components, _ = CASES[name]
    one = ordering_of(name)
    other = ld.Ordering(one.crystal, np.conj(components), -np.array(k))
    assert ld.dipolar_energy(other).dipolar_eV == pytest.approx(ld.dipolar_energy(one).dipolar_eV, abs=1e-15)


def test_objects_and_refusals():
    energy = ld.dipolar_energy(ordering_of("several"), sample=SAMPLE)
    again = pickle.loads(pickle.dumps(energy))
    document = json.loads(json.dumps(again.to_dict()))
    assert document["energy_ueV_per_ion"] == energy.per_ion_eV * 1e6
    assert document["energy_K_per_ion"] == energy.per_ion_K
    assert document["boundary"] == energy.boundary == "sample shape: demagnetizing tensor given"
    assert document["net_moment_muB_per_cell"] == energy.net_moment.tolist()
    nothing = ld.Ordering(ordering_of("pair").crystal, np.zeros((3, 3)), name="empty")
    with pytest.raises(InputError) as caught:
        ld.dipolar_energy(nothing)
    assert str(caught.value) == "ordering 'empty' carries no moments: all components are zero."
    slab = ld.Crystal(TRICLINIC, PLACES, ["Mn"] * 3, pbc=(True, True, False))
    with pytest.raises(InputError) as caught:
        ld.dipolar_energy(ld.Ordering(slab, S.real))
    assert str(caught.value) == (
        "the structure is periodic along (True, True, False) only; sums are available for three periodic directions."
    )
    with pytest.raises(InputError, match=r"^tol must lie between 1e-12 and 0.01, got 0.1\.$"):
        ld.dipolar_energy(ordering_of("pair"), tol=0.1)


@pytest.mark.parametrize("call", [ld.dipolar_energy, lambda x, **more: ld.local_field(x, [[0.1, 0.2, 0.3]], **more)])
def test_other_kinds_of_object_are_refused(call):
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["Mn"])
    with pytest.raises(ld.LatticedipError, match="needs an Ordering, got Crystal"):
        call(crystal)
    with pytest.raises(ld.LatticedipError, match="sample must be a Sample"):
        call(ld.Ordering(crystal, [[0, 0, 1]]), sample=[1, 1, 1])
