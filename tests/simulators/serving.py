"""A bench in this process that presets a cell and steps it once, as instruments would."""

from pulsetally.simulators.connection import Connection
from pulsetally.simulators.deliveries import Send
from pulsetally.simulators.settings import SimulationSettings
from pulsetally.simulators.simulate import Bench


def serve_a_pulse(settings: SimulationSettings) -> list[str]:
    """Fire a pulse of both polarities, record it, wait a while; return all answers.

    What the physics can't do is raised here, as it would end the process that serves.
    """
    bench = Bench(settings)
    generator, oscilloscope = Connection(bench.generator), Connection(bench.oscilloscope)
    answers = []
    for connection, message in (
        (generator, ":PULS:PER 2E-3;WIDT 1E-3;:VOLT:HIGH 4;LOW -5;:OUTP ON;*WAI"),
        (oscilloscope, ":SWE:TINT 1E-6;POIN 1000;:TRIG:SOUR EXT;:INIT"),
        (generator, ":INIT;*TRG;*OPC?;:SYST:ERR?"),
        (oscilloscope, "*OPC?;:SYST:ERR?"),
    ):
        for deliveries in connection.receive(message.encode() + b"\n"):
            answers += [
                each.content.decode().strip() for each in deliveries if isinstance(each, Send)
            ]
        bench.clock.advance(settings.exchange_seconds)
    bench.clock.advance(1.0)
    return answers
