"""Name what can go wrong with an instrument, by what a person can do about it."""


class PulsetallyError(Exception):
    """Base of every error that this program raises on purpose."""


class InstrumentError(PulsetallyError):
    """Something is wrong with one instrument.

    address: the VISA address.
    command: what was sent, or an empty string.
    problem: what was found.
    remedy: what a person can do.
    """

    def __init__(self, address: str, command: str, problem: str, remedy: str) -> None:
        asked = f" (after {command!r})" if command else ""
        super().__init__(f"{address}{asked}: {problem}. To fix it, {remedy}.")
        self.address, self.command = address, command
        self.problem, self.remedy = problem, remedy


class LinkError(InstrumentError):
    """The line to an instrument doesn't work: check address, cable and power."""


class NoAnswer(LinkError):  # noqa: N818 - it says what happened
    """An answer did not come, or not whole, within its time."""


class LinkClosed(LinkError):  # noqa: N818 - it says what happened
    """The instrument, or something between, closed the connection."""


class BadReply(InstrumentError):  # noqa: N818 - it says what happened
    """An answer came that isn't one: another kind of instrument, or another dialect."""


class InstrumentComplaint(InstrumentError):  # noqa: N818 - it says what happened
    """The instrument put an entry into its error queue.

    number: the entry's number; text: its words.
    """

    def __init__(self, address: str, command: str, number: int, text: str) -> None:
        super().__init__(
            address,
            command,
            f"the instrument reports error {number}, {text!r}",
            "compare the command with the instrument's manual and its dialect",
        )
        self.number, self.text = number, text


class SettingRefused(InstrumentError):  # noqa: N818 - it says what happened
    """A setting read back differs from what was asked for.

    name: the setting; asked, found: in SI units.
    """

    def __init__(self, address: str, name: str, asked: object, found: object, remedy: str) -> None:
        super().__init__(
            address, "", f"{name} was set to {asked} and reads back as {found}", remedy
        )
        self.name, self.asked, self.found = name, asked, found


class LimitError(InstrumentError):
    """A number about to be sent lies beyond a limit; nothing was sent."""
