"""What is beyond any cell and wiring is refused; what is allowed can be served."""

import math
from typing import Any

import pytest

from pulsetally.simulators import cell, circuit, wear
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.settings import SimulationSettings
from pulsetally.simulators.table_file import parse_table
from pulsetally.simulators.table_file_yaml import TableFileError
from pulsetally.simulators.wear import (
    Breakdown,
    Fatigue,
    ImprintGrowth,
    Incubation,
    Retention,
    Thermal,
)
from tests.simulators.serving import serve_a_pulse

CLASSES: list[tuple[type[Any], Any, dict[str, float]]] = [
    (CellDescription, cell.RANGES, {}),
    (Wiring, circuit.RANGES, {}),
    (Incubation, wear.RANGES["Incubation"], {"seconds": 1e-6}),
    (ImprintGrowth, wear.RANGES["ImprintGrowth"], {"volts_per_decade": 0.05}),
    (Fatigue, wear.RANGES["Fatigue"], {}),
    (Retention, wear.RANGES["Retention"], {}),
    (Thermal, wear.RANGES["Thermal"], {}),
    (Breakdown, wear.RANGES["Breakdown"], {}),
]
ROWS = [
    (kind, name, least, largest, others)
    for kind, ranges, others in CLASSES
    for name, (least, largest) in ranges.items()
]


def test_every_class_of_wear_has_its_ranges() -> None:
    assert {kind.__name__ for kind, _, _ in CLASSES[2:]} == set(wear.RANGES)


@pytest.mark.parametrize(("kind", "name", "least", "largest", "others"), ROWS)
def test_both_ends_of_a_range_are_allowed_and_nothing_beyond(
    kind: type[Any], name: str, least: float, largest: float, others: dict[str, float]
) -> None:
    for number in (least, largest):
        assert getattr(kind(**others | {name: number}), name) == number
    for number in (math.nextafter(least, -math.inf), math.nextafter(largest, math.inf)):
        if number < math.inf:
            with pytest.raises(ValueError, match=rf"{name} is .*it must be"):
                kind(**others | {name: number})


# Each of them once ended in an overflow, or in steps that can't be solved, during a pulse.
REFUSED = {
    "cell: {area: 1e200 m2}": "area is 1e+200; it must be from 1e-20 to 1",
    "cell: {thickness: 1e-200 m}": "thickness is 1e-200",
    "cell: {relative permittivity: 1e300}": "relative permittivity is 1e+300",
    "cell: {remanent polarization: 1e300 C/m2}": "it must be from 0 to 100",
    "cell: {activation spread: 1e300 V}": "activation spread is 1e+300",
    "cell: {attempt time: 1e-300 s}": "attempt time is 1e-300",
    "cell: {imprint growth: {shift per decade: 50 mV, activation energy: 50 eV}}": "from 0 to 10",
    "cell: {fatigue: {scale cycles: 1e-300, exponent: 20}}": "scale cycles is 1e-300",
    "cell: {retention: {law: stretched, exponent: 100}}": "exponent is 100.0",
    "cell: {breakdown: {short resistance: 1e-300 ohm}}": "it must be from 0.001 to",
    "wiring: {probe: {capacitance: 1e300 F}}": "probe.capacitance is 1e+300",
    "wiring: {source resistance: 1e-300 ohm, series resistance: 0}": "must be at least 0.001",
    "faults: [{fault: cell shorts, at: 1 s, short resistance: 1e-300 ohm}]": "from 0.001 to 1e+06",
}


@pytest.mark.parametrize(("text", "said"), REFUSED.items())
def test_a_table_file_that_could_not_be_served_is_refused(text: str, said: str) -> None:
    with pytest.raises(TableFileError) as error:
        parse_table(f"table: t\n{text}\n", file="t.yaml")
    (mistake,) = error.value.mistakes
    assert said in str(mistake)
    assert mistake.line == 2


# The worst that is allowed, and laws that overflowed before they came to nothing.
SERVED = {
    "smallest": CellDescription(area=1e-20),
    "thinnest": CellDescription(thickness=1e-10),
    "most charge": CellDescription(remanent_polarization=100.0),
    "hottest": CellDescription(
        imprint_growth=ImprintGrowth(volts_per_decade=0.05, activation_ev=10.0),
        retention=Retention(activation_ev=10.0),
        thermal=Thermal(kelvin=1e4, reference_kelvin=1.0),
    ),
    "least cycles": CellDescription(fatigue=Fatigue(scale_cycles=1e-6, exponent=20.0)),
    "shortest onset": CellDescription(
        retention=Retention(law="stretched", onset_seconds=1e-15, exponent=20.0)
    ),
    "hardest short": CellDescription(breakdown=Breakdown(scale_cycles=1e-2, short_ohms=1e-3)),
}


@pytest.mark.parametrize("name", SERVED)
def test_the_worst_that_is_allowed_can_be_served(name: str) -> None:
    answers = serve_a_pulse(SimulationSettings(cell=SERVED[name]))
    assert answers == ['1;0,"No error"'] * 2
