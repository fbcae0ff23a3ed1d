"""Ask what every SCPI instrument can answer: who it is, its errors, numbers and words."""

from collections.abc import Mapping

from pulsetally.drivers.errors import BadReply, InstrumentComplaint, SettingRefused
from pulsetally.drivers.link import Link
from pulsetally.drivers.numbers import (
    NumberError,
    parse_error_entry,
    parse_number,
    parse_whole,
)

# More entries than any queue holds: an instrument that reports errors without end is broken.
_MOST_ENTRIES = 100
_OTHER_DIALECT = "check that the dialect fits this instrument"


class Instrument:
    """Speak the part of SCPI-99 that generators and oscilloscopes share."""

    def __init__(self, link: Link) -> None:
        self._link = link

    @property
    def address(self) -> str:
        """Return the VISA address."""
        return self._link.address

    def identify(self) -> str:
        """Ask for the identity: maker, model, serial number, firmware. Raises BadReply."""
        answer = self._link.ask("*IDN?").strip()
        # IEEE Std 488.2-1992, 10.14: four fields separated by commas.
        if answer.count(",") < 3:
            raise BadReply(
                self.address,
                "*IDN?",
                f"{answer[:80]!r} is not an identity",
                "check that a SCPI instrument is at this address",
            )
        return answer

    def reset(self) -> None:
        """Bring the instrument into its default state and empty its error queue."""
        self._link.write("*RST;*CLS")

    def errors(self) -> list[tuple[int, str]]:
        """Empty the error queue; return its entries, oldest first."""
        entries: list[tuple[int, str]] = []
        for _ in range(_MOST_ENTRIES):
            command = ":SYSTem:ERRor:NEXT?"
            answer = self._link.ask(command)
            try:
                number, text = parse_error_entry(answer)
            except NumberError as error:
                raise BadReply(self.address, command, str(error), _OTHER_DIALECT) from error
            if number == 0:
                return entries
            entries.append((number, text))
        raise BadReply(
            self.address,
            ":SYSTem:ERRor:NEXT?",
            f"the error queue held more than {_MOST_ENTRIES} entries",
            _OTHER_DIALECT,
        )

    def raise_errors(self, command: str) -> None:
        """Empty the error queue; raise InstrumentComplaint for its first entry."""
        entries = self.errors()
        if entries:
            raise InstrumentComplaint(self.address, command, *entries[0])

    def conditions(self) -> int:
        """Read the bits of the operation condition register (SCPI-99 volume 1, 9)."""
        return self._ask_whole(":STATus:OPERation:CONDition?")

    def _ask_number(self, command: str) -> float:
        answer = self._link.ask(command)
        try:
            return parse_number(answer)
        except NumberError as error:
            raise BadReply(self.address, command, str(error), _OTHER_DIALECT) from error

    def _ask_whole(self, command: str) -> int:
        answer = self._link.ask(command)
        try:
            return parse_whole(answer)
        except NumberError as error:
            raise BadReply(self.address, command, str(error), _OTHER_DIALECT) from error

    def _ask_numbers(self, queries: Mapping[str, str]) -> dict[str, float]:
        """Ask several queries in one message; return name -> number."""
        command = ";".join(queries.values())
        answers = self._link.ask(command).split(";")
        if len(answers) != len(queries):
            raise BadReply(
                self.address,
                command,
                f"{len(queries)} answers were expected, {len(answers)} came",
                _OTHER_DIALECT,
            )
        try:
            return {
                name: parse_number(answer) for name, answer in zip(queries, answers, strict=True)
            }
        except NumberError as error:
            raise BadReply(self.address, command, str(error), _OTHER_DIALECT) from error

    def _compare(
        self, name: str, asked: float, found: float, *, within: float, unit: str, remedy: str
    ) -> None:
        # Settings are rounded or clipped without an error, so what matters is read back.
        if asked != found and not abs(asked - found) <= within:
            raise SettingRefused(
                self.address, name, f"{asked:.6g} {unit}", f"{found:.6g} {unit}", remedy
            )
