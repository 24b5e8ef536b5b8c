"""The study that `start` writes: read by `read_study`, run by `rank`, honest about what it does not know."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest

from latticedip.crystal.model import Crystal, Operations
from latticedip.errors import FileError, InputError
from latticedip.ordering.model import Ordering
from latticedip.study.rank_options import RankOptions
from latticedip.study.schema import read_study
from latticedip.study.start import (
    best_nucleus,
    doubling_vectors,
    likely_magnetic,
    sign_patterns,
    starting_study,
)
from latticedip.study.tasks import rank, start
from tests.commands import box_cif

CUBE = np.eye(3) * 4.0


def simple_cubic(element: str = "Mn") -> Crystal:
    return Crystal.from_ase(_atoms([element], [[0, 0, 0]], CUBE))


def _atoms(symbols: list[str], positions: list[list[float]], cell: np.ndarray):
    from ase import Atoms

    return Atoms(symbols, scaled_positions=positions, cell=cell, pbc=True)


def centred(shifts: list[list[float]], element: str = "Fe") -> Crystal:
    return Crystal.from_ase(_atoms([element] * len(shifts), shifts, CUBE))


BODY = [[0, 0, 0], [0.5, 0.5, 0.5]]
FACES = [[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]]


def test_zone_boundary_vectors_of_the_cubic_lattices() -> None:
    # The points of the Brillouin zone whose double is a reciprocal-lattice vector: X, M, R; N, H; L, X.
    assert doubling_vectors(simple_cubic()) == [(0, 0, 0.5), (0.5, 0.5, 0), (0.5, 0.5, 0.5)]
    assert doubling_vectors(centred(BODY)) == [(0.5, 0.5, 0), (0, 0, 1)]
    assert doubling_vectors(centred(FACES)) == [(0.5, 0.5, 0.5), (0, 0, 1)]


def test_every_zone_boundary_vector_without_symmetry() -> None:
    cell = np.array([[5.1, 0, 0], [0.7, 6.2, 0], [0.9, -0.4, 7.7]])
    crystal = Crystal(cell, [[0, 0, 0], [0.21, 0.34, 0.42]], ("Ni", "O"), ("Ni1", "O1"))
    assert len(doubling_vectors(crystal)) == 7


def test_a_layer_has_no_vector_out_of_its_plane() -> None:
    identity = Operations(np.eye(3, dtype=int)[None], np.zeros((1, 3)))
    layer = Crystal(CUBE, [[0, 0, 0]], ("Cr",), pbc=(True, True, False), operations=identity)
    assert doubling_vectors(layer) == [(0.5, 0, 0), (0, 0.5, 0), (0.5, 0.5, 0)]


def test_magnetic_elements() -> None:
    crystal = Crystal(CUBE, [[0, 0, 0], [0.5, 0, 0], [0, 0.5, 0]], ("Ti", "Cu", "O"), ("Ti1", "Cu1", "O1"))
    assert likely_magnetic(crystal) == ["Cu1"]
    assert likely_magnetic(simple_cubic("Ti")) == ["Ti1"]
    assert likely_magnetic(simple_cubic("Si")) == []


def test_the_strongest_nucleus() -> None:
    found = [best_nucleus(element) for element in ("F", "Cl", "Li", "Ce")]
    assert [nucleus and nucleus[0] for nucleus in found] == ["19F", "35Cl", "7Li", None]


def test_a_placeholder_is_marked_and_a_stated_size_is_not() -> None:
    guessed = starting_study(simple_cubic(), "x.cif")
    assert "# TO BE REPLACED: which sites are magnetic was guessed" in guessed
    assert tomllib.loads(guessed)["moments"] == {"Mn1": 1.0}
    stated = starting_study(simple_cubic(), "x.cif", sizes_muB={"Mn": 4.6})
    assert "TO BE REPLACED" not in stated
    assert tomllib.loads(stated)["moments"] == {"Mn1": 4.6}


def test_names_that_toml_must_quote() -> None:
    labels = ("Mn\"1'", "O 2")
    crystal = Crystal(CUBE, [[0, 0, 0], [0.5, 0.5, 0.5]], ("Mn", "O"), labels)
    study = tomllib.loads(starting_study(crystal, 'a "b"\\c µ.cif', block="of\x7fit"))
    assert study["crystal"] == {"file": 'a "b"\\c µ.cif', "block": "of\x7fit"}
    assert study["moments"] == {labels[0]: 1.0}
    assert study["probe"][0]["site"] == labels[1]


def test_a_label_cannot_end_a_comment() -> None:
    crystal = Crystal(CUBE, [[0, 0, 0]], ("Mn",), ("Mn\nevil = 1",))
    assert "evil" not in tomllib.loads(starting_study(crystal, "x.cif"))


def test_refusals() -> None:
    with pytest.raises(InputError) as caught:
        starting_study(simple_cubic("Si"), "x.cif")
    assert str(caught.value) == (
        "no site holds an element that usually carries a moment (the elements are Si). Name the magnetic sites and "
        "their moments in Bohr magnetons, for example: --moment Mn1=4.6"
    )
    with pytest.raises(InputError) as caught:
        starting_study(simple_cubic(), "x.cif", sizes_muB={"Mn1": -2.0})
    assert str(caught.value) == "the moment of 'Mn1' must be a positive number of Bohr magnetons, got -2.0."
    with pytest.raises(InputError, match=r"no site has the label or element 'Mm1'.*Did you mean 'Mn1'"):
        starting_study(simple_cubic(), "x.cif", sizes_muB={"Mm1": 2.0})
    with pytest.raises(FileError) as caught:
        starting_study(simple_cubic(), "\udcff.cif")
    assert str(caught.value) == "the name '\\udcff.cif' is not valid Unicode, so a study cannot hold it."


def test_sign_patterns_are_balanced_and_distinct() -> None:
    crystal = Crystal(
        CUBE,
        [[0, 0, 0], [0.5, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0.5], [0.5, 0.5, 0.5], [0.1, 0.2, 0.3]],
        ("Fe", "Fe", "Fe", "Fe", "Mn", "O"),
        ("Fe1", "Fe1", "Fe1", "Fe1", "Mn1", "O1"),
    )
    study = tomllib.loads(starting_study(crystal, "x.cif"))
    signs = [entry["signs"] for entry in study["ordering"] if "signs" in entry]
    assert signs == [{"Fe1": "+-+-"}, {"Fe1": "++--"}, {"Fe1": "+--+"}, {"Mn1": "-"}]
    assert sign_patterns([]) == []


ATOMS = "Ni1 Ni 0 0 0\nCu1 Cu 0.13 0.21 0.34\nF1 F 0.31 0.42 0.17\n"


@pytest.mark.parametrize("group", ["P 1", "P 1 21/c 1", "C 1 2/m 1", "I 1 2/a 1"])
def test_the_study_runs_and_its_paths_lead_back(tmp_path: Path, group: str) -> None:
    (tmp_path / "structures").mkdir()
    (tmp_path / "work").mkdir()
    structure = tmp_path / "structures" / "x.cif"
    structure.write_text(box_cif(ATOMS, 5.1, 6.3, 7.2, beta=100, name="x", group=group), encoding="utf-8")
    output = tmp_path / "work" / "study.toml"
    document = start(structure, output=output)
    output.write_text(document["study"], encoding="utf-8")
    study = read_study(output)
    assert study.crystal.n_sites > 2
    ranking = rank(study, RankOptions(tol=1e-4))
    assert len(ranking["rows"]) == len(study.orderings) >= 4
    assert ranking["rows"][0]["above_lowest_ueV_per_ion"] == 0
    assert [row["known"] for row in document["rows"]] == [False, False]


def test_a_label_goes_before_an_element() -> None:
    crystal = Crystal(CUBE, [[0, 0, 0], [0.5, 0.5, 0]], ("Fe", "Fe"), ("Fe1", "Fe2"))
    for sizes in ({"Fe1": 4.0, "Fe": 2.0}, {"Fe": 2.0, "Fe1": 4.0}):
        assert tomllib.loads(starting_study(crystal, "x.cif", sizes_muB=sizes))["moments"] == {"Fe1": 4.0, "Fe2": 2.0}


def test_moments_of_the_file_are_taken_over() -> None:
    ordering = Ordering(simple_cubic(), [[0, 3.0, 4.0]])
    study = tomllib.loads(starting_study(ordering.crystal, "x.mcif", ordering=ordering))
    assert study["moments"] == {"Mn1": 5.0}
    assert study["ordering"][0] == {"name": "as in the file", "file": "x.mcif"}
