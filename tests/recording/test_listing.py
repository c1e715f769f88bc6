"""Tables of words beside a study."""

from pathlib import Path

import pytest

from bayesglm.errors import InputError
from bayesglm.recording.listing import ListingRow, read_listing


def read(
    folder: Path, content: str, optional: tuple[str, ...] | None = ("note",)
) -> tuple[ListingRow, ...]:
    path = folder / "list.csv"
    path.write_bytes(content.encode())
    return read_listing(path, ("cell", "file"), optional)


def test_rows_know_their_line(tmp_path: Path) -> None:
    rows = read(
        tmp_path, '\ufeff# list\r\ncell,file,note\r\na,"x, y.csv","two\r\nlines"\r\n\r\nb,z,\r\n'
    )
    assert [row.number for row in rows] == [3, 6]
    assert rows[0].fields == {"cell": "a", "file": "x, y.csv", "note": "two\nlines"}
    assert rows[1]["note"] == ""
    assert rows[1]["no such column"] == ""
    assert rows[1].place("file").endswith("list.csv, row 6, column file")


def test_free_columns(tmp_path: Path) -> None:
    (row,) = read(tmp_path, "age,cell,file\n12,a,x\n", optional=None)
    assert row["age"] == "12"


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("cell,note\na,b\n", r"row 1: no column 'file'; found cell, note; expected cell, file"),
        ("cell,file,notes\na,b,c\n", r"row 1: column 'notes' is unknown; .* did you mean 'note'"),
        ("cell,file\na\n", r"row 2: found 1 fields; expected 2 as in the header"),
        ("cell,file\na,b\nc,d,e\n", r"row 3: found 3 fields; expected 2 .*quote fields"),
        ("cell,file\n,b\n", r"row 2, column cell: found an empty field; expected a name"),
        ("cell,file\n", r"found a header and no rows"),
        ("", r"the file is empty"),
    ],
)
def test_refused(tmp_path: Path, content: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        read(tmp_path, content)
