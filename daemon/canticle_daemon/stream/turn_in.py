"""Turn-in: when the steering that takes the corner begins.

Theory of operation
-------------------
The *signal* is the steering-wheel angle (path curvature, scaled to it, where the stream has no
steering) less what the road asks for before the corner: a dogleg or a banked arc is not a
turn-in. The signal is a level plus the driver's corrections plus noise; at the turn-in a ramp
begins. The detector is a generalized likelihood ratio for a ramp of the driver's own slope
whose onset is unknown (M. Basseville, I. V. Nikiforov, Detection of Abrupt Changes, 1993):

    S = max over onsets j of  dt·[ g·Σ τ·(y − b_j) − g²/2·Σ τ² ],     τ = t − t_j,

with b_j the level held just before j. A bell-shaped correction does not keep up with the ramp
and scores near zero. S is compared with a threshold calibrated on this driver's own straights
(`Calibration`), so that a steady hand is judged sooner than a busy one.

After the alarm the onset is the knot of a continuous hinge, level then ramp: live with the
driver's usual slope as a prior (`live_knot`), at the apex by least squares over the whole
neighborhood (`refined_knot`).
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import FloatArray, FrameBlock, IntArray
from canticle_daemon.physics.car import CarFile
from canticle_daemon.stream.filters import Hold, RunningSum
from canticle_daemon.stream.onset import Hinge, hinge_fit
from canticle_daemon.track.profile import CornerPlan, Track

LAGS_S = tuple(np.geomspace(0.03, 0.8, 15).tolist())
LEVEL_S = 0.8
LONG_LEVEL_S = 1.6
"""The level is taken over this long once so much has been seen: corrections then weigh less."""
SHORT_S = 0.15
CLOCK_FRAMES = 9
"""So many time steps tell the sampling interval; their median survives a lost packet."""
RAMP_TIME_S = 1.2
"""A driver's steering ramp before one was learned (common practice, no source)."""
GRID_M = 2.0
LEVEL_SHARE = 0.06
"""Curvature up to this share of the corner's own still belongs to the straight."""
BEGUN_SHARE = 0.002
"""A straight ends where its curvature has risen by this share of the corner's own."""
DOGLEG_REACH_M = 60.0
"""A driver rounds a dogleg off by about this much on either side."""
DOGLEG_FACTOR = 1.6
RAMP_FADES = 0.35
"""The first ramp ends where its slope has fallen to this share of its steepest."""
LASTING_S = 0.2
RAMP_SHARE = 0.7
"""The knot is fitted up to this share of the ramp's height, short of its rounded top."""
MEMORY_S = 0.3
"""How long a correction, or a ramp that is no straight line, moves the steering one way."""
LEAST_STD_M = 0.1
"""A hand begins to turn within some milliseconds; no station is meant more finely."""
LEAST_FRAMES = 10
FLOOR_RAMP_S = 0.04
PRIOR_EXCURSION_RAD = math.radians(3.3)
"""Corrections at the wheel are smaller than this (common practice, no source)."""
FALSE_ALARM_PER_WINDOW = 3e-4
WINDOW_S = 0.5
ENOUGH_WINDOWS = 60
EARLY_SPARE = 1.2


@dataclass(frozen=True, slots=True)
class Guide:
    """What the road asks of the steering, on a grid of stations round the lap.

    Parameters
    ----------
    station_m
        The grid from 0 to the lap's length, both included, shape (n,).
    held_1pm
        Curvature of the straight, held on where a corner takes over; doglegs are in it.
    dogleg_1pm
        Size of the dogleg near this station, positive, 0 where there is none.
    level_1pm
        Curvature of the straight just before the next corner, constant over its zone.
    """

    station_m: FloatArray
    held_1pm: FloatArray
    dogleg_1pm: FloatArray
    level_1pm: FloatArray

    @classmethod
    def of(cls, track: Track) -> Guide:
        """Derive the guide from a track's curvature and corners."""
        count = max(int(track.length_m / GRID_M), 8)
        station = np.arange(count, dtype=np.float64) * (track.length_m / count)
        curvature = track.curvature_1pm(station)
        held, dogleg = curvature.copy(), np.zeros(count)
        level = np.zeros(count)
        for corner, previous in zip(
            track.corners, (track.corners[-1:] + track.corners[:-1]), strict=True
        ):
            _guide_corner(track, corner, previous, (station, curvature, held, dogleg, level))
        columns = (held, dogleg, level)
        held, dogleg, level = (np.append(column, column[0]) for column in columns)
        return cls(np.append(station, track.length_m), held, dogleg, level)


def corner_curvature(track: Track, corner: CornerPlan) -> float:
    """Return the largest curvature of a corner in its own direction, at least 1e-5 1/m."""
    span = (corner.exit_m - corner.transition_start_m) % track.length_m
    station = (corner.transition_start_m + np.arange(0.0, span, GRID_M)) % track.length_m
    return max(float(np.max(corner.side * track.curvature_1pm(station))), 1e-5)


def _guide_corner(
    track: Track, corner: CornerPlan, previous: CornerPlan, grid: tuple[FloatArray, ...]
) -> None:
    """Fill the guide from the previous corner's exit to this corner's exit."""
    station, curvature, held, dogleg, level = grid
    length = track.length_m
    start = previous.exit_m
    approach = (corner.apex_m - start) % length or length
    reach = (corner.exit_m - start) % length or length
    ahead = (station - start) % length
    order = np.argsort(ahead, kind="stable")
    order = order[ahead[order] <= reach]
    along, own = ahead[order], corner.side * curvature[order]
    peak = corner_curvature(track, corner)
    before_apex = along <= approach
    zone = before_apex & (along >= (corner.zone_start_m - start) % length)
    floor = max(float(np.min(own[zone], initial=peak)), 0.0)
    straight = before_apex & (own <= floor + LEVEL_SHARE * (peak - floor))
    begins = float(along[straight][-1]) if straight.any() else 0.0
    near = straight & (along > begins - 80.0)
    base = float(np.median(own[near])) if near.any() else floor
    # Held from where the road begins to bend: a step there would look like steering.
    begun = straight & (own <= base + BEGUN_SHARE * (peak - floor))
    begins = float(along[begun][-1]) if begun.any() else begins
    taken = along >= begins
    level[order] = corner.side * base
    held[order[taken]] = corner.side * base
    away = np.where(taken, 0.0, np.abs(own - base))
    away[away < LEVEL_SHARE * peak] = 0.0
    for index in np.flatnonzero(away):
        close = np.abs(along - along[index]) <= DOGLEG_REACH_M
        dogleg[order[close]] = np.maximum(dogleg[order[close]], away[index])


@dataclass(frozen=True, slots=True)
class Steering:
    """The turn-in signal of a block, positive left, as an angle at the steering wheel.

    `beyond_rad` is beyond what the road asks for; `offset_rad` puts a dogleg back in, so that
    the two together are beyond the straight's own level; `dogleg_rad` is the steering a dogleg
    near here may take, 0 where there is none.
    """

    beyond_rad: FloatArray
    offset_rad: FloatArray
    dogleg_rad: FloatArray


class SteeringStage:
    """Builds the turn-in signal from steering, or from path curvature where there is none."""

    def __init__(self, track: Track, car: CarFile) -> None:
        self._guide = Guide.of(track)
        self._track = track
        self._gain = car.steering_ratio * car.wheelbase_m
        self._hold = Hold(0.0)
        self._last_rad = math.nan
        self.quantum_rad = math.inf
        """Smallest step of the steering seen: its resolution, where it is coarse."""

    def reset(self) -> None:
        """Forget the past; the resolution stays."""
        self._hold.reset()
        self._last_rad = math.nan

    def process(self, block: FrameBlock, station_m: FloatArray) -> Steering:
        """Return the signal of a block."""
        guide, gain = self._guide, self._gain
        held = np.interp(station_m, guide.station_m, guide.held_1pm)
        level = np.interp(station_m, guide.station_m, guide.level_1pm)
        dogleg = np.interp(station_m, guide.station_m, guide.dogleg_1pm)
        wheel = block.steer_rad
        if not np.isfinite(wheel).all():
            moving = np.where(block.speed_mps > 5.0, block.speed_mps, np.nan)
            cos = np.cos(self._track.bank_rad(station_m))
            wheel = np.where(
                np.isfinite(wheel), wheel, gain * block.yaw_rate_radps / (moving * cos)
            )
        beyond = self._hold.process(wheel - gain * held)
        return Steering(beyond, gain * (held - level), DOGLEG_FACTOR * gain * dogleg)

    def learn(self, wheel_rad: FloatArray) -> None:
        """Look for the steering's resolution in frames that have been judged."""
        before = np.concatenate([[self._last_rad], wheel_rad[:-1]])
        steps = np.abs(wheel_rad - before)
        steps = np.where(steps > 1e-9, steps, np.inf)
        self.quantum_rad = float(np.minimum.reduce(steps, initial=self.quantum_rad))
        self._last_rad = float(wheel_rad[-1])


@dataclass(frozen=True, slots=True)
class Ramps:
    """The detector's output per frame, in the corner's own sense (positive into the corner).

    `score` is S and `onset_s` the time of the onset it was reached for; `level_rad` is the level
    held before the longest lag, `now_rad` the mean of the last moments. NaN until a second of
    straight has been seen.
    """

    score: FloatArray
    onset_s: FloatArray
    level_rad: FloatArray
    now_rad: FloatArray


class RampStage:
    """Scores at every frame whether a steering ramp is under way."""

    def __init__(self) -> None:
        self.reset()

    def reset(self) -> None:
        """Forget the past."""
        self.dt_s = math.nan
        self._steps: list[float] = []
        self._lags: IntArray = np.empty(0, np.int64)
        self._sums = RunningSum()
        self._count = 0
        self._past: FloatArray = np.empty((4, 0))

    def process(
        self,
        time_s: FloatArray,
        dt_s: FloatArray,
        beyond_rad: FloatArray,
        side: FloatArray,
        rest_rad: FloatArray,
        slope_radps: float,
    ) -> Ramps:
        """Score a block.

        Parameters
        ----------
        time_s, dt_s, beyond_rad
            Stream clock, time since the frame before, and the signal, shape (n,).
        side
            +1 or −1, the sense of the corner that each frame approaches.
        rest_rad
            The level this driver usually holds there, in the corner's sense; NaN: not known.
        slope_radps
            Slope g of the ramp that is looked for.
        """  # fmt: skip
        waiting = self._learn_clock(dt_s)
        silent = np.full(waiting, np.nan)
        if waiting == time_s.size:
            return Ramps(silent, silent, silent, silent)
        rows = self._accumulate(time_s[waiting:], beyond_rad[waiting:])
        parts = self._score(rows, side[waiting:], rest_rad[waiting:], slope_radps)
        self._past = rows[:, -self._past.shape[1] :].copy()
        if not waiting:
            return Ramps(*parts)
        return Ramps(*(np.concatenate([silent, part]) for part in parts))

    def _learn_clock(self, dt_s: FloatArray) -> int:
        """Return how many frames pass before the sampling interval is known."""
        if self._lags.size:
            return 0
        for index, step in enumerate(dt_s.tolist()):
            if step > 0.0:
                self._steps.append(step)
            if len(self._steps) == CLOCK_FRAMES:
                self.dt_s = float(np.median(self._steps))
                lags = np.rint(np.array(LAGS_S) / self.dt_s).astype(np.int64)
                self._lags = np.unique(np.maximum(lags, 1))
                self._level = max(round(LEVEL_S / self.dt_s), 4)
                self._long = max(round(LONG_LEVEL_S / self.dt_s), 8)
                self._short = max(round(SHORT_S / self.dt_s), 2)
                column = self._lags[:, None]
                self._ones = column * (column + 1) / 2
                self._squares = column * (column + 1) * (2 * column + 1) / 6
                self._past = np.full((4, int(self._lags[-1]) + self._long + 1), np.nan)
                return index + 1
        return int(dt_s.size)

    def _accumulate(self, time_s: FloatArray, signal: FloatArray) -> FloatArray:
        count = np.arange(self._count + 1, self._count + 1 + signal.size, dtype=np.float64)
        self._count += int(signal.size)
        sums = self._sums.process(np.stack([signal, count * signal]))
        return np.concatenate([self._past, np.stack([time_s, count, *sums])], axis=1)

    def _score(
        self, rows: FloatArray, side: FloatArray, rest: FloatArray, slope: float
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        time, count, total, moment = rows
        lags = self._lags[:, None]
        here = np.arange(self._past.shape[1], rows.shape[1])
        onset = here - lags
        total_j = total[onset]
        mean = side * (total_j - total[onset - self._level]) / self._level
        long = side * (total_j - total[onset - self._long]) / self._long
        short = side * (total_j - total[onset - self._short]) / self._short
        long = np.where(np.isfinite(rest), np.where(long == long, long, mean), np.fmin(long, mean))
        # While the last corner's steering unwinds the level is not yet what it will be.
        level = np.where(short < long, np.fmin(long, np.maximum(short, rest)), long)
        rise = total[here] - total_j
        first = side * (moment[here] - moment[onset] - count[onset] * rise)
        first -= level * self._ones
        began = time[onset]
        step = (time[here] - began) / lags
        score = step * (slope * step * first - 0.5 * slope**2 * step**2 * self._squares)
        best = np.argmax(np.where(score == score, score, -np.inf), axis=0)
        column = np.arange(best.size)
        now = side * (total[here] - total[here - self._short]) / self._short
        return score[best, column], began[best, column], long[-1], now


class Calibration:
    """The threshold on S from this driver's own calm stretches.

    Maxima of S over windows of half a second are collected where no corner was taken. S grows
    with the third power of an excursion, so its cube root is what has a plain tail: the upper
    tenth is taken for exponential (peaks over a threshold) and extrapolated to
    `FALSE_ALARM_PER_WINDOW`. Before enough is known, a cautious default holds.
    """

    def __init__(self) -> None:
        self._maxima: deque[float] = deque(maxlen=3000)

    def add(self, maximum: float) -> None:
        """Take in the largest S of one calm window."""
        if math.isfinite(maximum):
            self._maxima.append(math.cbrt(max(maximum, 0.0)))

    def threshold(self, slope_radps: float, quantum_rad: float) -> float:
        """Return the threshold for a ramp slope and a step of the steering's resolution."""
        floor = max(_ramp_score(slope_radps, FLOOR_RAMP_S), _step_score(slope_radps, quantum_rad))
        if len(self._maxima) < ENOUGH_WINDOWS:
            seen = EARLY_SPARE * max(self._maxima, default=0.0)
            prior = _ramp_score(slope_radps, PRIOR_EXCURSION_RAD / slope_radps)
            return max(floor, prior, seen**3)
        values = np.sort(np.array(self._maxima))
        upper = values[int(0.9 * values.size) :]
        excess = float(np.mean(upper - upper[0]))
        # The mean excess of k maxima is known to about 1/√k of itself.
        excess *= 1.0 + 1.5 / math.sqrt(upper.size)
        tail = float(upper[0]) + excess * math.log(0.1 / FALSE_ALARM_PER_WINDOW)
        return max(floor, tail**3)


def _step_score(slope: float, step: float) -> float:
    """Return the most a lasting step scores, max over T of g·q·T²/2 − g²·T³/6, and a fifth."""
    return 0.8 * step**3 / slope


def _ramp_score(slope: float, duration_s: float) -> float:
    """Return the S that a clean ramp of this slope reaches after a time."""
    return slope**2 * duration_s**3 / 6.0


@dataclass(frozen=True, slots=True)
class Knot:
    """An onset: its place along `x` with standard error, the level before, the slope after."""

    x: float
    std: float
    level: float
    slope: float


def live_knot(time_s: FloatArray, signal: FloatArray, slope: float, slope_std: float) -> Knot:
    """Estimate the onset at the moment of the alarm, with the usual slope as a prior.

    Parameters
    ----------
    time_s, signal
        The last second and a half, in the corner's sense; the ramp is at the end.
    slope, slope_std
        The driver's usual slope and its spread, per second.

    Returns
    -------
    Knot
        The mean of the posterior over onsets of the last 0.8 s and its standard deviation;
        the noise is that of the signal before, inflated for corrections that last.
    """
    now = float(time_s[-1])
    candidates = np.linspace(now - LAGS_S[-1], now, 161)[:-2]
    before = time_s < candidates[:, None]
    level_mask = before & (time_s >= candidates[:, None] - LEVEL_S)
    weight = np.maximum(level_mask.sum(axis=1), 1)
    level = np.where(level_mask, signal, 0.0).sum(axis=1) / weight
    rough = np.diff(signal[: max(signal.size // 2, 3)])
    noise2 = max(0.5 * float(np.mean(rough**2)), (0.02 * slope * LAGS_S[0]) ** 2)
    calm = signal[time_s < now - 0.5]
    wander2 = float(np.var(calm)) if calm.size > 3 else noise2
    noise2 = max(noise2, wander2)
    tau = np.maximum(time_s - candidates[:, None], 0.0)
    away = np.where(level_mask | ~before, signal - level[:, None], 0.0)
    prior = noise2 / slope_std**2
    fitted = ((tau * away).sum(axis=1) + prior * slope) / ((tau**2).sum(axis=1) + prior)
    misfit = ((away - fitted[:, None] * tau) ** 2).sum(axis=1)
    dt = (now - float(time_s[0])) / max(time_s.size - 1, 1)
    misfit = misfit / noise2 + ((fitted - slope) / slope_std) ** 2
    # Corrections last about a quarter of a second, so neighboring samples say the same again.
    share = min(1.0, 4.0 * dt / 0.12)
    chance = np.exp(-0.5 * share * (misfit - misfit.min()))
    chance /= chance.sum()
    mean = float((chance * candidates).sum())
    std = math.sqrt(float((chance * (candidates - mean) ** 2).sum()) + (0.3 * dt) ** 2)
    best = int(np.argmin(np.abs(candidates - mean)))
    return Knot(mean, std, float(level[best]), float(fitted[best]))


def refined_knot(
    time_s: FloatArray,
    way_m: FloatArray,
    signal: FloatArray,
    rest: float,
    height: float,
    live_s: float | None,
) -> tuple[Knot, float] | None:
    """Estimate the onset from the whole entry.

    The ramp that begins the corner is often only the first of several: the banking turns the
    car too, and the wheel may ease back while it rises. So the fit ends where the first ramp
    does, and it stays with the onset that was seen live.

    Parameters
    ----------
    time_s, way_m, signal
        From before the zone to the apex, in the corner's sense; `way_m` rises.
    rest
        The level held before, as well as it is known.
    height
        The usual height of the first ramp; less than a third of it is no turn-in.
    live_s
        The time of the onset seen live, None where there was no alarm.

    Returns
    -------
    (Knot, float) or None
        The knot along the way (slope per meter), and the height of the ramp; None where
        nothing like a turn-in is found.
    """
    if time_s.size < LEAST_FRAMES:
        return None
    dt = (float(time_s[-1]) - float(time_s[0])) / (time_s.size - 1)
    half = max(round(0.05 / dt), 1)
    smooth = _centered_mean(signal, half)
    begin = _first_rise(smooth - rest, height, dt) if live_s is None else _at(time_s, live_s)
    if begin is None:
        return None
    span = max(round(LEVEL_S / dt), 4)
    before = smooth[max(begin - span, 0) : begin + 1]
    level = float(np.median(before))
    end = _ramp_end(smooth, begin, dt)
    risen = float(smooth[end]) - level
    if risen < height / 3.0:
        return None
    climb = smooth[begin : end + 1] - level
    top = begin + int(np.argmax(climb >= RAMP_SHARE * risen))
    low = np.flatnonzero(smooth[:top] - level < 0.1 * risen)
    foot = int(low[-1]) if low.size else begin
    first, last = max(foot - span, 0), max(top, foot + 3) + 1
    memory = round(MEMORY_S / dt)
    hinge: Hinge = hinge_fit(way_m[first:last], signal[first:last], sign=1, memory=memory)
    if not math.isfinite(hinge.knot):
        return None
    std = math.hypot(hinge.std_knot, LEAST_STD_M)
    return Knot(hinge.knot, std, hinge.level, hinge.slope), risen


def _at(time_s: FloatArray, moment: float) -> int:
    return min(max(int(np.searchsorted(time_s, moment)), 1), time_s.size - 2)


def _first_rise(above: FloatArray, height: float, dt: float) -> int | None:
    """Return where the signal last was low before it first rose by half the usual and stayed."""
    ahead = _mean_ahead(above, max(round(0.2 / dt), 2))
    risen = np.flatnonzero((above > 0.5 * height) & (ahead > 0.35 * height))
    if risen.size == 0:
        return None
    low = np.flatnonzero(above[: int(risen[0])] < 0.05 * height)
    return int(low[-1]) if low.size else 0


def _ramp_end(smooth: FloatArray, begin: int, dt: float) -> int:
    """Return the sample at which the ramp from `begin` has lost most of its slope."""
    reach = max(round(0.1 / dt), 1)
    rate = (smooth[2 * reach :] - smooth[: -2 * reach]) / (2 * reach * dt)
    rate = np.concatenate([np.repeat(rate[:1], reach), rate, np.repeat(rate[-1:], reach)])
    ahead = rate[begin:]
    highest = np.maximum.accumulate(np.maximum(ahead, 0.0))
    # A correction against the ramp slows it for a moment; an end lasts.
    lasting = max(round(LASTING_S / dt), 1)
    padded = np.concatenate([ahead, np.repeat(ahead[-1:], lasting)])
    strongest = np.lib.stride_tricks.sliding_window_view(padded, lasting + 1).max(axis=1)
    spent = strongest < RAMP_FADES * highest
    spent[: max(round(0.12 / dt), 2)] = False
    found = np.flatnonzero(spent)
    return begin + (int(found[0]) if found.size else ahead.size - 1)


def _centered_mean(values: FloatArray, half: int) -> FloatArray:
    padded = np.concatenate([np.repeat(values[:1], half), values, np.repeat(values[-1:], half)])
    sums = np.concatenate([[0.0], np.cumsum(padded)])
    width = 2 * half + 1
    mean: FloatArray = (sums[width:] - sums[:-width]) / width
    return mean


def _mean_ahead(values: FloatArray, count: int) -> FloatArray:
    padded = np.concatenate([values, np.repeat(values[-1:], count)])
    sums = np.concatenate([[0.0], np.cumsum(padded)])
    mean: FloatArray = (sums[count:-1] - sums[: -count - 1])[: values.size] / count
    return mean
