"""CSV text against the standard library's writer, and tables kept in the store."""

from __future__ import annotations

import csv
import io

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from basinwright.store import Draft, Entry
from basinwright.tables import csv_text

WORDS = st.text(st.characters(codec="utf-8", exclude_characters="\x00"), max_size=6)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(WORDS, st.floats(), st.booleans(), st.integers(-99, 99)), max_size=8))
def test_csv_text_is_that_of_the_standard_library(rows):
    words, floats, truths, numbers = (list(column) for column in zip(*rows, strict=True)) if rows else ([], [], [], [])
    columns = {
        "word": np.array(words, object), "floats, all": np.array(floats, float), "truth": np.array(truths, bool),
        "number": np.array(numbers, int), "listed": [None if value < 0 else value for value in numbers],
    }  # fmt: skip
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\r\n")
    writer.writerow(columns)
    for word, real, truth, number in rows:
        shown = "" if np.isnan(real) else repr(real)
        writer.writerow([word, shown, "true" if truth else "false", number, "" if number < 0 else number])
    assert csv_text(columns) == stream.getvalue()


def test_columns_of_different_lengths_are_refused():
    with pytest.raises(ValueError, match=r"different lengths: \[1, 2\]"):
        csv_text({"a": [1.0], "b": [1.0, 2.0]})


def test_a_kept_table_comes_back_as_it_was(tmp_path):
    frame = pd.DataFrame({"id": ["b", "a", "b", ""], "x": [1.5, np.nan, -0.0, 2.0], "n": [3, 1, 2, 2]})
    for name, table in (("whole", frame), ("empty", frame.iloc[:0])):
        Draft(tmp_path).frame(name, table)
        back = Entry("tables", "key", tmp_path).frame(name)
        pd.testing.assert_frame_equal(back, table.reset_index(drop=True))
