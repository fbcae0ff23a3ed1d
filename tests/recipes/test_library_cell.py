"""The shipped recipes that look at the cell itself, against the laws it was given."""

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from pulsetally.sequencer.events import Event, PulseArmed, ReadFinished, Role, ShotTaken, WaitBegan
from pulsetally.simulators.cell import CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.drive import PulseTrain
from pulsetally.simulators.imperfections import DigitizerImperfections
from pulsetally.simulators.simulate import SimulationSettings
from pulsetally.simulators.table import Table
from pulsetally.simulators.wear import Fatigue, ImprintGrowth, Incubation, Retention
from tests.recipes.library import findings, run, written
from tests.simulated import simulated

# A digitizer's offset, which no law of the cell knows.
TRUE = DigitizerImperfections(offset_shares=(0.0, 0.0))


def bench_with(**options: Any) -> SimulationSettings:
    return SimulationSettings(cell=CellDescription(**options), digitizer=TRUE)


# Closed form: pulses that switch the whole cell move 2 P_r A.
def test_pund_gives_twice_the_remanent_charge(tmp_path: Path) -> None:
    cell = CellDescription()
    with simulated() as bench:
        found = findings(run(bench, tmp_path, "pund", {"rounds": "2"}), "pund")
    assert len(found) == 2
    for each in found:
        expected = 2 * cell.remanent_polarization * cell.area
        assert each.values["switched_coulombs"] == pytest.approx(expected, rel=0.02)
        assert each.values["switched_polarization"] == pytest.approx(0.5, rel=0.02)


def coercive_volts(amplitude: float, period: float) -> tuple[float, float]:
    """Return where the model's own polarization passes 0 in a second triangle, V at the node.

    Not from any waveform: the cell is stepped through the triangle in small steps.
    """
    table = Table(CellDescription(), Wiring())
    table.connect(on=True)
    edge = 0.4 * period * 0.999
    table.play(
        PulseTrain(
            base_volts=-amplitude,
            level_volts=amplitude,
            width_seconds=period / 2,
            leading_seconds=edge,
            trailing_seconds=edge,
            period_seconds=period,
            count=2,
        )
    )
    table.advance(period)
    step = period / 400
    volts, polarization = [table.node_volts], [table.polarization]
    for _ in range(400):
        table.advance(step)
        volts.append(table.node_volts)
        polarization.append(table.polarization)
    node, state = np.array(volts), np.array(polarization)
    up, down = np.flatnonzero(np.diff(np.sign(state)))
    found = []
    for index in (up, down):
        share = -state[index] / (state[index + 1] - state[index])
        found.append(float(node[index] + share * (node[index + 1] - node[index])))
    return found[0], found[1]


def test_a_loop_gives_the_models_remanent_polarization_and_coercive_volts(tmp_path: Path) -> None:
    with simulated() as bench:
        (found,) = findings(run(bench, tmp_path, "hysteresis", {"rounds": "1"}), "loop")
    assert found.values["remanent_polarization"] == pytest.approx(0.25, rel=0.03)
    up, down = coercive_volts(5.0, 0.1)
    assert up == pytest.approx(-down, rel=1e-3)
    assert found.values["coercive_up_volts"] == pytest.approx(up, rel=0.03)
    assert found.values["coercive_down_volts"] == pytest.approx(down, rel=0.03)


def test_endurance_finds_the_law_of_fatigue_and_stops_where_it_is_told(tmp_path: Path) -> None:
    law = Fatigue(scale_cycles=3e4, exponent=0.6)
    with simulated(bench_with(fatigue=law)) as bench:
        before = bench.truth("DELivered")
        result = run(bench, tmp_path, "endurance", {"most_off": "1000 %"})
        delivered = bench.truth("DELivered") - before
    charges = {
        each.settings["cycles"]: each.values["switched_coulombs"]
        for each in findings(result, "pund")
    }
    assert sorted(charges) == [0, 1, 10, 100, 1000, 10_000, 100_000]
    for place, (pairs, charge) in enumerate(charges.items()):
        # Closed form: exp(-(N/N_0)^b). Each pause before took two cycles: one of its own pulses,
        # one of the preset and the read.
        cycles = pairs + 2 * place
        expected = math.exp(-((cycles / 3e4) ** 0.6))
        assert charge / charges[0] == pytest.approx(expected, rel=0.03)
    (ended,) = findings(result, "cycling")
    assert ended.values["pairs"] == 100_000
    assert ended.values["planned_pairs"] == 1_000_000
    assert "of the first" in ended.values["ended"]
    assert delivered == result.summary.shots + 100_000
    assert (result.summary.state, result.summary.skipped) == ("finished", 3)


def test_every_pair_of_a_long_cycling_arrives(tmp_path: Path) -> None:
    steps = "  - cycle: {down: lower, up: upper}\n    pairs: 1e8\n"
    with simulated() as bench:
        result = run(bench, tmp_path, written(steps))
        # A pair is one pulse whose base is the lower level.
        assert bench.truth("DELivered") == bench.truth("PRESets") == 1e8
    (ended,) = findings(result, "cycling")
    assert ended.values["pairs"] == 1e8


def test_retention_loses_what_its_law_says(tmp_path: Path) -> None:
    law = Retention(law="log time", loss_per_decade=0.06, onset_seconds=1.0)
    states: list[tuple[float, float, float]] = []
    remaining: list[float] = []
    held: list[float] = []

    with simulated(bench_with(retention=law)) as bench:

        def look(event: Event) -> None:
            match event:
                case WaitBegan():
                    held[:] = [event.seconds, bench.truth("UP")]
                case PulseArmed(role=Role.READ) if held:
                    states.append((held[0], held[1], bench.truth("UP")))
                    held.clear()
                case ReadFinished(crossing=float()) if event.stepped:
                    assert event.crossing is not None
                    remaining.append(event.crossing)

        result = run(bench, tmp_path, "retention", {"rounds": "1"}, look=look)
    assert [seconds for seconds, _, _ in states] == [1, 10, 100, 1000, 10_000]
    for seconds, before, after in states:
        # Closed form: of a cell wholly up, P falls as 1 - 0.06 log10(t/1 s), so that its part
        # that is up falls as half of 1 plus that; of a cell that is partly up, likewise.
        kept = 1 - 0.06 * math.log10(seconds)
        assert after / before == pytest.approx((1 + kept) / 2, rel=0.005)
    # What is lost has to be counted again, more of it after each longer wait.
    assert remaining == sorted(remaining)
    assert remaining[-1] > remaining[0] + 0.3
    assert result.full_count is not None


def test_imprint_follows_the_history_of_the_cell(tmp_path: Path) -> None:
    growth = ImprintGrowth(volts_per_decade=0.1, onset_seconds=1.0)
    # Since when which state was held, from -1 for down to 1 for up.
    history: list[tuple[float, float]] = [(0.0, -1.0)]
    expected: list[float] = []

    def shift(now: float) -> float:
        """Return the closed form: each state adds d log10(1 + t/t_0) of its begin, less its end."""
        total = 0.0
        ends = [begin for begin, _ in history[1:]] + [now]
        for (begin, state), end in zip(history, ends, strict=True):
            total -= state * (math.log10(1 + now - begin) - math.log10(1 + now - end))
        return 0.1 * total

    with simulated(bench_with(imprint_growth=growth)) as bench:

        def now() -> float:
            with bench.client(bench.addresses.control) as client:
                return float(client.ask(":CLOCk:TIME?"))

        def look(event: Event) -> None:
            match event:
                case PulseArmed(role=Role.LOOP):
                    # A triangle of 5 V passes the node's 1.8 V, and what the current drops before
                    # the node, after about a third of each half.
                    rising, falling = now() + 0.35 * 0.1, now() + 0.85 * 0.1
                    before = shift(rising)
                    history.append((rising, 1.0))
                    expected.append((before + shift(falling)) / 2)
                    history.append((falling, -1.0))
                case ShotTaken() if event.role is not Role.LOOP:
                    history.append((now(), 2 * bench.truth("UP") - 1))

        result = run(bench, tmp_path, "imprint", look=look)
    loops = findings(result, "loop")
    assert result.summary.state == "finished"
    # The second triangle of each loop is the one that counts.
    expected = expected[1::2]
    assert len(loops) == len(expected) == 6
    for each, volts in zip(loops, expected, strict=True):
        # Within twice the standard uncertainty that the loop states of itself.
        stated = each.values["volts_uncertainty"]
        assert stated < 0.03
        assert each.values["imprint_volts"] == pytest.approx(volts, abs=2 * stated)
    # Down held for long shifts it up, up held for long shifts it down.
    assert max(expected) > 0.2
    assert min(expected) < 0
    counts = {
        (each.settings["fills"], each.settings["hold"]): each.count.mean
        for each in result.by_setting
    }
    # Behind a series resistance the shelf moves with the imprint: it comes to the threshold with
    # less switched, and so with fewer pulses.
    assert counts[0, 1000] < counts[0, 1] - 0.5
    assert counts[1, 1000] > counts[1, 1] + 0.5


# A. Grigoriev et al., Phys. Rev. B 80, 014110 (2009): short pulses never add up in a film that
# longer ones switch step by step. Here: 200 pulses of 2 us against 4 of 100 us, one sum.
@pytest.mark.parametrize(
    ("incubates", "width", "count", "loses"),
    [(True, "2 us", 200, False), (True, "100 us", 4, True), (False, "2 us", 200, True)],
)
def test_short_pulses_disturb_only_a_cell_without_incubation(
    tmp_path: Path, incubates: bool, width: str, count: int, loses: bool
) -> None:
    option = Incubation(seconds=10e-6, threshold_volts=0.2) if incubates else None
    settings = SimulationSettings(
        cell=CellDescription(incubation=option),
        # The node must follow even the short pulses: RC is 1 us.
        wiring=Wiring(series_ohms=3.3e3),
        digitizer=DigitizerImperfections(offset_shares=(0.0, 0.0), noise_share=0.0),
    )
    overrides = {
        "rounds": "1",
        "disturbances": str(count),
        "small.level": "2 V",
        "small.width": width,
        "small.rest": "20 us",
        "up.level": "2.4 V",
        "up.width": "40 us",
        "threshold": "2.375 V",
    }
    with simulated(settings, title="little resistance") as bench:
        result = run(bench, tmp_path, "disturb", overrides)
    reads = [read for each in result.rounds for read in each.reads]
    without, after = reads
    assert (without.stepped, after.stepped) == (0, count)
    assert without.crossing is not None
    assert after.crossing is not None
    lost = without.crossing - after.crossing
    if loses:
        assert lost > 0.2
    else:
        assert abs(lost) < 0.05
