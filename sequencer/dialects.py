"""Read dialect files: YAML -> the drivers' dialects, with every mistake placed.

A dialect describes instruments that nobody here has seen, and is written by the person who has
one; its mistakes are told like a recipe's.
"""

import re
from functools import cache
from importlib.resources import files
from pathlib import Path as FilePath
from typing import Annotated, Any

from pydantic import BeforeValidator, Field, model_validator

from pulsetally.drivers import dialect as drivers
from pulsetally.drivers.numbers import NumberError, parse_number
from pulsetally.sequencer.errors import InputError, Mistake
from pulsetally.sequencer.models import Model, fault, field_names, kind_of, quantity, validate
from pulsetally.sequencer.quantities import NUMBER, TIME, parse_quantity
from pulsetally.sequencer.yaml_places import Path, PlacedData, load_yaml, nearest, read_text

_ENDINGS = {"line feed": "\n", "carriage return": "\r", "carriage return and line feed": "\r\n"}
_NAME = re.compile(r"[a-z][a-z0-9_-]*")


class DialectError(InputError):
    """A dialect file can't be used as written."""


def _template(*, value: bool) -> Any:
    """Return a validator for a command; value: it must have a blank for the value."""

    def read(written: object) -> object:
        if not isinstance(written, str) or not written.strip():
            raise fault("a command is text", "write it between quotes")
        if not (written.isascii() and written.isprintable()):
            raise fault("a command is plain, printable ASCII", "leave out line ends and accents")
        extra = drivers.blanks(written) - {"channel", "value"}
        if extra or written.count("{") != written.count("}"):
            blank = f"{{{min(extra)}}}" if extra else "a brace"
            raise fault(f"{blank} can't be filled in", "use only {channel} and {value}")
        if value != ("{value}" in written):
            if value:
                raise fault("the command has no place for its value", "write {value} into it")
            raise fault("there is no value to fill in here", "leave {value} out")
        return written

    return BeforeValidator(read)


def _one_of(words: tuple[str, ...]) -> Any:
    def read(written: object) -> object:
        if written not in words:
            raise fault(f"{written!r} is not known here", nearest(str(written), [*words]))
        return written

    return BeforeValidator(read)


def _share(written: object) -> object:
    if isinstance(written, str) and written.strip().endswith("%"):
        try:
            return parse_number(written.strip().removesuffix("%")) / 100
        except NumberError as error:
            raise fault(str(error), "write a share such as '0.2 %'") from error
    raise fault(f"{written!r} is not a share", "write one such as '0.2 %'")


def _any_quantity(written: object) -> object:
    kind = kind_of(written)
    if kind is None:
        raise fault(f"{written!r} is not a quantity", "write one such as '2 mV'")
    return parse_quantity(written, kind)


def _words(written: object) -> object:
    if not isinstance(written, dict):
        raise fault("words are pairs", "write 'words: {on: [ON, 1], off: [OFF, 0]}'")
    found = {}
    for ours, theirs in written.items():
        listed = theirs if isinstance(theirs, list) else [theirs]
        if not listed or not all(
            isinstance(each, (str, int, float)) and re.fullmatch(r"[\w.+-]+", str(each))
            for each in listed
        ):
            raise fault(f"{ours!r} has no words of its own", "write letters and digits only")
        # YAML takes ON and OFF for words here, since they are only true and false in YAML 1.1.
        found[ours] = tuple(str(each) for each in listed)
    return found


Query = Annotated[str, _template(value=False)]
Commands = list[Query]
Words = Annotated[dict[str, tuple[str, ...]], BeforeValidator(_words)]


class LineSection(Model):
    """How messages travel."""

    ending: Annotated[str, _one_of(tuple(_ENDINGS))] = "line feed"
    gap: Annotated[float, quantity(TIME, least=0, most=10)] = 0.0
    longest_message: Annotated[
        float, Field(alias="longest message"), quantity(NUMBER, least=40, whole=True)
    ] = 4096.0
    numbers: Annotated[str, _one_of(("short", "scientific"))] = "short"
    digits: Annotated[float, quantity(NUMBER, least=4, most=16, whole=True)] = 9.0
    echoed_headers: Annotated[bool, Field(alias="echoed headers")] = False

    def build(self) -> drivers.Line:
        """Return it as the drivers take it."""
        return drivers.Line(
            ending=_ENDINGS[self.ending],
            gap_seconds=self.gap,
            longest=int(self.longest_message),
            number=self.numbers,
            digits=int(self.digits),
            echoed_headers=self.echoed_headers,
        )


class SettingSection(Model):
    """One setting of an instrument."""

    send: Annotated[str, _template(value=True)]
    ask: Query | None = None
    words: Annotated[Words, Field(default_factory=dict)]
    within: Annotated[float, BeforeValidator(_share)] = 0.0
    at_least: Annotated[float, Field(alias="at least"), BeforeValidator(_any_quantity)] = 0.0
    larger_is_fine: Annotated[bool, Field(alias="larger is fine")] = False
    steps: Annotated[str, _one_of(("any", "1-2-5"))] = "any"

    def build(self, name: str) -> drivers.Setting:
        """Return it as the drivers take it."""
        return drivers.Setting(
            name=name,
            send=self.send,
            ask=self.ask or "",
            words=self.words,
            share=self.within,
            least=self.at_least,
            larger_is_fine=self.larger_is_fine,
            stepped=self.steps == "1-2-5",
        )


class PredicateSection(Model):
    """A question whose answer means yes."""

    ask: Query
    words: list[str | float] = Field(default_factory=list)
    all_of_bits: Annotated[
        float, Field(alias="all of bits"), quantity(NUMBER, least=0, whole=True)
    ] = 0.0
    none_of_bits: Annotated[
        float, Field(alias="none of bits"), quantity(NUMBER, least=0, whole=True)
    ] = 0.0

    poll_every: Annotated[float, Field(alias="poll every"), quantity(TIME, above=0, most=10)] = 2e-3
    time_limit: Annotated[float, Field(alias="time limit"), quantity(TIME, above=0, most=3600)] = (
        5.0
    )

    @model_validator(mode="after")
    def _asks_for_something(self) -> "PredicateSection":
        if bool(self.words) == bool(self.all_of_bits or self.none_of_bits):
            raise fault(
                "a question is answered by words or by bits", "write 'words: [...]', or bits"
            )
        return self

    def build(self) -> drivers.Predicate:
        """Return it as the drivers take it."""
        return drivers.Predicate(
            ask=self.ask,
            words=tuple(f"{each:g}" if isinstance(each, float) else each for each in self.words),
            bits_set=int(self.all_of_bits),
            bits_clear=int(self.none_of_bits),
            poll_seconds=self.poll_every,
            limit_seconds=self.time_limit,
        )


def _fields(written: object) -> object:
    if not isinstance(written, dict) or not written:
        raise fault("it names no field", "write 'fields: {step: 5}'")
    for name in written:
        if name not in drivers.PREAMBLE_FIELDS:
            raise fault(
                f"{name!r} is no field of a waveform",
                nearest(str(name), [*drivers.PREAMBLE_FIELDS]),
            )
    return {name: str(place) for name, place in written.items()}


class PreambleSection(Model):
    """One query that tells about a waveform."""

    ask: Query
    form: Annotated[str, _one_of(("number", "list", "interchange"))]
    fields_: Annotated[dict[str, str], Field(alias="fields"), BeforeValidator(_fields)]

    @model_validator(mode="after")
    def _places_fit(self) -> "PreambleSection":
        for name, place in self.fields_.items():
            if self.form == "list" and not (place.isdigit() and int(place) >= 1):
                raise fault(f"{place!r} is no position for {name}", "count the fields from 1")
            if self.form == "interchange" and not re.fullmatch(r"[A-Z] [A-Za-z]{4,}", place):
                raise fault(f"{place!r} is no place for {name}", "write axis and keyword: X SCALe")
        return self


class WaveformSection(Model):
    """How a record is fetched."""

    select: Commands = Field(default_factory=list)
    preamble: Annotated[list[PreambleSection], Field(min_length=1)]
    data: Query
    samples: Annotated[str, _one_of(tuple(drivers.SAMPLE_TYPES))]
    line_end_after_block: Annotated[bool, Field(alias="line end after block")] = True
    clips_at: Annotated[list[int] | None, Field(alias="clips at", min_length=2, max_length=2)] = (
        None
    )

    @model_validator(mode="after")
    def _tells_enough(self) -> "WaveformSection":
        told = {name for each in self.preamble for name in each.fields_}
        for name in ("points", "step", "first", "gain", "zero"):
            if name not in told:
                raise fault(f"no preamble query tells {name!r}", "add it to a query's fields")
        return self

    def build(self) -> drivers.WaveformForm:
        """Return it as the drivers take it."""
        return drivers.WaveformForm(
            select=tuple(self.select),
            preamble=tuple(
                drivers.PreambleQuery(ask=each.ask, form=each.form, fields=each.fields_)
                for each in self.preamble
            ),
            data=self.data,
            samples=self.samples,
            line_end_after_block=self.line_end_after_block,
            clips_at=(self.clips_at[0], self.clips_at[1]) if self.clips_at else None,
        )


class _SpeechSection(Model):
    line: LineSection = Field(default_factory=LineSection)
    reset: Commands = Field(default_factory=lambda: ["*RST;*CLS"])
    errors: Query | None = None
    prepare: Commands = Field(default_factory=list)
    abort: Commands
    settings: dict[str, SettingSection]

    def shared(self) -> dict[str, Any]:
        """Return what both instruments have, as the drivers take it."""
        return {
            "line": self.line.build(),
            "reset": tuple(self.reset),
            "error_query": self.errors or "",
            "prepare": tuple(self.prepare),
            "settings": tuple(each.build(name) for name, each in self.settings.items()),
            "abort": tuple(self.abort),
        }


def _needs(settings: dict[str, SettingSection], *choices: str) -> None:
    """Raise unless each choice, such as 'high and low | amplitude and offset', is met."""
    for choice in choices:
        ways = [way.strip().split(" and ") for way in choice.split("|")]
        if not any(all(name in settings for name in way) for way in ways):
            wanted = " or ".join(" and ".join(repr(name) for name in way) for way in ways)
            raise fault(f"the settings lack {wanted}", "add how it is set")


class GeneratorSection(_SpeechSection):
    """How a function generator is spoken to."""

    output: SettingSection
    output_settles_in: Annotated[
        float, Field(alias="output settles in"), quantity(TIME, least=0, most=10)
    ] = 0.05
    load: SettingSection | None = None
    fire: Annotated[Commands, Field(min_length=1)]
    idle: PredicateSection | None = None
    sending: PredicateSection | None = None
    fixed_edge: Annotated[float | None, Field(alias="fixed edge"), quantity(TIME, above=0)] = None
    most_pulses_a_trigger: Annotated[
        float,
        Field(alias="most pulses a trigger"),
        quantity(NUMBER, least=1, most=1e12, whole=True),
    ] = 1_000_000.0

    @model_validator(mode="after")
    def _can_make_pulses(self) -> "GeneratorSection":
        _needs(self.settings, "high and low | amplitude and offset", "width", "period | frequency")
        if set(self.output.words) < {"on", "off"} or not self.output.ask:
            raise fault(
                "the output must be switched and read back",
                "write 'ask' and 'words: {on: [ON, 1], off: [OFF, 0]}' for it",
            )
        if self.load is not None and "high-z" not in self.load.words:
            raise fault("the load has no word for high-z", "add 'words: {high-z: [INFinity]}'")
        return self

    def build(self) -> drivers.GeneratorDialect:
        """Return it as the drivers take it."""
        return drivers.GeneratorDialect(
            **self.shared(),
            output=self.output.build("output"),
            load=self.load.build("load") if self.load else None,
            fire=tuple(self.fire),
            idle=self.idle.build() if self.idle else None,
            sending=self.sending.build() if self.sending else None,
            settle_seconds=self.output_settles_in,
            fixed_edge=self.fixed_edge,
            most_count=int(self.most_pulses_a_trigger),
        )


class OscilloscopeSection(_SpeechSection):
    """How an oscilloscope is spoken to."""

    divisions: Annotated[list[int], Field(min_length=2, max_length=2)] = Field(
        default_factory=lambda: [8, 10]
    )
    arm: Annotated[Commands, Field(min_length=1)]
    armed: PredicateSection
    done: PredicateSection
    force: Annotated[Commands, Field(alias="force trigger")] = Field(default_factory=list)
    waveform: WaveformSection
    shortest_interval: Annotated[
        float | None, Field(alias="shortest interval"), quantity(TIME, above=0)
    ] = None
    most_points: Annotated[
        float | None, Field(alias="most points"), quantity(NUMBER, least=100, whole=True)
    ] = None

    @model_validator(mode="after")
    def _can_take_records(self) -> "OscilloscopeSection":
        _needs(
            self.settings,
            "span | volts per division",
            "points",
            "sample interval | sample rate | window | time per division",
            "share before trigger | delay to start | delay to centre",
            "trigger source",
            "trigger level",
            "trigger slope",
        )
        return self

    def build(self) -> drivers.OscilloscopeDialect:
        """Return it as the drivers take it."""
        return drivers.OscilloscopeDialect(
            **self.shared(),
            divisions=(self.divisions[0], self.divisions[1]),
            arm=tuple(self.arm),
            armed=self.armed.build(),
            done=self.done.build(),
            force=tuple(self.force),
            waveform=self.waveform.build(),
            shortest_interval=self.shortest_interval,
            most_points=None if self.most_points is None else int(self.most_points),
        )


def _dialect_name(written: object) -> object:
    if not isinstance(written, str) or not _NAME.fullmatch(written):
        raise fault("a dialect has a name", "write small letters and digits: 'dialect: mine'")
    return written


class DialectModel(Model):
    """A whole dialect file; either instrument may be left out."""

    dialect: Annotated[str, BeforeValidator(_dialect_name)]
    generator: GeneratorSection | None = None
    oscilloscope: OscilloscopeSection | None = None


def shipped_dialects() -> list[str]:
    """Return the names of the dialects that ship with the program."""
    names = (each.name for each in files("pulsetally.drivers").iterdir())
    return sorted(name.removesuffix(".yaml") for name in names if name.endswith(".yaml"))


def find_dialect(written: str, folder: FilePath) -> drivers.Dialect:
    """Find a dialect by a shipped name, or by a path from a folder. Raises DialectError."""
    if written in shipped_dialects():
        return _shipped(written)
    path = folder / written
    known = ", ".join(shipped_dialects())
    text, mistakes = read_text(path, "dialect", f"write one of {known}, or a file's path")
    if mistakes:
        raise DialectError(mistakes)
    return parse_dialect(text, file=str(path))


# Both instruments of a bench mostly speak one dialect, and reading YAML takes a while.
@cache
def _shipped(name: str) -> drivers.Dialect:
    file = f"{name}.yaml"
    text = (files("pulsetally.drivers") / file).read_text(encoding="utf-8")
    return parse_dialect(text, file=file)


def parse_dialect(text: str, *, file: str) -> drivers.Dialect:
    """Read a dialect's text. Raises DialectError with every mistake."""
    placed = load_yaml(text, file)
    if placed.mistakes:
        raise DialectError(placed.mistakes)
    model, mistakes = validate(DialectModel, placed, known=_known)
    mistakes += _check_settings(placed)
    if mistakes:
        raise DialectError(sorted(mistakes, key=lambda each: (each.line, each.column)))
    return drivers.Dialect(
        name=model.dialect,
        generator=model.generator.build() if model.generator else None,
        oscilloscope=model.oscilloscope.build() if model.oscilloscope else None,
    )


_SETTINGS = {
    "generator": drivers.GENERATOR_SETTINGS,
    "oscilloscope": (*drivers.CHANNEL_SETTINGS, *drivers.OSCILLOSCOPE_SETTINGS),
}


def _check_settings(placed: PlacedData) -> list[Mistake]:
    """Find settings that don't exist, and those that lack words for what we call things."""
    mistakes: list[Mistake] = []
    for section, known in _SETTINGS.items():
        group = placed.data.get(section) if isinstance(placed.data, dict) else None
        settings = group.get("settings") if isinstance(group, dict) else None
        for name, setting in settings.items() if isinstance(settings, dict) else ():
            path: Path = (section, "settings", name)
            if name not in known:
                problem = f"there is no setting {name!r} to make"
                mistakes.append(placed.mistake(path, problem, nearest(name, [*known]), at_key=True))
                continue
            words = setting.get("words", {}) if isinstance(setting, dict) else {}
            for word in drivers.WORDS.get(name, ()):
                if not isinstance(words, dict) or word not in words:
                    problem = f"{name!r} has no word for {word!r}"
                    remedy = f"add 'words: {{{word}: ...}}' to it"
                    mistakes.append(placed.mistake(path, problem, remedy, at_key=True))
    return mistakes


_GROUPS: dict[str, type[Model]] = {
    "generator": GeneratorSection,
    "oscilloscope": OscilloscopeSection,
    "line": LineSection,
    "output": SettingSection,
    "load": SettingSection,
    "idle": PredicateSection,
    "sending": PredicateSection,
    "armed": PredicateSection,
    "done": PredicateSection,
    "waveform": WaveformSection,
}


def _known(path: Path) -> list[str]:
    if not path:
        return field_names(DialectModel)
    if len(path) >= 2 and path[-2] == "settings":
        return field_names(SettingSection)
    if len(path) >= 2 and path[-2] == "preamble":
        return field_names(PreambleSection)
    return field_names(_GROUPS[str(path[-1])]) if str(path[-1]) in _GROUPS else []
