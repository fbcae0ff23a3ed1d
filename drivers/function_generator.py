"""Drive a function generator that fires pulses on command.

SCPI-99 has no class for such an instrument; these are the commands of its SOURce, OUTPut and
TRIGger subsystems (volume 2; from memory) and :OUTPut:LOAD, which the standard lacks and the
trade has.
"""

import math
from dataclasses import dataclass

from pulsetally.drivers.errors import LimitError
from pulsetally.drivers.instrument import Instrument
from pulsetally.drivers.link import Link

_SWEEPING, _WAITING = 8, 32
_HIGH_Z = 9.9e37


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
        if self.period < self.width + self.edge / 0.8:
            raise ValueError("the period is at least width and edges together")


class FunctionGenerator(Instrument):
    """Set up pulses, arm, fire, and switch the output of one channel.

    load: what the generator is told about its load, in ohms; math.inf for high impedance.
    limit_volts: largest panel voltage, either sign, that is ever sent to the instrument.
    """

    def __init__(
        self, link: Link, *, channel: int = 1, load: float = math.inf, limit_volts: float
    ) -> None:
        super().__init__(link)
        self._channel, self._load, self._limit = channel, load, limit_volts

    def prepare(self) -> None:
        """Reset, tell the load, and choose triggering by command. The output is off after it."""
        self.reset()
        load = "INFinity" if math.isinf(self._load) else f"{self._load:.9G}"
        command = f":OUTPut{self._channel}:LOAD {load};:TRIGger:SOURce BUS"
        self._link.write(command)
        self.raise_errors(command)
        told = self._ask_number(f":OUTPut{self._channel}:LOAD?")
        self._compare(
            "the load setting",
            min(self._load, _HIGH_Z),
            min(told, _HIGH_Z),
            within=0.001 * min(self._load, _HIGH_Z),
            unit="ohm",
            remedy="write the load that the generator accepts into the bench file",
        )

    def set_pulse(self, pulse: PulseSetting) -> PulseSetting:
        """Set up a pulse with the output off; return it as read back.

        The output is off meanwhile, because between two commands the idle level would be
        neither the old nor the new one, and the cell would see it. Raises LimitError before
        anything is sent, SettingRefused when the generator made something else of it.
        """
        for name, volts in (("base", pulse.base), ("level", pulse.level)):
            if not abs(volts) <= self._limit:
                raise LimitError(
                    self.address,
                    "",
                    f"the {name} of {volts:.6g} V is beyond the limit of {self._limit:.6g} V"
                    " at the panel; it was not sent",
                    "lower the pulse, or raise the limits in the bench file if the cell bears it",
                )
        self.switch(on=False)
        low, high = sorted((pulse.base, pulse.level))
        word = "NORMal" if pulse.level > pulse.base else "INVerted"
        source = f":SOURce{self._channel}"
        # One message: the levels and times are coupled, and are judged together at its end.
        command = (
            f"{source}:FUNCtion:SHAPe PULSe"
            f";{source}:VOLTage:LEVel:IMMediate:HIGH {high:.9G}"
            f";{source}:VOLTage:LEVel:IMMediate:LOW {low:.9G}"
            f";{source}:PULSe:POLarity {word}"
            f";{source}:PULSe:PERiod {pulse.period:.9G}"
            f";{source}:PULSe:WIDTh {pulse.width:.9G}"
            f";{source}:PULSe:TRANsition:LEADing {pulse.edge:.9G}"
            f";{source}:PULSe:TRANsition:TRAiling {pulse.edge:.9G}"
            f";{source}:PULSe:COUNt {pulse.count:d}"
        )
        self._link.write(command)
        self.raise_errors(command)
        found = self._read_pulse(word)
        self._check_pulse(pulse, found)
        return found

    def _read_pulse(self, word: str) -> PulseSetting:
        source = f":SOURce{self._channel}"
        found = self._ask_numbers(
            {
                "high": f"{source}:VOLTage:LEVel:IMMediate:HIGH?",
                "low": f"{source}:VOLTage:LEVel:IMMediate:LOW?",
                "period": f"{source}:PULSe:PERiod?",
                "width": f"{source}:PULSe:WIDTh?",
                "edge": f"{source}:PULSe:TRANsition:LEADing?",
                "count": f"{source}:PULSe:COUNt?",
            }
        )
        normal = word == "NORMal"
        return PulseSetting(
            base=found["low"] if normal else found["high"],
            level=found["high"] if normal else found["low"],
            width=found["width"],
            edge=found["edge"],
            period=max(found["period"], found["width"] + found["edge"] / 0.8),
            count=int(found["count"]),
        )

    def _check_pulse(self, asked: PulseSetting, found: PulseSetting) -> None:
        swing = abs(asked.level - asked.base)
        checks = (
            ("the base", asked.base, found.base, 2e-3 + 2e-3 * swing, "V"),
            ("the level", asked.level, found.level, 2e-3 + 2e-3 * swing, "V"),
            ("the width", asked.width, found.width, 2e-3 * asked.width + 2e-9, "s"),
            ("the edge", asked.edge, found.edge, 0.1 * asked.edge + 2e-9, "s"),
            ("the count", asked.count, found.count, 0, "pulses"),
        )
        for name, wanted, got, within, unit in checks:
            self._compare(
                name, wanted, got, within=within, unit=unit, remedy="choose a value it can make"
            )

    def fire(self) -> None:
        """Arm and trigger: send the pulses that were set up. This can't be taken back."""
        self._link.write(":INITiate:IMMediate;*TRG")

    def is_busy(self) -> bool:
        """Say whether pulses are still being sent or a trigger is still awaited."""
        return bool(self.conditions() & (_SWEEPING | _WAITING))

    def abort(self) -> None:
        """Stop sending and forget the trigger."""
        self._link.write(":ABORt")

    def switch(self, *, on: bool) -> None:
        """Connect or disconnect the output, and read back that it happened."""
        output = f":OUTPut{self._channel}:STATe"
        self._link.write(f"{output} {'ON' if on else 'OFF'}")
        self._compare(
            "the output",
            1.0 if on else 0.0,
            1.0 if self.output_is_on() else 0.0,
            within=0,
            unit="(1 is on)",
            remedy="look at the instrument's front panel for an overload or interlock",
        )

    def output_is_on(self) -> bool:
        """Read back whether the output is connected."""
        return self._ask_whole(f":OUTPut{self._channel}:STATe?") != 0
