"""The [[probe]] tables and the [sample] table of a study."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import Any

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.model import Crystal
from latticedip.ordering.patterns import unit_direction
from latticedip.physics.weighted import normalized_weights
from latticedip.probe import Contact, Probe
from latticedip.sample import Sample
from latticedip.study.directions import named_directions
from latticedip.study.keys import Key
from latticedip.study.motion import MOTION_KEYS, read_motion
from latticedip.study.probe_rules import RULE_KEYS, probes_by_rule

PROBE_KEYS = ("name", "particle", "position", "site", "positions", "weights", "rule", "contact", *MOTION_KEYS)
CONTACT_KEYS = ("coupling_T_per_muB", "shell", "within", "moment_density_muB_per_A3")
SHAPES = ("ellipsoid", "prism", "cylinder", "sphere", "plate", "needle", "tensor")
SAMPLE_KEYS = (*SHAPES, "axes", "applied_T")

_POSITION = 'three fractional coordinates, such as [0.5, 0.5, 0.12] or ["1/3", "2/3", 0]'
_POSITIONS = "a list of positions, each of three fractional coordinates, such as [[0.5, 0.5, 0.12], [0.5, 0.5, 0.88]]"
_WEIGHTS = "a list of numbers, one for each of `positions`, such as [1, 1]"
_AXIS = 'a crystal direction ("a", "b", "c", "a*", "b*", "c*") or a vector in crystal axes a, b, c'


@dataclass(frozen=True, eq=False)
class WeightedProbe:
    """A probe of a study that is found at several positions, each of which is a Probe of its own in the study.

    name: of the whole. members: names of the probes at its positions. weights: Shape (n,) float, adding up to 1.
    """

    name: str
    members: tuple[str, ...]
    weights: FloatArray


def read_probes(key: Key | None, crystal: Crystal) -> tuple[tuple[Probe, ...], tuple[WeightedProbe, ...]]:
    """All [[probe]] tables, in order, and which of them are one probe at several positions.

    Positions are fractional in the cell of [crystal].
    """
    if key is None:
        return (), ()
    probes: list[Probe] = []
    weighted: list[WeightedProbe] = []
    taken: dict[str, str] = {}
    for item in key.items("a list of tables, each headed [[probe]]"):
        if isinstance(item.value, dict) and "rule" in item.value:
            table = item.table(RULE_KEYS)
            found = probes_by_rule(item, table, crystal)
        else:
            table = item.table(PROBE_KEYS)
            if "positions" in table:
                whole, found = _weighted(item, table, crystal)
                weighted.append(whole)
            else:
                found = [_probe(item, table, crystal)]
        for name in [*(whole.name for whole in weighted[-1:] if "positions" in table), *(p.name for p in found)]:
            if name in taken:
                where = taken[name]
                if "name" in table:
                    raise table["name"].expected(f"a name of its own ({where} has this one)")
                raise item.refuse(f"without `name` it is called {name!r}, as {where} is already. Give it a name.")
            taken[name] = item.path
        probes += found
    return tuple(probes), tuple(weighted)


def _weighted(item: Key, table: dict[str, Key], crystal: Crystal) -> tuple[WeightedProbe, list[Probe]]:
    """A probe with `positions` and `weights`, and the probes at its positions."""
    for other in ("position", "site"):
        if other in table:
            raise item.refuse(f"`{other}` and `positions` name two places. Leave one out.")
    if "position_su" in table:
        raise table["position_su"].refuse("goes with `position`, and the probe has `positions`. Leave it out.")
    places = table["positions"].items(_POSITIONS)
    if not places:
        raise table["positions"].expected(_POSITIONS)
    if not any(isinstance(place.value, list) for place in places):
        raise table["positions"].expected(_POSITIONS, " One position, too, stands in brackets of its own.")
    if "weights" not in table:
        raise item.missing("weights", "one number of at least 0 for each of `positions`")
    shares = [share.number("a number of at least 0", low=0.0) for share in table["weights"].items(_WEIGHTS)]
    if len(shares) != len(places):
        raise table["weights"].refuse(
            f"has {len(shares)} entries, expected {len(places)}, one for each of `positions`."
        )
    with table["weights"].located():
        weights = normalized_weights(shares)
    base = {key: value for key, value in table.items() if key not in ("name", "positions", "weights")}
    particle = "muon"
    if "particle" in table:
        particle = table["particle"].text('"muon" or an isotope such as "19F"')
    name = f"{particle} at {len(places)} positions"
    if "name" in table:
        name = table["name"].text("a name in one line")
    probes = [_probe(item, {**base, "position": place}, crystal) for place in places]
    members = tuple(f"{name}, position {number}" for number in range(1, len(probes) + 1))
    renamed = [dataclasses.replace(probe, name=member) for probe, member in zip(probes, members, strict=True)]
    return WeightedProbe(name, members, weights), renamed


def _probe(item: Key, table: dict[str, Key], crystal: Crystal) -> Probe:
    if "weights" in table:
        raise table["weights"].refuse("goes with `positions`, and the probe has none. Leave it out.")
    if "position" in table and "site" in table:
        raise item.refuse("`position` and `site` name two places. Leave one out.")
    if "position" not in table and "site" not in table:
        raise item.refuse("says no place, expected `position` (fractional) or `site` (a label or element).")
    arguments: dict[str, Any] = {}
    if "name" in table:
        arguments["name"] = table["name"].text("a name in one line")
    if "position" in table:
        arguments["position"] = table["position"].numbers(3, _POSITION, fractions=True)
    else:
        arguments["site"] = table["site"].text("a site label or element")
        with table["site"].located():
            crystal.find(arguments["site"])
        if "particle" not in table:
            raise item.missing("particle", 'the nucleus of the site, such as "19F"')
    if "contact" in table:
        terms = table["contact"].items("a list of contact terms, such as [{ shell = 1, coupling_T_per_muB = 0.06 }]")
        arguments["contact"] = tuple(_contact(term) for term in terms)
    arguments |= read_motion(item, table, crystal)
    if "particle" not in table:
        with item.located():
            return Probe(**arguments)
    arguments["particle"] = table["particle"].text('"muon" or an isotope such as "19F"')
    with table["particle"].located():
        return Probe(**arguments)


def _contact(item: Key) -> Contact:
    table = item.table(CONTACT_KEYS, header="a contact term, such as { shell = 1, coupling_T_per_muB = 0.06 }")
    arguments: dict[str, Any] = {}
    if "coupling_T_per_muB" in table:
        coupling = table["coupling_T_per_muB"]
        what = "a number or three lists of three numbers (Cartesian), in T/µB per neighbour"
        scalar = not isinstance(coupling.value, list)
        arguments["coupling_T_per_muB"] = coupling.number(what) if scalar else coupling.matrix(what)
    if "shell" in table:
        arguments["shell"] = table["shell"].whole("the number of a shell of neighbours, 1 for the nearest")
    if "within" in table:
        arguments["within"] = table["within"].number("a radius in Å, larger than 0", above=0.0)
    if "moment_density_muB_per_A3" in table:
        density = table["moment_density_muB_per_A3"]
        arguments["moment_density_muB_per_A3"] = density.numbers(3, "three numbers (Cartesian), in µB/Å³")
    with item.located():
        return Contact(**arguments)


def read_sample(key: Key | None, crystal: Crystal) -> Sample:
    """The [sample] table; without a shape the sample is taken as N = 0.

    `axes` are the directions of the first two axes of an ellipsoid or a prism (the second is made perpendicular to
    the first; without `axes` the body lies along Cartesian x, y, z), the normal of a plate, the length of a needle,
    or the axis of a cylinder (without it: Cartesian z).
    """
    if key is None:
        return Sample()
    table = key.table(SAMPLE_KEYS, header="one table, headed [sample]")
    shapes = [name for name in SHAPES if name in table]
    if len(shapes) > 1:
        raise key.refuse(f"`{shapes[0]}` and `{shapes[1]}` are two shapes. Leave one out.")
    field = "three numbers in tesla (Cartesian, in the frame of [crystal])"
    applied = table["applied_T"].numbers(3, field) if "applied_T" in table else [0.0, 0.0, 0.0]
    shape = shapes[0] if shapes else ""
    axes = _axes(key, table, shape, crystal)
    with table[shape].located() if shape else key.located():
        return _sample_of(shape, table, axes, applied)


def _sample_of(shape: str, table: dict[str, Key], axes: list[FloatArray], applied: list[float]) -> Sample:
    if not shape:
        return Sample(applied_T=applied)
    size = table[shape]
    if shape == "tensor":
        tensor = size.matrix("three lists of three numbers (Cartesian): the demagnetizing tensor")
        return Sample(demagnetizing_tensor=tensor, applied_T=applied)
    if shape == "cylinder":
        diameter, height = size.numbers(2, "[diameter, height]", above=0.0)
        # The height is along the third axis of the body.
        turn = np.roll(_completed(axes), -1, axis=0) if axes else None
        return Sample.cylinder(diameter, height, orientation=turn, applied_T=applied)
    if shape in ("ellipsoid", "prism"):
        lengths = size.numbers(3, "three lengths, one for each axis of the body", above=0.0)
        turn = _completed(axes) if axes else None
        if shape == "ellipsoid":
            return Sample.ellipsoid(lengths, orientation=turn, applied_T=applied)
        return Sample.prism(lengths, orientation=turn, applied_T=applied)
    size.true()
    if shape == "sphere":
        return Sample.sphere(applied_T=applied)
    if shape == "plate":
        return Sample.plate(axes[0], applied_T=applied)
    return Sample.needle(axes[0], applied_T=applied)


def _axes(key: Key, table: dict[str, Key], shape: str, crystal: Crystal) -> list[FloatArray]:
    """Cartesian unit vectors of `axes`, as many as the shape takes; none where it may do without."""
    wanted = {
        "ellipsoid": (2, "the directions of the first two axes"),
        "prism": (2, "the directions of the first two edges"),
        "cylinder": (1, "the direction of the cylinder axis"),
        "plate": (1, "the direction of the normal"),
        "needle": (1, "the direction of its length"),
    }
    if "axes" not in table:
        if shape in ("plate", "needle"):
            raise key.missing("axes", f'{wanted[shape][1]} of the {shape}, such as ["c"]')
        return []
    if shape not in wanted:
        reason = {"sphere": "a sphere has no axes", "tensor": "a tensor is Cartesian"}.get(shape, "no shape is given")
        raise table["axes"].refuse(f"has no meaning here: {reason}. Leave it out.")
    count, meaning = wanted[shape]
    example = '["a", "b*"]' if count == 2 else '["c"]'
    what = f"a list of {count}: {meaning} of the {shape}, such as {example}"
    items = table["axes"].items(what)
    if len(items) != count:
        raise table["axes"].expected(what)
    axes = [_direction(item, crystal) for item in items]
    if count == 2 and np.linalg.norm(np.cross(axes[0], axes[1])) < 1e-6:
        raise table["axes"].refuse("the two directions are parallel, expected two different ones.")
    return axes


def _direction(item: Key, crystal: Crystal) -> FloatArray:
    if isinstance(item.value, list):
        return unit_direction(crystal, item.direction(_AXIS))
    named = named_directions(crystal)
    if not isinstance(item.value, str) or item.value not in named:
        raise item.expected(_AXIS)
    return named[item.value]


def _completed(axes: list[FloatArray]) -> FloatArray:
    """Shape (3, 3) float. A right-handed orthonormal set whose first row is the first axis.

    The second row lies in the plane of both axes; with one axis it is any direction across.
    """
    first = axes[0]
    second = axes[1] if len(axes) > 1 else np.eye(3)[int(np.argmin(np.abs(first)))]
    second = second - (second @ first) * first
    second = second / np.linalg.norm(second)
    return np.array([first, second, np.cross(first, second)])
