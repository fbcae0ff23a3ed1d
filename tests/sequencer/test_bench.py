"""The bench file, and the way from the panel to the cell."""

import math

import pytest

from pulsetally.sequencer.bench import Bench, parse_bench
from pulsetally.sequencer.errors import BenchError
from pulsetally.sequencer.rehearsal import shipped_bench


def changed(*changes: tuple[str, str]) -> Bench:
    text = shipped_bench().text
    for was, now in changes:
        assert was in text
        text = text.replace(was, now)
    return parse_bench(text, file="b.yaml")


def test_one_mistake_is_told_with_its_place() -> None:
    text = shipped_bench().text.replace("series resistance: 220 kohm", "series resistance: 220 kV")
    line = text[: text.index("220 kV")].count("\n") + 1
    with pytest.raises(BenchError) as caught:
        parse_bench(text, file="b.yaml")
    (mistake,) = caught.value.mistakes
    assert (mistake.file, mistake.line, mistake.column) == ("b.yaml", line, 22)
    assert mistake.path == "wiring.series resistance"
    assert "not a resistance" in mistake.problem
    assert "'220 kohm'" in mistake.remedy


@pytest.mark.parametrize(
    ("was", "now", "words"),
    [
        ("load: high-z", "load: highz", "not a load"),
        ("dialect: scpi99", "dialect: scpi-99", "there is no dialect"),
        ("source: 10 V", "source: 0 V", "not above 0"),
        ("node channel: 2", "node channel: 1", "both channels are the same"),
        ("address: TCPIP::127.0.0.1::5025::SOCKET", "address: 127.0.0.1", "not a VISA address"),
        ("series diode: none", "series diode: {emission: 1}", "'saturation current' is missing"),
        ("clamp: none", "clamp: 15 V", "not a group of settings"),
        ("probe: {resistance", "probe: {resistence", "there is no setting 'resistence'"),
        ("limits: {source: 10 V, node: 6 V}", "", "'limits' is missing"),
    ],
)
def test_each_mistake_is_told(was: str, now: str, words: str) -> None:
    with pytest.raises(BenchError, match=words):
        changed((was, now))


# A generator told 50 ohm shows what it delivers into 50 ohm. 1 V at the panel is 2 V with
# nothing drawn; into R it is 2 R / (R + 50). Closed form, common practice.
def test_a_load_setting_scales_the_terminal() -> None:
    told_50 = changed(("load: high-z", "load: 50 ohm"))
    assert told_50.terminal_volts(1.0) == 2.0
    assert told_50.panel_volts(2.0) == 1.0
    assert shipped_bench().terminal_volts(1.0) == 1.0
    assert changed(("load: high-z", "load: 1 kohm")).terminal_volts(1.0) == pytest.approx(1.05)


def test_source_series_and_probe_divide() -> None:
    # Closed form: 4 V over 50 ohm + 220 kohm + 10 Mohm, taken at the 10 Mohm.
    assert shipped_bench().cell_volts(4.0) == pytest.approx(4 * 10e6 / 10_220_050, rel=1e-12)


def test_the_clamp_cuts_both_polarities() -> None:
    bench = changed(("clamp: none", "clamp: {breakdown: 3 V}"))
    assert bench.cell_volts(5.0) == 3.0
    assert bench.cell_volts(-5.0) == -3.0
    assert bench.cell_volts(1.0) < 1.0


# A 5 V source, 1 kohm and a diode of 1e-14 A at 27 degrees Celsius: 0.6928878324 V across the
# diode and 4.3071121676 mA, by Lambert's W (closed form; a circuit simulator agrees to 1 uV).
def test_the_series_diode_follows_shockley() -> None:
    bench = changed(
        ("series diode: none", "series diode: {saturation current: 1e-14 A}"),
        ("source resistance: 50 ohm", "source resistance: 0 ohm"),
        ("series resistance: 220 kohm", "series resistance: 1 ohm"),
        ("resistance: 10 Mohm", "resistance: 999 ohm"),
    )
    assert bench.cell_volts(5.0) == pytest.approx(4.3071121676e-3 * 999, rel=1e-8)
    # Reversed, only the saturation current flows.
    assert bench.cell_volts(-5.0) == pytest.approx(-1e-14 * 999, rel=1e-6)
    assert math.isfinite(bench.cell_volts(100.0))


def test_the_panel_limit_keeps_both_limits() -> None:
    for bench in (
        shipped_bench(),
        changed(("load: high-z", "load: 50 ohm")),
        changed(("node: 6 V", "node: 20 V")),
    ):
        limit, limits = bench.panel_limit(), bench.model.limits
        assert bench.terminal_volts(limit) <= limits.source * (1 + 1e-12)
        assert bench.cell_volts(limit) <= limits.node * (1 + 1e-12)
        beyond = limit * 1.001
        assert (
            bench.terminal_volts(beyond) > limits.source or bench.cell_volts(beyond) > limits.node
        )


def test_a_panel_that_shows_half_of_what_it_delivers_is_mentioned() -> None:
    assert shipped_bench().notes() == []
    (note,) = changed(("load: high-z", "load: 50 ohm")).notes()
    assert "delivers 2 times what its panel shows" in note


def test_a_dialect_that_is_not_there_is_told_along_with_every_other_mistake() -> None:
    text = shipped_bench().text.replace("node: 6 V", "node: 6 s")
    text = text.replace("dialect: scpi99", "dialect: scpi9", 1)
    with pytest.raises(BenchError) as caught:
        parse_bench(text, file="b.yaml")
    assert [each.path for each in caught.value.mistakes] == ["generator.dialect", "limits.node"]
    assert "'scpi99'" in caught.value.mistakes[0].remedy
