"""``latticedip rank``: which ordering the dipolar interaction favours, and by how much."""

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


@click.command(short_help="Rank orderings by their dipolar energy.")
@study_argument
@click.option(
    "--rotate",
    is_flag=True,
    help="Turn each pattern as a whole to its best orientation; prints easy axis, hard axis and the energy between.",
)
@click.option(
    "--bound/--no-bound",
    default=None,
    help="Say how far every ordering stands above the lowest dipolar mode, a lower bound for all orderings of these "
    "moments. Done by itself for up to 16 magnetic sites.",
)
@click.option(
    "--parts",
    is_flag=True,
    help="Say what every energy is made of: by pair of sublattices, and by distance up to the full sum.",
)
@click.option(
    "--shells",
    type=click.IntRange(0, 1000),
    default=10,
    show_default=True,
    help="Shells of distance listed by --parts.",
)
@plot_option
@ordering_option
@tol_option
@output_options
def rank(
    study: Path,
    rotate: bool,
    bound: bool | None,
    parts: bool,
    shells: int,
    plot_path: Path | None,
    orderings: tuple[str, ...],
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Rank the orderings of a study by their dipolar energy per magnetic ion, lowest first.

    The size of the field at every probe is given beside each. Exchange and crystal field are not part of the
    energy: the ranking is an argument, not a proof. Where the study gives other_energy_meV_per_ion for an ordering
    (exchange, single ion, from elsewhere), the sum and the order that it gives are shown beside.

    \b
    Example:
      latticedip rank study.toml --rotate --plot ranking.pdf
      latticedip rank study.toml --ordering "ferromagnet" --ordering "layers"
      latticedip rank study.toml --parts --shells 6
    """
    from latticedip.report.rank import rank_text
    from latticedip.study import tasks
    from latticedip.study.rank_options import RankOptions
    from latticedip.study.rankings import rank_table

    if plot_path is not None:
        from latticedip.report.plots import check_plot

        check_plot(plot_path)
    options = RankOptions(rotate, bound, parts, shells, orderings, tol)
    document = tasks.rank(tasks.open_study(study), options)
    if plot_path is not None:
        from latticedip.report.plots import draw_rank

        draw_to(plot_path, document, draw_rank)
    deliver(
        document,
        rows=lambda: rank_table(document),
        text=lambda: rank_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
