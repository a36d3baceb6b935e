"""Spend: sliding power and energy of each tire.

The power is force times slip speed, the slip by the brush model's closed inverse. It is a
proxy in joules, comparable lap to lap; it is not millimeters of tread.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray, FrameBlock
from canticle_daemon.physics.car import CarFile
from canticle_daemon.physics.tire import sliding_power_w
from canticle_daemon.stream.demand import MIN_SPEED_MPS, Demand
from canticle_daemon.stream.filters import RunningSum


@dataclass(frozen=True, slots=True)
class Spend:
    """Sliding power (NaN where demand is), and energy since the last break; shapes (4, n).

    `blind` marks frames up to which the car has driven and no power was ever known, so that
    an energy of 0 would be a lie.
    """

    power_w: FloatArray
    energy_j: FloatArray
    blind: BoolArray


class SpendStage:
    """Integrates sliding power by the trapezoidal rule.

    Parameters
    ----------
    car
        The car file; its tire table gives stiffness and friction.
    """

    def __init__(self, car: CarFile) -> None:
        self._tire = car.tire
        self._sum = RunningSum()
        self.reset()

    def reset(self) -> None:
        """Start a new account."""
        self._sum.reset()
        self._last_w: FloatArray = np.zeros((4, 1))
        self._known = self._driven = False

    def process(self, block: FrameBlock, demand: Demand, dt_s: FloatArray) -> Spend:
        """Add a block to the account; frames without a demand spend nothing."""
        power = sliding_power_w(
            demand.force_n, demand.load_n, block.speed_mps, self._tire, demand.friction
        )
        known = np.where(np.isfinite(power), power, 0.0)
        before = np.concatenate([self._last_w, known[:, :-1]], axis=1)
        self._last_w = known[:, -1:].copy()
        blind = self._blind(np.isfinite(power[0]), block.speed_mps >= MIN_SPEED_MPS)
        return Spend(power, self._sum.process(0.5 * (before + known) * dt_s), blind)

    def _blind(self, known: BoolArray, moving: BoolArray) -> BoolArray:
        ever_known = np.logical_or.accumulate(known) | self._known
        driven = np.logical_or.accumulate(moving) | self._driven
        self._known, self._driven = bool(ever_known[-1]), bool(driven[-1])
        return driven & ~ever_known
