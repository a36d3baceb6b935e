"""What leaves the pipeline: messages for the bus, and the small filters by themselves."""

from __future__ import annotations

import json
import math

import msgspec
import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.signal import lfilter
from steady import NAN, estimates, steady

from canticle_daemon.messages import bus_message, encode, read_bus_message
from canticle_daemon.stream.filters import Derivative, FirstOrderLag, Hold, RunningSum

CONTRACT = {
    "time_s", "lap", "station_m", "bank_rad", "demand", "side_demand", "utilization",
    "front_utilization", "rear_utilization", "load_n", "force_n", "sliding_power_w", "energy_j",
    "received_ns",
}  # fmt: skip


def test_a_message_has_what_the_contract_names() -> None:
    frames = steady(60.0, 250.0, 20.0)
    messages = estimates(frames).messages(np.arange(len(frames)))
    assert len(messages) == len(frames)
    data = json.loads(encode(messages[7]))
    assert set(data) >= CONTRACT
    assert data["time_s"] == frames[7].time_s
    assert data["received_ns"] == 7
    for name in ("load_n", "force_n", "sliding_power_w", "energy_j"):
        assert len(data[name]) == 4
    assert data["demand"] == pytest.approx(0.719509, abs=2e-6)


def test_what_cannot_be_computed_is_null_and_reads_back_as_nan() -> None:
    frames = steady(60.0, 250.0, 20.0, accel_z_mps2=NAN, seconds=0.1)
    message = estimates(frames).messages(np.zeros(len(frames), np.int64))[-1]
    data = json.loads(encode(message))
    for name in ("demand", "side_demand", "utilization", "front_utilization"):
        assert data[name] is None
    for name in ("load_n", "force_n", "sliding_power_w", "energy_j"):
        assert data[name] == [None] * 4
    topic, back = read_bus_message(bus_message("estimate", encode(message)))
    assert topic == "estimate"
    assert math.isnan(back.demand)
    assert all(map(math.isnan, back.energy_j))


def test_the_stream_s_time_is_copied_unrounded() -> None:
    odd = 12345.678901234567
    frames = [
        msgspec.structs.replace(frame, time_s=odd + index * 0.016666666666666666)
        for index, frame in enumerate(steady(60.0, 250.0, 20.0))
    ]
    assert estimates(frames).time_s.tolist() == [frame.time_s for frame in frames]


# --- filters -----------------------------------------------------------------------------------


def test_the_lag_is_scipy_s_first_order_filter() -> None:
    values = np.random.default_rng(4).normal(size=400)
    dt, tau = 1 / 60, 0.3
    gain = dt / (tau + dt)
    start = values[0] * (1.0 - gain)
    expected, _ = lfilter([gain], [1.0, gain - 1.0], values, zi=[start])
    assert_allclose(FirstOrderLag(tau).process(values, np.full(400, dt)), expected, rtol=1e-12)


def test_the_lag_holds_over_what_is_missing_and_forgets_on_reset() -> None:
    lag = FirstOrderLag(0.3)
    dt = np.full(3, 0.1)
    first = lag.process(np.array([math.nan, 2.0, math.nan]), dt)
    assert math.isnan(first[0])
    assert first[1:].tolist() == [2.0, 2.0]
    lag.reset()
    assert lag.process(np.array([5.0]), dt[:1]).tolist() == [5.0]
    assert FirstOrderLag(0.3, 0.0).process(np.array([math.nan]), dt[:1]).tolist() == [0.0]


@pytest.mark.parametrize("tau", [0.0, -1.0, math.nan])
def test_a_lag_needs_a_time_constant(tau: float) -> None:
    with pytest.raises(ValueError, match="tau_s"):
        FirstOrderLag(tau)


def test_the_derivative_of_a_ramp_is_its_slope() -> None:
    time = np.arange(300) / 60
    rate = Derivative(0.1).process(3.0 * time, np.full(300, 1 / 60))
    assert_allclose(rate[100:], 3.0, rtol=1e-6)


def test_hold_fills_with_the_last_known() -> None:
    hold = Hold(7.0)
    nan = math.nan
    assert hold.process(np.array([nan, 1.0, nan, 2.0, nan])).tolist() == [7.0, 1.0, 1.0, 2.0, 2.0]
    assert hold.process(np.array([nan, nan])).tolist() == [2.0, 2.0]
    hold.reset()
    assert hold.process(np.array([nan])).tolist() == [7.0]


def test_a_running_sum_of_rows() -> None:
    steps = np.random.default_rng(5).normal(size=(4, 50))
    total = RunningSum()
    joined = np.concatenate([total.process(steps[:, :7]), total.process(steps[:, 7:])], axis=1)
    assert np.array_equal(joined, np.cumsum(steps, axis=1))
