"""Keep an instrument for one process at a time.

VISA's own locks don't work on raw sockets, HiSLIP or serial lines, so the lock is a file for
each address, held open. The system gives it up when its process ends, however it ends: a lock
left by a dead process is not in the way.
"""

import contextlib
import hashlib
import os
import sys
import tempfile
from pathlib import Path
from typing import IO

from pulsetally.drivers.errors import LinkError


class AddressBusy(LinkError):
    """Another process, or another part of this one, has the instrument."""


class AddressLock:
    """Hold an address from now until release. Raises AddressBusy, naming who has it."""

    def __init__(self, address: str) -> None:
        self._file: IO[str] | None = _open(address)
        if not _try_lock(self._file):
            self._file.seek(0)
            holder = self._file.read(200).strip() or "a process that doesn't say who it is"
            self._file.close()
            raise AddressBusy(
                address, "", f"it is in use by {holder}", "end that process, or wait for its end"
            )
        self._file.seek(0)
        self._file.truncate()
        self._file.write(f"process {os.getpid()} ({' '.join(map(_base, sys.argv[:3]))})\n")
        self._file.flush()

    def release(self) -> None:
        """Give the address back; twice is harmless."""
        if self._file is not None:
            # Closing gives the lock up; the file stays, since removing it would race.
            self._file.close()
            self._file = None


def holder_of(address: str) -> str | None:
    """Say which process uses an instrument's address now; None where none does."""
    try:
        AddressLock(address).release()
    except AddressBusy as error:
        return error.problem.removeprefix("it is in use by ")
    return None


def _base(argument: str) -> str:
    return Path(argument).name


def _canonical(address: str) -> str:
    """Return one spelling for every way to write an address, such as TCPIP and TCPIP0."""
    from pyvisa import rname

    try:
        return str(rname.ResourceName.from_string(address)).upper()
    except rname.InvalidResourceName:
        return address.upper()


def _open(address: str) -> IO[str]:
    folder = Path(tempfile.gettempdir()) / "pulsetally-locks"
    with contextlib.suppress(FileExistsError):
        folder.mkdir()
        # Benches are shared, and so are their locks; the sticky bit as on the folder above.
        folder.chmod(0o1777)
    name = hashlib.sha256(_canonical(address).encode()).hexdigest()[:24]
    path = folder / name
    try:
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT, 0o666)
    except OSError as error:
        raise AddressBusy(
            address,
            "",
            f"its lock file {path} can't be opened ({error.strerror})",
            "check the rights of that file",
        ) from error
    with contextlib.suppress(PermissionError):
        path.chmod(0o666)
    return os.fdopen(descriptor, "r+", encoding="utf-8", errors="replace")


if sys.platform == "win32":

    def _try_lock(file: IO[str]) -> bool:
        import msvcrt

        try:
            # A byte far behind the text, so that others can read who holds it.
            file.seek(4096)
            msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        return True

else:

    def _try_lock(file: IO[str]) -> bool:
        import fcntl

        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            return False
        return True
