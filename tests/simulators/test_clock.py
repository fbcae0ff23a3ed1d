"""The virtual clock: what is due is done at its own instant, in order."""

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.clock import VirtualClock
from pulsetally.simulators.table import Table


def new_clock() -> VirtualClock:
    return VirtualClock(Table(CellDescription(), Wiring(), seed=1))


def test_appointments_are_kept_in_order_at_their_instants() -> None:
    clock = new_clock()
    kept: list[tuple[str, float]] = []
    clock.call_at(0.003, lambda: kept.append(("late", clock.now)))
    clock.call_at(0.001, lambda: kept.append(("early", clock.now)))
    clock.call_at(0.001, lambda: kept.append(("early too", clock.now)))
    clock.advance(0.002)
    assert kept == [("early", 0.001), ("early too", 0.001)]
    assert clock.now == 0.002
    clock.advance(0.002)
    assert kept[2] == ("late", 0.003)
    assert clock.now == 0.004


def test_a_cancelled_appointment_is_not_kept() -> None:
    clock = new_clock()
    kept: list[float] = []
    appointment = clock.call_at(0.001, lambda: kept.append(clock.now))
    appointment.cancel()
    clock.advance(0.01)
    assert kept == []


def test_an_appointment_may_make_another() -> None:
    clock = new_clock()
    kept: list[float] = []

    def again() -> None:
        kept.append(clock.now)
        if len(kept) < 3:
            clock.call_at(clock.now + 0.001, again)

    clock.call_at(0.001, again)
    clock.advance(0.01)
    assert kept == [0.001, 0.002, 0.003]


def test_the_clock_never_goes_back() -> None:
    clock = new_clock()
    clock.advance(0.01)
    clock.advance_to(0.005)
    clock.advance(0.0)
    assert clock.now == 0.01
