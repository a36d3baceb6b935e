"""Everything the daemon says: the events, the live messages, and the table of topics.

An event is a line of `events.jsonl` and a message on the bus; a live message is only on
the bus. A bus message is one frame: topic, a space, JSON (one frame, so that a subscriber
may conflate). Quantities are SI with the unit in the name; NaN is written as null.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import Any, Literal, TypeAlias

import msgspec

from canticle_daemon.frame import NAN, Frame, Wheels

Verdict: TypeAlias = Literal["early", "on", "late", "not judged"]
Phase: TypeAlias = Literal["before", "in", "after"]
TargetSource: TypeAlias = Literal["coach", "driver", "plan", "transition"]
Context: TypeAlias = Literal[
    "free", "traffic", "caution", "pit", "out_lap", "restart", "incident", "slow"
]
Reason: TypeAlias = Literal["pause", "rewind", "jump", "gap"]


class Event(msgspec.Struct, kw_only=True, tag_field="type"):
    """Base of all events. `wall_time` is stamped by the recorder, which has the clock."""

    time_s: float
    wall_time: str = ""


class SessionStarted(Event, tag="session_started"):
    """The port and the bus are bound."""

    version: str
    bind: str | None
    publish: str
    session: str
    computes: tuple[str, ...] = ()
    cannot: tuple[str, ...] = ()


class SessionEnded(Event, tag="session_ended"):
    """The last line of a session that ended cleanly."""

    bind: str | None
    publish: str
    reason: str


class StreamLost(Event, tag="stream_lost"):
    """No datagram for `silence_s` of wall time."""

    silence_s: float
    reason: Reason = "pause"


class StreamResumed(Event, tag="stream_resumed"):
    """Datagrams come again after `silence_s` of wall time.

    `reason` is what the stream's clock did meanwhile: stood still, skipped, or went back.
    """

    silence_s: float
    reason: Reason


class Discontinuity(Event, tag="discontinuity"):
    """The stream broke; all carried state was dropped. `detail` says what was seen."""

    reason: Reason
    detail: str


class LapEvent(Event):
    """Base of the events that belong to a lap of a run."""

    lap: int
    run: int


class LapCompleted(LapEvent, tag="lap_completed"):
    """The start line was crossed; `valid` when the whole lap was seen unbroken."""

    lap_time_s: float | None
    valid: bool
    context: Context
    tire_energy_j: Wheels
    peak_demand: float


class TurnIn(LapEvent, tag="turn_in"):
    """A turn-in was detected just now; lengths positive toward early."""

    corner: str
    turn_in_station_m: float
    turn_in_std_m: float
    transition_margin_m: float
    phase: Phase
    target_station_m: float
    margin_m: float
    margin_s: float
    verdict: Verdict
    target_source: TargetSource
    context: Context
    detection_delay_s: float


class Entry(LapEvent, tag="entry"):
    """The apex was passed: the refined turn-in and what the entry cost."""

    corner: str
    turn_in_station_m: float | None
    turn_in_std_m: float | None
    transition_margin_m: float | None
    phase: Phase | None
    target_station_m: float
    margin_m: float | None
    margin_s: float | None
    verdict: Verdict
    target_source: TargetSource
    context: Context
    bank_deg: float | None
    lateral_m: float | None
    entry_speed_mps: float
    demand_at_turn_in: float | None
    peak_demand: float
    peak_utilization: float
    entry_energy_j: Wheels
    entry_time_s: float
    why: str = ""


class Corner(LapEvent, tag="corner"):
    """The corner's exit was passed: the account from the entry's start to here."""

    corner: str
    context: Context
    corner_energy_j: Wheels
    corner_time_s: float
    lift_station_m: float | None
    brake_station_m: float | None
    min_speed_mps: float
    throttle_station_m: float | None
    exit_speed_mps: float


class Cue(LapEvent, tag="cue"):
    """Something worth saying; `withheld` is why it was not spoken."""

    kind: str
    text: str
    corner: str | None
    spoken: bool
    withheld: str | None = None


AnyEvent: TypeAlias = (
    SessionStarted
    | SessionEnded
    | StreamLost
    | StreamResumed
    | Discontinuity
    | LapCompleted
    | TurnIn
    | Entry
    | Corner
    | Cue
)


class Estimate(msgspec.Struct):
    """The newest estimate, one per frame; what cannot be computed is null."""

    time_s: float
    lap: int
    station_m: float
    bank_rad: float
    demand: float
    side_demand: float
    utilization: float
    front_utilization: float
    rear_utilization: float
    load_n: Wheels
    force_n: Wheels
    sliding_power_w: Wheels
    energy_j: Wheels
    received_ns: int
    bank_std_rad: float = float("nan")
    saturated: bool = False
    status: str = "valid"


class CornerView(msgspec.Struct):
    """What a display needs of one corner: `profile` is (station_m, bank_deg) of its entry."""

    corner: str
    entry_start_m: float
    transition_start_m: float
    transition_end_m: float
    apex_m: float
    exit_m: float
    target_m: float
    window_m: tuple[float, float]
    profile: tuple[tuple[float, float], ...]


class TrackView(msgspec.Struct):
    """The track as a display needs it; repeated every second for late subscribers."""

    name: str
    length_m: float
    corners: tuple[CornerView, ...]


class Status(msgspec.Struct):
    """The daemon's own state, once a second."""

    state: str
    session: str
    frames: int
    bad_datagrams: int
    bad_fields: int
    dropped: int
    foreign: int
    voice: str
    overlay: str


class Vocabulary(msgspec.Struct):
    """Every phrase the coach can say, for the voice to render ahead; repeated every second."""

    phrases: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Topic:
    """One stream on the bus: `rate_hz` is its nominal rate, 0 for as it happens."""

    name: str
    payload: type[Any]
    rate_hz: float
    in_log: bool


TOPICS: dict[str, Topic] = {
    topic.name: topic
    for topic in (
        Topic("frame", Frame, 60.0, in_log=False),
        Topic("estimate", Estimate, 60.0, in_log=False),
        Topic("track", TrackView, 1.0, in_log=False),
        Topic("status", Status, 1.0, in_log=False),
        Topic("vocabulary", Vocabulary, 1.0, in_log=False),
        *(
            Topic(str(event.__struct_config__.tag), event, 0.0, in_log=True)
            for event in (
                SessionStarted,
                SessionEnded,
                StreamLost,
                StreamResumed,
                Discontinuity,
                LapCompleted,
                TurnIn,
                Entry,
                Corner,
                Cue,
            )
        ),
    )
}

_encoder = msgspec.json.Encoder()
_decoders = {name: msgspec.json.Decoder(topic.payload) for name, topic in TOPICS.items()}


def topic_of(event: Event) -> str:
    """Return the event's type, which is also its topic."""
    return str(event.__struct_config__.tag)


def encode(payload: msgspec.Struct) -> bytes:
    """Return the payload as one line of JSON."""
    return _encoder.encode(payload)


def bus_message(topic: str, payload: bytes) -> bytes:
    """Join topic and JSON into the single frame that goes on the bus."""
    return topic.encode() + b" " + payload


def read_bus_message(message: bytes) -> tuple[str, Any]:
    """Take a bus message apart into its topic and its payload object.

    A null stands for a number that could not be computed and reads as NaN again.

    Raises
    ------
    msgspec.MsgspecError
        The JSON does not fit the topic.
    KeyError
        The topic is not in the table.
    """
    topic, _, payload = message.partition(b" ")
    name = topic.decode()
    decoder = _decoders[name]
    try:
        return name, decoder.decode(payload)
    except msgspec.ValidationError:
        data = msgspec.json.decode(payload)
        return name, msgspec.convert(_null_as_nan(data, name), decoder.type)


def _null_as_nan(data: Any, topic: str) -> Any:
    if not isinstance(data, dict):
        return data
    floats, wheels = _numeric_fields(topic)
    for name in floats & data.keys():
        if data[name] is None:
            data[name] = NAN
    for name in wheels & data.keys():
        if isinstance(data[name], list):
            data[name] = [NAN if item is None else item for item in data[name]]
    return data


@functools.cache
def _numeric_fields(topic: str) -> tuple[frozenset[str], frozenset[str]]:
    fields = msgspec.structs.fields(TOPICS[topic].payload)
    floats = frozenset(field.encode_name for field in fields if field.type is float)
    return floats, frozenset(field.encode_name for field in fields if field.type == Wheels)
