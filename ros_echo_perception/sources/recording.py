"""Recordings: a stereo WAV with all pings, a JSON sidecar, for drives an odometry table.

The format is "two_ear_echo/1"; `recording_writer` writes it and its docstring describes it.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..core.errors import FileFormatError, SourceError, refuse
from ..core.fields import Fields, read_json
from ..core.types import FrontEndFlag, GainCurve, OdometrySample, Pose2, RawEcho
from .base import Event, SourceInfo
from .recording_files import read_odometry, read_stereo

FORMAT = "two_ear_echo/1"
SIMULATED_ORIGIN = "simulated"
"""Value of the sidecar's optional field ``origin`` for samples that were computed."""


@dataclass(frozen=True)
class PingRecord:
    """What the sidecar says of one ping; air is NaN where it was not measured."""

    time_s: float
    emission_sample: int
    burst_cycles: float
    temperature_c: float
    relative_humidity: float


@dataclass(frozen=True)
class Recording:
    """A whole recording; ``samples`` is int16, shape (n_pings, 2, samples_per_ping)."""

    id: str
    path: Path
    head: str
    unit: str
    category: str
    sample_rate_hz: float
    carrier_hz: float
    adc_bits: int
    full_scale: float
    gain: GainCurve | None
    samples: NDArray[np.int16]
    pings: tuple[PingRecord, ...]
    odometry: tuple[OdometrySample, ...] = ()
    mount: Pose2 | None = None
    simulated: bool = False
    truth: Mapping[str, Any] | None = field(default=None, repr=False)

    @property
    def n_pings(self) -> int:
        """Number of pings."""
        return len(self.pings)

    @property
    def duration_s(self) -> float:
        """From the first ping or odometry to the end of the last ping."""
        ends = [self.pings[-1].time_s + int(self.samples.shape[2]) / self.sample_rate_hz]
        ends += [sample.time_s for sample in self.odometry[-1:]]
        return max(ends) - self.start_time_s

    @property
    def start_time_s(self) -> float:
        """Time of the first ping or odometry."""
        return min([self.pings[0].time_s] + [sample.time_s for sample in self.odometry[:1]])

    def echo(self, k: int) -> RawEcho:
        """Ping number k, flagged as replayed (and as simulated if it was computed)."""
        ping, samples = self.pings[k], self.samples[k]
        flags = FrontEndFlag.REPLAYED
        if self.simulated:
            flags |= FrontEndFlag.SIMULATED
        lowest, highest = -self.full_scale, self.full_scale - 2.0 ** (16 - self.adc_bits)
        clipped = np.any((samples <= lowest) | (samples >= highest), axis=1)
        flags |= FrontEndFlag.LEFT_CLIPPED * int(clipped[0])
        flags |= FrontEndFlag.RIGHT_CLIPPED * int(clipped[1])
        return RawEcho(
            samples=samples,
            sample_rate_hz=self.sample_rate_hz,
            carrier_hz=self.carrier_hz,
            burst_cycles=ping.burst_cycles,
            emission_time_s=ping.time_s,
            first_sample_offset_s=-ping.emission_sample / self.sample_rate_hz,
            full_scale=self.full_scale,
            temperature_c=ping.temperature_c,
            relative_humidity=ping.relative_humidity,
            sequence=k,
            flags=FrontEndFlag(flags),
            gain=self.gain,
        )

    def echoes(self) -> Iterator[RawEcho]:
        """All pings in the order of time."""
        return (self.echo(k) for k in range(self.n_pings))


def load_recording(path: str | Path) -> Recording:
    """Read and check a recording.

    Parameters
    ----------
    path
        Of the .wav, of the .json, or of both without extension.

    Raises
    ------
    FileFormatError
        Naming the file, the field, the value and what is allowed.
    """
    base = Path(path)
    if base.suffix in (".wav", ".json"):
        base = base.with_suffix("")
    json_path, wav_path = Path(f"{base}.json"), Path(f"{base}.wav")
    side = Fields(read_json(json_path), str(json_path))
    side.text("format", (FORMAT,))
    if side.get("channels", '["left", "right"]') != ["left", "right"]:
        raise side.refuse("channels", side.data["channels"], '["left", "right"]')
    carrier_hz = side.number("carrier_hz", 1e3, 1e6)
    rate_hz = side.number("sample_rate_hz", 2.0 * carrier_hz + 1.0, 1e8)
    n_samples = side.integer("samples_per_ping", 64, 10_000_000)
    pings = _pings(side, n_samples)
    return Recording(
        id=base.name,
        path=base,
        head=side.text("head"),
        unit=side.text("unit"),
        category=side.text("category"),
        sample_rate_hz=rate_hz,
        carrier_hz=carrier_hz,
        adc_bits=side.integer("adc_bits", 2, 16),
        full_scale=side.number("stored_full_scale", 1.0, 32768.0),
        gain=_gain(side),
        samples=_samples(wav_path, rate_hz, len(pings), n_samples),
        pings=pings,
        odometry=_odometry(side, base),
        mount=_mount(side),
        simulated=side.has("origin") and side.text("origin") == SIMULATED_ORIGIN,
        truth=side.section("truth").data if side.has("truth") else None,
    )


def _pings(side: Fields, n_samples: int) -> tuple[PingRecord, ...]:
    pings = tuple(
        PingRecord(
            time_s=ping.number("time_s", -1e10, 1e10),
            emission_sample=ping.integer("emission_sample", 0, n_samples - 1),
            burst_cycles=ping.number("burst_cycles", 0.5, 1000.0),
            temperature_c=_optional(ping, "temperature_c", -40.0, 60.0),
            relative_humidity=_optional(ping, "relative_humidity", 0.0, 1.0),
        )
        for ping in side.sections("pings", minimum=1)
    )
    for k in range(1, len(pings)):
        if pings[k].time_s <= pings[k - 1].time_s:
            raise side.refuse(
                f"pings[{k}].time_s", pings[k].time_s, f"more than {pings[k - 1].time_s:g}"
            )
    return pings


def _optional(fields: Fields, name: str, low: float, high: float) -> float:
    return fields.number(name, low, high) if fields.has(name) else math.nan


def _gain(side: Fields) -> GainCurve | None:
    if not side.has("gain_curve"):
        return None
    curve = side.section("gain_curve")
    time_s = curve.numbers("time_s", None, -10.0, 10.0)
    gain_db = curve.numbers("gain_db", len(time_s), -200.0, 200.0)
    if not time_s or any(b <= a for a, b in pairwise(time_s)):
        raise curve.refuse("time_s", list(time_s), "at least one time, increasing")
    return GainCurve(np.array(time_s), np.array(gain_db))


def _mount(side: Fields) -> Pose2 | None:
    if not side.has("mount_on_robot"):
        return None
    mount = side.section("mount_on_robot")
    return Pose2(
        mount.number("x_m", -10.0, 10.0),
        mount.number("y_m", -10.0, 10.0),
        mount.number("yaw_rad", -2.0 * math.pi, 2.0 * math.pi),
    )


def _odometry(side: Fields, base: Path) -> tuple[OdometrySample, ...]:
    if not side.has("odometry_file"):
        return ()
    name = side.text("odometry_file")
    if Path(name).name != name:
        raise side.refuse("odometry_file", name, "the name of a file beside the sidecar")
    return read_odometry(base.parent / name)


def _samples(path: Path, rate_hz: float, n_pings: int, n_samples: int) -> NDArray[np.int16]:
    wav_rate_hz, samples = read_stereo(path)
    remedy = "WAV and sidecar do not belong together"
    if wav_rate_hz != rate_hz:
        raise FileFormatError(
            refuse("sample rate", wav_rate_hz, f"{rate_hz:g} as in the sidecar", remedy, str(path))
        )
    if len(samples) != n_pings * n_samples:
        allowed = f"{n_pings} pings x {n_samples} samples = {n_pings * n_samples}"
        raise FileFormatError(refuse("number of frames", len(samples), allowed, remedy, str(path)))
    by_ping = samples.reshape(n_pings, n_samples, 2).transpose(0, 2, 1)
    return np.ascontiguousarray(by_ping)


class RecordingSource:
    """Plays a recording: pings and odometry merged in the order of time.

    Parameters
    ----------
    recording
        From `load_recording`.
    start_offset_s
        Skip this much of the beginning.
    """

    def __init__(self, recording: Recording, start_offset_s: float = 0.0) -> None:
        if not 0.0 <= start_offset_s < recording.duration_s:
            allowed = f"0 to less than {recording.duration_s:.3f} s, the recording's length"
            raise SourceError(refuse("start_offset_s", start_offset_s, allowed))
        self.recording = recording
        self._start_s = recording.start_time_s + start_offset_s

    @property
    def info(self) -> SourceInfo:
        """What is played."""
        r = self.recording
        origin = "simulated recording" if r.simulated else "recording"
        return SourceInfo(
            kind="recording",
            description=f"{origin} {r.id} of head {r.head}, unit {r.unit}",
            duration_s=r.start_time_s + r.duration_s - self._start_s,
            n_pings=sum(p.time_s >= self._start_s for p in r.pings),
            has_odometry=bool(r.odometry),
            mount=r.mount,
        )

    def events(self) -> Iterator[Event]:
        """Pings and odometry from the start offset on."""
        times = [(s.time_s, 0, i) for i, s in enumerate(self.recording.odometry)]
        times += [(p.time_s, 1, k) for k, p in enumerate(self.recording.pings)]
        for time_s, is_ping, index in sorted(times):
            if time_s < self._start_s:
                continue
            if is_ping:
                yield self.recording.echo(index)
            else:
                yield self.recording.odometry[index]

    def close(self) -> None:
        """Nothing to release: the recording is in memory."""
