"""A comma-separated file of numbers, taken apart without losing track of its lines.

Parsers of tables fill short rows and merge what an open quote spans without a word. Here the
lines and commas are counted in the bytes first, so that every fault is named with the line of the
file it stands on, and the fast parser only sees a table known to be rectangular.
"""

from __future__ import annotations

import csv
import gzip
import hashlib
import io
import re
import zlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from bayesglm.errors import InputError

FloatArray = NDArray[np.floating]

#: What stands for a missing value: an empty field, and what common programs write for one.
MISSING = ("", "NaN", "nan", "NA")

_NUMBER = re.compile(
    r"\s*[+-]?((\d+\.?\d*|\.\d+)(e[+-]?\d+)?|inf(inity)?)\s*", re.ASCII | re.IGNORECASE
)
_NEWLINE, _COMMA = 10, 44


@dataclass(frozen=True)
class TextTable:
    """A file whose header is read and whose rows are still text.

    Attributes
    ----------
    path
        The file.
    sha256
        Hash of the file's bytes as they lie on disk.
    header
        Names of the columns, without surrounding blanks.
    header_row
        Line of the file that holds the header, counted from 1.
    body
        The rows below the header, each ended by a line feed; at least one row.
    """

    path: Path
    sha256: str
    header: tuple[str, ...]
    header_row: int
    body: bytes

    @property
    def first_row(self) -> int:
        """Line of the file that holds the first row of numbers."""
        return self.header_row + 1


def open_table(path: Path, example: str = "time_ms,current_pA,voltage_mV") -> TextTable:
    """Read a file up to and including its header.

    Parameters
    ----------
    path
        CSV, plain or compressed by gzip, UTF-8. Lines above the header that start with ``#`` are
        comments; blank lines at the end are ignored.
    example
        A header to show where the file has none.

    Returns
    -------
    TextTable

    Raises
    ------
    InputError
        If the file is missing, empty, no text, or has no row below its header.
    """
    with open_bytes(path) as stream:
        raw = stream.read()
    text = _as_text(path, _unpack(path, raw))
    row = 1
    while text.startswith(b"#"):
        _, _, text = text.partition(b"\n")
        row += 1
    line, _, body = text.partition(b"\n")
    if not line.strip():
        found = "nothing" if not text.strip() else "an empty line"
        raise InputError(
            f"{path}, row {row}: found {found}; expected a header such as {example} and rows "
            "below it"
        )
    header = _split_header(path, row, line.decode(), example)
    # Only whole blank lines are cut at the end: a comma there is a row.
    body = body.rstrip(b" \t\n")
    if not body:
        raise InputError(f"{path}: found a header and no rows; expected at least one row below it")
    return TextTable(path, hashlib.sha256(raw).hexdigest(), header, row, body + b"\n")


def parse_numbers(table: TextTable) -> dict[str, FloatArray]:
    """Parse the rows of a table as numbers.

    Parameters
    ----------
    table
        A table whose header is sound.

    Returns
    -------
    dict
        Column by name, shape (n,); NaN where a field is one of `MISSING`.

    Raises
    ------
    InputError
        If a row has more or fewer fields than the header, or a field is no finite number.
    """
    _refuse_ragged(table)
    # The parser takes a column of true and false for ones and zeros; u and l stand in no number.
    if any(letter in table.body for letter in (b"u", b"U", b"l", b"L")):
        raise _first_bad_field(table, "found words")
    try:
        frame = pd.read_csv(
            io.BytesIO(table.body),
            header=None,
            names=list(table.header),
            index_col=False,
            dtype=np.float64,
            engine="c",
            quoting=csv.QUOTE_NONE,
            keep_default_na=False,
            na_values=list(MISSING),
            skipinitialspace=True,
            skip_blank_lines=False,
        )
    except (ValueError, TypeError) as error:
        raise _first_bad_field(table, str(error)) from None
    columns = {name: frame[name].to_numpy(dtype=np.float64) for name in table.header}
    for name, values in columns.items():
        infinite = np.flatnonzero(np.isinf(values))
        if len(infinite):
            raise InputError(
                f"{table.path}, row {table.first_row + infinite[0]}, column {name}: found an "
                "infinite value; expected a number (leave the field empty where it is missing)"
            )
    return columns


def open_bytes(path: Path) -> io.BufferedReader:
    """Open a file that is there, is a file and holds something.

    Raises
    ------
    InputError
        If it is not.
    """
    if path.is_dir():
        raise InputError(f"{path}: found a folder; expected a file (.csv, .csv.gz, .npz)")
    try:
        stream = path.open("rb")
    except FileNotFoundError:
        raise InputError(f"{path}: no such file; check the name and the folder") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror}); check its rights") from None
    if not stream.peek(1):
        stream.close()
        raise InputError(f"{path}: the file is empty; copy or export it again")
    return stream


def _unpack(path: Path, raw: bytes) -> bytes:
    """Undo gzip, told by the first two bytes and not by the name."""
    if raw.startswith(b"\x1f\x8b"):
        try:
            return gzip.decompress(raw)
        except (OSError, EOFError, zlib.error) as error:
            raise InputError(
                f"{path}: the gzip file is damaged or cut short ({error}); copy or export it again"
            ) from None
    if path.suffix == ".gz":
        raise InputError(
            f"{path}: the name ends in .gz and the content is not compressed by gzip; "
            "rename it to .csv or compress it"
        )
    return raw


def _as_text(path: Path, data: bytes) -> bytes:
    """Return UTF-8 text with line feeds only and without a byte order mark."""
    if data.startswith(b"PK\x03\x04"):
        raise InputError(
            f"{path}: found a zip archive or a workbook; save it as comma-separated text (.csv), "
            "or arrays as .npz"
        )
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise InputError(f"{path}: the text is UTF-16; save it as UTF-8")
    data = data.removeprefix(b"\xef\xbb\xbf")
    junk = data.find(b"\0")
    if junk < 0 and not data.isascii():
        try:
            data.decode()
        except UnicodeDecodeError as error:
            junk = error.start
    if junk >= 0:
        row = data.count(b"\n", 0, junk) + 1
        raise InputError(
            f"{path}, row {row}: found bytes that are no text; expected comma-separated text in "
            "UTF-8 (.csv, .csv.gz); export the file as CSV"
        )
    if b"\r" in data:
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    return data


def _split_header(path: Path, row: int, line: str, example: str) -> tuple[str, ...]:
    """Return the names of the columns; refuse other separators, gaps and repeats."""
    names = tuple(name.strip() for name in next(csv.reader([line], skipinitialspace=True)))
    if len(names) == 1:
        for sign, word in ((";", "';'"), ("\t", "tabs"), ("|", "'|'"), (" ", "blanks")):
            if sign in names[0]:
                raise InputError(
                    f"{path}, row {row}: columns are separated by {word}; expected commas; save as "
                    "comma-separated text with decimal points"
                )
    if all(_NUMBER.fullmatch(name) for name in names):
        raise InputError(
            f"{path}, row {row}: found numbers instead of the columns' names; write a header such "
            f"as {example} above them"
        )
    for index, name in enumerate(names):
        if not name:
            raise InputError(
                f"{path}, row {row}: column {index + 1} of {len(names)} has no name; "
                "name it or delete it"
            )
        if name in names[:index]:
            raise InputError(
                f"{path}, row {row}: column {name!r} occurs twice; keep one of the two"
            )
    return names


def _refuse_ragged(table: TextTable) -> None:
    """Raise for the first row whose number of fields is not that of the header."""
    data = np.frombuffer(table.body, dtype=np.uint8)
    ends = np.flatnonzero(data == _NEWLINE)
    commas = np.flatnonzero(data == _COMMA)
    counts = np.diff(np.searchsorted(commas, ends), prepend=0) + 1
    wrong = np.flatnonzero(counts != len(table.header))
    if not len(wrong):
        return
    index = wrong[0]
    place = f"{table.path}, row {table.first_row + index}"
    start = ends[index - 1] + 1 if index else 0
    if not table.body[start : ends[index]].strip():
        raise InputError(f"{place}: found an empty line; expected a sample; delete the line")
    raise InputError(
        f"{place}: found {counts[index]} fields; expected {len(table.header)} as in the header; "
        "complete the row, and save decimal commas as decimal points"
    )


def _first_bad_field(table: TextTable, reason: str) -> InputError:
    """Return the error for the first field that is no number; slow, for faulty files only."""
    for index, line in enumerate(table.body.decode().split("\n")):
        for name, field in zip(table.header, line.split(","), strict=False):
            if field.strip() not in MISSING and not _NUMBER.fullmatch(field):
                return InputError(
                    f"{table.path}, row {table.first_row + index}, column {name}: found "
                    f"{field.strip()[:40]!r}; expected a number with a decimal point and without "
                    "quotes (leave the field empty where it is missing)"
                )
    return InputError(f"{table.path}: the rows are no numbers ({reason}); export the file again")
