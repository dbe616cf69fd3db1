"""Whatever stands in a cell: a study or a finding at that cell, never a traceback."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from tempfile import TemporaryDirectory

from hypothesis import example, given
from hypothesis import strategies as st

from tests.workbook.study_tables import SETTINGS, TABLES, check_file, raw_study, with_cell
from xlplan.base.errors import Level
from xlplan.study.build import check_and_build

PLACES = [f"Settings!B{row}" for row in range(2, len(SETTINGS) + 2)] + [
    f"{name}!{chr(ord('A') + column)}{row}"
    for name, (keys, rows) in TABLES.items()
    for column in range(len(keys))
    for row in range(2, min(len(rows), 4) + 2)
]

FORMATS = st.sampled_from(["General", "0%", "0.00", '0"%"', "yyyy-mm-dd", "@"])

GARBAGE = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-(10**18), 10**18),
    st.floats(),
    st.text(max_size=12),
    st.text(alphabet="0123456789.,-+% eE\u00a0\u2212_x", max_size=8),
    st.sampled_from(
        ["#N/A", "B1", "b1 ", "L1,L1", "yes", "none", "-", "n/a", "2030-01-07", "24:00", "Day", "S"]
    ),
    st.datetimes(dt.datetime(1899, 1, 1), dt.datetime(2200, 1, 1)),
    st.times(),
    st.timedeltas(dt.timedelta(days=-5), dt.timedelta(days=5)),
)


@given(
    changes=st.lists(st.tuples(st.sampled_from(PLACES), GARBAGE, FORMATS), min_size=1, max_size=4)
)
@example(changes=[("Settings!B8", 7, "General")])
@example(changes=[("Windows!B2", 5e-324, "General")])
@example(changes=[("Storage!H2", 5e-324, "General"), ("Storage!G2", 5e-324, "General")])
@example(changes=[("Loads!D2", 1e308, "General"), ("Loads!D3", 1e308, "General")])
@example(changes=[("Storage!M3", 5e-324, "General"), ("Settings!B18", 0, "General")])
def test_garbage_in_any_cells_is_a_finding_or_a_study(
    changes: list[tuple[str, object, str]],
) -> None:
    raw = raw_study()
    for place, value, number_format in changes:
        try:
            raw = with_cell(raw, place, value, number_format=number_format)
        except AssertionError:
            continue  # the cell holds this already
    study, findings = check_and_build(raw)
    assert (study is None) == any(finding.level is Level.FAULT for finding in findings)
    for finding in findings:
        assert finding.sheet
        assert finding.message
        assert len(finding.text().splitlines()) == 1


FILE_GARBAGE = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-(10**9), 10**9),
    st.floats(allow_nan=False, allow_infinity=False),
    st.text(alphabet=st.characters(min_codepoint=32, exclude_categories=("Cs",)), max_size=10),
    st.sampled_from(["=1+1", "=A1", "#REF!", "length", "Load"]),
    st.datetimes(dt.datetime(1901, 1, 1), dt.datetime(2200, 1, 1)),
)


@given(
    st.sampled_from(sorted(TABLES)),
    st.lists(st.tuples(st.integers(1, 6), st.integers(1, 9), FILE_GARBAGE), min_size=1, max_size=5),
)
def test_garbage_anywhere_on_a_sheet_of_a_file(
    name: str, cells: list[tuple[int, int, object]]
) -> None:
    """Headings included: the file as written and read."""

    def change(book) -> None:
        for row, column, value in cells:
            book[name].cell(row, column).value = value

    with TemporaryDirectory() as folder:
        study, findings = check_file(Path(folder), change)
    assert (study is None) == any(finding.level is Level.FAULT for finding in findings)
