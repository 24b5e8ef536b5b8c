"""``latticedip report``: everything about a study on one page."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import (
    FiniteRange,
    deliver,
    ordering_option,
    output_options,
    probe_option,
    study_argument,
    tol_option,
    view_option,
)

SUFFIXES = (".html", ".htm")


@click.command(short_help="Write a page with all results and pictures of a study.")
@study_argument
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), required=True, metavar="FILE", help="The page: .html or .htm."
)
@click.option("--rotate", is_flag=True, help="Turn each pattern of the ranking as a whole to its best orientation.")
@click.option("--no-pictures", is_flag=True, help="Tables only; needs no matplotlib.")
@click.option("--no-spectra", is_flag=True, help="Leave out spectra and P(t).")
@click.option(
    "--time",
    type=FiniteRange(0, 1e6, min_open=True),
    metavar="US",
    help="P(t) up to this time in µs; a few turns of the precessions if left out.",
)
@click.option(
    "--initial",
    metavar="AXIS",
    help="P(t) in a crystal, for a spin that starts along this direction and is seen along it: a, b, c, a*, b*, c* or "
    'components along a, b, c such as "1 1 0"; without it P(t) is that of a powder, in an applied field along it.',
)
@click.option(
    "--modes/--no-modes",
    default=None,
    help="The dipolar modes along the band path; without either, for up to 8 magnetic ions in the cell.",
)
@view_option
@ordering_option
@probe_option
@tol_option
@output_options
def report(
    study: Path,
    output: Path,
    rotate: bool,
    no_pictures: bool,
    no_spectra: bool,
    time: float | None,
    initial: str | None,
    modes: bool | None,
    view: str | None,
    orderings: tuple[str, ...],
    probes: tuple[str, ...],
    tol: float,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Write one HTML page about a study, for the logbook and for a referee: inputs with content hashes, assumptions,
    the tables of show, rank, modes, field, spectrum, shift (with a susceptibility) and linewidth, P(t), pictures, and
    what is left out.

    The page needs nothing else: no network, no script. The same inputs give the same page. Its summary goes to the
    screen; the JSON document holds all results, the CSV file the ranking (without orderings, the atoms).

    \b
    Example:
      latticedip report study.toml -o report.html
    """
    from latticedip.encode import write_text_atomically
    from latticedip.errors import InputError
    from latticedip.report.html import report_html, summary_sentences
    from latticedip.report.tables import paragraph
    from latticedip.study import tasks
    from latticedip.study.documents import spare_inputs
    from latticedip.study.reports import ReportOptions, report_document, report_table

    if no_spectra and (time is not None or initial is not None):
        raise click.UsageError("--time and --initial go with spectra: leave out --no-spectra.")
    if output.suffix.lower() not in SUFFIXES:
        raise InputError(f"a report ends in {' or '.join(SUFFIXES)}, got {str(output)!r}.")
    if not no_pictures:
        from latticedip.report.plots import check_library

        try:
            check_library()
        except InputError as error:
            raise InputError(f"{error}. Or leave them out with --no-pictures.") from None
    options = ReportOptions(
        orderings=orderings,
        probes=probes,
        rotate=rotate,
        view=view,
        spectra=not no_spectra,
        time_us=time,
        initial=initial,
        modes=modes,
        tol=tol,
    )
    document = report_document(tasks.open_study(study), options)
    spare_inputs(output, document)
    write_text_atomically(output, report_html(document, pictures=not no_pictures))
    click.echo(f"Wrote {output}.", err=True)
    deliver(
        document,
        rows=lambda: report_table(document),
        text=lambda: "\n".join(paragraph(sentence) for sentence in summary_sentences(document)),
        as_json=as_json,
        csv_path=csv_path,
    )
