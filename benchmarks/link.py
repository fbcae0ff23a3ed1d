"""How much a link costs against a bare socket: the same exchanges, interleaved, in one run.

    python benchmarks/link.py [--json] [--repeats 15]

Prints the ratio of the median times, ours and plain PyVISA's, each to a bare socket client. The
blocks are int16 samples whose every byte is a line feed: the worst case for whoever looks for
line ends. Plain PyVISA makes one read for each of them, which takes minutes for 10 MB; it is
measured fewer times and at most LIMIT_SECONDS a size. Where it did not finish, its ratio is what
that limit makes at least, and the table says so.
"""

import argparse
import ctypes
import json
import multiprocessing
import queue
import selectors
import socket
import statistics
import time
from collections.abc import Callable

import numpy as np

from pulsetally.drivers.link import VisaLink, manager

SIZES = {"block_1kB": 1_000, "block_100kB": 100_000, "block_1MB": 1_000_000}
SIZES["block_10MB"] = 10_000_000
IDENTITY = "A MAKER,A MODEL,123456,1.0"
# Small exchanges are timed in groups, since one lasts about as long as the clock is fine.
GROUPS = {"idn": 300, "block_1kB": 300, "block_100kB": 20, "block_1MB": 2, "block_10MB": 1}
PYVISA_REPEATS = {"idn": 500, "block_1kB": 21, "block_100kB": 3, "block_1MB": 1, "block_10MB": 1}
LIMIT_SECONDS = 12.0
WARM_UP = 2

Exchange = Callable[[str], object]


def samples(size: int) -> bytes:
    """Return the payload of a block, the same in both processes."""
    return b"\n" * size


def serve(port_sent: "multiprocessing.Queue[int]") -> None:
    """Answer '*IDN?' and 'DATA? <bytes>' on any free port, one client after another."""
    blocks = {}
    for size in SIZES.values():
        digits = str(size).encode()
        blocks[size] = b"#%d%s%s\n" % (len(digits), digits, samples(size))
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port_sent.put(listener.getsockname()[1])
        waiting = selectors.DefaultSelector()
        waiting.register(listener, selectors.EVENT_READ)
        while True:
            for key, _ in waiting.select():
                connection = key.fileobj
                assert isinstance(connection, socket.socket)
                if connection is listener:
                    opened, _ = listener.accept()
                    opened.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                    waiting.register(opened, selectors.EVENT_READ)
                    continue
                try:
                    line = connection.recv(4096)
                    if line.startswith(b"DATA?"):
                        connection.sendall(blocks[int(line[5:])])
                    elif line.startswith(b"*IDN?"):
                        connection.sendall(IDENTITY.encode() + b"\n")
                except OSError:
                    line = b""
                if not line:
                    waiting.unregister(connection)
                    connection.close()


def bare_client(port: int) -> Exchange:
    """Return the exchange of a client that knows nothing but this server."""
    connection = socket.create_connection(("127.0.0.1", port))
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def exchange(what: str) -> object:
        if what == "idn":
            connection.sendall(b"*IDN?\n")
            answer = b""
            while not answer.endswith(b"\n"):
                answer += connection.recv(4096)
            return answer[:-1].decode("ascii")
        size = SIZES[what]
        connection.sendall(b"DATA? %d\n" % size)
        # Header, payload and line end in one piece of memory.
        whole = bytearray(2 + len(str(size)) + size + 1)
        room, filled = memoryview(whole), 0
        while filled < len(whole):
            filled += connection.recv_into(room[filled:])
        return bytes(room[2 + len(str(size)) : -1])

    return exchange


def our_client(port: int) -> Exchange:
    """Return the exchange of our link."""
    link = VisaLink(f"TCPIP::127.0.0.1::{port}::SOCKET", seconds=30)

    def exchange(what: str) -> object:
        if what == "idn":
            return link.ask("*IDN?")
        return link.ask_block(f"DATA? {SIZES[what]}")

    return exchange


def pyvisa_client(port: int) -> Exchange:
    """Return the exchange of plain PyVISA calls."""
    session = manager().open_resource(
        f"TCPIP::127.0.0.1::{port}::SOCKET", read_termination="\n", write_termination="\n"
    )
    session.timeout = 60_000

    def exchange(what: str) -> object:
        if what == "idn":
            return session.query("*IDN?")
        values = session.query_binary_values(
            f"DATA? {SIZES[what]}", datatype="h", container=np.array, expect_termination=True
        )
        return np.asarray(values).astype("<i2").tobytes()

    return exchange


def time_pyvisa(port: int, what: str, times: "multiprocessing.Queue[float]") -> None:
    """Time plain PyVISA in a process of its own, which can be ended."""
    exchange = pyvisa_client(port)
    expected: object = samples(SIZES[what]) if what in SIZES else IDENTITY
    for _ in range(PYVISA_REPEATS[what]):
        began = time.perf_counter()
        answer = exchange(what)
        times.put(time.perf_counter() - began)
        assert answer == expected


def pyvisa_seconds(port: int, what: str) -> tuple[float, bool]:
    """Return the median time of plain PyVISA and True; or the limit and False."""
    times: multiprocessing.Queue[float] = multiprocessing.Queue()
    process = multiprocessing.Process(target=time_pyvisa, args=(port, what, times), daemon=True)
    process.start()
    found: list[float] = []
    deadline = time.monotonic() + LIMIT_SECONDS
    while len(found) < PYVISA_REPEATS[what] and time.monotonic() < deadline:
        try:
            found.append(times.get(timeout=max(0.01, deadline - time.monotonic())))
        except queue.Empty:
            break
    process.terminate()
    process.join()
    return (statistics.median(found), True) if found else (LIMIT_SECONDS, False)


def steady_memory() -> None:
    """Have the C library keep large pieces of memory instead of giving them back each time.

    Otherwise whichever client's piece happens to be a byte over the library's moving threshold
    pays for fresh pages in every exchange, and at 1 MB that is twice the time, for either side.
    """
    mallopt = getattr(ctypes.CDLL(None), "mallopt", None)
    if mallopt is not None:
        trim_threshold, mmap_threshold = -1, -3
        mallopt(mmap_threshold, 1 << 25)
        mallopt(trim_threshold, 1 << 28)


def measure(repeats: int) -> tuple[dict[str, float], set[str]]:
    """Run everything; return the ratios to the bare client's median, and what did not finish."""
    steady_memory()
    port_sent: multiprocessing.Queue[int] = multiprocessing.Queue()
    process = multiprocessing.Process(target=serve, args=(port_sent,), daemon=True)
    process.start()
    port = port_sent.get(timeout=20)
    clients = {"bare": bare_client(port), "": our_client(port)}
    ratios: dict[str, float] = {}
    unfinished: set[str] = set()
    for what, group in GROUPS.items():
        expected: object = samples(SIZES[what]) if what in SIZES else IDENTITY
        times: dict[str, list[float]] = {name: [] for name in clients}
        for repeat in range(-WARM_UP, repeats):
            # Whoever comes second finds warmer caches, so they take turns at it.
            for name in ("bare", "") if repeat % 2 else ("", "bare"):
                began = time.perf_counter()
                for _ in range(group):
                    answer = clients[name](what)
                took = (time.perf_counter() - began) / group
                assert answer == expected
                if repeat >= 0:
                    times[name].append(took)
        bare = statistics.median(times["bare"])
        ratios[what] = statistics.median(times[""]) / bare
        seconds, finished = pyvisa_seconds(port, what)
        ratios[f"pyvisa_{what}"] = seconds / bare
        if not finished:
            unfinished.add(what)
    process.terminate()
    return ratios, unfinished


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="print one flat object")
    parser.add_argument("--repeats", type=int, default=21, help="at least 15")
    given = parser.parse_args()
    repeats = max(15, given.repeats)
    ratios, unfinished = measure(repeats)
    names = [f"{prefix}{what}" for prefix in ("", "pyvisa_") for what in GROUPS]
    if given.json:
        print(json.dumps({name: round(ratios[name], 4) for name in names}))
        return
    print(f"{'exchange':<12} {'ours':>8} {'plain PyVISA':>20}   times a bare socket client")
    for what in GROUPS:
        least = "at least" if what in unfinished else ""
        print(f"{what:<12} {ratios[what]:8.2f} {least:>9} {ratios[f'pyvisa_{what}']:10.2f}")


if __name__ == "__main__":
    main()
