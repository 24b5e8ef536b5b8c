"""CIF syntax: encodings, lists, spellings of tags, numbers, blocks."""

import math
import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latticedip.errors import FileError
from latticedip.files.cifsyntax import choose_block, parse_blocks, parse_number, quote_lists


@pytest.mark.parametrize(
    ("text", "value", "su"),
    [
        ("5.0(1)", 5.0, 0.1),
        ("5.04(12)", 5.04, 0.12),
        ("-3(2)", -3.0, 2.0),
        ("1.2E-1(3)", 0.12, 0.03),
        ("1.", 1.0, math.nan),
        (".5", 0.5, math.nan),
        ("+2e2", 200.0, math.nan),
    ],
)
def test_numbers_keep_their_uncertainty(text, value, su):
    assert parse_number(text) == (pytest.approx(value, rel=1e-15), pytest.approx(su, rel=1e-15, nan_ok=True))


@pytest.mark.parametrize("text", ["nan", "inf", "1e999", "1..", "2.0(1", "1/2", "0x10", "1_000", "", "\u0663", "1,5"])
def test_other_texts_are_no_numbers(text):
    assert parse_number(text) is None


TRAPS = """#\\#CIF_1.1
# a comment with [ and '
data_traps
_k.one [1/2 1/2
 1/2]
_k.two [-0.75 0.75 -0.75]
_quoted 'a [b] c'
_other "it's [a"
_field
;
[ not a list
;
_word a[1]
_strings ['a b' "c] d" [1 2]]
_dot 1.
_empty
;
;
"""


def test_lists_become_text_and_nothing_else_is_touched():
    (block,) = parse_blocks(TRAPS.encode(), "traps.cif")
    assert block.value("_k_one") == "[1/2 1/2 1/2]"
    assert block.value("_k.two") == "[-0.75 0.75 -0.75]"
    assert block.value("_quoted") == "a [b] c"
    assert block.value("_other") == "it's [a"
    assert block.value("_field") == "[ not a list"
    assert block.value("_word") == "a[1]"
    assert block.value("_strings") == "['a b' \"c] d\" [1 2]]"
    assert block.value("_dot") == "1."
    assert block.value("_empty") is None


def test_lines_are_counted_as_in_the_file():
    text = "data_a\n_k [1\n2\n3]\n_x 'broken\n"
    message = "a.cif: line 5: the CIF syntax is broken (unterminated 'string') in \"_x 'broken\"."
    with pytest.raises(FileError, match=f"^{re.escape(message)}$"):
        parse_blocks(text.encode(), "a.cif")


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_line_ends_of_every_system(end):
    text = end.join(["data_a", "_x", ";abc", "def", ";", "_y 1", ""])
    (block,) = parse_blocks(text.encode(), "a.cif")
    assert block.value("_x") == "abc\ndef"


def test_bytes_that_are_not_utf8_and_bare_words_beyond_ascii():
    (block,) = parse_blocks(b"data_a\n_page 112\x96118\n_name 'M\xfcller'\n_nel a\x85b\n_y 1\n", "a.cif")
    assert block.value("_page") == "112\x96118"
    assert block.value("_name") == "Müller"
    assert block.value("_nel") == "a\x85b"
    (block,) = parse_blocks("\ufeffdata_a\n_name Müller\n".encode(), "a.cif")
    assert block.value("_name") == "Müller"


def test_triple_quotes_of_cif_2():
    text = "#\\#CIF_2.0\ndata_a\n_x '''one\ntwo [3]'''\n_y \"\"\"it's\"\"\"\n"
    (block,) = parse_blocks(text.encode(), "a.cif")
    assert block.value("_x") == "one\ntwo [3]"
    assert block.value("_y") == "it's"


def test_spellings_of_one_tag_fall_together():
    text = """data_a
loop_
_space_group_symop.magn_operation_xyz
x,y,z,+1
loop_
_atom_site_moment_label
_atom_site_moment.crystalaxis_X
Mn1 2.0
"""
    (block,) = parse_blocks(text.encode(), "a.cif")
    column = block.column("_space_group_symop_magn_operation.xyz")
    assert column is not None
    assert column.tag == "_space_group_symop.magn_operation_xyz"
    moment = block.column("_atom_site_moment_crystalaxis_x")
    assert moment is not None
    assert block.sibling(moment, "_atom_site_moment.label") is not None
    assert block.sibling(moment, "_space_group_symop_magn_operation.xyz") is None


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("_x 1\n", "a.cif: line 1: the CIF syntax is broken (expected block header (data_)) in '_x 1'."),
        ("data_a\n_x\n", "a.cif: line 2: the CIF syntax is broken (_x has no value) in '_x'."),
        ("data_a\n_x 1 2\n", "a.cif: line 2: the CIF syntax is broken (parse error) in '_x 1 2'."),
        ("data_a\n_x [1 2\n", "a.cif: line 2: a list that begins with '[' is not closed by ']' in '_x [1 2'."),
        ("data_a\n_a 1\n_A 2\n", "a.cif: line 3: the CIF syntax is broken (duplicate tag _A) in '_A 2'."),
        ("data_a\n_x 1\ndata_A\n_x 2\n", "a.cif: the CIF syntax is broken (duplicate block name: A)."),
        (
            "data_a\n_a.b 1\n_A_b 2\n",
            "a.cif: _a.b and _A_b are two spellings of one item, but their values differ. Keep one.",
        ),
        (
            "data_a\nloop_\n_a\n_b\n1 2 3\n",
            "a.cif: line 2: the CIF syntax is broken (Wrong number of values in loop _*).",
        ),
        ("#\\#CIF_2.0\ndata_a\n_x '''abc\n", "a.cif: line 3: a triple-quoted string is not closed in \"_x '''abc\"."),
        (
            "data_a\n  _x 1 \x1b[31m2\t\u202e3" + 60 * "4" + "\n",
            "a.cif: line 2: the CIF syntax is broken (parse error) in '_x 1 \\x1b[31m2\\t\\u202e3" + 45 * "4" + "…'.",
        ),
        ("data_a\n_x 1\x00\n", "a.cif: this is not a text file (it holds zero bytes)."),
    ],
)
def test_broken_syntax_is_refused(text, message):
    with pytest.raises(FileError, match=f"^{re.escape(message)}$"):
        parse_blocks(text.encode(), "a.cif")


def test_blocks_without_a_structure_do_not_count():
    text = "data_global\n_x 1\ndata_s\n_cell_length_a 1\nloop_\n_atom_site_fract_x\n0\n"
    blocks = parse_blocks(text.encode(), "a.cif")
    assert choose_block(blocks, "a.cif", None).name == "s"
    assert choose_block(blocks, "a.cif", "GLOBAL").name == "global"
    with pytest.raises(
        FileError,
        match=r"^a.cif: there is no data block 'globl'. Its blocks are: global, s. Did you mean 'global'\?$",
    ):
        choose_block(blocks, "a.cif", "globl")


@settings(max_examples=200, deadline=None)
@given(
    st.lists(
        st.sampled_from(["data_a", "loop_", "_x", "[1 2]", "[", "]", "'a [b'", "# [", "\n", ";", "\n;", " ", "1.", "é"])
    )
)
def test_any_text_is_read_or_refused(words):
    text = " ".join(words)
    try:
        quote_lists(text, "a.cif")
        parse_blocks(text.encode(), "a.cif")
    except FileError as error:
        assert str(error).startswith("a.cif: ")
