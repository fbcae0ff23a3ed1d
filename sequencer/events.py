"""What happens in a run, as typed, frozen events.

The engine yields them in order. The logbook records them, the terminal shows them, and tests
read them; nobody needs to know the engine.
"""

from dataclasses import dataclass, field
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from pulsetally.sequencer.analysis.contact import ContactResult
from pulsetally.sequencer.analysis.pulses import EndVoltage
from pulsetally.sequencer.rounds import Round


class Role(StrEnum):
    """Why a pulse was sent."""

    PRESET = "preset"
    STEP = "step"
    READ = "read"
    CONTACT = "contact"
    PUND = "pund"
    LOOP = "loop"
    CYCLE = "cycle"


class RunState(StrEnum):
    """How a run stands."""

    RUNNING = "running"
    FINISHED = "finished"
    STOPPED = "stopped"
    FAILED = "failed"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Waveform:
    """One channel's record: int16 codes, shape (points,); volts = codes * scale + offset."""

    codes: NDArray[np.int16]
    scale: float
    offset: float

    @property
    def volts(self) -> NDArray[np.float64]:
        """Return the samples in volts, shape (points,)."""
        return self.codes.astype(np.float64) * self.scale + self.offset


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Shot:
    """One triggered acquisition of both channels.

    source, node: terminal and cell. sample_interval, first_seconds: seconds; time 0 is the
    trigger. clipped: the digitizer met an end of its range. bench_seconds: the bench's clock.
    """

    source: Waveform
    node: Waveform
    sample_interval: float
    first_seconds: float
    clipped: bool
    bench_seconds: float

    @property
    def times(self) -> NDArray[np.float64]:
        """Return the samples' times in seconds, shape (points,)."""
        return self.first_seconds + self.sample_interval * np.arange(
            self.source.codes.size, dtype=np.float64
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class RunBegan:
    """The instruments answered and are quiet. identities: by role, as they answered."""

    rounds: int
    most_pulses: int
    seconds: float
    identities: dict[str, str]


@dataclass(frozen=True, slots=True, kw_only=True)
class RoundBegan:
    """A round begins; attempt counts from 1."""

    round: Round
    attempt: int


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseSetUp:
    """Both instruments were set up for a pulse. settings: as read back, in SI units."""

    pulse: str
    settings: dict[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseArmed:
    """The oscilloscope is armed and the generator is about to fire.

    order: which pulse of the round, from 1; of a train, its first. count: pulses that this
    trigger sends, period seconds apart where there are several. Whoever records must have done
    so before the next event is asked for: the pulse goes out then.
    """

    round: int
    order: int
    role: Role
    pulse: str
    threshold: float | None = None
    count: int = 1
    period: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ShotTaken:
    """A pulse or a train was delivered and recorded.

    ends: the end voltage of each pulse, empty where they were not looked for or the record
    doesn't show them.
    """

    round: int
    order: int
    role: Role
    pulse: str
    shot: Shot
    ends: tuple[EndVoltage, ...] = ()
    threshold: float | None = None
    at_most: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class WaitBegan:
    """The cell is left alone for so many seconds."""

    round: int
    seconds: float


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadFinished:
    """A read ended. count, crossing, reached: see ReadCount. end_voltages: volts.

    stepped: pulses of 'step' before it in its round. first: no other read went before it in its
    round. settings: what was in force, in SI units.
    """

    round: int
    pulse: str
    threshold: float
    count: int
    crossing: float | None
    reached: bool
    stepped: int
    first: bool = True
    settings: dict[str, float] = field(default_factory=dict)
    end_voltages: tuple[float, ...] = field(default=())


@dataclass(frozen=True, slots=True, kw_only=True)
class ContactChecked:
    """A small pulse found the cell good, open or short."""

    round: int
    pulse: str
    result: ContactResult


class FindingKind(StrEnum):
    """What was measured beside a count."""

    PUND = "pund"
    LOOP = "loop"
    CYCLING = "cycling"
    TUNE = "tune"


@dataclass(frozen=True, slots=True, kw_only=True)
class Found:
    """Something beside a count was measured.

    pulse: what with. settings: what was in force. values: by name, in SI units; words where
    something is no number.
    """

    round: int
    kind: FindingKind
    pulse: str
    settings: dict[str, float]
    values: dict[str, float | str | None]


@dataclass(frozen=True, slots=True, kw_only=True)
class CyclingBegan:
    """Pairs of pulses go out, this many before the next pause; done: went out before."""

    round: int
    pairs: int
    done: int
    seconds: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PairsSent:
    """So many pairs of a cycling have gone out in all; planned: of the whole cycling."""

    round: int
    done: int
    planned: int


@dataclass(frozen=True, slots=True, kw_only=True)
class PersonAsked:
    """The output is off, and a person is asked for something; seconds: how long is waited."""

    round: int
    message: str
    seconds: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PersonAnswered:
    """The waiting for a person is over. answered: False when the time was up."""

    round: int
    answered: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class RoundsSkipped:
    """So many planned rounds are not needed, for a reason."""

    count: int
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RoundFinished:
    """A round is complete."""

    round: int


@dataclass(frozen=True, slots=True, kw_only=True)
class RoundSpoiled:
    """A round lost a pulse; what it measured is kept and not counted."""

    round: int
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class StopAsked:
    """Somebody asked for an end; the run stops after this round, or at once."""

    at_once: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class RunEnded:
    """The run is over. reason: a sentence, or empty.

    outputs_off: read back as off; None when the generator was never reached, nor touched.
    unconfirmed: where they are not known to be off, what a person must do.
    """

    state: RunState
    reason: str
    outputs_off: bool | None
    unconfirmed: str = ""


Event = (
    RunBegan
    | RoundBegan
    | PulseSetUp
    | PulseArmed
    | ShotTaken
    | WaitBegan
    | ReadFinished
    | ContactChecked
    | Found
    | CyclingBegan
    | PairsSent
    | PersonAsked
    | PersonAnswered
    | RoundsSkipped
    | RoundFinished
    | RoundSpoiled
    | StopAsked
    | RunEnded
)
