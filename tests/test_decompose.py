"""Parts of an energy: they add up to it, and each is a sum that can be done by hand."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latticedip import Crystal, Ordering, Sample, dipolar_energy
from latticedip.analysis.decompose import decompose
from latticedip.errors import InputError, LimitError
from latticedip.units import DIPOLE_EV_A3_PER_MUB2

CUBE = Crystal(4.0 * np.eye(3), [(0, 0, 0)], ("Mn",))


@given(seed=st.integers(0, 2**32 - 1), kind=st.integers(0, 3))
@settings(max_examples=12, deadline=None)
def test_parts_add_up(seed: int, kind: int) -> None:
    rng = np.random.default_rng(seed)
    n = int(rng.integers(1, 5))
    cell = 5 * np.eye(3) + rng.uniform(-1, 1, (3, 3))
    crystal = Crystal(cell, rng.random((n, 3)), ("Mn",) * n, occupancies=rng.uniform(0.5, 1, n))
    k = [(0, 0, 0), (0.5, 0.5, 0), (0.21, 0.1, 0.37), (1 / 3, 0, 0)][kind]
    components = rng.normal(size=(n, 3)) + (1j * rng.normal(size=(n, 3)) if kind >= 2 else 0)
    ordering = Ordering(crystal, components, k)
    sample = Sample.ellipsoid((1, 2, 3), applied_T=(0.1, 0.2, -0.3))
    found = decompose(ordering, sample=sample, shells=4)
    whole = dipolar_energy(ordering, sample=sample)
    scale = np.abs(found.dipolar_eV).max()
    assert abs(found.dipolar_eV.sum() - whole.dipolar_eV) < 1e-12 * scale
    assert abs(found.shape_eV.sum() - whole.shape_eV) < 1e-12 * max(abs(whole.shape_eV), 1e-12)
    assert abs(found.applied_eV.sum() - whole.applied_eV) < 1e-12
    np.testing.assert_array_equal(found.dipolar_eV, found.dipolar_eV.T)
    rows = found.shell_rows()
    assert rows[-1]["sum_ueV_per_ion"] == pytest.approx(whole.dipolar_eV / whole.n_ions * 1e6, rel=1e-12, abs=1e-12)
    for by in ("site", "label"):
        total = sum(row["dipolar_ueV_per_ion"] for row in found.pairs(by))
        assert total == pytest.approx(whole.dipolar_eV / whole.n_ions * 1e6, rel=1e-12, abs=1e-9)


def test_shells_of_a_cube_by_hand() -> None:
    # Ferromagnet along z: neighbours at a give Σ (1 − 3cos²θ)/r³ = 4 − 2·2 = 0, those at √2 a
    # 4·1 + 8·(1 − 3/2) = 0, and so on: cubic shells vanish. Alternating along z, k = (0,0,½): 4 + 4 = 8, then
    # (4 + 4)/2^(3/2).
    ferromagnet = decompose(Ordering(CUBE, [[0, 0, 2]]), shells=3)
    assert [round(shell.distance_A, 9) for shell in ferromagnet.shells] == [
        4.0,
        round(4 * 2**0.5, 9),
        round(4 * 3**0.5, 9),
    ]
    assert [shell.pairs_per_ion for shell in ferromagnet.shells] == [6.0, 12.0, 8.0]
    assert all(abs(shell.energy_eV) < 1e-18 for shell in ferromagnet.shells)
    layers = decompose(Ordering(CUBE, [[0, 0, 2]], (0, 0, 0.5)), shells=2)
    unit = 0.5 * DIPOLE_EV_A3_PER_MUB2 * 4 / 4**3
    assert layers.shells[0].energy_eV == pytest.approx(8 * unit, rel=1e-12)
    assert layers.shells[1].energy_eV == pytest.approx(8 * unit / 2**1.5, rel=1e-12)
    assert layers.shells[0].labels == ("Mn–Mn",)


def test_a_helix_pair_by_pair() -> None:
    # The pair at ±a z of a helix in the plane across z: E = ½·2·(D m²/a³) cos 2πk.
    chain = Crystal(np.diag([6.0, 6.0, 3.0]), [(0, 0, 0)], ("Mn",))
    found = decompose(Ordering(chain, [[2, 2j, 0]], (0, 0, 0.2)), shells=1)
    expected = DIPOLE_EV_A3_PER_MUB2 * 4 / 27 * np.cos(2 * np.pi * 0.2)
    assert found.shells[0].energy_eV == pytest.approx(expected, rel=1e-12)


def test_names_count_atoms_in_the_order_of_signs() -> None:
    crystal = Crystal(np.diag([4.0, 5.0, 6.0]), [(0.5, 0, 0), (0, 0, 0), (0, 0.5, 0.5)], ("Mn", "Mn", "Fe"))
    found = decompose(Ordering(crystal, [[0, 0, 1], [0, 0, 1], [0, 0, 2]]), shells=0)
    assert found.names == ("Mn (2)", "Mn (1)", "Fe")
    assert found.shells == ()
    assert [(row["first"], row["second"]) for row in found.pairs("label")] == [("Mn", "Mn"), ("Mn", "Fe"), ("Fe", "Fe")]


def test_refusals() -> None:
    ordering = Ordering(CUBE, [[0, 0, 2]])
    with pytest.raises(InputError) as refused:
        decompose(ordering, shells=-1)
    assert str(refused.value) == "shells must be a whole number from 0 to 1000, got -1."
    with pytest.raises(InputError) as refused:
        decompose(ordering, shells=0).pairs("atom")
    assert str(refused.value) == 'by must be "site" or "label", got \'atom\'.'
    wide = Crystal(np.diag([900.0, 900.0, 900.0]), [(0, 0, 0)], ("Mn",))
    with pytest.raises(LimitError) as far:
        decompose(Ordering(wide, [[0, 0, 2]]), shells=3)
    assert str(far.value) == "3 shells of magnetic neighbours reach too far. Ask for fewer shells."
