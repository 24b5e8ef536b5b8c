"""Fields of probes that move and of neighbours that are moved: what `local_field` adds to the sum over fixed points.

A cloud of the probe and the spread of a moment act alike: the field is linear in both, and the average over two
Gaussian clouds is that over one whose covariance is the sum.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, frozen
from latticedip.crystal.displace import Displaced, MovedPairs, moved_pairs
from latticedip.crystal.model import OVERLAP_A
from latticedip.crystal.neighbours import neighbours_of
from latticedip.crystal.place import place_of
from latticedip.crystal.spread import as_spread, covariance_of
from latticedip.errors import InputError
from latticedip.ordering.model import Ordering
from latticedip.probe import Probe
from latticedip.sums.smear import OUT_OF_REACH, cloud_of, smeared_pair_tensors, smeared_sum

#: Pairs of row and ion held at one time.
PAIRS = 100_000
#: An atom of the ordering's own cell lies this close (Å) to the one of the reference crystal that it is.
SAME_ATOM_A = 0.2
#: A cloud with a density exp(−this) of its largest, or more, at an ion is said to reach it.
REACHED = 12.0
#: So many of these are named.
REACHED_SHOWN = 10


@dataclass(frozen=True, eq=False)
class PairSums:
    """Sums over one lattice of the fields of single ions at some rows, at one k of the ordering.

    index: of k. ions: Shape (m,) int. rows: Shape (n,) int. tensors: Shape (n, m, 3, 3) complex in T/µB.
    slopes: Shape (n, m, 3, 3, 3) complex in T/µB/Å, derivatives by the place of the row along the last axis, or None.
    reach: Shape (n, m) float. Smallest exponent of the density of the cloud at an image of the ion.
    """

    index: int
    ions: np.ndarray
    rows: np.ndarray
    tensors: ComplexArray
    slopes: ComplexArray | None
    reach: FloatArray

    def fields(self, ordering: Ordering) -> FloatArray:
        """Shape (n, 3) float in T. Field of all ions."""
        moments = ordering.mean_components[self.index][self.ions]
        return np.asarray(np.einsum("tsab,sb->ta", self.tensors, moments).real)

    def gradients(self, ordering: Ordering) -> FloatArray:
        """Shape (n, m, 3, 3) float in T/Å. ∂B_a/∂x_c of each ion."""
        assert self.slopes is not None
        moments = ordering.mean_components[self.index][self.ions]
        return np.asarray(np.einsum("tsabc,sb->tsac", self.slopes, moments).real)


def moment_clouds(ordering: Ordering, spread: Any) -> FloatArray:
    """Shape (n_sites, 3, 3) float in Å². Covariances of moments, from one spread for all or one by label or element.

    Raises InputError for an unknown label and as `as_spread`.
    """
    crystal = ordering.crystal
    clouds = np.zeros((crystal.n_sites, 3, 3))
    if isinstance(spread, Mapping):
        # Labels win over elements, as everywhere.
        for name in sorted(spread, key=lambda name: name in crystal.labels):
            value = as_spread(f"moment_spread of {name}", spread[name])
            clouds[list(crystal.find(name))] = covariance_of(value)
    else:
        clouds[:] = covariance_of(as_spread("moment_spread", spread))
    return frozen(clouds)


def pair_sums(
    ordering: Ordering,
    targets: FloatArray,
    clouds: FloatArray,
    of_moments: FloatArray,
    tol: float,
    *,
    slopes: bool = False,
    names: Sequence[str] = (),
) -> Iterator[PairSums]:
    """Sums over the lattice of every ion at Cartesian targets (n, 3), averaged over the clouds of both; N = 0 at k = 0.

    clouds: Shape (n, 3, 3), of_moments: Shape (n_sites, 3, 3), covariances in Å². names: of the rows, for messages.

    Raises InputError where a cloud without thickness reaches an ion.
    """
    ions = np.flatnonzero(ordering.is_magnetic)
    for index, k in enumerate(ordering.k if len(ions) else ()):
        for rows in _alike(clouds):
            for some in _alike(of_moments[ions]):
                covariance = clouds[rows[0]] + of_moments[ions[some[0]]]
                plan = smeared_sum(ordering.crystal.cell, k, tol, covariance)
                sources = plan.place(ordering.crystal.places_cart[ions[some]])
                step = max(1, PAIRS // len(some))
                for start in range(0, len(rows), step):
                    block = rows[start : start + step]
                    tensors, steep, reach = plan.tensors(plan.place(targets[block]), sources, slopes)
                    if plan.cloud.thin:
                        refuse_thin(ordering, ions[some], reach, [names[i] for i in block] if names else [])
                    yield PairSums(index, ions[some], block, tensors, steep, reach)


def refuse_thin(ordering: Ordering, ions: np.ndarray, reach: FloatArray, names: Sequence[str]) -> None:
    """InputError where a cloud flatter than 0.001 Å reaches an ion: the average has no finite value there."""
    if np.any(reach < OUT_OF_REACH):
        row, ion = (int(i) for i in np.argwhere(reach < OUT_OF_REACH)[0])
        who = names[row] if names else "the point"
        raise InputError(
            f"{who}: its spread is flat (less than 0.001 Å along one direction) and reaches atom "
            f"{ordering.crystal.labels[ions[ion]]}, where the average of a dipole field over a plane or a line has no "
            "finite value. Give the spread an extent along every direction."
        )


def cloud_fields(
    ordering: Ordering,
    targets: FloatArray,
    clouds: FloatArray,
    of_moments: FloatArray,
    tol: float,
    names: Sequence[str],
) -> tuple[FloatArray, FloatArray, list[str]]:
    """Averaged N = 0 sums at Cartesian targets in T, bounds of their error, and notes on what the clouds reach."""
    total, bound = np.zeros((len(targets), 3)), np.zeros(len(targets))
    reached: dict[tuple[str, str], None] = {}
    for part in pair_sums(ordering, targets, clouds, of_moments, tol, names=names):
        total[part.rows] += part.fields(ordering)
        sizes = np.abs(ordering.mean_components[part.index][part.ions]).sum(axis=1)
        bound[part.rows] += tol * np.maximum(1.0, np.abs(part.tensors).max(axis=(2, 3))) @ sizes
        for row, ion in np.argwhere(part.reach < REACHED):
            reached[names[part.rows[row]], ordering.crystal.labels[part.ions[ion]]] = None
    notes = [reached_words(f"of {who}", label) for who, label in list(reached)[:REACHED_SHOWN]]
    if len(reached) > REACHED_SHOWN:
        notes.append(f"so does that of {len(reached) - REACHED_SHOWN} more pairs of a point and a label")
    return total, bound, notes


def reached_words(who: str, label: str) -> str:
    """What is said of a spread that reaches an atom; who: whose spread it is, "of ..." or "of the probe"."""
    return f"the spread {who} reaches atom {label}: the traceless (principal-value) part is given; the rest is contact"


def cloud_gradients(
    ordering: Ordering, targets: FloatArray, clouds: FloatArray, of_moments: FloatArray, tol: float
) -> FloatArray:
    """Shape (n, 3, 3) float in T/Å. ∂B_a/∂x_c of the averaged sums."""
    total = np.zeros((len(targets), 3, 3))
    for part in pair_sums(ordering, targets, clouds, of_moments, tol, slopes=True):
        total[part.rows] += part.gradients(ordering).sum(axis=1)
    return total


def _alike(covariances: FloatArray) -> list[np.ndarray]:
    """Indices of equal covariances, together."""
    groups: dict[bytes, list[int]] = {}
    for i, covariance in enumerate(covariances):
        # Adding zero makes −0 into 0.
        groups.setdefault((covariance + 0.0).tobytes(), []).append(i)
    return [np.array(group) for group in groups.values()]


def exchanged(ordering: Ordering, point: FloatArray, reference_point: FloatArray, probe: Probe) -> MovedPairs:
    """Pairs of a placed point (fractional) and the atoms that its probe moves, in the ordering's own cell.

    Shells and atoms are chosen in the crystal that the probe is given in (that of ``ordering.reference`` where there is
    one) and found again among the atoms of the ordering.

    Raises InputError as `moved_pairs`, and where an atom is not found.
    """
    crystal = ordering.crystal
    try:
        if ordering.reference is None:
            return moved_pairs(crystal, place_of(crystal, point), probe.displaced)
        home = ordering.reference.crystal
        pairs = moved_pairs(home, place_of(home, reference_point), probe.displaced)
    except InputError as error:
        raise InputError(f"{probe.name}: {error}") from None
    place = place_of(crystal, point)
    sites, cells, before = [], [], []
    for site, vector in zip(pairs.sites, pairs.before, strict=True):
        alike = tuple(i for i, symbol in enumerate(crystal.symbols) if symbol == home.symbols[site])
        there = point - vector @ np.linalg.inv(crystal.cell)
        found, cell, _ = neighbours_of(crystal, there, SAME_ATOM_A, alike)
        if not len(found):
            raise InputError(
                f"{probe.name}: displaced: the ordering {ordering.name!r} has no {home.symbols[site]} within "
                f"{SAME_ATOM_A} Å of the place of atom {home.labels[site]}, {np.linalg.norm(vector):.4f} Å from the "
                "probe."
            )
        sites.append(int(found[0]))
        cells.append(cell[0])
        before.append(place.cart - crystal.places_cart[found[0]] - cell[0] @ crystal.cell)
    old = np.array(before, dtype=float).reshape(-1, 3)
    after = old + (pairs.after - pairs.before)
    if len(after) and np.linalg.norm(after, axis=1).min() < OVERLAP_A:
        raise InputError(f"{probe.name}: displaced: an atom would lie closer than {OVERLAP_A} Å to the probe.")
    return MovedPairs(
        frozen(np.array(sites, dtype=int)),
        frozen(np.array(cells, dtype=int).reshape(-1, 3)),
        frozen(old),
        frozen(after),
    )


def exchanged_tensors(
    ordering: Ordering, pairs: MovedPairs, cloud: FloatArray, of_moments: FloatArray, name: str = ""
) -> tuple[FloatArray, FloatArray]:
    """What moved neighbours add to the tensors of their pairs and to their derivatives.

    Returns shape (n, 3, 3) in T/µB, and shape (n, 3, 3, 3) in T/µB/Å: by the place of the probe, all atoms held.

    Raises InputError where a cloud without thickness reaches an atom at its new place.
    """
    change, slopes = np.zeros((len(pairs), 3, 3)), np.zeros((len(pairs), 3, 3, 3))
    for some in _alike(of_moments[pairs.sites]):
        covariance = cloud + of_moments[pairs.sites[some[0]]]
        new, new_slopes, reach = smeared_pair_tensors(pairs.after[some], covariance)
        old, old_slopes, _ = smeared_pair_tensors(pairs.before[some], covariance)
        if cloud_of(covariance).thin:
            refuse_thin(ordering, pairs.sites[some], reach[None], [name] if name else [])
        change[some] = new - old
        slopes[some] = new_slopes - old_slopes
    return change, slopes


def moments_of(ordering: Ordering, pairs: MovedPairs) -> FloatArray:
    """Shape (n, 3) float in µB. Mean moments (occupancy applied) of the atoms of some pairs, in their own cells."""
    phases = np.exp(-2j * np.pi * ((pairs.cells @ ordering.k.T) % 1.0))
    return np.asarray(np.einsum("nk,kna->na", phases, ordering.mean_components[:, pairs.sites]).real)


def probe_words(name: str, spread: float | FloatArray | None, displaced: Sequence[Displaced]) -> list[str]:
    """Sentences on the motion of a probe and on the neighbours it moves, for reports."""
    words = [f"{name}: displaced {term.words()}" for term in displaced]
    if spread is None or not np.any(spread):
        return words
    if isinstance(spread, float):
        size = f"{spread:g} Å rms along each axis"
    else:
        rms = np.sqrt(np.maximum(0.0, np.linalg.eigvalsh(spread)))
        size = f"{', '.join(f'{x:.4g}' for x in rms)} Å rms along its principal axes"
    return [*words, f"{name}: field averaged over a Gaussian spread of {size}"]
