"""The rows of results.csv: what each record of a batch says, as the command of each task writes it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from latticedip.study.describe import show_table
from latticedip.study.documents import flat
from latticedip.study.fields import field_table
from latticedip.study.linewidths import linewidth_table
from latticedip.study.rankings import rank_table
from latticedip.study.shifts import shift_table

Document = dict[str, Any]

#: How a document becomes rows; other documents give their "rows", if they have any.
TABLES: dict[str, Callable[[Document], Sequence[Document]]] = {
    "rank": rank_table,
    "field": field_table,
    "shift": shift_table,
    "linewidth": linewidth_table,
    "show": show_table,
}


def record_rows(record: dict[str, Any]) -> list[Document]:
    """The rows of one record, each led by input, status and task; a failed input gives one, with its error."""
    head = {"input": record["input"], "status": record["status"], "error": record["error"]}
    rows: list[Document] = []
    for task, document in record["results"].items():
        found = TABLES[task](document) if task in TABLES else document.get("rows", [])
        rows += [{**head, "task": task, **_plain_cells(flat(row))} for row in found]
    return rows or [head]


def _plain_cells(row: Document) -> Document:
    """A row whose cells are text, numbers or empty; lists and tables that `flat` leaves become text."""
    return {k: v if v is None or isinstance(v, (str, int, float)) else str(v) for k, v in row.items()}
