"""Static mixtures: the spectrum of a probe that sits at one of several positions and stays there."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from latticedip.checks import FloatArray, frozen
from latticedip.observables.distribution import FieldDistribution, mixture
from latticedip.observables.spectrum import Spectrum, distribution_entries, same_size_T

#: What is told of every mixture, behind the name of the probe.
MIXED_NOTE = (
    "a static mixture: it sits at one of its positions, each with all equivalent to it, as often as the weights say"
)


@dataclass(frozen=True, eq=False)
class MixedSpectrum:
    """Spectra of one probe at several positions under one ordering, added with weights.

    name: of the probe. spectra: one for each position. weights: Shape (n,) float, adding up to 1.
    """

    name: str
    spectra: tuple[Spectrum, ...]
    weights: FloatArray

    @cached_property
    def _counting(self) -> list[tuple[Spectrum, float]]:
        """Spectra with a weight above zero; the others show nothing."""
        return [(one, float(w)) for one, w in zip(self.spectra, self.weights, strict=True) if w > 0]

    @cached_property
    def distribution(self) -> FieldDistribution:
        """The distribution of |B| without any smearing; lines of several positions that are one are added."""
        parts = []
        for one, weight in self._counting:
            own = one.distribution
            parts += [(part, weight * float(share)) for part, share in zip(own.parts, own.weights, strict=True)]
        same = max(same_size_T(fields) for one, _ in self._counting for fields in one.orbits)
        return mixture(parts, same_T=same)

    def binned(self, bins: int = 200, span: Any = None) -> tuple[FloatArray, FloatArray]:
        """Return (edges of bins (bins + 1,) in T, share in each (bins,)), every position smeared as its own spectrum.

        Arguments and errors as `FieldDistribution.binned`.
        """
        if span is None:
            low = min(one.distribution.support[0] for one, _ in self._counting)
            high = max(one.distribution.support[1] for one, _ in self._counting)
            margin = 0.05 * (high - low) or 0.05 * high or 1e-6
            span = (max(0.0, low - margin), high + margin)
        found = [(one.binned(bins, span), weight) for one, weight in self._counting]
        return found[0][0][0], frozen(np.sum([weight * share for (_, share), weight in found], axis=0))

    def to_dict(self) -> dict[str, Any]:
        """Plain dict as that of a Spectrum; keys carry their units."""
        first, found = self.spectra[0], self.distribution
        listed = [one.to_dict() for one, _ in self._counting]
        shares = [weight for _, weight in self._counting]
        bands = [
            {**band, "share": band["share"] * weight}
            for one, weight in zip(listed, shares, strict=True)
            for band in one["bands"]
        ]
        nuclear = np.array([one["nuclear_width_T"] for one in listed])
        return {
            **first.to_dict(),
            "probe": self.name,
            "equivalent_positions": sum(one.multiplicity for one, _ in self._counting),
            **distribution_entries(found, bands, first.MHz_per_T),
            "nuclear_width_T": float(np.sqrt(np.array(shares) @ nuclear**2)),
            "error_bound_T": max(one["error_bound_T"] for one in listed),
            "notes": [f"{self.name}: {MIXED_NOTE}", *dict.fromkeys(note for one in listed for note in one["notes"])],
        }
