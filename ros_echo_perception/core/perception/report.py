"""From fitted objects to detections: bearings with all their peaks, sigmas, SNR, flags."""

from __future__ import annotations

import math

from ..air import speed_of_sound
from ..head import Head
from ..types import Detection, DetectionFlag, Ears, FloatArray
from .bearing import BearingPosterior, among_rivals, bearing_posterior
from .conditioning import Conditioned
from .config import ProcessingConfig
from .model import HeadModel
from .multipath import flag_multipath
from .objects import Objects
from .scene import Explained, Scene
from .search import bearing_grid, scan

_POSTERIOR_HALF_WIDTH_M = 0.012
_NOMINAL_LEVEL_ERROR = 0.2
"""1.5 dB between the ears (log ratio 0.17) and 1.5 degrees of yaw: usual tolerances."""
_NOMINAL_LATENCY_SIGMA_S = 40e-6
"""Drivers and transducers delay a burst by some tens of microseconds (common practice)."""
_HEARD_DB = 8.0
"""An ear hears an echo from this SNR on; below, noise reaches it now and then."""


def report_detections(
    explained: Explained, config: ProcessingConfig, nearest_m: float
) -> tuple[Detection, ...]:
    """Detections of one ping beyond the nearest measurable range, nearest first."""
    bearings = bearing_grid(explained.scene.model, config.max_bearing_rad)
    found = [_detection(explained, i, bearings, config) for i in range(len(explained.scene))]
    inside = [d for d in found if nearest_m <= d.range_m <= config.max_range_m]
    return flag_multipath(sorted(inside, key=lambda d: d.range_m))


def _detection(
    explained: Explained, i: int, bearings: FloatArray, config: ProcessingConfig
) -> Detection:
    scene = explained.scene
    model, ping, item = scene.model, scene.ping, scene.items[i]
    one = scene.objects.take([i])
    covariance = item.fitted.covariance
    posterior = _posterior(scene, i, bearings)
    amplitude, snr_db = _per_ear(model, ping, one)
    velocity_sigma = math.sqrt(float(covariance[2, 2]))
    informative = velocity_sigma < 0.7 * config.velocity_sigma_m_s
    range_m, variance_m2 = float(one.range_m[0]), float(covariance[0, 0])
    if posterior.ambiguous:
        variance_m2 = max(variance_m2, posterior.range_sigma_m**2)
    return Detection(
        range_m=range_m,
        bearing_rad=posterior.bearing_rad,
        range_sigma_m=_range_sigma(range_m, variance_m2, model, config),
        bearing_sigma_rad=posterior.sigma_rad,
        bearing_min_rad=posterior.interval_rad[0],
        bearing_max_rad=posterior.interval_rad[1],
        range_bearing_covariance=0.0 if posterior.ambiguous else float(covariance[0, 1]),
        alternatives=posterior.alternatives,
        ear_amplitude=amplitude,
        ear_snr_db=snr_db,
        ears=_ears(ping, snr_db),
        existence_probability=_existence(float(explained.gain[i]), explained.threshold),
        envelope_sigma_s=model.pulses[0].envelope_sigma_s,
        radial_velocity_m_s=float(one.velocity_m_s[0]) if informative else math.nan,
        radial_velocity_sigma_m_s=velocity_sigma if informative else math.nan,
        flags=_flags(explained, i, posterior),
    )


def _posterior(scene: Scene, i: int, bearings: FloatArray) -> BearingPosterior:
    item = scene.items[i]
    sigma = math.sqrt(max(float(item.fitted.covariance[1, 1]), 1e-12))
    if item.rivals:
        return among_rivals(item.rivals, sigma)
    range_m = float(scene.objects.range_m[i])
    found = item.scan if len(scene.cluster(i)) == 1 else None
    if found is None:
        width = _POSTERIOR_HALF_WIDTH_M
        found = scan(scene.model, scene.ping, scene.alone([i]), range_m, width, bearings)
    bearing_rad = float(scene.objects.bearing_rad[i])
    return bearing_posterior(found, bearing_rad, sigma, level_error(scene.model.head))


def level_error(head: Head) -> float:
    """Standard deviation of the log level ratio of the ears that a head file leaves."""
    return float(head.calibration.get("level_error", _NOMINAL_LEVEL_ERROR))


def _range_sigma(
    range_m: float, variance_m2: float, model: HeadModel, config: ProcessingConfig
) -> float:
    """What the fit leaves, widened by air, latency and the unknown curvature of the object."""
    slope = (speed_of_sound(21.0) - speed_of_sound(20.0)) / model.speed_m_s
    air_m = range_m * slope * config.temperature_sigma_c
    known = model.head.calibration.get("sigma", {})
    latency_m = 0.5 * model.speed_m_s * float(known.get("latency", _NOMINAL_LATENCY_SIGMA_S))
    # A flat object's mirror image answers h^2 / (8 r) later than a point, h half the baseline.
    curvature_m = (model.head.baseline_m / 2.0) ** 2 / (8.0 * range_m)
    return math.hypot(math.sqrt(max(variance_m2, 0.0)), air_m, latency_m, curvature_m)


def _per_ear(
    model: HeadModel, ping: Conditioned, one: Objects
) -> tuple[tuple[float, float], tuple[float, float]]:
    gain = model.geometry(one.range_m, one.bearing_rad).gain[:, 0]
    amplitude, snr = [], []
    for ear, pulse in enumerate(model.pulses):
        if not ping.alive[ear]:
            amplitude.append(math.nan)
            snr.append(-math.inf)
            continue
        peak = float(gain[ear] * abs(one.strength[0]))
        noise2 = ping.noise_sigma[ear] ** 2 * pulse.noise_bandwidth_hz * ping.step_s
        amplitude.append(peak)
        snr.append(10.0 * math.log10(max(peak**2 / noise2, 1e-12)))
    return (amplitude[0], amplitude[1]), (snr[0], snr[1])


def _ears(ping: Conditioned, snr_db: tuple[float, float]) -> Ears:
    heard = [ping.alive[ear] and snr_db[ear] >= _HEARD_DB for ear in range(2)]
    if heard[0] and not heard[1]:
        return Ears.LEFT_ONLY
    if heard[1] and not heard[0]:
        return Ears.RIGHT_ONLY
    return Ears.BOTH


def _flags(explained: Explained, i: int, posterior: BearingPosterior) -> DetectionFlag:
    scene = explained.scene
    ping, item = scene.ping, scene.items[i]
    flags = DetectionFlag.NONE
    if ping.clipped[:, item.window].any():
        flags |= DetectionFlag.SATURATED
    if posterior.ambiguous:
        flags |= DetectionFlag.BEARING_AMBIGUOUS
    # Several pairs of objects explain the ears alike, or one object explains them badly.
    if item.rivals or scene.misfit(i) > explained.threshold:
        flags |= DetectionFlag.CUES_CONTRADICT
    if float(ping.time_s[item.window.start]) < ping.blanking_end_s:
        flags |= DetectionFlag.NEAR_DIRECT_PULSE
    return flags


def _existence(gain: float, threshold: float) -> float:
    """Odds against noise: at the threshold noise and echoes are about equally frequent."""
    return 1.0 / (1.0 + math.exp(-min(gain - threshold, 50.0)))
