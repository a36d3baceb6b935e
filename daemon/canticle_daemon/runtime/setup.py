"""Builds the parts of a daemon from its settings."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import platformdirs
from pydantic import Field

from canticle_daemon.adapter_api import Adapter, AdapterRecord, find_adapter, load_adapters
from canticle_daemon.coach.judge import Coach
from canticle_daemon.config import Config, Section, load_toml, validate
from canticle_daemon.errors import ConfigError
from canticle_daemon.messages import Vocabulary
from canticle_daemon.physics.car import CarFile
from canticle_daemon.runtime.bus import Bus
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.daemon import Daemon
from canticle_daemon.runtime.engine import Engine
from canticle_daemon.runtime.recorder import make_folder, new_session_folder
from canticle_daemon.runtime.session import EstimatePublisher, Session
from canticle_daemon.runtime.signals import StopRequest
from canticle_daemon.runtime.supervisor import Child, close_all
from canticle_daemon.runtime.udp import UdpInput, reachable
from canticle_daemon.stream.corners import Marks
from canticle_daemon.stream.pipeline import Pipeline
from canticle_daemon.track.profile import Track

CAUTIONS = """\
For practice in a simulator. Not a driver aid on public roads. On a real track follow the
organizer's rules and licensed instructors. Keep the sound at a safe level: 80 dB(A) is the
adult reference for 40 hours a week (ITU-T H.870). Nothing on the screen flashes."""


class TargetsFile(Section):
    """A coach's marks: corner name to turn-in station, in meters."""

    targets: dict[str, float] = Field(default_factory=dict)


@dataclass(slots=True)
class Parts:
    """What a session is made of, whether live or replayed."""

    config: Config
    track: Track | None
    car: CarFile
    adapter: Adapter
    console: Console
    voice: Child | None = None

    def engine(self) -> Engine:
        """Build the engine."""
        coach_settings = self.config.coach
        marks = Marks(coach_settings.tolerance_m, coach_settings.window_m)
        coach = None
        if self.track is not None and self.track.corners:
            coach = Coach(self.track, coach_settings, self.car.length_m, self.silence)
        return Engine(self.adapter, lambda: Pipeline(self.track, self.car, marks), coach)

    def silence(self) -> str | None:
        """Return why nothing can be spoken now, or None."""
        voice = self.voice
        return None if voice is not None and voice.state == "ready" else "no voice"

    def facts(self) -> dict[str, Any]:
        """Return what `session.json` says of the set-up."""
        computes, cannot = self.abilities()
        return {
            "adapter": self.adapter.name,
            "driver": self.config.driver.name,
            "track": self.track.file.model_dump(mode="json") if self.track else None,
            "car": self.car.model_dump(mode="json"),
            "config": self.config.model_dump(mode="json"),
            "computes": computes,
            "cannot": cannot,
        }

    def abilities(self) -> tuple[list[str], list[str]]:
        """Return what this set-up computes, and what it cannot and why."""
        computes, cannot = ["demand", "bank", "tire energy", "laps"], list(self.adapter.notes)
        if self.track is None:
            cannot.append("turn-ins cannot be judged yet: no track file (--track FILE)")
        elif not self.track.corners:
            cannot.append("turn-ins cannot be judged: the track file has no [[corner]]")
        else:
            computes += ["turn-ins", "entries", "corners", "cues"]
        return computes, cannot

    def session_folder(self, own: Path | None) -> Path:
        """Return the folder of the next session."""
        if own is not None:
            return own
        parent = self.config.log.sessions or Path(
            platformdirs.user_data_path("canticle", appauthor=False) / "sessions"
        )
        make_folder(parent)
        return new_session_folder(parent)


def gather(config: Config, console: Console) -> Parts:
    """Load the files that the settings name.

    Raises
    ------
    ConfigError, AdapterLoadError
        One of them is wrong.
    """
    track = None if config.track.file is None else Track.load(config.track.file)
    if config.coach.targets is not None:
        if track is None:
            raise ConfigError(f"{config.coach.targets}: marks need a track file too (--track FILE)")
        track = track.with_targets(
            load_toml(config.coach.targets, TargetsFile).targets, str(config.coach.targets)
        )
    car = CarFile.load(config.car.file)
    records = load_adapters()
    for record in records:
        if record.status != "ready":
            console.line(
                f"adapter {record.name} ({record.origin}) is {record.status}: {record.reason}"
            )
    return Parts(config, track, car, _adapter(config, records), console)


def _adapter(config: Config, records: list[AdapterRecord]) -> Adapter:
    name = config.input.adapter
    kind = find_adapter(name, records)
    given = dict(config.adapter.get(name, {}))
    if config.input.layout is not None and "layout" in kind.Options.model_fields:
        given["layout"] = config.input.layout
    if "layout" in kind.Options.model_fields and "layout" not in given:
        raise ConfigError(f"adapter {name!r} needs a layout file (--layout FILE)")
    return kind(validate(kind.Options, given, f"[adapter.{name}]"))


@contextmanager
def running(
    parts: Parts, own_session: Path | None, *, open_now: bool, stop: StopRequest
) -> Iterator[Daemon]:
    """Bind, start the children, and close everything in the right order.

    The session's last event is written before the children are asked to end.
    """
    config, console = parts.config, parts.console
    children: list[Child] = []
    with ExitStack() as stack:
        port = UdpInput(config.input.bind, config.input.forward, config.input.only_from)
        stack.callback(port.close)
        bus = Bus(config.bus.publish)
        stack.callback(bus.close)
        stack.callback(lambda: close_all(children))
        engine = parts.engine()

        def open_session(time_s: float = 0.0) -> Session:
            folder = parts.session_folder(own_session)
            session = Session(folder, parts.facts(), port.endpoint, bus, console, time_s)
            console.line(f"session {folder}")
            return session

        # Without a session to open now, see at least that there will be a place for one.
        session = open_session() if open_now else None
        if session is None:
            parts.session_folder(own_session)
        children += start_children(parts, bus.endpoint)
        daemon = Daemon(
            port, bus, engine, console, open_session,
            EstimatePublisher(bus, config.bus.estimate_hz), session, children,
            track_view=None if parts.track is None else parts.track.view(
                config.coach.tolerance_m, config.coach.window_m
            ),
            vocabulary=None if engine.coach is None else Vocabulary(engine.coach.phrases()),
        )  # fmt: skip
        reason = "fault"
        try:
            yield daemon
            reason = stop.reason or "done"
        finally:
            console.close()
            if daemon.session is not None:
                daemon.session.close(reason, **daemon.end_facts())


def start_children(parts: Parts, endpoint: str) -> list[Child]:
    """Start overlay and voice as the settings ask."""
    overlay, voice = parts.config.overlay, parts.config.voice
    children = []
    if overlay.enabled:
        place = []
        if overlay.left_px is not None and overlay.top_px is not None:
            place = ["--left", str(overlay.left_px), "--top", str(overlay.top_px)]
        arguments = ["--bus", reachable(endpoint), "--scale", str(overlay.scale), *place]
        children.append(Child("overlay", "canticle_overlay.window", arguments))
    if voice.enabled:
        arguments = [
            "--bus", reachable(endpoint), "--rate", str(voice.rate_wpm), "--voice", voice.voice,
            "--volume", str(voice.volume),
        ]  # fmt: skip
        parts.voice = Child("voice", "canticle_overlay.speech", arguments)
        children.append(parts.voice)
    return children


def show_cautions(console: Console) -> None:
    """Show the cautions at the first run of this user."""
    with contextlib.suppress(OSError):
        marker = platformdirs.user_data_path("canticle", appauthor=False) / "cautions-shown"
        if marker.exists():
            return
        marker.parent.mkdir(parents=True, exist_ok=True)
        marker.touch()
    console.line(CAUTIONS)
