"""Status registers: IEEE 488.2 section 11, SCPI-99 Vol. 1 section 9 (section 1.4)."""

import pytest

from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_status import EventGroup, Status


def test_a_rising_condition_is_latched_until_it_is_read() -> None:
    group = EventGroup()
    group.update(32)
    group.update(0)
    assert group.condition == 0
    assert group.take_event() == 32
    assert group.take_event() == 0


def test_filters_choose_which_change_is_latched() -> None:
    group = EventGroup()
    group.rising, group.falling = 0, 8
    group.update(8)
    assert group.take_event() == 0
    group.update(0)
    assert group.take_event() == 8


def test_preset_disables_and_lets_rising_changes_pass() -> None:
    group = EventGroup()
    group.enable, group.rising, group.falling = 32, 0, 16
    group.preset()
    assert (group.enable, group.rising, group.falling) == (0, 0x7FFF, 0)


def test_reading_the_event_status_clears_it() -> None:
    status = Status()
    status.clear()
    status.report(ScpiError(-113))
    status.report(ScpiError(-222))
    assert status.take_event_status() == 32 + 16
    assert status.take_event_status() == 0


def test_power_on_is_reported_once() -> None:
    assert Status().take_event_status() == 128


# Bit weights as two public register tables have them.
@pytest.mark.parametrize(
    ("prepare", "weight"),
    [
        ("error", 4),
        ("questionable", 8),
        ("message", 16),
        ("event", 32),
        ("operation", 128),
    ],
)
def test_each_source_sets_its_bit_and_the_summary_when_enabled(prepare: str, weight: int) -> None:
    status = Status()
    status.clear()
    if prepare == "error":
        status.errors.push(ScpiError(-113))
    if prepare == "questionable":
        status.questionable.enable = 1
        status.questionable.update(1)
    if prepare == "event":
        status.event_enable = 1
        status.set_event_status(1)
    if prepare == "operation":
        status.operation.enable = 32
        status.operation.update(32)
    waiting = prepare == "message"
    assert status.byte(message_available=waiting) == weight
    status.service_enable = weight
    assert status.byte(message_available=waiting) == weight + 64


def test_clear_keeps_the_enable_registers() -> None:
    status = Status()
    status.event_enable, status.operation.enable = 60, 32
    status.report(ScpiError(-222))
    status.operation.update(32)
    status.clear()
    assert status.byte(message_available=False) == 0
    assert (status.event_enable, status.operation.enable) == (60, 32)
