"""What the commands print fits the screen, and carries no colours."""

from __future__ import annotations

import unicodedata
from pathlib import Path

import pytest
from click.testing import CliRunner

from latticedip.cli.main import COMMANDS, main
from latticedip.report.tables import heading
from tests.commands import LAYER_XYZ, enter

STUDY = """title = "Does a title that goes on and on, longer than a screen is wide, still fit on the screen of users?"
[crystal]
file = "layer.xyz"
[moments]
Mn = 2.0
[[ordering]]
name = "stripes along a with moments along b, an ordering whose name is much too long for a table"
k = ["1/2", 0, 0]
along = [0, 1, 0]
[[ordering]]
name = "ferromagnet"
k = [0, 0, 0]
along = [0, 0, 1]
[[probe]]
name = "a muon at a place that is described in more words than fit"
position = [0.5, 0.5, 0.12]
[susceptibility]
Mn = { chi = [0.02, 0.015], unit = "cm3/mol", temperatures_K = [50, 70] }
"""
CALLS = (
    ("show",),
    ("field",),
    ("rank", "--rotate"),
    ("rank", "--parts"),
    ("directions", "--ordering", "ferromagnet"),
    ("modes",),
    ("propose",),
    ("shift",),
    ("shift", "--rotate-about", "a"),
    ("linewidth",),
    ("spectrum", "--time", "1", "--powder"),
    ("report", "-o", "x.html", "--no-pictures"),
)


@pytest.mark.parametrize("call", CALLS, ids=" ".join)
@pytest.mark.parametrize("no_color", ["", "1"])
def test_the_screen_is_80_columns_wide(
    call: tuple[str, ...], no_color: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    enter(tmp_path, monkeypatch, {"layer.xyz": LAYER_XYZ, "study.toml": STUDY})
    result = CliRunner().invoke(main, [call[0], "study.toml", *call[1:]], env={"NO_COLOR": no_color, "COLUMNS": "80"})
    assert result.exit_code == 0, result.output
    assert max(len(line) for line in result.stdout.splitlines()) <= 80
    # No colours, no other control codes.
    assert not [c for c in result.output if unicodedata.category(c) == "Cc" and c != "\n"]


@pytest.mark.parametrize("name", COMMANDS)
def test_help_is_80_columns_wide(name: str) -> None:
    result = CliRunner().invoke(main, [name, "--help"], terminal_width=80)
    assert max(len(line) for line in result.stdout.splitlines()) <= 80


def test_long_headings_go_over_several_lines(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "40")
    assert heading("one two") == "one two\n======="
    assert heading("a heading of so many words that it is wider than the screen").split("\n") == [
        "a heading of so many words that it is",
        "wider than the screen",
        "=====================================",
    ]
