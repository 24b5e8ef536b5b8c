"""Orderings that the symmetry of the crystal allows at a k with 2k a lattice vector, and their lowest energies.

The little group of k acts on the moments of the cell by D(g); the product of two operations may differ from a third by
a translation of the lattice, under which the moments change sign with k: D(a) D(b) = ω(a, b) D(ab), ω = ±1. A magnetic
space group with this k is a subgroup H and a sign χ for each of its operations (− : taken with time reversal) with
χ(a) χ(b) = ω(a, b) χ(ab); its moments are those with χ(h) D(h) S = S for all h (Bertaut, Acta Cryst. A24, 217 (1968);
Opechowski and Guccione 1965). All sign characters of the whole little group are tried, then those of its subgroups,
larger ones first, as long as they are not part of a group whose moments were found before: the maximal groups of k.

In each space of moments the equal-moment ordering of lowest energy is sought. Scaling the moments of a space site by
site to their sizes does not lead out of it, because sites that H exchanges have moments of one length.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.optimize import minimize

from latticedip.analysis.problem import Found, Hold, SearchProblem, wave_words
from latticedip.checks import FloatArray
from latticedip.crystal.lattice import exact_translations, primitive_basis
from latticedip.ordering.symmetry import SiteOperations, site_operations

#: More magnetic sites in a cell than this are left to the other searches.
MOST_SITES = 200
#: A moment below this part of the largest vanishes in a space.
VANISHING = 1e-6
#: Random starts of the search in a space, per dimension, and at most.
STARTS_PER_DIMENSION, MOST_STARTS = 4, 24


@dataclass(frozen=True, eq=False)
class LittleGroup:
    """Operations that keep a k, one for each rotation, as they act on the magnetic sites of a cell.

    k: Shape (3,). operations: of `site_operations`. product: Shape (n, n) int, place of ab. cocycle: Shape (n, n) int8,
    ω(a, b). centrings: operations that are pure translations, with the signs (n_c,) that k gives them.
    """

    k: FloatArray
    operations: SiteOperations
    product: np.ndarray
    cocycle: np.ndarray
    centrings: SiteOperations
    centring_signs: np.ndarray

    def apply(self, place: int, moments: FloatArray) -> FloatArray:
        """Shape (n_sites, 3, ...). D(g) S for an operation of the group."""
        return _moved(self.operations, place, self.k, moments)

    def in_lattice(self, moments: FloatArray) -> FloatArray:
        """Shape as given. The part of moments (n_sites, 3, ...) that follows the centrings as k wants."""
        total = np.zeros_like(moments)
        for place, sign in enumerate(self.centring_signs):
            total += sign * _moved(self.centrings, place, self.k, moments)
        return total / len(self.centring_signs)


def _moved(operations: SiteOperations, place: int, k: FloatArray, moments: FloatArray) -> FloatArray:
    # The image of site i lies on site j in the cell at L: m'(τ_j + L) = S'_j cos 2πk·L = R S_i.
    signs = np.round(np.cos(2 * np.pi * (operations.shifts[place] @ k)))
    turned = np.einsum("ab,ib...->ia...", operations.axial[place], moments)
    out = np.empty_like(moments)
    out[operations.targets[place]] = signs.reshape(-1, *(1,) * (moments.ndim - 1)) * turned
    return out


def commensurate_waves(problem: SearchProblem) -> list[FloatArray]:
    """Every k with 2k a vector of the reciprocal lattice that the supercell allows, one arm of each star.

    The lattice is the primitive one: in a centred cell a whole-number k other than zero may be among them.
    """
    basis = _primitive(problem)
    found: list[FloatArray] = []
    supercell = np.diag(problem.supercell.repeat) @ np.linalg.inv(basis)
    seen: set[tuple[int, ...]] = set()
    operations = _operations(problem)
    for bits in itertools.product((0, 1), repeat=3):
        # k·t is a half for primitive vectors t with bit 1.
        if np.any(np.round(supercell @ bits).astype(int) % 2):
            continue
        if bits in seen:
            continue
        for rotation in operations.rotations:
            whole = np.round(basis @ rotation.T @ np.linalg.inv(basis)).astype(int)
            seen.add(tuple(int(x) for x in (whole @ bits) % 2))
        found.append(_shortest(problem, np.array(bits) / 2 @ np.linalg.inv(basis).T, basis))
    return found


def _shortest(problem: SearchProblem, k: FloatArray, basis: FloatArray) -> FloatArray:
    """The shortest k that differs by a reciprocal vector of the lattice with these primitive vectors (rows)."""
    reciprocal = np.linalg.inv(basis).T
    choices = k + np.array(list(itertools.product(range(-2, 3), repeat=3))) @ reciprocal
    choices = np.round(2 * choices) / 2
    lengths = np.linalg.norm(choices @ np.linalg.inv(problem.supercell.crystal.cell).T, axis=1)
    best = min(range(len(choices)), key=lambda i: (round(float(lengths[i]), 9), *(-x for x in choices[i][::-1])))
    return np.asarray(choices[best] + 0.0)


def _primitive(problem: SearchProblem) -> FloatArray:
    operations = _operations(problem)
    pure = np.all(operations.rotations == np.eye(3, dtype=np.int64), axis=(1, 2))
    return primitive_basis(exact_translations(operations.translations[pure] % 1.0))


def _operations(problem: SearchProblem) -> SiteOperations:
    supercell = problem.supercell
    return site_operations(supercell.crystal, supercell.sites, problem.sizes * supercell.occupancies[: problem.n_sites])


def little_group(problem: SearchProblem, k: FloatArray) -> LittleGroup:
    """The operations that keep k modulo the primitive reciprocal lattice."""
    operations = _operations(problem)
    basis = _primitive(problem)
    back = np.linalg.inv(basis)
    bits = np.round(2 * basis @ k).astype(int) % 2
    whole = np.round(basis @ operations.rotations.transpose(0, 2, 1) @ back).astype(int)
    keeps = np.all((whole @ bits) % 2 == bits, axis=1)
    operations = operations.chosen(keeps)
    unit = np.all(operations.rotations == np.eye(3, dtype=np.int64), axis=(1, 2))
    centrings = operations.chosen(unit)
    centring_signs = 1 - 2 * (np.round(centrings.translations @ back).astype(int) @ bits % 2)
    _, first = np.unique(operations.rotations.reshape(-1, 9), axis=0, return_index=True)
    group = operations.chosen(np.sort(first))
    places = {rotation.tobytes(): i for i, rotation in enumerate(group.rotations)}
    n = len(group)
    product, cocycle = np.empty((n, n), dtype=np.int64), np.empty((n, n), dtype=np.int8)
    for a in range(n):
        rotations = np.ascontiguousarray(group.rotations[a] @ group.rotations)
        product[a] = [places[rotation.tobytes()] for rotation in rotations]
        shifts = group.translations @ group.rotations[a].T + group.translations[a] - group.translations[product[a]]
        cocycle[a] = 1 - 2 * (np.round(shifts @ back).astype(int) @ bits % 2)
    return LittleGroup(k, group, product, cocycle, centrings, centring_signs)


def subgroups(product: np.ndarray) -> tuple[frozenset[int], ...]:
    """All subgroups of a group given by its table of products, one of each class of conjugates, larger first."""
    return _subgroups(np.ascontiguousarray(product, dtype=np.int64).tobytes(), len(product))


@lru_cache(maxsize=16)
def _subgroups(table: bytes, n: int) -> tuple[frozenset[int], ...]:
    product = np.frombuffer(table, dtype=np.int64).reshape(n, n)
    unit = int(np.flatnonzero(np.all(product == np.arange(n), axis=1))[0])
    inverse = np.argmax(product == unit, axis=1)
    rows = product.tolist()

    def closed(generators: frozenset[int]) -> frozenset[int]:
        elements = set(generators)
        fresh = list(generators)
        while fresh:
            one = fresh.pop()
            for other in list(elements):
                for two in (rows[one][other], rows[other][one]):
                    if two not in elements:
                        elements.add(two)
                        fresh.append(two)
        return frozenset(elements)

    found = {frozenset([unit])}
    fresh = [frozenset([unit])]
    cyclic = {closed(frozenset([unit, g])) for g in range(n)}
    while fresh:
        group = fresh.pop()
        for other in cyclic:
            if not other <= group:
                larger = closed(group | other)
                if larger not in found:
                    found.add(larger)
                    fresh.append(larger)
    kept: list[frozenset[int]] = []
    seen: set[frozenset[int]] = set()
    for group in sorted(found, key=lambda g: (-len(g), sorted(g))):
        if group in seen:
            continue
        kept.append(group)
        for g in range(n):
            seen.add(frozenset(int(product[product[g, h], inverse[g]]) for h in group))
    return tuple(kept)


def sign_characters(group: LittleGroup, members: list[int]) -> list[np.ndarray]:
    """Every choice of signs of the operations in ``members`` (a subgroup) with χ(a)χ(b) = ω(a, b)χ(ab).

    Shape (len(members),) int8 each; at k = 0 these are the real one-dimensional representations.
    """
    place = {g: i for i, g in enumerate(members)}
    product = np.array([[place[int(group.product[a, b])] for b in members] for a in members])
    cocycle = group.cocycle[np.ix_(members, members)]
    unit = int(np.flatnonzero(np.all(product == np.arange(len(members)), axis=1))[0])
    # ω(e, e) = 1 with the identity at translation zero, so that χ(e) = 1.
    found: list[np.ndarray] = []
    generators: list[int] = []
    reached = {unit}
    for g in range(len(members)):
        if g not in reached:
            generators.append(g)
            while True:
                more = {int(product[a, b]) for a in reached | {g} for b in generators} | reached | {g}
                if more == reached:
                    break
                reached = more
    for choice in itertools.product((1, -1), repeat=len(generators)):
        signs = np.zeros(len(members), dtype=np.int8)
        signs[unit] = cocycle[unit, unit]
        stack = [unit]
        while stack:
            a = stack.pop()
            for g, sign in zip(generators, choice, strict=True):
                b = int(product[a, g])
                if signs[b] == 0:
                    signs[b] = signs[a] * sign * cocycle[a, g]
                    stack.append(b)
        if np.all(signs[:, None] * signs[None] == cocycle * signs[product]):
            found.append(signs)
    return found


def symmetry_patterns(problem: SearchProblem, waves: list[FloatArray], seed: int) -> list[Found]:
    """The equal-moment ordering of lowest energy in the space of each maximal magnetic group at every k.

    Spaces whose moments vanish on a site, or that allow no ordering the problem admits, give none.
    """
    rng = np.random.default_rng([seed, 1])
    return [found for k in waves for found in _at_wave(problem, k, rng)]


def _at_wave(problem: SearchProblem, k: FloatArray, rng: np.random.Generator) -> list[Found]:
    group = little_group(problem, k)
    view = _at(problem, k)
    signs = np.round(np.cos(2 * np.pi * (problem.supercell.cells @ k)))
    out: list[Found] = []
    accepted: list[dict[int, int]] = []
    for members in (sorted(group_members) for group_members in subgroups(group.product)):
        for characters in sign_characters(group, members):
            mine = dict(zip(members, (int(x) for x in characters), strict=True))
            if any(all(other.get(g) == sign for g, sign in mine.items()) for other in accepted):
                continue
            space = _space(group, mine, rng)
            if space is None:
                continue
            best = _lowest_in(view, space, rng)
            if best is None:
                continue
            moments = (signs[:, None, None] * (problem.sizes[:, None] * best)[None]).reshape(-1, 3)
            if not problem.admits(moments):
                continue
            # Conjugates of the group allow copies of these moments: none of them is new.
            accepted += _conjugates(group, mine)
            note = f"its magnetic group allows {_amplitudes(space.shape[-1])} at {wave_words([k])}"
            out.append(Found(moments, "symmetry", problem.symmetry.orbit_size(moments), (note,)))
    return out


def _amplitudes(count: int) -> str:
    return "one amplitude" if count == 1 else f"{count} amplitudes"


def _conjugates(group: LittleGroup, characters: dict[int, int]) -> list[dict[int, int]]:
    n = len(group.product)
    unit = int(np.flatnonzero(np.all(group.product == np.arange(n), axis=1))[0])
    found: list[dict[int, int]] = []
    for g in range(n):
        back = int(np.flatnonzero(group.product[g] == unit)[0])
        # D(g) D(h) D(g⁻¹) = ω(g, h) ω(gh, g⁻¹) D(ghg⁻¹), and D(g) D(g⁻¹) = ω(g, g⁻¹).
        image = {}
        for h, sign in characters.items():
            gh = int(group.product[g, h])
            factor = group.cocycle[g, h] * group.cocycle[gh, back] * group.cocycle[g, back]
            image[int(group.product[gh, back])] = int(sign * factor)
        if image not in found:
            found.append(image)
    return found


def _at(problem: SearchProblem, k: FloatArray) -> SearchProblem:
    """The same search with one unit per site, at a given k."""
    return SearchProblem(
        problem.supercell, problem.sizes, problem.sample, problem.whole, k=k, net_zero=problem.net_zero
    )


def _space(group: LittleGroup, characters: dict[int, int], rng: np.random.Generator) -> FloatArray | None:
    """Shape (n_sites, 3, d) float. An orthonormal basis of the moments with χ(h) D(h) S = S; None without any."""
    n = group.operations.targets.shape[1]

    def projected(moments: FloatArray) -> FloatArray:
        inside = group.in_lattice(moments)
        total = np.zeros_like(moments)
        for place, sign in characters.items():
            total += sign * group.apply(place, inside)
        return total / len(characters)

    # The trace of a projector is its rank: random vectors estimate it, and a few more than it span the space.
    trial = rng.normal(size=(n, 3, min(3 * n, 16)))
    while True:
        image = projected(trial).reshape(3 * n, -1)
        left, values, _ = np.linalg.svd(image, full_matrices=False)
        rank = int(np.sum(values > 1e-8 * max(1.0, values[0]))) if len(values) else 0
        if rank < image.shape[1] or image.shape[1] == 3 * n:
            break
        trial = rng.normal(size=(n, 3, min(3 * n, 2 * image.shape[1])))
    if rank == 0:
        return None
    return left[:, :rank].reshape(n, 3, rank)


def _lowest_in(view: SearchProblem, space: FloatArray, rng: np.random.Generator) -> FloatArray | None:
    """Shape (n_sites, 3) unit vectors of lowest energy in a space, or None where a site has no moment in it."""
    largest = np.linalg.norm(space, axis=(1, 2))
    if np.any(largest < VANISHING * largest.max()):
        return None
    d = space.shape[-1]
    if d == 1:
        lengths = np.linalg.norm(space[..., 0], axis=1)
        return np.asarray(space[..., 0] / lengths[:, None])
    scale = max(float(np.abs(view.table).max()), 1e-300)
    best: tuple[float, FloatArray] | None = None
    for _ in range(min(MOST_STARTS, STARTS_PER_DIMENSION * d)):
        hold = Hold(view.weights, view.net_zero and view.has_uniform_part)
        current = rng.normal(size=d)
        units = np.zeros((len(space), 3))
        for _ in range(hold.rounds):

            def value(c: FloatArray, hold: Hold = hold) -> tuple[float, FloatArray]:
                units, lengths = _scaled(space @ c)
                energy, force = view.form_of(units)
                extra, pull = hold.penalty(units)
                force = force / scale + pull
                force = (force - np.einsum("ia,ia->i", force, units)[:, None] * units) / lengths
                return float(energy / scale + extra), np.einsum("iad,ia->d", space, force)

            start = current / np.linalg.norm(current)
            current = minimize(value, start, jac=True, method="BFGS", options={"gtol": 1e-11}).x
            units = _scaled(space @ current)[0]
            if hold.is_done(units):
                break
        if not view.admits(view.spread(units)):
            continue
        energy = view.form_of(units)[0]
        # Only a real gain replaces an earlier start.
        if best is None or energy < best[0] - 1e-10 * scale:
            best = energy, units
    return None if best is None else best[1]


def _scaled(raw: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Unit vectors (n, 3) and the lengths (n, 1) they had."""
    lengths = np.maximum(np.linalg.norm(raw, axis=1), 1e-300)[:, None]
    return raw / lengths, lengths
