"""Which objects explain a ping: added, refined, re-searched and dropped by likelihood."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from ..types import ComplexArray, FloatArray
from .conditioning import Conditioned
from .config import ProcessingConfig
from .joint import (
    Objects,
    Priors,
    Refined,
    no_objects,
    one_object,
    refine,
    remove,
    window_of,
)
from .model import HeadModel
from .pairing import Candidate
from .search import bearing_grid, matched_filter, scan

_SEED_HALF_WIDTH_M = 0.03
_RESEARCH_HALF_WIDTH_M = 0.012
_SWITCH_NATS = 1.0
_EXTRA_ROUNDS = 12


def gain_threshold(model: HeadModel, ping: Conditioned, false_detections_per_ping: float) -> float:
    """Log-likelihood gain that noise exceeds at the accepted rate, nats.

    Notes
    -----
    The gain is at most the summed energy of both ears' matched filters, of which noise exceeds
    x with probability (1 + x) exp(-x); it has as many independent tries as the record is long
    in units of the pulse's noise bandwidth (twice, since maxima are searched).
    """
    heard = ping.weight.max(axis=0) > 0
    duration_s = float(np.count_nonzero(heard)) * ping.step_s
    tries = max(1.0, 2.0 * duration_s * model.pulses[0].noise_bandwidth_hz)
    level = math.log(min(false_detections_per_ping / tries, 0.5))
    both = ping.alive[0] and ping.alive[1]
    extra = (lambda x: math.log1p(x)) if both else (lambda x: 0.0)
    return float(brentq(lambda x: extra(x) - x - level, 0.0, 60.0))


@dataclass(frozen=True, eq=False)
class Explained:
    """The objects that explain a ping.

    Attributes
    ----------
    gain
        shape (k,): nats that the ping's likelihood loses without the object.
    covariance
        shape (k, 3, 3) of (range, bearing, velocity) at the fitted place.
    residual
        complex, shape (2, n): samples less all objects.
    """

    objects: Objects
    gain: FloatArray
    covariance: FloatArray
    residual: ComplexArray
    threshold: float


class ObjectFitter:
    """Fits the objects of one ping."""

    def __init__(self, model: HeadModel, ping: Conditioned, config: ProcessingConfig) -> None:
        self.model = model
        self.ping = ping
        self.config = config
        self.threshold = gain_threshold(model, ping, config.false_detections_per_ping)
        self.bearings = bearing_grid(model, config.max_bearing_rad)
        self.priors = Priors(config.velocity_sigma_m_s, config.max_bearing_rad)
        self.objects = no_objects()
        self.residual = ping.samples.copy()

    def fit(self, candidates: list[Candidate]) -> Explained:
        """Objects from candidates and from what the residual still shows."""
        for candidate in candidates:
            if len(self.objects) >= self.config.max_echoes:
                break
            self._try_add(candidate.mean_delay_s)
        self._add_from_residual()
        self._search_again()
        return self._drop_weak()

    def _try_add(self, delay_s: float) -> bool:
        range_m = self.model.range_of_delay(delay_s)
        if not 0.02 < range_m < self.config.max_range_m:
            return False
        width = _SEED_HALF_WIDTH_M + 0.25 * self.model.head.baseline_m
        found = scan(self.model, self.ping, self.residual, range_m, width, self.bearings)
        best_range, best_bearing, strength, gain = found.best()
        if gain < self.threshold:
            return False
        self.objects = self.objects.join(one_object(best_range, best_bearing, strength))
        self._refine_around(len(self.objects) - 1)
        return True

    def _add_from_residual(self) -> None:
        tried: list[float] = []
        for _ in range(_EXTRA_ROUNDS):
            if len(self.objects) >= self.config.max_echoes:
                return
            matched = matched_filter(self.model, self.ping, self.residual)
            energy = np.sum(matched**2, axis=0)
            for delay in tried:
                energy[np.abs(self.ping.time_s - delay) < 1.5 * self.ping.step_s] = 0.0
            peak = int(np.argmax(energy))
            if energy[peak] < 0.8 * self.threshold:
                return
            tried.append(float(self.ping.time_s[peak]))
            self._try_add(tried[-1])

    def _search_again(self) -> None:
        """Look at each object alone, all others taken off: another lobe may fit better."""
        for i in range(len(self.objects)):
            one = self.objects.take([i])
            alone = self._alone(i)
            found = scan(
                self.model,
                self.ping,
                alone,
                float(one.range_m[0]),
                _RESEARCH_HALF_WIDTH_M,
                self.bearings,
            )
            best_range, best_bearing, strength, gain = found.best()
            here = int(np.argmin(np.abs(self.bearings - one.bearing_rad[0])))
            near = slice(max(here - 2, 0), here + 3)
            if gain > float(found.gain[:, near].max()) + _SWITCH_NATS:
                before = self.objects, self.residual
                cost = self._cost_around(i)
                others = self.objects.take([j for j in range(len(self.objects)) if j != i])
                self.objects = others.join(one_object(best_range, best_bearing, strength))
                self._refine_around(len(self.objects) - 1)
                if self._cost_around(len(self.objects) - 1) > cost:
                    self.objects, self.residual = before

    def _alone(self, i: int) -> ComplexArray:
        others = [j for j in range(len(self.objects)) if j != i]
        return remove(self.model, self.ping, self.objects.take(others), self.ping.samples)

    def _cost_around(self, i: int) -> float:
        window = window_of(self.model, self.ping, self.objects.take([i]))
        left = self.residual[:, window] * self.ping.weight[:, window]
        return float(np.vdot(left, left).real)

    def _cluster(self, i: int) -> list[int]:
        """Objects whose sound overlaps that of object i, in chains, i included."""
        windows = [
            window_of(self.model, self.ping, self.objects.take([j]))
            for j in range(len(self.objects))
        ]
        low, high = windows[i].start, windows[i].stop
        members = {i}
        while True:
            more = {
                j
                for j, w in enumerate(windows)
                if j not in members and w.start < high and w.stop > low
            }
            if not more:
                return sorted(members)
            members |= more
            low = min(windows[j].start for j in members)
            high = max(windows[j].stop for j in members)

    def _refine_around(self, i: int) -> None:
        members = self._cluster(i)
        refined = self._refined(members)
        rest = [j for j in range(len(self.objects)) if j not in members]
        # Members move to the end: the last object stays the last.
        self.objects = self.objects.take(rest).join(refined.objects)
        self.residual = remove(self.model, self.ping, self.objects, self.ping.samples)

    def _refined(self, members: list[int]) -> Refined:
        cluster = self.objects.take(members)
        window = window_of(self.model, self.ping, cluster)
        return refine(self.model, self.ping, window, cluster, self.priors)

    def _drop_weak(self) -> Explained:
        """Drop what the likelihood does not miss, weakest first; measure what stays."""
        done: list[tuple[Objects, FloatArray, FloatArray]] = []
        left = list(range(len(self.objects)))
        while left:
            members = [j for j in self._cluster(left[0]) if j in left]
            done.append(self._measured(members))
            left = [j for j in left if j not in members]
        objects, gains, covariances = no_objects(), [], []
        for part, gain, covariance in done:
            objects = objects.join(part)
            gains.append(gain)
            covariances.append(covariance)
        residual = remove(self.model, self.ping, objects, self.ping.samples)
        return Explained(
            objects,
            np.concatenate(gains) if gains else np.zeros(0),
            np.concatenate(covariances) if covariances else np.zeros((0, 3, 3)),
            residual,
            self.threshold,
        )

    def _measured(self, members: list[int]) -> tuple[Objects, FloatArray, FloatArray]:
        cluster = self.objects.take(members)
        while True:
            if len(cluster) == 0:
                return cluster, np.zeros(0), np.zeros((0, 3, 3))
            window = window_of(self.model, self.ping, cluster)
            full = refine(self.model, self.ping, window, cluster, self.priors)
            cluster = full.objects
            gain = np.array(
                [self._cost_without(cluster, i, window) - full.cost for i in range(len(cluster))]
            )
            weakest = int(np.argmin(gain))
            if gain[weakest] >= self.threshold:
                return cluster, gain, full.covariance
            cluster = cluster.take([i for i in range(len(cluster)) if i != weakest])

    def _cost_without(self, cluster: Objects, i: int, window: slice) -> float:
        others = cluster.take([j for j in range(len(cluster)) if j != i])
        if len(others) == 0:
            sound = self.ping.samples[:, window] * self.ping.weight[:, window]
            return float(np.vdot(sound, sound).real)
        return refine(self.model, self.ping, window, others, self.priors).cost
