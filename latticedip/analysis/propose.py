"""Candidate orderings from a crystal and its moments alone: ± patterns, symmetry-allowed patterns, modes, annealing.

Every candidate is an arrangement of moments of the stated sizes over a supercell (or at given k), found by one or
several of these searches; arrangements that an operation of the crystal carries into one another are merged. The energy
is that of the dipolar interaction, the shape of the sample and the applied field; exchange has no part in it.
"""

from __future__ import annotations

import logging
from collections.abc import Mapping
from dataclasses import dataclass, replace
from fractions import Fraction
from math import lcm
from typing import Any

import numpy as np

from latticedip.analysis.anneal import Schedule, anneal
from latticedip.analysis.exhaustive import exhaustive, free_signs, is_searchable
from latticedip.analysis.modes import LowestMode, lowest_mode
from latticedip.analysis.modes_bands import magnetic_sites
from latticedip.analysis.problem import Found, SearchProblem, sign_list, unit_vectors, wave_list, wave_words
from latticedip.analysis.rank import CAVEAT, Ranking, RankingRow, by_energy, ranking_boundary
from latticedip.analysis.symmetry_patterns import MOST_SITES, commensurate_waves, symmetry_patterns
from latticedip.checks import FloatArray, as_unit_vector, check_tol
from latticedip.crystal.magnetic_group import magnetic_group
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.physics.boundary import boundary_words
from latticedip.physics.energy import Energy, dipolar_energy
from latticedip.physics.supercell import Supercell, check_repeat
from latticedip.sample import Sample
from latticedip.units import EV_PER_MUB_T, MU0_T_A3_PER_MUB

_log = logging.getLogger(__name__)

KINDS = ("ising", "planar", "heisenberg")
METHODS = ("auto", "exhaustive", "annealing")
#: Order in which the searches are named where several found one arrangement.
ORIGINS = ("exhaustive", "symmetry", "mode", "annealing")
#: Energies per cell closer than this part of the largest are compared site by site.
NEAR = 1e-6
#: Orderings with more k vectors than this take their energy from the table of the supercell.
MOST_WAVES = 32
#: Largest magnetic cell (atoms) whose magnetic space group is looked for.
MOST_ATOMS = 256
#: Largest denominator of a k that a magnetic cell is built for.
MOST_PARTS = 12
#: Most magnetic sites for which the lowest mode is looked for.
MOST_MODE_SITES = 48


@dataclass(frozen=True, eq=False)
class ProposalRow(RankingRow):
    """One row of a Proposal: a RankingRow with where it came from.

    multiplicity: arrangements that are the same by symmetry, itself included: sign patterns of the searched set for a
        ± pattern (reversal counts), else arrangements of moments over the supercell.
    origins: which searches found it, of "exhaustive", "symmetry", "mode" and "annealing".
    bns_number: number of its magnetic space group (Belov, Neronova and Smirnova), or None where the magnetic cell is
        too large (more than 256 atoms), k does not repeat within twelve cells, or spglib does not recognise the group.
    """

    multiplicity: int = 1
    origins: tuple[str, ...] = ()
    bns_number: str | None = None

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            **super().to_dict(),
            "multiplicity": self.multiplicity,
            "origins": list(self.origins),
            "bns_number": self.bns_number,
        }


@dataclass(frozen=True, eq=False)
class Proposal(Ranking):
    """A Ranking of proposed orderings, all on the crystal given; rows are `ProposalRow`.

    mode: the lowest dipolar mode, whose energy no ordering of these moments can undercut, or None (not sought).
    restarts, restarts_at_best: of the annealing; 0 where there was none.
    """

    mode: LowestMode | None = None
    restarts: int = 0
    restarts_at_best: int = 0

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        return {
            **super().to_dict(),
            "lowest_mode": None if self.mode is None else self.mode.to_dict(),
            "annealing_restarts": self.restarts,
            "annealing_restarts_at_best": self.restarts_at_best,
        }


def propose(
    crystal: Crystal,
    sizes: Mapping[str, float],
    *,
    supercell: Any = (1, 1, 1),
    along: Any = None,
    net_zero: bool = False,
    sample: Sample | None = None,
    keep: int = 10,
    seed: int = 0,
    axes: Any = None,
    fixed: Any = None,
    k: Any = None,
    moments: str = "ising",
    method: str = "auto",
    restarts: int | None = None,
    sweeps: int | None = None,
    tol: float = 1e-10,
) -> Proposal:
    """Find the orderings of lowest dipolar energy, lowest first, as a Ranking on the crystal's own cell.

    sizes: label or element to moment in µB. supercell: three whole numbers; every pattern that repeats with it is
    searched. along: Cartesian direction of all moments; None: each ± pattern on its own best axis, and then also what
    symmetry allows at every k of the supercell with 2k a lattice vector (collinear or not), and the lowest mode.
    net_zero: only orderings without net moment. sample: shape and applied field; None means N = 0.
    keep: number of rows, counted after symmetry-equivalent arrangements are merged. seed: of everything random.

    axes: Shape (n_magnetic, 3), one direction per magnetic site (in the order of the crystal) instead of ``along``;
    for planar moments ``along`` and ``axes`` are the normals. fixed: signs 1 or -1, 0 where free, one per magnetic site
    (the same in every cell) or one per moment of the supercell (cells with the last index fastest, sites inside).
    k: one or several wave vectors with 2k whole, instead of a supercell; moments then follow cos 2πk·R.
    moments: "ising", "planar" or "heisenberg"; the last two are annealed. method: "exhaustive" or "annealing" for ±
    patterns; "auto" tries all of them up to 2³³ (2³⁰ with own axes). restarts, sweeps: of the annealing. tol: as
    `dipole_tensor`.

    Raises InputError for sizes that are zero or name no site, options that do not go together, and where no arrangement
    fits; LimitError for supercells of more than 10,000 moments and for too many patterns.
    """
    options = _Options(keep, seed, moments, method, restarts, sweeps)
    specimen = Sample() if sample is None else sample
    found_sites = magnetic_sites(crystal, sizes, check_tol(tol))
    sites = tuple(int(i) for i in found_sites.ions)
    amounts = found_sites.of_site[list(sites)]
    repeat = check_repeat(supercell)
    waves = wave_list(k)
    if waves is not None:
        if repeat != (1, 1, 1):
            raise InputError("give either a supercell or k, not both.")
        halves = np.any(waves != np.round(waves), axis=0)
        repeat = (1 + int(halves[0]), 1 + int(halves[1]), 1 + int(halves[2]))
    cells = Supercell(crystal, repeat, sites)
    directions = _directions(along, axes, len(sites), options.kind)
    units = len(sites) if waves is not None else cells.n_moments
    signs = sign_list("fixed", fixed, len(sites), units)
    if signs is not None and options.kind != "ising":
        raise InputError(f'fixed signs have no meaning for moments="{options.kind}"; leave them out.')
    table = cells.tensors(specimen, tol)
    whole = SearchProblem(cells, amounts, specimen, table, axes=directions, net_zero=bool(net_zero))
    searches = [whole] if waves is None else [replace(whole, k=wave) for wave in waves]
    searches = [replace(search, fixed=signs) for search in searches]
    results, notes, counts = _patterns(searches, options)
    mode = None
    candidates = [_Candidate.of(whole, found) for found in results]
    if directions is None and signs is None:
        more, remarks = _symmetry(whole, waves, options)
        candidates += [_Candidate.of(whole, found) for found in more]
        mode, extra, remark = _mode(whole, sizes, sample, waves, tol)
        candidates += extra
        notes += [*remarks, *remark]
    if not candidates:
        raise InputError(
            "no arrangement of these moments has zero net moment here. Take a larger supercell, such as "
            "supercell=(2, 2, 2), or other constraints."
        )
    rows = _rows(whole, _merged(whole, candidates)[: options.keep], sample, tol)
    return Proposal(rows, False, ranking_boundary(rows), (CAVEAT, *notes), mode, *counts)


@dataclass(frozen=True)
class _Options:
    """Checked options of `propose` that are not of one search."""

    keep: int
    seed: int
    kind: str
    method: str
    restarts: int | None
    sweeps: int | None

    def __post_init__(self) -> None:
        for name, value, least in (("keep", self.keep, 1), ("seed", self.seed, 0)):
            _whole(name, value, least)
        for name, count in (("restarts", self.restarts), ("sweeps", self.sweeps)):
            if count is not None:
                _whole(name, count, 1)
        for name, word, known in (("moments", self.kind, KINDS), ("method", self.method, METHODS)):
            if word not in known:
                raise InputError(f"{name} must be one of {', '.join(known)}; got {word!r}.")
        if self.method == "exhaustive" and self.kind != "ising":
            raise InputError(f'method="exhaustive" tries ± patterns; moments="{self.kind}" are annealed.')

    def schedule(self, n_units: int) -> Schedule:
        usual = Schedule.usual(n_units, self.kind != "ising")
        return Schedule(self.restarts or usual.restarts, self.sweeps or usual.sweeps)


def _whole(name: str, value: Any, least: int) -> None:
    if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or value < least:
        raise InputError(f"{name} must be a whole number of at least {least}, got {value!r}.")


def _directions(along: Any, axes: Any, n_sites: int, kind: str) -> FloatArray | None:
    if along is not None and axes is not None:
        raise InputError("give either along (one direction for all) or axes (one per magnetic site), not both.")
    if kind == "heisenberg" and (along is not None or axes is not None):
        raise InputError('moments="heisenberg" may point anywhere; leave out along and axes.')
    if along is not None:
        return np.tile(as_unit_vector("along", along), (n_sites, 1))
    if axes is not None:
        return unit_vectors("axes", axes, n_sites)
    if kind == "planar":
        raise InputError(
            'moments="planar" needs the normal of the plane: give along, or axes for one per magnetic site.'
        )
    return None


def _patterns(searches: list[SearchProblem], options: _Options) -> tuple[list[Found], list[str], tuple[int, int]]:
    """What exhaustive search or annealing finds, what to say of it, and the restarts made and at the best."""
    found: list[Found] = []
    notes: list[str] = []
    counts = (0, 0)
    lowest = np.inf
    for search in searches:
        where = "" if search.k is None else f" at {wave_words([search.k])}"
        insist = options.method == "exhaustive"
        if options.kind == "ising" and options.method != "annealing" and (insist or is_searchable(search)):
            found += exhaustive(search, options.keep)
            n_free = len(free_signs(search))
            notes.append(f"every sign pattern of {search.n_units} moments{where} was tried (2^{n_free})")
            continue
        schedule = options.schedule(search.n_units)
        result = anneal(search, options.kind, schedule, options.seed, options.keep)
        found += result.found
        energy = search.field.energy_eV(result.found[0].moments)
        if energy < lowest:
            lowest, counts = energy, (result.restarts, result.at_best)
        notes.append(
            f"{options.kind} moments{where} were annealed: {result.at_best} of {result.restarts} restarts "
            f"({schedule.sweeps} sweeps each) found the best; a lower state may exist"
        )
    for note in notes:
        _log.info("%s", note)
    return found, notes, counts


def _symmetry(problem: SearchProblem, waves: FloatArray | None, options: _Options) -> tuple[list[Found], list[str]]:
    if problem.n_sites > MOST_SITES:
        return [], [
            f"patterns allowed by symmetry were not searched: more than {MOST_SITES} magnetic sites in the cell"
        ]
    chosen = commensurate_waves(problem) if waves is None else list(waves)
    return symmetry_patterns(problem, chosen, options.seed), []


@dataclass(frozen=True, eq=False)
class _Candidate:
    """An arrangement over the supercell, or the ordering of a mode that does not fit into it. energy_eV: per cell."""

    energy_eV: float
    found: Found
    origins: tuple[str, ...]
    ordering: Ordering | None = None

    @classmethod
    def of(cls, problem: SearchProblem, found: Found) -> _Candidate:
        energy = problem.field.energy_eV(found.moments) / problem.supercell.n_cells
        return cls(energy, found, (found.origin,))


def _mode(
    problem: SearchProblem,
    sizes: Mapping[str, float],
    sample: Sample | None,
    waves: FloatArray | None,
    tol: float,
) -> tuple[LowestMode | None, list[_Candidate], list[str]]:
    """The lowest mode, the candidate it makes, and what to say of it."""
    if problem.n_sites > MOST_MODE_SITES:
        return None, [], [f"the lowest mode was not sought: more than {MOST_MODE_SITES} magnetic sites in the cell"]
    mode = lowest_mode(problem.supercell.crystal, sizes, sample=sample, tol=tol)
    bound = f"no ordering of these moments lies below {mode.energy_per_ion_eV * 1e6:.6g} µeV per ion, the lowest mode"
    if mode.k is None:
        return mode, [], [f"{bound}; it is only approached as k → 0"]
    words = f"{bound}, at {wave_words(np.atleast_2d(mode.k))}"
    if not mode.equal_moments:
        return mode, [], [f"{words}; no equal-moment ordering of that mode was found"]
    arms = np.atleast_2d(mode.k)
    if waves is not None and not all(any(_same_wave(arm, wave) for wave in waves) for arm in arms):
        return mode, [], [f"{words}; that k is not among those searched"]
    ordering = mode.ordering()
    if problem.net_zero and np.linalg.norm(ordering.net_moment) > 1e-6:
        return mode, [], [f"{words}; it has a net moment"]
    whole = arms * np.array(problem.supercell.repeat)
    if np.all(np.abs(whole - np.round(whole)) < 1e-9):
        return mode, [_Candidate.of(problem, _as_found(problem, ordering))], [words]
    energy = dipolar_energy(ordering, sample=sample, tol=tol).per_cell_eV
    repeat = _magnetic_cell(ordering)
    copies = len(mode.star)
    if repeat is not None and np.prod(repeat) * problem.n_sites <= 1000:
        own = replace(problem, supercell=Supercell(problem.supercell.crystal, repeat, problem.supercell.sites))
        copies = own.symmetry.orbit_size(_as_found(own, ordering).moments)
    found = Found(np.zeros((0, 3)), "mode", copies)
    return mode, [_Candidate(energy, found, ("mode",), ordering)], [words]


def _as_found(problem: SearchProblem, ordering: Ordering) -> Found:
    moments = ordering.moments(problem.supercell.cells)[:, list(problem.supercell.sites)].reshape(-1, 3)
    return Found(moments, "mode", problem.symmetry.orbit_size(moments))


def _same_wave(first: FloatArray, second: FloatArray) -> bool:
    gap = first - second
    return bool(np.all(np.abs(gap - np.round(gap)) < 1e-9))


def _merged(problem: SearchProblem, candidates: list[_Candidate]) -> list[_Candidate]:
    """Candidates by energy, those that are the same by symmetry made one."""
    ranked = sorted(candidates, key=lambda c: (c.energy_eV, ORIGINS.index(c.origins[0])))
    near = NEAR * max((abs(c.energy_eV) for c in ranked), default=0.0)
    kept: list[_Candidate] = []
    for candidate in ranked:
        for place in range(len(kept) - 1, -1, -1):
            other = kept[place]
            if candidate.energy_eV - other.energy_eV > near:
                continue
            fits = candidate.ordering is None and other.ordering is None
            if fits and problem.symmetry.are_same(other.found.moments, candidate.found.moments):
                kept[place] = _joined(other, candidate)
                break
        else:
            kept.append(candidate)
    return kept


def _joined(one: _Candidate, two: _Candidate) -> _Candidate:
    first, second = sorted((one, two), key=lambda c: ORIGINS.index(c.origins[0]))
    origins = tuple(name for name in ORIGINS if name in one.origins + two.origins)
    notes = tuple(dict.fromkeys([*first.found.notes, *second.found.notes]))
    return replace(first, origins=origins, found=replace(first.found, notes=notes))


def _rows(
    problem: SearchProblem, chosen: list[_Candidate], sample: Sample | None, tol: float
) -> tuple[ProposalRow, ...]:
    rated = []
    for candidate in chosen:
        ordering = candidate.ordering or problem.supercell.ordering(candidate.found.moments)
        energy = (
            dipolar_energy(ordering, sample=sample, tol=tol)
            if len(ordering.k) <= MOST_WAVES
            else _table_energy(problem, candidate.found.moments, ordering, sample, tol)
        )
        rated.append((ordering, energy, candidate))
    places, ties = by_energy([energy for _, energy, _ in rated])
    lowest = min(energy.per_ion_eV for _, energy, _ in rated)
    rows = []
    for number, (place, tie) in enumerate(zip(places, ties, strict=True), start=1):
        ordering, energy, candidate = rated[place]
        name = f"{number}: {_name_of(candidate, ordering)}"
        named = replace(ordering, name=name, notes=candidate.found.notes)
        rows.append(
            ProposalRow(
                named,
                replace(energy, notes=(*problem.supercell.crystal.notes, *candidate.found.notes)),
                energy.per_ion_eV - lowest,
                tie,
                {},
                multiplicity=candidate.found.multiplicity,
                origins=candidate.origins,
                bns_number=_bns_number(named),
            )
        )
    return tuple(rows)


def _name_of(candidate: _Candidate, ordering: Ordering) -> str:
    moments = candidate.found.moments if candidate.ordering is None else ordering.components.reshape(-1, 3)
    values = np.linalg.svd(np.concatenate([moments.real, moments.imag]), compute_uv=False)
    rank = int(np.sum(values > 1e-6 * values[0]))
    return f"{('collinear', 'coplanar', 'non-coplanar')[rank - 1]}, {wave_words(ordering.k)}"


def _table_energy(
    problem: SearchProblem, moments: FloatArray, ordering: Ordering, sample: Sample | None, tol: float
) -> Energy:
    """Energy of many k from the table of the supercell; the bound of its error counts every pair."""
    cells = problem.supercell.n_cells
    net = problem.net_moment(moments) / cells
    shape = 0.5 * MU0_T_A3_PER_MUB / ordering.crystal.volume_A3
    shape *= float(net @ problem.sample.demagnetizing_tensor @ net) * EV_PER_MUB_T
    applied = -float(net @ problem.sample.applied_T) * EV_PER_MUB_T
    total = problem.field.energy_eV(moments) / cells
    size = float((np.linalg.norm(moments, axis=1) * problem.supercell.occupancies).sum())
    return Energy(
        dipolar_eV=total - shape - applied,
        shape_eV=shape,
        applied_eV=applied,
        n_ions=ordering.n_ions,
        net_moment=ordering.net_moment,
        error_bound_eV=0.5 * EV_PER_MUB_T * tol * size**2 / cells,
        boundary=boundary_words(ordering, sample),
    )


def _magnetic_cell(ordering: Ordering) -> tuple[int, int, int] | None:
    """The cells after which every k repeats; None where that takes more than twelve along one direction."""
    parts = []
    for column in ordering.k.T:
        fractions = [Fraction(float(x)).limit_denominator(MOST_PARTS) for x in column]
        if any(abs(float(f) - x) > 1e-9 for f, x in zip(fractions, column, strict=True)):
            return None
        parts.append(lcm(*(f.denominator for f in fractions)))
    return (parts[0], parts[1], parts[2]) if max(parts) <= MOST_PARTS else None


def _bns_number(ordering: Ordering) -> str | None:
    crystal = ordering.crystal
    repeat = _magnetic_cell(ordering)
    if repeat is None or np.prod(repeat) * crystal.n_sites > MOST_ATOMS:
        return None
    cells = np.stack(np.unravel_index(np.arange(int(np.prod(repeat))), repeat), axis=-1)
    positions = ((crystal.positions[None] + cells[:, None]) / np.array(repeat)).reshape(-1, 3)
    kinds: dict[tuple[str, float], int] = {}
    numbers = [
        kinds.setdefault((s, round(float(p), 6)), len(kinds) + 1)
        for s, p in zip(crystal.symbols, crystal.occupancies, strict=True)
    ]
    group = magnetic_group(
        np.array(repeat)[:, None] * crystal.cell,
        positions,
        numbers * len(cells),
        ordering.moments(cells).reshape(-1, 3),
    )
    return None if group is None else group.bns_number
