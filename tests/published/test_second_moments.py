"""Second moments and static widths, from the sources named at each test (all from memory)."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.sums.powers import direction_sum, power_tensors
from tests.published.helpers import CENTRINGS, CUBIC

#: Σ r⁻⁶ with nearest neighbours at distance 1: Lennard-Jones and Ingham, Proc. R. Soc. A 107, 636 (1925); Ashcroft and
#: Mermin, table 20.2.
SIXTH_POWER = {"sc": 8.40192397, "bcc": 12.25366787, "fcc": 14.45392104}
AXES = {"[100]": [1, 0, 0], "[110]": [1, 1, 0], "[111]": [1, 1, 1]}


@pytest.mark.parametrize("lattice", CUBIC)
def test_sixth_power_sums(lattice):
    vectors = CUBIC[lattice][0]
    nearest = min(np.linalg.norm(vectors, axis=1))
    tensor = power_tensors(vectors / nearest, [[0, 0, 0]])[0]
    assert np.einsum("aabb", tensor) == pytest.approx(SIXTH_POWER[lattice], abs=6e-9)


def test_simple_cubic_sums_along_directions():
    """Σ (1 − 3cos²θ)² r⁻⁶ (Van Vleck, Phys. Rev. 74, 1168 (1948), prints a truncated sum, 1 to 4 % off).

    Any cubic sum is A + B (h₁⁴ + h₂⁴ + h₃⁴), with the mean (4/5) Σ r⁻⁶ over directions. The values compared with are
    sums over 40 spacings without the tail beyond, which is (4/5)(4π/3)/40³ for every direction.
    """
    tensor = power_tensors(np.eye(3), [[0, 0, 0]])[0]
    found = [float(direction_sum(tensor, np.array(h) / np.linalg.norm(h))) for h in AXES.values()]
    tail = 4 / 5 * 4 * np.pi / 3 / 40**3
    assert found == pytest.approx([13.35722776 + tail, 5.06255150 + tail, 2.29765941 + tail], abs=2e-7)
    # Mean over all directions from three: weights 10, 16 and 9 of 35.
    assert (10 * found[0] + 16 * found[1] + 9 * found[2]) / 35 == pytest.approx(4 / 5 * SIXTH_POWER["sc"], abs=6e-9)


def test_fluorine_in_caf2():
    """Bruce, Phys. Rev. 107, 43 (1957); Abragam, Principles of Nuclear Magnetism, ch. IV: √M₂ 3.60, 2.24 G (1.5 %).

    Along [111] 1.49 G is a computed value.
    """
    fluorine = np.array([[i, j, k] for i in (0.25, 0.75) for j in (0.25, 0.75) for k in (0.25, 0.75)])
    crystal = ld.Crystal(5.451 * np.eye(3), np.vstack([CENTRINGS["fcc"], fluorine]), ["Ca"] * 4 + ["F"] * 8)
    found = {
        name: 1e4 * np.sqrt(ld.linewidth(crystal, fluorine[0], particle="19F", direction=h).second_moment_T2)
        for name, h in AXES.items()
    }
    assert found["[100]"] == pytest.approx(3.60, rel=0.015)
    assert found["[110]"] == pytest.approx(2.24, rel=0.015)
    assert found["[111]"] == pytest.approx(1.49, abs=0.006)


def pair(first: str, second: str, distance: float) -> ld.Crystal:
    """Two atoms along z and nothing else."""
    return ld.Crystal(50 * np.eye(3), [[0, 0, 0], [0, 0, distance / 50]], [first, second], pbc=(False,) * 3)


def test_proton_pair_in_gypsum():
    """Pake, J. Chem. Phys. 16, 327 (1948): lines at ±α(3cos²θ − 1), 2α = 10.8 G at r = 1.58 Å (1 %).

    Two lines at ±x have the second moment x².
    """
    width = ld.linewidth(pair("H", "H", 1.58), (0, 0, 0), particle="1H", direction=[1, 0, 0], nuclei="1H")
    assert 2 * 1e4 * np.sqrt(width.second_moment_T2) == pytest.approx(10.8, rel=0.01)


def test_zero_field_and_transverse_width():
    """Hayano et al., Phys. Rev. B 20, 850 (1979): Δ²/σ² = 5/2 in a powder."""
    crystal = ld.Crystal(np.diag([4.0, 5.0, 6.5]), [[0, 0, 0], [0.3, 0.6, 0.2]], ["Cu", "F"])
    width = ld.linewidth(crystal, (0.7, 0.4, 0.5), particle="muon")
    assert width.zero_field_width_per_us**2 / width.transverse_width_per_us**2 == pytest.approx(5 / 2, rel=1e-12)


def test_muon_in_copper():
    """Octahedral site, a = 3.615 Å: rigid lattice 0.448 µs⁻¹; nearest shell dilated by 5 %: 0.389(3) µs⁻¹ (2 %).

    Luke et al., Phys. Rev. B 43, 3284 (1991); Camani et al., Phys. Rev. Lett. 39, 836 (1977).
    """
    copper = ld.Crystal(3.615 * np.eye(3), CENTRINGS["fcc"], ["Cu"] * 4)
    rigid = ld.linewidth(copper, (0.5, 0.5, 0.5), particle="muon")
    assert rigid.zero_field_width_per_us == pytest.approx(0.448, abs=1.5e-3)
    dilated = ld.linewidth(copper, (0.5, 0.5, 0.5), particle="muon", displaced=ld.Displaced(shell=1, factor=1.05))
    assert dilated.zero_field_width_per_us == pytest.approx(0.389, rel=0.02)


def test_fluorine_muon_pair():
    """Brewer et al., Phys. Rev. B 33, 7813 (1986): ω_d/2π = 0.22 MHz at r = 1.17 Å.

    A spin of one half along the bond makes the field (µ0/4π) 2 (γħ/2)/r³, which is ω_d over the muon's γ.
    """
    width = ld.linewidth(pair("Au", "F", 1.17), (0, 0, 0), particle="muon", nuclei="F", direction=[0, 0, 1])
    assert width.transverse_width_per_us / (2 * np.pi) == pytest.approx(0.22, abs=5e-3)
