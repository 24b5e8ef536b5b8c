"""The text of CIFs that are written: numbers with 17 digits, labels, cells, atoms and changes of cell."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from fractions import Fraction

import numpy as np

from latticedip.checks import FloatArray
from latticedip.errors import FileError
from latticedip.ordering.model import ParentTransform


def loop(tags: list[str], rows: Sequence[list[str]]) -> list[str]:
    """The lines of a loop."""
    return ["loop_", *tags, *(" ".join(row) for row in rows)]


def cell_lines(cell: FloatArray) -> list[str]:
    """Lengths and angles of a cell."""
    lengths, angles = cell_parameters(cell)
    return [
        *(f"_cell_length_{axis} {digits(value)}" for axis, value in zip("abc", lengths, strict=True)),
        *(f"_cell_angle_{axis} {digits(x)}" for axis, x in zip(("alpha", "beta", "gamma"), angles, strict=True)),
    ]


def parent_lines(parent: ParentTransform | None) -> list[str]:
    """The change of cell from the parent, where it is known."""
    if parent is None:
        return []
    return [f"_parent_space_group.child_transform_Pp_abc '{format_transform(parent)}'"]


def atom_lines(
    labels: Sequence[str],
    symbols: Sequence[str],
    positions: FloatArray,
    occupancies: FloatArray,
    su: FloatArray,
    name: str,
) -> tuple[list[str], list[str]]:
    """The loop of all atoms, and the name of each in it, quoted.

    su: Shape (n, 3), standard uncertainties of the positions; they get columns of their own where any is known.
    Where several atoms share a label, each gets one of its own, and the shared one stands in a column beside it.
    """
    names = distinct(labels)
    quoted_names = [quoted(label, name) for label in names]
    shared = names != list(labels)
    has_su = not np.all(np.isnan(su))
    lines = loop(
        [
            *(f"_atom_site_{tag}" for tag in ("label", "type_symbol", "fract_x", "fract_y", "fract_z", "occupancy")),
            *([f"_atom_site_fract_{x}_su" for x in "xyz"] if has_su else []),
            *(["_latticedip_site_label"] if shared else []),
        ],
        [
            [
                label,
                symbols[i],
                *map(digits, positions[i]),
                digits(occupancies[i]),
                *(map(digits, su[i]) if has_su else []),
                *([quoted(labels[i], name)] if shared else []),
            ]
            for i, label in enumerate(quoted_names)
        ],
    )
    return lines, quoted_names


def moment_lines(names: Sequence[str], components: FloatArray, su: FloatArray) -> list[str]:
    """The loop of moments: crystal-axis components (n, 3) and, where any is known, their standard uncertainties."""
    has_su = not np.all(np.isnan(su))
    return loop(
        [
            "_atom_site_moment.label",
            *(f"_atom_site_moment.crystalaxis_{x}" for x in "xyz"),
            *([f"_atom_site_moment.crystalaxis_{x}_su" for x in "xyz"] if has_su else []),
        ],
        [
            [label, *map(digits, components[i]), *(map(digits, su[i]) if has_su else [])]
            for i, label in enumerate(names)
        ],
    )


def digits(value: float) -> str:
    """A number with 17 significant digits (enough for any double), ``.`` for NaN; minus zero becomes zero."""
    return "." if np.isnan(value) else f"{value + 0.0:.17g}"


def quoted(text: str, name: str) -> str:
    """A label in quotes; raises FileError (for the file ``name``) where no quotes can hold it."""
    for quote in "'\"":
        if text == text.strip() and text and text.isprintable() and f"{quote} " not in text:
            return f"{quote}{text}{quote}"
    raise FileError(f"{name}: the label {text!r} cannot be written in a CIF. Rename the site.")


def block_name(text: str) -> str:
    """A name made fit for ``data_``."""
    return re.sub(r"[^A-Za-z0-9_.+-]+", "_", text).strip("_")[:60] or "ordering"


def distinct(labels: Sequence[str]) -> list[str]:
    """The labels, those of several atoms with a running number that no other label has."""
    counts = Counter(labels)
    taken = set(labels)
    numbers: Counter[str] = Counter()
    names = []
    for label in labels:
        name = label
        while counts[label] > 1 and name in taken:
            numbers[label] += 1
            name = f"{label}_{numbers[label]}"
        taken.add(name)
        names.append(name)
    return names


def cell_parameters(cell: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Lengths (Å) and angles (degrees) of a cell; angles within rounding of 60, 90 and 120 are those."""
    lengths = np.linalg.norm(cell, axis=1)
    angles = []
    for i, j in ((1, 2), (0, 2), (0, 1)):
        first, second = cell[i] / lengths[i], cell[j] / lengths[j]
        angle = float(np.degrees(np.arctan2(np.linalg.norm(np.cross(first, second)), first @ second)))
        angles.append(next((exact for exact in (60.0, 90.0, 120.0) if abs(angle - exact) < 1e-12), angle))
    return lengths, np.array(angles)


def format_transform(transform: ParentTransform) -> str:
    """A change of cell as the dictionaries write it, ``a-b,a+b,2c;1/4,0,0``."""
    vectors = []
    for column in np.asarray(transform.P).T:
        terms = [_term(value, axis) for value, axis in zip(column, "abc", strict=True) if abs(value) > 1e-12]
        vectors.append("".join(terms).removeprefix("+"))
    shift = ",".join(_fraction(value) for value in transform.p)
    return f"{','.join(vectors)};{shift}"


def _term(value: float, axis: str) -> str:
    size = _fraction(abs(value))
    return ("-" if value < 0 else "+") + ("" if size == "1" else size) + axis


def _fraction(value: float) -> str:
    """A simple fraction where the number is one, else its decimals (no exponent: the grammar has none)."""
    nearest = Fraction(float(value)).limit_denominator(48)
    if abs(float(nearest) - value) < 1e-12:
        return str(nearest)
    return f"{value:.17f}"
