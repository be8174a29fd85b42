"""Settings of the simulator."""

from __future__ import annotations

from dataclasses import dataclass

from ..core.errors import SettingError, refuse
from ..core.settings import Settings, setting
from ..core.types import Pose2


@dataclass(frozen=True)
class SimulatorConfig(Settings):
    """How the simulated head pings, what its electronics do, and how the air is."""

    ping_rate_hz: float = setting(25.0, "Pings per second", "Hz", 0.2, 100.0)
    interval_jitter: float = setting(
        0.05, "The time between pings varies by up to this share of it", "", 0.0, 0.9
    )
    record_s: float = setting(0.036, "Length of the record of one ping", "s", 0.002, 0.2)
    lead_s: float = setting(
        0.0002, "The record starts this long before the emission", "s", 0.0, 0.002
    )
    burst_cycles: float = setting(3.0, "Length of the burst in carrier periods", "", 1.0, 64.0)
    seed: int = setting(1, "Same seed, same samples", "", 0, 2**31 - 1)
    temperature_c: float = setting(21.0, "True temperature of the air", "degC", -20.0, 50.0)
    relative_humidity: float = setting(0.45, "True relative humidity of the air", "", 0.0, 1.0)
    temperature_error_c: float = setting(
        0.3, "Standard deviation of the wandering error of the thermometer", "degC", 0.0, 5.0
    )
    humidity_error: float = setting(
        0.03, "Standard deviation of the wandering error of the hygrometer", "", 0.0, 0.3
    )
    source_level: float = setting(
        0.5,
        "Peak of the echo of a wall 1 m away on the axes of both transducers after a burst of "
        "3 cycles, without absorption, as a fraction of full scale",
        "", 1e-4, 100.0,
    )  # fmt: skip
    crosstalk_level: float = setting(
        0.35,
        "Peak of the direct pulse's envelope in the ears, as a fraction of full scale",
        "", 0.0, 100.0,
    )  # fmt: skip
    noise_rms: float = setting(
        0.0015, "Noise of each receiver up to half the sample rate, as a fraction of full scale",
        "", 0.0, 1.0,
    )  # fmt: skip
    clicks_per_ping: float = setting(
        0.0, "Mean number of foreign clicks and electrical spikes in a record", "", 0.0, 100.0
    )
    adc_bits: int = setting(12, "Resolution of the converter", "", 4, 16)
    gain_slope_db_per_s: float = setting(
        0.0, "The gain of the receivers rises this fast after the emission", "dB/s", 0.0, 5000.0
    )
    gain_limit_db: float = setting(24.0, "The gain rises at most by this much", "dB", 0.0, 80.0)
    unit_error_scale: float = setting(
        0.0, "Errors of the individual head, 1 for typical tolerances, 0 for none", "", 0.0, 3.0
    )
    odometry_rate_hz: float = setting(50.0, "Odometry samples per second", "Hz", 1.0, 200.0)
    odometry_error_scale: float = setting(
        1.0, "Errors of the odometry, 1 for typical ones, 0 for none", "", 0.0, 20.0
    )
    mount_x_m: float = setting(0.12, "Head in base_link, forward", "m", -5.0, 5.0)
    mount_y_m: float = setting(0.0, "Head in base_link, to the left", "m", -5.0, 5.0)
    mount_yaw_rad: float = setting(
        0.0, "Direction of the head in base_link, positive to the left", "rad", -3.15, 3.15
    )

    @property
    def mount(self) -> Pose2:
        """Pose of the head in base_link."""
        return Pose2(self.mount_x_m, self.mount_y_m, self.mount_yaw_rad)

    def check_together(self) -> None:
        """Each record must have ended when the next one begins."""
        shortest_s = (1.0 - self.interval_jitter) / self.ping_rate_hz
        if self.record_s > shortest_s:
            allowed = f"at most {shortest_s:.4f} s, the shortest time between pings"
            remedy = "lower ping_rate_hz, interval_jitter or record_s"
            raise SettingError(refuse("record_s", self.record_s, allowed, remedy))
        if self.lead_s > 0.5 * self.record_s:
            raise SettingError(refuse("lead_s", self.lead_s, "at most half of record_s"))
