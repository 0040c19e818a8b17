"""Tables of comma-separated values: rows of located cells, nothing interpreted yet."""

from __future__ import annotations

import csv

from mcx.faults import Fault, Place
from mcx.text.located import Scalar


def read_table(text: str, file: str) -> tuple[list[list[Scalar]], list[Fault]]:
    """The cells of every line that is not empty, the first being the head, as far as the lines can be read. A line
    that has not as many cells as the head is a fault."""
    reader = csv.reader(text.splitlines(), strict=True)
    rows: list[list[Scalar]] = []
    faults: list[Fault] = []
    try:
        for cells in reader:
            row = _cells(cells, file, reader.line_num)
            if rows and len(row) != len(rows[0]) and any(cell.text for cell in row):
                faults.append(Fault(row[0].place, f"expected {len(rows[0])} values, found {len(row)}"))
            elif any(cell.text for cell in row):
                rows.append(row)
    except csv.Error as error:
        faults.append(Fault(Place(file, reader.line_num, 1), f"the line is not CSV: {error}"))
    return rows, faults


def _cells(row: list[str], file: str, line: int) -> list[Scalar]:
    """The cells of a line with their places (as far as cells are not quoted)."""
    found, column = [], 1
    for cell in row:
        lead = len(cell) - len(cell.lstrip())
        found.append(Scalar(cell.strip(), Place(file, line, column + lead)))
        column += len(cell) + 1
    return found
