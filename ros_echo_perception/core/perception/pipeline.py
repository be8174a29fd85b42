"""The whole way from one raw echo to detections, as named steps. Read this first."""

from __future__ import annotations

import math
import time

import numpy as np

from ..air import TEMPERATURE_RANGE_C, speed_of_sound
from ..head import Head
from ..types import EnvelopeFit, PingFlag, PingResult, RawEcho
from .baseband import Baseband, receiver_filter, to_baseband
from .conditioning import Conditioned, condition
from .config import ProcessingConfig
from .consistency import PingToPing
from .fit import ObjectFitter
from .model import HeadModel
from .report import report_detections
from .scene import Explained
from .search import matched_filter
from .seeds import find_candidates

_OTHER_BURST_ERROR = 0.04
_NOMINAL_MODEL_ERROR = 0.05
"""Share of an echo's amplitude that the template of an uncalibrated head may miss."""


class EchoPipeline:
    """Turns the raw echoes of one head into detections, ping by ping.

    Pings are judged one at a time, but for one thing: whether an echo that the ping before did
    not show is to be believed (`PingToPing`). So pings come in the order of their emission.
    """

    def __init__(self, head: Head, config: ProcessingConfig | None = None) -> None:
        self.head = head
        self.config = config or ProcessingConfig()
        self._ping_to_ping = PingToPing()

    def process(self, echo: RawEcho) -> PingResult:
        """All echoes of one ping.

        Parameters
        ----------
        echo : any sample rate, carrier below half of it; pulse and geometry follow the head.
        """
        model = head_model(self.head, echo, self.config)
        baseband = to_baseband(echo, model.receiver)
        ping = condition(baseband, echo, model, model_error(self.head, echo.burst_cycles))
        matched = matched_filter(model, ping, ping.samples)
        candidates = find_candidates(model, ping, matched, self.config.max_bearing_rad)
        fitter = ObjectFitter(model, ping, self.config)
        explained = fitter.fit(candidates)
        found = report_detections(explained, self.config, fitter.range_min_m)
        weighed = self._ping_to_ping.weigh(found, echo.emission_time_s)
        likely = self.config.min_existence_probability
        return PingResult(
            emission_time_s=echo.emission_time_s,
            sequence=echo.sequence,
            detections=tuple(d for d in weighed if d.existence_probability >= likely),
            speed_of_sound_m_s=model.speed_m_s,
            range_min_m=fitter.range_min_m,
            range_max_m=self._range_max(model, echo),
            beam_half_width_rad=self.head.transmitter.half_power_beam_width_rad / 2.0,
            noise=self._noise(model, ping),
            flags=ping.flags | _more_flags(self.head, echo, explained),
            envelope=_envelope(baseband, ping, explained),
        )

    def reset(self) -> None:
        """Forget earlier pings (time jumped, recording looped)."""
        self._ping_to_ping.reset()

    def _range_max(self, model: HeadModel, echo: RawEcho) -> float:
        # The echo's body must lie inside the record.
        last_delay_s = echo.end_time_s - model.pulses[0].peak_time_s
        return min(model.range_of_delay(last_delay_s), self.config.max_range_m)

    @staticmethod
    def _noise(model: HeadModel, ping: Conditioned) -> tuple[float, float]:
        share = [math.sqrt(p.noise_bandwidth_hz * ping.step_s / 2.0) for p in model.pulses]
        return ping.noise_sigma[0] * share[0], ping.noise_sigma[1] * share[1]


def head_model(head: Head, echo: RawEcho, config: ProcessingConfig) -> HeadModel:
    """The head in the air of one ping; what the echo does not say, the settings say."""
    temperature = echo.temperature_c
    if not math.isfinite(temperature):
        temperature = config.default_temperature_c
    humidity = echo.relative_humidity
    if not math.isfinite(humidity):
        humidity = config.default_relative_humidity
    low, high = TEMPERATURE_RANGE_C
    speed = speed_of_sound(min(max(temperature, low), high), min(max(humidity, 0.0), 1.0))
    receiver = receiver_filter(head, echo.sample_rate_hz, echo.carrier_hz)
    return HeadModel(head, speed, echo.burst_cycles, receiver)


def model_error(head: Head, burst_cycles: float) -> float:
    """Share of an echo's amplitude that this head's template may miss."""
    known = float(head.calibration.get("model_error", _NOMINAL_MODEL_ERROR))
    return known if _burst_is_calibrated(head, burst_cycles) else max(known, _OTHER_BURST_ERROR)


def _burst_is_calibrated(head: Head, burst_cycles: float) -> bool:
    return burst_cycles in head.calibration.get("burst_cycles", [burst_cycles])


def prepare(
    head: Head, echo: RawEcho, config: ProcessingConfig | None = None
) -> tuple[HeadModel, Conditioned]:
    """The steps before the fit, for tools that look at one ping closely."""
    model = head_model(head, echo, config or ProcessingConfig())
    baseband = to_baseband(echo, model.receiver)
    return model, condition(baseband, echo, model, model_error(head, echo.burst_cycles))


def _more_flags(head: Head, echo: RawEcho, explained: Explained) -> PingFlag:
    flags = PingFlag.INTERFERENCE if explained.interference else PingFlag.NONE
    if not _burst_is_calibrated(head, echo.burst_cycles):
        flags |= PingFlag.BURST_UNCALIBRATED
    return flags


def _envelope(baseband: Baseband, ping: Conditioned, explained: Explained) -> EnvelopeFit:
    sigma = [0.0 if math.isnan(s) else s for s in ping.noise_sigma]
    factor = math.sqrt(explained.threshold)
    return EnvelopeFit(
        first_time_s=float(baseband.time_s[0]),
        step_s=baseband.step_s,
        measured=np.abs(baseband.samples),
        fitted=np.abs(ping.samples - explained.scene.residual),
        threshold=(sigma[0] * factor, sigma[1] * factor),
        blanking_end_s=ping.blanking_end_s,
    )


def warm_up(head: Head, config: ProcessingConfig | None = None) -> float:
    """Run one synthetic ping through the chain, so that the first real one need not wait.

    The inner loops are compiled when they first run (once on a machine: the code is kept) and
    loaded when they first run in a process.

    Parameters
    ----------
    head, config : of the pipeline that is about to start.

    Returns
    -------
    Seconds that it took.
    """
    start_s = time.perf_counter()
    rate_hz = head.sample_rate_hz
    n = int(0.03 * rate_hz)
    time_s = np.arange(n) / rate_hz
    wave = 20.0 * np.random.default_rng(0).standard_normal((2, n))
    # Bursts that are no echoes, close and strong, so that every kind of look is taken.
    for delay_s in (0.010, 0.0102, 0.0104, 0.018):
        hump = np.exp(-0.5 * ((time_s - delay_s) / 1.5e-4) ** 2)
        wave += 4e3 * hump * np.cos(2.0 * math.pi * head.carrier_hz * (time_s - delay_s))
    EchoPipeline(head, config).process(
        RawEcho(
            samples=np.rint(wave).astype(np.int16),
            sample_rate_hz=rate_hz,
            carrier_hz=head.carrier_hz,
            burst_cycles=3.0,
            emission_time_s=0.0,
        )
    )
    return time.perf_counter() - start_s
