"""The template of a batch: a study file without [crystal], and what is to be done with every structure.

Tables beside those of a study:

[batch]    do = ["rank", "field"] (names of commands that take a study; without any [[probe]] it is "rank" alone),
           orderings = ["template", "file", "propose"] (where candidates come from; without it all that there are),
           rotate and bound (for rank; the bound is worked out only where it is asked for), axes (for field), tol
[propose]  as in a study; here the orderings it finds are candidates

Names in [moments], [moment_spread] and [susceptibility] that a structure does not have are passed over, as long as it
has one of them: a template lists the elements of a whole family of compounds.
"""

from __future__ import annotations

import hashlib
import inspect
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from latticedip import __version__
from latticedip.errors import InputError, StudyError
from latticedip.study import tasks
from latticedip.study.keys import Key
from latticedip.study.orderings import ORDERING_KEYS, existing_file
from latticedip.study.probe_rules import RULE_KEYS, check_rule
from latticedip.study.probes import PROBE_KEYS, SAMPLE_KEYS
from latticedip.study.schema import STUDY_KEYS, Study, assemble, load_bytes, parse_tables
from latticedip.study.search import SEARCH_KEYS, stated_sizes

if TYPE_CHECKING:
    from latticedip.crystal.model import Crystal
    from latticedip.ordering.model import Ordering

TEMPLATE_KEYS = ("title", "batch", *(key for key in STUDY_KEYS if key not in ("title", "crystal")))
BATCH_KEYS = ("do", "orderings", "rotate", "bound", "axes", "tol")
DEFAULT_TASKS = ("rank", "field")
SOURCES = ("template", "file", "propose")
#: What the ordering that an input file itself holds is called, the same for every file.
OWN_NAME = "in the file"
_AXES = ("cartesian", "crystal", "polar")


def known_tasks() -> dict[str, Callable[..., dict[str, Any]]]:
    """The tasks of this program that take a study and return a document, by the name of their command."""
    found: dict[str, Callable[..., dict[str, Any]]] = {}
    for name, function in inspect.getmembers(tasks, inspect.isfunction):
        if name.startswith("_") or function.__module__ != tasks.__name__:
            continue
        signature = inspect.signature(function)
        first = next(iter(signature.parameters.values()), None)
        if first is not None and first.annotation == "Study" and str(signature.return_annotation).startswith("dict["):
            found[name] = function
    return found


@dataclass(frozen=True)
class Template:
    """A template, whole in itself but for the ordering files it names, so that it can be sent to another process.

    file: its path as the user named it. folder: absolute, what paths in it are relative to. raw: its bytes.
    """

    file: str
    folder: str
    raw: bytes

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> Template:
        """Read a template and check what can be checked without a structure.

        Raises StudyError, one message that names the file, the key and the value.
        """
        name = os.fspath(path)
        template = cls(name, os.path.dirname(os.path.abspath(name)), load_bytes(Path(name), name))
        template.check()
        return template

    @property
    def path(self) -> Path:
        """Its absolute path."""
        return Path(self.folder, Path(self.file).name)

    @cached_property
    def table(self) -> dict[str, Key]:
        """The tables by name; unknown ones are refused."""
        root = Key(self.file, "", parse_tables(self.raw, self.file))
        if isinstance(root.value, dict) and "crystal" in root.value:
            raise Key(self.file, "crystal", None).refuse(
                "a template has no crystal; every input is one in turn. Remove this table."
            )
        return root.table(TEMPLATE_KEYS)

    @cached_property
    def digest(self) -> str:
        """SHA-256 of the template, the ordering files it names and the version of this program, in hexadecimal."""
        parts = [__version__.encode(), self.raw]
        for item in self._items("ordering"):
            key = item.table(ORDERING_KEYS).get("file")
            if key is not None:
                parts.append(existing_file(key, Path(self.folder), "the path of a structure file").read_bytes())
        return hashlib.sha256(b"".join(hashlib.sha256(part).digest() for part in parts)).hexdigest()

    def _items(self, name: str) -> list[Key]:
        return self.table[name].items(f"a list of tables, each headed [[{name}]]") if name in self.table else []

    @cached_property
    def title(self) -> str:
        """What the template calls itself; its file name where it says nothing."""
        return self.table["title"].text("a title in one line") if "title" in self.table else Path(self.file).stem

    @cached_property
    def batch(self) -> dict[str, Key]:
        """The keys of [batch]."""
        if "batch" not in self.table:
            return {}
        return self.table["batch"].table(BATCH_KEYS, header="one table, headed [batch]")

    @cached_property
    def do(self) -> tuple[str, ...]:
        """The tasks, in the order in which they are done."""
        if "do" not in self.batch:
            # Without any place there is no field to ask for.
            return DEFAULT_TASKS if "probe" in self.table else DEFAULT_TASKS[:1]
        items = self.batch["do"].items('a list of commands, such as ["rank", "field"]')
        if not items:
            raise self.batch["do"].expected("at least one command")
        names = [item.one_of(tuple(known_tasks())) for item in items]
        for i, name in enumerate(names):
            if name in names[:i]:
                raise items[i].refuse(f"{name!r} is named twice. Leave one out.")
        if "field" in names and "probe" not in self.table:
            raise items[names.index("field")].refuse("there is no [[probe]], so there is no place to ask for a field.")
        return tuple(names)

    @cached_property
    def sources(self) -> tuple[str, ...]:
        """Where candidate orderings come from."""
        if "orderings" not in self.batch:
            return SOURCES
        items = self.batch["orderings"].items('a list of "template", "file" and "propose"')
        chosen = tuple(item.one_of(SOURCES) for item in items)
        for name, table, header in (("template", "ordering", "[[ordering]]"), ("propose", "propose", "[propose]")):
            if name in chosen and table not in self.table:
                raise self.batch["orderings"].refuse(f"names {name!r}, but the template has no table {header}.")
            if name not in chosen and table in self.table:
                raise self.table[table].refuse(f"has no effect: `batch.orderings` leaves {name!r} out.")
        return chosen

    @cached_property
    def options(self) -> dict[str, Any]:
        """What tasks are told beside the study; each takes what it knows."""
        given: dict[str, Any] = {}
        for name, task in (("rotate", "rank"), ("bound", "rank"), ("axes", "field")):
            if name in self.batch and task not in self.do:
                raise self.batch[name].refuse(f"has no effect: `batch.do` does not hold {task!r}.")
        for name in ("rotate", "bound"):
            if name in self.batch:
                self.batch[name].true()
                given[name] = True
        if "axes" in self.batch:
            given["axes"] = self.batch["axes"].one_of(_AXES)
        if "tol" in self.batch:
            what = "a number from 1e-12 to 1e-2"
            given["tol"] = self.batch["tol"].number(what, low=1e-12)
            if given["tol"] > 1e-2:
                raise self.batch["tol"].expected(what)
        return given

    def check(self) -> None:
        """Refuse what is wrong whatever the structure: unknown keys, tasks, rules and files that are not there."""
        for item in self._items("ordering"):
            item.table(ORDERING_KEYS)
        for item in self._items("probe"):
            ruled = isinstance(item.value, dict) and "rule" in item.value
            table = item.table(RULE_KEYS if ruled else PROBE_KEYS)
            if ruled:
                check_rule(table)
        if "sample" in self.table:
            self.table["sample"].table(SAMPLE_KEYS, header="one table, headed [sample]")
        if "propose" in self.table:
            self.table["propose"].table(SEARCH_KEYS, header="one table, headed [propose]")
        for part in ("title", "do", "sources", "options", "digest"):
            getattr(self, part)

    def study_for(self, crystal: Crystal, own: Ordering | None, path: Path) -> Study:
        """The study of one structure. own: the ordering that its file holds. path: that file.

        Raises StudyError where the template does not fit the structure.
        """
        table = {name: key for name, key in self.table.items() if name not in ("title", "batch")}
        for name in ("moments", "moment_spread", "susceptibility"):
            if name in table:
                table[name] = _present_names(table[name], crystal)
        if "template" not in self.sources:
            table.pop("ordering", None)
        study = assemble(table, crystal, title=self.title, path=self.path, files={})
        found = list(study.orderings)
        if own is not None and "file" in self.sources:
            found.append(replace(own, name=_free_name(OWN_NAME, found)))
        if "propose" in self.table:
            found += self._proposed(study, found)
        needed = [name for name in self.do if name in DEFAULT_TASKS]
        if needed and not found:
            raise StudyError(
                f"{self.file}: there is no ordering to {needed[0]}: the file holds no moments, and the template has "
                "neither [[ordering]] nor [propose]."
            )
        return replace(study, orderings=tuple(found), files={"template": study.path, "structure": path})

    def _proposed(self, study: Study, taken: list[Ordering]) -> list[Ordering]:
        from latticedip.analysis.propose import propose

        with self.table["propose"].located():
            ranking = propose(study.crystal, stated_sizes(study), sample=study.sample, **study.search.arguments())
        found: list[Ordering] = []
        for number, row in enumerate(ranking.rows, start=1):
            name = _free_name(row.ordering.name or f"proposed {number}", [*taken, *found])
            found.append(replace(row.ordering, name=name))
        return found

    def run(self, study: Study) -> dict[str, dict[str, Any]]:
        """The documents of all tasks, by name, without their list of inputs: that is the record's.

        With `field` among the tasks the fields are not repeated in the rows of `rank`.

        Raises what the tasks raise.
        """
        results = {}
        for name in self.do:
            if name == "rank":
                document = self._rank(study)
            else:
                task = known_tasks()[name]
                takes = inspect.signature(task).parameters
                document = task(study, **{key: value for key, value in self.options.items() if key in takes})
            results[name] = {key: value for key, value in document.items() if key not in ("inputs", "version")}
        return results

    def _rank(self, study: Study) -> dict[str, Any]:
        from latticedip.study.rank_options import RankOptions

        told = {key: value for key, value in self.options.items() if key in ("rotate", "bound", "tol")}
        options = RankOptions(**{"bound": False, **told})
        return tasks.rank(replace(study, probes=()) if "field" in self.do else study, options)


def _present_names(key: Key, crystal: Crystal) -> Key:
    """A table by site label or element, less the names that a crystal does not have."""
    if not isinstance(key.value, Mapping):
        raise key.expected("a table by site label or element")
    known = {*crystal.labels, *crystal.symbols}
    present = {name: value for name, value in key.value.items() if name in known}
    if key.value and not present:
        raise key.refuse(
            f"none of the names {', '.join(key.value)} is a site or an element of this structure, which has "
            f"{', '.join(dict.fromkeys([*crystal.labels, *crystal.symbols]))}."
        )
    return replace(key, value=present)


def _free_name(name: str, taken: list[Ordering]) -> str:
    names = {ordering.name for ordering in taken}
    free, number = name, 2
    while free in names:
        free, number = f"{name} ({number})", number + 1
    return free


def check_limit(name: str, value: float | None) -> float | None:
    """A limit that a user sets: a positive number, or None; raises InputError otherwise."""
    if value is not None and not (isinstance(value, (int, float)) and 0 < value < float("inf")):
        raise InputError(f"{name} must be a number larger than 0, got {value!r}.")
    return value
