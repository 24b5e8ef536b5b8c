"""Documents: their head, and rows spread over columns."""

from __future__ import annotations

import hashlib
from pathlib import Path

import pytest

import latticedip
from latticedip.errors import FileError
from latticedip.study.documents import document, flat


def test_vectors_are_spread_with_their_unit_last() -> None:
    row = {
        "ordering": "up",
        "k": [[0.0, 0.0, 0.5], [0.25, 0.0, 0.0]],
        "field_T": [1.0, 2.0, 3.0],
        "field_abc_G": [1.0, None, 3.0],
        "gradient_of_size_T_per_A": [1, 2, 3],
        "position": (0.5, 0.5, 0.25),
        "notes": ["one", "two", "three"],
        "empty": [],
        "tie": True,
    }
    assert flat(row) == {
        "ordering": "up",
        "k": "0.0 0.0 0.5; 0.25 0.0 0.0",
        "field_x_T": 1.0,
        "field_y_T": 2.0,
        "field_z_T": 3.0,
        "field_a_G": 1.0,
        "field_b_G": None,
        "field_c_G": 3.0,
        "gradient_of_size_x_T_per_A": 1,
        "gradient_of_size_y_T_per_A": 2,
        "gradient_of_size_z_T_per_A": 3,
        "position_x": 0.5,
        "position_y": 0.5,
        "position_z": 0.25,
        "notes": "one; two; three",
        "empty": "",
        "tie": True,
    }


def test_the_head_of_a_document(tmp_path: Path) -> None:
    file = tmp_path / "x.toml"
    file.write_bytes(b"title = 1")
    made = document("rank", files={"study": file}, options={"tol": 1e-6}, boundary="N = 0", results={"rows": []})
    digest = hashlib.sha256(b"title = 1").hexdigest()
    assert made == {
        "schema": "latticedip/rank/1",
        "version": latticedip.__version__,
        "inputs": {"files": [{"role": "study", "path": str(file), "sha256": digest}], "options": {"tol": 1e-6}},
        "boundary": "N = 0",
        "rows": [],
    }
    file.unlink()
    with pytest.raises(FileError) as caught:
        document("rank", files={"study": file}, options={}, boundary="", results={})
    assert str(caught.value) == f"cannot read {str(file)!r}: No such file or directory."
