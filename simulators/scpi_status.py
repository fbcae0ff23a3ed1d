"""Keep the status registers of IEEE Std 488.2 section 11 and SCPI-99 Vol. 1 section 9."""

from pulsetally.simulators.scpi_errors import QUEUE_OVERFLOW, ErrorQueue, ScpiError, event_weight

OPERATION_COMPLETE = 1
POWER_ON = 128

# Weights in the status byte.
ERROR_QUEUE = 4
QUESTIONABLE = 8
MESSAGE_AVAILABLE = 16
EVENT_STATUS = 32
MASTER_SUMMARY = 64
OPERATION = 128

_ALL_BITS = 0x7FFF


class EventGroup:
    """A condition register, its transition filters, and the event register they feed."""

    def __init__(self) -> None:
        self.condition = 0
        self.enable = 0
        self.rising = _ALL_BITS
        self.falling = 0
        self._event = 0

    def update(self, condition: int) -> None:
        """Take the present condition; latch the changes that the filters let through."""
        changed = condition ^ self.condition
        self._event |= changed & ((condition & self.rising) | (self.condition & self.falling))
        self.condition = condition

    def take_event(self) -> int:
        """Return the event register and clear it, as reading it does."""
        event, self._event = self._event, 0
        return event

    def clear(self) -> None:
        """Clear the event register."""
        self._event = 0

    def preset(self) -> None:
        """Do what STATus:PRESet does: nothing enabled, rising changes pass, falling don't."""
        self.enable, self.rising, self.falling = 0, _ALL_BITS, 0

    @property
    def summary(self) -> bool:
        """Whether an enabled event is latched."""
        return bool(self._event & self.enable)


class Status:
    """The registers and the error queue of one instrument."""

    def __init__(self) -> None:
        self.errors = ErrorQueue()
        self.operation = EventGroup()
        self.questionable = EventGroup()
        self.event_enable = 0
        self.service_enable = 0
        self._event_status = POWER_ON

    def report(self, error: ScpiError) -> None:
        """Put an error into the queue and its class into the event status register.

        A queue that overflows is an error of its own, with its own class.
        """
        if not self.errors.push(error):
            self._event_status |= event_weight(QUEUE_OVERFLOW)
        self._event_status |= event_weight(error.number)

    def set_event_status(self, weight: int) -> None:
        """Set bits of the standard event status register."""
        self._event_status |= weight

    def take_event_status(self) -> int:
        """Return the standard event status register and clear it, as *ESR? does."""
        value, self._event_status = self._event_status, 0
        return value

    def clear(self) -> None:
        """Do what *CLS does: event registers and error queue, but no enable register."""
        self.errors.clear()
        self.operation.clear()
        self.questionable.clear()
        self._event_status = 0

    def power_on(self) -> None:
        """Forget everything, then say that power came: -500 and the PON bit."""
        self.clear()
        self.preset()
        self.event_enable = self.service_enable = 0
        self.report(ScpiError(-500))

    def preset(self) -> None:
        """Do what STATus:PRESet does; it leaves the 488.2 registers and the queue alone."""
        self.operation.preset()
        self.questionable.preset()

    def byte(self, *, message_available: bool) -> int:
        """Return the status byte with the master summary in bit 6, as *STB? reads it."""
        value = (
            ERROR_QUEUE * bool(self.errors)
            | QUESTIONABLE * self.questionable.summary
            | MESSAGE_AVAILABLE * message_available
            | EVENT_STATUS * bool(self._event_status & self.event_enable)
            | OPERATION * self.operation.summary
        )
        return value | MASTER_SUMMARY * bool(value & self.service_enable)
