"""The two worked layouts with real bytes, and the rules of decoding by layout."""

import math
import struct
from pathlib import Path
from typing import Any

import pytest
from scipy.spatial.transform import Rotation

from canticle_adapters.packed import PackedAdapter, PackedOptions
from canticle_daemon.errors import ConfigError, DecodeError
from canticle_daemon.frame import Frame

CONFIGS = Path(__file__).parents[2] / "configs"


def worked(name: str) -> PackedAdapter:
    return PackedAdapter(PackedOptions(layout=CONFIGS / f"layout-{name}.toml"))


# --- the single packet ------------------------------------------------------------------------


def sparrow(**changes: Any) -> bytes:
    """Build the packet field by field, by its documentation."""
    quaternion = Rotation.from_euler("ZYX", [30.0, 2.0, -18.0], degrees=True).as_quat()  # x y z w
    fields: dict[str, tuple[int, str, tuple[Any, ...]]] = {
        "head": (0, "4sH2s", (b"SPRW", 3, b"\n\r")),
        "time": (8, "I", (90_125,)),
        "speed": (12, "f", (140.0,)),
        "yaw_rate": (16, "f", (-12.5,)),
        "accel": (20, "3f", (0.25, 1.5, 2.0)),
        "station": (32, "f", (1000.0,)),
        "lap": (36, "H", (11,)),
        "steer": (38, "h", (-6553,)),
        "pedals": (40, "BB", (255, 25)),
        "flags": (42, "BB", (0x02, 4)),
        "quaternion": (44, "4f", tuple(quaternion)),
        "position": (60, "3f", (100.5, -20.25, 3.0)),
        "velocity": (72, "3f", (62.5, -1.25, 0.0)),
        "wheels": (
            84,
            "12f",
            (900.0, 2.0, 90.0, 800.0, 1.0, 85.0, 1100.0, -3.0, 80.0, 1000.0, 0.5, 75.0),
        ),
        "fuel": (132, "f", (10.0,)),
        "car": (136, "24s", (b"Sparrow GT\0left over bytes",)),
    }
    packet = bytearray(160)
    for name, (offset, code, values) in fields.items():
        struct.pack_into("<" + code, packet, offset, *changes.get(name, values))
    return bytes(packet)


def frame_of(adapter: PackedAdapter, datagram: bytes) -> Frame:
    frame = adapter.decode(datagram)
    assert frame is not None
    return frame


def test_the_single_packet_in_si_units_and_our_signs():
    adapter = worked("single")
    frame = frame_of(adapter, sparrow())
    expected = {
        "time_s": 90.125,
        "speed_mps": 62.5856,  # 140 mph
        "yaw_rate_radps": math.radians(12.5),
        "accel_x_mps2": 2.4516625,  # quarter, one and a half, two times 9.80665
        "accel_y_mps2": 14.709975,
        "accel_z_mps2": 19.6133,
        "station_m": 304.8,
        "lap": 12.0,
        "steer_rad": math.radians(90.0),  # a fifth of 450°
        "throttle": 1.0,
        "brake": 0.25,
        "pos_x_m": 100.5,
        "pos_y_m": -20.25,
        "pos_z_m": 3.0,
        "yaw_rad": math.radians(30.0),
        "pitch_rad": math.radians(2.0),
        "roll_rad": math.radians(-18.0),
        "vel_x_mps": 62.5,
        "vel_y_mps": -1.25,
        "fuel_kg": 28.0,
    }
    for name, value in expected.items():
        assert getattr(frame, name) == pytest.approx(value, rel=1e-4, abs=1e-6), name
    newtons = [4003.399, 4893.044, 3558.577, 4448.222]  # 900, 1100, 800 and 1000 lbf
    assert frame.wheel_load_n == pytest.approx(newtons, rel=1e-6)
    assert frame.wheel_slip_angle_rad == pytest.approx([math.radians(d) for d in (-2, 3, -1, -0.5)])
    assert frame.tire_tread == pytest.approx((0.9, 0.8, 0.85, 0.75))
    assert (frame.in_car, frame.on_pit_road, frame.caution) == (False, True, True)
    assert frame.car_name == "Sparrow GT"
    assert adapter.bad_fields == 0
    assert adapter.notes == ()
    given = {n for n in Frame.__struct_fields__ if getattr(frame, n) not in (None,)}
    assert {n for n in given if getattr(frame, n) == getattr(frame, n)} == adapter.provides


def test_what_is_another_packet_is_left_alone_and_what_is_cut_is_bad():
    adapter = worked("single")
    assert adapter.decode(b"") is None
    assert adapter.decode(sparrow(head=(b"SPRX", 3, b"\n\r"))) is None
    assert adapter.decode(sparrow(head=(b"SPRW", 4, b"\n\r"))) is None
    for wrong in (sparrow()[:-1], sparrow() + b"\0"):
        with pytest.raises(DecodeError, match=rf"packet 'car' but has {len(wrong)} bytes"):
            adapter.decode(wrong)


def test_a_missing_value_is_absent_and_no_fault():
    adapter = worked("single")
    assert math.isnan(frame_of(adapter, sparrow(lap=(65535,))).lap)
    assert math.isnan(frame_of(adapter, sparrow(fuel=(math.nan,))).fuel_kg)
    assert frame_of(adapter, sparrow(wheels=(math.nan,) * 12)).wheel_load_n is None
    assert frame_of(adapter, sparrow(car=(b"\0" * 24,))).car_name is None
    assert adapter.bad_fields == 0


@pytest.mark.parametrize(
    ("change", "name"),
    [
        ({"fuel": (math.inf,)}, "fuel_kg"),
        ({"pedals": (255, 120)}, "brake"),
        ({"car": (b"Sp\xffrrow" + b"\0" * 17,)}, "car_name"),
        ({"quaternion": (0.0, 0.0, 0.0, 0.0)}, "roll_rad"),
        ({"position": (1.0, -math.inf, 0.0)}, "pos_x_m"),
    ],
)
def test_a_bad_optional_field_is_left_out_and_counted(change: dict[str, Any], name: str):
    adapter = worked("single")
    value = getattr(frame_of(adapter, sparrow(**change)), name)
    assert value is None or math.isnan(value)
    assert adapter.bad_fields == 1


@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf])
def test_a_bad_required_field_makes_the_datagram_bad(bad: float):
    changes = {"yaw_rate_radps": {"yaw_rate": (bad,)}, "accel_y_mps2": {"accel": (0.0, bad, 1.0)}}
    for name, change in changes.items():
        adapter = worked("single")
        with pytest.raises(DecodeError, match=name):
            adapter.decode(sparrow(**change))
        assert adapter.bad_fields == 0


def test_a_bad_speed_is_made_up_for_by_the_velocity():
    adapter = worked("single")
    frame = frame_of(adapter, sparrow(speed=(math.inf,)))
    assert frame.speed_mps == pytest.approx(math.hypot(62.5, 1.25))
    assert adapter.bad_fields == 1
    with pytest.raises(DecodeError, match="speed_mps"):
        adapter.decode(sparrow(speed=(math.inf,), velocity=(math.nan, 0.0, 0.0)))


# --- the joined packets -----------------------------------------------------------------------


def in_petrel_world(v: tuple[float, float, float]) -> tuple[float, float, float]:
    """Our (x, y, z) as the sender would write it: y up, left-handed."""
    return v[0], v[2], v[1]


def in_petrel_body(v: tuple[float, float, float]) -> tuple[float, float, float]:
    """Our (forward, left, up) as the sender's right, up, forward."""
    return -v[1], v[2], v[0]


SPEED, RADIUS, BANK = 60.0, 250.0, math.radians(20.0)
HEADING_RATE = SPEED / RADIUS


def motion(step: int, time_s: float) -> bytes:
    """A car in steady motion on a level left-hand circle banked by 20°: plain geometry."""
    heading = HEADING_RATE * time_s
    sin_h, cos_h, sin_b, cos_b = (
        math.sin(heading), math.cos(heading), math.sin(BANK), math.cos(BANK)
    )  # fmt: skip
    forward = (cos_h, sin_h, 0.0)
    # The surface falls to the left, so its normal leans to the left.
    up = (-sin_h * sin_b, cos_h * sin_b, cos_b)
    centripetal = SPEED**2 / RADIUS
    return struct.pack(
        ">B3xId3f3f3f3f3fff4x",
        1,
        step,
        time_s,
        *in_petrel_world(forward),
        *in_petrel_world(up),
        *in_petrel_world((RADIUS * sin_h, -RADIUS * cos_h, 5.0)),
        *(3.6 * part for part in in_petrel_world((SPEED * cos_h, SPEED * sin_h, 0.0))),
        *in_petrel_body((0.0, centripetal * cos_b, centripetal * sin_b)),
        2.0,
        -1.0,
    )


def lap(step: int, fraction: float = 0.25, gap: float = 1.5) -> bytes:
    return struct.pack(">B3xIfHBxf", 2, step, fraction, 7, 0, gap)


def controls(step: int) -> bytes:
    return struct.pack(">B3xIhHHB9x", 3, step, -450, 800, 0, 2)


def petrel(*packets: bytes, adapter: PackedAdapter | None = None) -> list[Frame]:
    decoder = adapter or worked("joined")
    return [frame for packet in packets if (frame := decoder.decode(packet)) is not None]


def drive(adapter: PackedAdapter, count: int, dt: float = 0.01) -> list[Frame]:
    packets = (p for i in range(count) for p in (controls(i), lap(i), motion(i, 5.0 + dt * i)))
    return petrel(*packets, adapter=adapter)


def test_the_joined_packets_give_what_the_bank_must_give():
    (frame,) = drive(worked("joined"), 2)
    centripetal, g = SPEED**2 / RADIUS, 9.81
    # Two identities of steady motion on a bank (textbook statics): the body yaw rate is
    # heading rate × cos(bank), and the specific force in the road's plane and normal to it.
    assert frame.yaw_rate_radps == pytest.approx(HEADING_RATE * math.cos(BANK), rel=1e-4)
    assert frame.accel_y_mps2**2 + frame.accel_z_mps2**2 == pytest.approx(g**2 + centripetal**2)
    angle = math.atan2(frame.accel_y_mps2, frame.accel_z_mps2)
    assert angle == pytest.approx(math.atan(centripetal / g) - BANK, abs=1e-6)
    assert frame.accel_x_mps2 == pytest.approx(0.0, abs=1e-5)
    assert frame.roll_rad == pytest.approx(-BANK, abs=1e-6)
    assert frame.pitch_rad == pytest.approx(0.0, abs=1e-6)
    assert frame.yaw_rad == pytest.approx(HEADING_RATE * 5.01, abs=1e-6)
    assert frame.speed_mps == pytest.approx(SPEED, rel=1e-6)
    assert (frame.vel_x_mps, frame.vel_y_mps) == pytest.approx((SPEED, 0.0), abs=1e-4)
    assert frame.pos_x_m == pytest.approx(RADIUS * math.sin(HEADING_RATE * 5.01), rel=1e-6)
    assert frame.pos_z_m == 5.0
    assert frame.station_m == 600.0
    assert (frame.lap, frame.gap_ahead_s, frame.tire_set) == (7.0, 1.5, "2")
    assert frame.steer_rad == pytest.approx(math.radians(45.0))
    assert frame.wheel_slip_ratio == pytest.approx((0.02, 0.02, -0.01, -0.01))


def test_it_says_that_the_yaw_rate_is_derived_and_what_it_provides():
    adapter = worked("joined")
    assert len(adapter.notes) == 1
    assert "yaw rate is derived" in adapter.notes[0]
    assert {"yaw_rate_radps", "roll_rad", "vel_y_mps", "accel_z_mps2"} <= adapter.provides
    assert "fuel_kg" not in adapter.provides


def test_packets_of_a_step_may_come_in_any_order_and_steps_may_overlap():
    first = [motion(1, 5.0), lap(1)]
    for order in ([lap(2), motion(2, 5.01)], [motion(2, 5.01), lap(2)]):
        (frame,) = petrel(*first, *order)
        assert frame.time_s == 5.01
    frames = petrel(*first, motion(2, 5.01), motion(3, 5.02), lap(2), lap(3))
    assert [frame.time_s for frame in frames] == [5.01, 5.02]


def test_an_optional_packet_that_is_late_or_lost_only_costs_its_fields():
    (frame,) = petrel(motion(1, 5.0), lap(1), motion(2, 5.01), lap(2), controls(2))
    assert math.isnan(frame.steer_rad)


def test_a_step_that_lost_a_required_packet_is_given_up():
    frames = petrel(*[p for i in range(50) for p in (motion(i, 5 + i / 100), *[lap(i)] * (i % 2))])
    assert [round(frame.time_s * 100) for frame in frames] == list(range(503, 550, 2))
    adapter = worked("joined")
    petrel(*[motion(i, 5 + i / 100) for i in range(1000)], adapter=adapter)
    assert len(adapter._joiner._pending) <= 8


def test_a_gap_or_a_step_back_in_time_begins_the_yaw_rate_anew():
    adapter = worked("joined")
    assert len(drive(adapter, 5)) == 4
    later = [motion(6, 50.0), lap(6), motion(7, 50.01), lap(7)]
    assert [frame.time_s for frame in petrel(*later, adapter=adapter)] == [50.01]
    back = [motion(8, 5.0), lap(8), motion(9, 5.01), lap(9)]
    assert [frame.time_s for frame in petrel(*back, adapter=adapter)] == [5.01]


def test_a_repeated_instant_keeps_its_yaw_rate():
    adapter = worked("joined")
    (moving,) = drive(adapter, 2)
    (again,) = petrel(motion(9, 5.01), lap(9), adapter=adapter)
    assert again.yaw_rate_radps == moving.yaw_rate_radps


def test_reset_forgets_pending_packets_and_the_last_attitude():
    adapter = worked("joined")
    drive(adapter, 2)
    adapter.decode(motion(2, 5.02))
    adapter.reset()
    assert petrel(lap(2), adapter=adapter) == []
    assert petrel(motion(3, 5.03), lap(3), adapter=adapter) == []


def test_without_an_attitude_gravity_cannot_be_added_and_the_datagram_is_bad():
    broken = bytearray(motion(1, 5.0))
    broken[28:40] = bytes(12)
    adapter = worked("joined")
    adapter.decode(lap(1))
    with pytest.raises(DecodeError, match="gravity cannot be added"):
        adapter.decode(bytes(broken))


# --- other layouts ----------------------------------------------------------------------------

BASE = """
name = "Wren"
accelerations_include_gravity = {gravity}
{top}
[[packet]]
name = "all"
{packet}
field = [
  {{ to = "time_s", offset = 0, type = "f64" }},
  {{ to = "speed_mps", offset = 8, type = "f64" }},
  {{ to = "accel_y_mps2", offset = 16, type = "f64" }},
  {{ to = "accel_z_mps2", offset = 24, type = "f64" }},
  {{ to = "station_m", offset = 32, type = "f64" }},
  {more}
]
{rest}
"""
YAW_RATE = '{ to = "yaw_rate_radps", offset = 40, type = "f64" },'


def wren(
    folder: Path,
    more: str = YAW_RATE,
    *,
    gravity: str = "true",
    top: str = "",
    packet: str = "",
    rest: str = "",
) -> PackedAdapter:
    path = folder / "wren.toml"
    text = BASE.format(gravity=gravity, top=top, packet=packet, more=more, rest=rest)
    path.write_text(text, encoding="utf-8")
    return PackedAdapter(PackedOptions(layout=path))


def doubles(*more: float, time_s: float = 1.0) -> bytes:
    return struct.pack(f"<{5 + len(more)}d", time_s, 60.0, 11.0, 2.0, 100.0, *more)


def test_no_gravity_and_no_attitude_is_said_plainly(tmp_path: Path):
    adapter = wren(tmp_path, gravity="false")
    frame = frame_of(adapter, doubles(0.2))
    assert frame.accel_y_mps2 == 11.0
    assert math.isnan(frame.accel_z_mps2)
    assert "accel_z_mps2" not in adapter.provides
    (note,) = adapter.notes
    assert "gravity" in note
    assert "trusted" in note


def test_angles_with_signs_serve_for_gravity_and_yaw_rate(tmp_path: Path):
    more = """
    { to = "roll_rad", offset = 40, type = "f64", unit = "deg", sign = -1 },
    { to = "pitch_rad", offset = 48, type = "f64", unit = "deg" },
    # A compass: clockwise from north; our yaw is anticlockwise from the world's x, east.
    { to = "yaw_rad", offset = 56, type = "f64", unit = "deg", bias = -90, sign = -1 },
    """
    adapter = wren(tmp_path, more, gravity="false")
    assert adapter.decode(doubles(20.0, 5.0, 350.0)) is None
    frame = frame_of(adapter, doubles(20.0, 5.0, 349.0, time_s=1.1))
    assert frame.yaw_rad == pytest.approx(math.radians(-259.0))
    both = [Rotation.from_euler("ZYX", [y, 5.0, -20.0], degrees=True) for y in (-260.0, -259.0)]
    up_in_body = both[1].inv().apply([0.0, 0.0, 9.80665])
    assert frame.accel_y_mps2 == pytest.approx(11.0 + up_in_body[1])
    assert frame.accel_z_mps2 == pytest.approx(2.0 + up_in_body[2])
    expected = (both[0].inv() * both[1]).as_rotvec()[2] / 0.1
    assert frame.yaw_rate_radps == pytest.approx(expected)


def test_a_rotation_rate_in_world_axes_is_turned_into_the_vehicles(tmp_path: Path):
    more = """
    { to = "quaternion", offset = 40, type = "f64" },
    { to = "rotation_rate", offset = 72, type = "f64", unit = "deg/s", frame = "world" },
    """
    rotation = Rotation.from_euler("ZYX", [70.0, 3.0, -15.0], degrees=True)
    x, y, z, w = rotation.as_quat()
    frame = frame_of(wren(tmp_path, more), doubles(w, x, y, z, 0.0, 0.0, 14.0))
    expected = rotation.inv().apply([0.0, 0.0, math.radians(14.0)])[2]
    assert frame.yaw_rate_radps == pytest.approx(expected)


def test_an_acceleration_in_world_axes_is_turned_too(tmp_path: Path):
    path = tmp_path / "finch.toml"
    path.write_text("""
    name = "Finch"
    accelerations_include_gravity = false
    [[packet]]
    name = "all"
    field = [
      { to = "time_s", offset = 0, type = "f64" },
      { to = "position", offset = 8, type = "f64" },
      { to = "velocity", offset = 32, type = "f64", frame = "world" },
      { to = "acceleration", offset = 56, type = "f64", frame = "world" },
      { to = "quaternion", offset = 80, type = "f64", inverse = true },
      { to = "yaw_rate_radps", offset = 112, type = "f64" },
    ]
    """)
    rotation = Rotation.from_euler("ZYX", [70.0, 3.0, -15.0], degrees=True)
    x, y, z, w = rotation.inv().as_quat()
    numbers = (1.0, 5.0, 6.0, 7.0, 10.0, 50.0, 1.0, -8.0, 3.0, 0.5, w, x, y, z, 0.2)
    frame = frame_of(PackedAdapter(PackedOptions(layout=path)), struct.pack("<15d", *numbers))
    force = rotation.inv().apply([-8.0, 3.0, 0.5 + 9.80665])
    got = (frame.accel_x_mps2, frame.accel_y_mps2, frame.accel_z_mps2)
    assert got == pytest.approx(tuple(force))
    velocity = rotation.inv().apply([10.0, 50.0, 1.0])
    assert (frame.vel_x_mps, frame.vel_y_mps) == pytest.approx(tuple(velocity[:2]))
    assert frame.speed_mps == pytest.approx(math.sqrt(2601.0))


LATEST = """
[[packet]]
name = "pit"
size = 9
{optional}
field = [
  {{ to = "on_pit_road", offset = 8, type = "u8" }},
  {{ to = "time_s", offset = 0, type = "f64" }},
]
"""


@pytest.mark.parametrize("optional", [True, False])
def test_the_latest_value_joins_until_it_is_too_old(tmp_path: Path, optional: bool):
    rest = LATEST.format(optional=f"optional = {str(optional).lower()}")
    top = 'join = { by = "latest", emit_on = "all", max_age_s = 0.5 }'
    adapter = wren(tmp_path, rest=rest, top=top, packet="size = 48")

    def pit(time_s: float, state: int) -> None:
        assert adapter.decode(struct.pack("<dB", time_s, state)) is None

    before = adapter.decode(doubles(0.2, time_s=1.0))
    assert before.on_pit_road is None if optional and before else before is None
    pit(1.1, 1)
    assert frame_of(adapter, doubles(0.2, time_s=1.2)).on_pit_road is True
    assert frame_of(adapter, doubles(0.2, time_s=1.5)).time_s == 1.5
    old = adapter.decode(doubles(0.2, time_s=1.7))
    assert old.on_pit_road is None if optional and old else old is None
    pit(1.8, 0)
    assert frame_of(adapter, doubles(0.2, time_s=1.9)).on_pit_road is False
    rewound = adapter.decode(doubles(0.2, time_s=0.1))
    assert rewound.on_pit_road is None if optional and rewound else rewound is None
    adapter.reset()


def test_overlapping_fields_and_states_and_inverted_flags(tmp_path: Path):
    more = (
        YAW_RATE
        + """
    { to = "lap", offset = 48, type = "u32" },
    { to = "fuel_kg", offset = 49, type = "u16", scale = 0.5 },
    { to = "in_car", offset = 48, type = "u8", invert = true },
    { to = "caution", offset = 48, type = "u32", mask = 0xff00, equals = 0x0200 },
    """
    )
    frame = frame_of(wren(tmp_path, more), doubles(0.2) + struct.pack("<I", 0x00010205))
    assert (frame.lap, frame.fuel_kg, frame.in_car, frame.caution) == (66053.0, 129.0, False, True)


def test_every_number_type_in_both_orders(tmp_path: Path):
    types = {"u8": "B", "u16": "H", "u32": "I", "u64": "Q", "i8": "b", "i16": "h", "i32": "i", "i64": "q", "f32": "f", "f64": "d"}  # fmt: skip # noqa: E501
    for name, code in types.items():
        value = -100 if name[0] != "u" else 100
        for order, mark in (("little", "<"), ("big", ">")):
            more = YAW_RATE + f'{{ to = "lateral_m", offset = 48, type = "{name}" }},'
            adapter = wren(tmp_path, more, packet=f'byte_order = "{order}"')
            packed = struct.pack(mark + "6d" + code, 1.0, 60.0, 11.0, 2.0, 100.0, 0.2, value)
            frame = frame_of(adapter, packed)
            assert (frame.lateral_m, frame.accel_y_mps2) == (value, 11.0)


def test_a_velocity_in_world_axes_without_attitude_gives_speed_only(tmp_path: Path):
    more = YAW_RATE + '{ to = "velocity", offset = 48, type = "f64", frame = "world" },'
    adapter = wren(tmp_path, more)
    frame = frame_of(adapter, doubles(0.2, 3.0, 4.0, 0.0))
    assert math.isnan(frame.vel_x_mps)
    assert "vel_x_mps" not in adapter.provides
    assert "only speed" in adapter.notes[0]


def test_speed_from_velocity_components(tmp_path: Path):
    adapter = rewritten(tmp_path, '"speed_mps"', '"vel_x_mps"')
    assert frame_of(adapter, doubles(0.2)).speed_mps == 60.0


@pytest.mark.parametrize(("side", "sign"), [("left", 1.0), ("right", -1.0)])
def test_directions_with_a_side_and_the_bodys_rotation_rate(tmp_path: Path, side: str, sign: float):
    more = f"""
    {{ to = "forward", offset = 40, type = "f64" }},
    {{ to = "{side}", offset = 64, type = "f64" }},
    {{ to = "rotation_rate", offset = 88, type = "f64", frame = "body" }},
    """
    adapter = wren(tmp_path, more)
    forward, left, _ = Rotation.from_euler("ZYX", [70, 3, -15], degrees=True).as_matrix().T
    packet = doubles(*forward, *(sign * left), 0.1, 0.2, 0.3)
    frame = frame_of(adapter, packet)
    assert frame.yaw_rate_radps == 0.3
    angles = (frame.yaw_rad, frame.pitch_rad, frame.roll_rad)
    assert angles == pytest.approx([math.radians(d) for d in (70, 3, -15)])
    no_side = doubles(*forward, math.nan, 0.0, 0.0, 0.1, 0.2, 0.3)
    assert math.isnan(frame_of(adapter, no_side).roll_rad)
    assert adapter.bad_fields == 0


def test_a_yaw_rate_cannot_be_derived_from_half_an_attitude(tmp_path: Path):
    angles = ("roll_rad", "pitch_rad", "yaw_rad")
    fields = (
        f'{{ to = "{name}", offset = {40 + 8 * i}, type = "f64" }},'
        for i, name in enumerate(angles)
    )
    adapter = wren(tmp_path, "".join(fields))
    with pytest.raises(DecodeError, match="no yaw rate can be derived"):
        adapter.decode(doubles(0.0, math.nan, 0.0))


def test_treads_and_laps_out_of_range_are_left_out_and_counted(tmp_path: Path):
    more = (
        YAW_RATE
        + """
    { to = "tire_tread", offset = 48, type = "f64", unit = "%" },
    { to = "lap", offset = 80, type = "f64" },
    """
    )
    adapter = wren(tmp_path, more)
    frame = frame_of(adapter, doubles(0.2, 100.4, 99.0, 50.0, -0.2, 2.5))
    assert frame.tire_tread == (1.0, 0.99, 0.5, 0.0)
    assert math.isnan(frame.lap)
    assert adapter.bad_fields == 1
    assert frame_of(adapter, doubles(0.2, 140.0, 99.0, 50.0, 0.0, 2.0)).tire_tread is None
    assert adapter.bad_fields == 2


# --- layouts that are wrong -------------------------------------------------------------------


def test_a_layout_must_be_named(tmp_path: Path):
    with pytest.raises(ConfigError, match="needs a layout file: --layout"):
        PackedAdapter()
    with pytest.raises(ConfigError, match=r"none\.toml: cannot be read"):
        PackedAdapter(PackedOptions(layout=tmp_path / "none.toml"))


@pytest.mark.parametrize(
    ("field", "match"),
    [
        ('to = "speed_kmh", offset = 48, type = "f64"', "did you mean 'speed_mps'"),
        ('to = "lap", ofset = 48, type = "f64"', "unknown key .*did you mean 'offset'"),
        ('to = "lap", offset = 48, type = "f16"', "type"),
        ('to = "lap", type = "f64"', "give offset or offsets"),
        ('to = "lap", offset = 57, type = "f64"', "'lap' ends at byte 65, beyond .* size of 64"),
        ('to = "lap", offset = -1, type = "u8"', "offset"),
        ('to = "lap", offset = 48, type = "u8", sign = 2', "sign"),
        ('to = "lap", offset = 48, type = "f32", scale = nan', "scale"),
        ('to = "fuel_kg", offset = 48, type = "f64", unit = "pound"', "unknown unit 'pound'"),
        ('to = "fuel_kg", offset = 48, type = "f64", unit = "mph"', "measures speed, not mass"),
        ('to = "time_s", offset = 48, type = "f64"', "'time_s' is given twice"),
        ('to = "in_car", offset = 48, type = "u8", scale = 2', "apply to numbers only"),
        ('to = "in_car", offset = 48, type = "f32", mask = 1', "mask needs a whole number"),
        ('to = "lap", offset = 48, type = "u8", mask = 1', "mask does not apply here"),
        ('to = "lap", offset = 48, type = "text", length = 4', "text cannot become a number"),
        ('to = "driver", offset = 48, type = "text"', "length goes with type"),
        ('to = "driver", offset = 48, type = "f32"', "only a text or a whole number"),
        ('to = "tire_tread", offset = 48, type = "f32", order = ["FL"]', "order must name FL"),
        ('to = "lap", offset = 48, type = "u8", order = ["FL"]', "order goes with four"),
        ('to = "tire_tread", offsets = [48, 52], type = "f32"', "offsets must be 4 numbers"),
        ('to = "velocity", offset = 48, type = "f32"', 'say frame = "body" or "world"'),
        ('to = "acceleration", offset = 48, type = "f32", frame = "world"', "needs an attitude"),
        ('to = "lap_fraction", offset = 48, type = "f32"', "needs lap_length_m"),
        ('to = "up", offset = 48, type = "f32"', "give 'forward' and one of"),
    ],
)
def test_a_wrong_field_is_named_with_file_and_key(tmp_path: Path, field: str, match: str):
    with pytest.raises(ConfigError, match=match) as caught:
        wren(tmp_path, YAW_RATE + "{ " + field + " }", packet="size = 64")
    assert "wren.toml" in str(caught.value)
    assert "\n" not in str(caught.value)


SECOND = """
[[packet]]
name = "{name}"
{how}
field = [{{ to = "lap", offset = 0, type = "u8" }}]
"""


@pytest.mark.parametrize(
    ("parts", "match"),
    [
        (
            {"more": YAW_RATE + '{ to = "lap", offset = 70000, type = "u8" }'},
            "70001 bytes are read",
        ),
        ({"more": ""}, "no field gives 'yaw_rate_radps', and no whole attitude"),
        ({"top": "[axes]\nworld = ['x', 'y', '-z']"}, "one is right-handed, the other left"),
        ({"top": "[axes]\nworld = ['x', 'y', 'y']"}, "x, y and z once each"),
        ({"top": "byte_order = 'middle'"}, "byte_order"),
        ({"top": "gravity_mps2 = 1.62"}, "gravity_mps2"),
        ({"packet": "optional = true"}, "all packets are optional"),
        ({"packet": "recognize = [{ offset = 0 }]"}, "give type and value, or hex, or text"),
        ({"packet": "recognize = [{ offset = 0, hex = 'xy' }]"}, "hex"),
        ({"packet": "recognize = [{ offset = 0, type = 'u8', value = 300 }]"}, "300 is no u8"),
        (
            {"packet": "size = 48\nrecognize = [{ offset = 47, hex = '00 00' }]"},
            "49 bytes are read, beyond its size of 48",
        ),
        ({"rest": SECOND.format(name="b", how="size = 2")}, "several packets need .join."),
        ({"rest": SECOND.format(name="all", how="size = 2")}, "two packets are named 'all'"),
        ({"rest": SECOND.format(name="b", how="")}, "'all' and 'b' cannot be told apart"),
        (
            {"rest": SECOND.format(name="b", how="size = 2"), "top": "join = { by = 'counter' }"},
            "join by counter needs its counter",
        ),
        (
            {"rest": SECOND.format(name="b", how="size = 2"), "top": "join = { by = 'latest' }"},
            "join.emit_on must name a packet",
        ),
    ],
)
def test_a_wrong_layout_is_refused_in_one_line(tmp_path: Path, parts: dict[str, str], match: str):
    with pytest.raises(ConfigError, match=match) as caught:
        wren(tmp_path, **parts)  # type: ignore[arg-type]
    assert "wren.toml" in str(caught.value)
    assert "\n" not in str(caught.value)


NEEDS = {
    "time_s": "no field gives 'time_s'",
    "speed_mps": "no field gives 'speed_mps' or 'velocity'",
    "accel_y_mps2": "no field gives 'accel_y_mps2' or 'acceleration'",
    "station_m": "no field gives 'station_m', 'lap_fraction' or 'position'",
}


@pytest.mark.parametrize("name", NEEDS)
def test_a_layout_must_give_what_a_frame_needs(tmp_path: Path, name: str):
    with pytest.raises(ConfigError, match=NEEDS[name]):
        rewritten(tmp_path, name, "lateral_m")


def rewritten(folder: Path, old: str, new: str) -> PackedAdapter:
    """Take the base layout with one piece of its text replaced."""
    wren(folder)
    path = folder / "wren.toml"
    path.write_text(path.read_text(encoding="utf-8").replace(old, new), encoding="utf-8")
    return PackedAdapter(PackedOptions(layout=path))


@pytest.mark.parametrize(
    ("more", "match"),
    [
        (
            '{ to = "quaternion", offset = 48, type = "f32" },'
            '{ to = "roll_rad", offset = 48, type = "f32" }',
            "the attitude is given twice",
        ),
        (
            '{ to = "forward", offset = 48, type = "f32" },'
            '{ to = "up", offset = 48, type = "f32" },'
            '{ to = "left", offset = 48, type = "f32" }',
            "give 'forward' and one of",
        ),
    ],
)
def test_an_attitude_is_given_once_and_whole(tmp_path: Path, more: str, match: str):
    with pytest.raises(ConfigError, match=match):
        wren(tmp_path, YAW_RATE + more)


def test_sizes_tell_packets_apart_whichever_is_open_ended(tmp_path: Path):
    join = "join = { by = 'latest', emit_on = 'all' }"
    small = SECOND.format(name="b", how="size = 2\noptional = true")
    assert wren(tmp_path, rest=small, top=join).decode(doubles(0.2)) is not None
    open_ended = SECOND.format(name="b", how="").replace("offset = 0", "offset = 60")
    apart = wren(tmp_path, rest=open_ended, top=join, packet="size = 48")
    assert apart.decode(bytes(60)) is None
    assert apart.decode(bytes(61)) is None


def test_gravity_must_be_said(tmp_path: Path):
    path = tmp_path / "wren.toml"
    text = (CONFIGS / "layout-single.toml").read_text(encoding="utf-8")
    path.write_text(text.replace("accelerations_include_gravity = true", ""), encoding="utf-8")
    with pytest.raises(ConfigError, match="accelerations_include_gravity must be true or false"):
        PackedAdapter(PackedOptions(layout=path))
