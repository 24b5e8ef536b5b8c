"""Fields of one wave in all cells against fields cell by cell, and waves against long commensurate approximants."""

from __future__ import annotations

import dataclasses
import itertools
import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.errors import InputError
from latticedip.ordering.model import ParentTransform, Reference
from latticedip.physics.ellipse import extreme_sizes, field_ellipse

CELL = np.array([[4.3, 0, 0], [0.6, 5.1, 0], [-0.5, 0.8, 6.2]])
PLACES = np.array([[0.1, 0.2, 0.3], [0.6, 0.7, 0.15], [0.35, 0.9, 0.6]])
POINTS = np.array([[0.85, 0.5, 0.8], [0.4, 0.4, 0.9], [1.35, -0.1, 0.6]])
CELLS = np.array(list(itertools.product((-2, 0, 1), (0, 3), (-1, 0, 4))))
S = np.random.default_rng(5).normal(size=(2, 3, 3)) + 1j * np.random.default_rng(6).normal(size=(2, 3, 3))
S[:, 2] = 0
K = {
    "generic": [[0.2137, -0.31, 0.0821]],
    "with a uniform part": [[0, 0, 0], [0.2137, 0, 0.31]],
    "commensurate": [[0.25, 0, 0.5]],
    "zone boundary": [[0, 0, 0], [0.5, 0.5, 0]],
    "uniform": [[0, 0, 0]],
}


def crystal() -> ld.Crystal:
    return ld.Crystal(CELL, PLACES, ("Mn", "Mn", "O"), ("Mn1", "Mn2", "O1"), [1, 0.6, 1])


def ordering_of(name: str) -> ld.Ordering:
    k = np.array(K[name])
    components = S[: len(k)].copy()
    real = np.all(2 * k == np.round(2 * k), axis=1)
    components[real] = components[real].real
    return ld.Ordering(crystal(), components, k, name)


@pytest.mark.parametrize("name", K)
@pytest.mark.parametrize("sample", [None, ld.Sample.ellipsoid([1, 2, 3], applied_T=(0.1, -0.2, 0.3))])
def test_fields_in_every_cell(name, sample):
    ordering = ordering_of(name)
    found = field_ellipse(ordering, POINTS, sample=sample)
    fields = found.fields(CELLS)
    for i, cell in enumerate(CELLS):
        direct = ld.local_field(ordering, POINTS + cell, sample=sample)
        assert fields[:, i] == pytest.approx(direct.total, abs=1e-10)
    assert found.home.total == pytest.approx(found.at([0.0])[:, 0], abs=1e-12)
    assert found.is_commensurate == (name not in ("generic", "with a uniform part"))
    sizes = np.linalg.norm(fields, axis=2)
    slack = 1e-10
    assert np.all(sizes.min(axis=1) > found.minimum_T - slack) and np.all(sizes.max(axis=1) < found.maximum_T + slack)
    assert np.all(found.ellipse_minimum_T <= found.minimum_T + slack)
    assert np.all(found.ellipse_maximum_T >= found.maximum_T - slack)


@pytest.mark.parametrize("name", ["generic", "with a uniform part", "zone boundary"])
def test_half_axes(name):
    found = field_ellipse(ordering_of(name), POINTS)
    major, minor = found.half_axes.transpose(1, 0, 2)
    assert np.einsum("na,na->n", major, minor) == pytest.approx(0, abs=1e-12)
    assert np.all(np.linalg.norm(major, axis=1) >= np.linalg.norm(minor, axis=1))
    # The same curve, and passed in the same sense.
    turns = np.linspace(0, 1, 7)
    start = np.angle(np.einsum("na,na->n", found.amplitude, found.amplitude)) / (4 * np.pi)
    for i in range(len(POINTS)):
        angle = 2 * np.pi * (turns - start[i])
        curve = found.centre[i] + np.outer(np.cos(angle), major[i]) + np.outer(np.sin(angle), minor[i])
        assert found.at(turns)[i] == pytest.approx(curve, abs=1e-12)


def test_contact_fields_see_the_ions_also_where_a_part_of_the_wave_vanishes():
    """A site with a uniform part alone and one with a wave alone: one shell holds both."""
    components = np.array([[[0, 0, 2.0], [0, 0, 0], [0, 0, 0]], [[0, 0, 0], [1, 0.5j, 0], [0, 0, 0]]])
    ordering = ld.Ordering(crystal(), components, K["with a uniform part"])
    contact = (ld.Contact(0.3, within=5.0), ld.Contact(moment_density_muB_per_A3=(0, 0.01, 0)))
    probe = ld.Probe(POINTS[0], contact=contact)
    found = field_ellipse(ordering, probe)
    for cell in CELLS:
        moved = ld.Probe(POINTS[0] + cell, contact=contact)
        assert found.fields([cell])[:, 0] == pytest.approx(ld.local_field(ordering, moved).total, abs=1e-10)
    assert found.home.probe_names == (probe.name,)


def test_probes_of_another_cell():
    """A reference cell half as long: its position becomes two, each with its own phase of one wave."""
    small = ld.Crystal(np.diag([3.0, 4, 5]), [[0, 0, 0]], ("Mn",))
    large = ld.Crystal(np.diag([3.0, 4, 10]), [[0, 0, 0], [0, 0, 0.5]], ("Mn", "Mn"))
    k = 0.2137
    wave = np.array([2, 1j, 0])
    reference = Reference(small, ParentTransform(np.diag([1.0, 1, 2]), np.zeros(3)))
    first = ld.Ordering(small, [wave], (0, 0, k))
    second = ld.Ordering(large, [wave, wave * np.exp(-2j * np.pi * k)], (0, 0, 2 * k), reference=reference)
    probe = ld.Probe((0.5, 0.5, 0.2))
    one, two = field_ellipse(first, probe), field_ellipse(second, probe)
    assert two.centre.shape == (2, 3)
    assert two.fields([[0, 0, 1]]) == pytest.approx(one.fields([[0, 0, 2], [0, 0, 3]]).transpose(1, 0, 2), abs=1e-10)


def test_levels_of_a_commensurate_wave():
    """m, 0, −m, 0 along a chain of planes at k = ¼: two levels, each in half of the cells."""
    ordering = ld.Ordering(ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ("Fe",)), [[0, 0, 2]], (0.25, 0, 0), "wave")
    found = field_ellipse(ordering, [[0, 0, 0], [0.5, 0.5, 0.5]])
    assert found.turns == pytest.approx([0, 0.25, 0.5, 0.75])
    levels = found.levels()
    assert [level.share for level in levels] == [0.5, 0.5]
    assert levels[0].field_T == pytest.approx(0, abs=1e-12)
    assert levels[1].field_T == pytest.approx(np.linalg.norm(ld.local_field(ordering, [[0, 0, 0]]).total))
    assert found.minimum_T[0] == pytest.approx(0, abs=1e-12)
    assert len(found.levels(1)) == 1
    document = json.loads(json.dumps(found.to_dict()))
    assert document["commensurate"] and document["k"] == [0.25, 0, 0]
    assert document["rows"][0]["levels"][1] == {"field_T": levels[1].field_T, "share_of_cells": 0.5}
    # Antiferromagnet: up and down, never the zero in between.
    found = field_ellipse(ld.Ordering(ordering.crystal, [[0, 0, 2]], (0.5, 0, 0)), [[0, 0, 0]])
    assert found.minimum_T == pytest.approx(found.maximum_T)
    assert found.minimum_T[0] > 0.01 and found.ellipse_minimum_T[0] == pytest.approx(0, abs=1e-12)
    assert found.half_axes[0, 1].tolist() == [0, 0, 0]


def test_incommensurate_waves_have_no_list():
    found = field_ellipse(ordering_of("generic"), POINTS[:1])
    with pytest.raises(
        InputError,
        match=r"^k = \(0\.2137, -0\.31, 0\.0821\) is incommensurate: its fields fill an ellipse and cannot be listed\. "
        r"Use at\(turns\) for the fields at given phases\.$",
    ):
        found.levels()
    document = json.loads(json.dumps(found.to_dict()))
    assert document["rows"][0]["levels"] is None and not document["commensurate"]
    assert document["rows"][0]["largest_field_T"] == found.ellipse_maximum_T[0]


def test_several_waves_are_refused():
    ordering = ld.Ordering(crystal(), S, [[0.2137, 0, 0], [0, 0.31, 0]], "two")
    with pytest.raises(
        InputError,
        match=r"^the ordering 'two' has waves at several k \((\(0\.2137, 0, 0\)), (\(0, 0\.31, 0\))\), under which a "
        r"field traces no ellipse\. Take the waves one at a time; their fields add up\.$",
    ):
        field_ellipse(ordering, POINTS)


def test_no_points():
    found = field_ellipse(ordering_of("generic"), np.zeros((0, 3)))
    assert found.minimum_T.shape == (0,) and found.to_dict()["rows"] == []


# The extremes


def test_extremes_in_closed_form():
    circle = np.array([[1, 1j, 0]])
    # A circle of radius 1 and a centre at (2, 0, h): 1 and 3 in the plane.
    assert np.hstack(extreme_sizes(np.array([[2.0, 0, 0]]), circle)) == pytest.approx([1, 3])
    assert np.hstack(extreme_sizes(np.array([[2.0, 0, 4]]), circle)) == pytest.approx(np.sqrt([17, 25]))
    assert np.hstack(extreme_sizes(np.array([[0, 0, 4.0]]), circle)) == pytest.approx(np.sqrt([17, 17]))
    # An ellipse about the origin, a segment through it, a segment off it, a point, nothing.
    assert np.hstack(extreme_sizes(np.zeros((1, 3)), np.array([[3, 2j, 0]]))) == pytest.approx([2, 3])
    assert np.hstack(extreme_sizes(np.zeros((1, 3)), np.array([[3.0, 4, 0 + 0j]]))) == pytest.approx([0, 5], abs=1e-15)
    assert np.hstack(extreme_sizes(np.array([[3.0, 1, 0]]), np.array([[2.0 + 0j, 0, 0]]))) == pytest.approx(
        np.sqrt([2, 26])
    )
    assert np.hstack(extreme_sizes(np.array([[3.0, 4, 0]]), np.zeros((1, 3), complex))) == pytest.approx([5, 5])
    assert np.hstack(extreme_sizes(np.zeros((1, 3)), np.zeros((1, 3), complex))).tolist() == [0, 0]


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 10**6),
    steady=st.floats(-14, 3),
    flat=st.sampled_from([0.0, 1e-15, 1e-9, 1e-4, 1.0]),
    round_=st.sampled_from([None, 0.0, 1e-15, 1e-9, 1e-5]),
)
def test_extremes_against_a_dense_search(seed, steady, flat, round_):
    rng = np.random.default_rng(seed)
    u, v = rng.normal(size=(2, 3))
    if round_ is not None:
        v = np.cross(u, v)
        v *= np.linalg.norm(u) / np.linalg.norm(v) * (1 + round_)
    amplitude = (u + 1j * flat * v) * np.exp(2j * np.pi * rng.random())
    centre = rng.normal(size=3) * 10**steady
    low, high = (float(x[0]) for x in extreme_sizes(centre[None], amplitude[None]))

    def size(angles):
        return np.linalg.norm(centre + (amplitude * np.exp(-1j * angles)[:, None]).real, axis=1)

    grid = np.linspace(0, 2 * np.pi, 2001)[:-1]
    scale = max(np.abs(centre).max(), np.abs(amplitude).max())
    for found, sign in ((low, 1), (high, -1)):
        values = sign * size(grid)
        wells = grid[(values <= np.roll(values, 1)) & (values <= np.roll(values, -1))]
        reached = []
        for angle in wells[:8]:
            best, width = angle, grid[1]
            for _ in range(9):
                angles = best + np.linspace(-width, width, 101)
                best, width = angles[np.argmin(sign * size(angles))], width / 25
            reached.append(sign * float(size(np.array([best]))[0]))
        assert sign * found <= min(reached) + 2e-14 * scale
        assert sign * found == pytest.approx(min(reached), abs=1e-9 * scale)


# Waves against explicit supercells

#: Convergents of 1/√2 − ½ = 0.20710678...: 1/5, 6/29, 35/169 (and those of √2 in general).
IRRATIONAL = np.sqrt(0.5) - 0.5
APPROXIMANTS = ((1, 5), (6, 29), (35, 169))
PATTERNS = {
    "helix": [1, 1j, 0],
    "cycloid": [1, 0, 1j],
    "elliptic cycloid": [1, 0.2, 0.5j],
    "longitudinal wave": [0, 0, 1],
    "transverse wave": [0, 1, 0],
}


def modulated(pattern: str, k: float) -> ld.Ordering:
    """Two atoms per cell, moments of 2 µB that follow the position along c."""
    cell = np.array([[4.0, 0, 0], [0.5, 4.4, 0], [0.3, -0.2, 3.7]])
    places = np.array([[0, 0, 0], [0.5, 0.45, 0.4]])
    crystal = ld.Crystal(cell, places, ("Mn", "Mn"))
    components = 2 * np.array(PATTERNS[pattern]) * np.exp(-2j * np.pi * k * places[:, 2])[:, None]
    return ld.Ordering(crystal, components, (0, 0, k), pattern)


def supercell(ordering: ld.Ordering, n: int) -> ld.Ordering:
    """n cells along c with every moment written out, k = 0."""
    crystal = ordering.crystal
    cells = [[0, 0, i] for i in range(n)]
    positions = (crystal.positions[None] + np.array(cells)[:, None]) / [1, 1, n]
    whole = ld.Crystal(crystal.cell * [[1], [1], [n]], positions.reshape(-1, 3), crystal.symbols * n)
    return ld.Ordering(whole, ordering.moments(cells).reshape(-1, 3), name="written out")


@pytest.mark.parametrize("pattern", PATTERNS)
def test_energy_and_fields_of_a_wave_are_those_of_long_approximants(pattern):
    point = np.array([0.4, 0.1, 0.7])
    exact = modulated(pattern, IRRATIONAL)
    energy = ld.dipolar_energy(exact).per_ion_eV
    ellipse = field_ellipse(exact, [point])
    assert not ellipse.is_commensurate
    gaps, wave_gaps, edge_gaps = [], [], []
    for p, n in APPROXIMANTS[:2] if pattern != "helix" else APPROXIMANTS:
        wave = modulated(pattern, p / n)
        whole = supercell(wave, n)
        written = ld.dipolar_energy(whole).per_ion_eV
        # A commensurate wave is its supercell, ...
        assert written == pytest.approx(ld.dipolar_energy(wave).per_ion_eV, abs=1e-13)
        points = (point + np.array([[0, 0, i] for i in range(n)])) / [1, 1, n]
        fields = ld.local_field(whole, points).total
        assert field_ellipse(wave, [point]).fields([[0, 0, i] for i in range(n)])[0] == pytest.approx(fields, abs=1e-9)
        # ... and a long one comes close to the wave that never repeats.
        gaps.append(abs(written - energy))
        wave_gaps.append(np.abs(field_ellipse(wave, [point]).amplitude - ellipse.amplitude).max())
        sizes = np.linalg.norm(fields, axis=1)
        edge_gaps.append(max(abs(sizes.min() - ellipse.minimum_T[0]), abs(sizes.max() - ellipse.maximum_T[0])))
    # |p/n − k| falls by 29²/5² from one approximant to the next, and energy and waves are smooth in k.
    for before, after in [*itertools.pairwise(gaps), *itertools.pairwise(wave_gaps)]:
        assert after < before / 20
    assert edge_gaps[-1] < 0.02 * ellipse.maximum_T[0]
    assert edge_gaps[-1] < edge_gaps[0]


def test_the_hand_does_not_matter_to_the_energy_but_reverses_the_field():
    right = modulated("helix", IRRATIONAL)
    left = ld.Ordering(right.crystal, right.components[0], (0, 0, -IRRATIONAL))
    mirror = dataclasses.replace(right, components=right.components.conj(), k=-right.k)
    assert ld.dipolar_energy(mirror).per_cell_eV == pytest.approx(ld.dipolar_energy(right).per_cell_eV, rel=1e-12)
    one, two, three = (field_ellipse(x, [[0.4, 0.1, 0.7]]) for x in (right, mirror, left))
    assert two.maximum_T == pytest.approx(one.maximum_T)
    # The same components turned the other way are another structure.
    assert abs(three.maximum_T[0] - one.maximum_T[0]) > 1e-3
