"""Drive an oscilloscope that takes one record at a time.

The commands are those of SCPI-99's SENSe, TRIGger, FORMat and TRACe subsystems (volume 2; from
memory); the preamble is a data interchange expression in the style of its volume 3.
"""

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsetally.drivers.errors import BadReply
from pulsetally.drivers.instrument import Instrument
from pulsetally.drivers.link import Link
from pulsetally.drivers.numbers import NumberError, parse_finite, parse_whole

_MEASURING, _WAITING = 16, 32
_DIMENSION = re.compile(r"DIMension=([A-Z])\(([^()]*)\)", re.IGNORECASE)


@dataclass(frozen=True, slots=True, kw_only=True)
class AcquisitionSetting:
    """State how the next records are taken.

    sample_interval: seconds. points: samples a record. before: share of the record, 0 to 1,
    that lies before the trigger. spans: largest peak-to-peak volts, centred on 0, by channel.
    trigger_channel, trigger_volts, rising: the edge that triggers.
    """

    sample_interval: float
    points: int
    before: float
    spans: dict[int, float]
    trigger_channel: int
    trigger_volts: float
    rising: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Trace:
    """Hold one channel's record: codes as they came, and what they mean.

    codes: int16, shape (points,). volts = codes * volts_per_code + volts_at_zero.
    sample_interval, first_seconds: seconds; time 0 is the trigger.
    lowest_code, highest_code: the ends of the digitizer's range, where it clips.
    """

    codes: NDArray[np.int16]
    volts_per_code: float
    volts_at_zero: float
    sample_interval: float
    first_seconds: float
    lowest_code: int
    highest_code: int

    @property
    def volts(self) -> NDArray[np.float64]:
        """Return the samples in volts, shape (points,)."""
        return self.codes.astype(np.float64) * self.volts_per_code + self.volts_at_zero

    @property
    def clipped(self) -> bool:
        """Say whether any sample reached an end of the digitizer's range."""
        return bool(
            self.codes.size
            and (self.codes.min() <= self.lowest_code or self.codes.max() >= self.highest_code)
        )


def parse_preamble(text: str) -> dict[str, dict[str, str]]:
    """Read the dimensions of a data interchange expression: axis -> keyword -> value.

    Keywords come back in capitals as they are written in long form, short forms expanded.
    Raises ValueError when an axis lacks what a waveform needs.
    """
    axes: dict[str, dict[str, str]] = {}
    for axis, body in _DIMENSION.findall(text):
        words = body.split()
        if len(words) % 2:
            raise ValueError(f"axis {axis} has a keyword without a value")
        axes[axis.upper()] = {
            word.upper()[:4]: value for word, value in zip(words[::2], words[1::2], strict=True)
        }
    for axis in ("X", "Y"):
        for word in ("SCAL", "OFFS", "SIZE"):
            if word not in axes.get(axis, {}):
                raise ValueError(f"axis {axis} lacks {word}")
    return axes


class Oscilloscope(Instrument):
    """Set up, arm and fetch single records of several channels."""

    def __init__(self, link: Link) -> None:
        super().__init__(link)
        self._points = 0

    def prepare(self) -> None:
        """Reset, and choose 16-bit big-endian samples."""
        self.reset()
        command = ":FORMat:DATA INTeger,16;:FORMat:BORDer NORMal"
        self._link.write(command)
        self.raise_errors(command)

    def set_acquisition(self, setting: AcquisitionSetting) -> AcquisitionSetting:
        """Set up the next records; return the setting as read back.

        Raises SettingRefused when the oscilloscope made something else of it.
        """
        source = f"INTernal{setting.trigger_channel}"
        ranges = [
            f":SENSe{channel}:VOLTage:DC:RANGe:PTPeak {volts:.9G}"
            f";:SENSe{channel}:VOLTage:DC:RANGe:OFFSet 0"
            for channel, volts in setting.spans.items()
        ]
        command = ";".join(
            [
                ":ABORt",
                *ranges,
                f":SENSe:SWEep:POINts {setting.points:d}",
                f":SENSe:SWEep:TINTerval {setting.sample_interval:.9G}",
                f":SENSe:SWEep:OREFerence:LOCation {setting.before:.6G}",
                f":TRIGger:SEQuence:SOURce {source}",
                f":TRIGger:SEQuence:LEVel {setting.trigger_volts:.9G}",
                f":TRIGger:SEQuence:SLOPe {'POSitive' if setting.rising else 'NEGative'}",
            ]
        )
        self._link.write(command)
        self.raise_errors(command)
        found = self._ask_numbers(
            {
                "interval": ":SENSe:SWEep:TINTerval?",
                "points": ":SENSe:SWEep:POINts?",
                "before": ":SENSe:SWEep:OREFerence:LOCation?",
                "level": ":TRIGger:SEQuence:LEVel?",
                **{
                    f"span {channel}": f":SENSe{channel}:VOLTage:DC:RANGe:PTPeak?"
                    for channel in setting.spans
                },
            }
        )
        self._check(setting, found)
        self._points = int(found["points"])
        return AcquisitionSetting(
            sample_interval=found["interval"],
            points=int(found["points"]),
            before=found["before"],
            spans={channel: found[f"span {channel}"] for channel in setting.spans},
            trigger_channel=setting.trigger_channel,
            trigger_volts=found["level"],
            rising=setting.rising,
        )

    def _check(self, asked: AcquisitionSetting, found: dict[str, float]) -> None:
        remedy = "choose a value this oscilloscope can make"
        swing = max(asked.spans.values())
        checks = [
            ("the sample interval", asked.sample_interval, found["interval"], 0.01, "s"),
            ("the record length", float(asked.points), found["points"], 0.0, "points"),
        ]
        for name, wanted, got, share, unit in checks:
            self._compare(name, wanted, got, within=share * wanted, unit=unit, remedy=remedy)
        self._compare(
            "the share before the trigger",
            asked.before,
            found["before"],
            within=0.02,
            unit="of the record",
            remedy=remedy,
        )
        self._compare(
            "the trigger level",
            asked.trigger_volts,
            found["level"],
            within=0.02 * swing,
            unit="V",
            remedy=remedy,
        )
        for channel, volts in asked.spans.items():
            # A wider range than asked for costs resolution; a narrower one clips.
            got = found[f"span {channel}"]
            if got < volts * 0.999:
                self._compare(
                    f"the range of channel {channel}",
                    volts,
                    got,
                    within=0,
                    unit="V",
                    remedy="use a probe that divides, or a smaller pulse",
                )

    def arm(self) -> None:
        """Begin one acquisition. It is armed only once is_armed says so."""
        self._link.write(":INITiate:IMMediate")

    def is_armed(self) -> bool:
        """Say whether the record before the trigger is full and a trigger would be taken."""
        return bool(self.conditions() & _WAITING)

    def is_done(self) -> bool:
        """Say whether the record is complete."""
        return not self.conditions() & (_MEASURING | _WAITING)

    def abort(self) -> None:
        """End an acquisition that is not complete."""
        self._link.write(":ABORt")

    def fetch(self, channel: int) -> Trace:
        """Fetch the last record of one channel. Raises BadReply when it isn't whole."""
        query = f":TRACe:DATA:PREamble? CHANnel{channel}"
        preamble = self._link.ask(query)
        try:
            axes = parse_preamble(preamble)
            step, first = parse_finite(axes["X"]["SCAL"]), parse_finite(axes["X"]["OFFS"])
            scale, zero = parse_finite(axes["Y"]["SCAL"]), parse_finite(axes["Y"]["OFFS"])
            points, codes = parse_whole(axes["X"]["SIZE"]), parse_whole(axes["Y"]["SIZE"])
        except (ValueError, NumberError) as error:
            raise self._faulty(query, f"the preamble can't be read: {error}") from error
        if not (step > 0 and scale != 0 and 2 <= codes <= 65_536):
            raise self._faulty(query, f"the preamble makes no sense: {preamble[:120]!r}")
        command = f":TRACe:DATA? CHANnel{channel}"
        data = self._link.ask_block(command)
        if len(data) != 2 * points or points != self._points:
            raise self._faulty(
                command,
                f"{self._points} samples were asked for, the preamble says {points}"
                f" and {len(data)} bytes came",
            )
        return Trace(
            codes=np.frombuffer(data, dtype=">i2").astype(np.int16),
            volts_per_code=scale,
            volts_at_zero=zero,
            sample_interval=step,
            first_seconds=first,
            lowest_code=-(codes // 2),
            highest_code=codes // 2 - 1,
        )

    def _faulty(self, command: str, problem: str) -> BadReply:
        return BadReply(
            self.address, command, problem, "check that the dialect fits this instrument"
        )
