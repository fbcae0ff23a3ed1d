"""The words of a table file: how each setting of the simulated bench is said in it.

One row for each field of each dataclass. A field that is to be said in the file gets a row
here, and a test asks for it.
"""

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from pulsetally.simulators.cell import DEFAULT_DOMAINS, CellDescription
from pulsetally.simulators.circuit import Wiring
from pulsetally.simulators.families import FAMILIES
from pulsetally.simulators.faults import INSTRUMENTS, KINDS, Fault
from pulsetally.simulators.imperfections import DigitizerImperfections, SourceImperfections
from pulsetally.simulators.settings import SOCKETS, SimulationSettings
from pulsetally.simulators.table_file_quantities import (
    AREA,
    CAPACITANCE,
    COUNT,
    CURRENT,
    ENERGY,
    FREQUENCY,
    INTEGER,
    LENGTH,
    NUMBER,
    PER_KELVIN,
    POLARIZATION,
    RESISTANCE,
    SHARE,
    TEMPERATURE,
    TIME,
    VOLTAGE,
    Kind,
)
from pulsetally.simulators.wear import (
    Breakdown,
    Fatigue,
    ImprintGrowth,
    Incubation,
    Retention,
    Thermal,
)

# Stands where a field has no such value.
NOTHING: Any = object()


@dataclass(frozen=True, slots=True, kw_only=True)
class Word:
    """How one field is said.

    path: the setting's name, after the names of the groups it is in.
    kind: of its quantity; or choices: word -> value; or group: the class of a nested group.
    none: the value that the word 'none' stands for; NOTHING where 'none' is not allowed.
    leads: the group that holds it may be 'none' instead, which is this field's value None;
    in a written group it is required.
    many: it is a list of so many quantities; 0 for one quantity. listed: of groups, any number.
    default: the value where the file doesn't say; NOTHING for the field's own.
    example: a value that is allowed; needed where the field has no default and the kind's
    own example won't do.
    """

    path: tuple[str, ...]
    kind: Kind | None = None
    choices: Mapping[str, object] = field(default_factory=dict)
    group: type | None = None
    none: Any = NOTHING
    leads: bool = False
    many: int = 0
    listed: bool = False
    default: Any = NOTHING
    example: str = ""

    @property
    def sample(self) -> str:
        """Return a well written value."""
        return self.example or (self.kind.example if self.kind else next(iter(self.choices), ""))


def _said(
    path: str, kind: Kind, *, none: Any = NOTHING, example: str = "", default: Any = NOTHING
) -> Word:
    names = tuple(path.split(" / "))
    return Word(path=names, kind=kind, none=none, example=example, default=default)


def _chosen(name: str, words: Iterable[str]) -> Word:
    return Word(path=(name,), choices={each: each for each in words})


def _option(path: str, group: type) -> Word:
    return Word(path=(path,), group=group, none=None)


_ACTIVATION = _said("activation energy", ENERGY)

WORDS: dict[type, dict[str, Word]] = {
    SimulationSettings: {
        "cell": Word(path=("cell",), group=CellDescription),
        "socket": _chosen("socket", SOCKETS),
        "wiring": Word(path=("wiring",), group=Wiring),
        "family": Word(
            path=("instruments", "family"), choices=dict(zip(FAMILIES, FAMILIES, strict=True))
        ),
        "exchange_seconds": _said("instruments / exchange time", TIME, example="1 ms"),
        "source": Word(path=("instruments", "generator"), group=SourceImperfections),
        "digitizer": Word(path=("instruments", "oscilloscope"), group=DigitizerImperfections),
        "seed": _said("seed", COUNT),
        "faults": Word(path=("faults",), group=Fault, listed=True),
    },
    CellDescription: {
        "area": _said("area", AREA),
        "thickness": _said("thickness", LENGTH),
        "remanent_polarization": _said("remanent polarization", POLARIZATION),
        "relative_permittivity": _said("relative permittivity", NUMBER, example="500"),
        "activation_volts": _said("activation voltage", VOLTAGE, example="25 V"),
        "activation_spread": _said("activation spread", VOLTAGE, example="5 V"),
        "alpha": _said("alpha", NUMBER),
        "attempt_seconds": _said("attempt time", TIME, example="2 ns"),
        "regions": _said("regions", COUNT, example="64"),
        "leak_ohms": _said("leakage resistance", RESISTANCE, none=math.inf, example="2 Mohm"),
        "imprint_volts": _said("imprint", VOLTAGE, example="0.3 V"),
        # A rehearsal's cell scatters like a real one, unless the file says otherwise.
        "domains": _said("domains", COUNT, none=None, default=DEFAULT_DOMAINS),
        "incubation": _option("incubation", Incubation),
        "imprint_growth": _option("imprint growth", ImprintGrowth),
        "fatigue": _option("fatigue", Fatigue),
        "retention": _option("retention", Retention),
        "thermal": _option("thermal", Thermal),
        "breakdown": _option("breakdown", Breakdown),
    },
    Incubation: {
        "seconds": _said("time", TIME, example="200 ns"),
        "threshold_volts": _said("threshold", VOLTAGE, example="0.2 V"),
    },
    ImprintGrowth: {
        "volts_per_decade": _said("shift per decade", VOLTAGE, example="50 mV"),
        "onset_seconds": _said("onset", TIME, example="1 s"),
        "activation_ev": _ACTIVATION,
    },
    Fatigue: {
        "scale_cycles": _said("scale cycles", NUMBER, example="1e10"),
        "exponent": _said("exponent", NUMBER, example="0.3"),
        "recovered_share": _said("recovered share", SHARE),
        "recovery_volts": _said("recovery voltage", VOLTAGE, none=math.inf, example="6 V"),
    },
    Retention: {
        "law": Word(path=("law",), choices={"log time": "log time", "stretched": "stretched"}),
        "loss_per_decade": _said("loss per decade", SHARE, example="2 %"),
        "onset_seconds": _said("onset", TIME, example="1 s"),
        "exponent": _said("exponent", NUMBER, example="0.3"),
        "side": Word(path=("lost state",), choices={"up": 1, "down": -1}),
        "rest_volts": _said("rest voltage", VOLTAGE, example="0.5 V"),
        "activation_ev": _ACTIVATION,
    },
    Thermal: {
        "kelvin": _said("temperature", TEMPERATURE),
        "reference_kelvin": _said("reference temperature", TEMPERATURE),
        "activation_per_kelvin": _said("activation change", PER_KELVIN),
    },
    Breakdown: {
        "scale_cycles": _said("scale cycles", NUMBER, example="1e10"),
        "shape": _said("shape", NUMBER, example="2"),
        "short_ohms": _said("short resistance", RESISTANCE, example="50 ohm"),
    },
    # The words of the bench file.
    Wiring: {
        "source_ohms": _said("source resistance", RESISTANCE, example="50 ohm"),
        "series_ohms": _said("series resistance", RESISTANCE),
        "diode_saturation_amperes": Word(
            path=("series diode", "saturation current"), kind=CURRENT, none=None, leads=True
        ),
        "diode_emission": _said("series diode / emission", NUMBER, example="1.0"),
        "clamp_volts": Word(
            path=("clamp", "breakdown"), kind=VOLTAGE, none=None, leads=True, example="15 V"
        ),
        "probe_ohms": _said("probe / resistance", RESISTANCE, none=math.inf, example="10 Mohm"),
        "probe_farads": _said("probe / capacitance", CAPACITANCE),
    },
    SourceImperfections: {
        "bits": _said("bits", COUNT, example="14"),
        "span_volts": _said("span", VOLTAGE, example="10 V"),
        "gain_error": _said("gain error", SHARE, example="0.1 %"),
        "offset_volts": _said("offset", VOLTAGE, example="1 mV"),
        "time_step_seconds": _said("time step", TIME, example="1 ns"),
        "shortest_edge_seconds": _said("shortest edge", TIME, example="5 ns"),
        "longest_edge_seconds": _said("longest edge", TIME, example="500 s"),
        "shortest_width_seconds": _said("shortest width", TIME, example="20 ns"),
        "longest_width_seconds": _said("longest width", TIME, example="1000 s"),
        "shortest_period_seconds": _said("shortest period", TIME, example="40 ns"),
        "longest_period_seconds": _said("longest period", TIME, example="2000 s"),
        "most_pulses": _said("most pulses", COUNT, example="1000000"),
        "relay_seconds": _said("relay time", TIME, example="10 ms"),
        "trigger_delay_seconds": _said("trigger delay", TIME, example="300 ns"),
        "trigger_jitter_seconds": _said("trigger jitter", TIME, example="1 ns"),
    },
    DigitizerImperfections: {
        "bits": _said("bits", COUNT, none=None, example="8"),
        "noise_share": _said("noise", SHARE, none=None, example="0.2 %"),
        "offset_shares": Word(path=("offsets",), kind=SHARE, many=2, example="0.1 %"),
        "gain_errors": Word(path=("gain errors",), kind=SHARE, many=2, example="0.5 %"),
        "bandwidth_hertz": _said("bandwidth", FREQUENCY, none=math.inf),
        "trigger_jitter_seconds": _said("trigger jitter", TIME, example="1 ns"),
        "longest_record_points": _said("longest record", COUNT, example="100000"),
        "shortest_interval_seconds": _said("shortest interval", TIME, example="1 ns"),
        "longest_interval_seconds": _said("longest interval", TIME, example="10 s"),
        "smallest_range_volts": _said("smallest range", VOLTAGE, example="8 mV"),
        "largest_range_volts": _said("largest range", VOLTAGE, example="80 V"),
        "largest_offset_volts": _said("largest offset", VOLTAGE, example="40 V"),
    },
    Fault: {
        "kind": _chosen("fault", KINDS),
        "instrument": _chosen("instrument", INSTRUMENTS),
        "exchange": _said("exchange", COUNT, example="12"),
        "chance": _said("chance", SHARE, example="1 %"),
        "at_seconds": _said("at", TIME, example="3 s"),
        "seconds": _said("time", TIME, example="1 s"),
        "share": _said("sent share", SHARE, example="50 %"),
        "followed": Word(path=("followed",), choices={"yes": True, "no": False}),
        "number": _said("error number", INTEGER),
        "message": Word(path=("message",), example="supply voltage low"),
        "ohms": _said("short resistance", RESISTANCE, example="5 ohm"),
    },
}

# What a table file doesn't say: it belongs to the process that serves the bench.
NOT_SAID: dict[type, dict[str, str]] = {
    SimulationSettings: {
        "transport": "--serial and --hislip say it",
        "generator_port": "--generator-port says it",
        "oscilloscope_port": "--oscilloscope-port says it",
        "control_port": "--control-port says it",
        "until_stdin_closes": "whoever starts the process says it",
        "real_time": "--real-time says it",
    }
}
