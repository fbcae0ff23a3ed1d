"""The families of instruments that the simulated bench can be made of."""

from collections.abc import Callable
from dataclasses import dataclass

from pulsetally.simulators import speak_perdiv, speak_scpi99, speak_stateword
from pulsetally.simulators.digitizer import Digitizer
from pulsetally.simulators.function_generator import FunctionGenerator
from pulsetally.simulators.generator_model import GeneratorModel
from pulsetally.simulators.oscilloscope import Oscilloscope
from pulsetally.simulators.scope_settings import Converter, ScopeSettings
from pulsetally.simulators.scpi_device import SCPI99, Manner


@dataclass(frozen=True, slots=True, kw_only=True)
class Family:
    """One generator and one oscilloscope that speak alike.

    generator, oscilloscope: put a model behind the family's language, given its identity.
    converter, scope_power_on: of the oscilloscope.
    """

    manner: Manner
    generator: Callable[[str, GeneratorModel], FunctionGenerator]
    oscilloscope: Callable[[str, Digitizer], Oscilloscope]
    converter: Converter
    scope_power_on: ScopeSettings


_ALL = (
    Family(
        manner=SCPI99,
        generator=speak_scpi99.Scpi99Generator,
        oscilloscope=speak_scpi99.Scpi99Oscilloscope,
        converter=speak_scpi99.CONVERTER,
        scope_power_on=speak_scpi99.SCOPE_POWER_ON,
    ),
    Family(
        manner=speak_perdiv.PERDIV,
        generator=speak_perdiv.PerdivGenerator,
        oscilloscope=speak_perdiv.PerdivOscilloscope,
        converter=speak_perdiv.CONVERTER,
        scope_power_on=speak_perdiv.SCOPE_POWER_ON,
    ),
    Family(
        manner=speak_stateword.STATEWORD,
        generator=speak_stateword.StatewordGenerator,
        oscilloscope=speak_stateword.StatewordOscilloscope,
        converter=speak_stateword.CONVERTER,
        scope_power_on=speak_stateword.SCOPE_POWER_ON,
    ),
)
FAMILIES = {family.manner.name: family for family in _ALL}
