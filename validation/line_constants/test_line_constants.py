"""Line constants as printed, and what a study makes of them."""

from __future__ import annotations

from validation.comparison import disagreements, read_rows
from validation.line_constants.case import HERE, compare, configuration, sequences


def test_figures() -> None:
    found = compare()
    assert len(found) == 16 + 2 + 4 + 3
    assert disagreements(found) == []


def test_what_a_balanced_model_leaves_out_is_not_small() -> None:
    """Zero sequence is about twice the positive one or more: unbalanced load drops more."""
    for row in read_rows(HERE, "sequence_impedances.csv"):
        number = int(row["line"].split()[1])
        positive, zero = sequences(configuration(number))
        assert abs(positive.real - float(row["r1_ohm_per_mile"])) < 1e-4
        assert abs(positive.imag - float(row["x1_ohm_per_mile"])) < 1e-4
        assert abs(zero.real - float(row["r0_ohm_per_mile"])) < 1e-4
        assert abs(zero.imag - float(row["x0_ohm_per_mile"])) < 1e-4
        if number != 606:
            assert abs(zero) > 1.8 * abs(positive)
