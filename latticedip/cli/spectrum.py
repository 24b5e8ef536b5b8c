"""``latticedip spectrum``: how often each field and frequency occurs at the probes, and the polarization with time."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import click

from latticedip.cli.options import (
    FiniteFloat,
    FiniteRange,
    deliver,
    draw_to,
    ordering_option,
    output_options,
    probe_option,
    study_argument,
    tol_option,
)

if TYPE_CHECKING:
    from latticedip.study.spectra import DomainChoice


class NuclearWidth(click.ParamType):
    """A width in 1/µs, or the word auto."""

    name = "RATE|auto"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float | Literal["auto"]:
        if value == "auto":
            return "auto"
        try:
            number = float(value)
        except ValueError:
            self.fail(f"{value!r} is neither a number nor auto.", param, ctx)
        if not 0 <= number < float("inf"):
            self.fail(f"{value} is not a finite number of at least 0.", param, ctx)
        return number


@click.command(short_help="Spectra of |B| and frequency at the probes, and the polarization with time.")
@study_argument
@ordering_option
@probe_option
@click.option("--powder/--crystal", default=False, show_default="crystal", help="The specimen.")
@click.option(
    "--domains",
    type=click.Choice(["given", "list", "average"]),
    default="given",
    show_default=True,
    help="The ordering as given, each of its domains, or the average over all of them, equally large.",
)
@click.option(
    "--applied",
    type=FiniteFloat(),
    nargs=3,
    metavar="X Y Z",
    help="Applied field in T, Cartesian, in place of the study's; in a powder only its size counts.",
)
@click.option("--bins", type=int, default=200, show_default=True, help="Bins of the histogram.")
@click.option(
    "--width", type=FiniteFloat(), default=0.0, metavar="T", help="Smear every field by a Gaussian of this width."
)
@click.option(
    "--nuclear",
    type=NuclearWidth(),
    default=0.0,
    help="Add the static random field of nuclear moments, of this width in 1/µs; auto works it out for a muon.",
)
@click.option("--time", type=FiniteFloat(), metavar="US", help="Also the polarization P(t) up to this time in µs.")
@click.option(
    "--points",
    type=int,
    help="Moments in time of P(t), 2 to 100000; if left out, 12 in a turn of the fastest precession, 401 at least and "
    "100000 at most.",
)
@click.option(
    "--initial",
    metavar="AXIS",
    help="Direction in a crystal that the spin starts along: a, b, c, a*, b*, c* or components along a, b, c such as "
    '"1 1 0".',
)
@click.option("--detector", metavar="AXIS", help="Direction of the detector; the initial one if left out.")
@click.option(
    "--angle",
    type=FiniteRange(0, 180),
    metavar="DEG",
    help="In a powder in an applied field: angle between it and the direction that the spin starts and is seen along; "
    "0, along the field, if left out.",
)
@click.option("--seed", type=click.IntRange(min=0), default=0, show_default=True, help="Of the quasi-random phases.")
@click.option(
    "--plot", "plot_path", type=click.Path(path_type=Path), metavar="FILE", help="Also draw it: .png, .svg or .pdf."
)
@tol_option
@output_options
def spectrum(
    study: Path,
    orderings: tuple[str, ...],
    probes: tuple[str, ...],
    powder: bool,
    domains: DomainChoice,
    applied: tuple[float, float, float] | None,
    bins: int,
    width: float,
    nuclear: float | Literal["auto"],
    time: float | None,
    points: int | None,
    initial: str | None,
    detector: str | None,
    angle: float | None,
    seed: int,
    plot_path: Path | None,
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print how often each size of the field, and so each frequency, occurs at the probes of a study.

    Counted are all positions that the crystal makes equivalent to a probe, in every cell: lines where a few sizes
    occur, bands between two edges where the ordering is incommensurate. The CSV file holds the histogram, or with
    --time the polarization. The width of --width is a standard deviation; it smears the spectrum, not P(t).

    In a powder in an applied field the whole internal field turns with each grain, and the applied one stays: P(t) is
    the average over all angles between the two, along the applied field or at --angle to it.

    \b
    Example:
      latticedip spectrum study.toml --powder --time 5 --plot spectrum.pdf
    """
    from latticedip.report.spectrum import spectrum_text
    from latticedip.study import tasks
    from latticedip.study.spectra import SpectrumOptions, spectrum_table

    options = SpectrumOptions(
        powder=powder,
        domains=domains,
        applied_T=applied,
        bins=bins,
        width_T=width,
        nuclear_per_us=nuclear,
        time_us=time,
        points=points,
        initial=initial,
        detector=detector,
        angle_deg=angle,
        seed=seed,
        tol=tol,
    )
    if plot_path is not None:
        from latticedip.report.plots import check_plot

        check_plot(plot_path)
    document = tasks.spectrum(tasks.open_study(study), options, orderings=orderings, probes=probes)
    if plot_path is not None:
        from latticedip.report.plots import draw_spectrum

        draw_to(plot_path, document, draw_spectrum)
    deliver(
        document,
        rows=lambda: spectrum_table(document),
        text=lambda: spectrum_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
