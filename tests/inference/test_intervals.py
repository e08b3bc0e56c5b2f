"""Wald intervals on natural scales."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kernelfit.inference.intervals import WaldIntervals, critical_value, wald_intervals

NAN = np.nan


# Student (1908); Fisher and Yates (1938), table III, two-sided 5 % (from memory), as in any textbook.
@pytest.mark.parametrize(("freedom", "printed"), [(1, 12.706), (4, 2.776), (9, 2.262), (30, 2.042), (99, 1.984)])
def test_critical_values_are_students(freedom, printed):
    assert critical_value(0.95, freedom) == pytest.approx(printed, abs=5e-4)


def test_without_a_limit_on_the_degrees_of_freedom_they_are_normal():
    assert critical_value(0.95, np.inf) == pytest.approx(1.959963985, abs=1e-9)
    assert critical_value(0.9, np.inf) == pytest.approx(1.644853627, abs=1e-9)


def test_one_block_of_time_has_no_critical_value():
    assert np.isnan(critical_value(0.95, 0.0))


def test_linear_scale():
    got = wald_intervals(np.array([0.3]), np.eye(1), np.array([[0.01]]), np.array([False]), 2.0)
    assert (got.estimate[0], got.std_error[0], got.lower[0], got.upper[0]) == pytest.approx((0.3, 0.1, 0.1, 0.5))


def test_log_scale_is_the_exponential_of_the_interval_of_the_logarithm():
    """A length of 200 with standard error 0.25 of its logarithm: 200 exp(-+0.5), delta-method standard error 50."""
    got = wald_intervals(np.array([200.0]), np.array([[200.0]]), np.array([[0.0625]]), np.array([True]), 2.0)
    assert got.std_error[0] == pytest.approx(50.0)
    assert (got.lower[0], got.upper[0]) == pytest.approx((200 * np.exp(-0.5), 200 * np.exp(0.5)))


def test_a_natural_parameter_of_two_working_ones():
    """The wide length s_w = s_n (1 + e^u): variance is the full quadratic form of its Jacobian row."""
    jacobian = np.array([[3.0, 0.0], [5.0, 2.0]])
    covariance = np.array([[0.04, -0.01], [-0.01, 0.09]])
    got = wald_intervals(np.array([3.0, 5.0]), jacobian, covariance, np.array([True, True]), 1.96)
    np.testing.assert_allclose(got.std_error**2, [9 * 0.04, 25 * 0.04 - 2 * 5 * 2 * 0.01 + 4 * 0.09])


def test_what_was_not_estimated_is_nan_and_spoils_nothing_else():
    covariance = np.array([[0.01, NAN], [NAN, NAN]])
    got = wald_intervals(np.array([1.0, 2.0]), np.eye(2), covariance, np.array([False, True]), 2.0)
    np.testing.assert_allclose(got.std_error, [0.1, NAN])
    np.testing.assert_allclose(got.lower, [0.8, NAN])
    no_row = wald_intervals(np.array([1.0]), np.zeros((1, 2)), covariance, np.array([False]), 2.0)
    assert np.isnan(no_row.std_error[0])


def test_critical_values_may_differ_by_parameter():
    got = wald_intervals(np.zeros(2), np.eye(2), np.eye(2), np.array([False, False]), np.array([1.0, 3.0]))
    np.testing.assert_allclose(got.upper, [1.0, 3.0])


@settings(max_examples=200, deadline=None)
@given(estimate=st.floats(1e-3, 1e5), log_error=st.floats(0.0, 300.0), critical=st.floats(0.5, 15.0))
def test_lengths_and_leaks_are_never_negative(estimate, log_error, critical):
    got = wald_intervals(
        np.array([estimate]), np.array([[estimate]]), np.array([[log_error**2]]), np.array([True]), critical
    )
    assert 0.0 <= got.lower[0] <= estimate <= got.upper[0]
    assert not np.isnan([got.lower[0], got.upper[0]]).any()


@pytest.mark.parametrize("amplitude", [-0.2, 0.0, 1e-300])
def test_amplitudes_of_any_sign_keep_a_symmetric_interval(amplitude):
    got = wald_intervals(np.array([amplitude]), np.eye(1), np.array([[0.01]]), np.array([False]), 1.96)
    assert got.upper[0] - amplitude == pytest.approx(amplitude - got.lower[0]) == pytest.approx(0.196)


def test_ends_move_to_limits_and_never_past_the_estimate():
    got = WaldIntervals(
        np.array([2.0, 2.0, 9.0, 2.0]), np.ones(4), np.array([0.1, 1.0, 5.0, NAN]), np.array([50.0, 3.0, 12.0, NAN])
    ).within(np.array([[0.5, 8.0], [0.5, 8.0], [0.5, 8.0], [0.5, 8.0]]))
    np.testing.assert_array_equal(got.lower, [0.5, 1.0, 5.0, NAN])
    np.testing.assert_array_equal(got.upper, [8.0, 3.0, 9.0, NAN])  # an estimate past its limit stays in its interval
