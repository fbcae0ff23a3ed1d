"""Build rows of an instrument's command table for the kinds of setting that recur."""

from collections.abc import Callable, Mapping
from typing import TypeVar

from pulsetally.simulators.scpi_device import Call, Command
from pulsetally.simulators.scpi_headers import short_form
from pulsetally.simulators.scpi_numbers import format_integer, format_real
from pulsetally.simulators.scpi_parameters import Number, Parameter, Switch, Word

T = TypeVar("T")


def quantity(
    pattern: str,
    parameter: Number,
    put: Callable[[float], None],
    get: Callable[[], float],
    *,
    write: Callable[[float], str] = format_real,
    coupled: bool = False,
) -> Command:
    """Return the row of a number that is set and asked for."""
    return Command(
        pattern=pattern,
        parameters=(parameter,),
        execute=lambda call: put(call.number()),
        answer=lambda _: write(get()),
        coupled=coupled,
    )


def channel_quantity(
    pattern: str,
    parameter: Number,
    put: Callable[[int, float], None],
    get: Callable[[int], float],
    *,
    write: Callable[[float], str] = format_real,
) -> Command:
    """Return the row of a number that each channel has; put and get count channels from 0."""

    def channel(call: Call) -> int:
        return call.suffixes[0] - 1

    return Command(
        pattern=pattern,
        parameters=(parameter,),
        execute=lambda call: put(channel(call), call.number()),
        answer=lambda call: write(get(channel(call))),
    )


def whole(value: float) -> str:
    """Write a number that is an integer."""
    return format_integer(int(value))


def choice(
    pattern: str,
    words: Mapping[str, T],
    put: Callable[[T], None],
    get: Callable[[], T],
    *,
    coupled: bool = False,
) -> Command:
    """Return the row of a setting with a word for each value.

    words: spelled with the short form in capitals. Several may mean the same; the first
    of them is answered.
    """
    meanings = {short_form(word): value for word, value in words.items()}

    def answer(_: Call) -> str:
        present = get()
        return next(word for word, value in meanings.items() if value == present)

    return Command(
        pattern=pattern,
        parameters=(Word(tuple(words)),),
        execute=lambda call: put(meanings[call.word()]),
        answer=answer,
        coupled=coupled,
    )


def on_off(
    pattern: str,
    put: Callable[[bool], None],
    get: Callable[[], bool],
    *,
    parameter: Parameter | None = None,
) -> Command:
    """Return the row of a setting that is on or off; answered as 1 or 0.

    parameter: where a family takes less than ON, OFF and every number.
    """
    return Command(
        pattern=pattern,
        parameters=(Switch() if parameter is None else parameter,),
        execute=lambda call: put(call.switch()),
        answer=lambda _: "1" if get() else "0",
    )


def action(pattern: str, do: Callable[[], None]) -> Command:
    """Return the row of a command without parameters."""
    return Command(pattern=pattern, execute=lambda _: do())


def question(pattern: str, tell: Callable[[], str]) -> Command:
    """Return the row of a query without parameters."""
    return Command(pattern=pattern, answer=lambda _: tell())
