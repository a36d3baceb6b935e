"""What is done to a rendered phrase, checked on tones whose answer is known beforehand."""

import math

import numpy as np
import pytest

from canticle_overlay.speech.sound import level, prepare, resample, to_int16, trim


def tone(seconds: float, hz: float, rate_hz: int, size: float = 0.3) -> np.ndarray:
    return size * np.sin(2 * math.pi * hz * np.arange(round(seconds * rate_hz)) / rate_hz)


def test_silence_is_cut_from_both_ends() -> None:
    rate_hz = 22050
    padded = np.concatenate((np.zeros(4000), tone(0.4, 440, rate_hz), np.zeros(5000)))
    kept = trim(padded, rate_hz)
    assert 0.400 <= len(kept) / rate_hz <= 0.440
    assert np.abs(kept).max() == np.abs(padded).max()


def test_a_silent_phrase_is_refused() -> None:
    for nothing in (np.zeros(100), np.zeros(0)):
        with pytest.raises(ValueError, match="silent"):
            trim(nothing, 22050)


@pytest.mark.parametrize("rate_hz", [16000, 22050, 44100, 48000])
def test_pitch_and_length_survive_the_conversion(rate_hz: int) -> None:
    converted = resample(tone(0.5, 1000, rate_hz), rate_hz)
    assert len(converted) == pytest.approx(24000, abs=2)
    middle = converted[6000:18000]
    peak_bin = int(np.abs(np.fft.rfft(middle)).argmax())
    assert peak_bin * 48000 / len(middle) == pytest.approx(1000, abs=4)


@pytest.mark.parametrize("size", [0.01, 0.3, 1.0])
def test_loudness_is_the_same_whatever_the_engine_gives(size: float) -> None:
    # A sine's root mean square is its peak over √2: at -20 dBFS its peak is 0.1·√2.
    assert np.abs(level(tone(0.5, 997, 48000, size))).max() == pytest.approx(0.14142, rel=1e-3)


def test_a_spiky_phrase_stays_below_full_scale() -> None:
    spiky = np.zeros(48000)
    spiky[::4000] = 1.0
    # -1 dBFS, the true-peak limit of EBU R 128 (from memory), is 0.8913 of full scale.
    assert np.abs(level(spiky)).max() == pytest.approx(0.8913, abs=1e-4)


def test_integers_clip_instead_of_wrapping() -> None:
    assert to_int16(np.array([0.0, 1.0, -1.0, 1.2, -1.2])).tolist() == [
        0,
        32767,
        -32767,
        32767,
        -32768,
    ]


def test_a_prepared_phrase_is_short_leveled_and_at_48_khz() -> None:
    padded = np.concatenate((np.zeros(3000), tone(0.3, 500, 22050, 0.9), np.zeros(5000)))
    ready = prepare(padded, 22050)
    assert ready.dtype == np.int16
    assert 0.30 <= len(ready) / 48000 <= 0.34
