"""``latticedip linewidth``: static dipolar second moments and widths from nuclear moments."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

import click

from latticedip.cli.options import deliver, orbit_option, output_options, probe_option, study_argument


@click.command(short_help="Static widths of the probes from nuclear moments.")
@study_argument
@click.option(
    "--direction",
    metavar="AXIS",
    help='Strong field along a, b, c, a*, b*, c* or components along a, b, c such as "1 1 0"; powder without it.',
)
@click.option(
    "--nucleus",
    "nuclei",
    multiple=True,
    metavar="NAME",
    help="Count this isotope (63Cu) or element (Cu) only; may be given several times.",
)
@click.option(
    "--like",
    type=click.Choice(["isotope", "site"]),
    default="isotope",
    show_default=True,
    help="Which spins of the probe's own isotope are like spins: all, or those on sites that symmetry makes equal to "
    "its own (where shift or quadrupole splitting tells the others apart).",
)
@probe_option
@orbit_option
@output_options
def linewidth(
    study: Path,
    direction: str | None,
    nuclei: tuple[str, ...],
    like: Literal["isotope", "site"],
    probes: tuple[str, ...],
    orbit: bool,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print the static dipolar second moment and widths of every probe from the nuclear moments around it, and what
    each isotope adds.

    Abundances are natural unless the study says otherwise. Sums over all nuclei of the crystal are exact to ten
    digits or better. A spread that the study states for a probe counts as motion that is fast against the linewidth:
    the field of every nucleus is averaged over it. A slow motion gives a distribution of widths instead.

    \b
    Example:
      latticedip linewidth study.toml --direction c

    \b
    In the study:
      [abundances]
      # fractions of all lithium; an isotope that is not named is absent then
      7Li = 0.05
      6Li = 0.95
      [[probe]]
      # rms displacement along each axis, or covariance_A2 or Uij
      spread_A = 0.15
    """
    from latticedip.report.linewidth import linewidth_text
    from latticedip.study import tasks
    from latticedip.study.linewidths import linewidth_table

    document = tasks.linewidth(
        tasks.open_study(study), direction=direction, nuclei=nuclei, like=like, probes=probes, all_equivalent=orbit
    )
    deliver(
        document,
        rows=lambda: linewidth_table(document),
        text=lambda: linewidth_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
