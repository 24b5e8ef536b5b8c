"""Probes and contacts: defaults, and every way of stating them wrongly."""

from __future__ import annotations

import pickle

import numpy as np
import pytest

import latticedip as ld
from latticedip.errors import InputError


def test_defaults_and_names():
    probe = ld.Probe((0.5, 0.25, 1 / 3))
    assert probe.particle == "muon" and probe.name == "muon at (0.5, 0.25, 0.3333)"
    assert probe.contact == () and probe.site is None and probe.spread is None
    assert probe.MHz_per_T == pytest.approx(135.53881, abs=1e-5)
    fluorine = ld.Probe(site="F1", particle="19F")
    assert fluorine.name == "19F at F1" and fluorine.position is None
    assert fluorine.MHz_per_T == pytest.approx(40.08, abs=0.02)
    assert ld.Probe((0, 0, 0.5), name="A").name == "A"


def test_contacts():
    term = ld.Contact(0.06, shell=1)
    assert np.array_equal(term.coupling_T_per_muB, 0.06 * np.eye(3)) and term.shell == 1 and term.within is None
    tensor = ld.Contact([[1, 2, 3], [4, 5, 6], [7, 8, 9]], within=2.5)
    assert tensor.coupling_T_per_muB[0, 2] == 3 and tensor.within == 2.5
    density = ld.Contact(moment_density_muB_per_A3=(0, 0, 0.01))
    assert density.coupling_T_per_muB is None and density.moment_density_muB_per_A3[2] == 0.01
    assert ld.Probe((0, 0, 0), contact=term).contact == (term,)
    assert ld.Probe((0, 0, 0), contact=[term, density]).contact == (term, density)
    assert ld.Contact(0.0, shell=np.int64(2)).shell == 2


def test_frozen_and_pickled():
    probe = ld.Probe((0.5, 0.25, 0.1), contact=ld.Contact(0.06, shell=1))
    again = pickle.loads(pickle.dumps(probe))
    assert np.array_equal(again.position, probe.position) and again.contact[0].shell == 1
    with pytest.raises(ValueError, match="read-only"):
        probe.position[0] = 0
    with pytest.raises(AttributeError):
        probe.name = "other"


REFUSED = {
    "neither": (
        lambda: ld.Probe(),
        "a Probe needs exactly one of position (fractional) and site (a label or element).",
    ),
    "both": (
        lambda: ld.Probe((0, 0, 0), site="F"),
        "a Probe needs exactly one of position (fractional) and site (a label or element).",
    ),
    "two numbers": (lambda: ld.Probe((0, 0)), "position must have shape (3), got (2,)."),
    "infinite": (
        lambda: ld.Probe((0, 0, np.inf)),
        "position holds a value that is not finite: inf at index (2,).",
    ),
    "site number": (lambda: ld.Probe(site=3), "site must be a label or an element, got 3."),
    "particle": (
        lambda: ld.Probe((0, 0, 0), particle="F19"),
        "unknown particle 'F19'. Did you mean '19F'? Known are \"muon\" and the isotopes with a magnetic moment, mass "
        'number first, such as "19F".',
    ),
    "contact number": (lambda: ld.Probe((0, 0, 0), contact=0.06), "contact must hold Contact objects, got 0.06."),
    "contact dict": (
        lambda: ld.Probe((0, 0, 0), contact=[{"shell": 1}]),
        "contact must hold Contact objects, got {'shell': 1}.",
    ),
    "spread": (
        lambda: ld.Probe((0, 0, 0), spread=-0.1),
        "spread (rms displacement along each axis in Å) must lie between 0.0 and 5.0, got -0.1.",
    ),
    "no coupling": (
        lambda: ld.Contact(shell=1),
        "a Contact needs coupling_T_per_muB (a number or a 3×3 tensor) or moment_density_muB_per_A3.",
    ),
    "no shell": (
        lambda: ld.Contact(0.1),
        "a contact coupling needs exactly one of shell (1 is the nearest) and within (a radius in Å).",
    ),
    "shell and radius": (
        lambda: ld.Contact(0.1, shell=1, within=2.0),
        "a contact coupling needs exactly one of shell (1 is the nearest) and within (a radius in Å).",
    ),
    "density and coupling": (
        lambda: ld.Contact(0.1, moment_density_muB_per_A3=(0, 0, 1)),
        "a Contact takes either moment_density_muB_per_A3 or a coupling with shell or within, not both.",
    ),
    "density and shell": (
        lambda: ld.Contact(shell=1, moment_density_muB_per_A3=(0, 0, 1)),
        "a Contact takes either moment_density_muB_per_A3 or a coupling with shell or within, not both.",
    ),
    "shell zero": (lambda: ld.Contact(0.1, shell=0), "shell must be a whole number of at least 1, got 0."),
    "shell half": (lambda: ld.Contact(0.1, shell=1.5), "shell must be a whole number of at least 1, got 1.5."),
    "shell true": (lambda: ld.Contact(0.1, shell=True), "shell must be a whole number of at least 1, got True."),
    "radius": (lambda: ld.Contact(0.1, within=-2), "within must lie between 0.001 and 100.0, got -2.0."),
    "coupling word": (
        lambda: ld.Contact("0.1", shell=1),
        "coupling_T_per_muB must be a finite number, got '0.1'.",
    ),
    "coupling vector": (
        lambda: ld.Contact([0.1, 0.1, 0.1], shell=1),
        "coupling_T_per_muB must have shape (3, 3), got (3,).",
    ),
    "coupling nan": (
        lambda: ld.Contact(float("nan"), shell=1),
        "coupling_T_per_muB must be a finite number, got nan.",
    ),
    "density": (
        lambda: ld.Contact(moment_density_muB_per_A3=0.1),
        "moment_density_muB_per_A3 must have shape (3), got ().",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refusals(name):
    make, message = REFUSED[name]
    with pytest.raises(InputError) as caught:
        make()
    assert str(caught.value) == message
    assert str(pickle.loads(pickle.dumps(caught.value))) == message
