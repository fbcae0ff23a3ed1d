"""Node voltage and switching together, against closed forms and an independent integration."""

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from statistics import NormalDist
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from pulsetally.simulators.cell import Cell, CellDescription
from pulsetally.simulators.circuit import Circuit, Wiring
from pulsetally.simulators.solver import Ramp, Solver

Array = NDArray[np.float64]


def solver_of(cell: CellDescription, wiring: Wiring, *, node_volts: float = 0.0) -> Solver:
    circuit = Circuit(cell, wiring)
    circuit.relay_on = True
    return Solver(Cell(cell, seed=1), circuit, node_volts=node_volts)


def hold(solver: Solver, volts: float, seconds: float) -> tuple[Array, Array]:
    ramp = Ramp(begin_volts=volts, volts_per_second=0.0, seconds=seconds)
    return solver.run(ramp, sampled=True)


# A cell that switches so little charge, behind so little resistance, that its voltage is
# the EMF from the first femtoseconds on.
STIFF = Wiring(source_ohms=1e-3, series_ohms=0, probe_ohms=math.inf, probe_farads=0)


def one_region(**changes: float) -> CellDescription:
    regions: dict[str, Any] = {
        "remanent_polarization": 1e-9,
        "relative_permittivity": 1.0,
        "activation_spread": 0.0,
    }
    return CellDescription(**(regions | changes), regions=1)


# A: at constant voltage one region is 1 - exp(-t/tau) (KAI with n = 1; at t = tau that is
# 1 - 1/e = 0.632121), tau = tau0 exp((a/|v - v_imprint|)^alpha).
EXPONENTIALS = [
    ({}, 4.0),
    ({"alpha": 1.5}, 6.0),
    ({"alpha": 0.5}, 2.5),
    ({"imprint_volts": 0.7}, 4.0),
    ({"imprint_volts": -1.0}, 0.0),
]


@pytest.mark.parametrize(("changes", "volts"), EXPONENTIALS)
def test_one_region_at_constant_voltage_is_an_exponential(
    changes: dict[str, float], volts: float
) -> None:
    description = one_region(**changes)
    driving_volts = volts - description.imprint_volts
    tau_seconds = 2e-9 * math.exp((25.0 / driving_volts) ** description.alpha)
    for times in (0.1, 0.5, 1.0, 2.0, 5.0):
        solver = solver_of(description, STIFF, node_volts=volts)
        hold(solver, volts, times * tau_seconds)
        assert solver.cell.up_fraction == pytest.approx(1 - math.exp(-times), abs=1e-6)
    assert 1 - math.exp(-1.0) == pytest.approx(0.632121, abs=5e-7)


def test_a_region_switches_down_as_it_switches_up() -> None:
    solver = solver_of(one_region(), STIFF, node_volts=-4.0)
    solver.cell.up = np.ones(1)
    tau_seconds = 2e-9 * math.exp(25.0 / 4.0)
    hold(solver, -4.0, 1.5 * tau_seconds)
    assert solver.cell.up_fraction == pytest.approx(math.exp(-1.5), abs=1e-6)


# With such barriers nothing switches: a linear capacitor.
LINEAR = CellDescription(activation_volts=1e5, activation_spread=0)

# A: resistance and capacitance; printed to eight digits.
RC_CHARGE = [(1, 0.63212056), (2, 0.86466472), (3, 0.95021293), (4, 0.98168436), (5, 0.99326205)]


@pytest.mark.parametrize(("tau_count", "fraction"), RC_CHARGE)
def test_linear_capacitor_charges_exponentially(tau_count: int, fraction: float) -> None:
    wiring = Wiring(probe_ohms=math.inf)
    solver = solver_of(LINEAR, wiring)
    hold(solver, 1.0, tau_count * wiring.branch_ohms * solver.circuit.farads)
    assert solver.node_volts == pytest.approx(fraction, abs=1e-8)


# A: the same, by the implicit steps: a clamp far above keeps the closed form away.
@pytest.mark.parametrize(("tau_count", "fraction"), RC_CHARGE)
def test_implicit_steps_charge_exponentially_too(tau_count: int, fraction: float) -> None:
    wiring = Wiring(probe_ohms=math.inf, clamp_volts=20.0)
    solver = solver_of(LINEAR, wiring)
    hold(solver, 1.0, tau_count * wiring.branch_ohms * solver.circuit.farads)
    assert solver.node_volts == pytest.approx(fraction, abs=5e-6)


@pytest.mark.parametrize("clamp_volts", [None, 20.0])
def test_linear_capacitor_follows_a_ramp_with_its_lag(clamp_volts: float | None) -> None:
    # A: v = s (t - tau + tau exp(-t/tau)) for an EMF of s t.
    wiring = Wiring(probe_ohms=math.inf, clamp_volts=clamp_volts)
    solver = solver_of(LINEAR, wiring)
    tau = wiring.branch_ohms * solver.circuit.farads
    solver.run(Ramp(begin_volts=0, volts_per_second=3 / tau, seconds=2 * tau), sampled=False)
    assert solver.node_volts == pytest.approx(3 * (1 + math.exp(-2)), abs=2e-5)


# The equations once more, in plain form, with their own constants.


@dataclass(frozen=True, kw_only=True)
class Case:
    """One whole measurement: what is simulated, and the pulses (level, width, edge, period)."""

    cell: CellDescription
    wiring: Wiring
    pulses: list[tuple[float, float, float, float]]


PRESET = (-5.0, 2e-3, 100e-9, 3e-3)
UP = (4.0, 100e-6, 100e-9, 1.1e-3)

CASES = {
    "default": Case(cell=CellDescription(), wiring=Wiring(), pulses=[PRESET] + 12 * [UP]),
    "diode, clamp and leak": Case(
        cell=CellDescription(leak_ohms=50e6),
        wiring=Wiring(diode_saturation_amperes=1e-6, clamp_volts=2.4),
        pulses=[PRESET] + 6 * [UP],
    ),
    "through both directions, with imprint": Case(
        cell=CellDescription(
            activation_volts=12.0, activation_spread=4.0, imprint_volts=0.3, regions=16
        ),
        wiring=Wiring(),
        pulses=[PRESET, UP, (-3.0, 100e-6, 10e-6, 1e-3), UP, (-2.0, 50e-6, 100e-9, 1e-3), UP],
    ),
    # The preset gets no more than the diode's reverse current.
    "diode, clamp, leak and imprint": Case(
        cell=CellDescription(leak_ohms=5e6, imprint_volts=0.3, alpha=1.1, regions=32),
        wiring=Wiring(diode_saturation_amperes=5e-6, diode_emission=1.2, clamp_volts=2.5),
        pulses=[UP, UP, UP, PRESET, UP, (5.0, 300e-6, 5e-6, 1e-3), UP],
    ),
    "a diode that begins to conduct within an edge": Case(
        cell=CellDescription(activation_volts=1e5, activation_spread=1e-6, regions=1),
        wiring=Wiring(series_ohms=0.0, diode_saturation_amperes=1e-14),
        pulses=2 * [(4.0, 30e-6, 8e-9, 1e-3)],
    ),
    "fast": Case(
        cell=CellDescription(alpha=1.2, activation_volts=15.0, regions=32),
        wiring=Wiring(series_ohms=200.0),
        pulses=[(-6.0, 2e-6, 8e-9, 10e-6)] + 6 * [(4.0, 100e-9, 8e-9, 5e-6)],
    ),
}


def equations(case: Case, emf: Callable[[float], float]) -> Callable[[float, Array], Array]:
    cell, wiring = case.cell, case.wiring
    count = cell.regions
    normal = NormalDist(cell.activation_volts, cell.activation_spread)
    activation = np.array([normal.inv_cdf((k + 0.5) / count) for k in range(count)])
    farads = (
        8.8541878128e-12 * cell.relative_permittivity * cell.area / cell.thickness
        + wiring.probe_farads
    )
    ohms = wiring.source_ohms + wiring.series_ohms

    def series_current(volts: float) -> float:
        saturation = wiring.diode_saturation_amperes
        if saturation is None:
            return volts / ohms
        # Bisection on the diode's voltage: slow, but it can't be wrong.
        fold = 1.380649e-23 * 300.15 / 1.602176634e-19 * wiring.diode_emission
        low, high = min(volts, 0.0) - 1e-3, max(volts, 0.0)
        high = min(high, 0.8)
        for _ in range(60):
            middle = (low + high) / 2
            excess = saturation * math.expm1(middle / fold) - (volts - middle) / ohms
            low, high = (low, middle) if excess > 0 else (middle, high)
        return (volts - (low + high) / 2) / ohms

    def derivative(seconds: float, state: Array) -> Array:
        volts, up = float(state[0]), state[1:]
        distance = volts - cell.imprint_volts
        rate = np.zeros(count)
        if distance != 0:
            rate = np.exp(-((activation / abs(distance)) ** cell.alpha)) / cell.attempt_seconds
        change = (1 - up) * rate if distance > 0 else -up * rate
        amperes = series_current(emf(seconds) - volts)
        amperes -= volts / cell.leak_ohms + volts / wiring.probe_ohms
        if wiring.clamp_volts is not None:
            amperes -= 2 * 10e-6 * math.exp(-wiring.clamp_volts / 0.025) * math.sinh(volts / 0.025)
        switching = 2 * cell.remanent_polarization * cell.area * float(change.mean())
        return np.concatenate(([(amperes - switching) / farads], change))

    return derivative


def stretches(case: Case) -> Iterator[tuple[float, float, float]]:
    """Yield seconds, begin volts and end volts of each straight piece of the EMF."""
    for level, width, edge, period in case.pulses:
        ramp = edge / 0.8
        yield ramp, 0.0, level
        yield width - ramp, level, level
        yield ramp, level, 0.0
        yield period - width - ramp, 0.0, 0.0


def integrate(case: Case, begin: float, slope: float, seconds: float, state: Array) -> Any:
    derivative: Any = equations(case, lambda at_seconds: begin + slope * at_seconds)
    return solve_ivp(
        derivative,
        (0, seconds),
        state,
        method="LSODA",
        rtol=1e-8,
        atol=1e-9,
        dense_output=True,
    )


@pytest.mark.parametrize("name", CASES)
def test_course_agrees_with_an_independent_integration(name: str) -> None:
    case = CASES[name]
    solver = solver_of(case.cell, case.wiring)
    state = np.zeros(1 + case.cell.regions)
    for seconds, begin, end in stretches(case):
        slope = (end - begin) / seconds
        truth = integrate(case, begin, slope, seconds, state)
        assert truth.success
        state = truth.y[:, -1]
        ramp = Ramp(begin_volts=begin, volts_per_second=slope, seconds=seconds)
        times, volts = solver.run(ramp, sampled=True)
        assert times[0] == 0
        assert times[-1] == seconds
        assert np.all(np.diff(times) > 0)
        # Straight lines between our samples, against the truth at many more instants.
        instants = np.concatenate(
            (np.linspace(0, seconds, 700), np.geomspace(seconds * 1e-4, seconds, 300))
        )
        error = np.abs(np.interp(instants, times, volts) - truth.sol(instants)[0]).max()
        assert error < 1e-4
        assert solver.node_volts == pytest.approx(float(state[0]), abs=5e-5)
    assert solver.cell.up == pytest.approx(state[1:], abs=2e-5)


# Where the source holds the node, its voltage tells nothing of what switches.
@pytest.mark.parametrize("polarization", [1e-9, 0.01, 0.25])
@pytest.mark.parametrize("series_ohms", [0.0, 1e3])
def test_what_switches_is_followed_where_the_node_tells_nothing_of_it(
    polarization: float, series_ohms: float
) -> None:
    cell = CellDescription(remanent_polarization=polarization, activation_spread=1e-9, regions=1)
    case = Case(cell=cell, wiring=Wiring(series_ohms=series_ohms), pulses=[])
    seconds = 10e-3
    truth = integrate(case, 0.0, 4 / seconds, seconds, np.zeros(2))
    for share in (0.3, 0.4, 0.5, 0.6, 0.7):
        solver = solver_of(case.cell, case.wiring)
        ramp = Ramp(begin_volts=0, volts_per_second=4 / seconds, seconds=share * seconds)
        solver.run(ramp, sampled=False)
        expected = float(truth.sol(share * seconds)[1])
        # Without a look at what switches, a step went wrong by up to 0.09 here.
        assert solver.cell.up_fraction == pytest.approx(expected, abs=1e-3)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    levels=st.lists(st.floats(-8, 8), min_size=1, max_size=5),
    seconds=st.sampled_from([1e-7, 1e-5, 1e-3]),
    series_ohms=st.sampled_from([0.0, 1e3, 220e3]),
    alpha=st.sampled_from([0.5, 1.0, 2.0]),
    imprint_volts=st.sampled_from([-0.5, 0.0, 1.0]),
    diode=st.sampled_from([None, 1e-9]),
    clamp_volts=st.sampled_from([None, 3.0]),
)
def test_regions_stay_between_down_and_up_and_the_node_within_reach(
    levels: list[float],
    seconds: float,
    series_ohms: float,
    alpha: float,
    imprint_volts: float,
    diode: float | None,
    clamp_volts: float | None,
) -> None:
    cell = CellDescription(alpha=alpha, imprint_volts=imprint_volts, regions=8)
    wiring = Wiring(
        series_ohms=series_ohms, diode_saturation_amperes=diode, clamp_volts=clamp_volts
    )
    solver = solver_of(cell, wiring)
    # A cell with imprint drives itself, but no further than to where nothing switches.
    reach = max(abs(imprint_volts), *map(abs, levels)) + 1e-3
    for level in levels:
        times, volts = hold(solver, level, seconds)
        assert np.all(np.diff(times) > 0)
        assert np.all((solver.cell.up >= 0) & (solver.cell.up <= 1))
        assert np.abs(volts).max() <= reach


NONLINEAR = [
    Wiring(diode_saturation_amperes=1e-12),
    Wiring(clamp_volts=3.0),
    Wiring(clamp_volts=3.0, series_ohms=0.0),
]


@pytest.mark.parametrize("wiring", NONLINEAR)
@pytest.mark.parametrize("emf_volts", [0.0, 0.2])
def test_steps_jump_over_quiet_time(wiring: Wiring, emf_volts: float) -> None:
    solver = solver_of(CellDescription(), wiring, node_volts=2.0)
    times, _ = hold(solver, emf_volts, 1e6)
    assert len(times) < 800
    # A: at rest the branch brings what the probe takes.
    assert solver.circuit.node_current(emf_volts, solver.node_volts)[0] == pytest.approx(
        0, abs=1e-15
    )


def test_fresh_domains_at_a_preset_keep_the_course_continuous() -> None:
    cell = CellDescription(domains=50)
    solver = solver_of(cell, Wiring())
    hold(solver, 4.0, 1e-3)
    before = solver.cell.weights.copy()
    _, volts = hold(solver, -5.0, 2e-3)
    assert not np.array_equal(solver.cell.weights, before)
    assert np.abs(np.diff(volts)).max() < 0.15
    assert solver.node_volts == pytest.approx(-5 * solver.circuit.gain, abs=1e-6)
