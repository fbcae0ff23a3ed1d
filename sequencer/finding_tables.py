"""What was measured beside a full count, as tables and sentences for people.

Every value stands with its unit and, behind the sign ±, its standard uncertainty.
"""

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from rich.markup import escape
from rich.table import Table

from pulsetally.sequencer.analysis.counting import CountStatistics, full_count
from pulsetally.sequencer.analysis.tuning import TuneStatus
from pulsetally.sequencer.events import FindingKind
from pulsetally.sequencer.progress import pairs_words, printable, show_setting
from pulsetally.sequencer.quantities import show_quantity
from pulsetally.sequencer.results import Finding, ReadResult, RoundResult, RunResult

# C/m2 to uC/cm2, the unit of the trade.
_MICROCOULOMBS = 1e2
_PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "u", -3: "m", 0: "", 3: "k"}
_TUNE_WORDS = {
    TuneStatus.FOUND: "",
    TuneStatus.NOT_BRACKETED: "the wanted count does not lie between the two ends of the range",
    TuneStatus.AT_MOST_REACHED: "the rounds were used up before the count was sure enough",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One finding and the round that it was made in."""

    round: int
    finding: Finding

    @property
    def problem(self) -> str:
        """Return why nothing could be told, or nothing."""
        return str(self.finding.values.get("problem", ""))


def finding_tables(result: RunResult, *, most_rows: int) -> list[Table]:
    """Return a table each of switched charges and of loops, where there are any."""
    tables = []
    if charges := rows_of(result, FindingKind.PUND):
        tables.append(_charge_table(result, charges[-most_rows:], first=charges[0]))
    if loops := rows_of(result, FindingKind.LOOP):
        tables.append(_loop_table(result, loops[-most_rows:]))
    return tables


def finding_sentences(result: RunResult) -> list[str]:
    """Return a sentence for each thing that has no table."""
    return [
        *_contact_sentences(result),
        *_charge_sentences(result),
        *(
            _tune_sentence(each.finding.values, result.units)
            for each in rows_of(result, FindingKind.TUNE)
        ),
        *(_cycling_sentence(each.finding.values) for each in rows_of(result, FindingKind.CYCLING)),
        *_readback_sentences(result),
    ]


def rows_of(result: RunResult, kind: FindingKind) -> list[Row]:
    """Return the findings of one kind, oldest first, without those of spoiled rounds."""
    # What a cycling or a tune came to holds even where its last round was spoiled.
    whole = kind in (FindingKind.CYCLING, FindingKind.TUNE)
    return [
        Row(round=each.round, finding=finding)
        for each in result.rounds
        for finding in each.findings
        if finding.kind == kind and (whole or not each.spoiled)
    ]


def with_uncertainty(value: float, uncertainty: float | None) -> str:
    """Write a value to two digits of its standard uncertainty, and that after it."""
    if uncertainty is None or not 0 < uncertainty < math.inf:
        return f"{value:.4g}"
    places = max(0, 1 - math.floor(math.log10(uncertainty)))
    return f"{value:.{places}f} ± {uncertainty:.{places}f}"


def swept_cells(result: RunResult, settings: dict[str, float]) -> list[str]:
    """Return what was swept, one cell a name; empty where it isn't in force."""
    return [
        show_setting(name, settings[name], result.units) if name in settings else ""
        for name in result.swept
    ]


def swept_names(result: RunResult) -> list[str]:
    """Return the names of what was swept, as headers."""
    return [escape(printable(name)) for name in result.swept]


def remaining_table(result: RunResult) -> Table | None:
    """Return what remained after stated numbers of pulses were stepped, or None."""
    groups: dict[tuple[tuple[str, ...], int], list[ReadResult]] = {}
    for each in result.rounds:
        read = _first_read(each)
        if read is not None and each.preset and read.stepped:
            place = (tuple(swept_cells(result, read.settings)), read.stepped)
            groups.setdefault(place, []).append(read)
    if not groups:
        return None
    table = Table(
        *swept_names(result),
        "stepped",
        "remaining",
        "scatter",
        "rounds",
        title="Remaining after what was stepped, pulses",
    )
    for (cells, stepped), reads in groups.items():
        crossings = [each.crossing for each in reads if each.crossing is not None]
        mean = full_count(crossings)
        table.add_row(*cells, str(stepped), *_mean_cells(reads, mean), str(len(reads)))
    return table


def _mean_cells(reads: Sequence[ReadResult], mean: CountStatistics | None) -> tuple[str, str]:
    if mean is None or mean.rounds < len(reads):
        counts = [each.count for each in reads]
        low, high = min(counts), max(counts)
        # A first pulse that passes leaves between none and one; no crossing, so no mean.
        words = "at most 1" if high == 1 else f"{low} to {high}"
        return (words if all(each.reached for each in reads) else f"> {high}"), ""
    return f"{mean.mean:.2f}", "" if mean.sd is None else f"{mean.sd:.2f}"


def _first_read(each: RoundResult) -> ReadResult | None:
    if each.spoiled or not each.complete or not each.reads:
        return None
    return each.reads[0] if each.reads[0].first else None


# Switched charge and loops.


def _charge_table(result: RunResult, rows: list[Row], *, first: Row) -> Table:
    shift, unit = _scale([_number(each, "switched_coulombs") for each in rows], "C")
    table = Table(
        *_place_names(result),
        f"charge,\n{unit}",
        "2 P_r,\nuC/cm2",
        f"up less down,\n{unit}",
        "share of\nthe first",
        title="Switched charge",
    )
    begin = _number(first, "switched_coulombs")
    for each in rows:
        cells = _place_cells(result, each)
        charge = _number(each, "switched_coulombs")
        if charge is None:
            table.add_row(*cells, _untold(each))
            continue
        sure = _number(each, "uncertainty_coulombs")
        density = (_number(each, "switched_polarization") or 0.0) * _MICROCOULOMBS
        table.add_row(
            *cells,
            _scaled(charge, sure, shift),
            f"{density:.4g}",
            # Of the difference it is twice that of the mean.
            _scaled(_number(each, "asymmetry_coulombs") or 0.0, sure and 2 * sure, shift),
            f"{charge / begin:.1%}" if begin else "",
        )
    return table


def _charge_sentences(result: RunResult) -> list[str]:
    """Return mean and scatter, where the same was measured again and again."""
    charges = [
        charge
        for each in rows_of(result, FindingKind.PUND)
        if (charge := _number(each, "switched_coulombs")) is not None
    ]
    if result.swept or len(charges) < 2:
        return []
    mean = math.fsum(charges) / len(charges)
    sd = math.sqrt(math.fsum((each - mean) ** 2 for each in charges) / (len(charges) - 1))
    return [
        f"Switched charge: mean {show_quantity(mean, 'C')} of {len(charges)}, scatter"
        f" {show_quantity(sd, 'C', 2)} (standard deviation of one)."
    ]


def _loop_table(result: RunResult, rows: list[Row]) -> Table:
    table = Table(
        *_place_names(result),
        "P_r,\nuC/cm2",
        "V_c up,\nV",
        "V_c\ndown, V",
        "imprint,\nV",
        "each\n±, V",
        "leakage,\nnS",
        title="Loops",
    )
    for each in rows:
        cells = _place_cells(result, each)
        remanent = _number(each, "remanent_polarization")
        if remanent is None:
            table.add_row(*cells, _untold(each))
            continue
        coulombs = _number(each, "remanent_coulombs")
        sure = _number(each, "remanent_uncertainty_coulombs")
        share = None if not coulombs or sure is None else abs(sure / coulombs)
        volts = _number(each, "volts_uncertainty")
        table.add_row(
            *cells,
            with_uncertainty(
                remanent * _MICROCOULOMBS, share and share * abs(remanent) * _MICROCOULOMBS
            ),
            *(
                "" if (value := _number(each, name)) is None else f"{value:.3f}"
                for name in ("coercive_up_volts", "coercive_down_volts", "imprint_volts")
            ),
            "" if volts is None else f"{volts:.2g}",
            _leakage(each),
        )
    return table


def _leakage(row: Row) -> str:
    value = _number(row, "leakage_siemens")
    sure = _number(row, "leakage_uncertainty_siemens")
    if value is None:
        return ""
    if sure is not None and abs(value) < 2 * sure:
        # Nothing was found, and that is how well one would have been seen.
        return f"< {2e9 * sure:.2g}"
    return f"{value * 1e9:.3g}"


def _place_names(result: RunResult) -> list[str]:
    """Return what tells rows apart: what was swept, or else the round."""
    return swept_names(result) or ["round"]


def _place_cells(result: RunResult, row: Row) -> list[str]:
    return swept_cells(result, row.finding.settings) or [str(row.round)]


def _untold(row: Row) -> str:
    return escape(printable(f"can't be told: {row.problem}"))


def _scale(values: Sequence[float | None], unit: str) -> tuple[float, str]:
    """Return by what to multiply values for a column, and the unit with its prefix."""
    most = max((abs(each) for each in values if each), default=1.0)
    power = 3 * math.floor(math.log10(most) / 3)
    power = min(max(power, min(_PREFIXES)), max(_PREFIXES))
    return 10.0**-power, _PREFIXES[power] + unit


def _scaled(value: float, uncertainty: float | None, factor: float) -> str:
    return with_uncertainty(value * factor, uncertainty and uncertainty * factor)


def _number(row: Row, name: str) -> float | None:
    value: Any = row.finding.values.get(name)
    return float(value) if isinstance(value, int | float) else None


# Sentences.


def _contact_sentences(result: RunResult) -> list[str]:
    verdicts = Counter(str(one["verdict"]) for each in result.rounds for one in each.contacts)
    if not verdicts:
        return []
    told = ", ".join(
        f"{printable(word)} {'once' if times == 1 else f'{times} times'}"
        for word, times in verdicts.items()
    )
    return [f"Contact: {told}."]


def _tune_sentence(values: dict[str, Any], units: dict[str, str]) -> str:
    setting, wanted = str(values["setting"]), float(values["wanted_count"])
    rounds, status = int(values["rounds"]), TuneStatus(values["status"])
    begin = f"Tuned {setting} to a full count of {wanted:g}"
    reason = _TUNE_WORDS[status]
    if values["value"] is None:
        return f"{begin}: no value was found in {rounds} rounds; {reason}."
    value = show_setting(setting, float(values["value"]), units)
    if values["uncertainty"] is not None:
        sure = float(f"{float(values['uncertainty']):.2g}")
        value += f" ± {show_setting(setting, sure, units)}"
    told = f"{begin}: {value}, found in {rounds} rounds"
    if values["count"] is not None:
        told += f"; the full count there is about {float(values['count']):.2f}"
    return f"{told}. Not sure: {reason}." if reason else f"{told}."


def _cycling_sentence(values: dict[str, Any]) -> str:
    planned = float(values["planned_pairs"])
    return printable(
        f"Cycling ended after {pairs_words(values)} of {planned:,.0f} pairs: {values['ended']}."
    )


def _readback_sentences(result: RunResult) -> list[str]:
    told = []
    for each in result.rounds:
        read = _first_read(each)
        if read is None or each.preset:
            continue
        where = f"Round {each.round}, read without a preset"
        if not read.reached:
            told.append(f"{where}: over {read.count} pulses remained.")
        elif read.crossing is None:
            told.append(f"{where}: at most 1 pulse remained.")
        else:
            told.append(f"{where}: {read.count} pulses remained, crossing {read.crossing:.2f}.")
    return told
