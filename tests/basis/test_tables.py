"""Data tables: complete headers, missing cells, and rows that stop the load."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dosekit.basis.tables import REQUIRED_HEADER, parse_table, read_table
from dosekit.errors import DosekitError, TableError

HEADER = "".join(f"# {key}: words\n" for key in REQUIRED_HEADER)


def test_an_empty_cell_is_missing():
    table = parse_table(HEADER + "a,b\n1,\n2,5\n", name="t")
    assert np.isnan(table["b"][0])
    assert table["b"][1] == 5.0


def test_columns_cannot_be_written_to():
    table = parse_table(HEADER + "a,b\n1,x\n", name="t")
    with pytest.raises(ValueError, match="read-only"):
        table["a"][0] = 2.0


@pytest.mark.parametrize("key", REQUIRED_HEADER)
def test_a_header_without_a_key_is_refused(key):
    text = "".join(line for line in HEADER.splitlines(keepends=True) if not line.startswith(f"# {key}"))
    with pytest.raises(TableError, match=key):
        parse_table(text + "a\n1\n", name="t")


@pytest.mark.parametrize(
    ("body", "line"),
    [
        ("a,b\n1,2\n3\n", "line 9"),
        ("a,b\n1,2\n3,4,5\n", "line 9"),
        ("a,b\n1,2\n3,4\n5,six\n", "line 10"),
        ("a,b\n1,2\n3,inf\n", "line 9"),
        ("a,a\n1,2\n", "line 7"),
    ],
)
def test_a_damaged_row_stops_the_load_with_file_and_line(body, line):
    with pytest.raises(TableError, match=rf"broken\.csv, {line}"):
        parse_table(HEADER + body, name="broken.csv")


def test_no_rows_is_an_error():
    with pytest.raises(TableError, match="no rows"):
        parse_table(HEADER + "a,b\n", name="t")


def test_an_absent_table_is_named():
    with pytest.raises(TableError, match=r"basis/data/nowhere\.csv"):
        read_table("nowhere")


@settings(max_examples=60, deadline=None)
@given(st.text(max_size=200))
def test_any_text_gives_a_table_or_an_error_of_ours(text):
    try:
        parse_table(text, name="any")
    except DosekitError:
        pass
