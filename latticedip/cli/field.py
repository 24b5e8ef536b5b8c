"""``latticedip field``: the local field at every probe under every ordering."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from latticedip.cli.options import (
    deliver,
    draw_to,
    ordering_option,
    output_options,
    plot_option,
    probe_option,
    study_argument,
    tol_option,
)

if TYPE_CHECKING:
    from latticedip.study.fields import Axes, Unit


@click.command(short_help="Local fields at the probes, in five parts.")
@study_argument
@click.option(
    "--axes",
    type=click.Choice(["cartesian", "crystal", "polar"]),
    default="cartesian",
    show_default=True,
    help="Give vectors along Cartesian x, y, z; along unit vectors parallel to a, b, c of the study's crystal; or as "
    "size and angles (theta from z, phi from x in the xy plane).",
)
@click.option("--unit", type=click.Choice(["T", "G"]), default="T", show_default=True, help="Tesla or gauss.")
@plot_option
@ordering_option
@probe_option
@tol_option
@output_options
def field(
    study: Path,
    axes: Axes,
    unit: Unit,
    plot_path: Path | None,
    orderings: tuple[str, ...],
    probes: tuple[str, ...],
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print the local field at every probe under every ordering, in its five parts.

    A probe with several `positions` and their `weights` gets a row for each, and averages over them: the mean vector,
    which one feels that hops fast, the mean and rms size, and the rms deviation from the mean. The study's
    [moment_spread] extends the moments over their ions.

    \b
    Example:
      latticedip field study.toml --axes crystal --csv fields.csv
      latticedip field study.toml --ordering "ferromagnet" --probe "muon A"
      latticedip field study.toml --plot fields.pdf
    """
    from latticedip.report.field import field_text
    from latticedip.study import tasks
    from latticedip.study.fields import field_table

    if plot_path is not None:
        from latticedip.report.plots import check_plot

        check_plot(plot_path)
    document = tasks.field(tasks.open_study(study), axes=axes, unit=unit, orderings=orderings, probes=probes, tol=tol)
    if plot_path is not None:
        from latticedip.report.plots import draw_field

        draw_to(plot_path, document, draw_field)
    deliver(
        document,
        rows=lambda: field_table(document),
        text=lambda: field_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
