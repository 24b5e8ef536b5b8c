"""From the listed sites and operations of a file to all atoms of the cell."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from latticedip.checks import FloatArray
from latticedip.files.cifsyntax import Block
from latticedip.files.symop import Operation

#: Images of one listed site closer than this (Å) are one atom: coordinates such as 0.3333 are rounded.
MERGE_A = 0.02
#: Translations of operations that differ by less than this are equal.
TRANSLATION_TOLERANCE = 2e-3
#: How far an operation may miss being an isometry of the cell, relative to the lengths it acts on.
METRIC_TOLERANCE = 0.01
#: No group of a real file has more operations.
MAX_OPERATIONS = 20_000


@dataclass(frozen=True, eq=False)
class Group:
    """All operations of a structure, centrings multiplied in; d is 3, or 4 in superspace.

    rotations: Shape (n, d, d) int. translations: Shape (n, d) float in [0, 1). times: Shape (n,) int, +1 or −1.
    """

    rotations: np.ndarray
    translations: FloatArray
    times: np.ndarray

    @property
    def axial(self) -> np.ndarray:
        """Shape (n, 3, 3) float. θ det(R) R: how the lattice components of a moment change."""
        rotations = self.rotations[:, :3, :3]
        handedness = np.round(np.linalg.det(rotations))
        return np.asarray((self.times * handedness)[:, None, None] * rotations)

    @property
    def basic(self) -> Group:
        """What the operations do in three dimensions, one for one."""
        return Group(self.rotations[:, :3, :3], self.translations[:, :3], self.times)

    @property
    def is_trivial(self) -> bool:
        """True where the identity is the only operation."""
        return len(self.times) == 1


@dataclass(frozen=True, eq=False)
class Orbit:
    """The atoms that one listed site stands for.

    positions: Shape (m, 3) float, fractional in [0, 1). carriers: m operations (indices), one that leads to each
    atom. stabilizer: the operations that leave the listed site where it is.
    """

    positions: FloatArray
    carriers: np.ndarray
    stabilizer: np.ndarray


def build_group(
    block: Block, operations: Sequence[Operation], centrings: Sequence[Operation], cell: FloatArray, tag: str
) -> Group:
    """The product of operations and centrings, each operation once.

    ``tag`` is the item that messages name. Raises FileError where an operation does not fit the cell, where the
    identity is missing and where the product of two operations is none of them.
    """
    if len(operations) * len(centrings) > MAX_OPERATIONS:
        raise block.error(
            f"{len(operations)} operations times {len(centrings)} centrings are more than any group holds."
        )
    _check_metric(block, operations, cell, tag)
    index = _Index()
    members: list[tuple[np.ndarray, FloatArray, int]] = []
    texts: list[str] = []
    for centring in centrings:
        for operation in operations:
            # θ is 0 for operations of a non-magnetic group, which do not touch moments.
            member = (
                operation.rotation,
                wrap_home(operation.translation + centring.translation),
                (operation.time or 1) * (centring.time or 1),
            )
            if index.add(*member):
                members.append(member)
                texts.append(
                    operation.text if not np.any(centring.translation) else f"{operation.text} after {centring.text}"
                )
    group = Group(*(np.array(part) for part in zip(*members, strict=True)))
    _check_closed(block, members, texts, index, tag)
    return group


class _Index:
    """Which operations are there already, their translations compared modulo 1 with a tolerance."""

    def __init__(self) -> None:
        self._translations: dict[tuple[bytes, int], list[FloatArray]] = {}

    def holds(self, rotation: np.ndarray, translation: FloatArray, time: int) -> bool:
        known = self._translations.get((rotation.tobytes(), time))
        if not known:
            return False
        difference = np.array(known) - translation
        difference -= np.round(difference)
        return bool(np.any(np.all(np.abs(difference) < TRANSLATION_TOLERANCE, axis=1)))

    def add(self, rotation: np.ndarray, translation: FloatArray, time: int) -> bool:
        if self.holds(rotation, translation, time):
            return False
        self._translations.setdefault((rotation.tobytes(), time), []).append(translation)
        return True


def _check_metric(block: Block, operations: Sequence[Operation], cell: FloatArray, tag: str) -> None:
    """An operation must keep lengths and angles: Rᵀ G R = G for the metric G of the cell."""
    metric = cell @ cell.T
    lengths = np.sqrt(np.diag(metric))
    for operation in operations:
        rotation = operation.rotation[:3, :3]
        change = (rotation.T @ metric @ rotation - metric) / np.outer(lengths, lengths)
        if np.abs(change).max() > METRIC_TOLERANCE:
            raise block.error(
                f"{tag} {operation.text!r} does not fit the cell: it would change its lengths or angles. "
                "Check the cell and the setting of the operations."
            )


def _check_closed(
    block: Block, members: list[tuple[np.ndarray, FloatArray, int]], texts: list[str], index: _Index, tag: str
) -> None:
    """A finite set with the identity is a group where multiplying by a set of generators never leaves it."""
    d = len(members[0][1])
    identity = (np.eye(d, dtype=np.int64), np.zeros(d), 1)
    if not index.holds(*identity):
        words = "x,y,z" if d == 3 else ",".join(f"x{i + 1}" for i in range(d))
        raise block.error(f"the operations of {tag} do not hold the identity {words}.")
    reached = _Index()
    reached.add(*identity)
    elements, generators = [identity], list[tuple[np.ndarray, FloatArray, int]]()
    for i, member in enumerate(members):
        if reached.holds(*member):
            continue
        generators.append(member)
        for j, other in enumerate(members):
            if not index.holds(*_product(other, member)):
                raise block.error(
                    f"the operations of {tag} are no group: {texts[j]!r} after {texts[i]!r} is not among them. "
                    "An operation or a centring is missing or misspelt."
                )
        position = 0
        while position < len(elements):
            for generator in generators:
                candidate = _product(elements[position], generator)
                if reached.add(*candidate):
                    elements.append(candidate)
            position += 1


def _product(
    first: tuple[np.ndarray, FloatArray, int], second: tuple[np.ndarray, FloatArray, int]
) -> tuple[np.ndarray, FloatArray, int]:
    """The operation that applies ``second`` and then ``first``."""
    return first[0] @ second[0], wrap_home(first[0] @ second[1] + first[1]), first[2] * second[2]


def orbit_of(block: Block, group: Group, position: FloatArray, cell: FloatArray, label: str) -> Orbit:
    """All images of a listed site; images closer than 0.02 Å are one atom.

    A site that misses a special position by rounding is first put onto it (the mean of its images there).
    Raises FileError where images come closer than 0.02 Å without meeting on a special position.
    """
    centre = np.array(position, dtype=float)
    stabilizer = np.array([], dtype=int)
    # Onto the special position; a second or third turn finds images that only then come within reach.
    for _ in range(10):
        shift = group.rotations @ centre + group.translations - centre
        shift -= np.round(shift)
        close = np.flatnonzero(np.linalg.norm(shift @ cell, axis=1) < MERGE_A)
        move = shift[close].mean(axis=0)
        centre = centre + move
        if np.array_equal(close, stabilizer) and np.abs(move).max() < 1e-14:
            break
        stabilizer = close
    images = wrap_home(group.rotations @ centre + group.translations)
    carriers: list[int] = []
    for i, image in enumerate(images):
        difference = images[carriers] - image
        difference -= np.round(difference)
        if not np.any(np.linalg.norm(difference @ cell, axis=1) < MERGE_A):
            carriers.append(i)
    if len(carriers) * len(stabilizer) != len(images):
        raise block.error(
            f"images of site {label} at ({', '.join(f'{x:.6g}' for x in position)}) come closer than {MERGE_A} Å "
            "to each other without meeting on one special position. Correct its coordinates."
        )
    chosen = np.array(carriers)
    return Orbit(images[chosen], chosen, stabilizer)


def wrap_home(fractional: FloatArray) -> FloatArray:
    """Fractional coordinates in [0, 1); a value that rounding leaves just below 1 becomes 0."""
    wrapped = fractional - np.floor(fractional)
    return np.where(wrapped > 1.0 - 1e-12, 0.0, wrapped)
