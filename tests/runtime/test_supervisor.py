"""Supervised processes: small stand-ins that crash, leave, hang, flood, and outlive no daemon."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import textwrap
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import psutil
import pytest
from runtime.rig import until

from canticle_daemon.runtime.supervisor import Child, close_all

pytestmark = pytest.mark.io

Start = Callable[..., Child]


@pytest.fixture
def start(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Start]:
    """Write a stand-in module and start it; all are closed at the end."""
    children: list[Child] = []
    monkeypatch.setenv("PYTHONPATH", str(tmp_path))

    def begin(source: str, *arguments: str, **options: object) -> Child:
        name = f"stand_in_{len(children)}"
        (tmp_path / f"{name}.py").write_text(textwrap.dedent(source), encoding="utf-8")
        options.setdefault("backoff_s", (0.02,))
        children.append(Child(name, name, arguments, **options))  # type: ignore[arg-type]
        return children[-1]

    yield begin
    close_all(children)
    for child in children:
        assert child.pid is None


WAITS = """
    import json, sys
    print(json.dumps({"state": "ready", "detail": "as asked"}), flush=True)
    sys.stdin.read()
"""


def test_it_says_what_the_child_says_of_itself(start: Start) -> None:
    child = start(WAITS)
    assert child.state in ("starting", "ready")
    until(lambda: child.state == "ready", "ready")
    assert child.detail == "as asked"
    assert child.restarts == 0


def test_a_child_ends_when_its_standard_input_does(start: Start) -> None:
    child = start(WAITS)
    until(lambda: child.state == "ready", "ready")
    begun = time.monotonic()
    close_all([child])
    assert child.pid is None
    assert time.monotonic() - begun < 0.55  # well before anybody is terminated


def test_a_crash_is_followed_by_a_restart(start: Start, tmp_path: Path) -> None:
    child = start(
        """
        import json, pathlib, sys
        count = pathlib.Path(sys.argv[1])
        tries = len(count.read_text()) if count.exists() else 0
        count.write_text("x" * (tries + 1))
        if tries < 2:
            print("it hurts", flush=True)
            sys.exit(7)
        print(json.dumps({"state": "ready", "detail": ""}), flush=True)
        sys.stdin.read()
        """,
        str(tmp_path / "count"),
    )
    until(lambda: child.state == "ready", "ready")
    assert child.restarts == 2


def test_the_pauses_between_restarts_grow(start: Start) -> None:
    child = start("raise SystemExit(1)", backoff_s=(0.05, 0.4))
    until(lambda: child.restarts >= 1, "a first failure")
    begun = time.monotonic()
    until(lambda: child.restarts >= 2, "a second")
    second = time.monotonic()
    until(lambda: child.restarts >= 3, "a third")
    third = time.monotonic()
    assert second - begun >= 0.04
    assert third - second >= 0.39


def test_a_failure_is_told_with_the_last_words(start: Start) -> None:
    child = start("raise SystemExit('no ear for music')", backoff_s=(60.0,))
    until(lambda: child.state == "failed", "failed")
    assert child.detail == "ended with status 1 (no ear for music); starting again"


@pytest.mark.parametrize(("status", "state"), [(0, "unavailable"), (3, "closed")])
def test_who_leaves_of_its_own_accord_is_left_in_peace(
    start: Start, status: int, state: str
) -> None:
    child = start(f"raise SystemExit({status})")
    until(lambda: child.state == state, state)
    time.sleep(0.05)
    assert child.restarts == 0
    assert child.state == state
    assert child.pid is None


def test_without_restart_a_failure_is_final(start: Start) -> None:
    child = start("raise SystemExit(5)", restart=False)
    until(lambda: child.state == "failed", "failed")
    time.sleep(0.05)
    assert child.restarts == 0


def test_a_child_that_runs_once_is_done_at_its_end(start: Start) -> None:
    child = start("pass", restart=False)
    until(lambda: child.state == "done", "done")


def test_a_program_that_cannot_be_started_is_a_failure(start: Start) -> None:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(sys, "executable", "/no/such/python")
        child = start(WAITS, backoff_s=(60.0,))
    until(lambda: child.state == "failed", "failed")
    assert child.detail.startswith("could not be started (No such file")


DEAF = """
    import json, signal, time
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    print(json.dumps({"state": "ready", "detail": ""}), flush=True)
    while True:
        time.sleep(1)
"""


def test_deaf_and_stopped_children_are_ended_side_by_side_within_bounds(start: Start) -> None:
    children = [start(DEAF), start(DEAF), start(WAITS)]
    for child in children:
        until(lambda child=child: child.state == "ready", "ready")
    stopped = children[2].pid
    assert stopped is not None
    os.kill(stopped, signal.SIGSTOP)
    begun = time.monotonic()
    close_all(children)
    assert time.monotonic() - begun < 1.6
    assert [child.pid for child in children] == [None] * 3


def test_closing_before_the_child_has_begun_is_clean(start: Start) -> None:
    child = start(WAITS)
    close_all([child])
    assert child.pid is None


def test_closing_ends_the_wait_for_a_restart(start: Start) -> None:
    child = start("raise SystemExit(1)", backoff_s=(60.0,))
    until(lambda: child.state == "failed", "failed")
    begun = time.monotonic()
    close_all([child])
    assert time.monotonic() - begun < 0.5


@pytest.mark.parametrize(
    "words",
    [
        r"b'words without end\n'",
        "b'no line end at all '",
        r"""b'{"state": "busy", "detail": ""}\n'""",
        r"b'[' * 3000 + b'\n'",
        r"bytes(range(256)) * 10",
    ],
)
def test_a_flood_of_words_costs_the_daemon_next_to_nothing(start: Start, words: str) -> None:
    child = start(
        f"""
        import sys
        while True:
            sys.stdout.buffer.write({words} * 50)
        """
    )
    until(lambda: child.last_words or child.state == "busy", "first words")
    me = psutil.Process()
    before, size = sum(me.cpu_times()[:2]), me.memory_info().rss
    time.sleep(0.5)
    assert sum(me.cpu_times()[:2]) - before < 0.15
    assert me.memory_info().rss - size < 10e6
    begun = time.monotonic()
    close_all([child])
    assert child.pid is None
    assert time.monotonic() - begun < 1.3


@pytest.mark.parametrize("words", ["3", "[]", '"text"', '{"state": 5}', "{}", "null"])
def test_what_is_no_state_is_taken_for_words(start: Start, words: str) -> None:
    child = start(f"import sys; print({words!r}, flush=True); sys.stdin.read()")
    until(lambda: child.last_words == words, "words")
    assert child.state == "starting"


def test_children_end_when_the_daemon_is_killed(tmp_path: Path) -> None:
    (tmp_path / "waits.py").write_text(textwrap.dedent(WAITS), encoding="utf-8")
    daemon = """
        import json, sys, time
        from canticle_daemon.runtime.supervisor import Child
        children = [Child("one", "waits", []), Child("two", "waits", [])]
        while any(child.state != "ready" for child in children):
            time.sleep(0.01)
        print(json.dumps([child.pid for child in children]), flush=True)
        time.sleep(60)
    """
    with subprocess.Popen(
        [sys.executable, "-c", textwrap.dedent(daemon)],
        env=os.environ | {"PYTHONPATH": str(tmp_path)},
        stdout=subprocess.PIPE,
    ) as process:
        assert process.stdout is not None
        pids = json.loads(process.stdout.readline())
        assert all(map(psutil.pid_exists, pids))
        process.kill()
        process.wait()
        until(lambda: not any(map(_runs, pids)), "the children's end", 5.0)


def _runs(pid: int) -> bool:
    try:
        return psutil.Process(pid).status() != psutil.STATUS_ZOMBIE
    except psutil.NoSuchProcess:
        return False
