"""Tables: alignment, width, digits."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from latticedip.report.tables import (
    Column,
    bullets,
    clean,
    decimals_for,
    direction,
    fixed,
    fraction,
    heading,
    pairs,
    paragraph,
    screen_width,
    short,
    table,
    text_width,
    vector,
)

COLUMNS = [
    Column("rank"),
    Column("ordering", words=True),
    Column("energy", "µeV/ion"),
    Column("above\nlowest", "µeV/ion"),
    Column("position", "own cell", words=True, whole=True),
]
ROWS = [
    ["1", "antiparallel chains", "-12.500", "0.000", "0.5 0.5 0.12"],
    ["2", "up", "3.250", "15.750", "0 0 0"],
]


def test_a_table_that_fits() -> None:
    assert table(COLUMNS, ROWS, width=80) == "\n".join(
        [
            "                                      above",
            "rank  ordering              energy   lowest  position",
            "                           µeV/ion  µeV/ion  own cell",
            "----  -------------------  -------  -------  ------------",
            "   1  antiparallel chains  -12.500    0.000  0.5 0.5 0.12",
            "   2  up                     3.250   15.750  0 0 0",
        ]
    )


def test_words_wrap_and_numbers_do_not() -> None:
    assert table(COLUMNS[:3], [row[:3] for row in ROWS], width=28) == "\n".join(
        [
            "rank  ordering        energy",
            "                     µeV/ion",
            "----  -------------  -------",
            "   1  antiparallel   -12.500",
            "      chains",
            "   2  up               3.250",
        ]
    )


def test_a_table_too_wide_is_cut_into_blocks_that_repeat_the_keys() -> None:
    text = table(COLUMNS, ROWS, width=40, keys=1)
    first, second = text.split("\n\n")
    assert first.splitlines()[1].split() == ["rank", "ordering", "energy", "lowest"]
    assert second.splitlines()[0].split() == ["rank", "position"]
    assert second.splitlines()[-1] == "   2  0 0 0"


@given(
    st.integers(40, 120),
    st.lists(st.lists(st.text(max_size=30), min_size=5, max_size=5), max_size=4),
)
def test_no_line_is_wider_than_asked_where_columns_are_narrow(width: int, cells: list[list[str]]) -> None:
    words = [["1", *(" ".join(cell.split())[:20] for cell in row[1:])] for row in cells]
    columns = [Column("n"), *(Column(f"column {i}", "unit", words=True) for i in range(4))]
    for line in table(columns, words, width=width).splitlines():
        assert text_width(line) <= width


def test_a_table_without_rows_keeps_its_head() -> None:
    assert table([Column("a"), Column("b", "T")], [], width=80) == "a  b\n   T\n-  -"


def test_a_row_of_another_length_is_a_mistake_of_the_program() -> None:
    with pytest.raises(ValueError, match="each row must hold 2 cells"):
        table([Column("a"), Column("b")], [["1"]])


def test_control_characters_never_reach_the_terminal() -> None:
    assert clean("Mn\x1b[31m1\u202e\x00") == "Mn?[31m1??"
    assert "\x1b" not in table([Column("a", words=True)], [["\x1b[2J"]], width=80)
    assert "\x1b" not in heading("\x1b]0;") + pairs([("a", "\x1b")]) + paragraph("\x1b")


def test_wide_and_combining_characters_keep_columns_straight() -> None:
    assert text_width("鉄") == 2
    assert text_width("e\u0301") == 1
    lines = table([Column("a", words=True), Column("n")], [["鉄", "1"], ["Fe", "2"]], width=80).splitlines()
    assert lines[-2:] == ["鉄  1", "Fe  2"]


@pytest.mark.parametrize(
    ("values", "significant", "error", "decimals"),
    [
        ([123.4, 0.5], 6, 0.0, 3),
        ([0.0123], 6, 0.0, 7),
        ([1e7], 6, 0.0, 0),
        ([12.0], 6, 1e-2, 2),
        ([12.0], 6, 50.0, 0),
        ([0.0], 6, 0.0, 6),
        ([], 6, 0.0, 6),
        ([1e-20], 6, 1e-10, 6),
        ([math.nan, 2.0], 6, 0.0, 5),
    ],
)
def test_decimals(values: list[float], significant: int, error: float, decimals: int) -> None:
    assert decimals_for(values, significant=significant, error=error) == decimals


def test_numbers_on_screen() -> None:
    assert fixed(-1e-9, 4) == "0.0000"
    assert fixed(-0.25, 2) == "-0.25"
    assert fixed(float("nan"), 2) == ""
    assert fixed(None, 2) == ""
    assert short(-0.0) == "0"
    assert short(3.40000000001) == "3.4"
    assert [fraction(x) for x in (0.5, 1 / 3, -0.25, 1.0, 0.213, 0.0)] == ["1/2", "1/3", "-1/4", "1", "0.213", "0"]
    assert vector([-1e-19, 0.0, 5.0]) == "(0, 0, 5)"
    assert direction([-1e-19, 0.25, 1.0]) == "[0 1 4]"
    assert direction([0.5**0.5, -(0.5**0.5), 1e-17]) == "[1 -1 0]"
    assert direction([-0.7538, 1.0, 0.0]) == "[-0.7538 1.0000 0.0000]"
    assert direction(None) == "-"


@given(st.floats(-1e6, 1e6), st.integers(0, 9))
def test_fixed_rounds_and_nothing_else(value: float, decimals: int) -> None:
    text = fixed(value, decimals)
    assert abs(float(text) - value) <= 0.5 * 10**-decimals * (1 + 1e-9) + 1e-9
    assert not (text.startswith("-") and float(text) == 0)


def test_bullets_say_nothing_twice() -> None:
    sentences = ["domain 1 of 2", "matched by lattice; domain 1 of 2", "domain 1 of 2"]
    assert bullets(sentences, width=80) == "- matched by lattice; domain 1 of 2"


def test_pairs_wrap_under_their_value() -> None:
    assert pairs([("k", "one two three four"), ("net moment", "0")], width=30).splitlines() == [
        "  k           one two three",
        "              four",
        "  net moment  0",
    ]


def test_screen_width(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "123")
    assert screen_width() == 123
    monkeypatch.setenv("COLUMNS", "10")
    assert screen_width() == 40
    monkeypatch.delenv("COLUMNS")
    monkeypatch.setattr("sys.stdout.isatty", lambda: False)
    assert screen_width() == 80
