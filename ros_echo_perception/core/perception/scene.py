"""The running explanation of one ping: objects, what each sounds like, what is left over."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..types import ComplexArray, FloatArray
from .conditioning import Conditioned
from .joint import Priors, Refined, refine, refine_rivals, signals, window_of
from .model import HeadModel
from .objects import Objects, no_objects

Rivals = tuple[tuple[float, float], ...]
"""Bearings with weights that equally likely explanations give an object; empty: none."""


class Scene:
    """Objects of a ping and the residual they leave; the residual is kept up to date."""

    def __init__(self, model: HeadModel, ping: Conditioned, priors: Priors) -> None:
        self.model = model
        self.ping = ping
        self.priors = priors
        self.objects = no_objects()
        self.windows: list[slice] = []
        self.sounds: list[ComplexArray] = []
        self.rivals: list[Rivals] = []
        self.residual = ping.samples.copy()

    def __len__(self) -> int:
        return len(self.objects)

    def alone(self, members: Sequence[int]) -> ComplexArray:
        """Samples (2, n) with all objects but the members taken off."""
        samples = self.residual.copy()
        for i in members:
            samples[:, self.windows[i]] += self.sounds[i]
        return samples

    def append(self, one: Objects, rivals: Rivals = ()) -> None:
        """Add one object and take its sound off the residual."""
        window = window_of(self.model, self.ping, one)
        rendered = signals(self.model, one, self.ping.time_s[window]).value[:, 0, :]
        sound = one.strength[0] * rendered
        self.objects = self.objects.join(one)
        self.windows.append(window)
        self.sounds.append(sound)
        self.rivals.append(rivals)
        self.residual[:, window] -= sound

    def replace(
        self, members: Sequence[int], objects: Objects, rivals: Sequence[Rivals] | None = None
    ) -> list[int]:
        """Take the members off the list and put other objects at its end; returns their numbers."""
        self.residual = self.alone(members)
        rest = [j for j in range(len(self)) if j not in set(members)]
        self.objects = self.objects.take(rest)
        self.windows = [self.windows[j] for j in rest]
        self.sounds = [self.sounds[j] for j in rest]
        self.rivals = [self.rivals[j] for j in rest]
        for k in range(len(objects)):
            self.append(objects.take([k]), rivals[k] if rivals else ())
        return list(range(len(rest), len(self)))

    def cluster(self, i: int) -> list[int]:
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

    def clusters(self) -> list[list[int]]:
        """All clusters."""
        found: list[list[int]] = []
        for i in range(len(self)):
            if not any(i in members for members in found):
                found.append(self.cluster(i))
        return found

    def span(self, members: Sequence[int]) -> slice:
        """Samples that the members reach."""
        return slice(
            min(self.windows[i].start for i in members), max(self.windows[i].stop for i in members)
        )

    def refined(self, objects: Objects, samples: ComplexArray, window: slice) -> Refined:
        """Objects fitted to samples (2, n) in a window."""
        return refine(self.model, self.ping, samples, window, objects, self.priors)

    def refined_rivals(
        self, rivals: list[Objects], samples: ComplexArray, window: slice
    ) -> list[Refined]:
        """Rival sets of objects fitted to the same samples."""
        return refine_rivals(self.model, self.ping, samples, window, rivals, self.priors)

    def settle(self, members: Sequence[int]) -> None:
        """Refine members together."""
        refined = self.refined(self.objects.take(members), self.alone(members), self.span(members))
        self.replace(members, refined.objects, [self.rivals[i] for i in members])

    def silence_cost(self, samples: ComplexArray, window: slice) -> float:
        """Cost of explaining the samples by noise alone."""
        sound = samples[:, window] * self.ping.weight[:, window]
        return float(np.vdot(sound, sound).real)

    def misfit(self, i: int) -> float:
        """Excess of the residual around an object over what noise leaves, nats."""
        window = self.windows[i]
        count = int(np.count_nonzero(self.ping.weight[:, window]))
        return self.silence_cost(self.residual, window) - count


@dataclass(frozen=True, eq=False)
class Explained:
    """The objects that explain a ping.

    Attributes
    ----------
    gain
        shape (k,): nats that the ping's likelihood loses without the object.
    covariance
        shape (k, 3, 3) of (range, bearing, velocity) at the fitted place.
    threshold
        Gain that noise exceeds at the accepted rate.
    interference
        Whether clicks or spikes were recognised and taken off.
    """

    scene: Scene
    gain: FloatArray
    covariance: FloatArray
    threshold: float
    interference: bool

    @property
    def objects(self) -> Objects:
        """The objects."""
        return self.scene.objects
