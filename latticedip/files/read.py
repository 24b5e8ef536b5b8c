"""Structure and ordering files in: CIF and magCIF by our own reader, every other format through ASE.

A file is a CIF by its suffix (.cif, .mcif, .magcif) or where its first word is ``data_...``. ASE would read a
CIF too, but drops magnetic operations without a word, so it never gets one.
"""

from __future__ import annotations

import os
import re
import warnings
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from latticedip.crystal.model import Crystal
from latticedip.errors import FileError, LatticedipError
from latticedip.files.cif import occupancy_notes, read_structure
from latticedip.files.cifsyntax import Block, choose_block, decode, parse_blocks
from latticedip.files.counts import check_counts
from latticedip.files.fourier import has_series
from latticedip.files.magcif import is_magnetic, read_magnetic_crystal, read_magnetic_ordering
from latticedip.files.modulated import is_modulated, read_modulated_crystal, read_modulated_ordering
from latticedip.files.moments import has_moments
from latticedip.ordering.model import Ordering

if TYPE_CHECKING:
    from ase import Atoms

#: Larger files (bytes) are refused.
MAX_BYTES = 50_000_000
CIF_SUFFIXES = (".cif", ".mcif", ".magcif")
_COMPRESSED = {b"\x1f\x8b": "gzip", b"BZh": "bzip2", b"\xfd7zXZ": "xz", b"PK\x03\x04": "zip"}
#: White space and comments, then the first word.
_FIRST_WORD = re.compile(r"(?:\s+|#[^\n]*(?:\n|\Z))*(\S{1,80})")

_T = TypeVar("_T")


def read_crystal(path: str | os.PathLike[str], *, block: str | int | None = None) -> Crystal:
    """Read a crystal: CIF, magCIF, or any format ASE reads; the whole cell, symmetry expanded.

    path: the file. block: the data block of a CIF, or the number of the image (1 is the first, −1 the last) of a
    format that holds several; a file that holds several structures is refused without it.

    A magCIF gives all atoms of the magnetic cell (in superspace: of the average one). Sites of a CIF keep their labels,
    and their coordinates are brought into [0, 1); a lies along x, b in the xy plane.

    Raises FileError, with one message that names file, item and value, for whatever cannot be understood.
    """
    name, data = _load(path)
    if _is_cif(name, data):
        chosen = choose_block(parse_blocks(data, name), name, None if block is None else str(block))
        return _crystal_in(chosen, _title(name))
    return _crystal_of(name, _read_ase(name, data, block))


def read_ordering(path: str | os.PathLike[str], *, block: str | int | None = None) -> Ordering:
    """Read an ordering: magCIF, or any file whose magnetic moments ASE reads (scalar ones lie along Cartesian z).

    path, block: as for `read_crystal`. Moments come in µB; those of a magCIF are turned from its crystal-axis,
    Cartesian or spherical components, its standard uncertainties are kept in ``moment_su``, and the change of
    cell from the parent structure in ``parent``. A magCIF in (3+1)D superspace gives an ordering of the average cell,
    with components at the multiples of its wave vector; the uncertainties of their cosines and sines (or moduli and
    phases) are kept in ``amplitude_su``.

    Raises FileError, with one message that names file, item and value, for whatever cannot be understood: no
    moments, moments that the symmetry of their site forbids, several independent wave vectors, modulated positions or
    occupancies, the OG setting.
    """
    name, data = _load(path)
    if _is_cif(name, data):
        chosen = choose_block(parse_blocks(data, name), name, None if block is None else str(block))
        if not (is_modulated(chosen) or is_magnetic(chosen) or has_moments(chosen)):
            _structure_only(chosen)
        return _ordering_in(chosen, _title(name))
    return _ordering_of(name, _read_ase(name, data, block))


def read_file(path: str | os.PathLike[str], *, block: str | int | None = None) -> Crystal | Ordering:
    """Read an Ordering where the file states moments, else a Crystal; path, block and errors as `read_ordering`."""
    name, data = _load(path)
    if _is_cif(name, data):
        chosen = choose_block(parse_blocks(data, name), name, None if block is None else str(block))
        if has_moments(chosen) or has_series(chosen):
            return _ordering_in(chosen, _title(name))
        return _crystal_in(chosen, _title(name))
    atoms = _read_ase(name, data, block)
    results = getattr(atoms.calc, "results", {})
    if atoms.get_initial_magnetic_moments().any() or "magmoms" in results:
        return _ordering_of(name, atoms)
    return _crystal_of(name, atoms)


def _crystal_in(block: Block, title: str) -> Crystal:
    if is_modulated(block):
        return read_modulated_crystal(block, title)
    if is_magnetic(block):
        return read_magnetic_crystal(block, title)
    return read_structure(block, title).crystal


def _ordering_in(block: Block, title: str) -> Ordering:
    return read_modulated_ordering(block, title) if is_modulated(block) else read_magnetic_ordering(block, title)


def _structure_only(block: Block) -> None:
    read_structure(block, "")
    raise block.error(
        "it holds a structure without magnetic moments. Give a magCIF, or use it as the [crystal] of a study and "
        "state the moments there."
    )


def _title(name: str) -> str:
    return Path(name).stem


def _load(path: str | os.PathLike[str]) -> tuple[str, bytes]:
    """Name and bytes of a file; raises FileError where there is none, it is empty, too large or compressed."""
    name = os.fspath(path)
    if not isinstance(name, str):
        raise FileError(f"the path {name!r} is not a text.")
    try:
        if os.path.isdir(name):
            raise FileError(f"{name}: this is a directory, not a file.")
        if not os.path.exists(name):
            raise FileError(f"{name}: there is no such file.")
        if not os.path.isfile(name):
            raise FileError(f"{name}: this is not an ordinary file.")
        size = os.path.getsize(name)
        if size > MAX_BYTES:
            raise FileError(f"{name}: the file has {size / 1e6:.0f} MB; at most {MAX_BYTES / 1e6:.0f} MB are read.")
        with open(name, "rb") as stream:
            data = stream.read()
    except (OSError, ValueError) as error:
        if isinstance(error, FileError):
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise FileError(f"{name}: the file cannot be read ({reason}).") from None
    if not data.strip():
        raise FileError(f"{name}: the file is empty.")
    for magic, kind in _COMPRESSED.items():
        if data.startswith(magic):
            raise FileError(f"{name}: the file is compressed ({kind}). Unpack it first.")
    return name, data


def _is_cif(name: str, data: bytes) -> bool:
    if name.lower().endswith(CIF_SUFFIXES):
        return True
    if b"\0" in data[:4096]:
        return False
    first = _FIRST_WORD.match(decode(data[:100_000]))
    return first is not None and first.group(1).lower().startswith("data_")


def _read_ase(name: str, data: bytes, block: str | int | None) -> Atoms:
    """The one structure of a file that ASE reads; raises FileError where ASE cannot, or where it finds several."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import ase.io
        from ase.io.formats import UnknownFileTypeError

        try:
            kind = ase.io.formats.filetype(name)
            if kind in ("cif", "mcif"):
                raise FileError(
                    f"{name}: this seems to be a CIF, but it does not begin with data_. Name it .cif, or mend its head."
                )
            check_counts(kind, name, data)
            images = ase.io.read(name, index=":", format=kind, do_not_split_by_at_sign=True)
        except LatticedipError:
            raise
        except UnknownFileTypeError:
            raise FileError(
                f"{name}: the format is not known. Give a CIF, a magCIF or a format that ASE reads."
            ) from None
        except Exception as error:  # ASE's readers raise whatever their parsing runs into
            raise FileError(f"{name}: ASE cannot read it ({type(error).__name__}: {_first_line(error)}).") from None
    found: list[Any] = list(images) if isinstance(images, list) else [images]
    if not found:
        raise FileError(f"{name}: ASE finds no structure in it.")
    chosen = found[_image_number(name, len(found), block)]
    if len(chosen) == 0:
        raise FileError(f"{name}: ASE finds no atoms in it (read as {kind}).")
    unnamed = [i for i, number in enumerate(chosen.numbers.tolist(), start=1) if number == 0]
    if unnamed:
        raise FileError(f"{name}: ASE finds no element for atom {unnamed[0]} (read as {kind}).")
    return chosen


def _crystal_of(name: str, atoms: Atoms) -> Crystal:
    return _with_name(name, lambda: _noted(Crystal.from_ase(atoms)))


def _ordering_of(name: str, atoms: Atoms) -> Ordering:
    ordering = _with_name(name, lambda: Ordering.from_ase(atoms, _title(name)))
    return replace(ordering, crystal=_noted(ordering.crystal))


def _noted(crystal: Crystal) -> Crystal:
    return replace(crystal, notes=crystal.notes + occupancy_notes(crystal.labels, crystal.occupancies.tolist()))


def _image_number(name: str, count: int, block: str | int | None) -> int:
    if block is None:
        if count > 1:
            raise FileError(
                f"{name}: the file holds {count} structures. Say which with block, 1 to {count} (-1 is the last)."
            )
        return 0
    try:
        number = int(block)
    except ValueError:
        number = 0
    if not (1 <= number <= count or number == -1):
        raise FileError(
            f"{name}: block must be the number of a structure, 1 to {count} (or -1 for the last), got {block!r}."
        )
    return number - 1 if number > 0 else -1


def _first_line(error: Exception) -> str:
    lines = str(error).strip().splitlines()
    return lines[0][:200] if lines else "no further word"


def _with_name(name: str, build: Callable[[], _T]) -> _T:
    """Run a conversion and put the name of the file before its message."""
    try:
        return build()
    except FileError:
        raise
    except LatticedipError as error:
        raise FileError(f"{name}: {error}") from None
