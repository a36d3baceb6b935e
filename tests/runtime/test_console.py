"""The terminal: slow, stopped, gone, or without letters; and what a lap's line says."""

from __future__ import annotations

import io
import os
import time
from collections.abc import Iterator
from typing import TextIO

import pytest

from canticle_daemon.messages import LapCompleted
from canticle_daemon.runtime.console import WAITING_TEXTS, Console


class Screen(io.StringIO):
    def isatty(self) -> bool:
        return True


@pytest.fixture
def pipe() -> Iterator[tuple[int, TextIO]]:
    """The reading end's descriptor and the writing end as a text stream."""
    reader, writer = os.pipe()
    stream = os.fdopen(writer, "w", encoding="utf-8")
    yield reader, stream
    stream.close()
    os.close(reader)


def lap(number: int, time_s: float | None = 32.5) -> LapCompleted:
    return LapCompleted(
        time_s=1.0, lap=number, run=1, lap_time_s=time_s, valid=time_s is not None,
        context="free", tire_energy_j=(1e4, 2e4, 3e4, 4e4), peak_demand=0.9,
    )  # fmt: skip


def test_a_lap_is_one_line() -> None:
    screen = Screen()
    console = Console(screen)
    console.event(lap(7))
    assert screen.getvalue().split() == ["lap", "7", "32.500", "s", "tires", "100", "kJ"]
    console.event(lap(8, None))
    assert screen.getvalue().splitlines()[1] == "lap   8     part    tires   100 kJ"


def test_the_status_line_stands_below_the_lines_that_stay() -> None:
    screen = Screen()
    console = Console(screen)
    console.status("here")
    console.line("news")
    console.status("there")
    console.close()
    said = screen.getvalue().replace("\r      \r", "<")  # two more than are shown: ^C
    assert said == "here<news\nhere<there\r       \r"


def test_a_status_line_stays_on_its_row_however_narrow(monkeypatch: pytest.MonkeyPatch) -> None:
    columns = [20]
    monkeypatch.setattr(Console, "_columns", lambda console: columns[0])
    screen = Screen()
    console = Console(screen)
    console.status("x" * 50)
    assert screen.getvalue() == "x" * 17
    console.status("x" * 50)
    assert screen.getvalue() == "x" * 17
    columns[0] = 10
    console.status("y" * 50)
    assert screen.getvalue() == "x" * 17 + "\r" + " " * 9 + "\r" + "y" * 7
    columns[0] = 20
    console.status("z")
    assert screen.getvalue().endswith("y" * 7 + "\r" + " " * 19 + "\r" + "z")


def test_no_status_where_there_is_no_terminal() -> None:
    stream = io.StringIO()
    console = Console(stream)
    console.status("here")
    console.line("news")
    assert stream.getvalue() == "news\n"


def test_letters_the_terminal_does_not_have_are_replaced() -> None:
    raw = io.BytesIO()
    console = Console(io.TextIOWrapper(raw, encoding="ascii", newline=""))
    console.line("late −5 m · on")
    console.line("after")
    assert raw.getvalue() == b"late ?5 m ? on\nafter\n"


@pytest.mark.io
def test_a_pipe_that_nobody_reads_holds_nobody_up(pipe: tuple[int, TextIO]) -> None:
    reader, stream = pipe
    console = Console(stream)
    begun = time.monotonic()
    for number in range(5000):
        console.line(f"{number:100d}")
    console.close()
    assert time.monotonic() - begun < 2.0
    taken = os.read(reader, 1 << 20)
    assert taken.startswith(b" " * 99 + b"0\n")
    # What still waits is handed over once there is room, newest kept, whole lines.
    console.line("the last")
    rest = os.read(reader, 1 << 20).decode().splitlines()
    assert rest[-1] == "the last"
    assert len(rest) == WAITING_TEXTS


@pytest.mark.io
def test_a_reader_that_has_gone_is_not_missed() -> None:
    reader, writer = os.pipe()
    os.close(reader)
    with os.fdopen(writer, "w", encoding="utf-8") as stream:
        console = Console(stream)
        console.line("to nobody")
        console.line("again")
        console.close()


def test_a_closed_stream_is_not_missed() -> None:
    stream = io.StringIO()
    console = Console(stream)
    stream.close()
    console.line("to nobody")
    console.close()
