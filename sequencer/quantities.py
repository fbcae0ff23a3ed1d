"""Read quantities as people write them, and write them as people read them.

'2.5 V', '100 us', '220 kohm', '10000 um2' become SI floats and back. Numbers with SI prefixes
are written by quantiphy; what is ours is reading them, which units belong to which kind of
quantity, and saying so when one is wrong.
"""

import math
import re
from dataclasses import dataclass
from decimal import Decimal

from quantiphy import Quantity


class QuantityError(ValueError):
    """A quantity is not written as its kind demands.

    problem: what was found and what is allowed; remedy: what to write.
    """

    def __init__(self, problem: str, remedy: str) -> None:
        super().__init__(f"{problem}; {remedy}")
        self.problem, self.remedy = problem, remedy


@dataclass(frozen=True, slots=True, kw_only=True)
class Kind:
    """Describe one kind of quantity.

    name: as a person says it. unit: the SI unit. scaled: symbols that take SI prefixes.
    fixed: other units, with their factor to the SI unit. example: a well written one.
    """

    name: str
    unit: str
    scaled: tuple[str, ...]
    fixed: dict[str, float]
    example: str


VOLTAGE = Kind(name="a voltage", unit="V", scaled=("V",), fixed={}, example="2.5 V")
TIME = Kind(
    name="a time",
    unit="s",
    scaled=("s",),
    fixed={"min": 60.0, "h": 3600.0, "d": 86400.0},
    example="100 us",
)
RESISTANCE = Kind(
    name="a resistance", unit="ohm", scaled=("ohm", "Ohm", "Ω", "Ω"), fixed={}, example="220 kohm"
)
CAPACITANCE = Kind(name="a capacitance", unit="F", scaled=("F",), fixed={}, example="12 pF")
CURRENT = Kind(name="a current", unit="A", scaled=("A",), fixed={}, example="1 nA")
AREA = Kind(
    name="an area",
    unit="m2",
    scaled=(),
    fixed={
        **{f"{p}m{two}": f * f for p, f in (("u", 1e-6), ("µ", 1e-6), ("n", 1e-9), ("m", 1e-3))
           for two in ("2", "²")},
        "cm2": 1e-4, "cm²": 1e-4, "m2": 1.0, "m²": 1.0,
    },
    example="10000 um2",
)  # fmt: skip
LENGTH = Kind(name="a length", unit="m", scaled=("m",), fixed={}, example="150 nm")
SHARE = Kind(name="a share", unit="%", scaled=(), fixed={"%": 0.01}, example="50 %")
NUMBER = Kind(name="a plain number", unit="", scaled=(), fixed={}, example="5")

KINDS = (VOLTAGE, TIME, RESISTANCE, CAPACITANCE, CURRENT, AREA, LENGTH, SHARE, NUMBER)

_NUMBER = r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
_WRITTEN = re.compile(rf"\s*({_NUMBER})\s*(\S*)\s*")
# The powers of ten of the SI prefixes: SI Brochure, 9th edition (2019), table 7. Micro is
# written in three ways.
_PREFIXES = {
    "Q": 30, "R": 27, "Y": 24, "Z": 21, "E": 18, "P": 15, "T": 12, "G": 9, "M": 6, "k": 3,
    "m": -3, "u": -6, "µ": -6, "μ": -6, "n": -9, "p": -12, "f": -15, "a": -18, "z": -21,
    "y": -24, "r": -27, "q": -30,
}  # fmt: skip
# Beyond this, products of two quantities stop being finite.
_LARGEST = 1e300


def parse_quantity(written: object, kind: Kind) -> float:
    """Read a quantity of the given kind; return it in SI units.

    written: what stands in the file: text, or a number where the kind has no unit (0 is
    accepted for every kind, since 0 of anything is 0). Raises QuantityError.
    """
    if isinstance(written, bool) or not isinstance(written, (str, int, float)):
        raise _wrong(written, kind, "is not")
    if isinstance(written, (int, float)):
        if abs(written) > _LARGEST or not math.isfinite(written):
            shown = f"{written}"[:40]
            raise QuantityError(f"{shown} is not a finite number", f"write {_example(kind)}")
        if not kind.unit or written == 0:
            return float(written)
        raise QuantityError(
            f"{written} has no unit; {kind.name} needs one", f"write {_guess(written, kind)}"
        )
    found = _WRITTEN.fullmatch(written)
    if not found:
        raise _wrong(written, kind, "is not")
    number, unit = found[1], found[2]
    if not math.isfinite(float(number)):
        raise QuantityError(f"{written[:60]!r} is beyond every range", f"write {_example(kind)}")
    if not unit:
        return parse_quantity(float(number), kind)
    value = _scaled(number, unit, kind)
    if value is None:
        raise _wrong(written, kind, "is not")
    if abs(value) > _LARGEST:
        raise QuantityError(f"{written[:60]!r} is beyond every range", f"write {_example(kind)}")
    return value


def _scaled(number: str, unit: str, kind: Kind) -> float | None:
    """Return a number with a unit in SI units; None if the unit is none of the kind."""
    if float(number) == 0:
        power: int | None = 0 if unit in kind.fixed else _power(unit, kind)
        return None if power is None else 0.0
    if kind is SHARE and unit == "%":
        # In decimal, so that what was written as 1.1 % is read as 0.011 and not nearly so.
        return float(Decimal(number).scaleb(-2))
    if unit in kind.fixed:
        return float(number) * kind.fixed[unit]
    power = _power(unit, kind)
    return None if power is None else float(Decimal(number).scaleb(power))


def _power(unit: str, kind: Kind) -> int | None:
    for symbol in kind.scaled:
        # The symbol alone comes first, or the m of metres would be milli.
        if unit == symbol:
            return 0
        if unit.endswith(symbol) and (prefix := unit.removesuffix(symbol)) in _PREFIXES:
            return _PREFIXES[prefix]
    return None


def quantity_pattern(kind: Kind, *, least: float | None = None, above: float | None = None) -> str:
    """Return a regular expression for the texts that parse_quantity reads, for schemas.

    It holds in Python and in ECMA-262. least, above: bounds in SI units, of which a pattern can
    say no more than the sign.
    """
    units = [*kind.fixed]
    if kind.scaled:
        symbols = "|".join(kind.scaled)
        units.append(f"[{''.join(_PREFIXES)}]?(?:{symbols})")
    body = rf"{_NUMBER}\s*(?:{'|'.join(units)})" if units else _NUMBER
    sign = ""
    if above is not None and above >= 0:
        sign = r"(?=\s*\+?[0.]*[1-9])"
    elif units:
        # 0 of anything is 0.
        body += r"|[+-]?(?:0+\.?0*|\.0+)(?:[eE][+-]?[0-9]+)?"
    if least is not None and least >= 0:
        sign += r"(?!\s*-[0.]*[1-9])"
    return rf"^{sign}\s*(?:{body})\s*$"


def is_quantity(written: str) -> bool:
    """Say whether a text begins like a quantity rather than like a name."""
    return bool(_WRITTEN.fullmatch(written))


def format_quantity(value: float, kind: Kind) -> str:
    """Write a value in SI units so that parse_quantity reads the same value back."""
    if kind is AREA:
        return f"{_plain(value * 1e12)} um2"
    if kind is SHARE:
        number = Decimal(repr(value)).scaleb(2)
        short = f"{_plain(float(number))} %"
        # 1.0E+2 % is right too, but nobody writes it.
        return short if parse_quantity(short, kind) == value else f"{number} %"
    if not kind.unit:
        return _plain(value)
    text = Quantity(value, kind.unit).render(prec="full", form="si")
    if parse_quantity(text, kind) == value:
        return text
    return f"{value!r} {kind.unit}"


def plain_quantity(value: float, kind: Kind) -> str:
    """Write a value as format_quantity does, but 1000 s and not 1 ks."""
    if kind is TIME and abs(value) >= 1:
        return f"{_plain(value)} {kind.unit}"
    return format_quantity(value, kind)


def show_quantity(value: float, unit: str, digits: int = 4) -> str:
    """Write a value for reading, with so many significant digits and an SI prefix."""
    if not math.isfinite(value):
        return f"{value} {unit}".strip()
    if unit == "m2":
        return f"{value * 1e12:.{digits}g} um2"
    if unit == "%":
        return f"{value * 100:.{digits}g} %"
    if not unit:
        return f"{value:.{digits}g}"
    return Quantity(value, unit).render(prec=digits - 1, form="si")


def show_duration(seconds: float) -> str:
    """Write a duration for reading: 0.4 s, 12 s, 3 min 20 s, 2 h 05 min, 3 d 04 h."""
    if seconds < 10:
        return f"{seconds:.1f} s"
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60:02d} s"
    if whole < 86400:
        return f"{whole // 3600} h {whole % 3600 // 60:02d} min"
    return f"{whole // 86400} d {whole % 86400 // 3600:02d} h"


def _plain(value: float) -> str:
    short = f"{value:.12g}"
    return short if float(short) == value else repr(value)


def _example(kind: Kind) -> str:
    return kind.example if not kind.unit else f"{kind.name} such as '{kind.example}'"


def _guess(number: float, kind: Kind) -> str:
    return f"the unit, for example '{number} {kind.example.split()[-1]}'"


def _wrong(written: object, kind: Kind, verb: str) -> QuantityError:
    shown = repr(written[:60]) if isinstance(written, str) else f"a {_yaml_name(written)}"
    allowed = ", ".join([*kind.scaled[:1], *kind.fixed][:5])
    units = f" (its unit is {allowed}, with or without an SI prefix)" if kind.scaled else ""
    if not kind.scaled and kind.fixed:
        units = f" (its unit is {allowed})"
    return QuantityError(f"{shown} {verb} {kind.name}{units}", f"write {_example(kind)}")


def _yaml_name(written: object) -> str:
    if isinstance(written, dict):
        return "group of settings"
    if isinstance(written, list):
        return "list"
    if written is None:
        return "blank"
    return "yes-or-no value" if isinstance(written, bool) else type(written).__name__
