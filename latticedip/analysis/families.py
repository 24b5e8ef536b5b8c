"""Degenerate families: turns of a pattern that cost nothing, and candidates that are one ordering up to symmetry.

A pattern turned rigidly by R has the energy E(R). Where E(exp(θ[n]×) R) does not depend on θ for any R, turning all
moments about the fixed axis n is free; where E(R exp(θ[n]×)) does not, the pattern may be turned about an axis of its
own, whichever way it lies: a helix about its normal, which only shifts it along k. Both hold exactly if the torque, in
the fixed frame or in that of the pattern, has no component along n at any R.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from scipy.spatial.transform import Rotation

from latticedip.analysis.rank import ROUNDING, RankingRow
from latticedip.analysis.rotate import DEGENERATE, SHAPE_TOLERANCE, rotation_form, turn
from latticedip.checks import FloatArray, frozen
from latticedip.ordering.domains import Domain, domains, in_reference_cell, which_domain
from latticedip.ordering.model import Ordering
from latticedip.physics.energy import dipolar_energy
from latticedip.sample import Sample

#: Rotations at which the torque is taken: E(R) is a polynomial of 54 numbers at most.
SAMPLES = 80
#: Moments of two patterns agree where they differ by less than this part of the largest.
SAME_PATTERN = 1e-4
#: Two axes are the same where their cosine differs from ±1 by less than this.
SAME_AXIS = 1e-6
#: Earlier candidates of a tie that each is compared with.
MOST_COMPARED = 50

DOMAIN_WORDS = {
    "as given": "the same arrangement, moved by a lattice vector at most",
    "k-domain": "k-domain, another arm of the star",
    "spin domain": "spin domain",
    "time-reversed": "time-reversed domain",
}


@dataclass(frozen=True, eq=False)
class Freedom:
    """Rigid turns of a pattern that leave its energy as it is.

    kind: "none", "axis" (all moments may be turned about one fixed axis), "own axis" (about an axis of the pattern
        itself) or "any" (turned at will). axis_cart: Shape (3,) unit vector as the pattern lies, or None.
    words: what a report says of it; empty for "none".
    """

    kind: str
    axis_cart: FloatArray | None
    words: str

    def to_dict(self) -> dict[str, Any]:
        """Plain dict."""
        axis = None if self.axis_cart is None else self.axis_cart.tolist()
        return {"kind": self.kind, "axis_cart": axis, "words": self.words}


def freedom(ordering: Ordering, *, sample: Sample | None = None, tol: float = 1e-10) -> Freedom:
    """Which rigid turns of all moments of a pattern together leave its energy as it is (a continuous degeneracy).

    A turn that leaves the moments themselves as they are is none. sample: None means N = 0. tol: as `dipole_tensor`;
    what the sums cannot resolve counts as no difference.

    Raises InputError where the ordering carries no moments or the crystal is not periodic in three directions.
    """
    specimen = Sample() if sample is None else sample
    energy = dipolar_energy(ordering, sample=specimen, tol=tol)
    kernel, linear = rotation_form(ordering, specimen, tol)
    size = float(np.abs(kernel).max()) + float(np.abs(linear).max())
    same = DEGENERATE * size + 2 * energy.error_bound_eV
    rotations = np.concatenate([np.eye(3)[None], Rotation.random(SAMPLES, random_state=0).as_matrix()])
    flat = rotations.reshape(-1, 9)
    slopes = (2 * flat @ kernel - linear).reshape(-1, 3, 3)
    # dE = tr(Gᵀ [δ]× R): the torque is the antisymmetric part of G Rᵀ, as in the descent of `rotate`.
    product = slopes @ rotations.transpose(0, 2, 1)
    torque = np.stack([product[:, i, j] - product[:, j, i] for i, j in ((2, 1), (0, 2), (1, 0))], axis=1)
    fixed = _null_space(torque, same)
    own = _null_space(np.einsum("nba,nb->na", rotations, torque), same)
    axis = common_axis(ordering)
    if len(fixed) > 1 or len(own) > (1 if axis is not None else 0) + 1:
        return Freedom("any", None, "continuously degenerate: the energy is the same however the pattern is turned")
    if len(fixed) == 1 and (axis is None or abs(float(axis @ fixed[0])) < 1 - SAME_AXIS):
        words = f"continuously degenerate: all moments may be turned about {_axis_words(fixed[0])} (Cartesian)"
        if axis is not None and abs(float(axis @ fixed[0])) < SAME_AXIS:
            words += ", their direction is free in the plane across it"
        return Freedom("axis", frozen(fixed[0]), words)
    if len(own) == 1 and axis is None:
        words = f"continuously degenerate: the pattern may be turned about its own axis, {_axis_words(own[0])} now"
        turned = ordering.rotated(Rotation.from_rotvec(0.1 * own[0]).as_matrix())
        if which_domain((Domain(ordering, 1, "as given", "x,y,z"),), turned) is not None:
            words += "; that only shifts it along k"
        return Freedom("own axis", frozen(own[0]), words)
    return Freedom("none", None, "")


def _null_space(torques: FloatArray, same: float) -> FloatArray:
    """Rows: orthonormal axes about which no torque (n, 3) is larger than ``same``; largest component positive."""
    _, values, axes = np.linalg.svd(torques)
    found = axes[values <= same * np.sqrt(len(torques))]
    signs = np.sign(found[np.arange(len(found)), np.argmax(np.abs(found).round(9), axis=1)])
    return np.asarray(found * signs[:, None])


def common_axis(ordering: Ordering) -> FloatArray | None:
    """Shape (3,) unit vector along which all moments of a collinear pattern lie, the first one up; else None."""
    stacked = np.concatenate([ordering.components.real, ordering.components.imag]).reshape(-1, 3)
    _, values, axes = np.linalg.svd(stacked, full_matrices=False)
    if values[1] > SHAPE_TOLERANCE * values[0]:
        return None
    along = stacked @ axes[0]
    first = int(np.argmax(np.abs(along) > 1e-6 * np.abs(along).max()))
    return np.asarray(axes[0] * np.sign(along[first]))


def _axis_words(axis: FloatArray) -> str:
    """A direction in whole numbers up to 3 where it has such a ratio, else with four decimals."""
    for largest in (1, 2, 3):
        scaled = axis * largest / np.abs(axis).max()
        if np.abs(scaled - np.round(scaled)).max() < 1e-6:
            return "[" + " ".join(str(round(float(x))) for x in scaled) + "]"
    return "[" + " ".join(f"{x + 0.0:.4f}" for x in np.where(np.abs(axis) < 5e-5, 0.0, axis)) + "]"


@dataclass(frozen=True, eq=False)
class Relation:
    """How one of two candidates of equal energy comes from the other.

    row, other: places in the ranking, from 0; ``other`` comes first. kind: "domain" (equal by symmetry; see
    ``domain``) or "family" (the same pattern, turned within a continuous family of equal energy).
    words: what a report says after the name of the row.
    """

    row: int
    other: int
    kind: str
    words: str
    domain: Domain | None = None

    def to_dict(self) -> dict[str, Any]:
        """Plain dict."""
        operation = None if self.domain is None else self.domain.operation
        domain = None if self.domain is None else self.domain.kind
        return {"kind": self.kind, "domain": domain, "operation": operation, "words": self.words}


def relations(rows: Sequence[RankingRow], *, sample: Sample | None = None, tol: float = 1e-10) -> tuple[Relation, ...]:
    """Ties of a ranking that are no accident: domains of one ordering, and members of one continuous family.

    rows: of a Ranking, in its order. Each row of a tie is compared with the first 50 of it that come earlier.
    Operations are those of the crystal; orderings on different crystals share none.

    Raises InputError as `domains` does.
    """
    found = []
    earlier: list[_Candidate] = []
    for place, row in enumerate(rows):
        if not row.tie or (place and not _tied(rows[place - 1], row)):
            earlier = []
        if not row.tie:
            continue
        relation = _as_domain(place, row.ordering, earlier) or _as_family(place, row.ordering, earlier, sample, tol)
        if relation is not None:
            found.append(relation)
        if len(earlier) < MOST_COMPARED:
            earlier.append(_Candidate(place, row.ordering, relation is None))
    return tuple(found)


@dataclass(frozen=True, eq=False)
class _Candidate:
    """An earlier row of a tie. alone: True where no relation leads to it from one before."""

    place: int
    ordering: Ordering
    alone: bool

    @cached_property
    def domains(self) -> tuple[Domain, ...]:
        return domains(in_reference_cell(self.ordering))


def _tied(one: RankingRow, two: RankingRow) -> bool:
    """Neighbours of a ranking belong to one tie where their energies differ by no more than their bounds."""
    bound = sum(
        row.energy.error_bound_eV / row.energy.n_ions + ROUNDING * abs(row.energy.per_ion_eV) for row in (one, two)
    )
    return one.tie and two.tie and two.above_lowest_eV - one.above_lowest_eV <= bound


def _as_domain(place: int, ours: Ordering, earlier: Sequence[_Candidate]) -> Relation | None:
    for other in earlier:
        domain = which_domain(other.domains, ours)
        if domain is not None:
            words = f"the same ordering as {other.ordering.name} up to symmetry: {_domain_words(domain)}"
            return Relation(place, other.place, "domain", words, domain)
    return None


def _domain_words(domain: Domain) -> str:
    how = "" if domain.kind == "as given" else f" (by {domain.operation})"
    return DOMAIN_WORDS[domain.kind] + how


def _as_family(
    place: int, ours: Ordering, earlier: Sequence[_Candidate], sample: Sample | None, tol: float
) -> Relation | None:
    """The same pattern, or a domain of it, turned where that costs nothing."""
    for other in (candidate for candidate in earlier if candidate.alone):
        for domain in other.domains:
            rotation = turn_between(domain.ordering, ours)
            if rotation is None:
                continue
            free = freedom(domain.ordering, sample=sample, tol=tol)
            if free.kind == "none" or not _leads(free, rotation, domain.ordering):
                continue
            vector = Rotation.from_matrix(rotation).as_rotvec()
            angle = float(np.linalg.norm(vector))
            about = f" by {np.degrees(angle):.4g}° about {_axis_words(vector / angle)}" if angle > 1e-6 else ""
            which = other.ordering.name + ("" if domain.kind == "as given" else f" ({_domain_words(domain)})")
            words = f"the same pattern as {which}, turned{about} within a continuous family of equal energy"
            return Relation(place, other.place, "family", words, None if domain.kind == "as given" else domain)
    return None


def _leads(free: Freedom, rotation: FloatArray, ordering: Ordering) -> bool:
    """Whether a free turn of a pattern leads where a rotation does."""
    if free.axis_cart is None:
        return True
    axis = common_axis(ordering)
    if axis is not None:
        # A collinear pattern goes where its axis goes: round the free one at the same angle (an axis has no head).
        return abs(abs(float(free.axis_cart @ rotation @ axis)) - abs(float(free.axis_cart @ axis))) < SAME_PATTERN
    return bool(np.abs(rotation @ free.axis_cart - free.axis_cart).max() < SAME_PATTERN)


def turn_between(ordering: Ordering, other: Ordering) -> FloatArray | None:
    """Shape (3, 3). The smallest rigid turn of all moments of one ordering that makes the other; None if there is none.

    Both are taken on the sites of their non-magnetic structure; orderings at different k are never turns of each other.
    """
    one, two = in_reference_cell(ordering), in_reference_cell(other)
    if one.components.shape != two.components.shape:
        return None
    places = []
    for k in one.k:
        gaps = two.k - k
        same = np.flatnonzero(np.abs(gaps - np.round(gaps)).max(axis=1) < 1e-6)
        if len(same) != 1:
            return None
        places.append(int(same[0]))
    first = np.concatenate([one.components.real, one.components.imag]).reshape(-1, 3)
    parts = two.components[places]
    second = np.concatenate([parts.real, parts.imag]).reshape(-1, 3)
    bound = SAME_PATTERN * float(np.abs(first).max(initial=0.0))
    axis, target = common_axis(one), common_axis(two)
    if axis is not None and target is not None:
        target = target if float(np.sum((first @ axis) * (second @ target))) >= 0 else -target
        rotation = turn(axis, target)
    else:
        left, _, right = np.linalg.svd(second.T @ first)
        rotation = left @ np.diag([1.0, 1.0, float(np.sign(np.linalg.det(left @ right)))]) @ right
    return np.asarray(rotation) if np.abs(first @ rotation.T - second).max() <= bound else None
