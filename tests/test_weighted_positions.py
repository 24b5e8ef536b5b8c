"""Probes that are found at several positions with weights: fields, shifts and spectra against hand-made averages."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError, StudyError
from latticedip.observables.mixed import MixedSpectrum
from latticedip.ordering.model import ParentTransform, Reference
from latticedip.physics.weighted import weighted_rows
from latticedip.study import tasks
from latticedip.study.spectra import SpectrumOptions
from tests.commands import Command, enter
from tests.reference.constants import DIPOLE_T

CELL_A = 4.0
CUBE = f"""1
Lattice="{CELL_A} 0 0 0 {CELL_A} 0 0 0 {CELL_A}" Properties=species:S:1:pos:R:3 pbc="T T T"
Mn 0 0 0
"""
STUDY = """title = "Hopping"
[crystal]
file = "cube.xyz"
[moments]
Mn = 2.0
[[ordering]]
name = "up"
k = [0, 0, 0]
along = [0, 0, 1]
[[ordering]]
name = "wave"
k = [0.5, 0, 0]
along = [0, 0, 1]
[sample]
sphere = true
"""
#: The three edge centres, whose couplings are one another's turned by 120°.
PROBE = """[[probe]]
name = "muon A"
positions = [["1/2", 0, 0], [0, 0.5, 0], [0, 0, 0.5]]
weights = [1, 1, 2]
[[probe]]
name = "muon B"
position = [0.5, 0.5, 0.5]
"""
EDGES = np.eye(3) / 2
command = Command()
run, document = command.run, command.document


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    return enter(tmp_path, monkeypatch, {"cube.xyz": CUBE, "study.toml": STUDY + PROBE})


def edge_coupling() -> float:
    """Dipole tensor along the edge at its centre (T/µB), term by term over the lattice in a sphere round the point."""
    steps = np.arange(-40, 41)
    x, y, z = np.meshgrid(steps + 0.5, steps, steps, indexing="ij")
    r = np.sqrt(x**2 + y**2 + z**2)
    inside = r < 39
    return float(np.sum((3 * x[inside] ** 2 - r[inside] ** 2) / r[inside] ** 5)) * DIPOLE_T / CELL_A**3


# --- fields ---------------------------------------------------------------------------------------------


def test_averages_of_a_case_solved_by_hand(folder):
    """Moments along z in a sphere: the fields are −t, −t and 2t along z, with 2t the coupling along the edge."""
    doc = document("field", "study.toml", "--ordering", "up")
    entry = doc["orderings"][0]
    (found,) = entry["averages"]
    field = 2.0 * edge_coupling()
    assert [row["probe"] for row in entry["rows"]] == [
        "muon A, position 1",
        "muon A, position 2",
        "muon A, position 3",
        "muon B",
    ]
    assert [row["weight"] for row in entry["rows"]] == [0.25, 0.25, 0.5, None]
    assert found["probe"] == "muon A" and (found["copy"], found["copies"]) == (1, 1)
    assert found["points"] == [1, 2, 3] and found["weights"] == [0.25, 0.25, 0.5]
    # Weights 1/4, 1/4 and 1/2 of −1/2, −1/2 and 1.
    near = {"rel": 2e-3}
    assert found["mean_field_T"] == pytest.approx([0, 0, field * (-0.25 + 0.5)], rel=2e-3, abs=1e-10)
    assert found["size_of_mean_field_T"] == pytest.approx(field * 0.25, **near)
    assert found["mean_size_T"] == pytest.approx(field * 0.75, **near)
    assert found["rms_size_T"] == pytest.approx(field * np.sqrt(0.5 * 0.25 + 0.5), **near)
    assert found["rms_deviation_T"] == pytest.approx(field * np.sqrt(0.5 * 0.75**2 + 0.5 * 0.75**2), **near)
    muon = ld.Probe([0, 0, 0]).MHz_per_T
    assert found["frequency_of_mean_field_MHz"] == pytest.approx(found["size_of_mean_field_T"] * muon)
    assert found["mean_frequency_MHz"] == pytest.approx(found["mean_size_T"] * muon)
    assert "averages carry no uncertainty" in entry["notes"][-1]


def test_fields_come_from_separate_calls_with_all_that_a_probe_states(folder):
    """Contact, spread, displaced neighbours and applied field act at every position."""
    contact = "contact = [{ shell = 1, coupling_T_per_muB = 0.1 }]"
    spread = "covariance_A2 = [[0.02, 0, 0], [0, 0.01, 0], [0, 0, 0.03]]"
    moved = "displaced = [{ shell = 1, factor = 1.05 }]"
    text = STUDY.replace("sphere = true", "applied_T = [0.1, 0, 0.2]")
    places = [[0.5, 0.1, 0.1], [0.4, 0.5, 0.3]]
    probe = f'[[probe]]\nparticle = "19F"\npositions = {places}\nweights = [3, 1]\n{contact}\n{spread}\n{moved}\n'
    Path("study.toml").write_text(text + probe, encoding="utf-8")
    study = ld.read_study("study.toml")
    assert study.weighted[0].name == "19F at 2 positions"
    assert study.weighted[0].members == ("19F at 2 positions, position 1", "19F at 2 positions, position 2")
    for ordering, entry in zip(study.orderings, tasks.field(study)["orderings"], strict=True):
        vectors = [
            ld.local_field(
                ordering,
                ld.Probe(
                    place,
                    particle="19F",
                    contact=ld.Contact(0.1, shell=1),
                    spread=np.diag([0.02, 0.01, 0.03]),
                    displaced=ld.Displaced(shell=1, factor=1.05),
                ),
                sample=study.sample,
            ).total[0]
            for place in places
        ]
        mean = 0.75 * vectors[0] + 0.25 * vectors[1]
        np.testing.assert_allclose(entry["averages"][0]["mean_field_T"], mean, atol=1e-12)
        away = 0.75 * np.sum((vectors[0] - mean) ** 2) + 0.25 * np.sum((vectors[1] - mean) ** 2)
        assert entry["averages"][0]["rms_deviation_T"] == pytest.approx(np.sqrt(away))


def test_every_kind_of_axes_and_unit(folder):
    tesla = document("field", "study.toml")["orderings"][0]["averages"][0]
    polar = document("field", "study.toml", "--axes", "polar", "--unit", "G")["orderings"][0]["averages"][0]
    assert polar["mean_field_size_G"] == pytest.approx(1e4 * tesla["size_of_mean_field_T"])
    assert polar["mean_field_theta_deg"] == pytest.approx(0.0, abs=1e-9) and polar["mean_field_phi_deg"] is None
    assert polar["mean_size_G"] == pytest.approx(1e4 * tesla["mean_size_T"])
    crystal = document("field", "study.toml", "--axes", "crystal")["orderings"][0]["averages"][0]
    assert crystal["mean_field_abc_T"] == pytest.approx(tesla["mean_field_T"], abs=1e-12)
    for arguments in ((), ("--axes", "polar"), ("--axes", "crystal", "--unit", "G")):
        text = run("field", "study.toml", *arguments).stdout
        assert "rms\n" in text.replace(" ", "") or "deviation" in text
        assert "muon A" in text and "0.2500" in text and "0.5000" in text


def test_the_flat_table_repeats_the_averages(folder):
    assert run("field", "study.toml", "--csv", "out.csv").exit_code == 0
    with open("out.csv", encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    entry = document("field", "study.toml")["orderings"][0]["averages"][0]
    for row, weight in zip(rows[:3], (0.25, 0.25, 0.5), strict=True):
        assert (row["of_probe"], float(row["weight"])) == ("muon A", weight)
        assert float(row["mean_field_z_T"]) == entry["mean_field_T"][2]
        assert float(row["rms_size_T"]) == entry["rms_size_T"]
    assert (rows[3]["of_probe"], rows[3]["weight"], rows[3]["mean_field_z_T"]) == ("", "", "")
    Path("study.toml").write_text(STUDY + PROBE[PROBE.rindex("[[probe]]") :], encoding="utf-8")
    assert run("field", "study.toml", "--csv", "out.csv").exit_code == 0
    assert "weight" not in Path("out.csv").read_text(encoding="utf-8").splitlines()[0]


def doubled() -> tuple[ld.Ordering, ld.Ordering]:
    """An antiferromagnet in the single cell, at k = ½, and in a cell of its own that is twice as long."""
    cell = np.array([[4.0, 0, 0], [0.5, 4.4, 0], [0.2, -0.3, 5.0]])
    home = ld.Crystal(cell, [[0.1, 0.2, 0.3]], ["Mn"])
    one = ld.Ordering(home, [[0.3, 1, 2.0]], (0.5, 0, 0))
    double = np.diag([2.0, 1, 1])
    own = ld.Crystal(double @ cell, [[0.05, 0.2, 0.3], [0.55, 0.2, 0.3]], ["Mn", "Mn"])
    reference = Reference(home, ParentTransform(double.T, np.zeros(3)), "twice along a")
    return one, ld.Ordering(own, [[0.3, 1, 2.0], [-0.3, -1, -2.0]], reference=reference)


def test_copies_in_a_cell_of_its_own_stay_together():
    """Positions on either side of a face: their copies are listed by x, and a mean over all copies would vanish."""
    one, two = doubled()
    places = [[0.9, 0.5, 0.1], [1.2, 0.6, 0.0], [-0.2, 0.7, 0.8]]
    probes = [ld.Probe(place, name=f"at {number}") for number, place in enumerate(places)]
    weights = np.array([0.5, 0.3, 0.2])
    (single,) = weighted_rows(ld.local_field(one, probes), [probe.name for probe in probes], weights)
    assert np.linalg.norm(single.mean_T) > 0.01
    copies = weighted_rows(ld.local_field(two, probes), [probe.name for probe in probes], weights)
    assert len(copies) == 2
    for copy in copies:
        assert abs(abs(copy.mean_T @ single.mean_T) - single.mean_T @ single.mean_T) < 1e-10
        assert copy.rms_deviation_T == pytest.approx(single.rms_deviation_T)
        assert copy.mean_size_T == pytest.approx(single.mean_size_T)
        assert copy.rms_size_T == pytest.approx(single.rms_size_T)
    np.testing.assert_allclose(copies[0].mean_T, -copies[1].mean_T, atol=1e-10)
    # Fields at explicit points of the doubled cell.
    turn = np.linalg.inv(two.reference.transform.P)
    explicit = ld.local_field(two, np.array(places) @ turn.T).total
    signs = [np.sign(copy.mean_T @ (weights @ explicit)) for copy in copies]
    assert sorted(signs) == [-1.0, 1.0]
    chosen = copies[signs.index(1.0)]
    np.testing.assert_allclose(chosen.vectors_T, explicit, atol=1e-10)


# --- shifts ---------------------------------------------------------------------------------------------


CHI = """[susceptibility]
Mn = { chi = [0.02, 0.01], chi_su = [0.001, 0.001], unit = "muB/T", temperatures_K = [50, 100] }
"""


def test_mean_couplings_and_shifts(folder):
    """Over the three edges with weights ¼, ¼ and ½ the mean of diag(2, −1, −1) t and its turns is diag(−¼, −¼, ½) t."""
    Path("study.toml").write_text(STUDY + PROBE + CHI, encoding="utf-8")
    doc = document("shift", "study.toml")
    (mean,) = doc["means"]
    assert (mean["probe"], mean["multiplicity"], mean["particle"]) == ("muon A", 3, "muon")
    assert mean["positions"] == EDGES.tolist() and mean["weights"] == [0.25, 0.25, 0.5]
    study = ld.read_study("study.toml")
    tensors = [ld.coupling_tensor(study.crystal, place, magnetic="Mn", sample=study.sample) for place in EDGES]
    t = edge_coupling() / 2
    expected = 0.25 * tensors[0].dipolar + 0.25 * tensors[1].dipolar + 0.5 * tensors[2].dipolar
    np.testing.assert_allclose(expected, np.diag([-0.25, -0.25, 0.5]) * t, rtol=2e-3, atol=1e-9)
    np.testing.assert_allclose(mean["couplings"][0]["dipolar_T_per_muB"], expected, atol=1e-12)
    np.testing.assert_allclose(mean["couplings"][0]["lorentz_T_per_muB"], tensors[0].lorentz)
    assert [shift["temperature_K"] for shift in mean["shifts"]] == [50, 100]
    np.testing.assert_allclose(mean["shifts"][0]["shift_dipolar"], 0.02 * expected, atol=1e-12)
    # All of the uncertainty is that of chi, which the positions share.
    np.testing.assert_allclose(mean["shifts"][0]["shift_su"], np.abs(0.001 * expected), atol=1e-12)
    assert any(note.startswith("Means over positions with weights") for note in doc["notes"])
    text = run("shift", "study.toml").stdout
    assert "muon A, mean over its positions\n" in text
    assert "0.5 0 0 (weight 0.25)" in text
    assert run("shift", "study.toml", "--csv", "out.csv").exit_code == 0
    with open("out.csv", encoding="utf-8") as stream:
        rows = [row for row in csv.DictReader(stream) if row["probe"] == "muon A"]
    assert [(row["position_x"], row["multiplicity"], row["temperature_K"]) for row in rows] == [
        ("", "3", "50.0"),
        ("", "3", "100.0"),
    ]
    assert float(rows[0]["shift_dipolar_zz"]) == mean["shifts"][0]["shift_dipolar"][2][2]
    wide = document("shift", "study.toml", "--orbit")
    assert wide["means"] == []
    assert "muon A: no mean over its positions beside those equivalent to each; leave --orbit out" in wide["notes"]


def test_uncertain_ions_move_all_positions_together():
    """What a step of an ion does to the mean tensor, against the mean tensor of a crystal with that ion moved."""
    from latticedip.observables.coupling_tensor import averaged

    cell = np.array([[4.0, 0, 0], [0.5, 4.4, 0], [0.2, -0.3, 5.0]])
    places, weights = [[0.5, 0.3, 0.1], [0.1, 0.7, 0.6]], np.array([0.7, 0.3])

    def mean(step: float, su: float | None) -> ld.CouplingTensor:
        crystal = ld.Crystal(
            cell, [[0.1 + step, 0.2, 0.3]], ["Mn"], position_su=None if su is None else [[su, np.nan, np.nan]]
        )
        return averaged([ld.coupling_tensor(crystal, place, magnetic="Mn") for place in places], weights)

    h = 1e-4
    slope = (mean(h, None).dipolar - mean(-h, None).dipolar) / (2 * h)
    np.testing.assert_allclose(mean(0.0, 1e-3).dipolar_su, np.abs(slope) * 1e-3, rtol=1e-4, atol=1e-9)


# --- spectra --------------------------------------------------------------------------------------------


def test_the_lines_of_a_mixture(folder):
    """In the cube every edge centre is equivalent, and so is every face centre: sizes t (2 of 3) and 2t (1 of 3)."""
    text = STUDY + PROBE.replace("[0, 0.5, 0], [0, 0, 0.5]]", '["1/2", "1/2", 0], [0.5, 0.5, 0.5]]')
    Path("study.toml").write_text(text, encoding="utf-8")
    study = ld.read_study("study.toml")
    spectra = tasks.spectrum(study, SpectrumOptions(), orderings=["up"])["orderings"][0]["spectra"]
    assert [found["probe"] for found in spectra] == [*study.weighted[0].members, "muon B", "muon A"]
    edge = 2 * edge_coupling()
    face = -2 * float(ld.coupling_tensor(study.crystal, [0.5, 0.5, 0], magnetic="Mn").dipolar[2, 2])
    expected = sorted(
        [(edge / 2, 0.25 * 2 / 3), (edge, 0.25 / 3), (abs(face) / 2, 0.25 * 2 / 3), (abs(face), 0.25 / 3), (0.0, 0.5)]
    )
    lines = [(line["field_T"], line["share"]) for line in spectra[-1]["lines"]]
    assert [share for _, share in lines] == pytest.approx([share for _, share in expected])
    assert [at for at, _ in lines] == pytest.approx([at for at, _ in expected], rel=2e-3, abs=1e-9)
    assert spectra[-1]["equivalent_positions"] == 3 + 3 + 1
    assert spectra[-1]["mean_T"] == pytest.approx(sum(at * share for at, share in lines))
    assert sum(spectra[-1]["histogram"]["share"]) == pytest.approx(1)
    assert spectra[-1]["weights"] == [0.25, 0.25, 0.5]
    note = (
        "muon A: a static mixture: it sits at one of its positions, each with all equivalent to it, as often as the "
        "weights say"
    )
    assert note in tasks.spectrum(study, SpectrumOptions())["orderings"][0]["notes"]
    table = run("spectrum", "study.toml", "--ordering", "up", "--csv", "out.csv")
    assert table.exit_code == 0 and "muon A  " in table.stdout


def test_bins_and_polarization_of_a_mixture(folder):
    """Each position smeared by its own width; the spin precesses about each field that occurs, worked out here."""
    study = ld.read_study("study.toml")
    options = SpectrumOptions(width_T=0.003, bins=50, time_us=0.5, points=21, initial="a")
    spectra = tasks.spectrum(study, options, orderings=["wave"])["orderings"][0]["spectra"]
    mixed = spectra[-1]
    ordering = study.orderings[1]
    probes = study.probes[:3]
    each = [ld.spectrum(ordering, probe, sample=study.sample, width_T=0.003) for probe in probes]
    edges = np.array(mixed["histogram"]["field_limits_T"])
    whole = sum(w * one.distribution.cumulative(edges[1:-1]) for w, one in zip((0.25, 0.25, 0.5), each, strict=True))
    np.testing.assert_allclose(np.cumsum(mixed["histogram"]["share"])[:-1], whole, atol=1e-12)
    time = np.array(mixed["polarization"]["time_us"])
    expected = np.zeros(len(time))
    for weight, probe in zip((0.25, 0.25, 0.5), probes, strict=True):
        images = ld.orbit(study.crystal, probe.position)
        # In a sphere, without an applied field; the next cell shows the opposite field.
        for field in ld.local_field(ordering, images, sample=study.sample).total:
            size = np.linalg.norm(field)
            along = field[0] / size if size > 1e-12 else 1.0
            turn = 2 * np.pi * probe.MHz_per_T * size
            expected += weight / len(images) * (along**2 + (1 - along**2) * np.cos(turn * time))
    np.testing.assert_allclose(mixed["polarization"]["polarization"], expected, atol=1e-8)


def test_a_position_without_weight_shows_nothing(folder):
    text = STUDY + PROBE.replace("[1, 1, 2]", "[1, 0, 0]").replace("[0, 0.5, 0]", "[0.5, 0.5, 0.5]")
    Path("study.toml").write_text(text, encoding="utf-8")
    spectra = tasks.spectrum(ld.read_study("study.toml"), SpectrumOptions(domains="list"))["orderings"][1]["spectra"]
    first = [found for found in spectra if found["probe"] == "muon A, position 1"]
    mixed = [found for found in spectra if found["probe"] == "muon A"]
    assert len(first) == len(mixed) > 0
    for one, other in zip(first, mixed, strict=True):
        assert one["domain"] == other["domain"]
        assert one["lines"] == other["lines"]
        assert one["histogram"]["share"] == pytest.approx(other["histogram"]["share"])


def test_a_mixture_of_bands_and_nuclear_widths(folder):
    ordering = ld.Ordering(ld.read_study("study.toml").crystal, [[0, 0, 2.0]], (0.213, 0, 0))
    each = [
        ld.spectrum(ordering, ld.Probe(place), nuclear_width_T=width)
        for place, width in (([0.5, 0.5, 0.12], 0.001), ([0.5, 0.4, 0.3], 0.002))
    ]
    mixed = MixedSpectrum("muon A", tuple(each), np.array([0.4, 0.6]))
    edges, share = mixed.binned(40)
    assert share.sum() == pytest.approx(1)
    whole = 0.4 * each[0].distribution.cumulative(edges[1:-1]) + 0.6 * each[1].distribution.cumulative(edges[1:-1])
    np.testing.assert_allclose(np.cumsum(share)[:-1], whole, atol=1e-12)
    plain = mixed.to_dict()
    assert sum(band["share"] for band in plain["bands"]) + sum(line["share"] for line in plain["lines"]) == (
        pytest.approx(1)
    )
    assert plain["nuclear_width_T"] == pytest.approx(np.sqrt(0.4 * 0.001**2 + 0.6 * 0.002**2))
    assert plain["rms_T"] ** 2 == pytest.approx(
        0.4 * each[0].distribution.rms_T ** 2 + 0.6 * each[1].distribution.rms_T ** 2
    )


# --- other commands and choices -------------------------------------------------------------------------


def test_commands_that_do_not_average_say_so(folder):
    study = ld.read_study("study.toml")
    ranked = tasks.rank(study)
    told = "muon A: fields are given at each of its 3 positions, not averaged with their weights"
    assert f"{told}; `field` gives the averages" in ranked["notes"]
    assert set(ranked["rows"][0]["fields"]) == {*study.weighted[0].members, "muon B"}
    width = tasks.linewidth(study)
    told = "muon A: widths are given at each of its 3 positions, not averaged with their weights"
    assert told in width["notes"] and len(width["rows"]) == 4
    assert told not in tasks.linewidth(study, probes=["muon B"])["notes"]
    shown = tasks.show(Path("study.toml"))
    assert [probe["weight"] for probe in shown["probes"]] == [0.25, 0.25, 0.5, None]
    assert shown["probes"][2]["motion"] == ["one of 3 positions of muon A, weight 0.5"]


def test_a_probe_is_chosen_by_its_name_or_that_of_a_position(folder):
    study = ld.read_study("study.toml")
    whole = tasks.choose(study, probes=["muon A"])
    assert [probe.name for probe in whole.probes] == list(study.weighted[0].members)
    assert whole.weighted == study.weighted
    part = tasks.choose(study, probes=["muon A, position 2", "muon B"])
    assert [probe.name for probe in part.probes] == ["muon A, position 2", "muon B"]
    assert part.weighted == ()
    assert tasks.field(study, probes=["muon A, position 2"])["orderings"][0]["averages"] == []
    with pytest.raises(InputError) as caught:
        tasks.choose(study, probes=["muon C"])
    assert str(caught.value) == (
        "the study has no probe named 'muon C'. Those it has: 'muon A', 'muon A, position 1', 'muon A, position 2', "
        "'muon A, position 3', 'muon B'. Did you mean 'muon B'?"
    )


PLACES = "positions = [[0.1, 0.2, 0.3], [0.3, 0.2, 0.1]]\n"
LIST = "a list of positions, each of three fractional coordinates, such as [[0.5, 0.5, 0.12], [0.5, 0.5, 0.88]]."
TRIPLE = 'expected three fractional coordinates, such as [0.5, 0.5, 0.12] or ["1/3", "2/3", 0].'


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("positions = []\nweights = []", f"`probe[1].positions`: got [], expected {LIST}"),
        ('positions = "x"\nweights = [1]', f'`probe[1].positions`: got "x", expected {LIST}'),
        (
            "positions = [0.1, 0.2, 0.3]\nweights = [1]",
            f"`probe[1].positions`: got [0.1, 0.2, 0.3], expected {LIST} One position, too, stands in brackets of its "
            "own.",
        ),
        ("positions = [[0.1, 0.2, 0.3], 0.5]\nweights = [1, 1]", f"`probe[1].positions[2]`: got 0.5, {TRIPLE}"),
        ("positions = [[0.1, 0.2]]\nweights = [1]", f"`probe[1].positions[1]`: got [0.1, 0.2], {TRIPLE}"),
        (
            'positions = [[0, 0, 0.2], [0.1, "x", 0]]\nweights = [1, 1]',
            '`probe[1].positions[2][2]`: got "x", expected a finite number or a fraction such as "1/3".',
        ),
        (PLACES, "`probe[1].weights`: missing, expected one number of at least 0 for each of `positions`."),
        (PLACES + "weights = [1]", "`probe[1].weights`: has 1 entries, expected 2, one for each of `positions`."),
        (
            PLACES + "weights = 1",
            "`probe[1].weights`: got 1, expected a list of numbers, one for each of `positions`, such as [1, 1].",
        ),
        (PLACES + "weights = [1, -1]", "`probe[1].weights[2]`: got -1, expected a number of at least 0."),
        (PLACES + "weights = [1, inf]", "`probe[1].weights[2]`: got inf, expected a number of at least 0."),
        (PLACES + "weights = [1, true]", "`probe[1].weights[2]`: got true, expected a number of at least 0."),
        (PLACES + "weights = [0, 0]", "`probe[1].weights`: weights are all 0: at least one position must count."),
        (
            PLACES + "weights = [1, 1]\nposition = [0, 0, 0.5]",
            "`probe[1]`: `position` and `positions` name two places. Leave one out.",
        ),
        (
            PLACES + 'weights = [1, 1]\nsite = "Mn"',
            "`probe[1]`: `site` and `positions` name two places. Leave one out.",
        ),
        (
            "position = [0, 0, 0.5]\nweights = [1]",
            "`probe[1].weights`: goes with `positions`, and the probe has none. Leave it out.",
        ),
        (
            PLACES + "weights = [1, 1]\nposition_su = [0.1, 0.1, 0.1]",
            "`probe[1].position_su`: goes with `position`, and the probe has `positions`. Leave it out.",
        ),
        (
            'rule = "every Mn site"\n' + PLACES,
            "`probe[1].positions`: unknown key; known here are rule, name, particle, spacing_A, spread_A, "
            "covariance_A2, Uij, displaced.",
        ),
        (
            PLACES + 'weights = [1, 1]\nname = "A"\n[[probe]]\nname = "A, position 2"\nposition = [0, 0, 0.5]',
            '`probe[2].name`: got "A, position 2", expected a name of its own (probe[1] has this one).',
        ),
        (
            PLACES + "weights = [1, 1]\n[[probe]]\n" + PLACES + "weights = [1, 1]",
            "`probe[2]`: without `name` it is called 'muon at 2 positions', as probe[1] is already. Give it a name.",
        ),
    ],
)
def test_refusals(folder, text, message):
    Path("study.toml").write_text(STUDY + "[[probe]]\n" + text, encoding="utf-8")
    with pytest.raises(StudyError) as caught:
        ld.read_study("study.toml")
    assert str(caught.value) == f"study.toml: {message}"
