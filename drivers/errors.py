"""Name what can go wrong with an instrument, by what a person can do about it."""

import re


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


class NoAnswer(LinkError):
    """An answer did not come, or not whole, within its time."""


class LinkClosed(LinkError):
    """The instrument, or something between, closed the connection."""


class BadReply(InstrumentError):
    """An answer came that isn't one: another kind of instrument, or another dialect."""


class InstrumentComplaint(InstrumentError):
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


class SettingRefused(InstrumentError):
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


CHECK_LINE = "check that the instrument is on, connected and not in use by another program"
_CHECK_DIALECT = "check that the dialect fits this instrument"

# The first row that fits decides. A class is given by name, since not every library is there
# on every machine; an exception fits by its own class or any base. Words: a pattern that the
# text must contain. Last: what a person can do.
CAUSES: tuple[tuple[str, str, type[LinkError] | type[BadReply], str], ...] = (
    ("ChannelTimeout", "", NoAnswer, CHECK_LINE),
    ("ChannelOverrun", "", BadReply, _CHECK_DIALECT),
    ("BlockError", "", BadReply, _CHECK_DIALECT),
    ("ChannelClosed", "", LinkClosed, CHECK_LINE),
    ("ValueError", r"Please install (.+?) to use", LinkError, r"install \1"),
    ("ValueError", "No class registered", LinkError, "use a TCPIP, ASRL, USB or GPIB address"),
    ("VisaIOError", "VI_ERROR_TMO", NoAnswer, CHECK_LINE),
    ("TimeoutError", "", NoAnswer, CHECK_LINE),
    ("SerialTimeoutException", "", NoAnswer, CHECK_LINE),
    ("PermissionError", "", LinkError, "give this user the right to use the port"),
    ("FileNotFoundError", "", LinkError, "check the name of the port, and its cable"),
    ("OSError", "could not open port.*Permission", LinkError, "give this user the right to use it"),
    ("OSError", "could not open port", LinkError, "check the name of the port, and its cable"),
    ("gaierror", "", LinkError, "check the name of the host"),
    ("Exception", "Name or service not known", LinkError, "check the name of the host"),
    ("MemoryError", "", BadReply, _CHECK_DIALECT),
    # Broken pipes, resets, termios, serial, struct and bare errors of the backend: all the
    # same to a person.
    ("Exception", "", LinkClosed, CHECK_LINE),
)


def from_library(
    error: Exception, address: str, command: str, *, opening: bool = False
) -> LinkError | BadReply:
    """Return what any exception of a line's libraries means, as one of ours.

    opening: the line never was open, so that it can't have been closed.
    """
    names = {each.__name__ for each in type(error).__mro__}
    text = " ".join(str(error).split())[:300]
    name, kind, remedy, found = next(
        (name, kind, remedy, found)
        for name, words, kind, remedy in CAUSES
        if name in names and (found := re.search(words, text))
    )
    if opening:
        problem = f"it can't be opened ({_cause(error) or text or type(error).__name__})"
        kind = LinkError
    elif kind is NoAnswer:
        problem = text if name == "ChannelTimeout" and text else f"no answer ({text or name})"
    elif kind is BadReply:
        problem = f"the answer is not one: {text or type(error).__name__}"
        if name == "BlockError":
            problem = f"the answer is not a block: {text}"
    else:
        said = text if name == "ChannelClosed" else f"{type(error).__name__}: {text}"
        problem = f"the line is gone ({said})"
    return kind(address, command, problem, found.expand(remedy))


def _cause(error: BaseException) -> str:
    """Return what the system said beneath a backend's error that says less."""
    if type(error).__name__ == "VisaIOError":
        beneath = error.__cause__ or error.__context__
        while beneath is not None:
            if isinstance(beneath, OSError):
                return str(beneath)
            beneath = beneath.__cause__ or beneath.__context__
    return ""
