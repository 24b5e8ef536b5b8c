"""Linewidths of a probe that moves: pair tensors averaged over a Gaussian cloud before they are squared."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import constants
from scipy.special import erf

import latticedip as ld
from latticedip.errors import AccuracyError, InputError
from latticedip.particles import particle_named
from tests.reference.cells import random_cell, random_rotation

#: (µ0/4π) µ_N/Å³ in T, times the moment of 19F in µ_N: a field per unit of 2 I_z.
FLUORINE_T_A3 = (
    constants.mu_0 / (4 * np.pi) * constants.value("nuclear magneton") * 1e30
    * particle_named("19F").moment_nuclear_magnetons
)  # fmt: skip
TENSOR = np.array([[0.020, 0.006, -0.004], [0.006, 0.012, 0.003], [-0.004, 0.003, 0.035]])
DIRECTIONS = np.array([[0, 0, 1], [1, 0, 0], [1, 1, 0], [-1, 2, 3]]) / np.sqrt([[1], [1], [2], [14]])


def pair(vectors):
    """Shape (..., 3, 3). (3nn − 1)/r³ in 1/Å³."""
    r = np.linalg.norm(vectors, axis=-1)[..., None, None]
    return 3 * vectors[..., :, None] * vectors[..., None, :] / r**5 - np.eye(3) / r**3


def by_quadrature(vectors, covariance, points):
    """Mean of pair tensors (n, 3, 3) over a Gaussian cloud by the rule of Gauss and Hermite along its axes."""
    at, share = np.polynomial.hermite_e.hermegauss(points)
    share = share / share.sum()
    values, axes = np.linalg.eigh(covariance)
    grid = np.stack(np.meshgrid(at, at, at, indexing="ij"), axis=-1).reshape(-1, 3) * np.sqrt(values) @ axes.T
    weight = np.einsum("i,j,k->ijk", share, share, share).ravel()
    return np.array([np.einsum("g,gab->ab", weight, pair(vector + grid)) for vector in vectors])


def assert_sums(found, tensors, rel):
    """Second moments along directions, in a powder, and in zero field, from the averaged tensors of fluorines."""
    for h in DIRECTIONS:
        expected = FLUORINE_T_A3**2 * np.sum(np.einsum("a,nab,b->n", h, tensors, h) ** 2)
        assert found.second_moment_along(h) == pytest.approx(expected, rel=rel)
    powder = 2 / 15 * FLUORINE_T_A3**2 * np.sum(tensors**2)
    assert found.second_moment_T2 == pytest.approx(powder, rel=rel)
    zero = FLUORINE_T_A3**2 * np.einsum("nab,nbc->ac", tensors, tensors)
    assert found.zero_tensor_T2 == pytest.approx(zero, rel=rel, abs=rel * np.trace(zero))
    delta = 2 * np.pi * found.MHz_per_T * np.sqrt(np.trace(zero) / 3)
    assert found.zero_field_width_per_us == pytest.approx(delta, rel=rel)


@pytest.mark.parametrize("spread", [0.12, TENSOR])
def test_a_cluster_against_a_quadrature_of_pair_tensors(spread):
    """Three fluorines around a muon, none within reach of its cloud, to 1e-8."""
    cell = np.array([[6.0, 0, 0], [0.4, 7.0, 0], [0.2, 0.3, 8.0]])
    crystal = ld.Crystal(cell, [[0.1, 0.2, 0.3], [0.6, 0.5, 0.2], [0.3, 0.8, 0.7]], ["F"] * 3, pbc=[False] * 3)
    position = np.array([0.4, 0.55, 0.45])
    found = ld.linewidth(crystal, position, particle="muon", spread=spread)
    covariance = spread**2 * np.eye(3) if isinstance(spread, float) else spread
    tensors = by_quadrature((position - crystal.positions) @ cell, covariance, 40)
    assert_sums(found, tensors, 1e-8)
    sharp = ld.linewidth(crystal, position, particle="muon")
    if isinstance(spread, float):
        assert found.second_moment_T2 == pytest.approx(sharp.second_moment_T2, rel=1e-10)
    else:
        assert abs(found.second_moment_T2 / sharp.second_moment_T2 - 1) > 1e-3


def test_a_lattice_against_a_quadrature_of_pair_tensors():
    """All fluorines within 62 Å, the near ones with more points; what lies beyond changes the 8th digit."""
    cell = np.array([[4.6, 0, 0], [0.5, 4.2, 0], [-0.3, 0.4, 4.9]])
    crystal = ld.Crystal(cell, [[0.1, 0.2, 0.3]], ["F"])
    position = np.array([0.55, 0.6, 0.7])
    found = ld.linewidth(crystal, position, particle="muon", spread=TENSOR)
    sharp = ld.linewidth(crystal, position, particle="muon")
    grid = np.stack(np.meshgrid(*[np.arange(-17, 18)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    vectors = (position - crystal.positions[0] - grid) @ cell
    length = np.linalg.norm(vectors, axis=1)
    near, far = vectors[length < 9], vectors[(length >= 9) & (length < 62)]
    vectors = np.concatenate([near, far])
    tensors = np.concatenate([by_quadrature(near, TENSOR, 20), by_quadrature(far, TENSOR, 5)])
    size = sharp.second_moment_T2
    for h in DIRECTIONS:
        change = [np.sum(np.einsum("a,nab,b->n", h, t, h) ** 2) for t in (tensors, pair(vectors))]
        expected = sharp.second_moment_along(h) + FLUORINE_T_A3**2 * (change[0] - change[1])
        assert found.second_moment_along(h) == pytest.approx(expected, abs=2e-8 * size)
    zero = [np.einsum("nab,nbc->ac", t, t) for t in (tensors, pair(vectors))]
    expected = sharp.zero_tensor_T2 + FLUORINE_T_A3**2 * (zero[0] - zero[1])
    assert found.zero_tensor_T2 == pytest.approx(expected, abs=2e-8 * np.trace(expected))
    assert abs(found.second_moment_T2 / size - 1) > 5e-4


@pytest.mark.parametrize("rms", [0.3, 0.9, 2.0])
@pytest.mark.parametrize("pbc", [False, True])
def test_an_isotropic_cloud_that_reaches_its_neighbour(pbc, rms):
    """The mean tensor is T times erf(x) − (2/√π)(x + 2x³/3) exp(−x²), x = r/(√2 σ), from derivatives of erf(x)/r."""
    r, edge = 1.9, 4000.0
    crystal = ld.Crystal(edge * np.eye(3), [[0, 0, 0], [0, 0, r / edge]], ["Au", "F"], pbc=(pbc,) * 3)
    found = ld.linewidth(crystal, (0, 0, 0), particle="muon", nuclei="F", spread=rms)
    x = r / (np.sqrt(2) * rms)
    factor = erf(x) - 2 / np.sqrt(np.pi) * (x + 2 * x**3 / 3) * np.exp(-(x**2))
    assert_sums(found, factor * pair(np.array([[0, 0, r]])), 1e-9)
    words = "the spread of the probe reaches atom F: the traceless (principal-value) part is given; the rest is contact"
    assert (words in found.notes) == (rms > 0.5)


def test_no_spread_is_a_sharp_place():
    crystal = ld.Crystal(4 * np.eye(3), [[0, 0, 0]], ["F"])
    sharp = ld.linewidth(crystal, (0.5, 0.4, 0.3), particle="muon")
    for spread in (0, 0.0, np.zeros((3, 3))):
        found = ld.linewidth(crystal, (0.5, 0.4, 0.3), particle="muon", spread=spread)
        assert np.array_equal(found.strong_tensor_T2, sharp.strong_tensor_T2)
        assert found.notes == sharp.notes
    tiny = ld.linewidth(crystal, (0.5, 0.4, 0.3), particle="muon", spread=1e-6 * TENSOR)
    assert tiny.second_moment_T2 == pytest.approx(sharp.second_moment_T2, rel=1e-5)
    assert tiny.second_moment_T2 != sharp.second_moment_T2
    # A cubic site sees nothing of an isotropic cloud that reaches no nucleus, in any direction.
    centre, spread_out = (
        ld.linewidth(crystal, (0.5, 0.5, 0.5), particle="muon", spread=spread) for spread in (None, 0.25)
    )
    assert spread_out.strong_tensor_T2 == pytest.approx(centre.strong_tensor_T2, rel=1e-9, abs=1e-18)


@pytest.mark.parametrize("seed", range(3))
def test_the_cell_and_the_frame_do_not_matter(seed):
    """Three cells in one have other sublattices and radii; ten digits of each are the same."""
    rng = np.random.default_rng(seed)
    cell = np.array([[3.7, 0, 0], [0.9, 4.4, 0], [-0.6, 1.1, 5.2]]) if seed else random_cell(rng) * 4
    position = np.array([0.47, 0.55, 0.52])
    one = ld.linewidth(ld.Crystal(cell, [[0, 0, 0]], ["F"]), position, particle="muon", spread=TENSOR)
    turn = random_rotation(rng)
    wide = cell * [[3], [1], [1]] @ turn.T
    sites = [[i / 3, 0, 0] for i in range(3)]
    crystal = ld.Crystal(wide, sites, ["F"] * 3)
    three = ld.linewidth(crystal, position / [3, 1, 1], particle="muon", spread=turn @ TENSOR @ turn.T)
    for h in DIRECTIONS:
        expected = one.second_moment_along(h)
        assert three.second_moment_along(turn @ h) == pytest.approx(expected, abs=1e-10 * one.second_moment_T2)
    assert one.strong_tensor_T2 == pytest.approx(one.strong_tensor_T2.transpose(3, 1, 0, 2), rel=1e-12, abs=1e-22)


def test_displaced_neighbours_of_a_probe_that_moves():
    crystal = ld.Crystal(4.4 * np.eye(3), [[0, 0, 0]], ["F"])
    position = np.array([0.5, 0.45, 0.4])
    atom = ld.Displaced(atom=(0, (0, 0, 0)), vector_A=[-0.3, 0.1, 0.2])
    before, after = (
        ld.linewidth(crystal, position, particle="muon", spread=TENSOR, displaced=terms) for terms in ((), atom)
    )
    vector = 4.4 * position
    old, new = by_quadrature(np.array([vector, vector - [-0.3, 0.1, 0.2]]), TENSOR, 40)
    for h in DIRECTIONS:
        change = FLUORINE_T_A3**2 * ((h @ new @ h) ** 2 - (h @ old @ h) ** 2)
        assert after.second_moment_along(h) - before.second_moment_along(h) == pytest.approx(change, rel=1e-7)


def test_the_atom_that_the_probe_is_on_does_not_count():
    """Motion of a nucleus itself: its own moment adds nothing, and like spins keep their factor."""
    crystal = ld.Crystal(4.4 * np.eye(3), [[0, 0, 0], [0.5, 0.5, 0.5]], ["F", "Au"])
    nucleus = ld.linewidth(crystal, (0, 0, 0), particle="19F", nuclei="F", spread=TENSOR)
    muon = ld.linewidth(crystal, (0, 0, 0), particle="muon", nuclei="F", spread=TENSOR)
    assert nucleus.second_moment_T2 == pytest.approx(9 / 4 * muon.second_moment_T2, rel=1e-12)
    sharp = ld.linewidth(crystal, (0, 0, 0), particle="muon", nuclei="F")
    assert abs(muon.second_moment_T2 / sharp.second_moment_T2 - 1) < 0.1


def test_the_notes_say_what_is_assumed():
    crystal = ld.Crystal(4.4 * np.eye(3), [[0, 0, 0]], ["F"])
    found = ld.linewidth(crystal, (0.5, 0.5, 0.5), particle="muon", spread=0.1)
    assert found.notes == (
        "pair fields averaged over a Gaussian spread of 0.1 Å rms along each axis: motion that is fast against the "
        "linewidth; a slow one gives a distribution of widths instead",
    )


def flat_message(name):
    return (
        f"the probe: its spread is flat (less than 0.001 Å along one direction) and reaches atom {name}, where the "
        "average of a dipole field over a plane or a line has no finite value. Give the spread an extent along every "
        "direction."
    )


@pytest.mark.parametrize(
    ("position", "spread", "message"),
    [
        ((0.5, 0, 0), np.diag([0.09, 0.09, 0.0]), flat_message("F")),
        ((0.5, 0.5, 0.5), -0.1,
         "spread (rms displacement along each axis in Å) must lie between 0.0 and 5.0, got -0.1."),
        ((0.5, 0.5, 0.5), [[1, 2], [3, 4]], "spread must have shape (3, 3), got (2, 2)."),
    ],
)  # fmt: skip
def test_spreads_that_do_not_fit(position, spread, message):
    crystal = ld.Crystal(4.4 * np.eye(3), [[0, 0, 0]], ["F"])
    with pytest.raises(InputError) as caught:
        ld.linewidth(crystal, position, particle="muon", spread=spread)
    assert str(caught.value) == message


def test_a_flat_cloud_between_the_nuclei_is_taken():
    crystal = ld.Crystal(4.4 * np.eye(3), [[0, 0, 0]], ["F"])
    flat, thick = (
        ld.linewidth(crystal, (0.5, 0.5, 0.5), particle="muon", spread=np.diag([0.04, 0.04, x])) for x in (0.0, 1e-5)
    )
    assert flat.second_moment_T2 == pytest.approx(thick.second_moment_T2, rel=1e-4)


def test_a_flat_cloud_that_reaches_a_displaced_atom_is_refused():
    crystal = ld.Crystal(4.4 * np.eye(3), [[0, 0, 0]], ["F"])
    atom = ld.Displaced(atom=(0, (0, 0, 0)), vector_A=[1.8, 2.2, 2.2])
    with pytest.raises(InputError) as caught:
        ld.linewidth(crystal, (0.5, 0.5, 0.5), particle="muon", spread=np.diag([0.04, 0.04, 0]), displaced=atom)
    assert str(caught.value) == flat_message("F")


def test_too_many_pairs_are_refused(monkeypatch):
    monkeypatch.setattr("latticedip.observables.averaged_pairs.MOST_PAIRS", 1000)
    crystal = ld.Crystal(4.4 * np.eye(3), [[0, 0, 0]], ["F"])
    with pytest.raises(AccuracyError) as caught:
        ld.linewidth(crystal, (0.5, 0.5, 0.5), particle="muon", spread=TENSOR)
    assert str(caught.value) == (
        "the average over this spread needs 2e+03 pairs of probe and nucleus for ten digits of the linewidth, more "
        "than 1e+03. Take a smaller or an isotropic spread."
    )
