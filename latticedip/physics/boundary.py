"""Which macroscopic boundary an answer assumes, in numbers and in words."""

from __future__ import annotations

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.sample import Sample
from latticedip.units import MU0_T_A3_PER_MUB

#: Net moments smaller than this (µB per cell) count as zero in words; the numbers keep them.
NET_MOMENT_MUB = 1e-6


def check_sample(sample: object) -> None:
    """Raise InputError unless this is a Sample or None."""
    if sample is not None and not isinstance(sample, Sample):
        raise InputError(f"sample must be a Sample (such as Sample.sphere()) or None, got {type(sample).__name__}.")


def magnetization_T(ordering: Ordering) -> FloatArray:
    """Shape (3,) float in T. µ0 M, the mean moment per volume."""
    return np.asarray(MU0_T_A3_PER_MUB * ordering.net_moment / ordering.crystal.volume_A3)


def has_net_moment(ordering: Ordering) -> bool:
    """True where the moments of a cell do not add up to zero (within 1e-6 µB)."""
    return bool(np.linalg.norm(ordering.net_moment) > NET_MOMENT_MUB)


def boundary_words(ordering: Ordering, sample: Sample | None) -> str:
    """One sentence that names the boundary; every report repeats it."""
    stated = sample is not None and sample.shape != Sample().shape
    if not has_net_moment(ordering):
        return "no net moment: the shape of the sample does not matter (N = 0 sum)"
    if not stated or sample is None:
        return "net moment without a stated shape: N = 0 assumed (a domain that closes its flux)"
    words = f"sample shape: {sample.shape}"
    return words if sample.uniform else words + "; N is the volume average, the demagnetizing field is not uniform"
