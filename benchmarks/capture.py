"""How many rounds a minute of bench time: one shot a pulse, or one for a train of pulses.

    python -m benchmarks.capture [--json] [--rounds 5] [--exchange 5e-3] [--bytes-a-second 1e7]

Runs the same calibration (preset, read until the cell is full) twice on one simulated bench
whose messages take a stated time each, as those of real instruments do, and compares the virtual
time that went by. What the simulation costs the computer doesn't enter. The simulated link carries
any number of bytes in no time, so the bytes of all waveforms, two a sample of either channel, are
added at a stated rate; 10 MB/s is about what a 100 Mbit/s network carries, and a serial line at
115200 baud has 11.5 kB/s.

How much a train saves depends on all of this. The more pulses fill the cell the more, since a round
of either kind has two set-ups and a preset of its own; the slower the link the less, since a train
has about as many samples as the records of its pulses together. So several counts are told, with
the transfer and as if it took no time.
"""

import argparse
import json
import tempfile
from dataclasses import asdict, dataclass
from pathlib import Path

from pulsetally.sequencer import engine
from pulsetally.sequencer.errors import LogbookError
from pulsetally.sequencer.events import PulseArmed, ReadFinished, RunEnded, RunState, ShotTaken
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import Simulated, simulated

# By how many pulses fill the default cell: their width, and how many of them a train has.
CASES = {
    "9 pulses": ("100 us", 10),
    "21 pulses": ("75 us", 24),
    "36 pulses": ("70 us", 40),
    "68 pulses": ("68.2 us", 70),
}
# The simulated bench speaks scpi99, whose samples have 16 bits; perdiv's have 8.
BYTES_A_SAMPLE = 2
CHANNELS = 2
# What train_speedup is told for: a cell whose count says something to 1 or 2 percent.
TOLD = "68 pulses"
RECIPE = """
recipe: Full count
pulses:
  down: {{level: -5 V, width: 2 ms}}
  up:   {{level: 4 V, width: {width}, rest: 500 us}}
steps:
  - repeat: {rounds}
    steps:
      - preset: down
      - {{read: up, until: 2.5 V, at most: 140, {capture}}}
"""


@dataclass(frozen=True, slots=True, kw_only=True)
class Pace:
    """How one way of capturing did.

    seconds: bench time of the whole run, with transfer_seconds, which waveform_bytes need.
    """

    rounds_per_minute: float
    full_count: float
    triggers: int
    seconds: float
    waveform_bytes: int
    transfer_seconds: float

    @property
    def exchange_seconds(self) -> float:
        """Return the bench time without the transfer of waveforms."""
        return self.seconds - self.transfer_seconds


def measure(
    table: Simulated, folder: Path, *, capture: str, case: str, rounds: int, bytes_a_second: float
) -> Pace:
    """Run a calibration; return its pace on the bench's own clock, and the transfer's time."""
    width, train = CASES[case]
    way = f"capture: train, train of: {train}" if capture == "train" else "capture: each"
    text = RECIPE.format(capture=way, width=width, rounds=rounds)
    plan = make_plan(parse_recipe(text, file="capture.yaml"), table.bench)
    logbook = Logbook(folder / "logbook.db")
    with table.client(table.addresses.control) as client:
        began = float(client.ask(":CLOCk:TIME?"))
        recorder = logbook.begin_run(plan, table.bench, mode="rehearsal")
        events = list(engine.run(plan, table.bench, recorder, StopSwitch()))
        seconds = float(client.ask(":CLOCk:TIME?")) - began
    logbook.close()
    ended = events[-1]
    if not isinstance(ended, RunEnded) or ended.state is not RunState.FINISHED:
        raise LogbookError(f"the run did not finish: {ended}")
    counts = [each.count for each in events if isinstance(each, ReadFinished)]
    samples = sum(each.shot.source.codes.size for each in events if isinstance(each, ShotTaken))
    waveform_bytes = samples * BYTES_A_SAMPLE * CHANNELS
    transfer_seconds = waveform_bytes / bytes_a_second
    seconds += transfer_seconds
    return Pace(
        rounds_per_minute=60 * rounds / seconds,
        full_count=sum(counts) / len(counts),
        triggers=sum(isinstance(each, PulseArmed) for each in events),
        seconds=seconds,
        waveform_bytes=waveform_bytes,
        transfer_seconds=transfer_seconds,
    )


def main() -> None:
    """Measure both ways for each case, print a table or one line of JSON."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--json", action="store_true")
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--exchange", type=float, default=5e-3)
    parser.add_argument("--bytes-a-second", type=float, default=10e6)
    options = parser.parse_args()
    found: dict[str, dict[str, Pace]] = {}
    settings = SimulationSettings(exchange_seconds=options.exchange)
    with simulated(settings) as table, tempfile.TemporaryDirectory() as folder:
        for case in CASES:
            found[case] = {
                capture: measure(
                    table,
                    Path(folder),
                    capture=capture,
                    case=case,
                    rounds=options.rounds,
                    bytes_a_second=options.bytes_a_second,
                )
                for capture in ("each", "train")
            }
    speedups = {case: ways["each"].seconds / ways["train"].seconds for case, ways in found.items()}
    # As if waveforms took no time: what exchanges and pulses alone cost.
    bare = {
        case: ways["each"].exchange_seconds / ways["train"].exchange_seconds
        for case, ways in found.items()
    }
    if options.json:
        paces = {
            case: {way: asdict(pace) for way, pace in ways.items()} for case, ways in found.items()
        }
        told = {
            "train_speedup": speedups[TOLD],
            "told_for": TOLD,
            "speedups": speedups,
            "speedups_without_transfer": bare,
            "exchange_seconds": options.exchange,
            "bytes_a_second": options.bytes_a_second,
        }
        print(json.dumps(told | {"cases": paces}))
        return
    print(
        f"{options.exchange:g} s a message, {options.bytes_a_second:g} bytes a second;"
        " in brackets: the ratio if waveforms took no time"
    )
    print(f"{'':12}{'each':>10}{'train':>10}{'ratio':>8}          rounds a minute of bench time")
    for case, ways in found.items():
        each, train = ways["each"], ways["train"]
        print(
            f"{case:12}{each.rounds_per_minute:10.2f}{train.rounds_per_minute:10.2f}"
            f"{speedups[case]:8.1f} ({bare[case]:4.1f})"
            f"   full after {each.full_count:.1f} and {train.full_count:.1f}"
            f" pulses, {each.triggers} and {train.triggers} triggers,"
            f" {each.waveform_bytes / 1e6:.1f} and {train.waveform_bytes / 1e6:.1f} MB"
        )


if __name__ == "__main__":
    main()
