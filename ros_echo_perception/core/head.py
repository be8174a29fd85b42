"""The echo head: where its transducers are, where they point, and how they ring.

A head file is YAML. The maker's nominal file and a calibrated one have the same keys; the
calibrated one adds latency, phase mismatch and a ``calibration`` section about their origin.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import yaml

from .fields import Fields, read_yaml


@dataclass(frozen=True)
class Transducer:
    """A circular piston that resonates; yaw from x towards y, beam width full at -3 dB."""

    position_m: tuple[float, float, float]
    yaw_rad: float
    half_power_beam_width_rad: float
    resonance_hz: float
    half_power_bandwidth_hz: float


@dataclass(frozen=True)
class Head:
    """One transmitter and two receivers; origin midway between the receivers (REP-103 axes).

    Attributes
    ----------
    gain_mismatch_db
        Gain of the left ear minus that of the right one.
    latency_s
        From the commanded emission to the real start of the drive.
    phase_mismatch_rad
        Carrier phase of the left ear minus that of the right one which the transducers'
        resonances do not explain.
    calibration
        Origin of the values and their standard deviations; empty for a nominal head.
    """

    name: str
    carrier_hz: float
    sample_rate_hz: float
    drive_waveform: str
    transmitter: Transducer
    left: Transducer
    right: Transducer
    gain_mismatch_db: float = 0.0
    latency_s: float = 0.0
    phase_mismatch_rad: float = 0.0
    calibration: Mapping[str, Any] = field(default_factory=dict)

    @property
    def receivers(self) -> tuple[Transducer, Transducer]:
        """Left, right."""
        return self.left, self.right

    @property
    def baseline_m(self) -> float:
        """Distance between the receivers."""
        return math.dist(self.left.position_m, self.right.position_m)

    @property
    def calibrated(self) -> bool:
        """Whether the values come from a calibration."""
        return bool(self.calibration)


WAVEFORMS = ("square", "sine")


def load_head(path: str | Path) -> Head:
    """Read a head file.

    Raises
    ------
    FileFormatError
        Naming the file, the field, the value and what is allowed.
    """
    return head_from_mapping(read_yaml(path), str(path))


def head_from_mapping(data: Any, file: str = "head") -> Head:
    """A head from the contents of a head file; errors as in `load_head`."""
    fields = Fields(data, file)
    waveform = fields.text("drive_waveform", WAVEFORMS)
    receivers = fields.section("receivers")
    carrier_hz = fields.number("carrier_hz", 1e3, 1e6)
    return Head(
        name=fields.text("name"),
        carrier_hz=carrier_hz,
        sample_rate_hz=fields.number("sample_rate_hz", 2 * carrier_hz, 1e8),
        drive_waveform=waveform,
        transmitter=_transducer(fields.section("transmitter")),
        left=_transducer(receivers.section("left")),
        right=_transducer(receivers.section("right")),
        gain_mismatch_db=fields.number("gain_mismatch_db", -60.0, 60.0, 0.0),
        latency_s=fields.number("latency_s", -1e-2, 1e-2, 0.0),
        phase_mismatch_rad=fields.number("phase_mismatch_rad", -math.pi, math.pi, 0.0),
        calibration=_calibration(fields.section("calibration"))
        if fields.has("calibration")
        else {},
    )


def head_to_mapping(head: Head) -> dict[str, Any]:
    """The contents of the head file for a head; inverse of `head_from_mapping`."""
    data = dataclasses.asdict(head)
    for transducer in (data["transmitter"], data["left"], data["right"]):
        transducer["position_m"] = list(transducer["position_m"])
    data["receivers"] = {"left": data.pop("left"), "right": data.pop("right")}
    data["calibration"] = dict(head.calibration)
    return data


def save_head(head: Head, path: str | Path) -> None:
    """Write a head file that `load_head` reads back unchanged."""
    comment = "# Echo head. SI units; x forward, y left, z up; yaw positive to the left;\n"
    comment += "# origin midway between the receivers; beam and band widths full, at -3 dB.\n"
    Path(path).write_text(comment + yaml.safe_dump(head_to_mapping(head), sort_keys=False))


def _calibration(fields: Fields) -> Mapping[str, Any]:
    """The section as it is, once all that processing reads of it is known to be usable."""
    fields.number("model_error", 0.0, 1.0, 0.0)
    fields.number("level_error", 0.0, 10.0, 0.0)
    if fields.has("burst_cycles"):
        fields.numbers("burst_cycles", None, 0.0, 1e4)
    if fields.has("sigma"):
        fields.section("sigma").number("latency", 0.0, 1.0, 0.0)
    for pulse in fields.sections("direct_pulse"):
        pulse.number("burst_cycles", 0.0, 1e4)
        pulse.number("first_time_s", -1.0, 1.0)
        pulse.number("step_s", 1e-9, 1e-2)
        count = len(pulse.numbers("left_real", None, -100.0, 100.0))
        if count < 4:
            raise pulse.refuse("left_real", f"{count} numbers", "4 or more")
        for name in ("left_imag", "right_real", "right_imag"):
            pulse.numbers(name, count, -100.0, 100.0)
    return dict(fields.data)


def _transducer(fields: Fields) -> Transducer:
    x, y, z = fields.numbers("position_m", 3, -2.0, 2.0)
    return Transducer(
        position_m=(x, y, z),
        yaw_rad=fields.number("yaw_rad", -math.pi / 2, math.pi / 2),
        half_power_beam_width_rad=fields.number("half_power_beam_width_rad", 0.02, math.pi),
        resonance_hz=fields.number("resonance_hz", 1e3, 1e6),
        half_power_bandwidth_hz=fields.number("half_power_bandwidth_hz", 10.0, 1e6),
    )
