"""The published rules, as a client sees them over every kind of line to a served instrument."""

from collections.abc import Iterator
from contextlib import ExitStack, closing

import pytest

from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulators.counting import ERROR_QUERIES
from tests.simulators.notebook import MNEMONIC_PAIRS, Notebook
from tests.simulators.published_errors import PUBLISHED_ERRORS, published_weight
from tests.simulators.scpi_rows_published import (
    ELSEWHERE,
    PUBLISHED_NAMES,
    ROWS,
    Device,
    Ends,
    Row,
)
from tests.simulators.sockets import served
from tests.simulators.transports import MARKED, SERVERS, Line, open_line, serving

INSTRUMENTS = ("generator", "oscilloscope")


class Lines:
    """A line of one transport to the notebook and to each instrument of each family."""

    def __init__(self, transport: str, stack: ExitStack) -> None:
        self.transport = transport
        address = stack.enter_context(serving(Notebook().with_words(), transport))
        self._lines = {("scpi99", "notebook"): stack.enter_context(closing(open_line(address)))}
        for family in FAMILIES:
            settings = SimulationSettings(family=family, transport=transport)
            addresses = stack.enter_context(served(settings))
            for name in INSTRUMENTS:
                line = stack.enter_context(closing(open_line(getattr(addresses, name))))
                self._lines[family, name] = line

    def to(self, device: Device) -> list[tuple[Line, str]]:
        """Return the lines to all who can be put to a row, and how each tells errors."""
        return [
            (line, ERROR_QUERIES[family][0])
            for (family, name), line in self._lines.items()
            if device is Device.ANY
            or (device is Device.SCPI99 and family == "scpi99")
            or (device is Device.NOTEBOOK and name == "notebook")
            or (device is Device.GENERATOR and (family, name) == ("scpi99", "generator"))
        ]


@pytest.fixture(scope="module", params=SERVERS)
def lines(request: pytest.FixtureRequest) -> Iterator[Lines]:
    with ExitStack() as stack:
        yield Lines(request.param, stack)


def errors_told(line: Line, query: str) -> list[int]:
    """Empty the error queue of a family; return the numbers."""
    numbers: list[int] = []
    while True:
        line.tell(query.encode())
        number = int(line.hear_line().removeprefix(b"ERROR ").split(b",")[0])
        if not number:
            return numbers
        numbers.append(number)


def follow(row: Row, line: Line, query: str) -> None:
    line.tell(b"*RST;*CLS;*ESE 0;*SRE 0")
    for message, answer in row.exchanges:
        line.tell(message)
        if answer is not None:
            assert line.hear(len(answer)) == answer, message[:80]
    # An answer that nobody expected would stand here in the place of a number.
    assert errors_told(line, query) == list(row.errors)


@pytest.mark.parametrize(
    "row", [row for row in ROWS if row.ends is Ends.ANY], ids=lambda row: row.name
)
def test_a_published_row_holds(lines: Lines, row: Row) -> None:
    for line, query in lines.to(row.device):
        follow(row, line, query)


def test_what_ends_a_message_depends_on_the_line(lines: Lines) -> None:
    ends = Ends.MARKED if lines.transport in MARKED else Ends.NEWLINE
    rows = [row for row in ROWS if row.ends is ends]
    assert rows
    for row in rows:
        for line, query in lines.to(row.device):
            follow(row, line, query)


@pytest.mark.parametrize(("number", "text"), [*PUBLISHED_ERRORS, (101, "Device-specific error")])
def test_each_error_has_its_text_and_its_bit(  # ESR-3
    lines: Lines, number: int, text: str
) -> None:
    ((line, _),) = lines.to(Device.NOTEBOOK)
    line.tell(b"*CLS;:RAIS %d" % number)
    line.tell(b"*ESR?")
    assert int(line.hear_line()) == published_weight(number)
    line.tell(b":SYST:ERR?")
    assert line.hear_line().decode() == f'{number},"{text}"'


@pytest.mark.parametrize(("declared", "short"), MNEMONIC_PAIRS)
def test_only_the_exact_short_and_long_forms_are_followed(
    lines: Lines, declared: str, short: str
) -> None:
    ((line, query),) = lines.to(Device.NOTEBOOK)
    line.tell(b"*RST;*CLS")
    good = {declared, declared.upper(), declared.lower(), short, short.lower()}
    for spelling in sorted(good):
        line.tell(f":WORD:{spelling}".encode())
    line.tell(b":NOT?")
    assert line.hear_line().decode() == "|".join([f"WORD:{declared}"] * len(good))
    assert errors_told(line, query) == []
    cut = {declared[:length] for length in range(2, len(declared))} | {declared + "X"}
    # TRI is wrong for TRIGger, but it is TRIangle's.
    bad = cut - {short for _, short in MNEMONIC_PAIRS}
    for spelling in sorted(bad):
        line.tell(f":WORD:{spelling}".encode())
        (number,) = errors_told(line, query)
        assert number == (-112 if len(spelling) > 12 else -113)


def test_power_on_is_told_once(lines: Lines) -> None:
    with (
        serving(Notebook(), lines.transport) as address,
        closing(open_line(address)) as line,
    ):
        line.tell(b"*ESR?;*ESR?")
        assert line.hear_line() == b"128;0"


def test_every_published_row_is_tested_or_named_with_the_reason() -> None:
    tested = {row.name for row in ROWS}
    assert set(PUBLISHED_NAMES) - tested == set(ELSEWHERE)
    assert not tested & set(ELSEWHERE)
    assert all(ELSEWHERE.values())
