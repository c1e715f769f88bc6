"""Small tables of words beside a study: which cells there are, and which files are theirs."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from bayesglm.errors import InputError, nearest
from bayesglm.recording.table import open_table


@dataclass(frozen=True)
class ListingRow:
    """One row of a listing.

    Attributes
    ----------
    path, number
        The file and the line of the file the row stands on.
    fields
        Text by column, without surrounding blanks; empty where the field is.
    """

    path: Path
    number: int
    fields: dict[str, str]

    def __getitem__(self, column: str) -> str:
        return self.fields.get(column, "")

    def place(self, column: str) -> str:
        """Return where a field stands, for a message."""
        return f"{self.path}, row {self.number}, column {column}"


def read_listing(
    path: Path, required: Sequence[str], optional: Sequence[str] | None
) -> tuple[ListingRow, ...]:
    """Read a table of words.

    Parameters
    ----------
    path
        A CSV file in UTF-8. Blank lines are skipped.
    required
        Columns that must be there; the first must be filled in every row.
    optional
        Columns that may be there; None where any may.

    Returns
    -------
    tuple of ListingRow

    Raises
    ------
    InputError
        If the file cannot be read, a column is missing or unknown, or a row is ragged.
    """
    table = open_table(path, example=",".join(required))
    place = f"{path}, row {table.header_row}"
    for name in required:
        if name not in table.header:
            raise InputError(
                f"{place}: no column {name!r}; found {', '.join(table.header)}; expected "
                f"{', '.join(required)}; add the column"
            )
    for name in table.header:
        known = (*required, *(optional or ()))
        if optional is not None and name not in known:
            raise InputError(
                f"{place}: column {name!r} is unknown; expected {', '.join(known)}"
                f"{nearest(name, known)} (rename or delete the column)"
            )
    rows = []
    for number, fields in _lines(table.body, table.first_row):
        if len(fields) != len(table.header):
            raise InputError(
                f"{path}, row {number}: found {len(fields)} fields; expected {len(table.header)} "
                "as in the header; complete the row, and quote fields that hold a comma"
            )
        row = ListingRow(path, number, dict(zip(table.header, fields, strict=True)))
        if not row[required[0]]:
            raise InputError(
                f"{row.place(required[0])}: found an empty field; expected a name; fill it in or "
                "delete the row"
            )
        rows.append(row)
    return tuple(rows)


def _lines(body: bytes, first_row: int) -> list[tuple[int, list[str]]]:
    """Return the line and the fields of every row that is not blank."""
    reader = csv.reader(io.StringIO(body.decode(), newline=""), skipinitialspace=True)
    rows = []
    number = first_row
    for fields in reader:
        stripped = [field.strip() for field in fields]
        if any(stripped):
            rows.append((number, stripped))
        # A quoted field may span lines, so the reader knows where the next row begins.
        number = first_row + reader.line_num
    return rows
