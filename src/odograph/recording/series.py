"""Time series of an NWB file: time stamps that can be trusted, values in the unit the file means."""

from __future__ import annotations

from typing import Any

import numpy as np

from odograph.recording.opening import OpenRecording

LONGEST_STEP_S = 1.0
LONG_GAP_STEPS = 50
COARSEST_SHARE_OF_STEP = 0.1


def is_series(thing: Any) -> bool:
    """Whether an object of the file is a TimeSeries of any kind."""
    from pynwb import TimeSeries

    return isinstance(thing, TimeSeries)


def read_times(opened: OpenRecording, series: Any, place: str) -> np.ndarray:
    """Time stamps of a TimeSeries, from its time stamps or its start and rate.

    Returns
    -------
    ndarray (n_samples,)
        Seconds, float64, as they stand in the file.

    Raises
    ------
    InputError
        Not one-dimensional, not finite, or stored too coarsely to tell samples apart.
    """
    if series.timestamps is None:
        return _regular_times(opened, series, place)
    stored = opened.array(series.timestamps, f"{place}/timestamps")
    if stored.ndim != 1:
        raise opened.refuse(
            f"time stamps of shape {stored.shape}",
            place=f"{place}/timestamps",
            expected="one time stamp per sample, shape (n,)",
            remedy="write the time stamps as one list",
        )
    if stored.dtype.kind not in "fiu":
        raise opened.refuse(
            f"time stamps of type {stored.dtype}",
            place=f"{place}/timestamps",
            expected="seconds as float64",
            remedy="write the time stamps as float64 seconds",
        )
    check_finite(opened, stored, f"{place}/timestamps", "time stamps")
    _check_resolution(opened, stored, f"{place}/timestamps")
    return stored.astype(np.float64)


def _regular_times(opened: OpenRecording, series: Any, place: str) -> np.ndarray:
    rate = series.rate
    if rate is None or not np.isfinite(rate) or rate <= 0:
        raise opened.refuse(
            f"neither time stamps nor a usable rate (rate {rate})",
            place=place,
            expected="time stamps, or a starting time and a rate in Hz",
            remedy="write the series with time stamps",
        )
    start = float(series.starting_time or 0.0)
    if not np.isfinite(start):
        raise opened.refuse(
            f"the starting time is {start}",
            place=f"{place}/starting_time",
            expected="seconds",
            remedy="write the series with time stamps",
        )
    opened.check_held(series.data, f"{place}/data")
    n_samples = int(np.shape(series.data)[0]) if np.shape(series.data) else 0
    return start + np.arange(n_samples) / float(rate)


def check_finite(opened: OpenRecording, values: np.ndarray, place: str, what: str) -> None:
    """Refuse values that are not finite numbers, naming the first."""
    bad = np.flatnonzero(~np.isfinite(values))
    if bad.size:
        raise opened.refuse(
            f"{bad.size} of {values.size} {what} are not finite; the first is entry {bad[0]} "
            f"({values.ravel()[bad[0]]})",
            place=place,
            expected=f"{what} that are all finite",
            remedy="remove those samples, or give them their times",
        )


def _check_resolution(opened: OpenRecording, stored: np.ndarray, place: str) -> None:
    if stored.size < 3:
        return
    step = float(np.median(np.abs(np.diff(stored.astype(np.float64)))))
    narrow = stored.astype(np.float32)
    # Times that went through float32 once are as coarse as it is, whatever type they are kept in now.
    was_narrow = stored.dtype.kind == "f" and bool(np.all(narrow == stored))
    largest = np.max(np.abs(stored))
    coarse = float(np.spacing(np.float32(largest))) if was_narrow else float(np.spacing(np.float64(largest)))
    if step == 0 or (coarse > COARSEST_SHARE_OF_STEP * step and not _are_exact(stored, step)):
        raise opened.refuse(
            f"times near {largest:.6g} s are stored in steps of {max(coarse, 0):.3g} s; the median step of "
            f"the samples is {step:.3g} s",
            place=place,
            expected="a resolution of a tenth of the sampling step or better (float64)",
            remedy="write the time stamps as float64 seconds since the session's start",
        )


def _are_exact(stored: np.ndarray, step: float) -> bool:
    # Evenly spaced times that float32 happens to hold without loss (1/64 s, whole seconds) are not coarse.
    steps = np.diff(stored.astype(np.float64))
    return stored.dtype == np.float64 and bool(np.all(np.abs(steps - step) <= 1e-9 * step))


def check_rising(
    opened: OpenRecording, time_s: np.ndarray, place: str, *, rate_matters: bool = True
) -> np.ndarray:
    """Refuse time stamps that run backwards; say which samples of a repeated time are kept.

    Parameters
    ----------
    opened : OpenRecording
        The file; findings are added to it.
    time_s : ndarray (n_samples,)
        Seconds, finite.
    place : str
        Where they are from.
    rate_matters : bool
        Whether slow sampling and gaps are looked for too.

    Returns
    -------
    ndarray of bool (n_samples,)
        Samples to keep: the first of each time.
    """
    if time_s.size < 2:
        raise opened.refuse(
            f"{time_s.size} sample(s)",
            place=place,
            expected="a series of samples",
            remedy="check the place in the settings of intake",
        )
    steps = np.diff(time_s)
    back = np.flatnonzero(steps < 0)
    if back.size:
        at = back[0]
        raise opened.refuse(
            f"time runs backwards {back.size} time(s), first after sample {at}: "
            f"{time_s[at]:.6f} s, then {time_s[at + 1]:.6f} s",
            place=place,
            expected="time stamps in rising order",
            remedy="sort the samples by time, or mend the clock that wrote them",
        )
    keep = np.concatenate([[True], steps > 0])
    repeated = int(np.count_nonzero(~keep))
    if repeated:
        opened.note(
            "warn",
            f"{repeated} sample(s) repeat the time before them; the first of each is used",
            place=place,
            expected="one sample for each time",
            remedy="look at how the file was written",
        )
    if rate_matters:
        _check_steps(opened, np.diff(time_s[keep]), time_s[keep], place)
    return keep


def _check_steps(opened: OpenRecording, steps: np.ndarray, time_s: np.ndarray, place: str) -> None:
    median = float(np.median(steps)) if steps.size else 0.0
    if median >= LONGEST_STEP_S:
        raise opened.refuse(
            f"the median step between samples is {median:.6g} s",
            place=place,
            expected=f"behaviour sampled faster than every {LONGEST_STEP_S:g} s",
            remedy="times must be in seconds: divide milliseconds by 1000, sample numbers by their rate",
        )
    gaps = np.flatnonzero(steps > LONG_GAP_STEPS * median)
    if gaps.size:
        longest = gaps[np.argmax(steps[gaps])]
        opened.note(
            "warn",
            f"{gaps.size} gap(s) longer than {LONG_GAP_STEPS} samples; the longest is "
            f"{steps[longest]:.3f} s, at {time_s[longest]:.3f} s",
            place=place,
            expected=f"a sample about every {median:.4g} s",
            remedy="nothing is made up in long gaps; check whether the tracking was paused",
        )


def stored_values(opened: OpenRecording, series: Any, place: str) -> np.ndarray:
    """The numbers of a TimeSeries as stored, with `n_samples` rows.

    Raises
    ------
    InputError
        No data, or data that are not numbers.
    """
    stored = opened.array(series.data, f"{place}/data")
    if stored.size == 0:
        raise opened.refuse(
            f"no data (shape {stored.shape})",
            place=f"{place}/data",
            expected="one entry per sample",
            remedy="check the place; data that were linked from a file that has moved look like this too",
        )
    if stored.dtype.kind not in "fiub":
        raise opened.refuse(
            f"data of type {stored.dtype}",
            place=f"{place}/data",
            expected="numbers",
            remedy="check the place in the settings of intake",
        )
    return stored


def in_unit(series: Any, stored: np.ndarray) -> np.ndarray:
    """Stored numbers in the series' unit: data x conversion + offset, float64 (NWB schema, TimeSeries)."""
    conversion = 1.0 if series.conversion is None else float(series.conversion)
    offset = 0.0 if series.offset is None else float(series.offset)
    return stored.astype(np.float64) * conversion + offset


def check_length(
    opened: OpenRecording, values: np.ndarray, time_s: np.ndarray, place: str, columns: str = ""
) -> None:
    """Refuse data and time stamps of different length; transposed data get a word of their own."""
    if values.shape[0] == time_s.size:
        return
    transposed = values.ndim == 2 and values.shape[1] == time_s.size
    raise opened.refuse(
        f"data of shape {values.shape} with {time_s.size} time stamps"
        + ("; the data are transposed" if transposed else ""),
        place=place,
        expected=f"data of shape ({time_s.size}{', ' + columns if columns else ''})",
        remedy="write the data with time as the first axis"
        if transposed
        else "write one time stamp for each sample",
    )


def one_column(opened: OpenRecording, stored: np.ndarray, place: str) -> np.ndarray:
    """Data of shape (n,) or (n, 1) as (n,)."""
    if stored.ndim == 2 and stored.shape[1] == 1:
        return stored[:, 0]
    if stored.ndim != 1:
        raise opened.refuse(
            f"data of shape {stored.shape}",
            place=f"{place}/data",
            expected="one value per sample, shape (n,)",
            remedy="check the place in the settings of intake",
        )
    return stored
