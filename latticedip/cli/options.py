"""Options and arguments that several commands share, and how a command hands its result over."""

from __future__ import annotations

import logging
import math
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any, TypeVar

import click

F = TypeVar("F", bound=Callable[..., Any])

_log = logging.getLogger("latticedip")


class EchoHandler(logging.Handler):
    """Writes messages to the stderr of the moment."""

    def emit(self, record: logging.LogRecord) -> None:
        click.echo(self.format(record), err=True)


def report_progress() -> None:
    """Say on stderr what is being done."""
    if not any(isinstance(handler, EchoHandler) for handler in _log.handlers):
        _log.addHandler(EchoHandler())
    _log.setLevel(logging.INFO)


def _turn_on(ctx: click.Context, param: click.Parameter, value: bool) -> None:
    if value:
        report_progress()


def verbose_option(function: F) -> F:
    """-v, which goes in front of a command or behind it."""
    return click.option(
        "-v",
        "--verbose",
        is_flag=True,
        expose_value=False,
        callback=_turn_on,
        help="Say on stderr what is being done and how long it takes.",
    )(function)


class _Finite(click.ParamType):
    """Refuses what is no number or has no end, which a plain float of click takes."""

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        number = float(super().convert(value, param, ctx))
        if not math.isfinite(number):
            self.fail(f"{value} is not a finite number.", param, ctx)
        return number


class FiniteFloat(_Finite, type(click.FLOAT)):  # type: ignore[misc]
    """A finite number."""


class FiniteRange(_Finite, click.FloatRange):
    """A finite number within a range."""


class Tolerance(click.ParamType):
    """A number that bounds the error of every tensor."""

    name = "number"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        try:
            number = float(value)
        except ValueError:
            self.fail(f"{value!r} is not a number.", param, ctx)
        if not math.isfinite(number) or not 1e-12 <= number <= 1e-2:
            self.fail(f"{value} is not between 1e-12 and 1e-2.", param, ctx)
        return number


def study_argument(function: F) -> F:
    """The study file, by position."""
    return click.argument("study", type=click.Path(path_type=Path), metavar="STUDY")(function)


def tol_option(function: F) -> F:
    """The error bound of the lattice sums."""
    return click.option(
        "--tol",
        type=Tolerance(),
        default=1e-10,
        show_default=True,
        help="Largest error of every lattice sum, relative to the larger of 1 T/µB and its largest element.",
    )(function)


def block_option(function: F) -> F:
    """The data block of a file that holds several structures."""
    return click.option(
        "--block",
        metavar="NAME",
        help="The data block of a CIF, or the number of the structure, where the file holds several.",
    )(function)


def ordering_option(function: F) -> F:
    """The orderings of a study that count."""
    return click.option(
        "--ordering",
        "orderings",
        multiple=True,
        metavar="NAME",
        help="Take this ordering of the study only; may be given several times.",
    )(function)


def probe_option(function: F) -> F:
    """The probes of a study that count."""
    return click.option(
        "--probe",
        "probes",
        multiple=True,
        metavar="NAME",
        help="Take this probe of the study only; may be given several times.",
    )(function)


def plot_option(function: F) -> F:
    """--plot FILE, a picture beside the table."""
    return click.option(
        "--plot",
        "plot_path",
        type=click.Path(path_type=Path),
        metavar="FILE",
        help="Also draw it: .png, .svg or .pdf.",
    )(function)


def view_option(function: F) -> F:
    """--view AXIS, where a drawing is seen from."""
    return click.option(
        "--view",
        metavar="AXIS",
        help="Where the drawing is seen from: a, b, c, a*, b*, c* or components along a, b, c such as "
        '"1 1 0"; "8 3 2" without it.',
    )(function)


def orbit_option(function: F) -> F:
    """Whether a position stands for all that are equivalent to it."""
    return click.option(
        "--orbit",
        is_flag=True,
        help="Take every position that the symmetry of the crystal makes equal to the one of the probe.",
    )(function)


def output_options(function: F) -> F:
    """--json, --csv FILE and -v."""
    function = verbose_option(function)
    function = click.option(
        "--csv",
        "csv_path",
        type=click.Path(path_type=Path, allow_dash=True),
        metavar="FILE",
        help="Also write the rows to a CSV file with every digit; - writes them to stdout instead of the table.",
    )(function)
    return click.option("--json", "as_json", is_flag=True, help="Print a JSON document instead of the table.")(function)


def draw_to(path: Path, document: Mapping[str, Any], draw: Callable[[Mapping[str, Any], Path], None]) -> None:
    """Draw a document into a file and say so; InputError where that is one of the files the document was made from."""
    from latticedip.study.documents import spare_inputs

    spare_inputs(path, document)
    draw(document, path)
    click.echo(f"Wrote {path}.", err=True)


def deliver(
    document: Mapping[str, Any],
    *,
    rows: Callable[[], Sequence[Mapping[str, Any]]],
    text: Callable[[], str],
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print the text or the document, and write the rows where a CSV file was asked for.

    Raises click.UsageError where two documents would have to share stdout, InputError for a CSV file that is one of
    the files read.
    """
    from latticedip.encode import to_csv, to_json, write_csv
    from latticedip.study.documents import flat_rows, spare_inputs

    csv_to_stdout = csv_path is not None and str(csv_path) == "-"
    if csv_to_stdout and as_json:
        raise click.UsageError("--json and --csv - cannot both go to stdout: name a file for the CSV.")
    if csv_path is not None and not csv_to_stdout:
        spare_inputs(csv_path, document)
        write_csv(flat_rows(rows()), csv_path)
        click.echo(f"Wrote {csv_path}.", err=True)
    if csv_to_stdout:
        click.echo(to_csv(flat_rows(rows())), nl=False)
    elif as_json:
        click.echo(to_json(document), nl=False)
    else:
        click.echo(text())
