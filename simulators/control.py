"""The control port of the simulated bench: virtual time, and what really happened.

For rehearsals and tests only. No real table has one, so nothing that measures may use it.
"""

from collections.abc import Callable

from pulsetally.simulators.clock import VirtualClock
from pulsetally.simulators.generator_model import GeneratorModel
from pulsetally.simulators.scpi_device import Call, Command, ScpiDevice
from pulsetally.simulators.scpi_numbers import format_integer, format_real
from pulsetally.simulators.scpi_parameters import number
from pulsetally.simulators.table import Table

LONGEST_ADVANCE_SECONDS = 1e9
# Enough for 1 ns after eleven days of virtual time.
TIME_DIGITS = 16


class BenchControl(ScpiDevice):
    """Moves the virtual clock and tells the truth about the cell and the wiring.

    farads: what the node's capacitance is, cell and probe together.
    """

    def __init__(
        self,
        identity: str,
        *,
        table: Table,
        clock: VirtualClock,
        generator: GeneratorModel,
        farads: float,
    ) -> None:
        super().__init__(identity)
        self.declare(
            [
                Command(
                    pattern=":CLOCk:TIME", answer=lambda _: format_real(clock.now, TIME_DIGITS)
                ),
                Command(
                    pattern=":CLOCk:ADVance",
                    parameters=(number(0.0, LONGEST_ADVANCE_SECONDS, 0.0, unit="S"),),
                    execute=lambda call: clock.advance(call.number()),
                ),
                _truth("POLarization", lambda: format_real(table.polarization)),
                _truth("UP", lambda: format_real(table.up_fraction)),
                _truth("NODE", lambda: format_real(table.node_volts)),
                _truth("TERMinal", lambda: format_real(table.terminal_volts)),
                _truth("OUTPut", lambda: "1" if generator.relay_on else "0"),
                _truth("DELivered", lambda: format_integer(table.delivered)),
                _truth("MAXimum", lambda: format_real(generator.largest_emf_volts)),
                _truth("CAPacitance", lambda: format_real(farads)),
            ]
        )


def _truth(name: str, answer: Callable[[], str]) -> Command:
    def tell(_: Call) -> str:
        return answer()

    return Command(pattern=f":TRUTh:{name}", answer=tell)
