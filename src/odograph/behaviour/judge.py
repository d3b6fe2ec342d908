"""The verdict on a session's behaviour, and what else its user should know."""

from __future__ import annotations

from typing import Any

import numpy as np

from odograph.behaviour.cleaning import CleanedPoints
from odograph.behaviour.swaps import facing_cosine
from odograph.recording.model import Arena, Direction, Track, finding
from odograph.settings.behaviour import BehaviourSettings

_OUTSIDE_SHARE = 0.05
_EXTENT_M = (0.05, 20.0)
_DIRECTION_DIFFERENCE_RAD = np.deg2rad(20.0)


def judge_behaviour(
    tracks: tuple[Track, ...],
    cleaned: CleanedPoints,
    columns: dict[str, np.ndarray],
    reason: np.ndarray,
    direction: Direction | None,
    series: np.ndarray | None,
    arena: Arena | None,
    settings: BehaviourSettings,
) -> list[dict[str, Any]]:
    """Findings about a session.

    Parameters
    ----------
    tracks : tuple of Track
        The tracked points as they were read.
    cleaned : CleanedPoints
        Samples and reasons.
    columns : dict of str to ndarray (n_bins,)
        x_m, y_m, head_direction_rad, ... on the bins.
    reason : ndarray (n_bins,) of str
        Reasons of the bins.
    direction, series : Direction or None, ndarray (n_bins,) or None
        The file's head direction, and the same on the bins.
    arena : Arena or None
        Outline of the arena.
    settings : BehaviourSettings
        Limits.
    """
    return [
        *_enough(reason, settings),
        *_extent(tracks, cleaned, arena),
        *_direction(cleaned, columns, direction, series),
        *_exchanges(cleaned),
    ]


def _enough(reason, settings):
    valid = int((reason == "").sum())
    share, seconds = valid / len(reason), valid * settings.bin_s
    if share >= settings.min_valid_share and seconds >= settings.min_valid_s:
        return []
    names, counts = np.unique(reason[reason != ""], return_counts=True)
    order = np.argsort(-counts, kind="stable")
    causes = ", ".join(f"{names[k]} {counts[k] * settings.bin_s:.1f} s" for k in order) or "a short session"
    return [
        finding(
            "fail",
            f"only {seconds:.1f} s ({100 * share:.1f} %) of the session are valid ({causes})",
            place="tracking",
            expected=f"at least {100 * settings.min_valid_share:g} % (behaviour.min_valid_share) and "
            f"{settings.min_valid_s:g} s (behaviour.min_valid_s)",
            remedy="look at the session's audit for what was dropped, mend the tracking or relax the limits",
        )
    ]


def _extent(tracks, cleaned, arena):
    findings = []
    if arena is not None:
        outside = max(float((why == "outside_arena").mean()) for why in cleaned.reasons)
        if outside > _OUTSIDE_SHARE:
            findings.append(
                finding(
                    "warn",
                    f"{100 * outside:.1f} % of the tracked samples lie outside the arena",
                    place=arena.place,
                    expected=f"at most {100 * _OUTSIDE_SHARE:g} %",
                    remedy="check the arena's corners, the unit of length and the origin of the tracking",
                )
            )
    # As it was read: with a wrong unit everything would have been dropped as impossible by now.
    seen = tracks[0].xy_m[np.isfinite(tracks[0].xy_m).all(axis=1)]
    if not len(seen):
        return findings
    extent = float(np.ptp(np.percentile(seen, [1, 99], axis=0), axis=0).max())
    if not _EXTENT_M[0] <= extent <= _EXTENT_M[1]:
        findings.append(
            finding(
                "warn",
                f"the tracked point covers {extent:.4g} m",
                place="tracking",
                expected=f"between {_EXTENT_M[0]:g} and {_EXTENT_M[1]:g} m for an animal that forages",
                remedy="check the unit of length (intake.length_unit, intake.metres_per_pixel)",
            )
        )
    return findings


def _direction(cleaned, columns, direction, series):
    if not np.isfinite(columns["head_direction_rad"]).any():
        return [
            finding(
                "note",
                "no head direction: one tracked point and no direction series",
                place="tracking",
                remedy="name a second point (intake.back_point) or a series (intake.direction_place)",
            )
        ]
    if len(cleaned.points_m) < 2:
        return []
    findings = []
    cosine = facing_cosine(cleaned.time_s, *cleaned.points_m)
    if cosine < 0:
        findings.append(
            finding(
                "warn",
                f"the animal faces away from where it goes (mean cosine {cosine:.2f} while moving)",
                place="tracking",
                expected="a positive mean cosine",
                remedy="check whether intake.front_point and intake.back_point are exchanged, or set "
                "behaviour.head_direction_offset_deg",
            )
        )
    if series is not None:
        turn = np.exp(1j * (series - columns["head_direction_rad"]))
        turn = turn[np.isfinite(turn)]
        if len(turn) and abs(np.angle(turn.mean())) > _DIRECTION_DIFFERENCE_RAD:
            findings.append(
                finding(
                    "warn",
                    f"the direction series is turned by {np.rad2deg(np.angle(turn.mean())):+.0f} degrees "
                    "against the direction used",
                    place=direction.place,
                    expected=f"at most {np.rad2deg(_DIRECTION_DIFFERENCE_RAD):.0f} degrees",
                    remedy="check intake.direction_clockwise and intake.direction_zero_deg, or choose by "
                    "behaviour.head_direction_from",
                )
            )
    return findings


def _exchanges(cleaned):
    if not cleaned.exchanged.any():
        return []
    began = int((np.diff(cleaned.exchanged.astype(int), prepend=0) == 1).sum())
    return [
        finding(
            "note",
            f"front and back point were exchanged {began} times ({int(cleaned.exchanged.sum())} frames) "
            "and put right",
            place="tracking",
        )
    ]
