"""Degenerate families and domains: turns that cost nothing against energies worked out, ties named by symmetry."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from latticedip import Crystal, Ordering, Sample, dipolar_energy, rank
from latticedip.analysis.families import common_axis, freedom, relations, turn_between

A = 4.0
CUBE = Crystal(A * np.eye(3), [(0, 0, 0)], ("Mn",))
#: Primitive cell of a face-centred cubic lattice; its star of (½,½,½) has four arms.
FCC = Crystal(A * np.array([(0, 0.5, 0.5), (0.5, 0, 0.5), (0.5, 0.5, 0)]), [(0, 0, 0)], ("Mn",))
ARMS = [(0.5, 0.5, 0.5), (0.5, 0, 0), (0, 0.5, 0), (0, 0, 0.5)]


def wave(direction: tuple[float, float, float], k: tuple[float, float, float], name: str = "") -> Ordering:
    unit = np.array(direction) / np.linalg.norm(direction)
    return Ordering(FCC, [5 * unit], k, name)


def test_a_cubic_ferromagnet_may_point_anywhere() -> None:
    found = freedom(Ordering(CUBE, [[0, 0, 2]]))
    assert found.kind == "any"
    assert found.axis_cart is None
    assert found.words == "continuously degenerate: the energy is the same however the pattern is turned"


def test_a_plate_leaves_it_free_within() -> None:
    in_plane = freedom(Ordering(CUBE, [[2, 0, 0]]), sample=Sample.plate((0, 0, 1)))
    assert in_plane.kind == "axis"
    np.testing.assert_allclose(in_plane.axis_cart, [0, 0, 1], atol=1e-9)
    # Along the normal there is nothing to turn.
    assert freedom(Ordering(CUBE, [[0, 0, 2]]), sample=Sample.plate((0, 0, 1))).kind == "none"


@pytest.mark.parametrize("tilt", [0.0, 0.3, 1.0])
def test_type_two_is_free_about_its_wave_vector(tilt: float) -> None:
    # Keffer and O'Sullivan, Phys. Rev. 108, 637 (1957): moments anywhere in (111); a cone at any other angle.
    ordering = wave((1, -1, tilt), ARMS[0])
    found = freedom(ordering)
    assert found.kind == "axis"
    np.testing.assert_allclose(found.axis_cart, np.ones(3) / 3**0.5, atol=1e-7)
    energies = [
        dipolar_energy(ordering.rotated(Rotation.from_rotvec(angle * found.axis_cart).as_matrix())).per_ion_eV
        for angle in (0.0, 0.7, 2.0)
    ]
    assert np.ptp(energies) < 1e-11 * abs(energies[0])
    assert found.words.startswith("continuously degenerate: all moments may be turned about [1 1 1] (Cartesian)")
    assert found.words.endswith(", their direction is free in the plane across it") is (tilt == 0.0)


def test_a_helix_turns_about_its_normal() -> None:
    found = freedom(Ordering(FCC, [[3, 3j, 0]], (0.11, 0.27, 0.2)))
    assert found.kind == "own axis"
    np.testing.assert_allclose(np.abs(found.axis_cart), [0, 0, 1], atol=1e-9)
    assert found.words.endswith("[0 0 1] now; that only shifts it along k")


def test_an_applied_field_takes_the_freedom_away() -> None:
    ferromagnet = Ordering(CUBE, [[2, 0, 0]])
    assert freedom(ferromagnet, sample=Sample.sphere(applied_T=(1, 0, 0))).kind == "none"
    aside = Ordering(CUBE, [[1, 0, 2]])
    assert freedom(aside, sample=Sample.sphere(applied_T=(1, 0, 0))).kind == "axis"


def test_a_low_symmetry_pattern_has_none() -> None:
    crystal = Crystal(np.diag([3.0, 4.0, 5.0]), [(0, 0, 0)], ("Mn",))
    found = freedom(Ordering(crystal, [[0, 0, 2]], (0.5, 0, 0)))
    assert (found.kind, found.words) == ("none", "")


def test_common_axis_points_along_the_first_moment() -> None:
    np.testing.assert_allclose(common_axis(wave((1, -1, 0), ARMS[0])), np.array([1, -1, 0]) / 2**0.5)
    assert common_axis(Ordering(FCC, [[3, 3j, 0]], (0.1, 0.2, 0.3))) is None


def test_ties_are_named() -> None:
    orderings = [
        wave((1, -1, 0), ARMS[0], "first"),
        wave((-1, 1, 0), ARMS[0], "reversed"),
        wave((0, 1, -1), ARMS[0], "threefold"),
        wave((1, 1, -2), ARMS[0], "turned"),
        wave((1, 1, 0), ARMS[1], "other arm"),
        wave((1, 0.3, -1.3), ARMS[0], "by any angle"),
        wave((1, 1, 1), ARMS[0], "across"),
    ]
    ranking = rank(orderings)
    names = [row.ordering.name for row in ranking.rows]
    found = {names[r.row]: (names[r.other], r.kind, None if r.domain is None else r.domain.kind) for r in
             relations(ranking.rows)}  # fmt: skip
    # A reversal of this wave is a shift by one cell.
    assert found == {
        "reversed": ("first", "domain", "as given"),
        "threefold": ("first", "domain", "spin domain"),
        "turned": ("first", "family", None),
        "other arm": ("first", "domain", "k-domain"),
        "by any angle": ("first", "family", None),
    }
    words = {names[r.row]: r.words for r in relations(ranking.rows)}
    assert words["reversed"] == (
        "the same ordering as first up to symmetry: the same arrangement, moved by a lattice vector at most"
    )
    assert words["turned"] == (
        "the same pattern as first, turned by 90° about [1 1 1] within a continuous family of equal energy"
    )
    assert words["other arm"].startswith(
        "the same ordering as first up to symmetry: k-domain, another arm of the star (by "
    )


def test_a_domain_that_is_turned_as_well() -> None:
    ranking = rank([wave((1, -1, 0), ARMS[0], "first"), wave((1, 0.2, -0.8), ARMS[1], "far")])
    # In the arm (½,0,0) the plane is that across its own wave vector.
    across = np.array([1.0, -1.0, -1.0])
    far = np.array([1, 0.2, -0.8])
    far -= across * (far @ across) / 3
    ranking = rank([wave((1, -1, 0), ARMS[0], "first"), wave(tuple(far), ARMS[1], "far")])
    (found,) = relations(ranking.rows)
    assert (found.kind, found.domain is not None and found.domain.kind) == ("family", "k-domain")


def test_an_accident_is_not_named() -> None:
    crystal = Crystal(np.diag([3.0, 4.0, 5.0]), [(0, 0, 0)], ("Mn",))
    # Along k or across: no operation leads from one to the other, and no two energies are equal.
    ranking = rank([Ordering(crystal, [[0, 0, 2]], (0.5, 0, 0)), Ordering(crystal, [[0, 2, 0]], (0.5, 0, 0))])
    assert relations(ranking.rows) == ()


def test_turn_between() -> None:
    rotation = Rotation.from_rotvec([0.3, -0.4, 0.9]).as_matrix()
    one = Ordering(FCC, [[3, 2j, 1]], (0.11, 0.27, 0.2))
    np.testing.assert_allclose(turn_between(one, one.rotated(rotation)), rotation, atol=1e-12)
    assert turn_between(one, Ordering(FCC, [[3, 2j, 1]], (0.11, 0.27, 0.21))) is None
    assert turn_between(one, Ordering(FCC, [[3, 2j, 1.1]], (0.11, 0.27, 0.2))) is None
