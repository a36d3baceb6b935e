"""The worked examples in `configs/` load, and say what the code says."""

from __future__ import annotations

from pathlib import Path

import pytest

from canticle_daemon.config import Config, load_config
from canticle_daemon.physics.car import CarFile
from canticle_daemon.runtime.console import Console
from canticle_daemon.runtime.setup import gather
from canticle_daemon.track.profile import Track

CONFIGS = Path(__file__).parents[1] / "configs"


def test_the_settings_are_the_defaults_but_for_the_files() -> None:
    told = load_config(CONFIGS / "canticle.toml", {})
    default = Config().model_dump()
    for section, values in told.model_dump().items():
        for key, value in values.items():
            if key != "file":
                assert value == default[section][key], (section, key)


def test_the_files_that_the_settings_name_load() -> None:
    parts = gather(load_config(CONFIGS / "canticle.toml", {}), Console())
    assert parts.track is not None
    assert parts.track.name == "Example Oval"
    assert parts.car.name == "Example oval car"


def test_the_car_is_the_default_car() -> None:
    told = CarFile.load(CONFIGS / "car-example.toml").model_dump()
    assert {**told, "name": ""} == {**CarFile().model_dump(), "name": ""}


def test_the_track_has_two_corners_and_a_mark() -> None:
    track = Track.load(CONFIGS / "track-example.toml")
    first, second = track.corners
    assert (first.target_source, second.target_source) == ("driver", "transition")
    assert first.window_m == (255.0, 290.0)


@pytest.mark.parametrize("path", sorted(CONFIGS.glob("*.toml")), ids=lambda path: path.stem)
def test_every_example_says_how_it_is_used(path: Path) -> None:
    assert path.read_text(encoding="utf-8").startswith("#")
