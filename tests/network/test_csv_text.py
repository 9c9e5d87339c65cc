"""CSV text: line numbers, and that the fast reader sees the records which the csv module of Python sees."""

from __future__ import annotations

import re

import pyarrow as pa
import pyarrow.csv
from hypothesis import given, settings
from hypothesis import strategies as st

from network import input_schemas
from network.csv_text import CsvText
from network.faults import Faults

FIELD = st.text(st.sampled_from('ab ,"\né;'), max_size=6)
LINE_END = re.compile(r"\r\n|\r|\n")


@st.composite
def written_tables(draw: st.DrawFn) -> tuple[str, list[list[str]], list[int]]:
    """Draw the text of a table of three columns, its records, and the line on which each begins."""
    end = draw(st.sampled_from(["\n", "\r\n", "\r"]))
    records = draw(st.lists(st.lists(FIELD, min_size=3, max_size=3), max_size=8))
    text, lines = f"x,y,z{end}", []
    for record in records:
        text += end * draw(st.integers(0, 2))
        lines.append(len(LINE_END.findall(text)) + 1)
        text += ",".join(
            '"' + value.replace('"', '""') + '"' if re.search('[,"\n\r]', value) or draw(st.booleans()) else value
            for value in record
        )
        text += end
    if records and draw(st.booleans()):
        text = text.removesuffix(end)
    return text, records, lines


@given(written_tables())
@settings(deadline=None, max_examples=300)
def test_every_record_is_found_on_its_line(table: tuple[str, list[list[str]], list[int]]) -> None:
    text, records, lines = table
    csv_text, faults = CsvText("table.csv", text.encode(), ("x", "y", "z")), Faults()
    found = csv_text.records(faults)
    assert found is not None
    assert not faults.found
    assert (found.values, found.line) == (records, lines)
    assert csv_text.record_lines.tolist() == lines


@given(written_tables())
@settings(deadline=None, max_examples=300)
def test_the_fast_reader_sees_the_same_records(table: tuple[str, list[list[str]], list[int]]) -> None:
    text, records, _ = table
    csv_text = CsvText("table.csv", text.encode(), ("x", "y", "z"))
    if csv_text.doubtful(input_schemas()["legs"]) or not records:
        return
    fast = pyarrow.csv.read_csv(
        pa.BufferReader(csv_text.data),
        read_options=pyarrow.csv.ReadOptions(column_names=["x", "y", "z"], skip_rows_after_names=1),
        parse_options=pyarrow.csv.ParseOptions(newlines_in_values=True),
        convert_options=pyarrow.csv.ConvertOptions(column_types=dict.fromkeys("xyz", pa.string())),
    )
    assert [list(row.values()) for row in fast.to_pylist()] == records
