"""The Fourier series of modulated moments in a magCIF: wave vectors, and amplitudes by site and harmonic.

The moment of an atom at r is M = M_0 + Σ_n M_cn cos(2πn x4) + M_sn sin(2πn x4), or with modulus and phase
|M_n| cos(2πn x4 + φ_n), φ_n / 2π in cycles; x4 = q·r + t (IUCr dictionary of modulated structures). Here a harmonic is
one complex amplitude A_n = M_cn + i M_sn, so that its moment is Re[A_n exp(−2πi n x4)].
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from latticedip.checks import ComplexArray, FloatArray
from latticedip.errors import InputError, near_match
from latticedip.files.cif import modulated_items
from latticedip.files.cifsyntax import Block, Column, fold, parse_number
from latticedip.files.moments import AGREE_FRACTION, AGREE_MUB, LARGEST
from latticedip.files.symop import parse_vector

#: A wave vector may miss a multiple of the modulation wave vector by this much, rounded digits.
WAVE_TOLERANCE = 1e-3
_LOOP = "_atom_site_moment_Fourier"
_WAVES = "_atom_site_Fourier_wave_vector"
_AXES = {"x": 0, "y": 1, "z": 2, "cx": 3, "cy": 4, "cz": 5}
_OTHER_AXES = {"mod": "spherical", "pol": "spherical", "azi": "spherical"} | dict.fromkeys(("a1", "a2", "a3"), "own")
_SYMMFORM = re.compile(r"([+-]?)(?:([0-9.]+)\*?)?(m[xyz][a-z]?[0-9]+)")


@dataclass(frozen=True, eq=False)
class Series:
    """Amplitudes of the sites that a file modulates.

    amplitudes[label][n]: Shape (3,) complex in µB, A_n along unit vectors parallel to a, b, c, n ≥ 0; at n = 0 only the
    real part has a meaning. uncertain[label]: what is uncertain of them. notes: sentences a report must repeat.
    """

    amplitudes: dict[str, dict[int, ComplexArray]]
    uncertain: dict[str, list[UncertainWave]]
    notes: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class UncertainWave:
    """Standard uncertainties of the numbers that a file gives of one amplitude of one site.

    n: the harmonic, at least 0.
    basis: Shape (3, d) complex, crystal axes. What one unit of each number adds to A_n; the numbers are cosines, then
        sines (d = 6), at n = 0 cosines alone (d = 3). A modulus counts as a cosine, its phase in radians times the
        modulus as a sine, both turned by the phase.
    su: Shape (d,) float in µB, NaN where none is stated.
    """

    n: int
    basis: ComplexArray
    su: FloatArray


def has_series(block: Block) -> bool:
    """True where the block holds an amplitude of a modulated moment."""
    return bool(block.starting_with(f"{_LOOP}_param"))


def wave_vector(block: Block) -> FloatArray:
    """Shape (3,) float. The modulation wave vector of a (3+1)D structure, in the reciprocal cell of the file.

    Raises FileError where it is missing, not numeric, or one of several.
    """
    found = _triples(block, "_cell_wave_vector")
    if found is None:
        raise block.error(
            f"it describes a modulation ({modulated_items(block)[0]}), but gives no modulation wave vector "
            "(_cell_wave_vector.x, .y and .z)."
        )
    tag, rows = found
    if len(rows) > 1:
        refuse_more_waves(block, len(rows), f"{len(rows)} rows of {tag}")
    if not rows or rows[0] is None:
        raise block.error(f"{tag} holds no value, but the modulation wave vector is needed.")
    return rows[0]


def refuse_more_waves(block: Block, count: int, evidence: str) -> None:
    """Raise FileError for more than one independent wave vector."""
    raise block.error(
        f"this is a modulated structure in (3+{count})D superspace ({evidence}), which is not read; (3+1)D, one "
        "independent wave vector, is. State its waves as components at several k from Python."
    )


def harmonics(block: Block, q: FloatArray) -> dict[str, int]:
    """The whole number n that makes each listed Fourier wave vector (by its seq_id) n q.

    Raises FileError where an entry is missing, is no multiple of q, or says two things.
    """
    ids = block.column(f"{_WAVES}_seq_id")
    if ids is None:
        raise block.error(f"it lists no Fourier wave vectors ({_WAVES}.seq_id and sisters).")
    for column in block.items.values():
        second = re.search(rf"{_WAVES.lower()}_q([2-9])_coeff\Z", fold(column.tag))
        if second and any(_number(block, column, row) for row in range(len(column.values))):
            refuse_more_waves(block, int(second[1]), column.tag)
    listed = _triples(block, _WAVES, ids)
    coefficients = _coefficients(block, ids)
    orders: dict[str, int] = {}
    for row in range(len(ids.values)):
        key = ids.text(row)
        if not key or key in orders:
            raise block.error(f"{ids.tag} is {ids.values[row]!r} in row {row + 1}; every wave vector needs its own.")
        vector = None if listed is None else listed[1][row]
        order = None if coefficients is None else coefficients[row]
        if vector is None and order is None:
            raise block.error(f"Fourier wave vector {key} has neither components ({_WAVES}.x) nor a coefficient.")
        orders[key] = _order(block, key, vector, order, q)
    return orders


def _order(block: Block, key: str, vector: FloatArray | None, order: int | None, q: FloatArray) -> int:
    """n of one wave vector; a zero vector beside a coefficient counts as not given (its default)."""
    if vector is None or (order is not None and not np.any(vector)):
        return int(order or 0)
    n = order
    if n is None:
        n = round(float(vector @ q / (q @ q))) if np.any(q) else 0
    if np.abs(vector - n * q).max() > WAVE_TOLERANCE * max(1, abs(n)):
        if order is None:
            raise block.error(
                f"Fourier wave vector {key}, {triple(vector)}, is no multiple of the modulation wave vector "
                f"{triple(q)}."
            )
        raise block.error(
            f"Fourier wave vector {key} is given as {triple(vector)}, but also as {order} times the modulation wave "
            f"vector {triple(q)}. Keep the right one."
        )
    return n


def _coefficients(block: Block, ids: Column) -> list[int | None] | None:
    """Whole numbers from q1_coeff (older aliases put a prefix before it), or from lists such as ``[2]``, or None."""
    prefixed = [column for key, column in block.items.items() if key.endswith(f"{_WAVES}_q1_coeff".lower())]
    column = next((c for c in prefixed if c.loop == ids.loop), None) or block.sibling(ids, f"{_WAVES}_q_coeff")
    if column is None:
        return None
    found: list[int | None] = []
    for row in range(len(column.values)):
        text = (column.text(row) or "").strip("[] ")
        if not text:
            found.append(None)
            continue
        parts = [parse_number(part) for part in text.replace(",", " ").split()]
        numbers = [part[0] for part in parts if part is not None]
        if len(numbers) != len(parts) or any(number != round(number) for number in numbers):
            raise block.error(f"{column.tag} is {column.text(row)!r} in row {row + 1}, but whole numbers are needed.")
        if len(numbers) > 1 and any(numbers[1:]):
            refuse_more_waves(block, len(numbers), column.tag)
        found.append(int(numbers[0]))
    return found


def _triples(block: Block, prefix: str, beside: Column | None = None) -> tuple[str, list[FloatArray | None]] | None:
    """Vectors of a category, from its columns x, y, z or its lists xyz, one per row (None where all are ``.``)."""
    first = block.column(f"{prefix}_x")
    if first is None:
        together = block.column(f"{prefix}_xyz")
        return None if together is None else (together.tag, [_list(block, together, i) for i in _rows(together)])
    columns = [first]
    for axis in "yz":
        column = block.sibling(first, f"{prefix}_{axis}")
        if column is None:
            raise block.error(f"{prefix}.{axis} is missing beside {first.tag}.")
        columns.append(column)
    if beside is not None and first.loop != beside.loop:
        raise block.error(f"{first.tag} and {beside.tag} stand in different loops.")
    rows: list[FloatArray | None] = []
    for row in _rows(first):
        given = any(column.text(row) for column in columns)
        rows.append(np.array([block.number(column, row)[0] for column in columns]) if given else None)
    return first.tag, rows


def triple(vector: FloatArray) -> str:
    """Three numbers in words."""
    return "(" + ", ".join(f"{x + 0.0:.6g}" for x in vector) + ")"


def _list(block: Block, column: Column, row: int) -> FloatArray | None:
    text = column.text(row)
    if not text:
        return None
    try:
        return parse_vector(text)
    except InputError as error:
        raise block.error(f"{column.tag} is {text!r}, which is not understood: {error}.") from None


def _rows(column: Column) -> range:
    return range(len(column.values))


def read_series(block: Block, cell: FloatArray, labels: list[str], orders: dict[str, int]) -> Series:
    """Amplitudes by site label and harmonic, from cosine and sine or modulus and phase, in crystal or Cartesian axes.

    orders: the harmonic of each wave vector. Raises FileError for a label without a site, a wave vector that is not
    listed, other axes, a component given twice, and amplitudes that are incomplete or not numeric.
    """
    site = block.column(f"{_LOOP}_atom_site_label")
    if site is None:
        stray = block.starting_with(_LOOP)
        if stray:
            raise block.error(f"{stray[0]} stands without labels ({_LOOP}.atom_site_label).")
        return Series({}, {}, ())
    axis, wave = (_needed(block, site, f"{_LOOP}.{name}") for name in ("axis", "wave_vector_seq_id"))
    values = _Values(block, site)
    from_cartesian = np.linalg.inv(cell / np.linalg.norm(cell, axis=1)[:, None]).T
    entries: dict[tuple[str, str], dict[int, _Entry]] = {}
    forms = _Forms(block)
    for row in _rows(site):
        label, key, direction = site.text(row), wave.text(row), (axis.text(row) or "").lower()
        if not label or label not in labels:
            raise block.error(
                f"{site.tag} {site.values[row]!r} is the label of no atom. Known are: {', '.join(labels)}."
                + near_match(label or "", labels)
            )
        if key is None or key not in orders:
            raise block.error(f"{wave.tag} of {label} is {wave.values[row]!r}, which no Fourier wave vector has.")
        if direction not in _AXES:
            raise block.error(_axis_words(axis, label, row))
        components = entries.setdefault((label, key), {})
        if _AXES[direction] in components:
            raise block.error(
                f"the {axis.text(row)} component of the moment of {label} at Fourier wave vector {key} "
                "stands in two rows. Keep one."
            )
        components[_AXES[direction]] = values.amplitude(row, label)
        forms.add(label, values, row, components[_AXES[direction]].value)
    amplitudes: dict[str, dict[int, ComplexArray]] = {}
    uncertain: dict[str, list[UncertainWave]] = {}
    for (label, key), components in entries.items():
        if min(components) < 3 <= max(components):
            raise block.error(
                f"the moment of {label} at Fourier wave vector {key} mixes components along crystal axes and Cartesian "
                "ones. Use one system."
            )
        vector = np.zeros(6, dtype=complex)
        vector[list(components)] = [entry.value for entry in components.values()]
        amplitude = vector[:3] + from_cartesian @ vector[3:]
        n = orders[key]
        axes = from_cartesian if min(components) > 2 else np.eye(3)
        stated = _uncertain_wave({place % 3: entry for place, entry in components.items()}, axes, n)
        if stated is not None:
            uncertain.setdefault(label, []).append(stated)
        # A phase of half a cycle leaves no more than rounding.
        if n == 0 and np.abs(amplitude.imag).max() > 1e-12 * np.abs(amplitude).max():
            raise block.error(
                f"the moment of {label} at Fourier wave vector {key}, which is zero, has a sine part; it means nothing "
                "there. Remove it."
            )
        mine = amplitudes.setdefault(label, {})
        # A wave at −n q is the one at n q with the sine reversed.
        mine[abs(n)] = mine.get(abs(n), np.zeros(3, dtype=complex)) + (amplitude if n >= 0 else amplitude.conj())
    return Series(amplitudes, uncertain, tuple(forms.notes()))


@dataclass(frozen=True)
class _Entry:
    """One row of the Fourier loop: cos + i sin in µB; uncertainties (NaN: none) and turn as in `UncertainWave`."""

    value: complex
    su: tuple[float, float]
    turn: complex


def _uncertain_wave(entries: dict[int, _Entry], axes: FloatArray, n: int) -> UncertainWave | None:
    """The uncertainties of one amplitude, by its axis; axes: Shape (3, 3), columns in crystal axes."""
    su, turns = np.full((2, 3), np.nan), np.ones(3, dtype=complex)
    for axis, entry in entries.items():
        su[:, axis] = entry.su
        # At n = 0 the amplitude is real, whatever phase an amplitude of zero is given.
        turns[axis] = entry.turn if n else 1.0
    if not np.any(np.nan_to_num(su[0] if n == 0 else su)):
        return None
    basis = np.asarray(axes * turns, dtype=complex)
    if n == 0:
        return UncertainWave(0, basis, su[0])
    # A wave at −n q is the one at n q with the sine reversed.
    return UncertainWave(
        abs(n), np.hstack([basis, 1j * basis] if n > 0 else [basis.conj(), -1j * basis.conj()]), su.ravel()
    )


def _axis_words(axis: Column, label: str, row: int) -> str:
    kind = _OTHER_AXES.get((axis.text(row) or "").lower())
    what = {
        "spherical": "a spherical component, whose Fourier series is not one of the moment",
        "own": "an axis that the file describes in words (_atom_sites_moment_Fourier.axes_description)",
    }.get(kind or "", "no axis")
    return (
        f"{axis.tag} of {label} is {axis.values[row]!r}, {what}; it is not read. Give components along x, y, z "
        "(crystal axes) or Cx, Cy, Cz (Cartesian)."
    )


def _needed(block: Block, beside: Column, tag: str) -> Column:
    column = block.sibling(beside, tag)
    if column is None:
        raise block.error(f"{tag} is missing beside {beside.tag}.")
    return column


def _number(block: Block, column: Column, row: int) -> float:
    return 0.0 if column.text(row) is None else block.number(column, row)[0]


class _Values:
    """The numbers of the Fourier loop, in it or in a loop of their own that names its rows by id."""

    def __init__(self, block: Block, site: Column) -> None:
        self._block = block
        names = ("cos", "sin", "modulus", "phase")
        found = {name: block.column(f"{_LOOP}_param_{name}") for name in names}
        self.columns = {name: column for name, column in found.items() if column is not None}
        for name, partner in (("cos", "sin"), ("sin", "cos"), ("modulus", "phase"), ("phase", "modulus")):
            if name in self.columns and partner not in self.columns:
                raise block.error(f"{_LOOP}_param.{partner} is missing beside {self.columns[name].tag}.")
        if not self.columns:
            raise block.error(
                f"{site.tag} stands without amplitudes ({_LOOP}_param.cos and .sin, or .modulus and .phase)."
            )
        first = next(iter(self.columns.values()))
        if any(column.loop != first.loop for column in self.columns.values()):
            raise block.error(f"{first.tag} and its sister parameters stand in different loops.")
        self._place = list(_rows(site)) if first.loop == site.loop else self._matched(site, first)

    def _matched(self, site: Column, first: Column) -> list[int]:
        """The row of the parameters that belongs to each row of the Fourier loop."""
        here, there = self._block.sibling(site, f"{_LOOP}_id"), self._block.sibling(first, f"{_LOOP}_param_id")
        if here is None or there is None:
            raise self._block.error(
                f"{first.tag} stands in another loop than {site.tag}, without {_LOOP}.id and {_LOOP}_param.id to "
                "connect their rows."
            )
        known = [there.text(row) for row in _rows(there)]
        places = []
        for row in _rows(here):
            key = here.text(row)
            if key is None or known.count(key) != 1:
                raise self._block.error(
                    f"{here.tag} {here.values[row]!r} stands {known.count(key)} times in {there.tag}."
                )
            places.append(known.index(key))
        if len(set(places)) != len(known):
            spare = next(key for i, key in enumerate(known) if i not in places)
            raise self._block.error(f"{there.tag} {spare!r} belongs to no row of {here.tag}.")
        return places

    def amplitude(self, row: int, label: str) -> _Entry:
        """cos + i sin = modulus · exp(−2πi phase) of a row, in µB, with what is uncertain of it."""
        place = self._place[row]
        given: list[_Entry] = []
        for first, second in (("cos", "sin"), ("modulus", "phase")):
            pair = [self.columns[name] for name in (first, second) if name in self.columns]
            if not pair or not any(column.text(place) for column in pair):
                continue
            (one, one_su), (two, two_su) = (self._number(column, place, label) for column in pair)
            if first == "cos":
                given.append(_Entry(complex(one, two), (one_su, two_su), 1.0))
                continue
            if abs(two) > 1:
                raise self._block.error(
                    f"{pair[1].tag} of {label} is {two:g}; a phase is given in cycles, between -1 and 1."
                )
            turn = complex(np.exp(-2j * np.pi * two))
            given.append(_Entry(one * turn, (one_su, 2 * np.pi * abs(one) * two_su), turn))
        if not given:
            raise self._block.error(f"the amplitude of {label} in row {row + 1} of its Fourier loop is not given.")
        if abs(given[-1].value - given[0].value) > max(AGREE_MUB, AGREE_FRACTION * abs(given[0].value)):
            raise self._block.error(
                f"cosine and sine of {label} in row {row + 1} of its Fourier loop contradict modulus and phase. Keep "
                "the right ones."
            )
        # Two descriptions of one amplitude: the first that says how uncertain it is.
        stated = next((entry for entry in given if not np.all(np.isnan(entry.su))), given[0])
        return _Entry(given[0].value, stated.su, stated.turn)

    def _number(self, column: Column, place: int, label: str) -> tuple[float, float]:
        """A number and its standard uncertainty, in brackets or in a column of its own (NaN: none)."""
        value, su = self._block.number(column, place)
        if abs(value) > LARGEST:
            raise self._block.error(f"{column.tag} of {label} is {value:g}, beyond {LARGEST:g} µB.")
        separate = self._block.sibling(column, f"{column.tag}_su")
        if separate is not None and separate.text(place) is not None:
            su = self._block.number(separate, place)[0]
        if su < 0 or su > LARGEST:
            tag = column.tag if separate is None else separate.tag
            raise self._block.error(
                f"{tag} of {label} is {su:g}; a standard uncertainty is at least 0 and at most {LARGEST:g}."
            )
        return value, su

    def form(self, name: str, row: int) -> str | None:
        """The symmetry-adapted form of a parameter of a row, where the file gives one."""
        column = self.columns.get(name)
        form = None if column is None else self._block.sibling(column, f"{_LOOP}_param_{name}_symmform")
        return None if form is None else form.text(self._place[row])


class _Forms:
    """Stated forms such as ``0.5*mxs1``: parameters of one site that share a symbol must be in that proportion."""

    def __init__(self, block: Block) -> None:
        self._base: dict[tuple[str, str], float] = {}
        self._broken: dict[str, None] = {}

    def add(self, label: str, values: _Values, row: int, amplitude: complex) -> None:
        """Compare the cosine and sine of one row with what the rows before it make of their symbols."""
        for name, value in (("cos", amplitude.real), ("sin", amplitude.imag)):
            text = "".join((values.form(name, row) or "").lower().split())
            match = _SYMMFORM.fullmatch(text)
            number = parse_number(text)
            if number is not None and number[0] == 0:
                expected = 0.0
            elif match is not None and float(match[2] or 1) != 0:
                factor = float(match[2] or 1) * (-1 if match[1] == "-" else 1)
                expected = factor * self._base.setdefault((label, match[3]), value / factor)
            else:
                continue
            if abs(value - expected) > max(AGREE_MUB, AGREE_FRACTION * abs(value)):
                self._broken[label] = None

    def notes(self) -> list[str]:
        """One sentence per site whose amplitudes break their stated form."""
        return [
            f"the Fourier amplitudes of {label} do not have the form that the file states for them (symmform); the "
            "numbers are taken"
            for label in self._broken
        ]
