"""A first study for a structure: the sites that are likely magnetic, usual orderings of them, a probe, comments.

Nothing in it claims to be known of the compound: which sites are magnetic is guessed from their element, and the
size of the moment is a placeholder that says so, unless the user or the file gives it.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from latticedip.checks import FloatArray
from latticedip.crystal.lattice import label_centrings
from latticedip.crystal.model import Crystal
from latticedip.crystal.symmetry import operations_of
from latticedip.errors import FileError, InputError
from latticedip.ordering.model import Ordering
from latticedip.ordering.patterns import Setting
from latticedip.particles import particles

#: Elements whose ions carry a moment in most of their compounds (open 3d, 4f and 5f shells, some 4d and 5d).
OFTEN_MAGNETIC = frozenset(
    ("V", "Cr", "Mn", "Fe", "Co", "Ni", "Cu", "Ru", "Os", "Ir", "Re", "Ce", "Pr", "Nd", "Pm", "Sm", "Eu", "Gd", "Tb")
).union(("Dy", "Ho", "Er", "Tm", "Yb", "U", "Np", "Pu", "Am", "Cm"))
#: Elements whose ions carry a moment in some of their compounds: taken where there is none of the others.
SOMETIMES_MAGNETIC = frozenset(("Ti", "Nb", "Mo", "Tc", "Rh", "Ta", "W", "Pa"))
#: Size (µB) written where nothing is known.
PLACEHOLDER_MUB = 1.0
#: Sign patterns at k = 0 written for one study.
MOST_PATTERNS = 4

_HALF_VECTORS = [
    (0, 0, 0.5),
    (0.5, 0, 0),
    (0, 0.5, 0),
    (0.5, 0.5, 0),
    (0.5, 0, 0.5),
    (0, 0.5, 0.5),
    (0.5, 0.5, 0.5),
    (0, 0, 1),
    (1, 0, 0),
    (0, 1, 0),
]


@dataclass(frozen=True)
class Magnetic:
    """A site label that carries a moment in the study to be written.

    n_primitive: atoms per primitive cell of the non-magnetic lattice, which is the number of signs.
    """

    label: str
    element: str
    n_primitive: int
    size_muB: float
    known: bool


def likely_magnetic(crystal: Crystal) -> list[str]:
    """Labels of the sites that usually carry a moment, in the order of the crystal; empty where there is none."""
    for elements in (OFTEN_MAGNETIC, SOMETIMES_MAGNETIC):
        labels = [lab for lab, symbol in zip(crystal.labels, crystal.symbols, strict=True) if symbol in elements]
        if labels:
            return list(dict.fromkeys(labels))
    return []


def starting_study(
    crystal: Crystal,
    file: str,
    *,
    sizes_muB: Mapping[str, float] | None = None,
    ordering: Ordering | None = None,
    block: str | None = None,
) -> str:
    """Return the text of a study (TOML) that `read_study` reads and `rank` runs.

    crystal: the structure. file: its path as the study shall name it.
    sizes_muB: moment sizes by site label or element; these sites are then the magnetic ones.
    ordering: what the same file says of moments; it becomes the first candidate and gives the sizes.
    block: the data block of the file, where it holds several.

    Raises InputError for a label the crystal does not have, a size that is not positive, and a structure without
    any site that is likely magnetic; FileError for a path that TOML cannot hold.
    """
    sites = magnetic_sites(crystal, sizes_muB or {}, ordering)
    source = f"file = {_quoted(file)}" + ("" if block is None else f"\nblock = {_quoted(block)}")
    parts = [
        _head(crystal, source),
        _moments(sites),
        _orderings(crystal, sites, source, ordering),
        _probes(crystal, {site.label for site in sites}),
        _SAMPLE,
    ]
    return "\n".join(parts)


def magnetic_sites(crystal: Crystal, sizes: Mapping[str, float], ordering: Ordering | None) -> list[Magnetic]:
    """The sites that carry a moment: those named, else those of the ordering, else those whose element suggests it.

    Raises InputError as `starting_study`.
    """
    chosen: dict[str, tuple[float, bool]] = {}
    for name, size in sizes.items():
        if not (np.isfinite(size) and size > 0):
            raise InputError(f"the moment of {name!r} must be a positive number of Bohr magnetons, got {size!r}.")
    # As in a study, a label goes before an element.
    for name, size in sorted(sizes.items(), key=lambda item: item[0] in crystal.labels):
        for site in crystal.find(name):
            chosen[crystal.labels[site]] = (float(size), True)
    if not chosen and ordering is not None:
        largest = np.linalg.norm(np.abs(ordering.components).sum(axis=0), axis=1)
        for index in np.flatnonzero(ordering.is_magnetic):
            label = ordering.crystal.labels[index]
            chosen[label] = (max(chosen.get(label, (0.0, True))[0], round(float(largest[index]), 6)), True)
    if not chosen:
        chosen = dict.fromkeys(likely_magnetic(crystal), (PLACEHOLDER_MUB, False))
    if not chosen:
        raise InputError(
            "no site holds an element that usually carries a moment "
            f"(the elements are {', '.join(dict.fromkeys(crystal.symbols))}). Name the magnetic sites and their "
            "moments in Bohr magnetons, for example: --moment Mn1=4.6"
        )
    found = []
    for label in dict.fromkeys(crystal.labels):
        if label in chosen:
            indices = crystal.find(label)
            primitive, _ = Setting.of(crystal, (0, 0, 0)).counts(indices)
            found.append(Magnetic(label, crystal.symbols[indices[0]], primitive, *chosen[label]))
    return found


def _head(crystal: Crystal, source: str) -> str:
    lengths = np.linalg.norm(crystal.cell, axis=1)
    counts: dict[tuple[str, str], int] = {}
    for label, symbol in zip(crystal.labels, crystal.symbols, strict=True):
        counts[label, symbol] = counts.get((label, symbol), 0) + 1
    listed = [f"{label} ({count} {symbol})" for (label, symbol), count in counts.items()]
    lines = [
        f"title = {_quoted(f'{formula(crystal)}: which ordering does the dipolar interaction favour?')}",
        "",
        "[crystal]",
        source,
        f"# a, b, c = {lengths[0]:.5g}, {lengths[1]:.5g}, {lengths[2]:.5g} Å",
        *_comment("atoms in the cell: " + ", ".join(listed)),
        "",
    ]
    return "\n".join(lines)


def _moments(sites: Sequence[Magnetic]) -> str:
    lines = ["[moments]  # in Bohr magnetons, by site label or element"]
    if not all(site.known for site in sites):
        lines += [
            "# TO BE REPLACED: which sites are magnetic was guessed from their element, and 1.0 is a placeholder.",
            "# Put in the moments of your compound. Fields scale with the moment, energies with its square.",
        ]
    lines += [f"{_key(site.label)} = {site.size_muB!r}" for site in sites]
    return "\n".join([*lines, ""])


def _orderings(crystal: Crystal, sites: Sequence[Magnetic], source: str, ordering: Ordering | None) -> str:
    lines = [
        "# Candidate orderings. `along` counts along unit vectors parallel to a, b, c (so [1, 1, 0] is the lattice",
        "# direction a + b only where a and b are equally long); `latticedip rank --rotate` turns each",
        "# pattern to its best direction. `signs` holds one sign per atom of a site (of the primitive cell), all + if",
        "# left out. Add, change or remove candidates as you like.",
    ]
    for site in sites:
        lines += _comment(f"order of {site.label}: {_atoms_in_order(crystal, site)}")
    blocks = []
    if ordering is not None:
        blocks.append(f'[[ordering]]\nname = "as in the file"\n{source}\n')
    blocks.append(_ordering("ferromagnet", (0, 0, 0)))
    blocks += [_ordering(name, (0, 0, 0), signs) for name, signs in sign_patterns(sites)]
    # The cell of a file with moments holds its own k already.
    vectors = doubling_vectors(crystal) if ordering is None else []
    blocks += [_ordering(f"alternating, k = ({_spoken(k)})", k) for k in vectors]
    return "\n".join([*lines, "", *blocks])


def sign_patterns(sites: Sequence[Magnetic]) -> list[tuple[str, dict[str, str]]]:
    """Usual antiparallel patterns at k = 0, with names: balanced ones within each label, and labels against others."""
    patterns: list[tuple[str, dict[str, str]]] = []
    balanced = {site.label: _balanced(site.n_primitive) for site in sites}
    most = max((len(signs) for signs in balanced.values()), default=0)
    for i in range(min(most, MOST_PATTERNS)):
        signs = {label: found[i] for label, found in balanced.items() if i < len(found)}
        distinct = list(dict.fromkeys(signs.values()))
        name = "antiferromagnet " + (distinct[0] if len(distinct) == 1 else str(i + 1))
        patterns.append((name, signs))
    if len(sites) > 1:
        against = {site.label: "-" * site.n_primitive for site in sites[1:]}
        others = ", ".join(site.label for site in sites[1:])
        patterns.append((f"{sites[0].label} against {others}", against))
    return patterns


def _balanced(n: int) -> list[str]:
    """Sign lists with as many + as -, made of blocks of equal length 1, 2, 4 and so on, the first sign +."""
    if n % 2:
        return []
    if n == 4:
        return ["+-+-", "++--", "+--+"]
    blocks = [block for block in (1, 2, 4, 8, 16) if n % (2 * block) == 0]
    return [("+" * block + "-" * block) * (n // (2 * block)) for block in blocks]


def doubling_vectors(crystal: Crystal) -> list[tuple[float, float, float]]:
    """Propagation vectors on the zone boundary of the non-magnetic lattice, one of each star.

    Only those under which every centring keeps or turns round a moment, so that signs alone describe them.
    """
    centrings = label_centrings(crystal)
    rotations = operations_of(crystal).rotations
    kept: list[FloatArray] = []
    for candidate in _HALF_VECTORS:
        k = np.array(candidate, dtype=float)
        if np.any(k[~np.asarray(crystal.pbc)] != 0) or _is_lattice_vector(k, centrings):
            continue
        if not _is_lattice_vector(2 * k, centrings):
            continue
        star = [k @ rotation for rotation in rotations]
        if not any(_is_lattice_vector(other - image, centrings) for other in kept for image in star):
            kept.append(k)
    return [(float(k[0]), float(k[1]), float(k[2])) for k in kept]


def _is_lattice_vector(k: FloatArray, centrings: FloatArray) -> bool:
    """Whether k is a reciprocal-lattice vector: whole numbers, and so its product with every centring."""
    numbers = np.concatenate([k, centrings @ k])
    return bool(np.all(np.abs(numbers - np.round(numbers)) < 1e-9))


def _ordering(name: str, k: Sequence[float], signs: Mapping[str, str] | None = None) -> str:
    lines = ["[[ordering]]", f"name = {_quoted(name)}", f"k = [{_spoken(k, quoted=True)}]", "along = [0, 0, 1]"]
    if signs:
        lines.append("signs = { " + ", ".join(f'{_key(label)} = "{text}"' for label, text in signs.items()) + " }")
    return "\n".join([*lines, ""])


def _spoken(k: Sequence[float], quoted: bool = False) -> str:
    half = '"1/2"' if quoted else "1/2"
    return ", ".join(half if x == 0.5 else str(int(x)) for x in k)


def _atoms_in_order(crystal: Crystal, site: Magnetic) -> str:
    indices = crystal.find(site.label)
    shown = [
        f"{number} at ({', '.join(f'{x % 1.0:.4g}' for x in crystal.positions[index])})"
        for number, index in enumerate(indices[:8], start=1)
    ]
    rest = f", and so on ({len(indices)}; `latticedip show` lists all)" if len(indices) > 8 else ""
    fewer = "" if site.n_primitive == len(indices) else f"; {site.n_primitive} per primitive cell"
    return ", ".join(shown) + rest + fewer


def best_nucleus(element: str) -> tuple[str, float] | None:
    """The isotope of an element that gives the strongest NMR signal, with its receptivity; None where there is none.

    The receptivity is abundance × γ³ I(I + 1) (Abragam, Principles of Nuclear Magnetism, 1961, chapter III).
    """
    best: tuple[str, float] | None = None
    for particle in particles():
        if particle.name.lstrip("0123456789") != element or np.isnan(particle.abundance):
            continue
        strength = particle.abundance * particle.MHz_per_T**3 * particle.spin * (particle.spin + 1)
        if best is None or strength > best[1]:
            best = (particle.name, float(strength))
    return best


def _probes(crystal: Crystal, magnetic: set[str]) -> str:
    candidates = []
    for label in dict.fromkeys(crystal.labels):
        nucleus = None if label in magnetic else best_nucleus(crystal.symbols[crystal.find(label)[0]])
        if nucleus is not None:
            candidates.append((label, *nucleus))
    candidates.sort(key=lambda candidate: -candidate[2])
    lines = ["# Where the local field is asked for: a nucleus at a site, or a muon at a position.", ""]
    if candidates:
        label, isotope, _ = candidates[0]
        lines += [
            "[[probe]]",
            f"name = {_quoted(f'{isotope} at {label}')}",
            f"particle = {_quoted(isotope)}",
            f"site = {_quoted(label)}",
            "",
        ]
    lines += [
        "# [[probe]]",
        '# name = "muon A"',
        '# particle = "muon"',
        "# position = [0.5, 0.5, 0.25]  # fractional, in the cell of [crystal]",
        "# contact = [{ shell = 1, coupling_T_per_muB = 0.06 }]  # leave out where unknown",
        "",
    ]
    return "\n".join(lines)


_SAMPLE = """\
# The shape of the sample. Without it a sample without demagnetizing field (N = 0) is assumed, which matters for
# every ordering with a net moment.
# [sample]
# ellipsoid = [1.0, 1.0, 0.3]  # or prism, cylinder = [diameter, height], sphere = true, plate = true, needle = true
# axes = ["a", "b*"]           # directions of the body's first two axes; vectors count as in `along`
# applied_T = [0, 0, 0]        # Cartesian
"""


def formula(crystal: Crystal) -> str:
    """Elements in the order of the file, in smallest whole numbers or, where sites are partly filled, per cell."""
    counts: dict[str, float] = {}
    for symbol, occupancy in zip(crystal.symbols, crystal.occupancies, strict=True):
        counts[symbol] = counts.get(symbol, 0.0) + float(occupancy)
    numbers = list(counts.values())
    if all(abs(n - round(n)) < 1e-6 and round(n) > 0 for n in numbers):
        divisor = int(np.gcd.reduce([round(n) for n in numbers]))
        return "".join(s + (f"{round(n) // divisor}" if round(n) != divisor else "") for s, n in counts.items())
    return " ".join(f"{symbol}{n:.4g}" for symbol, n in counts.items())


def _comment(text: str, width: int = 108) -> list[str]:
    """A text as comment lines; what a file calls its sites must not end the comment."""
    words = re.sub(r"[\x00-\x1f\x7f-\x9f\u2028\u2029]", "?", text).split(" ")
    lines, line = [], "#"
    for word in words:
        if len(line) + 1 + len(word) > width and line != "#":
            lines.append(line)
            line = "#  "
        line += " " + word
    return [*lines, line]


def _key(label: str) -> str:
    return label if re.fullmatch(r"[A-Za-z0-9_-]+", label) else _quoted(label)


def _quoted(text: str) -> str:
    """A TOML basic string; raises FileError for text that is not valid Unicode."""
    try:
        text.encode("utf-8")
    except UnicodeEncodeError:
        raise FileError(f"the name {text!r} is not valid Unicode, so a study cannot hold it.") from None
    # JSON escapes what TOML asks for, except for the delete character.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
