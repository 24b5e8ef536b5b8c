"""Broken studies: each is refused with one exact message that names the file, the key, the value and what to do."""

from __future__ import annotations

import shutil
import tomllib
from pathlib import Path

import pytest

import latticedip as ld
from latticedip.errors import StudyError

DATA = Path(__file__).parent / "data" / "study"
CRYSTAL = '[crystal]\nfile = "tetragonal.cif"\n'
#: One atom at half height, so that a wave with k = (0, 0, ½) starts a quarter turn off.
QUARTER = '1\nLattice="4 0 0 0 4 0 0 0 4" Properties=species:S:1:pos:R:3 pbc="T T T"\nMn 0 0 2\n'


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A folder with the stored structures, in which studies are named without a path."""
    for name in ("tetragonal.cif", "centred.cif", "doubled.mcif"):
        shutil.copy(DATA / name, tmp_path)
    (tmp_path / "quarter.xyz").write_text(QUARTER, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    return tmp_path


def refusal(text):
    """The message with which a study (text or bytes) is refused."""
    Path("study.toml").write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(StudyError) as caught:
        ld.read_study("study.toml")
    return str(caught.value)


TABLE = tomllib.loads((DATA / "broken.toml").read_text(encoding="utf-8"))["case"]


@pytest.mark.usefixtures("folder")
@pytest.mark.parametrize("case", TABLE, ids=[case["what"] for case in TABLE])
def test_a_broken_study_is_refused(case):
    assert refusal(case["text"]) == f"study.toml: {case['message']}"


@pytest.mark.usefixtures("folder")
def test_a_number_beyond_all_floats_is_refused():
    assert refusal(CRYSTAL + "[sample]\napplied_T = [0, 0, 1" + 400 * "0" + "]\n") == (
        "study.toml: `sample.applied_T[3]`: got a whole number of more than 50 digits, expected a finite number."
    )


@pytest.mark.usefixtures("folder")
def test_what_is_no_toml_is_refused_with_its_line():
    """The words between are those of the standard library."""
    for text, line in ((CRYSTAL + 'title = "x\n', 3), (CRYSTAL + 'file = "b.cif"\n', 3)):
        message = refusal(text)
        assert message.startswith("study.toml: is not valid TOML: ")
        assert f"(at line {line}, column " in message


@pytest.mark.usefixtures("folder")
@pytest.mark.parametrize(
    ("raw", "message"),
    [
        (
            b'[crystal]\nfile = "a.cif"\ntitle = "caf\xe9"\n',
            "line 3 holds the byte 0xe9, which is not UTF-8. Save the file as UTF-8.",
        ),
        (b"a = " + b"[" * 5000 + b"]" * 5000, "is not valid TOML: lists or tables are nested too deeply."),
        (b"#" * 10_000_001, "is larger than 10 MB and so no study file."),
    ],
)
def test_a_file_that_is_no_study_is_refused(raw, message):
    assert refusal(raw) == f"study.toml: {message}"


@pytest.mark.usefixtures("folder")
def test_a_whole_number_of_thousands_of_digits_is_refused():
    message = refusal(b"a = " + b"1" * 5000)
    assert message.startswith("study.toml: is not valid TOML: ")


def test_a_study_that_cannot_be_opened_is_refused(folder):
    for path, message in (
        ("none.toml", "none.toml: cannot be read: No such file or directory."),
        (".", ".: cannot be read: Is a directory."),
        ("a\0b", "'a\\x00b': is no path: embedded null byte."),
    ):
        with pytest.raises(StudyError) as caught:
            ld.read_study(path)
        assert str(caught.value) == message


def test_every_refusal_is_one_line_and_of_one_class():
    assert issubclass(StudyError, ld.LatticedipError)
    assert issubclass(StudyError, ValueError)
