"""The [propose] table of a study: where candidate orderings are searched, and under which constraints."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from latticedip.checks import ComplexArray, FloatArray
from latticedip.crystal.model import Crystal
from latticedip.errors import InputError, StudyError
from latticedip.ordering.patterns import Setting, unit_direction
from latticedip.study.keys import Key
from latticedip.study.orderings import Sizes, fill_by_site, read_sign_list, read_triples

if TYPE_CHECKING:
    from latticedip.study.schema import Study

SEARCH_KEYS = (
    "supercell", "k", "along", "axes", "fixed", "net_zero", "keep", "seed", "moments", "method", "restarts", "sweeps",
)  # fmt: skip
KINDS = ("ising", "planar", "heisenberg")
METHODS = ("auto", "exhaustive", "annealing")
_SUPERCELL = "three whole numbers of at least 1, such as [2, 2, 1]"
_K = 'three reduced coordinates, such as [0, 0, "1/2"], or a list of such vectors'
_DIRECTION = "a direction in crystal axes a, b, c, such as [0, 0, 1]"


@dataclass(frozen=True, eq=False)
class Search:
    """What a search for candidates is asked for; arguments of `latticedip.propose`, all Cartesian.

    along: Shape (3,) or None. axes: Shape (n_magnetic, 3) or None. fixed: Shape (n_magnetic,) int or None; sites in the
    order of the crystal. k: Shape (n, 3) or None.
    """

    supercell: tuple[int, int, int] = (1, 1, 1)
    k: FloatArray | None = None
    along: FloatArray | None = None
    axes: FloatArray | None = None
    fixed: np.ndarray | None = None
    net_zero: bool = False
    keep: int = 10
    seed: int = 0
    moments: str = "ising"
    method: str = "auto"
    restarts: int | None = None
    sweeps: int | None = None

    def arguments(self) -> dict[str, Any]:
        """Keyword arguments of `latticedip.propose`."""
        return {name: getattr(self, name) for name in SEARCH_KEYS}


def read_search(key: Key | None, crystal: Crystal, sizes: Sizes) -> Search:
    """The [propose] table; every key may be left out.

    `along` and `axes` are crystal-axis directions; `axes` and `fixed` go by site label or element, one entry per atom.

    Raises StudyError for anything that does not fit.
    """
    if key is None:
        return Search()
    table = key.table(SEARCH_KEYS, header="one table, headed [propose]")
    for one, other in (("supercell", "k"), ("along", "axes")):
        if one in table and other in table:
            raise table[other].refuse(f"does not go with `{one}`. Leave one out.")
    found: dict[str, Any] = {}
    if "supercell" in table:
        items = table["supercell"].items(_SUPERCELL)
        if len(items) != 3:
            raise table["supercell"].expected(_SUPERCELL)
        found["supercell"] = tuple(item.whole("a whole number of at least 1") for item in items)
    if "k" in table:
        found["k"] = _waves(table["k"])
    if "along" in table:
        found["along"] = unit_direction(crystal, table["along"].direction(_DIRECTION))
    magnetic = np.flatnonzero(np.nan_to_num(sizes.of_site) > 0)
    if "axes" in table:
        found["axes"] = _axes(table["axes"], crystal, magnetic)
    if "fixed" in table:
        found["fixed"] = _fixed(table["fixed"], crystal, magnetic)
    if "net_zero" in table:
        table["net_zero"].true()
        found["net_zero"] = True
    for name, low in (("keep", 1), ("seed", 0), ("restarts", 1), ("sweeps", 1)):
        if name in table:
            found[name] = table[name].whole(f"a whole number of at least {low}", low=low)
    for name, words in (("moments", KINDS), ("method", METHODS)):
        if name in table:
            found[name] = table[name].one_of(words)
    return Search(**found)


def _waves(key: Key) -> FloatArray:
    items = key.items(_K)
    vectors = items if items and all(isinstance(item.value, list) for item in items) else [key]
    return np.array([vector.numbers(3, _K, fractions=True) for vector in vectors])


def _axes(key: Key, crystal: Crystal, magnetic: np.ndarray) -> FloatArray:
    setting = Setting.of(crystal, (0, 0, 0))
    axes = np.zeros((crystal.n_sites, 3))

    def one(child: Key, sites: tuple[int, ...]) -> FloatArray:
        vectors = crystal.to_cartesian(setting.spread(sites, read_triples(child, setting, sites)).real)
        lengths = np.linalg.norm(vectors, axis=1)
        if np.any(lengths == 0):
            raise child.refuse("holds [0, 0, 0], which has no direction.")
        return np.asarray(vectors / lengths[:, None])

    given = fill_by_site(key, crystal, axes, one)
    for i in magnetic:
        if not given[i]:
            raise key.missing(crystal.labels[i], f"{_DIRECTION} (it has a size in [moments])")
    return axes[magnetic]


def _fixed(key: Key, crystal: Crystal, magnetic: np.ndarray) -> np.ndarray:
    setting = Setting.of(crystal, (0, 0, 0))
    signs = np.zeros(crystal.n_sites, dtype=complex)

    def one(child: Key, sites: tuple[int, ...]) -> ComplexArray:
        for i in sites:
            if i not in magnetic:
                raise child.refuse(f"{crystal.labels[i]} has no moment, expected its size in [moments].")
        return read_sign_list(child, setting, sites)

    fill_by_site(key, crystal, signs, one)
    return np.asarray(signs.real[magnetic]).round().astype(np.int8)


def stated_sizes(study: Study) -> dict[str, float]:
    """Moment sizes in µB by label or element, as the searches take them: those of [moments] that are not zero.

    Raises StudyError where [moments] states none, InputError where a label covers atoms of different sizes.
    """
    return sizes_of(study.crystal, study.moments, str(study.path))


def sizes_of(crystal: Crystal, moments: Mapping[str, float], path: str) -> dict[str, float]:
    """As `stated_sizes`, from a table as the file gives it."""
    sizes = {name: size for name, size in moments.items() if size > 0}
    if not sizes:
        raise StudyError(
            f"{path!r} states no moment sizes, which the search for orderings starts from. Add them, for example: "
            "[moments] Mn = 4.6"
        )
    if len(sizes) == len(moments):
        return sizes
    # A label of size zero inside an element that has one: name the labels.
    named: dict[str, float] = {}
    for label, symbol in zip(crystal.labels, crystal.symbols, strict=True):
        size = moments.get(label, moments.get(symbol, 0.0))
        if named.setdefault(label, size) != size:
            raise InputError(f"the label {label!r} covers atoms of different moments; give each its size by label.")
    return {label: size for label, size in named.items() if size > 0}
