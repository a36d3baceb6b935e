"""`python -m canticle_adapters.rehearsal`: drive the synthetic car and send its datagrams."""

from __future__ import annotations

import argparse
import signal
import sys
from collections.abc import Sequence
from pathlib import Path

from canticle_adapters.rehearsal.oval import track_toml
from canticle_adapters.rehearsal.sender import Stop, rehearse
from canticle_adapters.rehearsal.telemetry import Options, Rehearsal


def main(argv: Sequence[str] | None = None) -> int:
    """Run the rehearsal; returns the exit status."""
    wanted = _parser().parse_args(argv)
    if wanted.write_track is not None:
        return _write_track(wanted.write_track, wanted.mirror)
    if wanted.to is None:
        sys.stderr.write("rehearsal: --to HOST:PORT is missing\n")
        return 2
    stop = Stop()
    for name in ("SIGINT", "SIGTERM", "SIGBREAK"):
        if hasattr(signal, name):
            signal.signal(getattr(signal, name), stop.set)
    if wanted.with_parent:
        stop.when_ends(0)
    options = Options(
        laps=wanted.laps,
        seed=wanted.seed,
        rate_hz=wanted.rate,
        noise=wanted.noise,
        mirror=wanted.mirror,
        keys=wanted.keys,
        evening=wanted.evening,
    )
    return rehearse(Rehearsal(options), wanted.to, wanted.pace, wanted.bus, stop, wanted.truth)


def _write_track(path: Path, mirror: bool) -> int:
    try:
        path.write_text(track_toml(mirror), encoding="utf-8", newline="\n")
    except OSError as error:
        sys.stderr.write(f"rehearsal: {error}\n")
        return 1
    return 0


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="python -m canticle_adapters.rehearsal",
        description="A synthetic car on a made-up oval sends native datagrams by UDP.",
    )
    add = parser.add_argument
    add("--to", type=_address, metavar="HOST:PORT", help="where to send the datagrams")
    add("--bus", metavar="ENDPOINT", help="the daemon's bus; lets --pace max lose nothing")
    add("--laps", type=_laps, help="how many; default: until stopped")
    add("--pace", type=_pace, default=1.0, metavar="X", help="1 is real time; or max")
    add("--seed", type=int, default=1, help="the same seed gives the same bytes")
    add("--rate", type=_rate, default=60.0, metavar="HZ", help="frames a second, 10 to 1000")
    add("--truth", type=Path, metavar="FILE", help="write true turn-ins and tire forces here")
    add("--noise", action=argparse.BooleanOptionalAction, default=True, help="sensor noise")
    add("--mirror", action="store_true", help="the mirror image: a right-turning oval")
    add("--keys", choices=("full", "basic"), default="full", help="how much the stream tells")
    add("--evening", action="store_true", help="a practice evening: stops, cautions, traffic")
    add("--write-track", type=Path, metavar="FILE", help="only write the oval's track file")
    add("--with-parent", action="store_true", help="end when standard input ends")
    return parser


def _address(text: str) -> tuple[str, int]:
    host, colon, port = text.rpartition(":")
    if not (colon and host and port.isdecimal() and 0 < int(port) < 65536):
        raise argparse.ArgumentTypeError(f"{text!r} is not HOST:PORT")
    return host.strip("[]"), int(port)


def _laps(text: str) -> int:
    if not (text.isdecimal() and int(text) > 0):
        raise argparse.ArgumentTypeError(f"{text!r} is not a number of laps")
    return int(text)


def _pace(text: str) -> float | None:
    return None if text == "max" else _within(text, 0.0, 1000.0, "a pace above 0, or max")


def _rate(text: str) -> float:
    return _within(text, 10.0, 1000.0, "a rate from 10 to 1000")


def _within(text: str, least: float, most: float, what: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = -1.0
    if not (least <= value <= most and value > 0.0):
        raise argparse.ArgumentTypeError(f"{text!r} is not {what}")
    return value


if __name__ == "__main__":
    sys.exit(main())
