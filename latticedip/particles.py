"""The particles that can feel a local field: the positive muon and nuclei with a magnetic moment.

The frequency per field is that of the bare particle, γ/2π = µ/(h I). In a substance the electrons of the
nucleus's own atom shield it (from 1e-5 of the frequency for hydrogen to 1e-2 for thallium or lead): that is
not included. Some moments are known to no better than 1e-3, of lanthanides and heavier nuclei to 1e-2 (235U
to a tenth).
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Collection
from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from importlib import resources
from types import MappingProxyType
from typing import Any

from scipy import constants

from latticedip.errors import InputError, near_match
from latticedip.units import MUON_MHZ_PER_T, NUCLEAR_MAGNETON_J_PER_T

#: Nuclei whose moments CODATA measures far better than any table: isotope to CODATA name.
CODATA_NUCLEI = MappingProxyType({"1H": "proton", "2H": "deuteron", "3H": "triton", "3He": "helion"})


@dataclass(frozen=True)
class Particle:
    """A spin that feels a local field.

    name: "muon", or mass number and element, such as "19F".
    spin: I, a multiple of one half.
    moment_nuclear_magnetons: magnetic dipole moment in nuclear magnetons, with its sign relative to the spin.
    MHz_per_T: |γ|/2π in MHz/T, bare particle.
    gamma_sign: +1 or −1, the sign of γ.
    abundance: fraction of the element's atoms found in nature; NaN where the particle is not found in nature.
    """

    name: str
    spin: float
    moment_nuclear_magnetons: float
    MHz_per_T: float
    gamma_sign: int
    abundance: float


def particles() -> tuple[Particle, ...]:
    """Return all known particles: the muon first, then nuclei by atomic number and mass."""
    return tuple(_table().values())


def particle_named(name: Any) -> Particle:
    """Return the particle named: "muon" (the positive muon) or an isotope such as "19F" (case matters).

    Raises InputError for an unknown name, with the nearest known names.
    """
    table = _table()
    if isinstance(name, str) and name in table:
        return table[name]
    if not isinstance(name, str):
        raise InputError(f'particle must be a name, "muon" or an isotope such as "19F", got {name!r}.')
    raise InputError(
        f"unknown particle {name!r}.{_suggestion(name, table)} "
        'Known are "muon" and the isotopes with a magnetic moment, mass number first, such as "19F".'
    )


def _suggestion(name: str, known: Collection[str]) -> str:
    """Return `` Did you mean 'x'?`` from the element and mass in the name, else from its spelling."""
    other_names = {codata: isotope for isotope, codata in CODATA_NUCLEI.items()}
    other_names |= {"mu": "muon", "mu+": "muon"}
    if name.casefold() in other_names:
        return f" Did you mean {other_names[name.casefold()]!r}?"
    bare = re.sub(r"[^0-9A-Za-z]", "", name).casefold()
    found = re.fullmatch(r"(\d*)([a-z]+)(\d*)", bare)
    if found:
        element, mass = found[2], found[1] or found[3]
        same = [isotope for isotope in known if isotope.lstrip("0123456789").casefold() == element]
        exact = [isotope for isotope in same if isotope.casefold() == mass + element]
        if exact or same:
            return f" Did you mean {' or '.join(repr(isotope) for isotope in exact or same)}?"
    return near_match(name, known)


def _mhz_per_t(moment_nuclear_magnetons: float, spin: float) -> float:
    """Return |γ|/2π = |µ|/(h I) in MHz/T."""
    return abs(moment_nuclear_magnetons) * NUCLEAR_MAGNETON_J_PER_T / (constants.h * spin) * 1e-6


@cache
def _table() -> MappingProxyType[str, Particle]:
    # CODATA states the moment of the negative muon; experiments implant the positive one.
    muon = Particle(
        name="muon",
        spin=0.5,
        moment_nuclear_magnetons=abs(constants.value("muon mag. mom. to nuclear magneton ratio")),
        MHz_per_T=MUON_MHZ_PER_T,
        gamma_sign=1,
        abundance=math.nan,
    )
    table = {muon.name: muon}
    text = (resources.files("latticedip") / "data" / "isotopes.csv").read_text(encoding="utf-8")
    rows = csv.DictReader(line for line in text.splitlines() if not line.startswith("#"))
    for row in rows:
        name, spin = row["isotope"], float(Fraction(row["spin"]))
        if name in CODATA_NUCLEI:
            moment = float(constants.value(f"{CODATA_NUCLEI[name]} mag. mom. to nuclear magneton ratio"))
        else:
            moment = float(row["moment_nuclear_magnetons"])
        percent = row["abundance_percent"]
        table[name] = Particle(
            name=name,
            spin=spin,
            moment_nuclear_magnetons=moment,
            MHz_per_T=_mhz_per_t(moment, spin),
            gamma_sign=1 if moment > 0 else -1,
            abundance=float(percent) / 100 if percent else math.nan,
        )
    return MappingProxyType(table)
