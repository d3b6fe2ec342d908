"""The verdict on a clock: numbers compared with the limits in the settings, and said in words."""

from __future__ import annotations

from typing import Any

from odograph.recording.model import finding
from odograph.settings.sync import SyncSettings
from odograph.sync.faults import ClockFault


def judge_clock(
    *,
    counts: dict[str, int],
    drift_ppm: float,
    departure_ms: float,
    fault: ClockFault | None,
    ambiguity_s: float,
    by_ends_alone: bool,
    settings: SyncSettings,
) -> list[dict[str, Any]]:
    """Findings about a fitted clock.

    Parameters
    ----------
    counts : dict
        n_frames, n_pulses, n_matched, dropped_frames, missing_pulses, spurious_pulses.
    drift_ppm, departure_ms : float
        Drift of the line, largest local departure from it.
    fault : ClockFault or None
        The departure in words.
    ambiguity_s : float
        Width of the equally good pairings.
    by_ends_alone : bool
        The pairing rests on the first and the last pulse.
    settings : SyncSettings
        Limits.
    """
    findings = [*_straightness(departure_ms, fault, settings), *_drift(drift_ppm, settings)]
    if not departure_ms > settings.max_bend_ms:
        # Beyond a fault no frame can be on the line: its counts would only repeat the fault.
        findings += _shares(counts, settings)
    if ambiguity_s > 0:
        findings.append(
            finding(
                "fail" if ambiguity_s > settings.max_ambiguity_s else "warn",
                f"frames fit the pulses equally well over a range of {1e3 * ambiguity_s:.1f} ms",
                place="frame pulses",
                expected=f"one pairing, or a range of at most {1e3 * settings.max_ambiguity_s:.1f} ms",
                remedy="record the same start for camera and pulses, or widen sync.max_ambiguity_s "
                "if that much uncertainty is harmless",
            )
        )
    elif by_ends_alone:
        findings.append(
            finding(
                "warn",
                "frame intervals are too regular to show which pulse belongs to which frame; "
                "the pairing rests on the first and the last pulse alone",
                place="frame pulses",
                expected="time stamps fine enough to show the jitter of the frame interval",
            )
        )
    return findings


def _straightness(departure_ms, fault, settings):
    if not departure_ms > settings.warn_bend_ms:
        return []
    level = "fail" if departure_ms > settings.max_bend_ms else "warn"
    found = f"the clock departs by up to {departure_ms:.1f} ms from a straight line"
    if fault is not None:
        found = fault.sentence()
    return [
        finding(
            level,
            found,
            place="camera clock",
            expected=f"a clock straight to {settings.max_bend_ms:g} ms (sync.max_bend_ms), "
            f"better to {settings.warn_bend_ms:g} ms",
            remedy="repair the time stamps from the acquisition's log, or cut the session at the fault",
        )
    ]


def _drift(drift_ppm, settings):
    if abs(drift_ppm) <= settings.warn_drift_ppm:
        return []
    level = "fail" if abs(drift_ppm) > settings.max_drift_ppm else "warn"
    return [
        finding(
            level,
            f"the camera clock drifts by {drift_ppm:+.1f} ppm against the recording",
            place="camera clock",
            # That crystals hold 20 to 100 ppm is common practice, no source.
            expected=f"at most {settings.warn_drift_ppm:g} ppm; quartz clocks hold 20 to 100 ppm",
            remedy="check that frame times are measured and not computed from a nominal frame rate",
        )
    ]


def _shares(counts, settings):
    findings = []
    matched = counts["n_matched"] / counts["n_frames"]
    if matched < settings.min_matched_share:
        findings.append(
            finding(
                "fail",
                f"only {counts['n_matched']} of {counts['n_frames']} frames "
                f"({100 * matched:.1f} %) have a pulse on the line",
                place="frame pulses",
                expected=f"at least {100 * settings.min_matched_share:g} % (sync.min_matched_share)",
                remedy="check that the pulses are complete and belong to this camera",
            )
        )
    dropped = counts["dropped_frames"] / max(counts["n_matched"] + counts["dropped_frames"], 1)
    if dropped > settings.warn_dropped_share:
        findings.append(
            finding(
                "warn",
                f"{counts['dropped_frames']} pulses ({100 * dropped:.1f} %) have no frame: dropped frames",
                place="frame pulses",
                expected=f"at most {100 * settings.warn_dropped_share:g} % (sync.warn_dropped_share)",
                remedy="gaps up to behaviour.max_gap_s are interpolated, longer ones are left out",
            )
        )
    elif counts["dropped_frames"] or counts["missing_pulses"] or counts["spurious_pulses"]:
        findings.append(
            finding(
                "note",
                f"{counts['dropped_frames']} dropped frames, {counts['missing_pulses']} frames without "
                f"a pulse, {counts['spurious_pulses']} pulses between frames",
                place="frame pulses",
            )
        )
    return findings
