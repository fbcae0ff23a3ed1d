"""What published rules say about a device: messages, answers, errors, event status.

Rows of IEEE Std 488.2-1992 and SCPI-99 as public programming manuals, transcriptions and
worked examples give them; two marked 'closed form' follow from a rule alone. The same
rows are put to the engine on bytes and to served instruments over every kind of line.
"""

from dataclasses import dataclass
from enum import Enum, auto


class Device(Enum):
    """Who can be put to the row."""

    NOTEBOOK = auto()  # needs nodes of its own: see notebook.py
    GENERATOR = auto()  # needs the scpi99 generator
    SCPI99 = auto()  # needs no more than SCPI-99's SYSTem and STATus
    ANY = auto()  # needs no more than the common commands: every family


class Ends(Enum):
    """What the row needs to know of a message's end."""

    ANY = auto()
    NEWLINE = auto()  # only a newline ends a message: TCP, serial lines
    MARKED = auto()  # the line itself marks the end of a message: HiSLIP


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One published row.

    name: its id; several rows may share one.
    exchanges: program messages without their end, each with its whole answer without the
    newline, or None where nothing must come.
    errors: what is in the error queue afterwards, oldest first.
    """

    name: str
    exchanges: tuple[tuple[bytes, bytes | None], ...]
    errors: tuple[int, ...] = ()
    device: Device = Device.NOTEBOOK
    ends: Ends = Ends.ANY


def told(name: str, message: bytes, notes: bytes) -> Row:
    """Return the row of a message that the notebook must have taken as these notes."""
    return Row(name=name, exchanges=((message, None), (b":NOT?", notes)))


def refused(
    name: str,
    message: bytes,
    *errors: int,
    device: Device = Device.NOTEBOOK,
    ends: Ends = Ends.ANY,
) -> Row:
    """Return the row of a message that must leave these errors and no answer."""
    return Row(name=name, exchanges=((message, None),), errors=errors, device=device, ends=ends)


def asked(name: str, message: bytes, answer: bytes, device: Device = Device.NOTEBOOK) -> Row:
    """Return the row of a query that must be answered so, without an error."""
    return Row(name=name, exchanges=((message, answer),), device=device)


def talked(
    name: str, *exchanges: tuple[bytes, bytes | None], device: Device, errors: tuple[int, ...] = ()
) -> Row:
    """Return the row of several messages."""
    return Row(name=name, exchanges=exchanges, device=device, errors=errors)


# Four 16-bit and two 32-bit numbers whose bytes are the hardest for a line to carry.
_LITTLE = bytes.fromhex("0100ff7f0080ffff")
_BIG = bytes.fromhex("00017fff8000ffff")
_REALS = bytes.fromhex("0000803f000000c0")

# IEEE 488.2 7.7.6 (listening), 8.7.9 and 8.7.10 (talking).
BLOCKS = [
    told("BLK-1", b":DATA #13ABC", b"DATA 414243"),
    told("BLK-2", b":DATA #2130123456789abc", b"DATA " + b"0123456789abc".hex().encode()),
    told("BLK-3", b":DATA #42000" + b"\n" * 2000, b"DATA " + b"0a" * 2000),
    told("BLK-4", b":DATA #501024" + b"\xff" * 1024, b"DATA " + b"ff" * 1024),
    told("BLK-5", b":DATA #800000003ABC", b"DATA 414243"),
    told("BLK-6", b":DATA #10", b"DATA"),
    told("BLK-7", b":DATA #0ABC", b"DATA 414243"),
    refused("BLK-8", b":DATA #15ABC", -161, ends=Ends.MARKED),
    # Without a mark the newline counts as data, and the message goes on behind it.
    refused("BLK-8", b":DATA #15ABC\n*IDN?", -103, ends=Ends.NEWLINE),
    told("BLK-9", b":DATA #13A\nC", b"DATA 410a43"),
    asked("BLK-10", b":BLOC:ECHO? #18" + _LITTLE, b"#18" + _LITTLE),
    asked("BLK-10", b":BLOC:SWAP?", b"#18" + _LITTLE),
    asked("BLK-11", b":BLOC:ECHO? #18" + _BIG, b"#18" + _BIG),
    asked("BLK-11", b":BLOC:NORM?", b"#18" + _BIG),
    asked("BLK-12", b":BLOC:ECHO? #18" + _REALS, b"#18" + _REALS),
    asked("BLK-13", b":BLOC:ZER?", b"#42000" + bytes(2000)),
    refused("BLK-14", b":DATA noise#13ABC", -103),
    refused("BLK-14", b"noise#13ABC", -111, device=Device.ANY),
    refused("BLK-15", b":DATA #1xABC", -161),
    refused("BLK-15", b":DATA #2-5ABC", -161),
]

# IEEE 488.2 7.7.2 to 7.7.4 (listening), 8.7.2 to 8.7.4 (talking); SCPI-99 Vol. 1 7.2.
NUMBERS = [
    told("NUM-1", b":PLAIN 146;PLAIN +146;PLAIN -12345;PLAIN 0273",
         b"PLAIN 146|PLAIN 146|PLAIN -12345|PLAIN 273"),
    asked("NUM-1", b":TRIG:COUN? MAX", b"100"),
    told("NUM-2", b":PLAIN 12.3;PLAIN +1.2345;PLAIN -0.123;PLAIN 273.;PLAIN .0273",
         b"PLAIN 12.3|PLAIN 1.2345|PLAIN -0.123|PLAIN 273|PLAIN 0.0273"),
    asked("NUM-2", b":SYST:VERS?", b"1999.0", Device.SCPI99),
    told("NUM-3", b":PLAIN 2.73E+2;PLAIN 273.0E-2;PLAIN 4.3E-3",
         b"PLAIN 273|PLAIN 2.73|PLAIN 0.0043"),
    asked("NUM-3", b":ECHO? 5", b"5.00000000000E+00"),
    told("NUM-4", b":TRIG:COUN 5;COUN 5.0;COUN 50E-1;COUN 5.4",
         b"|".join([b"TRIGger:COUNt 5"] * 4)),
    asked("NUM-5", b":SPEC:INF?;NINF?;NAN?", b"9.9E+37;-9.9E+37;9.91E+37"),
    told("NUM-5", b":OPEN 9.9E37;OPEN INF;OPEN infinity", b"OPEN INF|OPEN INF|OPEN INF"),
    asked("NUM-5", b":OUTP:LOAD 9.9E37;LOAD?;LOAD INF;LOAD?", b"9.9E+37;9.9E+37",
          Device.GENERATOR),
    told("NUM-6", b":PLAIN #HA2F;PLAIN #Q62;PLAIN #B01011", b"PLAIN 2607|PLAIN 50|PLAIN 11"),
    asked("NUM-6", b"*ESE #H2F;*ESE?;*ESE #q62;*ESE?;*ESE #b1011;*ESE?", b"47;50;11", Device.ANY),
    refused("NUM-7", b":PLAIN 1E32001", -123),
    refused("NUM-7", b"*ESE 1E-32001", -123, device=Device.ANY),
    refused("NUM-7", b":PLAIN " + b"1" * 256, -124),
    refused("NUM-7", b"*ESE 1." + b"1" * 255, -124, device=Device.ANY),
    told("NUM-8", b":PLAIN 28;PLAIN 0.28E2;PLAIN 280E-1;PLAIN 28000m;PLAIN 0.028K;PLAIN 28E-3K",
         b"|".join([b"PLAIN 28"] * 6)),
]  # fmt: skip

# IEEE 488.2 7.7.3 and table 7-2; SCPI-99 Vol. 1 7.3.
SUFFIXES = [
    told("SUF-1", b":VOLT 5 MV", b"[:SOURce<1-2>]:VOLTage[:LEVel] 1,0.005"),
    told("SUF-2", b":VOLT 5 MAV", b"[:SOURce<1-2>]:VOLTage[:LEVel] 1,5000000"),
    told("SUF-3", b":AMP 3 MA", b"AMPere 0.003"),
    told("SUF-4", b":FREQ:STOP 2 MHZ;STOP 2 MAHZ;STOP 2mhz",
         b"|".join([b"FREQuency:STOP 2000000"] * 3)),
    told("SUF-5", b":LOAD 10 MOHM;LOAD 10MOHM", b"LOAD 10000000|LOAD 10000000"),
    told("SUF-6", b":SEC 1 MS;SEC 1ms", b"SECond 0.001|SECond 0.001"),
    told("SUF-7", b":VOLT 5 UV", b"[:SOURce<1-2>]:VOLTage[:LEVel] 1,5E-06"),
    told("SUF-7", b":SEC 20 NS;:FAR 100 PF", b"SECond 2E-08|FARad 1E-10"),
    refused("SUF-8", b":VOLT 5 ABCDEFGHIJKLM", -134),
    refused("SUF-8", b"*ESE 5 ABCDEFGHIJKLM", -134, device=Device.ANY),
    refused("SUF-8", b"*ESE 5 V", -138, device=Device.ANY),
    refused("SUF-8", b":VOLT 5 HZ", -131),
    *(
        told("SUF-table", b":PLAIN 5E%d%s" % (-power, suffix), b"PLAIN 5")
        for suffix, power in (
            (b"EX", 18), (b"PE", 15), (b"T", 12), (b"G", 9), (b"MA", 6), (b"K", 3),
            (b"M", -3), (b"U", -6), (b"N", -9), (b"P", -12), (b"F", -15), (b"A", -18),
        )
    ),
]  # fmt: skip

# IEEE 488.2 11.2 and 11.5.1; SCPI-99 Vol. 1 section 9.
STATUS = [
    talked("ESR-1", (b"*CLS", None), (b"UNKNOWN:HEADER", None), (b"*OPC", None),
           (b"*ESR?", b"33"), (b"*CLS", None), device=Device.ANY),
    talked("ESR-2", (b"*CLS", None), (b"UNKNOWN:HEADER", None), (b"*ESR?", b"32"),
           (b"*ESR?", b"0"), (b"*CLS", None), device=Device.ANY),
    talked("ESR-4", (b"*CLS", None), (b"*OPC?", b"1"), (b"*ESR?", b"0"), device=Device.ANY),
    talked("ESR-5", (b"*XYZ", None), (b"*RST", None), device=Device.ANY, errors=(-113,)),
    talked("ESR-5", (b"*XYZ", None), (b"*CLS", None), (b"*ESR?", b"0"), device=Device.ANY),
    asked("STB-error queue", b"*STB?", b"0", Device.ANY),
    talked("STB-error queue", (b"*XYZ", None), (b"*STB?", b"4"), device=Device.ANY,
           errors=(-113,)),
    talked("STB-questionable", (b":STAT:QUES:ENAB 2", None), (b":COND:QUES 2", None),
           (b"*STB?", b"8"), (b":STAT:QUES?", b"2"), (b"*STB?", b"0"), (b":COND:QUES 0", None),
           device=Device.NOTEBOOK),
    asked("STB-message available", b"*OPC?;*STB?", b"1;16", Device.ANY),
    talked("STB-event status", (b"*ESE 32", None), (b"*XYZ", None), (b"*STB?", b"36"),
           (b"*ESR?", b"32"), (b"*STB?", b"4"), device=Device.ANY, errors=(-113,)),
    talked("STB-master summary", (b"*SRE 4;*SRE?", b"4"), (b"*XYZ", None), (b"*STB?", b"68"),
           device=Device.ANY, errors=(-113,)),
    # Bit 6 is the summary itself and can't be enabled (IEEE 488.2 11.3.2, from memory).
    asked("STB-master summary", b"*SRE 255;*SRE?", b"191", Device.ANY),
    talked("STB-operation", (b":STAT:OPER:ENAB 16", None), (b":COND:OPER 16", None),
           (b"*STB?", b"128"), (b":STAT:OPER:COND?", b"16"), (b":STAT:OPER?", b"16"),
           (b"*STB?", b"0"), (b":COND:OPER 0", None), device=Device.NOTEBOOK),
]  # fmt: skip

# SCPI-99 Vol. 2 section 21.8.
ERRORS = [
    asked("QUE-empty", b":SYST:ERR?;ERR:NEXT?", b'0,"No error";0,"No error"', Device.SCPI99),
    talked("QUE-first in first out", (b"*XYZ", None), (b"*ESE 999", None), (b"*ESE", None),
           device=Device.ANY, errors=(-113, -222, -109)),
    # 40: a command error (32), and an overflow, which is of the device-specific class (8).
    talked("QUE-overflow", *[(b"*XYZ", None)] * 32, (b"*ESR?", b"32"), (b"*XYZ", None),
           (b"*ESR?", b"40"), device=Device.ANY, errors=(-113,) * 31 + (-350,)),
    talked("QUE-text", (b":FAIL", None), (b":SYST:ERR?", b'-200,"Execution error"'),
           device=Device.NOTEBOOK),
    refused("ERR-1", b"*XYZ", -113, device=Device.ANY),
    refused("ERR-2", b"SETUP&", -101, device=Device.ANY),
    refused("ERR-3", b"*EMC 1:CH1:VOLTS 5", -103),
    refused("ERR-3", b"*ESE 1:CH1:VOLTS 5", -103, device=Device.ANY),
    refused("ERR-4", b"*ESE", -109, device=Device.ANY),
    refused("ERR-4", b"*ESE 0,1", -108, device=Device.ANY),
    refused("ERR-5", b'*GMC"MACRO"', -111, device=Device.ANY),
    refused("ERR-6", b":ABCDEFGHIJKLM", -112, device=Device.ANY),
    # Only a line that tells what was read shows -410, and none of ours shows -420: a client
    # that waits for an answer that was never asked for sends nothing.
    Row(name="ERR-7", exchanges=((b"MEAS:VOLT?", None), (b"MEAS:CURR?", b"2")), errors=(-410,),
        ends=Ends.MARKED),
    refused("ERR-8", b":VOLT 2E9", -222),
    refused("ERR-8", b":VOLT:HIGH 1E6", -222, device=Device.GENERATOR),
    refused("ERR-8", b":TRIG:SOUR NOON", -224),
    refused("ERR-8", b":TRIG:SOUR NOON", -224, device=Device.GENERATOR),
    refused("ERR-8", b":PULS:WIDT 2;PER 1", -221, device=Device.GENERATOR),
    # Closed form: 1011 steps of 20 V / 2**14.
    asked("ERR-9", b":VOLT:HIGH 1.23456789;HIGH?", b"1.23413085938E+00", Device.GENERATOR),
    asked("ERR-9", b"*ESE 32.4;*ESE?", b"32", Device.ANY),
]  # fmt: skip

# SCPI-99 Vol. 1 section 6.2.1; the list of words has a test of its own.
_MNEMONIC = b"[:SOURce<1-2>]:VOLTage[:LEVel] 1,"
WORDS = [
    told("MNE-1", b"VOLT 1;:volt 2;:VolTaGe 3;:sour:voltage:lev 4",
         b"|".join(_MNEMONIC + b"%d" % value for value in (1, 2, 3, 4))),
    refused("MNE-2", b"VOL 1", -113),
    refused("MNE-2", b"VOLTAG 1", -113),
    refused("MNE-2", b"SYSTe:ERR?", -113, device=Device.SCPI99),
    refused("MNE-2", b"STAT:PRESe", -113, device=Device.SCPI99),
    told("MNE-4", b":TC 5;:TCOUPLE 6", b"TCouple 5|TCouple 6"),
    refused("MNE-4", b":TCOU 5", -113),
    told("MNE-suffix", b":SOUR2:VOLT 5;:source2:voltage 6",
         b"[:SOURce<1-2>]:VOLTage[:LEVel] 2,5|[:SOURce<1-2>]:VOLTage[:LEVel] 2,6"),
    refused("MNE-suffix", b":SOUR3:VOLT 1", -114),
]  # fmt: skip

# IEEE 488.2 appendix A.1; SCPI-99 Vol. 1 section 6.2.4.
_TIMES = b"2.00000000000E-04;4.00000000000E-03;3"
TREE = [
    told("TREE-1", b":ROUT:CONN:RULE ALL,FREE;SEQ ALL,BBM",
         b"ROUTe:CONNect:RULE ALL,FREE|ROUTe:CONNect:SEQuence ALL,BBM"),
    asked("TREE-2", b"MEAS:VOLT?;CURR?", b"1;2"),
    asked("TREE-3", b"MEAS:VOLT?;:CURR?", b"1;3"),
    talked("TREE-4", (b"STAT:OPER:ENAB 16", None), (b"STAT:OPER?;PRES", b"0"),
           (b"STAT:OPER:ENAB?", b"0"), device=Device.SCPI99),
    talked("TREE-5", (b"STAT:OPER:COND?;ENAB 16", b"0"), (b"STAT:OPER:ENAB?", b"16"),
           device=Device.SCPI99),
    told("TREE-6", b"TRIG:SOUR EXT;COUNT 10", b"TRIGger:SOURce EXT|TRIGger:COUNt 10"),
    talked("TREE-6", (b"PULS:WIDT 2E-4;PER 4E-3;COUN 3", None), (b"PULS:WIDT?;PER?;COUN?", _TIMES),
           device=Device.GENERATOR),
    told("TREE-7", b"TRIG:COUN MIN;:SAMP:COUN MIN", b"TRIGger:COUNt 1|SAMPle:COUNt 1"),
    refused("TREE-7", b"TRIG:COUN MIN;SAMP:COUN MIN", -113),
    told("TREE-8", b"FREQ:STAR 3E6;*OPC;STOP 5E6",
         b"FREQuency:STARt 3000000|FREQuency:STOP 5000000"),
    talked("TREE-8", (b"PULS:WIDT 2E-4;*OPC;PER 4E-3;*CLS;COUN 3", None),
           (b"PULS:WIDT?;*OPC?;PER?;COUN?", _TIMES.replace(b";", b";1;", 1)),
           device=Device.GENERATOR),
    told("TREE-9", b"*RST;VOLT 5", _MNEMONIC + b"5"),
    asked("TREE-9", b"*RST;PULS:COUN 3;COUN?", b"3", Device.GENERATOR),
    asked("TREE-10", b"*ESE?;*SRE?;*OPC?", b"0;0;1", Device.ANY),
    asked("TREE-10", b"MEAS:VOLT?;:BLOC?;:CURR?", b"1;#13A;\n;3"),
]  # fmt: skip

ROWS = [*BLOCKS, *NUMBERS, *SUFFIXES, *STATUS, *ERRORS, *WORDS, *TREE]

# How many numbered rows each published table has.
PUBLISHED_NAMES = [
    f"{table}-{number}"
    for table, count in (
        ("BLK", 15), ("NUM", 8), ("SUF", 9), ("ESR", 5), ("ERR", 9), ("MNE", 4), ("TREE", 10)
    )
    for number in range(1, count + 1)
]  # fmt: skip

# Rows that are tested elsewhere, or that say nothing about a device of ours.
ELSEWHERE = {
    "ESR-3": "every error by its number: test_conformance.py, with the published list",
    "MNE-3": "two nodes that share a short form are refused when a table is declared, so "
    "that no message can show it: test_scpi_headers.py",
    "SUF-9": "a rule for whoever sends numbers: tests/drivers/test_numbers.py",
}
