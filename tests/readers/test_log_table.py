"""Log files of every encoding and separator, and files that are no logs."""

from __future__ import annotations

import hashlib
from pathlib import Path

import pytest

from pulsemend.errors import LogError
from pulsemend.model.log import LogTable
from pulsemend.readers.log_file import read_log
from pulsemend.trials.log_columns import column_numbers

ROWS = (("1", "links", "0.5"), ("2", "größer", "1.25"))
TEXT = "trial\tside\treaction\n1\tlinks\t0.5\n2\tgrößer\t1.25\n"


def read(folder: Path, content: str | bytes, encoding: str = "utf-8") -> LogTable:
    path = folder / "log.tsv"
    path.write_bytes(content.encode(encoding) if isinstance(content, str) else content)
    return read_log(path)


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "cp1252"])
@pytest.mark.parametrize("line_end", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("separator", ["\t", ",", ";"])
def test_every_way_of_writing_the_same_table(
    tmp_path: Path, encoding: str, line_end: str, separator: str
) -> None:
    text = TEXT.replace("\n", line_end).replace("\t", separator)
    table = read(tmp_path, text, encoding)
    assert table.name == "log.tsv"
    assert table.columns == ("trial", "side", "reaction")
    assert table.rows == ROWS
    assert table.lines == (2, 3)
    assert table.sha256 == hashlib.sha256(text.encode(encoding)).hexdigest()
    assert any("Windows 1252" in note for note in table.notes) == (encoding == "cp1252")
    word = {"\t": "tabs", ",": "commas", ";": "semicolons"}[separator]
    # Tabs in a file whose name says so are nothing to tell.
    assert (f"columns are separated by {word}" in table.notes) == (separator != "\t")


def test_utf_16_of_the_other_byte_order(tmp_path: Path) -> None:
    assert read(tmp_path, b"\xfe\xff" + TEXT.encode("utf-16-be")).rows == ROWS


def test_decimal_commas_are_found_per_column(tmp_path: Path) -> None:
    text = "trial;place;t;name\n1;1,2;4711,2503;a,b\n2;n/a;4715;c\n\n3;-,5;4720,1;d,e\n"
    table = read(tmp_path, text)
    assert table.decimal_comma == ("place", "t")
    assert "numbers have a decimal comma in: place, t" in table.notes
    assert table.lines == (2, 3, 5)
    assert column_numbers(table, "t") == (4711.2503, 4715.0, 4720.1)
    assert column_numbers(table, "place") == (1.2, None, -0.5)
    assert column_numbers(table, "trial") == (1.0, 2.0, 3.0)


def test_commas_and_points_in_one_column_are_no_decimal_commas(tmp_path: Path) -> None:
    table = read(tmp_path, "a;b\n1;1,5\n2;1.5\n")
    assert table.decimal_comma == ()
    with pytest.raises(LogError, match="not a number"):
        column_numbers(table, "b")


def test_a_quoted_comma_is_no_decimal_comma_where_commas_separate(tmp_path: Path) -> None:
    table = read(tmp_path, 'a,b\n1,"1,234"\n2,"2,500"\n')
    assert table.decimal_comma == ()
    assert table.rows[0] == ("1", "1,234")


def test_quotes_hold_separators_quotes_and_line_ends(tmp_path: Path) -> None:
    table = read(tmp_path, 'a,b\n"x, y","say ""so"""\n"two\nlines",2\n3,4\n')
    assert table.rows == (("x, y", 'say "so"'), ("two\nlines", "2"), ("3", "4"))
    assert table.lines == (2, 3, 5)


def test_the_separator_is_the_one_that_makes_equal_rows(tmp_path: Path) -> None:
    assert read(tmp_path, "said, twice\tt\na, b, c\t1\nd\t2\n").columns == ("said, twice", "t")


def test_a_single_column_needs_no_separator(tmp_path: Path) -> None:
    assert read(tmp_path, "time\n1.5\n2.5\n").rows == (("1.5",), ("2.5",))


def test_row_numbers_without_a_name_and_separators_at_the_end(tmp_path: Path) -> None:
    table = read(tmp_path, ",t,said,\n0,1.5,a,\n1,2.5,b,\n")
    assert table.columns == ("column 1", "t", "said")
    assert table.rows == (("0", "1.5", "a"), ("1", "2.5", "b"))
    assert "separators at the ends of lines are left out" in table.notes
    assert read(tmp_path, "a\tb\n1\t2\t\n3\t4\t\n").rows == (("1", "2"), ("3", "4"))


@pytest.mark.parametrize(
    ("content", "where", "what"),
    [
        (b"", "log.tsv", "it is empty"),
        (b" \n\n", "log.tsv", "it is empty"),
        (b"\xef\xbb\xbf", "log.tsv", "it is empty"),
        (b"trial\tt\n", "log.tsv", "it has a header and no rows"),
        (b"1\t4711.2\n2\t4715.0\n", "log.tsv, line 1", 'no header: "1"'),
        (b"a;b\n1,5;3,5\n"[4:], "log.tsv, line 1", 'no header: "1,5"'),
        (b"\nt\ta\tt\n1\t2\t3\n", "log.tsv, line 2", "the same name: t"),
        (b"a\tb\n1\t2\n\n3\n", "log.tsv, line 4", "this row has 1 cells, the header has 2"),
        (b"a,b\n1,2\n3,4,5\n", "log.tsv, line 3", "this row has 3 cells, the header has 2"),
        (b'a,b\n1,2\n3,"4\n5,6\n', "log.tsv, line 3", "a quotation mark is not closed"),
        (b"a,b\n1,\x00\x01\n", "log.tsv, line 2", "it is not text"),
        (b"a,b\n1,\x81\n", "log.tsv, line 2", "it is not text"),
        (TEXT.encode("utf-16-le"), "log.tsv, line 1", "it is not text"),
        (b"\xff\xfea\x00b", "log.tsv, line 1", "it is not text"),
        (b"PK\x03\x04\x14\x00\x06\x00", "log.tsv", "a spreadsheet or an archive"),
    ],
)
def test_a_file_that_is_no_log_is_refused_in_one_line(
    tmp_path: Path, content: bytes, where: str, what: str
) -> None:
    with pytest.raises(LogError) as caught:
        read(tmp_path, content)
    assert caught.value.where == where
    assert what in caught.value.what
    assert caught.value.todo
    assert "\n" not in str(caught.value)


def test_a_file_that_is_not_there_and_a_folder(tmp_path: Path) -> None:
    with pytest.raises(LogError, match=r"log cannot be opened \(no such file"):
        read_log(tmp_path / "none.tsv")
    with pytest.raises(LogError, match="log cannot be opened"):
        read_log(tmp_path)


def test_a_file_far_too_large(tmp_path: Path) -> None:
    path = tmp_path / "recording.eeg"
    with path.open("wb") as file:
        file.truncate(200 << 20)  # holds no blocks on the disk
    with pytest.raises(LogError, match="larger than 100 MiB"):
        read_log(path)
