"""Antiferromagnetic fluorides and oxides whose dipolar anisotropy is in print."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from tests.published.helpers import CENTRINGS, ordering
from tests.reference.constants import MUB_T_EV

#: Rutile MnF2, a = 4.8734, c = 3.3099 Å, Mn up at the corner and down at the centre, 5 µB.
MNF2 = np.diag([4.8734, 4.8734, 3.3099])
MN = np.array([[0, 0, 0], [0.5, 0.5, 0.5]])
UP_DOWN = np.array([[5.0], [-5.0]])


def mnf2(direction):
    return ordering(MNF2, MN, UP_DOWN * np.array(direction, dtype=float), symbol="Mn")


def test_anisotropy_field_of_mnf2():
    """Dipolar anisotropy field, with E = (m B_A/2) sin²θ per ion.

    Keffer, Phys. Rev. 87, 608 (1952): about 0.88 T at 0 K, resonance fits 0.82 to 0.88 T; from memory, 6 %.
    0.834 T recomputed for this cell.
    """
    along, across = (ld.dipolar_energy(mnf2(d)).per_ion_eV for d in ((0, 0, 1), (1, 0, 0)))
    field_T = 2 * (across - along) / (5 * MUB_T_EV)
    assert field_T == pytest.approx(0.834, abs=5e-4)
    assert field_T == pytest.approx(0.88, rel=0.06)
    # The same from the fields that the ions feel.
    fields = [ld.local_field(mnf2(d), [[0, 0, 0]]).dipolar[0] for d in ((0, 0, 1), (1, 0, 0))]
    assert fields[0][2] - fields[1][0] == pytest.approx(field_T, abs=1e-9)


def test_dipolar_field_at_fluorine_in_mnf2():
    """u = 0.305: 1.21975 T along c (recomputed).

    The measured field of about 4 T is mostly transferred hyperfine: Jaccarino and Shulman, Phys. Rev. 107, 1196 (1957).
    """
    u = 0.305
    found = ld.local_field(mnf2((0, 0, 1)), [[u, u, 0], [-u, -u, 0], [0.5 + u, 0.5 - u, 0.5]]).dipolar
    assert np.abs(found[:, 2]) == pytest.approx([1.21975] * 3, abs=5e-6)
    assert found[0, 2] * found[2, 2] < 0
    assert np.abs(found[:, :2]).max() < 1e-10


def test_moments_of_mno_lie_in_the_plane():
    """Keffer and O'Sullivan, Phys. Rev. 108, 637 (1957), from memory: k = (½,½,½), moments in (111), degenerate there.

    a = 4.4316 Å, 5 µB: 334.5 µeV per Mn between [111] and the plane (recomputed).
    """
    a, k = 4.4316, np.array([0.5, 0.5, 0.5])
    signs = np.cos(2 * np.pi * CENTRINGS["fcc"] @ k)[:, None]

    def energy(direction):
        moment = 5 * np.array(direction) / np.linalg.norm(direction)
        return ld.dipolar_energy(
            ordering(a * np.eye(3), CENTRINGS["fcc"], signs * moment, k, "Mn"), tol=1e-12
        ).per_ion_eV

    plane = [energy(d) for d in ((1, -1, 0), (1, 1, -2), (0.3, 0.9, -1.2))]
    assert plane == pytest.approx([plane[0]] * 3, abs=1e-15)
    assert 1e6 * (energy((1, 1, 1)) - plane[0]) == pytest.approx(334.5, abs=0.05)
    crystal = ordering(a * np.eye(3), CENTRINGS["fcc"], signs * np.array([0, 0, 5.0]), k, "Mn")
    row = ld.rank([crystal], rotate=True).rows[0]
    assert 1e6 * row.anisotropy_eV_per_ion == pytest.approx(334.5, abs=0.05)
    assert abs(row.hard_axis_cart @ np.ones(3)) / np.sqrt(3) == pytest.approx(1.0, abs=1e-9)
    assert abs(row.easy_axis_cart @ np.ones(3)) < 1e-8
