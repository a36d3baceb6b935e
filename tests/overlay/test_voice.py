"""The voice's decisions, with a fake player, a fake renderer and a clock of our own."""

from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from canticle_daemon.errors import SystemFaultError
from canticle_daemon.messages import Cue
from canticle_overlay.speech.engine import VoiceSettings
from canticle_overlay.speech.render import PhraseCache, Rendered
from canticle_overlay.speech.voice import Speech, is_stale


class FakePlayer:
    def __init__(self) -> None:
        self.ready: set[str] = set()
        self.heard: list[str] = []

    def load(self, text: str, path: Path) -> None:
        if path.name == "broken.wav":
            raise SystemFaultError("broken.wav: cannot be played")
        self.ready.add(text)

    def play(self, text: str) -> bool:
        if text in self.ready:
            self.heard.append(text)
        return text in self.ready


class Rig:
    def __init__(self) -> None:
        self.player = FakePlayer()
        self.now_s = 100.0
        self.asked: list[tuple[str, bool]] = []
        self.speech = Speech(self.player, self.request, lambda: self.now_s)  # type: ignore[arg-type]

    def request(self, texts: list[str], urgent: bool = False) -> None:
        self.asked += [(text, urgent) for text in texts]

    def render(self, text: str, fault: str | None = None, file: str = "x.wav") -> None:
        self.speech.take(Rendered(text, Path(file), fault))


@pytest.fixture
def rig() -> Rig:
    return Rig()


def test_a_ready_phrase_is_played_at_once(rig: Rig) -> None:
    rig.render("late")
    rig.speech.say("late")
    assert rig.player.heard == ["late"]
    assert rig.asked == []


def test_only_new_phrases_are_rendered(rig: Rig) -> None:
    rig.speech.learn(("late", "One, five late."))
    rig.speech.learn(("late", "One, five late.", "early"))
    assert rig.asked == [("One, five late.", False), ("early", False)]


def test_an_unready_phrase_is_rendered_first_and_played_if_soon(rig: Rig) -> None:
    rig.speech.say("new")
    assert rig.asked == [("new", True)]
    rig.now_s += 1.9
    rig.render("new")
    assert rig.player.heard == ["new"]


def test_too_late_a_rendering_is_kept_but_not_played(rig: Rig) -> None:
    rig.speech.say("new")
    rig.now_s += 2.0
    rig.render("new")
    assert rig.player.heard == []
    rig.speech.say("new")
    assert rig.player.heard == ["new"]


def test_a_newer_cue_takes_the_place_of_one_being_rendered(rig: Rig) -> None:
    rig.render("late")
    rig.speech.say("new")
    rig.speech.say("late")
    rig.render("new")
    assert rig.player.heard == ["late"]


def test_faults_are_counted_and_a_later_success_clears_them(rig: Rig) -> None:
    rig.speech.learn(("early", "odd"))
    rig.render("late")
    rig.render("early", fault="no answer")
    for _ in range(2):
        rig.render("odd", file="broken.wav")
    assert rig.speech.settled
    assert rig.speech.summary(Path("here")) == (
        "1 phrase in here; 2 could not be rendered: no answer"
    )
    rig.render("early")
    rig.render("odd")
    assert rig.speech.summary(Path("here")) == "3 phrases in here"


def test_a_broken_file_is_rendered_again_once(rig: Rig, tmp_path: Path) -> None:
    file = tmp_path / "broken.wav"
    for _ in range(2):
        file.write_text("no sound")
        rig.render("late", file=str(file))
    assert rig.asked == [("late", True)]
    assert rig.speech.faults == {"late": "broken.wav: cannot be played"}


def test_without_a_sound_device_phrases_are_still_rendered() -> None:
    asked: list[str] = []
    speech = Speech(None, lambda texts, urgent=False: asked.extend(texts))
    speech.learn(("early",))
    speech.say("early")
    speech.take(Rendered("early", Path("x"), None))
    assert asked == ["early"]
    assert speech.done == {"early"}


@pytest.mark.parametrize(
    ("age_s", "stale"), [(0.0, False), (1.9, False), (2.1, True), (-5.0, False)]
)
@pytest.mark.parametrize("suffix", ["+00:00", "Z"])
def test_a_cue_goes_stale(age_s: float, stale: bool, suffix: str) -> None:
    now = datetime(2026, 1, 1, 12, tzinfo=UTC)
    made = (now - timedelta(seconds=age_s)).isoformat().replace("+00:00", suffix)
    assert is_stale(cue_made(made), now) is stale


@pytest.mark.parametrize("wall_time", ["", "yesterday"])
def test_a_cue_without_a_wall_time_is_new(wall_time: str) -> None:
    assert not is_stale(cue_made(wall_time), datetime(2026, 1, 1, tzinfo=UTC))


def cue_made(wall_time: str) -> Cue:
    return Cue(
        time_s=1,
        lap=1,
        run=1,
        kind="x",
        text="late",
        corner=None,
        spoken=True,
        wall_time=wall_time,
    )


def test_a_phrase_is_kept_by_text_voice_and_rate(tmp_path: Path) -> None:
    texts = ("late", "Late", "One, five late.", "Übersteuern", "…")
    settings = (VoiceSettings("a", 165), VoiceSettings("a", 170), VoiceSettings("b", 165))
    paths = {PhraseCache(tmp_path, one).path(text) for one in settings for text in texts}
    assert len(paths) == len(texts) * len(settings)
    again = PhraseCache(tmp_path, VoiceSettings("a", 165)).path("One, five late.")
    assert again in paths
    assert again.name.startswith("one-five-late-")
    assert all(path.parent == tmp_path and path.suffix == ".wav" for path in paths)


def test_a_long_or_hostile_text_makes_a_plain_file_name(tmp_path: Path) -> None:
    path = PhraseCache(tmp_path, VoiceSettings()).path("../../x" * 200 + "\0")
    assert path.parent == tmp_path
    assert len(path.name) < 80
