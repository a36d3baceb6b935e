"""A made-up track of two corners, and messages about it."""

import math
from collections.abc import Callable

import pytest

from canticle_daemon.messages import CornerView, Entry, Estimate, TrackView, Verdict

NAN = float("nan")
NO_WHEELS = (NAN, NAN, NAN, NAN)
LENGTH_M = 2500.0


def corner(name: str, start_m: float, bank_deg: float) -> CornerView:
    end_m = start_m + 120
    stations = [start_m - 150 + 10 * step for step in range(43)]
    ramp = [min(max((at - start_m) / (end_m - start_m), 0.0), 1.0) for at in stations]
    profile = tuple(
        (at % LENGTH_M, 4 + (bank_deg - 4) * share)
        for at, share in zip(stations, ramp, strict=True)
    )
    return CornerView(
        corner=name,
        entry_start_m=(start_m - 150) % LENGTH_M,
        transition_start_m=start_m,
        transition_end_m=end_m,
        apex_m=start_m + 270,
        exit_m=start_m + 590,
        target_m=start_m - 20,
        window_m=(start_m - 50, start_m - 15),
        profile=profile,
    )


@pytest.fixture
def track() -> TrackView:
    # Turn 1's ribbon runs across the start line: it begins at station 2450.
    return TrackView("Made-up", LENGTH_M, (corner("Turn 1", 100, 22), corner("Turn 3", 1350, 18)))


@pytest.fixture
def estimate() -> Callable[..., Estimate]:
    def make(station_m: float, demand: float = 0.4, **changes: object) -> Estimate:
        fields: dict[str, object] = {
            "time_s": station_m / 60,
            "lap": 3,
            "station_m": station_m,
            "bank_rad": math.radians(4),
            "demand": demand,
            "side_demand": demand,
            "utilization": demand,
            "front_utilization": demand,
            "rear_utilization": demand / 2,
            "load_n": NO_WHEELS,
            "force_n": NO_WHEELS,
            "sliding_power_w": NO_WHEELS,
            "energy_j": (1e3, 2e3, 1e3, 2e3),
            "received_ns": 0,
        }
        return Estimate(**(fields | changes))  # type: ignore[arg-type]

    return make


@pytest.fixture
def entry() -> Callable[..., Entry]:
    def make(
        name: str = "Turn 1",
        turn_in_station_m: float | None = 90.0,
        margin_m: float | None = -10.0,
        verdict: Verdict = "late",
    ) -> Entry:
        return Entry(
            time_s=1.0,
            lap=3,
            run=1,
            corner=name,
            turn_in_station_m=turn_in_station_m,
            turn_in_std_m=1.0,
            transition_margin_m=10.0,
            phase="before",
            target_station_m=80.0,
            margin_m=margin_m,
            margin_s=None,
            verdict=verdict,
            target_source="driver",
            context="free",
            bank_deg=5.0,
            lateral_m=0.0,
            entry_speed_mps=60.0,
            demand_at_turn_in=0.1,
            peak_demand=0.7,
            peak_utilization=0.6,
            entry_energy_j=(1.0, 2.0, 1.0, 2.0),
            entry_time_s=4.0,
        )

    return make
