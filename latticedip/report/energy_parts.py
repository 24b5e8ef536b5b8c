"""What energies are made of, on screen: pairs of sublattices, and shells of distance up to the full sum."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from latticedip.report.tables import Column, decimals_for, fixed, heading, paragraph, short, table

#: Pairs of sublattices listed one by one; where there are more, those of the same site labels are added up.
MOST_PAIRS = 36
#: Pairs of labels named for one shell.
MOST_NAMED = 3

BEYOND = (
    "Each shell holds all pairs of ions at its distance; beyond is all that lies farther, up to the full sum at N = 0. "
    "The sum converges conditionally, so that the rest need not be small."
)


def made_of_text(rows: Sequence[Mapping[str, Any]], *, width: int | None = None) -> str:
    """Return, for each row of a ranking, its energy by pair of sublattices and by distance."""
    parts = []
    for row in rows:
        parts += [
            heading(f"{row['ordering']}: what the energy is made of"),
            "",
            _pairs(row, width),
            "",
            _shells(row, width),
            "",
        ]
    return "\n".join([*parts, paragraph(BEYOND, width=width)])


def _digits(row: Mapping[str, Any], values: Sequence[float]) -> int:
    error = row["error_bound_ueV_per_ion"]
    finest = decimals_for(values, significant=15, error=error)
    return min(finest, max(3, decimals_for(values, significant=5, error=error)))


def _pairs(row: Mapping[str, Any], width: int | None) -> str:
    made = row["parts"]
    by_site = len(made["pairs"]) <= MOST_PAIRS
    listed = made["pairs"] if by_site else made["label_pairs"]
    shaped = made["shape_ueV_per_ion"] != 0.0
    columns = [Column("sublattices" if by_site else "site labels", words=True), Column("dipolar", "µeV/ion")]
    columns += [Column("shape", "µeV/ion")] if shaped else []
    digits = _digits(row, [pair["dipolar_ueV_per_ion"] for pair in listed])
    lines = [(f"{pair['first']} – {pair['second']}", pair) for pair in listed]
    cells = [
        [name, fixed(values["dipolar_ueV_per_ion"], digits)]
        + ([fixed(values["shape_ueV_per_ion"], digits)] if shaped else [])
        for name, values in [*lines, ("sum", made)]
    ]
    return table(columns, cells, width=width, keys=1)


def _shells(row: Mapping[str, Any], width: int | None) -> str:
    shells = row["parts"]["shells"]
    columns = [
        Column("distance", "Å"),
        Column("neighbours\nper ion"),
        Column("pairs", words=True),
        Column("dipolar", "µeV/ion"),
        Column("sum so far", "µeV/ion"),
    ]
    digits = _digits(row, [shell["dipolar_ueV_per_ion"] for shell in shells])
    cells = []
    for shell in shells:
        names = shell["pairs"][:MOST_NAMED]
        rest = len(shell["pairs"]) - len(names)
        last = shell["distance_A"] is None
        cells.append(
            [
                "beyond" if last else fixed(shell["distance_A"], 4),
                "" if last else short(shell["neighbours_per_ion"], 5),
                ", ".join(names) + (f" and {rest} more" if rest else ""),
                fixed(shell["dipolar_ueV_per_ion"], digits),
                fixed(shell["sum_ueV_per_ion"], digits),
            ]
        )
    return table(columns, cells, width=width, keys=1)
