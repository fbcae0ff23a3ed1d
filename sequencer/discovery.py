"""Look what instruments can be found, without hanging on any that doesn't answer."""

import threading
import time
import warnings
from collections.abc import Iterable
from dataclasses import dataclass

from pulsetally.drivers.errors import PulsetallyError
from pulsetally.drivers.link import VisaLink, manager

# A person waits for the list; an instrument answers within milliseconds or not at all.
PATIENCE_SECONDS = 2.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """An address and who answers there. identity: empty where nobody did; note: why."""

    address: str
    identity: str
    note: str


def visible_addresses() -> list[str]:
    """Return the addresses that the VISA backend finds by itself, within the patience.

    It looks at serial ports and USB, and asks the local network by broadcast.
    """
    found: list[str] = []

    def look() -> None:
        with warnings.catch_warnings():
            # The backend says which optional libraries would let it search further.
            warnings.simplefilter("ignore")
            found.extend(manager().list_resources("?*"))

    thread = threading.Thread(target=look, daemon=True)
    thread.start()
    thread.join(PATIENCE_SECONDS)
    # What is no instrument, such as the adapters behind which there may be some.
    return sorted(each for each in found if not each.upper().endswith("::INTFC"))


def identify_all(addresses: Iterable[str], *, serial_too: bool = False) -> list[Found]:
    """Ask each address who it is, all at once, each within the patience.

    serial_too: ask serial ports as well. Opening one can restart what is connected to it, and
    what is sent to it may mean something else there, so it has to be wanted.
    """
    answers: dict[str, Found] = {}
    threads: list[tuple[str, threading.Thread]] = []
    for address in dict.fromkeys(addresses):
        if address.upper().startswith("ASRL") and not serial_too:
            note = "a serial port; not asked unless --serial is given"
            answers[address] = Found(address=address, identity="", note=note)
            continue
        # A daemon: one that hangs in somebody else's library must not hold the program.
        thread = threading.Thread(target=_identify, args=(address, answers), daemon=True)
        thread.start()
        threads.append((address, thread))
    deadline = time.monotonic() + PATIENCE_SECONDS
    for address, thread in threads:
        thread.join(max(0.0, deadline - time.monotonic()))
        if address not in answers:
            note = f"no answer within {PATIENCE_SECONDS:g} s"
            answers[address] = Found(address=address, identity="", note=note)
    return [answers[address] for address in sorted(answers)]


def _identify(address: str, answers: dict[str, Found]) -> None:
    identity, note = "", ""
    try:
        link = VisaLink(address, seconds=PATIENCE_SECONDS * 0.9)
        try:
            identity = link.ask("*IDN?").strip()
        finally:
            link.close()
    except PulsetallyError as error:
        note = str(error).removeprefix(f"{address}: ")
    answers.setdefault(address, Found(address=address, identity=identity, note=note))
