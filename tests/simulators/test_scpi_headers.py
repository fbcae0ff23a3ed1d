"""Header patterns: SCPI-99 Vol. 1 sections 6.2.1 and 6.2.5 (MNE rows)."""

import pytest

from pulsetally.simulators.scpi_errors import ScpiError
from pulsetally.simulators.scpi_headers import HeaderTable, read_pattern, short_form
from tests.simulators.notebook import MNEMONIC_PAIRS


def table(*patterns: str) -> HeaderTable[str]:
    made: HeaderTable[str] = HeaderTable()
    for pattern in patterns:
        made.declare(pattern, pattern)
    return made


@pytest.mark.parametrize(("declared", "short"), MNEMONIC_PAIRS)
def test_only_the_exact_short_and_long_forms_match(declared: str, short: str) -> None:
    made = table(f":{declared}")
    assert short_form(declared) == short
    for spelling in (declared, declared.upper(), declared.lower(), short, short.lower()):
        assert made.find((spelling,)) == (f":{declared}", ())
    between = {declared[:length] for length in range(2, len(declared))} - {short}
    for spelling in between | {declared + "X"}:
        with pytest.raises(ScpiError) as caught:
            made.find((spelling,))
        assert caught.value.number in ((-113, -112) if len(spelling) > 12 else (-113,))


def test_optional_nodes_may_be_left_out() -> None:
    made = table("[:SOURce<1>]:VOLTage[:LEVel][:IMMediate]:HIGH")
    for header in ("VOLT:HIGH", "SOUR:VOLT:HIGH", "source1:voltage:lev:imm:high", "VOLT:IMM:HIGH"):
        assert made.find(tuple(header.split(":")))[1] == (1,)
    with pytest.raises(ScpiError):
        made.find(("SOUR", "HIGH"))


def test_suffixes_come_in_the_order_of_the_pattern() -> None:
    made = table(":SENSe<1-2>[:LANE<1-3>]:GAIN<0-9>")
    assert made.find(("SENS2", "LANE3", "GAIN0"))[1] == (2, 3, 0)
    assert made.find(("SENS2", "GAIN7"))[1] == (2, 1, 7)
    assert made.find(("SENS", "GAIN"))[1] == (1, 1, 1)


@pytest.mark.parametrize("mnemonics", [("SENS3", "GAIN"), ("SENS0", "GAIN"), ("SENS1", "GAIN1")])
def test_a_suffix_out_of_range_is_an_error(mnemonics: tuple[str, ...]) -> None:
    with pytest.raises(ScpiError) as caught:
        table(":SENSe<1-2>:GAIN").find(mnemonics)
    assert caught.value.number == -114


def test_a_mnemonic_of_thirteen_letters_is_too_long() -> None:
    made = table(":ABCDEFGHIJKL")
    assert made.find(("abcdefghijkl",))[0] == ":ABCDEFGHIJKL"
    with pytest.raises(ScpiError) as caught:
        made.find(("ABCDEFGHIJKLM",))
    assert caught.value.number == -112


def test_state_and_status_cannot_share_a_node() -> None:  # MNE-3
    with pytest.raises(ValueError, match="shares STAT"):
        table(":STATe", ":STATus")


def test_short_forms_follow_the_declaration_and_not_the_rule() -> None:  # MNE-4
    assert table(":TCouple").find(("TC",))[0] == ":TCouple"


@pytest.mark.parametrize("pattern", ["", "VOLT", ":volt", "[:VOLT", ":VOLT]", "[:VOLT]", ":VOLT?"])
def test_faulty_patterns_are_refused(pattern: str) -> None:
    with pytest.raises(ValueError, match=r"pattern|optional"):
        read_pattern(pattern)
