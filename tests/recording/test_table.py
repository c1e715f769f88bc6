"""Tables of numbers: what is accepted, and where a fault is said to be."""

import gzip
from pathlib import Path

import numpy as np
import pytest

from bayesglm.errors import InputError
from bayesglm.recording.table import open_table, parse_numbers


def read(path: Path, content: str | bytes) -> dict[str, np.ndarray]:
    data = content.encode() if isinstance(content, str) else content
    path.write_bytes(data)
    return parse_numbers(open_table(path))


@pytest.mark.parametrize(
    "content",
    [
        "a,b\n1,2\n3,4\n",
        "a,b\n1,2\n3,4",
        "a,b\r\n1,2\r\n3,4\r\n",
        "a,b\r1,2\r3,4\r",
        "\ufeffa,b\n1,2\n3,4\n\n\n",
        "# made at the rig\n# 20 °C\na,b\n1,2\n3,4\n",
        '"a","b"\n1,2\n3,4\n',
        " a , b \n 1, 2\n3 ,4 \n",
        "a,b\n+1,2.\n3e0,.4E1\n",
        gzip.compress(b"a,b\n1,2\n3,4\n"),
    ],
)
def test_accepted(tmp_path: Path, content: str | bytes) -> None:
    columns = read(tmp_path / "t.csv", content)
    assert {name: values.tolist() for name, values in columns.items()} == {
        "a": [1, 3],
        "b": [2, 4],
    }


@pytest.mark.parametrize("field", ["", " ", "NaN", "nan", "NA"])
def test_missing_values_are_nan(tmp_path: Path, field: str) -> None:
    columns = read(tmp_path / "t.csv", f"a,b\n1,{field}\n3,4\n")
    assert np.isnan(columns["b"]).tolist() == [True, False]


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ("a,b\n1,2\n3\n", r"row 3: found 1 fields; expected 2 as in the header"),
        ("a,b\n1,2,3\n3,4\n", r"row 2: found 3 fields; expected 2"),
        ("# c\na,b\n1,2\n3\n", r"row 4: found 1 fields"),
        ("a,b\n1,2\n\n3,4\n", r"row 3: found an empty line; expected a sample"),
        ("a,b\n\n3,4\n", r"row 2: found an empty line"),
        ("a,b\n0,05,1,5\n", r"row 2: found 4 fields; .*decimal commas as decimal points"),
        ("a,b\n1,2\n3,x\n", r"row 3, column b: found 'x'; expected a number"),
        ('a,b\n"1",2\n', r"row 2, column a: found '\"1\"'; .*without quotes"),
        ('a,b\n1,"2\n3,4"\n', r"row 2, column b: found '\"2'"),
        ("a,b\n1,2\n#3,4\n", r"row 3, column a: found '#3'"),
        ("a,b\n1,0x1A\n", r"row 2, column b: found '0x1A'"),
        ("a,b\n1,1_0\n", r"row 2, column b: found '1_0'"),
        ("a,b\n1,true\n3,false\n", r"row 2, column b: found 'true'"),
        ("a,b\n1,２\n", r"row 2, column b: found '２'"),
        ("a,b\n1,2\n3,inf\n", r"row 3, column b: found an infinite value"),
        ("a,b\n1,2\n3,-1e999\n", r"row 3, column b: found an infinite value"),
        ("a;b\n1;2\n", r"row 1: columns are separated by ';'; .*with decimal points"),
        ("a\tb\n1\t2\n", r"row 1: columns are separated by tabs"),
        ("a b\n1 2\n", r"row 1: columns are separated by blanks"),
        ("1,2\n3,4\n", r"row 1: found numbers instead of the columns' names"),
        ("a,a\n1,2\n", r"row 1: column 'a' occurs twice"),
        ("a,\n1,2\n", r"row 1: column 2 of 2 has no name"),
        ("", r"the file is empty"),
        ("\n\n", r"row 1: found nothing; expected a header such as time_ms,"),
        ("# only a comment", r"row 2: found nothing"),
        ("\na,b\n1,2\n", r"row 1: found an empty line"),
        ("a,b\n", r"found a header and no rows"),
        ("a,b\n\n \n", r"found a header and no rows"),
        (b"a,b\n1,2\n3,\x004\n", r"row 3: found bytes that are no text"),
        (b"a,b\n1,2\n3,\xb54\n", r"row 3: found bytes that are no text"),
        ("a,b\n1,2\n".encode("utf-16"), r"UTF-16; save it as UTF-8"),
        (b"PK\x03\x04junk", r"a workbook; save it as comma-separated text"),
        (b"\x1f\x8bjunk", r"gzip file is damaged or cut short"),
        (gzip.compress(b"a,b\n1,2\n" * 99)[:-12], r"gzip file is damaged or cut short"),
    ],
)
def test_refused(tmp_path: Path, content: str | bytes, message: str) -> None:
    path = tmp_path / "t.csv"
    with pytest.raises(InputError, match=message) as caught:
        read(path, content)
    assert str(caught.value).startswith(str(path))
    assert "\n" not in str(caught.value)


def test_missing_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"none\.csv: no such file"):
        open_table(tmp_path / "none.csv")


def test_folder(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="found a folder; expected a file"):
        open_table(tmp_path)


def test_plain_text_named_gz(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"name ends in \.gz and the content is not compressed"):
        read(tmp_path / "t.csv.gz", "a,b\n1,2\n")
