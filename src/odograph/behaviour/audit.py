"""What was dropped or put right in a session's tracking, run by run and in sum."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from odograph.behaviour.bins import in_gaps
from odograph.behaviour.cleaning import REASON_TYPE, SAMPLE_REASONS, CleanedPoints

if TYPE_CHECKING:
    from odograph.behaviour.derive import Behaviour

_FRAME_GAP = 1.5
_BIN_REASONS = ("invalid_time", "immobile", "unobserved")


def audit_rows(
    cleaned: CleanedPoints,
    gaps: list[tuple[np.ndarray, np.ndarray]],
    interval_s: float,
    centre_s: np.ndarray,
    bin_reason: np.ndarray,
    bin_s: float,
) -> tuple[dict[str, Any], ...]:
    """Every run of samples that was not used as it was, sorted by start.

    Parameters
    ----------
    cleaned : CleanedPoints
        Samples and reasons, after the filter's gate.
    gaps : list of (ndarray, ndarray)
        Gaps of each point that are too long to interpolate.
    interval_s : float
        Frame interval, s.
    centre_s, bin_reason : ndarray (n_bins,)
        Bins and their reasons.
    bin_s : float
        Width of the bins, s.

    Returns
    -------
    tuple of dict
        start_s, stop_s, samples, reason and action: "interpolated", "left_out", "exchanged_back" (put right)
        or "masked" (known, but not used). A frame counts once, for the first reason of any of its points.
        For reason "gap" (frames that the camera dropped) samples are the frames missing.
    """
    rows = []
    reason = _frame_reason(cleaned)
    left_out = np.zeros(len(reason), bool)
    for gap in gaps:
        left_out |= in_gaps(cleaned.time_s, gap) >= 0
    half = 0.5 * interval_s
    for first, last in _runs(reason, left_out):
        if reason[first]:
            action = "left_out" if left_out[first] else "interpolated"
            rows.append(_row(cleaned.time_s, first, last, half, str(reason[first]), action))
    for first, last in _runs(cleaned.exchanged):
        if cleaned.exchanged[first]:
            rows.append(_row(cleaned.time_s, first, last, half, "swap", "exchanged_back"))
    rows += _missing_frames(cleaned.time_s, gaps, interval_s)
    rows += _masked_bins(cleaned.time_s, centre_s, bin_reason, bin_s)
    return tuple(sorted(rows, key=lambda row: (row["start_s"], row["stop_s"], row["reason"])))


def audit_document(session: str, behaviour: Behaviour) -> dict[str, Any]:
    """The audit of a session as a JSON document, with its verdict.

    Parameters
    ----------
    session : str
        Name of the session.
    behaviour : Behaviour
        What `derive_behaviour` gave.
    """
    bins = len(behaviour.time_s)
    valid = int(behaviour.valid.sum())
    start_s = float(behaviour.time_s[0] - 0.5 * behaviour.bin_s)
    stop_s = float(behaviour.time_s[-1] + 0.5 * behaviour.bin_s)
    masked, counts = np.unique(behaviour.reason[~behaviour.valid], return_counts=True)
    return {
        "session": session,
        "verdict": behaviour.verdict,
        "findings": [dict(item) for item in behaviour.findings],
        "bins": bins,
        "bin_s": behaviour.bin_s,
        "valid_bins": valid,
        "valid_share": valid / bins,
        "span_s": stop_s - start_s,
        "start_s": start_s,
        "stop_s": stop_s,
        "frames": behaviour.n_frames,
        "reasons": _sums(behaviour.audit_rows, stop_s - start_s),
        "masked_bins": {str(name): int(count) for name, count in zip(masked, counts, strict=True)},
        "swaps_repaired": behaviour.exchanges,
        "swapped_frames": behaviour.exchanged_frames,
        "position_noise_m": behaviour.motion.position_noise_m,
        "acceleration_m_s2": behaviour.motion.acceleration_m_s2,
        "median_position_sd_m": _median(behaviour.position_sd_m[behaviour.valid]),
        "median_direction_sd_rad": _median(behaviour.direction_sd_rad[behaviour.valid]),
    }


def _median(values):
    values = values[np.isfinite(values)]
    return float(np.median(values)) if len(values) else None


def _sums(rows, span_s):
    sums: dict[tuple[str, str], list[float]] = {}
    for row in rows:
        entry = sums.setdefault((row["reason"], row["action"]), [0, 0.0])
        entry[0] += row["samples"]
        entry[1] += row["stop_s"] - row["start_s"]
    return [
        {
            "reason": reason,
            "action": action,
            "samples": int(samples),
            "seconds": float(seconds),
            "share": float(seconds / span_s),
        }
        for (reason, action), (samples, seconds) in sorted(sums.items())
    ]


def _frame_reason(cleaned):
    reason = np.full(len(cleaned.time_s), "", REASON_TYPE)
    for name in SAMPLE_REASONS:
        for why in cleaned.reasons:
            reason[(why == name) & (reason == "")] = name
    return reason


def _runs(*columns):
    """First and last row of every run in which no column changes."""
    n = len(columns[0])
    if not n:
        return []
    changes = np.zeros(n - 1, bool)
    for values in columns:
        changes |= values[1:] != values[:-1]
    cut = np.flatnonzero(changes)
    return list(zip(np.append(0, cut + 1).tolist(), np.append(cut, n - 1).tolist(), strict=True))


def _row(time_s, first, last, half, reason, action):
    return {
        "start_s": float(time_s[first] - half),
        "stop_s": float(time_s[last] + half),
        "samples": last - first + 1,
        "reason": reason,
        "action": action,
    }


def _missing_frames(time_s, gaps, interval_s):
    step = np.diff(time_s)
    rows = []
    for k in np.flatnonzero(step > _FRAME_GAP * interval_s):
        middle = np.array([0.5 * (time_s[k] + time_s[k + 1])])
        long = any(in_gaps(middle, gap)[0] >= 0 for gap in gaps)
        rows.append(
            {
                "start_s": float(time_s[k] + 0.5 * interval_s),
                "stop_s": float(time_s[k + 1] - 0.5 * interval_s),
                "samples": max(round(float(step[k]) / interval_s) - 1, 1),
                "reason": "gap",
                "action": "left_out" if long else "interpolated",
            }
        )
    return rows


def _masked_bins(time_s, centre_s, bin_reason, bin_s):
    rows = []
    for first, last in _runs(bin_reason):
        if bin_reason[first] not in _BIN_REASONS:
            continue
        start_s, stop_s = float(centre_s[first] - 0.5 * bin_s), float(centre_s[last] + 0.5 * bin_s)
        rows.append(
            {
                "start_s": start_s,
                "stop_s": stop_s,
                "samples": int(np.searchsorted(time_s, stop_s) - np.searchsorted(time_s, start_s)),
                "reason": str(bin_reason[first]),
                "action": "masked",
            }
        )
    return rows
