"""The table file: what it says, what it refuses and where, and that it comes back as written."""

import math
import subprocess
import sys
from dataclasses import MISSING, fields, is_dataclass, replace
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, assume, example, given, settings
from hypothesis import strategies as st

from pulsetally.simulators.cell import DEFAULT_DOMAINS, CellDescription
from pulsetally.simulators.faults import KINDS as FAULT_KINDS
from pulsetally.simulators.faults import Fault
from pulsetally.simulators.settings import SimulationSettings
from pulsetally.simulators.simulate import chosen_settings, main
from pulsetally.simulators.table_file import find_table, parse_table, table_text
from pulsetally.simulators.table_file_quantities import (
    KINDS,
    PER_KELVIN,
    POLARIZATION,
    Kind,
    QuantityError,
    format_quantity,
    parse_quantity,
)
from pulsetally.simulators.table_file_words import NOT_SAID, NOTHING, WORDS, Word
from pulsetally.simulators.table_file_yaml import MOST_BYTES, TableFileError

WHOLE = """\
table: everything at once
purpose: Say each setting once.
cell:
  area: 0.01 mm2
  remanent polarization: 20 uC/cm2
  leakage resistance: 2 Mohm
  domains: none
  incubation: {time: 200 ns}
  imprint growth: {shift per decade: 50 mV}
  fatigue: {recovered share: 20 %, recovery voltage: none}
  retention: {law: stretched, lost state: down}
  thermal: {temperature: 85 degC}
  breakdown: {scale cycles: 1e9}
socket: cell
wiring:
  series diode: {saturation current: 1e-12 A}
  clamp: {breakdown: 15 V}
  probe: {capacitance: 0 F}
instruments:
  family: perdiv
  exchange time: 2 ms
  generator: {gain error: 0.1 %}
  oscilloscope: {bits: 8, offsets: [0.1 %, 0], bandwidth: 100 MHz}
seed: 7
faults:
  - {fault: no answer, instrument: generator, exchange: 12, followed: no}
  - {fault: cell opens, at: 3 s}
  - {fault: error entry, instrument: oscilloscope, chance: 1 %, error number: -310}
"""


def refused(text: str) -> list[str]:
    with pytest.raises(TableFileError) as caught:
        parse_table(text, file="t.yaml")
    return str(caught.value).splitlines()


def test_what_a_file_says_is_what_the_bench_is_made_of() -> None:
    found = parse_table(WHOLE, file="t.yaml")
    assert (found.title, found.purpose) == ("everything at once", "Say each setting once.")
    made, cell = found.settings, found.settings.cell
    assert (cell.area, cell.remanent_polarization) == (1e-8, 0.2)
    assert (cell.leak_ohms, cell.domains) == (2e6, None)
    assert cell.incubation is not None
    assert (cell.incubation.seconds, cell.incubation.threshold_volts) == (2e-7, 0.2)
    assert cell.imprint_growth is not None
    assert cell.imprint_growth.volts_per_decade == 0.05
    assert cell.fatigue is not None
    assert (cell.fatigue.recovered_share, cell.fatigue.recovery_volts) == (0.2, math.inf)
    assert cell.retention is not None
    assert (cell.retention.law, cell.retention.side) == ("stretched", -1)
    assert cell.thermal is not None
    assert cell.thermal.kelvin == 358.15
    assert cell.breakdown is not None
    assert cell.breakdown.scale_cycles == 1e9
    wiring = made.wiring
    assert (wiring.diode_saturation_amperes, wiring.diode_emission) == (1e-12, 1.0)
    assert (wiring.clamp_volts, wiring.probe_farads, wiring.probe_ohms) == (15.0, 0.0, 10e6)
    assert (made.family, made.exchange_seconds, made.seed) == ("perdiv", 2e-3, 7)
    assert made.source.gain_error == 1e-3
    assert made.digitizer.bits == 8
    assert (made.digitizer.offset_shares, made.digitizer.bandwidth_hertz) == ((1e-3, 0.0), 1e8)
    assert made.faults == (
        Fault(kind="no answer", instrument="generator", exchange=12, followed=False),
        Fault(kind="cell opens", at_seconds=3.0),
        Fault(kind="error entry", instrument="oscilloscope", chance=0.01, number=-310),
    )


def test_what_a_file_does_not_say_is_as_in_a_rehearsal_without_one() -> None:
    usual = chosen_settings(None, family=None, seed=None, domains=None)[1]
    assert parse_table("table: nothing more\n", file="t.yaml").settings == usual
    assert usual == SimulationSettings(cell=CellDescription(domains=DEFAULT_DOMAINS))


def classes(top: type) -> list[type]:
    """Return a dataclass and all that its words lead to."""
    inner = [word.group for word in WORDS[top].values() if word.group]
    return [top, *(each for group in inner for each in classes(group))]


@pytest.mark.parametrize("kind", classes(SimulationSettings))
def test_every_field_of_every_part_can_be_said(kind: type) -> None:
    assert is_dataclass(kind)
    said, unsaid = set(WORDS[kind]), set(NOT_SAID.get(kind, {}))
    assert said | unsaid == {each.name for each in fields(kind)}
    assert not said & unsaid
    paths = [word.path for word in WORDS[kind].values()]
    assert len(paths) == len(set(paths))


def test_every_class_with_words_is_reached_from_the_top() -> None:
    assert set(classes(SimulationSettings)) == set(WORDS)


SAID = [(kind, name) for kind, words in WORDS.items() for name in words]


def sample(word: Word) -> Any:
    if word.many and word.kind:
        return (parse_quantity(word.sample, word.kind),) * word.many
    if word.kind:
        return parse_quantity(word.sample, word.kind)
    return next(iter(word.choices.values()), word.sample)


def near(word: Word) -> st.SearchStrategy[Any]:
    """Give values close to one that is allowed: with any digits, but as good as allowed."""
    if word.listed:
        return st.lists(any_fault(), max_size=3).map(tuple)
    if word.group:
        return any_of(word.group)
    if word.choices:
        return st.sampled_from([*word.choices.values()])
    if word.kind is None:
        return st.text(st.characters(max_codepoint=255), max_size=20)
    value = parse_quantity(word.sample, word.kind)
    if word.kind.whole:
        return st.integers(int(value) - 2, int(value) + 2)
    one = st.floats(0.9, 1.1).map(lambda factor: factor * value)
    return st.tuples(*[one] * word.many) if word.many else one


def any_of(kind: type) -> st.SearchStrategy[Any]:
    """Give objects of a dataclass; its words say which values its fields may have."""
    needed: dict[str, st.SearchStrategy[Any]] = {}
    optional: dict[str, st.SearchStrategy[Any]] = {}
    for each in fields(kind):
        word = WORDS[kind].get(each.name)
        if word is None:
            continue
        values = near(word)
        if word.none is not NOTHING:
            values |= st.just(word.none)
        required = each.default is MISSING and each.default_factory is MISSING
        (needed if required else optional)[each.name] = values
    return st.fixed_dictionaries(needed, optional=optional).map(lambda given: allowed(kind, given))


def allowed(kind: type, given: dict[str, Any]) -> Any:
    if given.get("diode_saturation_amperes") is None:
        # What a diode that isn't there would have can't be said.
        given.pop("diode_emission", None)
    try:
        return kind(**given)
    except ValueError:
        assume(False)


def any_fault() -> st.SearchStrategy[Fault]:
    words = WORDS[Fault]

    def of(name: str) -> st.SearchStrategy[Fault]:
        occasions = [{"instrument": "generator", "exchange": 3}]
        occasions.append({"instrument": "oscilloscope", "chance": 0.1 + 0.2})
        if FAULT_KINDS[name].breaks_cell:
            occasions.append({"at_seconds": 0.1 + 0.2})
        takes = {each: near(words[each]) for each in FAULT_KINDS[name].takes}
        return st.tuples(st.sampled_from(occasions), st.fixed_dictionaries({}, optional=takes)).map(
            lambda both: allowed(Fault, {"kind": name} | both[0] | both[1])
        )

    return st.sampled_from(sorted(FAULT_KINDS)).flatmap(of)


@settings(max_examples=30, deadline=None, suppress_health_check=list(HealthCheck))
@given(any_of(SimulationSettings), st.text(st.characters(exclude_categories=["Cs"]), max_size=30))
def test_settings_come_back_as_they_were_written(made: SimulationSettings, title: str) -> None:
    assume(title.strip())
    found = parse_table(table_text(made, title=title, purpose=title), file="t.yaml")
    assert found.settings == made
    assert (found.title, found.purpose) == (title, title)


@pytest.mark.parametrize(("kind", "name"), SAID)
def test_each_setting_is_read_from_its_sample(kind: type, name: str) -> None:
    word = WORDS[kind][name]
    if word.group or not word.sample:
        return
    value = sample(word)
    given = {name: value}
    if kind is Fault:
        given = {"kind": "error entry", "instrument": "generator", "exchange": 1} | given
        if name in ("seconds", "share", "followed", "ohms"):
            given["kind"] = next(k for k, what in FAULT_KINDS.items() if name in what.takes)
        if name == "chance":
            del given["exchange"]
        if name == "at_seconds":
            given = {"kind": "cell opens", name: value}
    if name == "diode_emission":
        given["diode_saturation_amperes"] = 1e-12
    for each in fields(kind):
        if each.default is MISSING and each.default_factory is MISSING:
            given.setdefault(each.name, sample(WORDS[kind][each.name]))
    if kind is SimulationSettings:
        whole = replace(SimulationSettings(), **given)
    else:
        inner: Any = kind(**given)
        whole = placed_in(SimulationSettings(), inner)
    text = table_text(whole, title="t")
    assert parse_table(text, file="t.yaml").settings == whole


def placed_in(outer: Any, inner: Any) -> Any:
    """Put an object where the words of the outer one have its class."""
    for name, word in WORDS[type(outer)].items():
        if word.group is type(inner):
            return replace(outer, **{name: (inner,) if word.listed else inner})
    cell = placed_in(outer.cell, inner)
    return replace(outer, cell=cell)


@settings(max_examples=300, deadline=None)
@given(st.sampled_from(KINDS), st.floats(allow_nan=False, allow_infinity=False, width=64))
@example(KINDS[0], 0.1 + 0.2)
@example(KINDS[0], -0.0)
@example(KINDS[0], 5e-324)
@example(POLARIZATION, 1e300)
@example(PER_KELVIN, -1e300)
def test_every_number_comes_back_as_it_was_written(kind: Kind, value: float) -> None:
    assume(abs(value) <= 1e300)
    if kind.whole:
        value = float(int(value)) if kind.signed else float(abs(int(value)))
    assert parse_quantity(format_quantity(value, kind), kind) == value


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("10000 um2", "an area", 1e-8),
        ("10000 µm²", "an area", 1e-8),
        ("0.0001 cm2", "an area", 1e-8),
        ("25 uC/cm2", "a polarization", 0.25),
        ("220 kohm", "a resistance", 220e3),
        # An exponent and a prefix both count.
        ("1e3 mohm", "a resistance", 1.0),
        ("2.2E-3Mohm", "a resistance", 2200.0),
        ("1.9 M\N{OHM SIGN}", "a resistance", 1.9e6),
        ("150nm", "a length", 150e-9),
        ("2 m", "a length", 2.0),
        ("20 %", "a share", 0.2),
        ("0.2", "a share", 0.2),
        ("50 ppm", "a share", 5e-5),
        ("-0.2 %/K", "a change per kelvin", -2e-3),
        ("25 degC", "a temperature", 298.15),
        ("0 degC", "a temperature", 273.15),
        ("2 h", "a time", 7200.0),
        ("0", "a voltage", 0.0),
        ("1e12", "a whole number", 10**12),
        ("600 meV", "an energy", 0.6),
    ],
)
def test_quantities_are_read_exactly(text: str, kind: str, value: float) -> None:
    (known,) = (each for each in KINDS if each.name == kind)
    assert parse_quantity(text, known) == value


@pytest.mark.parametrize("kind", KINDS, ids=lambda kind: kind.name)
@pytest.mark.parametrize(
    "text", ["", "V", "1 2", "1 lightyear", "nan", "-.inf", "1e400 V", "0x10", "1_000", "1,5 V"]
)
def test_what_is_no_quantity_is_refused_with_an_example(kind: Kind, text: str) -> None:
    with pytest.raises(QuantityError) as caught:
        parse_quantity(text, kind)
    assert kind.example in caught.value.remedy


# (text of a file, begin of each line of the error, words that must be in it)
MISTAKES = [
    ("cell: {arae: 3 um2}", ["t.yaml:2:8 cell.arae: there is no setting 'arae' here"], "'area'"),
    ("cell: {area: 3 V}", ["t.yaml:2:14 cell.area: '3 V' is not an area"], "'10000 um2'"),
    ("cell: {imprint: 0.3}", ["t.yaml:2:17 cell.imprint: 0.3 has no unit"], "'0.3 V'"),
    ("cell: {imprint: .nan}", ["t.yaml:2:17 cell.imprint: '.nan' is not a finite"], "'0.3 V'"),
    ("cell: {imprint: none}", ["t.yaml:2:17 cell.imprint: 'none' is not a voltage"], "0.3 V"),
    ("cell: {leakage resistance: .inf}", ["t.yaml:2:28 "], "or 'none'"),
    ("cell: {thickness: -1 nm}", ["t.yaml:2:19 cell.thickness: thickness is -1e-09"], "150 nm"),
    ("cell: {domains: 1.5}", ["t.yaml:2:17 cell.domains: '1.5' is not a whole number"], "'none'"),
    ("cell: {incubation: {}}", ["t.yaml:2:20 cell.incubation: the setting 'time' is miss"], "add"),
    ("cell: {incubation: {time: 0 s, threshold: -1 V}}", ["t.yaml:2:27 ", "t.yaml:2:43 "], "above"),
    ("cell: {retention: {law: log}}", ["t.yaml:2:25 cell.retention.law: 'log' is not"], "stretch"),
    ("cell: open", ["t.yaml:2:7 cell: 'open' is not a group of settings"], "'socket: open'"),
    ("cell:", ["t.yaml:2:1 cell: a blank is not a group of settings"], "'area: ...'"),
    ("socket: close", ["t.yaml:2:9 socket: 'close' is not one of cell, open, shorted"], "write"),
    ("wiring: {clamp: 15 V}", ["t.yaml:2:17 wiring.clamp: '15 V' is neither"], "{breakdown: 15 V}"),
    ("wiring: {series diode: {emission: 1}}", ["t.yaml:2:24 wiring.series diode: "], "saturation"),
    (
        "wiring: {source resistance: 0, series resistance: 0}",
        ["t.yaml:2:29 wiring.source resistance: source resistance and series resistance are both"],
        "50 ohm",
    ),
    ("instruments: {family: scpi9}", ["t.yaml:2:23 instruments.family: 'scpi9'"], "'scpi99'"),
    ("instruments: {generator: {bits: 2}}", ["t.yaml:2:33 instruments.generator.bits: "], "'14'"),
    (
        "instruments: {oscilloscope: {offsets: 1 %, gain errors: [1 %]}}",
        ["t.yaml:2:39 ", "t.yaml:2:57 instruments.oscilloscope.gain errors: a list of 1"],
        "'[0.5 %, 0.5 %]'",
    ),
    ("instruments: {exchange time: 2 h}", ["t.yaml:2:30 instruments.exchange time: "], "3600"),
    (
        "instruments: {family: perdiv, oscilloscope: {bits: 16}}",
        ["t.yaml:2:45 instruments.oscilloscope: "],
        "perdiv sends at most",
    ),
    ("seed: -1", ["t.yaml:2:7 seed: '-1' is not a whole number from 0 on"], "'100'"),
    ("faults: no answer", ["t.yaml:2:9 faults: 'no answer' is not a list"], "'- '"),
    ("faults: [{fault: no anser}]", ["t.yaml:2:18 faults[0].fault: 'no anser'"], "'no answer'"),
    (
        "faults: [{fault: no answer, instrument: generator, exchange: 0}]",
        ["t.yaml:2:62 faults[0].exchange: the fault 'no answer' has exchange 0"],
        "'12'",
    ),
    ("faults: [{fault: power lost}]", ["t.yaml:2:10 faults[0]: "], "give exactly one"),
    ("seed: 1\nseed: 2", ["t.yaml:3:1 seed: 'seed' stands twice here, first in line 2"], "keep"),
    ("cell:\n\tarea: 1 um2", ["t.yaml:3:1: a tab indents this line"], "use spaces"),
    ("cell: &a {area: 1 um2}\nwiring: *a", ["t.yaml:2:7: anchors", "t.yaml:3:9: anchors"], "write"),
    ("cell: {area: !big 1 um2}", ["t.yaml:2:14 cell.area: the tag !big is not allowed"], "plain"),
    ("cell: {area: 1 um2", ["t.yaml:3:1: "], "brackets"),
    ("purpose: [a]", ["t.yaml:2:10 purpose: this is not a line of text"], "words"),
    ("cell: " + "[" * 30 + "]" * 30, ["t.yaml:2:24: it is nested over 20 deep"], "nest less"),
    ("--- 1", ["t.yaml:2:1: "], "mend"),
]  # fmt: skip


@pytest.mark.parametrize(("body", "begins", "words"), MISTAKES)
def test_each_mistake_is_told_with_its_place_and_remedy(
    body: str, begins: list[str], words: str
) -> None:
    lines = refused(f"table: t\n{body}\n")
    for line, begin in zip(sorted(lines), sorted(begins), strict=True):
        assert line.startswith(begin)
        assert ". To fix it, " in line
    assert words in "\n".join(lines)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "the file is empty"),
        ("cell: {}", "the table has no name"),
        ("table:", "this is not a line of text"),
        ("- 1", "this is not a group of settings"),
        ("recipe: r", "this is a recipe file"),
        ("bench: b", "this is a bench file"),
        ("table: \x00", "this is not YAML"),
        ("table: t\n#" + "x" * MOST_BYTES, "over 1000000 bytes"),
    ],
)
def test_what_is_no_table_file_is_told_so(text: str, words: str) -> None:
    (line,) = refused(text)
    assert words in line
    assert line.startswith("t.yaml:1:")


def test_all_mistakes_of_a_file_are_told_at_once_and_in_order() -> None:
    bodies = [
        body
        for body, begins, _ in MISTAKES
        if body.startswith("cell: {") and len(begins) == 1 and body.endswith("}")
    ]
    inner = ["  " + body[len("cell: {") : -1] for body in bodies if "!" not in body]
    once = {line.partition(":")[0]: line for line in inner}
    lines = refused("table: t\ncell:\n" + "\n".join(once.values()) + "\nseed: x\nsocket: y\n")
    assert len(lines) >= len(once) + 1
    places = [int(line.split(":")[1]) for line in lines]
    assert places == sorted(places)


SLIPS = [*"{}[]:,-&*!|>'\"%@`#? \n\t0eV", "none", "\x07", "1e999"]


def holds(text: str) -> None:
    """Check that a text is read, or refused with places."""
    try:
        parse_table(text, file="t.yaml")
    except TableFileError as error:
        mistakes = error.mistakes
    else:
        return
    assert mistakes
    for each in mistakes:
        assert each.line >= 1
        assert each.column >= 1
        assert each.problem
        assert each.remedy


@settings(max_examples=200, deadline=None)
@given(st.text())
@example("table: t\nseed: " + "9" * 5000)
@example("table: t\ncell: {regions: 1e99999}")
@example("table: \ud800")
@example("%YAML 1.1\n---\ntable: yes")
@example("table: t\n? [a]\n: 1")
@example("table: t\n<<: {seed: 1}")
@example("table: t\nseed: 2001-01-01")
@example("table: t\nseed: !!int x")
def test_any_text_is_read_or_refused_with_places(text: str) -> None:
    holds(text)


@settings(max_examples=40, deadline=None)
@given(st.data())
def test_any_slip_of_the_hand_is_read_or_refused_with_places(data: st.DataObject) -> None:
    text = WHOLE
    for _ in range(data.draw(st.integers(1, 3))):
        at = data.draw(st.integers(0, len(text)))
        gone = data.draw(st.integers(0, 12))
        slip = data.draw(st.sampled_from(SLIPS))
        text = text[:at] + slip + text[at + gone :]
    holds(text)


def test_files_that_can_not_be_read_are_told_by_name(tmp_path: Path) -> None:
    (tmp_path / "latin.yaml").write_bytes(b"table: caf\xe9\n")
    (tmp_path / "long.yaml").write_bytes(b"#" * (MOST_BYTES + 1))
    for name, words in (
        ("latin.yaml", "is not UTF-8 text (byte 10)"),
        ("long.yaml", "has over 1000000 bytes"),
        ("gone.yaml", "can't be read: No such file"),
        (".", "can't be read: Is a directory"),
    ):
        with pytest.raises(TableFileError, match="To fix it, name a table file") as caught:
            find_table(str(tmp_path / name))
        assert words in str(caught.value)
    (tmp_path / "bom.yaml").write_bytes(b"\xef\xbb\xbftable: t\n")
    assert find_table(str(tmp_path / "bom.yaml")).title == "t"
    with pytest.raises(TableFileError, match=r"no table file 'wron', shipped or here.*'worn'"):
        find_table("wron")


def test_flags_go_before_the_file(tmp_path: Path) -> None:
    path = tmp_path / "t.yaml"
    path.write_text(WHOLE)
    title, made = chosen_settings(str(path), family=None, seed=None, domains=None)
    assert title == "everything at once"
    assert (made.family, made.seed, made.cell.domains) == ("perdiv", 7, None)
    _, other = chosen_settings(str(path), family="stateword", seed=9, domains=12)
    assert (other.family, other.seed, other.cell.domains) == ("stateword", 9, 12)
    assert replace(other, family="perdiv", seed=7, cell=replace(other.cell, domains=None)) == made
    assert chosen_settings(str(path), family=None, seed=None, domains=0)[1] == made


def test_a_file_with_mistakes_ends_the_program_with_status_2(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "t.yaml"
    path.write_text("table: t\nseed: x\nsocket: y\n")
    assert main(["--table", str(path)]) == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert [line.partition(" ")[0] for line in told.err.splitlines()] == [
        f"{path}:2:7",
        f"{path}:3:9",
    ]


def test_without_a_table_file_its_libraries_are_not_imported() -> None:
    code = (
        "import sys\n"
        "from pulsetally.simulators.simulate import chosen_settings\n"
        "chosen_settings(None, family=None, seed=1, domains=3)\n"
        "print([m for m in ('ruamel.yaml', 'quantiphy') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_a_table_without_a_name_and_a_number_without_end_are_not_written() -> None:
    with pytest.raises(ValueError, match="title is blank"):
        table_text(SimulationSettings(), title=" ")
    hot = replace(SimulationSettings().cell, activation_spread=5.0)
    object.__setattr__(hot, "activation_spread", math.nan)
    with pytest.raises(ValueError, match="nan is not a voltage; a table file can't hold it"):
        table_text(replace(SimulationSettings(), cell=hot), title="t")
