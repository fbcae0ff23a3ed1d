"""The bench file, and what the cell sees for a given generator setting.

The voltage that matters is the one across the cell. Between it and the number on the
generator's panel lie the load setting, the source resistance, the series resistor and diode,
the clamp and the probe; this module walks that way in both directions.
"""

import math
from dataclasses import dataclass, replace
from pathlib import Path as FilePath
from typing import Annotated, Any

from pydantic import (
    BeforeValidator,
    Field,
    GetCoreSchemaHandler,
    GetJsonSchemaHandler,
    WithJsonSchema,
)
from pydantic_core import core_schema

from pulsetally.drivers.dialect import Dialect, GeneratorDialect, OscilloscopeDialect
from pulsetally.sequencer.dialects import DialectError, find_dialect, shipped_dialects
from pulsetally.sequencer.errors import BenchError, Mistake
from pulsetally.sequencer.models import Model, fault, field_names, quantity, validate
from pulsetally.sequencer.quantities import (
    AREA,
    CAPACITANCE,
    CURRENT,
    LENGTH,
    NUMBER,
    RESISTANCE,
    VOLTAGE,
    QuantityError,
    parse_quantity,
    show_quantity,
)
from pulsetally.sequencer.yaml_places import Path, PlacedData, load_yaml, nearest, read_text

_FIRST_DIALECT = "scpi99"
VACUUM_PERMITTIVITY = 8.8541878128e-12
# Boltzmann constant over elementary charge, exact in the SI of 2019, at 27 degrees Celsius.
_THERMAL_VOLTS = 1.380649e-23 / 1.602176634e-19 * 300.15

# A clamp's voltage rises with its current: beyond this share of its breakdown, and these volts, it
# does so only with more than a series resistance of kiloohms lets through (invented, ample).
_CLAMP_RISE = (1.1, 0.3)


def _load(written: object) -> object:
    if written == "high-z":
        return math.inf
    try:
        ohms = parse_quantity(written, RESISTANCE)
    except QuantityError as error:
        raise fault(
            f"{written!r} is not a load: {error.problem}", "write 'high-z', or '50 ohm'"
        ) from error
    if ohms <= 0:
        raise fault("a load is above 0 ohm", "write 'high-z', or '50 ohm'")
    return ohms


def _dialect(written: object) -> object:
    if not isinstance(written, str) or not written.strip():
        raise fault(
            f"{written!r} names no dialect", f"write one of {', '.join(shipped_dialects())}"
        )
    return written


def _none_word(written: object) -> object:
    return None if written == "none" else written


class _OrNone:
    """Read the word none as leaving a group out."""

    def __get_pydantic_core_schema__(
        self, source: Any, handler: GetCoreSchemaHandler
    ) -> core_schema.CoreSchema:
        return core_schema.no_info_before_validator_function(_none_word, handler(source))

    def __get_pydantic_json_schema__(
        self, schema: core_schema.CoreSchema, handler: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        return {"anyOf": [handler(schema), {"const": "none"}]}


def _address(written: object) -> object:
    if not isinstance(written, str) or "::" not in written:
        raise fault(
            f"{str(written)[:60]!r} is not a VISA address",
            "write one such as TCPIP::192.0.2.10::5025::SOCKET",
        )
    return written


_ADDRESS_SCHEMA = {
    "type": "string",
    "pattern": "::",
    "description": "a VISA resource name",
    "examples": ["TCPIP::192.0.2.10::5025::SOCKET"],
}
_LOAD_SCHEMA = {"anyOf": [{"const": "high-z"}, quantity(RESISTANCE, above=0).schema()]}
_TEXT_SCHEMA = {"type": "string", "pattern": r"\S"}
Address = Annotated[str, BeforeValidator(_address), WithJsonSchema(_ADDRESS_SCHEMA)]
DialectName = Annotated[
    str,
    BeforeValidator(_dialect),
    WithJsonSchema(_TEXT_SCHEMA | {"examples": shipped_dialects()}),
]


def _channel() -> Any:
    return quantity(NUMBER, least=1, most=8, whole=True)


class GeneratorSection(Model):
    """Where the function generator is and what it is told about its load.

    address: where it answers. dialect: how it is spoken to; one that ships, or a file. channel:
    its output. load: what it is told about its load; high-z unless it says otherwise.
    """

    address: Address
    dialect: DialectName = _FIRST_DIALECT
    channel: Annotated[float, _channel()] = 1.0
    load: Annotated[float, BeforeValidator(_load), WithJsonSchema(_LOAD_SCHEMA)] = math.inf


class OscilloscopeSection(Model):
    """Where the oscilloscope is and what its channels watch.

    address: where it answers. dialect: how it is spoken to; one that ships, or a file.
    source_channel: watches the generator's terminal. node_channel: watches the cell.
    """

    address: Address
    dialect: DialectName = _FIRST_DIALECT
    source_channel: Annotated[float, Field(alias="source channel"), _channel()] = 1.0
    node_channel: Annotated[float, Field(alias="node channel"), _channel()] = 2.0


class DiodeSection(Model):
    """A series diode after Shockley.

    saturation_current: amperes. emission: the coefficient beside the thermal voltage.
    """

    saturation_current: Annotated[
        float, Field(alias="saturation current"), quantity(CURRENT, above=0)
    ]
    emission: Annotated[float, quantity(NUMBER, least=0.5, most=5)] = 1.0


class ClampSection(Model):
    """A clamp across the cell that conducts beyond its breakdown voltage.

    breakdown: volts, of both polarities.
    """

    breakdown: Annotated[float, quantity(VOLTAGE, above=0)]


class ProbeSection(Model):
    """What the oscilloscope's probe puts across the cell.

    resistance: ohms. capacitance: farads.
    """

    resistance: Annotated[float, quantity(RESISTANCE, above=0)] = 10e6
    capacitance: Annotated[float, quantity(CAPACITANCE, least=0)] = 12e-12


class WiringSection(Model):
    """What lies between the generator and the cell.

    source_resistance: of the generator's output, in ohms. series_resistance: of the resistor
    that charges the cell, in ohms. series_diode: in series with it, or none. clamp: across the
    cell, or none. probe: across the cell.
    """

    source_resistance: Annotated[
        float, Field(alias="source resistance"), quantity(RESISTANCE, least=0)
    ] = 50.0
    series_resistance: Annotated[
        float, Field(alias="series resistance"), quantity(RESISTANCE, above=0)
    ]
    series_diode: Annotated[DiodeSection | None, Field(alias="series diode"), _OrNone()] = None
    clamp: Annotated[ClampSection | None, _OrNone()] = None
    probe: Annotated[ProbeSection, Field(default_factory=ProbeSection)]


class LimitsSection(Model):
    """Voltages that nothing may pass, whatever a recipe says.

    source: at the generator's terminal, in volts. node: across the cell, in volts.
    """

    source: Annotated[float, quantity(VOLTAGE, above=0)]
    node: Annotated[float, quantity(VOLTAGE, above=0)]


class CellSection(Model):
    """The cell's geometry.

    name: what a person calls it. area: square metres. thickness: of the film, in metres.
    relative_permittivity: of the film, from which a contact's time constant is expected.
    """

    name: str = "unnamed"
    area: Annotated[float, quantity(AREA, above=0)]
    thickness: Annotated[float, quantity(LENGTH, above=0)]
    relative_permittivity: Annotated[
        float | None, Field(alias="relative permittivity"), quantity(NUMBER, least=1, most=1e5)
    ] = None


def _title(written: object) -> object:
    if not isinstance(written, str) or not written.strip():
        raise fault("a bench has a name", "write 'bench: what a person calls it'")
    return written


class BenchModel(Model):
    """A whole bench file: instruments, the wiring between them, limits and the cell.

    bench: what a person calls it. generator, oscilloscope: the instrument. clock: the time of a
    simulated bench, which no real one has. wiring: what lies between generator and cell.
    limits: voltages that bind every recipe. cell: its geometry.
    """

    bench: Annotated[str, BeforeValidator(_title), WithJsonSchema(_TEXT_SCHEMA)]
    generator: GeneratorSection
    oscilloscope: OscilloscopeSection
    clock: Address | None = None
    wiring: WiringSection
    limits: LimitsSection
    cell: CellSection


_SECTIONS: dict[str, type[Model]] = {
    "generator": GeneratorSection,
    "oscilloscope": OscilloscopeSection,
    "wiring": WiringSection,
    "limits": LimitsSection,
    "cell": CellSection,
    "series diode": DiodeSection,
    "clamp": ClampSection,
    "probe": ProbeSection,
}


class CellVoltsUnreachable(ValueError):
    """No setting of the generator puts this voltage across the cell."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Bench:
    """A bench file that was read without a mistake.

    file: its name in messages. text: as written.
    """

    file: str
    text: str
    model: BenchModel
    generator_dialect: GeneratorDialect
    oscilloscope_dialect: OscilloscopeDialect

    def with_addresses(self, *, generator: str, oscilloscope: str, clock: str | None) -> "Bench":
        """Return the same bench with its instruments at other addresses."""
        model = self.model
        return replace(
            self,
            model=model.model_copy(
                update={
                    "generator": model.generator.model_copy(update={"address": generator}),
                    "oscilloscope": model.oscilloscope.model_copy(update={"address": oscilloscope}),
                    "clock": clock,
                }
            ),
        )

    def terminal_volts(self, panel_volts: float) -> float:
        """Return the terminal's voltage with nothing drawn, for a panel setting, in volts.

        A generator told 50 ohm shows what it would deliver into 50 ohm; into a high resistance
        it delivers twice that.
        """
        load, source = self.model.generator.load, self.model.wiring.source_resistance
        return panel_volts if math.isinf(load) else panel_volts * (1 + source / load)

    def panel_volts(self, terminal_volts: float) -> float:
        """Return the panel setting for a terminal voltage with nothing drawn, in volts."""
        return terminal_volts / self.terminal_volts(1.0)

    def cell_volts(self, panel_volts: float) -> float:
        """Return the voltage across the cell long after its switching ended, in volts.

        The current that remains flows through source, series resistor and diode into the
        probe; the clamp cuts what is beyond its breakdown.
        """
        wiring = self.model.wiring
        emf = self.terminal_volts(panel_volts)
        loop = wiring.source_resistance + wiring.series_resistance + wiring.probe.resistance
        if wiring.series_diode is None:
            current = emf / loop
        else:
            current = _diode_current(emf, loop, wiring.series_diode)
        volts = current * wiring.probe.resistance
        if wiring.clamp is not None:
            volts = math.copysign(min(abs(volts), wiring.clamp.breakdown), volts)
        return volts

    def panel_volts_for_cell(self, cell_volts: float) -> float:
        """Return the panel setting that puts this voltage across the cell, in volts.

        It holds long after the cell's switching ended, as cell_volts does. Raises
        CellVoltsUnreachable where clamp or diode don't let it through.
        """
        wiring = self.model.wiring
        if wiring.clamp is not None and abs(cell_volts) >= wiring.clamp.breakdown:
            raise CellVoltsUnreachable(
                f"the clamp conducts at {show_quantity(wiring.clamp.breakdown, 'V')}"
            )
        current = cell_volts / wiring.probe.resistance
        loop = wiring.source_resistance + wiring.series_resistance
        emf = cell_volts + loop * current
        if wiring.series_diode is not None:
            share = current / wiring.series_diode.saturation_current
            if share <= -1:
                raise CellVoltsUnreachable("the series diode blocks that polarity")
            emf += wiring.series_diode.emission * _THERMAL_VOLTS * math.log1p(share)
        return self.panel_volts(emf)

    def probe_tau(self) -> float:
        """Return the node's time constant without a cell, in seconds."""
        return self._tau(self.model.wiring.probe.capacitance)

    def cell_tau(self) -> float | None:
        """Return the node's time constant with the cell, in seconds; None if it isn't known."""
        cell = self.model.cell
        if cell.relative_permittivity is None:
            return None
        farads = VACUUM_PERMITTIVITY * cell.relative_permittivity * cell.area / cell.thickness
        return self._tau(farads + self.model.wiring.probe.capacitance)

    def _tau(self, farads: float) -> float:
        wiring = self.model.wiring
        loop = wiring.source_resistance + wiring.series_resistance
        # Seen from the node, the probe lies across the loop.
        return farads * loop * wiring.probe.resistance / (loop + wiring.probe.resistance)

    def notes(self) -> list[str]:
        """Return what a person should know about this bench before any recipe."""
        load = self.model.generator.load
        if math.isinf(load):
            return []
        return [
            f"the generator is told a load of {load:g} ohm; into the high resistance of this wiring"
            f" it delivers {self.terminal_volts(1.0):.3g} times what its panel shows"
        ]

    def panel_limit(self) -> float:
        """Return the largest panel voltage, either sign, that keeps both limits, in volts."""
        limits, wiring = self.model.limits, self.model.wiring
        source = self.panel_volts(limits.source)
        if wiring.clamp is not None:
            share, volts = _CLAMP_RISE
            if share * wiring.clamp.breakdown + volts <= limits.node:
                return source
        # Without the diode's drop: the limit must hold for the side on which it conducts best.
        loop = wiring.source_resistance + wiring.series_resistance + wiring.probe.resistance
        return min(source, self.panel_volts(limits.node * loop / wiring.probe.resistance))


def _diode_current(emf: float, ohms: float, diode: DiodeSection) -> float:
    """Return the current through a Shockley diode in series with a resistance, in amperes."""
    from scipy.special import lambertw, wrightomega

    saturation = diode.saturation_current
    volts = diode.emission * _THERMAL_VOLTS
    argument = (emf + saturation * ohms) / volts + math.log(saturation * ohms / volts)
    # The closed form is Lambert's W of exp(argument); the omega function is the same
    # without the exponential that overflows.
    root = wrightomega(argument) if argument > 0 else lambertw(math.exp(argument)).real
    return float(volts / ohms * root - saturation)


def is_bench_file(path: FilePath) -> bool:
    """Say whether a file looks like a bench file rather than a recipe."""
    text, _ = read_text(path, "file", "name a file")
    data = load_yaml(text, str(path)).data
    return isinstance(data, dict) and "bench" in data and "recipe" not in data


def load_bench(path: FilePath) -> Bench:
    """Read a bench file. Raises BenchError with every mistake."""
    text, mistakes = read_text(path, "bench file", "name a bench file; README.md shows one")
    if mistakes:
        raise BenchError(mistakes)
    return parse_bench(text, file=str(path), folder=path.parent)


def parse_bench(text: str, *, file: str, folder: FilePath | None = None) -> Bench:
    """Read a bench file's text. Raises BenchError with every mistake.

    folder: where a dialect that is named by its path is looked for.
    """
    placed = load_yaml(text, file)
    if placed.mistakes:
        raise BenchError(placed.mistakes)
    if isinstance(placed.data, dict) and "recipe" in placed.data and "bench" not in placed.data:
        problem, remedy = "this is a recipe, not a bench file", "name a bench file here"
        raise BenchError([placed.mistake((), problem, remedy)])
    model, mistakes = validate(BenchModel, placed, known=_known)
    spoken, more = _dialects(placed, folder or FilePath())
    mistakes += more
    if model and model.oscilloscope.source_channel == model.oscilloscope.node_channel:
        problem = "both channels are the same; one watches the terminal, one the cell"
        remedy = "write the channel that watches the cell"
        mistakes.append(placed.mistake(("oscilloscope", "node channel"), problem, remedy))
    generator = spoken["generator"].generator if "generator" in spoken else None
    oscilloscope = spoken["oscilloscope"].oscilloscope if "oscilloscope" in spoken else None
    if mistakes or generator is None or oscilloscope is None:
        raise BenchError(sorted(mistakes, key=lambda each: (each.file, each.line, each.column)))
    return Bench(
        file=file,
        text=text,
        model=model,
        generator_dialect=generator,
        oscilloscope_dialect=oscilloscope,
    )


def _dialects(placed: PlacedData, base: FilePath) -> tuple[dict[str, Dialect], list[Mistake]]:
    """Find the dialects that a bench file names, whatever else is wrong with it."""
    spoken: dict[str, Dialect] = {}
    mistakes: list[Mistake] = []
    for section in ("generator", "oscilloscope"):
        group = placed.data.get(section) if isinstance(placed.data, dict) else None
        name = group.get("dialect", _FIRST_DIALECT) if isinstance(group, dict) else None
        if not isinstance(name, str) or not name.strip():
            continue  # the model has told that
        path = (section, "dialect")
        if name not in shipped_dialects() and not (base / name).is_file():
            problem = f"there is no dialect {name!r}, shipped or as a file"
            remedy = f"{nearest(name, shipped_dialects())}, or the path of your own"
            mistakes.append(placed.mistake(path, problem, remedy))
            continue
        try:
            spoken[section] = find_dialect(name, base)
        except DialectError as error:
            mistakes += [each for each in error.mistakes if each not in mistakes]
            continue
        if getattr(spoken[section], section) is None:
            problem = f"the dialect {name!r} doesn't describe this instrument"
            remedy = f"name a dialect with a section {section!r}"
            mistakes.append(placed.mistake(path, problem, remedy))
    return spoken, mistakes


def _known(path: Path) -> list[str]:
    return field_names(_SECTIONS[str(path[-1])]) if path else field_names(BenchModel)
