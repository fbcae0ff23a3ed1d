"""What the oscilloscope resolves of each pulse, and what generator and oscilloscope can't do.

Decided from the dialects alone, before any instrument is asked.
"""

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from pulsetally.drivers.dialect import GeneratorDialect, OscilloscopeDialect
from pulsetally.drivers.oscilloscope import interval_for
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.quantities import show_quantity
from pulsetally.sequencer.records import (
    RecordTooLong,
    Window,
    charge_window,
    fitted,
    loop_window,
    train_window,
    window_of,
)
from pulsetally.sequencer.rounds import (
    Action,
    Ask,
    Cycle,
    Loop,
    Pulse,
    Pund,
    Read,
    Step,
    Wait,
    pulses_of,
)

# The end voltage is a parabola through the last fifth of the flat top, and takes six samples for
# it (analysis/pulses.py); with fewer than twice that the noise of single ones shows (invented).
_LEAST_TOP_SAMPLES, _GOOD_TOP_SAMPLES = 30, 60
# Of a loop, from one end to the other and back; invented: a coercive voltage to a percent or so.
_LEAST_LOOP_SAMPLES, _GOOD_LOOP_SAMPLES = 200, 1000
# By how much an edge may differ from the only one that a generator has; its driver says the same.
_EDGE_SHARE = 0.1


@dataclass(frozen=True, slots=True, kw_only=True)
class PulseRecord:
    """How one pulse is recorded.

    name: of the pulse. what: 'pulse', 'train of 10', 'charge' or 'loop'. points: samples of the
    record. needed, given: seconds between two samples, at most and as the oscilloscope makes
    them. samples: on the flat top, or on a whole loop.
    """

    name: str
    what: str
    points: int
    needed: float
    given: float
    samples: int

    @property
    def resolved(self) -> bool:
        """Say whether what is wanted can be taken from it at all."""
        least = _LEAST_LOOP_SAMPLES if self.what == "loop" else _LEAST_TOP_SAMPLES
        return self.samples >= least

    @property
    def coarse(self) -> bool:
        """Say whether more samples would make it noticeably better."""
        good = _GOOD_LOOP_SAMPLES if self.what == "loop" else _GOOD_TOP_SAMPLES
        return self.samples < good

    @property
    def where(self) -> str:
        """Return what the samples lie on, in words."""
        return "the loop" if self.what == "loop" else "the flat top"


def records_of(actions: Iterable[Action], bench: Bench) -> list[PulseRecord]:
    """Return how each pulse of some actions is recorded, the coarsest of each kind."""
    coarsest: dict[tuple[str, str], PulseRecord] = {}
    seen: set[tuple[Pulse, str]] = set()
    for action in actions:
        for pulse, what, window in _windows(action):
            if (pulse, what) in seen:
                continue
            seen.add((pulse, what))
            found = _record(pulse, what, window, bench.oscilloscope_dialect)
            before = coarsest.get((pulse.name, what))
            if before is None or found.samples < before.samples:
                coarsest[pulse.name, what] = found
    return list(coarsest.values())


def _windows(action: Action) -> Iterator[tuple[Pulse, str, Window]]:
    match action:
        case Wait() | Ask() | Cycle():
            return
        case Step(pulse=pulse, train=train) | Read(pulse=pulse, train=train) if train > 1:
            try:
                yield pulse, f"train of {train}", train_window(pulse, train)
            except RecordTooLong:
                return  # told by the plan
        case Pund(pulse=pulse):
            # Its mirror image is recorded alike.
            yield pulse, "charge", charge_window(pulse)
        case Loop(pulse=pulse):
            yield pulse, "loop", loop_window(pulse)
        case _:
            yield action.pulse, "pulse", window_of(action.pulse)


def _record(pulse: Pulse, what: str, window: Window, dialect: OscilloscopeDialect) -> PulseRecord:
    window = fitted(window, dialect.most_points)
    shown, least = pulse.width - pulse.ramp, _LEAST_TOP_SAMPLES
    if what == "loop":
        shown, least = pulse.duration, _LEAST_LOOP_SAMPLES
    given = interval_for(dialect, window.seconds, window.points)
    # A hair more, since a quotient that should be whole may come out just below.
    samples = math.floor(max(shown, 0.0) / given * (1 + 1e-9))
    return PulseRecord(
        name=pulse.name,
        what=what,
        points=window.points,
        needed=max(shown, 0.0) / least,
        given=given,
        samples=samples,
    )


def record_problems(records: Iterable[PulseRecord], bench: Bench) -> Iterator[str]:
    """Say which pulses the oscilloscope can't resolve."""
    for each in records:
        if each.resolved:
            continue
        needed, given = (show_quantity(seconds, "s") for seconds in (each.needed, each.given))
        shortest = bench.oscilloscope_dialect.shortest_interval
        why = "in a record of so many samples"
        remedy = "make its edges shorter against its width"
        if shortest is not None and each.given <= 5 * shortest:
            why, remedy = "as fast as it can", "lengthen the pulse, or use a faster oscilloscope"
        elif each.what.startswith("train"):
            remedy = "make 'train of' smaller or the rest shorter"
        yield (
            f"pulse {each.name!r} ({each.what}) needs a sample every {needed} or oftener, and the"
            f" oscilloscope of {bench.file} takes one every {given} {why}: {each.samples} on"
            f" {each.where}. To fix it, {remedy}."
        )


def record_warnings(records: Iterable[PulseRecord]) -> Iterator[str]:
    """Say which pulses are resolved, but not well."""
    for each in records:
        if each.coarse:
            yield (
                f"pulse {each.name!r} ({each.what}) is resolved coarsely: {each.samples} samples"
                f" on {each.where}, one every {show_quantity(each.given, 's')}"
            )


def generator_problems(actions: Iterable[Action], bench: Bench) -> Iterator[str]:
    """Say what the generator's dialect rules out, as its driver would when it is too late."""
    dialect, file = bench.generator_dialect, bench.file
    for action in actions:
        for pulse in pulses_of(action):
            yield from _pulse_problems(pulse, dialect, file, loop=isinstance(action, Loop))
        most = dialect.most_count if dialect.setting("count") else 1
        if isinstance(action, Step | Read) and action.train > most:
            yield (
                f"a train of {action.train} with pulse {action.pulse.name!r} is more than the"
                f" {most} a trigger that the generator of {file} sends. To fix it, write"
                f" {'a smaller train' if most > 1 else 'capture: each'}."
            )


def _pulse_problems(
    pulse: Pulse, dialect: GeneratorDialect, file: str, *, loop: bool
) -> Iterator[str]:
    fixed = dialect.fixed_edge
    if fixed is not None and abs(pulse.edge - fixed) > _EDGE_SHARE * fixed:
        edge, only = show_quantity(pulse.edge, "s"), show_quantity(fixed, "s")
        remedy = "leave the loop out" if loop else f"write 'edge: {only}'"
        yield (
            f"the edges of pulse {pulse.name!r} take {edge}, and the generator of {file} makes only"
            f" edges of {only}. To fix it, {remedy}, or use another generator."
        )
    if not pulse.rising and dialect.setting("polarity") is None:
        yield (
            f"pulse {pulse.name!r} goes down from its base, and the generator of {file} makes only"
            " pulses upwards. To fix it, use another generator."
        )


# What a pulse puts across a cell that does not switch, as a share of where it would settle.
_LEAST_SETTLED = 0.5


def settling_warnings(actions: Iterable[Action], bench: Bench) -> Iterator[str]:
    """Tell of pulses that are over before the wiring lets the cell see much of them."""
    tau = bench.cell_tau() or bench.probe_tau()
    told: dict[str, float] = {}
    for action in actions:
        for pulse in pulses_of(action):
            width = pulse.width
            if isinstance(action, Cycle):
                width = min(action.down.width, action.up.width)
            told[pulse.name] = min(width, told.get(pulse.name, math.inf))
    for name, width in told.items():
        share = -math.expm1(-width / tau)
        if share < _LEAST_SETTLED:
            yield (
                f"pulse {name!r} of {show_quantity(width, 's')} is short against the wiring's time"
                f" constant of {show_quantity(tau, 's', 3)}: a cell that doesn't switch sees"
                f" {share:.2g} of the voltage told"
            )
