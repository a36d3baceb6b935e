"""Knots: when and where a turn-in began.

The onset is the knot of a continuous hinge, level then ramp: live with the driver's usual slope
as a prior (`live_knot`), at the apex by least squares over the whole neighborhood
(`refined_knot`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from canticle_daemon.frame import BoolArray, FloatArray
from canticle_daemon.stream.onset import Hinge, hinge_fit
from canticle_daemon.stream.turn_in import LAGS_S, LEVEL_S

RAMP_FADES = 0.35
"""The first ramp ends where its slope has fallen to this share of its steepest."""
LASTING_S = 0.2
RAMP_SHARES = (0.7, 0.5, 0.35)
"""The knot is fitted up to such a share of the ramp's height, short of its rounded top."""
BEND_SHOWS = 1.5
"""Residuals of so many times the straight's own noise mean that the ramp bends."""
FEWEST_S = 0.15
"""Less of a ramp than this says too little."""
LONG_REACH_S = 2.0 * LAGS_S[-1]
MEMORY_S = 0.3
"""How long a correction, or a ramp that is no straight line, moves the steering one way."""
LEAST_STD_M = 0.1
"""A hand begins to turn within some milliseconds; no station is meant more finely."""
WANDER_S = 0.09
"""How long a disturbance lasts that is not noise, as its correlation adds up."""
LEAST_FRAMES = 10


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
        The last `LONG_REACH_S` and `LEVEL_S`, in the corner's sense; the ramp is at the end.
    slope, slope_std
        The driver's usual slope and its spread, per second.

    Returns
    -------
    Knot
        The mean of the posterior over onsets of the last 0.8 s, or of twice that for a ramp so
        slow that it began before, and its standard deviation; the noise is that of the signal
        before, inflated for corrections that last.
    """
    now = float(time_s[-1])
    knot = _likely_knot(time_s, signal, slope, slope_std, LAGS_S[-1])
    if knot.x < now - 0.85 * LAGS_S[-1]:
        knot = _likely_knot(time_s, signal, slope, slope_std, LONG_REACH_S)
    return knot


def _likely_knot(
    time_s: FloatArray, signal: FloatArray, slope: float, slope_std: float, reach_s: float
) -> Knot:
    """Weigh the onsets of the last `reach_s` by how well level and ramp fit the signal."""
    now = float(time_s[-1])
    seen = time_s >= now - reach_s - LEVEL_S
    time_s, signal = time_s[seen], signal[seen]
    candidates = np.linspace(now - reach_s, now, 161)[:-2]
    before = time_s < candidates[:, None]
    level_mask = before & (time_s >= candidates[:, None] - LEVEL_S)
    weight = np.maximum(level_mask.sum(axis=1), 1)
    level = np.where(level_mask, signal, 0.0).sum(axis=1) / weight
    noise2, lasting2 = _noise_power(signal, slope, time_s < candidates[0])
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
    # What the weights leave out: how often each sample's error is repeated by its neighbors.
    repeated = share * (1.0 + lasting2 / noise2 * max(WANDER_S / dt - 1.0, 0.0))
    spread2 = repeated * float((chance * (candidates - mean) ** 2).sum())
    std = math.sqrt(spread2 + (0.3 * dt) ** 2)
    best = int(np.argmin(np.abs(candidates - mean)))
    return Knot(mean, std, float(level[best]), float(fitted[best]))


def _noise_power(signal: FloatArray, slope: float, before: BoolArray) -> tuple[float, float]:
    """Return the signal's variance before the ramp, never nothing, and what of it lasts.

    What changes from sample to sample is noise; the rest are corrections.
    """
    rough = np.diff(signal[: max(signal.size // 2, 3)])
    least2: float = (0.02 * slope * LAGS_S[0]) ** 2
    noise2 = max(0.5 * float(np.mean(rough**2)), least2)
    calm = signal[before]
    whole2 = max(noise2, float(np.var(calm))) if calm.size > 3 else noise2
    return whole2, whole2 - noise2


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
        The usual height of the first ramp; less than a third of it is no turn-in, or less than
        a sixth where one was seen live.
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
    smooth = _centered_mean(signal, max(round(0.05 / dt), 1))
    begin = _first_rise(smooth - rest, height, dt) if live_s is None else _at(time_s, live_s)
    least = height / (3.0 if live_s is None else 6.0)
    window = None if begin is None else _ramp_window(smooth, begin, least, dt)
    if window is None:
        return None
    hinge = _straightest_fit(way_m, signal, window, dt)
    if not math.isfinite(hinge.knot):
        return None
    std = math.hypot(hinge.std_knot, LEAST_STD_M)
    return Knot(hinge.knot, std, hinge.level, hinge.slope), window.height


def _straightest_fit(way_m: FloatArray, signal: FloatArray, window: _Window, dt: float) -> Hinge:
    """Fit the hinge; a ramp that bends is straight near its foot, so fit less of it then."""
    memory = round(MEMORY_S / dt)
    quiet = float(np.std(signal[window.first : max(window.foot, window.first + 3)]))
    for top in window.tops:
        span = slice(window.first, max(top, window.foot + 3) + 1)
        hinge = hinge_fit(way_m[span], signal[span], sign=1, memory=memory)
        if hinge.residual_std <= BEND_SHOWS * quiet or top - window.foot < FEWEST_S / dt:
            break
    return hinge


@dataclass(frozen=True, slots=True)
class _Window:
    """Samples of level and first ramp: from `first`, ramp from `foot` to one of `tops`."""

    first: int
    foot: int
    tops: tuple[int, ...]
    height: float


def _ramp_window(smooth: FloatArray, begin: int, least: float, dt: float) -> _Window | None:
    """Return the samples to fit, level and first ramp but not its top; None without a ramp."""
    span = max(round(LEVEL_S / dt), 4)
    level = float(np.median(smooth[max(begin - span, 0) : begin + 1]))
    end = _ramp_end(smooth, begin, dt)
    risen = float(smooth[end]) - level
    if risen < least:
        return None
    climb = smooth[begin : end + 1] - level
    tops = tuple(begin + int(np.argmax(climb >= share * risen)) for share in RAMP_SHARES)
    low = np.flatnonzero(smooth[: tops[-1]] - level < 0.1 * risen)
    foot = int(low[-1]) if low.size else begin
    return _Window(max(foot - span, 0), foot, tops, risen)


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
