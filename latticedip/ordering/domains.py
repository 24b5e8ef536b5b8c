"""Domains: the distinct ways in which an ordering can lie in its crystal.

An operation (R, t) of the non-magnetic structure carries the moment m at x to R x + t and turns it as an axial vector;
time reversal turns every moment round. What comes out is the same ordering elsewhere in the specimen: a k-domain where
other k of the star are used, a spin domain where they are the same. Arrangements that differ by a translation of the
non-magnetic lattice alone are one. Under (R, t) the component of site j at k becomes

    S'(j') = det(R) R S(j) exp(2πi k'·s),   k' = k R⁻¹,   R τ_j + t = τ_j' + s,  s a lattice vector.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from latticedip.checks import ComplexArray, FloatArray
from latticedip.crystal.lattice import (
    box_of,
    exact_translations,
    hermite_basis,
    primitive_basis,
    translation_classes,
)
from latticedip.crystal.model import Crystal
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import InputError
from latticedip.ordering.model import (
    Ordering,
    ParentTransform,
    Reference,
    is_self_conjugate,
    merge_components,
    snap_k,
)
from latticedip.ordering.phases import PhaseSpace, phase_space

#: Distance (Å) within which an operation carries a site onto a site, and a site of an ordering lies on its parent's.
SITE_TOLERANCE_A, PARENT_TOLERANCE_A = 0.05, 0.2
#: Two arrangements are the same where their components differ by less than this part of the largest one.
SAME_MOMENTS = 2e-3
#: Two k are the same within this.
SAME_K = 1e-6
#: Largest denominator of the transformation to the cell of an ordering.
LARGEST_DENOMINATOR = 12


@dataclass(frozen=True, eq=False)
class Domain:
    """One domain of an ordering.

    ordering: the Ordering as it lies in this domain. number: counted from 1, which is the ordering as given.
    kind: "as given", "k-domain", "spin domain" or "time-reversed".
    operation: the operation that leads there, as "-y,x,z" in the cell of the non-magnetic structure; "reversed" is
        added where time reversal is part of it.
    """

    ordering: Ordering
    number: int
    kind: str
    operation: str


@dataclass(frozen=True, eq=False)
class _Waves:
    """An arrangement over the primitive lattice: k (n, 3) in its reciprocal vectors, parts (n, classes, 3) in µB."""

    k: FloatArray
    parts: ComplexArray


def domains(ordering: Ordering, *, reversed_too: bool = True) -> tuple[Domain, ...]:
    """All domains of an ordering under the space group of its non-magnetic structure, the ordering as given first.

    The non-magnetic structure is that of ``ordering.reference`` where there is one, else its own crystal; operations
    that do not keep the cell given have then no place.
    reversed_too: also those that only time reversal gives (their fields are opposite).

    Raises InputError where an operation of the crystal carries a magnetic site onto none of its kind, and where the
    cell of the ordering does not fit that of its reference.
    """
    parent = in_reference_cell(ordering)
    operations = operations_of(parent.crystal)
    lattice = _PrimitiveLattice.of(parent.crystal)
    first = lattice.waves(parent)
    phases = phase_space(first.k)
    kept: list[tuple[_Waves, PhaseSpace, Domain]] = [(first, phases, Domain(ordering, 1, "as given", "x,y,z"))]
    for rotation, translation in zip(operations.rotations, operations.translations, strict=True):
        image = _image(parent, rotation, translation)
        turned = lattice.waves(image)
        for reverse in (False, True) if reversed_too else (False,):
            waves = _Waves(turned.k, -turned.parts) if reverse else turned
            if any(_same_up_to_translation(waves, other, space) for other, space, _ in kept):
                continue
            kind = "time-reversed" if reverse else "spin domain"
            if _partners(waves, first) is None:
                kind = "k-domain"
            if ordering.reference is not None:
                placed = _placed(ordering, rotation, translation, reverse)
            else:
                placed = dataclasses.replace(image, components=-image.components) if reverse else image
            words = operation_text(rotation, translation) + (", reversed" if reverse else "")
            kept.append((waves, phase_space(waves.k), Domain(placed, len(kept) + 1, kind, words)))
    return tuple(domain for _, _, domain in kept)


def which_domain(listed: Sequence[Domain], other: Ordering) -> Domain | None:
    """The domain that an ordering is, up to a lattice vector; None where it is none of them.

    listed: what `domains` gives for one ordering. None also where the two have no common non-magnetic structure.

    Raises InputError as `domains` does.
    """
    second = in_reference_cell(other)
    if not listed or not _same_structure(in_reference_cell(listed[0].ordering).crystal, second.crystal):
        return None
    lattice = _PrimitiveLattice.of(second.crystal)
    wanted = lattice.waves(second)
    for domain in listed:
        found = lattice.waves(in_reference_cell(domain.ordering))
        if _same_up_to_translation(wanted, found, phase_space(found.k)):
            return domain
    return None


def _same_structure(one: Crystal, two: Crystal) -> bool:
    if one is two:
        return True
    alike = one.symbols == two.symbols and one.pbc == two.pbc and np.allclose(one.cell, two.cell, rtol=0, atol=1e-6)
    return alike and np.allclose(one.positions, two.positions, rtol=0, atol=1e-6)


def in_reference_cell(ordering: Ordering) -> Ordering:
    """The same ordering on the sites of its reference crystal, as Fourier components at every k it takes there.

    Sites go by their element and place; where the two structures differ a little, those of the reference are taken.

    Raises InputError where a magnetic site lies on none of the reference (within 0.2 Å), or the cells do not fit.
    """
    if ordering.reference is None:
        return ordering
    crystal, P, p = ordering.reference.crystal, ordering.reference.transform.P, ordering.reference.transform.p
    factor = next(
        (d for d in range(1, LARGEST_DENOMINATOR + 1) if np.abs(d * P - np.round(d * P)).max() < 1e-6 * d), None
    )
    if factor is None:
        raise InputError(f"the cell of ordering {ordering.name!r} is no lattice of its parent: P = {P.tolist()}.")
    # Where the cell is finer than that of the reference, so many copies of it fill one that is not.
    child = np.round(factor * P).astype(np.int64)
    copies = np.stack(np.meshgrid(*([np.arange(factor)] * 3), indexing="ij"), axis=-1).reshape(-1, 3)
    steps = box_of(hermite_basis(child.T))
    sites = np.flatnonzero(ordering.is_magnetic)
    places = (ordering.crystal.positions[sites, None] + copies) @ P.T + p
    found = np.empty(places.shape[:2], dtype=int)
    cells = np.empty(places.shape)
    for row, site in enumerate(sites):
        alike = np.array([s == ordering.crystal.symbols[site] for s in crystal.symbols])
        found[row], cells[row], distance = _nearest(crystal, places[row], alike)
        if np.any(distance > PARENT_TOLERANCE_A):
            raise InputError(
                f"atom {ordering.crystal.labels[site]} of ordering {ordering.name!r} lies on no atom of its element "
                f"in [crystal] (within {PARENT_TOLERANCE_A} Å)."
            )
    k_all, parts = [], []
    for k, component in zip(ordering.k, ordering.components, strict=True):
        for q in (factor * k + steps) @ np.linalg.inv(child):
            turns = np.exp(2j * np.pi * ((cells @ q - copies @ k) % 1.0)) / len(steps)
            part = np.zeros((crystal.n_sites, 3), dtype=complex)
            np.add.at(part, found, turns[:, :, None] * component[sites, None])
            k_all.append(q)
            parts.append(part)
    return _ordering_of(crystal, np.array(k_all), np.array(parts), ordering.name)


def operation_text(rotation: np.ndarray, translation: FloatArray) -> str:
    """An operation as crystallographers write it, "-y,x,z+1/2"."""
    rows = []
    for row, shift in zip(rotation, np.asarray(translation) % 1.0, strict=True):
        text = "".join(
            ("-" if n < 0 else "+") + ("" if abs(n) == 1 else str(abs(int(n)))) + axis
            for n, axis in zip(row, "xyz", strict=True)
            if n
        ).lstrip("+")
        neat = Fraction(float(shift)).limit_denominator(24)
        shown = str(neat) if abs(float(neat) - shift) < 1e-4 else f"{shift:.4f}"
        rows.append(text + ("" if shown in ("0", "1") else f"+{shown}"))
    return ",".join(rows)


def orthogonal(crystal: Crystal, rotation: np.ndarray) -> FloatArray:
    """Shape (3, 3) float. A rotation of fractional coordinates as an orthogonal matrix on Cartesian vectors."""
    turn = crystal.cell.T @ rotation @ np.linalg.inv(crystal.cell.T)
    # The nearest orthogonal matrix: a cell agrees with its symmetry only to the digits of its file.
    left, _, right = np.linalg.svd(turn)
    return np.asarray(left @ right)


# --- one arrangement made of another ---------------------------------------------------------------------


def _image(ordering: Ordering, rotation: np.ndarray, translation: FloatArray) -> Ordering:
    """The arrangement that an operation of its crystal makes of an ordering."""
    crystal = ordering.crystal
    k = snap_k(ordering.k @ np.linalg.inv(rotation))
    turn = orthogonal(crystal, rotation)
    axial = np.round(np.linalg.det(turn)) * turn
    components = np.zeros_like(ordering.components)
    places = crystal.positions @ rotation.T + translation
    for kind in dict.fromkeys(_kinds(crystal)):
        alike = np.array([other == kind for other in _kinds(crystal)])
        sites = np.flatnonzero(alike & ordering.is_magnetic)
        if not len(sites):
            continue
        targets, cells, distance = _nearest(crystal, places[sites], alike)
        if np.any(distance > SITE_TOLERANCE_A):
            site = int(sites[np.argmax(distance)])
            raise InputError(
                f"the operation {operation_text(rotation, translation)} of the crystal maps atom {site + 1} "
                f"({crystal.labels[site]}) onto no atom of its kind: it is not one of this crystal."
            )
        turns = np.exp(2j * np.pi * ((k @ cells.T) % 1.0))
        components[:, targets] = turns[:, :, None] * (ordering.components[:, sites] @ axial.T)
    return _ordering_of(crystal, k, components, ordering.name, ordering.notes)


def _ordering_of(
    crystal: Crystal, k: FloatArray, components: ComplexArray, name: str, notes: tuple[str, ...] = ()
) -> Ordering:
    """An Ordering from computed components: what is nothing beside the largest is left out, or dropped."""
    k, components = merge_components(snap_k(k), components)
    own_opposite = is_self_conjugate(k)
    components[own_opposite] = components[own_opposite].real
    floor = 1e-9 * float(np.abs(components).max(initial=0.0))
    components.real[np.abs(components.real) <= floor] = 0.0
    components.imag[np.abs(components.imag) <= floor] = 0.0
    kept = np.abs(components).max(axis=(1, 2), initial=0.0) > 0.0
    kept[0] |= not np.any(kept)
    return Ordering(crystal, components[kept], k[kept], name, notes=notes)


def _placed(ordering: Ordering, rotation: np.ndarray, translation: FloatArray, reverse: bool) -> Ordering:
    """An ordering with a cell of its own, carried as a whole by an operation of its reference crystal."""
    assert ordering.reference is not None
    reference = ordering.reference
    turn = orthogonal(reference.crystal, rotation)
    axial = np.round(np.linalg.det(turn)) * turn
    # The cell is turned with the atoms, so that fractional coordinates and k stay as they are.
    carried = dataclasses.replace(ordering.crystal, cell=ordering.crystal.cell @ turn.T)
    transform = ParentTransform(rotation @ reference.transform.P, rotation @ reference.transform.p + translation)
    components = ordering.components @ axial.T
    return dataclasses.replace(
        ordering,
        crystal=carried,
        components=-components if reverse else components,
        moment_su=None,
        amplitude_su=tuple(one.turned(axial) for one in ordering.amplitude_su),
        parent=None,
        reference=Reference(reference.crystal, transform, reference.how),
    )


def _kinds(crystal: Crystal) -> list[tuple[str, float]]:
    return [(s, round(float(p), 6)) for s, p in zip(crystal.symbols, crystal.occupancies, strict=True)]


def _nearest(crystal: Crystal, places: FloatArray, alike: np.ndarray) -> tuple[np.ndarray, FloatArray, FloatArray]:
    """Of the sites in a mask the one nearest to each place (n, 3), the lattice vector to there, the distance in Å."""
    listed = np.flatnonzero(alike)
    if not len(listed):
        return np.zeros(len(places), dtype=int), np.zeros((len(places), 3)), np.full(len(places), np.inf)
    gaps = places[:, None] - crystal.positions[listed]
    whole = np.round(gaps)
    distance = np.linalg.norm((gaps - whole) @ crystal.cell, axis=-1)
    nearest = np.argmin(distance, axis=1)
    rows = np.arange(len(places))
    return listed[nearest], whole[rows, nearest], distance[rows, nearest]


# --- comparison over the primitive lattice ---------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _PrimitiveLattice:
    """Primitive vectors of a crystal (rows, in its cell); for each site the first of its class and the way there."""

    basis: FloatArray
    centrings: FloatArray
    first: np.ndarray
    shift: FloatArray

    @classmethod
    def of(cls, crystal: Crystal) -> _PrimitiveLattice:
        centrings = exact_translations(operations_of(crystal).centrings())
        return cls(primitive_basis(centrings), centrings, *translation_classes(crystal, centrings))

    def waves(self, ordering: Ordering) -> _Waves:
        """With m(ℓ) the moment of a class at lattice vector ℓ: m(ℓ) = Σ_q Re[A(q) exp(−2πi q·ℓ)]."""
        heads, classes = np.unique(self.first, return_inverse=True)
        names: dict[tuple[int, ...], FloatArray] = {}
        n = len(self.centrings)
        # Whole reciprocal vectors of the cell, one of each class modulo those of the primitive lattice.
        for whole in np.ndindex(n, n, n):
            step = np.array(whole, dtype=float)
            q = step @ self.basis.T
            names.setdefault(tuple(int(x) for x in np.round(q % 1.0 * n) % n), step)
            if len(names) == n:
                break
        size = float(np.abs(ordering.components).max(initial=0.0))
        k_all, parts = [], []
        for k, component in zip(ordering.k, ordering.components, strict=True):
            for step in names.values():
                q = k + step
                turned = component * np.exp(2j * np.pi * ((self.shift @ q) % 1.0))[:, None] / n
                part = np.zeros((len(heads), 3), dtype=complex)
                np.add.at(part, classes, turned)
                if np.abs(part).max(initial=0.0) > SAME_MOMENTS * size / 10:
                    k_all.append(q @ self.basis.T)
                    parts.append(part)
        if not parts:
            return _Waves(np.zeros((1, 3)), np.zeros((1, len(heads), 3), dtype=complex))
        merged_k, merged = merge_components(snap_k(np.array(k_all)), np.array(parts))
        own_opposite = is_self_conjugate(merged_k)
        merged[own_opposite] = merged[own_opposite].real
        return _Waves(merged_k, merged)


def _partners(waves: _Waves, other: _Waves) -> list[tuple[int, bool]] | None:
    """For each wave the one of the other set at the same k, and whether it stands there at −k; None if not all do."""
    if len(waves.k) != len(other.k):
        return None
    found: list[tuple[int, bool]] = []
    for k in waves.k:
        for i, candidate in enumerate(other.k):
            same, opposite = k - candidate, k + candidate
            if np.abs(same - np.round(same)).max() <= SAME_K:
                found.append((i, False))
                break
            if np.abs(opposite - np.round(opposite)).max() <= SAME_K:
                found.append((i, True))
                break
        else:
            return None
    return found


def _same_up_to_translation(waves: _Waves, other: _Waves, phases: PhaseSpace) -> bool:
    """True where one arrangement is the other, moved by a lattice vector; ``phases`` are those of the other."""
    partners = _partners(waves, other)
    if partners is None:
        return False
    bound = SAME_MOMENTS * float(np.abs(other.parts).max(initial=0.0))
    turns = np.zeros(len(other.k))
    for part, (i, conjugate) in zip(waves.parts, partners, strict=True):
        ours, theirs = (part.conj() if conjugate else part), other.parts[i]
        turns[i] = np.angle(np.vdot(theirs, ours)) / (2 * np.pi)
        if np.abs(theirs * np.exp(2j * np.pi * turns[i]) - ours).max() > bound:
            return False
    return phases.holds(turns)
