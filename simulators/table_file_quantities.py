"""Read and write the quantities of a table file: '2.5 V', '10000 um2', '25 uC/cm2', '20 %'."""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
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

    name: as a person says it. unit: what a value in SI units is written with, "" for a plain
    number. scaled: symbols that take SI prefixes. factors: other units and what one of
    them is in SI units, as decimal text. offsets: what is added after that. example: a well
    written one. shown: units that are tried first in writing.
    whole: an integer, from 0 on unless signed.
    """

    name: str
    unit: str = ""
    scaled: tuple[str, ...] = ()
    factors: Mapping[str, str] = field(default_factory=dict)
    offsets: Mapping[str, str] = field(default_factory=dict)
    example: str
    shown: tuple[str, ...] = ()
    whole: bool = False
    signed: bool = False

    @property
    def units(self) -> str:
        """Name the units of this kind, for a message."""
        if not self.scaled and not self.factors:
            return ""
        named = ", ".join([*self.scaled[:1], *(each for each in self.factors if each.isascii())])
        prefixes = ", with or without an SI prefix" if self.scaled else ""
        return f" (its unit is {named}{prefixes})"


VOLTAGE = Kind(name="a voltage", unit="V", scaled=("V",), example="2.5 V")
TIME = Kind(
    name="a time",
    unit="s",
    scaled=("s",),
    factors={"min": "60", "h": "3600", "d": "86400"},
    example="100 us",
)
RESISTANCE = Kind(
    name="a resistance",
    unit="ohm",
    # The Greek letter and the sign for ohm are two characters.
    scaled=("ohm", "Ohm", "\N{GREEK CAPITAL LETTER OMEGA}", "\N{OHM SIGN}"),
    example="220 kohm",
)
CAPACITANCE = Kind(name="a capacitance", unit="F", scaled=("F",), example="12 pF")
CURRENT = Kind(name="a current", unit="A", scaled=("A",), example="1 pA")
FREQUENCY = Kind(name="a frequency", unit="Hz", scaled=("Hz",), example="100 MHz")
ENERGY = Kind(name="an energy", unit="eV", scaled=("eV",), example="0.6 eV")
LENGTH = Kind(name="a length", unit="m", scaled=("m",), example="150 nm")
AREA = Kind(
    name="an area",
    unit="m2",
    factors={"um2": "1e-12", "mm2": "1e-6", "cm2": "1e-4", "nm2": "1e-18", "m2": "1"}
    | {"um²": "1e-12", "µm²": "1e-12", "µm2": "1e-12", "mm²": "1e-6", "cm²": "1e-4", "m²": "1"},
    example="10000 um2",
    shown=("um2",),
)
POLARIZATION = Kind(
    name="a polarization",
    unit="C/m2",
    factors={"uC/cm2": "1e-2", "C/m2": "1", "µC/cm2": "1e-2", "µC/cm²": "1e-2", "C/m²": "1"},
    example="25 uC/cm2",
    shown=("uC/cm2",),
)
TEMPERATURE = Kind(
    name="a temperature",
    unit="K",
    factors={"K": "1", "degC": "1", "°C": "1"},
    offsets={"degC": "273.15", "°C": "273.15"},
    example="300 K",
)
PER_KELVIN = Kind(
    name="a change per kelvin", unit="/K", factors={"/K": "1", "%/K": "1e-2"}, example="-0.2 %/K",
    shown=("%/K",),
)  # fmt: skip
SHARE = Kind(
    name="a share",
    factors={"%": "1e-2", "ppm": "1e-6"},
    example="20 %",
    shown=("%",),
)
NUMBER = Kind(name="a plain number", example="1.5")
COUNT = Kind(name="a whole number", example="100", whole=True)
INTEGER = Kind(name="a whole number of either sign", example="-310", whole=True, signed=True)

KINDS = (
    VOLTAGE, TIME, RESISTANCE, CAPACITANCE, CURRENT, FREQUENCY, ENERGY, LENGTH, AREA,
    POLARIZATION, TEMPERATURE, PER_KELVIN, SHARE, NUMBER, COUNT, INTEGER,
)  # fmt: skip

_WRITTEN = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,5})?)\s*(\S*)\s*", re.ASCII)
_NOT_FINITE = re.compile(r"\s*[+-]?\.?(nan|inf|infinity)\b.*", re.IGNORECASE)
_PREFIXES = "QRYZEPTGMkmuµμnpfazyrq"
_MOST = 1e300


def parse_quantity(written: str, kind: Kind) -> float | int:
    """Read a quantity of a kind; return it in SI units, as an int for a whole kind.

    0 needs no unit, since 0 of anything is 0 (but not of degrees). Raises QuantityError.
    """
    found = _WRITTEN.fullmatch(written)
    if _NOT_FINITE.fullmatch(written) or (found and abs(float(found[1])) > _MOST):
        raise QuantityError(f"{written[:60]!r} is not a finite number", _write(kind))
    if not found:
        raise QuantityError(f"{written[:60]!r} is not {kind.name}{kind.units}", _write(kind))
    number, unit = found[1], found[2]
    if kind.whole:
        return _whole(written, number, unit, kind)
    if not unit:
        if kind.unit and float(number) != 0:
            unit = kind.example.split()[-1]
            raise QuantityError(
                f"{number} has no unit; {kind.name} needs one",
                f"write the unit, for example '{number} {unit}'",
            )
        return float(number)
    if unit in kind.factors:
        # Decimals, so that 10000 um2 is the very number 1e-8.
        exact = Decimal(number) * Decimal(kind.factors[unit])
        return float(exact + Decimal(kind.offsets.get(unit, "0")))
    for symbol in kind.scaled:
        prefix = unit.removesuffix(symbol)
        if unit == symbol:
            # Not for quantiphy, which would take the m of metres for milli.
            return float(number)
        if unit.endswith(symbol) and len(prefix) == 1 and prefix in _PREFIXES:
            # Of the prefix alone, since quantiphy ignores it behind an exponent: 1e3 mV is 1 V.
            factor = float(Quantity(f"1 {prefix}{symbol}", units=symbol))
            value = float(Decimal(number) * Decimal(repr(factor)))
            if abs(value) > _MOST:
                raise QuantityError(f"{written[:60]!r} is not a finite number", _write(kind))
            return value
    raise QuantityError(f"{written[:60]!r} is not {kind.name}{kind.units}", _write(kind))


def format_quantity(value: float, kind: Kind) -> str:
    """Write a finite value in SI units so that parse_quantity reads the same value back."""
    if kind.whole:
        return str(int(value))
    texts = []
    for unit in kind.shown:
        number = float(Decimal(value) / Decimal(kind.factors[unit]))
        # A number that can be read may have a hundredfold in another unit that can't.
        if abs(number) <= _MOST:
            texts.append(f"{_plain(number)} {unit}")
    if kind.scaled:
        texts.append(Quantity(value, kind.unit).render(prec="full", form="si"))
    # The shortest that is exact; what is left is the number itself with its SI unit.
    exact = [text for text in texts if len(text) < 20 and parse_quantity(text, kind) == value]
    return (exact or [f"{_plain(value)} {kind.unit}".rstrip()])[0]


def _whole(written: str, number: str, unit: str, kind: Kind) -> int:
    exact = Decimal(number)
    if unit or exact != exact.to_integral_value() or (exact < 0 and not kind.signed):
        least = "" if kind.signed else " from 0 on"
        raise QuantityError(f"{written[:60]!r} is not {kind.name}{least}", _write(kind))
    return int(exact)


def _plain(value: float) -> str:
    short = f"{value:.12g}"
    return short if float(short) == value else repr(value)


def _write(kind: Kind) -> str:
    return f"write {kind.name} such as '{kind.example}'"


def is_finite(value: object) -> bool:
    """Say whether a value is a number that a file can hold as such."""
    return isinstance(value, (int, float)) and math.isfinite(value)
