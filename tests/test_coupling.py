"""Couplings between sites: against high precision, their symmetries, and energies of many candidates."""

from __future__ import annotations

import pickle

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError, LimitError
from latticedip.physics import coupling
from tests.reference.mpmath_sum import tensors

CELL = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = np.array([[0.05, 0.1, 0.2], [0.55, 0.42, 0.7], [1.3, -0.2, 0.45]])
CRYSTAL = ld.Crystal(CELL, PLACES, ["Mn", "Fe", "Co"], occupancies=[1.0, 0.6, 0.8])
WAVES = [(0, 0, 0), (0.5, 0, -0.5), (0.21, -0.34, 0.11)]
rng = np.random.default_rng(2)
MOMENTS = rng.normal(size=(7, 3, 3)) + 1j * rng.normal(size=(7, 3, 3))


@pytest.mark.parametrize("k", WAVES)
def test_tensors_in_high_precision(k):
    found = ld.Coupling(CRYSTAL, k, tol=1e-12).tensors
    cart = PLACES @ CELL
    for i in range(3):
        expected = tensors(CELL, cart[i] - cart, k)
        assert np.abs(found[i] - expected).max() < 1e-12
    assert np.iscomplexobj(found) is (k == WAVES[2])
    # T_ij(k) of a real, symmetric interaction is Hermitian in the sites and symmetric in x, y, z.
    assert np.allclose(found, found.transpose(1, 0, 2, 3).conj(), atol=1e-13)
    assert np.allclose(found, found.transpose(0, 1, 3, 2), atol=1e-15)


@pytest.mark.parametrize("k", WAVES)
def test_energies_are_those_of_the_orderings(k):
    parts = MOMENTS if k == WAVES[2] else MOMENTS.real
    found = ld.Coupling(CRYSTAL, k).energies(parts)
    expected = [ld.dipolar_energy(ld.Ordering(CRYSTAL, part, k)).dipolar_eV for part in parts]
    assert found.shape == (7,) and np.allclose(found, expected, rtol=1e-12, atol=1e-18)
    assert ld.Coupling(CRYSTAL, k).energies(np.zeros((0, 3, 3))).shape == (0,)
    # Real components at a general k, and complex ones without an imaginary part at the others.
    real = ld.Coupling(CRYSTAL, k).energies(MOMENTS.real)
    assert np.allclose(real, ld.Coupling(CRYSTAL, k).energies(MOMENTS.real + 0j), rtol=1e-12, atol=1e-18)
    assert np.allclose(ld.Coupling(CRYSTAL, k).energies(3 * parts), 9 * found, rtol=1e-12)


def test_k_is_snapped_as_for_orderings():
    near = ld.Coupling(CRYSTAL, (0.5 + 5e-10, -5e-10, -0.5))
    assert np.array_equal(near.k, [0.5, 0, -0.5]) and not np.iscomplexobj(near.tensors)


def test_tables_are_kept_up_to_a_size(monkeypatch):
    one = ld.Coupling(CRYSTAL, (0.1, 0, 0))
    first = one.tensors
    assert one.tensors is first and ld.Coupling(CRYSTAL, (0.1, 0, 0)).tensors is first
    assert not first.flags.writeable
    monkeypatch.setattr(coupling, "MAX_KEPT_BYTES", 2 * first.nbytes)
    for x in (0.2, 0.3):
        assert ld.Coupling(CRYSTAL, (x, 0, 0)).tensors is not first
    assert len(coupling._kept) == 2
    again = one.tensors
    assert again is not first and np.array_equal(again, first)


def test_other_crystals_are_not_mixed_up():
    moved = ld.Crystal(CELL, PLACES + np.array([[0, 0, 0], [0.01, 0, 0], [0, 0, 0]]), ["Mn"] * 3)
    scaled = ld.Crystal(CELL * 1.01, PLACES, ["Mn"] * 3)
    base = ld.Coupling(CRYSTAL).tensors
    for other in (moved, scaled):
        assert np.abs(ld.Coupling(other).tensors - base).max() > 1e-4
    assert not np.array_equal(ld.Coupling(CRYSTAL, tol=1e-2).tensors, base)


def test_refusals(monkeypatch):
    table = ld.Coupling(CRYSTAL, (0.5, 0, 0.5))
    with pytest.raises(InputError) as caught:
        table.energies(MOMENTS)
    assert str(caught.value) == "moments must be real at k = [0.5, 0.0, 0.5], where k and −k are the same vector."
    with pytest.raises(InputError, match=r"^moments must have shape \(n, 3, 3\), got \(3, 3\)\.$"):
        table.energies(MOMENTS[0].real)
    bad = MOMENTS.real.copy()
    bad[4, 1, 2] = np.nan
    with pytest.raises(InputError, match=r"^moments holds a value that is not finite"):
        table.energies(bad)
    with pytest.raises(InputError, match=r"^k must have shape \(3\), got \(2,\)\.$"):
        ld.Coupling(CRYSTAL, (0, 0))
    with pytest.raises(InputError, match=r"^tol must lie between 1e-12 and 0\.01, got 1\.0\.$"):
        ld.Coupling(CRYSTAL, tol=1)
    slab = ld.Crystal(CELL, PLACES, ["Mn"] * 3, pbc=(True, True, False))
    with pytest.raises(InputError, match=r"^the structure is periodic along \(True, True, False\) only"):
        _ = ld.Coupling(slab).tensors
    monkeypatch.setattr(coupling, "MAX_TABLE_BYTES", 100)
    with pytest.raises(LimitError, match=r"^3 magnetic sites need a table of tensors larger than"):
        _ = ld.Coupling(CRYSTAL, (0.37, 0, 0)).tensors


def test_split_ions_are_refused_only_where_both_are_magnetic():
    split = ld.Crystal(CELL, [[0, 0, 0], [0.01, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "Fe", "Co"], occupancies=[0.5, 0.5, 1])
    table = ld.Coupling(split)
    alone = np.zeros((1, 3, 3))
    alone[0, [0, 2], 2] = 1
    assert np.isfinite(table.energies(alone)).all()
    with pytest.raises(InputError, match=r"^the magnetic atoms Mn \(number 1\) and Fe \(number 2\) are 0\.05"):
        table.energies(np.ones((1, 3, 3)))


def test_pickled():
    again = pickle.loads(pickle.dumps(ld.Coupling(CRYSTAL, (0.5, 0, 0.5))))
    assert np.array_equal(again.tensors, ld.Coupling(CRYSTAL, (0.5, 0, 0.5)).tensors)
