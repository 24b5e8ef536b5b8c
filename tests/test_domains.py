"""Domains of orderings: counted as group theory does, and each a symmetry image in the fields it makes."""

from __future__ import annotations

import numpy as np
import pytest

import latticedip as ld
from latticedip.crystal.model import Operations
from latticedip.errors import InputError
from latticedip.ordering.domains import domains, in_reference_cell, operation_text
from latticedip.ordering.model import ParentTransform, Reference

SC = ld.Crystal(4.0 * np.eye(3), [[0, 0, 0]], ["Mn"])
FCC = ld.Crystal(4.0 * np.eye(3), [[0, 0, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]], ["Mn"] * 4)
#: Signs of k = (½,½,½) on the four atoms of the cube, by the centring rule.
SECOND_KIND = np.where(np.isclose((FCC.positions.sum(axis=1) / 2) % 1, 0.5), -1, 1)[:, None]


@pytest.mark.parametrize(
    ("crystal", "components", "k", "counts"),
    [
        # 48 operations and time reversal, over those that keep the arrangement.
        (SC, [[0, 0, 1]], [0, 0, 0], (6, 0)),
        (SC, [[1, 1, 1]], [0, 0, 0], (8, 0)),
        (SC, [[1, 2, 3]], [0, 0, 0], (48, 0)),
        # One k in its star, and a translation that reverses every moment.
        (SC, [[0, 0, 1]], [0.5, 0.5, 0.5], (3, 0)),
        (SC, [[0, 0, 1]], [0.5, 0.5, 0], (3, 2)),
        (SC, [[1, 0, 0]], [0.5, 0.5, 0], (6, 4)),
        # A helix: both hands for each of three k; a linear wave: two directions for each.
        (SC, [[1, 1j, 0]], [0, 0, 0.213], (6, 4)),
        (SC, [[1, 0, 0]], [0, 0, 0.213], (6, 4)),
        # Type I in (001), moments along [110]: three k of the primitive lattice although k = 0 in the cube.
        (FCC, np.outer([1, -1, -1, 1], [1, 1, 0]), [0, 0, 0], (6, 4)),
        # Type II with moments across [111]: four k, three directions each.
        (FCC, SECOND_KIND * np.array([1, -1, 0]), [0.5, 0.5, 0.5], (12, 9)),
        (FCC, SECOND_KIND * np.array([1, 1, 1]), [0.5, 0.5, 0.5], (4, 3)),
    ],
)
def test_domains_are_counted(crystal, components, k, counts):
    found = domains(ld.Ordering(crystal, components, k))
    assert (len(found), sum(domain.kind == "k-domain" for domain in found)) == counts
    assert [domain.number for domain in found] == list(range(1, len(found) + 1))
    assert (found[0].kind, found[0].operation) == ("as given", "x,y,z")


def test_time_reversed_domains_can_be_left_out():
    oblique = ld.Crystal([[4, 0, 0], [0.3, 4.5, 0], [0.2, 0.4, 5]], [[0, 0, 0]], ["Mn"])
    ferromagnet = ld.Ordering(oblique, [[0, 0, 1]])
    assert [d.kind for d in domains(ferromagnet)] == ["as given", "time-reversed"]
    assert len(domains(ferromagnet, reversed_too=False)) == 1


def test_a_domain_is_the_image_in_its_fields():
    """The field at the image of a point is the turned field at the point, in the same cell of the image."""
    cell = np.diag([4.0, 4.0, 5.0])
    crystal = ld.Crystal(cell, [[0, 0, 0.2], [0.5, 0.5, 0.8]], ["Mn", "Mn"])
    ordering = ld.Ordering(crystal, [[[1, 0.3j, 0], [0, 0.2, 1j]]], [[0.17, 0.05, 0.3]])
    points = ld.orbit(crystal, [0.21, 0.38, 0.45])
    orbits = [
        np.sort(np.linalg.norm(ld.orbit_field(domain.ordering, ld.Probe(points[0])).waves[0], axis=1))
        for domain in domains(ordering)
    ]
    assert len(orbits) == 16
    for found in orbits:
        assert found == pytest.approx(orbits[0], rel=1e-9)


def test_an_ordering_in_a_cell_of_its_own_has_the_domains_of_its_parent():
    """The antiferromagnet of k = (0, 0, ½) written in a doubled cell: three domains, at fields turned alike."""
    doubled = ld.Crystal(np.diag([4.0, 4.0, 8.0]), [[0, 0, 0], [0, 0, 0.5]], ["Mn", "Mn"])
    reference = Reference(SC, ParentTransform(np.diag([1.0, 1.0, 2.0]), np.zeros(3)), "by hand")
    own = ld.Ordering(doubled, [[0, 0, 1], [0, 0, -1]], reference=reference)
    parent = in_reference_cell(own)
    assert parent.k.tolist() == [[0, 0, 0.5]]
    assert parent.components.real.tolist() == [[[0, 0, 1]]]
    found = domains(own)
    plain = domains(ld.Ordering(SC, [[0, 0, 1]], [0, 0, 0.5]))
    assert [d.kind for d in found] == [d.kind for d in plain] == ["as given", "k-domain", "k-domain"]
    probe = ld.Probe([0.3, 0.1, 0.2])
    for one, other in zip(found, plain, strict=True):
        ours = ld.orbit_field(one.ordering, probe, equivalent=False)
        theirs = ld.orbit_field(other.ordering, probe, equivalent=False)
        # Two points of the doubled cell, or two phases: opposite fields.
        assert np.sort(ours.offsets.reshape(-1, 3), axis=0) == pytest.approx(
            np.sort(theirs.offsets.reshape(-1, 3), axis=0), abs=1e-9
        )


def test_operations_are_written_as_crystallographers_do():
    assert operation_text(np.array([[0, -1, 0], [1, -1, 0], [0, 0, 1]]), np.array([0, 1 / 3, -0.5])) == (
        "-y,x-y+1/3,z+1/2"
    )


def test_foreign_operations_are_refused():
    turned = Operations(np.array([np.eye(3), [[0, -1, 0], [1, 0, 0], [0, 0, 1]]]), np.zeros((2, 3)))
    crystal = ld.Crystal(4.0 * np.eye(3), [[0.1, 0.2, 0]], ["Mn"], operations=turned)
    with pytest.raises(InputError) as caught:
        domains(ld.Ordering(crystal, [[0, 0, 1]]))
    assert str(caught.value) == (
        "the operation -y,x,z of the crystal maps atom 1 (Mn) onto no atom of its kind: it is not one of this crystal."
    )


def test_an_ordering_off_its_parent_is_refused():
    reference = Reference(SC, ParentTransform(np.eye(3), np.array([0.3, 0, 0])), "by hand")
    own = ld.Ordering(SC, [[0, 0, 1]], name="lost", reference=reference)
    with pytest.raises(InputError) as caught:
        domains(own)
    assert str(caught.value) == (
        "atom Mn of ordering 'lost' lies on no atom of its element in [crystal] (within 0.2 Å)."
    )
