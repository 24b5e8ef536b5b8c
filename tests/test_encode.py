"""JSON and CSV: what comes out, what is refused, and that no half-written file stays behind."""

from __future__ import annotations

import csv
import json
import os
import stat
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from latticedip.encode import plain, to_csv, to_json, write_csv, write_text_atomically
from latticedip.errors import FileError


def test_json_forms() -> None:
    document = {
        "z": np.arange(6.0).reshape(2, 3),
        "a": 1 + 2j,
        "nan": [float("nan"), np.inf, np.float64(0.1)],
        "flags": (np.bool_(True), False, None),
        "count": np.int64(3),
        "where": Path("x") / "y",
        "name": "µ → Å",
        "complex": np.array([1j]),
        "scalar": np.array(2.5),
    }
    text = to_json(document)
    assert text.isascii()
    assert text.endswith("}\n")
    back = json.loads(text)
    assert list(back) == list(document)
    assert back["z"] == [[0, 1, 2], [3, 4, 5]]
    assert back["a"] == [1, 2]
    assert back["nan"] == [None, None, 0.1]
    assert back["flags"] == [True, False, None]
    assert back["count"] == 3
    assert back["where"] == os.path.join("x", "y")
    assert back["name"] == "µ → Å"
    assert back["complex"] == [[0, 1]]
    assert back["scalar"] == 2.5


def test_json_refuses_what_has_no_form() -> None:
    with pytest.raises(TypeError, match="a set has no form in JSON"):
        plain({"a": {1, 2}})
    with pytest.raises(TypeError, match="keys of a document are text, got 3"):
        plain({3: 1})


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_numbers_keep_every_digit(number: float) -> None:
    assert json.loads(to_json({"x": np.float64(number)}))["x"] == number
    assert float(to_csv([{"x": number}]).splitlines()[1]) == number


def test_csv_cells() -> None:
    rows = [
        {"name": "=1+1", "field_T": -0.5, "tie": True, "n": 2},
        {"name": 'chain, "up"\nline', "field_T": float("nan"), "tie": np.bool_(False), "extra": None, "n": 4},
    ]
    lines = list(csv.reader(to_csv(rows).splitlines(keepends=True)))
    assert lines[0] == ["name", "field_T", "tie", "n", "extra"]
    assert lines[1] == ["'=1+1", "-0.5", "true", "2", ""]
    assert lines[2] == ['chain, "up"\nline', "", "false", "4", ""]


@pytest.mark.parametrize("text", ["=1", "+-", "-+", "@x", "\tx", "\rx"])
def test_csv_text_never_becomes_a_formula(text: str) -> None:
    cell = next(csv.reader([to_csv([{"a": text}]).split("\n", 1)[1]]))[0]
    assert cell.startswith("'")


def test_csv_refuses_a_list_in_a_cell() -> None:
    with pytest.raises(TypeError, match="a list does not fit into one cell"):
        to_csv([{"a": [1, 2]}])


def test_write_csv(tmp_path: Path) -> None:
    target = tmp_path / "out.csv"
    write_csv([{"a_T": 1.5}], target)
    assert target.read_text(encoding="utf-8") == "a_T\n1.5\n"
    assert [p.name for p in tmp_path.iterdir()] == ["out.csv"]


def test_text_keeps_permissions_and_follows_links(tmp_path: Path) -> None:
    real = tmp_path / "real.txt"
    real.write_text("old")
    real.chmod(0o640)
    link = tmp_path / "link.txt"
    link.symlink_to(real)
    write_text_atomically(link, "new µ")
    assert link.is_symlink()
    assert real.read_text(encoding="utf-8") == "new µ"
    assert stat.S_IMODE(real.stat().st_mode) == 0o640


def test_text_goes_straight_into_a_device() -> None:
    write_text_atomically(os.devnull, "nothing")
    assert not stat.S_ISREG(os.stat(os.devnull).st_mode)


def test_write_errors(tmp_path: Path) -> None:
    missing = tmp_path / "no" / "out.csv"
    with pytest.raises(FileError) as caught:
        write_csv([], missing)
    assert str(caught.value) == f"cannot write {str(missing)!r}: No such file or directory."
    with pytest.raises(FileError) as caught:
        write_csv([], tmp_path)
    assert str(caught.value) == f"cannot write {str(tmp_path)!r}: it is a directory. Name a file."
    target = tmp_path / "bad.txt"
    with pytest.raises(FileError) as caught:
        write_text_atomically(target, "\udcff")
    assert str(caught.value) == f"cannot write {str(target)!r}: it holds a name that is not valid Unicode."
    assert list(tmp_path.iterdir()) == []
