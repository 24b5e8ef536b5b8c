"""``latticedip propose``: candidate orderings, found from the crystal and its moments alone."""

from __future__ import annotations

import dataclasses
from pathlib import Path
from typing import Any

import click

from latticedip.cli.options import deliver, output_options, study_argument, tol_option


class Wave(click.ParamType):
    """A propagation vector, three numbers or fractions as in "0 0 1/2"."""

    name = "K"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[float, float, float]:
        if isinstance(value, tuple):
            return value
        try:
            numbers = [_number(part) for part in str(value).replace(",", " ").split()]
        except (ValueError, ZeroDivisionError):
            numbers = []
        if len(numbers) != 3 or any(abs(x) == float("inf") or x != x for x in numbers):
            self.fail(f'{value!r} is not three numbers or fractions, such as "0 0 1/2".', param, ctx)
        return numbers[0], numbers[1], numbers[2]


def _number(text: str) -> float:
    above, slash, below = text.partition("/")
    return float(above) / float(below) if slash else float(above)


@click.command(short_help="Find candidate orderings by their dipolar energy.")
@study_argument
@click.option(
    "--supercell", type=click.IntRange(1), nargs=3, metavar="A B C", help="Cells after which every pattern repeats."
)
@click.option(
    "--k",
    "waves",
    type=Wave(),
    multiple=True,
    help='A wave vector such as "0 0 1/2" in place of a supercell; may be given several times.',
)
@click.option(
    "--along",
    metavar="AXIS",
    help="Direction of all moments (for planar ones the normal): a, b, c, a*, b*, c* or components along a, b, c such "
    'as "1 1 0". Without it each pattern lies along its own best axis.',
)
@click.option("--net-zero", is_flag=True, help="Only orderings without net moment.")
@click.option(
    "--moments",
    type=click.Choice(["ising", "planar", "heisenberg"]),
    help="Moments of one direction and either sign, free in a plane, or free; the last two are annealed.",
)
@click.option(
    "--method", type=click.Choice(["auto", "exhaustive", "annealing"]), help="How signs are searched; auto if left out."
)
@click.option("--restarts", type=click.IntRange(1), help="Restarts of the annealing.")
@click.option("--sweeps", type=click.IntRange(1), help="Sweeps of every restart.")
@click.option("--keep", type=click.IntRange(1), help="Candidates listed, equal ones merged; 10 if left out.")
@click.option("--seed", type=click.IntRange(0), help="Of everything random; 0 if left out.")
@click.option(
    "--write-study",
    "study_path",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Write a study that holds them.",
)
@click.option(
    "--write-folder", "folder", type=click.Path(path_type=Path), metavar="DIR", help="Write each as a magCIF file."
)
@click.option("--force", is_flag=True, help="Write over files that exist.")
@tol_option
@output_options
def propose(
    study: Path,
    supercell: tuple[int, int, int] | None,
    waves: tuple[tuple[float, float, float], ...],
    along: str | None,
    net_zero: bool,
    moments: str | None,
    method: str | None,
    restarts: int | None,
    sweeps: int | None,
    keep: int | None,
    seed: int | None,
    study_path: Path | None,
    folder: Path | None,
    force: bool,
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Find the orderings of lowest dipolar energy for the moments that the study states in [moments].

    All sign patterns of a supercell or of given k are tried, then what the space group allows, and the lowest dipolar
    mode; beyond what can be tried, signs are annealed. Candidates that symmetry makes equal are one. The orderings of
    the study play no part. Options go before what the study asks for:

    \b
      [propose]
      supercell = [2, 2, 1]    # or k = [0, 0, "1/2"], or a list of such vectors
      along = [0, 0, 1]        # or axes = { Mn1 = [[1, 1, 1], [1, -1, -1]] }
      fixed = { Mn1 = "+0" }   # signs that are given, 0 where free
      net_zero = true
      keep = 10                # also seed, moments, method, restarts, sweeps

    \b
    Example:
      latticedip propose study.toml --supercell 2 2 1 --write-study found.toml
    """
    from latticedip.report.propose import propose_text
    from latticedip.study import tasks
    from latticedip.study.proposals import propose_table

    if supercell is not None and waves:
        raise click.UsageError("give either --supercell or --k, not both.")
    if study_path is not None and study_path.exists() and not force:
        from latticedip.errors import FileError

        raise FileError(f"{str(study_path)!r} exists. Name another file, or use --force to write over it.")
    opened = tasks.open_study(study)
    given: dict[str, Any] = {
        "keep": keep,
        "seed": seed,
        "moments": moments,
        "method": method,
        "restarts": restarts,
        "sweeps": sweeps,
        "net_zero": net_zero or None,
    }
    search = tasks.search_of(opened, supercell=supercell, k=waves, along=along)
    search = dataclasses.replace(search, **{name: value for name, value in given.items() if value is not None})
    document, found = tasks.propose(opened, search, tol=tol)
    document, failed = tasks.write_proposal(opened, document, found, study_path, folder, overwrite=force)
    for path in document["written"]:
        click.echo(f"Wrote {path}.", err=True)
    deliver(
        document,
        rows=lambda: propose_table(document),
        text=lambda: propose_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
    for entry in document["not_written"]:
        click.echo(f"Not written: {entry['ordering']}: {entry['reason']}", err=True)
    if failed:
        click.get_current_context().exit(1)
