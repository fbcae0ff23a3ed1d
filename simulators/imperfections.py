"""In which ways the simulated instruments are not ideal, each of them a number.

Plain values, in SI units and in shares of a range. The defaults are invented; they are of the
size that data sheets of bench instruments state (common practice).
"""

import math
from dataclasses import dataclass

from pulsetally.simulators.drive import RAMP_SHARE

# What is sent for a sample has room for this many bits in the widest of the languages.
MOST_BITS = 16


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceImperfections:
    """What the function generator can do, and how wrong it is.

    bits: of its converter, 4 to 24; the codes share -span_volts to +span_volts of EMF.
    gain_error: part of a level that comes out too much (0.01 is 1 %). offset_volts: EMF that
    is added to each level. Neither shows on the panel or in an answer.
    time_step_seconds: widths and periods are rounded to whole ones.
    shortest_*, longest_*: what is accepted; edges from 10 % to 90 %, widths at 50 %.
    most_pulses: of one burst; a family may accept fewer.
    relay_seconds: from the command to close the output until it is closed.
    trigger_delay_seconds: from the trigger to the begin of the burst.
    trigger_jitter_seconds: standard deviation of that delay; it never becomes negative.
    Raises ValueError for a number out of its range, and where no pulse has room.
    """

    bits: int = 14
    span_volts: float = 10.0
    gain_error: float = 0.0
    offset_volts: float = 0.0
    time_step_seconds: float = 1e-9
    shortest_edge_seconds: float = 5e-9
    longest_edge_seconds: float = 500.0
    shortest_width_seconds: float = 20e-9
    longest_width_seconds: float = 1000.0
    shortest_period_seconds: float = 40e-9
    longest_period_seconds: float = 2000.0
    most_pulses: int = 10**12
    relay_seconds: float = 0.010
    trigger_delay_seconds: float = 0.0
    trigger_jitter_seconds: float = 0.0

    def __post_init__(self) -> None:
        _check("bits", self.bits, "", 4, 24)
        _check("span_volts", self.span_volts, " V", 0.1, 1000.0)
        _check("gain_error", self.gain_error, "", -0.5, 0.5)
        _check("offset_volts", self.offset_volts, " V", -self.span_volts, self.span_volts)
        _check("time_step_seconds", self.time_step_seconds, " s", 1e-12, 1e-3)
        for name in ("edge", "width", "period"):
            shortest = f"shortest_{name}_seconds"
            _check(shortest, getattr(self, shortest), " s", 1e-12, 1.0)
            longest = f"longest_{name}_seconds"
            _check(longest, getattr(self, longest), " s", getattr(self, shortest), 1e6)
        self._check_room()
        _check("most_pulses", self.most_pulses, "", 1, 10**15)
        _check("relay_seconds", self.relay_seconds, " s", 0.0, 10.0)
        for name in ("trigger_delay_seconds", "trigger_jitter_seconds"):
            _check(name, getattr(self, name), " s", 0.0, 1.0)

    def _check_room(self) -> None:
        _, width_seconds, period_seconds = self.shortest_pulse()
        for name, needed in (("width", width_seconds), ("period", period_seconds)):
            longest = f"longest_{name}_seconds"
            if needed > getattr(self, longest) * (1 + 1e-9):
                raise ValueError(
                    f"{longest} is {getattr(self, longest):g} s; the shortest pulse, of "
                    "shortest_edge_seconds and shortest_width_seconds in whole time_step_seconds, "
                    f"needs {needed:g} s"
                )

    def shortest_pulse(self) -> tuple[float, float, float]:
        """Return the edges, the width and the period of the shortest pulse accepted, s."""
        return self.pulse_near(0.0, 0.0, 0.0)

    def pulse_near(
        self, edge_seconds: float, width_seconds: float, period_seconds: float
    ) -> tuple[float, float, float]:
        """Return edges, width and period of the nearest pulse that is accepted, s.

        Both edges are alike. Where the three have no room together, the period goes before the
        width, and the width before the edges.
        """
        longest_period_seconds = self._stepped_down(self.longest_period_seconds)
        # At its shortest, a pulse is as wide as one ramp and lasts two.
        ramp_room = min(
            self._stepped_down(min(self.longest_width_seconds, longest_period_seconds / 2)),
            longest_period_seconds - self._stepped_up(self.shortest_width_seconds),
        )
        edge_room = ramp_room * RAMP_SHARE
        edge_seconds = min(edge_seconds, self.longest_edge_seconds, edge_room)
        edge_seconds = max(edge_seconds, self.shortest_edge_seconds)
        ramp_seconds = edge_seconds / RAMP_SHARE
        width_room = min(self.longest_width_seconds, longest_period_seconds - ramp_seconds)
        width_seconds = max(
            self._stepped_down(min(width_seconds, width_room)),
            self._stepped_up(max(self.shortest_width_seconds, ramp_seconds)),
        )
        period_seconds = max(
            self._stepped_down(min(period_seconds, longest_period_seconds)),
            self._stepped_up(max(self.shortest_period_seconds, width_seconds + ramp_seconds)),
        )
        return edge_seconds, width_seconds, period_seconds

    @property
    def volts_per_code(self) -> float:
        """EMF between two codes of the converter, V."""
        return 2 * self.span_volts / (1 << self.bits)

    def coded_volts(self, emf_volts: float) -> float:
        """Return the EMF that the converter means to make for one that is asked for, V."""
        half = 1 << (self.bits - 1)
        # The upper end of the span has no code of its own.
        return self.volts_per_code * max(
            -half, min(round(emf_volts / self.volts_per_code), half - 1)
        )

    def made_volts(self, emf_volts: float) -> float:
        """Return the EMF that comes out for one that the converter means to make, V."""
        return emf_volts * (1 + self.gain_error) + self.offset_volts

    def stepped(self, seconds: float) -> float:
        """Return a time rounded to the generator's steps, s."""
        # Divided, not multiplied: 1e9 steps are exact in binary and 1e-9 s is not.
        per_second = 1 / self.time_step_seconds
        if per_second == (whole := round(per_second)):
            return round(seconds * whole) / whole
        return round(seconds / self.time_step_seconds) * self.time_step_seconds

    def _stepped_down(self, seconds: float) -> float:
        stepped = self.stepped(seconds)
        over = stepped - seconds > self._grace_seconds(seconds)
        return self.stepped(stepped - self.time_step_seconds) if over else stepped

    def _stepped_up(self, seconds: float) -> float:
        stepped = self.stepped(seconds)
        under = seconds - stepped > self._grace_seconds(seconds)
        return self.stepped(stepped + self.time_step_seconds) if under else stepped

    def _grace_seconds(self, seconds: float) -> float:
        """Return by how much a time may miss a whole step because of rounding, s."""
        return max(1e-3 * min(self.time_step_seconds, seconds), 4 * math.ulp(seconds))


@dataclass(frozen=True, slots=True, kw_only=True)
class DigitizerImperfections:
    """What the oscilloscope can do, and how wrong it is; where there are two, for each channel.

    bits: of the converter, 4 to 16; None for what the family has. A family can't send more
    than it has, but fewer: the codes are then rounded to multiples.
    noise_share: standard deviation of the noise as a part of the range; None for what the
    family has. offset_shares: error at 0 V as a part of the range. gain_errors: part of a
    voltage that is read too much. Noise, offset and gain change with no setting.
    bandwidth_hertz: -3 dB of one pole (a resistance and a capacitance) in each channel; inf
    for none. The trigger sees the input before it.
    trigger_jitter_seconds: standard deviation of where a record says its trigger was.
    longest_record_points: most samples of a record.
    shortest_interval_seconds, longest_interval_seconds: from sample to sample.
    smallest_range_volts, largest_range_volts: peak to peak. Of both, and of the intervals, there
    are the 1-2-5 steps within (of volts per division, for ranges). largest_offset_volts: of the
    middle of the screen, either sign.
    """

    bits: int | None = None
    noise_share: float | None = None
    offset_shares: tuple[float, float] = (0.0005, -0.0005)
    gain_errors: tuple[float, float] = (0.0, 0.0)
    bandwidth_hertz: float = 100e6
    trigger_jitter_seconds: float = 0.0
    longest_record_points: int = 2_000_000
    shortest_interval_seconds: float = 1e-9
    longest_interval_seconds: float = 10.0
    smallest_range_volts: float = 0.008
    largest_range_volts: float = 80.0
    largest_offset_volts: float = 40.0

    def __post_init__(self) -> None:
        if self.bits is not None:
            _check("bits", self.bits, "", 4, MOST_BITS)
        if self.noise_share is not None:
            _check("noise_share", self.noise_share, "", 0.0, 0.1)
        for name, largest in (("offset_shares", 0.25), ("gain_errors", 0.5)):
            shares = getattr(self, name)
            if len(shares) != 2:
                raise ValueError(
                    f"{name} has {len(shares)} numbers; write one for each of 2 channels"
                )
            for channel, share in enumerate(shares, start=1):
                _check(f"{name} of channel {channel}", share, "", -largest, largest)
        if self.bandwidth_hertz != math.inf:
            _check("bandwidth_hertz", self.bandwidth_hertz, " Hz", 1.0, 1e12)
        _check("trigger_jitter_seconds", self.trigger_jitter_seconds, " s", 0.0, 1.0)
        _check("longest_record_points", self.longest_record_points, "", 1000, 10**7)
        _check("shortest_interval_seconds", self.shortest_interval_seconds, " s", 1e-12, 1e-3)
        _check("longest_interval_seconds", self.longest_interval_seconds, " s", 1e-3, 1e3)
        _check("smallest_range_volts", self.smallest_range_volts, " V", 1e-6, 1.0)
        _check("largest_range_volts", self.largest_range_volts, " V", 16.0, 1e4)
        _check("largest_offset_volts", self.largest_offset_volts, " V", 0.0, 1e4)

    @property
    def lag_seconds(self) -> float:
        """Time constant of the bandwidth's pole, s; 0 without one."""
        return 0.0 if math.isinf(self.bandwidth_hertz) else 1 / (2 * math.pi * self.bandwidth_hertz)


def _check(name: str, number: float, unit: str, lowest: float, highest: float) -> None:
    # A NaN fails the comparison, too.
    if not lowest <= number <= highest:
        raise ValueError(
            f"{name} is {number:g}{unit}; it must be from {lowest:g}{unit} to {highest:g}{unit}"
        )
