"""Settings of the behaviour stage: from tracked points to position, head direction and speed."""

from __future__ import annotations

from typing import Literal

from odograph.settings.base import StageSettings, setting


class BehaviourSettings(StageSettings):
    """How tracked points are cleaned, smoothed, resampled and judged."""

    bin_s: float = setting(
        0.02, "Width of the analysis bins; all later stages use them.", unit="s", ge=0.001, le=1.0
    )
    position_point: Literal["midpoint", "front", "back"] = setting(
        "midpoint", "Which point is the animal's position when two points are tracked."
    )
    head_direction_from: Literal["auto", "points", "series"] = setting(
        "auto", "Source of head direction; auto takes two points if there are two, else a direction series."
    )
    head_direction_offset_deg: float = setting(
        0.0,
        "Angle added to the direction from back to front point (lights mounted askew), counter-clockwise.",
        unit="degree",
        ge=-180,
        le=180,
    )
    min_confidence: float = setting(
        0.5,
        "Tracked samples below this confidence count as lost (where the file has it).",
        unit="fraction",
        ge=0,
        le=1,
    )
    max_speed_m_s: float = setting(
        2.0, "Fastest movement of a tracked point that is believed; faster steps are jumps.", unit="m/s", gt=0
    )
    arena_margin_m: float = setting(
        0.05, "How far outside the arena's outline a tracked point is still believed.", unit="m", ge=0
    )
    repair_swaps: bool = setting(True, "Find and undo exchanges of the two tracked points.")
    gate_sd: float = setting(
        6.0, "Samples this many standard deviations from the Kalman prediction are rejected.", unit="sd", ge=3
    )
    position_noise_m: float | None = setting(
        None,
        "Standard deviation of the tracking noise per axis; null estimates it from the data.",
        unit="m",
        gt=0,
    )
    acceleration_m_s2: float | None = setting(
        None,
        "Standard deviation of acceleration from one frame to the next; null estimates it from the data.",
        unit="m/s^2",
        gt=0,
    )
    max_gap_s: float = setting(
        0.3, "Longest gap between believed samples that is interpolated.", unit="s", ge=0, le=5
    )
    min_speed_cm_s: float = setting(
        0.0, "Bins slower than this are masked as immobile; 0 keeps all.", unit="cm/s", ge=0
    )
    min_valid_share: float = setting(
        0.5, "Smallest share of valid bins; less fails the session.", unit="fraction", ge=0, le=1
    )
    min_valid_s: float = setting(60.0, "Smallest valid time; less fails the session.", unit="s", ge=0)
