"""``latticedip directions``: the energy of collinear orderings against the direction of their moments."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import (
    deliver,
    draw_to,
    ordering_option,
    output_options,
    plot_option,
    study_argument,
    tol_option,
)


@click.command(short_help="Energy against the direction of the moments.")
@study_argument
@click.option("--steps", type=click.IntRange(2, 10_000), default=18, show_default=True, help="Steps of half a turn.")
@plot_option
@ordering_option
@tol_option
@output_options
def directions(
    study: Path,
    steps: int,
    plot_path: Path | None,
    orderings: tuple[str, ...],
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print the energy of every collinear ordering while all its moments turn together, along three great circles
    through its easy, middle and hard axis, and its anisotropy field.

    The anisotropy field 2 dE/m is that of an antiferromagnet: dE is the energy per ion between the easy axis and the
    other one, m the moment of an ion.

    \b
    Example:
      latticedip directions study.toml --ordering "layers" --plot directions.pdf
    """
    from latticedip.report.directions import directions_text
    from latticedip.study import tasks
    from latticedip.study.turns import directions_table

    if plot_path is not None:
        from latticedip.report.plots import check_plot

        check_plot(plot_path)
    document = tasks.directions(tasks.open_study(study), steps=steps, orderings=orderings, tol=tol)
    if plot_path is not None:
        from latticedip.report.plots import draw_directions

        draw_to(plot_path, document, draw_directions)
    deliver(
        document,
        rows=lambda: directions_table(document),
        text=lambda: directions_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
