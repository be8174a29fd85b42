"""The running explanation of one ping: objects, what each sounds like, what is left over."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ..types import ComplexArray, FloatArray
from .conditioning import Conditioned
from .joint import Priors, Refined, excerpt, excerpts, refine, signals, window_of, windows_of
from .model import HeadModel
from .objects import Objects, no_objects
from .search import Scan

_MAX_CLUSTER = 4
"""More are not refined at once: the outer ones barely touch the object in the middle."""

Rivals = tuple[tuple[float, float], ...]
"""Bearings with weights that equally likely explanations give an object; empty: none."""


@dataclass(frozen=True, eq=False)
class Fitted:
    """What the refinement said of one object.

    Attributes
    ----------
    group
        Number of the refinement: objects of one group were refined together.
    covariance
        shape (3, 3), of (range, bearing, velocity).
    loss
        Linearised loss of likelihood without the object, nats.
    """

    group: int
    covariance: FloatArray
    loss: float


@dataclass(frozen=True, eq=False)
class Item:
    """One object's share of the scene: samples that it and its pulse's body reach, its sound."""

    window: slice
    core: slice
    sound: ComplexArray
    fitted: Fitted
    rivals: Rivals = ()
    scan: Scan | None = None
    """The scan that found it, where it saw the object alone."""


class Scene:
    """Objects of a ping and the residual they leave; the residual is kept up to date."""

    def __init__(self, model: HeadModel, ping: Conditioned, priors: Priors) -> None:
        self.model = model
        self.ping = ping
        self.priors = priors
        self.objects = no_objects()
        self.items: list[Item] = []
        self.residual = ping.samples.copy()
        self._groups = itertools.count()

    def __len__(self) -> int:
        return len(self.items)

    def alone(self, members: Sequence[int]) -> ComplexArray:
        """Samples (2, n) with all objects but the members taken off."""
        samples = self.residual.copy()
        for i in members:
            samples[:, self.items[i].window] += self.items[i].sound
        return samples

    def add(
        self,
        refined: Refined,
        rivals: Sequence[Rivals] | None = None,
        found: Scan | None = None,
    ) -> list[int]:
        """Add objects that were refined together; returns their numbers."""
        group = next(self._groups)
        first = len(self)
        for k in range(len(refined.objects)):
            fitted = Fitted(group, refined.covariance[k], float(refined.strength_loss[k]))
            self._append(refined.objects.take([k]), fitted, rivals[k] if rivals else (), found)
        return list(range(first, len(self)))

    def add_unrefined(self, one: Objects) -> int:
        """Add one object as a start for a refinement; returns its number."""
        self._append(one, Fitted(next(self._groups), np.full((3, 3), np.inf), 0.0), (), None)
        return len(self) - 1

    def _append(self, one: Objects, fitted: Fitted, rivals: Rivals, found: Scan | None) -> None:
        window, core = windows_of(self.model, self.ping, one)
        rendered = signals(self.model, one, self.ping.time_s[window]).value[:, 0, :]
        sound = one.strength[0] * rendered
        self.objects = self.objects.join(one)
        self.items.append(Item(window, core, sound, fitted, rivals, found))
        self.residual[:, window] -= sound

    def replace(
        self, members: Sequence[int], refined: Refined, rivals: Sequence[Rivals] | None = None
    ) -> list[int]:
        """Take the members off and put others at the end; returns the others' numbers."""
        self.remove(members)
        return self.add(refined, rivals)

    def remove(self, members: Sequence[int]) -> None:
        """Take the members off; those behind them move up."""
        self.residual = self.alone(members)
        rest = [j for j in range(len(self)) if j not in set(members)]
        self.objects = self.objects.take(rest)
        self.items = [self.items[j] for j in rest]

    def rivals(self, members: Sequence[int]) -> list[Rivals]:
        """The rivals of the members."""
        return [self.items[i].rivals for i in members]

    def cluster(self, i: int) -> list[int]:
        """Object i and the nearest few whose pulses' bodies overlap its own."""
        core = self.items[i].core
        members = [
            j
            for j, item in enumerate(self.items)
            if j == i or (item.core.start < core.stop and item.core.stop > core.start)
        ]
        distance = np.abs(self.objects.range_m[members] - self.objects.range_m[i])
        nearest = np.argsort(distance, kind="stable")[:_MAX_CLUSTER]
        return sorted(members[k] for k in nearest.tolist())

    def settle_all(self) -> None:
        """Refine every object once that was last refined without all of its cluster."""
        first_new = next(self._groups)
        while True:
            stale = [
                i
                for i, item in enumerate(self.items)
                if item.fitted.group < first_new and not self._together(i)
            ]
            if not stale:
                return
            apart: list[list[int]] = []
            for i in stale:
                members = self.cluster(i)
                if not any(set(members) & set(other) for other in apart):
                    apart.append(members)
            self.settle(apart)

    def _together(self, i: int) -> bool:
        group = self.items[i].fitted.group
        return all(self.items[j].fitted.group == group for j in self.cluster(i))

    def span(self, members: Sequence[int]) -> slice:
        """Samples that the members reach."""
        return slice(
            min(self.items[i].window.start for i in members),
            max(self.items[i].window.stop for i in members),
        )

    def refined(self, objects: Objects, samples: ComplexArray, window: slice) -> Refined:
        """Objects fitted to samples (2, n) in a window."""
        return self.refined_rivals([objects], samples, window)[0]

    def refined_rivals(
        self, rivals: list[Objects], samples: ComplexArray, window: slice
    ) -> list[Refined]:
        """Rival sets of objects fitted to the same samples."""
        data = excerpt(self.ping, samples, window, len(rivals))
        return refine(self.model, data, rivals, self.priors)

    def refined_apart(self, objects: list[Objects]) -> list[Refined]:
        """Single objects that do not overlap, each fitted to the residual around it."""
        windows = [window_of(self.model, self.ping, one) for one in objects]
        data = excerpts(self.ping, [self.residual] * len(windows), windows)
        return refine(self.model, data, objects, self.priors)

    def settle(self, clusters: Sequence[Sequence[int]]) -> None:
        """Refine the members of each cluster together; clusters of a size go in one run.

        No object may be in two clusters.
        """
        groups: dict[int, list[list[Item]]] = {}
        for members in clusters:
            groups.setdefault(len(members), []).append([self.items[i] for i in members])
        for group in groups.values():
            numbers = [[self._number(item) for item in items] for items in group]
            samples = [self.alone(members) for members in numbers]
            windows = [self.span(members) for members in numbers]
            starts = [self.objects.take(members) for members in numbers]
            refined = refine(self.model, excerpts(self.ping, samples, windows), starts, self.priors)
            for items, result in zip(group, refined, strict=True):
                members = [self._number(item) for item in items]
                self.replace(members, result, self.rivals(members))

    def _number(self, item: Item) -> int:
        return next(i for i, known in enumerate(self.items) if known is item)

    def silence_cost(self, samples: ComplexArray, window: slice) -> float:
        """Cost of explaining the samples by noise alone."""
        sound = samples[:, window] * self.ping.weight[:, window]
        return float(np.vdot(sound, sound).real)

    def misfit(self, i: int) -> float:
        """Excess of the residual around an object over what noise leaves, nats."""
        window = self.items[i].window
        count = int(np.count_nonzero(self.ping.weight[:, window]))
        return self.silence_cost(self.residual, window) - count


@dataclass(frozen=True, eq=False)
class Explained:
    """The objects that explain a ping.

    Attributes
    ----------
    gain
        shape (k,): nats that the ping's likelihood loses without the object.
    threshold
        Gain that noise exceeds at the accepted rate.
    interference
        Whether clicks or spikes were recognised and taken off.
    """

    scene: Scene
    gain: FloatArray
    threshold: float
    interference: bool
