"""Every kind of fault over real lines, as a client sees it that knows nothing but bytes."""

import os
import select
import socket
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

import pytest

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.faults import GARBAGE, KINDS, Fault
from pulsetally.simulators.scpi_headers import short_form
from pulsetally.simulators.simulate import Addresses, SimulationSettings
from tests.simulators.sockets import Client, served

LINEAR = CellDescription(remanent_polarization=1e-9)
NOTHING = b'0,"No error"\n'


class Bare:
    """A client's end of a line, and the bytes that came."""

    def __init__(self, address: str) -> None:
        self.socket: socket.socket | None = None
        if address.startswith("TCPIP"):
            _, host, port, _ = address.split("::")
            self.socket = socket.create_connection((host, int(port)), timeout=10)
            self._end = self.socket.fileno()
        else:
            path = address.removeprefix("ASRL").removesuffix("::INSTR")
            self._end = os.open(path, os.O_RDWR | os.O_NOCTTY)

    def close(self) -> None:
        if self.socket is not None:
            self.socket.close()
        else:
            os.close(self._end)

    def send(self, text: str) -> None:
        assert os.write(self._end, text.encode() + b"\n") == len(text) + 1

    def hear(self) -> bytes:
        """Wait for bytes and return them; b"" when the connection was closed."""
        assert select.select([self._end], [], [], 10)[0], "nothing came"
        return os.read(self._end, 65_536)

    def hear_until(self, end: bytes) -> bytes:
        found = b""
        while not found.endswith(end):
            more = self.hear()
            assert more, found
            found += more
        return found

    def hear_exactly(self, count: int) -> bytes:
        found = b""
        while len(found) < count:
            more = self.hear()
            assert more, found
            found += more
        assert len(found) == count
        return found

    def ask(self, text: str) -> bytes:
        self.send(text)
        return self.hear_until(b"\n")

    def is_silent(self) -> bool:
        return not select.select([self._end], [], [], 0)[0]


@dataclass(kw_only=True)
class Scene:
    """A served bench, its control port, and a line to the generator."""

    addresses: Addresses
    control: Client
    serial: bool = False
    identity: bytes = b""
    open_lines: list[Bare] = field(default_factory=list)

    def open(self, instrument: str = "generator") -> Bare:
        line = Bare(getattr(self.addresses, instrument))
        self.open_lines.append(line)
        return line

    def anew(self) -> Bare:
        """Give up every line and open one to the generator, as soon as there is one."""
        for line in self.open_lines:
            line.close()
        self.open_lines.clear()
        self.settle()
        for _ in range(10_000):
            try:
                return self.open()
            except ConnectionRefusedError:
                self.settle()
        raise AssertionError("the generator does not listen again")

    def settle(self) -> None:
        """Return when the server has looked at everything that was there before the call."""
        for _ in range(5):
            assert self.control.ask("*OPC?") == "1"

    def advance(self, seconds: float) -> None:
        assert self.control.ask(f":CLOC:ADV {seconds};*OPC?") == "1"

    def count(self, of: str = "") -> int:
        return int(self.control.ask(f":FAUL:COUN:KIND? {of}" if of else ":FAUL:COUN?"))

    def wait_for(self, question: str, answer: str) -> None:
        """Return when the control port says so, at last."""
        for _ in range(100_000):
            if self.control.ask(question) == answer:
                return
        raise AssertionError(f"{question} never answered {answer}")

    def happen(self) -> None:
        """Return when one fault has happened and its deliveries were made."""
        self.wait_for(":FAUL:COUN?", "1")
        self.settle()

    def truth(self, what: str) -> str:
        return self.control.ask(f":TRUT:{what}?")

    def add(self, what: str) -> None:
        assert self.control.ask(f":FAUL:ADD {what};:SYST:ERR?") == '0,"No error"'


@contextmanager
def scene(
    *faults: Fault, transport: str = "tcp", exchange_seconds: float = 1e-3
) -> Iterator[Scene]:
    settings = SimulationSettings(
        cell=LINEAR, seed=3, faults=faults, transport=transport, exchange_seconds=exchange_seconds
    )
    with served(settings) as addresses, Client(addresses.control) as control:
        found = Scene(addresses=addresses, control=control, serial=transport == "serial")
        try:
            yield found
        finally:
            for line in found.open_lines:
                line.close()


# What a client of the generator sees of each kind at the very exchange.

Sight = Callable[[Scene, Bare], None]


def sees_no_answer(scene: Scene, line: Bare) -> None:
    line.send(":PULS:COUN?")
    scene.happen()
    assert line.is_silent()
    assert line.ask(":OUTP?") == b"1\n"


def sees_a_late_answer(scene: Scene, line: Bare) -> None:
    line.send(":PULS:COUN?")
    line.send(":OUTP?")
    # In order: whoever gave up on the first answer takes it for the second.
    assert line.hear_until(b"1\n") == b"3\n1\n"


def sees_a_cut_answer(scene: Scene, line: Bare) -> None:
    line.send("*IDN?")
    cut = scene.identity[: len(scene.identity) * 3 // 4]
    assert line.hear_exactly(len(cut)) == cut
    scene.happen()
    assert line.is_silent()


def sees_the_end(scene: Scene, line: Bare) -> None:
    line.send(":PULS:COUN?")
    if scene.serial:
        scene.happen()
        assert line.is_silent()
    else:
        assert line.hear() == b""


def sees_a_reset(scene: Scene, line: Bare) -> None:
    line.send(":PULS:COUN?")
    if scene.serial:
        scene.happen()
        assert line.is_silent()
    else:
        with pytest.raises(ConnectionResetError):
            line.hear()


def sees_garbage(scene: Scene, line: Bare) -> None:
    line.send(":PULS:COUN?")
    assert line.hear_exactly(len(GARBAGE)) == GARBAGE.encode("latin-1")


def sees_an_error(scene: Scene, line: Bare) -> None:
    assert line.ask(":SYST:ERR?") == NOTHING
    assert line.ask(":SYST:ERR?").startswith(b'-241,"Hardware missing')
    assert line.ask(":SYST:ERR?") == NOTHING


def sees_no_pulse(scene: Scene, line: Bare) -> None:
    delivered = int(scene.truth("DEL"))
    line.send(":INIT;*TRG")
    assert line.ask(":SYST:ERR?") == NOTHING
    scene.advance(1)
    assert line.ask(":STAT:OPER:COND?") == b"32\n"
    assert int(scene.truth("DEL")) == delivered
    line.send("*TRG")
    assert line.ask("*OPC?;:SYST:ERR?") == b"1;" + NOTHING
    assert int(scene.truth("DEL")) == delivered + 3


def sees_no_power(scene: Scene, line: Bare) -> None:
    line.send(":PULS:COUN?")
    if scene.serial:
        scene.happen()
        line.send("*IDN?")
        scene.settle()
        assert line.is_silent()
    else:
        assert line.hear() == b""
        with pytest.raises(ConnectionRefusedError):
            scene.open()
    assert scene.truth("OUTP") == "0"
    scene.advance(1000)
    scene.settle()
    line = scene.anew()
    # IEEE 488.2 (from memory): bit 7 of the event status register tells that power came.
    assert line.ask("*ESR?;:SYST:ERR?") == b'128;-500,"Power on"\n'
    assert line.ask(":OUTP?;:PULS:COUN?;:SYST:ERR?") == b"0;1;" + NOTHING


def sees_an_open_cell(scene: Scene, line: Bare) -> None:
    assert scene.truth("CELL") == "GOOD"
    assert line.ask("*OPC?") == b"1\n"
    assert scene.truth("CELL") == "OPEN"


def sees_a_short(scene: Scene, line: Bare) -> None:
    assert scene.truth("CELL") == "GOOD"
    assert line.ask("*OPC?") == b"1\n"
    assert scene.truth("CELL") == "SHOR"


@dataclass(frozen=True, kw_only=True)
class Told:
    """value: as the control port takes it, '' for none. sees: what comes of it."""

    value: str = ""
    sees: Sight


SEEN = {
    "no answer": Told(value=",1", sees=sees_no_answer),
    "late answer": Told(value=",0.05", sees=sees_a_late_answer),
    "cut block": Told(value=",0.75", sees=sees_a_cut_answer),
    "closed connection": Told(sees=sees_the_end),
    "reset connection": Told(sees=sees_a_reset),
    "garbage": Told(sees=sees_garbage),
    "error entry": Told(value=",-241", sees=sees_an_error),
    "trigger ignored": Told(sees=sees_no_pulse),
    "power lost": Told(value=",1000", sees=sees_no_power),
    "cell opens": Told(sees=sees_an_open_cell),
    "cell shorts": Told(value=",5", sees=sees_a_short),
}


@pytest.mark.parametrize("transport", ["tcp", "serial"])
@pytest.mark.parametrize("kind", KINDS)
def test_each_kind_is_seen_at_its_exchange_and_passes(kind: str, transport: str) -> None:
    with scene(transport=transport) as found:
        line = found.open()
        found.identity = line.ask("*IDN?")
        line.send(":PULS:COUN 3;:TRIG:SOUR BUS;:OUTP ON")
        assert line.ask("*OPC?") == b"1\n"
        found.advance(1)
        passed = int(found.control.ask(":FAUL:EXCH? GEN"))
        assert passed == 3

        word = short_form(KINDS[kind].word)
        found.add(f"{word},GEN,3{SEEN[kind].value}")
        assert line.ask(":PULS:COUN?;:SYST:ERR?") == b"3;" + NOTHING
        assert line.ask(":STAT:OPER:COND?") == b"0\n"
        assert found.count() == 0
        SEEN[kind].sees(found, line)
        assert found.count() == found.count(word) == 1
        assert found.control.ask(":FAUL:PEND?;EXCH? OSC") == "0;0"

        line = found.anew()
        assert line.ask("*IDN?") == found.identity
        assert line.ask(":PULS:COUN?") == (b"1\n" if kind == "power lost" else b"3\n")
        assert found.count() == 1


# A lost message and a lost answer look the same to a client, and are not.
@pytest.mark.parametrize("transport", ["tcp", "serial"])
@pytest.mark.parametrize("word", ["NOAN", "CLOS", "RES"])
@pytest.mark.parametrize("followed", [0, 1])
def test_the_message_is_followed_or_not(followed: int, word: str, transport: str) -> None:
    with scene(transport=transport) as found:
        line = found.open()
        assert line.ask(":PULS:COUN?") == b"1\n"
        found.add(f"{word},GEN,1,{followed}")
        line.send(":PULS:COUN 7;COUN?")
        found.happen()
        assert found.anew().ask(":PULS:COUN?") == (b"7\n" if followed else b"1\n")


def test_a_fault_of_an_answer_waits_for_one() -> None:
    with scene() as found:
        line = found.open()
        found.add("NOAN,GEN,1")
        line.send(":PULS:COUN 5")
        line.send(":PULS:COUN 7")
        found.wait_for(":FAUL:EXCH? GEN", "2")
        assert found.count() == 0
        line.send("*IDN?")
        assert line.ask(":PULS:COUN?") == b"7\n"
        assert found.count() == 1


def test_a_very_late_answer_stops_nobody_else_and_ends_with_its_connection() -> None:
    with scene() as found:
        line = found.open()
        found.add("LATE,GEN,1,3600")
        line.send("*IDN?")
        line.send(":PULS:COUN?")
        other = found.open()
        assert other.ask(":PULS:COUN?") == b"1\n"
        assert line.is_silent()
        assert found.anew().ask(":PULS:COUN?") == b"1\n"


def test_nothing_behind_an_ending_is_followed() -> None:
    with scene() as found:
        line = found.open()
        found.add("CLOS,GEN,2")
        line.send(":PULS:COUN 2\n:PULS:COUN 3\n:PULS:COUN 4")
        assert line.hear() == b""
        assert found.anew().ask(":PULS:COUN?") == b"3\n"


def test_a_block_is_cut_at_the_byte() -> None:
    with scene() as found:
        line = found.open("oscilloscope")
        line.send(":SENS:SWE:POIN 1000;:TRIG:SOUR IMM;:INIT")
        assert line.ask("*OPC?") == b"1\n"
        line.send(":TRAC:DATA? CHAN2")
        whole = line.hear_exactly(2 + 4 + 2000 + 1)
        found.add("CUT,OSC,1,0.3")
        line.send(":TRAC:DATA? CHAN2")
        assert line.hear_exactly(int(0.3 * len(whole))) == whole[: int(0.3 * len(whole))]
        found.settle()
        assert line.is_silent()


# Power.


def test_power_takes_the_pulse_the_settings_and_every_connection_with_it() -> None:
    with scene() as found:
        line, other = found.open(), found.open()
        scope = found.open("oscilloscope")
        assert other.ask("*OPC?") == scope.ask("*OPC?") == b"1\n"
        line.send("*ESE 32;*SRE 32;:PULS:WIDT 1;PER 2;COUN 5;:OUTP ON")
        assert line.ask("*OPC?") == b"1\n"
        found.advance(1)
        line.send(":INIT;*TRG")
        line.ask(":STAT:OPER:COND?")
        found.advance(3)
        assert found.truth("DEL") == "2"
        assert float(found.truth("TERM")) == pytest.approx(0, abs=1e-3)
        other.send(":PULS:COUN 9")
        other.send(":THIS IS NO HEADER")
        found.add("POW,GEN,1,1000")
        line.send(":PULS:COUN 8")
        for cut in (line, other):
            with pytest.raises((ConnectionResetError, AssertionError)):
                cut.hear_until(b"never")
        assert found.truth("OUTP") == "0"
        assert scope.ask("*IDN?").startswith(b"PULSETALLY,SIMULATED OSCILLOSCOPE")
        found.advance(999)
        found.settle()
        with pytest.raises(ConnectionRefusedError):
            found.open()
        found.advance(1)
        line = found.anew()
        assert line.ask("*ESE?;*SRE?;:OUTP?;:PULS:COUN?") == b"0;0;0;1\n"
        assert line.ask(":SYST:ERR?;ERR?") == b'-500,"Power on";' + NOTHING
        assert found.truth("DEL") == "2"


@pytest.mark.parametrize("transport", ["tcp", "serial"])
def test_power_is_back_by_the_clock_on_the_wall_too(transport: str) -> None:
    # Virtual time stands still.
    with scene(transport=transport, exchange_seconds=0.0) as found:
        found.add("POW,GEN,1,0.02")
        line = found.open()
        line.send(":PULS:COUN 8")
        found.happen()
        if transport == "tcp":
            line = found.anew()
        heard = b""
        while not heard:
            # A serial line drops what is sent to an instrument that is off.
            line.send("*ESR?")
            found.settle()
            heard = b"" if line.is_silent() else line.hear_until(b"\n")
        assert heard.startswith(b"128\n")
        assert float(found.control.ask(":CLOC:TIME?")) == 0
        line.send(":SYST:ERR?")
        assert line.hear_until(b'"\n').endswith(b'-500,"Power on"\n')


def test_power_can_be_lost_again_and_again() -> None:
    with scene() as found:
        for _ in range(3):
            line = found.anew()
            assert line.ask("*IDN?").startswith(b"PULSETALLY")
            found.add("POW,GEN,1,1000")
            line.send("*IDN?")
            assert line.hear() == b""
            found.advance(1000)
        assert found.count("POW") == 3


# Triggers.


@pytest.mark.parametrize("source", ["INT1", "EXT"])
def test_an_oscilloscope_ignores_one_trigger(source: str) -> None:
    with scene() as found:
        generator, scope = found.open(), found.open("oscilloscope")
        generator.send(":VOLT:HIGH 4;:OUTP ON")
        assert generator.ask("*OPC?") == b"1\n"
        found.advance(1)
        found.add("TRIG,OSC,1")
        scope.send(f":TRIG:SOUR {source};LEV 2;:INIT")
        assert scope.ask(":STAT:OPER:COND?") == b"48\n"
        assert generator.ask(":INIT;*TRG;*OPC?") == b"1\n"
        assert (found.truth("DEL"), found.count("TRIG")) == ("1", 1)
        assert scope.ask(":STAT:OPER:COND?;:SYST:ERR?") == b"48;" + NOTHING
        assert generator.ask(":INIT;*TRG;*OPC?") == b"1\n"
        assert scope.ask(":STAT:OPER:COND?;:SYST:ERR?") == b"0;" + NOTHING
        assert found.count() == 1


# The words of each family for: fire, and whether a burst runs or is waited for.
FIRES = {
    "scpi99": (":INIT;*TRG", ":STAT:OPER:COND?", b"32\n", ":SYST:ERR?"),
    "perdiv": ("SOUR1:BURS:STAT ON;*TRG", "SOUR1:BURS:RUNN?", b"0\n", "SYST:ERR?"),
    "stateword": ("CH1:ARM;:CH1:FIRE", "CH1:STATE?", b"CH1:STATE READY\n", "ERROR?"),
}
ONWARDS = {"scpi99": "*TRG", "perdiv": "*TRG", "stateword": "CH1:FIRE"}


@pytest.mark.parametrize("family", FIRES)
def test_every_family_ignores_a_trigger_without_an_error(family: str) -> None:
    fire, question, waits, errors = FIRES[family]
    fault = Fault(kind="trigger ignored", instrument="generator", exchange=2)
    settings = SimulationSettings(cell=LINEAR, family=family, faults=(fault,))
    with served(settings) as addresses, Client(addresses.control) as control:
        line = Bare(addresses.generator)
        line.send("CH1:OUTPUT 1" if family == "stateword" else ":OUTP1 ON")
        for _ in range(5):
            control.ask("*OPC?")
        assert control.ask(":CLOC:ADV 1;*OPC?") == "1"
        control.ask("*OPC?")
        line.send(fire)
        assert line.ask(question) == waits
        assert control.ask(":CLOC:ADV 1;*OPC?") == "1"
        assert control.ask(":TRUT:DEL?") == "0"
        line.send(ONWARDS[family])
        assert b"o error" in line.ask(errors)
        assert control.ask(":CLOC:ADV 1;*OPC?") == "1"
        assert control.ask(":TRUT:DEL?;:FAUL:COUN?") == "1;1"
        line.close()


# Settings, chances and the control port.


def test_faults_of_the_settings_happen_at_their_exchanges() -> None:
    faults = (
        Fault(kind="garbage", instrument="generator", exchange=2, message="ugh\x80"),
        Fault(kind="error entry", instrument="generator", exchange=3, number=17, message="hot"),
        Fault(kind="garbage", instrument="oscilloscope", exchange=1, message="o"),
        Fault(kind="cell opens", at_seconds=50.0),
    )
    with scene(*faults) as found:
        line, scope = found.open(), found.open("oscilloscope")
        assert line.ask("*OPC?") == b"1\n"
        line.send("*OPC?")
        assert line.hear_exactly(4) == b"ugh\x80"
        assert line.ask("*OPC?") == b"1\n"
        assert line.ask(":SYST:ERR?") == b'17,"Device-specific error;hot"\n'
        scope.send("*OPC?")
        assert scope.hear_exactly(1) == b"o"
        found.advance(49)
        assert found.truth("CELL") == "GOOD"
        found.advance(1)
        assert found.truth("CELL") == "OPEN"
        assert (found.count(), found.count("GARB"), found.count("OPEN")) == (4, 2, 1)


def course(seed: int) -> tuple[list[str], bytes]:
    """Ask forty times while a fifth of the answers is spoiled; return the counts and the bytes."""
    faults = (
        Fault(kind="garbage", instrument="generator", chance=0.1, message="?"),
        Fault(kind="cut block", instrument="generator", chance=0.1, share=0.5),
    )
    settings = SimulationSettings(cell=LINEAR, seed=seed, faults=faults)
    with served(settings) as addresses, Client(addresses.control) as control:
        line = Bare(addresses.generator)
        counts = []
        for exchange in range(1, 41):
            line.send("*ESR?;*TST?")
            while control.ask(":FAUL:EXCH? GEN") != str(exchange):
                pass
            counts.append(control.ask(":FAUL:COUN?"))
        heard = b""
        while not line.is_silent():
            heard += line.hear()
        line.close()
    return counts, heard


def test_one_seed_spoils_the_same_exchanges() -> None:
    first, again, other = course(1), course(1), course(2)
    assert first == again
    assert first != other
    assert {b"0;0", b"?0;0"} < set(first[1].split(b"\n"))


REFUSED = [
    ("SMOKE,GEN,1", "-224,"),
    ("LATE,METER,1", "-224,"),
    ("LATE,GEN,0", "-222,"),
    ("LATE,GEN", "-109,"),
    ("LATE,GEN,1,0", "-224,\"Illegal parameter value;the fault 'late answer' has seconds 0.0"),
    ("LATE,GEN,1,'long'", "-104,"),
    ("LATE,GEN,1,1 S", "-104,"),
    ("CUT,GEN,1,1", "-224,"),
    ("GARB,GEN,1,7", "-104,"),
    ("NOAN,GEN,1,0.5", "-224,"),
    ("ERR,GEN,1,1E99", "-224,"),
    ("TRIG,GEN,1,1", "-108,"),
    ("OPEN,GEN,1,1,1", "-108,"),
]


def test_the_control_port_refuses_what_cannot_be() -> None:
    with scene() as found:
        for what, error in REFUSED:
            found.control.write(f":FAUL:ADD {what}")
            assert found.control.ask(":SYST:ERR?").startswith(error), what
        assert found.control.ask(":FAUL:PEND?") == "0"


def test_what_is_cleared_does_not_happen() -> None:
    with scene() as found:
        found.add("GARB,GEN,1,'never'")
        found.add("TRIG,OSC,9")
        assert found.control.ask(":FAUL:PEND?;CLE;PEND?") == "2;0"
        assert found.open().ask("*OPC?") == b"1\n"
        assert found.count() == 0


def test_exchanges_are_whole_messages_of_any_connection() -> None:
    with scene() as found:
        line, other = found.open(), found.open()
        assert line.socket is not None
        line.socket.sendall(b":PULS:COUN 2;COUN 3\n\n*CL")
        found.wait_for(":FAUL:EXCH? GEN", "2")
        other.send("*CLS")
        found.wait_for(":FAUL:EXCH? GEN;EXCH? OSC", "3;0")


def test_presets_are_the_pulses_that_go_below_zero() -> None:
    with scene() as found:
        line = found.open()
        line.send(":OUTP ON;:VOLT:HIGH 4")
        assert line.ask("*OPC?") == b"1\n"
        found.advance(1)
        assert line.ask(":INIT;*TRG;*OPC?") == b"1\n"
        assert found.control.ask(":TRUT:DEL?;PRES?") == "1;0"
        line.send(":VOLT:HIGH 0;LOW -5;:PULS:POL INV;COUN 2")
        assert line.ask(":INIT;*TRG;*OPC?") == b"1\n"
        assert found.control.ask(":TRUT:DEL?;PRES?") == "3;2"
        line.send(":OUTP OFF;:INIT;*TRG")
        assert line.ask("*OPC?") == b"1\n"
        assert found.control.ask(":TRUT:DEL?;PRES?") == "3;2"
