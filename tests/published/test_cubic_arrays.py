"""Energies of cubic dipole arrays.

Luttinger and Tisza, Phys. Rev. 70, 954 (1946); erratum Phys. Rev. 72, 257 (1947): E = C n µ² per dipole. Three-decimal
constants as printed there; the longer ones were recomputed by Ewald sums at three splittings and by planewise sums.
Wave vectors in units 2π/a of the cube.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest

import latticedip as ld
from tests.published.helpers import CENTRINGS, CUBIC, coupling_matrix, ordering, reduced_energy
from tests.reference.constants import DIPOLE_EV

A = 3.7
TABLE = [
    # lattice, k, direction, C, printed
    ("sc", (0.5, 0.5, 0), (0, 0, 1), -2.6767886844, -2.676),
    ("bcc", (0.5, 0.5, 0), (1, -1, 0), -1.9859209288, -1.986),
    ("bcc", (0.5, 0.5, 0), (0, 0, 1), -1.3383943422, None),
    ("fcc", (0.5, 0.5, 0.5), (1, -1, 0), -1.8075736340, -1.808),
    ("fcc", (0.5, 0.5, 0.5), (1, 1, -2), -1.8075736340, -1.808),
    ("fcc", (1, 0, 0), (0, 1, 0), -1.0834664175, None),
    ("fcc", (1, 0, 0), (0, 0.6, 0.8), -1.0834664175, None),
    ("fcc", (1, 0, 0), (1, 0, 0), 2.1669328351, None),
    ("sc", (0, 0, 0), (1, 0, 0), -2 * np.pi / 3, None),
    ("bcc", (0, 0, 0), (0, 0.6, 0.8), -2 * np.pi / 3, None),
    ("fcc", (0, 0, 0), (1, 1, 1), -2 * np.pi / 3, None),
]


@pytest.mark.parametrize(("lattice", "k", "along", "constant", "printed"), TABLE)
@pytest.mark.parametrize("cell", ["primitive", "cube", "doubled cube"])
def test_energy_per_dipole(lattice, k, along, constant, printed, cell):
    vectors, per_cube = CUBIC[lattice]
    moment = 1.7 * np.array(along) / np.linalg.norm(along)
    centrings = CENTRINGS[lattice]
    phases = np.cos(2 * np.pi * centrings @ k)
    if cell == "primitive":
        array = ordering(A * vectors, [[0, 0, 0]], moment, vectors @ k)
    elif cell == "cube":
        array = ordering(A * np.eye(3), centrings, phases[:, None] * moment, k)
    else:
        steps = np.array(list(itertools.product((0, 1), repeat=3)))
        sites = (centrings[:, None] + steps).reshape(-1, 3)
        array = ordering(2 * A * np.eye(3), sites / 2, np.cos(2 * np.pi * sites @ k)[:, None] * moment)
    found = reduced_energy(array, A, 1.7) / per_cube
    assert found == pytest.approx(constant, abs=2e-10)
    # The print cuts −2.6768 to −2.676.
    assert printed is None or abs(found - printed) < 1e-3


def test_ising_and_free_constants_are_the_lowest_of_their_arrays():
    """Luttinger and Tisza's arrays repeat after two primitive translations: every component of k is 0 or 1/2."""
    lowest = {}
    for lattice, (vectors, per_cube) in CUBIC.items():
        values = [
            -0.5 * np.linalg.eigvalsh(coupling_matrix(vectors, [[0, 0, 0]], k))[-1] / per_cube
            for k in itertools.product((0, 0.5), repeat=3)
            if any(k)
        ]
        lowest[lattice] = min(values)
    assert lowest == pytest.approx({"sc": -2.6767886844, "bcc": -1.9859209288, "fcc": -1.8075736340}, abs=1e-9)


def test_no_wave_of_the_simple_cubic_lattice_lies_below_its_ground_state():
    """−2.6768 is the lowest for any k (Luttinger and Tisza 1946; strong and weak constraint agree with one site)."""
    steps = np.arange(0, 0.51, 0.125)
    waves = [k for k in itertools.product(steps, repeat=3) if k[0] >= k[1] >= k[2]]
    values = {k: -0.5 * np.linalg.eigvalsh(coupling_matrix(np.eye(3), [[0, 0, 0]], k))[-1] for k in waves}
    assert min(values, key=values.__getitem__) == (0.5, 0.5, 0.0)


def test_ranking_of_the_arrays_of_one_lattice():
    """bcc and fcc: the uniform state at N = 0 lies lowest; as a sphere (energy 0) it lies above the antiferromagnet."""
    for lattice, k, along in (("bcc", (0.5, 0.5, 0), (1, -1, 0)), ("fcc", (0.5, 0.5, 0.5), (1, -1, 0))):
        vectors, per_cube = CUBIC[lattice]
        moment = np.array(along) / np.sqrt(2)
        uniform = ordering(A * vectors, [[0, 0, 0]], moment)
        staggered = ordering(A * vectors, [[0, 0, 0]], moment, vectors @ k)
        table = ld.rank([staggered, uniform])
        assert [row.ordering for row in table.rows] == [uniform, staggered]
        constant = next(c for name, wave, m, c, _ in TABLE if (name, wave, m) == (lattice, k, along))
        gap = (constant + 2 * np.pi / 3) * per_cube * DIPOLE_EV / A**3
        assert table.rows[1].above_lowest_eV == pytest.approx(gap, rel=1e-9)
        as_sphere = ld.rank([staggered, uniform], sample=ld.Sample.sphere())
        assert [row.ordering for row in as_sphere.rows] == [staggered, uniform]
        assert as_sphere.rows[1].energy.per_ion_eV == pytest.approx(0.0, abs=1e-14)
