"""Fields of probes that move and of neighbours that are moved: what `local_field` adds to the sum over fixed points.

A cloud of the probe and the spread of a moment act alike: the field is linear in both, and the average over two
Gaussian clouds is that over one whose covariance is the sum.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray, frozen
from latticedip.crystal.displace import Displaced, MovedPairs, moved_pairs
from latticedip.crystal.model import OVERLAP_A, Crystal
from latticedip.crystal.neighbours import neighbours_of
from latticedip.crystal.place import place_of
from latticedip.crystal.spread import SAME_TENSOR, as_spread, carriers, covariance_of, turned_covariance
from latticedip.crystal.symmetry import operations_of
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

    Names are those of the crystal that probes are given in: that of ``ordering.reference`` where there is one.

    Raises InputError as `named_clouds` and `as_spread`, and for an ion that the reference crystal does not have.
    """
    crystal = ordering.crystal
    if not isinstance(spread, Mapping):
        one = covariance_of(as_spread("moment_spread", spread))
        return frozen(np.tile(one, (crystal.n_sites, 1, 1)))
    if ordering.reference is None:
        return named_clouds(crystal, spread)
    named = named_clouds(ordering.reference.crystal, spread)
    clouds = np.zeros((crystal.n_sites, 3, 3))
    if np.any(named):
        ions = np.flatnonzero(ordering.is_magnetic)
        clouds[ions] = named[_home_sites(ordering, ions)]
    return frozen(clouds)


def _home_sites(ordering: Ordering, ions: np.ndarray) -> list[int]:
    """The sites, in the crystal that probes are given in, on which some sites of an ordering lie.

    Raises InputError for one that lies on none.
    """
    if ordering.reference is None:
        return [int(site) for site in ions]
    crystal, home, transform = ordering.crystal, ordering.reference.crystal, ordering.reference.transform
    found = []
    for site in ions:
        gaps = transform.P @ crystal.positions[site] + transform.p - home.positions
        alike = np.array([symbol == crystal.symbols[site] for symbol in home.symbols])
        distance = np.where(alike, np.linalg.norm((gaps - np.round(gaps)) @ home.cell, axis=1), np.inf)
        if distance.min(initial=np.inf) > SAME_ATOM_A:
            raise InputError(
                f"moment_spread: the crystal of the study has no {crystal.symbols[site]} within {SAME_ATOM_A} Å of the "
                f"place of atom {crystal.labels[site]} of the ordering {ordering.name!r}."
            )
        found.append(int(np.argmin(distance)))
    return found


def named_clouds(crystal: Crystal, spread: Mapping[str, Any]) -> FloatArray:
    """Shape (n_sites, 3, 3) float in Å². Covariances by label or element (the label wins); zero where none is named.

    A covariance is that of the first atom of its name; the operations of the crystal carry it to the others.

    Raises InputError for an unknown name, as `as_spread`, and for a covariance without the symmetry of its site or
    under a name whose atoms are of several kinds.
    """
    clouds = np.zeros((crystal.n_sites, 3, 3))
    # Labels win over elements, as everywhere.
    for name in sorted(spread, key=lambda name: name in crystal.labels):
        value = as_spread(f"moment_spread of {name}", spread[name])
        sites = list(crystal.find(name))
        one = covariance_of(value)
        alone = len(sites) == 1 or not isinstance(value, np.ndarray)
        clouds[sites] = one if alone else _carried_clouds(crystal, name, sites, one)
    return frozen(clouds)


def _carried_clouds(crystal: Crystal, name: str, sites: list[int], covariance: FloatArray) -> FloatArray:
    """Shape (n, 3, 3) float in Å². The covariance of the first of some sites, carried to all of them."""
    operations = operations_of(crystal)
    found = []
    for site in sites:
        chosen = operations.rotations[carriers(crystal, operations, sites[0], site)]
        turned = [turned_covariance(crystal, rotation, covariance) for rotation in chosen]
        if site == sites[0]:
            turned.insert(0, covariance)
        if not turned:
            raise InputError(
                f"moment_spread of {name}: a covariance is stated for the first of {len(sites)} atoms, but no "
                f"operation of the crystal carries it to atom {crystal.labels[site]} (number {site + 1}). State a "
                "number, or a covariance for each label."
            )
        slack = SAME_TENSOR * float(np.abs(covariance).max())
        if any(np.abs(other - turned[0]).max() > slack for other in turned):
            raise InputError(
                f"moment_spread of {name}: the covariance {covariance.tolist()} does not have the symmetry of its site "
                f"{crystal.labels[sites[0]]}, so that it does not say how the other {len(sites) - 1} moments extend. "
                "Symmetrize it, or state a number."
            )
        found.append(turned[0])
    return np.array(found)


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
        for rows in equal_covariances(clouds):
            for some in equal_covariances(of_moments[ions]):
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
    reached: dict[tuple[str, str, bool], None] = {}
    for part in pair_sums(ordering, targets, clouds, of_moments, tol, names=names):
        total[part.rows] += part.fields(ordering)
        sizes = np.abs(ordering.mean_components[part.index][part.ions]).sum(axis=1)
        bound[part.rows] += tol * np.maximum(1.0, np.abs(part.tensors).max(axis=(2, 3))) @ sizes
        for row, ion in np.argwhere(part.reach < REACHED):
            still = not np.any(clouds[part.rows[row]])
            reached[names[part.rows[row]], ordering.crystal.labels[part.ions[ion]], still] = None
    notes = [
        extended_words(who, label) if still else reached_words(f"of {who}", label)
        for who, label, still in list(reached)[:REACHED_SHOWN]
    ]
    if len(reached) > REACHED_SHOWN:
        notes.append(f"so does that of {len(reached) - REACHED_SHOWN} more pairs of a point and a label")
    return total, bound, notes


def reached_words(who: str, label: str) -> str:
    """What is said of a spread that reaches an atom; who: whose spread it is, "of ..." or "of the probe"."""
    return f"the spread {who} reaches atom {label}: the traceless (principal-value) part is given; the rest is contact"


def extended_words(who: str, label: str) -> str:
    """What is said of an extended moment that reaches a probe without a spread; who: its name, or "the probe"."""
    rest = "the traceless (principal-value) part is given; the rest is contact"
    return f"the extended moment of {label} reaches {who}: {rest}"


def cloud_gradients(
    ordering: Ordering, targets: FloatArray, clouds: FloatArray, of_moments: FloatArray, tol: float
) -> FloatArray:
    """Shape (n, 3, 3) float in T/Å. ∂B_a/∂x_c of the averaged sums."""
    total = np.zeros((len(targets), 3, 3))
    for part in pair_sums(ordering, targets, clouds, of_moments, tol, slopes=True):
        total[part.rows] += part.gradients(ordering).sum(axis=1)
    return total


def equal_covariances(covariances: FloatArray) -> list[np.ndarray]:
    """Indices of equal covariances (n, 3, 3), together."""
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
    for some in equal_covariances(of_moments[pairs.sites]):
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
    return [*words, f"{name}: field averaged over a Gaussian spread of {spread_words(spread)}"]


def counting_spread(orderings: Iterable[Ordering], spread: Any) -> Any:
    """Of spreads of moments by label or element those that have an effect: of an ion that is magnetic somewhere."""
    if not isinstance(spread, Mapping) or not any(np.any(value) for value in spread.values()):
        return spread
    counting: set[str] = set()
    for ordering in orderings:
        home = ordering.crystal if ordering.reference is None else ordering.reference.crystal
        for site in _home_sites(ordering, np.flatnonzero(ordering.is_magnetic)):
            # The label wins over the element.
            counting.add(home.labels[site] if home.labels[site] in spread else home.symbols[site])
    return {name: value for name, value in spread.items() if name in counting}


def moment_spread_words(spread: Any) -> list[str]:
    """A sentence on the spread of moments as `moment_clouds` takes it, for reports; none where there is none."""
    named = {"all ions": spread} if not isinstance(spread, Mapping) else spread
    listed = [
        f"{name} {spread_words(value)}"
        for name, value in ((name, as_spread("moment_spread", value)) for name, value in named.items())
        if value is not None and np.any(value)
    ]
    return [f"moments are extended: Gaussian spread of {'; '.join(listed)}"] if listed else []


def spread_words(spread: float | FloatArray) -> str:
    """The size of a checked spread in words."""
    if isinstance(spread, float):
        return f"{spread:g} Å rms along each axis"
    rms = np.sqrt(np.maximum(0.0, np.linalg.eigvalsh(spread)))
    return f"{', '.join(f'{x:.4g}' for x in rms)} Å rms along its principal axes"
