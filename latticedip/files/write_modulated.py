"""One wave of any k, with its harmonics and a part at k = 0, as the text of a magCIF in (3+1)D superspace.

The group is P1(a,b,g)0: all atoms of the cell are listed, each with its own cosine and sine. The component S at n q of
the atom at τ gives S exp(2πi n q·τ) = M_c + i M_s, its moment being M_c cos(2πn x4) + M_s sin(2πn x4) with x4 = q·r.

Standard uncertainties are written of each number alone. A comment in the file says where that is less than what is
known: several numbers that one parameter changes count as independent when they are read again.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np

from latticedip.checks import ComplexArray, FloatArray
from latticedip.errors import FileError
from latticedip.files.ciftext import atom_lines, block_name, cell_lines, digits, loop, moment_lines, parent_lines
from latticedip.ordering.model import K_SNAP, Ordering
from latticedip.ordering.uncertain import AmplitudeUncertainty

#: A step that is smaller than the largest of its parameter by this is rounding.
ROUNDING = 1e-9
#: Harmonics are looked for up to this one.
MAX_HARMONIC = 24


def modulated_text(ordering: Ordering, name: str) -> str:
    """The whole file; raises FileError (for the file ``name``) without a wave, or with several independent ones."""
    crystal = ordering.crystal
    moving = [i for i, k in enumerate(ordering.k) if np.any(k != np.round(k))]
    if not moving:
        raise FileError(f"{name}: the ordering has no wave (k = 0 alone). Write it without superspace.")
    q, orders = _fundamental(ordering.k[moving], name)
    uncertain, remarks = _uncertainties(ordering, moving, orders, q)
    lines = ["# Modulated magnetic structure in (3+1)D superspace, written by latticedip", *remarks]
    lines += [f"data_{block_name(ordering.name)}", *cell_lines(crystal.cell), *parent_lines(ordering.parent)]
    lines += ["_space_group_magn.ssg_name 'P1(a,b,g)0'", "_cell_modulation_dimension 1"]
    lines += loop([f"_cell_wave_vector_{x}" for x in ("seq_id", *"xyz")], [["1", *map(digits, q)]])
    tag = "_space_group_symop_magn_ssg_operation"
    lines += loop([f"{tag}.id", f"{tag}.algebraic"], [["1", "x1,x2,x3,x4,+1"]])
    atoms, names = atom_lines(
        crystal.labels, crystal.symbols, crystal.positions, crystal.occupancies, crystal.position_su, name
    )
    lines += atoms
    still = [i for i in range(len(ordering.k)) if i not in moving]
    average = crystal.to_crystal_axes(ordering.components[still].real.sum(axis=0))
    constant = np.flatnonzero(np.any((average != 0) | (uncertain.average > 0), axis=1))
    if len(constant):
        waving = np.any(ordering.components[moving] != 0, axis=(0, 2))
        known = np.where(waving[:, None], np.nan, ordering.moment_su)
        su = np.where(uncertain.sites[:, None], uncertain.average, known)[constant]
        lines += moment_lines([names[i] for i in constant], average[constant], su)
    lines += loop(
        [f"_atom_site_Fourier_wave_vector_{x}" for x in ("seq_id", *"xyz", "q1_coeff")],
        [[str(i + 1), *map(digits, n * q), str(n)] for i, n in enumerate(orders)],
    )
    rows: list[list[str]] = []
    has_su = bool(np.any(uncertain.waves))
    for number, (i, n) in enumerate(zip(moving, orders, strict=True), start=1):
        turns = (n * (crystal.positions @ q)) % 1.0
        amplitudes = crystal.to_crystal_axes(ordering.components[i]) * np.exp(2j * np.pi * turns)[:, None]
        for site, amplitude in enumerate(amplitudes):
            if np.any(amplitude) or np.any(uncertain.waves[number - 1, site]) or not ordering.is_magnetic.any():
                rows += [
                    [names[site], str(number), x, digits(value.real), digits(value.imag), *_su_digits(su, has_su)]
                    for x, value, su in zip("xyz", amplitude, uncertain.waves[number - 1, site], strict=True)
                ]
    parameters = [f"_atom_site_moment_Fourier_param.{x}" for x in ("cos", "sin", *(("cos_su", "sin_su") * has_su))]
    lines += loop(
        [
            *(f"_atom_site_moment_Fourier.{x}" for x in ("id", "atom_site_label", "wave_vector_seq_id", "axis")),
            *parameters,
        ],
        [[str(i), *row] for i, row in enumerate(rows, start=1)],
    )
    return "\n".join(lines) + "\n"


@dataclass(frozen=True, eq=False)
class _Uncertain:
    """Standard uncertainties in µB, crystal-axis components.

    sites: Shape (n_sites,) bool, where they are known. average: Shape (n_sites, 3), NaN where exact. waves: Shape
    (n_waves, n_sites, 3) complex, of the cosine and of the sine, 0 where exact.
    """

    sites: np.ndarray
    average: FloatArray
    waves: ComplexArray


def _su_digits(su: complex, wanted: bool) -> list[str]:
    """The columns of a row, ``.`` where a number is exact or nothing is known of it."""
    return [digits(part or np.nan) for part in (su.real, su.imag)] if wanted else []


def _uncertainties(
    ordering: Ordering, moving: list[int], orders: list[int], q: FloatArray
) -> tuple[_Uncertain, list[str]]:
    """The uncertainty of every number that is written, and comment lines on what they do not say."""
    crystal = ordering.crystal
    waving = np.any(ordering.components[moving] != 0, axis=(0, 2))
    parameters = list(ordering.amplitude_su)
    for group in ordering.size_su:
        if np.any(waving[list(group.sites)]):
            # One factor of all their components.
            steps = group.relative * ordering.components[:, list(group.sites)]
            parameters.append(AmplitudeUncertainty(group.sites, steps))
    sites = np.zeros(crystal.n_sites, dtype=bool)
    average = np.zeros((crystal.n_sites, 3))
    waves = np.zeros((len(moving), crystal.n_sites, 3), dtype=complex)
    turns = np.exp(2j * np.pi * (np.outer(orders, crystal.positions @ q) % 1.0))[:, :, None]
    still = [i for i in range(len(ordering.k)) if i not in moving]
    tied = False
    for one in parameters:
        changed = list(one.sites)
        sites[changed] = True
        constant = crystal.to_crystal_axes(one.steps[still].real.sum(axis=0))
        amplitude = crystal.to_crystal_axes(one.steps[moving]) * turns[:, changed]
        average[changed] += constant**2
        waves[:, changed] += amplitude.real**2 + 1j * amplitude.imag**2
        numbers = np.abs(np.concatenate([constant.ravel(), amplitude.real.ravel(), amplitude.imag.ravel()]))
        tied |= int(np.count_nonzero(numbers > ROUNDING * numbers.max(initial=0.0))) > 1
    remarks = []
    if tied:
        remarks.append(
            "# Standard uncertainties are those of each number alone; that some change together is not said."
        )
    if np.any(np.nan_to_num(ordering.moment_su)[waving & ~sites & ordering.is_magnetic]):
        remarks.append("# Standard uncertainties of moments that are not stated by amplitude are not written.")
    floor = ROUNDING**2
    average[average <= floor * average.max(initial=0.0)] = np.nan
    largest = float(np.abs(waves).max(initial=0.0))
    waves.real[waves.real <= floor * largest] = 0.0
    waves.imag[waves.imag <= floor * largest] = 0.0
    return _Uncertain(sites, np.sqrt(average), np.sqrt(waves.real) + 1j * np.sqrt(waves.imag)), remarks


def _fundamental(k: FloatArray, name: str) -> tuple[FloatArray, list[int]]:
    """A wave vector q and whole numbers n with k = n q modulo 1, the smallest that there are."""
    pairs = [first + sign * second for first, second in itertools.combinations(k, 2) for sign in (-1, 1)]
    found: list[tuple[int, FloatArray, list[int]]] = []
    for q in [*k, *pairs]:
        orders = [_order(vector, q) for vector in k]
        known = [n for n in orders if n is not None]
        if len(known) == len(orders):
            found.append((sum(map(abs, known)), q, known))
    if not found:
        listed = ", ".join("(" + ", ".join(f"{x:.6g}" for x in vector) + ")" for vector in k)
        raise FileError(
            f"{name}: the wave vectors {listed} are no multiples of one of them, which needs (3+2)D superspace or "
            "more; only (3+1)D is written. Write one wave at a time, or take commensurate k nearby."
        )
    _, best, smallest = min(found, key=lambda entry: entry[0])
    return best, smallest


def _order(vector: FloatArray, q: FloatArray) -> int | None:
    """The whole number n, smallest in size, with vector = n q modulo 1; None where there is none."""
    for size in range(1, MAX_HARMONIC + 1):
        for n in (size, -size):
            left = vector - n * q
            if np.abs(left - np.round(left)).max() <= K_SNAP:
                return n
    return None
