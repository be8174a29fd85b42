"""Recordings of the simulator, with everything that is known about them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from ..core.acoustics import pulse_metrics
from ..core.head import Head, Transducer
from .bench import bench_source, calibration_grid
from .recording_writer import RecordingLabels, write_json, write_poses, write_recording
from .simulator import SimulatorSource
from .simulator_config import SimulatorConfig
from .truth import PingTruth, ReflectorTruth
from .world import World

_SILENT_DB = -99.0
"""Written for an ear that hears nothing at all; JSON has no minus infinity."""


def write_simulated_recording(
    source: SimulatorSource,
    path: str | Path,
    seconds: float | None = None,
    category: str = "",
    tags: tuple[str, ...] = (),
) -> Path:
    """Write what a simulator hears, with odometry and truth.

    Parameters
    ----------
    path
        Without extension; its name is the recording's id.
    seconds
        Length; the whole path if not told.
    category
        "drive" if the robot moves and "bench" otherwise, if not told.

    Returns
    -------
    The path without extension.
    """
    end_s = source.path.duration_s if seconds is None else seconds
    pings = [k for k in range(source.n_pings) if source.emission_time_s(k) < end_s]
    moves = bool(source.path.speeds.any())
    odometry = [s for s in source.odometry if s.time_s < end_s] if moves else []
    truth = _truth(source, pings)
    base = Path(path)
    base = base.with_suffix("") if base.suffix in (".wav", ".json") else base
    if moves:
        truth["pose_file"] = f"{base.name}_truth_pose.csv"
        truth["world_file"] = f"{base.name}_world.json"
    labels = RecordingLabels(
        head=source.head.name,
        unit=f"{source.head.name}_simulated_{source.config.seed}",
        category=category or ("drive" if moves else "bench"),
        tags=tags or (source.world.name,),
        adc_bits=source.config.adc_bits,
        half_power_beam_width_rad=source.head.transmitter.half_power_beam_width_rad,
        simulated=True,
        mount=source.config.mount if moves else None,
    )
    write_recording(base, [source.echo(k) for k in pings], labels, odometry, truth)
    if moves:
        times = [sample.time_s for sample in odometry]
        poses = ((t, source.true_pose(t)) for t in times)
        write_poses(base.parent / str(truth["pose_file"]), poses)
        write_json(base.parent / str(truth["world_file"]), world_to_json(source.world))
    return base


def write_calibration_recording(
    head: Head, path: str | Path, seed: int, unit_error_scale: float = 1.0
) -> Path:
    """Write a recording of a thin pole on a known grid of 4 ranges and 8 bearings.

    The unit differs from ``head`` as manufactured ones do; `calibrate` can find out how. The
    simulator with the same seed and ``unit_error_scale`` is the same unit.
    """
    config = SimulatorConfig(
        seed=seed, unit_error_scale=unit_error_scale, ping_rate_hz=5.0, temperature_error_c=0.2
    )
    source = bench_source(head, calibration_grid(), config)
    return write_simulated_recording(source, path, category="calibration", tags=("pole on a grid",))


def world_to_json(world: World) -> dict[str, Any]:
    """Segments and circles of a world."""
    return {
        "frame": "map",
        "units": "m",
        "segments": [
            {"id": s.id, "kind": s.kind, "p0": list(s.start_m), "p1": list(s.end_m)}
            for s in world.surfaces
        ],
        "circles": [
            {"id": r.id, "kind": r.kind, "centre": list(r.centre_m), "radius_m": r.radius_m}
            for r in world.rounds
        ],
    }


def _truth(source: SimulatorSource, pings: list[int]) -> dict[str, Any]:
    cycles = source.config.burst_cycles
    metrics = pulse_metrics(source.unit, 0, cycles)
    key = str(int(cycles)) if cycles.is_integer() else str(cycles)
    return {
        "speed_of_sound_m_s": round(source.speed_of_sound_m_s, 4),
        "temperature_c": source.config.temperature_c,
        "relative_humidity": source.config.relative_humidity,
        "unit": _unit(source.unit),
        "pulse_by_burst_cycles": {key: vars(metrics).copy()},
        "pings": [_ping(source.truth(k), index) for index, k in enumerate(pings)],
    }


def _unit(unit: Head) -> dict[str, Any]:
    return {
        "transmitter": _transducer(unit.transmitter),
        "left_receiver": _transducer(unit.left),
        "right_receiver": _transducer(unit.right),
        "gain_mismatch_db_left_minus_right": unit.gain_mismatch_db,
        "drive_latency_s": unit.latency_s,
    }


def _transducer(transducer: Transducer) -> dict[str, Any]:
    return {
        "position_m": list(transducer.position_m),
        "yaw_rad": transducer.yaw_rad,
        "resonance_hz": transducer.resonance_hz,
        "half_power_bandwidth_hz": transducer.half_power_bandwidth_hz,
    }


def _ping(truth: PingTruth, index: int) -> dict[str, Any]:
    pose = truth.head_pose
    return {
        "reflectors": [_reflector(r) for r in truth.reflectors],
        "head_pose": [round(pose.x_m, 5), round(pose.y_m, 5), round(pose.yaw_rad, 5)],
        "index": index,
    }


def _reflector(truth: ReflectorTruth) -> dict[str, Any]:
    fields: dict[str, Any] = {
        "kind": truth.kind,
        "id": truth.id,
        "range_m": round(truth.range_m, 5),
        "bearing_rad": round(truth.bearing_rad, 5),
        "radial_velocity": round(truth.radial_velocity_m_s, 4),
        "snr_db": [round(max(v, _SILENT_DB), 2) for v in truth.snr_db],
        "energy_snr_db": [round(max(v, _SILENT_DB), 2) for v in truth.energy_snr_db],
        "peak_fraction_of_full_scale": [round(v, 5) for v in truth.peak],
        "tof_s": [round(v, 8) for v in truth.tof_s],
        "scored": not truth.not_scored_because,
    }
    if truth.not_scored_because:
        fields["not_scored_because"] = truth.not_scored_because
    if truth.kind == "multipath":
        fields["bearing_observable"] = False
    return fields
