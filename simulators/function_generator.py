"""The part of a function generator's language that every family shares."""

import math
from dataclasses import replace

from pulsetally.simulators.generator_model import (
    LARGEST_LOAD_OHMS,
    SMALLEST_LOAD_OHMS,
    GeneratorModel,
    PulseSettings,
)
from pulsetally.simulators.scpi_device import Manner, ScpiDevice
from pulsetally.simulators.scpi_parameters import Limits, Number, number

SETTLING = 2
SWEEPING = 8
WAITING_FOR_TRIGGER = 32


def load(infinity: str) -> Number:
    """Return the parameter for a load in ohms; infinity: the word for an open circuit."""
    limits = Limits(SMALLEST_LOAD_OHMS, LARGEST_LOAD_OHMS, math.inf)
    return Number(limits=lambda: limits, unit="OHM", words={infinity: math.inf})


class FunctionGenerator(ScpiDevice):
    """A generator model behind a SCPI engine; a family adds its commands.

    *_parameter: what the model accepts for a time, s.
    """

    def __init__(self, identity: str, model: GeneratorModel, manner: Manner) -> None:
        super().__init__(identity, manner)
        self.model = model
        source, initial = model.source, model.power_on
        self.width_parameter = number(
            source.shortest_width_seconds,
            source.longest_width_seconds,
            initial.width_seconds,
            unit="S",
        )
        self.period_parameter = number(
            source.shortest_period_seconds,
            source.longest_period_seconds,
            initial.period_seconds,
            unit="S",
        )
        self.edge_parameter = number(
            source.shortest_edge_seconds,
            source.longest_edge_seconds,
            initial.leading_seconds,
            unit="S",
        )
        model.changed = self.refresh

    # Hooks of the engine.

    def reset(self) -> None:
        """Open the output first, then go back to the settings after power-on."""
        self.model.reset()

    def begin_message(self) -> None:
        """Come up to the present; forget a conflict of an earlier message."""
        self.model.begin_message()

    def end_coupled(self) -> None:
        """Check the settings together; take them over, or put the old ones back (-221)."""
        self.model.take_over()

    def is_busy(self) -> bool:
        """Whether a burst runs or is waited for."""
        return self.model.is_running or self.model.is_waiting

    def wait(self) -> None:
        """Let time pass until the burst has ended; -214 when it waits for a trigger."""
        self.model.wait()

    def trigger(self) -> None:
        """Fire (*TRG); -211 unless initiated with the command as source."""
        self.model.fire()

    def operation_condition(self) -> int:
        """Return the bits for settling, sweeping (a burst runs) and waiting for trigger."""
        return (
            SETTLING * self.model.is_settling
            | SWEEPING * self.model.is_running
            | WAITING_FOR_TRIGGER * self.model.is_waiting
        )

    # What rows of the families' tables are made of. Levels are volts on the panel.

    def level_limits(self, lowest: float, highest: float, default: float) -> Limits:
        """Return limits given as EMF (V) as the panel shows them for the present load."""
        factor = self.model.panel_factor
        return Limits(lowest * factor, highest * factor, default * factor)

    def count_parameter(self, most: int) -> Number:
        """Return the parameter for the pulses of a burst; most: what the family accepts."""
        most = min(most, self.model.source.most_pulses)
        return number(1, most, self.model.power_on.count, whole=True)

    def level(self, default_emf_volts: float) -> Number:
        """Return the parameter for one level on the panel."""
        span_volts = self.model.source.span_volts
        return Number(
            limits=lambda: self.level_limits(-span_volts, span_volts, default_emf_volts),
            unit="V",
        )

    def set_high(self, panel_volts: float) -> None:
        """Want a high level."""
        self._want(replace(self._wanted, high_emf_volts=panel_volts / self.model.panel_factor))

    def high(self) -> float:
        """Return the high level as the converter makes it."""
        return self._wanted.high_volts * self.model.panel_factor

    def set_low(self, panel_volts: float) -> None:
        """Want a low level."""
        self._want(replace(self._wanted, low_emf_volts=panel_volts / self.model.panel_factor))

    def low(self) -> float:
        """Return the low level as the converter makes it."""
        return self._wanted.low_volts * self.model.panel_factor

    def set_amplitude(self, panel_volts: float) -> None:
        """Want high and low this far apart around the same middle."""
        middle = self._asked_middle
        half = panel_volts / self.model.panel_factor / 2
        self._want(replace(self._wanted, high_emf_volts=middle + half, low_emf_volts=middle - half))

    def amplitude(self) -> float:
        """Return how far apart the converter makes high and low."""
        return self.high() - self.low()

    def set_middle(self, panel_volts: float) -> None:
        """Want high and low around this middle, as far apart as they are."""
        middle = panel_volts / self.model.panel_factor
        half = (self._wanted.high_emf_volts - self._wanted.low_emf_volts) / 2
        self._want(replace(self._wanted, high_emf_volts=middle + half, low_emf_volts=middle - half))

    def middle(self) -> float:
        """Return the middle of high and low as the converter makes them."""
        return (self.high() + self.low()) / 2

    def set_inverted(self, inverted: bool) -> None:
        """Want the output to rest at high and to pulse low, or the other way round."""
        self._want(replace(self._wanted, inverted=inverted))

    def inverted(self) -> bool:
        """Return whether it rests at high."""
        return self._wanted.inverted

    def set_width(self, seconds: float) -> None:
        """Want a width at 50 %."""
        self._want(replace(self._wanted, width_seconds=self.model.source.stepped(seconds)))

    def width(self) -> float:
        """Return the width, s."""
        return self._wanted.width_seconds

    def set_period(self, seconds: float) -> None:
        """Want a period."""
        self._want(replace(self._wanted, period_seconds=self.model.source.stepped(seconds)))

    def period(self) -> float:
        """Return the period, s."""
        return self._wanted.period_seconds

    def set_leading(self, seconds: float) -> None:
        """Want a leading edge from 10 % to 90 %."""
        self._want(replace(self._wanted, leading_seconds=seconds))

    def leading(self) -> float:
        """Return the leading edge, s."""
        return self._wanted.leading_seconds

    def set_trailing(self, seconds: float) -> None:
        """Want a trailing edge from 90 % to 10 %."""
        self._want(replace(self._wanted, trailing_seconds=seconds))

    def trailing(self) -> float:
        """Return the trailing edge, s."""
        return self._wanted.trailing_seconds

    def set_count(self, count: float) -> None:
        """Want so many pulses in a burst."""
        self._want(replace(self._wanted, count=int(count)))

    def count(self) -> float:
        """Return the number of pulses in a burst."""
        return self._wanted.count

    def sent_pulses(self) -> str:
        """Return how many whole pulses the burst that runs or ran last has had so far."""
        return str(self.model.sent_pulses)

    def set_load(self, ohms: float) -> None:
        """Have the panel show levels into this load."""
        self._want(replace(self._wanted, load_ohms=ohms))

    def load_ohms(self) -> float:
        """Return the load that the panel assumes, ohms."""
        return self._wanted.load_ohms

    @property
    def _wanted(self) -> PulseSettings:
        return self.model.wanted

    @property
    def _asked_middle(self) -> float:
        return (self._wanted.high_emf_volts + self._wanted.low_emf_volts) / 2

    def _want(self, settings: PulseSettings) -> None:
        self.model.wanted = settings
