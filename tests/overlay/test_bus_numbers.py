"""What cannot be computed travels as null and arrives as NaN."""

import math

import msgspec
import pytest

from canticle_daemon.messages import Estimate, Vocabulary, bus_message, encode, read_bus_message

NAN = float("nan")


def test_null_numbers_read_as_nan_and_the_others_unchanged() -> None:
    wheels = (1.0, 2.0, 3.0, NAN)
    sent = Estimate(1.5, 2, 3.5, NAN, 0.4, NAN, NAN, NAN, NAN, wheels, wheels, wheels, wheels, 5)
    message = bus_message("estimate", encode(sent))
    assert b'"bank_rad":null' in message
    topic, read = read_bus_message(message)
    assert topic == "estimate"
    assert math.isnan(read.bank_rad)
    assert read.demand == 0.4
    assert read.load_n[:3] == (1.0, 2.0, 3.0)
    assert math.isnan(read.load_n[3])


def test_vocabulary_travels() -> None:
    topic, read = read_bus_message(bus_message("vocabulary", encode(Vocabulary(("late",)))))
    assert (topic, read.phrases) == ("vocabulary", ("late",))


@pytest.mark.parametrize(
    "message", [b"estimate 3", b"estimate {", b"estimate {}", b"unheard {}", b"\xff\xff {}", b""]
)
def test_malformed_messages_raise_and_never_pass(message: bytes) -> None:
    with pytest.raises((KeyError, UnicodeDecodeError, msgspec.MsgspecError)):
        read_bus_message(message)
