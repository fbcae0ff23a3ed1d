"""Whatever a recipe and a bench say, no limit is ever passed.

Recipes and benches are drawn with a seed. Either the plan is refused, or it runs on a simulated
bench that is wired as the bench file says; then the simulator's own word counts, which knows the
largest EMF that was ever on the closed output, also between two pulses and while one is set up,
and the largest voltage that was ever across the cell.
"""

import random
import re
from dataclasses import dataclass
from pathlib import Path

from pulsetally.sequencer import engine
from pulsetally.sequencer.bench import Bench, parse_bench
from pulsetally.sequencer.errors import PlanError
from pulsetally.sequencer.events import PulseArmed, RunEnded
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import Plan, make_plan
from pulsetally.sequencer.recipe import parse_recipe
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.imperfections import SourceImperfections
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import Simulated, simulated

SOURCE = SourceImperfections(span_volts=20.0)
# The generator's converter may round a level up by half a step; nothing else is forgiven at
# the terminal. At the cell, the course between the simulator's samples is known to 0.1 mV.
CODE_VOLTS = SOURCE.volts_per_code / 2
COURSE_VOLTS = 1e-4


def a_table(draw: random.Random) -> SimulationSettings:
    diode = draw.choice([None, None, 1e-12, 3e-6])
    return SimulationSettings(
        cell=CellDescription(regions=60),
        wiring=Wiring(
            source_ohms=draw.choice([50.0, 600.0]),
            series_ohms=draw.choice([2e3, 47e3, 220e3]),
            diode_saturation_amperes=diode,
            diode_emission=1.05,
            clamp_volts=draw.choice([None, None, 1.0, 3.0, 5.0]),
            probe_ohms=draw.choice([1e6, 10e6]),
        ),
        source=SOURCE,
        family=draw.choice([*FAMILIES]),
        seed=draw.randrange(1000),
    )


def a_bench(draw: random.Random, table: Simulated, settings: SimulationSettings) -> Bench:
    """Write a load and limits into the bench file of a simulated bench."""
    text = table.bench.text.replace("high-z", draw.choice(["high-z", "50 ohm", "1 kohm"]))
    clamp = settings.wiring.clamp_volts
    # Often just where the clamp conducts: what it lets through must not count as kept out.
    node = draw.choice([clamp or 4.0, draw.uniform(0.8, 6.0)])
    text = re.sub(r"  source: .*", f"  source: {draw.uniform(1.5, 9):.6f} V", text)
    text = re.sub(r"  node: .*", f"  node: {node:.6f} V", text)
    return parse_bench(text, file="bench.yaml")


def a_level(draw: random.Random, limit: float, *, up: bool) -> str:
    """Draw a level: inside the limit, just at it, or beyond; at the panel."""
    share = draw.choice([draw.uniform(0.2, 1), draw.uniform(0.5, 1), 1.0, 1.0, 1.02])
    return f"{share * limit if up else -share * limit!r} V"


STEPS = (
    "{preset: down}",
    "{step: up, count: 2}",
    "{step: up, count: 5, capture: train, train of: 3}",
    "{read: up, until: low, at most: 4}",
    "{read: up, until: low, at most: 6, capture: train, train of: 3}",
    "{wait: 20 ms}",
    "{pund: up}",
    "{loop: far, period: 4 ms}",
    "{loop: far, period: 4 ms, at: cell}",
    "{cycle: {down: down, up: up}, pairs: 30, pause at: [10], steps: [{preset: down}, {step: up}]}",
    "{tune: up.width, between: [80 us, 120 us], full count: 3, within: 5, at most: 3,"
    " steps: [{preset: down}, {read: up, until: low, at most: 3}]}",
    "{sweep: {up.level: levels}, steps: [{preset: down}, {step: up}]}",
    "{sweep: {up.base: levels}, steps: [{step: down}, {step: up}]}",
)


def a_recipe(draw: random.Random, bench: Bench) -> tuple[str, dict[str, str]]:
    """Write a recipe, and what an option changes of it."""
    limit = bench.panel_limit()
    levels = ", ".join(a_level(draw, limit, up=True) for _ in range(2))
    steps = [each.replace("levels", f"[{levels}]") for each in draw.sample(STEPS, 2)]
    at = draw.choice(["panel", "panel", "cell"])
    lines = [
        "recipe: drawn",
        f"parameters: {{low: {0.05 * limit!r} V, far: {a_level(draw, limit, up=True)}}}",
        "pulses:",
        f"  down: {{level: {a_level(draw, limit, up=False)}, width: 1 ms, rest: 1 ms}}",
        f"  up: {{level: {a_level(draw, limit, up=True)}, width: 100 us, rest: 200 us, at: {at}}}",
        "steps:",
        *(f"  - {each}" for each in ("{preset: down}", *steps)),
    ]
    overrides = {}
    if draw.random() < 0.3:
        overrides["down.level"] = a_level(draw, limit, up=False)
    if draw.random() < 0.3 and not any("up.base" in each for each in steps):
        overrides["up.base"] = a_level(draw, limit, up=draw.random() < 0.5)
    return "\n".join(lines) + "\n", overrides


@dataclass(kw_only=True)
class Tally:
    """refused, run: plans. fired: triggers. terminal, node: largest share of the limit."""

    refused: int = 0
    run: int = 0
    fired: int = 0
    terminal: float = 0.0
    node: float = 0.0


def drawn_plan(draw: random.Random, bench: Bench, tally: Tally) -> tuple[Plan, str] | None:
    for _ in range(20):
        text, overrides = a_recipe(draw, bench)
        recipe = parse_recipe(text, file="r.yaml", overrides=overrides)
        try:
            return make_plan(recipe, bench), f"{text}{overrides}"
        except PlanError:
            tally.refused += 1
    return None


def run_one(seed: int, folder: Path, tally: Tally) -> None:
    """Draw a bench and a recipe, run it, and compare what happened with the limits."""
    draw = random.Random(seed)
    settings = a_table(draw)
    with simulated(settings, title="drawn") as table:
        bench = a_bench(draw, table, settings)
        found = drawn_plan(draw, bench, tally)
        # A refusal costs nothing: nobody has even looked for the instruments.
        assert table.truth("MAXimum") == 0
        if found is None:
            return
        plan, text = found
        logbook = Logbook(folder / f"{seed}.db")
        recorder = logbook.begin_run(plan, bench, mode="run")
        events = list(engine.run(plan, bench, recorder, StopSwitch()))
        logbook.close()
        told = f"seed {seed}:\n{text}\n{bench.text}\n{events[-1]}"
        assert isinstance(events[-1], RunEnded), told
        assert events[-1].outputs_off, told
        limits = bench.model.limits
        largest, highest = table.truth("MAXimum"), table.truth("HIGHest")
        assert largest <= limits.source + CODE_VOLTS, told
        assert highest <= limits.node + CODE_VOLTS + COURSE_VOLTS, told
        tally.run += 1
        tally.fired += sum(isinstance(event, PulseArmed) for event in events)
        tally.terminal = max(tally.terminal, largest / limits.source)
        tally.node = max(tally.node, highest / limits.node)


def test_no_limit_is_passed_by_any_recipe_on_any_bench(tmp_path: Path) -> None:
    tally = Tally()
    for seed in range(18):
        run_one(seed, tmp_path, tally)
    # A draw that refuses all, fires nothing or stays far below the limits would show nothing.
    assert tally.refused >= 10, tally
    assert tally.run >= 10, tally
    assert tally.fired >= 60, tally
    assert tally.terminal > 0.99, tally
    assert tally.node > 0.9, tally
