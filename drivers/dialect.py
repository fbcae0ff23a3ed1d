"""A dialect: how one family of instruments is spoken to, as data.

A dialect holds command templates with at most two blanks, {channel} and {value}. What fills
them is a channel number, a number that this module formats, or a word of the dialect's own:
nothing that stands in a recipe or comes from an instrument can ever become part of a command.
"""

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from pulsetally.drivers.numbers import NumberError, parse_finite, parse_number, parse_whole

# What a generator can be told about a pulse; its driver computes each from base, level and
# times, so a dialect names those that its instrument has.
GENERATOR_SETTINGS = (
    "high", "low", "amplitude", "offset", "polarity", "period", "frequency", "width", "edge",
    "leading edge", "trailing edge", "count",
)  # fmt: skip
# What an oscilloscope can be told about its records; the first three are set for each channel.
CHANNEL_SETTINGS = ("span", "volts per division", "centre")
OSCILLOSCOPE_SETTINGS = (
    "points", "sample interval", "sample rate", "window", "time per division",
    "share before trigger", "delay to start", "delay to centre",
    "trigger source", "trigger level", "trigger slope",
)  # fmt: skip
# What is read of a waveform's preamble.
PREAMBLE_FIELDS = ("points", "step", "first", "first index", "gain", "zero", "reference", "codes")
WORDS = {
    "polarity": ("up", "down"),
    "trigger slope": ("rising", "falling"),
    "output": ("on", "off"),
    "load": ("high-z",),
}
SAMPLE_TYPES = {
    "unsigned 8-bit": ("u1", 0, 255),
    "signed 8-bit": ("i1", -128, 127),
    "signed 16-bit big-endian": (">i2", -32768, 32767),
    "signed 16-bit little-endian": ("<i2", -32768, 32767),
    "unsigned 16-bit big-endian": (">u2", 0, 65535),
    "unsigned 16-bit little-endian": ("<u2", 0, 65535),
}
_BLANK = re.compile(r"\{([^{}]*)\}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """How messages travel.

    ending: what ends a message sent. gap_seconds: least pause between two messages.
    longest: most bytes of one message. number: 'short' or 'scientific', with digits.
    echoed_headers: answers repeat the header of their query.
    """

    ending: str = "\n"
    gap_seconds: float = 0.0
    longest: int = 4096
    number: str = "short"
    digits: int = 9
    echoed_headers: bool = False

    def format(self, value: float) -> str:
        """Write a number as this instrument takes it: in base units, never with a suffix."""
        if not math.isfinite(value):
            raise ValueError(f"{value} can't be sent as a number")
        if value == int(value) and abs(value) < 1e15:
            return f"{int(value)}"
        letter = "E" if self.number == "scientific" else "G"
        return f"{value:.{self.digits}{letter}}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """One setting: how it is set, and how it is read back.

    send: template. ask: template of the query, or empty where it can't be read back.
    words: our word -> what it is called, the first being sent and any being understood.
    share, least: tolerance of what is read back, relative and in SI units. larger_is_fine: a
    range may be rounded up. stepped: only values of 1, 2 and 5 times a power of ten exist.
    """

    name: str
    send: str
    ask: str = ""
    words: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    share: float = 0.0
    least: float = 0.0
    larger_is_fine: bool = False
    stepped: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Predicate:
    """A question whose answer means yes.

    Yes, if the answer's bits have all of bits_set and none of bits_clear; or, where words are
    given, if the answer is one of them. poll_seconds: pause between two questions.
    limit_seconds: how long a yes may take beyond what it has to.
    """

    ask: str
    words: tuple[str, ...] = ()
    bits_set: int = 0
    bits_clear: int = 0
    poll_seconds: float = 2e-3
    limit_seconds: float = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class PreambleQuery:
    """One query that tells about a waveform.

    form: 'number', 'list' of numbers between commas, or 'interchange' (a data interchange
    expression after SCPI-99 volume 3). fields: field -> where in the answer: a position from 1,
    or an axis and keyword such as 'X SCALe'.
    """

    ask: str
    form: str
    fields: Mapping[str, str]


@dataclass(frozen=True, slots=True, kw_only=True)
class WaveformForm:
    """How a record is fetched.

    select: sent first. preamble: queries. data: the query that a block answers. samples: one of
    SAMPLE_TYPES. line_end_after_block: a line feed follows the block. clips_at: lowest and
    highest code, where they are not the ends of the sample type and no preamble tells.
    """

    select: tuple[str, ...]
    preamble: tuple[PreambleQuery, ...]
    data: str
    samples: str
    line_end_after_block: bool = True
    clips_at: tuple[int, int] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Speech:
    """What generators and oscilloscopes share.

    reset: brings the default state and empties the error queue. error_query: reads one entry;
    empty where there is no queue. prepare: sent once after the reset. What an instrument can't
    set is left out of settings.
    """

    line: Line
    reset: tuple[str, ...]
    error_query: str
    prepare: tuple[str, ...]
    settings: tuple[Setting, ...]
    abort: tuple[str, ...]

    def setting(self, name: str) -> Setting | None:
        """Return a setting by its name, or None where the instrument hasn't got it."""
        return next((each for each in self.settings if each.name == name), None)


@dataclass(frozen=True, slots=True, kw_only=True)
class GeneratorDialect(Speech):
    """How a function generator is spoken to.

    idle: no pulse is being sent and none is waited for. sending: pulses are being sent, where that
    is more than the opposite of idle. settle_seconds: of the output relay. most_count: pulses that
    one trigger can send.
    """

    output: Setting
    load: Setting | None
    fire: tuple[str, ...]
    idle: Predicate | None
    sending: Predicate | None = None
    settle_seconds: float = 0.05
    fixed_edge: float | None = None
    most_count: int = 1_000_000


@dataclass(frozen=True, slots=True, kw_only=True)
class OscilloscopeDialect(Speech):
    """How an oscilloscope is spoken to.

    divisions: of the screen, high and wide. force: triggers an armed acquisition at once.
    shortest_interval: between two samples, seconds; most_points: of a record; both None where
    nobody has said.
    """

    divisions: tuple[int, int]
    arm: tuple[str, ...]
    armed: Predicate
    done: Predicate
    force: tuple[str, ...]
    waveform: WaveformForm
    shortest_interval: float | None = None
    most_points: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Dialect:
    """A whole dialect; an instrument that it doesn't describe is None."""

    name: str
    generator: GeneratorDialect | None
    oscilloscope: OscilloscopeDialect | None


def blanks(template: str) -> set[str]:
    """Return the names of a template's blanks."""
    return set(_BLANK.findall(template))


def fill(template: str, *, channel: int = 1, value: str = "") -> str:
    """Fill a template's blanks."""
    return template.replace("{channel}", str(channel)).replace("{value}", value)


def understand(answer: str, words: Mapping[str, Sequence[str]]) -> str | None:
    """Find our word for an answer, which may be in short or long form; None if it is none."""
    given = answer.strip().strip('"').upper()
    for ours, theirs in words.items():
        for each in theirs:
            # Capitals are the short form (SCPI-99 volume 1, 6.2.1).
            short = "".join(letter for letter in each if not letter.islower())
            if given in (each.upper(), short.upper()) or _equal_numbers(given, each):
                return ours
    return None


def _equal_numbers(one: str, other: str) -> bool:
    try:
        return parse_number(one) == parse_number(other)
    except NumberError:
        return False


def says_yes(predicate: Predicate, answer: str) -> bool:
    """Judge the answer to a predicate's question. Raises NumberError where bits were due."""
    if predicate.words:
        return understand(answer, {"yes": predicate.words}) == "yes"
    bits = parse_whole(answer)
    return bits & predicate.bits_set == predicate.bits_set and not bits & predicate.bits_clear


_DIMENSION = re.compile(r"DIMension=([A-Z])\(([^()]*)\)", re.IGNORECASE)


def read_preamble(query: PreambleQuery, answer: str) -> dict[str, float]:
    """Take the fields out of one preamble answer. Raises NumberError or ValueError."""
    if query.form == "number":
        return {name: parse_finite(answer) for name in query.fields}
    if query.form == "list":
        parts = answer.split(",")
        found = {}
        for name, place in query.fields.items():
            if int(place) > len(parts):
                raise ValueError(f"it has {len(parts)} fields, and {name} should be no. {place}")
            found[name] = parse_finite(parts[int(place) - 1])
        return found
    axes = {}
    for axis, body in _DIMENSION.findall(answer):
        words = body.split()
        if len(words) % 2:
            raise ValueError(f"axis {axis} has a keyword without a value")
        pairs = zip(words[::2], words[1::2], strict=True)
        axes.update({f"{axis} {word[:4]}".upper(): value for word, value in pairs})
    found = {}
    for name, place in query.fields.items():
        axis, _, word = place.partition(" ")
        value = axes.get(f"{axis} {word[:4]}".upper())
        if value is None:
            raise ValueError(f"it lacks {place}")
        found[name] = parse_finite(value)
    return found
