"""Standard uncertainties of Fourier amplitudes: read, carried by symmetry, stated in a study, propagated, written."""

from __future__ import annotations

import dataclasses
import itertools

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import FileError, InputError, StudyError
from latticedip.ordering.model import SizeUncertainty
from latticedip.ordering.uncertain import AmplitudeUncertainty, independent_amplitudes
from latticedip.report.field import field_text
from latticedip.report.show import show_text
from latticedip.report.su import format_su
from latticedip.study.fields import field_document
from latticedip.study.frames import place_in_frame
from latticedip.study.tasks import field, shift, show
from tests.reference.superspace import (
    CELLS,
    ONE,
    STRUCTURES,
    A,
    Operation,
    Structure,
    fourier_rows,
    loops,
    read_text,
    replaced,
    swap_series,
)
from tests.refusals import refusal
from tests.test_study import study_of

POINT = np.array([0.37, 0.71, 0.12])
TRICLINIC = STRUCTURES["triclinic, two atoms, three harmonics, average"]
#: General positions only: every number of the file is a parameter of its own.
GENERAL = {name: one for name, one in STRUCTURES.items() if "special" not in name}
HEAD = "loop_\n" + "".join(
    f"_atom_site_moment_Fourier.{x}\n" for x in ("id", "atom_site_label", "wave_vector_seq_id", "axis")
)
PARAM = "_atom_site_moment_Fourier_param"


def series_text(text, numbers, su, names=("cos", "sin")):
    """The text with these numbers (n_rows, 2) and uncertainties in its Fourier loop, NaN written as a dot."""
    columns = [*names, *(f"{name}_su" for name in names)]
    lines = [
        " ".join([*row[:4], *("." if np.isnan(x) else f"{x:.17g}" for x in (*values, *errors))])
        for row, values, errors in zip(fourier_rows(text), numbers, su, strict=True)
    ]
    return swap_series(text, HEAD + "".join(f"{PARAM}.{x}\n" for x in columns) + "\n".join(lines) + "\n")


def average_text(text, averages):
    """The text with standard uncertainties in its loop of average moments."""
    rows = "".join(f"{label} " + " ".join(map(str, (*m, *su))) + "\n" for label, (m, su) in averages.items())
    tags = ["crystalaxis_x", "crystalaxis_y", "crystalaxis_z"]
    new = "loop_\n_atom_site_moment.label\n" + "".join(
        f"_atom_site_moment.{x}\n" for x in (*tags, *(f"{y}_su" for y in tags))
    )
    return "".join(new + rows if "_atom_site_moment.label" in part else part for part in loops(text))


def numbers_of(text):
    return np.array([[float(x) for x in row[4:6]] for row in fourier_rows(text)])


def fields(ordering):
    return ld.local_field(ordering, POINT[None]).total[0]


@pytest.mark.parametrize("name", GENERAL)
def test_the_reader_against_finite_differences(name, tmp_path):
    """Each number of the file moved by its uncertainty and read again; squares of the changes added."""
    text = GENERAL[name].text
    numbers = numbers_of(text)
    rng = np.random.default_rng(5)
    su = rng.uniform(0.01, 0.1, numbers.shape)
    su[rng.uniform(size=su.shape) < 0.3] = np.nan
    base = read_text(series_text(text, numbers, su), tmp_path)
    assert np.isnan(base.moment_su).all() or GENERAL[name].averages
    assert len(base.amplitude_su) == np.sum(np.isfinite(su))
    field = fields(base)
    covariance = np.zeros((3, 3))
    for place in np.argwhere(np.isfinite(su)):
        moved = numbers.copy()
        moved[tuple(place)] += su[tuple(place)]
        change = fields(read_text(series_text(text, moved, su * np.nan), tmp_path)) - field
        covariance += np.outer(change, change)
    found = ld.local_field(base, POINT[None])
    np.testing.assert_allclose(found.uncertainty.covariance_T2[0], covariance, rtol=1e-7, atol=1e-14)
    assert found.uncertainty.notes == () and found.size_su_T[0] > 0


def test_averages_of_modulated_sites_are_parameters_too(tmp_path):
    averages = {"Mn1": ((0.5, -1, 2), (0.02, 0.05, 0.01)), "Fe1": ((1, 0, 0), (0.03, 0.04, 0))}
    text = TRICLINIC.text
    base = read_text(average_text(text, averages), tmp_path)
    assert np.isnan(base.moment_su).all() and len(base.amplitude_su) == 5
    covariance = np.zeros((3, 3))
    for label, axis in itertools.product(averages, range(3)):
        moved = {other: [np.array(m, dtype=float), np.zeros(3)] for other, (m, _) in averages.items()}
        moved[label][0][axis] += averages[label][1][axis]
        change = fields(read_text(average_text(text, moved), tmp_path)) - fields(base)
        covariance += np.outer(change, change)
    np.testing.assert_allclose(
        ld.local_field(base, POINT[None]).uncertainty.covariance_T2[0], covariance, rtol=1e-7, atol=1e-14
    )


def test_a_fourier_row_at_the_zero_vector_is_an_average(tmp_path):
    """Beside a listed average it is a parameter of its own; a phase has no meaning for it."""
    text = replaced(TRICLINIC.text, ("_Fourier_wave_vector.q1_coeff\n", "_Fourier_wave_vector.q1_coeff\n0 0 0 0 0\n"))
    text = average_text(text, {"Mn1": ((0.5, -1, 2), (0.02, 0, 0)), "Fe1": ((1, 0, 0), (0, 0, 0))})
    rows = "".join(" ".join(row) + " .\n" for row in fourier_rows(text))
    for names, zero in ((("cos", "sin"), 0), (("modulus", "phase"), 0.5)):
        if names[0] == "modulus":
            rows = ""
        tags = "".join(f"{PARAM}.{x}\n" for x in (*names, f"{names[0]}_su"))
        ordering = read_text(swap_series(text, f"{HEAD}{tags}{rows}90 Mn1 0 x 0.3 {zero} 0.05\n"), tmp_path)
        sizes = sorted(np.abs(one.steps).max() for one in ordering.amplitude_su)
        assert sizes == pytest.approx([0.02, 0.05])
        for one in ordering.amplitude_su:
            assert one.sites == (0,) and not np.any(one.steps[1:]) and not np.any(one.steps.imag)


def test_a_zone_boundary_wave_and_an_initial_phase(tmp_path):
    """Of cosine and sine only what is real in the cell counts; the reader moved number by number."""
    for q in ((0, 0, 0.5), (0.25, 0, 0.5)):
        structure = dataclasses.replace(
            TRICLINIC, q=q, series={"Mn1": {1: A, 2: ([0.3, 0, 0.2], [0, 0, 0])}}, averages={}
        )
        structure.extra = "_atom_sites_modulation.global_phase_t_1 0.13\n"
        numbers = numbers_of(structure.text)
        su = np.random.default_rng(9).uniform(0.01, 0.1, numbers.shape)
        base = read_text(series_text(structure.text, numbers, su), tmp_path)
        covariance = np.zeros((3, 3))
        for place in np.ndindex(numbers.shape):
            moved = numbers.copy()
            moved[place] += su[place]
            change = fields(read_text(series_text(structure.text, moved, su * np.nan), tmp_path)) - fields(base)
            covariance += np.outer(change, change)
        found = ld.local_field(base, POINT[None]).uncertainty.covariance_T2[0]
        np.testing.assert_allclose(found, covariance, rtol=1e-7, atol=1e-14)


def test_modulus_and_phase(tmp_path):
    """Both are parameters; the field is not linear in the phase, so that small steps are taken to both sides."""
    text = TRICLINIC.text
    plain = numbers_of(text)
    numbers = np.stack([np.hypot(*plain.T), np.arctan2(-plain[:, 1], plain[:, 0]) / (2 * np.pi)], axis=1)
    su = np.random.default_rng(6).uniform(0.001, 0.02, numbers.shape)
    su[2, 0] = su[4, 1] = np.nan
    names = ("modulus", "phase")
    found = ld.local_field(read_text(series_text(text, numbers, su, names), tmp_path), POINT[None])
    covariance = np.zeros((3, 3))
    for place in np.argwhere(np.isfinite(su)):
        ends = []
        for sign in (1e-3, -1e-3):
            moved = numbers.copy()
            moved[tuple(place)] += sign * su[tuple(place)]
            ends.append(fields(read_text(series_text(text, moved, su * np.nan, names), tmp_path)))
        change = (ends[0] - ends[1]) / 2e-3
        covariance += np.outer(change, change)
    np.testing.assert_allclose(found.uncertainty.covariance_T2[0], covariance, rtol=1e-6, atol=1e-13)


def test_random_draws():
    """B of 40,000 draws of file parameters, made by hand from S = (c + i s) exp(−2πi n q·τ) and dipole tensors."""
    rng = np.random.default_rng(7)
    cell = np.array([[4.1, 0, 0], [0.7, 5.2, 0], [-0.4, 0.9, 6.3]])
    places = np.array([[0.1, 0.2, 0.3], [0.6, 0.7, 0.15]])
    crystal = ld.Crystal(cell, places, ["Mn", "Fe"], occupancies=[1, 0.5])
    axes = cell / np.linalg.norm(cell, axis=1)[:, None]
    q = np.array([0.21, -0.13, 0.34])
    k = np.array([0 * q, q, 2 * q])
    cosine, sine = rng.normal(size=(2, 3, 2, 3))
    cosine_su, sine_su = rng.uniform(0.02, 0.1, (2, 3, 2, 3))
    sine[0] = sine_su[0] = 0
    phases = np.exp(-2j * np.pi * (k @ places.T))[:, :, None]
    tensors = np.array([ld.dipole_tensor(cell, (POINT - places) @ cell, wave) for wave in k])
    # Without a shape of the sample the lattice sum is the field (N = 0); occupancy scales the source.
    draws = (cosine + cosine_su * rng.normal(size=(40_000, 3, 2, 3))) + 1j * (
        sine + sine_su * rng.normal(size=(40_000, 3, 2, 3))
    )
    values = np.einsum("kjab,nkjb,j->na", tensors, (draws * phases) @ axes, [1, 0.5]).real
    parameters = [
        AmplitudeUncertainty(one.sites, one.steps * phases[:, list(one.sites)])
        for one in independent_amplitudes(crystal, cosine_su + 1j * sine_su)
    ]
    ordering = ld.Ordering(crystal, ((cosine + 1j * sine) * phases) @ axes, k, amplitude_su=tuple(parameters))
    found = ld.local_field(ordering, POINT[None])
    np.testing.assert_allclose(values.mean(axis=0), found.total[0], atol=4 * values.std(axis=0).max() / 200)
    covariance = found.uncertainty.covariance_T2[0]
    np.testing.assert_allclose(np.cov(values.T), covariance, atol=0.03 * np.abs(covariance).max())
    np.testing.assert_allclose(np.linalg.norm(values, axis=1).std(), found.size_su_T[0], rtol=0.05)


def test_a_pair_that_inversion_relates_moves_together(tmp_path):
    """x4 → −x4 leaves the cosine of the moment and reverses the sine: M'(x4) = M(−x4), by hand."""
    q, place = np.array([0.31, 0.12, 0.2]), np.array([0.13, 0.22, 0.31])
    pair = Structure((4, 5, 6, 80, 95, 102), tuple(q), [Operation(ONE), Operation(-ONE, epsilon=-1)],
        {"Mn1": tuple(place)}, {"Mn1": {1: A}})  # fmt: skip
    su = np.array([[0.05, 0.02], [0.03, 0.04], [np.nan, 0.06]])
    ordering = read_text(series_text(pair.text, numbers_of(pair.text), su), tmp_path)
    cell = ordering.crystal.cell
    first, second = (ld.dipole_tensor(cell, [(POINT - x) @ cell], q)[0] for x in (place, -place))
    turn = np.exp(-2j * np.pi * (q @ place))
    covariance = np.zeros((3, 3))
    for axis in range(3):
        unit = ordering.crystal.axes_unit[axis]
        by_cosine = ((first * turn + second * turn.conj()) @ unit).real
        by_sine = (1j * (first * turn - second * turn.conj()) @ unit).real
        covariance += np.outer(by_cosine, by_cosine) * np.nan_to_num(su[axis, 0]) ** 2
        covariance += np.outer(by_sine, by_sine) * su[axis, 1] ** 2
    found = ld.local_field(ordering, POINT[None])
    assert [one.sites for one in ordering.amplitude_su] == [(0, 1)] * 5
    np.testing.assert_allclose(found.uncertainty.covariance_T2[0], covariance, rtol=1e-8, atol=1e-14)
    # A wave listed at −q is the one at q with its sine reversed.
    opposite = replaced(series_text(pair.text, numbers_of(pair.text) * [1, -1], su), *[
        ("\n1 " + " ".join(f"{x:.17g}" for x in q) + " 1\n", "\n1 " + " ".join(f"{-x:.17g}" for x in q) + " -1\n")
    ])  # fmt: skip
    other = ld.local_field(read_text(opposite, tmp_path), POINT[None])
    np.testing.assert_allclose(other.uncertainty.covariance_T2, found.uncertainty.covariance_T2, rtol=1e-9)


@pytest.mark.parametrize("stated", [(True, True), (True, False)], ids=["both", "cosine alone"])
def test_numbers_that_a_special_position_ties_are_one_parameter(stated, tmp_path):
    """The site allows a · cos 2π(x4 − 0.15) alone: cosine and sine along an axis are one number a."""
    structure = STRUCTURES["special position at an inversion centre"]
    turn = np.exp(2j * np.pi * 0.15)
    su_of_a = np.array([0.05, 0.02, 0.08])
    su = np.where(stated, np.stack([turn.real * su_of_a, turn.imag * su_of_a], axis=1), np.nan)
    text = structure.text
    ordering = read_text(series_text(text, numbers_of(text), su), tmp_path)
    assert len(ordering.amplitude_su) == 3
    covariance = np.zeros((3, 3))
    for axis in range(3):
        moved = numbers_of(text)
        moved[axis] += [turn.real * su_of_a[axis], turn.imag * su_of_a[axis]]
        change = fields(read_text(series_text(text, moved, su * np.nan), tmp_path)) - fields(ordering)
        covariance += np.outer(change, change)
    np.testing.assert_allclose(
        ld.local_field(ordering, POINT[None]).uncertainty.covariance_T2[0], covariance, rtol=1e-6, atol=1e-13
    )


def test_a_site_on_an_axis_keeps_what_the_axis_allows(tmp_path):
    structure = STRUCTURES["special position on an axis along the wave"]
    numbers = numbers_of(structure.text)
    ordering = read_text(series_text(structure.text, numbers, np.where(numbers != 0, 0.03, np.nan)), tmp_path)
    # (x, y) at q and z at 2q, each with cosine and sine.
    assert len(ordering.amplitude_su) == 6
    for one in ordering.amplitude_su:
        assert np.abs(one.steps).max() == pytest.approx(0.03)
    # The average along the axis is one more; nothing is left of what the file states across it beside that.
    ordering = read_text(average_text(structure.text, {"Mn1": ((0, 0, 1.5), (0, 0, 0.2))}), tmp_path)
    (one,) = ordering.amplitude_su
    assert one.steps[0].real == pytest.approx(np.array([[0, 0, 0.2]] * len(one.sites)))


def test_contact_terms_follow_the_amplitudes(tmp_path):
    """A coupling to shells that is all: the field, Lorentz part apart, changes with it as the moments do."""
    text = TRICLINIC.text
    numbers = numbers_of(text)
    su = np.full(numbers.shape, np.nan)
    su[0, 1] = 0.1
    moved = numbers.copy()
    moved[0, 1] += 0.1
    probe = ld.Probe(POINT, contact=ld.Contact([[0.1, 0.02, 0], [0, 0.2, -0.03], [0.05, 0, 0.15]], within=5.0))
    found = ld.local_field(read_text(series_text(text, numbers, su), tmp_path), probe)
    there = ld.local_field(read_text(series_text(text, moved, su * np.nan), tmp_path), probe)
    change = (there.total - found.total)[0]
    assert np.abs(there.contact - found.contact).max() > 1e-3
    np.testing.assert_allclose(found.uncertainty.covariance_T2[0], np.outer(change, change), rtol=1e-7, atol=1e-14)


def test_all_spellings_state_the_same(tmp_path):
    """In brackets, in columns of their own, along Cartesian axes, and beside modulus and phase."""
    box = Structure((4, 5, 6, 90, 90, 90), (0, 0, 0.2137), [Operation(ONE)], {"Mn1": (0.1, 0.2, 0.3)},
        {"Mn1": {1: ([3, 0, 0], [0, 3, 0])}})  # fmt: skip
    brackets = replaced(box.text, ("x 3 0\n", "x 3.00(10) 0\n"), ("y 0 3\n", "y 0 3.0(2)\n"))
    su = np.array([[0.1, np.nan], [np.nan, 0.2], [np.nan, np.nan]])
    columns = series_text(box.text, numbers_of(box.text), su)
    cartesian = replaced(brackets, ("Mn1 1 x", "Mn1 1 Cx"), ("Mn1 1 y", "Mn1 1 Cy"), ("Mn1 1 z", "Mn1 1 Cz"))
    both = swap_series(
        box.text,
        HEAD + "".join(f"{PARAM}.{x}\n" for x in ("cos", "sin", "modulus", "phase"))
        + "1 Mn1 1 x 3 0 3.00(10) 0\n2 Mn1 1 y 0 3 3.0(2) 0.75\n3 Mn1 1 z 0 0 0 0\n",
    )  # fmt: skip
    expected = np.array([[0.1, 0, 0], [0, 0.2j, 0]]) * np.exp(-2j * np.pi * 0.2137 * 0.3)
    for text in (brackets, columns, cartesian, both):
        ordering = read_text(text, tmp_path)
        steps = np.array([one.steps[0, 0] for one in ordering.amplitude_su])
        order = np.argsort(-np.abs(steps[:, 0]))
        # The sign of a step has no meaning.
        signs = np.sign((steps[order] * expected.conj()).sum(axis=1).real)
        assert signs[:, None] * steps[order] == pytest.approx(expected, abs=1e-12)


def test_what_cannot_be_kept_is_named(tmp_path):
    text = TRICLINIC.text
    numbers = numbers_of(text)
    numbers[3:6] = 0
    su = np.full(numbers.shape, np.nan)
    su[3, 0] = 0.1
    numbers[9:] = 0
    ordering = read_text(series_text(text, numbers, su), tmp_path)
    assert ordering.amplitude_su == ()
    assert ordering.notes == ("standard uncertainties of amplitudes at 2 q are not kept, since these are all zero",)
    averages = {label: (np.zeros(3), (0.1, 0, 0)) for label in ("Mn1", "Fe1")}
    ordering = read_text(average_text(TRICLINIC.text, averages), tmp_path)
    assert ordering.notes == (
        "standard uncertainties of average moments of modulated sites are not kept, since these are all zero",
    )


def test_uncertainties_that_are_none_are_refused(tmp_path):
    text = TRICLINIC.text
    su = np.full((len(fourier_rows(text)), 2), np.nan)
    su[1, 1] = -0.1
    with pytest.raises(FileError) as caught:
        read_text(series_text(text, numbers_of(text), su), tmp_path)
    assert str(caught.value) == (
        f"{tmp_path / 'a.mcif'}: {PARAM}.sin_su of Mn1 is -0.1; a standard uncertainty is at least 0 and at most 1e+06."
    )


# --- orderings ------------------------------------------------------------------------------------------


def small() -> ld.Crystal:
    return ld.Crystal(np.diag([4.0, 5, 6]), [[0.1, 0.2, 0.3], [0.6, 0.7, 0.1]], ["Mn", "Fe"])


def test_steps_follow_k_that_are_one():
    """S at −k is the conjugate at k, and so is its step."""
    one = AmplitudeUncertainty((0,), np.array([[[0.1, 0, 0]], [[0, 0.2j, 0]], [[0, 0, 0.3]]]))
    components = np.ones((3, 2, 3))
    k = [(0.2, 0, 0), (0.8, 0, 0), (0, 0, 0)]
    ordering = ld.Ordering(small(), components, k, amplitude_su=(one,))
    (found,) = ordering.amplitude_su
    assert found.steps.tolist() == [[[0.1, -0.2j, 0]], [[0, 0, 0.3]]]
    again = dataclasses.replace(ordering, name="again")
    assert again.amplitude_su[0].steps.tolist() == found.steps.tolist()


def test_moments_in_every_cell_have_their_uncertainty():
    su = np.zeros((1, 2, 3), dtype=complex)
    su[0, 0] = [0.1, 0.05j, 0.2 + 0.3j]
    ordering = ld.Ordering(small(), np.ones((2, 3)), (0.21, 0, 0), amplitude_su=independent_amplitudes(small(), su))
    covariance = ordering.moments_covariance(CELLS)
    turns = 2 * np.pi * 0.21 * CELLS[:, 0]
    expected = np.stack([0.1**2 * np.cos(turns) ** 2, 0.05**2 * np.sin(turns) ** 2,
        0.2**2 * np.cos(turns) ** 2 + 0.3**2 * np.sin(turns) ** 2], axis=1)  # fmt: skip
    np.testing.assert_allclose(np.einsum("caa->ca", covariance[:, 0]), expected, atol=1e-15)
    assert np.isnan(covariance[:, 1]).all()


def test_turned_orderings_keep_their_uncertainty(tmp_path):
    """Crystal and moments turned together: |B| and its uncertainty are the same."""
    text = TRICLINIC.text
    ordering = read_text(series_text(text, numbers_of(text), np.abs(numbers_of(text)) * 0.05), tmp_path)
    turn = np.array([[0, -1.0, 0], [0.6, 0, -0.8], [0.8, 0, 0.6]])
    turned = dataclasses.replace(
        ordering.rotated(turn), crystal=dataclasses.replace(ordering.crystal, cell=ordering.crystal.cell @ turn.T)
    )
    first, second = (ld.local_field(one, POINT[None]) for one in (ordering, turned))
    np.testing.assert_allclose(second.size_su_T, first.size_su_T, rtol=1e-8)
    np.testing.assert_allclose(
        second.uncertainty.covariance_T2[0], turn @ first.uncertainty.covariance_T2[0] @ turn.T, rtol=1e-7, atol=1e-14
    )


def test_atoms_with_and_without_stated_amplitudes():
    """Of two atoms of one label that symmetry carries, one keeps its own parameters and the other its moment_su."""
    crystal = ld.Crystal(np.diag([4.0, 4, 6]), [[0, 0, 0], [0.5, 0.5, 0.5]], ["Mn", "Mn"], ["Mn1", "Mn1"])
    su = np.zeros((1, 2, 3))
    su[0, 0, 2] = 0.1
    moment_su = np.array([[np.nan] * 3, [np.nan, np.nan, 0.2]])
    own = independent_amplitudes(crystal, su)
    ordering = ld.Ordering(crystal, [[0, 0, 2.0], [0, 0, -2.0]], moment_su=moment_su, amplitude_su=own)
    first, second = ld.dipole_tensor(crystal.cell, (POINT - crystal.positions) @ crystal.cell)[:, :, 2]
    np.testing.assert_allclose(
        ld.local_field(ordering, POINT[None]).uncertainty.covariance_T2[0],
        0.01 * np.outer(first, first) + 0.04 * np.outer(second, second),
        rtol=1e-8,
        atol=1e-14,
    )
    # The moment of an atom at several k, without knowledge of the component, leaves all open.
    mixed = ld.Ordering(crystal, np.ones((2, 2, 3)), [(0, 0, 0), (0.2, 0, 0)], moment_su=moment_su,
        amplitude_su=(AmplitudeUncertainty((0,), np.full((2, 1, 3), 0.1)),))  # fmt: skip
    found = ld.local_field(mixed, POINT[None])
    assert np.isnan(found.size_su_T[0]) and len(found.uncertainty.notes) == 1


ONE_STEP = AmplitudeUncertainty((0,), [[[0.1, 0, 0]]])
BAD = {
    "sites": (
        lambda: AmplitudeUncertainty((0, 0), np.zeros((1, 2, 3))),
        "sites of an AmplitudeUncertainty must be distinct indices of atoms, got (0, 0).",
    ),
    "negative site": (
        lambda: AmplitudeUncertainty((-1,), np.zeros((1, 1, 3))),
        "sites of an AmplitudeUncertainty must be distinct indices of atoms, got (-1,).",
    ),
    "steps": (lambda: AmplitudeUncertainty((0,), [[0.1, 0, 0]]), "steps must have shape (n, 1, 3), got (1, 3)."),
    "kind": (
        lambda: ld.Ordering(small(), np.ones((2, 3)), amplitude_su=(0.1,)),
        "amplitude_su must hold AmplitudeUncertainty objects, got float at index 0.",
    ),
    "number of k": (
        lambda: ld.Ordering(small(), np.ones((2, 2, 3)), [(0, 0, 0), (0.2, 0, 0)], amplitude_su=(ONE_STEP,)),
        "amplitude_su[0] has steps at 1 k, but the ordering has 2.",
    ),
    "atom": (
        lambda: ld.Ordering(
            small(), np.ones((2, 3)), amplitude_su=(AmplitudeUncertainty((2,), np.zeros((1, 1, 3))),)
        ),
        "amplitude_su[0] changes the atom of index 2, but there are 2 atoms, counted from 0.",
    ),
    "imaginary": (
        lambda: ld.Ordering(small(), np.ones((2, 3)), amplitude_su=(AmplitudeUncertainty((0,), [[[0.1j, 0, 0]]]),)),
        "amplitude_su: a step of 0.1 µB is imaginary where k and −k are the same vector, which has no meaning there. "
        "Give real steps.",
    ),
    "twice": (
        lambda: ld.Ordering(
            small(), np.ones((2, 3)), size_su=(SizeUncertainty((0,), 0.1),), amplitude_su=(ONE_STEP,)
        ),
        "site 1 (Mn) stands in size_su and in amplitude_su, which would count its uncertainty twice. Leave one out.",
    ),
    "su shape": (
        lambda: independent_amplitudes(small(), np.zeros((2, 3))),
        "su must hold numbers in shape (n_k, 2, 3).",
    ),
    "su sign": (
        lambda: independent_amplitudes(small(), np.full((1, 2, 3), -1.0)),
        "su must hold numbers of at least 0 or NaN.",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_refused(case):
    call, message = BAD[case]
    assert refusal(call) == message


# --- written files --------------------------------------------------------------------------------------


def test_independent_amplitudes_are_written_and_read_again(tmp_path):
    text = average_text(TRICLINIC.text, {"Mn1": ((0.5, -1, 2), (0.02, 0.05, 0)), "Fe1": ((1, 0, 0), (0, 0, 0))})
    su = np.random.default_rng(8).uniform(0.01, 0.1, (len(fourier_rows(text)), 2))
    su[4] = np.nan
    ordering = read_text(series_text(text, numbers_of(text), su), tmp_path)
    ld.write_ordering(ordering, tmp_path / "again.mcif")
    written = (tmp_path / "again.mcif").read_text()
    assert not any(line.startswith("# Standard") for line in written.splitlines())
    again = ld.read_ordering(tmp_path / "again.mcif")
    assert len(again.amplitude_su) == len(ordering.amplitude_su)
    assert again.moments_covariance(CELLS) == pytest.approx(ordering.moments_covariance(CELLS), abs=1e-12)
    first, second = (ld.local_field(one, POINT[None]) for one in (ordering, again))
    np.testing.assert_allclose(second.uncertainty.covariance_T2, first.uncertainty.covariance_T2, rtol=1e-8, atol=1e-14)


def test_the_written_file_says_what_it_does_not_hold(tmp_path):
    tied = "# Standard uncertainties are those of each number alone; that some change together is not said."
    turning = "# Standard uncertainties of moments that are not stated by amplitude are not written."
    mixed = "# Standard uncertainties of amplitudes are not written: a moment here mixes several amplitudes."

    def remarks(ordering, **options):
        ld.write_ordering(ordering, tmp_path / "b.mcif", overwrite=True, **options)
        return [x for x in (tmp_path / "b.mcif").read_text().splitlines() if x.startswith("# Standard")]

    wave = [[2, 1j, 0], [0, 0, 1j]]
    one = AmplitudeUncertainty((0, 1), [[[0.1, 0, 0], [0, 0, 0.1j]]])
    assert remarks(ld.Ordering(small(), wave, (0.2137, 0, 0), amplitude_su=(one,))) == [tied]
    again = ld.read_ordering(tmp_path / "b.mcif")
    ordering = ld.Ordering(small(), wave, (0.2137, 0, 0), amplitude_su=(one,))
    # Those of each moment alone are right all the same.
    home = (again.moments_covariance(CELLS), ordering.moments_covariance(CELLS))
    assert np.einsum("cnaa->cna", home[0])[:, 1] == pytest.approx(np.einsum("cnaa->cna", home[1])[:, 1], abs=0.02)
    assert remarks(ld.Ordering(small(), wave, (0.2137, 0, 0), size_su=(SizeUncertainty((0,), 0.05),))) == [tied]
    lines = ld.Ordering(small(), wave, (0.2137, 0, 0), moment_su=np.full((2, 3), 0.1))
    assert remarks(lines) == [turning]
    assert remarks(ld.Ordering(small(), wave, (0.25, 0, 0), amplitude_su=(one,)), superspace=False) == [mixed]
    # At a zone-boundary k every moment is an amplitude, up to its sign.
    half = ld.Ordering(small(), np.real(wave), (0.5, 0, 0), amplitude_su=(ONE_STEP,))
    assert remarks(half) == []
    assert ld.read_ordering(tmp_path / "b.mcif").moment_su[0] == pytest.approx([0.1, np.nan, np.nan], nan_ok=True)


# --- studies --------------------------------------------------------------------------------------------

WAVE = """[[ordering]]
name = "cycloid"
k = [0.213, 0, 0.4]
cosine = {{ Co1 = {}, Co2 = [1, 0, 0] }}
sine = {{ Co1 = {} }}
{}
[[probe]]
name = "A"
position = [0.37, 0.71, 0.12]
"""


def wave_text(cosine=(2, 0.5, 0), sine=((0, 0, 2), (0.5, 0, 1)), more=""):
    return WAVE.format(list(cosine), [list(x) for x in sine], more)


@pytest.mark.parametrize("phase", ["position", "cell"])
def test_amplitudes_of_a_study_by_finite_differences(phase, tmp_path):
    """One triple for all atoms is three parameters; a list is three of each atom of the primitive cell."""
    follow = f'phase = "{phase}"'
    stated = f"{follow}\ncosine_su = {{ Co1 = [0.1, 0.03, 0] }}\nsine_su = {{ Co1 = [[0, 0, 0.2], [0.05, 0, 0]] }}"
    study = study_of(tmp_path, wave_text(more=stated))
    (ordering,) = study.orderings
    assert [len(one.sites) for one in ordering.amplitude_su] == [4] * 4
    base = ld.local_field(ordering, study.probes)
    covariance = np.zeros((3, 3))
    for cosine, sine in (
        ((2.1, 0.5, 0), ((0, 0, 2), (0.5, 0, 1))),
        ((2, 0.53, 0), ((0, 0, 2), (0.5, 0, 1))),
        ((2, 0.5, 0), ((0, 0, 2.2), (0.5, 0, 1))),
        ((2, 0.5, 0), ((0, 0, 2), (0.55, 0, 1))),
    ):
        moved = study_of(tmp_path, wave_text(cosine, sine, follow))
        change = (ld.local_field(moved.orderings[0], moved.probes).total - base.total)[0]
        covariance += np.outer(change, change)
    np.testing.assert_allclose(base.uncertainty.covariance_T2[0], covariance, rtol=1e-7, atol=1e-14)


def test_zone_boundary_amplitudes_of_a_study(tmp_path):
    """Where k and −k are one, the phase at the position decides how much of a cosine is left; here all of it."""
    text = "[[ordering]]\nk = [0, 0, 0]\ncosine = {{ Co1 = [0, 0, {}] }}\n{}\n[[probe]]\nposition = [0.1, 0.2, 0.3]\n"
    study = study_of(tmp_path, text.format(2, "cosine_su = { Co1 = [0, 0, 0.1] }"))
    found = ld.local_field(study.orderings[0], study.probes)
    assert found.size_su_T[0] == pytest.approx(0.05 * found.size_T[0], rel=1e-9)
    # An amplitude of 0 that is uncertain.
    study = study_of(tmp_path, text.format(2, "cosine_su = { Co1 = [0.1, 0, 0] }"))
    moved = study_of(tmp_path, text.format(2, "").replace("[0, 0, 2]", "[0.1, 0, 2]"))
    first, second = (ld.local_field(one.orderings[0], one.probes) for one in (study, moved))
    change = (second.total - first.total)[0]
    np.testing.assert_allclose(first.uncertainty.covariance_T2[0], np.outer(change, change), rtol=1e-7, atol=1e-14)


def test_amplitudes_with_uncertainty_on_screen(tmp_path):
    study = study_of(tmp_path, wave_text(more="cosine_su = { Co1 = [0.1, 0, 0], Co2 = [0.02, 0, 0] }"))
    document = show(study.path)
    (atom, *_) = document["orderings"][0]["atoms"]
    turns = 2 * np.pi * (0.213 * np.array([x for x, _, _ in document["orderings"][0]["cells"]]))
    turns += 2 * np.pi * 0.4 * (0.16 + np.array([z for _, _, z in document["orderings"][0]["cells"]]))
    assert np.array(atom["moments_su_abc_muB"])[:, 0] == pytest.approx(0.1 * np.abs(np.cos(turns)), abs=1e-12)
    assert np.array(atom["moments_su_abc_muB"])[:, 1:] == pytest.approx(0, abs=1e-15)
    text = show_text(document, width=120)
    moments = np.array(atom["moments_abc_muB"])[:, 0]
    for value, su in zip(moments, 0.1 * np.abs(np.cos(turns)), strict=True):
        assert format_su(value, su) in text
    found = ld.local_field(study.orderings[0], study.probes)
    fields_document = field_document(study, [found], unit="T")
    assert fields_document["orderings"][0]["rows"][0]["field_size_su_T"] == pytest.approx(found.size_su_T[0])
    assert format_su(found.size_T[0], found.size_su_T[0]) in field_text(fields_document, width=100)


def test_collinear_amplitudes_on_screen(tmp_path):
    more = (
        '[[ordering]]\nname = "still"\nk = [0, 0, 0]\ncosine = { Co1 = [1, 0, 1] }\ncosine_su = { Co1 = [0.1, 0, 0] }'
    )
    document = show(study_of(tmp_path, more).path)
    atom = document["orderings"][0]["atoms"][0]
    # Along (1, 0, 1)/√2 in a tetragonal cell.
    assert atom["moments_su_along_muB"] == pytest.approx([0.1 / np.sqrt(2)])
    assert atom["along_su_muB"] == pytest.approx(0.1 / np.sqrt(2))
    assert atom["moment_su_muB"] == pytest.approx([0.1, 0, 0])
    assert "1.41(7)" in show_text(document, width=100)


def test_a_file_of_a_study_is_turned_into_its_frame(tmp_path):
    """The cell of the study lies in another Cartesian orientation: |B| and its uncertainty stay."""
    text = TRICLINIC.text
    ordering = read_text(series_text(text, numbers_of(text), np.abs(numbers_of(text)) * 0.05), tmp_path)
    turn = np.array([[0, -1.0, 0], [0.6, 0, -0.8], [0.8, 0, 0.6]])
    home = dataclasses.replace(ordering.crystal, cell=ordering.crystal.cell @ turn.T)
    placed = place_in_frame(ordering, home)
    first, second = (ld.local_field(one, [POINT]) for one in (ordering, placed))
    np.testing.assert_allclose(second.size_su_T, first.size_su_T, rtol=1e-7)
    np.testing.assert_allclose(
        second.uncertainty.covariance_T2[0], turn @ first.uncertainty.covariance_T2[0] @ turn.T, rtol=1e-6, atol=1e-13
    )


def test_domains_of_a_placed_ordering_keep_their_uncertainty():
    """A fourfold axis turns the ordering with its uncertainty: the orbit of a point shows the same values."""
    home = ld.Crystal(np.diag([4.0, 4, 6]), [[0, 0, 0]], ["Mn"])
    su = np.array([[[0.1, 0.02j, 0.05]]])
    ordering = ld.Ordering(home, [[2, 0, 1j]], (0.2137, 0, 0), amplitude_su=independent_amplitudes(home, su))
    placed = place_in_frame(ordering, home)
    x, y, z = 0.31, 0.12, 0.2
    points = np.array([(a, b, c) for s, t in itertools.product((1, -1), repeat=2) for c in (z, -z)
        for a, b in ((s * x, t * y), (s * y, t * x))])  # fmt: skip
    found = [np.sort(ld.local_field(one.ordering, points).size_su_T) for one in ld.domains(placed)]
    assert len(found) > 1 and np.all(np.isfinite(found[0]))
    for other in found[1:]:
        np.testing.assert_allclose(other, found[0], rtol=1e-7)


REFUSED = {
    "cosine_su = { Co3 = [0.1, 0, 0] }": "`ordering[1].cosine_su.Co3`: stands in no entry of `cosine`, which has Co1, "
    "Co2. Use the same names.",
    "cosine_su = [0.1, 0, 0]": "`ordering[1].cosine_su`: got [0.1, 0, 0], expected a table by site label or element, "
    "as `cosine` and `sine` are.",
    "cosine_su = { Co1 = 0.1 }": "`ordering[1].cosine_su.Co1`: got 0.1, expected three standard uncertainties in µB, "
    "each at least 0, as `ordering[1].cosine.Co1` has one triple.",
    "cosine_su = { Co1 = [[0.1, 0, 0], [0, 0, 0.1]] }": "`ordering[1].cosine_su.Co1`: got [[0.1, 0, 0], [0, 0, 0.1]], "
    "expected three standard uncertainties in µB, each at least 0, as `ordering[1].cosine.Co1` has one triple.",
    "sine_su = { Co1 = [0.1, 0, 0] }": "`ordering[1].sine_su.Co1`: got [0.1, 0, 0], expected 2 triples of standard "
    "uncertainties in µB, as `ordering[1].sine.Co1` has 2.",
    "sine_su = { Co1 = [[0.1, 0, 0], [0.1, 0]] }": "`ordering[1].sine_su.Co1[2]`: got [0.1, 0], expected three "
    "standard uncertainties in µB, each at least 0.",
    "cosine_su = { Co1 = [0.1, -1, 0] }": "`ordering[1].cosine_su.Co1[2]`: got -1, expected a number from 0 to 1e+06.",
    "sine_su = { Co1 = [[0.1, 0, 0], [0, 0, -2]] }": "`ordering[1].sine_su.Co1[2][3]`: got -2, expected a number from "
    "0 to 1e+06.",
    "cosine_su = { Co1 = [1e300, 0, 0] }": "`ordering[1].cosine_su.Co1[1]`: got 1e+300, expected a number from 0 to "
    "1e+06.",
}


@pytest.mark.parametrize("text", REFUSED)
def test_refused_in_a_study(tmp_path, text):
    with pytest.raises(StudyError) as caught:
        study_of(tmp_path, wave_text(more=text))
    assert str(caught.value) == f"{tmp_path / 'study.toml'}: {REFUSED[text]}"


def test_uncertainties_without_their_amplitudes(tmp_path):
    for text, message in {
        "cosine = { Co1 = [1, 0, 0] }\nsine_su = { Co1 = [1, 0, 0] }": "`ordering[1].sine_su`: goes only with `sine`, "
        "which this ordering has not.",
        "cosine_su = { Co1 = [1, 0, 0] }": "`ordering[1]`: says nothing of its moments, expected one of `along`, "
        "`cosine`, `sine` or `file`.",
        "along = [0, 0, 1]\ncosine_su = { Co1 = [1, 0, 0] }": "`ordering[1]`: `along` and `cosine_su` describe the "
        "moments in two ways. Leave one out.",
    }.items():
        with pytest.raises(StudyError) as caught:
            study_of(tmp_path, f"[[ordering]]\nk = [0.2, 0, 0]\n{text}\n")
        assert str(caught.value) == f"{tmp_path / 'study.toml'}: {message}"


HALF = """[[ordering]]
name = "half"
k = [0.5, 0, 0]
cosine = { Co1 = [3, 0, 0] }
sine = { Co1 = [0, 0, 0] }
"""


def test_a_sine_has_no_uncertainty_where_it_has_no_effect(tmp_path):
    path = tmp_path / "study.toml"
    with pytest.raises(StudyError) as caught:
        study_of(tmp_path, HALF + "sine_su = { Co1 = [0.1, 0, 0] }", crystal=str(one_atom(tmp_path)))
    assert str(caught.value) == (
        f"{path}: `ordering[1].sine_su.Co1`: at k = (0.5, 0, 0), where k and −k are the same vector, a sine amplitude "
        "has no effect on these atoms, nor has its uncertainty. Leave it out, or give that of the cosine."
    )
    exact = study_of(tmp_path, HALF + "sine_su = { Co1 = [0, 0, 0] }", crystal=str(one_atom(tmp_path)))
    assert not exact.orderings[0].amplitude_su


def test_one_triple_is_counted_as_one(tmp_path):
    text = HALF.replace("[3, 0, 0]", "[[3, 0, 0]]") + "cosine_su = { Co1 = [0.1, 0, 0] }"
    with pytest.raises(StudyError) as caught:
        study_of(tmp_path, text, crystal=str(one_atom(tmp_path)))
    assert str(caught.value) == (
        f"{tmp_path / 'study.toml'}: `ordering[1].cosine_su.Co1`: got [0.1, 0, 0], expected 1 triple of standard "
        "uncertainties in µB, as `ordering[1].cosine.Co1` has 1."
    )


def one_atom(folder):
    path = folder / "one.xyz"
    cell = 'Lattice="4 0 0 0 4 0 0 0 5" Properties=species:S:1:pos:R:3 pbc="T T T"'
    path.write_text(f"1\n{cell}\nCo 0 0 0\n", encoding="utf-8")
    return path


def test_uncertainties_beyond_every_moment_are_refused():
    home = ld.Crystal(np.diag([4.0, 4, 6]), [[0, 0, 0]], ["Mn"])
    for arguments, message in (
        ({"amplitude_su": 5}, "amplitude_su must be a tuple of AmplitudeUncertainty objects, got int."),
        ({"moment_su": [[1e300, 0, 0]]}, "moment_su holds 1e+300 µB, beyond 1e+06 µB. Give Bohr magnetons."),
    ):
        with pytest.raises(InputError) as caught:
            ld.Ordering(home, [[1.0, 0, 0]], **arguments)
        assert str(caught.value) == message
    with pytest.raises(InputError) as caught:
        independent_amplitudes(home, np.array([[[1e300, 0, 0]]]))
    assert str(caught.value) == "a standard uncertainty of 1e+300 µB is beyond 1e+06 µB. Give Bohr magnetons."


@pytest.mark.parametrize(("su", "told"), [("[0, 0, 0]", False), ("[0, 0, 0.01]", True)])
def test_digits_in_brackets_are_explained_where_there_are_any(tmp_path, su, told):
    """A standard uncertainty of exactly zero is none."""
    more = f'[moments]\nCo = 2\n[[probe]]\nname = "A"\nposition = [0.1, 0.2, 0.3]\nposition_su = {su}\n'
    study = study_of(tmp_path, HALF + more, crystal=str(one_atom(tmp_path)))
    text = field_text(field(study), width=100)
    assert ("digits in brackets" in " ".join(text.split())) is told
    assert any("Digits in brackets" in note for note in shift(study)["notes"]) is told
