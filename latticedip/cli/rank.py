"""``latticedip rank``: which ordering the dipolar interaction favours, and by how much."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import deliver, ordering_option, output_options, study_argument, tol_option


@click.command(short_help="Rank orderings by their dipolar energy.")
@study_argument
@click.option(
    "--rotate",
    is_flag=True,
    help="Turn each pattern as a whole to its best orientation; prints easy axis, hard axis and the energy between.",
)
@ordering_option
@tol_option
@output_options
def rank(
    study: Path, rotate: bool, orderings: tuple[str, ...], tol: float, as_json: bool, csv_path: Path | None
) -> None:
    """Rank the orderings of a study by their dipolar energy per magnetic ion, lowest first.

    The size of the field at every probe is given beside each. Exchange and crystal field are not part of the
    energy: the ranking is an argument, not a proof.

    \b
    Example:
      latticedip rank study.toml --rotate
      latticedip rank study.toml --ordering "ferromagnet" --ordering "layers"
    """
    from latticedip.report.rank import rank_text
    from latticedip.study import tasks
    from latticedip.study.rankings import rank_table

    document = tasks.rank(tasks.open_study(study), rotate=rotate, orderings=orderings, tol=tol)
    deliver(
        document,
        rows=lambda: rank_table(document),
        text=lambda: rank_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
