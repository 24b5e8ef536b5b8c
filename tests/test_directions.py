"""Energy against direction: the table against energies of turned orderings, and anisotropy fields."""

from __future__ import annotations

import numpy as np
import pytest

from latticedip import Crystal, Ordering, Sample, dipolar_energy
from latticedip.analysis.directions import energy_against_direction, mean_size
from latticedip.errors import InputError

RUTILE = Crystal(np.diag([4.8734, 4.8734, 3.3099]), [(0, 0, 0), (0.5, 0.5, 0.5)], ("Mn", "Mn"))
MNF2 = Ordering(RUTILE, [[0, 0, 5], [0, 0, -5]], name="MnF2")
ORTHO = Crystal(np.diag([3.0, 4.0, 5.0]), [(0, 0, 0)], ("Mn",))


def test_anisotropy_field_of_manganese_fluoride() -> None:
    # Keffer, Phys. Rev. 87, 608 (1952): about 0.88 T; resonance fits 0.82 to 0.88 T (from memory): 6 %.
    found = energy_against_direction(MNF2)
    middle, hard = found.anisotropy_T
    assert hard == pytest.approx(0.88, rel=0.06)
    assert middle == pytest.approx(hard, rel=1e-9)
    np.testing.assert_allclose(found.axes_cart[0], [0, 0, 1], atol=1e-12)
    assert found.notes == (
        "middle and hard axis are equally high without an applied field: the axes within are a choice",
    )


def test_energies_are_those_of_turned_orderings() -> None:
    ordering = Ordering(ORTHO, [[1, 0, 2]], name="tilted")
    sample = Sample.ellipsoid((1, 2, 3), applied_T=(0.5, 0, 0.2))
    found = energy_against_direction(ordering, sample=sample, steps=6)
    # A field tells up from down: a whole turn.
    assert found.angles_deg[-1] == 360.0
    assert found.energy_eV_per_ion.shape == (3, 13)
    for circle in range(3):
        for i in (0, 2, 5, 9):
            turned = Ordering(ORTHO, [5**0.5 * found.directions_cart[circle, i]])
            expected = dipolar_energy(turned, sample=sample).per_ion_eV
            assert found.energy_eV_per_ion[circle, i] == pytest.approx(expected, rel=1e-9, abs=1e-15)


def test_without_a_field_half_a_turn_is_all() -> None:
    found = energy_against_direction(Ordering(ORTHO, [[0, 0, 2]], (0.5, 0, 0)), steps=4)
    assert found.angles_deg.tolist() == [0, 45, 90, 135, 180]
    energy = found.energy_eV_per_ion
    # E = cos² and sin² of the two axes: half way in between at 45°.
    np.testing.assert_allclose(energy[:, 1], 0.5 * (energy[:, 0] + energy[:, 2]), rtol=1e-12)
    np.testing.assert_allclose(energy[:, 0], energy[:, 4], rtol=1e-12)
    assert np.all(np.diff(found.axis_eV) >= 0)
    assert np.linalg.det(found.axes_cart) == pytest.approx(1.0)


def test_a_cube_has_no_anisotropy() -> None:
    cube = Crystal(4 * np.eye(3), [(0, 0, 0)], ("Mn",))
    found = energy_against_direction(Ordering(cube, [[0, 0, 2]]))
    assert found.anisotropy_T == (0.0, 0.0)
    np.testing.assert_allclose(found.axes_cart, np.eye(3), atol=1e-12)
    assert found.notes == ("all directions are equally high without an applied field: the axes within are a choice",)


def test_mean_size_of_waves() -> None:
    assert mean_size(MNF2) == pytest.approx(10.0)
    # A sine wave of amplitude 3 has the mean size 3 · 2/π; at k = ¼ with phase 0: 3, 0, 3, 0.
    assert mean_size(Ordering(ORTHO, [[0, 0, 3]], (0.2131, 0, 0))) == pytest.approx(6 / np.pi, rel=1e-4)
    assert mean_size(Ordering(ORTHO, [[0, 0, 3]], (0.25, 0, 0))) == pytest.approx(1.5)


def test_refusals() -> None:
    with pytest.raises(InputError) as refused:
        energy_against_direction(Ordering(ORTHO, [[2, 2j, 0]], (0.2, 0, 0), "helix"))
    assert str(refused.value) == (
        "ordering 'helix' is not collinear: its energy is no function of one direction. "
        "`rank --rotate` turns it as a whole."
    )
    with pytest.raises(InputError) as refused:
        energy_against_direction(MNF2, steps=1)
    assert str(refused.value) == "steps must be a whole number from 2 to 10000, got 1."
