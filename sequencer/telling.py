"""Tell results and errors at the edge: console, JSON, sentences, exit statuses."""

import json
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

import typer

if TYPE_CHECKING:
    from rich.console import Console

DONE, FAILED, WRONG_INPUT, OUTPUTS_UNKNOWN = 0, 1, 2, 3


def silence_output() -> None:
    """Keep Python from failing once more on an output that can't be written."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def console() -> "Console":
    """Return the console that results are printed on."""
    from rich.console import Console

    return Console(highlight=False)


def print_json(value: object) -> None:
    """Print a result for programs: one line of ASCII."""
    typer.echo(json.dumps(value, ensure_ascii=True, allow_nan=False))


def complain(words: str) -> None:
    """Print an error's sentences on standard error, made harmless."""
    from pulsetally.sequencer.progress import printable

    for line in words.splitlines():
        typer.echo(printable(line, 5000), err=True)


@contextmanager
def told() -> Iterator[None]:
    """Turn our errors into sentences and exit statuses; there is no traceback for them."""
    from pulsetally.drivers.errors import PulsetallyError
    from pulsetally.sequencer.errors import (
        InputError,
        LogbookError,
        OutputsNotConfirmed,
        PlanError,
    )
    from pulsetally.sequencer.rehearsal import TableRefused

    statuses: list[tuple[type[Exception], int]] = [
        (InputError, WRONG_INPUT),
        (PlanError, WRONG_INPUT),
        (TableRefused, WRONG_INPUT),
        # Once a run has begun, the engine itself takes care of a logbook that fails.
        (LogbookError, WRONG_INPUT),
        (OutputsNotConfirmed, OUTPUTS_UNKNOWN),
        (PulsetallyError, FAILED),
    ]
    try:
        yield
    except PulsetallyError as error:
        complain(str(error))
        status = next(code for kind, code in statuses if isinstance(error, kind))
        raise typer.Exit(status) from error
    except OSError as error:
        silence_output()
        complain(f"the output can't be written ({error.strerror})")
        raise typer.Exit(FAILED) from error
