"""Settings from a TOML file, overridden by the command line; and the reader of all our TOML.

Every key has its default here and nowhere else. Unknown keys are refused with a suggestion,
and all faults of a file are reported in one line.
"""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Literal, TypeVar, get_args

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from canticle_daemon.errors import ConfigError

ModelT = TypeVar("ModelT", bound=BaseModel)


class Section(BaseModel):
    """Base of every table in a file of ours: fixed once read, no unknown keys, finite numbers."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


class InputSection(Section):
    """Where the telemetry comes from."""

    adapter: str = "json"
    bind: str = "127.0.0.1:47800"
    layout: Path | None = None
    forward: tuple[str, ...] = ()
    only_from: str | None = None


class FileSection(Section):
    """A track or car file."""

    file: Path | None = None


class DriverSection(Section):
    """Who drives."""

    name: str = ""


class CoachSection(Section):
    """When to speak and about what."""

    tolerance_m: float = Field(5.0, ge=0)
    window_m: float = Field(30.0, ge=0)
    lengths: Literal["meters", "feet", "car lengths"] = "meters"
    speak: Literal["all", "straights", "summaries", "none"] = "all"
    moment: Literal["word", "tone"] = "word"
    targets: Path | None = None
    run_laps: int = Field(40, ge=1)


class VoiceSection(Section):
    """The spoken cues."""

    enabled: bool = True
    rate_wpm: int = Field(165, ge=80, le=400)
    voice: str = ""
    volume: float = Field(0.8, ge=0, le=1)


class OverlaySection(Section):
    """The overlay window."""

    enabled: bool = True
    scale: float = Field(1.0, ge=0.75, le=3)
    left_px: int | None = None
    top_px: int | None = None


class BusSection(Section):
    """The ZeroMQ PUB socket."""

    publish: str = "tcp://127.0.0.1:47801"
    estimate_hz: float | None = Field(None, gt=0)


class LogSection(Section):
    """Where session folders go."""

    sessions: Path | None = None


class Config(Section):
    """The whole configuration."""

    input: InputSection = InputSection()
    track: FileSection = FileSection()
    car: FileSection = FileSection()
    driver: DriverSection = DriverSection()
    coach: CoachSection = CoachSection()
    voice: VoiceSection = VoiceSection()
    overlay: OverlaySection = OverlaySection()
    bus: BusSection = BusSection()
    log: LogSection = LogSection()
    adapter: dict[str, dict[str, Any]] = {}


def load_config(
    path: Path | None, options: Mapping[str, Any], defaults: Mapping[str, Any] | None = None
) -> Config:
    """Read the file, if any, and let the options win over it.

    Parameters
    ----------
    path
        The TOML file; relative paths inside it count from its folder.
    options
        Dotted keys such as ``"input.bind"``; a value of None means not given.
    defaults
        The same for what a command would rather have where neither file nor option says.

    Raises
    ------
    ConfigError
        The file or an option is wrong.
    """
    data = {} if path is None else read_toml(path)
    if path is not None:
        _anchor_paths(data, path)
    for dotted, value in (defaults or {}).items():
        _put(data, dotted, value, over=False)
    for dotted, value in options.items():
        if value is not None:
            _put(data, dotted, value, over=True)
    return validate(Config, data, str(path) if path else "options")


def _put(data: dict[str, Any], dotted: str, value: Any, *, over: bool) -> None:
    section, key = dotted.split(".")
    table = data.setdefault(section, {})
    if isinstance(table, dict) and (over or key not in table):
        table[key] = value


def read_toml(path: Path) -> dict[str, Any]:
    """Read a TOML file.

    Raises
    ------
    ConfigError
        It cannot be read or is no TOML; the text says where.
    """
    try:
        return tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except OSError as error:
        raise ConfigError(f"{path}: cannot be read: {error.strerror or error}") from error
    except UnicodeDecodeError as error:
        raise ConfigError(f"{path}: is not UTF-8 text (byte {error.start})") from error
    except tomllib.TOMLDecodeError as error:
        raise ConfigError(f"{path}: is not valid TOML: {error}") from error
    except RecursionError as error:
        raise ConfigError(f"{path}: is not valid TOML: nested too deep") from error
    except ValueError as error:  # a path with a null character in it
        raise ConfigError(f"{str(path)!r}: cannot be read: {error}") from error


def load_toml(path: Path, model: type[ModelT]) -> ModelT:
    """Read a TOML file into a model.

    Raises
    ------
    ConfigError
        The file cannot be read or does not fit; the text names file and keys.
    """
    return validate(model, read_toml(path), str(path))


def validate(model: type[ModelT], data: Mapping[str, Any], where: str) -> ModelT:
    """Check data against a model and say all that is wrong in one line.

    Raises
    ------
    ConfigError
        The data does not fit the model.
    """
    try:
        return model.model_validate(dict(data))
    except ValidationError as error:
        told = " ".join("; ".join(_faults(error, model)).split())
        raise ConfigError(f"{where}: {told}") from error


def _faults(error: ValidationError, model: type[BaseModel]) -> Iterator[str]:
    suggested: set[str] = set()
    for fault in error.errors(include_url=False):
        place = ".".join(str(part) for part in fault["loc"])
        if fault["type"] == "extra_forbidden":
            hint = _suggestion(model, fault["loc"])
            yield f"unknown key {place!r}{'' if hint in suggested else hint}"
            suggested.add(hint)  # a list of all keys is said once
            continue
        message = fault["msg"].removeprefix("Value error, ")
        message = message[:1].lower() + message[1:]
        yield f"{place}: {message}" if place else message


def _suggestion(model: type[BaseModel], loc: tuple[int | str, ...]) -> str:
    keys = _keys_at(model, loc[:-1])
    close = difflib.get_close_matches(str(loc[-1]), keys, n=1)
    if close:
        return f" (did you mean {close[0]!r}?)"
    return f" (known: {', '.join(keys)})" if keys else ""


def _keys_at(model: type[BaseModel], loc: tuple[int | str, ...]) -> list[str]:
    for part in loc:
        field = model.model_fields.get(part) if isinstance(part, str) else None
        if field is not None:
            model = _model_inside(field.annotation) or model
    return [field.alias or name for name, field in model.model_fields.items()]


def _model_inside(annotation: object) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    inner = (_model_inside(argument) for argument in get_args(annotation))
    return next((found for found in inner if found is not None), None)


def _anchor_paths(data: dict[str, Any], path: Path) -> None:
    """Let relative paths count from the file's own folder."""
    places = (("input", "layout"), ("track", "file"), ("car", "file"))
    for section, key in (*places, ("coach", "targets"), ("log", "sessions")):
        table = data.get(section)
        if isinstance(table, dict) and isinstance(table.get(key), str):
            try:
                table[key] = path.parent / Path(table[key]).expanduser()
            except RuntimeError as error:
                raise ConfigError(f"{path}: {section}.{key}: no such home folder") from error
