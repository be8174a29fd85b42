"""The simulated electronics behind the ears: noise, clicks, gain curve, converter."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from ..core.head import Head
from ..core.types import FloatArray, FrontEndFlag, GainCurve
from .simulator_config import SimulatorConfig

FULL_SCALE = 32768.0


class FrontEnd:
    """Turns voltages into the codes of an N-bit converter, shifted up to fill 16 bits."""

    def __init__(self, unit: Head, config: SimulatorConfig, n_samples: int) -> None:
        self.unit, self.config = unit, config
        self.gain = _gain_curve(config)
        start_s = -round(config.lead_s * unit.sample_rate_hz) / unit.sample_rate_hz
        self._time_s = start_s + np.arange(n_samples) / unit.sample_rate_hz
        self._amplitude = None if self.gain is None else self.gain.amplitude(self._time_s)

    def noise_variance(self) -> float:
        """Of receiver and converter together at gain 0 dB, fractions of full scale squared.

        A step of the converter adds 1/12 of its square (W. R. Bennett, 1948).
        """
        step = 2.0 ** (1 - self.config.adc_bits)
        return self.config.noise_rms**2 + step**2 / 12.0

    def convert(
        self, volts: FloatArray, rng: np.random.Generator
    ) -> tuple[NDArray[np.int16], FrontEndFlag]:
        """Codes, int16 of shape (2, n_samples), and the flags of clipped ears."""
        total = volts + self.config.noise_rms * rng.standard_normal(volts.shape)
        if self.config.clicks_per_ping:
            total += self._clicks(rng)
        if self._amplitude is not None:
            total *= self._amplitude
        half = 2.0 ** (self.config.adc_bits - 1)
        codes = np.clip(np.rint(total * half), -half, half - 1.0)
        clipped = np.any((codes == -half) | (codes == half - 1.0), axis=1)
        flags = FrontEndFlag.SIMULATED
        if clipped[0]:
            flags |= FrontEndFlag.LEFT_CLIPPED
        if clipped[1]:
            flags |= FrontEndFlag.RIGHT_CLIPPED
        return (codes * (FULL_SCALE / half)).astype(np.int16), flags

    def _clicks(self, rng: np.random.Generator) -> FloatArray:
        """Clicks that make both receivers ring, and one-sample spikes in one ear."""
        volts = np.zeros((2, len(self._time_s)))
        for _ in range(rng.poisson(self.config.clicks_per_ping)):
            height = 0.02 * math.exp(rng.normal())
            start = rng.uniform(0.0, self._time_s[-1])
            if rng.random() < 0.5:
                volts[rng.integers(2), rng.integers(len(self._time_s))] += 10.0 * height
                continue
            for ear, receiver in enumerate(self.unit.receivers):
                time = np.maximum(self._time_s - start, 0.0)
                ring = np.exp(-math.pi * receiver.half_power_bandwidth_hz * time)
                volts[ear] += height * ring * np.sin(2.0 * math.pi * receiver.resonance_hz * time)
        return volts


def _gain_curve(config: SimulatorConfig) -> GainCurve | None:
    if not config.gain_slope_db_per_s or not config.gain_limit_db:
        return None
    end_s = config.gain_limit_db / config.gain_slope_db_per_s
    return GainCurve(np.array([0.0, end_s]), np.array([0.0, config.gain_limit_db]))
