"""What an ideal observer of a simulated ping would report, and what nobody could."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.signal import hilbert

from ..core.acoustics import echo_spectrum, pulse_metrics
from ..core.types import FloatArray, Pose2
from .echo_paths import EchoPaths
from .front_end import FrontEnd
from .synthesis import Synthesis

MAX_BEARING_RAD = math.radians(45.0)
_MASKED_DB, _CROSSTALK_DB = 14.0, 6.0
_ENVELOPE_STEP_S = 5e-6


@dataclass(frozen=True)
class ReflectorTruth:
    """One echo; pairs are (left, right). Bearing positive to the left.

    ``snr_db`` is the power at the envelope's peak over the noise behind a filter as wide as the
    pulse; ``energy_snr_db`` is 10 log10(2 E / N0). ``not_scored_because`` is empty if a good
    algorithm should find the echo.
    """

    kind: str
    id: str
    range_m: float
    bearing_rad: float
    radial_velocity_m_s: float
    tof_s: tuple[float, float]
    peak: tuple[float, float]
    snr_db: tuple[float, float]
    energy_snr_db: tuple[float, float]
    not_scored_because: str = ""


@dataclass(frozen=True)
class PingTruth:
    """All echoes of at least 0 dB in one ear, nearest first, and the head's true pose."""

    reflectors: tuple[ReflectorTruth, ...]
    head_pose: Pose2


class TruthMaker:
    """Computes strengths from the same spectra from which the samples are made."""

    def __init__(self, synthesis: Synthesis, front_end: FrontEnd) -> None:
        unit, cycles = synthesis.unit, synthesis.config.burst_cycles
        self._synthesis = synthesis
        self._noise = front_end.noise_variance()
        pulses = [pulse_metrics(unit, ear, cycles) for ear in (0, 1)]
        self._peak_delay = np.array([p.peak_delay_s for p in pulses])
        self._bandwidth = np.array([p.noise_bandwidth_hz for p in pulses])
        self._shapes = [_envelope(synthesis, ear) for ear in (0, 1)]
        energy = [float(np.sum(s**2)) * _ENVELOPE_STEP_S for s in self._shapes]
        self._energy_s = np.array(energy)
        crosstalk = np.abs(hilbert(synthesis.crosstalk, axis=1))
        start = synthesis.emission_sample
        self._crosstalk = np.asarray(crosstalk[:, start:])

    def make(self, paths: EchoPaths, head_pose: Pose2) -> PingTruth:
        """Truth of one ping."""
        peak = self._synthesis.peaks(paths)
        nyquist_hz = self._synthesis.unit.sample_rate_hz / 2.0
        noise = self._noise * self._bandwidth / nyquist_hz
        snr_db = _db(peak**2 / 2.0 / noise[:, None])
        energy_db = _db(peak**2 * self._energy_s[:, None] * nyquist_hz / self._noise)
        order = [int(i) for i in np.argsort(paths.range_m) if max(snr_db[:, i]) >= 0.0]
        order = _strongest_of_each(paths.id, order, np.asarray(snr_db.max(axis=0)))
        reasons = self._reasons(paths, peak, order)
        reflectors = tuple(
            ReflectorTruth(
                kind=paths.kind[i],
                id=paths.id[i],
                range_m=float(paths.range_m[i]),
                bearing_rad=float(paths.bearing_rad[i]),
                radial_velocity_m_s=float(paths.radial_velocity_m_s[i]),
                tof_s=_pair(paths.tof_s[:, i]),
                peak=_pair(peak[:, i]),
                snr_db=_pair(snr_db[:, i]),
                energy_snr_db=_pair(energy_db[:, i]),
                not_scored_because=reason,
            )
            for i, reason in zip(order, reasons, strict=True)
        )
        return PingTruth(reflectors, head_pose)

    def _reasons(self, paths: EchoPaths, peak: FloatArray, order: list[int]) -> list[str]:
        """Why nobody could be expected to find an echo; empty where one could."""
        masked, drowned = self._masked(paths, peak, order)
        end_s = self._synthesis.config.record_s - self._synthesis.config.lead_s
        return [
            "multipath" if paths.kind[i] == "multipath"
            else "bearing beyond 45 deg" if abs(paths.bearing_rad[i]) > MAX_BEARING_RAD
            else "record ends before its peak" if np.min(self._peak_time(paths)[:, i]) > end_s
            else "masked by a stronger reflector" if masked[n]
            else "masked by the crosstalk" if drowned[n]
            else ""
            for n, i in enumerate(order)
        ]  # fmt: skip

    def _peak_time(self, paths: EchoPaths) -> FloatArray:
        """Of each envelope's maximum since the emission, (2, n)."""
        delay = self._synthesis.unit.latency_s + self._peak_delay
        return np.asarray(paths.tof_s + delay[:, None])

    def _masked(
        self, paths: EchoPaths, peak: FloatArray, order: list[int]
    ) -> tuple[list[bool], list[bool]]:
        """Whether in both ears one other echo, or the direct pulse, is far stronger."""
        n = len(order)
        tof, height = paths.tof_s[:, order], peak[:, order]
        at = tof + self._peak_delay[:, None]
        others = np.zeros((2, n, n))
        direct = np.zeros((2, n))
        rate_hz = self._synthesis.unit.sample_rate_hz
        for ear in (0, 1):
            since = (at[ear][:, None] - tof[ear][None, :]) / _ENVELOPE_STEP_S
            shape = np.interp(since, np.arange(len(self._shapes[ear])), self._shapes[ear], 0, 0)
            others[ear] = shape * height[ear][None, :]
            np.fill_diagonal(others[ear], 0.0)
            sample = (at[ear] + self._synthesis.unit.latency_s) * rate_hz
            direct[ear] = np.interp(
                sample, np.arange(self._crosstalk.shape[1]), self._crosstalk[ear], right=0.0
            )
        own = np.maximum(height, 1e-30)
        masked = np.any(
            np.all(others > own[:, :, None] * 10.0 ** (_MASKED_DB / 20.0), axis=0), axis=1
        )
        drowned = np.all(direct > own * 10.0 ** (_CROSSTALK_DB / 20.0), axis=0)
        return list(map(bool, masked)), list(map(bool, drowned))


def _strongest_of_each(ids: tuple[str, ...], order: list[int], snr_db: FloatArray) -> list[int]:
    """Both ways over a wall and a pole are one echo: keep the stronger."""
    best: dict[str, int] = {}
    for i in order:
        if ids[i] not in best or snr_db[i] > snr_db[best[ids[i]]]:
            best[ids[i]] = i
    return [i for i in order if best[ids[i]] == i]


def _envelope(synthesis: Synthesis, ear: int) -> FloatArray:
    """Envelope of the pulse over the time since its start, 1 at its peak."""
    unit, n = synthesis.unit, 4096
    frequency = np.asarray(unit.carrier_hz + np.fft.fftfreq(n, _ENVELOPE_STEP_S), dtype=np.float64)
    near = np.abs(frequency - unit.carrier_hz) < 0.3 * unit.carrier_hz
    spectrum = np.zeros(n, complex)
    spectrum[near] = echo_spectrum(unit, ear, frequency[near], synthesis.config.burst_cycles)
    envelope = np.abs(np.fft.ifft(spectrum))[: n // 2]
    return np.asarray(envelope / envelope.max())


def _db(power: FloatArray) -> FloatArray:
    return np.asarray(10.0 * np.log10(np.maximum(power, 1e-30)))


def _pair(values: FloatArray) -> tuple[float, float]:
    return float(values[0]), float(values[1])
