"""The generator's EMF, against the corners of a trapezoid."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsetally.simulators.drive import PulseTrain, Rest

# A pulse of 4 V with ramps of 125 ns and 250 ns (10 % to 90 %: 100 ns and 200 ns) that is
# 10 us wide at half amplitude. The corners follow from the trapezoid.
TRAIN = PulseTrain(
    base_volts=1.0,
    level_volts=5.0,
    width_seconds=10e-6,
    leading_seconds=100e-9,
    trailing_seconds=200e-9,
    period_seconds=30e-6,
    count=3,
    start_seconds=1e-3,
)

# Seconds after a pulse's start, EMF in volts.
COURSE = [
    (-1e-9, 1.0),
    (0.0, 1.0),
    (12.5e-9, 1.4),  # 10 % of the amplitude
    (62.5e-9, 3.0),  # 50 %
    (112.5e-9, 4.6),  # 90 %
    (125e-9, 5.0),
    (5e-6, 5.0),
    (9.9375e-6, 5.0),
    (9.9625e-6, 4.6),
    (10.0625e-6, 3.0),  # 10 us after the other half
    (10.1625e-6, 1.4),
    (10.1875e-6, 1.0),
    (20e-6, 1.0),
]


@pytest.mark.parametrize("pulse", [0, 1, 2])
@pytest.mark.parametrize(("after_seconds", "volts"), COURSE)
def test_every_pulse_follows_the_trapezoid(pulse: int, after_seconds: float, volts: float) -> None:
    at_seconds = 1e-3 + pulse * 30e-6 + after_seconds
    assert TRAIN.volts_at(at_seconds) == pytest.approx(volts, abs=1e-6)


def test_train_ends_with_its_last_ramp_and_stays_at_base() -> None:
    assert TRAIN.end_seconds == pytest.approx(1e-3 + 60e-6 + 10.1875e-6, abs=1e-12)
    assert TRAIN.volts_at(2e-3) == 1.0
    assert TRAIN.volts_at(1e9) == 1.0


def test_knots_are_the_corners_of_each_trapezoid() -> None:
    knots = list(TRAIN.knots_between(0.0, 1.0))
    corners = [0.0, 125e-9, 9.9375e-6, 10.1875e-6]
    expected = [1e-3 + pulse * 30e-6 + corner for pulse in range(3) for corner in corners]
    assert knots == pytest.approx(expected, abs=1e-12)
    assert list(TRAIN.knots_between(1e-3 + 1e-6, 1e-3 + 10e-6)) == pytest.approx([1.0099375e-3])


def test_a_train_of_1e9_pulses_is_answered_at_once() -> None:
    train = PulseTrain(level_volts=4, width_seconds=1e-6, period_seconds=2e-6, count=10**9)
    assert train.end_seconds == pytest.approx(2000.0, abs=1e-5)
    middle_seconds = train.pulse_start(500_000_000)
    assert train.volts_at(middle_seconds + 0.5e-6) == 4.0
    assert train.volts_at(middle_seconds + 1.5e-6) == 0.0
    assert train.pulses_begun(middle_seconds + 0.5e-6) == 500_000_001
    assert train.pulses_ended(middle_seconds + 0.5e-6) == 500_000_000


def test_edges_of_zero_are_jumps() -> None:
    train = PulseTrain(
        level_volts=2,
        width_seconds=1e-6,
        period_seconds=2e-6,
        leading_seconds=0,
        trailing_seconds=0,
        count=2,
    )
    assert list(train.knots_between(0.0, 1.0)) == pytest.approx([1e-6, 2e-6, 3e-6])
    assert [train.volts_at(t) for t in (0.0, 0.9e-6, 1e-6, 1.9e-6, 2e-6)] == [2, 2, 0, 0, 2]


def test_pulses_are_counted_when_they_begin_and_when_they_end() -> None:
    assert TRAIN.pulses_begun(1e-3) == 0
    assert TRAIN.pulses_begun(1.001e-3) == 1
    assert TRAIN.pulses_ended(1.001e-3) == 0
    assert TRAIN.pulses_ended(1.02e-3) == 1
    assert TRAIN.pulses_ended(TRAIN.end_seconds) == 3
    assert TRAIN.pulses_begun(9.0) == TRAIN.pulses_ended(9.0) == 3


# Setting, its value, the message.
MISTAKES = [
    ("width_seconds", 0.0, r"width_seconds is 0\.0 s; it must be above 0"),
    ("width_seconds", 0.1e-6, r"width_seconds is 1e-07 s; half of both ramps takes 1\.875e-07 s"),
    ("width_seconds", 29.95e-6, r"period_seconds is 3e-05 s; width and ramps take 3\.01375e-05"),
    ("period_seconds", 10e-6, r"period_seconds is 1e-05 s; width and ramps take 1\.01875e-05"),
    ("leading_seconds", -1e-9, r"leading_seconds is -1e-09 s; it must be 0 or more"),
    ("trailing_seconds", float("nan"), r"trailing_seconds is nan s; it must be 0 or more"),
    ("count", 0, r"count is 0; it must be at least 1"),
    ("level_volts", float("inf"), r"level_volts is inf; it must be finite"),
]


@pytest.mark.parametrize(("name", "value", "message"), MISTAKES)
def test_pulses_without_room_are_refused(name: str, value: float, message: str) -> None:
    settings = {field: getattr(TRAIN, field) for field in TRAIN.__slots__}
    with pytest.raises(ValueError, match=message):
        PulseTrain(**{**settings, name: value})


@given(
    width=st.floats(1e-6, 1e-3),
    leading=st.floats(0, 0.3e-6),
    trailing=st.floats(0, 0.3e-6),
    slack=st.floats(0, 1e-3),
    start=st.floats(0, 1e6),
    count=st.integers(1, 5),
)
def test_stretches_join_without_gaps(
    width: float, leading: float, trailing: float, slack: float, start: float, count: int
) -> None:
    train = PulseTrain(
        level_volts=4,
        width_seconds=width,
        leading_seconds=leading,
        trailing_seconds=trailing,
        period_seconds=width + (leading + trailing) / 1.6 + slack + 1e-9,
        count=count,
        start_seconds=start,
    )
    at_seconds, stretches = start, 0
    while at_seconds < train.end_seconds:
        stretch = train.stretch_at(at_seconds)
        assert stretch.end_seconds > at_seconds
        assert train.volts_at(at_seconds) == stretch.begin_volts
        assert min(stretch.begin_volts, stretch.end_volts) >= 0
        at_seconds, stretches = stretch.end_seconds, stretches + 1
    assert at_seconds == train.end_seconds
    assert stretches <= 4 * count


def test_rest_never_ends() -> None:
    rest = Rest(base_volts=-1.5)
    assert rest.volts_at(7.0) == -1.5
    assert rest.stretch_at(7.0).end_seconds == float("inf")
    with pytest.raises(ValueError, match="must be finite"):
        Rest(base_volts=float("nan"))
