"""The README says what is true: its commands are run and their output compared word for word."""

from __future__ import annotations

import contextlib
import io
import re
from pathlib import Path

import pytest
from click.testing import CliRunner

from latticedip.cli.main import main

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
CONSOLE = re.findall(r"```console\n\$ latticedip (.*)\n((?:.*\n)*?)```", README)
PYTHON = re.findall(r"```python\n((?:.*\n)*?)```\n\n```text\n((?:.*\n)*?)```", README)


@pytest.mark.parametrize(("command", "shown"), CONSOLE, ids=[command for command, _ in CONSOLE])
def test_console_blocks(command, shown, monkeypatch):
    monkeypatch.chdir(ROOT)
    result = CliRunner().invoke(main, command.split(), env={"COLUMNS": "80"})
    assert result.exit_code == 0, result.output
    assert tidy(result.stdout) == tidy(shown)


@pytest.mark.parametrize(("code", "shown"), PYTHON)
def test_python_blocks(code, shown, monkeypatch):
    monkeypatch.chdir(ROOT)
    printed = io.StringIO()
    with contextlib.redirect_stdout(printed):
        exec(compile(code, "README.md", "exec"), {})  # noqa: S102  the README is our own text
    assert tidy(printed.getvalue()) == tidy(shown)


def test_there_is_something_to_compare():
    assert len(CONSOLE) >= 4
    assert len(PYTHON) == 1


def tidy(text):
    return "\n".join(line.rstrip() for line in text.strip().splitlines())
