"""Which objects explain a ping: added, refined, split, re-searched, dropped by likelihood."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from ..types import ComplexArray, FloatArray
from .conditioning import Conditioned
from .config import ProcessingConfig
from .joint import Objects, Priors, Refined, no_objects, one_object, refine, signals, window_of
from .interference import find_click, is_click
from .model import HeadModel
from .pairing import Candidate
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
_MAX_SPLITS = 3
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
    extra = (lambda x: math.log1p(x)) if both else (lambda x: 0.0)
    return float(brentq(lambda x: extra(x) - x - level, 0.0, 60.0))


def range_min(model: HeadModel, ping: Conditioned) -> float:
    """Nearest range whose echo peaks after the direct pulse has ended, m."""
    first_peak_s = ping.blanking_end_s - model.pulses[0].peak_time_s
    return model.range_of_delay(max(first_peak_s, 0.0))


Rivals = tuple[tuple[float, float], ...]
"""Bearings with their weights."""


@dataclass(frozen=True, eq=False)
class Explained:
    """The objects that explain a ping.

    Attributes
    ----------
    gain
        shape (k,): nats that the ping's likelihood loses without the object.
    covariance
        shape (k, 3, 3) of (range, bearing, velocity) at the fitted place.
    sounds
        What each object puts into the ears, complex (2, window).
    residual
        complex, shape (2, n): samples less all objects.
    """

    objects: Objects
    gain: FloatArray
    covariance: FloatArray
    windows: list[slice]
    sounds: list[ComplexArray]
    residual: ComplexArray
    threshold: float
    rivals: list[Rivals]
    """For each object: bearings with weights of equally likely pairs; empty if there are none."""
    interference: bool

    def alone(self, i: int) -> ComplexArray:
        """Samples (2, n) with all objects but one taken off."""
        samples = self.residual.copy()
        samples[:, self.windows[i]] += self.sounds[i]
        return samples


class ObjectFitter:
    """Fits the objects of one ping; use once."""

    def __init__(self, model: HeadModel, ping: Conditioned, config: ProcessingConfig) -> None:
        self.model = model
        self.ping = ping
        self.config = config
        self.threshold = gain_threshold(model, ping, config.false_detections_per_ping)
        self.bearings = bearing_grid(model, config.max_bearing_rad)
        self.priors = Priors(config.velocity_sigma_m_s, config.max_bearing_rad)
        self.objects = no_objects()
        self.windows: list[slice] = []
        self.sounds: list[ComplexArray] = []
        self.residual = ping.samples.copy()
        self.range_min_m = range_min(model, ping)
        self.interference = False
        self.rivals: list[Rivals] = []

    def fit(self, candidates: list[Candidate]) -> Explained:
        """Objects from candidates and from what the residual still shows."""
        for candidate in candidates:
            if len(self.objects) >= self.config.max_echoes:
                break
            self._try_add(candidate.mean_delay_s)
        self._split_misfits()
        self._add_from_residual()
        self._search_again()
        self._merge_close()
        return self._drop_weak()

    # ------------------------------------------------------------------ steps of fit()

    def _try_add(self, delay_s: float) -> bool:
        range_m = self.model.range_of_delay(delay_s)
        if not self.range_min_m < range_m < self.config.max_range_m:
            return False
        width = _SEED_HALF_WIDTH_M + 0.25 * self.model.head.baseline_m
        found = scan(self.model, self.ping, self.residual, range_m, width, self.bearings)
        best_range, best_bearing, strength, gain = found.best()
        if gain < self.threshold:
            return False
        click = find_click(
            self.model.head,
            self.model.receiver,
            self.ping,
            self.residual,
            delay_s + self.model.pulses[0].peak_time_s,
        )
        if is_click(click, gain, _CLICK_NATS):
            self.residual[:, click.window] -= click.sound
            self.interference = True
            return False
        self._append(one_object(best_range, best_bearing, strength))
        self._replace(self._cluster(len(self.objects) - 1))
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
            if energy[peak] < self.threshold:
                return
            tried.append(float(self.ping.time_s[peak]))
            self._try_add(tried[-1])

    def _split_misfits(self) -> None:
        """Where objects leave too much behind, see whether a pair explains it better.

        Two objects at one range pose as one between them, a maximum of the likelihood for one
        object from which no small step leads away.
        """
        for _ in range(_MAX_SPLITS):
            misfit = [self._misfit(i) for i in range(len(self.objects))]
            if not misfit or max(misfit) < _MISFIT_SHARE * self.threshold:
                return
            if not self._try_split(int(np.argmax(misfit))):
                return

    def _search_again(self) -> None:
        """Look at each object alone, all others taken off: another lobe may fit better."""
        for i in range(len(self.objects)):
            if len(self._cluster(i)) == 1:
                continue
            one = self.objects.take([i])
            found = scan(
                self.model,
                self.ping,
                self._alone([i]),
                float(one.range_m[0]),
                _RESEARCH_HALF_WIDTH_M,
                self.bearings,
            )
            best_range, best_bearing, strength, gain = found.best()
            here = int(np.argmin(np.abs(self.bearings - one.bearing_rad[0])))
            near = slice(max(here - 2, 0), here + 3)
            if gain > float(found.gain[:, near].max()) + _SWITCH_NATS:
                self._try_instead([i], one_object(best_range, best_bearing, strength), 0.0)

    def _merge_close(self) -> None:
        """See whether one object explains what two close ones do (two that repair a slip)."""
        reach = self.model.speed_m_s * self.model.pulses[0].envelope_sigma_s
        again = True
        while again:
            again = False
            r = self.objects.range_m
            close = [
                (i, j) for i in range(r.size) for j in range(i) if abs(r[i] - r[j]) < reach
            ]
            for pair in close[:_MAX_SPLITS]:
                samples = self._alone(list(pair))
                centre = float(np.mean(r[list(pair)]))
                found = scan(self.model, self.ping, samples, centre, 0.5 * reach, self.bearings)
                best_range, best_bearing, strength, _ = found.best()
                one = one_object(best_range, best_bearing, strength)
                if self._try_instead(list(pair), one, -self.threshold):
                    again = True
                    break
                if not any(self.rivals[i] for i in pair):
                    self._try_pairs(list(pair))

    def _drop_weak(self) -> Explained:
        """Drop what the likelihood does not miss, weakest first; measure what stays."""
        gains: dict[float, float] = {}
        covariances: dict[float, FloatArray] = {}
        pending = [float(r) for r in self.objects.range_m]
        while pending:
            # Objects change places in the list as clusters are refined: go by their range.
            i = int(np.argmin(np.abs(self.objects.range_m - pending[0])))
            members = self._cluster(i)
            refined = self._settle(members)
            known = {float(r) for r in self.objects.range_m}
            for k, r in enumerate(refined.objects.range_m.tolist()):
                gains[r] = float(refined.gain[k])
                covariances[r] = refined.covariance[k]
            pending = [r for r in known if r not in gains]
        order = [float(r) for r in self.objects.range_m]
        return Explained(
            objects=self.objects,
            gain=np.array([gains[r] for r in order]),
            covariance=np.array([covariances[r] for r in order]).reshape(-1, 3, 3),
            windows=self.windows,
            sounds=self.sounds,
            residual=self.residual,
            threshold=self.threshold,
            rivals=self.rivals,
            interference=self.interference,
        )

    # ------------------------------------------------------------------------- helpers

    def _settle(self, members: list[int]) -> Measured:
        """Refine a cluster, dropping its weakest object as long as that costs too little."""
        while True:
            samples = self._alone(members)
            cluster = self.objects.take(members)
            refined = self._refined(cluster, samples)
            gain = self._gains(refined, samples)
            weakest = int(np.argmin(gain))
            if gain[weakest] >= self.threshold:
                rivals = [self.rivals[i] for i in members]
                self._replace_with(members, refined.objects, rivals)
                return Measured(refined.objects, gain, refined.covariance)
            keep = [i for i in range(len(cluster)) if i != weakest]
            first_new = len(self.objects) - len(members)
            rivals = [self.rivals[members[i]] for i in keep]
            self._replace_with(members, refined.objects.take(keep), rivals)
            members = list(range(first_new, len(self.objects)))
            if not members:
                return Measured(no_objects(), np.zeros(0), np.zeros((0, 3, 3)))

    def _gains(self, refined: Refined, samples: ComplexArray) -> FloatArray:
        """What the likelihood loses without each object, the others refitted."""
        objects = refined.objects
        window = window_of(self.model, self.ping, objects)
        gain = refined.strength_loss.copy()
        for i in np.nonzero(gain < _SURE_FACTOR * self.threshold)[0].tolist():
            others = objects.take([j for j in range(len(objects)) if j != i])
            cost = self._cost(others, samples, window)
            gain[i] = cost - refined.cost
        return gain

    def _cost(self, objects: Objects, samples: ComplexArray, window: slice) -> float:
        if len(objects):
            return refine(self.model, self.ping, samples, window, objects, self.priors).cost
        sound = samples[:, window] * self.ping.weight[:, window]
        return float(np.vdot(sound, sound).real)

    def _misfit(self, i: int) -> float:
        """Excess of the residual around an object over what noise leaves, nats."""
        window = self.windows[i]
        weight = self.ping.weight[:, window]
        left = self.residual[:, window] * weight
        return float(np.vdot(left, left).real) - int(np.count_nonzero(weight))

    def _try_split(self, i: int) -> bool:
        near = self.model.speed_m_s * self.model.pulses[0].envelope_sigma_s
        distance = np.abs(self.objects.range_m - self.objects.range_m[i])
        members = [int(j) for j in np.argsort(distance)[:2] if distance[j] < near]
        return self._try_pairs(members)

    def _try_pairs(self, members: list[int]) -> bool:
        """Put the best pair in the place of one or two objects, if the likelihood gains."""
        window = slice(
            min(self.windows[i].start for i in members), max(self.windows[i].stop for i in members)
        )
        if self.ping.clipped[:, window].any():
            return False
        samples = self._alone(members)
        centre = float(np.mean(self.objects.range_m[members]))
        now = self._refined(self.objects.take(members), samples)
        pairs = [
            refine(self.model, self.ping, samples, window, pair, self.priors)
            for pair in best_pairs(self.model, self.ping, samples, centre, self.config)
        ]
        if not pairs:
            return False
        score = np.array([pair.cost + self._implausibility(pair.objects) for pair in pairs])
        best = pairs[int(np.argmin(score))]
        extra = self.threshold if len(members) == 1 else 0.0
        if float(score.min()) > now.cost + self._implausibility(now.objects) - extra:
            return False
        weight = np.exp(-(score - score.min()))
        rivals = _rivals(best.objects, [p.objects for p in pairs], weight)
        self._replace_with(members, best.objects, rivals)
        return True

    def _implausibility(self, objects: Objects) -> float:
        """Prior cost in nats: strong objects that cancel each other, or lie off the beams.

        Strengths are as likely in every decade, p(a) ~ 1/|a|^2, and a bearing is as likely as
        its better ear's gain.
        """
        gain = self.model.geometry(objects.range_m, objects.bearing_rad).gain.max(axis=0)
        heard = np.maximum(np.abs(objects.strength) * gain, 1e-12)
        return float(np.sum(2.0 * np.log(heard) - np.log(np.maximum(gain, 1e-3))))

    def _try_instead(self, members: list[int], others: Objects, extra: float) -> bool:
        """Put other objects in the place of some, if the refined likelihood gains by it."""
        samples = self._alone(members)
        both = self.objects.take(members).join(others)
        window = window_of(self.model, self.ping, both)
        before = self._cost(self.objects.take(members), samples, window)
        after = refine(self.model, self.ping, samples, window, others, self.priors)
        if after.cost > before - extra:
            return False
        self._replace_with(members, after.objects)
        return True

    def _cluster(self, i: int) -> list[int]:
        """Objects whose sound overlaps that of object i, in chains, i included."""
        members, low, high = {i}, self.windows[i].start, self.windows[i].stop
        while True:
            more = {
                j
                for j, w in enumerate(self.windows)
                if j not in members and w.start < high and w.stop > low
            }
            if not more:
                return sorted(members)
            members |= more
            low = min(self.windows[j].start for j in members)
            high = max(self.windows[j].stop for j in members)

    def _refined(self, cluster: Objects, samples: ComplexArray) -> Refined:
        window = window_of(self.model, self.ping, cluster)
        return refine(self.model, self.ping, samples, window, cluster, self.priors)

    def _replace(self, members: list[int]) -> None:
        refined = self._refined(self.objects.take(members), self._alone(members))
        self._replace_with(members, refined.objects, [self.rivals[i] for i in members])

    def _replace_with(
        self, members: list[int], objects: Objects, rivals: list[Rivals] | None = None
    ) -> None:
        """Take the members off the list and put other objects at its end."""
        self.residual = self._alone(members)
        rest = [j for j in range(len(self.objects)) if j not in members]
        self.objects = self.objects.take(rest)
        self.windows = [self.windows[j] for j in rest]
        self.sounds = [self.sounds[j] for j in rest]
        self.rivals = [self.rivals[j] for j in rest]
        for k in range(len(objects)):
            self._append(objects.take([k]), rivals[k] if rivals else ())

    def _append(self, one: Objects, rivals: Rivals = ()) -> None:
        window = window_of(self.model, self.ping, one)
        rendered = signals(self.model, one, self.ping.time_s[window]).value[:, 0, :]
        sound = one.strength[0] * rendered
        self.objects = self.objects.join(one)
        self.windows.append(window)
        self.sounds.append(sound)
        self.rivals.append(rivals)
        self.residual[:, window] -= sound

    def _alone(self, members: list[int]) -> ComplexArray:
        samples = self.residual.copy()
        for i in members:
            samples[:, self.windows[i]] += self.sounds[i]
        return samples


@dataclass(frozen=True, eq=False)
class Measured:
    """Objects of a cluster with gains (k,) and covariances (k, 3, 3)."""

    objects: Objects
    gain: FloatArray
    covariance: FloatArray


def _rivals(best: Objects, pairs: list[Objects], weight: FloatArray) -> list[Rivals]:
    """Bearings that other likely pairs give each of the two objects, in order of bearing."""
    keep = weight > math.exp(-_RIVAL_NATS)
    if np.count_nonzero(keep) < 2:
        return [(), ()]
    sorted_bearings = np.array([np.sort(p.bearing_rad) for p in pairs])[keep]
    share = weight[keep] / weight[keep].sum()
    rank = np.argsort(np.argsort(best.bearing_rad))
    return [
        tuple(zip(sorted_bearings[:, r].tolist(), share.tolist(), strict=True))
        for r in rank.tolist()
    ]
