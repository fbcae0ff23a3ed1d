"""Drive a function generator that fires pulses on command, in any dialect."""

import math
from dataclasses import dataclass

from pulsetally.drivers.dialect import GeneratorDialect, fill, understand
from pulsetally.drivers.errors import LimitError, SettingRefused
from pulsetally.drivers.instrument import Instrument
from pulsetally.drivers.link import Link

# The share of a linear ramp that lies between 10 % and 90 %.
_RAMP_SHARE = 0.8
# Of a limit: what a voltage that was worked out through the wiring may be off by rounding.
_ROUNDING = 1e-9


def keeps_limit(volts: float, limit: float) -> bool:
    """Say whether a voltage of either sign keeps a limit, up to rounding."""
    return abs(volts) <= limit * (1 + _ROUNDING)


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseSetting:
    """State what the generator is told to send when it is triggered.

    base, level: volts at the panel before and during the pulse.
    width: seconds between the 50 % points. edge: seconds from 10 % to 90 %.
    period: seconds from one pulse to the next; count: pulses a trigger.
    """

    base: float
    level: float
    width: float
    edge: float
    period: float
    count: int = 1

    def __post_init__(self) -> None:
        if self.base == self.level:
            raise ValueError("a pulse whose level is its base does nothing")
        if not (self.width > 0 and self.edge > 0 and self.count >= 1):
            raise ValueError("width and edge are above 0, count is 1 or more")
        if self.period < self.width + self.edge / _RAMP_SHARE:
            raise ValueError("the period is at least width and edges together")

    def values(self) -> dict[str, float | str]:
        """Return all that a dialect may want to set, by name."""
        high, low = max(self.base, self.level), min(self.base, self.level)
        return {
            "high": high,
            "low": low,
            "amplitude": high - low,
            "offset": (high + low) / 2,
            "polarity": "up" if self.level > self.base else "down",
            "period": self.period,
            "frequency": 1 / self.period,
            "width": self.width,
            "edge": self.edge,
            "leading edge": self.edge,
            "trailing edge": self.edge,
            "count": float(self.count),
        }


class FunctionGenerator(Instrument):
    """Set up pulses, fire, and switch the output of one channel.

    load: what the generator is told about its load, in ohms; math.inf for high impedance.
    limit_volts: largest panel voltage, either sign, that is ever sent to the instrument.
    """

    def __init__(
        self,
        link: Link,
        dialect: GeneratorDialect,
        *,
        channel: int = 1,
        load: float = math.inf,
        limit_volts: float,
    ) -> None:
        super().__init__(link, dialect)
        self._dialect, self._channel = dialect, channel
        self._load, self._limit = load, limit_volts

    @property
    def settle_seconds(self) -> float:
        """Return how long the output relay needs after it was switched."""
        return self._dialect.settle_seconds

    @property
    def most_count(self) -> int:
        """Return how many pulses one trigger can send at most."""
        return self._dialect.most_count if self._dialect.setting("count") else 1

    def prepare(self) -> None:
        """Reset, tell the load, and choose triggering by command. The output is off after it."""
        self.reset()
        self._send(self._dialect.prepare, self._channel)
        self.raise_errors("; ".join(self._dialect.prepare))
        if self._dialect.load is not None:
            wanted = {"load": "high-z" if math.isinf(self._load) else self._load}
            self.apply([self._dialect.load], wanted, self._channel)
            self.read_back([self._dialect.load], wanted, self._channel)
        elif not math.isinf(self._load):
            raise SettingRefused(
                self.address,
                "the load",
                f"{self._load:g} ohm",
                "a setting it doesn't have",
                "write 'load: high-z' into the bench file",
            )

    def set_pulse(self, pulse: PulseSetting) -> dict[str, float]:
        """Set up a pulse with the output off; return the numbers as read back, by name.

        The output is off meanwhile, because between two commands the idle level would be
        neither the old nor the new one, and the cell would see it. Raises LimitError before
        anything is sent, SettingRefused when the generator made something else of it.
        """
        self.check_limits(pulse)
        self._check_abilities(pulse)
        self.switch(on=False)
        wanted = pulse.values()
        (found,) = self.establish([(self._dialect.settings, wanted, self._channel)])
        return found

    def check_limits(self, pulse: PulseSetting) -> None:
        """Raise LimitError when a pulse goes beyond the limit at the panel."""
        for name, volts in (("base", pulse.base), ("level", pulse.level)):
            if not keeps_limit(volts, self._limit):
                raise LimitError(
                    self.address,
                    "",
                    f"the {name} of {volts:.6g} V is beyond the limit of {self._limit:.6g} V"
                    " at the panel; it was not sent",
                    "lower the pulse, or raise the limits in the bench file if the cell bears it",
                )

    def _check_abilities(self, pulse: PulseSetting) -> None:
        fixed = self._dialect.fixed_edge
        lacks = [
            ("count", pulse.count > 1 and not self._dialect.setting("count"), "1 pulse a trigger"),
            (
                "edge",
                fixed is not None and abs(pulse.edge - fixed) > 0.1 * fixed,
                f"edges of {fixed} s",
            ),
            (
                "polarity",
                pulse.level < pulse.base and not self._dialect.setting("polarity"),
                "pulses upwards",
            ),
        ]
        for name, lacking, only in lacks:
            if lacking:
                asked = str(pulse.values()[name])
                remedy = "change the recipe, or use another generator"
                raise SettingRefused(self.address, name, asked, f"its only one: {only}", remedy)

    def fire(self) -> None:
        """Trigger: send the pulses that were set up. This can't be taken back."""
        self._send(self._dialect.fire, self._channel)

    @property
    def tells_idle(self) -> bool:
        """Say whether it can tell that no pulse is being sent."""
        return self._dialect.idle is not None

    def is_idle(self) -> bool:
        """Say whether no pulse is being sent; True where the instrument can't tell."""
        idle = self._dialect.idle
        return idle is None or self.says_yes(idle, self._channel)

    @property
    def tells_sending(self) -> bool:
        """Say whether it can tell that pulses are being sent."""
        return self._dialect.sending is not None or self.tells_idle

    def is_sending(self) -> bool:
        """Say whether pulses are being sent; False where the instrument can't tell."""
        sending = self._dialect.sending
        if sending is None:
            return not self.is_idle()
        return self.says_yes(sending, self._channel)

    def abort(self) -> None:
        """End what is being sent; the output stays at the pulse's base."""
        self._send(self._dialect.abort, self._channel)

    def switch(self, *, on: bool, joined: bool = True) -> None:
        """Connect or disconnect the output, and read back that it happened.

        joined: in one message, which costs half the time. Whoever must be heard by an instrument
        that is in trouble sends two.
        """
        command = self.spell(self._dialect.output, "on" if on else "off", self._channel)
        if not joined:
            self._link.write(command)
            command = ""
        if self._output_is_on(command) != on:
            raise SettingRefused(
                self.address,
                "the output",
                "on" if on else "off",
                "off" if on else "on",
                "look at the instrument's front panel for an overload or interlock",
            )

    def output_is_on(self) -> bool:
        """Read back whether the output is connected. An answer that is neither raises."""
        return self._output_is_on("")

    def _output_is_on(self, before: str) -> bool:
        output = self._dialect.output
        query = fill(output.ask, channel=self._channel)
        answer = self.ask(f"{before};{query}" if before else query)
        word = understand(answer, output.words)
        if word is None:
            raise SettingRefused(
                self.address, "the output", "on or off", answer[:40], "mend its dialect"
            )
        return word == "on"
