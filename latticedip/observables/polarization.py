"""Polarization of a spin that starts along one direction and turns about a static local field.

The spin S of a particle with gyromagnetic ratio γ obeys dS/dt = γ S × B. With b = B/|B| and ω = γ|B| a signal along d
that starts along p is

    P(t) = (d·b)(p·b) + [d·p − (d·b)(p·b)] cos ωt − d·(b × p) sin ωt

averaged over all fields that occur. In a powder without applied field every direction of b is alike, and the signal
along p is 1/3 + 2/3 cos ωt.

In a powder in a field A along h, fixed in the laboratory, the whole internal field I (all but the applied one) turns
with the grain and points everywhere alike. The cosine u between the two is uniform, B² = A² + I² + 2AIu, and round h
every azimuth is alike. With c = h·b = (A + Iu)/B and s² = 1 − c² the averages over the azimuth are

    (d·b)(p·b) → c² (d·h)(p·h) + (s²/2) [d·p − (d·h)(p·h)],    d·(b × p) → c d·(h × p)

so that P = ⟨c² + s² cos ωt⟩ along the field and ⟨s²/2 + (1 − s²/2) cos ωt⟩ across it. What stays of the first is
3/4 − 1/(4β²) + (β² − 1)²/(8β³) ln|(β + 1)/(β − 1)|, β = A/I (Pratt, J. Phys.: Condens. Matter 19, 456207 (2007)).
The average over u is one over B, du/2 = B dB/(2AI), by Gauss and Legendre in panels short enough for the longest time.
Where very many internal fields occur their densities over B, polynomials in B and I over BI, are added up first, from
one edge |A − I| or A + I to the next. Both are right to 1e-9.

Nuclear moments add a static random field, taken as Gaussian with the same width Δ/γ in
every component: Kubo and Toyabe (1967) without a field, Hayano et al., Phys. Rev. B 20, 850 (1979) along a field B,
Kornilov and Pomjakushin, Phys. Lett. A 153, 364 (1991) in a powder.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.special import spherical_jn, wofz

from latticedip.checks import FloatArray, as_float, as_floats, as_unit_vector, frozen
from latticedip.errors import InputError, LimitError
from latticedip.observables.distribution import Part
from latticedip.observables.orbits import OrbitField
from latticedip.observables.spectrum import Spectrum, field_parts, free_turns, kept_samples
from latticedip.particles import particle_named

#: Below this ratio of frequency and width the closed form along a field loses digits and is integrated instead.
SLOW = 0.1
#: Points of that integral, and the time in units of 1/Δ beyond which nothing is added.
GAUSS_POINTS, LONGEST = 48, 9.0
#: Phases that stand for a wave: at least, at most, and beyond twice the largest angle ωt that is turned.
LEAST_PHASES, MOST_PHASES = 128, 2**16
#: Phases drawn where several waves run independently.
SAMPLES = 2**14
#: Angle by which neighbours on a grid of frequencies differ at the longest time, and points of an interpolation on it.
GRID_ANGLE, GRID_POINTS = 0.25, 10
#: Lines kept before they are put on the grid.
MOST_WAITING = 2**20
#: Fields times moments in time evaluated together.
BLOCK = 2_000_000
#: Nodes of a panel of sizes of the field in a powder, and the largest angle ωt by which its ends differ.
PANEL_NODES, PANEL_ANGLE = 16, 16.0
#: Part of the largest size of the field below which the panels of a powder are no longer halved: that share is 1e-16.
SMALLEST_PANEL = 1e-8
#: Fields of a powder beyond which the densities of many internal fields are added up first, and most that are taken.
MANY_FIELDS, MOST_FIELDS = 2**20, 2**25
#: Largest angle ωt of a powder in an applied field: what its panels can turn by with as many fields.
MOST_ANGLE = PANEL_ANGLE * MOST_FIELDS / (2 * PANEL_NODES)
#: Internal over applied field between which densities may be added up, and nodes and largest angle of a panel then.
LEAST_RATIO, MOST_RATIO, SUM_NODES, SUM_ANGLE = 1e-4, 300.0, 8, 2.0
#: What a report says of a powder in an applied field.
TURNING = (
    "polarization of a powder in an applied field: the whole internal field, with its Lorentz and demagnetizing parts, "
    "turns with the grain; moments that an applied field has turned in the crystal turn along"
)


@dataclass(frozen=True, eq=False)
class Polarization:
    """A polarization against time. time_us: Shape (n,) in µs. values: Shape (n,), 1 for a spin along the detector.

    powder: True for a powder. initial, detector: Shape (3,) unit vectors, Cartesian; None in a powder without applied
    field.
    nuclear_width_per_us: Δ in 1/µs, 0 without nuclear moments. notes: sentences a report must repeat.
    """

    time_us: FloatArray
    values: FloatArray
    powder: bool
    initial: FloatArray | None
    detector: FloatArray | None
    nuclear_width_per_us: float
    notes: tuple[str, ...] = ()


def polarization(
    spectrum: Spectrum, time_us: Any, *, initial: Any = None, detector: Any = None, nuclear_width_per_us: float = 0.0
) -> Polarization:
    """Polarization against time in the fields of a spectrum.

    spectrum: its positions, cells and domains are averaged over; its own smearing is not used. time_us: Shape (n,) in
    µs, not below zero. initial: Shape (3,) Cartesian, the direction the spin starts along: for a crystal, and for a
    powder in an applied field, where only the directions relative to that field count; None there: along the field.
    detector: the direction it is observed along; None: the initial one. nuclear_width_per_us: Δ in 1/µs of a static
    Gaussian random field, which is added to the field of every grain.

    Raises InputError for a crystal without an initial direction, directions for a powder without an applied field, or
    negative times and widths; LimitError where a powder in an applied field turns too often.
    """
    time = as_floats("time_us", time_us, (None,))
    if np.any(time < 0):
        raise InputError(f"time_us must not be below zero, got {float(time.min())!r}.")
    delta = as_float("nuclear_width_per_us", nuclear_width_per_us, low=0.0)
    notes = spectrum.notes
    if spectrum.powder and not np.any(spectrum.applied_T):
        if initial is not None or detector is not None:
            raise InputError("initial and detector are directions in a crystal; a powder has none. Leave them out.")
        values = _powder(spectrum, time, delta)
        return Polarization(frozen(time), frozen(values), True, None, None, delta, notes)
    if spectrum.powder:
        start = as_unit_vector("initial", spectrum.applied_T if initial is None else initial)
        notes = (*notes, TURNING)
    elif initial is None:
        raise InputError("the polarization in a crystal needs the initial direction of the spin (Cartesian).")
    else:
        start = as_unit_vector("initial", initial)
    seen = start if detector is None else as_unit_vector("detector", detector)
    values = (_powder_in_field if spectrum.powder else _crystal)(spectrum, time, start, seen, delta)
    return Polarization(frozen(time), frozen(values), spectrum.powder, frozen(start), frozen(seen), delta, notes)


def direction_at(field: Any, angle_deg: float) -> FloatArray:
    """Shape (3,) float. A unit vector at an angle in degrees, 0 to 180, from a field (3,), Cartesian.

    Raises InputError for a zero field and an angle out of range.
    """
    along = as_unit_vector("field", field)
    angle = np.radians(as_float("angle_deg", angle_deg, low=0.0, high=180.0))
    across = np.cross(along, np.eye(3)[int(np.argmin(np.abs(along)))])
    return np.asarray(np.cos(angle) * along + np.sin(angle) * across / np.linalg.norm(across))


def kubo_toyabe(time_us: Any, width_per_us: float) -> FloatArray:
    """Shape (n,) float. Static Gaussian Kubo–Toyabe function, 1/3 + 2/3 (1 − Δ²t²) exp(−Δ²t²/2).

    time_us: Shape (n,) in µs. width_per_us: Δ in 1/µs.
    """
    time = as_floats("time_us", time_us, (None,))
    return _powder_signal(time, np.zeros(1), as_float("width_per_us", width_per_us, low=0.0))[:, 0]


def kubo_toyabe_along(time_us: Any, width_per_us: float, frequency_per_us: float) -> FloatArray:
    """Shape (n,) float. The same along a field: Kubo–Toyabe function in a longitudinal field (Hayano et al. 1979).

    time_us: Shape (n,) in µs. width_per_us: Δ in 1/µs. frequency_per_us: γB of the field in 1/µs (angular).
    """
    time = as_floats("time_us", time_us, (None,))
    omega = np.array([abs(as_float("frequency_per_us", frequency_per_us))])
    return _along(time, omega, as_float("width_per_us", width_per_us, low=0.0))[:, 0]


# --- averages over the random field -----------------------------------------------------------------------


def _cosine(time: FloatArray, omega: FloatArray, delta: float) -> FloatArray:
    """Shape (n_t, n). ⟨cos |ω + δ| t⟩ over the random field δ: exp(−Δ²t²/2) (cos ωt − Δ²t sin(ωt)/ω)."""
    angle = time[:, None] * omega
    if not delta:
        return np.asarray(np.cos(angle))
    reach = (delta * time[:, None]) ** 2
    return np.asarray(np.exp(-0.5 * reach) * (np.cos(angle) - reach * np.sinc(angle / np.pi)))


def _sine(time: FloatArray, omega: FloatArray, delta: float) -> FloatArray:
    """Shape (n_t, n). ⟨(b·ω/|ω|) sin |ω + δ| t⟩ = −(1/t) ∂⟨cos⟩/∂ω."""
    angle = time[:, None] * omega
    if not delta:
        return np.asarray(np.sin(angle))
    reach = (delta * time[:, None]) ** 2
    # (sin x − x cos x)/x² is the spherical Bessel function j₁.
    return np.asarray(np.exp(-0.5 * reach) * (np.sin(angle) - reach * spherical_jn(1, angle)))


def _along(time: FloatArray, omega: FloatArray, delta: float) -> FloatArray:
    """Shape (n_t, n). Polarization along the steady field, ⟨cos²θ + sin²θ cos |ω + δ| t⟩."""
    if not delta:
        return np.ones((len(time), len(omega)))
    out = np.empty((len(time), len(omega)))
    slow = omega < SLOW * delta
    if np.any(~slow):
        w = omega[~slow]
        turn = np.exp(-0.5 * (delta * time[:, None]) ** 2 + 1j * time[:, None] * w)
        # ∫₀ᵗ exp(−Δ²τ²/2) sin ωτ dτ by the Faddeeva function, which neither overflows nor cancels.
        scale = delta * np.sqrt(2.0)
        later = turn * wofz((w + 1j * delta**2 * time[:, None]) / scale)
        integral = np.sqrt(np.pi / 2) / delta * (wofz(w / scale) - later).imag
        out[:, ~slow] = 1 - 2 * (delta / w) ** 2 * (1 - turn.real) + 2 * delta**4 / w**3 * integral
    if np.any(slow):
        # The same written as 1 − 2Δ² ∫ τ exp(−Δ²τ²/2) [j₀(ωτ) − Δ²τ² j₁(ωτ)/(ωτ)] dτ, in which nothing cancels.
        x, weight = np.polynomial.legendre.leggauss(GAUSS_POINTS)
        end = np.minimum(time, LONGEST / delta)
        tau = 0.5 * end[:, None] * (x + 1)
        reach = (delta * tau) ** 2
        angle = tau[:, :, None] * omega[slow]
        divisor = np.where(angle > 1e-4, angle, 1.0)
        small = np.where(angle > 1e-4, spherical_jn(1, angle) / divisor, 1 / 3 - angle**2 / 30)
        kernel = np.sinc(angle / np.pi) - reach[:, :, None] * small
        factor = tau * np.exp(-0.5 * reach) * (0.5 * end[:, None] * weight)
        out[:, slow] = 1 - 2 * delta**2 * np.einsum("tg,tgn->tn", factor, kernel)
    return out


def _powder_signal(time: FloatArray, omega: FloatArray, delta: float) -> FloatArray:
    return np.asarray(1 / 3 + 2 / 3 * _cosine(time, omega, delta))


# --- averages over positions, cells and domains --------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Lines:
    """Frequencies with weights: of signals even in the frequency (n_even, n), and of the odd one (n,)."""

    omega: FloatArray
    even: FloatArray
    odd: FloatArray

    @classmethod
    def joined(cls, parts: list[_Lines]) -> _Lines:
        return cls(
            np.concatenate([part.omega for part in parts]),
            np.concatenate([part.even for part in parts], axis=1),
            np.concatenate([part.odd for part in parts]),
        )


def _powder(spectrum: Spectrum, time: FloatArray, delta: float) -> FloatArray:
    gamma = 2 * np.pi * spectrum.MHz_per_T
    found = spectrum.distribution
    lines = _gathered(_sizes(zip(found.parts, found.weights, strict=True), gamma, time), time)
    total = np.zeros(len(time))
    for block in _blocks(len(lines.omega), len(time)):
        total += _powder_signal(time, lines.omega[block], delta) @ lines.even[0, block]
    return total


def _sizes(parts: Iterable[tuple[Part, float]], gamma: float, time: FloatArray) -> Iterator[_Lines]:
    """The sizes of fields that stand for parts of a distribution, as frequencies with one even weight."""
    for part, weight in parts:
        nodes = part.nodes(_phases_needed(gamma * part.edges[-1] * float(time.max(initial=0.0))))
        yield _Lines(gamma * nodes, np.full((1, len(nodes)), weight / len(nodes)), np.zeros(len(nodes)))


def _powder_in_field(
    spectrum: Spectrum, time: FloatArray, start: FloatArray, seen: FloatArray, delta: float
) -> FloatArray:
    gamma = 2 * np.pi * spectrum.MHz_per_T
    sign = particle_named(spectrum.probe.particle).gamma_sign
    longest = float(time.max(initial=0.0))
    applied = gamma * float(np.linalg.norm(spectrum.applied_T))
    along = as_unit_vector("applied_T", spectrum.applied_T)
    inside: list[tuple[Part, float]] = []
    for orbit in spectrum.orbits:
        alone = dataclasses.replace(orbit, steady=frozen(orbit.steady - orbit.applied), applied=frozen(np.zeros(3)))
        found = field_parts(alone, powder=True, samples=spectrum.samples)
        inside += [(part, weight / len(spectrum.orbits)) for part, weight in found]
    # Averaged over the grains a signal is even in the internal field, and turns no faster with it than with time: a
    # grid of internal fields stands for many as a grid of frequencies does.
    internal = _gathered(_sizes(inside, gamma, time), time)
    groups = _groups(internal, applied, longest)
    turned = (applied + float(internal.omega.max(initial=0.0))) * longest
    if turned > MOST_ANGLE:
        raise LimitError(
            f"the polarization of this powder up to {longest:g} µs turns by {turned:.2g} rad, more than "
            f"{MOST_ANGLE:.2g}. Ask for a shorter time or a smaller field."
        )
    both, dot = (start @ along) * (seen @ along), start @ seen
    turning = -sign * along @ np.cross(start, seen)

    def parts() -> Iterator[_Lines]:
        for group in groups:
            size, weight = internal.omega[group], internal.even[0, group]
            one = len(size) == 1
            omega, share, across, along_it = (
                _grains(applied, float(size[0]), float(weight[0]), longest)
                if one
                else _summed_grains(applied, size, weight, longest)
            )
            even = (share - across) * both + 0.5 * across * (dot - both)
            yield _Lines(omega, np.array([even, dot * share - even]), turning * along_it)

    return _signal(_gathered(parts(), time), time, delta)


def _groups(internal: _Lines, applied: float, longest: float) -> list[np.ndarray]:
    """Indices of internal fields that are taken together: each alone, or where that is too much, by octaves."""
    size = internal.omega
    alone = PANEL_NODES * (1 + 2 * longest * np.minimum(applied, size) / PANEL_ANGLE)
    groups = [np.array([i]) for i in range(len(size))]
    fields = float(alone.sum())
    if fields > MANY_FIELDS:
        ratio = size / applied
        summed = (ratio >= LEAST_RATIO) & (ratio <= MOST_RATIO)
        octaves = np.floor(np.log2(ratio, out=np.zeros(len(size)), where=summed)).astype(int)
        together = [np.flatnonzero(summed & (octaves == n)) for n in np.unique(octaves[summed])]
        groups = [*(np.array([i]) for i in np.flatnonzero(~summed)), *together]
        fields = float(alone[~summed].sum()) + sum(
            SUM_NODES * (2 * len(some) + 2 * longest * (applied + float(size[some].max())) / SUM_ANGLE)
            for some in together
        )
    if fields > MOST_FIELDS:
        raise LimitError(
            f"the polarization of this powder up to {longest:g} µs needs {fields:.2g} fields, more than "
            f"{MOST_FIELDS:.2g}. Ask for a shorter time."
        )
    return groups


def _panels(edges: FloatArray, speed: float, angle: float, nodes: int) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Shape (n, nodes) nodes and steps, and shape (n,) middles of panels between edges, none turning beyond an angle.

    speed: by how much one turns per unit.
    """
    counts = np.maximum(1, np.ceil(speed * np.diff(edges) / angle)).astype(int)
    width = np.repeat(np.diff(edges) / counts, counts)[:, None]
    number = np.arange(len(width)) - np.repeat(np.cumsum(counts) - counts, counts)
    first = np.repeat(edges[:-1], counts)[:, None] + number[:, None] * width
    at, weight = np.polynomial.legendre.leggauss(nodes)
    return first + width * (0.5 + 0.5 * at), 0.5 * width * weight, (first + 0.5 * width)[:, 0]


def _grains(applied: float, internal: float, weight: float, longest: float) -> tuple[FloatArray, ...]:
    """Shape (n,) each. Sizes B of the whole field that stand for all grains, their share, and it times s² and c.

    All fields as frequencies in 1/µs. With M the larger and m the smaller field and B = |A − I| + my nothing cancels:
    1 + u = y (2|A − I| + my)/(2M), 1 − u = (2 − y)(1 + my/(2M)) and du/2 = B dy/(2M). The integrand has a pole at
    B = 0: no panel is longer than its distance from there, but for the first, which may hold a share of 1e-16.
    """
    gap, small, large = abs(applied - internal), min(applied, internal), max(applied, internal)
    edges = [0.0]
    if gap > 0 and small > 0:
        y = max(gap, SMALLEST_PANEL * (gap + 2 * small)) / small
        while y < 2.0:
            edges.append(y)
            y += y + gap / small
    nodes, steps, _ = _panels(np.array([*edges, 2.0]), longest * small, PANEL_ANGLE, PANEL_NODES)
    at, step = nodes.ravel(), weight * steps.ravel() / (2 * large)
    total = gap + small * at
    half = at * (2 * gap + small * at) / (2 * large)
    sine2 = half * (2 - at) * (1 + small * at / (2 * large))
    return total, total * step, internal**2 * sine2 / total * step, (applied + internal * (half - 1)) * step


def _summed_grains(applied: float, internal: FloatArray, weight: FloatArray, longest: float) -> tuple[FloatArray, ...]:
    """The same for many internal fields (n,) of similar sizes, with their weights.

    In units of A the densities over B of the share and of it times c² and c are B/(2I), (B² + 1 − I²)²/(8BI) and
    (B² + 1 − I²)/(4I) wherever |1 − B| < I < 1 + B, so that sums of w/I, wI and wI³ over these give them all.
    """
    order = np.argsort(internal)
    ratio, share = internal[order] / applied, weight[order]
    # Sums over all fields from one on; behind the last there is none.
    sums = np.zeros((3, len(ratio) + 1))
    sums[:, :-1] = np.cumsum((share * np.array([1 / ratio, ratio, ratio**3]))[:, ::-1], axis=1)[:, ::-1]
    edges = np.unique(np.concatenate([np.abs(1 - ratio), 1 + ratio]))
    low, high = max(float(edges[0]), SMALLEST_PANEL * float(edges[-1])), float(edges[-1])
    edges = np.union1d(edges, low * 2.0 ** np.arange(int(np.log2(high / low)) + 1))
    nodes, steps, middle = _panels(edges, longest * applied, SUM_ANGLE, SUM_NODES)
    first, last = np.searchsorted(ratio, np.abs(1 - middle)), np.searchsorted(ratio, 1 + middle)
    inverse, plain, cube = (total[:, None] for total in sums[:, first] - sums[:, last])
    square = nodes**2 + 1
    whole = nodes * inverse / 2
    along = (square**2 * inverse - 2 * square * plain + cube) / (8 * nodes)
    cosine = (square * inverse - plain) / 4
    return applied * nodes.ravel(), *((density * steps).ravel() for density in (whole, whole - along, cosine))


def _crystal(spectrum: Spectrum, time: FloatArray, start: FloatArray, seen: FloatArray, delta: float) -> FloatArray:
    gamma = 2 * np.pi * spectrum.MHz_per_T
    sign = particle_named(spectrum.probe.particle).gamma_sign
    longest = gamma * float(time.max(initial=0.0))
    n_positions = sum(len(orbit.steady) for orbit in spectrum.orbits)

    def parts() -> Iterator[_Lines]:
        for vectors in (found for orbit in spectrum.orbits for found in _vectors(orbit, longest)):
            size = np.linalg.norm(vectors, axis=1)[:, None]
            # Without a field the direction does not matter: nothing turns, or the random field has no axis.
            unit = np.divide(vectors, size, out=np.tile([0.0, 0.0, 1.0], (len(size), 1)), where=size > 0)
            both = (unit @ seen) * (unit @ start)
            # d·(b × p) = b·(p × d)
            odd = -sign * unit @ np.cross(start, seen)
            # Every position counts alike, however many fields stand for it.
            share = 1 / (n_positions * len(vectors))
            yield _Lines(gamma * size[:, 0], share * np.array([both, seen @ start - both]), share * odd)

    return _signal(_gathered(parts(), time), time, delta)


def _signal(lines: _Lines, time: FloatArray, delta: float) -> FloatArray:
    """Shape (n_t,). The signal of fields with weights of what lies along and across them, and of the odd part."""
    total = np.zeros(len(time))
    for block in _blocks(len(lines.omega), len(time)):
        omega = lines.omega[block]
        along = _along(time, omega, delta)
        # The three signals along and across the field add up to 1 + 2⟨cos⟩, the trace of a rotation.
        across = 0.5 * (1 + 2 * _cosine(time, omega, delta) - along)
        total += along @ lines.even[0, block] + across @ lines.even[1, block]
        total += _sine(time, omega, delta) @ lines.odd[block]
    return total


def _gathered(parts: Iterator[_Lines], time: FloatArray) -> _Lines:
    """All lines together, put on the grid whenever there are many."""
    kept: list[_Lines] = []
    waiting = 0
    for part in parts:
        kept.append(part)
        waiting += len(part.omega)
        if waiting > MOST_WAITING:
            kept, waiting = [_fewer(_Lines.joined(kept), time)], 0
    return _fewer(_Lines.joined(kept), time)


def _fewer(lines: _Lines, time: FloatArray) -> _Lines:
    """The same lines, or fewer on a grid that stand for them at all these times.

    Every signal is a sum of exp(iωt), so that on a grid whose steps turn by a quarter of a radian at the longest time
    the interpolation of Lagrange through ten points is right to 1e-9; its weights are given to the points instead. The
    grid runs past zero and is folded there.
    """
    step = GRID_ANGLE / max(float(time.max(initial=0.0)), 1e-300)
    half = GRID_POINTS // 2
    largest = float(lines.omega.max(initial=0.0)) / step
    if largest + 2 * GRID_POINTS >= len(lines.omega):
        return lines
    size = int(largest) + 2 * GRID_POINTS
    first = np.floor(lines.omega / step).astype(np.int64)
    apart = lines.omega / step - first
    weights = np.vstack([lines.even, lines.odd])
    out = np.zeros((len(weights), size))
    points = np.arange(1 - half, half + 1)
    for point in points:
        share = np.prod([(apart - other) / (point - other) for other in points if other != point], axis=0)
        for total, weight in zip(out, weights, strict=True):
            total += np.bincount(first + point + half, weight * share, size)
    folded = out[:, half:].copy()
    folded[:-1, 1 : half + 1] += out[:-1, half - 1 :: -1]
    folded[-1, 1 : half + 1] -= out[-1, half - 1 :: -1]
    return _Lines(step * np.arange(size - half, dtype=float), folded[:-1], folded[-1])


def _vectors(orbit: OrbitField, angle_per_T: float) -> Iterator[FloatArray]:
    """Fields (m, 3) that stand for all on an orbit, the same number for each position."""
    phases = orbit.phases
    if phases.n_free == 0:
        turns = phases.listed
    elif phases.n_free == 1:
        largest = float((np.linalg.norm(orbit.steady, axis=1) + np.abs(orbit.waves).sum(axis=(0, 2))).max())
        n = _phases_needed(angle_per_T * largest * int(np.abs(phases.free).max()))
        steps = np.arange(n)[:, None] / n * phases.free[0]
        turns = (phases.listed[:, None] + steps[None]).reshape(-1, phases.listed.shape[1])
    else:
        turns = free_turns(orbit, kept_samples(orbit, SAMPLES), 0)
    for row in range(len(orbit.steady)):
        yield np.asarray(orbit.steady[row] + (np.exp(-2j * np.pi * turns) @ orbit.waves[:, row]).real)


def _phases_needed(angle: float) -> int:
    """The average of a function that turns by ``angle`` over equally spaced phases converges beyond twice as many."""
    return int(np.clip(2 * angle + 64, LEAST_PHASES, MOST_PHASES))


def _blocks(n: int, n_times: int) -> Iterator[slice]:
    step = max(1, BLOCK // max(1, n_times))
    for start in range(0, n, step):
        yield slice(start, min(n, start + step))
