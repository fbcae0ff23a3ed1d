"""The wiring's currents, against closed forms."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import (
    CLAMP_FOLD_VOLTS,
    CLAMP_KNEE_AMPERES,
    THERMAL_VOLTS,
    Circuit,
    Wiring,
    clamp_current,
    diode_branch_current,
    diode_drop,
    wright_omega,
)


def connected(wiring: Wiring, cell: CellDescription | None = None) -> Circuit:
    circuit = Circuit(cell or CellDescription(), wiring)
    circuit.relay_on = True
    return circuit


# A: k T/q at 27 degrees Celsius with the exact constants of the 2019 SI.
def test_thermal_voltage() -> None:
    assert pytest.approx(0.02586492579, abs=5e-12) == THERMAL_VOLTS


# A: V = V_t ln(1 + I/I_s), I = 1 mA, I_s = 1e-14 A, 27 degrees Celsius.
def test_shockley_drop() -> None:
    assert diode_drop(1e-3, 1e-14) == pytest.approx(0.6551181180, abs=1e-9)


# A: 59.5562 mV for each decade at 27 degrees Celsius, emission 1.
def test_drop_grows_by_a_constant_for_each_decade() -> None:
    decade = diode_drop(1e-2, 1e-14) - diode_drop(1e-3, 1e-14)
    assert decade == pytest.approx(59.5562e-3, abs=5e-8)


# A: Lambert's W; 5 V across 1 kOhm and the diode above.
def test_diode_behind_a_resistor() -> None:
    amperes, _ = diode_branch_current(5.0, 1000.0, 1e-14, THERMAL_VOLTS)
    assert amperes == pytest.approx(4.3071121676e-3, abs=5e-14)
    assert 5 - 1000 * amperes == pytest.approx(0.6928878324, abs=5e-11)


@given(
    across_volts=st.floats(-20, 20),
    ohms=st.sampled_from([50.0, 1e3, 220e3]),
    saturation=st.sampled_from([1e-14, 1e-9, 1e-6]),
)
def test_diode_branch_satisfies_kirchhoff(
    across_volts: float, ohms: float, saturation: float
) -> None:
    amperes, siemens = diode_branch_current(across_volts, ohms, saturation, THERMAL_VOLTS)
    assert amperes >= -saturation
    assert 0 <= siemens < 1 / ohms
    if amperes > -0.5 * saturation:
        drops = ohms * amperes + diode_drop(amperes, saturation)
        assert drops == pytest.approx(across_volts, abs=1e-9)


@given(st.floats(-600, 1e6))
def test_wright_omega_solves_its_equation(argument: float) -> None:
    omega = wright_omega(argument)
    assert omega + math.log(omega) == pytest.approx(argument, rel=1e-13, abs=1e-12)


# A: 2 V behind 50 Ohm into 50 Ohm and into 1 MOhm.
DIVIDERS = [(50.0, 1.000000), (1e6, 1.999900005)]


@pytest.mark.parametrize(("load_ohms", "volts"), DIVIDERS)
def test_source_resistance_and_load_divide(load_ohms: float, volts: float) -> None:
    circuit = connected(Wiring(source_ohms=50, series_ohms=0, probe_ohms=load_ohms))
    assert 2 * circuit.gain == pytest.approx(volts, abs=5e-10)
    amperes, _, _ = circuit.node_current(2.0, volts)
    assert amperes == pytest.approx(0, abs=1e-11)


def test_node_capacitance_is_film_and_probe() -> None:
    circuit = Circuit(CellDescription(thickness=200e-9), Wiring(probe_farads=12e-12))
    assert circuit.farads == pytest.approx(221.3547e-12 + 12e-12, abs=0.00005e-12)


# A: Ohm's law at every element.
def test_node_current_is_what_the_branch_brings_less_what_leaks() -> None:
    circuit = connected(
        Wiring(source_ohms=50, series_ohms=950, probe_ohms=10e6), CellDescription(leak_ohms=1e6)
    )
    amperes, siemens, emf_siemens = circuit.node_current(4.0, 1.0)
    assert amperes == pytest.approx(3e-3 - 1e-6 - 1e-7, rel=1e-12)
    assert siemens == pytest.approx(-(1e-3 + 1e-6 + 1e-7), rel=1e-12)
    assert emf_siemens == pytest.approx(1e-3, rel=1e-12)


def test_terminal_lies_between_source_and_series_resistance() -> None:
    circuit = connected(Wiring(source_ohms=50, series_ohms=950))
    found = circuit.terminal_volts(np.array([4.0, 0.0]), np.array([1.0, 2.0]))
    assert found == pytest.approx([4 - 0.15, 0.1])


def test_terminal_shows_the_diode_branch_current() -> None:
    # A: the same 4.3071121676 mA as behind 1 kOhm above, here as 50 and 950 Ohm.
    circuit = connected(Wiring(source_ohms=50, series_ohms=950, diode_saturation_amperes=1e-14))
    (found,) = circuit.terminal_volts(np.array([5.5]), np.array([0.5]))
    assert 5.5 - found == pytest.approx(50 * 4.3071121676e-3, abs=1e-12)


def test_open_relay_takes_the_source_branch_away() -> None:
    circuit = Circuit(CellDescription(), Wiring(probe_ohms=10e6))
    assert circuit.node_current(4.0, 1.0) == pytest.approx((-1e-7, -1e-7, 0.0))
    assert circuit.gain == 0
    volts = np.array([0.3, 0.7])
    assert circuit.terminal_volts(np.array([4.0, 4.0]), volts).tolist() == volts.tolist()


def test_clamp_is_steep_above_its_voltage_and_odd() -> None:
    knee, slope = clamp_current(3.0, 3.0)
    assert knee == pytest.approx(CLAMP_KNEE_AMPERES, rel=1e-12)
    assert slope == pytest.approx(CLAMP_KNEE_AMPERES / CLAMP_FOLD_VOLTS, rel=1e-12)
    fold, _ = clamp_current(3.0 + CLAMP_FOLD_VOLTS, 3.0)
    assert fold / knee == pytest.approx(math.e, rel=1e-9)
    assert clamp_current(-3.1, 3.0)[0] == -clamp_current(3.1, 3.0)[0]
    assert clamp_current(2.5, 3.0)[0] < 1e-13
    assert clamp_current(0.0, 3.0)[0] == 0


@given(st.floats(-1000, 1000))
def test_clamp_never_overflows_and_always_rises(volts: float) -> None:
    amperes, slope = clamp_current(volts, 3.0)
    assert math.isfinite(amperes)
    assert slope > 0 or abs(volts) < 3
    assert clamp_current(volts + 1e-3, 3.0)[0] >= amperes


CIRCUITS = [
    Wiring(),
    Wiring(diode_saturation_amperes=1e-9),
    Wiring(clamp_volts=2.0, diode_saturation_amperes=1e-6, diode_emission=1.5),
]


@pytest.mark.parametrize("wiring", CIRCUITS)
@pytest.mark.parametrize(("emf", "node"), [(4.0, 2.1), (-5.0, -2.05), (0.0, 1.0)])
def test_slopes_are_difference_quotients(wiring: Wiring, emf: float, node: float) -> None:
    circuit = connected(wiring)
    step = 1e-6
    _, siemens, emf_siemens = circuit.node_current(emf, node)
    by_node = circuit.node_current(emf, node + step)[0] - circuit.node_current(emf, node - step)[0]
    by_emf = circuit.node_current(emf + step, node)[0] - circuit.node_current(emf - step, node)[0]
    assert siemens == pytest.approx(by_node / (2 * step), rel=1e-6)
    assert emf_siemens == pytest.approx(by_emf / (2 * step), rel=1e-6, abs=1e-13)


def test_circuit_knows_when_it_is_linear() -> None:
    assert connected(Wiring()).is_linear
    assert not connected(Wiring(clamp_volts=3.0)).is_linear
    diode = connected(Wiring(diode_saturation_amperes=1e-9))
    assert not diode.is_linear
    diode.relay_on = False
    assert diode.is_linear


# Setting, its value, the message.
MISTAKES = [
    ("source_ohms", -1.0, "must be 0 or more"),
    ("series_ohms", math.inf, "must be 0 or more"),
    ("probe_farads", -1e-12, "must be 0 or more"),
    ("probe_ohms", 0.0, "must be above 0"),
    ("diode_saturation_amperes", 0.0, "must be above 0"),
    ("diode_emission", math.nan, "must be above 0"),
    ("clamp_volts", -3.0, "must be above 0"),
]


@pytest.mark.parametrize(("name", "value", "message"), MISTAKES)
def test_impossible_wirings_are_refused(name: str, value: float, message: str) -> None:
    with pytest.raises(ValueError, match=f"{name} is {value}; it {message}"):
        Wiring(**{name: value})


def test_a_branch_without_resistance_is_refused() -> None:
    with pytest.raises(ValueError, match="source_ohms and series_ohms are both 0"):
        Wiring(source_ohms=0, series_ohms=0)
