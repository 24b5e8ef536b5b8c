"""A study file becomes a crystal, orderings, probes and a sample in one frame."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import latticedip as ld
from latticedip.report.show import show_text
from latticedip.study.tasks import show

DATA = Path(__file__).parent / "data" / "study"


def study_of(folder, text, crystal="centred.cif"):
    """Read a study that is written into a folder, with one of the stored crystals."""
    path = folder / "study.toml"
    source = (DATA / crystal).as_posix()
    path.write_text(f'[crystal]\nfile = "{source}"\n{text}', encoding="utf-8")
    return ld.read_study(path)


@pytest.fixture
def chains():
    return ld.read_study(DATA / "chains.toml")


def test_every_section_is_read(chains):
    assert chains.title == "Which way do the chains order?"
    assert chains.path == DATA / "chains.toml"
    assert chains.crystal.n_sites == 7
    names = ["antiparallel layers", "ordering 2", "cycloid", "doubled"]
    assert [ordering.name for ordering in chains.orderings] == names
    assert [probe.name for probe in chains.probes] == ["muon A", "19F at F1"]
    assert chains.moments == {"Mn": 4.6}
    assert chains.files == {
        "study": DATA / "chains.toml",
        "crystal": DATA / "tetragonal.cif",
        "ordering 4": DATA / "doubled.mcif",
    }
    assert chains.sample.shape == "ellipsoid 1 × 1 × 0.3, body axes (1, 0, 0), (0, 1, 0), (0, 0, 1)"
    np.testing.assert_array_equal(chains.sample.applied_T, [0, 0, 0.1])


def test_orderings_of_the_example(chains):
    layers, third, cycloid, doubled = chains.orderings
    np.testing.assert_array_equal(layers.moments([(0, 0, 0), (0, 0, 1)])[:, :2, 2], [[4.6, -4.6], [-4.6, 4.6]])
    assert third.k[0, 0] == 1 / 3
    np.testing.assert_allclose(third.components[0, 0], np.array([4.6, 4.6, 0]) / 2**0.5)
    # m(x) = C cos(2πk·x) + S sin(2πk·x), from a towards c as x grows.
    turn = 2 * np.pi * 0.213 * 5
    np.testing.assert_allclose(cycloid.moments([(5, 0, 0)])[0, 0], 4.6 * np.array([np.cos(turn), 0, np.sin(turn)]))
    assert doubled.crystal.n_sites == 14
    assert doubled.reference.crystal is chains.crystal


def test_probes_of_the_example(chains):
    muon, fluorine = chains.probes
    np.testing.assert_array_equal(muon.position, [0.5, 0.5, 0.12])
    shell, radius, density = muon.contact
    np.testing.assert_array_equal(shell.coupling_T_per_muB, 0.06 * np.eye(3))
    assert (shell.shell, radius.within) == (1, 3.5)
    np.testing.assert_array_equal(radius.coupling_T_per_muB, np.diag([0.1, 0.1, 0.2]))
    np.testing.assert_array_equal(density.moment_density_muB_per_A3, [0, 0, 0.01])
    assert (fluorine.site, fluorine.particle) == ("F1", "19F")


def test_the_same_order_in_two_cells_gives_the_same_fields(chains, tmp_path):
    """Signs at k = (0, 0, ½) and a magCIF of the doubled cell describe one structure."""
    study = study_of(
        tmp_path,
        f"""
[moments]
Mn1 = 4.5
[[ordering]]
name = "signs"
k = [0, 0, 0.5]
along = [1, 0, 0]
signs = {{ Mn1 = "++" }}
[[ordering]]
file = "{(DATA / "doubled.mcif").as_posix()}"
[[probe]]
position = [0.5, 0.5, 0.12]
[[probe]]
particle = "19F"
site = "F1"
""",
        crystal="tetragonal.cif",
    )
    here, there = (ld.local_field(ordering, study.probes) for ordering in study.orderings)
    assert list(there.multiplicity) == [2, 2, 2, 2]
    assert list(here.multiplicity) == [1, 1]
    for name in ("muon at (0.5, 0.5, 0.12)", "19F at F1"):
        ours = here.total[[n == name for n in here.probe_names]]
        theirs = there.total[[n == name for n in there.probe_names]]
        # The second cell of the doubled one carries the opposite field.
        np.testing.assert_allclose(np.abs(theirs), np.tile(np.abs(ours), (2, 1)), atol=1e-9)
        np.testing.assert_allclose(theirs.sum(axis=0), 0, atol=1e-9)
    one, two = (ld.dipolar_energy(ordering) for ordering in study.orderings)
    assert one.per_ion_eV == pytest.approx(two.per_ion_eV, abs=1e-14)


def test_the_example_ranks(chains):
    ranking = ld.rank(chains.orderings, sample=chains.sample, probes=chains.probes)
    assert {row.ordering.name for row in ranking.rows} == {ordering.name for ordering in chains.orderings}


def test_a_crystal_alone_is_a_study(tmp_path):
    study = study_of(tmp_path, "")
    assert (study.title, study.orderings, study.probes, dict(study.moments)) == ("study", (), (), {})
    assert study.sample.shape == "no shape stated (N = 0)"


def test_a_byte_order_mark_and_windows_line_ends_are_taken(tmp_path):
    path = tmp_path / "study.toml"
    text = f'title = "café"\r\n[crystal]\r\nfile = "{(DATA / "centred.cif").as_posix()}"\r\n'
    path.write_bytes(b"\xef\xbb\xbf" + text.encode())
    assert ld.read_study(str(path)).title == "café"


def test_susceptibilities_and_abundances(tmp_path):
    study = study_of(
        tmp_path,
        """
[susceptibility]
Mn1 = { chi = [[1, 0, 0], [0, 1, 0], [0, 0, 2]], unit = "muB/T", local = true }
O = { chi = [0.02, 0.01], unit = "cm3/mol", temperatures_K = [100, 50] }
[abundances]
17O = 0.4
""",
        crystal="tetragonal.cif",
    )
    manganese, oxygen = study.susceptibility.values()
    assert list(study.susceptibility) == ["Mn1", "O"]
    assert (manganese.unit, manganese.local) == ("muB/T", True)
    np.testing.assert_array_equal(manganese.at(), np.diag([1, 1, 2]))
    np.testing.assert_array_equal(oxygen.temperatures_K, [50, 100])
    np.testing.assert_array_equal(oxygen.chi, [0.01, 0.02])
    assert study.abundances == {"17O": 0.4}
    assert manganese.words() == "1.33333 muB/T, tensor of the first atom, turned for the others"
    assert oxygen.words() == "0.01 cm3/mol at 50 K to 0.02 cm3/mol at 100 K, 2 temperatures, isotropic"


def test_what_show_says_of_susceptibilities_and_abundances(tmp_path):
    text = '[susceptibility]\nMn = { chi = 0.01, unit = "cm3/mol" }\n[abundances]\n17O = 0.4\n'
    shown = show(study_of(tmp_path, text, crystal="tetragonal.cif").path)
    assert shown["susceptibility"] == {"Mn": "0.01 cm3/mol, isotropic"}
    assert shown["abundances"] == {"17O": 0.4}
    assert not any("often carries a moment" in warning for warning in shown["warnings"])
    words = " ".join(show_text(shown).split())
    assert "Susceptibility Mn 0.01 cm3/mol, isotropic Abundances stated 17O 0.4" in words


# Signs


def signs(tmp_path, k, extra, moments="Co = 2.0"):
    study = study_of(tmp_path, f"[moments]\n{moments}\n[[ordering]]\nk = {k}\nalong = [0, 0, 1]\n{extra}")
    return study.crystal, study.orderings[0]


def z_by_height(crystal, ordering, label, cell=(0, 0, 0)):
    """z component by (x, z) of each atom of a label."""
    moments = ordering.moments([cell])[0, :, 2]
    return {
        (round(float(crystal.positions[i, 0]), 2), round(float(crystal.positions[i, 2]), 2)): float(moments[i])
        for i in crystal.find(label)
    }


def test_one_sign_per_atom_of_the_primitive_cell(tmp_path):
    crystal, ordering = signs(tmp_path, "[0, 0, 1]", 'signs = { Co1 = "+-" }')
    # (0, 0, 0.16) +, (0, 0, 0.84) −; their body-centred images are reversed.
    assert z_by_height(crystal, ordering, "Co1") == {(0, 0.16): 2, (0, 0.84): -2, (0.5, 0.66): -2, (0.5, 0.34): 2}
    # Co2 is left out of `signs`: all +, and the image by the centring rule.
    assert z_by_height(crystal, ordering, "Co2") == {(0, 0.5): 2, (0.5, 0): -2}


def test_one_sign_per_atom_of_the_whole_cell(tmp_path):
    crystal, ordering = signs(tmp_path, "[0, 0, 0.5]", 'signs = { Co1 = "+-0+", Co2 = "00" }')
    # In site order: (0, 0.16), (0, 0.84), (0.5, 0.34), (0.5, 0.66).
    assert z_by_height(crystal, ordering, "Co1") == {(0, 0.16): 2, (0, 0.84): -2, (0.5, 0.34): 0, (0.5, 0.66): 2}
    assert ordering.n_ions == 3


def test_signs_by_element_cover_all_its_labels(tmp_path):
    crystal, ordering = signs(tmp_path, "[0, 0, 0]", 'signs = { Co = "++-" }')
    assert z_by_height(crystal, ordering, "Co1") == {(0, 0.16): 2, (0, 0.84): -2, (0.5, 0.66): 2, (0.5, 0.34): -2}
    assert z_by_height(crystal, ordering, "Co2") == {(0, 0.5): 2, (0.5, 0): 2}


def test_a_size_by_label_goes_before_the_element(tmp_path):
    for moments in ("Co = 2.0\nCo2 = 0.5", "Co2 = 0.5\nCo = 2.0"):
        crystal, ordering = signs(tmp_path, "[0, 0, 0]", "", moments)
        assert set(z_by_height(crystal, ordering, "Co1").values()) == {2.0}
        assert set(z_by_height(crystal, ordering, "Co2").values()) == {0.5}


def test_a_size_of_zero_takes_a_label_out(tmp_path):
    _, ordering = signs(tmp_path, "[0, 0, 0]", "", "Co = 2.0\nCo2 = 0")
    assert ordering.n_ions == 4


def test_directions_by_label(tmp_path):
    study = study_of(
        tmp_path,
        "[moments]\nCo1 = 2\nCo2 = 1\n[[ordering]]\nk = [0, 0, 0]\nalong = { Co1 = [0, 0, 2], Co2 = [3, 0, 0] }\n",
    )
    crystal, ordering = study.crystal, study.orderings[0]
    np.testing.assert_array_equal(ordering.moments()[0, list(crystal.find("Co1"))], [[0, 0, 2]] * 4)
    np.testing.assert_array_equal(ordering.moments()[0, list(crystal.find("Co2"))], [[1, 0, 0]] * 2)


def test_a_third_cut_short_is_told(tmp_path):
    _, ordering = signs(tmp_path, "[0.3333, 0, 0]", "")
    assert ordering.notes == (
        'k = (0.3333, 0, 0) is taken as written; a third or a sixth is given exactly by a string such as "1/3"',
    )
    assert signs(tmp_path, '["-1/3", 0, 0]', "")[1].notes == ()
    assert "taken as written" in signs(tmp_path, "[0.33, 0, 0]", "")[1].notes[0]
    assert "taken as written" in signs(tmp_path, "[0, 0.17, 0]", "")[1].notes[0]
    assert signs(tmp_path, "[0.336, 0.34, 0]", "")[1].notes == ()


# Cosine and sine


@given(
    k=st.tuples(*[st.floats(-0.9, 0.9).map(lambda x: round(x, 2))] * 3),
    cosine=st.tuples(*[st.floats(-3, 3)] * 3),
    sine=st.tuples(*[st.floats(-3, 3)] * 3),
)
@settings(max_examples=25, deadline=None)
def test_amplitudes_follow_the_position(tmp_path_factory, k, cosine, sine):
    """m(x) = C cos(2πk·x) + S sin(2πk·x) at every atom x = τ + R, centring images and whole cells alike."""
    folder = tmp_path_factory.mktemp("wave")
    text = f"[[ordering]]\nk = {list(k)}\ncosine = {{ Co1 = {list(cosine)} }}\nsine = {{ Co1 = {list(sine)} }}\n"
    try:
        study = study_of(folder, text)
    except ld.LatticedipError:
        # A wave that vanishes on every atom; the exact messages are tested with the other broken studies.
        assert np.all(np.array(k) * 2 == np.round(np.array(k) * 2)) or not any((*cosine, *sine))
        return
    ordering, sites = study.orderings[0], list(study.crystal.find("Co1"))
    cells = np.array([(0, 0, 0), (1, 0, 0), (2, -1, 3)])
    turns = 2 * np.pi * (study.crystal.positions[sites][None] + cells[:, None]) @ np.array(k)
    expected = np.array(cosine) * np.cos(turns)[..., None] + np.array(sine) * np.sin(turns)[..., None]
    size = max(1e-12, np.abs([*cosine, *sine]).max())
    np.testing.assert_allclose(ordering.moments(cells)[:, sites], expected, atol=2e-4 * size)


def test_phase_cell_counts_cells(tmp_path):
    study = study_of(
        tmp_path,
        '[[ordering]]\nk = [0, 0, 0.3]\ncosine = { Co2 = [1, 0, 0] }\nsine = { Co2 = [0, 2, 0] }\nphase = "cell"\n',
    )
    ordering, crystal = study.orderings[0], study.crystal
    heads = {round(float(crystal.positions[i, 2]), 2): i for i in crystal.find("Co2")}
    # In site order (0, 0, ½) comes first and counts cells; (½, ½, 0) = (0, 0, ½) + t − c lies half a cell below.
    np.testing.assert_allclose(ordering.components[0, heads[0.5]], [1, 2j, 0])
    np.testing.assert_allclose(ordering.components[0, heads[0.0]], np.array([1, 2j, 0]) * np.exp(2j * np.pi * 0.15))
    turn = 2 * np.pi * 0.3
    np.testing.assert_allclose(
        ordering.moments([(0, 0, 1)])[0, heads[0.5]], [np.cos(turn), 2 * np.sin(turn), 0], atol=1e-12
    )


@pytest.mark.parametrize(
    ("entries", "values"),
    [("[[1, 0, 0], [0, 2, 0]]", {0.16: 1, 0.66: 1, 0.84: 2, 0.34: 2}), ("[[1,0,0],[2,0,0],[3,0,0],[4,0,0]]", None)],
)
def test_a_triple_per_atom(tmp_path, entries, values):
    study = study_of(tmp_path, f"[[ordering]]\nk = [0, 0, 0]\ncosine = {{ Co1 = {entries} }}\n")
    sizes = np.linalg.norm(study.orderings[0].moments()[0], axis=1)
    heights = {round(float(z), 2): float(s) for z, s in zip(study.crystal.positions[:, 2], sizes, strict=True) if s}
    assert heights == (values or {0.16: 1, 0.84: 2, 0.34: 3, 0.66: 4})


def test_amplitudes_are_along_unit_vectors(tmp_path):
    (tmp_path / "skew.xyz").write_text(
        '1\nLattice="3 0 0 0 4 0 -2 0 5" Properties=species:S:1:pos:R:3 pbc="T T T"\nFe 0 0 0\n', encoding="utf-8"
    )
    path = tmp_path / "study.toml"
    path.write_text('[crystal]\nfile = "skew.xyz"\n[[ordering]]\nk = [0,0,0]\ncosine = { Fe = [1, 2, 3] }\n')
    expected = np.array([1, 0, 0]) + np.array([0, 2, 0]) + 3 * np.array([-2, 0, 5]) / 29**0.5
    np.testing.assert_allclose(ld.read_study(path).orderings[0].components[0, 0].real, expected)


# Samples


@pytest.mark.parametrize(
    ("lines", "tensor"),
    [
        ("sphere = true", np.eye(3) / 3),
        ('plate = true\naxes = ["c"]', np.diag([0, 0, 1.0])),
        ("needle = true\naxes = [[1, 1, 0]]", (np.eye(3) - np.outer([1, 1, 0], [1, 1, 0]) / 2) / 2),
        ("tensor = [[0.5, 0, 0], [0, 0.3, 0], [0, 0, 0.2]]", np.diag([0.5, 0.3, 0.2])),
        ("cylinder = [2.0, 2.0]", None),
        ("applied_T = [0, 0, 1]", np.zeros((3, 3))),
    ],
)
def test_shapes(tmp_path, lines, tensor):
    sample = study_of(tmp_path, f"[sample]\n{lines}\n").sample
    expected = ld.Sample.cylinder(2, 2).demagnetizing_tensor if tensor is None else tensor
    np.testing.assert_allclose(sample.demagnetizing_tensor, expected, atol=1e-12)


def test_orientations(tmp_path):
    flat = study_of(tmp_path, '[sample]\nellipsoid = [2, 1, 0.3]\naxes = ["c", "a"]\n').sample
    straight = np.diag(ld.Sample.ellipsoid([2, 1, 0.3]).demagnetizing_tensor)
    # The first axis lies along c, the second along a, the third along b.
    np.testing.assert_allclose(np.diag(flat.demagnetizing_tensor), straight[[1, 2, 0]], atol=1e-12)
    prism = study_of(tmp_path, "[sample]\nprism = [2, 1, 0.3]\naxes = [[1, 0, 0], [1, 1, 0]]\n").sample
    np.testing.assert_allclose(
        prism.demagnetizing_tensor, ld.Sample.prism([2, 1, 0.3]).demagnetizing_tensor, atol=1e-12
    )
    rod = study_of(tmp_path, '[sample]\ncylinder = [1, 4]\naxes = ["b*"]\n').sample
    upright = np.diag(ld.Sample.cylinder(1, 4).demagnetizing_tensor)
    np.testing.assert_allclose(np.diag(rod.demagnetizing_tensor), upright[[0, 2, 1]], atol=1e-12)


def test_reciprocal_directions(tmp_path):
    (tmp_path / "skew.xyz").write_text(
        '1\nLattice="3 0 0 0 4 0 -2 0 5" Properties=species:S:1:pos:R:3 pbc="T T T"\nFe 0 0 0\n', encoding="utf-8"
    )
    path = tmp_path / "study.toml"
    path.write_text('[crystal]\nfile = "skew.xyz"\n[sample]\nplate = true\naxes = ["a*"]\n')
    normal = np.array([5, 0, 2]) / 29**0.5  # across b and c
    np.testing.assert_allclose(ld.read_study(path).sample.demagnetizing_tensor, np.outer(normal, normal), atol=1e-12)


# Centred cells as a diffractionist means them


@pytest.mark.parametrize(
    ("k", "literal_k", "literal"),
    [("[0, 0, 1]", "[0, 0, 0]", "+--+"), ("[0.5, 0.5, 0.5]", "[0.5, 0.5, 0.5]", "+---")],
)
def test_a_centred_k_and_its_signs_written_out_are_one_ordering(tmp_path, k, literal_k, literal):
    """Type I and type II of a face-centred lattice; sites in order (0,0,0), (0,½,½), (½,0,½), (½,½,0)."""
    (tmp_path / "fcc.cif").write_text(
        "data_fcc\n_cell_length_a 4.4\n_cell_length_b 4.4\n_cell_length_c 4.4\n_cell_angle_alpha 90\n"
        "_cell_angle_beta 90\n_cell_angle_gamma 90\n_space_group_name_H-M_alt 'F m -3 m'\nloop_\n_atom_site_label\n"
        "_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\nMn1 0 0 0\nO1 0.5 0.5 0.5\n",
        encoding="utf-8",
    )
    path = tmp_path / "study.toml"
    path.write_text(
        f"""
[crystal]
file = "fcc.cif"
[moments]
Mn = 5.0
[[ordering]]
name = "by k"
k = {k}
along = [1, -1, 0]
signs = {{ Mn1 = "+" }}
[[ordering]]
name = "written out"
k = {literal_k}
along = [1, -1, 0]
signs = {{ Mn1 = "{literal}" }}
[[probe]]
position = [0.21, 0.13, 0.34]
""",
        encoding="utf-8",
    )
    study = ld.read_study(path)
    one, two = study.orderings
    np.testing.assert_allclose(one.components, two.components, atol=1e-12)
    assert ld.dipolar_energy(one).per_ion_eV == pytest.approx(ld.dipolar_energy(two).per_ion_eV, rel=1e-10)
    np.testing.assert_allclose(
        ld.local_field(one, study.probes).total, ld.local_field(two, study.probes).total, atol=1e-9
    )
    assert {row.tie for row in ld.rank(study.orderings, rotate=True).rows} == {True}
