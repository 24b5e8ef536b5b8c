"""What is read by whom: CIFs by our own reader, other formats through ASE; files that are no structure."""

import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import FileError

DATA = Path(__file__).parent / "data"

XYZ = """2
Lattice="4 0 0 0 5 0 0 0 6" Properties=species:S:1:pos:R:3{columns} pbc="T T T"
Mn 0 0 0 {first}
O 2 2 2 {second}
"""


@pytest.fixture(autouse=True)
def _in_an_empty_directory(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)


def refuses(read, path, message, **options):
    with pytest.raises(FileError, match=f"^{re.escape(message)}$"):
        read(path, **options)


def test_reading_a_cif_loads_no_ase():
    code = (
        "import sys, latticedip as ld\n"
        f"ld.read_ordering({str(DATA / 'hexagonal.mcif')!r})\n"
        f"ld.read_crystal({str(DATA / 'monoclinic.mcif')!r})\n"
        "loaded = [m for m in sys.modules if m == 'ase' or m.startswith('ase.')]\n"
        "assert not loaded, loaded\n"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_a_cif_is_known_by_its_content_too():
    Path("structure.txt").write_bytes(b"\n# a comment\n  # another\n" + (DATA / "monoclinic.mcif").read_bytes())
    assert ld.read_ordering("structure.txt").n_ions == 6


def test_vector_moments_through_ase():
    text = XYZ.format(columns=":initial_magmoms:R:3", first="1 2 3", second="0 0 0")
    Path("a.xyz").write_text(text, encoding="utf-8")
    ordering = ld.read_ordering("a.xyz")
    assert ordering.name == "a"
    assert ordering.moments()[0].tolist() == [[1, 2, 3], [0, 0, 0]]
    assert ordering.crystal.positions[1].tolist() == pytest.approx([0.5, 0.4, 1 / 3])
    assert ld.read_crystal("a.xyz").symbols == ("Mn", "O")


@pytest.mark.parametrize("column", ["initial_magmoms", "magmoms"])
def test_scalar_moments_lie_along_z_and_the_ordering_says_so(column):
    Path("a.xyz").write_text(XYZ.format(columns=f":{column}:R:1", first="2.5", second="0"), encoding="utf-8")
    ordering = ld.read_ordering("a.xyz")
    assert ordering.moments()[0, 0].tolist() == [0, 0, 2.5]
    assert ordering.notes == ("the file gives scalar moments; they are taken along Cartesian z",)


def test_partial_occupancy_is_said_in_other_formats_too():
    text = XYZ.format(columns=":initial_magmoms:R:1:occupancies:R:1", first="2.5 0.5", second="0 1")
    Path("a.xyz").write_text(text, encoding="utf-8")
    note = "partial occupancy (Mn1 0.5): every sum takes the mean moment, occupancy times moment"
    assert ld.read_ordering("a.xyz").crystal.notes == (note,)
    assert ld.read_crystal("a.xyz").notes == (note,)


def test_files_that_hold_several_structures_need_a_choice():
    one = XYZ.format(columns=":initial_magmoms:R:1", first="1", second="0")
    two = XYZ.format(columns=":initial_magmoms:R:1", first="2", second="0")
    Path("a.xyz").write_text(one + two, encoding="utf-8")
    message = "a.xyz: the file holds 2 structures. Say which with block, 1 to 2 (-1 is the last)."
    refuses(ld.read_ordering, "a.xyz", message)
    assert ld.read_ordering("a.xyz", block=1).net_moment.tolist() == [0, 0, 1]
    assert ld.read_ordering("a.xyz", block="2").net_moment.tolist() == [0, 0, 2]
    assert ld.read_ordering("a.xyz", block=-1).net_moment.tolist() == [0, 0, 2]
    for block in (0, 3, "two"):
        refuses(
            ld.read_ordering,
            "a.xyz",
            f"a.xyz: block must be the number of a structure, 1 to 2 (or -1 for the last), got {block!r}.",
            block=block,
        )


def test_a_structure_without_moments_is_no_ordering():
    Path("a.xyz").write_text(XYZ.format(columns="", first="", second=""), encoding="utf-8")
    refuses(
        ld.read_ordering,
        "a.xyz",
        "a.xyz: the structure carries no magnetic moments. Give them in the study, or use a file that has them.",
    )
    text = "data_a\n" + "".join(
        f"_cell_length_{x} 4\n_cell_angle_{y} 90\n" for x, y in zip("abc", ("alpha", "beta", "gamma"), strict=True)
    )
    text += "_space_group_name_H-M_alt 'P 1'\n_atom_site_label Mn1\n"
    text += "".join(f"_atom_site_fract_{x} 0\n" for x in "xyz")
    Path("a.cif").write_text(text, encoding="utf-8")
    refuses(
        ld.read_ordering,
        "a.cif",
        "a.cif: it holds a structure without magnetic moments. Give a magCIF, or use it as the [crystal] of a study "
        "and state the moments there.",
    )
    assert ld.read_crystal("a.cif").n_sites == 1


def test_overlapping_atoms_name_the_file():
    Path("a.xyz").write_text(XYZ.replace("2 2 2", "0 0 0.05").format(columns="", first="", second=""), encoding="utf-8")
    refuses(
        ld.read_crystal,
        "a.xyz",
        "a.xyz: atoms Mn (number 1) and O (number 2) are 0.0500 Å apart. Two atoms cannot share a place: remove one, "
        "or give occupancies that add up to at most 1.",
    )


@pytest.mark.parametrize("read", [ld.read_crystal, ld.read_ordering])
def test_files_that_are_not_there_or_no_files(read):
    refuses(read, "none.cif", "none.cif: there is no such file.")
    Path("folder.cif").mkdir()
    refuses(read, "folder.cif", "folder.cif: this is a directory, not a file.")
    Path("empty.xyz").touch()
    refuses(read, "empty.xyz", "empty.xyz: the file is empty.")
    Path("a.cif.gz").write_bytes(b"\x1f\x8b\x08\x00abc")
    refuses(read, "a.cif.gz", "a.cif.gz: the file is compressed (gzip). Unpack it first.")
    with pytest.raises(FileError, match=r"^a\x00b: there is no such file\.$|^a\x00b: the file cannot be read"):
        read("a\x00b")


def test_garbage_is_refused():
    Path("noise").write_bytes(np.random.default_rng(1).bytes(2000))
    refuses(
        ld.read_crystal,
        "noise",
        "noise: the format is not known. Give a CIF, a magCIF or a format that ASE reads.",
    )
    Path("a.xyz").write_text("this is no structure\nat all\n", encoding="utf-8")
    with pytest.raises(FileError, match=r"^a\.xyz: ASE cannot read it \(\w+: .*\)\.$"):
        ld.read_crystal("a.xyz")


def test_files_beyond_the_limit_are_refused():
    with open("large.cif", "wb") as stream:
        stream.truncate(60_000_000)
    refuses(ld.read_crystal, "large.cif", "large.cif: the file has 60 MB; at most 50 MB are read.")


def test_read_file_gives_an_ordering_where_there_are_moments():
    from latticedip.files.read import read_file

    assert isinstance(read_file(DATA / "hexagonal.mcif"), ld.Ordering)
    Path("a.xyz").write_text(XYZ.format(columns="", first="", second=""), encoding="utf-8")
    assert isinstance(read_file("a.xyz"), ld.Crystal)
