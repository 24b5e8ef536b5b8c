"""``latticedip shift``: coupling tensors of the probes, and their paramagnetic shifts."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import (
    FiniteRange,
    deliver,
    draw_to,
    orbit_option,
    output_options,
    plot_option,
    probe_option,
    study_argument,
    tol_option,
)


@click.command(short_help="Coupling tensors and paramagnetic shifts of the probes.")
@study_argument
@click.option(
    "--temperature",
    "temperatures",
    type=FiniteRange(min=0.0, min_open=True),
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
@click.option(
    "--powder", is_flag=True, help="Also give the line of a powder, all grains of the shape and orientation stated."
)
@click.option(
    "--bins",
    type=click.IntRange(2, 100_000),
    default=200,
    show_default=True,
    help="Bins of the line of a powder.",
)
@probe_option
@orbit_option
@plot_option
@tol_option
@output_options
def shift(
    study: Path,
    temperatures: tuple[float, ...],
    rotate_about: str | None,
    powder: bool,
    bins: int,
    probes: tuple[str, ...],
    orbit: bool,
    plot_path: Path | None,
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print the coupling tensor of every probe to the magnetic ions and, in a study with a table [susceptibility], the
    paramagnetic shift of every probe and its parts.

    The ions are those of [susceptibility], else of [moments], else those of the orderings. The CSV file holds the
    shifts or, without a susceptibility, the coupling tensors; with --rotate-about the shift at every angle, with
    --powder the histogram of the line. --plot draws the same: the shift against angle, or the line, or the shift
    against temperature and against the susceptibility. Standard uncertainties of positions (of the structure file, or
    position_su of a probe) and of chi (chi_su) are propagated.

    \b
    Example:
      latticedip shift study.toml --temperature 100
      latticedip shift study.toml --rotate-about c --plot shift.pdf

    \b
    In the study:
      [susceptibility]
      # cgs, per mole of ions; or "m3/mol" (SI), "muB/T" per ion
      Mn = { chi = 0.012, unit = "cm3/mol" }
      Co = { chi = 0.015, chi_su = 0.001, unit = "cm3/mol" }
      Fe = { chi = [0.02, 0.01], unit = "cm3/mol", temperatures_K = [50, 100] }
    """
    from latticedip.report.shift import shift_text
    from latticedip.study import tasks
    from latticedip.study.shifts import shift_table

    if plot_path is not None:
        from latticedip.report.plots import check_plot

        check_plot(plot_path)
    document = tasks.shift(
        tasks.open_study(study),
        temperatures_K=temperatures,
        rotate_about=rotate_about,
        powder_bins=bins if powder else None,
        probes=probes,
        all_equivalent=orbit,
        tol=tol,
    )
    if plot_path is not None:
        from latticedip.report.plots import draw_shift

        draw_to(plot_path, document, draw_shift)
    deliver(
        document,
        rows=lambda: shift_table(document),
        text=lambda: shift_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
