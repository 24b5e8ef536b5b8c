"""The [[ordering]] tables of a study: patterns of signs, cosine and sine amplitudes, or files with their own cell.

`along`, `cosine` and `sine` are crystal-axis components, along unit vectors parallel to a, b, c of [crystal].
`cosine_su` and `sine_su` state standard uncertainties in the layout of `cosine` and `sine`: each number is one
independent parameter, and a triple that holds for all atoms of a name is one for all of them.
An ordering with `along` covers every site that has a size in [moments]; sites that `signs` leaves out are all +.
"""

from __future__ import annotations

import dataclasses
import stat
from collections.abc import Callable, Mapping
from pathlib import Path

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, as_floats
from latticedip.crystal.model import Crystal, site_order
from latticedip.ordering.model import LARGEST_MOMENT_MUB, Ordering, SizeUncertainty
from latticedip.ordering.patterns import (
    VANISHING_FRACTION,
    Setting,
    expected_entries,
    read_signs,
    triple,
    unit_direction,
)
from latticedip.ordering.phases import close_fraction
from latticedip.ordering.uncertain import AmplitudeUncertainty
from latticedip.study.frames import place_in_frame
from latticedip.study.keys import Key

FILE_KEYS = ("file", "block", "domain")
SIGN_KEYS = ("along", "signs")
WAVE_KEYS = ("cosine", "sine", "phase", "cosine_su", "sine_su")
OTHER_KEY = "other_energy_meV_per_ion"
ORDERING_KEYS = ("name", "k", *SIGN_KEYS, *WAVE_KEYS, *FILE_KEYS, OTHER_KEY)

MOMENT_KEYS = ("size", "su")
#: What the triples of a key are multiplied with.
AMPLITUDES = {"cosine": 1.0, "sine": 1j}

_SIZE = "a size in Bohr magnetons, at least 0"
_SU = f"a number from 0 to {LARGEST_MOMENT_MUB:g}"
_DIRECTION = "a direction in crystal axes a, b, c, such as [0, 0, 1]"
_K = 'three reduced coordinates, such as [0, 0, 0.5] or [0, 0, "1/3"]'


@dataclasses.dataclass(frozen=True, eq=False)
class Sizes:
    """Moment sizes in µB. of_site: Shape (n_sites,) float, NaN where [moments] gives none. by_name: as written.

    su_by_name: standard uncertainties in µB, of the names that state one. named: n_sites names, the one that gives the
    size of each site, empty where none does.
    """

    of_site: FloatArray
    by_name: Mapping[str, float]
    su_by_name: Mapping[str, float] = dataclasses.field(default_factory=dict)
    named: tuple[str, ...] = ()

    def uncertainties(self, ordering: Ordering) -> Ordering:
        """The ordering with these uncertainties: one factor for all atoms whose size goes by one name."""
        groups = []
        relative = np.full(len(self.named), np.nan)
        for name, su in self.su_by_name.items():
            sites = tuple(i for i, owner in enumerate(self.named) if owner == name and ordering.is_magnetic[i])
            if sites and su > 0:
                groups.append(SizeUncertainty(sites, su / self.by_name[name]))
                relative[list(sites)] = groups[-1].relative
        if not groups:
            return ordering
        # As components, for files that hold no more: what the factor does to each.
        amplitude = np.abs(ordering.crystal.to_crystal_axes(ordering.components[0]))
        return dataclasses.replace(ordering, moment_su=relative[:, None] * amplitude, size_su=tuple(groups))


def read_moments(key: Key | None, crystal: Crystal) -> Sizes:
    """The [moments] table: sizes by site label or element; a label goes before the element.

    A size is a number, or { size = 4.4, su = 0.1 } with its standard uncertainty.
    """
    of_site = np.full(crystal.n_sites, np.nan)
    by_name: dict[str, float] = {}
    su_by_name: dict[str, float] = {}
    owners = [""] * crystal.n_sites
    named = {} if key is None else key.table()
    for by_label in (False, True):
        for name, child in named.items():
            if (name in crystal.labels) is by_label:
                with child.located():
                    sites = crystal.find(name)
                by_name[name], su = _size(child)
                if su is not None:
                    su_by_name[name] = su
                of_site[list(sites)] = by_name[name]
                for site in sites:
                    owners[site] = name
    return Sizes(of_site, {name: by_name[name] for name in named}, su_by_name, tuple(owners))


def _size(key: Key) -> tuple[float, float | None]:
    """A size in µB and its standard uncertainty, None where it states none."""
    if not isinstance(key.value, dict):
        return key.number(_SIZE, low=0.0), None
    table = key.table(MOMENT_KEYS)
    if "size" not in table:
        raise key.missing("size", _SIZE)
    size = table["size"].number(_SIZE, low=0.0)
    if "su" not in table:
        return size, None
    what = f"the standard uncertainty of the size in Bohr magnetons, from 0 to {LARGEST_MOMENT_MUB:g}"
    su = table["su"].number(what, low=0.0, high=LARGEST_MOMENT_MUB)
    if su > 0 and size == 0:
        raise table["su"].refuse("goes with a size above 0: the uncertainty is one of the size, along its direction.")
    return size, su


def read_orderings(
    key: Key | None,
    crystal: Crystal,
    sizes: Sizes,
    folder: Path,
    files: dict[str, Path],
    other_energies: dict[str, float],
) -> tuple[Ordering, ...]:
    """All [[ordering]] tables, in order.

    The paths of the files they name are added to ``files``; what they state of other energies (meV per ion), by the
    name of the ordering, to ``other_energies``.
    """
    if key is None:
        return ()
    orderings: list[Ordering] = []
    for number, item in enumerate(key.items("a list of tables, each headed [[ordering]]"), start=1):
        table = item.table(ORDERING_KEYS)
        name = table["name"].text("a name in one line") if "name" in table else ""
        if "file" in table:
            ordering = _from_file(item, table, crystal, folder, files, number)
            name = name or Path(table["file"].value).stem
        else:
            for other in ("block", "domain"):
                if other in table:
                    raise table[other].refuse("goes only with `file`, which this ordering has not.")
            name = name or f"ordering {number}"
            ordering = _from_pattern(item, table, crystal, sizes)
        _refuse_taken(item, table, name, [other.name for other in orderings])
        if OTHER_KEY in table:
            other_energies[name] = table[OTHER_KEY].number("an energy in meV per magnetic ion")
        orderings.append(dataclasses.replace(ordering, name=name))
    return tuple(orderings)


def _refuse_taken(item: Key, table: dict[str, Key], name: str, taken: list[str]) -> None:
    if name not in taken:
        return
    where = f"ordering[{taken.index(name) + 1}]"
    if "name" in table:
        raise table["name"].expected(f"a name of its own ({where} has this one)")
    raise item.refuse(f"without `name` it is called {name!r}, as {where} is already. Give it a name.")


def _from_file(
    item: Key, table: dict[str, Key], crystal: Crystal, folder: Path, files: dict[str, Path], number: int
) -> Ordering:
    from latticedip.files.read import read_ordering

    for other in ("k", *SIGN_KEYS, *WAVE_KEYS):
        if other in table:
            raise table[other].refuse("does not go with `file`: the file states its own k and moments. Leave one out.")
    path = existing_file(table["file"], folder, "the path of a structure file with moments")
    block = read_block(table)
    domain = table["domain"].whole("the number of a domain, from 1") if "domain" in table else None
    with table["block" if block is not None else "file"].located():
        ordering = read_ordering(path, block=block)
    files[f"ordering {number}"] = path
    with table["domain" if domain is not None else "file"].located():
        return place_in_frame(ordering, crystal, domain)


def read_block(table: dict[str, Key]) -> str | int | None:
    """The `block` of a file that holds several structures: a name, or the number of an image."""
    if "block" not in table:
        return None
    key = table["block"]
    if isinstance(key.value, int):
        return key.whole("the number of a structure in the file, from 1")
    return key.text("the name of a data block, or the number of a structure in the file")


def existing_file(key: Key, folder: Path, what: str) -> Path:
    """The path a key names, relative to the folder of the study; StudyError where no file is there."""
    path = folder / key.text(what)
    try:
        kind = path.stat().st_mode
    except OSError as error:
        reason = "there is no file" if isinstance(error, FileNotFoundError) else str(error.strerror)
        raise key.expected(f"{what} ({reason}: {path})") from None
    if stat.S_ISDIR(kind):
        raise key.expected(f"{what} ({path} is a folder)")
    return path


def _from_pattern(item: Key, table: dict[str, Key], crystal: Crystal, sizes: Sizes) -> Ordering:
    signs, waves = [[name for name in names if name in table] for names in (SIGN_KEYS, WAVE_KEYS)]
    if signs and waves:
        raise item.refuse(f"`{signs[0]}` and `{waves[0]}` describe the moments in two ways. Leave one out.")
    if not signs and "cosine" not in table and "sine" not in table:
        raise item.refuse("says nothing of its moments, expected one of `along`, `cosine`, `sine` or `file`.")
    if signs and "along" not in table:
        raise item.missing("along", _DIRECTION)
    if "k" not in table:
        raise item.missing("k", _K)
    k = table["k"].numbers(3, _K, fractions=True)
    with table["k"].located():
        setting = Setting.of(crystal, k)
    components = _sign_components(table, setting, sizes) if signs else _wave_components(table, setting)
    with item.located():
        ordering = setting.finish(components, notes=_k_notes(setting.k))
    if not signs:
        return _with_amplitude_su(ordering, table, setting)
    with item.located():
        return sizes.uncertainties(ordering)


def _k_notes(k: FloatArray) -> list[str]:
    """A remark on a coordinate that looks like a third or a sixth cut short, which is another vector."""
    for x in k:
        # Two digits, as in 0.33, leave more than three or four.
        rough = 5e-3 if abs(100 * x - round(100 * x)) < 1e-9 else 1e-3
        if close_fraction(float(x), (6,), rough) is not None:
            return [
                f"k = ({', '.join(f'{float(y):.10g}' for y in k)}) is taken as written; a third or a sixth is given "
                'exactly by a string such as "1/3"'
            ]
    return []


def _sign_components(table: dict[str, Key], setting: Setting, sizes: Sizes) -> ComplexArray:
    crystal = setting.crystal
    sized = np.flatnonzero(~np.isnan(sizes.of_site))
    if len(sized) == 0:
        raise table["along"].refuse("no site has a moment size, expected a table [moments], such as Mn = 4.6.")
    signs = np.zeros(crystal.n_sites, dtype=complex)
    listed = np.zeros(crystal.n_sites, dtype=bool)
    if "signs" in table:

        def one(key: Key, sites: tuple[int, ...]) -> ComplexArray:
            for i in sites:
                if np.isnan(sizes.of_site[i]):
                    label = crystal.labels[i]
                    raise key.refuse(f"{label} has no moment size, expected it or its element in [moments].")
            return read_sign_list(key, setting, sites)

        listed = fill_by_site(table["signs"], crystal, signs, one)
    rest = tuple(i for i in site_order(crystal.positions) if i in sized and not listed[i])
    if rest:
        signs[list(rest)] = setting.spread(rest, np.ones(setting.counts(rest)[0]))
    directions = _directions(table["along"], crystal, signs != 0)
    return np.asarray(np.nan_to_num(sizes.of_site)[:, None] * signs[:, None] * directions)


def read_sign_list(key: Key, setting: Setting, sites: tuple[int, ...]) -> ComplexArray:
    """Shape (n_sites,) complex: the signs of a string, one per atom of the primitive or of the whole cell."""
    primitive, whole = setting.counts(sites)
    what = f"a string of {expected_entries(primitive, whole)} of the signs +, -, 0"
    if not isinstance(key.value, str):
        raise key.expected(what)
    with key.located():
        entries = read_signs(key.value)
    if len(entries) not in (primitive, whole):
        raise key.expected(what)
    return setting.spread(sites, entries)


def _directions(key: Key, crystal: Crystal, used: np.ndarray) -> FloatArray:
    """Shape (n_sites, 3) float. Cartesian unit vectors, from one direction or from a table by label or element."""
    directions = np.zeros((crystal.n_sites, 3))
    if isinstance(key.value, list):
        directions[:] = unit_direction(crystal, key.direction(_DIRECTION))
        return directions
    if not isinstance(key.value, dict):
        raise key.expected(f"{_DIRECTION}, or a table of them by site label or element")

    def one(child: Key, sites: tuple[int, ...]) -> FloatArray:
        return np.tile(unit_direction(crystal, child.direction(_DIRECTION)), (len(sites), 1))

    given = fill_by_site(key, crystal, directions, one)
    for i in np.flatnonzero(used & ~given):
        raise key.missing(crystal.labels[i], f"{_DIRECTION} (it has a size in [moments] and a sign)")
    return directions


def _wave_components(table: dict[str, Key], setting: Setting) -> ComplexArray:
    crystal = setting.crystal
    components = np.zeros((crystal.n_sites, 3), dtype=complex)
    for name in AMPLITUDES:
        if name not in table:
            continue
        part = np.zeros_like(components)

        def one(key: Key, sites: tuple[int, ...], name: str = name) -> ComplexArray:
            values = _carried(table, setting, name, sites, read_triples(key, setting, sites))
            if name == "sine" and setting.self_conjugate and _has_no_real_part(values):
                raise key.refuse(
                    f"at k = {triple(setting.k)}, where k and −k are the same vector, a sine amplitude has no effect "
                    "on these atoms. Leave it out, or give it as cosine."
                )
            return values

        fill_by_site(table[name], crystal, part, one)
        components += part
    return components


def _carried(
    table: dict[str, Key], setting: Setting, name: str, sites: tuple[int, ...], entries: FloatArray
) -> ComplexArray:
    """Shape (n_sites, 3) complex, Cartesian µB. Components of the sites of one name, from the triples (m, 3) of it."""
    amplitudes = AMPLITUDES[name] * entries
    if "phase" not in table or table["phase"].one_of(("position", "cell")) == "position":
        # A list for the primitive cell holds amplitudes, which centring leaves as they are; the position carries the
        # whole phase.
        still = dataclasses.replace(setting, k=np.zeros(3))
        values = still.spread(sites, amplitudes) * setting.follow_positions(sites)[:, None]
    else:
        values = setting.spread(sites, amplitudes)
    return np.asarray(values @ setting.crystal.axes_unit)


def _with_amplitude_su(ordering: Ordering, table: dict[str, Key], setting: Setting) -> Ordering:
    """The ordering with the uncertainties that `cosine_su` and `sine_su` state of its amplitudes."""
    parameters: list[AmplitudeUncertainty] = []
    for name in AMPLITUDES:
        if f"{name}_su" not in table:
            continue
        key = table[f"{name}_su"]
        if name not in table:
            raise key.refuse(f"goes only with `{name}`, which this ordering has not.")
        stated = table[name].table()
        for who, child in key.table(header="a table by site label or element, as `cosine` and `sine` are").items():
            if who not in stated:
                raise child.refuse(
                    f"stands in no entry of `{name}`, which has {', '.join(stated)}. Use the same names."
                )
            sites = setting.crystal.find(who)
            for entries in _su_entries(child, stated[who], setting.counts(sites)[0]):
                steps = _carried(table, setting, name, sites, entries)
                if name == "sine" and setting.self_conjugate and _has_no_real_part(steps):
                    raise child.refuse(
                        f"at k = {triple(setting.k)}, where k and −k are the same vector, a sine amplitude has no "
                        "effect on these atoms, nor has its uncertainty. Leave it out, or give that of the cosine."
                    )
                if setting.self_conjugate:
                    # As of the components, only the real part has a meaning; an ion that is left without a moment has
                    # no uncertain one.
                    steps = np.where(ordering.is_magnetic[list(sites)][:, None], steps.real, 0.0).astype(complex)
                if np.any(steps):
                    parameters.append(AmplitudeUncertainty(sites, steps[None]))
    return dataclasses.replace(ordering, amplitude_su=tuple(parameters)) if parameters else ordering


def _su_entries(key: Key, stated: Key, primitive: int) -> list[FloatArray]:
    """Changes of the list of triples (m, 3) by each uncertain number, of which one may stand for all atoms."""
    of_triple = "three standard uncertainties in µB, each at least 0"
    if not isinstance(stated.value[0], list):
        su = [
            item.number(_SU, low=0.0, high=LARGEST_MOMENT_MUB)
            for item in _exactly(key, 3, f"{of_triple}, as `{stated.path}` has one triple")
        ]
        return [np.tile(np.eye(3)[axis] * su[axis], (primitive, 1)) for axis in range(3) if su[axis]]
    n = len(stated.value)
    changes = []
    for row, item in enumerate(
        _exactly(key, n, f"{n} triple{'s' * (n > 1)} of standard uncertainties in µB, as `{stated.path}` has {n}")
    ):
        for axis, number in enumerate(_exactly(item, 3, of_triple)):
            entries = np.zeros((n, 3))
            entries[row, axis] = number.number(_SU, low=0.0, high=LARGEST_MOMENT_MUB)
            if entries[row, axis]:
                changes.append(entries)
    return changes


def _exactly(key: Key, n: int, what: str) -> list[Key]:
    items = key.items(what)
    if len(items) != n:
        raise key.expected(what)
    return items


def _has_no_real_part(values: ComplexArray) -> bool:
    size = float(np.abs(values).max())
    return size > 0 and float(np.abs(values.real).max()) <= VANISHING_FRACTION * size


def read_triples(key: Key, setting: Setting, sites: tuple[int, ...]) -> FloatArray:
    """Shape (m, 3) float: one triple for every atom alike, or a list of them."""
    primitive, whole = setting.counts(sites)
    what = f"a triple of µB along a, b, c, or a list of {expected_entries(primitive, whole)} such triples"
    items = key.items(what)
    if items and all(isinstance(item.value, list) for item in items):
        if len(items) not in (primitive, whole):
            raise key.expected(what)
        return np.array([item.numbers(3, "a triple of µB along a, b, c") for item in items])
    return np.tile(as_floats("triple", key.numbers(3, what), (3,)), (primitive, 1))


def fill_by_site(
    key: Key, crystal: Crystal, into: np.ndarray, one: Callable[[Key, tuple[int, ...]], np.ndarray]
) -> np.ndarray:
    """Read a table by site label or element into an array over all sites; returns which sites it covers."""
    by_whom: dict[int, str] = {}
    for name, child in key.table(header="a table by site label or element, such as { Mn1 = ... }").items():
        with child.located():
            sites = crystal.find(name)
        for i in sites:
            if i in by_whom:
                raise child.refuse(f"covers {crystal.labels[i]}, which {by_whom[i]} covers already. Leave one out.")
            by_whom[i] = name
        into[list(sites)] = one(child, sites)
    return np.isin(np.arange(crystal.n_sites), list(by_whom))
