"""Settings of the sync stage: how the camera clock is put on the recording clock, and when that fails."""

from __future__ import annotations

from odograph.settings.base import StageSettings, setting


class SyncSettings(StageSettings):
    """What the sync stage accepts of a camera clock."""

    warn_drift_ppm: float = setting(
        200.0, "Drift of the camera clock that raises a warning.", unit="ppm", gt=0, le=10_000
    )
    max_drift_ppm: float = setting(
        1000.0,
        "Largest drift of the camera clock that is searched for and accepted.",
        unit="ppm",
        gt=0,
        le=10_000,
    )
    warn_bend_ms: float = setting(
        2.0, "Departure of the clock from a straight line that raises a warning.", unit="ms", gt=0
    )
    max_bend_ms: float = setting(
        10.0,
        "Departure of the clock from a straight line (bend or jump) that fails the session.",
        unit="ms",
        gt=0,
    )
    min_matched_share: float = setting(
        0.8, "Smallest share of camera frames that must find their pulse.", unit="fraction", ge=0, le=1
    )
    warn_dropped_share: float = setting(
        0.05,
        "Share of pulses without a frame (dropped frames) that raises a warning.",
        unit="fraction",
        ge=0,
        le=1,
    )
    max_ambiguity_s: float = setting(
        0.1,
        "Largest uncertainty left by pairings that fit equally well; more fails the session.",
        unit="s",
        ge=0,
    )
