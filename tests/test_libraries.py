"""Energies and fields against general-purpose libraries that know nothing of magnets.

Magnetic dipoles interact as electric ones: −m1·T·m2 with µ0/4π in place of 1/4πε0. Both libraries surround the crystal
with a conductor (the term G = 0 dropped), which is N = 0 here.
"""

from __future__ import annotations

import itertools
import warnings

import numpy as np
import pytest
from scipy import constants

import latticedip as ld
from tests.reference.constants import DIPOLE_EV, DIPOLE_T


def random_ordering(seed: int, n: int, cell: np.ndarray):
    rng = np.random.default_rng(seed)
    grid = np.array(list(itertools.product((0.05, 0.55), repeat=3)))
    positions = grid[rng.permutation(8)[:n]] + rng.uniform(0, 0.25, (n, 3))
    moments = rng.normal(size=(n, 3))
    return ld.Ordering(ld.Crystal(cell, positions, ["Mn"] * n), moments)


CELLS = {
    "orthorhombic": np.diag([5.0, 6.5, 8.0]),
    "triclinic": np.array([[6.0, 0, 0], [1.5, 7.0, 0], [-1.2, 2.0, 9.0]]),
}


@pytest.mark.parametrize("name", CELLS)
def test_pairs_of_charges_in_pymatgen(name):
    """Charges ±1/h at distance h: a dipole of 1 e Å, with an error in h² and h⁴ that two extrapolations remove."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            from pymatgen.analysis.ewald import EwaldSummation
            from pymatgen.core import DummySpecies, Lattice, Structure
        except ImportError as error:
            pytest.skip(f"pymatgen cannot be imported: {error}")
    ordering = random_ordering(11, 3, CELLS[name])
    sites, moments = ordering.crystal.positions_cart, ordering.components[0].real
    size = np.linalg.norm(moments, axis=1)

    def energy(h: float) -> float:
        """In units e²/(4πε0 Å³) per (e Å)², each pair's own attraction taken away."""
        ends = np.concatenate([sites + sign * h / 2 * moments / size[:, None] for sign in (1, -1)])
        charges = np.concatenate([size, -size]) / h
        species = [DummySpecies(f"X{i}", q) for i, q in enumerate(charges)]
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            structure = Structure(Lattice(CELLS[name]), species, ends, coords_are_cartesian=True)
            summed = EwaldSummation(structure, acc_factor=15).total_energy / EwaldSummation.CONV_FACT
        return float(summed + np.sum((size / h) ** 2) / h)

    e1, e2, e4 = (energy(h) for h in (0.4, 0.2, 0.1))
    once = (4 * e2 - e1) / 3, (4 * e4 - e2) / 3
    twice = (16 * once[1] - once[0]) / 15
    assert abs(once[1] - twice) < 1e-4 * abs(twice)
    found = ld.dipolar_energy(ordering).per_cell_eV
    assert found == pytest.approx(DIPOLE_EV * twice, rel=1e-7)


@pytest.mark.parametrize("name", CELLS)
def test_permanent_dipoles_in_openmm(name):
    """Energy and fields of permanent dipoles on a particle mesh; fields from dipoles induced in a polarizability."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            import openmm
        except ImportError as error:
            pytest.skip(f"openmm cannot be imported: {error}")
    ordering = random_ordering(12, 5, CELLS[name])
    repeat = (4, 3, 3)
    steps = np.array(list(itertools.product(*(range(n) for n in repeat))))
    box = np.array(repeat)[:, None] * CELLS[name]
    places = np.concatenate([ordering.crystal.positions_cart + s @ CELLS[name] for s in steps])
    moments = np.tile(ordering.components[0].real, (len(steps), 1))
    polarizability = 1e-11  # nm³, small enough that its energy is nothing

    system = openmm.System()
    # The library wants its box in a reduced form; any cell of the same lattice will do.
    box = reduced_box(box)
    system.setDefaultPeriodicBoxVectors(*(openmm.Vec3(*(row / 10)) for row in box))
    force = openmm.AmoebaMultipoleForce()
    force.setNonbondedMethod(openmm.AmoebaMultipoleForce.PME)
    force.setPolarizationType(openmm.AmoebaMultipoleForce.Direct)
    force.setCutoffDistance(0.95)
    force.setAEwald(4.5)
    force.setPmeGridDimensions([160, 160, 160])
    for moment in moments:
        system.addParticle(1.0)
        dipole = [float(x) for x in moment / 10]  # e nm for 1 e Å
        axis = openmm.AmoebaMultipoleForce.NoAxisType
        force.addMultipole(0.0, dipole, [0.0] * 9, axis, -1, -1, -1, 0.0, 0.0, polarizability)
    system.addForce(force)
    platform = openmm.Platform.getPlatformByName("Reference")
    context = openmm.Context(system, openmm.VerletIntegrator(0.001), platform)
    context.setPositions([openmm.Vec3(*(x / 10)) for x in places])
    summed = context.getState(getEnergy=True).getPotentialEnergy()
    in_kj = summed.value_in_unit(summed.unit)
    # kJ/mol for two unit charges 1 Å apart.
    coulomb = constants.N_A * constants.e**2 / (4 * np.pi * constants.epsilon_0) * 1e10 * 1e-3
    induced = np.array([list(v) for v in force.getInducedDipoles(context)])[: ordering.crystal.n_sites]

    energy = ld.dipolar_energy(ordering).per_cell_eV
    assert energy == pytest.approx(DIPOLE_EV * in_kj / coulomb / len(steps), rel=1e-6)
    # e nm per nm³ is 0.01 e/Å², and B = DIPOLE_T times the field in e/Å².
    field = DIPOLE_T * induced / polarizability * 0.01
    found = ld.local_field(ordering, ordering.crystal.positions)
    here = found.dipolar + found.lorentz
    assert np.abs(here - field).max() < 1e-6 * np.abs(field).max()


def reduced_box(box: np.ndarray) -> np.ndarray:
    """The lower triangular box with |b_x| ≤ a_x/2, |c_x| ≤ a_x/2, |c_y| ≤ b_y/2 of the same lattice."""
    out = np.array(box)
    out[2] -= out[1] * np.round(out[2, 1] / out[1, 1])
    out[2] -= out[0] * np.round(out[2, 0] / out[0, 0])
    out[1] -= out[0] * np.round(out[1, 0] / out[0, 0])
    return out
