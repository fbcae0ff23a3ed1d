"""One process at a time has an instrument."""

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager

import pytest

from pulsetally.drivers.lock import AddressBusy, AddressLock

# Nobody connects to it; TEST-NET-1 of RFC 5737, and a port of our own.
ADDRESS = f"TCPIP::192.0.2.1::{os.getpid() % 60_000 + 1}::SOCKET"
OTHER = ADDRESS.replace("192.0.2.1", "192.0.2.2")
HOLD = (
    "import sys; from pulsetally.drivers.lock import AddressLock; "
    "lock = AddressLock(sys.argv[2]); print('held', flush=True); sys.stdin.read()"
)


@contextmanager
def holder(address: str) -> Iterator[subprocess.Popen[str]]:
    process = subprocess.Popen(
        [sys.executable, "-c", HOLD, "night-run", address],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    with process:
        assert process.stdout is not None
        assert process.stdout.readline() == "held\n"
        try:
            yield process
        finally:
            process.kill()


def test_a_second_process_is_refused_and_told_who_has_the_address() -> None:
    with holder(ADDRESS) as process, pytest.raises(AddressBusy) as caught:
        AddressLock(ADDRESS)
    assert f"in use by process {process.pid} (-c night-run" in str(caught.value)
    assert caught.value.address == ADDRESS
    assert "wait for its end" in caught.value.remedy


def test_a_lock_left_by_a_killed_process_is_not_in_the_way() -> None:
    with holder(ADDRESS) as process:
        process.send_signal(signal.SIGKILL)
        process.wait()
        AddressLock(ADDRESS).release()


def test_two_addresses_do_not_disturb_each_other() -> None:
    with holder(ADDRESS):
        AddressLock(OTHER).release()


def test_two_spellings_of_one_address_are_one() -> None:
    lock = AddressLock(ADDRESS)
    try:
        with pytest.raises(AddressBusy, match=f"process {os.getpid()} "):
            AddressLock(ADDRESS.replace("TCPIP", "tcpip0"))
    finally:
        lock.release()


def test_a_released_address_is_free_and_releasing_twice_is_harmless() -> None:
    lock = AddressLock(ADDRESS)
    lock.release()
    lock.release()
    AddressLock(ADDRESS).release()
