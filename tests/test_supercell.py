"""Moments of a supercell: table of couplings, Fourier components, fields."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError, LimitError
from latticedip.physics.supercell import Supercell, SupercellField, check_repeat

CELL = np.array([[4.0, 0, 0], [0.5, 5.0, 0], [-0.3, 1.0, 6.0]])
POSITIONS = [[0.1, 0.2, 0.3], [0.6, 0.55, 0.7], [0.3, 0.8, 0.1]]
CRYSTAL = ld.Crystal(CELL, POSITIONS, ["Mn", "O", "Fe"], occupancies=[1, 1, 0.5])
SAMPLE = ld.Sample.ellipsoid((1, 2, 3), applied_T=(0.1, 0.2, 0.3))


def moments_of(supercell, seed=0):
    return np.random.default_rng(seed).normal(size=(supercell.n_moments, 3))


@pytest.mark.parametrize("repeat", [(1, 1, 1), (2, 1, 3), (3, 2, 4)])
def test_components_give_the_moments_back(repeat):
    supercell = Supercell(CRYSTAL, repeat, (0, 2))
    moments = moments_of(supercell)
    ordering = supercell.ordering(moments, "x")
    assert ordering.crystal is CRYSTAL
    back = ordering.moments(supercell.cells)
    assert np.abs(back[:, [0, 2]].reshape(-1, 3) - moments).max() < 1e-14
    assert np.abs(back[:, 1]).max() == 0


@pytest.mark.parametrize("repeat", [(1, 1, 1), (2, 1, 3), (3, 2, 4)])
def test_energy_is_that_of_the_components(repeat):
    supercell = Supercell(CRYSTAL, repeat, (0, 2))
    moments = moments_of(supercell, 1)
    field = SupercellField(supercell, supercell.tensors(SAMPLE), SAMPLE.applied_T)
    expected = ld.dipolar_energy(supercell.ordering(moments), sample=SAMPLE).per_cell_eV
    assert field.energy_eV(moments) / supercell.n_cells == pytest.approx(expected, rel=1e-9)


def test_energy_is_that_of_a_large_crystal():
    """The same atoms written down as one cell, k = 0."""
    repeat = (2, 2, 1)
    supercell = Supercell(CRYSTAL, repeat, (0, 2))
    moments = moments_of(supercell, 2)
    cells = np.array(list(itertools.product(*map(range, repeat))))
    positions = ((CRYSTAL.positions[None] + cells[:, None]) / repeat).reshape(-1, 3)
    large = ld.Crystal(np.array(repeat)[:, None] * CELL, positions, ["Mn", "O", "Fe"] * 4, occupancies=[1, 1, 0.5] * 4)
    all_moments = np.zeros((4, 3, 3))
    all_moments[:, [0, 2]] = moments.reshape(4, 2, 3)
    expected = ld.dipolar_energy(ld.Ordering(large, all_moments.reshape(-1, 3)), sample=SAMPLE).per_cell_eV
    field = SupercellField(supercell, supercell.tensors(SAMPLE), SAMPLE.applied_T)
    assert field.energy_eV(moments) == pytest.approx(expected, rel=1e-9)


def test_fields_add_up_the_table():
    supercell = Supercell(CRYSTAL, (2, 1, 3), (0, 2))
    moments = moments_of(supercell, 3)
    table = supercell.tensors()
    full = table[supercell.differences()].transpose(0, 2, 1, 3, 4).reshape(12, 12, 6)
    dense = np.empty((12, 12, 3, 3))
    for c, (a, b) in enumerate(((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))):
        dense[..., a, b] = dense[..., b, a] = full[..., c]
    mean = moments * supercell.occupancies[:, None]
    fields = SupercellField(supercell, table, np.zeros(3)).fields(moments)
    assert np.abs(fields - np.einsum("pqab,qb->pa", dense, mean)).max() < 1e-12 * np.abs(fields).max()


@pytest.mark.parametrize("bad", [(0, 1, 1), (1, 1), (1.5, 1, 1), "abc", 3, (1, -2, 1), None])
def test_refuses_other_supercells(bad):
    with pytest.raises(InputError) as caught:
        check_repeat(bad)
    assert str(caught.value) == f"supercell must be three whole numbers of at least 1, got {bad!r}."


def test_refuses_too_many_moments():
    with pytest.raises(LimitError) as caught:
        Supercell(CRYSTAL, (30, 30, 30), (0, 2))
    assert str(caught.value) == (
        "a supercell of 30 × 30 × 30 cells holds 54,000 moments, more than 10,000. Take a smaller supercell."
    )
