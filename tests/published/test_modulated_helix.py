"""The field at a muon in the helical phase of MnSi, whose two edges are in print."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.physics.ellipse import field_ellipse
from tests.published.test_shift import EMU_PER_MOL, MNSI

#: |γµ|/2π in MHz/T.
MUON_MHZ_PER_T = 135.53881


def helix(moment: float) -> ld.Ordering:
    """Ferromagnetic in planes across [111], turning about it with a period of 180 Å: k = 0.035 Å⁻¹ / 2π along [111].

    Ishikawa et al., Solid State Commun. 19, 525 (1976), from memory.
    """
    k = 4.558 / 180 / np.sqrt(3) * np.ones(3)
    u, v = np.array([1, -1, 0]) / np.sqrt(2), np.array([1, 1, -2]) / np.sqrt(6)
    manganese = np.array([symbol == "Mn" for symbol in MNSI.symbols])
    phases = np.exp(-2j * np.pi * MNSI.positions @ k)
    return ld.Ordering(MNSI, moment * np.outer(manganese * phases, u + 1j * v), k, "helix")


def test_edges_of_the_field_distribution_in_the_helical_phase():
    """Zero-field precession at 12 and 28 MHz: Takigawa et al., J. Phys. Soc. Jpn. 49, 1760 (1980), from memory.

    Muon at (0.532, 0.532, 0.532), contact −0.9276 mol/emu over its three nearest Mn, moment 0.4 µB per Mn: Amato et
    al., Phys. Rev. B 89, 184425 (2014), from memory; the distribution between the two edges was explained there. The
    moment in print (0.38 to 0.4 µB) fixes the edges to 10 %, their ratio does not depend on it.
    """
    contact = ld.Contact(-0.9276 * EMU_PER_MOL * 1e-4 / 3, shell=1)
    probes = [ld.Probe(p, contact=contact) for p in ld.orbit(MNSI, (0.532, 0.532, 0.532))]
    found = field_ellipse(helix(0.4), probes)
    low, high = found.minimum_T * MUON_MHZ_PER_T, found.maximum_T * MUON_MHZ_PER_T
    assert low.min() == pytest.approx(12, rel=0.1)
    assert high.max() == pytest.approx(28, rel=0.1)
    assert high.max() / low.min() == pytest.approx(28 / 12, rel=0.03)
    # One site of four lies on the axis of the helix: there the field keeps its size.
    narrow = np.sort(high - low)
    assert narrow[0] < 0.05 and narrow[1] > 10
