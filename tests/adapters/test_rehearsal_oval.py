"""The made-up oval: it closes, is smooth, and its track file says the same as its geometry."""

from __future__ import annotations

import math
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from canticle_adapters.rehearsal import __main__ as command
from canticle_adapters.rehearsal.oval import greenwold, track_toml
from canticle_daemon.track.profile import Track

COMMITTED = files("canticle_adapters.rehearsal") / "track.toml"


@pytest.fixture(scope="module")
def track(tmp_path_factory: pytest.TempPathFactory) -> Track:
    path = tmp_path_factory.mktemp("track") / "track.toml"
    path.write_text(track_toml(), encoding="utf-8")
    return Track.load(path)


def test_lap_closes() -> None:
    x, y, heading = greenwold().closing_error
    assert math.hypot(x, y) < 1e-3
    assert abs(heading) < 1e-9


def test_length_and_banks_are_those_of_the_job() -> None:
    oval = greenwold()
    assert 2000.0 < oval.length_m < 2600.0
    banks = [-math.degrees(oval.roll(corner.apex_m)[0]) for corner in oval.corners]
    assert banks == pytest.approx([22.0, 16.0])
    dogleg = [s for s in range(200) if oval.curvature(s)[0] > 1e-4]
    assert dogleg
    assert max(dogleg) < oval.corners[0].transition_start_m - 100.0


@pytest.mark.parametrize("quantity", ["curvature", "roll"])
def test_derivatives_are_those_of_the_values(quantity: str) -> None:
    """Central differences; also shows both derivatives to be continuous."""
    of = getattr(greenwold(), quantity)
    step = 0.01
    for station in np.arange(0.0, greenwold().length_m, 3.7):
        before, here, after = of(station - step), of(station), of(station + step)
        assert here[1] == pytest.approx((after[0] - before[0]) / (2 * step), abs=2e-8)
        assert here[2] == pytest.approx((after[1] - before[1]) / (2 * step), abs=2e-7)


def test_line_follows_its_curvature() -> None:
    """The place is the integral of the heading, the heading that of the curvature."""
    oval = greenwold()
    step = 0.05
    for station in np.arange(0.3, oval.length_m - 1.0, 41.3):
        (x0, y0, h0), (x1, y1, h1) = oval.line(station), oval.line(station + step)
        middle = oval.line(station + step / 2)[2]
        assert (x1 - x0, y1 - y0) == pytest.approx(
            (step * math.cos(middle), step * math.sin(middle)), abs=1e-6
        )
        assert (h1 - h0) / step == pytest.approx(oval.curvature(station + step / 2)[0], abs=1e-6)


def test_committed_file_is_what_the_generator_writes() -> None:
    assert COMMITTED.read_text(encoding="utf-8") == track_toml()


def test_write_track_writes_it(tmp_path: Path) -> None:
    target = tmp_path / "oval.toml"
    assert command.main(["--write-track", str(target)]) == 0
    assert target.read_bytes() == track_toml().encode()
    assert command.main(["--write-track", str(tmp_path / "no" / "oval.toml")]) == 1


def test_track_locates_points_of_the_surface(track: Track) -> None:
    oval = greenwold()
    rng = np.random.default_rng(7)
    station, lateral = rng.uniform(0, oval.length_m, 400), rng.uniform(-8, 8, 400)
    places = np.array([oval.place(s, n) for s, n in zip(station, lateral, strict=True)])
    found_station, found_lateral = track.locate(places[:, 0], places[:, 1])
    off = [track.difference_m(a, b) for a, b in zip(found_station, station, strict=True)]
    assert np.abs(off).max() < 0.05
    assert np.abs(found_lateral - lateral).max() < 0.04


def test_track_has_the_ovals_bank_and_curvature(track: Track) -> None:
    oval = greenwold()
    stations = np.arange(0.0, oval.length_m, 1.3)
    roll = np.array([oval.roll(s)[0] for s in stations])
    curvature = np.array([oval.curvature(s)[0] for s in stations])
    assert np.abs(track.roll_rad(stations) - roll).max() < math.radians(0.05)
    assert np.abs(track.curvature_1pm(stations) - curvature).max() < 2e-5


def test_mirrored_track_turns_right(tmp_path: Path) -> None:
    path = tmp_path / "right.toml"
    path.write_text(track_toml(mirror=True), encoding="utf-8")
    right = Track.load(path)
    assert right.side == -1.0
    x, y, _ = greenwold().place(700.0, 3.0)
    station, lateral = right.locate(np.array([x]), np.array([-y]))
    assert station[0] == pytest.approx(700.0, abs=0.05)
    assert lateral[0] == pytest.approx(-3.0, abs=0.05)
