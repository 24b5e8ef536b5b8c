"""Which nuclei sit on the sites of a crystal: isotopes with a moment, and how often each occurs."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping

from latticedip.checks import as_float
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError, near_match
from latticedip.particles import Particle, particle_named, particles


def element_of(isotope: str) -> str:
    """Element of an isotope such as "19F"."""
    return re.sub(r"^\d+", "", isotope)


def isotopes_by_element(
    crystal: Crystal,
    nuclei: str | Iterable[str] | None = None,
    abundances: Mapping[str, float] | None = None,
) -> dict[str, list[tuple[Particle, float]]]:
    """For each element of a crystal its isotopes with a moment, each with the fraction of atoms that are it.

    nuclei: isotopes ("63Cu") or elements ("Cu") that count; None: all. abundances: fractions that replace the natural
    ones, by isotope; an element with one isotope named here has no others.

    Raises InputError for a name that is neither an isotope nor an element of the crystal, an isotope that is not found
    in nature and has no stated abundance, and abundances of an element that add up to more than one.
    """
    stated = _stated(crystal, abundances or {})
    elements = list(dict.fromkeys(crystal.symbols))
    found: dict[str, list[tuple[Particle, float]]] = {}
    for element in elements:
        known = [p for p in particles() if p.name != "muon" and element_of(p.name) == element]
        if element in stated:
            found[element] = [(p, stated[element][p.name]) for p in known if p.name in stated[element]]
        else:
            found[element] = [(p, p.abundance) for p in known if not math.isnan(p.abundance)]
    if nuclei is None:
        return found
    names = {_checked_name(crystal, found, name) for name in ([nuclei] if isinstance(nuclei, str) else nuclei)}
    return {
        element: [(p, share) for p, share in entries if element in names or p.name in names]
        for element, entries in found.items()
    }


def _stated(crystal: Crystal, abundances: Mapping[str, float]) -> dict[str, dict[str, float]]:
    out: dict[str, dict[str, float]] = {}
    for name, value in abundances.items():
        isotope = particle_named(name)
        element = element_of(isotope.name)
        if isotope.name == "muon" or element not in crystal.symbols:
            raise InputError(f"abundances: the crystal holds no nuclei {name!r}; {_holds(crystal)}")
        out.setdefault(element, {})[isotope.name] = as_float(f"abundance of {name}", value, low=0.0, high=1.0)
    for shares in out.values():
        if sum(shares.values()) > 1 + 1e-9:
            raise InputError(f"abundances of {', '.join(shares)} add up to {sum(shares.values()):.6g}, more than 1.")
    return out


def _checked_name(crystal: Crystal, found: Mapping[str, list[tuple[Particle, float]]], name: str) -> str:
    if name in found:
        return name
    present = {p.name for entries in found.values() for p, _ in entries}
    if name in present:
        return name
    if isinstance(name, str) and re.fullmatch(r"\d+[A-Z][a-z]?", name) and element_of(name) in found:
        isotope = particle_named(name)
        raise InputError(
            f"nuclei: {isotope.name} has no abundance here. Give it with abundances, such as {{{isotope.name!r}: 1.0}}."
        )
    known = [*found, *sorted(present)]
    raise InputError(f"nuclei: the crystal holds no {name!r}; {_holds(crystal)}" + (near_match(str(name), known)))


def _holds(crystal: Crystal) -> str:
    return f"its elements are {', '.join(dict.fromkeys(crystal.symbols))}."
