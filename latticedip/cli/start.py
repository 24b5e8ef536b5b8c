"""``latticedip start``: a first study for a structure."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from latticedip.cli.options import block_option, deliver, output_options


class Moment(click.ParamType):
    """A site label or element with the size of its moment, as in Mn1=4.6."""

    name = "LABEL=SIZE"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> tuple[str, float]:
        if isinstance(value, tuple):
            return value
        label, _, size = str(value).rpartition("=")
        try:
            return label.strip(), float(size)
        except ValueError:
            self.fail(f"{value!r} is not of the form LABEL=SIZE, such as Mn1=4.6.", param, ctx)


@click.command(short_help="Write a commented study for a structure.")
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path, allow_dash=True),
    metavar="STUDY",
    help="Write to this file; without it, or with -, to stdout.",
)
@click.option("--force", is_flag=True, help="Write over a file that exists.")
@click.option(
    "--moment",
    "moments",
    type=Moment(),
    multiple=True,
    metavar="LABEL=SIZE",
    help="A magnetic site (label or element) and its moment in Bohr magnetons; may be repeated. Without it the "
    "sites are guessed from their elements, and the size is left for you to fill in.",
)
@block_option
@output_options
def start(
    file: Path,
    output: Path | None,
    force: bool,
    moments: tuple[tuple[str, float], ...],
    block: str | None,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Write a commented study for a structure file: magnetic sites, candidate orderings, a probe.

    It goes to stdout, or to a file with -o. Moments that the file states are taken over.

    \b
    Example:
      latticedip start compound.cif --moment Mn=4.6 -o study.toml
      latticedip rank study.toml
    """
    from latticedip.encode import write_text_atomically
    from latticedip.errors import InputError
    from latticedip.study import tasks
    from latticedip.study.documents import spare_inputs

    output = None if str(output) == "-" else output
    twice = [label for i, (label, _) in enumerate(moments) if label in dict(moments[:i])]
    if twice:
        raise click.UsageError(f"--moment gives {twice[0]!r} twice.")
    if output is not None and output.exists() and not force:
        raise InputError(f"{str(output)!r} exists. Name another file, or use --force to write over it.")
    document = tasks.start(file, output=output, sizes_muB=dict(moments), block=block)
    text = document["study"]
    if output is not None:
        spare_inputs(output, document)
        write_text_atomically(output, text)
        click.echo(f"Wrote {output}.", err=True)
        if not as_json and csv_path is None:
            return
    deliver(
        document,
        rows=lambda: document["rows"],
        text=lambda: text.rstrip("\n"),
        as_json=as_json,
        csv_path=csv_path,
    )
