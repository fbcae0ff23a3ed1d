"""What a pulse generator with one output does, whatever language it is spoken to in.

Its levels have 14 bits, its times 1 ns; the panel shows levels into the load it was told
about, while the terminal shows what the wiring makes of them. A changed level moves the
resting output at once, also in the middle of a round. Refusals are the numbered errors of
SCPI-99, which every family of instruments here reports.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from enum import Enum, auto

import numpy as np

from pulsetally.simulators.clock import Appointment, VirtualClock
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.imperfections import SourceImperfections
from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.table import Table

SMALLEST_LOAD_OHMS = 1.0
LARGEST_LOAD_OHMS = 1e6
# Near 1 V, and a code of a 14-bit converter.
HIGH_AT_POWER_ON = 819 * SourceImperfections().volts_per_code

# Time is one floating-point number, whose steps grow as it does: 0.24 us at the latest end of
# a burst, s (63 years). And no step may be more than a part of a pulse's width: so much of it is
# the error of a pulse's charge (with 0.01 of it, counts were seen to be 0.3 % off).
LATEST_SECONDS = 2e9
LARGEST_STEP_SHARE = 0.005

# A linear ramp goes from 10 % to 90 % in this part of its whole duration.
RAMP_SHARE = 0.8


class FireSource(Enum):
    """What fires a burst that was initiated."""

    COMMAND = auto()
    AT_ONCE = auto()
    EXTERNAL = auto()


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseSettings:
    """What the generator is set to.

    high_emf_volts, low_emf_volts: levels as asked for, before the converter rounds them,
    so that a level may be given as the sum of two settings and is rounded only once.
    load_ohms: the load that levels on the panel are meant for; inf for an open circuit.
    width_seconds at 50 %, edges from 10 % to 90 %.
    source: what the generator can do; its errors don't show here.
    """

    source: SourceImperfections = field(default_factory=SourceImperfections)
    high_emf_volts: float = HIGH_AT_POWER_ON
    low_emf_volts: float = 0.0
    load_ohms: float = math.inf
    inverted: bool = False
    width_seconds: float = 100e-6
    period_seconds: float = 1e-3
    leading_seconds: float = 10e-9
    trailing_seconds: float = 10e-9
    count: int = 1

    @property
    def high_volts(self) -> float:
        """EMF of the high level as the converter makes it."""
        return self.source.coded_volts(self.high_emf_volts)

    @property
    def low_volts(self) -> float:
        """EMF of the low level as the converter makes it."""
        return self.source.coded_volts(self.low_emf_volts)

    @property
    def base_volts(self) -> float:
        """EMF at rest, as it is meant to be."""
        return self.high_volts if self.inverted else self.low_volts

    @property
    def level_volts(self) -> float:
        """EMF on the flat top of a pulse, as it is meant to be."""
        return self.low_volts if self.inverted else self.high_volts

    def conflict(self) -> str:
        """Return what about the settings can't go together; '' when all can."""
        half_ramps = (self.leading_seconds + self.trailing_seconds) / RAMP_SHARE / 2
        slack = 0.1 * self.source.time_step_seconds
        largest_volts = max(abs(self.high_emf_volts), abs(self.low_emf_volts))
        if largest_volts > self.source.span_volts * (1 + 1e-12):
            return "a level is out of range"
        if self.high_volts <= self.low_volts:
            return "HIGH is not above LOW"
        if self.width_seconds < half_ramps - slack:
            return "the edges are longer than the width"
        if self.width_seconds + half_ramps > self.period_seconds + slack:
            return "width and edges are longer than the period"
        return ""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Burst:
    train: PulseTrain
    end: Appointment
    sync: Appointment


class GeneratorModel:
    """The generator of the simulated bench.

    source_ohms: output resistance, which the panel's levels assume.
    source: what it can do and how wrong it is. seed: of what is random in that.
    sync: called with the instant (s) at which a burst begins; the sync output.
    changed: called when something changed by itself as time passed.
    ignores_trigger: asked at each trigger; when so nothing happens, and a burst that waits
    for one waits on.
    wanted: the settings as sent so far; they are taken over together (take_over).
    """

    def __init__(
        self,
        *,
        table: Table,
        clock: VirtualClock,
        source_ohms: float = 50.0,
        source: SourceImperfections | None = None,
        seed: int = 1,
        sync: Callable[[float], None] = lambda _: None,
    ) -> None:
        self._table, self._clock = table, clock
        self.source_ohms, self._sync = source_ohms, sync
        self.changed: Callable[[], None] = lambda: None
        self.ignores_trigger: Callable[[], bool] = lambda: False
        self.source = source or SourceImperfections()
        # A stream of its own: the cell and the noise are the same with and without jitter.
        self._random = np.random.default_rng((seed, 2))
        self._settings = self.wanted = self.power_on
        self._conflict = False
        self.fire_source = FireSource.COMMAND
        self._initiated = False
        self._relay_on = False
        self._closing: Appointment | None = None
        self._closed = False
        self._burst: _Burst | None = None
        self._sent_pulses = 0
        self._largest_emf_volts = 0.0
        self._rest()

    @property
    def power_on(self) -> PulseSettings:
        """The settings that it starts with and is reset to, as near as it can have them."""
        source, usual = self.source, PulseSettings()
        edge_seconds, width_seconds, period_seconds = source.pulse_near(
            usual.leading_seconds, usual.width_seconds, usual.period_seconds
        )
        # With few bits the usual level may be one of the converter's last, or its 0 V.
        highest_volts = source.coded_volts(source.span_volts)
        return PulseSettings(
            source=source,
            high_emf_volts=max(source.volts_per_code, min(HIGH_AT_POWER_ON, highest_volts)),
            width_seconds=width_seconds,
            period_seconds=period_seconds,
            leading_seconds=edge_seconds,
            trailing_seconds=edge_seconds,
        )

    # What it is doing.

    @property
    def relay_on(self) -> bool:
        """Whether the output is commanded on."""
        return self._relay_on

    @property
    def is_settling(self) -> bool:
        """Whether the output relay is on its way to being closed."""
        return self._closing is not None

    @property
    def is_waiting(self) -> bool:
        """Whether a burst is initiated and waits for its trigger."""
        return self._initiated

    @property
    def is_running(self) -> bool:
        """Whether a burst runs."""
        return self._burst is not None

    @property
    def sent_pulses(self) -> int:
        """Whole pulses of the burst that runs or ran last, whether the output was on or not."""
        if self._burst is None:
            return self._sent_pulses
        return self._burst.train.pulses_ended(self._clock.now)

    @property
    def largest_emf_volts(self) -> float:
        """Largest EMF, without its sign, that was ever put on the closed output."""
        return self._largest_emf_volts

    # Settings.

    def reset(self) -> None:
        """Open the output first, then go back to the settings after power-on."""
        self.switch_output(False)
        self._initiated = False
        self.fire_source = FireSource.COMMAND
        self._settings = self.wanted = self.power_on
        self._end_burst()
        self._sent_pulses = 0
        self._rest()

    def begin_message(self) -> None:
        """Come up to the present, and begin anew after settings that were put back."""
        self._clock.catch_up()
        self._conflict = False

    def take_over(self) -> None:
        """Check the wanted settings together; use them, or put the old ones back (-221)."""
        wanted = self.wanted
        if wanted == self._settings:
            return
        if problem := wanted.conflict():
            self.wanted, self._conflict = self._settings, True
            raise ScpiError(-221, problem)
        before, self._settings = self._settings, wanted
        if (before.base_volts, before.level_volts) != (wanted.base_volts, wanted.level_volts):
            # New levels reach the output at once and cut a burst short; times wait for
            # the next burst.
            self._end_burst()
            self._rest()

    @property
    def panel_factor(self) -> float:
        """Volts on the panel for one volt of EMF, into the load that was told."""
        load_ohms = self.wanted.load_ohms
        return 1.0 if math.isinf(load_ohms) else load_ohms / (load_ohms + self.source_ohms)

    # Bursts.

    def initiate(self) -> None:
        """Wait for a trigger, or fire when the source wants none; -213 when already busy.

        -221 for a burst by whose end the bench's clock is too coarse for its pulses.
        """
        self.refuse_after_conflict()
        if self._initiated or self._burst is not None:
            raise ScpiError(-213)
        self._refuse_beyond_clock()
        if self.fire_source is FireSource.AT_ONCE:
            if not self.ignores_trigger():
                self._fire()
            return
        self._initiated = True

    def fire(self) -> None:
        """Fire by command; -211 unless initiated with the command as source."""
        self.refuse_after_conflict()
        if not self._initiated or self.fire_source is not FireSource.COMMAND:
            raise ScpiError(-211)
        self._refuse_beyond_clock()
        if not self.ignores_trigger():
            self._fire()

    def abort(self) -> None:
        """End a burst, or the waiting for one."""
        self._initiated = False
        self._end_burst()

    def wait(self) -> None:
        """Let time pass until the burst has ended; -214 when it waits for a trigger."""
        if self._initiated:
            raise ScpiError(-214)
        if self._burst is not None:
            self._clock.advance_to(self._burst.train.end_seconds)

    def refuse_after_conflict(self) -> None:
        """Raise -221 where the settings meant for what comes now were put back."""
        if self._conflict:
            raise ScpiError(-221, "the settings of this message were put back")

    def _refuse_beyond_clock(self) -> None:
        settings = self._settings
        before_seconds = (settings.count - 1) * settings.period_seconds
        end_seconds = self._clock.now + before_seconds + settings.width_seconds
        if end_seconds > LATEST_SECONDS:
            raise ScpiError(
                -221,
                f"the burst would end at {end_seconds:.3g} s; virtual time goes to "
                f"{LATEST_SECONDS:g} s",
            )
        shortest_seconds = math.ulp(end_seconds) / LARGEST_STEP_SHARE
        if settings.width_seconds < shortest_seconds:
            raise ScpiError(
                -221,
                f"the burst would end at {end_seconds:.3g} s of virtual time, where a width is "
                f"at least {shortest_seconds:.2g} s",
            )

    def _fire(self) -> None:
        settings, source = self._settings, self.source
        delay_seconds = source.trigger_delay_seconds
        if source.trigger_jitter_seconds:
            delay_seconds += source.trigger_jitter_seconds * self._random.standard_normal()
        train = PulseTrain(
            base_volts=source.made_volts(settings.base_volts),
            level_volts=source.made_volts(settings.level_volts),
            width_seconds=settings.width_seconds,
            leading_seconds=settings.leading_seconds,
            trailing_seconds=settings.trailing_seconds,
            period_seconds=settings.period_seconds,
            count=settings.count,
            start_seconds=self._clock.now + max(delay_seconds, 0.0),
        )
        self._initiated = False
        self._table.play(train)
        self._note_emf(train.base_volts, train.level_volts)
        start_seconds = train.start_seconds
        self._burst = _Burst(
            train=train,
            end=self._clock.call_at(train.end_seconds, self._burst_ended),
            sync=self._clock.call_at(start_seconds, lambda: self._sync(start_seconds)),
        )
        if start_seconds == self._clock.now:
            self._burst.sync.cancel()
            self._sync(start_seconds)

    def _burst_ended(self) -> None:
        if self._burst is not None:
            self._sent_pulses = self._burst.train.count
        self._burst = None
        self.changed()

    def _end_burst(self) -> None:
        if self._burst is None:
            return
        self._sent_pulses = self.sent_pulses
        self._burst.end.cancel()
        self._burst.sync.cancel()
        self._burst = None
        self._table.stop_drive()

    # The output.

    def switch_output(self, on: bool) -> None:
        """Close the relay, which takes relay_seconds of the source, or open it at once."""
        if on:
            self.refuse_after_conflict()
        if on == self._relay_on:
            return
        self._relay_on = on
        if on:
            self._closing = self._clock.call_at(
                self._clock.now + self.source.relay_seconds, self._close
            )
            return
        if self._closing is not None:
            self._closing.cancel()
            self._closing = None
        # Opening takes no time: an interlock would not wait either.
        self._closed = False
        self._table.connect(False)

    def _close(self) -> None:
        self._closing = None
        self._closed = True
        self._table.connect(True)
        self._note_emf(self.source.made_volts(self._settings.base_volts))
        if self._burst is not None:
            self._note_emf(self._burst.train.level_volts)
        self.changed()

    def _rest(self) -> None:
        base_volts = self.source.made_volts(self._settings.base_volts)
        self._table.rest_at(base_volts)
        self._note_emf(base_volts)

    def _note_emf(self, *volts: float) -> None:
        if self._closed:
            self._largest_emf_volts = max(self._largest_emf_volts, *map(abs, volts))
