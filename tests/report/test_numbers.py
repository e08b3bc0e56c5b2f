"""How numbers are written. Expected texts follow from the rounding rule by hand, worked out beside each case."""

from __future__ import annotations

import math

import pytest

from kernelfit.report.numbers import (
    count_text,
    distance_label,
    duration_text,
    interval_text,
    number_text,
    p_sentence,
    p_text,
    powers_text,
    range_text,
    time_text,
)

NAN, INF = math.nan, math.inf
MINUS = "\N{MINUS SIGN}"


@pytest.mark.parametrize(
    ("numbers", "unit", "text"),
    [
        ((12.0, 9.0, 15.0), "%", "12 % (9 to 15)"),  # half-width 3.0: one decimal, zero in all three
        ((12.34, 9.12, 15.38), "%", "12.3 % (9.1 to 15.4)"),  # half-width 3.13: one decimal
        ((12.34, 9.12, 15.98), "%", "12.3 % (9.1 to 16.0)"),  # a zero in one number only stays
        ((1234.0, 812.0, 1891.0), "µm", "1,230 µm (810 to 1,890)"),  # half-width 540: to tens
        ((90_145.0, 71_200.0, 112_900.0), "", "90,000 (71,000 to 113,000)"),  # half-width 20,850: to thousands
        ((0.05, 0.0381, 0.0612), "", "0.050 (0.038 to 0.061)"),  # half-width 0.012: three decimals
        ((-0.05, -0.0612, -0.0381), "", f"{MINUS}0.050 ({MINUS}0.061 to {MINUS}0.038)"),
        ((0.5, 0.4996, 0.5004), "", "0.500 (0.500 to 0.500)"),  # would need four decimals; prose has three
        ((5.0, 4.005, 5.997), "Hz", "5 Hz (4 to 6)"),  # half-width 0.996 is 1.0 at two digits: one decimal
        ((3.0, -1.0, 7.0), "%", f"3 % ({MINUS}1 to 7)"),
        ((0.0, -0.0004, 0.0004), "", "0.000 (0.000 to 0.000)"),  # no minus before a zero
        ((1279.1, 1.616, 1_012_220.0), "µm", "1,300 µm (1.6 to 1,000,000)"),  # decades apart: two digits each
        ((13.0, 11.0, INF), "ms", "13 ms (at least 11)"),
        ((13.0, -INF, 15.0), "ms", "13 ms (at most 15)"),
        ((50.0, NAN, NAN), "1/s", "50 1/s"),
        ((NAN, 1.0, 2.0), "%", "could not be estimated"),
    ],
)
def test_an_interval_is_rounded_by_its_half_width(numbers, unit, text):
    assert interval_text(*numbers, unit) == text


def test_tables_may_have_more_decimals_than_prose():
    assert interval_text(0.01234, 0.01211, 0.01257) == "0.012 (0.012 to 0.013)"
    # half-width 0.00023: two digits need five decimals
    assert interval_text(0.01234, 0.01211, 0.01257, max_decimals=6) == "0.01234 (0.01211 to 0.01257)"


@pytest.mark.parametrize(
    ("p", "text"),
    [
        (0.0421, "0.042"),
        (0.3, "0.30"),
        (0.00149, "0.0015"),
        (0.0009999, "< 0.001"),
        (0.001, "0.0010"),
        (1e-300, "< 0.001"),
        (0.9999, "1.00"),
        (0.094, "0.094"),
        (0.0996, "0.10"),
        (NAN, "could not be estimated"),
    ],
)
def test_p_values_have_two_digits(p, text):
    assert p_text(p) == text


def test_p_values_in_sentences():
    assert p_sentence(0.042) == "p = 0.042"
    assert p_sentence(1e-9) == "p < 0.001"


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        ((0.0132, 0.0108, 0.0155), "13.2 ms (10.8 to 15.5)"),
        ((0.013, 0.011, 0.015), "13 ms (11 to 15)"),
        ((1.31, 1.02, 1.58), "1.31 s (1.02 to 1.58)"),
        ((0.005, NAN, NAN), "5 ms"),
        ((0.9, 0.7, 1.3), "900 ms (700 to 1,300)"),  # one unit for all three, that of the estimate
    ],
)
def test_times_below_a_second_are_in_milliseconds(seconds, text):
    assert time_text(*seconds) == text


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0.25, "250 ms"), (45.0, "45 s"), (1782.0, "29 min 42 s"), (3600.0, "1 h"), (7260.0, "2 h 1 min")],
)
def test_durations_read_as_people_say_them(seconds, text):
    assert duration_text(seconds) == text


@pytest.mark.parametrize(
    ("value", "digits", "text"),
    [
        (90_145.2, 3, "90,145"),
        (5.0, 3, "5"),
        (2.4, 3, "2.4"),
        (0.00012, 3, "0"),
        (0.0996, 2, "0.1"),
        (-2.345, 3, f"{MINUS}2.35"),
        (0.0, 3, "0"),
        (NAN, 3, "not known"),
    ],
)
def test_lone_numbers(value, digits, text):
    assert number_text(value, digits) == text


def test_columns_of_figures_keep_their_zeros():
    assert number_text(1.1, keep_zeros=True) == "1.10"


def test_counts_and_distances():
    assert count_text(90_145) == "90,145"
    assert distance_label(200.0) == "200 µm"
    assert distance_label(0.23) == "0.2 µm"
    assert distance_label(12_500.0) == "12.5 mm"


def test_ranges_keep_both_ends_to_their_own_digits():
    assert range_text(0.00063, 0.4) == "0.00063 to 0.40"
    assert range_text(6.0, 11.2) == "6.0 to 11"


def test_powers_of_ten_are_written_as_people_do():
    assert powers_text("the last step was 2.4e-07 long") == "the last step was 2.4 × 10⁻⁷ long"
    assert powers_text("unit e15, 1e+12 bins") == "unit e15, 1 × 10¹² bins"
    assert powers_text("6.9e-01 standard errors") == "0.69 standard errors"
    assert number_text(-1.42e17) == f"{MINUS}1.42 × 10¹⁷"


def test_ends_beyond_anything_bound_nothing():
    assert interval_text(0.0, -6e19, 6e19) == "0 (not bounded)"
    assert interval_text(2.0, 1.0, 6e19) == "2 (at least 1)"
    assert interval_text(2.0, NAN, NAN) == "2"
