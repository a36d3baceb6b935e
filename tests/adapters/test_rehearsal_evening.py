"""The practice evening: on the road throughout, all of the script driven, a truth that agrees.

Outside sources: statics of a body at rest (the ground carries its weight, an accelerometer at
rest shows g) and plain bookkeeping; how much of everything an evening has is common practice,
no source.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections import Counter
from dataclasses import dataclass
from functools import lru_cache
from itertools import islice, pairwise
from pathlib import Path
from typing import Any

import pytest

from canticle_adapters.json_datagram import JsonAdapter
from canticle_adapters.rehearsal import sender
from canticle_adapters.rehearsal.evening import RIGHT_SIDES, Evening
from canticle_adapters.rehearsal.evening_truth import CONTEXTS
from canticle_adapters.rehearsal.oval import HALF_WIDTH_M
from canticle_adapters.rehearsal.sender import BlindPacer, Stop, Truth
from canticle_adapters.rehearsal.telemetry import Options, Rehearsal, simulate

Values = dict[str, Any]
SEEDS = (1, 2)
SHORT = Evening(laps=8, stops=1, cautions=1, bumps=0, slow_laps=0, traffic_share=0.0)
"""Out of the pit, clean laps, a caution with a stop for right sides and a replay, a restart."""
CLEAN_SHA256 = "f766d5bde4217231a37a410b6c9d5b7c9abf1815b92998116344af524c7a5407"
"""Of clean laps before there were evenings: datagrams and truth of seed 7, 2400 frames."""


@dataclass(frozen=True)
class Told:
    """An evening's frames, its truth, and the drive at its end."""

    frames: list[Values]
    records: list[Values]
    drive: Rehearsal

    def kind(self, kind: str) -> list[Values]:
        return [record for record in self.records if record["kind"] == kind]

    def happenings(self, what: str) -> list[Values]:
        return [record for record in self.kind("happening") if record["what"] == what]


@lru_cache(maxsize=8)
def evening(seed: int, laps: int | None = 60, knobs: Evening | bool = True) -> Told:
    options = Options(laps=laps, seed=seed, rate_hz=10.0, noise=False, evening=knobs)
    drive = Rehearsal(options)
    frames = [values for values, _ in drive.frames()]
    return Told(frames, drive.happenings, drive)


def short() -> Told:
    return evening(11, None, SHORT)


def test_clean_laps_are_what_they_were() -> None:
    digest = hashlib.sha256()
    for datagram, truth in islice(simulate(2, 7), 2400):
        digest.update(datagram + repr(sorted(truth.items())).encode())
    assert digest.hexdigest() == CLEAN_SHA256
    assert Rehearsal(Options(laps=1)).happenings == []


@pytest.mark.slow
@pytest.mark.parametrize("seed", SEEDS)
def test_an_evening_stays_on_the_road(seed: int) -> None:
    told = evening(seed)
    assert max(abs(v["lateral_m"]) for v in told.frames) < HALF_WIDTH_M
    assert told.drive.car.laps == 60
    assert max(v["speed_mps"] for v in told.frames) < 75.0


@pytest.mark.slow
@pytest.mark.parametrize("seed", SEEDS)
def test_everything_in_the_script_happens(seed: int) -> None:
    told = evening(seed)
    contexts = Counter(record["context"] for record in told.kind("entry"))
    assert set(contexts) >= {"free", "traffic", "caution", "out_lap", "restart", "incident", "slow"}
    assert contexts["free"] > 60
    assert {record["context"] for record in told.kind("corner")} >= {"pit"}
    assert {record["context"] for record in told.kind("lap")} >= {"pit"}
    assert {record["what"] for record in told.kind("happening")} == {
        *("caution", "green", "bump", "tow")
    }
    free = [record for record in told.kind("entry") if record["context"] == "free"]
    assert {record["lane"] for record in free} == {"low", "middle", "high"}
    assert len(told.kind("run")) == 3


@pytest.mark.slow
@pytest.mark.parametrize("seed", SEEDS)
def test_the_truth_counts_every_entry_once(seed: int) -> None:
    told = evening(seed)
    towed = told.happenings("tow")
    for kind in ("entry", "corner"):
        keys = [(record["lap"], record["corner"]) for record in told.kind(kind)]
        assert keys == sorted(set(keys))
        assert len(keys) == 2 * 60 - len(towed)
    assert [record["lap"] for record in told.kind("lap")] == list(range(1, 61))
    for record in told.records:
        if "context" in record:
            told_of = [record["context"], *record["also"]]
            assert told_of == sorted(set(told_of), key=CONTEXTS.index)
    runs = told.kind("run")
    assert (runs[0]["first_lap"], runs[-1]["last_lap"]) == (1, 60)
    assert all(b["first_lap"] == a["last_lap"] + 1 for a, b in pairwise(runs))


@pytest.mark.slow
@pytest.mark.parametrize("seed", SEEDS)
def test_truth_agrees_with_what_is_told(seed: int) -> None:
    """Contexts from the frames alone, at the entries where one flag decides."""
    told = evening(seed)
    by_lap: dict[int, list[Values]] = {}
    for values in told.frames:
        if values["in_car"]:
            by_lap.setdefault(values["lap"], []).append(values)
    for record in told.kind("entry"):
        marks = next(m for m in told.drive.oval.corners if m.name == record["corner"])
        start = marks.transition_start_m - 150.0
        span = [v for v in by_lap[record["lap"]] if start <= v["station_m"] <= marks.apex_m]
        assert any(v["caution"] for v in span) == (record["context"] == "caution")
        assert span[0]["lateral_m"] == pytest.approx(record["lateral_m"], abs=0.6)
        if record["context"] == "free":
            usual = told.drive.options.style.speed_mps[record["corner"] == "Turn 3"]
            assert min(v["speed_mps"] for v in span) > 0.9 * usual
            assert min(v["gap_ahead_s"] for v in span[:20]) > 0.8


@pytest.mark.slow
@pytest.mark.parametrize("seed", SEEDS)
def test_lanes_lie_apart_in_the_corner(seed: int) -> None:
    free = [record for record in evening(seed).kind("entry") if record["context"] == "free"]
    means = []
    for lane in ("low", "middle", "high"):
        places = [r["apex_lateral_m"] for r in free if r["lane"] == lane]
        means.append(sum(places) / len(places))
    assert 2.5 < means[0] - means[1] < 4.5
    assert 2.5 < means[1] - means[2] < 4.5


@pytest.mark.slow
@pytest.mark.parametrize("seed", SEEDS)
def test_a_bump_shifts_the_wheel_for_the_rest_of_the_run(seed: int) -> None:
    """The wheel on the straight before Turn 3, from the frames alone, free laps on either side."""
    told = evening(seed)
    (bump,) = told.happenings("bump")
    free = {r["lap"] for r in told.kind("entry") if r["context"] == "free"}
    incident = {r["lap"] for r in told.kind("entry") if r["context"] == "incident"}
    assert incident == {bump["lap"], bump["lap"] + 1, bump["lap"] + 2}

    def wheel(laps: set[int]) -> float:
        turned = [
            values["steer_rad"]
            for values in told.frames
            if values["lap"] in laps and 1250.0 < values["station_m"] < 1340.0
        ]
        return sum(turned) / len(turned)

    before = wheel({lap for lap in free if lap < bump["lap"]})
    after = wheel(set(range(bump["lap"] + 1, bump["lap"] + 3)))
    assert 2.0 <= abs(math.degrees(bump["zero_rad"])) <= 4.0
    assert after - before == pytest.approx(bump["zero_rad"], abs=math.radians(0.7))


def test_a_short_evening_tells_its_story() -> None:
    told = short()
    story = [(record["lap"], record["context"]) for record in told.kind("lap")]
    first = told.happenings("caution")[0]["lap"]
    green = told.happenings("green")[0]["lap"]
    assert story[0] == (1, "out_lap")
    assert story[first - 1] == (first, "pit")  # it ends on pit road
    assert all(context == "caution" for _, context in story[first:green])
    assert [context for lap, context in story if lap == green + 1] in (["restart"], [])
    assert max(abs(values["lateral_m"]) for values in told.frames) < HALF_WIDTH_M


def test_the_pace_under_caution_and_on_pit_road() -> None:
    told = short()
    own = [values for values in told.frames if values["in_car"]]
    pit = [v["speed_mps"] for v in own if v["on_pit_road"] and v["station_m"] < 160.0]
    assert max(pit) < 25.0
    assert min(pit) == 0.0
    caution = [v for v in told.frames if v["caution"] and 1800.0 < v["station_m"] < 1900.0]
    paces = [values["speed_mps"] / 66.0 for values in caution]
    assert all(0.5 < pace < 0.6 for pace in paces)
    weaving = [v["steer_rad"] for v in told.frames if v["caution"] and v["station_m"] > 1320.0]
    assert max(weaving) - min(weaving) > math.radians(4.0)


def test_a_stop_changes_what_was_changed() -> None:
    told = short()
    first, second = told.kind("run")
    assert first["changed"] == [True] * 4
    assert second["changed"] == list(RIGHT_SIDES)
    changes = [(a, b) for a, b in pairwise(told.frames) if a["tire_set"] != b["tire_set"]]
    ((before, after),) = changes
    assert (before["tire_set"], after["tire_set"]) == ("A1", "A2")
    assert before["speed_mps"] == after["speed_mps"] == 0.0
    for fresh, old, new in zip(RIGHT_SIDES, before["tire_tread"], after["tire_tread"], strict=True):
        assert new == (1.0 if fresh else old)
        assert old < 1.0
    assert after["fuel_kg"] > before["fuel_kg"] + 1.0
    stood = [v["time_s"] for v in told.frames if v["station_m"] == before["station_m"]]
    assert 10.0 <= stood[-1] - stood[0] <= 16.0 + 40.0


def test_fresh_tires_have_their_grip_back() -> None:
    drive = Rehearsal(Options(laps=None, seed=11, evening=SHORT))
    car, worn = drive.car, [0.0] * 4
    for _ in drive.steps():
        if drive.evening is not None and drive.evening.now.tire_set == "A2":
            break
        worn = list(car.peak)
    full = car.data.peak_friction
    assert all(grip < full for grip in worn)
    assert [grip == full for grip in car.peak] == list(RIGHT_SIDES)
    assert car.peak[0] == pytest.approx(worn[0], abs=1e-6)


def test_fuel_is_weight() -> None:
    """At rest the wheels carry weight, less the slope's share; a sensor at rest shows g."""
    told = short()
    standing = [v for v in told.frames if v["speed_mps"] == 0.0 and v["in_car"]]
    assert len({values["fuel_kg"] for values in standing}) > 2
    for values in standing:
        slope = math.cos(math.radians(4.5))
        weight = (1540.0 + values["fuel_kg"]) * 9.81 * slope
        assert sum(values["wheel_load_n"]) == pytest.approx(weight, rel=2e-4)
        felt = math.hypot(*(values[f"accel_{axis}_mps2"] for axis in "xyz"))
        assert felt == pytest.approx(9.81, abs=1e-3)


def test_fuel_burns_at_the_rate() -> None:
    racing = [v for v in short().frames if v["lap"] == 2]
    burnt = racing[0]["fuel_kg"] - racing[-1]["fuel_kg"]
    lasted = racing[-1]["time_s"] - racing[0]["time_s"]
    assert burnt / lasted == pytest.approx(0.05, rel=0.06)


def test_a_replay_shows_another_car() -> None:
    frames = short().frames
    watched = [v for v in frames if not v["in_car"]]
    assert 20.0 < watched[-1]["time_s"] - watched[0]["time_s"] < 40.0
    assert min(values["speed_mps"] for values in watched) > 50.0
    times = [values["time_s"] for values in frames]
    assert all(a < b for a, b in pairwise(times))


def test_basic_keys_tell_none_of_it() -> None:
    few = islice(simulate(None, 11, keys="basic"), 1)
    clean = set(json.loads(next(few)[0]))
    drive = Rehearsal(Options(seed=11, keys="basic", evening=SHORT))
    for datagram, _ in islice(drive.datagrams(), 0, 12_000, 60):
        assert set(json.loads(datagram)) == clean


def test_full_keys_decode() -> None:
    adapter = JsonAdapter()
    drive = Rehearsal(Options(seed=11, evening=SHORT))
    for datagram, truth in islice(drive.datagrams(), 1200):
        frame = adapter.decode(datagram)
        assert frame is not None
        assert frame.time_s == truth["time_s"]
        assert frame.fuel_kg > 50.0
        assert frame.car_left is False
        assert frame.tire_set == "A1"
    assert adapter.bad_fields == 0


def test_same_seed_same_evening() -> None:
    def bytes_of(seed: int) -> list[bytes]:
        drive = Rehearsal(Options(laps=20, seed=seed, evening=True))
        return [datagram for datagram, _ in islice(drive.datagrams(), 1500)]

    assert bytes_of(5) == bytes_of(5)
    assert bytes_of(5) != bytes_of(6)


def test_mirrored_evening_is_the_mirror_image() -> None:
    left = Rehearsal(Options(seed=3, noise=False, evening=SHORT))
    right = Rehearsal(Options(seed=3, noise=False, evening=SHORT, mirror=True))
    for (a, _), (b, _) in islice(zip(left.frames(), right.frames(), strict=True), 900):
        assert b["steer_rad"] == -a["steer_rad"]
        assert b["lateral_m"] == -a["lateral_m"]
        assert (b["car_left"], b["car_right"]) == (a["car_right"], a["car_left"])
    record = {"kind": "run", "changed": [False, True, False, True]}
    assert right.happening_record(record)["changed"] == [True, False, True, False]


def test_the_truth_file_has_the_evening(tmp_path: Path) -> None:
    drive = Rehearsal(Options(laps=2, seed=3, rate_hz=10.0, evening=SHORT))
    truth = Truth(tmp_path / "truth.jsonl")
    sender.send(drive, ("127.0.0.1", 9), BlindPacer(), Stop(), truth)
    truth.close()
    lines = (tmp_path / "truth.jsonl").read_text(encoding="utf-8").splitlines()
    records = [json.loads(line) for line in lines]
    written = [r for r in records if r["kind"] not in ("frame", "turn_in")]
    assert written == drive.happenings
    assert [r["kind"] for r in written].count("lap") == 2
    assert written[-1]["kind"] == "run"
