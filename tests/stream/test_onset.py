"""Change detection against published series, published run lengths and independent fits.

NIST: the CUSUM example of the NIST/SEMATECH e-Handbook, section 6.3.2.3 (data from memory;
sums computed). SAS: the "Oil" sample of its library. Average run lengths: tables of D. C.
Montgomery, Statistical Quality Control, and of D. M. Hawkins, D. H. Olwell 1998 (168, 465 and
10.4 confirmed in a second source), to the digits of the exact integral equation (computed).
"""

from __future__ import annotations

import math
import time
from itertools import pairwise

import numpy as np
import pytest
import ruptures
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from canticle_daemon.stream.onset import (
    Cusum,
    cusum,
    hinge_fit,
    mean_change_glr,
    ramp_glr,
)

# fmt: off
NIST = [
    324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225, 324.600,
    324.625, 325.150, 328.325, 327.250, 327.825, 328.500, 326.675, 327.775, 326.875, 328.350,
]
NIST_UPPER = [
    0, 0, 0, 0, 0.0325, 0, 0, 0, 0, 0, 0, 0,
    3.0075, 4.9400, 7.4475, 10.6300, 11.9875, 14.4450, 16.0025, 19.0350,
]
NIST_LOWER = [
    0, 0.0075, 0, 0.3325, 0, 0, 0.5575, 0.7150, 0.1725, 0.2550, 0.3125, 0, 0, 0, 0, 0, 0, 0, 0, 0,
]
OIL_Z = [-0.25, -0.30, 0.04, 0.79, 0.05, -0.80, 0.58, -0.68, -1.53, 0.09, 0.26, -0.03]
OIL_UPPER = [0, 0, 0, 0.29, 0, 0, 0.08, 0, 0, 0, 0, 0]
OIL_LOWER = [0, 0, 0, 0, 0, 0.30, 0, 0.18, 1.21, 0.62, 0, 0]
# fmt: on
RUN_LENGTHS = [
    # shift in sigma, threshold, average run length (k = 0.5, two-sided), runs to simulate
    (0.0, 4.0, 167.6838, 1500),
    (0.5, 4.0, 26.6302, 3000),
    (1.0, 4.0, 8.3831, 4000),
    (1.0, 5.0, 10.3760, 4000),
    (2.0, 5.0, 4.0089, 4000),
    (4.0, 4.0, 1.7085, 4000),
]


def test_cusum_on_the_nist_series() -> None:
    upper, lower, alarm, onset = cusum(NIST, 325.0, 0.3175, 4.1959)
    assert_allclose(upper, NIST_UPPER, atol=1e-9)
    assert_allclose(lower, NIST_LOWER, atol=1e-9)
    assert (alarm, onset) == (13, 12)  # groups 14 and 13


def test_cusum_falls_as_it_rises() -> None:
    mirrored = [650.0 - x for x in NIST]
    upper, lower, alarm, onset = cusum(mirrored, 325.0, 0.3175, 4.1959)
    assert_allclose(lower, NIST_UPPER, atol=1e-9)
    assert_allclose(upper, NIST_LOWER, atol=1e-9)
    assert (alarm, onset) == (13, 12)


def test_cusum_on_the_oil_series() -> None:
    upper, lower, alarm, onset = cusum(OIL_Z, 0.0, 0.5, 3.0)
    assert_allclose(upper, OIL_UPPER, atol=1e-9)
    assert_allclose(lower, OIL_LOWER, atol=1e-9)
    assert alarm is None
    assert onset is None


@pytest.mark.parametrize(("shift", "threshold", "expected", "runs"), RUN_LENGTHS)
def test_cusum_average_run_length(
    shift: float, threshold: float, expected: float, runs: int
) -> None:
    rng = np.random.default_rng(20_540 + round(100 * shift))
    detector = Cusum(0.0, 0.5, threshold)
    lengths = []
    for _ in range(runs):
        detector.reset()
        length = 0
        while (alarm := detector.process(rng.normal(shift, 1.0, 16)).alarm) is None:
            length += 16
        lengths.append(length + alarm + 1)
    standard_error = np.std(lengths) / math.sqrt(runs)
    assert abs(np.mean(lengths) - expected) < 3.5 * standard_error
    assert standard_error < 0.03 * expected


@settings(max_examples=40, deadline=None)
@given(cuts=st.lists(st.integers(0, 20), max_size=6), hole=st.integers(0, 19))
def test_any_cut_of_a_series_gives_the_same_sums(cuts: list[int], hole: int) -> None:
    series = np.array(NIST)
    series[hole] = math.nan
    whole = Cusum(325.0, 0.3175, 4.1959).process(series)
    detector = Cusum(325.0, 0.3175, 4.1959)
    edges = [0, *sorted(cuts), 20]
    found = None
    upper = []
    for start, stop in pairwise(edges):
        trace = detector.process(series[start:stop])
        upper.extend(trace.upper.tolist())
        if found is None and trace.alarm is not None and trace.onset is not None:
            found = (start + trace.alarm, start + trace.onset)
    assert np.array_equal(upper, whole.upper, equal_nan=True)
    assert found == (whole.alarm, whole.onset)


def test_a_nan_leaves_the_sums_as_they_are() -> None:
    upper, lower, alarm, onset = cusum([1.0, math.nan, 1.0, 5.0], 0.0, 0.5, 4.0)
    assert_allclose(upper, [0.5, math.nan, 1.0, 5.5])
    assert_allclose(lower, [0.0, math.nan, 0.0, 0.0])
    assert (alarm, onset) == (3, 0)


@pytest.mark.parametrize(
    "parameters", [(math.nan, 0.5, 4.0), (0.0, -0.1, 4.0), (0.0, 0.5, 0.0), (0.0, 0.5, math.nan)]
)
def test_cusum_refuses_bad_parameters(parameters: tuple[float, float, float]) -> None:
    with pytest.raises(ValueError, match="CUSUM"):
        Cusum(*parameters)


def ramp_series() -> tuple[np.ndarray, np.ndarray]:
    """The reference ramp: two sines for noise, onset at 120."""
    i = np.arange(200.0)
    noise = 0.02 * np.sin(1.7 * i) + 0.013 * np.cos(0.9 * i)
    return i, noise + 0.03 * np.maximum(0.0, i - 120.0)


def test_hinge_on_the_ramp_series() -> None:
    # Knot 120.0372, slope 0.0300050, sum of squares 0.0576159 (computed by a separate search).
    hinge = hinge_fit(*ramp_series(), first=5.0, last=195.0)
    assert hinge.knot == pytest.approx(120.0372, abs=5e-5)
    assert hinge.slope == pytest.approx(0.0300050, abs=5e-8)
    assert hinge.residual_std**2 * (200 - 3) == pytest.approx(0.0576159, abs=5e-8)
    assert hinge.drift == 0.0
    assert abs(hinge.knot - 120.0) < 2.0 * hinge.std_knot < 1.0


def test_hinge_beside_an_independent_change_point_search() -> None:
    # ruptures' continuous piecewise-linear cost, searched exhaustively: 121.
    x, y = ramp_series()
    found = ruptures.Dynp(model="clinear", min_size=2, jump=1).fit(y[60:180]).predict(n_bkps=1)
    assert found[0] + 60 == 121
    assert hinge_fit(x, y).knot == pytest.approx(found[0] + 60, abs=1.0)


def brute_force(
    x: np.ndarray, y: np.ndarray, weight: np.ndarray, drift: bool
) -> tuple[float, float]:
    """Best knot and its sum of squares by a fine grid of plain least-squares fits."""
    best = (math.nan, math.inf)
    root = np.sqrt(weight)
    for knot in np.linspace(x[1], x[-3], 3001):
        columns = [np.ones_like(x), np.maximum(x - knot, 0.0)] + [x] * drift
        design = np.stack(columns, axis=1) * root[:, None]
        fit = np.linalg.lstsq(design, y * root, rcond=None)[0]
        squares = float(np.sum((design @ fit - y * root) ** 2))
        if squares < best[1]:
            best = (float(knot), squares)
    return best


@pytest.mark.parametrize("drift", [False, True])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_hinge_finds_the_least_squares(seed: int, drift: bool) -> None:
    # Against numpy's lstsq over a fine grid of knots: uneven stations, weights, drift.
    rng = np.random.default_rng(seed)
    x = 2000.0 + np.cumsum(rng.uniform(0.5, 1.5, 40))
    y = 0.02 * np.maximum(0.0, x - 2020.0) + rng.normal(0.0, 0.05, 40)
    weight = rng.uniform(0.2, 2.0, 40)
    hinge = hinge_fit(x, y, level_slope=drift, weights=weight)
    knot, squares = brute_force(x, y, weight, drift)
    assert hinge.residual_std**2 * (40 - 3 - drift) <= squares * (1 + 1e-9)
    assert hinge.knot == pytest.approx(knot, abs=0.05)


def test_hinge_sees_through_a_drift() -> None:
    x, y = ramp_series()
    hinge = hinge_fit(x, y + 0.002 * x, level_slope=True)
    assert hinge.knot == pytest.approx(120.0, abs=0.2)
    assert hinge.drift == pytest.approx(0.002, abs=1e-4)
    assert hinge.slope == pytest.approx(0.03, abs=1e-4)
    assert hinge.level == pytest.approx(0.002 * hinge.knot, abs=0.01)


@pytest.mark.parametrize("correlation", [0.0, 0.5])
@pytest.mark.parametrize("drift", [False, True])
def test_the_knot_lies_within_two_standard_errors(drift: bool, correlation: float) -> None:
    # 500 seeded ramps, noise white or correlated from sample to sample; a normal law has 95 %.
    within = 0
    for seed in range(500):
        rng = np.random.default_rng(seed)
        x = np.arange(120.0) / 60.0
        knot = rng.uniform(0.7, 1.2)
        noise = rng.normal(0.0, 0.01, 120)
        for i in range(1, 120):
            noise[i] += correlation * noise[i - 1]
        y = 0.05 + rng.uniform(0.1, 0.4) * np.maximum(0.0, x - knot) + 0.05 * x * drift + noise
        hinge = hinge_fit(x, y, first=0.1, last=1.9, level_slope=drift)
        within += abs(hinge.knot - knot) <= 2.0 * hinge.std_knot
    assert within >= 450


@pytest.mark.parametrize("rate", [60, 250, 1000])
def test_disturbances_that_last_are_owned_up_to_at_any_rate(rate: int) -> None:
    """A hand that wanders for 0.15 s at a time, sampled ever more finely, tells no more.

    Drawn as a running mean of white noise. The correlation of neighbors would claim several
    times too little at 1000 Hz.
    """
    within, claimed, missed = [], [], []
    for seed in range(200):
        rng = np.random.default_rng(seed)
        x = np.arange(int(1.4 * rate)) / rate
        width = int(0.15 * rate)
        noise = np.convolve(rng.normal(0.0, 1.0, x.size + width - 1), np.ones(width), "valid")
        y = np.maximum(0.0, x - 0.8) + 0.02 * noise / np.sqrt(width)
        hinge = hinge_fit(x, y, memory=2 * width)
        within.append(abs(hinge.knot - 0.8) <= 2.0 * hinge.std_knot)
        claimed.append(hinge.std_knot)
        missed.append(hinge.knot - 0.8)
    assert 0.88 <= np.mean(within) <= 0.99
    assert 0.5 < float(np.median(claimed)) / float(np.std(missed)) < 1.5


def test_hinge_of_one_sign_only() -> None:
    x, y = ramp_series()
    assert hinge_fit(x, y, sign=1).knot == pytest.approx(120.04, abs=0.01)
    assert hinge_fit(x, -y, sign=-1).slope == pytest.approx(-0.030005, abs=1e-6)
    falling = hinge_fit(x, y, first=110.0, sign=-1)
    assert math.isnan(falling.knot) or falling.slope < 0.0


def test_hinge_leaves_out_missing_samples() -> None:
    x, y = ramp_series()
    y[::7] = math.nan
    assert hinge_fit(x, y).knot == pytest.approx(120.0, abs=0.5)
    weight = np.ones_like(x)
    weight[::5] = 0.0
    assert hinge_fit(x, y, weights=weight).knot == pytest.approx(120.0, abs=0.5)


@pytest.mark.parametrize(
    ("count", "first", "last"), [(5, None, None), (30, 40.0, 50.0), (30, 20.0, 10.0)]
)
def test_no_hinge(count: int, first: float | None, last: float | None) -> None:
    x = np.arange(float(count))
    assert math.isnan(hinge_fit(x, x**2, first, last).knot)


@pytest.mark.parametrize("drift", [False, True])
def test_no_hinge_at_a_standstill(drift: bool) -> None:
    assert math.isnan(hinge_fit(np.full(30, 7.0), np.arange(30.0), level_slope=drift).knot)


def test_no_hinge_on_a_level() -> None:
    x = np.arange(30.0)
    hinge = hinge_fit(x, np.full(30, 3.0))
    assert math.isnan(hinge.knot)
    assert math.isnan(hinge.std_knot)


def test_a_perfect_hinge_is_known_perfectly() -> None:
    x = np.arange(30.0)
    hinge = hinge_fit(x, 1.0 + 0.5 * np.maximum(0.0, x - 12.25))
    assert hinge.knot == pytest.approx(12.25, abs=1e-9)
    assert hinge.level == pytest.approx(1.0, abs=1e-9)
    assert hinge.std_knot < 1e-9


def test_hinge_is_quick() -> None:
    # It runs between two frames: 80 µs where it was written; the limit leaves a slow machine room.
    x = np.arange(100.0) / 60.0
    y = np.maximum(0.0, x - 0.8) + np.random.default_rng(0).normal(0.0, 0.01, 100)
    taken = []
    for _ in range(30):
        start = time.perf_counter()
        hinge_fit(x, y)
        taken.append(time.perf_counter() - start)
    assert min(taken) < 1e-3


def test_ramp_glr_against_its_definition() -> None:
    rng = np.random.default_rng(5)
    dt, slope, sigma = 0.1, -2.0, 0.7
    y = rng.normal(0.0, sigma, 40) + slope * dt * np.maximum(0, np.arange(40) - 22)
    statistic, onset = ramp_glr(y, dt, slope, max_lag=12, sigma=sigma)
    for now in range(40):
        candidates = []
        for start in range(max(0, now - 12), now + 1):
            ramp = slope * dt * np.arange(now - start + 1)
            seen = y[start : now + 1]
            # 2 ln of the ratio of two normal densities, term by term.
            candidates.append(float(np.sum(seen**2 - (seen - ramp) ** 2)) / sigma**2)
        assert statistic[now] == pytest.approx(max(candidates), abs=1e-9)
        assert candidates[onset[now] - max(0, now - 12)] == pytest.approx(max(candidates), abs=1e-9)


def test_ramp_glr_dates_a_clean_ramp() -> None:
    y = 0.5 * np.maximum(0.0, np.arange(60.0) - 30.0)
    statistic, onset = ramp_glr(y, 1.0, 0.5, max_lag=40)
    assert_allclose(statistic[:31], 0.0)
    assert np.all(onset[32:] == 30)
    # Noise-free, 2 ln L is the energy of the ramp.
    assert statistic[-1] == pytest.approx(np.sum(y**2))


def test_ramp_glr_of_short_and_still_series() -> None:
    statistic, onset = ramp_glr(np.zeros(3), 0.1, 1.0, max_lag=20)
    assert_allclose(statistic, 0.0)
    assert onset.tolist() == [0, 1, 2]
    assert ramp_glr(np.empty(0), 0.1, 1.0, max_lag=20)[0].size == 0


def test_mean_change_glr_on_the_nist_series() -> None:
    # Basseville and Nikiforov 1993 (from memory), sigma 0.635: 100.47276386 at 12 (computed).
    statistic, count = mean_change_glr(np.array(NIST), 0.635)
    assert statistic == pytest.approx(100.47276386, abs=1e-7)
    assert count == 12
    found = ruptures.Dynp(model="l2", min_size=2, jump=1).fit(np.array(NIST)).predict(n_bkps=1)
    assert found[0] == count
