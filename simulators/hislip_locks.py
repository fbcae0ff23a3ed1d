"""Keep the locks that HiSLIP clients hold on one instrument, without doing I/O.

From memory of IVI-6.1, section on AsyncLock, and of VISA's locks, which it carries: one
client may hold the exclusive lock; any number may share a lock that has one key; a client
that shares it may take the exclusive lock on top.
"""

from collections.abc import Hashable
from enum import IntEnum


class LockAnswer(IntEnum):
    """Control code of AsyncLockResponse."""

    FAILURE = 0
    SUCCESS = 1
    SHARED_RELEASED = 2
    INVALID = 3


class LockTable:
    """Who holds the instrument. A client is any value that can be told from the others."""

    def __init__(self) -> None:
        self._exclusive: Hashable | None = None
        self._sharers: set[Hashable] = set()
        self._key = b""

    def request(self, client: Hashable, key: bytes) -> LockAnswer | None:
        """Give a lock, exclusive where key is empty; None: not now, somebody else has it."""
        if client == self._exclusive or (key and client in self._sharers):
            return LockAnswer.INVALID
        if self._exclusive is not None:
            return None
        if not key:
            if self._sharers and client not in self._sharers:
                return None
            self._exclusive = client
            return LockAnswer.SUCCESS
        if self._sharers and key != self._key:
            return None
        self._key = key
        self._sharers.add(client)
        return LockAnswer.SUCCESS

    def release(self, client: Hashable) -> LockAnswer:
        """Take back a client's lock: the exclusive one first, where it has both."""
        if client == self._exclusive:
            self._exclusive = None
            return LockAnswer.SUCCESS
        if client in self._sharers:
            self._sharers.remove(client)
            return LockAnswer.SHARED_RELEASED
        return LockAnswer.INVALID

    def leave(self, client: Hashable) -> None:
        """Take back all that a client holds, because it has gone."""
        while self.release(client) is not LockAnswer.INVALID:
            pass

    def may_speak(self, client: Hashable) -> bool:
        """Say whether a client's program messages may be followed now."""
        if self._exclusive is not None:
            return client == self._exclusive
        return not self._sharers or client in self._sharers

    @property
    def is_exclusive(self) -> bool:
        """Whether somebody holds the exclusive lock."""
        return self._exclusive is not None

    @property
    def holders(self) -> int:
        """How many clients hold a lock."""
        return len(self._sharers | ({self._exclusive} - {None}))
