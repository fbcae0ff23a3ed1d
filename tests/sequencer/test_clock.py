"""The two clocks: a wall clock that can be interrupted, and a simulated bench's."""

import time

import pytest

from pulsetally.drivers.link import VisaLink
from pulsetally.sequencer.clock import BenchClock, WallClock
from tests.simulated import simulated


def test_a_wall_clock_sleeps_and_can_be_woken() -> None:
    clock = WallClock()
    began = time.monotonic()
    clock.sleep(0.06)
    assert 0.06 <= time.monotonic() - began < 1
    asked = iter([False, True])
    clock.sleep(60, lambda: next(asked))
    assert time.monotonic() - began < 2


def test_a_bench_clock_lets_virtual_time_pass_at_once() -> None:
    with simulated() as table:
        link = VisaLink(table.addresses.control)
        try:
            clock = BenchClock(link)
            before, began = clock.now(), time.monotonic()
            clock.sleep(3600)
            assert clock.now() - before == pytest.approx(3600, abs=0.1)
            # Whoever wants an end gets it before any time passes.
            clock.sleep(3600, lambda: True)
            assert clock.now() - before == pytest.approx(3600, abs=0.1)
            assert time.monotonic() - began < 5
        finally:
            link.close()
