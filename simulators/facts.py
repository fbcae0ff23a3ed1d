"""What a person at the table would know and write into a bench file."""

import math

from pulsetally.simulators.settings import SimulationSettings


def facts_of(settings: SimulationSettings, title: str) -> dict[str, object]:
    """Return what stands on the labels of cell and wiring, for whoever writes a bench file.

    Plain values in SI units, None where there is no such thing; nothing of what a measurement
    is to find. title: what the table is called, "" where it has no name.
    """
    cell, wiring = settings.cell, settings.wiring
    return {
        "title": title,
        "family": settings.family,
        "real_time": settings.real_time,
        "wiring": {
            "source_ohms": wiring.source_ohms,
            "series_ohms": wiring.series_ohms,
            "diode_saturation_amperes": wiring.diode_saturation_amperes,
            "diode_emission": wiring.diode_emission,
            "clamp_volts": wiring.clamp_volts,
            "probe_ohms": None if math.isinf(wiring.probe_ohms) else wiring.probe_ohms,
            "probe_farads": wiring.probe_farads,
        },
        "cell": {
            "area": cell.area,
            "thickness": cell.thickness,
            "relative_permittivity": cell.relative_permittivity,
        },
    }
