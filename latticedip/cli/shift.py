"""``latticedip shift``: coupling tensors of the probes, and their paramagnetic shifts."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import (
    deliver,
    orbit_option,
    output_options,
    probe_option,
    study_argument,
    tol_option,
)


@click.command(short_help="Coupling tensors and paramagnetic shifts of the probes.")
@study_argument
@click.option(
    "--temperature",
    "temperatures",
    type=click.FloatRange(min=0.0, min_open=True),
    multiple=True,
    metavar="K",
    help="Temperature in K, where the study tabulates a susceptibility; may be given several times. Without it every "
    "temperature of the table is taken.",
)
@click.option(
    "--rotate-about",
    metavar="AXIS",
    help="Also give the shift while the crystal turns about this axis, the field across it: a, b, c, a*, b*, c* or "
    'components along a, b, c such as "1 1 0".',
)
@probe_option
@orbit_option
@tol_option
@output_options
def shift(
    study: Path,
    temperatures: tuple[float, ...],
    rotate_about: str | None,
    probes: tuple[str, ...],
    orbit: bool,
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print the coupling tensor of every probe to the magnetic ions and, in a study with a table [susceptibility], the
    paramagnetic shift of every probe and its parts.

    The ions are those of [susceptibility], else of [moments], else those of the orderings. The CSV file holds the
    shifts or, without a susceptibility, the coupling tensors; with --rotate-about the shift at every angle.

    \b
    Example:
      latticedip shift study.toml --temperature 100 --rotate-about c

    \b
    In the study:
      [susceptibility]
      Mn = { chi = 0.012, unit = "cm3/mol" }   # cgs, per mole of ions; or "m3/mol" (SI), "muB/T" per ion
      Fe = { chi = [0.02, 0.01], unit = "cm3/mol", temperatures_K = [50, 100] }
    """
    from latticedip.report.shift import shift_text
    from latticedip.study import tasks
    from latticedip.study.shifts import shift_table

    document = tasks.shift(
        tasks.open_study(study),
        temperatures_K=temperatures,
        rotate_about=rotate_about,
        probes=probes,
        all_equivalent=orbit,
        tol=tol,
    )
    deliver(
        document,
        rows=lambda: shift_table(document),
        text=lambda: shift_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
