"""Dialects: three families of instruments, one behaviour; and files with placed mistakes."""

from collections.abc import Iterator
from dataclasses import replace
from importlib.resources import files
from pathlib import Path

import pytest

from pulsetally.drivers.dialect import (
    Line,
    Predicate,
    fill,
    read_preamble,
    says_yes,
    understand,
)
from pulsetally.drivers.errors import SettingRefused
from pulsetally.drivers.function_generator import FunctionGenerator
from pulsetally.drivers.link import VisaLink
from pulsetally.drivers.numbers import NumberError
from pulsetally.drivers.oscilloscope import AcquisitionSetting
from pulsetally.sequencer import engine
from pulsetally.sequencer.bench import parse_bench
from pulsetally.sequencer.dialects import (
    DialectError,
    find_dialect,
    parse_dialect,
    shipped_dialects,
)
from pulsetally.sequencer.events import ReadFinished, RunEnded, RunState
from pulsetally.sequencer.instruments import open_instruments
from pulsetally.sequencer.logbook import Logbook
from pulsetally.sequencer.plan import make_plan
from pulsetally.sequencer.recipe import find_recipe
from pulsetally.sequencer.safety import StopSwitch
from pulsetally.simulators.simulate import SimulationSettings
from tests.simulated import Simulated, simulated

FAMILIES = [
    SimulationSettings(family="scpi99"),
    SimulationSettings(family="perdiv"),
    SimulationSettings(family="stateword"),
    SimulationSettings(family="scpi99", transport="hislip"),
    SimulationSettings(family="scpi99", transport="serial"),
    SimulationSettings(family="stateword", transport="serial"),
]
# A threshold that the default cell crosses in the middle of a pulse, so that the few millivolts
# of an 8-bit digitizer's noise can't move the count (regression value, without scatter).
THRESHOLD, CROSSING = {"threshold": "2.47 V"}, 8.43


@pytest.fixture(
    scope="module",
    params=FAMILIES,
    ids=lambda each: f"{each.family}-{each.transport}",
)
def table(request: pytest.FixtureRequest) -> Iterator[Simulated]:
    with simulated(request.param) as running:
        yield running


def reads_of(
    name: str, table: Simulated, folder: Path, overrides: dict[str, str] | None = None
) -> list[ReadFinished]:
    logbook = Logbook(folder / "logbook.db")
    plan = make_plan(find_recipe(name, overrides), table.bench)
    recorder = logbook.begin_run(plan, table.bench, mode="run")
    *events, ended = engine.run(plan, table.bench, recorder, StopSwitch())
    logbook.close()
    assert isinstance(ended, RunEnded)
    assert ended.state is RunState.FINISHED, ended.reason
    assert table.truth("OUTPut") == 0
    return [each for each in events if isinstance(each, ReadFinished)]


def test_every_dialect_counts_the_same(table: Simulated, tmp_path: Path) -> None:
    (full,) = reads_of("full_count", table, tmp_path, {"rounds": "1"} | THRESHOLD)
    assert full.count == 9
    assert full.crossing == pytest.approx(CROSSING, abs=0.2)


def test_stored_counts_come_back_in_every_dialect(table: Simulated, tmp_path: Path) -> None:
    reads = reads_of("step_and_read", table, tmp_path, THRESHOLD)
    assert [each.count for each in reads] == [9, 7, 5, 3, 1]
    for each in reads[:-1]:
        assert each.crossing is not None
        assert each.crossing + each.stepped == pytest.approx(CROSSING, abs=0.2)


def test_a_rounded_setting_is_caught_before_a_pulse_is_fired(table: Simulated) -> None:
    before = table.truth("DELivered")
    with open_instruments(table.bench) as instruments:
        instruments.oscilloscope.prepare()
        good = AcquisitionSetting(
            sample_interval=instruments.oscilloscope.interval_for(2e-4, 2000),
            points=2000,
            before=0.1,
            ranges={1: (-4.0, 4.0), 2: (-4.0, 4.0)},
            trigger_channel=1,
            trigger_volts=2.0,
            rising=True,
        )
        found = instruments.oscilloscope.set_acquisition(good)
        assert found["points"] == 2000
        # 3 is no step of a 1-2-5 time base: the instrument takes 5 without a word.
        with pytest.raises(SettingRefused, match="reads back as"):
            instruments.oscilloscope.set_acquisition(replace(good, sample_interval=3e-7))
    assert table.truth("DELivered") == before


def shipped_text(name: str = "perdiv") -> str:
    return (files("pulsetally.drivers") / f"{name}.yaml").read_text(encoding="utf-8")


def test_three_dialects_ship() -> None:
    assert shipped_dialects() == ["perdiv", "scpi99", "stateword"]
    for name in shipped_dialects():
        assert find_dialect(name, Path()).name == name


# What is changed in a shipped dialect, and words of the mistake it makes.
MISTAKES = [
    ("amplitude: {", "amplitud: {", "there is no setting 'amplitud' to make"),
    ("form: list", "form: lst", "'lst' is not known here"),
    ("FREQuency {value}", "FREQuency {vlue}", "{vlue} can't be filled in"),
    ("FREQuency {value}", "FREQuency", "no place for its value"),
    ('fire: ["*TRG"]', 'fire: ["*TRG {value}"]', "there is no value to fill in here"),
    ('fire: ["*TRG"]', 'fire: ["*TRG\\n*RST"]', "plain, printable ASCII"),
    ('fire: ["*TRG"]', "fire: []", "the list is empty"),
    ("within: 0.1 %", "within: 0.1", "is not a share"),
    ("down: [INVerted]", "dawn: [INVerted]", "no word for 'down'"),
    ("words: {on: [ON, 1], off: [OFF, 0]}", "words: {on: [ON]}", "switched and read back"),
    ("words: {on: [ON, 1]", "words: {on: ['ON;*RST']", "has no words of its own"),
    ("step: 5", "stap: 5", "'stap' is no field"),
    ("step: 5, ", "", "no preamble query tells 'step'"),
    ("samples: unsigned 8-bit", "samples: 8-bit", "'8-bit' is not known here"),
    ("words: [4]", "words: []", "answered by words or by bits"),
    ("  arm: ", "  arms: ", "there is no setting 'arms' here"),
    ("dialect: perdiv", "dialect: Per Div", "a dialect has a name"),
]


@pytest.mark.parametrize(("good", "bad", "words"), MISTAKES)
def test_each_mistake_of_a_dialect_has_its_place(good: str, bad: str, words: str) -> None:
    text = shipped_text()
    assert good in text
    with pytest.raises(DialectError) as caught:
        parse_dialect(text.replace(good, bad, 1), file="d.yaml")
    assert any(words in each.problem for each in caught.value.mistakes), str(caught.value)
    assert all(each.line > 1 or "dialect" in each.path for each in caught.value.mistakes)


def test_a_generator_that_lacks_a_way_to_set_levels_is_refused() -> None:
    text = "\n".join(
        line for line in shipped_text().splitlines() if not line.lstrip().startswith("offset:")
    )
    with pytest.raises(DialectError, match="'high' and 'low' or 'amplitude' and 'offset'"):
        parse_dialect(text, file="d.yaml")


def test_numbers_are_sent_plain_and_in_base_units() -> None:
    assert Line().format(1e-4) == "0.0001"
    assert Line().format(4.0) == "4"
    assert Line().format(-5e-9) == "-5E-09"
    assert Line(number="scientific", digits=6).format(2.5) == "2.500000E+00"
    with pytest.raises(ValueError, match="can't be sent"):
        Line().format(float("nan"))


def test_words_are_understood_in_long_and_short_form() -> None:
    words = {"up": ("NORMal",), "on": ("ON", "1")}
    assert [understand(each, words) for each in ("NORM", "normal", " NORMAL ", "NORMA")] == [
        "up",
        "up",
        "up",
        None,
    ]
    assert [understand(each, words) for each in ("1", "+1", "1.0", "0")] == ["on", "on", "on", None]


def test_only_known_blanks_are_filled() -> None:
    assert fill("CH{channel}:HIGH {value}", channel=2, value="4") == "CH2:HIGH 4"


def test_predicates_by_bits_and_by_words() -> None:
    dialect = find_dialect("scpi99", Path()).oscilloscope
    assert dialect is not None
    assert [says_yes(dialect.armed, each) for each in ("48", "16", "0")] == [True, False, False]
    assert [says_yes(dialect.done, each) for each in ("48", "16", "0")] == [False, False, True]


def test_an_infinite_number_in_a_preamble_is_no_number() -> None:
    dialect = find_dialect("stateword", Path()).oscilloscope
    assert dialect is not None
    with pytest.raises(NumberError, match="infinity"):
        read_preamble(dialect.waveform.preamble[1], "9.9E37")
    with pytest.raises(NumberError):
        says_yes(find_predicate(), "9.9E37")


def find_predicate() -> Predicate:
    dialect = find_dialect("scpi99", Path()).oscilloscope
    assert dialect is not None
    return dialect.armed


@pytest.mark.parametrize("name", shipped_dialects())
def test_every_command_begins_at_the_root(name: str) -> None:
    # 'FORM INT,16;BORD SWAP' is an error on instruments that keep to SCPI-99, since a header
    # without a colon continues where the last one stood; commands are joined by semicolons.
    dialect = find_dialect(name, Path())
    generator, oscilloscope = dialect.generator, dialect.oscilloscope
    assert generator is not None
    assert oscilloscope is not None
    settings = [*generator.settings, generator.output, generator.load, *oscilloscope.settings]
    commands = [text for each in settings if each for text in (each.send, each.ask) if text]
    assert len(commands) > 20
    for message in (*commands, *generator.fire, *oscilloscope.arm, *oscilloscope.force):
        for command in message.split(";"):
            assert command[0] in ":*", command


def test_an_instrument_without_an_error_queue_is_not_asked_for_errors() -> None:
    text = shipped_text("scpi99").replace('  errors: ":SYSTem:ERRor:NEXT?"\n', "")
    dialect = parse_dialect(text, file="d.yaml")
    assert dialect.generator is not None
    with simulated() as table:
        link = VisaLink(table.addresses.generator)
        try:
            generator = FunctionGenerator(link, dialect.generator, limit_volts=5.0)
            assert not generator.has_error_queue
            link.write(":NOSUCH 1")
            assert generator.errors() == []
            # The instrument still has the entry: nobody asked for it.
            assert link.ask(":SYSTem:ERRor:NEXT?").startswith("-113")
        finally:
            link.close()


def test_how_often_and_how_long_is_asked_can_be_said() -> None:
    text = shipped_text("perdiv").replace(
        "words: [2]}", "words: [2], poll every: 10 ms, time limit: 30 s}"
    )
    dialect = parse_dialect(text, file="d.yaml").oscilloscope
    assert dialect is not None
    assert (dialect.armed.poll_seconds, dialect.armed.limit_seconds) == (10e-3, 30.0)
    assert (dialect.done.poll_seconds, dialect.done.limit_seconds) == (2e-3, 5.0)


def test_an_oscilloscope_that_does_not_arm_fires_nothing(tmp_path: Path) -> None:
    # A wrong word: it never says what the dialect waits for.
    text = shipped_text("perdiv").replace("words: [2]}", "words: [9], time limit: 1 s}")
    (tmp_path / "mine.yaml").write_text(text)
    with simulated(SimulationSettings(family="perdiv")) as table:
        bench = parse_bench(
            table.bench.text.replace("dialect: perdiv", "dialect: mine.yaml"),
            file="b.yaml",
            folder=tmp_path,
        )
        plan = make_plan(find_recipe("full_count"), bench)
        logbook = Logbook(tmp_path / "logbook.db")
        recorder = logbook.begin_run(plan, bench, mode="run")
        *_, ended = engine.run(plan, bench, recorder, StopSwitch())
        logbook.close()
        assert isinstance(ended, RunEnded)
        assert "did not arm within" in ended.reason
        assert "nothing was fired" in ended.reason
        assert table.truth("DELivered") == 0
        assert table.truth("OUTPut") == 0
