"""How much a link costs against a bare socket: the same exchanges, interleaved, in one run.

    python benchmarks/link.py [--json] [--repeats 15]

Prints the ratio of the median times, ours and plain PyVISA's, each to a bare socket client. The
blocks are random int16 samples, so that one byte in 256 is a line feed: plain PyVISA makes one
read for each of them. It takes so long that it is measured fewer times.
"""

import argparse
import json
import multiprocessing
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
GROUPS = {"idn": 50, "block_1kB": 30, "block_100kB": 5, "block_1MB": 2, "block_10MB": 1}
PYVISA_REPEATS = {"idn": 21, "block_1kB": 21, "block_100kB": 7, "block_1MB": 3, "block_10MB": 1}
WARM_UP = 2

Exchange = Callable[[str], object]


def samples(size: int) -> bytes:
    """Return the payload of a block, the same in both processes."""
    return np.random.default_rng(size).bytes(size)


def serve(port_sent: "multiprocessing.Queue[int]") -> None:
    """Answer '*IDN?' and 'DATA? <bytes>' on any free port, one client after another."""
    blocks = {}
    for size in SIZES.values():
        digits = str(size).encode()
        blocks[size] = b"#%d%s%s\n" % (len(digits), digits, samples(size))
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port_sent.put(listener.getsockname()[1])
        connections = [listener.accept()[0] for _ in range(3)]
        import selectors

        waiting = selectors.DefaultSelector()
        for connection in connections:
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            waiting.register(connection, selectors.EVENT_READ)
        while True:
            for key, _ in waiting.select():
                connection = key.fileobj
                assert isinstance(connection, socket.socket)
                line = connection.recv(4096)
                if not line:
                    return
                if line.startswith(b"DATA?"):
                    connection.sendall(blocks[int(line[5:])])
                elif line.startswith(b"*IDN?"):
                    connection.sendall(IDENTITY.encode() + b"\n")


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


def measure(repeats: int) -> dict[str, float]:
    """Run everything; return the ratios of median times to the bare client's."""
    port_sent: multiprocessing.Queue[int] = multiprocessing.Queue()
    process = multiprocessing.Process(target=serve, args=(port_sent,), daemon=True)
    process.start()
    port = port_sent.get(timeout=20)
    clients = {"bare": bare_client(port), "": our_client(port), "pyvisa_": pyvisa_client(port)}
    ratios: dict[str, float] = {}
    for what, group in GROUPS.items():
        expected: object = samples(SIZES[what]) if what in SIZES else IDENTITY
        times: dict[str, list[float]] = {name: [] for name in clients}
        for repeat in range(-WARM_UP, repeats):
            # Whoever comes second finds warmer caches, so they take turns at it.
            names = ["bare", ""] if repeat % 2 else ["", "bare"]
            if 0 <= repeat < PYVISA_REPEATS[what]:
                names.append("pyvisa_")
            for name in names:
                rounds = 1 if name == "pyvisa_" and what != "idn" else group
                began = time.perf_counter()
                for _ in range(rounds):
                    answer = clients[name](what)
                took = (time.perf_counter() - began) / rounds
                assert answer == expected
                if repeat >= 0:
                    times[name].append(took)
        bare = statistics.median(times["bare"])
        for name in ("", "pyvisa_"):
            ratios[f"{name}{what}"] = statistics.median(times[name]) / bare
    process.terminate()
    return ratios


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true", help="print one flat object")
    parser.add_argument("--repeats", type=int, default=21, help="at least 15")
    given = parser.parse_args()
    repeats = max(15, given.repeats)
    ratios = measure(repeats)
    names = [f"{prefix}{what}" for prefix in ("", "pyvisa_") for what in GROUPS]
    if given.json:
        print(json.dumps({name: round(ratios[name], 4) for name in names}))
        return
    print(f"{'exchange':<12} {'ours':>8} {'plain PyVISA':>14}   times a bare socket client")
    for what in GROUPS:
        few = f"{repeats} and {min(repeats, PYVISA_REPEATS[what])} repeats"
        print(f"{what:<12} {ratios[what]:8.2f} {ratios[f'pyvisa_{what}']:14.2f}   {few}")


if __name__ == "__main__":
    main()
