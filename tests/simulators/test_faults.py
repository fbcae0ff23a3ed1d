"""Every kind of fault over real lines, as a client sees it that knows nothing but bytes."""

from collections.abc import Callable
from dataclasses import dataclass

import pytest

from pulsetally.simulators.faults import GARBAGE, KINDS
from pulsetally.simulators.scpi_headers import short_form
from tests.simulators.fault_scene import NOTHING, Bare, Scene, scene

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


def test_what_waits_behind_a_late_answer_is_bounded() -> None:
    with scene() as found:
        line = found.open("oscilloscope")
        line.send(":SENS:SWE:POIN 100000;:TRIG:SOUR IMM;:INIT")
        assert line.ask("*OPC?") == b"1\n"
        found.add("LATE,OSC,1,3600")
        # 40 answers of 200 kB: 1 MiB are kept, and the one that passes it.
        line.send("\n".join([":TRAC:DATA? CHAN1"] * 40))
        found.wait_for(":FAUL:EXCH? OSC", "8")
        found.settle()
        assert found.control.ask(":FAUL:EXCH? OSC") == "8"
        assert found.open("oscilloscope").ask("*IDN?").startswith(b"PULSETALLY")


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
        assert line.is_cut()
        assert other.is_cut()
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
