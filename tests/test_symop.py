"""The grammar of operations and changes of cell."""

import re

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from latticedip.errors import InputError
from latticedip.files.symop import parse_moment_image, parse_operation, parse_transform, parse_vector


@pytest.mark.parametrize(
    ("text", "rotation", "translation", "time"),
    [
        ("x,y,z,+1", [[1, 0, 0], [0, 1, 0], [0, 0, 1]], [0, 0, 0], 1),
        ("-x+1/2,y,-z,-1", [[-1, 0, 0], [0, 1, 0], [0, 0, -1]], [0.5, 0, 0], -1),
        (" 1/2 + X , -Y , z + .25 , 1", [[1, 0, 0], [0, -1, 0], [0, 0, 1]], [0.5, 0, 0.25], 1),
        ("-y,x-y,z+0.33333,+1", [[0, -1, 0], [1, -1, 0], [0, 0, 1]], [0, 0, 1 / 3], 1),
        ("-x+y,-x,z+0.6667,+1", [[-1, 1, 0], [-1, 0, 0], [0, 0, 1]], [0, 0, 2 / 3], 1),
        ("x+0.6666,y-0.333,z+0.8333,+1", [[1, 0, 0], [0, 1, 0], [0, 0, 1]], [2 / 3, -1 / 3, 5 / 6], 1),
        ("2*y-y,x,-z+7/5,-1", [[0, 1, 0], [1, 0, 0], [0, 0, -1]], [0, 0, 1.4], -1),
    ],
)
def test_operations_are_read(text, rotation, translation, time):
    operation = parse_operation(text, time=True)
    assert operation.rotation.tolist() == rotation
    assert operation.translation == pytest.approx(translation, abs=1e-15)
    assert operation.time == time


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("x,y,z", "its fourth part, time reversal +1 or -1, is missing"),
        ("x,y", "it has 2 parts, not x, y, z and time reversal"),
        ("x,y,z,2", "its time reversal is '2', not +1 or -1"),
        ("x,,z,1", "one of its parts is empty"),
        ("x+,y,z,1", "'x+' is not understood from '+' on"),
        ("xy,y,z,1", "'xy' is not understood from 'y' on"),
        ("x+1/0,y,z,1", "'x+1/0' divides by zero"),
        ("x/0,y,z,1", "'x/0' divides by zero"),
        ("2x,y,z,1", "its rotation part is not a matrix of whole numbers with determinant 1 or -1"),
        ("x/2,y,z,1", "its rotation part is not a matrix of whole numbers with determinant 1 or -1"),
        ("x,x,z,1", "its rotation part is not a matrix of whole numbers with determinant 1 or -1"),
        ("x+nan,y,z,1", "'x+nan' is not understood from '+nan' on"),
        ("x1,x2,x3,x4,+1", "it has 5 parts, not x, y, z and time reversal"),
        ("x" * 400, "it is longer than 300 characters"),
        ("().__class__,y,z,1", "'().__class__' is not understood from '().__class__' on"),
    ],
)
def test_bad_operations_are_refused(text, message):
    with pytest.raises(InputError, match=f"^{re.escape(message)}$"):
        parse_operation(text, time=True)


def test_time_reversal_is_refused_where_it_has_no_place():
    with pytest.raises(InputError, match=r"^it has 4 parts, not 3$"):
        parse_operation("x,y,z,+1", time=False)


@pytest.mark.parametrize(
    ("text", "matrix", "shift"),
    [
        ("a,b,c;0,0,0", np.eye(3), [0, 0, 0]),
        ("2a,b,c;0,0,0", np.diag([2, 1, 1]), [0, 0, 0]),
        ("a-b,a+b,2c;1/4,0,0", [[1, 1, 0], [-1, 1, 0], [0, 0, 2]], [0.25, 0, 0]),
        ("a/2,1/2b,0.5*c;0,-.25,0.3333", np.diag([0.5, 0.5, 0.5]), [0, -0.25, 1 / 3]),
        ("b,c,a", [[0, 0, 1], [1, 0, 0], [0, 1, 0]], [0, 0, 0]),
        ("a,b,2c,0,0,1/2", np.diag([1, 1, 2]), [0, 0, 0.5]),
        (
            "1/2a+1/2b, -1/3a+1/3b+1/3c, c*2 ; 0,0,0",
            [[0.5, -1 / 3, 0], [0.5, 1 / 3, 0], [0, 1 / 3, 2]],
            [0, 0, 0],
        ),
    ],
)
def test_changes_of_cell_are_read(text, matrix, shift):
    columns, origin = parse_transform(text)
    assert columns == pytest.approx(np.array(matrix, dtype=float), abs=1e-15)
    assert origin == pytest.approx(shift, abs=1e-15)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("a,b;0,0,0", "it is not of the form 'a,b,c;0,0,0'"),
        ("a,b,c;0,0", "it is not of the form 'a,b,c;0,0,0'"),
        ("a,b,c;0,0,0;0,0,0", "it is not of the form 'a,b,c;0,0,0'"),
        ("a,a,c;0,0,0", "its vectors span no volume"),
        ("a+1,b,c;0,0,0", "a cell vector holds a bare number"),
        ("a,b,c;x,0,0", "'x' is not understood from 'x' on"),
        # Code in such a string is text that does not parse, nothing else.
        (
            "[d for d in ().__class__.__mro__],b,c;0,0,0",
            "'[dfordin().__class__.__mro__]' is not understood from '[dfordin().__class__.__mro__]' on",
        ),
        (
            "__import__('os').system('true'),b,c;0,0,0",
            "\"__import__('os').system('true')\" is not understood from \"__import__('os').system('true')\" on",
        ),
    ],
)
def test_bad_changes_of_cell_are_refused(text, message):
    with pytest.raises(InputError, match=f"^{re.escape(message)}$"):
        parse_transform(text)


@pytest.mark.parametrize(
    ("text", "vector"),
    [
        ("1/2,1/2,1/2", [0.5, 0.5, 0.5]),
        ("[1/2 1/2 1/2]", [0.5, 0.5, 0.5]),
        ("[-0.75 0.75 -0.75]", [-0.75, 0.75, -0.75]),
        ("[0.213(1) 0. 1/3]", [0.213, 0, 1 / 3]),
        ("(0,0,-1)", [0, 0, -1]),
    ],
)
def test_vectors_are_read(text, vector):
    assert parse_vector(text) == pytest.approx(vector, abs=1e-15)


def test_vectors_that_do_not_parse_are_refused():
    with pytest.raises(InputError, match=r"^it has 2 parts, not 3$"):
        parse_vector("0,0")
    with pytest.raises(InputError, match=r"^'g' is not understood from 'g' on$"):
        parse_vector("[0 0 g]")


def test_moment_images_are_read():
    assert parse_moment_image("mx-my,-my,-mz").tolist() == [[1, -1, 0], [0, -1, 0], [0, 0, -1]]
    with pytest.raises(InputError, match=r"^a moment has no translation$"):
        parse_moment_image("mx+1/2,my,mz")


@settings(max_examples=300, deadline=None)
@given(st.text(alphabet="xyzabcm0123456789+-*/.,; ()[]'\"\\_eE\u0663", max_size=40))
def test_any_text_is_read_or_refused(text):
    for read in (lambda t: parse_operation(t, time=True), parse_transform, parse_vector, parse_moment_image):
        try:
            read(text)
        except InputError:
            continue
