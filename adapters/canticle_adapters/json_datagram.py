"""The native datagram: one UTF-8 JSON object, keys as the frame's fields.

A good datagram takes the fast path, a typed decoder. Anything that decoder refuses is read
again key by key, so that one bad optional key costs that field and not the datagram.

Choices the format leaves open:

* Unknown keys are ignored, whatever they hold; of a key given twice the last counts.
* null on an optional key means absent and is no fault. A `NaN` or `Infinity` token, which
  JSON does not have but some encoders write, is a bad value of its key, as is a number too
  large for a double. True and false are not numbers, and numbers in quotes are texts.
* A negative `speed_mps` is a car rolling back, not a fault.
* `throttle`, `brake` and `tire_tread` within `OVERSHOOT` outside 0…1 are clamped, as a
  calibration overshoots by that much; beyond it the value is bad.
* `lap` is a whole number from 0 (a sender may call the out-lap 0).
"""

from __future__ import annotations

import json
import math
from typing import Any, NoReturn

import msgspec

from canticle_daemon.adapter_api import Adapter
from canticle_daemon.errors import DecodeError
from canticle_daemon.frame import FLAGS, SCALARS, WHEEL_FIELDS, Frame

OVERSHOOT = 0.01
REQUIRED = ("time_s", "speed_mps", "yaw_rate_radps", "accel_y_mps2")
SHARES = ("throttle", "brake")
_ABSENT = object()


class JsonAdapter(Adapter):
    """Decodes native datagrams."""

    name = "json"

    def decode(self, datagram: bytes) -> Frame | None:
        """Return the datagram's frame.

        Raises
        ------
        DecodeError
            It is not one JSON object, or a required key is missing or of the wrong kind.
        """
        try:
            if not datagram.isascii():
                datagram.decode("utf-8")  # the typed decoder skips ignored texts unread
            frame = _decode_typed(datagram)
        except (msgspec.DecodeError, RecursionError, UnicodeDecodeError):
            return self._decode_by_key(datagram)
        return frame if _in_range(frame) else self._decode_by_key(datagram)

    def _decode_by_key(self, datagram: bytes) -> Frame:
        values, bad = {}, []
        for key, raw in _parse_object(datagram).items():
            read = _READERS.get(key)
            if read is None or raw is None:
                continue
            value = read(key, raw)
            if value is _ABSENT:
                bad.append(key)
            else:
                values[key] = value
        _check_required(values, bad)
        self.bad_fields += len(bad)
        return Frame(**values)


_decode_typed = msgspec.json.Decoder(Frame).decode


def _in_range(frame: Frame) -> bool:
    """Whether the typed frame is good as it is; NaN, the default, marks an absent number."""
    lap, throttle, brake = frame.lap, frame.throttle, frame.brake
    return (
        frame.accel_y_mps2 == frame.accel_y_mps2
        and (
            frame.station_m == frame.station_m
            or (frame.pos_x_m == frame.pos_x_m and frame.pos_y_m == frame.pos_y_m)
        )
        and (0.0 <= throttle <= 1.0 or throttle != throttle)
        and (0.0 <= brake <= 1.0 or brake != brake)
        and (lap != lap or (lap >= 0.0 and lap == lap // 1.0))
        and (frame.tire_tread is None or all(0.0 <= tread <= 1.0 for tread in frame.tire_tread))
    )


def _parse_object(datagram: bytes) -> dict[str, Any]:
    try:
        # Integers become floats at once: a sender's 10**400 is then merely not finite.
        parsed = json.loads(datagram.decode("utf-8"), parse_int=float)
    except UnicodeDecodeError as error:
        raise DecodeError(f"is not UTF-8 text (byte {error.start})") from error
    except RecursionError as error:
        raise DecodeError("is nested too deeply") from error
    except ValueError as error:
        raise DecodeError(f"is not valid JSON: {error}") from error
    if not isinstance(parsed, dict):
        raise DecodeError("is not a JSON object")
    return parsed


def _check_required(values: dict[str, Any], bad: list[str]) -> None:
    for key in REQUIRED:
        if key not in values:
            _refuse(key, bad)
    if "station_m" not in values and not ("pos_x_m" in values and "pos_y_m" in values):
        pair = [key for key in ("pos_x_m", "pos_y_m") if key in bad]
        _refuse("station_m" if "station_m" in bad or not pair else pair[0], bad)


def _refuse(key: str, bad: list[str]) -> NoReturn:
    if key in bad:
        raise DecodeError(f"required key {key!r} is not a finite number")
    also = " (or pos_x_m and pos_y_m)" if key == "station_m" else ""
    raise DecodeError(f"required key {key!r}{also} is missing")


def _number(_key: str, raw: object) -> object:
    return raw if isinstance(raw, float) and math.isfinite(raw) else _ABSENT


def _share(_key: str, raw: object) -> object:
    if isinstance(raw, float) and -OVERSHOOT <= raw <= 1.0 + OVERSHOOT:
        return min(max(raw, 0.0), 1.0)
    return _ABSENT


def _lap(_key: str, raw: object) -> object:
    return raw if isinstance(raw, float) and raw >= 0.0 and raw.is_integer() else _ABSENT


def _wheels(key: str, raw: object) -> object:
    if not isinstance(raw, list) or len(raw) != 4:
        return _ABSENT
    read = _share if key == "tire_tread" else _number
    four = [read(key, one) for one in raw]
    return _ABSENT if _ABSENT in four else tuple(four)


def _flag(_key: str, raw: object) -> object:
    return raw if isinstance(raw, bool) else _ABSENT


def _text(_key: str, raw: object) -> object:
    if not isinstance(raw, str):
        return _ABSENT
    try:
        raw.encode("utf-8")  # a lone surrogate could never be written again
    except UnicodeEncodeError:
        return _ABSENT
    return raw


def _reader_of(key: str) -> Any:
    if key in SHARES:
        return _share
    if key == "lap":
        return _lap
    if key in SCALARS:
        return _number
    if key in WHEEL_FIELDS:
        return _wheels
    return _flag if key in FLAGS else _text


_READERS = {key: _reader_of(key) for key in Frame.__struct_fields__}
