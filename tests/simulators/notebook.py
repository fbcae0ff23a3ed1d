"""An instrument with a node for each thing that the published rules speak of.

It writes down what it was told and tells it again when asked (NOTes?), so that a client
at the far end of any line can see what arrived. It is made of nothing but what every
simulated instrument is made of.
"""

import math

import numpy as np

from pulsetally.simulators.scpi_blocks import definite_block
from pulsetally.simulators.scpi_device import Call, Command, ScpiDevice
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_numbers import format_real
from pulsetally.simulators.scpi_parameters import (
    Block,
    Limits,
    Number,
    Parameter,
    Switch,
    Text,
    Word,
    number,
)

IDENTITY = "PULSETALLY,NOTEBOOK,0,1"

# Long form with the short form in capitals, as four public manuals have them.
MNEMONICS = """
VOLTage VOLT, FREQuency FREQ, POWer POW, IMMediate IMM, OUTPut OUTP, FORMat FORM, DELay DEL,
CURRent CURR, IMPedance IMP, TRIGger TRIG, WAVeform WAV, CHANnel CHAN, TIMebase TIM, ACQuire ACQ,
MEASure MEAS, SYSTem SYST, ERRor ERR, FUNCtion FUNC, BURSt BURS, PULSe PULS, WIDTh WIDT,
PERiod PER, LEVel LEV, RANGe RANG, OFFSet OFFS, COUNt COUN, SOURce SOUR, AVERage AVER,
PREamble PRE, POINts POIN, INITiate INIT, ABORt ABOR, SQUare SQU, SINusoid SIN, TRIangle TRI,
EXTernal EXT, INTernal INT, INFinity INF, MINimum MIN, MAXimum MAX, DEFault DEF, ARBitrary ARB,
NTRansition NTR, PTRansition PTR, AUTO AUTO, DATA DATA, LOAD LOAD
"""
MNEMONIC_PAIRS = [
    (pair.split()[0], pair.split()[1]) for pair in MNEMONICS.replace("\n", " ").split(",")
]

Note = tuple[str, tuple[object, ...]]


class Notebook(ScpiDevice):
    """Writes down what it was told, under the pattern's name; *RST forgets it.

    busy: whether an overlapped operation is under way; waiting ends it.
    operation: the condition of STATus:OPERation.
    """

    def __init__(self) -> None:
        super().__init__(IDENTITY)
        self.notes: list[Note] = []
        self.busy = False
        self.operation = 0
        self.declare([*self._tree_commands(), *self._parameter_commands()])
        self.declare([*self._query_commands(), *self._status_commands()])

    def with_words(self) -> "Notebook":
        """Add a node WORD:<mnemonic> for each published mnemonic."""
        self.declare([self.noting(f":WORD:{long}") for long, _ in MNEMONIC_PAIRS])
        return self

    def noting(self, pattern: str, *parameters: Parameter) -> Command:
        return Command(
            pattern=pattern,
            parameters=parameters,
            execute=lambda call: self.notes.append((pattern, call.suffixes + call.values)),
            answer=lambda _: pattern,
        )

    def fail(self, _: Call) -> None:
        raise ScpiError(-200)

    # Hooks of the engine.

    def reset(self) -> None:
        self.notes.clear()

    def is_busy(self) -> bool:
        return self.busy

    def wait(self) -> None:
        self.busy = False

    def operation_condition(self) -> int:
        return self.operation

    # Its table.

    def _tree_commands(self) -> list[Command]:
        return [
            self.noting(":ROUTe:CONNect:RULE", Word(("ALL", "FREE")), Word(("ALL", "FREE"))),
            self.noting(":ROUTe:CONNect:SEQuence", Word(("ALL",)), Word(("BBM",))),
            self.noting(":TRIGger:SOURce", Word(("EXTernal", "BUS"))),
            self.noting(":TRIGger:COUNt", number(1, 100, 1, whole=True)),
            self.noting(":SAMPle:COUNt", number(1, 100, 1, whole=True)),
            self.noting(":FREQuency:STARt", number(1, 1e9, 1e3, unit="HZ")),
            self.noting(":FREQuency:STOP", number(1, 1e9, 1e3, unit="HZ")),
            self.noting("[:SOURce<1-2>]:VOLTage[:LEVel]", number(-1e9, 1e9, 1.0, unit="V")),
            self.noting("*EMC", number(0, 1, 0)),
            self.noting("*GMC", Text()),
            Command(pattern=":MEASure:VOLTage", answer=lambda _: "1"),
            Command(pattern=":MEASure:CURRent", answer=lambda _: "2"),
            Command(pattern=":CURRent", answer=lambda _: "3"),
        ]

    def _parameter_commands(self) -> list[Command]:
        def of(unit: str) -> Number:
            return number(-1e12, 1e12, 1.0, unit=unit)

        return [
            self.noting(":LOAD", number(1, 1e9, 50, unit="OHM")),
            self.noting(
                ":OPEN",
                Number(limits=lambda: Limits(1, 1e6, 50), unit="OHM", words={"INFinity": math.inf}),
            ),
            self.noting(":PLAIN", number(-1e9, 1e9, 1.0, unit="")),
            self.noting(":AMPere", of("A")),
            self.noting(":FARad", of("F")),
            self.noting(":SECond", of("S")),
            self.noting(":TCouple", number(0, 9, 0)),
            self.noting(":DATA", Block()),
            self.noting(":TEXT", Text()),
            self.noting(":OUTPut", Switch()),
        ]

    def _query_commands(self) -> list[Command]:
        def echo_block(call: Call) -> bytes:
            (payload,) = call.values
            assert isinstance(payload, bytes)
            return definite_block(payload)

        def numbers(kind: str) -> Command:
            codes = np.array([1, 32767, -32768, -1], dtype=kind).tobytes()
            name = "SWAPped" if kind.startswith("<") else "NORMal"
            return Command(pattern=f":BLOCk:{name}", answer=lambda _: definite_block(codes))

        return [
            Command(pattern=":BLOCk", answer=lambda _: definite_block(b"A;\n")),
            Command(pattern=":BLOCk:ZERos", answer=lambda _: definite_block(bytes(2000))),
            Command(pattern=":BLOCk:ECHO", query_parameters=(Block(),), answer=echo_block),
            numbers("<i2"),
            numbers(">i2"),
            Command(
                pattern=":ECHO",
                query_parameters=(number(0, 9, 0, whole=True),),
                answer=lambda call: format_real(call.number()),
            ),
            Command(pattern=":SPECial:INFinity", answer=lambda _: format_real(math.inf)),
            Command(pattern=":SPECial:NINFinity", answer=lambda _: format_real(-math.inf)),
            Command(pattern=":SPECial:NAN", answer=lambda _: format_real(math.nan)),
            Command(pattern=":NOTes", answer=lambda _: "|".join(map(_shown, self.notes))),
        ]

    def _status_commands(self) -> list[Command]:
        def raise_it(call: Call) -> None:
            raise ScpiError(int(call.number()))

        def set_operation(call: Call) -> None:
            self.operation = int(call.number())

        def set_questionable(call: Call) -> None:
            self.status.questionable.update(int(call.number()))

        bits = number(0, 32767, 0, whole=True)
        return [
            Command(pattern=":FAIL", execute=self.fail),
            Command(
                pattern=":RAISe",
                parameters=(number(-899, 32767, 1, whole=True),),
                execute=raise_it,
            ),
            Command(pattern=":CONDition:OPERation", parameters=(bits,), execute=set_operation),
            Command(
                pattern=":CONDition:QUEStionable", parameters=(bits,), execute=set_questionable
            ),
        ]


def _shown(note: Note) -> str:
    pattern, values = note
    return f"{pattern.lstrip(':')} {','.join(map(_value, values))}".rstrip()


def _value(value: object) -> str:
    if isinstance(value, bytes):
        return value.hex()
    if isinstance(value, bool):
        return "1" if value else "0"
    return f"{value:.12G}" if isinstance(value, int | float) else str(value)
