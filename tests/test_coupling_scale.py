"""Coupling.energies and its relatives for many candidates: the same as one by one, in the same order."""

from __future__ import annotations

import tracemalloc

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError
from latticedip.physics import candidates

RNG = np.random.default_rng(3)
GENERAL = (0.21, -0.37, 0.45)


def crystal_of(n: int, occupancies=None) -> ld.Crystal:
    """A triclinic cell with n sites apart from each other."""
    side = int(np.ceil(n ** (1 / 3)))
    grid = np.stack(np.meshgrid(*(np.arange(side) / side,) * 3, indexing="ij"), axis=-1).reshape(-1, 3)[:n]
    cell = 3.0 * side * np.array([[1.0, 0, 0], [0.2, 1.1, 0], [-0.1, 0.3, 0.9]])
    jitter = np.random.default_rng(n).uniform(-0.1, 0.1, (n, 3)) / side
    return ld.Crystal(cell, grid + jitter, ["Fe"] * n, occupancies=occupancies)


def one_by_one(crystal, moments, k=(0, 0, 0)):
    return np.array([ld.dipolar_energy(ld.Ordering(crystal, m, k)).per_cell_eV for m in moments])


@pytest.mark.parametrize("n", [1, 2, 3, 5, 17])
@pytest.mark.parametrize("k", [(0, 0, 0), (0.5, 0, 0.5), GENERAL])
def test_equal_to_one_by_one(n, k):
    occupancies = np.linspace(0.4, 1.0, n)
    crystal = crystal_of(n, occupancies)
    moments = RNG.normal(size=(150, n, 3))
    if k == GENERAL:
        moments = moments + 1j * RNG.normal(size=moments.shape)
    found = ld.Coupling(crystal, k).energies(moments)
    wanted = one_by_one(crystal, moments, k)
    assert found == pytest.approx(wanted, rel=1e-12, abs=1e-13 * np.abs(wanted).max())


def test_real_moments_at_a_general_k():
    crystal = crystal_of(4)
    moments = RNG.normal(size=(20, 4, 3))
    coupling = ld.Coupling(crystal, GENERAL)
    assert coupling.energies(moments) == pytest.approx(coupling.energies(moments.astype(complex)), rel=1e-12)
    assert coupling.energies(moments) == pytest.approx(one_by_one(crystal, moments, GENERAL), rel=1e-12)


@pytest.mark.parametrize("kind", [np.int8, np.float32, np.complex64, "strided", "list"])
def test_any_numeric_array(kind):
    crystal = crystal_of(3)
    coupling = ld.Coupling(crystal)
    plain = RNG.integers(-3, 4, size=(40, 3, 3)).astype(float)
    if kind == "strided":
        given = np.repeat(plain, 2, axis=0)[::2]
    else:
        given = plain.tolist() if kind == "list" else plain.astype(kind)
    assert np.array_equal(coupling.energies(given), coupling.energies(plain))


def test_conversion_in_blocks_keeps_the_order(monkeypatch):
    crystal = crystal_of(3)
    coupling = ld.Coupling(crystal)
    moments = RNG.normal(size=(1000, 3, 3)).astype(np.float32)
    whole = coupling.energies(moments.astype(float))
    monkeypatch.setattr(candidates, "BLOCK_NUMBERS", 900)
    assert np.array_equal(coupling.energies(moments), whole)


def test_no_copy_of_the_candidates():
    crystal = crystal_of(8)
    coupling = ld.Coupling(crystal)
    moments = RNG.normal(size=(100_000, 8, 3))
    coupling.energies(moments[:10])
    tracemalloc.start()
    coupling.energies(moments)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    # The result itself is 0.8 MB, the candidates 19 MB.
    assert peak < 4e6


def test_no_candidates():
    coupling = ld.Coupling(crystal_of(2))
    assert coupling.energies(np.zeros((0, 2, 3))).shape == (0,)
    assert coupling.sign_energies(np.zeros((0, 2), dtype=np.int8), (0, 0, 1)).shape == (0,)
    assert coupling.sign_forms(np.zeros((0, 2), dtype=np.int8), [1, 1]).shape == (0, 3, 3)


@pytest.mark.parametrize("n", [1, 6, 7, 13])
@pytest.mark.parametrize("count", [5, candidates.FEW_PATTERNS + 37])
@pytest.mark.parametrize("k", [(0, 0, 0), GENERAL])
def test_sign_patterns(n, count, k):
    crystal = crystal_of(n, np.linspace(0.5, 1.0, n))
    coupling = ld.Coupling(crystal, k)
    signs = RNG.choice(np.array([-1, 1], dtype=np.int8), size=(count, n))
    axes = RNG.normal(size=(n, 3)) + (1j * RNG.normal(size=(n, 3)) if k == GENERAL else 0)
    wanted = coupling.energies(signs[:, :, None] * axes)
    found = coupling.sign_energies(signs, axes)
    assert found == pytest.approx(wanted, rel=1e-12, abs=1e-13 * np.abs(wanted).max())
    assert np.array_equal(coupling.sign_energies(signs.astype(float), axes), found)


@pytest.mark.parametrize("count", [5, candidates.FEW_PATTERNS + 37])
def test_forms_hold_the_energy_along_every_axis(count):
    n = 7
    coupling = ld.Coupling(crystal_of(n), (0.5, 0, 0))
    signs = RNG.choice(np.array([-1, 1], dtype=np.int8), size=(count, n))
    sizes = RNG.uniform(0.5, 2, n)
    forms = coupling.sign_forms(signs, sizes)
    unit = np.array([2.0, -1, 2]) / 3
    wanted = coupling.sign_energies(signs, sizes[:, None] * unit)
    assert unit @ forms @ unit == pytest.approx(wanted, rel=1e-12, abs=1e-13 * np.abs(wanted).max())
    assert np.array_equal(forms, forms.transpose(0, 2, 1))


def test_sites_without_an_axis_carry_nothing():
    crystal = crystal_of(3)
    coupling = ld.Coupling(crystal)
    axes = np.array([[1.0, 0, 0], [0, 0, 0], [0, 2, 0]])
    signs = np.array([[1, 1, -1], [1, -1, -1]])
    found = coupling.sign_energies(signs, axes)
    assert found[0] == found[1] == pytest.approx(one_by_one(crystal, [axes * [[1], [1], [-1]]])[0], rel=1e-12)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda c: c.energies(np.zeros((2, 3, 3))), "moments must have shape (n, 2, 3), got (2, 3, 3)."),
        (lambda c: c.energies([[[1, 2, 3]], [[1, 2, 3], [4, 5, 6]]]), "moments is not a rectangular array of numbers"),
        (
            lambda c: c.energies([[[0, 0, 0], [0, 0, 0]], [[0, 0, 0], [0, np.nan, 0]]]),
            "moments holds a value that is not finite: nan at index (1, 1, 1).",
        ),
        (
            lambda c: c.energies([[[1e200, 0, 0], [1e200, 0, 0]]]),
            "moments: the energy of candidate 0 is too large for a double.",
        ),
        (
            lambda c: c.energies([[[1j, 0, 0], [1, 0, 0]]]),
            "moments must be real at k = [0.0, 0.0, 0.0], where k and −k are the same vector.",
        ),
        (
            lambda c: c.sign_energies([[1, 1, 1]], (0, 0, 1)),
            "signs must have shape (n, 2), one sign per site, got (1, 3).",
        ),
        (lambda c: c.sign_energies([[1, 0]], (0, 0, 1)), "signs must be +1 or −1, got 0 at index (0, 1)."),
        (
            lambda c: c.sign_energies(np.full((9000, 2), 2, dtype=np.int8), (0, 0, 1)),
            "signs must be +1 or −1, got 2 at index (0, 0).",
        ),
        (lambda c: c.sign_energies([[257, 1]], (0, 0, 1)), "signs must be +1 or −1, got 257 at index (0, 0)."),
        (lambda c: c.sign_energies([["+", "-"]], (0, 0, 1)), "signs must be numbers +1 or −1, got an array of <U1."),
        (lambda c: c.sign_energies([[1, 1]], (0, 1)), "axes must have shape (3), got (2,)."),
        (
            lambda c: c.sign_energies([[1, 1]], (0, 1j, 0)),
            "axes must be real at k = [0.0, 0.0, 0.0], where k and −k are the same vector.",
        ),
        (lambda c: c.sign_forms([[1, 1]], [1]), "sizes must have shape (2), got (1,)."),
    ],
)
def test_refusals(call, message):
    with pytest.raises(InputError) as caught:
        call(ld.Coupling(crystal_of(2)))
    assert str(caught.value).startswith(message)


def test_unfinite_values_among_many_are_found():
    crystal = crystal_of(2)
    moments = np.ones((5000, 2, 3))
    moments[4321, 0, 2] = np.inf
    with pytest.raises(InputError, match=r"not finite: inf at index \(4321, 0, 2\)"):
        ld.Coupling(crystal).energies(moments)
