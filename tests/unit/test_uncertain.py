"""Covariances and ellipses in detail: factors, axes, degrees of freedom, significance."""

import math

import numpy as np
import pytest
from scipy import stats
from strategies import assert_within

from restore.geometry.uncertain import (
    RowErrors,
    Sensitivity,
    confidence_factor,
    ellipse,
    significance,
    welch_satterthwaite,
)


@pytest.mark.parametrize(
    ("dof", "factor", "digits"),
    [(math.inf, 2.4477, 4), (5, 3.40, 2), (10, 2.86, 2), (30, 2.58, 2), (10, 2.8645, 4)],
)
def test_factors_of_the_worked_cases(dof, factor, digits):
    """k of the 95 % ellipse to the digits printed: 2.4477, and larger where kappa was estimated."""
    assert round(float(confidence_factor(dof)), digits) == factor


@pytest.mark.parametrize("probability", [0.5, 0.95, 0.99])
def test_factors_against_scipy(probability):
    """k^2 is the chi-square quantile of 2, or twice the F quantile of (2, nu)."""
    for dof in (0.5, 1.0, 3.0, 77.0, 1e6):
        k2 = 2.0 * stats.f.ppf(probability, 2, dof)
        assert_within(float(confidence_factor(dof, probability)) ** 2 / k2 - 1.0, 1e-9)
    k2 = stats.chi2.ppf(probability, 2)
    assert_within(float(confidence_factor(probability=probability)) ** 2 / k2 - 1.0, 1e-12)
    assert np.isnan(confidence_factor(np.nan))


@pytest.mark.parametrize("azimuth", [0.0, 30.0, 45.0, 90.0, 135.0, 179.0])
@pytest.mark.parametrize("ratio", [0.5, 1e-3, 1e-8])
def test_axes_of_an_ellipse(azimuth, ratio):
    """Semi-axes and azimuth of a covariance made of them come back; thin ones to a micrometre."""
    major, minor = 7.0, 7.0 * ratio
    a = math.radians(azimuth)
    longer, shorter = np.array([math.sin(a), math.cos(a)]), np.array([math.cos(a), -math.sin(a)])
    matrix = np.outer(longer, longer) * major**2 + np.outer(shorter, shorter) * minor**2
    found = ellipse(matrix[0, 0], matrix[1, 1], matrix[0, 1], 2.0, 0.5)
    assert_within(found.major_km - major, 1e-12)
    # the shorter axis is the root of a difference: 1e-16 of 49 km^2 leaves 1e-7 km of it
    assert_within(found.minor_km - minor, 2e-7)
    assert_within(math.remainder(float(found.azimuth_deg) - azimuth, 180.0), 1e-12)
    assert 0.0 <= found.azimuth_deg < 180.0


def test_a_circle_and_nothing():
    """A circle has azimuth 0, no error has axes of zero, NaN stays NaN; in one array."""
    east = np.array([4.0, 0.0, np.nan])
    found = ellipse(east, east, np.array([0.0, 0.0, np.nan]), 1.0, 1.0)
    assert found.major_km[:2].tolist() == found.minor_km[:2].tolist() == [2.0, 0.0]
    assert found.azimuth_deg[:2].tolist() == [0.0, 0.0]
    assert np.isnan(np.stack(found)[:, 2]).all()


def sensed(rows, matrices) -> Sensitivity:
    return Sensitivity(np.array(rows), np.array(matrices, dtype=float))


ERRORS = RowErrors.from_covariances(
    np.stack([np.eye(3), 4.0 * np.eye(3), np.full((3, 3), np.nan)]), np.array([np.nan, 10.0, 5.0])
)


def test_what_is_known_of_rows():
    """A NaN covariance is not known and counts as zero; a NaN dof is infinite."""
    assert ERRORS.known.tolist() == [True, True, False]
    assert not ERRORS.covariance[2].any()
    assert ERRORS.dof.tolist() == [math.inf, 10.0, 5.0]


def test_rows_stand_once_after_combining():
    """Jacobians of shared rows are added before squares are taken: opposite ones cancel."""
    one = sensed([[0, 1]], [[np.eye(3), np.eye(3)]])
    other = sensed([[1, 0]], [[-np.eye(3), 2.0 * np.eye(3)]])
    both = Sensitivity.combined([one, other])
    used = both.rows[both.rows >= 0]
    assert sorted(used) == [0, 1]
    assert_within(both.covariance(ERRORS)[0] - 9.0 * np.eye(3), 0.0)


def test_a_row_without_a_say_does_not_make_a_result_unknown():
    """A row of unknown error counts only where its Jacobian is not zero."""
    idle = sensed([[0, 2]], [[np.eye(3), np.zeros((3, 3))]])
    assert_within(idle.covariance(ERRORS)[0] - np.eye(3), 0.0)
    used = sensed([[0, 2]], [[np.eye(3), 1e-9 * np.eye(3)]])
    assert np.isnan(used.covariance(ERRORS)).all()


def test_shares_of_the_variance():
    """Rows of variance 1 and 4 with Jacobians 2 and 1 bring half each; without error, nothing."""
    both = sensed([[0, 1]], [[2.0 * np.eye(3), np.eye(3)]])
    assert_within(both.variance_shares(ERRORS)[0] - [0.5, 0.5], 0.0)
    none = sensed([[-1, -1]], np.zeros((1, 2, 3, 3)))
    assert not none.variance_shares(ERRORS).any()


def test_cross_covariance_is_of_shared_rows():
    """sum J1 C J2^T over shared rows; NaN where a shared row is not known; zero where none is."""
    one = sensed([[0, 1]], [[np.eye(3), 2.0 * np.eye(3)]])
    other = sensed([[1, -1]], [[3.0 * np.eye(3), np.eye(3)]])
    assert_within(one.cross_covariance(other, ERRORS)[0] - 24.0 * np.eye(3), 0.0)
    unknown = sensed([[2]], [[np.eye(3)]])
    assert np.isnan(unknown.cross_covariance(unknown, ERRORS)).all()
    assert not unknown.cross_covariance(one, ERRORS).any()


def test_degrees_of_freedom():
    """One estimated row keeps its nu; with an exact row of variance share s they are nu / s^2.

    Welch 1947 and Satterthwaite 1946: (1 + 4)^2 / (4^2 / 10) = 15.625 for variances 1 and 4.
    """
    alone = sensed([[1]], [[np.eye(3)]])
    assert_within(alone.effective_dof(ERRORS) - 10.0, 1e-12)
    both = sensed([[0, 1]], [[np.eye(3), np.eye(3)]])
    assert_within(both.effective_dof(ERRORS) - 15.625, 1e-12)
    known = sensed([[0]], [[np.eye(3)]])
    assert np.isinf(known.effective_dof(ERRORS)).all()
    assert np.isinf(welch_satterthwaite(np.array([2.0]), np.array([0.0]))).all()


@pytest.mark.parametrize("dof", [math.inf, 12.0])
def test_significance_against_scipy(dof):
    """The statistic is u^T C^-1 u; its probability chi-square of 3 or F of (3, nu)."""
    random = np.random.default_rng(95)
    root = random.normal(size=(3, 3))
    covariance, vector = root @ root.T, random.normal(size=3)
    statistic = float(vector @ np.linalg.solve(covariance, vector))
    found = significance(vector, covariance, dof)
    assert_within(found.statistic / statistic - 1.0, 1e-10)
    truth = stats.chi2.sf(statistic, 3) if math.isinf(dof) else stats.f.sf(statistic / 3, 3, dof)
    assert_within(found.probability / truth - 1.0, 1e-9)


def test_significance_without_errors():
    """Without any error every difference is certain, none is none; an unknown error gives NaN."""
    zero = np.zeros((3, 3))
    assert significance(np.zeros(3), zero)[:2] == (0.0, 1.0)
    assert significance(np.array([1e-9, 0, 0]), zero)[:2] == (math.inf, 0.0)
    assert math.isnan(significance(np.zeros(3), np.full((3, 3), np.nan)).probability)
