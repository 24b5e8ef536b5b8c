"""Spectra: how often each local field, and so each frequency, occurs at a probe, in a crystal or in a powder.

Counted are all positions equivalent to the probe, in all cells, and the domains asked for. In a powder without applied
field every grain shows the same sizes; in an applied field the grains point everywhere alike, and the moments keep
their arrangement in each.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from math import gcd
from typing import Any

import numpy as np
from scipy.stats import qmc

from latticedip.checks import FloatArray, as_float, as_floats, frozen
from latticedip.errors import InputError
from latticedip.observables.distribution import FieldDistribution, Line, Part, Sampled, Shell, Wave, mixture
from latticedip.observables.orbits import SAME_FIELD, OrbitField, orbit_field
from latticedip.ordering.domains import Domain, domains
from latticedip.ordering.model import Ordering
from latticedip.probe import Probe
from latticedip.sample import Sample

#: Phases drawn where several waves run independently (a power of two).
SAMPLES = 2**16
#: Most sizes kept of one orbit: with many positions each takes fewer phases.
MOST_SIZES = 2**22
#: Phases of a wave whose powder is taken in an applied field.
POWDER_PHASES = 2048


@dataclass(frozen=True, eq=False)
class Spectrum:
    """What a probe sees under one ordering; fields in T, frequencies in MHz.

    ordering, probe: what was asked. powder: True for a powder. applied_T: Shape (3,), the applied field.
    domains: those that were averaged, equally large; one where the ordering is taken as given.
    orbits: the fields at all equivalent positions, one for each domain.
    distribution: of |B|. boundary: assumed, in words. samples: quasi-random phases for each position, where several run
        freely. notes: sentences a report must repeat.
    """

    ordering: Ordering
    probe: Probe
    powder: bool
    applied_T: FloatArray
    domains: tuple[Domain, ...]
    orbits: tuple[OrbitField, ...]
    distribution: FieldDistribution
    boundary: str
    samples: int = SAMPLES
    notes: tuple[str, ...] = ()

    @property
    def MHz_per_T(self) -> float:
        """|γ|/2π of the particle in MHz/T."""
        return self.probe.MHz_per_T

    @property
    def multiplicity(self) -> int:
        """Positions equivalent to the probe in the cell that it is given in."""
        return self.orbits[0].multiplicity

    @cached_property
    def in_words(self) -> str:
        """What the fields do from cell to cell."""
        phases = self.orbits[0].phases
        if not len(self.orbits[0].k):
            return "the same in every cell"
        if not phases.complete:
            return f"{len(phases.listed)} cells drawn at random"
        if phases.n_free == 0:
            return f"repeats after {len(phases.listed)} cells"
        if phases.n_free == 1:
            return "incommensurate: every phase of one wave, in closed form"
        return f"incommensurate: {phases.n_free} independent phases, {self.samples} quasi-random ones for each position"

    def binned(self, bins: int = 200, span: Any = None) -> tuple[FloatArray, FloatArray]:
        """Return (edges of bins (bins + 1,) in T, share in each (bins,)); the shares add up to one.

        bins: at least 1. span: (first, last) in T; None: the whole spectrum with a margin.
        """
        return self.distribution.binned(bins, span)

    def to_dict(self) -> dict[str, Any]:
        """Plain dict; keys carry their units."""
        found = self.distribution
        factor = self.MHz_per_T
        waves = [
            {
                "edges_T": list(part.edges),
                "edges_MHz": [edge * factor for edge in part.edges],
                "share": float(weight),
            }
            for part, weight in zip(found.parts, found.weights, strict=True)
            if not isinstance(part, Line)
        ]
        return {
            "probe": self.probe.name,
            "particle": self.probe.particle,
            "MHz_per_T": factor,
            "equivalent_positions": self.multiplicity,
            "cells": self.in_words,
            "domains": len(self.domains),
            **distribution_entries(found, waves, factor),
            "width_T": found.width_T,
            "nuclear_width_T": found.nuclear_width_T,
            "error_bound_T": float(np.sqrt(3) * max(fields.error_bound_T for fields in self.orbits)),
            "boundary": self.boundary,
            "notes": list(self.notes),
        }


def distribution_entries(
    found: FieldDistribution, bands: Sequence[Mapping[str, Any]], MHz_per_T: float
) -> dict[str, Any]:
    """Lines, bands (sorted by their edges) and moments of a distribution of |B|, as the dict of a Spectrum has them."""
    return {
        "lines": [{"field_T": at, "frequency_MHz": at * MHz_per_T, "share": share} for at, share in found.lines],
        "bands": sorted(bands, key=lambda band: band["edges_T"]),
        "mean_T": found.mean_T,
        "rms_T": found.rms_T,
        "mean_MHz": found.mean_T * MHz_per_T,
        "rms_MHz": found.rms_T * MHz_per_T,
    }


def spectrum(
    ordering: Ordering,
    probe: Probe,
    *,
    moment_spread: Any = None,
    sample: Sample | None = None,
    applied_T: Any = None,
    powder: bool = False,
    average_domains: bool = False,
    equivalent: bool = True,
    width_T: float = 0.0,
    nuclear_width_T: float = 0.0,
    samples: int = SAMPLES,
    seed: int = 0,
    tol: float = 1e-10,
) -> Spectrum:
    """Distribution of |B| and of frequency at a probe, over all equivalent positions and all cells.

    ordering, probe, moment_spread, equivalent, tol: as `orbit_field`. sample: None means N = 0 and no applied field.
    applied_T: Shape (3,) in T, Cartesian, in place of the sample's applied field.
    powder: grains in all directions alike; only the size of the applied field counts then, and the demagnetizing
    tensor is that of every grain. average_domains: average over all domains of the ordering, equally large.
    width_T: standard deviation in T of a Gaussian that smears every size. nuclear_width_T: or that of each component
    of a random field that is added. samples, seed: quasi-random phases (a power of two) where several run freely.

    Raises InputError for widths below zero or both at once, and what `orbit_field` and `domains` raise.
    """
    width = as_float("width_T", width_T, low=0.0)
    nuclear = as_float("nuclear_width_T", nuclear_width_T, low=0.0)
    if isinstance(samples, bool) or not isinstance(samples, int) or samples < 2 or samples & (samples - 1):
        raise InputError(f"samples must be a power of two of at least 2, got {samples!r}.")
    found = domains(ordering) if average_domains else (Domain(ordering, 1, "as given", "x,y,z"),)
    orbits = tuple(
        orbit_field(domain.ordering, probe, moment_spread=moment_spread, sample=sample, equivalent=equivalent, tol=tol)
        for domain in found
    )
    if applied_T is not None:
        applied = as_floats("applied_T", applied_T, (3,))
        orbits = tuple(
            dataclasses.replace(
                fields, steady=frozen(fields.steady - fields.applied + applied), applied=frozen(applied)
            )
            for fields in orbits
        )
    parts: list[tuple[Part, float]] = []
    for fields in orbits:
        parts += field_parts(fields, powder=powder, samples=samples, seed=seed)
    same = max(same_size_T(fields) for fields in orbits)
    distribution = mixture(parts, same_T=same, width_T=width, nuclear_width_T=nuclear)
    notes = list(dict.fromkeys(note for fields in orbits for note in fields.notes))
    if powder and np.any(orbits[0].applied):
        notes.append("powder in an applied field: the moments keep their arrangement in every grain")
    return Spectrum(
        ordering=ordering,
        probe=probe,
        powder=powder,
        applied_T=orbits[0].applied,
        domains=found,
        orbits=orbits,
        distribution=distribution,
        boundary=orbits[0].boundary,
        samples=kept_samples(orbits[0], samples),
        notes=tuple(notes),
    )


def same_size_T(fields: OrbitField) -> float:
    """Sizes of fields on an orbit that differ by no more than this are one, T: by their error bounds, or six digits."""
    largest = np.linalg.norm(fields.steady, axis=1) + np.abs(fields.waves).sum(axis=(0, 2))
    return float(max(2 * np.sqrt(3) * fields.error_bound_T, SAME_FIELD * largest.max(initial=0.0)))


def field_parts(
    fields: OrbitField, *, powder: bool = False, samples: int = SAMPLES, seed: int = 0
) -> list[tuple[Part, float]]:
    """The components of the distribution of |B| on an orbit, each with its weight; arguments as `spectrum`."""
    in_field = powder and bool(np.any(fields.applied))
    applied = float(np.linalg.norm(fields.applied))
    internal = fields.steady - fields.applied if powder else fields.steady
    n = len(internal) * len(fields.phases.listed)
    same = same_size_T(fields)
    if fields.phases.n_free == 0:
        vectors = internal[:, None] + moving_fields(fields, fields.phases.listed)
        sizes = np.linalg.norm(vectors, axis=2).ravel()
        if not fields.phases.complete:
            return [(_shell_of(sizes, applied, same) if in_field else Sampled(sizes), 1.0)]
        return [(_shell_of(s, applied, same) if in_field else Line(float(s[0])), 1 / n) for s in sizes[:, None]]
    if fields.phases.n_free == 1:
        found: list[tuple[Part, float]] = []
        for wave in free_waves(fields, internal):
            low, high = wave.edges[0], wave.edges[-1]
            if high - low <= same:
                # A circle: its radius is the root of the mean square.
                radius = float(np.sqrt(wave.square[0].real))
                found.append((_shell_of(np.array([radius]), applied, same) if in_field else Line(radius), 1 / n))
            else:
                found.append((Shell(wave.nodes(POWDER_PHASES), applied, (low, high)) if in_field else wave, 1 / n))
        return found
    turns = free_turns(fields, kept_samples(fields, samples), seed)
    phases = np.exp(-2j * np.pi * turns)
    sizes = np.concatenate(
        [np.linalg.norm(steady + (phases @ fields.waves[:, row]).real, axis=1) for row, steady in enumerate(internal)]
    )
    return [(_shell_of(sizes, applied, same) if in_field else Sampled(sizes), 1.0)]


def _shell_of(sizes: FloatArray, applied: float, same_T: float) -> Shell | Line:
    """A powder of internal fields in an applied one; a smaller number of quantiles stands for many.

    same_T: sizes of the whole field that differ by no more are one, so that smaller internal fields are none.
    """
    ordered = np.sort(sizes)
    reach = float(ordered[0]), float(ordered[-1])
    if 2 * reach[1] <= same_T:
        return Line(applied)
    if len(ordered) > POWDER_PHASES:
        ordered = ordered[((np.arange(POWDER_PHASES) + 0.5) / POWDER_PHASES * len(ordered)).astype(int)]
    return Shell(ordered, applied, reach)


def moving_fields(fields: OrbitField, turns: FloatArray) -> FloatArray:
    """Shape (n, m, 3) float in T. The waves at every position at phases (m, n_k), in turns."""
    return np.asarray(np.einsum("mk,kna->nma", np.exp(-2j * np.pi * turns), fields.waves).real)


def kept_samples(fields: OrbitField, samples: int) -> int:
    """How many of so many quasi-random phases (a power of two) each position of an orbit takes."""
    most = MOST_SIZES // max(1, len(fields.steady) * len(fields.phases.listed))
    return min(samples, 2 ** max(1, int(most).bit_length() - 1))


def free_turns(fields: OrbitField, samples: int, seed: int) -> FloatArray:
    """Shape (m, n_k) float. Quasi-random phases (Sobol 1967, scrambled) that stand for all that occur."""
    phases = fields.phases
    points = qmc.Sobol(phases.n_free, scramble=True, rng=np.random.default_rng(seed)).random(samples)
    return np.asarray((phases.listed[:, None] + (points @ phases.free)[None]).reshape(-1, phases.listed.shape[1]))


def free_waves(fields: OrbitField, steady: FloatArray) -> list[Wave]:
    """For every position and listed phase the field as one phase runs. steady: Shape (n, 3), what does not move."""
    phases = fields.phases
    orders = phases.free[0]
    common = gcd(*(int(m) for m in orders))
    orders = orders // common
    out = []
    for row in range(len(steady)):
        for start in phases.listed:
            coefficients = np.zeros((int(np.abs(orders).max()) + 1, 3), dtype=complex)
            coefficients[0] = steady[row]
            for order, turn, wave in zip(orders, start, fields.waves[:, row], strict=True):
                amplitude = wave * np.exp(-2j * np.pi * turn)
                if order == 0:
                    coefficients[0] += amplitude.real
                else:
                    coefficients[abs(order)] += amplitude if order > 0 else amplitude.conj()
            out.append(Wave(coefficients))
    return out
