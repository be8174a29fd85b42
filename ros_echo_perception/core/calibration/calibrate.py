"""Calibration of a head from echoes of one thin pole at known places."""

from __future__ import annotations

import dataclasses
import datetime
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from ..errors import CalibrationError, refuse
from ..head import Head
from ..perception.baseband import receiver_filter
from ..perception.config import ProcessingConfig
from ..perception.joint import Priors, excerpt, refine, window_of
from ..perception.model import HeadModel
from ..perception.objects import one_object
from ..perception.pipeline import prepare
from ..types import FloatArray, RawEcho
from .direct import measure_direct_pulse
from .observation import Observation, level_mismatch, observe, residual, signal_share
from .parameters import PARAMETERS, SIGMA, TEMPERATURE_ERROR, apply, values

MIN_PINGS = 8
LEAST_MODEL_ERROR = 0.015
"""What no fit to one pole can promise of other objects: surfaces colour an echo a little."""
_LEAST_LEVEL_ERROR, _UNKNOWN_LEVEL_ERROR = 0.02, 0.1
_HOLD_BACK_EVERY = 4
_MIN_SNR = 10.0
_CURVE_BEARINGS = np.radians(np.arange(-40.0, 41.0, 10.0))


@dataclass(frozen=True)
class CalibrationRow:
    """One parameter: nominal and calibrated value with standard deviation, in ``unit``."""

    name: str
    unit: str
    nominal: float
    value: float
    sigma: float


@dataclass(frozen=True)
class CalibrationReport:
    """The calibrated head and how good it is.

    Attributes
    ----------
    holdback
        Errors on pings that took no part in the fit: bias and root mean square of range (m)
        and bearing (rad), with the nominal and with the calibrated head.
    """

    head: Head
    rows: tuple[CalibrationRow, ...]
    holdback: dict[str, float]


def calibrate_head(
    echoes: Sequence[RawEcho], places: Sequence[tuple[float, float]], nominal: Head
) -> CalibrationReport:
    """Estimate latency, gains, phases, positions, directions, beams and resonances of a unit.

    Parameters
    ----------
    echoes : pings with one thin pole in view; at least 8 with a clear echo.
    places : (range_m, bearing_rad) of the pole's nearest point in each ping.
    nominal : the maker's head.

    Raises
    ------
    CalibrationError
        When the pings do not show the pole or do not vary enough to tell parameters apart.

    Notes
    -----
    Maximum a posteriori: the complex baseband around every echo is compared with the head's
    model at the known place, one complex strength a ping being free; deviations from nominal
    are Gaussian with the usual tolerances. A constant delay (latency) differs from a wrong
    speed of sound by not growing with range. Every fourth ping is held back, its errors are
    reported, then all pings make the final head.
    """
    observations = _observations(echoes, places, nominal)
    held = observations[_HOLD_BACK_EVERY - 1 :: _HOLD_BACK_EVERY]
    used = [o for o in observations if o not in held]
    trial = _finish(nominal, *_fit(used, nominal), used)
    holdback = _holdback(held, nominal, trial)
    deviation, sigma = _fit(observations, nominal)
    head = _finish(nominal, deviation, sigma, observations, holdback)
    return CalibrationReport(head, _rows(nominal, head, deviation, sigma), holdback)


def _observations(
    echoes: Sequence[RawEcho], places: Sequence[tuple[float, float]], nominal: Head
) -> list[Observation]:
    if len(echoes) != len(places):
        raise CalibrationError(
            refuse("places", len(places), f"one for each of the {len(echoes)} pings")
        )
    for number, (range_m, bearing_rad) in enumerate(places):
        if not (0.05 < range_m < 30.0 and abs(bearing_rad) < math.pi / 2):
            raise CalibrationError(
                refuse(
                    f"place of ping {number}",
                    (range_m, bearing_rad),
                    "range 0.05 to 30 m, bearing within +-1.57 rad",
                )
            )
    found = [observe(e, r, b, nominal) for e, (r, b) in zip(echoes, places, strict=True)]
    clear = [o for o in found if signal_share(o, nominal) > _MIN_SNR]
    if len(clear) < MIN_PINGS:
        raise CalibrationError(
            refuse(
                "pings with a clear echo at the stated place",
                len(clear),
                f"{MIN_PINGS} or more",
                "check the places, or bring the pole nearer",
            )
        )
    _check_spread([o.range_m for o in clear], "ranges", 0.3, "m")
    _check_spread([o.bearing_rad for o in clear], "bearings", math.radians(30.0), "rad")
    return clear


def _check_spread(numbers: list[float], name: str, least: float, unit: str) -> None:
    spread = max(numbers) - min(numbers)
    if spread < least:
        raise CalibrationError(
            refuse(
                f"spread of the pole's {name}",
                round(spread, 3),
                f"{least:.2g} {unit} or more",
                "place the pole at several ranges and bearings",
            )
        )


def _fit(observations: list[Observation], nominal: Head) -> tuple[FloatArray, FloatArray]:
    def misfit(scaled: FloatArray) -> FloatArray:
        head = apply(nominal, scaled * SIGMA)
        error = float(scaled[TEMPERATURE_ERROR] * SIGMA[TEMPERATURE_ERROR])
        parts = [residual(o, head, error) for o in observations]
        return np.concatenate([*parts, scaled])

    start = np.zeros(SIGMA.size)
    solution = least_squares(misfit, start, diff_step=1e-3, max_nfev=25, xtol=1e-5, ftol=1e-6)
    scatter = max(float(np.mean(solution.fun**2)), 1.0)
    covariance = np.linalg.inv(solution.jac.T @ solution.jac) * scatter
    return solution.x * SIGMA, np.sqrt(np.diag(covariance)) * SIGMA


def _finish(
    nominal: Head,
    deviation: FloatArray,
    sigma: FloatArray,
    observations: list[Observation],
    holdback: dict[str, float] | None = None,
) -> Head:
    head = apply(nominal, deviation)
    air = float(deviation[TEMPERATURE_ERROR])
    left_over = [_relative_misfit(o, head, air) for o in observations]
    burst = sorted({o.echo.burst_cycles for o in observations})
    temperature = [o.echo.temperature_c for o in observations]
    notes = {
        "date": datetime.date.today().isoformat(),
        "pings": len(observations),
        "temperature_c": round(float(np.nanmean(temperature)), 2),
        "burst_cycles": burst,
        "model_error": round(max(float(np.median(left_over)), LEAST_MODEL_ERROR), 4),
        "level_error": round(_level_error(observations, head, air), 4),
        "sigma": {
            p.name: float(f"{s:.3g}") for p, s in zip(PARAMETERS, sigma.tolist(), strict=True)
        },
        "bearing_curve": _bearing_curve(head, observations[0].echo),
        "direct_pulse": measure_direct_pulse(head, [o.echo for o in observations]),
    }
    if holdback:
        notes["holdback"] = {k: float(f"{v:.4g}") for k, v in holdback.items()}
    return dataclasses.replace(head, calibration=notes)


def _relative_misfit(observation: Observation, head: Head, temperature_error: float) -> float:
    """Share of the echo's amplitude that the model misses, noise taken off."""
    left = residual(observation, head, temperature_error)
    noise = left.size / 2.0
    energy = signal_share(observation, head)
    return math.sqrt(max(float(left @ left) / 2.0 - noise, 0.0) / energy)


def _level_error(observations: list[Observation], head: Head, temperature_error: float) -> float:
    """Scatter of the ears' log level ratio about the model, over the pole's places."""
    ratio = [level_mismatch(o, head, temperature_error) for o in observations]
    known = [r for r in ratio if r is not None]
    if len(known) < MIN_PINGS // 2:
        return _UNKNOWN_LEVEL_ERROR
    return max(float(np.sqrt(np.mean(np.square(known)))), _LEAST_LEVEL_ERROR)


def _bearing_curve(head: Head, echo: RawEcho) -> list[list[float]]:
    """Level difference left - right, dB, over bearing, deg, far from the head."""
    receiver = receiver_filter(head, echo.sample_rate_hz, echo.carrier_hz)
    model = HeadModel(head, 343.0, echo.burst_cycles, receiver)
    gain = model.geometry(np.full(_CURVE_BEARINGS.shape, 3.0), _CURVE_BEARINGS).gain
    level = 20.0 * np.log10(gain[0] / gain[1])
    return [
        [round(math.degrees(b), 1), round(v, 2)]
        for b, v in zip(_CURVE_BEARINGS.tolist(), level.tolist(), strict=True)
    ]


def _holdback(held: list[Observation], nominal: Head, trial: Head) -> dict[str, float]:
    result: dict[str, float] = {"pings": float(len(held))}
    for name, head in (("nominal", nominal), ("calibrated", trial)):
        range_error, bearing_error = np.array([_error(o, head) for o in held]).T
        result |= {
            f"{name}_range_bias_m": float(range_error.mean()),
            f"{name}_range_rms_m": float(np.sqrt(np.mean(range_error**2))),
            f"{name}_bearing_bias_rad": float(bearing_error.mean()),
            f"{name}_bearing_rms_rad": float(np.sqrt(np.mean(bearing_error**2))),
        }
    return result


def _error(observation: Observation, head: Head) -> tuple[float, float]:
    """Range and bearing error of the fit that starts at the pole's true place.

    So the calibration is judged, not the choice among the phase's lobes.
    """
    model, ping = prepare(head, observation.echo)
    start = one_object(observation.range_m, observation.bearing_rad, 1.0)
    window = window_of(model, ping, start)
    config = ProcessingConfig()
    priors = Priors(config.velocity_sigma_m_s, config.max_bearing_rad)
    data = excerpt(ping, ping.samples, window)
    found = refine(model, data, [start], priors)[0].objects
    return (
        float(found.range_m[0]) - observation.range_m,
        float(found.bearing_rad[0]) - observation.bearing_rad,
    )


def _rows(
    nominal: Head, head: Head, deviation: FloatArray, sigma: FloatArray
) -> tuple[CalibrationRow, ...]:
    before, after = values(nominal), values(head)
    after[TEMPERATURE_ERROR] = deviation[TEMPERATURE_ERROR]
    rows = []
    for k, p in enumerate(PARAMETERS):
        relative = p.unit == "%"
        scale = p.display_factor
        rows.append(
            CalibrationRow(
                p.name,
                p.unit,
                0.0 if relative else float(before[k]) * scale,
                float(deviation[k]) * scale if relative else float(after[k]) * scale,
                float(sigma[k]) * scale,
            )
        )
    return tuple(rows)
