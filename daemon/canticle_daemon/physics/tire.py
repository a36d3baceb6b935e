"""The brush tire with parabolic pressure and constant friction, and what its sliding costs.

With z = tan α, C the cornering stiffness, μ the friction, F_z the load and
ψ = C|z|/(3μF_z), the side force is μF_z·(1 − (1 − ψ)³) up to full sliding at ψ = 1. That cubic
has a closed inverse, so the slip follows from the force without iteration:
tan α = (3μF_z/C)·(1 − (1 − u)^⅓), u = F/(μF_z). Combined slip is taken as isotropic: the
force is the length of the tangential force and the slip the total slip.

Sources: E. Fiala, VDI-Zeitschrift 96(29):973-979, 1954; H. B. Pacejka, Tire and Vehicle
Dynamics, 3rd ed. 2012, chapter 3 (both from memory).

Every function is elementwise, takes floats or arrays, and gives NaN for NaN.
"""

from __future__ import annotations

from typing import TypeAlias

import numpy as np

from canticle_daemon.frame import FloatArray
from canticle_daemon.physics.car import TireFile

Values: TypeAlias = FloatArray | float
"""A number or an array of numbers."""

MAX_UTILIZATION = 0.999
"""Utilization is held here: nearer to 1 the inverse asks for more slip than a force can tell."""
LEAST_FRICTION_SHARE = 0.1
"""Load sensitivity never takes peak friction below this share of its reference value."""
_LEAST_GRIP_N = 1e-6
_LEAST_UTILIZATION = 1e-300


def peak_friction(tire: TireFile, load_n: Values) -> FloatArray:
    """Return the peak friction at a load, falling or rising linearly with it.

    Parameters
    ----------
    tire
        The ``[tire]`` table of the car file.
    load_n
        Load of the wheel.

    Returns
    -------
    array
        Peak friction, never under a tenth of ``tire.peak_friction``.

    Examples
    --------
    >>> float(peak_friction(TireFile(peak_friction=1.3, load_sensitivity=-0.1), 8000.0).round(6))
    1.17
    """
    relative = np.asarray(load_n) / tire.reference_load_n - 1.0
    share = np.maximum(1.0 + tire.load_sensitivity * relative, LEAST_FRICTION_SHARE)
    friction: FloatArray = tire.peak_friction * share
    return friction


def brush_side_force_n(
    slip_angle_rad: Values, load_n: Values, friction: Values, stiffness_n_per_rad: Values
) -> FloatArray:
    """Return the side force of one tire in pure side slip.

    Parameters
    ----------
    slip_angle_rad
        Slip angle as ISO 8855, within ±π/2: positive gives a negative (rightward) force.
    load_n
        Load; a tire without load gives no force.
    friction
        Peak friction at this load.
    stiffness_n_per_rad
        Cornering stiffness at this load.

    Returns
    -------
    array
        Side force in N, positive left.
    """
    tangent = np.tan(slip_angle_rad)
    grip_n = np.asarray(friction) * np.maximum(load_n, 0.0)
    reach = stiffness_n_per_rad * np.abs(tangent) / (3.0 * np.maximum(grip_n, _LEAST_GRIP_N))
    psi = np.minimum(reach, 1.0)
    force: FloatArray = -np.sign(tangent) * grip_n * psi * (3.0 + psi * (psi - 3.0))
    return force


def slip_tangent(utilization: Values, friction: Values, stiffness_per_load: Values) -> FloatArray:
    """Return the tangent of the total slip angle that a utilization needs.

    Parameters
    ----------
    utilization
        Share of the available friction in use, 0 to 1.
    friction
        Peak friction.
    stiffness_per_load
        Cornering stiffness over load, 1/rad.

    Returns
    -------
    array
        Tangent of the slip angle, not negative: the inverse of `brush_side_force_n`.
    """
    full_sliding = 3.0 * np.asarray(friction) / stiffness_per_load
    tangent: FloatArray = full_sliding * _slip_share(utilization)
    return tangent


def utilization(force_n: Values, load_n: Values, tire: TireFile) -> FloatArray:
    """Return the share of the available friction that a tangential force uses.

    Parameters
    ----------
    force_n
        Tangential force; only its magnitude counts.
    load_n
        Load. Without load any force is all there is, and no force is none.
    tire
        The ``[tire]`` table of the car file.

    Returns
    -------
    array
        |force| / (peak friction × load), held at `MAX_UTILIZATION`.
    """
    return _used_share(force_n, peak_friction(tire, load_n) * load_n)


def sliding_power_w(
    force_n: Values,
    load_n: Values,
    speed_mps: Values,
    tire: TireFile,
    friction: FloatArray | None = None,
) -> FloatArray:
    """Return the power that one tire spends in sliding: force × speed × tan(slip).

    Parameters
    ----------
    force_n
        Tangential force; only its magnitude counts.
    load_n
        Load; a wheel without load spends nothing.
    speed_mps
        Speed along the wheel's plane.
    tire
        The ``[tire]`` table of the car file.
    friction
        Peak friction at this load, where it is known already.

    Returns
    -------
    array
        Power in W, not negative while driving forward.

    Notes
    -----
    Per meter this is μF_z·tan(α_sl)·u·(1 − (1 − u)^⅓), a proxy that compares laps, not
    millimeters of tread (A. Schallamach, D. M. Turner, Wear 3:1-25, 1960, give the square law
    of its small-force end; from memory).
    """
    if friction is None:
        friction = peak_friction(tire, load_n)
    used = _used_share(force_n, friction * load_n)
    tangent = slip_tangent(used, friction, tire.cornering_stiffness_per_load)
    loaded = np.asarray(load_n) > 0.0
    power: FloatArray = np.abs(force_n) * speed_mps * tangent * loaded
    return power


def friction_exponent(utilization: Values) -> FloatArray:
    """Return the local exponent with which force grows with friction at a given slip.

    Parameters
    ----------
    utilization
        Share of the available friction in use, 0 to below 1.

    Returns
    -------
    array
        d ln F/d ln μ = ψ·(1 − ⅔ψ)/(1 − ψ + ⅓ψ²) with ψ = 1 − (1 − u)^⅓: 0 where the tire
        hardly slides and stiffness alone counts, 1 where it slides all over.
    """
    psi = _slip_share(np.minimum(utilization, MAX_UTILIZATION))
    exponent: FloatArray = psi * (1.0 - psi * (2.0 / 3.0)) / (1.0 - psi + psi * psi / 3.0)
    return exponent


def wear_exponent(utilization: Values) -> FloatArray:
    """Return the local exponent with which sliding energy per meter grows with force.

    Parameters
    ----------
    utilization
        Share of the available friction in use, 0 to below 1.

    Returns
    -------
    array
        d ln E′/d ln u = 1 + (u/3)·(1 − u)^(−⅔)/(1 − (1 − u)^⅓): 2 at no force, 2.7 at three
        quarters, 3.6 at nine tenths.

    Examples
    --------
    >>> wear_exponent(np.array([0.0, 0.75, 0.9])).round(3).tolist()
    [2.0, 2.702, 3.599]
    """
    used = np.clip(utilization, _LEAST_UTILIZATION, MAX_UTILIZATION)
    root = np.cbrt(1.0 - used)
    exponent: FloatArray = 1.0 + used / (3.0 * root * root * _slip_share(used))
    return exponent


def _slip_share(utilization: Values) -> FloatArray:
    """1 − (1 − u)^⅓, written so that it keeps its digits where u is small."""
    share: FloatArray = -np.expm1(np.log1p(-np.asarray(utilization)) / 3.0)
    return share


def _used_share(force_n: Values, grip_n: Values) -> FloatArray:
    share: FloatArray = np.abs(force_n) / np.maximum(grip_n, _LEAST_GRIP_N)
    held: FloatArray = np.minimum(share, MAX_UTILIZATION)
    return held
