"""``latticedip batch``: a template run on hundreds of structure files."""

from __future__ import annotations

import os
import sys
from contextlib import nullcontext
from pathlib import Path
from typing import TYPE_CHECKING

import click

from latticedip.cli.options import FiniteRange, verbose_option

if TYPE_CHECKING:
    from latticedip.study.batch import Progress

_BAR = 24


class ProgressBar:
    """One line on stderr that is written over and over."""

    def __init__(self) -> None:
        self.shown = 0

    def __call__(self, progress: Progress) -> None:
        finished = progress.done + progress.failed
        filled = _BAR * finished // max(1, progress.total)
        left = "" if progress.seconds_left is None else f", {_clock(progress.seconds_left)} left"
        failed = f", {progress.failed} failed" if progress.failed else ""
        text = f"[{'#' * filled}{'.' * (_BAR - filled)}] {finished}/{progress.total}, {progress.per_second:.1f}/s"
        self._show(text + left + failed)

    def _show(self, text: str) -> None:
        text = text[:79]
        click.echo("\r" + text.ljust(self.shown), err=True, nl=False)
        self.shown = len(text)

    def clear(self) -> None:
        """Take the line away."""
        if self.shown:
            click.echo("\r" + " " * self.shown + "\r", err=True, nl=False)
            self.shown = 0


def _clock(seconds: float) -> str:
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"


@click.command(short_help="Run a template on many structure files.")
@click.argument("template", type=click.Path(path_type=Path), metavar="TEMPLATE")
@click.argument("inputs", nargs=-1, required=True, metavar="INPUT...")
@click.option(
    "-o",
    "--output",
    "folder",
    type=click.Path(path_type=Path),
    required=True,
    metavar="FOLDER",
    help="Where results.jsonl, results.csv and summary.json go; made where there is none.",
)
@click.option("--workers", type=click.IntRange(min=1), metavar="N", help="Processes; without it one for each core.")
@click.option("--resume", is_flag=True, help="Go on with an interrupted run: what was finished is not done again.")
@click.option("--cluster", metavar="ADDRESS", help="Work on this dask.distributed scheduler instead.")
@click.option(
    "--timeout",
    type=FiniteRange(min=0, min_open=True),
    metavar="S",
    help="Seconds that one input may take; one that takes longer is stopped and reported.",
)
@click.option(
    "--memory",
    type=FiniteRange(min=0, min_open=True),
    metavar="MB",
    help="Resident size that a process may reach; an input that takes more is stopped and reported.",
)
@click.option("--quiet", is_flag=True, help="No progress bar and no closing words.")
@click.option("--json", "as_json", is_flag=True, help="Print what summary.json holds when all is done.")
@verbose_option
def batch(
    template: Path,
    inputs: tuple[str, ...],
    folder: Path,
    workers: int | None,
    resume: bool,
    cluster: str | None,
    timeout: float | None,
    memory: float | None,
    quiet: bool,
    as_json: bool,
) -> None:
    """Run a template on every INPUT: structure files, patterns such as 'set/*.cif', folders, or - for a list on stdin.

    TEMPLATE is a study without [crystal]. A broken input never stops the others; it is reported in the results, and
    the exit status is then 1. A run that was stopped goes on with --resume. No --csv is needed: results.csv is always
    written.

    \b
    Example:
      latticedip batch template.toml structures/ -o results
      latticedip batch template.toml structures/ -o results --resume --timeout 60
    """
    from latticedip.encode import to_json
    from latticedip.study.batch import cluster_executor, run_batch

    if cluster is not None:
        for name, value in (("--workers", workers), ("--timeout", timeout), ("--memory", memory)):
            if value is not None:
                raise click.UsageError(f"{name} is for processes on this machine; it does not go with --cluster.")
    bar = ProgressBar() if not quiet and sys.stderr.isatty() else None
    try:
        with nullcontext() if cluster is None else cluster_executor(cluster) as executor:
            result = run_batch(
                template,
                _named(inputs),
                folder,
                executor=executor,
                resume=resume,
                workers=workers,
                timeout_s=timeout,
                memory_MB=memory,
                progress=bar,
            )
    finally:
        if bar is not None:
            bar.clear()
    if not quiet:
        again = f" ({result.reused} of them before)" if result.reused else ""
        skipped = f", {result.skipped} skipped" if result.skipped else ""
        click.echo(f"{result.done} done, {result.failed} failed{again}{skipped}. Wrote {folder}.", err=True)
        for entry in result.summary["failed"][:5]:
            click.echo(f"  {entry['error'] if entry['input'] in entry['error'] else _both(entry)}", err=True)
        if result.failed > 5:
            click.echo(f"  and {result.failed - 5} more, listed in {folder / 'summary.json'}.", err=True)
    if as_json:
        click.echo(to_json(result.summary), nl=False)
    if result.failed:
        click.get_current_context().exit(1)


def _both(entry: dict[str, str]) -> str:
    return f"{entry['input']}: {entry['error']}"


def _named(inputs: tuple[str, ...]) -> list[str]:
    """The inputs with - replaced by the lines of stdin."""
    named: list[str] = []
    for item in inputs:
        if item == "-":
            lines = (os.fsdecode(line.rstrip(b"\r\n")) for line in sys.stdin.buffer)
            named += [line for line in lines if line.strip()]
        else:
            named.append(item)
    return named
