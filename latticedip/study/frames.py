"""Orderings that come with a cell of their own, turned into the frame of the crystal of a study.

Words used here and nowhere renamed:

domain       one of the distinct ways in which an ordering can lie in its crystal; they differ by a symmetry of
             the non-magnetic structure, not by a mere translation of it
"""

from __future__ import annotations

import dataclasses
from fractions import Fraction

import numpy as np

from latticedip.checks import ComplexArray, FloatArray
from latticedip.crystal.lattice import box_of, hermite_basis, primitive_basis, translation_classes
from latticedip.crystal.match import Match, check_transform, is_symmetry, match_structures, translations_of
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering, ParentTransform, Reference

#: Moments that agree within this fraction of the largest one are the same moments.
SAME_MOMENTS = 2e-3
#: Wave vectors are compared as whole numbers of this part; it is a multiple of all small denominators.
_K_PARTS = 5_765_760

Waves = dict[tuple[int, int, int], ComplexArray]


def place_in_frame(ordering: Ordering, crystal: Crystal, domain: int | None = None) -> Ordering:
    """Turn an ordering rigidly into the Cartesian frame of a crystal, and give it its `reference`.

    The parent transformation that the file of the ordering states (``ordering.parent``) is used where it maps the
    cell (2 % in every length) and the sites (0.2 Å) onto the crystal, else the two structures are matched by
    lattice and sites. The choice among several domains is written into the reference and the notes.

    domain: the number of the domain, from 1; None takes the first: the one the file states, else the one with the
    smallest rotation.

    Raises InputError where the structures do not match, where there is no domain of that number, and where a file
    that lists only some elements can be placed in ways that no symmetry of the crystal relates.
    """
    stated: Match | None = None
    reason = ""
    if ordering.parent is not None:
        try:
            stated = check_transform(crystal, ordering.crystal, ordering.parent.P, ordering.parent.p)
        except InputError as error:
            reason = str(error)
    if stated is not None and domain in (None, 1):
        how = f"by the parent transformation that its file states ({transform_words(stated.P, stated.p)})"
        return _turned(ordering, crystal, stated, how, _strain_notes(stated))
    try:
        matches = match_structures(crystal, ordering.crystal)
    except InputError as error:
        also = ""
        if reason not in ("", str(error)):
            also = f" The parent transformation it states does not fit either: {reason}"
        raise InputError(
            f"the structure of this ordering does not match that of [crystal], its parent: {error}{also}"
        ) from None
    domains = distinct_domains(ordering, crystal, matches, stated)
    number = 1 if domain is None else domain
    if number > len(domains):
        raise InputError(f"there is no domain {number}: the ordering has {_count(len(domains), 'domain')}.")
    if domain is None and not all(is_symmetry(crystal, domains[0], other) for other in domains[1:]):
        raise InputError(
            f"the file lists only {', '.join(sorted(set(ordering.crystal.symbols)))}, which can be placed in [crystal] "
            f"in {len(domains)} ways that its symmetry does not relate. List all atoms in the file, or name a "
            f"placement: domain = 1 to {len(domains)}."
        )
    match = domains[number - 1]
    how = f"matched to [crystal] by lattice and sites ({transform_words(match.P, match.p)}; {_fit_words(match)})"
    notes = _strain_notes(match)
    if reason:
        notes.insert(0, f"the parent transformation its file states does not fit [crystal] and is not used: {reason}")
    if len(domains) > 1:
        picked = "named in the study" if domain is not None else "the smallest rotation"
        words = (
            f"domain {number} of {len(domains)} ({picked}, {match.angle_deg:.4g}° from the axes of its file); "
            "`domain` in the study names another"
        )
        how += "; " + words
        notes.append(words)
    return _turned(ordering, crystal, match, how, notes)


def distinct_domains(
    ordering: Ordering, crystal: Crystal, matches: list[Match], first: Match | None = None
) -> list[Match]:
    """One match for each different arrangement of moments on the sites of the crystal, in the order given.

    Arrangements that differ by a translation of the crystal are the same. With ``first`` that match leads the list.
    """
    translations = translations_of(crystal) if all(crystal.pbc) else np.zeros((1, 3))
    ordered = matches if first is None else [first, *matches]
    lattice = _SiteClasses(primitive_basis(translations), *translation_classes(crystal, translations))
    kept: list[tuple[Match, Waves, FloatArray]] = []
    for match in ordered:
        waves, child = _waves(ordering, match, lattice)
        if not any(_same_up_to_translation(waves, other, steps) for _, other, steps in kept):
            kept.append((match, waves, box_of(hermite_basis(child)).astype(float)))
    return [match for match, _, _ in kept]


@dataclasses.dataclass(frozen=True, eq=False)
class _SiteClasses:
    """The primitive vectors of a crystal (rows, in its cell); per site the first of its class and the way there."""

    basis: FloatArray
    first: np.ndarray
    shift: FloatArray


def _waves(ordering: Ordering, match: Match, crystal: _SiteClasses) -> tuple[Waves, np.ndarray]:
    """Fourier components of the turned moments over the primitive lattice of the crystal, and the child cell in it.

    With m(ℓ) the moment of a site class at lattice vector ℓ, m(ℓ) = Σ_q A(q) exp(−2πi q·ℓ); both q and −q are kept.
    q counts in reciprocal vectors of the primitive cell, of which N = |child cell| lie in each class of k.
    """
    to_basis = np.linalg.inv(crystal.basis)
    child = np.round(match.P.T @ to_basis).astype(np.int64)
    heads, classes = np.unique(crystal.first[match.partners], return_inverse=True)
    lattice = (crystal.shift[match.partners] + match.cells) @ to_basis
    turned = ordering.components @ match.rotation.T
    n_cells = len(box_of(hermite_basis(child)))
    steps = box_of(hermite_basis(child.T))
    scale = float(np.abs(turned).max(initial=0.0))
    waves: Waves = {}
    for k, component in zip(ordering.k, turned, strict=True):
        for q in np.linalg.solve(child.astype(float), (k + steps).T).T:
            phases = np.exp(2j * np.pi * ((lattice @ q) % 1.0))
            amplitude = np.zeros((len(heads), 3), dtype=complex)
            np.add.at(amplitude, classes, component * phases[:, None] / (2 * n_cells))
            if np.abs(amplitude).max(initial=0.0) > SAME_MOMENTS * scale / 10:
                for sign, part in ((1, amplitude), (-1, amplitude.conj())):
                    name = _wave_name(sign * q)
                    waves[name] = waves[name] + part if name in waves else part
    return waves, child


def _wave_name(q: FloatArray) -> tuple[int, int, int]:
    parts = np.round(q * _K_PARTS).astype(np.int64) % _K_PARTS
    return int(parts[0]), int(parts[1]), int(parts[2])


def _same_up_to_translation(waves: Waves, other: Waves, steps: FloatArray) -> bool:
    """True where one arrangement, moved by one of the lattice vectors ``steps``, is the other."""
    if waves.keys() != other.keys():
        return False
    names = list(waves)
    q = np.array(names, dtype=float).reshape(-1, 3) / _K_PARTS
    ours = np.array([waves[name] for name in names])
    theirs = np.array([other[name] for name in names])
    bound = SAME_MOMENTS * float(np.abs(theirs).max(initial=0.0))
    if np.abs(np.abs(theirs) - np.abs(ours)).max(initial=0.0) > bound:
        return False
    turns = np.exp(2j * np.pi * ((steps @ q.T) % 1.0))
    return any(np.abs(theirs * turn[:, None, None] - ours).max(initial=0.0) <= bound for turn in turns)


def _turned(ordering: Ordering, crystal: Crystal, match: Match, how: str, notes: list[str]) -> Ordering:
    own = ordering.crystal
    turned = dataclasses.replace(own, cell=own.cell @ match.rotation.T)
    return dataclasses.replace(
        ordering,
        crystal=turned,
        components=ordering.components @ match.rotation.T,
        amplitude_su=tuple(one.turned(match.rotation) for one in ordering.amplitude_su),
        reference=Reference(crystal, ParentTransform(match.P, match.p), how),
        notes=(*ordering.notes, *notes),
    )


def _strain_notes(match: Match) -> list[str]:
    if match.strain < 1e-3:
        return []
    return [f"its cell differs from that of [crystal] by up to {100 * match.strain:.2g} % in a length and is kept"]


def _fit_words(match: Match) -> str:
    return f"sites within {match.displacement_A:.3f} Å, lengths within {100 * match.strain:.2f} %"


def transform_words(P: FloatArray, p: FloatArray) -> str:
    """A transformation as crystallographers write it, "a,b,2c;0,0,1/4": child vectors, then the origin shift."""
    vectors = ["".join(_term(x, axis) for x, axis in zip(column, "abc", strict=True)).lstrip("+") for column in P.T]
    return ",".join(vectors) + ";" + ",".join(_number(x) for x in p)


def _term(factor: float, axis: str) -> str:
    if abs(factor) < 1e-9:
        return ""
    size = "" if abs(abs(factor) - 1) < 1e-9 else _number(abs(factor))
    return ("-" if factor < 0 else "+") + size + axis


def _number(value: float) -> str:
    neat = Fraction(float(value)).limit_denominator(48)
    return str(neat) if abs(value - neat) < 1e-6 else f"{value:.5g}"


def _count(n: int, noun: str) -> str:
    return f"{n} {noun}" + ("" if n == 1 else "s")
