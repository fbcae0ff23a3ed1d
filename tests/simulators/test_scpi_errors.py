"""The error table and queue: SCPI-99 Vol. 2 section 21.8 (ESR-3 in the reference values)."""

import pytest

from pulsetally.simulators.scpi_errors import ERROR_TEXTS, ErrorQueue, ScpiError, event_weight

# Two independent public transcriptions of SCPI-99 21.8.9 to 21.8.16; a selection that
# is typed here once more, so that a slip in the table shows.
TEXTS = [
    (-101, "Invalid character"),
    (-113, "Undefined header"),
    (-131, "Invalid suffix"),
    (-161, "Invalid block data"),
    (-211, "Trigger ignored"),
    (-213, "Init ignored"),
    (-221, "Settings conflict"),
    (-222, "Data out of range"),
    (-224, "Illegal parameter value"),
    (-230, "Data corrupt or stale"),
    (-350, "Queue overflow"),
    (-363, "Input buffer overrun"),
    (-410, "Query INTERRUPTED"),
    (-440, "Query UNTERMINATED after indefinite response"),
    (-800, "Operation complete"),
]

# ESR-3: class of the error, weight in the event status register.
WEIGHTS = [(-1, 32), (-2, 16), (-3, 8), (-4, 4), (-5, 128), (-6, 64), (-7, 2), (-8, 1)]


@pytest.mark.parametrize(("number", "text"), TEXTS)
def test_standard_texts(number: int, text: str) -> None:
    assert ERROR_TEXTS[number] == text
    assert ScpiError(number).entry() == f'{number},"{text}"'


def test_the_table_holds_every_number_of_the_standard() -> None:
    # Counted in the transcription, class by class from -1xx to -8xx.
    by_class = [sum(1 for n in ERROR_TEXTS if -n // 100 == k) for k in range(1, 9)]
    assert by_class == [40, 55, 17, 5, 1, 1, 1, 1]


@pytest.mark.parametrize("number", sorted(set(ERROR_TEXTS) - {0}))
def test_each_error_sets_the_bit_of_its_class(number: int) -> None:
    assert event_weight(number) == dict(WEIGHTS)[-(-number // 100)]
    assert len(ScpiError(number).entry()) <= 255


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
