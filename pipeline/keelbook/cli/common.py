"""What every command shares: errors on standard error with their exit code, results on standard output."""

import functools
import json
import os
import sys
import time
from collections.abc import Callable
from typing import Any, ParamSpec, TypeVar

import click

from keelbook.errors import KeelbookError

P = ParamSpec("P")
R = TypeVar("R")

INTERNAL = 1
SHOWN = 20
"""Problems printed in full; the rest are counted."""

as_json = click.option("--json", "json_", is_flag=True, help="Print the result as JSON.")


def reports_errors(function: Callable[P, R]) -> Callable[P, R]:
    """Print what a user can put right and leave with its exit code; anything else is an internal error, code 1."""

    @functools.wraps(function)
    def wrapped(*args: P.args, **kwargs: P.kwargs) -> R:
        try:
            return function(*args, **kwargs)
        except KeelbookError as error:
            if kwargs.get("json_"):
                problems = [vars(problem) for problem in error.problems]
                click.echo(json.dumps({"error": type(error).__name__, "problems": problems}, indent=2))
            end_of_steps(quiet=False)
            for problem in error.problems[:SHOWN]:
                click.echo(_printable(str(problem)), err=True)
            if len(error.problems) > SHOWN:
                click.echo(f"and {len(error.problems) - SHOWN} more", err=True)
            sys.exit(error.exit_code)
        except BrokenPipeError:
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            sys.exit(INTERNAL)
        except (click.ClickException, click.exceptions.Exit, click.Abort):
            raise
        except Exception as error:
            if os.environ.get("KEELBOOK_TRACEBACK"):
                raise
            click.echo(
                f"internal error: {type(error).__name__}: {_printable(str(error))}\n"
                "    to do: this is a fault of keelbook, not of your files; nothing was published. "
                "Set KEELBOOK_TRACEBACK=1, run again and report what it prints",
                err=True,
            )
            sys.exit(INTERNAL)

    return wrapped


def _printable(text: str) -> str:
    return "".join(c if c.isprintable() or c == "\n" else c.encode("unicode_escape").decode() for c in text)


def narrator(quiet: bool, log_json: bool = False) -> Callable[[str], None]:
    """Return a function that tells the steps of a run on standard error.

    On a terminal one line is written over; elsewhere every step is a line; as JSON with its time on request.
    """
    terminal = sys.stderr.isatty()

    def say(text: str) -> None:
        if log_json:
            stamp = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())
            click.echo(json.dumps({"time": stamp, "step": text}), err=True)
        elif terminal and not quiet:
            click.echo(f"\r\033[K{text}", nl=False, err=True)
        elif not quiet:
            click.echo(text, err=True)

    return say


def end_of_steps(quiet: bool, log_json: bool = False) -> None:
    """Clear the line of steps on a terminal, before results are printed."""
    if sys.stderr.isatty() and not quiet and not log_json:
        click.echo("\r\033[K", nl=False, err=True)


def dump(value: Any) -> None:
    """Print a result as JSON; what is not a number is null."""
    click.echo(json.dumps(_plain(value), indent=2, allow_nan=False))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    if isinstance(value, float) and (value != value or value in (float("inf"), float("-inf"))):
        return None
    return value.item() if hasattr(value, "item") else value
