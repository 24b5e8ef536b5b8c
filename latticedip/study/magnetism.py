"""The [susceptibility], [moment_spread] and [abundances] tables of a study, and which ions of it are magnetic."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Set
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.crystal.spread import as_spread
from latticedip.errors import StudyError
from latticedip.observables.isotopes import isotopes_by_element
from latticedip.observables.susceptibility import UNITS, Susceptibility
from latticedip.physics.spread import named_clouds
from latticedip.study.keys import Key

if TYPE_CHECKING:
    from latticedip.ordering.model import Ordering
    from latticedip.study.schema import Study

SUSCEPTIBILITY_KEYS = ("chi", "chi_su", "unit", "temperatures_K", "local")
_EXAMPLE = '{ chi = 0.012, unit = "cm3/mol" }'
_UNITS = '"cm3/mol" (cgs, the same as emu/mol; per mole of ions), "m3/mol" (SI) or "muB/T" (per ion)'
_CHI = "a number, a tensor (three lists of three numbers, Cartesian), or a list of them over temperatures_K"
_MOMENT_SPREAD = "one table, headed [moment_spread], such as Mn = 0.4 (Å rms)"
_EXTENT = "the rms extent along each axis in Å, at least 0, or a covariance (three lists of three numbers, Å²)"
_TEMPERATURES = "a list of temperatures in K, each larger than 0"


def read_susceptibility(key: Key | None, crystal: Crystal) -> dict[str, Susceptibility]:
    """The [susceptibility] table: one entry per site label or element, in the order of the file.

    Each holds chi with its unit and, where chi is a list over temperatures, temperatures_K; chi_su is its standard
    uncertainty in the same form. No two of them may mean one atom.
    """
    found: dict[str, Susceptibility] = {}
    taken: dict[int, str] = {}
    for name, child in ({} if key is None else key.table(header="one table, headed [susceptibility]")).items():
        with child.located():
            sites = crystal.find(name)
        for site in sites:
            if site in taken:
                raise child.refuse(
                    f"means atom {crystal.labels[site]}, which {taken[site]!r} means already. Name each atom once."
                )
            taken[site] = name
        found[name] = _susceptibility(child)
        with child.located():
            # Tensors are matched with the atoms and their symmetry here, so that a misfit is told with its key.
            table = found[name].temperatures_K
            found[name].of_atoms(crystal, name, None if table is None else float(table[0]))
    return found


def _susceptibility(item: Key) -> Susceptibility:
    table = item.table(SUSCEPTIBILITY_KEYS, header=f"a table, such as {_EXAMPLE}")
    if "chi" not in table:
        raise item.missing("chi", _CHI)
    if "unit" not in table:
        raise item.missing("unit", _UNITS)
    if table["unit"].value not in UNITS:
        raise table["unit"].expected(_UNITS)
    arguments: dict[str, Any] = {"unit": table["unit"].value}
    if "local" in table:
        table["local"].true()
        arguments["local"] = True
    if "temperatures_K" in table:
        what = "a temperature in K, larger than 0"
        temperatures = [entry.number(what, above=0.0) for entry in table["temperatures_K"].items(_TEMPERATURES)]
        arguments["temperatures_K"] = temperatures
        chi: Any = [_number_or_tensor(entry) for entry in table["chi"].items("a list, one entry per temperature")]
        if len(chi) != len(temperatures):
            raise table["chi"].refuse(f"has {len(chi)} entries, expected {len(temperatures)}, one per temperature.")
        if len({np.ndim(value) for value in chi}) > 1:
            raise table["chi"].refuse("mixes numbers and tensors, expected one kind at all temperatures.")
    else:
        if isinstance(table["chi"].value, list) and not any(isinstance(v, list) for v in table["chi"].value):
            raise item.missing("temperatures_K", f"{_TEMPERATURES}, since chi is a list of numbers")
        chi = _number_or_tensor(table["chi"])
    if "chi_su" in table:
        key = table["chi_su"]
        single = not isinstance(key.value, list) or "temperatures_K" not in table
        items = [] if single else key.items("a list, one entry per temperature")
        arguments["chi_su"] = _number_or_tensor(key) if single else [_number_or_tensor(entry) for entry in items]
        with key.located():
            return Susceptibility(chi, **arguments)
    with item.located():
        return Susceptibility(chi, **arguments)


def _number_or_tensor(key: Key) -> Any:
    what = "a number or three lists of three numbers (Cartesian)"
    return key.matrix(what) if isinstance(key.value, list) else key.number(what)


def magnetic_sites(
    crystal: Crystal, moments: Mapping[str, float], susceptibility: Mapping[str, Any], orderings: Iterable[Ordering]
) -> set[int]:
    """Sites of the crystal of a study that its tables or any of its orderings make magnetic."""
    named = [*susceptibility, *(name for name, size in moments.items() if size > 0)]
    found = {site for name in named for site in crystal.find(name)}
    for ordering in orderings:
        ions = np.flatnonzero(ordering.is_magnetic)
        if ordering.reference is None:
            found.update(int(site) for site in ions)
        else:
            elements = {ordering.crystal.symbols[site] for site in ions}
            found.update(site for site, symbol in enumerate(crystal.symbols) if symbol in elements)
    return found


def read_moment_spread(key: Key | None, crystal: Crystal, magnetic: Set[int]) -> dict[str, float | FloatArray]:
    """The [moment_spread] table: how far the moment of an ion extends, by site label or element (the label wins).

    A number is the rms extent along each axis in Å; three lists of three numbers are a Cartesian covariance in Å², that
    of the first atom of the name. magnetic: the sites that carry a moment; where there are any, a spread of others is
    refused, for it has no effect.
    """
    found: dict[str, float | FloatArray] = {}
    table = {} if key is None else key.table(header=_MOMENT_SPREAD)
    for name, child in table.items():
        with child.located():
            sites = crystal.find(name)
        value: Any = child.value
        if isinstance(value, list):
            value = child.matrix("three lists of three numbers (Cartesian): the covariance of the moment in Å²")
        else:
            value = child.number(_EXTENT, low=0.0)
        with child.located():
            # Symmetry is looked at here, so that a misfit is told with its key.
            named_clouds(crystal, {name: value})
            spread = as_spread("moment_spread", value)
        if np.any(spread) and magnetic and not magnetic & set(sites):
            known = ", ".join(dict.fromkeys(crystal.labels[site] for site in sorted(magnetic)))
            raise child.refuse(f"{name} carries no moment, so that its spread has no effect; magnetic are {known}.")
        # A label without a spread counts beside the spread of its element.
        if spread is not None and (np.any(spread) or crystal.symbols[sites[0]] in table.keys() - {name}):
            found[name] = spread
    return found


def read_abundances(key: Key | None, crystal: Crystal) -> dict[str, float]:
    """The [abundances] table: fractions of the atoms of an element that are an isotope, by the name of the isotope."""
    found: dict[str, float] = {}
    if key is None:
        return found
    for name, child in key.table(header='one table, headed [abundances], such as "7Li" = 0.05').items():
        found[name] = child.number("a fraction from 0 to 1", low=0.0)
        with child.located():
            isotopes_by_element(crystal, None, {name: found[name]})
    with key.located():
        isotopes_by_element(crystal, None, found)
    return found


def magnetic_groups(study: Study) -> tuple[dict[str, list[int]], str]:
    """Sites of the crystal that carry a moment, by the label or element that names them, and which table names them.

    [susceptibility] goes first, then [moments] (a label goes before its element), then what the orderings hold.

    Raises StudyError where none of them names any.
    """
    names, source = _magnetic_names(study)
    groups: dict[str, list[int]] = {name: [] for name in names}
    taken: set[int] = set()
    for by_label in (True, False):
        for name in names:
            if (name in study.crystal.labels) is by_label:
                groups[name] = [site for site in study.crystal.find(name) if site not in taken]
                taken.update(groups[name])
    return {name: sites for name, sites in groups.items() if sites}, source


def _magnetic_names(study: Study) -> tuple[list[str], str]:
    if study.susceptibility:
        return list(study.susceptibility), "[susceptibility]"
    stated = [name for name, size in study.moments.items() if size > 0]
    if stated:
        return stated, "[moments]"
    names: dict[str, None] = {}
    for ordering in study.orderings:
        own = ordering.crystal
        # Labels of a cell of its own need not be those of [crystal]; elements are.
        words = own.labels if ordering.reference is None else own.symbols
        names.update(dict.fromkeys(words[int(i)] for i in np.flatnonzero(ordering.is_magnetic)))
    if not names:
        raise StudyError(
            f"{str(study.path)!r} does not say which ions are magnetic. Give them a size in [moments], such as "
            f"[moments] Mn = 4.6, or a susceptibility, such as [susceptibility] Mn = {_EXAMPLE}"
        )
    return list(names), "the orderings"


def common_temperatures(susceptibility: Mapping[str, Susceptibility]) -> list[float]:
    """Temperatures in K of all tables, within the range that all of them cover; empty where none is a table."""
    tables = [chi.temperatures_K for chi in susceptibility.values() if chi.temperatures_K is not None]
    if not tables:
        return []
    low, high = max(float(table[0]) for table in tables), min(float(table[-1]) for table in tables)
    return sorted({float(t) for table in tables for t in table if low <= t <= high})
