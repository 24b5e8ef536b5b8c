"""One function per command: a study or a file in, the document with its results out."""

from __future__ import annotations

import dataclasses
import logging
import os
import shlex
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal, TypeVar

from latticedip.errors import InputError, StudyError, near_match

if TYPE_CHECKING:
    from latticedip.analysis.propose import Proposal
    from latticedip.ordering.model import Ordering
    from latticedip.probe import Probe
    from latticedip.study.fields import Axes, Unit
    from latticedip.study.rank_options import RankOptions
    from latticedip.study.schema import Study
    from latticedip.study.search import Search
    from latticedip.study.spectra import SpectrumOptions

T = TypeVar("T", "Ordering", "Probe")

_STRUCTURE_SUFFIXES = {".cif", ".mcif", ".magcif", ".xyz", ".extxyz", ".vasp", ".poscar", ".res", ".pdb"}

_log = logging.getLogger(__name__)


def is_study(path: Path) -> bool:
    """Return whether a path is meant as a study: its name ends in .toml."""
    return path.suffix.lower() == ".toml"


def open_study(path: Path) -> Study:
    """Read a study; a structure file in its place is refused with the command that makes a study of it.

    Raises StudyError, FileError and what else `read_study` raises.
    """
    from latticedip.study.schema import read_study

    if path.suffix.lower() in _STRUCTURE_SUFFIXES:
        raise StudyError(
            f"{str(path)!r} is a structure file, not a study. "
            f"Write a study for it with: latticedip start {shlex.quote(str(path))} -o study.toml"
        )
    study = read_study(path)
    _log.info(
        "read %s: %d sites, %d orderings, %d probes",
        path,
        study.crystal.n_sites,
        len(study.orderings),
        len(study.probes),
    )
    if _log.isEnabledFor(logging.INFO):
        from latticedip.crystal.symmetry import operations_of

        found = operations_of(study.crystal)
        _log.info("symmetry: %d operations of the structure without moments", len(found.rotations))
    return study


def start(
    path: Path, *, output: Path | None = None, sizes_muB: Mapping[str, float] | None = None, block: str | None = None
) -> dict[str, Any]:
    """The document of `start`: the text of a study for a structure file, and its magnetic sites as rows.

    output: where the study will be, which the path of the structure is made relative to; None: here.

    Raises what `read_crystal`, `read_ordering` and `starting_study` raise.
    """
    from latticedip.files.read import read_file
    from latticedip.ordering.model import Ordering
    from latticedip.study.documents import NO_SUM, document
    from latticedip.study.start import magnetic_sites, starting_study

    if is_study(path):
        raise InputError(f"{str(path)!r} is a study already; start takes a structure file.")
    found = read_file(path, block=block)
    ordering = found if isinstance(found, Ordering) else None
    crystal = found.crystal if isinstance(found, Ordering) else found
    folder = Path.cwd() if output is None else output.absolute().parent
    try:
        file = Path(os.path.relpath(path.absolute(), folder)).as_posix()
    except ValueError:  # another drive: no relative path leads there
        file = path.absolute().as_posix()
    sizes = sizes_muB or {}
    rows = [
        {"site": site.label, "element": site.element, "moment_muB": site.size_muB, "known": site.known}
        for site in magnetic_sites(crystal, sizes, ordering)
    ]
    text = starting_study(crystal, file, sizes_muB=sizes, ordering=ordering, block=block)
    return document(
        "start",
        files={"structure": path},
        options={"moments_muB": dict(sizes)},
        boundary=NO_SUM,
        results={"study": text, "rows": rows},
    )


def show(
    path: Path, *, block: str | None = None, orderings: Sequence[str] = (), probes: Sequence[str] = ()
) -> dict[str, Any]:
    """The document of `show` for a study or a structure file.

    orderings, probes: names of those of a study that count; none: all.

    Raises InputError for a name that the study does not have, and what `read_study`, `read_crystal` and
    `read_ordering` raise.
    """
    from latticedip.files.read import read_file
    from latticedip.study.describe import describe_structure, describe_study

    if is_study(path):
        study = choose(open_study(path), orderings=orderings, probes=probes)
        return describe_study(study, orderings=orderings, probes=probes)
    return describe_structure(path, read_file(path, block=block))


def drawing(
    path: Path,
    *,
    block: str | None = None,
    view: str | None = None,
    orderings: Sequence[str] = (),
    probes: Sequence[str] = (),
) -> dict[str, Any]:
    """What a drawing of a study or a structure file shows: cells, atoms with their moments, probes with their fields.

    view: the crystal direction that it is seen from, such as "a" or "1 1 0". orderings, probes: as `show`.

    Raises what `show` and `local_field` raise, and InputError for a view that is no direction.
    """
    from latticedip.files.read import read_file
    from latticedip.study.drawings import drawing_of_structure, drawing_of_study

    if is_study(path):
        study = choose(open_study(path), orderings=orderings, probes=probes)
        return drawing_of_study(study, view=view, orderings=orderings, probes=probes)
    return drawing_of_structure(path, read_file(path, block=block), view=view)


def field(
    study: Study,
    *,
    axes: Axes = "cartesian",
    unit: Unit = "T",
    orderings: Sequence[str] = (),
    probes: Sequence[str] = (),
    tol: float = 1e-10,
) -> dict[str, Any]:
    """The document of `field`: the local field at every probe of a study under every ordering.

    orderings, probes: names of those that count; none: all.

    Raises StudyError for a study without orderings or without probes, InputError for an unknown name, and what
    `local_field` raises.
    """
    from latticedip.physics.field import local_field
    from latticedip.study.fields import field_document

    _need_orderings(study)
    _need_probes(study, "a field")
    study = choose(study, orderings=orderings, probes=probes)
    fields = []
    for ordering in study.orderings:
        _log.info("field under %s", ordering.name)
        spread = study.moment_spread or None
        fields.append(local_field(ordering, study.probes, moment_spread=spread, sample=study.sample, tol=tol))
    return field_document(study, fields, axes=axes, unit=unit, orderings=orderings, probes=probes, tol=tol)


def rank(study: Study, options: RankOptions | None = None) -> dict[str, Any]:
    """The document of `rank`: the orderings of a study by their energy per magnetic ion, lowest first.

    Raises StudyError for a study without orderings, or without moment sizes where the bound is asked for; InputError
    for an unknown name, and what `latticedip.rank` raises.
    """
    from latticedip.analysis.rank import rank as rank_orderings
    from latticedip.study.rank_options import RankOptions, check_bound
    from latticedip.study.rankings import rank_document

    options = RankOptions() if options is None else options
    _need_orderings(study)
    check_bound(study, options)
    study = choose(study, orderings=options.orderings)
    ranking = rank_orderings(
        study.orderings,
        sample=study.sample,
        rotate=options.rotate,
        probes=study.probes,
        moment_spread=study.moment_spread or None,
        tol=options.tol,
    )
    return _noted(rank_document(study, ranking, options), _each_position(study, "fields are", "`field`"))


def directions(study: Study, *, steps: int = 18, orderings: Sequence[str] = (), tol: float = 1e-10) -> dict[str, Any]:
    """The document of `directions`: the energy of every collinear ordering against the direction of its moments.

    orderings: names of those that count; none: all.

    Raises StudyError for a study without orderings, InputError for an unknown name or where none is collinear, and what
    `energy_against_direction` raises.
    """
    from latticedip.study.turns import directions_document

    _need_orderings(study)
    found = directions_document(choose(study, orderings=orderings), steps=steps, orderings=orderings, tol=tol)
    return _noted(found, _point_energies(study))


def modes(
    study: Study, *, points: int = 200, keep: int = 6, need_path: bool = False, tol: float = 1e-10
) -> dict[str, Any]:
    """The document of `modes`: the lowest dipolar modes of a study, and all of them along the band path.

    Arguments and errors as `modes_document`.
    """
    from latticedip.study.modes import modes_document

    found = modes_document(study, points=points, keep=keep, need_path=need_path, tol=tol)
    return _noted(found, _point_energies(study))


def propose(study: Study, search: Search, *, tol: float = 1e-10) -> tuple[dict[str, Any], Proposal]:
    """The document of `propose` and what it was made of.

    Errors as `propose_document`.
    """
    from latticedip.study.proposals import propose_document

    found, proposal = propose_document(study, search, tol=tol)
    return _noted(found, _point_energies(study)), proposal


def search_of(
    study: Study,
    *,
    supercell: tuple[int, int, int] | None = None,
    k: Sequence[Sequence[float]] = (),
    along: str | None = None,
) -> Search:
    """What [propose] of a study asks for, with another supercell, other k (instead of it) or another direction.

    along: as `direction_of` takes it; it takes the place of axes, too. Raises InputError for what is no direction.
    """
    import numpy as np

    from latticedip.study.directions import direction_of

    search = study.search
    if supercell is not None:
        search = dataclasses.replace(search, supercell=supercell, k=None)
    if k:
        search = dataclasses.replace(search, supercell=(1, 1, 1), k=np.array(k, dtype=float))
    if along is not None:
        search = dataclasses.replace(search, along=direction_of(study.crystal, along, "--along"), axes=None)
    return search


def write_proposal(
    study: Study,
    doc: dict[str, Any],
    found: Proposal,
    study_path: Path | None,
    folder: Path | None,
    *,
    overwrite: bool = False,
) -> tuple[dict[str, Any], bool]:
    """The document with what was written, as a study and into a folder, and whether some ordering was not.

    Raises FileError where a file exists (unless overwrite) or cannot be written.
    """
    from latticedip.study.proposals import write_candidates
    from latticedip.study.written import write_study

    orderings = [row.ordering for row in found.rows]
    written: list[Path] = []
    refused: list[tuple[str, str]] = []
    if folder is not None:
        files, failed = write_candidates(orderings, folder, overwrite=overwrite)
        written, refused = [*written, *files], [*refused, *failed]
    if study_path is not None:
        files, failed = write_study(study, orderings, study_path, overwrite=overwrite)
        written, refused = [*written, *files], [*refused, *failed]
    listed = [{"ordering": name, "reason": reason} for name, reason in refused]
    return {**doc, "written": [str(path) for path in written], "not_written": listed}, bool(refused)


def shift(
    study: Study,
    *,
    temperatures_K: Sequence[float] = (),
    rotate_about: str | None = None,
    powder_bins: int | None = None,
    probes: Sequence[str] = (),
    all_equivalent: bool = False,
    tol: float = 1e-10,
) -> dict[str, Any]:
    """The document of `shift`: coupling tensors of every probe and, with a susceptibility, its shifts.

    Arguments and errors as `shift_document`; StudyError for a study without probes.
    """
    from latticedip.study.shifts import shift_document

    _need_probes(study, "a shift")
    return shift_document(
        choose(study, probes=probes),
        temperatures_K=temperatures_K,
        rotate_about=rotate_about,
        powder_bins=powder_bins,
        probes=probes,
        all_equivalent=all_equivalent,
        tol=tol,
    )


def linewidth(
    study: Study,
    *,
    direction: str | None = None,
    nuclei: Sequence[str] = (),
    like: Literal["isotope", "site"] = "isotope",
    probes: Sequence[str] = (),
    all_equivalent: bool = False,
) -> dict[str, Any]:
    """The document of `linewidth`: static dipolar second moments and widths of every probe.

    Arguments and errors as `linewidth_document`; StudyError for a study without probes.
    """
    from latticedip.study.linewidths import linewidth_document

    _need_probes(study, "a linewidth")
    chosen = choose(study, probes=probes)
    found = linewidth_document(
        chosen,
        direction=direction,
        nuclei=nuclei,
        like=like,
        probes=probes,
        all_equivalent=all_equivalent,
    )
    return _noted(found, _each_position(chosen, "widths are"))


def spectrum(
    study: Study, options: SpectrumOptions, *, orderings: Sequence[str] = (), probes: Sequence[str] = ()
) -> dict[str, Any]:
    """The document of `spectrum`: lines, bands, histograms and polarizations at every probe under every ordering.

    orderings, probes: names of those that count; none: all.

    Raises StudyError for a study without orderings or without probes, InputError for an unknown name, and what
    `spectrum_document` raises.
    """
    from latticedip.study.spectra import spectrum_document

    _need_orderings(study)
    _need_probes(study, "a spectrum")
    chosen = choose(study, orderings=orderings, probes=probes)
    return spectrum_document(chosen, options, orderings=orderings, probes=probes)


def demag(kind: str, lengths: Sequence[float] = ()) -> dict[str, Any]:
    """The document of `demag`: the demagnetizing factors of a body; kind and lengths as `body_of` takes them.

    Raises InputError for an unknown shape or lengths that do not fit it.
    """
    from latticedip.study.bodies import body_of, demag_document

    return demag_document(body_of(kind, lengths))


def choose(study: Study, *, orderings: Sequence[str] = (), probes: Sequence[str] = ()) -> Study:
    """A study with the orderings and probes of these names only, in the order of the file; no names: all of them.

    A probe at several positions goes by its own name or by those of single positions.

    Raises InputError for a name that the study does not have, with the nearest that it has.
    """
    kept_orderings = _named("ordering", study.orderings, orderings)
    members = {whole.name: whole.members for whole in study.weighted}
    asked = [member for name in probes for member in members.get(name, (name,))]
    kept_probes = _named("probe", study.probes, asked, tuple(members))
    left = {probe.name for probe in kept_probes}
    weighted = tuple(whole for whole in study.weighted if left.issuperset(whole.members))
    return dataclasses.replace(study, orderings=kept_orderings, probes=kept_probes, weighted=weighted)


def _named(kind: str, items: tuple[T, ...], names: Sequence[str], more: Sequence[str] = ()) -> tuple[T, ...]:
    """The items of these names; more: other names that a user may have meant."""
    own: list[str] = [item.name for item in items]
    known = [*more, *own]
    for name in names:
        if name not in own:
            listed = ", ".join(repr(other) for other in known) or "none"
            raise InputError(
                f"the study has no {kind} named {name!r}. Those it has: {listed}.{near_match(name, known)}"
            )
    return tuple(item for item in items if not names or item.name in names)


def _noted(found: dict[str, Any], notes: Sequence[str]) -> dict[str, Any]:
    """A document with more notes in front of its own."""
    return {**found, "notes": [*notes, *found["notes"]]} if notes else found


def _each_position(study: Study, what: str, averages: str = "") -> list[str]:
    """What is said of probes at several positions where a command does not average over them.

    what: "fields are", for example. averages: the command that does.
    """
    told = f"not averaged with their weights{f'; {averages} gives the averages' if averages else ''}"
    return [
        f"{whole.name}: {what} given at each of its {len(whole.members)} positions, {told}"
        for whole in study.weighted
        if {probe.name for probe in study.probes}.issuperset(whole.members)
    ]


def _point_energies(study: Study) -> list[str]:
    """What is said of energies where the study states a spread of moments."""
    from latticedip.analysis.rank import POINT_ENERGIES

    return [POINT_ENERGIES] if study.moment_spread else []


def _need_probes(study: Study, what: str) -> None:
    if not study.probes:
        raise StudyError(
            f"{str(study.path)!r} has no [[probe]], so there is no place to ask for {what}. "
            "Add one with a position or a site, for example: [[probe]] position = [0.5, 0.5, 0.25]"
        )


def _need_orderings(study: Study) -> None:
    if not study.orderings:
        raise StudyError(
            f"{str(study.path)!r} has no [[ordering]], so there is nothing to compare. "
            "Add at least one; `latticedip start` writes a study with several."
        )
