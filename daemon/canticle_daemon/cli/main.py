"""The `canticle` command."""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence

import typer

from canticle_daemon import __version__
from canticle_daemon.cli.rehearse import rehearse
from canticle_daemon.cli.replay import replay
from canticle_daemon.cli.run import run
from canticle_daemon.errors import AdapterError, CanticleError, ConfigError, LogFormatError

app = typer.Typer(
    name="canticle",
    help="Tire saving on banked ovals: friction demand, turn-ins and cues beside a simulator.",
    invoke_without_command=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
app.command()(rehearse)
app.command()(run)
app.command()(replay)


def _print_version(wanted: bool) -> None:
    if wanted:
        print(f"canticle {__version__}")
        raise typer.Exit


@app.callback()
def _common(
    context: typer.Context,
    version: bool = typer.Option(
        False, "--version", callback=_print_version, is_eager=True, help="Show the version."
    ),
) -> None:
    """Tire saving on banked ovals: friction demand, turn-ins and cues beside a simulator."""
    if context.invoked_subcommand is None:
        print(context.get_help())


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line; return the exit status: 0 done, 1 a fault, 2 a wrong request."""
    try:
        code = app(args=None if arguments is None else list(arguments), standalone_mode=False)
    except typer.Abort:
        return 1
    except (ConfigError, LogFormatError, AdapterError) as error:
        return _fail(str(error), 2)
    except CanticleError as error:
        return _fail(str(error), 1)
    except Exception as error:
        usage = _usage_text(error)
        if usage is None:
            raise
        return _fail(usage, 2)
    return code if isinstance(code, int) else 0


def _usage_text(error: Exception) -> str | None:
    """Return what click says of a wrong command line, or None for any other error."""
    format_message = getattr(error, "format_message", None)
    if format_message is None:
        return None
    context = getattr(error, "ctx", None)
    command = "" if context is None else f" {context.info_name}" if context.parent else ""
    return f"{' '.join(str(format_message()).split())} (see canticle{command} --help)"


def _fail(text: str, code: int) -> int:
    print(f"canticle: {' '.join(text.split())}", file=sys.stderr)
    return code


def entry_point() -> None:
    """Run as the installed command."""
    _fill_standard_streams()
    code = main()
    _flush_output()
    sys.exit(code)


def _fill_standard_streams() -> None:
    """Open what the caller closed: else the next socket would take its number, or print fail."""
    for number in range(3):
        try:
            os.fstat(number)
        except OSError:
            os.open(os.devnull, os.O_RDWR)  # takes the lowest free number: this one
    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:
            setattr(sys, name, open(os.devnull, "w", encoding="utf-8"))


def _flush_output() -> None:
    """Let a reader that has gone stay unnoticed: Python's own last flush would tell of it."""
    try:
        sys.stdout.flush()
    except OSError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
