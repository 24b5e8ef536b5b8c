"""The table of particles: against another library, against handbook frequencies, and what is refused."""

from __future__ import annotations

import dataclasses
import importlib
import math
import re

import pytest
from scipy import constants

from latticedip.errors import InputError
from latticedip.particles import CODATA_NUCLEI, Particle, particle_named, particles

# Frequencies Ξ in percent of that of hydrogen in tetramethylsilane. Source: R. K. Harris et al., Pure Appl.
# Chem. 73, 1795 (2001), from memory. The nuclei sit in reference compounds, whose electrons shield them.
XI_PERCENT = {
    "1H": 100.0,
    "2H": 15.350609,
    "7Li": 38.863797,
    "11B": 32.083974,
    "13C": 25.145020,
    "15N": 10.136767,
    "17O": 13.556457,
    "19F": 94.094011,
    "23Na": 26.451900,
    "27Al": 26.056859,
    "29Si": 19.867187,
    "31P": 40.480742,
    "51V": 26.302948,
    "55Mn": 24.789218,
    "59Co": 23.727074,
    "63Cu": 26.515473,
    "65Cu": 28.403693,
    "77Se": 19.071513,
    "119Sn": 37.290632,
    "195Pt": 21.496784,
    "205Tl": 57.683838,
    "207Pb": 20.920599,
}

# Left out of the comparison: spindata 1.13 gives 165Ho nine times the ratio of any other source, and 179Hf
# the spin 9 instead of 9/2.
SPINDATA_WRONG_RATIO = {"165Ho"}
SPINDATA_WRONG_SPIN = {"179Hf"}


def nuclei() -> list[Particle]:
    return [particle for particle in particles() if particle.name != "muon"]


def mass_number(particle: Particle) -> int:
    return int(re.match(r"\d+", particle.name)[0])  # type: ignore[index]


def test_muon() -> None:
    muon = particle_named("muon")
    assert muon.spin == 0.5
    assert muon.gamma_sign == 1
    assert muon.MHz_per_T == pytest.approx(135.53881, abs=5e-6)
    assert math.isnan(muon.abundance)
    # The moment and the frequency come from two CODATA entries.
    frequency = muon.moment_nuclear_magnetons * constants.value("nuclear magneton in MHz/T") / muon.spin
    assert muon.MHz_per_T == pytest.approx(frequency, rel=1e-9)


def test_table_is_whole() -> None:
    assert particles()[0].name == "muon"
    assert len(nuclei()) == 125
    names = [particle.name for particle in particles()]
    assert len(set(names)) == len(names)
    radioactive = {p.name for p in nuclei() if math.isnan(p.abundance)}
    assert radioactive == {"3H", "8Li", "99Tc", "129I", "237Np", "239Pu"}
    for particle in nuclei():
        assert re.fullmatch(r"[1-9]\d*[A-Z][a-z]?", particle.name)
        assert (2 * particle.spin).is_integer() and particle.spin > 0
        # Odd mass numbers have half-integer spin, even ones whole spin.
        assert (2 * particle.spin) % 2 == mass_number(particle) % 2
        assert particle.gamma_sign == math.copysign(1, particle.moment_nuclear_magnetons)
        assert 0.05 < particle.MHz_per_T < 50
        assert math.isnan(particle.abundance) or 0 < particle.abundance <= 1


def test_abundances_do_not_exceed_the_element() -> None:
    totals: dict[str, float] = {}
    for particle in nuclei():
        if not math.isnan(particle.abundance):
            element = particle.name.lstrip("0123456789")
            totals[element] = totals.get(element, 0.0) + particle.abundance
    assert all(total <= 1 + 1e-6 for total in totals.values())
    # All isotopes of these elements have a moment (40K too), so their fractions fill the element.
    for element in (
        "H",
        "Li",
        "B",
        "N",
        "K",
        "V",
        "Cu",
        "Ga",
        "Rb",
        "Ag",
        "In",
        "Sb",
        "La",
        "Eu",
        "Lu",
        "Tl",
    ):
        assert totals[element] == pytest.approx(1, abs=1e-5), element


@pytest.mark.parametrize("name", sorted(CODATA_NUCLEI))
def test_light_nuclei_are_codata(name: str) -> None:
    moment = constants.value(f"{CODATA_NUCLEI[name]} mag. mom.")
    particle = particle_named(name)
    assert particle.MHz_per_T == pytest.approx(abs(moment) / constants.h / particle.spin * 1e-6, rel=2e-9)


@pytest.mark.parametrize(("name", "percent"), XI_PERCENT.items())
def test_handbook_frequencies(name: str, percent: float) -> None:
    ratio = 100 * particle_named(name).MHz_per_T / particle_named("1H").MHz_per_T
    # Chemical shielding of the reference compounds: below 1e-3 up to sulfur, up to 2e-2 for the heaviest.
    tolerance = 1e-3 if mass_number(particle_named(name)) < 40 else 2e-2
    assert ratio == pytest.approx(percent, rel=tolerance)


def test_against_another_library() -> None:
    pytest.importorskip("spindata", reason="the library spindata is not installed")
    gammas = importlib.import_module("spindata.gamma").gammaListAll
    spins = importlib.import_module("spindata.spin").spinListAll
    compared = 0
    for particle in nuclei():
        if particle.name in spins and particle.name not in SPINDATA_WRONG_SPIN:
            assert spins[particle.name] == particle.spin, particle.name
        if particle.name not in gammas or particle.name in SPINDATA_WRONG_RATIO:
            continue
        compared += 1
        expected = gammas[particle.name] / (2 * math.pi) * 1e-6
        # Its values are of 2001, before many moments were corrected for shielding (the larger the heavier).
        tolerance = 1e-3 if mass_number(particle) < 40 else 3e-3 if mass_number(particle) < 140 else 2.5e-2
        got = particle.gamma_sign * particle.MHz_per_T
        assert got == pytest.approx(expected, rel=tolerance), particle.name
    assert compared > 100


def test_frozen_and_one_object() -> None:
    fluorine = particle_named("19F")
    assert particle_named("19F") is fluorine
    with pytest.raises(dataclasses.FrozenInstanceError):
        fluorine.spin = 1.5  # type: ignore[misc]


KNOWN = 'Known are "muon" and the isotopes with a magnetic moment, mass number first, such as "19F".'


@pytest.mark.parametrize(
    ("name", "hint"),
    [
        ("19f", " Did you mean '19F'?"),
        ("F19", " Did you mean '19F'?"),
        ("F-19", " Did you mean '19F'?"),
        ("Muon", " Did you mean 'muon'?"),
        ("mu+", " Did you mean 'muon'?"),
        ("muno", " Did you mean 'muon'?"),
        ("proton", " Did you mean '1H'?"),
        ("Cu", " Did you mean '63Cu' or '65Cu'?"),
        ("56Fe", " Did you mean '57Fe'?"),
        ("", ""),
        ("electron", ""),
    ],
)
def test_unknown_names(name: str, hint: str) -> None:
    with pytest.raises(InputError) as caught:
        particle_named(name)
    assert str(caught.value) == f"unknown particle {name!r}.{hint} {KNOWN}"


@pytest.mark.parametrize("name", [None, 19, ["19F"]])
def test_a_name_is_a_string(name: object) -> None:
    with pytest.raises(InputError) as caught:
        particle_named(name)
    message = f'particle must be a name, "muon" or an isotope such as "19F", got {name!r}.'
    assert str(caught.value) == message
