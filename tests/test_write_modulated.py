"""Waves out as modulations in (3+1)D superspace, and in again."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import FileError
from tests.reference.superspace import CELLS, atom_at


def random_ordering(seed, k, positions=None):
    rng = np.random.default_rng(seed)
    cell = np.array([[4.1, 0, 0], [0.7, 5.2, 0], [-0.4, 0.9, 6.3]])
    places = rng.uniform(0, 1, (3, 3)) if positions is None else positions
    crystal = ld.Crystal(cell, places, ("Mn", "Mn", "Fe"), ("Mn1", "Mn1", "Fe1"), [1, 1, 0.5])
    k = np.atleast_2d(k)
    components = rng.normal(size=(len(k), 3, 3)) + 1j * rng.normal(size=(len(k), 3, 3))
    components[np.all(2 * k == np.round(2 * k), axis=1)] *= 1 + 0j
    real = np.all(2 * k == np.round(2 * k), axis=1)
    components[real] = components[real].real
    return ld.Ordering(crystal, components, k, "wave")


PLACED = np.array([[0.1, 0.2, 0.3], [0.6, 0.7, 0.15], [0.35, 0.9, 0.6]])
WAVES = {
    "incommensurate": [0.2137, -0.31, 0.0821],
    "with an average": [[0, 0, 0], [0.2137, 0, 0.31]],
    "harmonics": [[0, 0, 0], [0.2137, 0, 0.31], [0.6411, 0, 0.93], [0.4274, 0, 0.62]],
    "harmonics folded back": [[0.2137, 0, 0.31], [-0.3589, 0, -0.07]],
    "second and third harmonic alone": [[0.4274, 0, 0.62], [0.6411, 0, 0.93]],
    "tiny": [1e-5, 0, 0],
    "beyond the zone": [1.2137, -3, 2.31],
    "long": [1 / 61, 1 / 59, 0.5],
}


@pytest.mark.parametrize("name", WAVES)
def test_waves_are_written_and_read_again(name, tmp_path):
    ordering = random_ordering(3, WAVES[name], PLACED)
    ld.write_ordering(ordering, tmp_path / "a.mcif")
    again = ld.read_ordering(tmp_path / "a.mcif")
    assert again.crystal.cell == pytest.approx(ordering.crystal.cell, abs=1e-14)
    assert again.crystal.labels == ordering.crystal.labels
    assert again.crystal.occupancies.tolist() == [1, 1, 0.5]
    assert again.moments(CELLS) == pytest.approx(ordering.moments(CELLS), abs=1e-12)
    assert len(again.k) == len(ordering.k)
    if len(ordering.k) == 1:
        assert again.k.tolist() == ordering.k.tolist()
        assert again.components == pytest.approx(ordering.components, abs=1e-14)
    first, second = (ld.dipolar_energy(x) for x in (ordering, again))
    assert second.per_cell_eV == pytest.approx(first.per_cell_eV, rel=1e-9)


@pytest.mark.parametrize("k", [(0.5, 0, 0), (0.25, 0, 0.5), (1 / 3, 1 / 3, 0)])
def test_commensurate_waves_both_ways(k, tmp_path):
    ordering = random_ordering(4, k, PLACED)
    ld.write_ordering(ordering, tmp_path / "cell.mcif")
    ld.write_ordering(ordering, tmp_path / "wave.mcif", superspace=True)
    whole, wave = (ld.read_ordering(tmp_path / f"{name}.mcif") for name in ("cell", "wave"))
    assert whole.crystal.n_sites > 3 and wave.crystal.n_sites == 3
    assert wave.components == pytest.approx(ordering.components, abs=1e-14)
    assert ld.dipolar_energy(whole).per_ion_eV == pytest.approx(ld.dipolar_energy(wave).per_ion_eV, rel=1e-9)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6), shift=st.tuples(*[st.integers(-3, 3)] * 3))
def test_atoms_outside_the_cell_come_back_as_their_images(seed, shift, tmp_path_factory):
    """The file puts atoms into [0, 1): their component follows, so that every atom keeps its moment."""
    folder = tmp_path_factory.mktemp("wave")
    rng = np.random.default_rng(seed)
    ordering = random_ordering(seed, rng.uniform(-0.5, 0.5, 3), PLACED + np.array([shift, (0, 0, 0), (0, 1, 0)]))
    ld.write_ordering(ordering, folder / "a.mcif")
    again = ld.read_ordering(folder / "a.mcif")
    for atom, place in enumerate(ordering.crystal.positions):
        index, offset = atom_at(again.crystal, place)
        assert again.moments(CELLS + offset.astype(int))[:, index] == pytest.approx(
            ordering.moments(CELLS)[:, atom], abs=1e-11
        )


def test_the_written_file(tmp_path):
    crystal = ld.Crystal(np.diag([3.0, 4.0, 5.0]), [[0, 0, 0.5]], ("Co",), ("Co1",))
    ordering = ld.Ordering(crystal, [[2, 0, -1j]], (0.2137, 0, 0), "a cycloid")
    ld.write_ordering(ordering, tmp_path / "a.mcif")
    assert (
        (tmp_path / "a.mcif").read_text()
        == """# Modulated magnetic structure in (3+1)D superspace, written by latticedip
data_a_cycloid
_cell_length_a 3
_cell_length_b 4
_cell_length_c 5
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_magn.ssg_name 'P1(a,b,g)0'
_cell_modulation_dimension 1
loop_
_cell_wave_vector_seq_id
_cell_wave_vector_x
_cell_wave_vector_y
_cell_wave_vector_z
1 0.2137 0 0
loop_
_space_group_symop_magn_ssg_operation.id
_space_group_symop_magn_ssg_operation.algebraic
1 x1,x2,x3,x4,+1
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
_atom_site_occupancy
'Co1' Co 0 0 0.5 1
loop_
_atom_site_Fourier_wave_vector_seq_id
_atom_site_Fourier_wave_vector_x
_atom_site_Fourier_wave_vector_y
_atom_site_Fourier_wave_vector_z
_atom_site_Fourier_wave_vector_q1_coeff
1 0.2137 0 0 1
loop_
_atom_site_moment_Fourier.id
_atom_site_moment_Fourier.atom_site_label
_atom_site_moment_Fourier.wave_vector_seq_id
_atom_site_moment_Fourier.axis
_atom_site_moment_Fourier_param.cos
_atom_site_moment_Fourier_param.sin
1 'Co1' 1 x 2 0
2 'Co1' 1 y 0 0
3 'Co1' 1 z 0 -1
"""
    )
    # Without moments there is still a wave to write.
    nothing = dataclasses.replace(ordering, components=np.zeros((1, 1, 3)))
    ld.write_ordering(nothing, tmp_path / "b.mcif")
    assert ld.read_ordering(tmp_path / "b.mcif").notes == ("every moment of the file is zero",)


def test_what_is_not_written(tmp_path):
    def refuses(ordering, name, message, **options):
        with pytest.raises(FileError) as caught:
            ld.write_ordering(ordering, tmp_path / name, **options)
        assert str(caught.value) == f"{tmp_path / name}: {message}"
        assert list(tmp_path.iterdir()) == []

    refuses(
        random_ordering(1, [[0.2137, 0, 0], [0, 0.31, 0]], PLACED),
        "a.mcif",
        "the wave vectors (0.2137, 0, 0), (0, 0.31, 0) are no multiples of one of them, which needs (3+2)D superspace "
        "or more; only (3+1)D is written. Write one wave at a time, or take commensurate k nearby.",
    )
    refuses(
        random_ordering(1, [0, 0, 0], PLACED),
        "a.mcif",
        "the ordering has no wave (k = 0 alone). Write it without superspace.",
        superspace=True,
    )
    refuses(
        random_ordering(1, [0.25, 0, 0], PLACED),
        "a.xyz",
        "only a magCIF (.mcif, .cif) can hold a modulation in superspace.",
        superspace=True,
    )
    refuses(
        random_ordering(1, [0.2137, 0, 0], PLACED),
        "a.mcif",
        "k = (0.2137, 0, 0) repeats in no supercell of up to 64 cells along an axis. Write it as .mcif, in superspace, "
        "or take a commensurate k nearby.",
        superspace=False,
    )
