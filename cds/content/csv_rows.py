"""A code table as CSV text -> rows whose shape is checked. Knows no table in particular.

Words are checked once per distinct cell, not once per row, so that thousands of rows cost little at start.
"""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from math import isfinite
from typing import NoReturn

from cds.errors import ContentError

CHECKED = frozenset({"read", "memory"})


@dataclass(frozen=True, slots=True)
class CsvTable:
    """One table: its file name, its columns, its rows in the order of the file, and its cells by column."""

    name: str
    columns: tuple[str, ...]
    rows: list[list[str]]
    cells: Mapping[str, tuple[str, ...]]

    def fail(self, row: Sequence[str], problem: str, fix: str) -> NoReturn:
        """Stop, naming the table and the row."""
        where = next((number for number, other in enumerate(self.rows, start=2) if other is row), 0)
        raise ContentError(self.name, f"row {where} ({row[0]})", problem, fix)

    def fail_cell(self, column: str, cell: str, problem: str, fix: str) -> NoReturn:
        """Stop at the first row with this cell in this column."""
        place = self.columns.index(column)
        self.fail(next(row for row in self.rows if row[place] == cell), f"{column}: {problem}", fix)

    def check(self, column: str, is_right: Callable[[str], object], problem: str, fix: str) -> None:
        """Stop at the first distinct cell of `column` that `is_right` rejects."""
        for cell in dict.fromkeys(self.cells[column]):
            if not is_right(cell):
                self.fail_cell(column, cell, problem, fix)

    def check_words(self, column: str, words: Iterable[str], *, separators: str = "") -> None:
        """Stop at a cell that is none of `words`; with separators, at a cell with a part that is none of them."""
        known = frozenset(words)
        split = re.compile(f"[{re.escape(separators)}]").split if separators else lambda cell: [cell]
        for cell in dict.fromkeys(self.cells[column]):
            unknown = [part for part in split(cell) if part not in known]
            if unknown:
                self.fail_cell(column, cell, f"'{unknown[0]}' is not a known word", "Correct it, or add the word.")

    def check_unique(self, *columns: str) -> None:
        """Stop at the second row with the same cells in `columns`."""
        keys = list(zip(*(self.cells[column] for column in columns), strict=True))
        if len(set(keys)) == len(keys):
            return
        double = next(key for key, times in Counter(keys).items() if times > 1)
        row = [row for row, key in zip(self.rows, keys, strict=True) if key == double][1]
        self.fail(row, f"a second row with the same {' and '.join(columns)}", "Remove one of the two.")


def read_table(name: str, text: str, columns: tuple[str, ...]) -> CsvTable:
    """Read a table whose first line must be exactly `columns`; every row must be full and say how it was checked.

    Raises ContentError naming the table and the row.
    """
    try:
        header, *rows = csv.reader(text.splitlines(keepends=True), strict=True)
    except (csv.Error, ValueError) as error:
        raise ContentError(name, "the whole table", "is no CSV text with a header", "Restore it.") from error
    if tuple(header) != columns:
        wrong = sorted(set(header) ^ set(columns)) or ["their order"]
        raise ContentError(name, "row 1", f"wrong columns: {', '.join(wrong)}", f"Use {','.join(columns)}.")
    for number, row in enumerate(rows, start=2):
        if len(row) != len(columns):
            where = f"row {number} ({row[0] if row else 'empty'})"
            raise ContentError(
                name, where, f"has {len(row)} cells, not {len(columns)}", "Quote cells that hold a comma."
            )
    by_column = zip(*rows, strict=True) if rows else [()] * len(columns)
    table = CsvTable(name, columns, rows, dict(zip(columns, by_column, strict=True)))
    table.check_words("checked", CHECKED)
    table.check("source", str.strip, "is empty", "Say where the row comes from.")
    if "display" in columns and columns[0] != "loinc":
        # Brands stand in square brackets; LOINC names carry their property there and are never shown.
        table.check("display", lambda cell: "[" not in cell, "holds square brackets", "Take out what stands in them.")
    return table


def amount(cell: str) -> float | None:
    """Read a number above nought; an empty cell gives None. Raises ValueError for anything else."""
    try:
        number = float(cell) if cell else None
    except ValueError:
        number = 0.0
    if number is not None and not (isfinite(number) and number > 0):
        raise ValueError("a strength that is no number above nought")
    return number
