"""``latticedip show``: what was understood of a structure or a study."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import (
    block_option,
    deliver,
    draw_to,
    ordering_option,
    output_options,
    plot_option,
    probe_option,
    view_option,
)


@click.command(short_help="Say what was understood of a structure or a study.")
@click.argument("file", type=click.Path(path_type=Path), metavar="FILE|STUDY")
@block_option
@ordering_option
@probe_option
@plot_option
@view_option
@output_options
def show(
    file: Path,
    block: str | None,
    orderings: tuple[str, ...],
    probes: tuple[str, ...],
    plot_path: Path | None,
    view: str | None,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Say what was understood of a structure file or a study (a name that ends in .toml).

    Cell, sites, moments in every cell of a period, nearest magnetic neighbours with the dipolar scale, probes,
    sample, warnings. Atoms are listed in the order in which signs and amplitudes of a study count. The CSV file
    holds the moments or, where there are none, the atoms. The picture shows cell, moments and probes with their
    fields, seen from --view.

    \b
    Example:
      latticedip show study.toml
      latticedip show study.toml --plot orderings.pdf --view "1 1 0"
    """
    from latticedip.report.show import show_text
    from latticedip.study import tasks
    from latticedip.study.describe import show_table

    if block is not None and tasks.is_study(file):
        raise click.UsageError("--block goes with a structure file; in a study, write block = ... beside the file.")
    if (orderings or probes) and not tasks.is_study(file):
        raise click.UsageError("--ordering and --probe go with a study.")
    if view is not None and plot_path is None:
        raise click.UsageError("--view goes with --plot.")
    if plot_path is not None:
        from latticedip.report.plots import check_plot

        check_plot(plot_path)
    document = tasks.show(file, block=block, orderings=orderings, probes=probes)
    if plot_path is not None:
        from latticedip.report.plots import draw_orderings

        drawn = tasks.drawing(file, block=block, view=view, orderings=orderings, probes=probes)
        draw_to(plot_path, drawn, draw_orderings)
    deliver(
        document,
        rows=lambda: show_table(document),
        text=lambda: show_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
