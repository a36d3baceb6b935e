"""`canticle rehearse`: the whole tool, the synthetic car in a process of its own."""

from __future__ import annotations

import json
from pathlib import Path

import psutil
import pytest
from runtime.rig import SILENT, Canticle, Nursery, events_of, types_of, until

pytestmark = pytest.mark.io


def test_laps_at_full_pace_lose_nothing_and_end_by_themselves(tmp_path: Path) -> None:
    session = tmp_path / "session"
    options = ("--laps", "2", "--pace", "max", "--rate", "30", "--session", session)
    with Canticle(tmp_path, "rehearse", *options, *SILENT) as run:
        assert run.status(120.0) == 0, run.complaints
        assert run.complaints == ""
        assert "rehearsing by UDP on 127.0.0.1:" in run.printed
        assert sum(line.startswith("lap ") for line in run.printed.splitlines()) >= 1
    types = types_of(session)
    assert types[0] == "session_started"
    assert types[-1] == "session_ended"
    assert {"turn_in", "entry", "corner", "lap_completed"} <= set(types)
    assert "discontinuity" not in types
    events = events_of(session)
    corners = [event for event in events if event["type"] == "corner"]
    # This driver is off the throttle for every corner, for some of them before the entry's start.
    assert None in [corner["lift_station_m"] for corner in corners]
    assert None not in [corner["throttle_station_m"] for corner in corners]
    (whole,) = [event for event in events if event["type"] == "lap_completed" and event["lap"] == 2]
    assert events[-1]["time_s"] > whole["time_s"]  # the car drives on past the line
    facts = json.loads((session / "session.json").read_text())
    assert facts["processes"]["rehearsal"]["state"] == "done"
    assert (facts["dropped"], facts["bad_datagrams"], facts["foreign"]) == (0, 0, 0)
    assert facts["frames"] > 2 * 20 * 30  # two laps of 20 s or more


@pytest.mark.parametrize("kill", [False, True])
def test_the_car_ends_with_the_daemon(tmp_path: Path, kill: bool) -> None:
    session = tmp_path / "session"
    with Canticle(tmp_path, "rehearse", "--session", session, *SILENT) as run:
        until(lambda: types_of(session), "the start")
        me = psutil.Process(run.process.pid)
        (car,) = until(me.children, "the car")
        if kill:
            run.process.kill()
        else:
            status, seconds = run.end()
            assert status == 0
            assert seconds < 2.0
            assert events_of(session)[-1]["reason"] == "SIGTERM"
        _, alive = psutil.wait_procs([car], 5.0)
        assert alive == []


def test_a_car_that_cannot_drive_is_a_fault(tmp_path: Path) -> None:
    truth = tmp_path / "no such folder" / "truth.jsonl"
    with Nursery() as nursery:
        status, _, complaints = nursery.run(
            tmp_path, "rehearse", "--laps", "1", "--pace", "max", "--truth", truth,
            "--session", tmp_path / "session", *SILENT,
        )  # fmt: skip
    assert status == 1
    (line,) = complaints.splitlines()
    assert line.startswith("canticle: the rehearsal failed: ")
    assert types_of(tmp_path / "session")[-1] == "session_ended"
