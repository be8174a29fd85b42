"""A tiny recording made of noise."""

import math

import numpy as np

from ros_echo_perception.core.types import OdometrySample, Pose2, RawEcho
from ros_echo_perception.sources.recording_writer import RecordingLabels

LABELS = RecordingLabels("sparrow_52", "unit_7", "test", adc_bits=12, mount=Pose2(0.1, 0.0, 0.2))


def make_echoes(n=3, gain=None, n_samples=256):
    rng = np.random.default_rng(4)
    return [
        RawEcho(
            samples=(16 * rng.integers(-500, 500, (2, n_samples))).astype(np.int16),
            sample_rate_hz=200e3,
            carrier_hz=40e3,
            burst_cycles=3.0,
            emission_time_s=0.1 + 0.05 * k,
            first_sample_offset_s=-40 / 200e3,
            temperature_c=20.5 if k else math.nan,
            relative_humidity=0.5,
            sequence=k,
            gain=gain,
        )
        for k in range(n)
    ]


def make_odometry():
    return [
        OdometrySample(0.02 * i, Pose2(0.01 * i, -0.02 * i, 0.1 * i), 0.5, 5.0) for i in range(13)
    ]
