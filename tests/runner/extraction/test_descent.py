"""The least-squares descent on certified nonlinear regressions, from the far start of each, and at a bound.

Data and certified values: NIST Statistical Reference Datasets, nonlinear regression (from memory; each set is checked
against its certified residual sum of squares before anything else is believed).
"""

import numpy as np
import pytest

from runner.extraction.descent import descend


def logistic(b, x):
    return b[0] / (1 + np.exp(b[1] - b[2] * x))


def saturating(b, x):
    return b[0] * (1 - np.exp(-b[1] * x))


CERTIFIED = {
    # name: model, x, y, start 1, certified parameters, certified residual sum of squares
    "Rat42": (
        logistic,
        [9.0, 14, 21, 28, 42, 57, 63, 70, 79],
        [8.93, 10.8, 18.59, 22.33, 39.35, 56.11, 61.73, 64.62, 67.08],
        [100.0, 1.0, 0.1],
        [7.2462237576e01, 2.6180768402e00, 6.7359200066e-02],
        8.0565229338,
    ),
    "Misra1a": (
        saturating,
        [77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8, 593.1, 689.1, 760.0],
        [10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01, 66.40, 75.47, 81.78],
        [500.0, 1e-4],
        [2.3894212918e02, 5.5015643181e-04],
        1.2455138894e-01,
    ),
}


@pytest.fixture(params=CERTIFIED)
def regression(request):
    model, x, y, start, certified, squares = CERTIFIED[request.param]
    x, y, start, certified = (np.array(values) for values in (x, y, start, certified))
    # The descent looks no further than a hundredth of a chi-square: a noise far below the scatter brings that to light.
    noise = 1e-6

    def rows(b):
        return (y - model(b, x)) / noise

    def slopes(b):
        h = 1e-6 * np.abs(b)
        up = [(rows(b + step) - rows(b - step)) / (2 * h[k]) for k, step in enumerate(np.diag(h))]
        return np.stack(up, axis=1)

    assert np.sum((y - model(certified, x)) ** 2) == pytest.approx(squares, rel=1e-9)
    return rows, slopes, start, certified, squares / noise**2


def test_certified_parameters_are_found_from_the_far_start(regression):
    rows, slopes, start, certified, squares = regression
    found = descend(rows, slopes, start, low=np.full(len(start), -np.inf), steps=200)
    assert found == pytest.approx(certified, rel=1e-6)
    assert float(np.sum(rows(found) ** 2)) == pytest.approx(squares, rel=1e-9)


def test_a_bound_holds_and_the_others_go_on(regression):
    """With the second parameter kept above its certified value, the rest lies at the best for that bound."""
    rows, slopes, start, certified, _ = regression
    low = np.full(len(start), -np.inf)
    low[1] = 1.1 * certified[1]
    found = descend(rows, slopes, start, low=low, steps=200)
    assert found[1] == low[1]
    gradient = slopes(found).T @ rows(found)
    scale = np.sqrt(np.sum(slopes(found) ** 2, axis=0) * np.sum(rows(found) ** 2))
    assert gradient[1] > 0  # it would go on below
    assert np.all(np.abs(np.delete(gradient / scale, 1)) < 1e-4)


def test_where_the_rows_are_not_finite_it_does_not_go():
    """The logarithm has no left half; the first step would lead there."""

    def rows(b):
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.array([1e3 * np.log(b[0] / 2.0)])

    found = descend(
        rows, lambda b: np.array([[1e3 / b[0]]]), np.array([20.0]), low=np.array([-np.inf]), steps=100
    )
    assert found[0] == pytest.approx(2.0, rel=1e-4)
