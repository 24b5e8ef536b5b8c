"""Couplings and shifts of a probe worked out in print."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from tests.published.helpers import CENTRINGS
from tests.reference.constants import DIPOLE_T

#: Moment of one mole of formula units with 1 µB each, emu/mol (published constants).
EMU_PER_MOL = 5584.94


@pytest.mark.parametrize(
    ("lattice", "point", "diagonal"),
    [
        # Reduced sphere sums, a = 1, recomputed by Ewald and planewise sums (values of the interstitial sites of iron
        # in Schenck, Muon Spin Rotation Spectroscopy (1985), follow from them).
        ("bcc", (0.5, 0.5, 0.0), (-10.70715474, -10.70715474, 21.41430947)),
        ("bcc", (0.5, 0.25, 0.0), (3.03634525, -6.07269050, 3.03634525)),
        ("fcc", (0.5, 0.5, 0.5), (0, 0, 0)),
        ("fcc", (0.25, 0.25, 0.25), (0, 0, 0)),
    ],
)
def test_interstitial_sites_of_cubic_metals(lattice, point, diagonal):
    a = 3.1
    metal = ld.Crystal(a * np.eye(3), CENTRINGS[lattice], ["Fe"] * len(CENTRINGS[lattice]))
    found = ld.coupling_tensor(metal, point, magnetic="Fe")
    assert found.dipolar * a**3 / DIPOLE_T == pytest.approx(np.diag(diagonal), abs=6e-9)
    # Lorentz 1909; Kittel, Introduction to Solid State Physics, ch. 16: (4π/3) n, n dipoles per cube.
    density = len(CENTRINGS[lattice])
    assert found.lorentz * a**3 / DIPOLE_T == pytest.approx(4 * np.pi / 3 * density * np.eye(3), rel=1e-9)


def primitive_cubic_sites(x: float) -> list[list[float]]:
    """Wyckoff position 4a of P2_13."""
    return [[x, x, x], [0.5 - x, -x, 0.5 + x], [-x, 0.5 + x, 0.5 - x], [0.5 + x, 0.5 - x, -x]]


MNSI = ld.Crystal(
    4.558 * np.eye(3), primitive_cubic_sites(0.138) + primitive_cubic_sites(0.845), ["Mn"] * 4 + ["Si"] * 4
)


def test_muon_in_mnsi():
    """Amato et al., Phys. Rev. B 89, 184425 (2014), from memory: off-diagonal coupling −0.2044 mol/emu, 2 % by x."""
    tensors = [ld.coupling_tensor(MNSI, p, magnetic="Mn") for p in ld.orbit(MNSI, (0.532, 0.532, 0.532))]
    assert len(tensors) == 4
    for tensor in tensors:
        in_mol_per_emu = tensor.dipolar * 1e4 / EMU_PER_MOL
        assert np.abs(in_mol_per_emu[np.triu_indices(3, 1)]) == pytest.approx(0.2044, rel=0.02)
        assert np.abs(np.diag(in_mol_per_emu)).max() < 1e-9
        assert tensor.asymmetry == 0
    first = ld.coupling_tensor(MNSI, (0.532, 0.532, 0.532), magnetic="Mn")
    assert first.dipolar[0, 1] * 1e4 / EMU_PER_MOL == pytest.approx(-0.2044, rel=0.02)


def test_knight_shift_of_mnsi():
    """With contact −0.9276 mol/emu (the same source) over the three nearest Mn: the shift against angle in a plane.

    Four sites, field in the plane across [001]: K = (contact + 4π(1/3 − N) n) χ ± dipolar · sin 2φ, where the dipolar
    term is the off-diagonal element; at 45° the sites split by twice 0.2044 χ.
    """
    chi = 0.01
    contact = ld.Contact(-0.9276 * EMU_PER_MOL * 1e-4 / 3, shell=1)
    patterns = []
    for position in ld.orbit(MNSI, (0.532, 0.532, 0.532)):
        shift = ld.paramagnetic_shift(
            MNSI, position, {"Mn": ld.Susceptibility(chi)}, contact=contact, sample=ld.Sample.sphere()
        )
        assert shift.contact == pytest.approx(-0.9276 * chi * np.eye(3), rel=1e-5)
        patterns.append(shift.rotation([0, 0, 1], [0.0, 45.0, 90.0]).shift)
    at = np.array(patterns)
    assert at[:, [0, 2]] == pytest.approx(np.full((4, 2), -0.9276 * chi), rel=1e-5)
    assert np.sort(at[:, 1]) == pytest.approx(chi * (-0.9276 + 0.2044 * np.array([-1, -1, 1, 1])), rel=0.006)


def test_magic_angle():
    """1 − 3cos²θ of one neighbour vanishes at 54.7356° (arctan √2)."""
    edge = 3000.0
    pair = ld.Crystal(edge * np.eye(3), [[0, 0, 0.0], [0, 0, 2.0 / edge]], ["O", "Mn"])
    shift = ld.paramagnetic_shift(pair, (0, 0, 0), {"Mn": ld.Susceptibility(0.01, "muB/T")})
    size = DIPOLE_T / 8 * 0.01
    pattern = shift.rotation([0, 1, 0], [0.0, 54.7356, 90.0], start=[0, 0, 1]).shift
    assert pattern == pytest.approx([2 * size, 0, -size], rel=1e-6, abs=2e-6 * size)
    assert shift.powder.mean == pytest.approx(0, abs=1e-6 * size)
