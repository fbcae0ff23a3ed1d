"""The error table and queue: SCPI-99 Vol. 2 section 21.8 (ESR-3 in the reference values)."""

import pytest

from pulsetally.simulators.scpi_errors import ERROR_TEXTS, ErrorQueue, ScpiError, event_weight
from tests.simulators.published_errors import PUBLISHED_ERRORS, published_weight


@pytest.mark.parametrize(("number", "text"), PUBLISHED_ERRORS)
def test_each_error_has_its_published_text_and_sets_the_bit_of_its_class(
    number: int, text: str
) -> None:
    assert ScpiError(number).entry() == f'{number},"{text}"'
    assert event_weight(number) == published_weight(number)


def test_the_table_holds_every_published_number_and_no_other() -> None:
    assert {0: "No error", **dict(PUBLISHED_ERRORS)} == ERROR_TEXTS


def test_no_error_sets_no_bit_and_a_positive_number_is_device_specific() -> None:
    assert event_weight(0) == 0
    assert event_weight(101) == 8


def test_detail_is_shown_without_quotes_or_control_characters() -> None:
    entry = ScpiError(-113, 'A"B\x1b[2J\n').entry()
    assert entry == '-113,"Undefined header;A.B.[2J."'


def test_description_never_passes_255_characters() -> None:
    assert len(ScpiError(-113, "x" * 1000).entry()) == len('-113,""') + 255


def test_queue_is_first_in_first_out_and_ends_with_no_error() -> None:
    queue = ErrorQueue()
    queue.push(ScpiError(-113))
    queue.push(ScpiError(-222))
    assert [queue.pop().number for _ in range(3)] == [-113, -222, 0]


def test_overflow_replaces_the_newest_entry() -> None:
    queue = ErrorQueue(limit=3)
    for number in (-101, -102, -103, -104, -108):
        queue.push(ScpiError(number))
    assert [queue.pop().number for _ in range(4)] == [-101, -102, -350, 0]
