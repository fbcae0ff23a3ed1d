"""The order in which a connection's deliveries are made."""

from collections.abc import Callable

from pulsetally.simulators.deliveries import Close, Outbox, Pause, Reset, Send


class Wall:
    """A clock that moves when told to, and a log of what was delivered."""

    def __init__(self) -> None:
        self.now = 0.0
        self.log: list[str] = []
        self._agenda: list[Appointment] = []
        self.outbox = Outbox(
            send=lambda content: self.log.append(content.decode()),
            close=lambda: self.log.append("close"),
            reset=lambda: self.log.append("reset"),
            later=self.later,
            emptied=lambda: self.log.append("."),
        )

    def later(self, seconds: float, do: Callable[[], None]) -> "Appointment":
        self._agenda.append(Appointment(self.now + seconds, do))
        return self._agenda[-1]

    def advance(self, seconds: float) -> None:
        self.now += seconds
        due = [entry for entry in self._agenda if entry.at_seconds <= self.now]
        self._agenda = [entry for entry in self._agenda if entry not in due]
        for entry in due:
            if not entry.cancelled:
                entry.do()


class Appointment:
    def __init__(self, at_seconds: float, do: Callable[[], None]) -> None:
        self.at_seconds, self.do, self.cancelled = at_seconds, do, False

    def cancel(self) -> None:
        self.cancelled = True


def test_what_waits_for_nothing_is_sent_at_once() -> None:
    wall = Wall()
    wall.outbox.put([Send(b"1"), Send(b"2")])
    assert wall.log == ["1", "2", "."]


def test_a_pause_holds_back_what_comes_behind_it_in_order() -> None:
    wall = Wall()
    wall.outbox.put([Send(b"1"), Pause(2.0), Send(b"22")])
    wall.outbox.put([Send(b"333")])
    assert wall.outbox.held_bytes == 5
    wall.advance(1.9)
    assert wall.log == ["1"]
    wall.advance(0.2)
    assert wall.log == ["1", "22", "333", "."]
    assert wall.outbox.held_bytes == 0


def test_pauses_follow_one_another() -> None:
    wall = Wall()
    wall.outbox.put([Pause(2.0), Send(b"1"), Pause(3.0), Send(b"2")])
    wall.advance(2.0)
    wall.advance(2.9)
    assert wall.log == ["1"]
    wall.advance(0.1)
    assert wall.log == ["1", "2", "."]


def test_an_ending_waits_for_its_turn_and_is_the_last() -> None:
    for ending, name in ((Close(), "close"), (Reset(), "reset")):
        wall = Wall()
        wall.outbox.put([Pause(1.0), Send(b"1"), ending, Send(b"2")])
        assert wall.log == []
        wall.advance(1.0)
        assert wall.log == ["1", name, "."]
        assert wall.outbox.held_bytes == 0


def test_what_is_dropped_is_never_made() -> None:
    wall = Wall()
    wall.outbox.put([Pause(1.0), Send(b"1")])
    wall.outbox.drop()
    wall.outbox.put([Send(b"2")])
    wall.advance(5.0)
    assert wall.log == ["2", "."]
    assert wall.outbox.held_bytes == 0
