"""Pure: what is done to a rendered phrase before it is kept (numpy and scipy only)."""

from __future__ import annotations

import math
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Samples: TypeAlias = NDArray[np.float64]

SAMPLE_RATE_HZ = 48_000
TARGET_RMS = 10 ** (-20 / 20)
PEAK_LIMIT = 10 ** (-1 / 20)
SILENCE = 10 ** (-45 / 20)
LEAD_S = 0.003
TAIL_S = 0.030


def prepare(samples: Samples, rate_hz: int) -> NDArray[np.int16]:
    """Trim, convert to 48 kHz and level a mono phrase.

    Parameters
    ----------
    samples
        Shape (n,), full scale ±1.
    rate_hz
        Their rate.

    Raises
    ------
    ValueError
        There is nothing to hear.
    """
    return to_int16(level(resample(trim(samples, rate_hz), rate_hz)))


def trim(samples: Samples, rate_hz: int) -> Samples:
    """Cut silence (below 45 dB under the peak) from both ends, leaving room for the edges.

    Parameters
    ----------
    samples
        Shape (n,).
    rate_hz
        Their rate.

    Raises
    ------
    ValueError
        There is nothing to hear.
    """
    size = np.abs(samples)
    peak = float(size.max(initial=0.0))
    if not peak > 0:
        raise ValueError("the phrase is silent")
    heard = np.flatnonzero(size > peak * SILENCE)
    first = max(int(heard[0]) - round(LEAD_S * rate_hz), 0)
    return samples[first : int(heard[-1]) + 1 + round(TAIL_S * rate_hz)]


def resample(samples: Samples, rate_hz: int) -> Samples:
    """Convert to 48 kHz by a polyphase filter.

    Parameters
    ----------
    samples
        Shape (n,).
    rate_hz
        Their rate.
    """
    from scipy.signal import resample_poly  # slow to import, and only the renderer needs it

    shared = math.gcd(SAMPLE_RATE_HZ, rate_hz)
    converted = resample_poly(samples, SAMPLE_RATE_HZ // shared, rate_hz // shared)
    return np.asarray(converted, dtype=np.float64)


def level(samples: Samples) -> Samples:
    """Bring the root mean square to -20 dBFS, or less where the peak would pass -1 dBFS.

    Parameters
    ----------
    samples
        Shape (n,), not silent.
    """
    rms = math.sqrt(float(np.mean(samples**2)))
    peak = float(np.abs(samples).max())
    return samples * min(TARGET_RMS / rms, PEAK_LIMIT / peak)


def to_int16(samples: Samples) -> NDArray[np.int16]:
    """Round to 16-bit integers.

    Parameters
    ----------
    samples
        Shape (n,), within ±1.
    """
    return np.clip(np.rint(samples * 32767), -32768, 32767).astype(np.int16)
