"""``latticedip modes``: the dipolar modes of a crystal, and the lowest energy that any ordering could have."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import deliver, draw_to, output_options, plot_option, study_argument, tol_option


@click.command(short_help="Dipolar modes: the lowest energy of any ordering.")
@study_argument
@click.option(
    "--points",
    type=click.IntRange(2, 100_000),
    default=200,
    show_default=True,
    help="Propagation vectors along the band path of the lattice, about.",
)
@click.option(
    "--keep", type=click.IntRange(0), default=6, show_default=True, help="Minima over k that are listed beside k = 0."
)
@plot_option
@tol_option
@output_options
def modes(
    study: Path, points: int, keep: int, plot_path: Path | None, tol: float, as_json: bool, csv_path: Path | None
) -> None:
    """Print the dipolar modes of lowest energy for the moments that the study states in [moments].

    The lowest one is a lower bound for the dipolar energy of every ordering; whether an ordering with moments of these
    sizes reaches it is said. The CSV file and the picture hold the energies of all modes along the band path. The
    orderings of the study play no part.

    \b
    Example:
      latticedip modes study.toml --plot modes.pdf --csv modes.csv
    """
    from latticedip.report.modes import modes_text
    from latticedip.study import tasks
    from latticedip.study.modes import modes_table

    if plot_path is not None:
        from latticedip.report.plots import check_plot

        check_plot(plot_path)
    need_path = plot_path is not None or csv_path is not None
    document = tasks.modes(tasks.open_study(study), points=points, keep=keep, need_path=need_path, tol=tol)
    if plot_path is not None:
        from latticedip.report.plots import draw_modes

        draw_to(plot_path, document, draw_modes)
    deliver(
        document,
        rows=lambda: modes_table(document),
        text=lambda: modes_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
