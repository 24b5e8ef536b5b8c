"""Invented structure files in several formats, some of them broken, from a seed: what batches are tried on."""

from __future__ import annotations

import random
from collections.abc import Callable
from pathlib import Path

MAGNETIC = ("Mn", "Fe", "Co", "Ni")
ANIONS = ("F", "O", "Cl")
SPACERS = ("Rb", "K", "Ba")
#: A template that fits every sound file made here.
TEMPLATE = """title = "Which way does each of them order?"

[moments]
Mn = 4.4
Fe = 4.0
Co = 3.1
Ni = 2.0

[[ordering]]
name = "ferromagnet along c"
k = [0, 0, 0]
along = [0, 0, 1]

[[ordering]]
name = "ferromagnet along a"
k = [0, 0, 0]
along = [1, 0, 0]

[[ordering]]
name = "doubled along c"
k = [0, 0, "1/2"]
along = [1, 0, 0]

[[probe]]
position = [0.27, 0.31, 0.44]
"""

CIF_HEAD = """data_{name}
_cell_length_a {a}
_cell_length_b {b}
_cell_length_c {c}
_cell_angle_alpha 90
_cell_angle_beta {beta}
_cell_angle_gamma 90
"""
ATOMS = """loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
"""
TETRAGONAL = ("x,y,z", "-x,-y,z", "-y,x,z", "y,-x,z", "-x,y,-z", "x,-y,-z", "y,x,-z", "-y,-x,-z")


def _parts(rng: random.Random) -> tuple[str, str, str, float, float]:
    return (
        rng.choice(MAGNETIC),
        rng.choice(ANIONS),
        rng.choice(SPACERS),
        round(rng.uniform(3.9, 4.4), 4),
        round(rng.uniform(8.2, 9.9), 4),
    )


def bilayer_cif(rng: random.Random) -> str:
    """A tetragonal bilayer, 14 atoms, symmetry as a list of operations."""
    m, x, s, a, c = _parts(rng)
    z = rng.uniform(0.22, 0.25)
    operations = [*TETRAGONAL, *("".join(_inverted(op)) for op in TETRAGONAL)]
    return (
        CIF_HEAD.format(name="bilayer", a=a, b=a, c=c, beta=90)
        + "loop_\n_space_group_symop_operation_xyz\n"
        + "\n".join(operations)
        + f"\n{ATOMS}{m}1 {m} 0 0 {z:.4f}\n{x}1 {x} 0.5 0 {z + 0.006:.4f}\n{x}2 {x} 0 0 0\n{s}1 {s} 0.5 0.5 0\n"
        + f"{s}2 {s} 0.5 0.5 0.5\n"
    )


def _inverted(operation: str) -> str:
    return ",".join(part[1:] if part.startswith("-") else "-" + part for part in operation.split(","))


def rocksalt_cif(rng: random.Random) -> str:
    """A face-centred cell by its symbol, 8 atoms."""
    m, x, _, a, _ = _parts(rng)
    return (
        CIF_HEAD.format(name="rocksalt", a=a, b=a, c=a, beta=90)
        + f"_space_group_name_H-M_alt 'F m -3 m'\n{ATOMS}{m} {m} 0 0 0\n{x} {x} 0.5 0.5 0.5\n"
    )


def monoclinic_cif(rng: random.Random, atoms: int | None = None) -> str:
    """All atoms in P 1, 12 to 40 of them on a bent grid."""
    m, x, _, a, c = _parts(rng)
    n = atoms or rng.choice((12, 18, 24, 40))
    lines = []
    for i in range(n):
        kind = m if i % 4 == 0 else x
        spot = [(i % 2) / 2 + 0.1, (i // 2 % 3) / 3 + 0.05, (i // 6) / 7 + 0.02]
        shift = [rng.uniform(-0.02, 0.02) for _ in range(3)]
        place = " ".join(f"{p + q:.5f}" for p, q in zip(spot, shift, strict=True))
        lines.append(f"{kind}{i + 1} {kind} {place}")
    head = CIF_HEAD.format(name="monoclinic", a=a, b=a + 2.1, c=2 * c, beta=round(rng.uniform(92, 112), 2))
    return head + f"_space_group_name_H-M_alt 'P 1'\n{ATOMS}" + "\n".join(lines) + "\n"


def magnetic_cif(rng: random.Random) -> str:
    """A magCIF whose second atom is flipped by an anti-translation."""
    m, x, _, a, c = _parts(rng)
    tilt = rng.uniform(0, 2)
    return (
        CIF_HEAD.format(name="magnetic", a=a, b=a, c=c, beta=90)
        + "loop_\n_space_group_symop_magn_operation.id\n_space_group_symop_magn_operation.xyz\n1 x,y,z,+1\n"
        + "loop_\n_space_group_symop_magn_centering.id\n_space_group_symop_magn_centering.xyz\n"
        + "1 x,y,z,+1\n2 x,y,z+1/2,-1\n"
        + f"{ATOMS}{m}1 {m} 0 0 0.12\n{x}1 {x} 0.5 0.5 0.1\n"
        + "loop_\n_atom_site_moment.label\n_atom_site_moment.crystalaxis_x\n_atom_site_moment.crystalaxis_y\n"
        + f"_atom_site_moment.crystalaxis_z\n{m}1 {tilt:.3f} 0 3.0\n"
    )


def _grid(rng: random.Random) -> tuple[list[float], list[tuple[str, list[float]]]]:
    m, x, s, a, c = _parts(rng)
    cell = [a, a * 1.1, c]
    places = [
        (m, [0, 0, 0.1]),
        (m, [0.02, 0.01, 0.6]),
        (x, [0.5, 0.5, 0.12]),
        (x, [0.5, 0.48, 0.63]),
        (s, [0.5, 0, 0.4]),
    ]
    return cell, [(kind, [p + rng.uniform(-0.01, 0.01) for p in place]) for kind, place in places]


def extended_xyz(rng: random.Random) -> str:
    """Five atoms as extended XYZ."""
    cell, places = _grid(rng)
    lattice = f"{cell[0]} 0 0 0 {cell[1]} 0 0 0 {cell[2]}"
    rows = [
        f"{kind} " + " ".join(f"{p * length:.6f}" for p, length in zip(place, cell, strict=True))
        for kind, place in places
    ]
    return f'{len(rows)}\nLattice="{lattice}" Properties=species:S:1:pos:R:3 pbc="T T T"\n' + "\n".join(rows) + "\n"


def poscar(rng: random.Random) -> str:
    """Five atoms as a POSCAR."""
    cell, places = _grid(rng)
    kinds = list(dict.fromkeys(kind for kind, _ in places))
    counts = [sum(kind == other for other, _ in places) for kind in kinds]
    rows = [" ".join(f"{p:.6f}" for p in place) for kind in kinds for other, place in places if other == kind]
    lattice = f"{cell[0]} 0 0\n0 {cell[1]} 0\n0 0 {cell[2]}"
    head = f"invented\n1.0\n{lattice}\n{' '.join(kinds)}\n{' '.join(map(str, counts))}\nDirect\n"
    return head + "\n".join(rows) + "\n"


Maker = Callable[[random.Random], str]
SOUND: dict[str, tuple[Maker, str]] = {
    "bilayer": (bilayer_cif, ".cif"),
    "rocksalt": (rocksalt_cif, ".cif"),
    "monoclinic": (monoclinic_cif, ".cif"),
    "magnetic": (magnetic_cif, ".mcif"),
    "grid": (extended_xyz, ".xyz"),
    "poscar": (poscar, ".vasp"),
}
#: Ways to break a file, each from the text of a sound one.
BREAKS: dict[str, Callable[[str, random.Random], bytes]] = {
    "empty": lambda text, rng: b"",
    "cut": lambda text, rng: text[: len(text) // 3].encode(),
    "noise": lambda text, rng: rng.randbytes(400),
    "zero bytes": lambda text, rng: text.encode() + b"\0\0",
    "no number": lambda text, rng: text.replace("0.5", "half", 1).replace("0.1", "tenth", 1).encode(),
    "no magnetic element": lambda text, rng: _without_magnetic(text).encode(),
    "page": lambda text, rng: b"<html><body>404 Not Found</body></html>\n",
}


def _without_magnetic(text: str) -> str:
    for element in MAGNETIC:
        text = text.replace(element, "Zn")
    return text


def write_files(folder: Path, n: int, *, seed: int = 0, broken: float = 0.05) -> list[Path]:
    """n files in a folder; that fraction of them broken, in all ways in turn. The same seed gives the same files."""
    rng = random.Random(seed)
    folder.mkdir(parents=True, exist_ok=True)
    kinds, ways = list(SOUND), list(BREAKS)
    made = []
    every = round(1 / broken) if broken else n + 1
    for i in range(n):
        kind = kinds[i % len(kinds)]
        maker, suffix = SOUND[kind]
        data = maker(rng).encode()
        if i % every == every - 1:
            data = BREAKS[ways[(i // every) % len(ways)]](data.decode(), rng)
        path = folder / f"{i:05d}_{kind}{suffix}"
        path.write_bytes(data)
        made.append(path)
    return made
