"""Fields against their schema; an independent validator of the same schemas agrees."""

from __future__ import annotations

import json

import jsonschema
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from tests.workbook.study_tables import raw_study, with_cell
from xlplan.base.errors import Level
from xlplan.schema.fields import SCHEMA_STEMS, Field, Kind, load_sheets, schema_text
from xlplan.workbook.field_checks import check_field, check_table
from xlplan.workbook.tables import Cell

SCHEMAS = {schema["title"]: schema for schema in map(json.loads, map(schema_text, SCHEMA_STEMS))}

NUMBER_FIELDS = [
    (sheet.name, field)
    for sheet in load_sheets()
    for field in sheet.fields
    if field.kind in (Kind.NUMBER, Kind.INTEGER)
]


@given(
    st.sampled_from(NUMBER_FIELDS),
    st.one_of(
        st.integers(-1000, 10**6),
        st.floats(-1e4, 1e6, allow_nan=False),
        st.sampled_from([0, 1, 5, 60, 100, 100.5, 1.5, -20, 20, 300, 8760, 1e-9]),
    ),
)
def test_numbers_are_accepted_exactly_where_the_schema_allows_them(
    where: tuple[str, Field], value: float
) -> None:
    sheet, field = where
    assume(value == 0 or abs(value) >= 1e-9)  # the schema knows no limit of sense
    validator = jsonschema.Draft202012Validator(SCHEMAS[sheet]["properties"][field.key])
    read, findings = check_field(Cell(sheet, "C9", value), field)
    is_fault = any(finding.level is Level.FAULT for finding in findings)
    assert is_fault == (not validator.is_valid(value))
    assert is_fault == (read is None)
    assert all(finding.cell == "C9" for finding in findings)


@given(st.sampled_from(NUMBER_FIELDS), st.sampled_from([True, "abc", float("nan"), float("inf")]))
def test_what_is_no_number_is_never_accepted(where: tuple[str, Field], value: object) -> None:
    sheet, field = where
    read, findings = check_field(Cell(sheet, "C9", value), field)
    assert read is None
    assert any(finding.level is Level.FAULT for finding in findings)


@given(st.sampled_from(NUMBER_FIELDS), st.floats(-1e3, 1e5, allow_nan=False))
def test_likely_limits_only_warn(where: tuple[str, Field], value: float) -> None:
    sheet, field = where
    read, findings = check_field(Cell(sheet, "C9", value), field)
    assume(read is not None)
    warnings = [finding for finding in findings if finding.level is Level.WARNING]
    low = field.likely_min is not None and value < field.likely_min
    high = field.likely_max is not None and value > field.likely_max
    if low or high:
        assert len(warnings) == 1
        assert "would mean" in warnings[0].message
    assert read == value


REQUIRED = [(s.name, f) for s in load_sheets() for f in s.fields if f.is_required]


@pytest.mark.parametrize(("sheet", "field"), REQUIRED, ids=[f"{s} {f.key}" for s, f in REQUIRED])
def test_a_blank_is_a_fault_where_a_value_is_needed(sheet: str, field: Field) -> None:
    value, findings = check_field(Cell(sheet, "C9"), field)
    assert value is None
    assert [(f.level, f.code, f.cell) for f in findings] == [(Level.FAULT, "blank", "C9")]


def test_a_blank_optional_cell_takes_the_default_of_the_schema() -> None:
    for sheet in load_sheets():
        table = raw_study().tables[sheet.name]
        checked, _ = check_table(table, sheet)
        properties = SCHEMAS[sheet.name]["properties"]
        for row in checked.rows:
            for key, value in row.values.items():
                if key in row.typed or key not in properties:
                    continue
                default = properties[key].get("default")
                expected = {"yes": True, "no": False}.get(default, default)
                is_yes_no = properties[key]["x-kind"] == "yes_no"
                assert value == (expected if is_yes_no else default)


@pytest.mark.parametrize("value", [1e13, -1e13, 1e300, 1e-12, 5e-324])
def test_numbers_that_would_overflow_are_faults(value: float) -> None:
    field = next(s for s in load_sheets() if s.name == "Storage").field("step_kw")
    read, findings = check_field(Cell("Storage", "G2", value), field)
    assert read is None
    assert [finding.code for finding in findings] == ["out of bounds"]


def test_a_tiny_share_in_a_profile_is_no_fault() -> None:
    profile = next(s for s in load_sheets() if s.name == "Profiles").other_columns
    assert profile is not None
    assert check_field(Cell("Profiles", "B2", 6e-17), profile) == (6e-17, ())


def test_very_many_faults_of_one_kind_are_cut_short_and_counted() -> None:
    raw = raw_study()
    # 48 rows of four profile columns: 48 faults of one kind in one column are all listed.
    for row in range(2, 50):
        raw = with_cell(raw, f"Profiles!B{row}", -1)
    sheet = next(s for s in load_sheets() if s.name == "Profiles")
    _, findings = check_table(raw.tables["Profiles"], sheet)
    assert len(findings) == 48


def field_of(sheet: str, key: str) -> Field:
    return next(field for name, field in NUMBER_FIELDS if (name, field.key) == (sheet, key))


@pytest.mark.parametrize(("typed", "is_asked"), [(95, True), (1.2, False)])
def test_a_percentage_is_offered_only_where_it_would_be_likely(typed, is_asked):
    """95 is 95 %, a usual power factor; nobody means a power factor of 1.2 %."""
    _, findings = check_field(Cell("Loads", "E2", typed), field_of("Loads", "power_factor"))
    assert ("Did you mean" in findings[0].hint) is is_asked


@pytest.mark.parametrize(("typed", "said"), [(1, "1 year would"), (2, "2 years would")])
def test_one_of_a_unit_is_singular(typed, said):
    _, findings = check_field(Cell("Storage", "N2", typed), field_of("Storage", "life_years"))
    assert findings[0].message.startswith(said)
