"""Change detection: when something began, and how well that is known.

`Cusum` raises a live alarm, `hinge_fit` dates an onset afterwards with its standard error, and
`ramp_glr` is the oracle that the live detector is compared with: it knows the slope and the
noise. All are pure; only `Cusum` carries state, sample by sample, so that any cut of a series
into blocks gives the same sums to the bit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from canticle_daemon.frame import FloatArray, IntArray

_LEAST_SAMPLES = 6
_MOST_CORRELATION = 0.97
_LEAST_FREEDOM = 0.5
_ROUNDING = 1e-12


@dataclass(frozen=True, slots=True)
class CusumTrace:
    """What a block of samples did to the two sums.

    `alarm` is the index of the first sample with a sum above the threshold and `onset` that
    of the first sample after the alarming sum was last zero; both None without an alarm. An
    alarm that stands from an earlier block has index 0, an onset back there a negative one.
    """

    upper: FloatArray
    lower: FloatArray
    alarm: int | None
    onset: int | None


class Cusum:
    """Two-sided cumulative sum (E. S. Page, Biometrika 41:100-115, 1954).

    Parameters
    ----------
    target
        The mean before the change.
    reference
        Half the shift that matters, k: what each sample must exceed for its sum to rise.
    threshold
        Alarm limit, h.

    Raises
    ------
    ValueError
        If the reference is negative or the threshold is not positive.
    """

    def __init__(self, target: float, reference: float, threshold: float) -> None:
        if not (math.isfinite(target) and reference >= 0.0 and threshold > 0.0):
            raise ValueError("a CUSUM needs a finite target, a reference >= 0 and a threshold > 0")
        self.target = target
        self.reference = reference
        self.threshold = threshold
        self.reset()

    def reset(self) -> None:
        """Forget every sample."""
        self._upper = self._lower = 0.0
        self._upper_age = self._lower_age = 0

    def process(self, x: ArrayLike) -> CusumTrace:
        """Take a block of samples; a NaN gives NaN and leaves the sums as they are."""
        samples = np.asarray(x, dtype=np.float64).tolist()
        upper, lower = [math.nan] * len(samples), [math.nan] * len(samples)
        alarm = onset = None
        for index, sample in enumerate(samples):
            if not math.isnan(sample):
                self._step(sample)
                upper[index], lower[index] = self._upper, self._lower
            elif self._upper_age or self._lower_age:
                self._grow_older()
            if alarm is None and (age := self._alarm_age()):
                alarm, onset = index, index - age + 1
        return CusumTrace(np.array(upper), np.array(lower), alarm, onset)

    def _step(self, sample: float) -> None:
        rise = sample - self.target - self.reference
        fall = self.target - self.reference - sample
        self._upper = max(0.0, self._upper + rise)
        self._lower = max(0.0, self._lower + fall)
        self._upper_age = self._upper_age + 1 if self._upper > 0.0 else 0
        self._lower_age = self._lower_age + 1 if self._lower > 0.0 else 0

    def _grow_older(self) -> None:
        self._upper_age += self._upper_age > 0
        self._lower_age += self._lower_age > 0

    def _alarm_age(self) -> int:
        """Return how many samples ago the alarming sum was zero; 0 without an alarm."""
        if self._upper > self.threshold:
            return self._upper_age
        return self._lower_age if self._lower > self.threshold else 0


def cusum(
    x: ArrayLike, target: float, k: float, h: float
) -> tuple[FloatArray, FloatArray, int | None, int | None]:
    """Run a two-sided CUSUM over a whole series.

    Parameters
    ----------
    x
        Shape (n,): the series.
    target, k, h
        Mean before the change, reference value and threshold, as for `Cusum`.

    Returns
    -------
    upper, lower
        Shape (n,): the sums after each sample; they run on after an alarm.
    alarm
        Index of the first sample with a sum above `h`, or None.
    onset
        Index of the first sample after the alarming sum was last zero, or None.

    Examples
    --------
    >>> cusum([0.0, 0.0, 3.0, 3.0], target=0.0, k=0.5, h=4.0)[2:]
    (3, 2)
    """
    trace = Cusum(target, k, h).process(x)
    return trace.upper, trace.lower, trace.alarm, trace.onset


@dataclass(frozen=True, slots=True)
class Hinge:
    """A level that turns into a ramp at a knot; every field is NaN where none could be fitted.

    Parameters
    ----------
    knot
        Where the ramp begins, in the unit of x.
    level
        The value at the knot.
    slope
        The ramp's slope, in excess of the drift.
    std_knot
        Standard error of the knot.
    residual_std
        Standard deviation of the residuals, by the degrees of freedom left.
    drift
        Slope before the knot; 0 unless it was fitted.
    """

    knot: float
    level: float
    slope: float
    std_knot: float
    residual_std: float
    drift: float = 0.0


_NO_HINGE = Hinge(math.nan, math.nan, math.nan, math.nan, math.nan, math.nan)


def hinge_fit(
    x: FloatArray,
    y: FloatArray,
    first: float | None = None,
    last: float | None = None,
    level_slope: bool = False,
    weights: FloatArray | None = None,
    sign: int = 0,
    memory: int = 0,
) -> Hinge:
    """Fit a level, then a ramp, joined at a knot, by least squares.

    Parameters
    ----------
    x
        Shape (n,): strictly rising.
    y
        Shape (n,): samples; those that are NaN are left out.
    first, last
        The knot is looked for between these values of x; in any case not before the second
        sample nor after the last but two, where it would fit noise.
    level_slope
        Fit a straight drift too, the same before and after the knot.
    weights
        Shape (n,): weight of each sample, 1 if absent.
    sign
        +1 or -1 admits only ramps that rise or fall; 0 both.
    memory
        Over how many samples disturbances last; 0 leaves it to the correlation of neighbors.

    Returns
    -------
    Hinge
        The fit; all NaN where fewer than six samples are left, no knot is admissible, or no
        ramp has the sign asked for.

    Notes
    -----
    For a given knot the model is linear, and what it explains beyond the level is J = N²/D with
    N linear and D quadratic in the knot between two samples. dJ = 0 is then linear, so each
    interval's best knot follows in closed form and the search is exact (compare D. J. Hudson, J.
    Am. Stat. Assoc. 61:1097-1129, 1966; from memory).

    The standard error is that of the linearized model. Without `memory` it is widened by
    √((1 + ρ)/(1 − ρ)) for residuals with a correlation ρ > 0 between neighbors. That tends to
    nothing or to anything where samples are dense and what is disturbed lasts for many of them.
    With `memory`, what each residual moves the knot by is squared and summed with its products
    over so many neighbors, with weights that fall off linearly (W. K. Newey, K. D. West,
    Econometrica 55:703-708, 1987; from memory). A fit flattens what lasts, so this is scaled as
    if only every `memory`-th sample were a value of its own and the parameters had been taken
    from those; and so that twice the error holds 95 % although few such values tell it (N. M.
    Kiefer, T. J. Vogelsang, Econometric Theory 21:1130-1164, 2005; from memory).
    """
    usable = np.isfinite(y) if weights is None else np.isfinite(y) & (weights > 0.0)
    if not usable.all():
        x, y = x[usable], y[usable]
        weights = None if weights is None else weights[usable]
    if x.size < _LEAST_SAMPLES or not x[0] < x[-1]:
        return _NO_HINGE
    weight = np.ones_like(x) if weights is None else weights
    profile = _HingeProfile(x, y, weight, level_slope)
    start = float(x[1]) if first is None else max(first, float(x[1]))
    stop = float(x[-3]) if last is None else min(last, float(x[-3]))
    knot = profile.best_knot(start, stop, sign)
    return _NO_HINGE if knot is None else _describe(x, y, weight, knot, level_slope, memory)


class _HingeProfile:
    """How much a knot explains, as a function of the knot, from sums over the samples after it."""

    def __init__(self, x: FloatArray, y: FloatArray, weight: FloatArray, drift: bool) -> None:
        self._x = x
        total = float(weight.sum())
        self._middle = float((weight * x).sum()) / total
        centered = x - self._middle
        rest = y - float((weight * y).sum()) / total
        self._spread = float((weight * centered * centered).sum()) if drift else math.inf
        if drift:
            rest = rest - centered * (float((weight * centered * rest).sum()) / self._spread)
        self._total = total
        terms = weight * np.stack([rest, rest * centered, np.ones_like(x), centered, centered**2])
        # Sums over the samples from each one on; column i + 1 is what lies after knot interval i.
        self._after = np.cumsum(terms[:, ::-1], axis=1)[:, ::-1]

    def best_knot(self, first: float, last: float, sign: int) -> float | None:
        """Return the admissible knot that explains most, or None."""
        x = self._x
        low = int(np.searchsorted(x, first, side="right")) - 1
        high = min(int(np.searchsorted(x, last, side="left")), x.size - 1)
        if not first < last or high <= low:
            return None
        left = np.clip(x[low:high], first, last) - self._middle
        right = np.clip(x[low + 1 : high + 1], first, last) - self._middle
        gain, place = self._best_in_intervals(left, right, self._after[:, low + 1 : high + 1], sign)
        best = int(np.argmax(gain))
        return float(place[best]) + self._middle if gain[best] > 0.0 else None

    def _best_in_intervals(
        self, left: FloatArray, right: FloatArray, sums: FloatArray, sign: int
    ) -> tuple[FloatArray, FloatArray]:
        """Gain and place of the best knot in each interval; places are centered."""
        rest, rest_x, count, count_x, count_xx = sums
        # N(t) = rest_x − rest·t and D(t) = a·t² + b·t + c, t the centered knot.
        a = count - count**2 / self._total - count_x**2 / self._spread
        b = 2.0 * (count * count_x / self._total + count_x * count_xx / self._spread - count_x)
        c = count_xx - count_x**2 / self._total - count_xx**2 / self._spread
        with np.errstate(divide="ignore", invalid="ignore"):
            flat = -(2.0 * rest * c + rest_x * b) / (rest * b + 2.0 * a * rest_x)
        inner = np.clip(np.where(np.isfinite(flat), flat, left), left, right)
        places = np.stack([left, inner, right])
        numerator = rest_x - rest * places
        denominator = (a * places + b) * places + c
        sound = (denominator > _ROUNDING * count_xx) & (numerator * sign >= 0.0)
        gains = np.where(sound, numerator**2 / np.where(sound, denominator, 1.0), 0.0)
        choice = np.argmax(gains, axis=0)
        column = np.arange(choice.size)
        return gains[choice, column], places[choice, column]


def _describe(
    x: FloatArray, y: FloatArray, weight: FloatArray, knot: float, drift: bool, memory: int
) -> Hinge:
    """Fit the linear part at the best knot and judge how well the knot is known."""
    past = x - knot
    columns = [np.ones_like(x), np.maximum(past, 0.0)] + [past] * drift
    design = np.stack(columns, axis=1)
    weighted = design.T * weight
    normal = weighted @ design
    values = np.linalg.solve(normal, weighted @ y)
    residual = y - design @ values
    fitted = len(columns) + 1
    # d(model)/d(knot) is the slope, on the samples after the knot alone.
    step = 0.5 * (np.sign(past) + 1.0)
    shared = np.linalg.solve(normal, weighted @ step)
    own = float((weight * step * (step - design @ shared)).sum())
    slope = float(values[1])
    known = abs(slope) * own
    squares = float((weight * residual**2).sum())
    if memory:
        scatter = _long_scatter(weight * (step - design @ shared) * residual, memory, fitted)
    else:
        scatter = math.sqrt(own * squares * _widening(residual, fitted))
    return Hinge(
        knot=knot,
        level=float(values[0]),
        slope=slope,
        std_knot=scatter / known if known > 0.0 else math.inf,
        residual_std=math.sqrt(squares / max(x.size - fitted, 1)),
        drift=float(values[2]) if drift else 0.0,
    )


def _widening(residual: FloatArray, fitted: int) -> float:
    """Return what turns the sum of squares into the variance that counts for a fitted value.

    With a correlation ρ between neighbors n samples are worth n·(1 − ρ)/(1 + ρ); what the fit
    took out of the correlation is put back (M. G. Kendall, Biometrika 41:403-404, 1954, for a
    series less its trend; from memory).
    """
    count = residual.size
    power = float((residual * residual).sum())
    raw = float((residual[1:] * residual[:-1]).sum()) / power if power > 0.0 else 0.0
    correlation = raw + (2.0 + 4.0 * raw) / count
    held = min(max(correlation, 0.0), _MOST_CORRELATION)
    inflation = (1.0 + held) / (1.0 - held)
    return inflation / max(count - fitted * inflation, 0.1 * count)


def _long_scatter(terms: FloatArray, memory: int, fitted: int) -> float:
    """Return the standard deviation of the sum of terms whose disturbances last `memory`.

    The squares of sums over memory + 1 neighbors are the products with linear weights.
    """
    width = min(memory, terms.size) + 1
    together = np.convolve(terms, np.ones(width))
    apart = terms.size / memory
    widening = apart / max(apart - fitted, _LEAST_FREEDOM)
    share = min(1.0 / apart, 1.0)
    few = 1.0 + share * (2.9694 + share * (0.4160 - share * 0.5324)) / 1.96
    return few * math.sqrt(float(together @ together) / width * widening)


def ramp_glr(
    y: FloatArray, dt: float, slope: float, max_lag: int, sigma: float = 1.0
) -> tuple[FloatArray, IntArray]:
    """Return the generalized likelihood ratio for a ramp of known slope out of a known zero.

    Parameters
    ----------
    y
        Shape (n,): a series that is white noise about zero before the ramp.
    dt
        Time between samples.
    slope
        The ramp's slope per unit of time, with its sign.
    max_lag
        Onsets up to this many samples back are tried.
    sigma
        Standard deviation of the noise.

    Returns
    -------
    statistic
        Shape (n,): 2 ln(likelihood ratio) at each sample, the best onset taken; 0 at least.
    onset
        Shape (n,): index of that onset.

    Notes
    -----
    M. Basseville, I. V. Nikiforov, Detection of Abrupt Changes, 1993 (from memory): for an onset m
    samples back the statistic is Σ(2·y·s − s²)/σ² with s the ramp since the onset.
    """
    step = slope * dt
    best = np.zeros_like(y)
    lag = np.zeros(y.size, dtype=np.int64)
    partial, moment = np.zeros_like(y), np.zeros_like(y)
    energy = 0.0
    for m in range(1, min(max_lag, y.size - 1) + 1):
        partial[m:] += y[1 : y.size - m + 1]
        moment[m:] += partial[m:]
        energy += float(m * m)
        statistic = (2.0 * step * moment[m:] - step * step * energy) / (sigma * sigma)
        better = statistic > best[m:]
        best[m:] = np.where(better, statistic, best[m:])
        lag[m:] = np.where(better, m, lag[m:])
    return best, np.arange(y.size) - lag


def mean_change_glr(x: FloatArray, sigma: float) -> tuple[float, int]:
    """Return the generalized likelihood ratio for one change of mean, and where it is.

    Parameters
    ----------
    x
        Shape (n,): the series, n at least 2.
    sigma
        Standard deviation of the noise.

    Returns
    -------
    statistic
        2 ln(likelihood ratio) at the best split.
    count
        Number of samples before the change.

    Notes
    -----
    M. Basseville, I. V. Nikiforov, Detection of Abrupt Changes, 1993 (from memory).
    """
    count = np.arange(1, x.size)
    centered = x - x.mean()
    before = np.cumsum(centered)[:-1]
    statistic = before**2 * (x.size / (count * (x.size - count))) / sigma**2
    best = int(np.argmax(statistic))
    return float(statistic[best]), best + 1
