"""Settings of the mapping: window, sensor model, fading, poses."""

from __future__ import annotations

from dataclasses import dataclass

from ..errors import SettingError, refuse
from ..settings import Settings, setting

NEVER_CLEAR, CLEAR_TO_RANGE = "never_clear", "clear_to_range"


@dataclass(frozen=True)
class MappingConfig(Settings):
    """How detections and odometry become a local occupancy grid."""

    resolution_m: float = setting(0.05, "Side of a cell", "m", 0.01, 1.0, read_only=True)
    width_m: float = setting(
        8.0, "Width of the window along x, robot in its middle", "m", 0.5, 200.0, read_only=True
    )
    height_m: float = setting(
        8.0, "Height of the window along y, robot in its middle", "m", 0.5, 200.0, read_only=True
    )
    max_range_m: float = setting(5.0, "Echoes from further away are not used", "m", 0.2, 30.0)
    min_existence_probability: float = setting(
        0.5, "Echoes less likely than this are not used", "", 0.0, 1.0
    )
    hit_gain: float = setting(
        1.1,
        "Likelihood ratio gained by a cell that alone can explain an echo; cells that share it "
        "gain in proportion",
        "",
        0.1,
        100.0,
    )
    surface_width_m: float = setting(
        0.08,
        "What reflects is a piece of surface of about this size (1 sigma across the line of "
        "sight), so that neighbouring echoes of a wall support each other",
        "m",
        0.0,
        0.5,
    )
    max_hit_log_odds: float = setting(
        0.55,
        "One ping raises a cell by at most this; below log(0.65 / 0.35) a single ping never "
        "makes a cell occupied",
        "",
        0.01,
        0.61,
    )
    free_log_odds: float = setting(
        0.08, "One ping lowers a cell that the sound crossed by at most this", "", 0.0, 0.61
    )
    free_half_width_m: float = setting(
        0.05, "An echo clears its path to this distance on either side", "m", 0.0, 0.5
    )
    min_log_odds: float = setting(-2.0, "A free cell's log-odds stop here", "", -20.0, -0.1)
    max_log_odds: float = setting(3.5, "An occupied cell's log-odds stop here", "", 0.7, 20.0)
    soft_lateral_sigma_m: float = setting(
        0.15,
        "An echo whose place across the line of sight is less certain than this (1 sigma) needs "
        "agreement from another place of the head before it can make a cell occupied",
        "m",
        0.01,
        2.0,
    )
    soft_max_probability: float = setting(
        0.6, "Uncertain echoes from one place raise a cell no further than this", "", 0.5, 0.645
    )
    alternative_sigma_rad: float = setting(
        0.03,
        "Each of several possible bearings of an echo is taken to be this certain (1 sigma)",
        "rad",
        0.001,
        0.5,
    )
    doubtful_novelty: float = setting(
        0.01,
        "Where an uncertain echo may come from, a place never heard before counts as much as one "
        "that has explained this many echoes; small: known places explain nearly all",
        "",
        1e-4,
        100.0,
    )
    certain_novelty: float = setting(
        1.0, "The same for echoes whose bearing is certain", "", 1e-4, 100.0
    )
    bearing_outlier_weight: float = setting(
        0.2,
        "Share of echoes heard by both ears whose bearing is wrong by more than its sigma says "
        "(a wrong carrier cycle, two objects at one range)",
        "",
        0.0,
        0.9,
    )
    one_sided_outlier_weight: float = setting(
        0.5, "The same for echoes heard by one ear that list possible bearings", "", 0.0, 1.0
    )
    max_alternatives: int = setting(
        8, "Of each echo's possible bearings the most likely up to this number are used", "", 1, 32
    )
    motion_span_s: float = setting(
        4.0,
        "The robot's way since pings up to this old weighs the possible bearings of an echo; "
        "0: it does not",
        "s",
        0.0,
        60.0,
    )
    confirm_distance_m: float = setting(
        0.15, "Two places of the head count as different from this distance", "m", 0.01, 2.0
    )
    multipath_weight: float = setting(
        0.3, "Weight of an echo that is suspected to be a second bounce", "", 0.0, 1.0
    )
    silence_policy: str = setting(
        NEVER_CLEAR,
        "What silence says: nothing (never_clear), or that the beam is free up to clear_range_m "
        "(clear_to_range; removes smooth walls seen at a slant)",
        choices=(NEVER_CLEAR, CLEAR_TO_RANGE),
    )
    clear_range_m: float = setting(
        1.0, "Silence clears the beam up to this range, where the policy says so", "m", 0.05, 10.0
    )
    occupied_decay_s: float = setting(
        60.0, "Time constant with which occupied cells fade; 0: they do not", "s", 0.0, 1e6
    )
    free_decay_s: float = setting(
        30.0, "Time constant with which free cells fade; 0: they do not", "s", 0.0, 1e6
    )
    max_pose_gap_s: float = setting(
        0.2, "Poses are interpolated over gaps of the odometry up to this long", "s", 0.001, 10.0
    )
    max_pose_wait_s: float = setting(
        1.0, "A ping waits this long for the odometry around it, then it is skipped", "s", 0.0, 60.0
    )
    settle_s: float = setting(
        0.05,
        "A ping waits this long for earlier pings of other heads, so that the order of arrival "
        "does not change the map",
        "s",
        0.0,
        5.0,
    )
    max_pending_pings: int = setting(200, "At most this many pings wait", "", 1, 100_000)
    max_speed_m_s: float = setting(
        5.0, "Odometry that moves faster than this has jumped", "m/s", 0.01, 100.0
    )
    max_turn_rad_s: float = setting(
        10.0, "Odometry that turns faster than this has jumped", "rad/s", 0.01, 1000.0
    )
    time_restart_s: float = setting(
        1.0,
        "Odometry older than the newest by more than this means that time has restarted: poses, "
        "waiting pings and map are cleared",
        "s",
        0.0,
        1e6,
    )
    covariance_span_s: float = setting(
        5.0,
        "What the odometry's covariance adds over this time widens the echoes, since echoes have "
        "to agree over such a time; 0: it does not",
        "s",
        0.0,
        600.0,
    )
    max_pose_sigma_m: float = setting(
        0.05, "The odometry widens echoes by at most this (1 sigma)", "m", 0.0, 0.5
    )
    max_pose_sigma_rad: float = setting(
        0.03, "The odometry turns echoes by at most this (1 sigma)", "rad", 0.0, 0.5
    )
    max_range_sigma_m: float = setting(
        0.2, "Echoes whose range is less certain than this (1 sigma) are not used", "m", 0.005, 1.0
    )
    max_detections: int = setting(
        32, "Of each ping the most probable echoes up to this number are used", "", 1, 1000
    )

    def check_together(self) -> None:
        """The window must hold at least a few cells and not too many."""
        for name in ("width_m", "height_m"):
            cells = getattr(self, name) / self.resolution_m
            if not 4 <= cells <= 8192:
                raise SettingError(
                    refuse(
                        name,
                        getattr(self, name),
                        f"4 to 8192 cells of resolution_m = {self.resolution_m:g} m",
                        "change the window or the resolution",
                    )
                )

    @property
    def width_cells(self) -> int:
        """Cells along x."""
        return round(self.width_m / self.resolution_m)

    @property
    def height_cells(self) -> int:
        """Cells along y."""
        return round(self.height_m / self.resolution_m)
