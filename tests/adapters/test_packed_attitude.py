"""Attitudes against scipy.spatial.transform.Rotation, which shares no code with ours."""

import math

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from canticle_adapters.attitude import (
    AxisMap,
    angles_of,
    from_angles,
    from_directions,
    from_quaternion,
    to_body,
    turn_about_up,
)

SEED = 20
SOME = [Rotation.random(random_state=SEED + i) for i in range(25)]
SAME = AxisMap.parse(["x", "y", "z"])
LEFT_WORLD = AxisMap.parse(["x", "z", "y"])
LEFT_BODY = AxisMap.parse(["z", "-x", "y"])
RIGHT_BODY = AxisMap.parse(["x", "-y", "-z"])


def matrix_of(axes: AxisMap) -> np.ndarray:
    """The same map as a matrix, built another way: by where each of their axes goes."""
    return np.column_stack([axes.map(axis) for axis in np.eye(3).tolist()])


def wxyz(rotation: Rotation) -> tuple[float, ...]:
    x, y, z, w = rotation.as_quat()
    return float(w), float(x), float(y), float(z)


@pytest.mark.parametrize("rotation", SOME)
def test_angles_and_matrix_agree(rotation: Rotation):
    yaw, pitch, roll = rotation.as_euler("ZYX")
    np.testing.assert_allclose(from_angles(roll, pitch, yaw), rotation.as_matrix(), atol=1e-12)
    got = angles_of(from_angles(roll, pitch, yaw))
    np.testing.assert_allclose(got, (roll, pitch, yaw), atol=1e-9)


def test_signs_are_those_of_the_frame():
    left_side_up = from_angles(math.radians(20), 0.0, 0.0)
    assert left_side_up[2][1] > 0.3  # the left direction points up
    nose_down = from_angles(0.0, math.radians(20), 0.0)
    assert nose_down[2][0] < -0.3  # the forward direction points down
    to_the_left = from_angles(0.0, 0.0, math.radians(90))
    assert to_the_left[1][0] == pytest.approx(1.0)  # forward is the world's y


@pytest.mark.parametrize("rotation", SOME)
@pytest.mark.parametrize(
    ("world", "body"), [(SAME, SAME), (SAME, RIGHT_BODY), (LEFT_WORLD, LEFT_BODY)]
)
def test_a_quaternion_in_any_axes_gives_the_same_attitude(
    rotation: Rotation, world: AxisMap, body: AxisMap
):
    ours = rotation.as_matrix()
    theirs = Rotation.from_matrix(matrix_of(world).T @ ours @ matrix_of(body))
    got = from_quaternion(wxyz(theirs), world, body)
    np.testing.assert_allclose(got, ours, atol=1e-12)
    longer = tuple(1.5 * part for part in wxyz(theirs.inv()))
    got = from_quaternion(longer, world, body, inverse=True)
    np.testing.assert_allclose(got, ours, atol=1e-12)


@pytest.mark.parametrize("rotation", SOME[:8])
def test_directions_give_the_attitude_even_when_not_quite_square(rotation: Rotation):
    forward, left, up = (tuple(column) for column in rotation.as_matrix().T.tolist())
    ours = rotation.as_matrix()
    np.testing.assert_allclose(from_directions(forward, left, side_is_up=False), ours, atol=1e-12)
    leaning = tuple(3.0 * u + 0.2 * f for u, f in zip(up, forward, strict=True))
    np.testing.assert_allclose(from_directions(forward, leaning, side_is_up=True), ours, atol=1e-12)


def test_what_is_no_attitude_gives_none():
    for four in ((0.0,) * 4, (1e-3, 0, 0, 0), (5.0, 5, 5, 5)):
        assert from_quaternion(four, SAME, SAME) is None
    zero, x = (0.0, 0.0, 0.0), (1.0, 0.0, 0.0)
    for up in (True, False):
        assert from_directions(x, x, side_is_up=up) is None
        assert from_directions(zero, x, side_is_up=up) is None
        assert from_directions(x, zero, side_is_up=up) is None
        assert from_directions(x, (math.inf, 0.0, 0.0), side_is_up=up) is None


@pytest.mark.parametrize("first", SOME[:8])
def test_the_turn_between_two_attitudes_is_the_rotation_vectors_z(first: Rotation):
    for size in (1e-9, 1e-4, 0.02, 0.5, 2.5):
        step = Rotation.from_rotvec(size * np.array([0.3, -0.4, math.sqrt(0.75)]))
        second = first * step
        before, after = (
            tuple(tuple(row) for row in one.as_matrix().tolist()) for one in (first, second)
        )
        assert turn_about_up(before, after) == pytest.approx(
            step.as_rotvec()[2], abs=1e-15, rel=1e-6
        )


def test_a_vector_of_the_world_in_vehicle_axes():
    for rotation in SOME:
        rows = tuple(tuple(row) for row in rotation.as_matrix().tolist())
        expected = rotation.inv().apply([1.0, -2.0, 3.0])
        np.testing.assert_allclose(to_body(rows, (1.0, -2.0, 3.0)), expected, atol=1e-12)


def test_a_rotation_rate_turns_over_with_the_handedness():
    # A left-handed sender turning left about its up axis (y) counts that as negative.
    assert LEFT_BODY.map_rate((0.0, -0.25, 0.0)) == (0.0, 0.0, 0.25)
    assert LEFT_BODY.handedness == LEFT_WORLD.handedness == -1.0
    assert SAME.handedness == RIGHT_BODY.handedness == 1.0
    assert matrix_of(LEFT_BODY) == pytest.approx(np.array([[0, 0, 1], [-1, 0, 0], [0, 1, 0]]))


@pytest.mark.parametrize("axes", [["x", "y"], ["x", "x", "z"], ["x", "y", "w"], ["x", "--y", "z"]])
def test_axes_that_do_not_make_sense_are_refused(axes: list[str]):
    with pytest.raises(ValueError, match="x, y and z once each"):
        AxisMap.parse(axes)
