"""What tests of the command line share: running a command within this process, and the files of a study."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result

from latticedip.cli.main import main

#: One magnetic ion and two fluorines in a tetragonal cell.
LAYER_XYZ = """3
Lattice="4.2 0 0 0 4.2 0 0 0 5.1" Properties=species:S:1:pos:R:3 pbc="T T T"
Mn 0 0 0
F 2.1 0 1.1
F 0 2.1 1.1
"""
_BOX = """data_{name}
_cell_length_a {a}
_cell_length_b {b}
_cell_length_c {c}
_cell_angle_alpha 90
_cell_angle_beta {beta}
_cell_angle_gamma {gamma}
_space_group_name_H-M_alt '{group}'
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
{atoms}"""


def box_cif(atoms: str, a: float, b: float | None = None, c: float | None = None, *, name: str = "cube",
            group: str = "P 1", beta: float = 90, gamma: float = 90) -> str:  # fmt: skip
    """A CIF with a cell (edges in Å, a cube where only one is given; angles in degrees) and these lines of atoms."""
    cell = {"a": a, "b": a if b is None else b, "c": a if c is None else c, "beta": beta, "gamma": gamma}
    return _BOX.format(name=name, group=group, atoms=atoms, **cell)


def enter(folder: Path, monkeypatch: pytest.MonkeyPatch, files: Mapping[str, str]) -> Path:
    """Write files into a folder and make it the current one."""
    for name, text in files.items():
        (folder / name).write_text(text, encoding="utf-8")
    monkeypatch.chdir(folder)
    return folder


@dataclass(frozen=True)
class Command:
    """The command line with these arguments in front. env: variables of its environment."""

    leading: tuple[str, ...] = ()
    env: Mapping[str, str] = field(default_factory=dict)

    def run(self, *arguments: str) -> Result:
        """The result of a run; an exception other than that of an exit is raised."""
        result = CliRunner().invoke(main, [*self.leading, *arguments], env=self.env)
        if result.exception is not None and not isinstance(result.exception, SystemExit):
            raise result.exception
        return result

    def document(self, *arguments: str) -> dict[str, Any]:
        """The JSON document of a run that succeeds."""
        result = self.run(*arguments, "--json")
        assert result.exit_code == 0, result.stderr
        loaded = json.loads(result.stdout)
        assert isinstance(loaded, dict)
        return loaded

    def refused(self, *arguments: str) -> str:
        """The message of a refusal: exit status 2, nothing on stdout."""
        result = self.run(*arguments)
        assert (result.exit_code, result.stdout) == (2, "")
        return result.stderr
