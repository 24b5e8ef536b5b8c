"""Probes at several positions in a spectrum document: static mixtures of the spectra at their positions."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.observables.mixed import MIXED_NOTE, MixedSpectrum
from latticedip.observables.spectrum import Spectrum
from latticedip.ordering.domains import Domain

if TYPE_CHECKING:
    from latticedip.study.schema import Study

Results = Sequence[tuple[Domain | None, Spectrum]]


def mixed_entries(
    study: Study, results: Results, entries: Sequence[Mapping[str, Any]], bins: int
) -> list[dict[str, Any]]:
    """Entries of a spectrum document for the probes at several positions, from those of the positions.

    results: of one ordering, with the domain where domains are listed. entries: of the same, in the same order.
    The width of nuclear moments is the root of the weighted mean square of those at the positions; P(t) and the
    histogram are weighted means, each position with its own width.
    """
    found: list[dict[str, Any]] = []
    for whole in study.weighted:
        numbers = dict.fromkeys(None if domain is None else domain.number for domain, _ in results)
        for number in numbers:
            rows = [
                next(i for i, (domain, one) in enumerate(results) if _is(domain, number) and one.probe.name == member)
                for member in whole.members
            ]
            mixed = MixedSpectrum(whole.name, tuple(results[i][1] for i in rows), whole.weights)
            found.append(_entry(mixed, [entries[i] for i in rows], bins))
    return found


def _is(domain: Domain | None, number: int | None) -> bool:
    return (None if domain is None else domain.number) == number


def _entry(mixed: MixedSpectrum, entries: Sequence[Mapping[str, Any]], bins: int) -> dict[str, Any]:
    plain = mixed.to_dict()
    del plain["boundary"], plain["notes"]
    signals = [entry["polarization"] for entry in entries]
    signal = None
    if signals[0] is not None:
        signal = {
            **signals[0],
            "polarization": (mixed.weights @ np.array([one["polarization"] for one in signals])).tolist(),
        }
    nuclear = np.array([entry["nuclear_width_per_us"] for entry in entries])
    return {
        **entries[0],
        **plain,
        "weights": mixed.weights.tolist(),
        "nuclear_width_per_us": float(np.sqrt(mixed.weights @ nuclear**2)),
        "histogram": histogram(*mixed.binned(bins), float(plain["MHz_per_T"])),
        "polarization": signal,
    }


def histogram(limits: FloatArray, share: FloatArray, MHz_per_T: float) -> dict[str, Any]:
    """A histogram of a spectrum document, in field and frequency; limits (bins + 1,) in T and share (bins,)."""
    width = float(limits[1] - limits[0])
    return {
        "field_limits_T": limits.tolist(),
        "frequency_limits_MHz": (limits * MHz_per_T).tolist(),
        "share": share.tolist(),
        "density_per_T": (share / width).tolist(),
        "density_per_MHz": (share / (width * MHz_per_T)).tolist(),
    }


def mixture_notes(study: Study) -> list[str]:
    """What is said of the spectra of probes at several positions."""
    return [f"{whole.name}: {MIXED_NOTE}" for whole in study.weighted]
