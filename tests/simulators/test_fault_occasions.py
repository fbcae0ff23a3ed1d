"""When faults happen: at a trigger, at an exchange, at an instant, by chance, on demand."""

import pytest

from pulsetally.simulators.faults import Fault
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulators.fault_scene import LINEAR, NOTHING, Bare, scene
from tests.simulators.sockets import Client, served

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
