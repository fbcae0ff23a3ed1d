"""Refuse what no cell and no wiring has, and no equation with doubles can be solved for.

A slip in a prefix or an exponent is told where it is written, and not by a simulated bench that
fails in the middle of a pulse. The ranges are wide (invented): a decade or more beyond whatever
is on a bench, with some decades left to where the solver or a law fails.
"""

import math
from collections.abc import Mapping

# Name of a field -> least and largest value, in its SI unit.
Ranges = Mapping[str, tuple[float, float]]


def check_ranges(described: object, ranges: Ranges) -> None:
    """Refuse a field beyond its range with ValueError; None and an infinite largest are allowed."""
    for name, (least, largest) in ranges.items():
        number = getattr(described, name)
        if number is None or least <= number <= largest:
            continue
        allowed = f"at least {least:g}"
        if largest < math.inf:
            allowed = f"from {least:g} to {largest:g}"
        raise ValueError(f"{name} is {number}; it must be {allowed}")
