"""From echo paths to the sound pressure at the converter: one ping, frequency by frequency."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy import fft
from scipy.signal import hilbert

from ..core.acoustics import (
    burst_spectrum,
    echo_spectrum,
    pulse_metrics,
    resonance_response,
)
from ..core.air import speed_of_sound
from ..core.head import Head, Transducer
from ..core.types import ComplexArray, FloatArray
from .echo_paths import EchoPaths
from .path_filter import PathFilter
from .simulator_config import SimulatorConfig

REFERENCE_BURST_CYCLES = 3.0
_BAND = 0.3
"""Half width of the computed band over the carrier; resonators are 40 dB down outside."""
_FINE, _MARGIN = 4, 400
"""Steps per bin of the table of emitted spectra, and how many of them it has to spare: enough
for a Doppler shift of 4 %, which is 7 m/s."""
_INAUDIBLE = 0.01
"""Echoes below this fraction of the noise's standard deviation are left out: under -20 dB."""
_TAIL_S = 0.004
"""Longest ringing: kept free behind the record so that nothing wraps round to its start."""
_CASING_RESONANCE, _CASING_Q = 0.985, 28.0
"""The direct pulse also runs through the casing, which rings longer than the transducers."""


class Synthesis:
    """Turns echo paths of one unit into voltages, as fractions of full scale.

    Spectra that do not depend on the ping are computed once.
    """

    def __init__(self, unit: Head, config: SimulatorConfig) -> None:
        self.unit, self.config = unit, config
        rate_hz = unit.sample_rate_hz
        self.n_samples = round(config.record_s * rate_hz)
        self.emission_sample = round(config.lead_s * rate_hz)
        self._n_fft = int(fft.next_fast_len(self.n_samples + round(_TAIL_S * rate_hz), real=True))
        bin_hz = rate_hz / self._n_fft
        half_hz = min(_BAND * unit.carrier_hz, 0.98 * (rate_hz / 2.0 - unit.carrier_hz))
        low, high = unit.carrier_hz - half_hz, unit.carrier_hz + half_hz
        self._bins = np.arange(math.ceil(low / bin_hz), math.floor(high / bin_hz) + 1)
        self._frequency = np.asarray(self._bins * bin_hz, dtype=np.float64)
        air = config.temperature_c, config.relative_humidity
        self.speed_of_sound_m_s = speed_of_sound(*air)
        self._way = PathFilter(unit, self._frequency, *air)
        self._receiver = self._receivers()
        self.level = 2.0 * config.source_level / self._peak(REFERENCE_BURST_CYCLES)
        self._pulse_peak = np.array(
            [self.level * gain * self._peak_parts(config.burst_cycles, ear)
             for ear, gain in enumerate(self._gains())]
        )  # fmt: skip
        self._emitted_table = self._emission()
        self._sender = self._emitted(np.ones(1))[0]
        self.crosstalk = self._crosstalk()

    def echoes(self, paths: EchoPaths) -> FloatArray:
        """Sum of all echoes, without direct pulse, noise and gain curve, (2, n_samples)."""
        spectrum = np.zeros((2, self._n_fft // 2 + 1), complex)
        at_nodes = self._way.at_nodes(paths)
        audible = self._peaks(paths, at_nodes) > _INAUDIBLE * self.config.noise_rms
        for ear in (0, 1):
            heard = np.flatnonzero(audible[ear])
            spectrum[ear, self._bins] = self._ear(paths, ear, heard, at_nodes[ear, heard])
        return self._samples(spectrum)

    def peaks(self, paths: EchoPaths) -> FloatArray:
        """Peak of each echo's envelope as a fraction of full scale, shape (2, n)."""
        return self._peaks(paths, self._way.at_nodes(paths))

    def _peaks(self, paths: EchoPaths, at_nodes: FloatArray) -> FloatArray:
        shape = np.einsum("enk,ek->en", at_nodes, self._pulse_peak)
        return np.asarray(np.abs(paths.amplitude * shape))

    def _ear(
        self, paths: EchoPaths, ear: int, heard: NDArray[np.intp], at_nodes: FloatArray
    ) -> ComplexArray:
        doppler = paths.doppler[ear, heard]
        amplitude = paths.amplitude[ear, heard]
        ways = self._phases(paths.tof_s[ear, heard] + self._start_s)
        ways *= self._way.over_band(at_nodes)
        # einsum rather than @: a threaded product would fight the other nodes for the cores.
        if np.all(doppler == 1.0):
            total = np.einsum("n,nf->f", amplitude, ways) * self._sender
        else:
            total = np.einsum("n,nf->f", amplitude, ways * self._emitted(doppler))
        return np.asarray(total * self._receiver[ear])

    @property
    def _start_s(self) -> float:
        """Time of the start of the drive in the record."""
        return self.emission_sample / self.unit.sample_rate_hz + self.unit.latency_s

    def _phases(self, delay_s: FloatArray) -> ComplexArray:
        """exp(-2 pi j f delay), (n, bins), by two coarse tables: far fewer exponentials."""
        fine = 32
        bins, step = self._bins, -2j * math.pi * self.unit.sample_rate_hz / self._n_fft
        coarse = np.exp(step * np.outer(delay_s, np.arange(bins[0], bins[-1] + 1, fine)))
        table = coarse[:, :, None] * np.exp(step * np.outer(delay_s, np.arange(fine)))[:, None, :]
        n_columns = coarse.shape[1] * fine
        return np.asarray(table.reshape(len(delay_s), n_columns)[:, : len(bins)])

    def _emitted(self, doppler: FloatArray) -> ComplexArray:
        """Spectrum of the emitted burst as it arrives with a Doppler shift, (n, bins).

        A burst s(t) received with the factor d is s(d t): its spectrum is S(f / d) / d.
        """
        stretch = 1.0 / doppler[:, None]
        position = _FINE * (self._bins * stretch - self._bins[0]) + _MARGIN
        index = position.astype(np.intp)
        part = position - index
        table = self._emitted_table
        return np.asarray(stretch * ((1.0 - part) * table[index] + part * table[index + 1]))

    def _emission(self) -> ComplexArray:
        """Spectrum of the emitted burst in steps of a quarter bin, somewhat beyond the band."""
        head = self.unit
        n = _FINE * (len(self._bins) - 1) + 2 * _MARGIN + 1
        steps = self._bins[0] + (np.arange(n) - _MARGIN) / _FINE
        frequency = np.asarray(steps * head.sample_rate_hz / self._n_fft, dtype=np.float64)
        burst = burst_spectrum(
            frequency, head.carrier_hz, self.config.burst_cycles, head.drive_waveform
        )
        emitted = burst * resonance_response(head.transmitter, frequency)
        # A sine burst's analytic signal is -j times its baseband; half of it is in each bin.
        return np.asarray(-0.5j * self.level * head.sample_rate_hz * emitted)

    def _receivers(self) -> tuple[ComplexArray, ComplexArray]:
        left, right = (
            gain * resonance_response(receiver, self._frequency)
            for gain, receiver in zip(self._gains(), self.unit.receivers, strict=True)
        )
        return left, right

    def _gains(self) -> tuple[complex, complex]:
        """Gain mismatch and phase mismatch, half of each in either ear."""
        half = 10.0 ** (self.unit.gain_mismatch_db / 40.0)
        turn = np.exp(0.5j * self.unit.phase_mismatch_rad)
        return complex(half * turn), complex(1.0 / (half * turn))

    def _peak(self, burst_cycles: float, ear: int | None = None) -> float:
        """Peak of the pulse's envelope for a unit drive; the mean of both ears if not told."""
        if ear is None:
            return 0.5 * (self._peak(burst_cycles, 0) + self._peak(burst_cycles, 1))
        return float(abs(np.sum(self._peak_parts(burst_cycles, ear))))

    def _peak_parts(self, burst_cycles: float, ear: int) -> ComplexArray:
        """What each node of the path filter contributes to the peak of the envelope, (nodes,)."""
        delay_s = pulse_metrics(self.unit, ear, burst_cycles).peak_delay_s
        offset = self._frequency - self.unit.carrier_hz
        spectrum = echo_spectrum(self.unit, ear, self._frequency, burst_cycles)
        bin_hz = float(self._frequency[1] - self._frequency[0])
        return np.asarray(
            self._way.spread @ (spectrum * np.exp(2j * math.pi * offset * delay_s)) * bin_hz
        )

    def _crosstalk(self) -> FloatArray:
        """The direct pulse through air and casing, (2, n_samples)."""
        head = self.unit
        casing = Transducer(
            (0.0, 0.0, 0.0), 0.0, 1.0,
            _CASING_RESONANCE * head.carrier_hz, head.carrier_hz / _CASING_Q,
        )  # fmt: skip
        spectrum = np.zeros((2, self._n_fft // 2 + 1), complex)
        for ear, receiver in enumerate(head.receivers):
            way_m = math.dist(receiver.position_m, head.transmitter.position_m)
            delay = np.array([way_m / self.speed_of_sound_m_s + self._start_s])
            spectrum[ear, self._bins] = (
                self._phases(delay)[0] * self._sender * self._receiver[ear]
                * resonance_response(casing, self._frequency)
            )  # fmt: skip
        pulse = self._samples(spectrum)
        peak = np.max(np.abs(hilbert(pulse, axis=1)), axis=1, keepdims=True)
        return np.asarray(self.config.crosstalk_level * pulse / peak)

    def _samples(self, spectrum: ComplexArray) -> FloatArray:
        return np.asarray(fft.irfft(spectrum, self._n_fft, axis=1)[:, : self.n_samples])
