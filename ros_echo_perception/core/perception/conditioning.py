"""What the record is worth at each instant: noise, clipping, dead ears, the direct pulse."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.ndimage import binary_dilation, maximum_filter1d

from ..types import BoolArray, ComplexArray, FloatArray, FrontEndFlag, PingFlag, RawEcho
from .baseband import Baseband
from .direct import direct_pulse
from .model import HeadModel
from .pulse import PulseTemplate

_NOISE_QUANTILE = 0.35
_DIRECT_HEARD_S = 2.5e-3
"""Noise is measured after the direct pulse where the record is long enough."""
_CLIP_ERROR = 0.1
_CLIPPED_ERROR = 0.7
_CLIP_REACH_S = 0.5e-3
"""Near clipped samples the flanks are distorted by what the converter cut off, by about this
share of full scale."""
_DEAD_RATIO = 0.02
_DRIFT_FRACTION = 0.02


@dataclass(frozen=True, eq=False)
class Conditioned:
    """A ping ready for fitting.

    Attributes
    ----------
    samples
        complex, shape (2, n), the direct pulse taken off.
    weight
        shape (2, n): 1 / standard deviation of the complex noise plus what the models of the
        direct pulse and of strong echoes may leave; little where clipped, 0 where nothing is
        known (blanked, dead ear).
    noise_sigma
        (left, right) complex standard deviation of the plain noise; NaN for a dead ear.
    alive
        (left, right).
    blanking_end_s
        Until then, since emission, at least one ear is covered by the direct pulse.
    """

    samples: ComplexArray
    weight: FloatArray
    time_s: FloatArray
    step_s: float
    noise_sigma: tuple[float, float]
    alive: tuple[bool, bool]
    clipped: BoolArray
    blanking_end_s: float
    flags: PingFlag


def condition(
    baseband: Baseband, echo: RawEcho, model: HeadModel, model_error: float
) -> Conditioned:
    """Estimate noise, recognise faults, remove the direct pulse, weigh every sample.

    Parameters
    ----------
    model_error : share of an echo's amplitude that its template may miss.
    """
    noise = [
        noise_sigma(row, baseband, pulse)
        for row, pulse in zip(baseband.samples, model.pulses, strict=True)
    ]
    alive = _alive(baseband, echo, noise)
    samples = baseband.samples.copy()
    weight = np.zeros(samples.shape)
    blanking_end = 0.0
    reach = max(1, int(round(_CLIP_REACH_S / baseband.step_s)))
    for ear in range(2):
        if not alive[ear]:
            continue
        profile = noise[ear] * _noise_profile(baseband)
        direct = direct_pulse(
            model.head, baseband, ear, model.pulses[ear], echo.burst_cycles, noise[ear]
        )
        samples[ear] -= direct.samples
        strong = maximum_filter1d(np.abs(samples[ear]), 3)
        variance = (
            profile**2
            + direct.error**2
            + (model_error * strong) ** 2
            + (_CLIP_ERROR * binary_dilation(baseband.clipped[ear], iterations=reach)) ** 2
        )
        # A clipped sample still says when it was loud; by how much, it does not.
        variance += np.where(baseband.clipped[ear], (_CLIPPED_ERROR * strong) ** 2, 0.0)
        known = baseband.time_s > direct.covered_s
        weight[ear] = np.where(known, 1.0 / np.sqrt(variance), 0.0)
        blanking_end = max(blanking_end, direct.covered_s)
    return Conditioned(
        samples=samples,
        weight=weight,
        time_s=baseband.time_s,
        step_s=baseband.step_s,
        noise_sigma=(
            noise[0] if alive[0] else math.nan,
            noise[1] if alive[1] else math.nan,
        ),
        alive=alive,
        clipped=baseband.clipped,
        blanking_end_s=blanking_end,
        flags=_ping_flags(baseband, echo, alive),
    )


def noise_sigma(samples: ComplexArray, baseband: Baseband, pulse: PulseTemplate) -> float:
    """Standard deviation of white complex noise that is as strong within the pulse's band.

    A receiver's own noise peaks at its resonance, so what counts is measured behind the
    matched filter. There the power is exponential: its q-quantile is -ln(1 - q) times its
    mean, and a quantile below the median stays near the noise while echoes fill less than half
    of the record.
    """
    template = pulse.sampled(baseband.step_s)
    match = np.convolve(samples, template[::-1].conj(), "valid")
    late = baseband.time_s[: match.size] > _DIRECT_HEARD_S
    power = np.abs(match[late] if np.count_nonzero(late) > match.size // 2 else match) ** 2
    quantile = float(np.quantile(power, _NOISE_QUANTILE)) / -math.log(1.0 - _NOISE_QUANTILE)
    return math.sqrt(quantile / float(np.sum(np.abs(template) ** 2)))


def _noise_profile(baseband: Baseband) -> FloatArray:
    """Relative noise along the record: where the gain is low the converter's noise weighs more."""
    if np.ptp(baseband.gain) == 0.0:
        return np.ones(baseband.gain.size)
    block = max(8, baseband.gain.size // 12)
    centre, level = [], []
    for first in range(0, baseband.gain.size - block + 1, block):
        part = slice(first, first + block)
        power = np.abs(baseband.samples[:, part]) ** 2
        centre.append(float(baseband.time_s[part].mean()))
        level.append(math.sqrt(float(np.quantile(power, _NOISE_QUANTILE, axis=1).mean())))
    profile = np.interp(baseband.time_s, centre, level)
    return np.asarray(profile / np.median(level))


def _alive(baseband: Baseband, echo: RawEcho, noise: list[float]) -> tuple[bool, bool]:
    peak = np.abs(baseband.samples).max(axis=1)
    # A live ear cannot miss the direct pulse that the other one hears at full strength.
    heard = peak > max(peak) * _DEAD_RATIO
    constant = [not np.ptp(echo.samples[ear]) or noise[ear] <= 0.0 for ear in range(2)]
    fault = (FrontEndFlag.LEFT_FAULT, FrontEndFlag.RIGHT_FAULT)
    alive = [
        bool(heard[ear]) and not constant[ear] and not echo.flags & fault[ear] for ear in range(2)
    ]
    return alive[0], alive[1]


def _ping_flags(baseband: Baseband, echo: RawEcho, alive: tuple[bool, bool]) -> PingFlag:
    flags = PingFlag.NONE
    pairs = (
        (FrontEndFlag.SIMULATED, PingFlag.SIMULATED),
        (FrontEndFlag.REPLAYED, PingFlag.REPLAYED),
        (FrontEndFlag.LEFT_CLIPPED, PingFlag.LEFT_CLIPPED),
        (FrontEndFlag.RIGHT_CLIPPED, PingFlag.RIGHT_CLIPPED),
    )
    for front_end, ping in pairs:
        if echo.flags & front_end:
            flags |= ping
    for ear, (clipped, dead) in enumerate(
        (
            (PingFlag.LEFT_CLIPPED, PingFlag.LEFT_DEAD),
            (PingFlag.RIGHT_CLIPPED, PingFlag.RIGHT_DEAD),
        )
    ):
        if baseband.clipped[ear].any():
            flags |= clipped
        if not alive[ear]:
            flags |= dead
        if _offset_drift(echo, ear):
            flags |= PingFlag.OFFSET_DRIFT
    return flags


def _offset_drift(echo: RawEcho, ear: int) -> bool:
    quarter = echo.n_samples // 4
    first, last = echo.samples[ear, :quarter], echo.samples[ear, -quarter:]
    return abs(float(first.mean()) - float(last.mean())) > _DRIFT_FRACTION * echo.full_scale
