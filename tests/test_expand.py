"""Groups and orbits."""

import re

import numpy as np
import pytest

from latticedip.errors import FileError
from latticedip.files.cifsyntax import Block
from latticedip.files.expand import Group, build_group, orbit_of
from latticedip.files.symop import parse_operation

BLOCK = Block("x.mcif", "x", {})
CUBE = 4.0 * np.eye(3)


def operations(*texts):
    return [parse_operation(text, time=True) for text in texts]


def test_operations_and_centrings_multiply_and_repeats_count_once():
    group = build_group(
        BLOCK,
        operations("x,y,z,+1", "-x,-y,z,+1", "x+1/2,y+1/2,z,-1"),
        operations("x,y,z,+1", "x+1/2,y+1/2,z,-1"),
        CUBE,
        "_t",
    )
    assert len(group.times) == 4
    assert sorted(group.times.tolist()) == [-1, -1, 1, 1]


def test_operations_that_generate_a_centring_need_it_in_the_loop():
    # The dictionary warns of this: the operations alone need not be closed, their product with the centrings is.
    screw = operations("x,y,z,+1", "-x+1/2,-y,z+1/2,+1")
    with_centring = operations("x,y,z,+1", "x,y+1/2,z,-1")
    assert len(build_group(BLOCK, screw, with_centring[:1], CUBE, "_t").times) == 2
    tangled = operations("x,y,z,+1", "-x,y+1/4,-z,+1")
    assert len(build_group(BLOCK, tangled, operations("x,y,z,+1", "x,y+1/2,z,+1"), CUBE, "_t").times) == 4
    message = (
        "x.mcif: the operations of _t are no group: '-x,y+1/4,-z,+1' after '-x,y+1/4,-z,+1' is not among them. "
        "An operation or a centring is missing or misspelt."
    )
    with pytest.raises(FileError, match=f"^{re.escape(message)}$"):
        build_group(BLOCK, tangled, with_centring[:1], CUBE, "_t")


def test_a_large_group_is_checked_quickly():
    thirds = [f"x+{i}/8,y+{j}/8,z+{k}/8,+1" for i in range(8) for j in range(8) for k in range(4)]
    # (k up to 3/8 only: a third of the translations along z is missing, which one generator shows at once)
    with pytest.raises(FileError, match=r"are no group"):
        build_group(BLOCK, operations("x,y,z,+1"), operations(*thirds), CUBE, "_t")
    whole = [f"x+{i}/8,y+{j}/8,z+{k}/8,+1" for i in range(8) for j in range(8) for k in range(8)]
    assert len(build_group(BLOCK, operations("x,y,z,+1", "-x,-y,-z,-1"), operations(*whole), CUBE, "_t").times) == 1024


def test_more_operations_than_any_group_holds_are_refused():
    many = operations(*["x,y,z,+1"] * 150)
    with pytest.raises(
        FileError, match=r"^x.mcif: 150 operations times 150 centrings are more than any group holds\.$"
    ):
        build_group(BLOCK, many, many, CUBE, "_t")


def test_a_site_near_an_axis_is_put_onto_it():
    group = build_group(
        BLOCK, operations("x,y,z,+1", "-y,x,z,+1", "-x,-y,z,+1", "y,-x,z,+1"), operations("x,y,z,+1"), CUBE, "_t"
    )
    # 0.012 Å from a four-fold axis: the opposite image, 0.024 Å away, comes within reach only after the first step.
    orbit = orbit_of(BLOCK, group, np.array([0.0021, 0.0021, 0.2]), CUBE, "Mn1")
    assert orbit.positions == pytest.approx(np.array([[0, 0, 0.2]]), abs=1e-12)
    assert len(orbit.stabilizer) == 4


def test_images_that_do_not_meet_are_refused():
    # Two mirror planes 0.012 Å apart: no group, but what a file with a slip could lead to.
    mirror = np.diag([-1, 1, 1])
    group = Group(
        np.array([np.eye(3, dtype=int), mirror, mirror]), np.array([[0, 0, 0], [0, 0, 0], [0.006, 0, 0]]), np.ones(3)
    )
    message = (
        "x.mcif: images of site Mn1 at (0.003, 0.1, 0.2) come closer than 0.02 Å to each other without meeting on one "
        "special position. Correct its coordinates."
    )
    with pytest.raises(FileError, match=f"^{re.escape(message)}$"):
        orbit_of(BLOCK, group, np.array([0.003, 0.1, 0.2]), CUBE, "Mn1")
