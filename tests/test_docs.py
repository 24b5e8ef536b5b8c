"""Docstrings: every public name has one, and the parameters it explains exist."""

from __future__ import annotations

import dataclasses
import inspect
import re

import pytest

import latticedip as ld

#: A line such as ``cell: Shape (3, 3)`` or ``alpha, beta: what they are`` at the margin of a docstring.
ENTRY = re.compile(r"(?:^|(?<=\. ))([a-z_]\w*(?:, [a-z_]\w*)*): ", re.MULTILINE)

PUBLIC = {name: getattr(ld, name) for name in ld.__all__ if name != "__version__" and not name.startswith("__")}


def members():
    """(dotted name, object) of public functions, classes and their public members."""
    for name, thing in PUBLIC.items():
        yield name, thing
        if inspect.isclass(thing):
            for key, value in vars(thing).items():
                if key.startswith("_"):
                    continue
                inner = value.__func__ if isinstance(value, (classmethod, staticmethod)) else value
                inner = inner.fget if isinstance(inner, property) else inner
                inner = getattr(inner, "func", inner)  # cached_property
                if inspect.isfunction(inner):
                    yield f"{name}.{key}", inner


MEMBERS = list(members())


@pytest.mark.parametrize(("name", "thing"), MEMBERS)
def test_public_names_have_docstrings(name, thing):
    own = thing.__doc__
    assert own and own.strip(), f"{name} has no docstring"
    # A frozen dataclass without a docstring is given its own signature by the library.
    assert not own.startswith(f"{name}("), f"{name} has no docstring"


@pytest.mark.parametrize(("name", "thing"), MEMBERS)
def test_explained_parameters_exist(name, thing):
    text = inspect.cleandoc(thing.__doc__ or "")
    if inspect.isclass(thing):
        known = set(dir(thing)) | set(inspect.signature(thing.__init__).parameters)
        known |= {f.name for f in dataclasses.fields(thing)} if dataclasses.is_dataclass(thing) else set()
    else:
        known = set(inspect.signature(thing).parameters) - {"self", "cls"}
    # Entries may follow one another on a line; words of running prose before a colon are not entries, so only names
    # at the start of a line count, and those after a full stop where the line began with an entry.
    wrong = []
    for line in text.splitlines():
        if not re.match(r"[a-z_]\w*(, [a-z_]\w*)*: ", line):
            continue
        for entry in ENTRY.finditer(line):
            wrong += [word for word in entry.group(1).split(", ") if word not in known]
    assert not wrong, f"{name} explains {wrong}, which it does not have"


@pytest.mark.parametrize("name", [n for n, thing in PUBLIC.items() if inspect.isfunction(thing)])
def test_every_parameter_of_a_public_function_is_named_in_its_docstring(name):
    function = PUBLIC[name]
    text = function.__doc__ or ""
    missing = [p for p in inspect.signature(function).parameters if not re.search(rf"\b{p}\b", text)]
    assert not missing, f"{name} does not mention {missing}"
