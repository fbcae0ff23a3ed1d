"""Measure something beside a count: contact, switched charge, a hysteresis loop; ask a person.

Each is a generator of events around the pulses that it needs, and says what it found.
"""

from collections.abc import Generator

from pulsetally.sequencer.acquisition import Acquisition, Burst, single
from pulsetally.sequencer.analysis.charge import SwitchingUnclear, cell_charge, charge_noise
from pulsetally.sequencer.analysis.contact import ContactUnclear, Verdict, judge_contact
from pulsetally.sequencer.analysis.hysteresis import loop_of
from pulsetally.sequencer.analysis.pulses import PulseUnreadable
from pulsetally.sequencer.analysis.switching import ChargeMoved, charge_moved, pund_of
from pulsetally.sequencer.bench import Bench
from pulsetally.sequencer.errors import ContactLost, StopRequested
from pulsetally.sequencer.events import (
    ContactChecked,
    Event,
    FindingKind,
    Found,
    PersonAnswered,
    PersonAsked,
    Role,
    Shot,
)
from pulsetally.sequencer.person import Person
from pulsetally.sequencer.records import charge_window, loop_window
from pulsetally.sequencer.rounds import Ask, Contact, Loop, Pulse, Pund
from pulsetally.sequencer.safety import StopSwitch

# A switched charge is more than so many of its standard uncertainties.
_CLEAR = 2.0
# How often somebody is looked for who was asked for something.
_LOOK_SECONDS = 0.2


def contact(
    acquisition: Acquisition, bench: Bench, action: Contact, *, number: int, order: int
) -> Generator[Event, None, None]:
    """Look whether a cell is there. Raises ContactLost unless it is good."""
    pulse = action.pulse
    taken = yield from acquisition.deliver(
        single(pulse), number=number, order=order, role=Role.CONTACT
    )
    shot = taken.shot
    try:
        result = judge_contact(
            shot.times,
            shot.source.volts,
            shot.node.volts,
            base=bench.terminal_volts(pulse.base),
            level=bench.terminal_volts(pulse.level),
            node_base=bench.cell_volts(pulse.base),
            ramp=pulse.ramp,
            reached_volts=bench.cell_volts(pulse.level),
            probe_tau=bench.probe_tau(),
            expected_tau=bench.cell_tau(),
        )
    except (ContactUnclear, PulseUnreadable) as error:
        raise ContactLost(f"contact can't be judged: {error}.") from error
    yield ContactChecked(round=number, pulse=pulse.name, result=result)
    if result.verdict is not Verdict.GOOD:
        raise ContactLost(
            f"the cell looks {result.verdict}: the node goes to {result.final_volts:.3g} V with"
            f" a time constant of {result.tau:.3g} s. To fix it, look at probes, socket and"
            " cell, then start again."
        )


def pund(
    acquisition: Acquisition, bench: Bench, action: Pund, *, number: int, order: int
) -> Generator[Event, None, float | None]:
    """Measure the switched charge; return it, C, or None where it can't be told.

    It is 0 where noise hides it. The mirrored pulse presets; then two pulses up, of which only
    the first switches, and two down.
    """
    up, down = action.pulse, action.pulse.mirrored()
    shots: list[tuple[Shot, Pulse]] = []
    for place, pulse in enumerate((down, up, up, down, down)):
        burst = Burst(pulse=pulse, window=charge_window(pulse), ends=False)
        role = Role.PUND if place else Role.PRESET
        taken = yield from acquisition.deliver(burst, number=number, order=order + place, role=role)
        if place:
            shots.append((taken.shot, pulse))
    switched: float | None = None
    values: dict[str, float | str | None]
    try:
        p, u, n, d = (_moved(bench, shot, pulse) for shot, pulse in shots)
        result = pund_of(p, u, n, d)
    except SwitchingUnclear as error:
        values = {"problem": str(error)}
    else:
        # A share of what is lost in noise says nothing: it counts as none.
        clear = result.switched > _CLEAR * result.uncertainty
        switched = result.switched if clear else 0.0
        values = {
            "switched_coulombs": result.switched,
            "switched_up_coulombs": result.switched_up,
            "switched_down_coulombs": result.switched_down,
            "uncertainty_coulombs": result.uncertainty,
            "asymmetry_coulombs": result.asymmetry,
            "leakage_siemens": result.leakage_siemens,
            # Twice the remanent polarization, C/m2.
            "switched_polarization": result.switched / bench.model.cell.area,
        }
    yield Found(
        round=number,
        kind=FindingKind.PUND,
        pulse=up.name,
        settings=action.settings,
        values=values,
    )
    return switched


def _moved(bench: Bench, shot: Shot, pulse: Pulse) -> ChargeMoved:
    wiring = bench.model.wiring
    return charge_moved(
        shot.times,
        shot.source.volts,
        shot.node.volts,
        series_ohms=wiring.series_resistance,
        probe_ohms=wiring.probe.resistance,
        probe_farads=wiring.probe.capacitance,
        before=-pulse.ramp / 2,
    )


def loop(
    acquisition: Acquisition, bench: Bench, action: Loop, *, number: int, order: int
) -> Generator[Event, None, None]:
    """Measure a hysteresis loop, and say so where none can be told.

    The first triangle brings the cell to where the second one begins and ends.
    """
    pulse = action.pulse
    burst = Burst(pulse=pulse, window=loop_window(pulse), ends=False, swings=True)
    for place in range(2):
        taken = yield from acquisition.deliver(
            burst, number=number, order=order + place, role=Role.LOOP
        )
    shot, wiring, cell = taken.shot, bench.model.wiring, bench.model.cell
    # The trigger is where the first edge passes 50 %.
    before = -pulse.ramp / 2
    values: dict[str, float | str | None]
    try:
        charge = cell_charge(
            shot.times,
            shot.source.volts,
            shot.node.volts,
            series_ohms=wiring.series_resistance,
            probe_ohms=wiring.probe.resistance,
            probe_farads=wiring.probe.capacitance,
            before=before,
        )
        noise = charge_noise(
            shot.times,
            shot.source.volts,
            shot.node.volts,
            series_ohms=wiring.series_resistance,
            probe_ohms=wiring.probe.resistance,
            before=before,
        )
        result = loop_of(shot.times, shot.node.volts, charge, before=before, noise=noise)
    except SwitchingUnclear as error:
        values = {"problem": str(error)}
    else:
        values = {
            "remanent_coulombs": result.remanent_coulombs,
            "remanent_uncertainty_coulombs": result.remanent_uncertainty,
            "remanent_polarization": result.remanent_coulombs / cell.area,
            "coercive_up_volts": result.coercive_up_volts,
            "coercive_down_volts": result.coercive_down_volts,
            "imprint_volts": result.imprint_volts,
            "volts_uncertainty": result.volts_uncertainty,
            "linear_farads": result.linear_farads,
            "leakage_siemens": result.leakage_siemens,
            "leakage_uncertainty_siemens": result.leakage_uncertainty,
        }
    yield Found(
        round=number,
        kind=FindingKind.LOOP,
        pulse=pulse.name,
        settings=action.settings,
        values=values,
    )


def ask(
    acquisition: Acquisition, stop: StopSwitch, person: Person, action: Ask, *, number: int
) -> Generator[Event, None, None]:
    """Switch the output off, ask, and wait. Raises StopRequested when nobody answers in time.

    A person's hands may be at the cell meanwhile, so the output is off and read back as off.
    """
    acquisition.switch_off()
    person.ask()
    yield PersonAsked(round=number, message=action.message, seconds=action.seconds)
    now = acquisition.clock.now()
    piece = acquisition.clock.piece_seconds
    end, look_at = now + action.seconds, now + piece
    while not person.answered():
        now = acquisition.clock.now()
        left = end - now
        if now >= look_at:
            acquisition.stay_off()
            look_at = now + piece
        if left <= 0:
            yield PersonAnswered(round=number, answered=False)
            if action.go_on:
                return
            raise StopRequested(f"nobody answered: {action.message}")
        acquisition.clock.sleep(min(left, _LOOK_SECONDS), lambda: stop.after_round)
        if stop.after_round:
            # Whoever asks for a stop now won't answer; there is nothing under way to finish.
            raise StopRequested(stop.reason)
    yield PersonAnswered(round=number, answered=True)
