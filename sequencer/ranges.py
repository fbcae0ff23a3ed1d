"""The values that a sweep goes through: written one by one, or as a range."""

import math
from collections.abc import Mapping
from decimal import Decimal
from fractions import Fraction

from pulsetally.sequencer.models import kind_of
from pulsetally.sequencer.quantities import (
    NUMBER,
    Kind,
    QuantityError,
    is_quantity,
    parse_quantity,
)
from pulsetally.sequencer.yaml_places import nearest

# More values than this on one axis are a slip of the pen.
MOST_VALUES = 100_000
# From a nanosecond to ten years it is 18.
_MOST_DECADES = 30
_WORDS = ("from", "to", "per decade", "points")


class RangeFault(ValueError):
    """An axis is not written as it must be.

    place: which part of it: a key of the range, an index of the list, or None for the whole.
    """

    def __init__(self, place: str | int | None, problem: str, remedy: str) -> None:
        super().__init__(f"{problem}; {remedy}")
        self.place, self.problem, self.remedy = place, problem, remedy


def axis_values(name: str, written: object, kind: Kind) -> list[float]:
    """Return an axis's values in SI units, in order. Raises RangeFault.

    written: a list of quantities, or a range: {from, to, per decade} with logarithmic, or
    {from, to, points} with even steps, both ends included.
    """
    if isinstance(written, Mapping):
        return _range(name, written, kind)
    if not isinstance(written, list):
        raise RangeFault(
            None,
            f"{str(written)[:60]!r} is neither a list nor a range",
            "write [80 us, 100 us], or {from: 10 us, to: 1 ms, per decade: 5}",
        )
    if not written:
        raise RangeFault(None, "a sweep without values does nothing", "write some values")
    return [_value(name, each, kind, index) for index, each in enumerate(written)]


def _value(name: str, written: object, kind: Kind, place: str | int) -> float:
    found = kind_of(written)
    try:
        if found is None or found is kind or written == 0:
            return parse_quantity(written, kind)
    except QuantityError as error:
        if is_quantity(str(written)) and "beyond" in error.problem:
            raise RangeFault(place, error.problem, error.remedy) from error
    raise RangeFault(
        place,
        f"{str(written)[:60]!r} is not {kind.name}, which {name} needs",
        f"write one such as '{kind.example}'",
    )


def _range(name: str, written: Mapping[str, object], kind: Kind) -> list[float]:
    for word in written:
        if word not in _WORDS:
            raise RangeFault(word, f"a range has no {word!r}", nearest(word, [*_WORDS]))
    for word in ("from", "to"):
        if word not in written:
            raise RangeFault(None, f"the range has no {word!r}", f"add '{word}: {kind.example}'")
    spaced = [word for word in ("per decade", "points") if word in written]
    if len(spaced) != 1:
        raise RangeFault(
            None,
            "a range says either how many values per decade or how many points",
            "write {from: 10 us, to: 1 ms, per decade: 5}, or {from: 1 V, to: 4 V, points: 7}",
        )
    begin, end = (_value(name, written[word], kind, word) for word in ("from", "to"))
    if begin == end:
        raise RangeFault("to", "the range begins and ends at one value", "make them differ")
    (word,) = spaced
    count = _whole(written[word], word)
    if word == "points":
        if count < 2:
            raise RangeFault(word, "a range has two ends", "write 2 points or more")
        return _even(begin, end, count)
    # Not their product, which may be too small to tell from 0.
    if min(begin, end) <= 0 <= max(begin, end):
        raise RangeFault(
            "from",
            "a logarithmic range can't touch or pass 0",
            "write both ends above 0, or 'points' for even steps",
        )
    decades = abs(math.log10(abs(end)) - math.log10(abs(begin)))
    if decades > _MOST_DECADES:
        raise RangeFault("to", f"the range spans {decades:.0f} decades", "bring its ends closer")
    steps = max(1, round(decades * count))
    if steps >= MOST_VALUES:
        raise RangeFault(word, f"that are {steps} values", "ask for fewer per decade")
    if end == _decades_away(begin, whole := round(math.log10(end / begin))):
        return _by_decade(begin, whole, count)
    return [begin * (end / begin) ** (step / steps) for step in range(steps)] + [end]


def _even(begin: float, end: float, points: int) -> list[float]:
    """Return evenly spaced values, each as a decimal has it: 0.3, and not 0.3 and a bit."""
    first, last = (Fraction(repr(each)) for each in (begin, end))
    return [float(first + (last - first) * step / (points - 1)) for step in range(points)]


def _decades_away(value: float, decades: int) -> float:
    # In decimal, so that ten times 2 is 20 even where powers of ten are no exact floats.
    return float(Decimal(repr(value)).scaleb(decades))


def _by_decade(begin: float, decades: int, count: int) -> list[float]:
    """Return count values a decade over whole decades, exact at each of them."""
    way = 1 if decades > 0 else -1
    values = []
    for step in range(abs(decades) * count + 1):
        whole, rest = divmod(step, count)
        values.append(_decades_away(begin, way * whole) * 10 ** (way * rest / count))
    return values


def _whole(written: object, place: str) -> int:
    try:
        number = parse_quantity(written, NUMBER)
    except QuantityError as error:
        raise RangeFault(place, error.problem, error.remedy) from error
    if not 1 <= number <= MOST_VALUES or number != int(number):
        raise RangeFault(
            place, f"{number:g} is no count of values", f"write a whole number to {MOST_VALUES}"
        )
    return int(number)
