"""The picture as a list: it fits the strip, it is legible, and it says what the scene says."""

from dataclasses import replace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from canticle_daemon.messages import TrackView
from canticle_overlay.palette import (
    GROUND,
    ORANGE,
    PANEL,
    RULE,
    SHAPE_CONTRAST,
    TEXT_CONTRAST,
    contrast,
)
from canticle_overlay.state import Pass, Ribbon, Scene
from canticle_overlay.view import (
    COLUMNS,
    HEIGHT,
    PINS,
    WIDTH,
    Line,
    Polygon,
    Rect,
    Shape,
    Text,
    result_text,
    size,
)
from canticle_overlay.view import (
    draw as draw_parts,
)


def draw(scene: Scene, scale: float = 1.0) -> tuple[Shape, ...]:
    return tuple(shape for part in draw_parts(scene, scale) for shape in part.shapes)


@pytest.fixture
def scene(track: TrackView) -> Scene:
    passes = tuple(Pass(90.0 - 4 * age, "late", -10.0 + age, 0.7) for age in range(5))
    demand = tuple(((2450 + 2.0 * step) % 2500, 0.004 * step) for step in range(200))
    return Scene(
        condition="live",
        lap=12,
        ribbon=Ribbon(track.corners[0], track.length_m, passes, demand),
        front=0.8,
        rear=0.6,
        energy_j=(1e4, 2e4, 1e4, 2e4),
        last_lap_j=(2e4, 4e4, 2e4, 3e4),
    )


def points(shape: Shape) -> list[tuple[int, int]]:
    match shape:
        case Rect(left, top, width, height):
            return [(left, top), (left + width, top + height)]
        case Text(x, top):
            return [(x, top), (x, top + shape.size)]
        case Line() | Polygon():
            return list(shape.points)


def texts(shapes: tuple[Shape, ...]) -> list[str]:
    return [shape.text for shape in shapes if isinstance(shape, Text)]


def test_everything_is_inside_the_strip(scene: Scene) -> None:
    for shape in draw(scene):
        for x, y in points(shape):
            assert 0 <= x <= WIDTH
            assert 0 <= y <= HEIGHT


@pytest.mark.parametrize("scale", [0.75, 1.0, 1.37, 3.0])
def test_the_parts_cover_the_strip_and_keep_to_themselves(scene: Scene, scale: float) -> None:
    edge = 0
    for part in draw_parts(scene, scale):
        assert part.left == edge
        edge += part.width
        for shape in part.shapes:
            assert all(part.left <= x <= edge for x, _ in points(shape))
    assert edge == size(scale)[0]


def test_only_the_columns_change_with_the_grip_used(scene: Scene) -> None:
    before, after = draw_parts(scene), draw_parts(replace(scene, front=0.3))
    assert [one == other for one, other in zip(before, after, strict=True)] == [True, False, True]


@pytest.mark.parametrize("condition", ["no data", "bad data", "learning", "live"])
@pytest.mark.parametrize("cue", ["", "late"])
def test_text_and_shapes_stand_out_from_the_panel(scene: Scene, condition: str, cue: str) -> None:
    # WCAG 2.2: 4.5:1 for text (1.4.3), 3:1 for what must be seen that is no text (1.4.11).
    shapes = draw(replace(scene, condition=condition, cue=cue, saturated=True))  # type: ignore[arg-type]
    for shape in shapes:
        if isinstance(shape, Text):
            assert contrast(shape.color, PANEL) >= TEXT_CONTRAST
        elif shape.color not in (PANEL, RULE, GROUND):
            assert contrast(shape.color, PANEL) >= SHAPE_CONTRAST


def test_text_is_large_enough(scene: Scene) -> None:
    # ISO 15008: at least 12 arc minutes. At 0.7 m and 96 dpi (from memory) that is 9.2 px of
    # capital height, which is 0.73 of the size in the font used.
    smallest = min(shape.size for shape in draw(scene) if isinstance(shape, Text))
    assert 0.73 * smallest >= 9.2


def test_pins_fade_and_shrink_with_age(scene: Scene) -> None:
    shapes = draw(scene)
    pins = [
        shape
        for shape in shapes
        if isinstance(shape, Line) and len(shape.points) == 2 and shape.color[2] < shape.color[0]
    ]
    assert len(pins) == len(PINS) == 5
    oldest_first = [contrast(pin.color, PANEL) for pin in pins]
    assert oldest_first == sorted(oldest_first)
    heights = [pin.points[0][1] - pin.points[1][1] for pin in pins]
    assert heights == sorted(heights)
    assert len(set(heights)) == 5, "age can be told without color"


def test_a_later_turn_in_stands_further_right(scene: Scene) -> None:
    def newest_x(turn_in_m: float) -> int:
        assert scene.ribbon is not None
        ribbon = replace(scene.ribbon, passes=(Pass(turn_in_m, "on", 0.0, 0.5),))
        diamonds = [
            shape
            for shape in draw(replace(scene, ribbon=ribbon))
            if isinstance(shape, Polygon) and len(shape.points) == 4
        ]
        return diamonds[0].points[0][0]

    # Either side of the start line, which this corner's entry crosses.
    assert newest_x(2480.0) < newest_x(20.0) < newest_x(110.0)


def test_turn_ins_outside_the_ribbon_are_not_drawn(scene: Scene) -> None:
    assert scene.ribbon is not None
    away = replace(scene.ribbon, passes=(Pass(1500.0, "late", -9.0, 0.5),), demand=())
    none = replace(scene.ribbon, passes=(Pass(None, "late", -9.0, 0.5),), demand=())
    assert draw(replace(scene, ribbon=away)) == draw(replace(scene, ribbon=none))


@pytest.mark.parametrize(("turn_in_m", "x", "tip"), [(2400.0, 16, 8), (440.0, 516, 524)])
def test_a_turn_in_just_outside_is_an_arrow_at_the_edge(
    scene: Scene, turn_in_m: float, x: int, tip: int
) -> None:
    assert scene.ribbon is not None
    ribbon = replace(scene.ribbon, passes=(Pass(turn_in_m, "early", 90.0, 0.5),))
    arrows = [
        shape
        for shape in draw(replace(scene, ribbon=ribbon))
        if isinstance(shape, Polygon) and len(shape.points) == 3 and shape.color == ORANGE
    ]
    assert [[at for at, _ in arrow.points] for arrow in arrows] == [[x, tip, x]]


def column_heights(scene: Scene) -> list[int]:
    left, _, width, _ = COLUMNS
    return [
        shape.height
        for shape in draw(scene)
        if isinstance(shape, Rect) and left <= shape.left < left + width
    ]


def test_columns_rise_with_the_grip_used(scene: Scene) -> None:
    low = column_heights(replace(scene, front=0.2, rear=0.2))
    high = column_heights(replace(scene, front=0.9, rear=0.4))
    assert high[0] > low[0]
    assert high[1] == pytest.approx(2 * low[1], abs=1)
    full = column_heights(replace(scene, front=1.0, rear=0.0))[0]
    limit = next(
        shape
        for shape in draw(scene)
        if isinstance(shape, Line) and shape.points[0][0] == COLUMNS[0] - 6
    )
    assert COLUMNS[1] + COLUMNS[3] - full == limit.points[0][1]


def test_unknown_columns_are_empty_and_say_so(scene: Scene) -> None:
    empty = replace(scene, front=None, rear=None)
    assert column_heights(empty) == []
    assert texts(draw(empty)).count("–") == 2


def test_the_limit_is_named_in_words(scene: Scene) -> None:
    assert "limit" in texts(draw(scene))
    assert "at the limit" in texts(draw(replace(scene, saturated=True)))


@pytest.mark.parametrize(
    ("condition", "detail", "words"),
    [
        ("no data", "", "No data"),
        ("no data", "datagrams come, but are bad", "No data: datagrams come, but are bad"),
        ("bad data", "", "Bad data"),
        ("learning", "no track yet", "Learning: no track yet"),
    ],
)
def test_the_state_is_written_out(scene: Scene, condition: str, detail: str, words: str) -> None:
    changed = replace(scene, condition=condition, detail=detail)  # type: ignore[arg-type]
    assert words in texts(draw(changed))


def test_without_data_no_old_number_is_left(scene: Scene) -> None:
    dark = Scene("no data", ribbon=scene.ribbon and replace(scene.ribbon, demand=()))
    said = " ".join(texts(draw(dark)))
    assert "late" not in said
    assert "lap" not in said


def test_results_in_words() -> None:
    assert result_text(Pass(1.0, "late", -12.4, 0.713)) == "12 m late, peak demand 0.71"
    assert result_text(Pass(1.0, "early", 33.0, None)) == "33 m early"
    assert result_text(Pass(1.0, "on", 6.0, None)) == "on, 6 m before the mark"
    assert result_text(Pass(1.0, "on", -3.0, None)) == "on, 3 m after the mark"
    assert result_text(Pass(None, "not judged", None, 0.5)) == "not judged, peak demand 0.50"


def test_a_cue_takes_the_place_of_the_result(scene: Scene) -> None:
    said = texts(draw(replace(scene, cue="One, ten late.")))
    assert "One, ten late." in said
    assert not any("peak demand" in text for text in said)


def test_a_cue_does_not_hide_that_the_data_are_bad(scene: Scene) -> None:
    assert "Bad data · late" in texts(draw(replace(scene, condition="bad data", cue="late")))


def test_a_track_without_a_profile_is_drawn_too(scene: Scene, track: TrackView) -> None:
    bare = track.corners[0]
    bare.profile = ()
    shapes = draw(replace(scene, ribbon=Ribbon(bare, track.length_m)))
    assert "the corners are not known yet" in texts(shapes)


@pytest.mark.parametrize("scale", [0.75, 1.5, 3.0])
def test_scaling_keeps_the_number_of_shapes_and_the_bounds(scene: Scene, scale: float) -> None:
    shapes = draw(scene, scale)
    assert len(shapes) == len(draw(scene))
    width, height = size(scale)
    for shape in shapes:
        for x, y in points(shape):
            assert -1 <= x <= width + 1
            assert -1 <= y <= height + 1


maybe = st.none() | st.floats(0, 1e7)


@settings(max_examples=60, deadline=None)
@given(
    front=st.none() | st.floats(0, 5),
    energy=st.tuples(*(maybe,) * 4),
    last=st.tuples(*(maybe,) * 4),
)
def test_any_numbers_stay_inside(
    front: float | None,
    energy: tuple[float | None, ...],
    last: tuple[float | None, ...],
) -> None:
    shapes = draw(Scene("live", front=front, energy_j=energy, last_lap_j=last))
    for shape in shapes:
        for x, y in points(shape):
            assert 0 <= x <= WIDTH
            assert 0 <= y <= HEIGHT
