"""Which objects explain a ping: added, refined, split, merged, dropped by likelihood."""

from __future__ import annotations

import math

import numpy as np
from scipy.optimize import brentq

from ..types import FloatArray
from .conditioning import Conditioned
from .config import ProcessingConfig
from .interference import find_click, is_click
from .joint import Priors, Refined, signals, window_of
from .model import HeadModel
from .objects import Objects, one_object
from .pairing import Candidate
from .scene import Explained, Rivals, Scene
from .search import Scan, bearing_grid, matched_filter, scan
from .split import best_pairs, implausibility

_SEED_HALF_WIDTH_M = 0.03
_CLICK_NATS = 4.0
_RIVAL_NATS = 4.0
_EXTRA_ROUNDS = 12
_MISFIT_SHARE = 1.0
"""A pair must gain a threshold; one object that leaves less than that needs no look."""
_MAX_LOOKS = 2
_LOBES_TRIED = 3
_CLIP_REACH_S = 0.5e-3
_SURE_FACTOR = 6.0
"""An object whose linearised loss is this many thresholds needs no refit without it."""


def gain_threshold(model: HeadModel, ping: Conditioned, false_detections_per_ping: float) -> float:
    """Log-likelihood gain that noise exceeds at the accepted rate, nats.

    Notes
    -----
    The gain is at most the summed energy of both ears' matched filters, of which noise exceeds
    x with probability (1 + x) exp(-x); it has as many independent tries as the record is long
    in units of the pulse's noise bandwidth, five times over: maxima over delay and bearing are
    searched, and the noise's level is itself an estimate (factor measured on simulated noise).
    """
    heard = ping.weight.max(axis=0) > 0
    duration_s = float(np.count_nonzero(heard)) * ping.step_s
    tries = max(1.0, 5.0 * duration_s * model.pulses[0].noise_bandwidth_hz)
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
        self._searches_left = config.max_pair_searches
        self._reach_m = model.speed_m_s * model.pulses[0].envelope_sigma_s

    def fit(self, candidates: list[Candidate]) -> Explained:
        """Objects from candidates and from what the residual still shows."""
        self._add_in_waves(candidates)
        self._split_misfits()
        self._add_from_residual()
        self._reconsider_close()
        return self._drop_weak()

    # ------------------------------------------------------------------ steps of fit()

    def _add_in_waves(self, candidates: list[Candidate]) -> None:
        """The strongest candidate of each neighbourhood first, all of a wave at once."""
        reach = self.model.pulse_pair.core_end_s - self.model.pulse_pair.core_start_s
        pending = [c.mean_delay_s for c in candidates]
        while pending:
            wave: list[float] = []
            for delay in pending:
                if all(abs(delay - other) > reach for other in wave):
                    wave.append(delay)
            pending = [d for d in pending if d not in wave]
            starts = [found for found in map(self._look, wave) if found is not None]
            starts = starts[: self.config.max_echoes - len(self.scene)]
            if starts:
                refined = self.scene.refined_apart([one for one, _ in starts])
                for result, (_, found) in zip(refined, starts, strict=True):
                    self.scene.add(result, found=found)
                self.scene.settle_all()

    def _look(self, delay_s: float) -> tuple[Objects, Scan] | None:
        """The best object near a delay, unless noise or a click explains what is there."""
        range_m = self.model.range_of_delay(delay_s)
        if len(self.scene) >= self.config.max_echoes:
            return None
        if not self.range_min_m < range_m < self.config.max_range_m:
            return None
        width = _SEED_HALF_WIDTH_M + 0.25 * self.model.head.baseline_m
        residual = self.scene.residual
        found = scan(self.model, self.ping, residual, range_m, width, self.bearings)
        best_range, best_bearing, strength, gain = found.best()
        if gain < self.threshold or self._beside_clipped(delay_s):
            return None
        if self._take_off_click(delay_s, gain):
            return None
        return one_object(best_range, best_bearing, strength), found

    def _beside_clipped(self, delay_s: float) -> bool:
        """Whether an object already accounts for the overdriven stretch at a delay.

        What a clipped echo leaves behind looks like more echoes, but is distortion.
        """
        pair, time_s = self.model.pulse_pair, self.ping.time_s
        first = int(np.searchsorted(time_s, delay_s + pair.start_s - _CLIP_REACH_S))
        last = int(np.searchsorted(time_s, delay_s + pair.end_s))
        if not self.ping.clipped[:, first:last].any():
            return False
        return any(i.core.start <= last and i.core.stop > first for i in self.scene.items)

    def _try_add(self, delay_s: float) -> None:
        start = self._look(delay_s)
        if start is not None:
            new = self.scene.add_unrefined(start[0])
            self.scene.settle([self.scene.cluster(new)])

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
        for _ in range(self._searches_left):
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

    def _reconsider_close(self) -> None:
        """Close objects: perhaps one explains both (one repaired the other's slip), or a better
        pair does."""
        for _ in range(_MAX_LOOKS):
            pairs = self._close_pairs()
            if not any(self._try_merge(pair) for pair in pairs):
                break
        for pair in self._close_pairs()[: self._searches_left]:
            if not any(self.scene.rivals(pair)):
                self._try_pairs(pair)

    def _drop_weak(self) -> Explained:
        """Drop what the likelihood does not miss, weakest first; measure what stays."""
        scene = self.scene
        scene.settle_all()
        gain = self._gains()
        while gain.size and gain.min() < self.threshold:
            weakest = int(np.argmin(gain))
            rest = [i for i in scene.cluster(weakest) if i != weakest]
            scene.remove([weakest])
            if rest:
                scene.settle([[i - (i > weakest) for i in rest]])
            gain = self._gains()
        return Explained(scene, gain, self.threshold, self.interference)

    # ------------------------------------------------------------------------- helpers

    def _gains(self) -> FloatArray:
        """What the likelihood loses without each object, the others of its cluster refitted."""
        scene = self.scene
        gain = np.array([item.fitted.loss for item in scene.items])
        for i in np.nonzero(gain < _SURE_FACTOR * self.threshold)[0].tolist():
            members = scene.cluster(i)
            samples, window = scene.alone(members), scene.span(members)
            rest = scene.objects.take([j for j in members if j != i])
            without = (
                scene.refined(rest, samples, window).cost
                if len(rest)
                else scene.silence_cost(samples, window)
            )
            gain[i] = without - scene.silence_cost(scene.residual, window)
        return gain

    def _close_pairs(self) -> list[list[int]]:
        r = self.scene.objects.range_m
        return [[j, i] for i in range(r.size) for j in range(i) if abs(r[i] - r[j]) < self._reach_m]

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
        before = scene.silence_cost(scene.residual, window)
        after = scene.refined(others, samples, window)
        if after.cost > before - extra:
            return False
        scene.replace(members, after)
        return True

    def _try_pairs(self, members: list[int]) -> bool:
        """Put the best pair in the place of one or two objects, if the likelihood gains."""
        scene = self.scene
        window = scene.span(members)
        if self.ping.clipped[:, window].any():
            return False
        self._searches_left -= 1
        samples = scene.alone(members)
        centre = float(np.mean(scene.objects.range_m[members]))
        starts = best_pairs(self.model, self.ping, samples, centre, self.config)
        if not starts:
            return False
        starts += [scene.objects.take(members)] if len(members) == 2 else self._next_to(members)
        pairs = scene.refined_rivals(starts, samples, window)
        score = np.array([self._score(pair) for pair in pairs])
        best = pairs[int(np.argmin(score))]
        if len(members) == 1 and float(score.min()) > self._score_now(members, window):
            return False
        weight = np.exp(-(score - score.min()))
        rivals = rivals_of(best.objects, [p.objects for p in pairs], weight)
        scene.replace(members, best, rivals)
        return True

    def _next_to(self, members: list[int]) -> list[Objects]:
        """An object, in each of its likeliest lobes, and the best second one beside it."""
        scene = self.scene
        samples, here = scene.alone(members), float(scene.objects.range_m[members[0]])
        first = scan(self.model, self.ping, samples, here, 0.2 * self._reach_m, self.bearings)
        pairs = []
        for bearing, strength, _ in first.tops()[:_LOBES_TRIED]:
            one = one_object(first.range_m, bearing, strength)
            left = samples.copy()
            window = window_of(self.model, self.ping, one)
            rendered = signals(self.model, one, self.ping.time_s[window])
            left[:, window] -= strength * rendered.value[:, 0, :]
            second = scan(self.model, self.ping, left, here, self._reach_m, self.bearings)
            pairs.append(one.join(one_object(*second.best()[:3])))
        return pairs

    def _score(self, refined: Refined) -> float:
        return refined.cost + self._implausibility(refined.objects)

    def _score_now(self, members: list[int], window: slice) -> float:
        """What a pair in the place of one object must come below."""
        cost = self.scene.silence_cost(self.scene.residual, window)
        return cost + self._implausibility(self.scene.objects.take(members)) - self.threshold

    def _implausibility(self, objects: Objects) -> float:
        gain = self.model.geometry(objects.range_m, objects.bearing_rad).gain.max(axis=0)
        return float(np.sum(implausibility(np.abs(objects.strength) * gain, gain)))


def rivals_of(best: Objects, pairs: list[Objects], weight: FloatArray) -> list[Rivals]:
    """Bearings that likely pairs give each of the best two objects, by rank of bearing.

    The best pair's own bearings come first.

    Parameters
    ----------
    weight : shape (len(pairs),), relative to the best pair's 1.
    """
    keep = weight > math.exp(-_RIVAL_NATS)
    if np.count_nonzero(keep) < 2:
        return [(), ()]
    order = np.argsort(weight)[::-1]
    order = order[keep[order]]
    bearings = np.array([np.sort(p.bearing_rad) for p in pairs])[order]
    share = weight[order] / weight[order].sum()
    rank = np.argsort(np.argsort(best.bearing_rad))
    return [tuple(zip(bearings[:, r].tolist(), share.tolist(), strict=True)) for r in rank.tolist()]
