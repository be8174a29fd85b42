"""Settings of the processing chain."""

from __future__ import annotations

from dataclasses import dataclass

from ..settings import Settings, setting


@dataclass(frozen=True)
class ProcessingConfig(Settings):
    """How raw echoes become detections. What the head is, the head file says."""

    max_range_m: float = setting(8.0, "Echoes beyond this range are not looked for", "m", 0.3, 30.0)
    max_bearing_rad: float = setting(
        1.9, "Bearings are looked for from minus to plus this angle", "rad", 0.2, 2.4
    )
    false_detections_per_ping: float = setting(
        0.01, "Accepted rate of plain noise taken for an echo", "1/ping", 1e-6, 1.0
    )
    min_existence_probability: float = setting(
        0.5, "Echoes less likely than this are not reported", "", 0.0, 1.0
    )
    max_echoes: int = setting(12, "At most this many echoes are fitted in one ping", "", 1, 40)
    max_pair_searches: int = setting(
        1,
        "Times in a ping that two objects are looked for where one leaves too much behind; "
        "each takes about as long as two echoes, 0 is fastest",
        "",
        0,
        10,
    )
    velocity_sigma_m_s: float = setting(
        0.7, "Usual radial speed between head and objects (1 sigma)", "m/s", 0.01, 10.0
    )
    temperature_sigma_c: float = setting(
        0.5, "Error of the air temperature (1 sigma); it widens the range sigma", "degC", 0.0, 20.0
    )
    default_temperature_c: float = setting(
        20.0, "Air temperature where the echo message has none", "degC", -40.0, 60.0
    )
    default_relative_humidity: float = setting(
        0.5, "Relative humidity where the echo message has none", "", 0.0, 1.0
    )
