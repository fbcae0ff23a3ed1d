"""Make program messages from an instrument's command table, and spoil them.

A spoiler of DEADLY makes a message that no instrument may follow without an error, whatever
it was made from, as the docstring of each says. One of ROUGH makes a message that may be
good or bad by accident. Everything random comes from the caller's generator.
"""

from collections.abc import Callable
from dataclasses import dataclass
from random import Random

from pulsetally.simulators.scpi_device import Command, ScpiDevice
from pulsetally.simulators.scpi_headers import read_pattern
from pulsetally.simulators.scpi_parameters import Number, Parameter, Switch, Word, spellings

# Characters that no header, number or word has and that are no white space.
_FOREIGN = b"&%$!~^`{}[]|\\<>=" + bytes(range(0x7F, 0x100))
_WORDS = (b"MIN", b"max", b"DEFault", b"ON", b"OFF", b"INF", b"NAN", b"BUS", b"QQQ", b"_")
_NUMBERS = (
    b"0", b"-0", b"1", b"-1", b"1E9", b"9.9E37", b"9.91E37", b"1E400", b"-1E400", b"1E-400",
    b"1E32000", b"1E99999999999", b"0" * 300, b"9" * 300, b".", b"+", b"1e", b"1.2.3", b"0x10",
    b"#HFFFFFFFF", b"#HZ", b"#B", b"#Q9", b"12e", b"1 2", b"5 MV", b"5 ms", b"5MOHM", b"2 KHZ",
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Original:
    """A message that is written as it should be.

    header: with its question mark; data: its elements; command: the row it is for.
    """

    header: bytes
    data: tuple[bytes, ...]
    command: Command

    @property
    def message(self) -> bytes:
        return self.header + (b" " + b",".join(self.data) if self.data else b"")

    @property
    def is_query(self) -> bool:
        return self.header.endswith(b"?")


def spell(pattern: str, random: Random) -> bytes:
    """Return one of a pattern's legal spellings."""
    if pattern.startswith("*"):
        return pattern.encode()
    words = []
    for node in read_pattern(pattern):
        if node.optional and random.random() < 0.5:
            continue
        word = random.choice((node.long, node.short, node.long.lower(), node.short.lower()))
        if node.suffixes is not None and random.random() < 0.7:
            word += str(random.randint(*node.suffixes))
        words.append(word)
    return random.choice((":", "")).encode() + ":".join(words).encode()


def element_for(parameter: Parameter, random: Random) -> bytes:
    """Return an element that a parameter mostly accepts."""
    if isinstance(parameter, Word):
        return random.choice(sorted(spellings(parameter.words))).encode()
    if isinstance(parameter, Switch):
        return random.choice((b"ON", b"OFF", b"0", b"1"))
    if isinstance(parameter, Number):
        limits = parameter.limits()
        share = random.random() ** 8
        value = limits.lowest + share * (limits.highest - limits.lowest)
        return random.choice((b"MIN", b"DEF", b"%.6G" % value, b"%.3e" % value))
    return random.choice((b"#13ABC", b"'text'"))


def original(device: ScpiDevice, random: Random) -> Original:
    """Return a message for any row of a device's table."""
    command = random.choice(device.commands)
    query = command.execute is None or (command.answer is not None and random.random() < 0.5)
    parameters = command.query_parameters if query else command.parameters
    return Original(
        header=spell(command.pattern, random) + (b"?" if query else b""),
        data=tuple(element_for(parameter, random) for parameter in parameters),
        command=command,
    )


Deadly = Callable[[Original, Random], bytes | None]
Rough = Callable[[bytes, Random], bytes]


# Deadly: each returns None where it has nothing to spoil.


def _unknown_node(good: Original, random: Random) -> bytes:
    """No table has a node QQQX."""
    return good.header.removesuffix(b"?") + b":QQQX" * random.choice((1, 2, 50, 3000))


def _long_mnemonic(good: Original, random: Random) -> bytes:
    """A mnemonic has at most 12 characters."""
    return good.header.removesuffix(b"?") + b"X" * random.choice((12, 13, 100, 20_000))


def _foreign_character(good: Original, random: Random) -> bytes:
    """A header holds letters, digits, underlines and colons."""
    at = random.randint(0, len(good.header))
    foreign = bytes([random.choice(_FOREIGN)])
    return good.header[:at] + foreign + good.message[at:]


def _colons(good: Original, random: Random) -> bytes:
    """Two colons have no node between them."""
    return random.choice((b"::", b":::")) + good.message.lstrip(b":*")


def _question_marks(good: Original, random: Random) -> bytes:
    """A header has one question mark at most, at its end."""
    return good.header.removesuffix(b"?") + b"?" * random.randint(2, 5)


def _missing_form(good: Original, random: Random) -> bytes | None:
    """A row without a query or without a command has no such header."""
    if good.command.answer is None:
        return good.header + b"?"
    return good.header.removesuffix(b"?") if good.command.execute is None else None


def _missing_parameter(good: Original, random: Random) -> bytes | None:
    """A parameter that is required must be there."""
    return good.header if good.data and not good.is_query else None


def _one_more(good: Original, element: bytes) -> bytes:
    # One element more than the row takes, or two where a query takes a limit's name.
    return good.header + b" " + b",".join((*good.data, b"1", b"1", element))


def _more_parameters(good: Original, random: Random) -> bytes:
    """A row takes no more parameters than it has."""
    return _one_more(good, random.choice((b"1", b"MIN", b"'a'", b"#13ABC", b"(@1)", b"#0")))


def _open_quote(good: Original, random: Random) -> bytes:
    """A string that is never closed, or closed in a later message, is one element too many."""
    return _one_more(good, random.choice((b'"', b"'", b"'it''s", b'"a""', b"'\xff\x00;:")))


def _lying_block(good: Original, random: Random) -> bytes:
    """A block whose length is a lie, longer, shorter or no number, is one element too many."""
    lies = (b"#15abc", b"#12abcdef", b"#3a2b", b"#9", b"#9999999999", b"#3999ab", b"#2", b"#")
    return _one_more(good, random.choice(lies))


def _no_element(good: Original, random: Random) -> bytes:
    """Nothing begins with these, and nothing is no element."""
    return good.header + b" " + random.choice((b"1,,2", b",", b"\xb5", b"1,", b"@", b"\x7f"))


def _wrong_element(good: Original, random: Random) -> bytes | None:
    """Numbers, words and switches are neither strings nor blocks nor expressions."""
    parameters = () if good.is_query else good.command.parameters
    if not parameters or not isinstance(parameters[0], Number | Word | Switch):
        return None
    wrong = random.choice((b"'1'", b'"ON"', b"#11A", b"(1)", b"(@1:2)", b"QQQ", b"QQ-Q"))
    return good.header + b" " + wrong


def _wrong_number(good: Original, random: Random) -> bytes | None:
    """No number, no suffix, or beyond what IEEE 488.2 lets a number have."""
    parameters = () if good.is_query else good.command.parameters
    if not parameters or not isinstance(parameters[0], Number):
        return None
    wrong = random.choice(
        (b"1.2.3", b"--5", b"+", b"1E", b"1E+", b"#HG", b"#Q8", b"#B2", b"#X1", b"0x10", b"1_0",
         b"1E32001", b"1E-32001", b"1E" + b"9" * 5000, b"9" * 256, b"1." + b"1" * 300,
         b"5QQ", b"5 QV", b"5 " + b"V" * 13, b"5 V V", b"5-V", b"NAN", b"1E5E5")
    )  # fmt: skip
    return good.header + b" " + wrong


def _endless(good: Original, random: Random) -> bytes:
    """No message is longer than the input buffer."""
    filling = random.choice((b"A", b" ", b":A", b"1,", b"\x00", b"(", b"0", b";"))
    return good.header + b" " + filling * (70_000 // len(filling))


DEADLY: tuple[tuple[Deadly, int], ...] = (
    (_unknown_node, 10), (_long_mnemonic, 10), (_foreign_character, 20), (_colons, 10),
    (_question_marks, 10), (_missing_form, 10), (_missing_parameter, 10), (_more_parameters, 10),
    (_open_quote, 10), (_lying_block, 10), (_no_element, 10), (_wrong_element, 10),
    (_wrong_number, 20), (_endless, 1),
)  # fmt: skip
# After these a newline alone may not end the message.
LEAVES_OPEN = (_open_quote.__name__, _lying_block.__name__)


# Rough.


def _flip(message: bytes, random: Random) -> bytes:
    spoiled = bytearray(message)
    for _ in range(random.randint(1, 4)):
        spoiled[random.randrange(len(spoiled))] ^= 1 << random.randrange(8)
    return bytes(spoiled)


def _cut(message: bytes, random: Random) -> bytes:
    return message[: random.randrange(len(message))]


def _drop(message: bytes, random: Random) -> bytes:
    at = random.randrange(len(message))
    return message[:at] + message[at + random.randint(1, 5) :]


def _insert(message: bytes, random: Random) -> bytes:
    pieces = (
        *(bytes([byte]) for byte in b"\x00\r\n\xff\"'#;:?,*()E- "),
        *(b"''", b"#0", b"#15", b"#9999999999", b";;", b"1E999"),
    )
    at = random.randint(0, len(message))
    piece = random.choice((*pieces, random.randbytes(random.randint(1, 20))))
    return message[:at] + piece * random.choice((1, 1, 1, 7)) + message[at:]


def _double(message: bytes, random: Random) -> bytes:
    begin = random.randrange(len(message))
    end = random.randint(begin, len(message))
    return message[:end] + message[begin:end] * random.choice((1, 2, 40)) + message[end:]


def _new_element(message: bytes, random: Random) -> bytes:
    header, _, _ = message.partition(b" ")
    return header + b" " + random.choice((*_WORDS, *_NUMBERS))


def _white(message: bytes, random: Random) -> bytes:
    return b"".join(bytes([byte]) + random.choice((b"", b"", b"\t")) for byte in message)


def _noise(message: bytes, random: Random) -> bytes:
    return random.randbytes(random.randint(0, 60))


def _keep(message: bytes, random: Random) -> bytes:
    return message


ROUGH: tuple[Rough, ...] = (
    _flip, _cut, _drop, _insert, _double, _new_element, _white, _noise, _keep,
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class Spoiled:
    """A message without its newline; deadly: some error must come of it."""

    message: bytes
    deadly: bool
    how: str


def spoiled(device: ScpiDevice, random: Random) -> Spoiled:
    """Return a spoiled message for a device; a third is bad for certain."""
    if random.random() < 1 / 3:
        while True:
            good = original(device, random)
            (deadly,) = random.choices(
                [spoiler for spoiler, _ in DEADLY], [weight for _, weight in DEADLY]
            )
            message = deadly(good, random)
            if message is not None:
                return Spoiled(message=message, deadly=True, how=deadly.__name__)
    units = [original(device, random).message for _ in range(random.choice((1, 1, 2, 4)))]
    message = b";".join(units)
    names = []
    for _ in range(random.choice((1, 1, 2, 3))):
        rough = random.choice(ROUGH)
        # What was cut to nothing can't be spoiled any more.
        message = rough(message or b"*IDN?", random)
        names.append(rough.__name__)
    return Spoiled(message=message, deadly=False, how=", ".join(names))
