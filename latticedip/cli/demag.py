"""``latticedip demag``: demagnetizing factors of a shape alone."""

from __future__ import annotations

from pathlib import Path

import click

from latticedip.cli.options import FiniteFloat, deliver, output_options


@click.command(short_help="Demagnetizing factors of a shape alone.")
@click.option("--ellipsoid", type=FiniteFloat(), nargs=3, metavar="A B C", help="Lengths of the three axes, any unit.")
@click.option("--prism", type=FiniteFloat(), nargs=3, metavar="A B C", help="Lengths of the three edges, any unit.")
@click.option("--cylinder", type=FiniteFloat(), nargs=2, metavar="D H", help="Diameter and height, any unit.")
@click.option("--sphere", is_flag=True)
@click.option("--plate", is_flag=True, help="An endless plate.")
@click.option("--needle", is_flag=True, help="An endless needle.")
@output_options
def demag(
    ellipsoid: tuple[float, float, float] | None,
    prism: tuple[float, float, float] | None,
    cylinder: tuple[float, float] | None,
    sphere: bool,
    plate: bool,
    needle: bool,
    as_json: bool,
    csv_path: Path | None,
) -> None:
    """Print the demagnetizing factors of a shape along its own axes.

    They add up to 1; the demagnetizing field is -µ0 N M. Give exactly one shape.

    \b
    Example:
      latticedip demag --ellipsoid 1 1 0.3
    """
    given: list[tuple[str, tuple[float, ...]]] = [
        (kind, lengths)
        for kind, lengths in (("ellipsoid", ellipsoid), ("prism", prism), ("cylinder", cylinder))
        if lengths is not None
    ]
    given += [(kind, ()) for kind, asked in (("sphere", sphere), ("plate", plate), ("needle", needle)) if asked]
    if len(given) != 1:
        what = "none was given" if not given else "got " + " and ".join(f"--{kind}" for kind, _ in given)
        raise click.UsageError(
            f"exactly one shape is needed (--ellipsoid, --prism, --cylinder, --sphere, --plate or --needle); {what}."
        )
    from latticedip.report.demag import demag_text
    from latticedip.study import tasks
    from latticedip.study.bodies import demag_table

    document = tasks.demag(*given[0])
    deliver(
        document,
        rows=lambda: demag_table(document),
        text=lambda: demag_text(document),
        as_json=as_json,
        csv_path=csv_path,
    )
