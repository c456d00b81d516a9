"""Run lengths of control charts against published tables, by integration and by simulation."""

import math

import numpy as np
import pytest
from scipy.stats import chi2, norm

from trialrunner.core import charts
from trialrunner.core.scatter import MAD_TO_SIGMA

# Shift in standard deviations: two-sided run length.
LUCAS_CROSIER_H4 = {0.0: 168, 0.25: 74.2, 0.5: 26.6, 0.75: 13.3, 1.0: 8.38, 2.0: 3.34, 4.0: 1.71}
MONTGOMERY_H5 = {0.0: 465, 0.25: 139, 0.5: 38.0, 0.75: 17.0, 1.0: 10.4, 2.0: 4.01, 4.0: 2.01}
HEAD_START_H4 = {0.0: 149, 0.5: 20.1, 1.0: 5.29, 2.0: 2.01}

PIPE = [
    *(9.45, 7.99, 9.29, 11.66, 12.16, 10.18, 8.04, 11.46, 9.20, 10.34),
    *(9.03, 11.47, 10.51, 9.40, 10.08, 9.37, 10.62, 10.31, 8.52, 10.84),
    *(10.90, 9.33, 12.29, 11.50, 10.60, 11.08, 10.38, 11.62, 11.31, 10.52),
]


def both_sides(limit: float, shift: float, start: float = 0.0) -> float:
    return charts.two_sided(
        charts.cusum_run_length(0.5, limit, shift, start),
        charts.cusum_run_length(0.5, limit, -shift, start),
    )


@pytest.mark.parametrize(
    ("limit", "table"), [(4.0, LUCAS_CROSIER_H4), (5.0, MONTGOMERY_H5)], ids=["h4", "h5"]
)
def test_two_sided_cusum_run_lengths(limit: float, table: dict[float, float]) -> None:
    """k = 0.5: Lucas and Crosier 1982 (h = 4) and Montgomery, Introduction to Statistical Quality
    Control (h = 5, from memory), to the digits printed there."""
    for shift, printed in table.items():
        assert both_sides(limit, shift) == pytest.approx(printed, rel=4e-3)


def test_one_sided_cusum_run_lengths() -> None:
    """Brook and Evans 1972 (117.6; Waldmann 117.4 at h = 3) and Vance 1986 (124.66 at k = 0)."""
    assert charts.cusum_run_length(0.5, 3.0) == pytest.approx(117.6, rel=2e-3)
    assert charts.cusum_run_length(0.0, 10.0) == pytest.approx(124.66, rel=1e-4)
    assert charts.cusum_run_length(0.25, 8.0, 2.5) == pytest.approx(4.1500836, rel=1e-6)


def test_a_head_start_signals_earlier() -> None:
    """Lucas and Crosier 1982, h = 4 with a head start of h / 2. The rule for two sides is exact
    only without a head start, so the table's are met within 2 %."""
    assert charts.cusum_run_length(0.5, 4.0, 1.0, 2.0) == pytest.approx(5.29, rel=0.02)
    for shift, printed in HEAD_START_H4.items():
        if shift >= 1.0:
            assert charts.cusum_run_length(0.5, 4.0, shift, 2.0) == pytest.approx(printed, rel=0.02)


def test_siegmunds_formula_is_near() -> None:
    """Siegmund 1985, one-sided: (exp(-2 D b) + 2 D b - 1) / (2 D^2), D = shift - k, b = h + 1.166;
    within 3 % of the exact value."""
    for limit in (4.0, 5.0, 8.0):
        for shift in (0.0, 1.0):
            drift, b = shift - 0.5, limit + 1.166
            formula = (math.exp(-2 * drift * b) + 2 * drift * b - 1) / (2 * drift**2)
            assert charts.cusum_run_length(0.5, limit, shift) == pytest.approx(formula, rel=0.03)


@pytest.mark.parametrize(
    ("weight", "width", "printed"),
    [
        (0.5, 3.071, (500, 88.8, 17.5, 3.63)),
        (0.03, 2.437, (500, 29.3, 12.6, 5.99)),
        (0.1, 2.814, (500, 31.3, 10.3, 4.36)),
        (0.2, 2.962, (500, 41.8, 10.5, 3.74)),
    ],
)
def test_two_sided_ewma_run_lengths(
    weight: float, width: float, printed: tuple[float, ...]
) -> None:
    """Lucas and Saccucci 1990, table 3 (the last two rows from memory), at shifts 0, 0.5, 1, 2."""
    for shift, value in zip((0.0, 0.5, 1.0, 2.0), printed, strict=True):
        assert charts.ewma_run_length(weight, width, shift) == pytest.approx(value, rel=5e-3)


def test_an_ewma_of_weight_one_is_a_shewhart_chart() -> None:
    """370.4, 43.9, 6.30 and 2.00 trials at 0 to 3 standard deviations (normal distribution)."""
    for shift in (0.0, 1.0, 2.0, 3.0):
        outside = norm.sf(3.0 - shift) + norm.cdf(-3.0 - shift)
        assert charts.ewma_run_length(1.0, 3.0, shift) == pytest.approx(1.0 / outside, rel=1e-9)


def test_crowders_ewma() -> None:
    """Crowder 1987: weight 0.5, two standard deviations, no shift: 26.45."""
    assert charts.ewma_run_length(0.5, 2.0) == pytest.approx(26.45, rel=1e-3)


def simulate(step: str, parameter: float, limit: float, shift: float, runs: int) -> np.ndarray:
    """Run lengths of many charts at once, with the very step that the guards use."""
    rng = np.random.default_rng(7)
    lengths = []
    for _ in range(runs):
        value, trials = 0.0, 0
        while value <= limit:
            score = float(rng.standard_normal()) + shift
            value = getattr(charts, step)(value, score, parameter)
            trials += 1
        lengths.append(trials)
    return np.array(lengths)


@pytest.mark.parametrize(
    ("step", "parameter", "limit", "shift"),
    [
        ("cusum_step", 0.5, 4.0, 0.0),
        ("cusum_step", 0.5, 5.0, 1.0),
        ("ewma_step_up", 0.1, 2.5 * charts.ewma_sigma(0.1), 0.0),
        ("ewma_step_up", 0.2, 2.9 * charts.ewma_sigma(0.2), 1.0),
    ],
)
def test_simulated_one_sided_charts_run_as_long(
    step: str, parameter: float, limit: float, shift: float
) -> None:
    """2000 simulated runs: the exact value lies in the 99.9 % confidence interval of their mean."""
    lengths = simulate(step, parameter, limit, shift, 2000)
    if step == "cusum_step":
        exact = charts.cusum_run_length(parameter, limit, shift)
    else:
        exact = charts.ewma_up_run_length(parameter, limit / charts.ewma_sigma(parameter), shift)
    half = 3.29 * lengths.std(ddof=1) / math.sqrt(lengths.size)
    assert abs(lengths.mean() - exact) < half


def test_montgomerys_thirty_points() -> None:
    """Montgomery, section 9.1: target 10, k = 0.5, h = 5: first signal at 29 with C+ = 5.28 and a
    count of 7; C+ at 30 is 5.30. The EWMA of weight 0.1 first leaves 2.7 limits at 29, 10.6468."""
    up, count, ups, counts = 0.0, 0, [], []
    mean, means = 0.0, []
    for value in PIPE:
        up = charts.cusum_step(up, value - 10.0, 0.5)
        count = count + 1 if up > 0 else 0
        mean = charts.ewma_step(mean, value - 10.0, 0.1)
        ups.append(up)
        counts.append(count)
        means.append(mean)
    assert next(k + 1 for k, one in enumerate(ups) if one > 5.0) == 29
    assert (ups[28], counts[28]) == (pytest.approx(5.28, abs=5e-3), 7)
    assert ups[29] == pytest.approx(5.30, abs=5e-3)
    age = np.arange(1, 31)
    limits = 2.7 * charts.ewma_sigma(0.1) * np.sqrt(1.0 - 0.9 ** (2 * age))
    signals = age[np.abs(means) > limits]
    assert signals[0] == 29
    assert means[28] + 10.0 == pytest.approx(10.6468, abs=1e-4)


def test_the_mad_factor() -> None:
    """1 / 0.6745, the upper quartile of the standard normal distribution (scipy)."""
    upper_quartile = norm.ppf(0.75)
    assert MAD_TO_SIGMA * upper_quartile == pytest.approx(1.0, rel=5e-5)


def test_scores_of_a_long_known_series_are_normal_scores() -> None:
    """With a very long history the score is the plain distance in standard deviations; its square
    at the 0.95 point is the chi-square quantile 3.841 of printed tables (scipy agrees)."""
    level = charts.Level(centre=2.0, spread=0.5, n_trials=10**9)
    assert level.score(3.0) == pytest.approx(2.0, rel=1e-6)
    assert level.score(2.0 + 0.5 * math.sqrt(3.841)) ** 2 == pytest.approx(
        chi2.ppf(0.95, 1), rel=1e-3
    )
