"""Which objects explain a ping: added, refined, split, re-searched, dropped by likelihood."""

from __future__ import annotations

import math

import numpy as np
from scipy.optimize import brentq

from ..types import FloatArray
from .conditioning import Conditioned
from .config import ProcessingConfig
from .interference import find_click, is_click
from .joint import Priors, Refined
from .model import HeadModel
from .objects import Objects, one_object
from .pairing import Candidate
from .scene import Explained, Rivals, Scene
from .search import bearing_grid, matched_filter, scan
from .split import best_pairs

_SEED_HALF_WIDTH_M = 0.03
_RESEARCH_HALF_WIDTH_M = 0.012
_SWITCH_NATS = 1.0
_CLICK_NATS = 4.0
_RIVAL_NATS = 4.0
_EXTRA_ROUNDS = 12
_MISFIT_SHARE = 0.7
"""A pair must gain a threshold; one object that leaves much less than that needs no look."""
_MAX_LOOKS = 3
_SURE_FACTOR = 6.0
"""An object whose linearised loss is this many thresholds needs no refit without it."""


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

    def excess(x: float) -> float:
        return (math.log1p(x) if both else 0.0) - x - level

    return float(brentq(excess, 0.0, 60.0))


def range_min(model: HeadModel, ping: Conditioned) -> float:
    """Nearest range whose echo peaks after the direct pulse has ended, m."""
    first_peak_s = ping.blanking_end_s - model.pulses[0].peak_time_s
    return model.range_of_delay(max(first_peak_s, 0.0))


class ObjectFitter:
    """Fits the objects of one ping; use once."""

    def __init__(self, model: HeadModel, ping: Conditioned, config: ProcessingConfig) -> None:
        self.model = model
        self.ping = ping
        self.config = config
        self.threshold = gain_threshold(model, ping, config.false_detections_per_ping)
        self.bearings = bearing_grid(model, config.max_bearing_rad)
        self.range_min_m = range_min(model, ping)
        self.scene = Scene(model, ping, Priors(config.velocity_sigma_m_s, config.max_bearing_rad))
        self.interference = False
        self._reach_m = model.speed_m_s * model.pulses[0].envelope_sigma_s

    def fit(self, candidates: list[Candidate]) -> Explained:
        """Objects from candidates and from what the residual still shows."""
        for candidate in candidates:
            self._try_add(candidate.mean_delay_s)
        self._split_misfits()
        self._add_from_residual()
        self._search_again()
        self._reconsider_close()
        return self._drop_weak()

    # ------------------------------------------------------------------ steps of fit()

    def _try_add(self, delay_s: float) -> None:
        """Add an object near a delay, unless noise or a click explains what is there."""
        range_m = self.model.range_of_delay(delay_s)
        if len(self.scene) >= self.config.max_echoes:
            return
        if not self.range_min_m < range_m < self.config.max_range_m:
            return
        width = _SEED_HALF_WIDTH_M + 0.25 * self.model.head.baseline_m
        residual = self.scene.residual
        found = scan(self.model, self.ping, residual, range_m, width, self.bearings)
        best_range, best_bearing, strength, gain = found.best()
        if gain < self.threshold or self._take_off_click(delay_s, gain):
            return
        self.scene.append(one_object(best_range, best_bearing, strength))
        self.scene.settle(self.scene.cluster(len(self.scene) - 1))

    def _take_off_click(self, delay_s: float, object_gain: float) -> bool:
        peak_s = delay_s + self.model.pulses[0].peak_time_s
        click = find_click(
            self.model.head, self.model.receiver, self.ping, self.scene.residual, peak_s
        )
        if not is_click(click, object_gain, _CLICK_NATS):
            return False
        self.scene.residual[:, click.window] -= click.sound
        self.interference = True
        return True

    def _split_misfits(self) -> None:
        """Where objects leave too much behind, see whether a pair explains it better.

        Two objects at one range pose as one between them, a maximum of the likelihood for one
        object from which no small step leads away.
        """
        for _ in range(_MAX_LOOKS):
            misfit = [self.scene.misfit(i) for i in range(len(self.scene))]
            if not misfit or max(misfit) < _MISFIT_SHARE * self.threshold:
                return
            worst = int(np.argmax(misfit))
            distance = np.abs(self.scene.objects.range_m - self.scene.objects.range_m[worst])
            nearest = np.argsort(distance)[:2].tolist()
            members = [j for j in nearest if distance[j] < self._reach_m]
            if not self._try_pairs(members):
                return

    def _add_from_residual(self) -> None:
        tried: list[float] = []
        for _ in range(_EXTRA_ROUNDS):
            matched = matched_filter(self.model, self.ping, self.scene.residual)
            energy = np.sum(matched**2, axis=0)
            for delay in tried:
                energy[np.abs(self.ping.time_s - delay) < 1.5 * self.ping.step_s] = 0.0
            peak = int(np.argmax(energy))
            if energy[peak] < self.threshold:
                return
            tried.append(float(self.ping.time_s[peak]))
            self._try_add(tried[-1])

    def _search_again(self) -> None:
        """Look at each object alone, all others taken off: another lobe may fit better."""
        for i in range(len(self.scene)):
            if len(self.scene.cluster(i)) == 1:
                continue
            one = self.scene.objects.take([i])
            samples = self.scene.alone([i])
            width = _RESEARCH_HALF_WIDTH_M
            found = scan(
                self.model, self.ping, samples, float(one.range_m[0]), width, self.bearings
            )
            best_range, best_bearing, strength, gain = found.best()
            here = int(np.argmin(np.abs(self.bearings - one.bearing_rad[0])))
            near = slice(max(here - 2, 0), here + 3)
            if gain > float(found.gain[:, near].max()) + _SWITCH_NATS:
                self._try_instead([i], one_object(best_range, best_bearing, strength), 0.0)

    def _reconsider_close(self) -> None:
        """Close objects: perhaps one explains both (one repaired the other's slip), or a better
        pair does."""
        for _ in range(_MAX_LOOKS):
            pairs = self._close_pairs()
            if not any(self._try_merge(pair) for pair in pairs):
                break
        for pair in self._close_pairs()[:_MAX_LOOKS]:
            if not any(self.scene.rivals[i] for i in pair):
                self._try_pairs(pair)

    def _drop_weak(self) -> Explained:
        """Drop what the likelihood does not miss, weakest first; measure what stays."""
        count = len(self.scene)
        ranges = self.scene.objects.range_m.copy()
        measured: list[tuple[Refined, FloatArray]] = []
        for members in self.scene.clusters():
            # Clusters are refined one by one, which reorders the list: find them by range.
            now = [int(np.argmin(np.abs(self.scene.objects.range_m - ranges[i]))) for i in members]
            measured.append(self._measure(sorted(set(now))))
        if count and measured:
            order = [m for m in measured if len(m[0].objects)]
            gain = np.concatenate([g for _, g in order]) if order else np.zeros(0)
            covariance = (
                np.concatenate([r.covariance for r, _ in order]) if order else np.zeros((0, 3, 3))
            )
        else:
            gain, covariance = np.zeros(0), np.zeros((0, 3, 3))
        return Explained(self.scene, gain, covariance, self.threshold, self.interference)

    # ------------------------------------------------------------------------- helpers

    def _measure(self, members: list[int]) -> tuple[Refined, FloatArray]:
        """Refine a cluster, dropping its weakest object as long as that costs too little."""
        scene = self.scene
        while True:
            samples, window = scene.alone(members), scene.span(members)
            refined = scene.refined(scene.objects.take(members), samples, window)
            gain = refined.strength_loss.copy()
            for i in np.nonzero(gain < _SURE_FACTOR * self.threshold)[0].tolist():
                rest = [j for j in range(len(members)) if j != i]
                gain[i] = self._cost(refined.objects.take(rest), members, window) - refined.cost
            rivals = [scene.rivals[i] for i in members]
            weakest = int(np.argmin(gain))
            if gain[weakest] >= self.threshold:
                scene.replace(members, refined.objects, rivals)
                return refined, gain
            keep = [i for i in range(len(members)) if i != weakest]
            members = scene.replace(members, refined.objects.take(keep), [rivals[i] for i in keep])
            if not members:
                return Refined(
                    refined.objects.take([]), 0.0, np.zeros((0, 3, 3)), np.zeros(0)
                ), np.zeros(0)

    def _cost(self, objects: Objects, members: list[int], window: slice) -> float:
        samples = self.scene.alone(members)
        if len(objects):
            return self.scene.refined(objects, samples, window).cost
        return self.scene.silence_cost(samples, window)

    def _close_pairs(self) -> list[list[int]]:
        r = self.scene.objects.range_m
        return [
            [j, i] for i in range(r.size) for j in range(i) if abs(r[i] - r[j]) < self._reach_m
        ]

    def _try_merge(self, pair: list[int]) -> bool:
        samples = self.scene.alone(pair)
        centre = float(np.mean(self.scene.objects.range_m[pair]))
        found = scan(self.model, self.ping, samples, centre, 0.5 * self._reach_m, self.bearings)
        best_range, best_bearing, strength, _ = found.best()
        return self._try_instead(
            pair, one_object(best_range, best_bearing, strength), -self.threshold
        )

    def _try_instead(self, members: list[int], others: Objects, extra: float) -> bool:
        """Put other objects in the place of some, if the refined likelihood gains by more."""
        scene = self.scene
        samples, window = scene.alone(members), scene.span(members)
        before = scene.refined(scene.objects.take(members), samples, window).cost
        after = scene.refined(others, samples, window)
        if after.cost > before - extra:
            return False
        scene.replace(members, after.objects)
        return True

    def _try_pairs(self, members: list[int]) -> bool:
        """Put the best pair in the place of one or two objects, if the likelihood gains."""
        scene = self.scene
        window = scene.span(members)
        if self.ping.clipped[:, window].any():
            return False
        samples = scene.alone(members)
        centre = float(np.mean(scene.objects.range_m[members]))
        starts = best_pairs(self.model, self.ping, samples, centre, self.config)
        if not starts:
            return False
        now = scene.refined(scene.objects.take(members), samples, window)
        pairs = scene.refined_rivals(starts, samples, window)
        score = np.array([pair.cost + self._implausibility(pair.objects) for pair in pairs])
        best = pairs[int(np.argmin(score))]
        extra = self.threshold if len(members) == 1 else 0.0
        if float(score.min()) > now.cost + self._implausibility(now.objects) - extra:
            return False
        weight = np.exp(-(score - score.min()))
        scene.replace(
            members, best.objects, rivals_of(best.objects, [p.objects for p in pairs], weight)
        )
        return True

    def _implausibility(self, objects: Objects) -> float:
        """Prior cost in nats: strong objects that cancel each other, or lie off the beams.

        Strengths are as likely in every decade, p(a) ~ 1/|a|^2, and a bearing is as likely as
        its better ear's gain.
        """
        gain = self.model.geometry(objects.range_m, objects.bearing_rad).gain.max(axis=0)
        heard = np.maximum(np.abs(objects.strength) * gain, 1e-12)
        return float(np.sum(2.0 * np.log(heard) - np.log(np.maximum(gain, 1e-3))))


def rivals_of(best: Objects, pairs: list[Objects], weight: FloatArray) -> list[Rivals]:
    """Bearings that other likely pairs give each of the best two objects, by rank of bearing.

    Parameters
    ----------
    weight : shape (len(pairs),), relative to the best pair's 1.
    """
    keep = weight > math.exp(-_RIVAL_NATS)
    if np.count_nonzero(keep) < 2:
        return [(), ()]
    bearings = np.array([np.sort(p.bearing_rad) for p in pairs])[keep]
    share = weight[keep] / weight[keep].sum()
    rank = np.argsort(np.argsort(best.bearing_rad))
    return [
        tuple(zip(bearings[:, r].tolist(), share.tolist(), strict=True)) for r in rank.tolist()
    ]
