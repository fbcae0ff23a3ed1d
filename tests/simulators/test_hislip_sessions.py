"""HiSLIP clients beside and after one another: device clear, locks, and those that go away."""

import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack

import pytest

from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.faults import Fault
from pulsetally.simulators.hislip import MOST_CLIENTS
from pulsetally.simulators.simulate import Addresses, SimulationSettings
from tests.simulators import hislip_wire as hs
from tests.simulators.hislip_wire import GONE, Dialogue, Heard, Wire, port_of, raw
from tests.simulators.sockets import Client, served

LINEAR = CellDescription(remanent_polarization=1e-9)
ACKNOWLEDGED = Heard(type=hs.DEVICE_CLEAR_ACKNOWLEDGE)
FAILURE, SUCCESS, SHARED_RELEASED, INVALID = range(4)


@pytest.fixture(autouse=True)
def the_server_never_stumbles(caplog: pytest.LogCaptureFixture) -> Iterator[None]:
    """Fail where an exception got as far as the server's event loop."""
    yield
    told = [*caplog.get_records("setup"), *caplog.get_records("call")]
    assert [record.getMessage() for record in told] == []


@pytest.fixture(scope="module")
def addresses() -> Iterator[Addresses]:
    with served(SimulationSettings(cell=LINEAR, transport="hislip")) as found:
        yield found


@pytest.fixture
def generator(addresses: Addresses) -> Iterator[Dialogue]:
    with Dialogue(addresses.generator) as dialogue:
        assert dialogue.ask("*RST;*CLS;*ESE 0;*SRE 0;*OPC?") == "1"
        yield dialogue


@pytest.fixture
def other(addresses: Addresses, generator: Dialogue) -> Iterator[Dialogue]:
    with Dialogue(addresses.generator) as dialogue:
        yield dialogue


# Device clear.


def begin_clear(dialogue: Dialogue) -> None:
    heard = dialogue.ask_aside(hs.ASYNC_DEVICE_CLEAR)
    assert heard == Heard(type=hs.ASYNC_DEVICE_CLEAR_ACKNOWLEDGE)


def end_clear(dialogue: Dialogue) -> None:
    # The client would like overlap mode and does not get it.
    dialogue.sync.send(raw(hs.DEVICE_CLEAR_COMPLETE, 1))
    assert dialogue.sync.hear() == ACKNOWLEDGED
    dialogue.next_id, dialogue.delivered = hs.FIRST_ID, False


def test_a_device_clear_forgets_half_a_program_message(generator: Dialogue) -> None:
    generator.write(":SOUR1:PULS:COUN 5;:TEXT 'never closed", kind=hs.DATA)
    begin_clear(generator)
    end_clear(generator)
    assert generator.ask(":SOUR1:PULS:COUN?;:SYST:ERR?") == '1;0,"No error"'


def test_a_device_clear_in_the_middle_of_a_message_leaves_it_out(generator: Dialogue) -> None:
    message = raw(hs.DATA_END, 0, hs.FIRST_ID, b":SOUR1:PULS:COUN 5")
    for cut in (1, 15, 16, 20, len(message) - 1):
        generator.sync.send(message[:cut])
        begin_clear(generator)
        generator.sync.send(message[cut:])
        end_clear(generator)
    assert generator.ask(":SOUR1:PULS:COUN?;:SYST:ERR?") == '1;0,"No error"'


def test_what_comes_during_a_device_clear_is_left_out(generator: Dialogue) -> None:
    begin_clear(generator)
    for kind in (hs.DATA, hs.DATA_END, hs.TRIGGER):
        generator.write(":SOUR1:PULS:COUN 5\n", kind=kind)
    end_clear(generator)
    assert generator.ask(":SOUR1:PULS:COUN?;:SYST:ERR?") == '1;0,"No error"'


def test_a_device_clear_makes_an_answer_unavailable_and_leaves_the_settings(
    generator: Dialogue,
) -> None:
    generator.write(":SOUR1:PULS:COUN 5;COUN?")
    assert generator.status() == 16
    begin_clear(generator)
    assert generator.status() == 0
    # The answer is on its way, and is the client's to drop.
    assert generator.sync.hear().payload == b"5\n"
    end_clear(generator)
    assert generator.ask(":SOUR1:PULS:COUN?;:SYST:ERR?") == '5;0,"No error"'


def test_a_device_clear_forgets_that_completion_was_to_be_told(generator: Dialogue) -> None:
    # IEEE 488.2 section 12.5.2: device clear puts *OPC back to idle.
    generator.write(":SOUR1:PULS:COUN 3;PER 10;:TRIG:SOUR BUS;:OUTP1 ON;*ESE 1")
    while generator.ask(":STAT:OPER:COND?") != "0":
        pass
    generator.write("*CLS;:INIT;*TRG;*OPC")
    begin_clear(generator)
    end_clear(generator)
    assert generator.ask("*OPC?;*ESR?") == "1;0"


def test_a_second_device_clear_may_come_before_the_first_is_complete(generator: Dialogue) -> None:
    begin_clear(generator)
    begin_clear(generator)
    end_clear(generator)
    assert generator.ask("*OPC?") == "1"


# Locks.


def lock(dialogue: Dialogue, key: bytes = b"", milliseconds: int = 0) -> None:
    dialogue.aside.send(raw(hs.ASYNC_LOCK, 1, milliseconds, key))


def unlock(dialogue: Dialogue) -> None:
    dialogue.aside.send(raw(hs.ASYNC_LOCK, 0, dialogue.next_id - 2))


def lock_answer(dialogue: Dialogue) -> int:
    heard = dialogue.aside.hear()
    assert (heard.type, heard.parameter, heard.payload) == (hs.ASYNC_LOCK_RESPONSE, 0, b"")
    return heard.control


# Who asks for what, in order; a key shares, none is exclusive, None releases.
SCENES: dict[str, list[tuple[str, bytes | None, int]]] = {
    "exclusive for one": [("a", b"", SUCCESS), ("b", b"", FAILURE), ("b", b"k", FAILURE)],
    "free again": [("a", b"", SUCCESS), ("a", None, SUCCESS), ("b", b"", SUCCESS)],
    "twice": [("a", b"", SUCCESS), ("a", b"", INVALID), ("a", None, SUCCESS)],
    "not held": [("a", None, INVALID), ("b", b"", SUCCESS), ("a", None, INVALID)],
    "shared by key": [("a", b"k", SUCCESS), ("b", b"k", SUCCESS), ("c", b"other", FAILURE)],
    "shared twice": [("a", b"k", SUCCESS), ("a", b"k", INVALID), ("a", None, SHARED_RELEASED)],
    "exclusive over shared": [
        ("a", b"k", SUCCESS),
        ("b", b"k", SUCCESS),
        ("c", b"", FAILURE),
        ("a", b"", SUCCESS),
        ("b", b"", FAILURE),
        ("a", None, SUCCESS),
        ("b", b"", SUCCESS),
        ("b", None, SUCCESS),
        ("b", None, SHARED_RELEASED),
        ("a", None, SHARED_RELEASED),
        ("c", b"", SUCCESS),
    ],
}


@pytest.mark.parametrize("scene", SCENES.values(), ids=list(SCENES))
def test_locks_are_given_and_taken_back(
    addresses: Addresses, scene: list[tuple[str, bytes | None, int]]
) -> None:
    with ExitStack() as stack:
        clients = {name: stack.enter_context(Dialogue(addresses.generator)) for name in "abc"}
        for name, key, answer in scene:
            if key is None:
                unlock(clients[name])
            else:
                lock(clients[name], key)
            assert lock_answer(clients[name]) == answer, (name, key)


def test_a_lock_holds_back_the_messages_of_others_until_it_is_released(
    generator: Dialogue, other: Dialogue
) -> None:
    lock(generator)
    assert lock_answer(generator) == SUCCESS
    other.write(":SOUR1:PULS:COUN 5;COUN?")
    other.write(":SOUR1:PULS:COUN 6", kind=hs.DATA)
    assert generator.ask(":SOUR1:PULS:COUN?") == "1"
    # Asking for the status or for locks is not held back.
    assert other.status() & 16 == 0
    heard = other.ask_aside(hs.ASYNC_LOCK_INFO)
    assert (heard.type, heard.control, heard.parameter) == (hs.ASYNC_LOCK_INFO_RESPONSE, 1, 1)
    unlock(generator)
    assert lock_answer(generator) == SUCCESS
    assert other.sync.hear().payload == b"5\n"
    assert generator.ask("*OPC?") == "1"


def test_shared_locks_hold_back_who_has_none(generator: Dialogue, other: Dialogue) -> None:
    lock(generator, b"key")
    assert lock_answer(generator) == SUCCESS
    other.write(":SOUR1:PULS:COUN 5;COUN?")
    assert generator.ask(":SOUR1:PULS:COUN?") == "1"
    lock(other, b"key")
    assert lock_answer(other) == SUCCESS
    assert other.read() == "5"
    heard = other.ask_aside(hs.ASYNC_LOCK_INFO)
    assert (heard.control, heard.parameter) == (0, 2)


def test_a_lock_can_be_waited_for(generator: Dialogue, other: Dialogue) -> None:
    lock(generator)
    assert lock_answer(generator) == SUCCESS
    lock(other, milliseconds=1)
    assert lock_answer(other) == FAILURE
    lock(other, milliseconds=60_000)
    assert other.status() == 0
    # One at a time.
    lock(other)
    assert lock_answer(other) == INVALID
    unlock(generator)
    assert lock_answer(generator) == lock_answer(other) == SUCCESS
    assert other.ask("*OPC?") == "1"


def test_a_device_clear_is_not_held_back_by_a_lock(generator: Dialogue, other: Dialogue) -> None:
    lock(generator)
    assert lock_answer(generator) == SUCCESS
    other.write(":SOUR1:PULS:COUN 5")
    other.write(":SOUR1:PULS:COUN 6")
    begin_clear(other)
    end_clear(other)
    unlock(generator)
    assert lock_answer(generator) == SUCCESS
    assert other.ask(":SOUR1:PULS:COUN?") == "1"


@pytest.mark.parametrize("key", [b"", b"key"])
def test_a_client_that_goes_away_leaves_no_lock(
    addresses: Addresses, generator: Dialogue, key: bytes
) -> None:
    with Dialogue(addresses.generator) as holder, Dialogue(addresses.generator) as waiting:
        lock(holder, key)
        assert lock_answer(holder) == SUCCESS
        lock(waiting, milliseconds=60_000)
        assert waiting.status() == 0
        generator.write("*OPC?")
        holder.sync.close()
        assert lock_answer(waiting) == SUCCESS
    assert generator.read() == "1"
    assert generator.ask_aside(hs.ASYNC_LOCK_INFO).parameter == 0


# Several clients, and those that go away.


def test_clients_share_the_instrument_and_not_the_message(
    generator: Dialogue, other: Dialogue
) -> None:
    generator.write(":SOUR1:PULS:COUN 1", kind=hs.DATA)
    other.write(":SOUR1:PULS:COUN 3")
    assert other.ask(":SOUR1:PULS:COUN?") == "3"
    generator.write("7")
    assert generator.ask(":SOUR1:PULS:COUN?") == "17"
    assert other.ask(":SOUR1:PULS:COUN?") == "17"
    assert generator.number != other.number


WHOLE = raw(hs.DATA_END, 0, hs.FIRST_ID, b":SOUR1:PULS:COUN 9")
PARTINGS: dict[str, Callable[[Dialogue], None]] = {
    "in a header": lambda client: client.sync.send(WHOLE[:9]),
    "in a payload": lambda client: client.sync.send(WHOLE[:-1]),
    "in a program message": lambda client: client.sync.send(raw(hs.DATA, 0, 1, WHOLE[16:])),
    "in a header aside": lambda client: client.aside.send(WHOLE[:1]),
    "in a large message": lambda client: client.sync.send(b"HS\6" + bytes(8) + b"\x08" + bytes(9)),
    "before an answer": lambda client: client.sync.send(raw(hs.DATA_END, 0, 1, b"*IDN?\n" * 500)),
    "in a device clear": begin_clear,
}


@pytest.mark.parametrize("how", ["close", "reset"])
@pytest.mark.parametrize("leave", PARTINGS.values(), ids=list(PARTINGS))
def test_a_client_that_goes_away_harms_nobody(
    generator: Dialogue, other: Dialogue, leave: Callable[[Dialogue], None], how: str
) -> None:
    leave(other)
    for wire in (other.sync, other.aside):
        getattr(wire, how)()
    assert generator.ask(":SOUR1:PULS:COUN?;:SYST:ERR?") == '1;0,"No error"'
    assert generator.ask_aside(hs.ASYNC_LOCK_INFO).parameter == 0


def test_a_last_message_is_followed_though_its_client_has_gone(
    addresses: Addresses, generator: Dialogue
) -> None:
    for count in range(2, 12):
        with Dialogue(addresses.generator) as hasty:
            hasty.write(f":SOUR1:PULS:COUN {count}")
            # The other channel goes first, which might be noticed first.
            hasty.aside.close()
        assert generator.ask(":SOUR1:PULS:COUN?") == str(count)


@pytest.mark.parametrize("aside", [False, True])
def test_a_channel_that_ends_takes_the_other_along(other: Dialogue, aside: bool) -> None:
    ended, left = (other.aside, other.sync) if aside else (other.sync, other.aside)
    ended.close()
    assert left.hear() == GONE


def test_one_client_too_many_is_told_so(addresses: Addresses) -> None:
    with ExitStack() as stack:
        crowd = [stack.enter_context(Dialogue(addresses.oscilloscope)) for _ in range(MOST_CLIENTS)]
        assert len({each.number for each in crowd}) == MOST_CLIENTS
        surplus = Wire(port_of(addresses.oscilloscope))
        surplus.send(raw(hs.INITIALIZE, 0, 0x01000000))
        heard = surplus.hear()
        assert (heard.type, heard.control) == (hs.FATAL_ERROR, 4)
        assert surplus.hear() == GONE
        surplus.close()
        assert crowd[0].ask("*OPC?") == crowd[-1].ask("*OPC?") == "1"
        crowd[0].sync.close()
        assert crowd[0].aside.hear() == GONE
        stack.enter_context(Dialogue(addresses.oscilloscope))


def test_a_client_that_never_reads_stops_nobody(
    addresses: Addresses, generator: Dialogue, other: Dialogue
) -> None:
    with Client(addresses.control) as control:
        before = float(control.ask(":CLOC:TIME?"))
        for _ in range(600):
            # 18 kB of answer each; they are not even asked once the line is full.
            other.delivered = True
            other.sync.socket.setblocking(False)
            try:
                other.write("*OPC?;" * 9_000 + "*OPC?")
            except BlockingIOError:
                break
        else:
            raise AssertionError("the server took everything")
        assert generator.ask("*OPC?") == "1"
        assert float(control.ask(":CLOC:TIME?")) - before < 1


# Faults of the bench, as they look over HiSLIP.


@pytest.fixture
def faulty(request: pytest.FixtureRequest) -> Iterator[Dialogue]:
    settings = SimulationSettings(cell=LINEAR, transport="hislip", faults=(request.param,))
    with served(settings) as found, Dialogue(found.generator) as dialogue:
        assert dialogue.ask("*OPC?") == "1"
        yield dialogue


CUT = Fault(kind="cut block", instrument="generator", exchange=2, share=0.5)
SOON = Fault(kind="late answer", instrument="generator", exchange=2, seconds=0.02)
NEVER = Fault(kind="late answer", instrument="generator", exchange=2, seconds=600.0)
CLOSED = Fault(kind="closed connection", instrument="generator", exchange=2)
RESET = Fault(kind="reset connection", instrument="generator", exchange=2)
OUTAGE = Fault(kind="power lost", instrument="generator", exchange=2, seconds=0.1)


@pytest.mark.parametrize("faulty", [CUT], indirect=True)
def test_a_cut_answer_has_no_end(faulty: Dialogue) -> None:
    sent = faulty.write("*IDN?")
    heard = faulty.sync.hear()
    whole = b"PULSETALLY,SIMULATED FUNCTION GENERATOR,1,1\n"
    assert heard == Heard(type=hs.DATA, parameter=sent, payload=whole[: len(whole) // 2])
    assert faulty.status() & 16
    # A device clear gets out of it.
    begin_clear(faulty)
    end_clear(faulty)
    assert faulty.ask("*OPC?") == "1"


@pytest.mark.parametrize("faulty", [SOON], indirect=True)
def test_a_late_answer_comes_before_the_next(faulty: Dialogue) -> None:
    assert faulty.ask("*ESE?") == "0"
    assert faulty.ask("*OPC?") == "1"


@pytest.mark.parametrize("faulty", [NEVER], indirect=True)
def test_a_device_clear_drops_a_late_answer(faulty: Dialogue) -> None:
    faulty.write("*IDN?")
    assert faulty.status() & 16 == 0
    begin_clear(faulty)
    end_clear(faulty)
    assert faulty.ask("*OPC?") == "1"


@pytest.mark.parametrize("faulty", [CLOSED], indirect=True)
def test_a_closed_connection_closes_both_channels(faulty: Dialogue) -> None:
    faulty.write("*IDN?")
    assert faulty.sync.hear() == faulty.aside.hear() == GONE


@pytest.mark.parametrize("faulty", [RESET], indirect=True)
def test_a_reset_connection_resets_both_channels(faulty: Dialogue) -> None:
    faulty.write("*IDN?")
    for wire in (faulty.sync, faulty.aside):
        with pytest.raises(ConnectionResetError):
            wire.hear()


@pytest.mark.parametrize("faulty", [OUTAGE], indirect=True)
def test_an_instrument_that_lost_its_power_comes_back_new(faulty: Dialogue) -> None:
    faulty.write("*IDN?")
    assert faulty.sync.hear() == faulty.aside.hear() == GONE
    address = f"TCPIP::127.0.0.1::hislip0,{faulty.port}::INSTR"
    for _ in range(200):
        try:
            again = Dialogue(address)
        except ConnectionRefusedError:
            time.sleep(0.005)
            continue
        break
    with again:
        assert again.ask(":SYST:ERR?") == '-500,"Power on"'
