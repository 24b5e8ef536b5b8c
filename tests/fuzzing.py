"""Inputs broken at random, the same for the same seed: bytes, lines, words and values of sound files changed."""

from __future__ import annotations

import random
import tomllib
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from tests.structure_files import SOUND, TEMPLATE

HERE = Path(__file__).parent
#: Words that parsers trip over: numbers that are none or too large, unknown values, quotes, brackets, code, paths.
NASTY = (
    "nan", "inf", "-inf", "1e308", "-1e308", "1e999", "1e-320", "0", "-0", "-1", "1000000000", "99999999999999999999",
    "0x10", "1_000", "1.2.3", "1(", "1()", "1(2", "1(99999)", "0.5(3)", "?", ".", "''", '""', "'", '"', ";", "\n;\n",
    "#",
    "[", "]", "[[", "{", "}", "{}", "[]", "loop_", "data_", "data_x", "save_", "_", "_cell_length_a", "$x", "=1+1",
    "@x",
    "x,y,z", "x,y,z,+1", "x,y,z,-1", "-x,-y", "x+1/0,y,z", "x/2,y,z", "x*1e9,y,z", "Mn", "Xx", "X", "D", "Mn2+", "Mn1",
    "../../etc/passwd", "/dev/zero", "/dev/null", "$(id)", "`id`", "%s%n", "\\", "\t", "\r", "\x00", "\x1b[2J",
    "\ufeff",
    "é", "µ", "½", "\u202e", "🜨", "A" * 300, "9" * 400, "true", "false", "null", "1979-05-27",
    "1/3", "1/0", "-1/3", "+",
    "+-", "+-0+", "T", "F", "Direct", "Cartesian", "P 1", "F d -3 m", "1e9", "1e6", "1e-6", "1e-2", "180", "-90",
    "0.3333",
)  # fmt: skip


def corpus() -> dict[str, list[tuple[str, bytes]]]:
    """Sound inputs by kind: (suffix, bytes) of structure files, and of studies and templates."""
    rng = random.Random(0)
    cif = [(path.suffix, path.read_bytes()) for path in sorted(HERE.glob("data/**/*.*cif"))]
    cif += [(suffix, maker(rng).encode()) for maker, suffix in SOUND.values() if "cif" in suffix]
    other = [(suffix, maker(rng).encode()) for maker, suffix in SOUND.values() if "cif" not in suffix]
    other += [
        (".xyz", b"3\nwater\nO 0 0 0\nH 0.76 0.59 0\nH -0.76 0.59 0\n"),
        (
            ".extxyz",
            b'2\nLattice="4 0 0 0 4 0 0 0 4" Properties=species:S:1:pos:R:3:magmoms:R:3 pbc="T T F"\n'
            b"Mn 0 0 0 0 0 4.1\nMn 2 2 2 0 0 -4.1\n",
        ),
        (
            ".res",
            b"TITL x\nCELL 1.0 4.0 4.1 8.9 90 95 90\nLATT -1\nSFAC Mn F\nMn 1 0 0 0.1 1.0\nF 2 0.5 0.5 0.2 1.0\nEND\n",
        ),
        (
            ".pdb",
            b"CRYST1    4.000    4.000    9.000  90.00  90.00  90.00 P 1\n"
            b"ATOM      1 MN   MOL     1       0.000   0.000   1.000  1.00  0.00          MN\n"
            b"ATOM      2  F   MOL     1       2.000   2.000   1.100  1.00  0.00           F\nEND\n",
        ),
        (
            ".xsf",
            b"CRYSTAL\nPRIMVEC\n4 0 0\n0 4 0\n0 0 9\nPRIMCOORD\n2 1\n25 0 0 1\n9 2 2 1.1\n",
        ),
        (
            ".cell",
            b"%BLOCK LATTICE_CART\n4 0 0\n0 4 0\n0 0 9\n%ENDBLOCK LATTICE_CART\n%BLOCK POSITIONS_FRAC\n"
            b"Mn 0 0 0.1\nF 0.5 0.5 0.1\n%ENDBLOCK POSITIONS_FRAC\n",
        ),
        (".gen", b"2 F\nMn F\n1 1 0 0 0.1\n2 2 0.5 0.5 0.1\n0 0 0\n4 0 0\n0 4 0\n0 0 9\n"),
    ]
    studies = [(".toml", path.read_bytes()) for path in sorted(HERE.glob("data/study/chains.toml"))]
    studies.append((".toml", STUDY.encode()))
    templates = [(".toml", TEMPLATE.encode()), (".toml", RULED.encode())]
    return {"cif": cif, "other": other, "study": studies, "template": templates}


STUDY = """[crystal]
file = "centred.cif"
[moments]
Ni = 1.9
[[ordering]]
name = "a"
k = ["1/2", "1/2", "1/2"]
along = [1, 1, -2]
[[ordering]]
name = "b"
k = [0, 0, 1]
along = { Ni = [0, 0, 1] }
signs = { Ni = "+" }
[[ordering]]
name = "c"
k = [0.21, 0, 0]
cosine = { Ni = [1, 0, 0] }
sine = { Ni = [0, 1, 0] }
phase = "cell"
[[probe]]
position = [0.25, 0.25, 0.25]
[sample]
cylinder = [1, 2.5]
axes = ["c"]
applied_T = [0, 0, 1]
"""
RULED = """title = "rules"
[batch]
do = ["rank", "field"]
orderings = ["file"]
rotate = true
axes = "crystal"
tol = 1e-8
[[probe]]
rule = "every F site"
[[probe]]
rule = "points at least 1 Å from any atom"
spacing_A = 1.5
"""


def broken(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    """A sound input with one to four changes."""
    for _ in range(rng.choice((1, 1, 1, 2, 2, 4))):
        data = rng.choice(CHANGES)(rng, data, others)
        if len(data) > 200_000:
            data = data[:200_000]
    return data


def _bytes(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    changed = bytearray(data or b"\0")
    for _ in range(rng.choice((1, 1, 3, 20))):
        changed[rng.randrange(len(changed))] = rng.randrange(256)
    return bytes(changed)


def _cut(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    a, b = sorted(rng.randrange(len(data) + 1) for _ in range(2))
    return rng.choice((data[:a], data[a:], data[:a] + data[b:], data[a:b]))


def _insert(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    at = rng.randrange(len(data) + 1)
    piece = rng.choice((rng.randbytes(rng.randrange(1, 30)), rng.choice(NASTY).encode()))
    return data[:at] + piece * rng.choice((1, 1, 1, 50)) + data[at:]


def _lines(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    lines = data.split(b"\n")
    i, j = rng.randrange(len(lines)), rng.randrange(len(lines))
    kind = rng.randrange(5)
    if kind == 0:
        del lines[i]
    elif kind == 1:
        lines.insert(j, lines[i])
    elif kind == 2:
        lines[i], lines[j] = lines[j], lines[i]
    elif kind == 3:
        lines[i:i] = [lines[i]] * rng.choice((2, 30, 400))
    else:
        rng.shuffle(lines)
    return b"\n".join(lines)


def _words(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    lines = data.split(b"\n")
    for _ in range(rng.choice((1, 1, 1, 2, 5))):
        i = rng.randrange(len(lines))
        words = lines[i].split(b" ")
        w = rng.randrange(len(words))
        kind = rng.randrange(6)
        if kind == 0:
            del words[w]
        elif kind == 1:
            words.insert(w, rng.choice(words))
        elif kind == 2 and words[w]:
            words[w] = words[w][:-1] + str(rng.randrange(10)).encode()
        else:
            words[w] = rng.choice(NASTY).encode()
        lines[i] = b" ".join(words)
    return b"\n".join(lines)


def _splice(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    lines, more = data.split(b"\n"), rng.choice(others).split(b"\n")
    a, b = sorted(rng.randrange(len(more) + 1) for _ in range(2))
    at = rng.randrange(len(lines) + 1)
    return b"\n".join(lines[:at] + more[a:b] + lines[rng.choice((at, len(lines))) :])


def _encoding(rng: random.Random, data: bytes, others: Sequence[bytes]) -> bytes:
    text = data.decode("utf-8", "replace")
    return rng.choice(
        (
            text.encode("utf-16"),
            b"\xef\xbb\xbf" + data,
            data.replace(b"\n", b"\r\n"),
            data.replace(b"\n", b"\r"),
            data.replace(b" ", b"\t"),
            text.upper().encode(),
            text.swapcase().encode(),
            data.rstrip(b"\n"),
            data + data,
            data.replace(b".", b","),
        )
    )


CHANGES: tuple[Callable[[random.Random, bytes, Sequence[bytes]], bytes], ...] = (
    _bytes, _cut, _insert, _lines, _lines, _words, _words, _words, _words, _splice, _encoding,
)  # fmt: skip


# Studies by their values, so that what is broken is still TOML


def broken_study(rng: random.Random, data: bytes) -> bytes:
    """A study that is sound TOML with one to three of its values, keys or tables changed."""
    document = tomllib.loads(data.decode())
    for _ in range(rng.choice((1, 1, 2, 3))):
        place, key = rng.choice(places(document))
        kind = rng.randrange(7)
        if kind == 0:
            del place[key]
        elif kind == 1 and isinstance(place, dict):
            place[rng.choice((key[:-1] or "k", key + "s", "", "a b", rng.choice(NASTY[:60])))] = place.pop(key)
        elif kind == 2 and isinstance(place, list):
            place.append(place[key])
        else:
            place[key] = _value(rng, place[key])
    return as_toml(document).encode("utf-8", "surrogatepass")


def places(value: Any) -> list[tuple[Any, Any]]:
    """(container, key) of everything in a document, at any depth."""
    found: list[tuple[Any, Any]] = []
    for key in value if isinstance(value, dict) else range(len(value)):
        found.append((value, key))
        if isinstance(value[key], (dict, list)):
            found += places(value[key])
    return found or [({"x": 0}, "x")]


def _value(rng: random.Random, old: Any) -> Any:
    number = rng.choice((0, -1, 1, 2, 1e-9, 1e-3, 0.5, 1e3, 1e6, 1e9, 1e300, 10**18, -(10**400), 5e-324, 1e-300))
    return rng.choice(
        (
            number, number, number, float("nan"), float("inf"), True, False, "", rng.choice(NASTY), rng.choice(NASTY),
            [], {}, [old], [old] * 3, [number] * 3, [[number] * 3] * 3, [0, 0, 0], {"x": old},
            {"Mn": old, "Ni": number}, "a*", [old] * 2000, "19F", "muon", "63Cu", "+" * 500, ["1/3", "1/7", "-11/13"],
        )
    )  # fmt: skip


def as_toml(document: dict[str, Any]) -> str:
    """A document as TOML, tables written in line."""
    return "".join(f"{_quoted(key)} = {_inline(value)}\n" for key, value in document.items())


def _inline(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return _quoted(value)
    if isinstance(value, list):
        return "[" + ", ".join(map(_inline, value)) + "]"
    if isinstance(value, dict):
        return "{" + ", ".join(f"{_quoted(key)} = {_inline(item)}" for key, item in value.items()) + "}"
    if isinstance(value, int):
        sign, size = ("-", -value) if value < 0 else ("", value)
        return sign + (str(size) if size < 10**50 else "1" + "0" * 400)
    return repr(value)


def _quoted(text: str) -> str:
    plain = (c if c.isprintable() and c not in '"\\' else f"\\U{ord(c):08x}" for c in str(text))
    return '"' + "".join(plain) + '"'
