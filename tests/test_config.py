"""Settings: what wins, and one line that names file and key for all that is wrong."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from canticle_daemon.config import Config, load_config, load_toml, validate
from canticle_daemon.errors import ConfigError
from canticle_daemon.physics.car import CarFile
from canticle_daemon.track.profile import Track, TrackFile


def written(folder: Path, text: str | bytes, name: str = "config.toml") -> Path:
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def fault(path: Path, options: dict[str, Any] | None = None) -> str:
    with pytest.raises(ConfigError) as caught:
        load_config(path, options or {})
    text = str(caught.value)
    assert "\n" not in text
    assert text.startswith(str(path))
    return text


def test_defaults_of_the_contract() -> None:
    config = load_config(None, {})
    assert config.input.adapter == "json"
    assert config.input.bind == "127.0.0.1:47800"
    assert config.bus.publish == "tcp://127.0.0.1:47801"
    assert (config.coach.tolerance_m, config.coach.window_m) == (5.0, 30.0)
    assert config.coach.speak == "all"
    assert config.coach.run_laps == 40


def test_an_option_wins_over_the_file_and_the_file_over_the_default(tmp_path: Path) -> None:
    path = written(tmp_path, '[input]\nbind = "127.0.0.1:1"\nadapter = "packed"\n')
    config = load_config(path, {"input.bind": "127.0.0.1:2", "coach.run_laps": None})
    assert config.input.bind == "127.0.0.1:2"
    assert config.input.adapter == "packed"
    assert config.coach.run_laps == 40


def test_a_command_s_own_default_gives_way_to_file_and_option(tmp_path: Path) -> None:
    path = written(tmp_path, '[driver]\nname = "Ann"\n')
    preset = {"driver.name": "Bea", "coach.run_laps": 12, "voice.volume": 0.5}
    config = load_config(path, {"voice.volume": 0.3}, preset)
    assert (config.driver.name, config.coach.run_laps, config.voice.volume) == ("Ann", 12, 0.3)


def test_paths_in_a_file_count_from_its_folder(tmp_path: Path) -> None:
    path = written(
        tmp_path,
        "[track]\nfile = 'a/oval.toml'\n[car]\nfile = '/abs/car.toml'\n"
        "[coach]\ntargets = 't.toml'\n",
    )
    config = load_config(path, {})
    assert config.track.file == tmp_path / "a" / "oval.toml"
    assert config.car.file == Path("/abs/car.toml")
    assert config.coach.targets == tmp_path / "t.toml"


def test_a_file_saved_with_a_byte_order_mark_is_read(tmp_path: Path) -> None:
    path = written(tmp_path, b"\xef\xbb\xbf[driver]\nname = 'Ann'\n")
    assert load_config(path, {}).driver.name == "Ann"


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("[input]\nbnid = 'x'\n", ["input.bnid", "did you mean 'bind'"]),
        ("[inputs]\nbind = 'x'\n", ["'inputs'", "did you mean 'input'"]),
        ("[coach]\nzzz = 1\n", ["coach.zzz", "known:", "tolerance_m"]),
        ("[coach]\nzzz = 1\nyyy = 2\n", ["run_laps); unknown key 'coach.yyy'"]),
        ("[coach]\ntolerance_m = nan\n", ["coach.tolerance_m", "finite"]),
        ("[coach]\nwindow_m = inf\n", ["coach.window_m", "finite"]),
        ("[coach]\ntolerance_m = -1\n", ["coach.tolerance_m"]),
        ("[coach]\nlengths = 'yards'\n", ["coach.lengths", "car lengths"]),
        ("[voice]\nvolume = 3\nspeed = 1\n", ["voice.volume", "voice.speed"]),
        ("input = 3\n", ["input"]),
        ("[coach\n", ["not valid TOML", "line 1"]),
        ("[coach]\na = 1\na = 2\n", ["not valid TOML", "line 3"]),
        (b"[driver]\nname = '\xff'\n", ["not UTF-8", "byte 17"]),
        ("x = " + "[" * 5000 + "]" * 5000, ["not valid TOML"]),
        ("[adapter]\n'a\\nb' = 1\n\"c\\nd\" = 2\n", ["adapter"]),
        ("[track]\nfile = '~no-such-user-here/x'\n", ["track.file", "home folder"]),
    ],
    ids=range(16),
)
def test_a_wrong_file_is_one_line_with_its_key(
    tmp_path: Path, text: str | bytes, parts: list[str]
) -> None:
    told = fault(written(tmp_path, text))
    for part in parts:
        assert part in told


def test_all_faults_are_told_at_once(tmp_path: Path) -> None:
    told = fault(written(tmp_path, "[coach]\nspoke = 1\nrun_laps = 0\n[bus]\nestimate_hz = 0\n"))
    assert all(key in told for key in ("coach.spoke", "coach.run_laps", "bus.estimate_hz"))


def test_a_missing_file_a_folder_and_a_name_no_file_can_have(tmp_path: Path) -> None:
    assert "No such file" in fault(tmp_path / "none.toml")
    assert "directory" in fault(tmp_path).lower()
    with pytest.raises(ConfigError, match="cannot be read"):
        load_config(Path("a\0b"), {})


def test_a_wrong_option_is_told_as_one() -> None:
    with pytest.raises(ConfigError, match=r"options: coach\.run_laps"):
        load_config(None, {"coach.run_laps": -3})


# --- whatever stands in a file -----------------------------------------------------------------

words = st.one_of(
    st.sampled_from(
        "name length_m profile corner direction origin apex_m exit_m tire input coach adapter "
        "mass_kg file window_m transition_start_m transition_end_m target_m".split()
    ),
    st.text(max_size=5),
)
atoms = st.one_of(
    st.none(), st.booleans(), st.integers(), st.just(10**400), st.floats(), st.text(max_size=8),
    st.sampled_from(["left", "right", "all", "~x"]), st.dates(), st.binary(max_size=3),
)  # fmt: skip
trees = st.recursive(
    atoms,
    lambda inner: st.one_of(st.lists(inner, max_size=4), st.dictionaries(words, inner, max_size=4)),
    max_leaves=20,
)
MODELS = [Config, CarFile, TrackFile]


@settings(max_examples=300)
@given(st.sampled_from(MODELS), st.dictionaries(words, trees, max_size=6))
def test_anything_is_accepted_or_refused_in_one_line(
    model: type[Any], data: dict[str, Any]
) -> None:
    refused = "file.toml: fits"
    try:
        validate(model, data, "file.toml")
    except ConfigError as error:
        refused = str(error)
    assert refused.startswith("file.toml: ")
    assert len(refused.splitlines()) == 1


numbers = st.one_of(
    st.floats(-1e4, 1e4), st.sampled_from([0.0, -1.0, 1e9, math.nan, math.inf, -0.0])
)


def track_or_none(data: dict[str, Any]) -> Track | None:
    try:
        return Track(validate(TrackFile, data, "t.toml"))
    except ConfigError as error:
        refused = str(error)
    assert len(refused.splitlines()) == 1
    return None


@settings(max_examples=200)
@given(
    numbers,
    st.lists(st.tuples(numbers, numbers, numbers), max_size=5),
    st.lists(st.tuples(numbers, numbers, numbers, numbers), max_size=3),
    st.booleans(),
)
def test_a_track_of_any_numbers_is_used_or_refused(
    length: float, rows: list[Any], corners: list[Any], round_lap: bool
) -> None:
    if round_lap:  # else no lap of random numbers would ever close
        rows = [[0.0, 5.0, 2.0 * math.pi / 1000.0], [500.0, 5.0, 2.0 * math.pi / 1000.0]]
        length = 1000.0
    keys = ("transition_start_m", "transition_end_m", "apex_m", "exit_m")
    named = [
        {"name": f"T{i}", **dict(zip(keys, places, strict=True))}
        for i, places in enumerate(corners)
    ]
    data = {"name": "x", "length_m": length, "profile": rows, "corner": named}
    track = track_or_none(data)
    if track is None:
        return
    for corner in track.corners:
        ahead = [
            (place - corner.zone_start_m) % track.length_m
            for place in (
                corner.entry_start_m, corner.transition_start_m, corner.transition_end_m,
                corner.apex_m, corner.exit_m,
            )
        ]  # fmt: skip
        assert ahead == sorted(ahead)


def test_a_car_file_may_give_any_subset(tmp_path: Path) -> None:
    path = written(tmp_path, "mass_kg = 1600.0\n[tire]\npeak_friction = 1.2\n", "car.toml")
    car = CarFile.load(path)
    assert (car.mass_kg, car.tire.peak_friction, car.wheelbase_m) == (1600.0, 1.2, 2.79)
    assert CarFile.load(None) == CarFile()


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("mass = 1600.0\n", "did you mean 'mass_kg'"),
        ("[tire]\npeak_fricton = 1.2\n", "did you mean 'peak_friction'"),
        ("mass_kg = -3\n", "mass_kg"),
        ("drive = 'sideways'\n", "drive"),
        ("front_weight_share = 51\n", "front_weight_share"),
        ("wheelbase_m = nan\n", "wheelbase_m"),
    ],
)
def test_an_impossible_car_is_refused(tmp_path: Path, text: str, part: str) -> None:
    path = written(tmp_path, text, "car.toml")
    with pytest.raises(ConfigError, match=r"car\.toml") as caught:
        load_toml(path, CarFile)
    assert part in str(caught.value)
