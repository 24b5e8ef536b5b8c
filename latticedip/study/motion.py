"""How the probe of a study moves, how well its place is known, and which of its neighbours it moves."""

from __future__ import annotations

from typing import Any

from latticedip.crystal.displace import Displaced
from latticedip.crystal.model import Crystal
from latticedip.crystal.spread import as_spread, covariance_from_Uij
from latticedip.crystal.uncertain import LARGEST_SU
from latticedip.study.keys import Key

SPREAD_KEYS = ("spread_A", "covariance_A2", "Uij")
MOTION_KEYS = (*SPREAD_KEYS, "position_su", "displaced")
#: Those of a probe that stands for many places.
RULE_MOTION_KEYS = (*SPREAD_KEYS, "displaced")
DISPLACED_KEYS = ("shell", "within", "atom", "of", "factor", "outward_A", "vector_A")


def read_motion(item: Key, table: dict[str, Key], crystal: Crystal) -> dict[str, Any]:
    """Arguments of a Probe that say how it moves, how well its place is known and which neighbours it moves."""
    arguments: dict[str, Any] = {}
    stated = [name for name in SPREAD_KEYS if name in table]
    if len(stated) > 1:
        raise item.refuse(f"`{stated[0]}` and `{stated[1]}` are two spreads. Leave one out.")
    for name in stated:
        with table[name].located():
            arguments["spread"] = as_spread(name, _spread(name, table[name], crystal))
    if "position_su" in table:
        key = table["position_su"]
        if "site" in table:
            raise key.refuse("goes with `position`; a probe on a site has the uncertainty of that site. Leave it out.")
        what = f"three standard uncertainties of the fractional coordinates, each from 0 to {LARGEST_SU:g}"
        arguments["position_su"] = key.numbers(3, what)
        if min(arguments["position_su"]) < 0 or max(arguments["position_su"]) > LARGEST_SU:
            raise key.expected(what)
    if "displaced" in table:
        terms = table["displaced"].items("a list of neighbours that move, such as [{ shell = 1, factor = 1.05 }]")
        arguments["displaced"] = tuple(_displaced(term, crystal) for term in terms)
    return arguments


def _spread(name: str, key: Key, crystal: Crystal) -> Any:
    if name == "spread_A":
        return key.number("the rms displacement along each axis in Å, at least 0", low=0.0)
    if name == "covariance_A2":
        return key.matrix("three lists of three numbers (Cartesian): the covariance of the position in Å²")
    return covariance_from_Uij(crystal, key.numbers(6, "six numbers in Å²: U11, U22, U33, U12, U13, U23"))


def _displaced(item: Key, crystal: Crystal) -> Displaced:
    table = item.table(DISPLACED_KEYS, header="neighbours that move, such as { shell = 1, factor = 1.05 }")
    arguments: dict[str, Any] = {}
    if "shell" in table:
        arguments["shell"] = table["shell"].whole("the number of a shell of neighbours, 1 for the nearest")
    if "within" in table:
        arguments["within"] = table["within"].number("a radius in Å, larger than 0", above=0.0)
    if "atom" in table:
        arguments["atom"] = _atom(table["atom"], crystal)
    if "of" in table:
        arguments["of"] = table["of"].text("a site label or element")
        with table["of"].located():
            crystal.find(arguments["of"])
    if "factor" in table:
        arguments["factor"] = table["factor"].number("a factor for the distance from the probe", above=0.0)
    if "outward_A" in table:
        arguments["outward_A"] = table["outward_A"].number("a distance in Å, negative towards the probe")
    if "vector_A" in table:
        what = "three numbers in Å (Cartesian, in the frame of [crystal])"
        arguments["vector_A"] = table["vector_A"].numbers(3, what)
    with item.located():
        return Displaced(**arguments)


def _atom(key: Key, crystal: Crystal) -> tuple[int, tuple[int, int, int]]:
    """Site number and cell of { site = label, number = 1, cell = [0, 0, 0] }; number counts as `show` lists them."""
    header = 'an atom, such as { site = "Mn1", number = 2, cell = [0, 0, 1] }'
    table = key.table(("site", "number", "cell"), header=header)
    if "site" not in table:
        raise key.missing("site", "a site label or element")
    name = table["site"].text("a site label or element")
    with table["site"].located():
        sites = crystal.find(name)
    number = table["number"].whole("the number of an atom of the site, from 1") if "number" in table else 1
    if number > len(sites):
        raise table["number"].refuse(f"got {number}, but {name} has {len(sites)} atoms in the cell.")
    cell = (0, 0, 0)
    if "cell" in table:
        what = "three whole numbers that count cell vectors"
        items = table["cell"].items(what)
        if len(items) != 3:
            raise table["cell"].expected(what)
        low = -(2**31)
        first, second, third = (part.whole("a whole number", low=low) for part in items)
        cell = (first, second, third)
    return int(sites[number - 1]), cell
