"""Speak a dialect over a link: send commands, ask, set and read back, judge."""

from collections.abc import Mapping, Sequence

from pulsetally.drivers.dialect import (
    Predicate,
    Setting,
    Speech,
    fill,
    says_yes,
    understand,
)
from pulsetally.drivers.errors import BadReply, InstrumentComplaint, SettingRefused
from pulsetally.drivers.link import Link
from pulsetally.drivers.numbers import NumberError, parse_error_entry, parse_number

# More entries than any queue holds: an instrument that reports errors without end is broken.
_MOST_ENTRIES = 100
OTHER_DIALECT = "check that the dialect fits this instrument"

# What a setting is set to: a number in SI units, or one of our words.
Wanted = Mapping[str, float | str]


class Instrument:
    """Speak the part of a dialect that generators and oscilloscopes share."""

    def __init__(self, link: Link, speech: Speech) -> None:
        self._link, self._speech = link, speech

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
        self._send(self._speech.reset)

    @property
    def has_error_queue(self) -> bool:
        """Say whether the dialect knows how to ask for errors."""
        return bool(self._speech.error_query)

    def errors(self) -> list[tuple[int, str]]:
        """Empty the error queue; return its entries, oldest first. None where there is no queue."""
        entries: list[tuple[int, str]] = []
        command = self._speech.error_query
        if not command:
            return entries
        for _ in range(_MOST_ENTRIES):
            try:
                number, text = parse_error_entry(self.ask(command))
            except NumberError as error:
                raise BadReply(self.address, command, str(error), OTHER_DIALECT) from error
            if number == 0:
                return entries
            entries.append((number, text))
        problem = f"the error queue held more than {_MOST_ENTRIES} entries"
        raise BadReply(self.address, command, problem, OTHER_DIALECT)

    def raise_errors(self, command: str) -> None:
        """Empty the error queue; raise InstrumentComplaint for its first entry."""
        entries = self.errors()
        if entries:
            raise InstrumentComplaint(self.address, command, *entries[0])

    def abort(self) -> None:
        """End what goes on: pulses that are sent, or an acquisition that is not complete."""
        self._send(self._speech.abort)

    def ask(self, query: str) -> str:
        """Ask one query; return its answer without the header that some dialects repeat."""
        return self._bare(self._link.ask(query))

    def apply(self, settings: Sequence[Setting], wanted: Wanted, channel: int) -> None:
        """Set several settings at once, then empty the error queue. Raises InstrumentComplaint.

        They travel in as few messages as fit: coupled settings, such as high and low, are
        judged together at the end of a message (IEEE Std 488.2-1992, 6.4.5.3; from memory).
        """
        commands = [self.spell(each, wanted[each.name], channel) for each in settings]
        self._send_joined(commands)
        self.raise_errors(";".join(commands))

    def establish(
        self, groups: Sequence[tuple[Sequence[Setting], Wanted, int]], *, first: Sequence[str] = ()
    ) -> list[dict[str, float]]:
        """Set groups of settings, each with what is wanted and its channel, and read them back.

        first: templates of commands that go before them. Returns the numbers found, for each
        group. Does what apply and read_back do one after the other, in two exchanges where the
        line has room: each costs its way there and back, and there are two set-ups a round.
        Raises what they raise.
        """
        commands = [
            self.spell(each, wanted[each.name], channel)
            for settings, wanted, channel in groups
            for each in settings
        ]
        self._send_joined([*(fill(each, channel=1) for each in first), *commands])
        asked = [
            (place, setting, fill(setting.ask, channel=channel), wanted[setting.name])
            for place, (settings, wanted, channel) in enumerate(groups)
            for setting in settings
            if setting.ask
        ]
        error_query = self._speech.error_query
        # Errors first: some error queries have no leading colon and stand only at the beginning.
        query = ";".join([*filter(None, [error_query]), *(each[2] for each in asked)])
        if not asked or len(query) > self._speech.line.longest:
            self.raise_errors(";".join(commands))
            return [self.read_back(*each) for each in groups]
        # An error's text may hold semicolons, an answer to a setting doesn't.
        answers = self._link.ask(query).rsplit(";", len(asked) - (not error_query))
        if error_query:
            self._raise_joined(answers[0], ";".join(commands))
            answers = answers[1:]
        self._check_number(query, answers, len(asked))
        found: list[dict[str, float]] = [{} for _ in groups]
        for (place, setting, own, wanted), answer in zip(asked, answers, strict=True):
            value = self._judge(setting, own, self._bare(answer), wanted)
            if value is not None:
                found[place][setting.name] = value
        return found

    def _raise_joined(self, answer: str, command: str) -> None:
        """Raise the error that a joined query brought, if it is one; empty the queue before."""
        try:
            number, text = parse_error_entry(self._bare(answer))
        except NumberError:
            # The answers are not in their places: what the queue says tells why.
            self.raise_errors(command)
            return
        if number:
            self.errors()
            raise InstrumentComplaint(self.address, command, number, text)

    def _check_number(self, command: str, answers: Sequence[str], due: int) -> None:
        if len(answers) != due:
            problem = f"{due} answers were expected, {len(answers)} came"
            raise BadReply(self.address, command, problem, OTHER_DIALECT)

    def _send_joined(self, commands: Sequence[str]) -> None:
        message = ""
        for command in commands:
            if message and len(message) + len(command) + 1 > self._speech.line.longest:
                self._link.write(message)
                message = ""
            message += f";{command}" if message else command
        if message:
            self._link.write(message)

    def spell(self, setting: Setting, value: float | str, channel: int) -> str:
        """Write the command for a setting. A word must be one that the dialect knows."""
        if isinstance(value, str):
            text = setting.words[value][0]
        else:
            text = self._speech.line.format(value)
        return fill(setting.send, channel=channel, value=text)

    def read_back(
        self, settings: Sequence[Setting], wanted: Wanted, channel: int
    ) -> dict[str, float]:
        """Read settings back and compare them; return the numbers found, by name.

        Raises SettingRefused when one is not what was wanted: instruments round and clip
        without an error.
        """
        asked = [each for each in settings if each.ask]
        if not asked:
            return {}
        queries = [fill(each.ask, channel=channel) for each in asked]
        command = ";".join(queries)
        if len(command) > self._speech.line.longest:
            answers = [self._link.ask(query) for query in queries]
        else:
            answers = self._link.ask(command).split(";")
        self._check_number(command, answers, len(asked))
        found: dict[str, float] = {}
        for setting, query, answer in zip(asked, queries, answers, strict=True):
            value = self._judge(setting, query, self._bare(answer), wanted[setting.name])
            if value is not None:
                found[setting.name] = value
        return found

    def _judge(
        self, setting: Setting, query: str, answer: str, wanted: float | str
    ) -> float | None:
        remedy = "choose a value that the instrument can make, or mend its dialect"
        if isinstance(wanted, str):
            word = understand(answer, setting.words)
            if word != wanted:
                raise SettingRefused(self.address, setting.name, wanted, answer[:40], remedy)
            return None
        try:
            value = parse_number(answer)
        except NumberError as error:
            raise BadReply(self.address, query, str(error), OTHER_DIALECT) from error
        tolerance = max(setting.share * abs(wanted), setting.least)
        fine = value == wanted or abs(value - wanted) <= tolerance * (1 + 1e-9)
        if not fine and setting.larger_is_fine:
            fine = value > wanted
        if not fine:
            raise SettingRefused(
                self.address, setting.name, f"{wanted:.6g}", f"{value:.6g}", remedy
            )
        return value

    def says_yes(self, predicate: Predicate, channel: int = 1) -> bool:
        """Ask a predicate's question. Raises BadReply when the answer makes no sense."""
        query = fill(predicate.ask, channel=channel)
        answer = self.ask(query)
        try:
            return says_yes(predicate, answer)
        except NumberError as error:
            raise BadReply(self.address, query, str(error), OTHER_DIALECT) from error

    def _send(self, templates: Sequence[str], channel: int = 1) -> None:
        for template in templates:
            self._link.write(fill(template, channel=channel))

    def _bare(self, answer: str) -> str:
        if not self._speech.line.echoed_headers:
            return answer
        head, space, rest = answer.strip().partition(" ")
        return rest if space and head[:1].isalpha() else answer
