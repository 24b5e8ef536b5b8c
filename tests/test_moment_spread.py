"""Moments that extend over their ions: fields and shifts against quadrature of point sums, and the study's table."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import latticedip as ld
from latticedip.crystal.model import Operations
from latticedip.errors import InputError, StudyError
from latticedip.ordering.model import ParentTransform, Reference
from latticedip.physics.spread import moment_clouds, moment_spread_words, named_clouds
from latticedip.study import tasks
from latticedip.study.spectra import SpectrumOptions
from tests.reference.clouds import nodes
from tests.test_study import study_of

CELL = np.array([[5.0, 0, 0], [0.8, 5.6, 0], [-0.6, 0.9, 6.1]])
PLACES = np.array([[0.05, 0.1, 0.2], [0.55, 0.42, 0.7], [0.3, 0.8, 0.45]])
POINT = np.array([0.45, 0.15, 0.9])
TILTED = np.array([[0.02, 0.006, -0.004], [0.006, 0.011, 0.003], [-0.004, 0.003, 0.007]])
SPREAD = {"Mn": 0.11, "Fe": TILTED}
COVARIANCES = {"Mn": 0.11**2 * np.eye(3), "Fe": TILTED}


def crystal() -> ld.Crystal:
    return ld.Crystal(CELL, PLACES, ["Mn", "Fe", "O"], occupancies=[1.0, 0.6, 1.0])


def quadrature(value, covariance: np.ndarray) -> np.ndarray:
    """The mean of a function of the fractional position over a cloud about POINT."""
    steps, weights = nodes(covariance, 8)
    return np.einsum("n,n...->...", weights, [value(POINT + step @ np.linalg.inv(CELL)) for step in steps])


@pytest.mark.parametrize("of_probe", [np.zeros((3, 3)), 0.3 * TILTED[::-1, ::-1]], ids=["still probe", "moving probe"])
def test_couplings_are_the_quadrature_over_both_clouds(of_probe):
    """Displacements of probe and ion enter by their difference, whose covariance is the sum of the two."""
    found = ld.coupling_tensor(crystal(), POINT, magnetic=["Mn", "Fe"], spread=of_probe, moment_spread=SPREAD)
    expected = sum(
        quadrature(lambda at, name=name: ld.coupling_tensor(crystal(), at, magnetic=name).dipolar, cloud + of_probe)
        for name, cloud in COVARIANCES.items()
    )
    np.testing.assert_allclose(found.dipolar, expected, atol=1e-8)
    point = ld.coupling_tensor(crystal(), POINT, magnetic=["Mn", "Fe"])
    assert np.abs(found.dipolar - point.dipolar).max() > 1e-4
    assert abs(np.trace(found.dipolar)) < 1e-9
    np.testing.assert_array_equal(found.lorentz, point.lorentz)


def test_shifts_and_fields_take_the_same_moments():
    chi = {"Mn": ld.Susceptibility(0.01, "muB/T"), "Fe": ld.Susceptibility(np.diag([0.02, 0.03, 0.05]), "muB/T")}
    moved = ld.Displaced(shell=1, factor=1.06)
    shift = ld.paramagnetic_shift(crystal(), POINT, chi, moment_spread=SPREAD, displaced=moved)
    for axis in range(3):
        moments = np.zeros((3, 3))
        moments[0, axis], moments[1, axis] = 0.01, (0.02, 0.03, 0.05)[axis]
        ordering = ld.Ordering(crystal(), moments)
        probe = ld.Probe(POINT, displaced=moved)
        field = ld.local_field(ordering, probe, moment_spread=SPREAD)
        np.testing.assert_allclose(shift.dipolar[:, axis], field.dipolar[0], atol=1e-11)
    curve = ld.Susceptibility([0.02, 0.01], "muB/T", temperatures_K=[50, 100])
    at = ld.shift_curve(crystal(), POINT, {"Mn": curve}, moment_spread=0.9)
    single = ld.coupling_tensor(crystal(), POINT, magnetic="Mn", moment_spread={"Mn": 0.9})
    np.testing.assert_allclose(at.shifts[0].dipolar, 0.02 * single.dipolar, atol=1e-11)
    words = "the extended moment of Mn reaches the probe: the traceless (principal-value) part is given"
    assert f"{words}; the rest is contact" in single.notes


def test_the_spread_enters_the_waves_of_an_orbit():
    """Several waves are taken apart by sums of their own; in the home cell they add up to the local field again."""
    parts = np.random.default_rng(3).normal(size=(2, 3, 3))
    ordering = ld.Ordering(crystal(), parts, [[0, 0, 0], [0.21, 0, 0.1]])
    probe = ld.Probe(POINT)
    found = ld.orbit_field(ordering, probe, moment_spread=SPREAD, equivalent=False)
    whole = ld.local_field(ordering, probe, moment_spread=SPREAD).total
    np.testing.assert_allclose(found.fields([[0, 0, 0]])[:, 0], whole, atol=1e-9)
    ranked = ld.rank([ordering], probes=[probe], moment_spread=SPREAD)
    np.testing.assert_array_equal(ranked.rows[0].fields[probe.name].total, whole)
    assert ranked.rows[0].energy.per_cell_eV == ld.rank([ordering]).rows[0].energy.per_cell_eV
    assert ranked.notes[:2] == (
        moment_spread_words(SPREAD)[0],
        "energies are those of point dipoles: the spread of the moments counts in fields at probes alone",
    )


def ring() -> ld.Crystal:
    """Four atoms that a fourfold axis relates, the first on the mirror y = 0."""
    quarter = np.array([[0, -1, 0], [1, 0, 0], [0, 0, 1]])
    turns = np.array([np.linalg.matrix_power(quarter, n) for n in range(4)])
    places = np.vstack([turns @ [0.3, 0, 0], turns @ [0.2, 0.1, 0.4]])
    operations = Operations(turns, np.zeros((4, 3)))
    return ld.Crystal(np.diag([6.0, 6, 5]), places, ["Mn"] * 4 + ["F"] * 4, operations=operations)


def test_a_covariance_is_carried_to_the_other_atoms():
    one = np.array([[0.05, 0, 0.01], [0, 0.02, 0], [0.01, 0, 0.03]])
    found = named_clouds(ring(), {"Mn": one})
    order = ring().find("Mn")
    place = {site: tuple(np.round(ring().positions[site] % 1, 3)) for site in order}
    assert place[order[0]] == (0, 0.3, 0)
    # A quarter turn back takes the first, on y, onto the one on x: (x, y, z) → (y, −x, z).
    turned = np.array([[0.02, 0, 0], [0, 0.05, -0.0], [0, 0, 0.03]])
    turned[0, 2] = turned[2, 0] = 0.0
    turned[1, 2] = turned[2, 1] = -0.01
    on_x = next(site for site in order if place[site] == (0.3, 0, 0))
    np.testing.assert_allclose(found[on_x], turned, atol=1e-12)
    assert not np.any(found[4:])
    for site in order:
        assert np.linalg.eigvalsh(found[site]) == pytest.approx(np.linalg.eigvalsh(one))
    assert np.all(named_clouds(ring(), {"Mn": 0.5})[order[1]] == 0.25 * np.eye(3))


def test_an_ordering_with_its_own_cell_takes_the_names_of_the_reference_crystal():
    home = ld.Crystal(CELL, PLACES, ["Mn", "Fe", "O"])
    moments = np.random.default_rng(4).normal(size=(3, 3))
    one = ld.Ordering(home, moments, (0.5, 0, 0))
    double = np.diag([2.0, 1, 1])
    places = np.vstack([(PLACES + np.array([n, 0, 0])) @ np.linalg.inv(double) for n in (1, 0)])
    labels = ["A1", "B1", "C1", "A2", "B2", "C2"]
    own = ld.Crystal(double @ CELL, places, ["Mn", "Fe", "O"] * 2, labels=labels)
    reference = Reference(home, ParentTransform(double.T, np.zeros(3)), "twice along a")
    two = ld.Ordering(own, np.vstack([-moments, moments]), name="doubled", reference=reference)
    spread = {"Mn": 20 * TILTED, "Fe": 0.6}
    np.testing.assert_array_equal(moment_clouds(two, spread), np.tile(moment_clouds(one, spread), (2, 1, 1)))
    found = ld.local_field(two, ld.Probe(POINT), moment_spread=spread)
    expected = ld.local_field(one, ld.Probe(POINT), moment_spread=spread)
    assert np.abs(np.abs(found.total) - np.abs(expected.total)).max() < 1e-9
    far = Reference(home, ParentTransform(double.T, np.array([0.1, 0, 0])), "shifted")
    with pytest.raises(InputError) as caught:
        moment_clouds(ld.Ordering(own, two.components, name="doubled", reference=far), spread)
    assert str(caught.value) == (
        "moment_spread: the crystal of the study has no Mn within 0.2 Å of the place of atom A1 of the ordering "
        "'doubled'."
    )


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (
            lambda: named_clouds(
                ld.Crystal(ring().cell, ring().positions, ["Mn"] * 8, operations=ring().operations),
                {"Mn": np.diag([0.01, 0.02, 0.03])},
            ),
            "moment_spread of Mn: a covariance is stated for the first of 8 atoms, but no operation of the crystal "
            "carries it to atom Mn (number 8). State a number, or a covariance for each label.",
        ),
        (
            lambda: named_clouds(
                ld.Crystal(
                    np.diag([4.0, 4, 5]),
                    [[0, 0, 0], [0.5, 0.5, 0]],
                    ["Mn", "Mn"],
                    operations=Operations(
                        np.array([[[0, -1, 0], [1, 0, 0], [0, 0, 1]], np.eye(3), np.eye(3)]),
                        np.array([[0, 0, 0], [0, 0, 0], [0.5, 0.5, 0]]),
                    ),
                ),
                {"Mn": np.diag([0.01, 0.02, 0.03])},
            ),
            "moment_spread of Mn: the covariance [[0.01, 0.0, 0.0], [0.0, 0.02, 0.0], [0.0, 0.0, 0.03]] does not have "
            "the symmetry of its site Mn, so that it does not say how the other 1 moments extend. Symmetrize it, or "
            "state a number.",
        ),
        (
            lambda: ld.coupling_tensor(crystal(), POINT, magnetic="Mn", moment_spread={"Co": 0.1}),
            "no site has the label or element 'Co'. Known are: Mn, Fe, O. Did you mean 'O'?",
        ),
    ],
    ids=["two kinds", "lacks symmetry", "unknown"],
)
def test_refusals(make, message):
    with pytest.raises(InputError) as caught:
        make()
    assert str(caught.value) == message


ORDERING = """[moments]
Mn = 3.0
[[ordering]]
name = "up"
k = [0, 0, 0]
along = [0, 0, 1]
[[ordering]]
name = "along a"
k = [0.5, 0, 0]
along = [1, 0, 0]
[[probe]]
name = "muon A"
position = [0.5, 0.4, 0.12]
"""
CUBE = 'Lattice="4 0 0 0 4 0 0 0 4" Properties=species:S:1:pos:R:3 pbc="T T T"'


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "cube.xyz").write_text(f"2\n{CUBE}\nMn 0 0 0\nF 2 2 2\n", encoding="utf-8")
    return tmp_path


def study(folder: Path, text: str) -> ld.study.schema.Study:
    return study_of(folder, ORDERING + text, crystal=str(folder / "cube.xyz"))


def test_every_command_honours_the_table(folder):
    """field, rank, spectrum and shift of a study give what the calls give with the same spread."""
    spread = 0.7
    plain, extended = study(folder, ""), study(folder, f"[moment_spread]\nMn = {spread}\nF = 0\n")
    assert dict(extended.moment_spread) == {"Mn": spread} and not plain.moment_spread
    ordering, probe = extended.orderings[0], extended.probes[0]
    expected = ld.local_field(ordering, probe, moment_spread=spread)
    assert np.abs(expected.total - ld.local_field(ordering, probe).total).max() > 1e-4
    row = tasks.field(extended)["orderings"][0]["rows"][0]
    assert row["field_T"] == expected.total[0].tolist()
    note = "moments are extended: Gaussian spread of Mn 0.7 Å rms along each axis"
    assert note in tasks.field(extended)["orderings"][0]["notes"]
    ranked = tasks.rank(extended)
    by_name = {entry["ordering"]: entry for entry in ranked["rows"]}
    assert by_name["up"]["fields"]["muon A"][0]["field_T"] == expected.total[0].tolist()
    energies = [entry["energy_ueV_per_ion"] for entry in ranked["rows"]]
    assert energies == [entry["energy_ueV_per_ion"] for entry in tasks.rank(plain)["rows"]]
    told = "energies are those of point dipoles: the spread of the moments counts in fields at probes alone"
    for doc in (ranked, tasks.directions(extended, steps=4), tasks.modes(extended, points=10)):
        assert doc["notes"].count(told) == 1
    assert told not in tasks.rank(plain)["notes"]
    lines = tasks.spectrum(extended, SpectrumOptions())["orderings"][1]["spectra"][0]["lines"]
    levels = ld.orbit_field(extended.orderings[1], probe, moment_spread=spread).levels
    assert [line["field_T"] for line in lines] == pytest.approx([level.field_T for level in levels])
    shift = tasks.shift(extended)
    tensor = ld.coupling_tensor(extended.crystal, probe.position, magnetic="Mn", moment_spread=spread)
    assert shift["rows"][0]["couplings"][0]["dipolar_T_per_muB"] == tensor.dipolar.tolist()
    assert shift["notes"].count(note) == 1
    assert (
        shift["notes"][-1] == "Left out: moments on other sites, and the probe's own effect on the moments around it."
    )
    assert "the spread of the moment over its ion" in tasks.shift(plain)["notes"][-1]
    shown = tasks.show(extended.path)
    assert shown["moment_spread"] == {"Mn": "0.7 Å rms along each axis"}


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            "Mn = -1",
            "`moment_spread.Mn`: got -1, expected the rms extent along each axis in Å, at least 0, or a covariance "
            "(three lists of three numbers, Å²).",
        ),
        (
            "Mn = [[1, 2], [3, 4]]",
            "`moment_spread.Mn`: got [[1, 2], [3, 4]], expected three lists of three numbers (Cartesian): the "
            "covariance of the moment in Å².",
        ),
        ("Co = 0.3", "`moment_spread.Co`: no site has the label or element 'Co'. Known are: Mn1, F1, Mn, F."),
        (
            "Mn = 7",
            "`moment_spread.Mn`: moment_spread of Mn (rms displacement along each axis in Å) must lie between 0.0 and "
            "5.0, got 7.0.",
        ),
    ],
)
def test_a_broken_table_is_refused(folder, text, message):
    with pytest.raises(StudyError) as caught:
        study(folder, f"[moment_spread]\n{text}\n")
    assert str(caught.value) == f"{folder / 'study.toml'}: {message}"


def test_a_table_of_the_wrong_kind_is_refused(folder):
    path = folder / "study.toml"
    path.write_text('moment_spread = 0.4\n[crystal]\nfile = "cube.xyz"\n', encoding="utf-8")
    with pytest.raises(StudyError) as caught:
        ld.read_study(path)
    assert str(caught.value) == (
        f"{path}: `moment_spread`: got 0.4, expected one table, headed [moment_spread], such as Mn = 0.4 (Å rms)."
    )


def test_nothing_is_said_of_no_spread():
    assert moment_spread_words(None) == moment_spread_words(0) == moment_spread_words({"Mn": 0.0}) == []
    assert moment_spread_words({"Mn": 0.4, "Fe": np.diag([0.09, 0.01, 0.04])}) == [
        "moments are extended: Gaussian spread of Mn 0.4 Å rms along each axis; Fe 0.1, 0.2, 0.3 Å rms along its "
        "principal axes"
    ]
    assert moment_spread_words(0.5) == ["moments are extended: Gaussian spread of all ions 0.5 Å rms along each axis"]


def test_a_spread_without_effect_is_refused(folder):
    with pytest.raises(StudyError) as caught:
        study(folder, "[moment_spread]\nMn = 0.3\nF = 0.3\n")
    assert str(caught.value) == (
        f"{folder / 'study.toml'}: `moment_spread.F`: F carries no moment, so that its spread has no effect; magnetic "
        "are Mn1."
    )
    # Magnetic by a susceptibility or a size is enough, and by another ordering.
    study(folder, '[moment_spread]\nF = 0.3\n[susceptibility]\nF = { chi = 0.01, unit = "cm3/mol" }\n')


def test_words_tell_of_spreads_with_an_effect_only(folder):
    text = (
        '[moment_spread]\nMn = 0.3\nF = 0.2\n[[ordering]]\nname = "F too"\nk = [0, 0, 0]\ncosine = { F = [1, 0, 0] }\n'
    )
    found = study(folder, text)
    entries = {entry["ordering"]: entry["notes"] for entry in tasks.field(found)["orderings"]}
    of_mn, of_f = (
        f"moments are extended: Gaussian spread of {ion} Å rms along each axis" for ion in ("Mn 0.3", "F 0.2")
    )
    assert of_mn in entries["up"] and of_f not in entries["up"]
    assert of_f in entries["F too"] and of_mn not in entries["F too"]


def test_a_shift_tells_that_point_ions_are_left(folder):
    """Only where every magnetic ion is extended is the spread of the moment not left out."""
    chi = "[moments]\nMn = 4\nF = 1\n"
    both = "Mn = 0.3\nF = 0.2\n"
    for text, kept in (("Mn = 0.3\n", True), (both, False), (both + "F1 = 0\n", True)):
        found = study_of(folder, f"{chi}[moment_spread]\n{text}" + PROBE, crystal=str(folder / "cube.xyz"))
        assert ("the spread of the moment over its ion" in tasks.shift(found)["notes"][-1]) is kept


PROBE = '[[probe]]\nname = "A"\nposition = [0.1, 0.2, 0.4]\n'
