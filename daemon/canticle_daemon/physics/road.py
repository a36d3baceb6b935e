"""The road's frame: what a banked surface asks of a car and what an accelerometer feels on it.

Axes are ISO 8855 (x forward, y left, z along the road's normal). Two measures of the same
angle are used and the arguments' names tell them apart::

    roll_rad   ISO road roll φ, positive left side up: negative on a bank that helps a left turn
    bank_rad   β, positive toward the turn: the track file's sign; φ = −side·β

The highway relation, demand = v²/(gR) − tan β, is left out on purpose. It drops the
denominator 1 + v²/(gR)·tan β, which is all but 1 on a road and 1.5 on an oval, so that it
overstates the demand there by half.

Every function is elementwise, takes floats or arrays, and gives NaN for NaN.
"""

from __future__ import annotations

from typing import TypeAlias

import numpy as np

from canticle_daemon.frame import FloatArray

Values: TypeAlias = FloatArray | float
"""A number or an array of numbers."""

GRAVITY_MPS2 = 9.81
"""What an accelerometer at rest on level ground reads (public contract)."""
_NEWTON_STEPS = 2
_LEAST_SLOPE = 0.2


def neutral_speed_mps(
    radius_m: Values, bank_rad: Values, gravity_mps2: float = GRAVITY_MPS2
) -> FloatArray:
    """Return the speed at which a bank carries the whole turn and the tires no side force.

    Parameters
    ----------
    radius_m
        Radius of the path in plan.
    bank_rad
        Bank, positive toward the turn.
    gravity_mps2
        Standard gravity; textbooks differ in it.

    Returns
    -------
    array
        √(g·R·tan β); NaN where the bank is adverse, since no speed is neutral there.

    Examples
    --------
    >>> float(neutral_speed_mps(100.0, np.radians(65.0), gravity_mps2=9.80).round(1))
    45.8
    """
    square = gravity_mps2 * np.asarray(radius_m) * np.tan(bank_rad)
    speed: FloatArray = np.sqrt(np.where(square >= 0.0, square, np.nan))
    return speed


def side_demand_steady(
    speed_mps: Values,
    curvature_1pm: Values,
    bank_rad: Values,
    gravity_mps2: float = GRAVITY_MPS2,
) -> FloatArray:
    """Return side force over normal force in steady motion without aerodynamic force.

    Parameters
    ----------
    speed_mps
        Speed.
    curvature_1pm
        Curvature of the path in plan, positive toward the side to which the bank is positive.
    bank_rad
        Bank.
    gravity_mps2
        Standard gravity.

    Returns
    -------
    array
        (k − tan β)/(1 + k·tan β) with k = v²κ/g: positive where the tires push toward the
        turn, zero at the neutral speed, negative below it.

    Notes
    -----
    The "basic curve formula" of A Policy on Geometric Design of Highways and Streets (AASHTO;
    from memory), without the simplification that the same book goes on to make.
    """
    pull = np.square(speed_mps) * curvature_1pm / gravity_mps2
    slope = np.tan(bank_rad)
    demand: FloatArray = (pull - slope) / (1.0 + pull * slope)
    return demand


def bank_from_side_force(
    accel_y_mps2: Values, speed_mps: Values, yaw_rate_radps: Values
) -> FloatArray:
    """Return the roll of the vehicle axes from side force, speed and yaw rate alone.

    Parameters
    ----------
    accel_y_mps2
        Lateral specific force.
    speed_mps
        Forward speed.
    yaw_rate_radps
        Yaw rate about the vehicle's z axis.

    Returns
    -------
    array
        ISO roll φ = asin((f_y − v·r)/g), held at ±π/2. It is the road's where the body does
        not roll against the road.

    Notes
    -----
    The static estimate of H. E. Tseng, Vehicle System Dynamics 36:307-328, 2001 (from memory).
    It leaves out the rate of side velocity, and 1 m/s² of that reads as 6° of bank. A car that is
    being turned in or corrected has ±3 m/s² of it, so only steady motion is to be trusted, or
    an average over many corrections, or a stream whose side velocity is known.
    """
    sine = (np.asarray(accel_y_mps2) - speed_mps * np.asarray(yaw_rate_radps)) / GRAVITY_MPS2
    roll: FloatArray = np.arcsin(np.clip(sine, -1.0, 1.0))
    return roll


def bank_from_specific_force(
    accel_y_mps2: Values, accel_z_mps2: Values, speed_mps: Values, yaw_rate_radps: Values
) -> FloatArray:
    """Return the roll of the vehicle axes from both cross-axis specific forces.

    Parameters
    ----------
    accel_y_mps2, accel_z_mps2
        Lateral and normal specific force.
    speed_mps
        Forward speed.
    yaw_rate_radps
        Yaw rate about the vehicle's z axis.

    Returns
    -------
    array
        ISO roll φ, exact in steady motion for |φ| up to 60°.

    Notes
    -----
    In steady motion atan2(f_y, f_z) = φ + atan(v·ψ̇/g) with ψ̇ = r/cos φ the heading rate in
    plan, which leads to a quartic in tan(φ/2). Two Newton steps are taken instead, from
    `bank_from_side_force`: in steady motion that start is already the root, and from a start
    that noise puts 0.1 rad away two steps come within 1e-4 rad of it.

    Conditioning. Steady motion also gives f_y − v·r = g·sin φ, which needs no f_z. At a 20° bank
    and 1.5 g of centripetal acceleration one m/s² of noise in f_y costs 6.2° there and 3.1° here,
    and a wrong v·r 6.2° there and 2.3° here: in the steady corner this estimate is the better
    one. Not so in the transition, where f_z also carries the rise and fall of the surface under
    a car beside its axis: 4 m/s² of it reads as 8° to 11° of bank here and as nothing there.
    """
    side_speed = np.asarray(speed_mps) * np.asarray(yaw_rate_radps)
    total = np.arctan2(accel_y_mps2, accel_z_mps2)
    roll = bank_from_side_force(accel_y_mps2, speed_mps, yaw_rate_radps)
    for _ in range(_NEWTON_STEPS):
        upright = GRAVITY_MPS2 * np.cos(roll)
        excess = roll + np.arctan2(side_speed, upright) - total
        tilt = GRAVITY_MPS2 * np.sin(roll) * side_speed
        square = np.maximum(upright * upright + side_speed * side_speed, _LEAST_SLOPE)
        roll = roll - excess / np.maximum(1.0 + tilt / square, _LEAST_SLOPE)
    return roll


def ribbon_rates(
    heading_rate_1pm: Values,
    slope_rad: Values,
    roll_rad: Values,
    roll_rate_1pm: Values,
    slope_rate_1pm: Values,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return how fast the road's frame turns about its own axes per meter of its spine.

    Parameters
    ----------
    heading_rate_1pm
        Change of heading per meter of spine.
    slope_rad
        Slope, positive downhill (ISO pitch).
    roll_rad
        Roll of the surface.
    roll_rate_1pm, slope_rate_1pm
        Their changes per meter of spine.

    Returns
    -------
    three arrays
        Ω_x, Ω_y, Ω_z in rad/m.

    Notes
    -----
    From the rotation Rz(heading)·Ry(slope)·Rx(roll): G. Perantoni, D. J. N. Limebeer, ASME J.
    Dyn. Sys. Meas. Control 137(5), 2015, as restated by later open research code.
    """
    level = heading_rate_1pm * np.cos(slope_rad)
    sine, cosine = np.sin(roll_rad), np.cos(roll_rad)
    return (
        roll_rate_1pm - heading_rate_1pm * np.sin(slope_rad),
        slope_rate_1pm * cosine + level * sine,
        level * cosine - slope_rate_1pm * sine,
    )


def normal_specific_force(
    roll_rad: Values,
    roll_rate_radps: Values,
    roll_acceleration_radps2: Values,
    offset_m: Values,
    offset_rate_mps: Values,
    offset_acceleration_mps2: Values,
    speed_mps: Values,
    heading_rate_radps: Values,
    vertical_acceleration_mps2: Values = 0.0,
) -> FloatArray:
    """Return the specific force along the road's normal, transition included.

    Parameters
    ----------
    roll_rad, roll_rate_radps, roll_acceleration_radps2
        ISO roll φ of the surface under the car and its time derivatives along the path.
    offset_m, offset_rate_mps, offset_acceleration_mps2
        The car's distance from the axis about which the surface turns, measured in the surface,
        positive left, and its time derivatives.
    speed_mps
        Speed in plan.
    heading_rate_radps
        Heading rate of the path (not of the road) in plan, so that speed times it is the
        horizontal acceleration to the left.
    vertical_acceleration_mps2
        Vertical acceleration of the axis itself along the path, positive up.

    Returns
    -------
    array
        f_z = cos φ·(g + z̈) − sin φ·v·ψ̇, with z the height of the car on the surface.

    Notes
    -----
    z = n·sin φ above the axis, hence z̈ = n̈·sin φ + 2ṅφ̇·cos φ + nφ̈·cos φ − nφ̇²·sin φ. The car's
    heading and the slope of the surface along the path are taken as small against the axis.
    """
    rise = surface_rise_mps2(
        roll_rad, roll_rate_radps, roll_acceleration_radps2,
        offset_m, offset_rate_mps, offset_acceleration_mps2,
    )  # fmt: skip
    upward = GRAVITY_MPS2 + rise + vertical_acceleration_mps2
    inward = speed_mps * np.asarray(heading_rate_radps)
    force: FloatArray = np.cos(roll_rad) * upward - np.sin(roll_rad) * inward
    return force


def lateral_specific_force(
    roll_rad: Values,
    roll_rate_radps: Values,
    roll_acceleration_radps2: Values,
    offset_m: Values,
    offset_rate_mps: Values,
    offset_acceleration_mps2: Values,
    speed_mps: Values,
    heading_rate_radps: Values,
    vertical_acceleration_mps2: Values = 0.0,
) -> FloatArray:
    """Return the specific force to the left in the road's plane, transition included.

    Parameters
    ----------
    roll_rad, roll_rate_radps, roll_acceleration_radps2
        As for `normal_specific_force`.
    offset_m, offset_rate_mps, offset_acceleration_mps2
        As for `normal_specific_force`.
    speed_mps, heading_rate_radps, vertical_acceleration_mps2
        As for `normal_specific_force`.

    Returns
    -------
    array
        f_y = sin φ·(g + z̈) + cos φ·v·ψ̇.
    """
    rise = surface_rise_mps2(
        roll_rad, roll_rate_radps, roll_acceleration_radps2,
        offset_m, offset_rate_mps, offset_acceleration_mps2,
    )  # fmt: skip
    upward = GRAVITY_MPS2 + rise + vertical_acceleration_mps2
    inward = speed_mps * np.asarray(heading_rate_radps)
    force: FloatArray = np.sin(roll_rad) * upward + np.cos(roll_rad) * inward
    return force


def surface_rise_mps2(
    roll_rad: Values,
    roll_rate_radps: Values,
    roll_acceleration_radps2: Values,
    offset_m: Values,
    offset_rate_mps: Values,
    offset_acceleration_mps2: Values,
) -> FloatArray:
    """Return the vertical acceleration of a car that rides on a surface which turns under it.

    Parameters
    ----------
    roll_rad, roll_rate_radps, roll_acceleration_radps2
        As for `normal_specific_force`.
    offset_m, offset_rate_mps, offset_acceleration_mps2
        As for `normal_specific_force`.

    Returns
    -------
    array
        The second time derivative of n·sin φ, positive up.
    """
    along = 2.0 * np.asarray(offset_rate_mps) * roll_rate_radps
    along = along + np.asarray(offset_m) * roll_acceleration_radps2
    across = np.asarray(offset_acceleration_mps2) - np.asarray(offset_m) * np.square(
        roll_rate_radps
    )
    rise: FloatArray = np.cos(roll_rad) * along + np.sin(roll_rad) * across
    return rise


def normal_from_side_force(
    accel_y_mps2: Values, roll_rad: Values, rise_mps2: Values = 0.0
) -> FloatArray:
    """Return the normal specific force that goes with a side force on a known roll.

    Parameters
    ----------
    accel_y_mps2
        Lateral specific force, in the axes that have the roll.
    roll_rad
        ISO roll of those axes against the world: the road's, or the body's own.
    rise_mps2
        Vertical acceleration, positive up.

    Returns
    -------
    array
        f_z = (g + z̈ − f_y·sin φ)/cos φ, along the z of the same axes.

    Notes
    -----
    The vertical part of the force is f_z·cos φ + f_y·sin φ and carries g + z̈. Neither speed nor
    path curvature is needed: what the path does is in f_y already, side velocity included.
    """
    upward = GRAVITY_MPS2 + np.asarray(rise_mps2)
    force: FloatArray = (upward - accel_y_mps2 * np.sin(roll_rad)) / np.cos(roll_rad)
    return force
