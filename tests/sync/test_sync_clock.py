"""The camera clock recovered from simulated trains whose truth is known."""

from __future__ import annotations

import json
from dataclasses import dataclass

import numpy as np
import pytest

from odograph.errors import InputError
from odograph.settings.sync import SyncSettings
from odograph.sync.clock import clock_document, fit_clock, identity_clock, to_recording_clock

SETTINGS = SyncSettings()
OFFSET_S = 4321.7
DRIFT_PPM = 37.0


@dataclass(frozen=True)
class Trains:
    """Frames on the camera clock, pulses on the recording clock, and what was done to them."""

    frames: np.ndarray
    pulses: np.ndarray
    dropped: int
    missing: int


def trains(
    *,
    seconds=240,
    interval=0.02,
    jitter=3e-4,
    noise=5e-5,
    drift_ppm=DRIFT_PPM,
    dropped=0.01,
    missing=0.005,
    spurious=0,
    before=300,
    after=100,
    seed=0,
    camera_jump=None,
    bend=None,
):
    """Pulses of a camera that began `before` frames earlier, with a clock of known drift and offset."""
    rng = np.random.default_rng(seed)
    n = int(seconds / interval) + before + after
    exposed = np.arange(n) * interval + jitter * rng.standard_normal(n)
    camera = exposed + noise * rng.standard_normal(n)
    pulses = OFFSET_S + exposed * (1 + 1e-6 * drift_ppm) + noise * rng.standard_normal(n)
    if camera_jump is not None:
        camera[exposed >= camera_jump[0]] += camera_jump[1]
    if bend is not None:
        pulses += np.maximum(exposed - bend[0], 0) * bend[1]
    tracked = np.zeros(n, bool)
    tracked[before : n - after] = True
    kept = tracked & (rng.random(n) >= dropped)
    seen = rng.random(n) >= missing
    rows = np.flatnonzero(kept)
    inside = np.zeros(n, bool)
    inside[rows[0] : rows[-1] + 1] = True
    stray = rng.uniform(pulses[0], pulses[-1], spurious)
    return Trains(
        camera[kept],
        np.sort(np.concatenate([pulses[seen], stray])),
        int((inside & ~kept & seen).sum()),
        int((kept & ~seen).sum()),
    )


def found(fit, level):
    return " ".join(item["found"] for item in fit.findings if item["level"] == level)


def check_clock(fit, drift_ppm=DRIFT_PPM):
    assert abs(fit.drift_ppm - drift_ppm) < 4 * fit.drift_se_ppm
    middle = OFFSET_S + 130.0
    truth = (middle - OFFSET_S) * (1 + 1e-6 * drift_ppm) + OFFSET_S
    assert to_recording_clock(fit, middle - OFFSET_S) == pytest.approx(truth, abs=2e-5)


@pytest.mark.parametrize("drift_ppm", [DRIFT_PPM, -90.0, 0.0])
def test_drift_and_offset_are_recovered(drift_ppm):
    made = trains(drift_ppm=drift_ppm)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    check_clock(fit, drift_ppm)
    assert fit.verdict == "pass"
    assert fit.ambiguity_s == 0
    assert fit.offset_s == pytest.approx(OFFSET_S, abs=0.03)
    assert fit.dropped_frames == made.dropped
    assert fit.missing_pulses == made.missing
    assert fit.spurious_pulses == 0
    assert fit.n_matched == fit.n_frames - fit.missing_pulses


def test_the_standard_error_of_drift_is_honest():
    # The spread of the estimates over independent sessions is the standard error they state.
    fits = []
    for seed in range(12):
        made = trains(seed=seed, seconds=60)
        fits.append(fit_clock(made.frames, made.pulses, SETTINGS))
    scores = np.array([(fit.drift_ppm - DRIFT_PPM) / fit.drift_se_ppm for fit in fits])
    assert 0.5 < np.sqrt(np.mean(scores**2)) < 1.6


def test_residuals_are_those_of_the_pairs():
    made = trains()
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert len(fit.residual_ms) == len(fit.residual_time_s) == fit.n_matched
    # Two independent noises of 50 us each.
    assert np.std(fit.residual_ms) == pytest.approx(np.sqrt(2) * 0.05, rel=0.05)
    assert fit.median_abs_residual_ms == pytest.approx(0.6745 * np.sqrt(2) * 0.05, rel=0.05)
    assert fit.max_residual_ms == np.abs(fit.residual_ms).max()


def test_noise_as_large_as_the_jitter_is_settled_by_longer_windows():
    made = trains(noise=3e-4)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.ambiguity_s == 0
    assert abs(fit.intercept_s - OFFSET_S) < 2e-4


def test_time_stamps_in_whole_milliseconds_still_show_the_pattern():
    made = trains()
    fit = fit_clock(np.round(made.frames, 3), made.pulses, SETTINGS)
    assert fit.ambiguity_s == 0
    assert abs(fit.intercept_s - OFFSET_S) < 2e-4


def test_many_faults_at_once():
    made = trains(dropped=0.15, missing=0.1, spurious=300)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    check_clock(fit)
    assert fit.verdict == "warn"
    assert "dropped frames" in found(fit, "warn")
    # A stray pulse that falls into a gap looks like a dropped frame, and one may stand in for a lost pulse.
    assert fit.dropped_frames == pytest.approx(made.dropped, abs=70)


def test_long_pause_of_the_camera_is_bridged():
    made = trains()
    pause = (made.frames > 100) & (made.frames < 150)
    fit = fit_clock(made.frames[~pause], made.pulses, SETTINGS)
    check_clock(fit)
    assert fit.dropped_frames >= 2400


@pytest.mark.parametrize("jump_s", [1.3712, -0.35, 0.02])
def test_a_jump_fails_with_its_moment_and_size(jump_s):
    made = trains(camera_jump=(150.0, jump_s)) if jump_s > 0 else trains_back(150.0, jump_s)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.verdict == "fail"
    assert fit.fault.kind == "jump"
    assert fit.fault.size_s == pytest.approx(jump_s, abs=2e-4)
    # The first frame after the jump; a clock set back has lost the frames whose stamps would repeat.
    assert fit.fault.recording_s == pytest.approx(OFFSET_S + 150.0 + max(-jump_s, 0.0), abs=0.1)
    assert f"jumps by {1e3 * fit.fault.size_s:+.1f} ms" in found(fit, "fail")
    # The drift is that of the sound side, not an average over the jump.
    assert fit.drift_ppm == pytest.approx(DRIFT_PPM, abs=0.5)


def trains_back(at, jump_s):
    """A clock set back: frames whose stamps would repeat are lost, so that times still ascend."""
    made = trains(camera_jump=(at, jump_s))
    highest = np.maximum.accumulate(made.frames)
    return Trains(made.frames[made.frames >= highest], made.pulses, made.dropped, made.missing)


def test_a_small_jump_warns():
    made = trains(camera_jump=(150.0, 0.007))
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.verdict == "warn"
    assert fit.fault.kind == "jump"
    assert fit.fault.size_s == pytest.approx(0.007, abs=2e-4)


def test_a_bend_fails_with_both_drifts():
    made = trains(bend=(120.0, 300e-6))
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.verdict == "fail"
    assert fit.fault.kind == "bend"
    assert fit.fault.drift_before_ppm == pytest.approx(DRIFT_PPM, abs=3)
    assert fit.fault.drift_after_ppm == pytest.approx(DRIFT_PPM + 300, abs=3)
    assert fit.fault.camera_s == pytest.approx(120.0, abs=10)


def test_a_fast_clock_warns_and_a_faster_one_fails():
    made = trains(drift_ppm=400.0)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.verdict == "warn"
    check_clock(fit, 400.0)
    assert fit_clock(made.frames, made.pulses, SyncSettings(max_drift_ppm=300.0)).verdict == "fail"


def test_regular_frames_inside_longer_pulses_are_ambiguous_and_fail():
    made = trains(jitter=0.0, noise=0.0, dropped=0.0, missing=0.0)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.verdict == "fail"
    # 300 pulses before and 100 after: 400 shifts of 20 ms leave all frames inside the pulses.
    assert fit.ambiguity_s == pytest.approx(400 * 0.02, abs=0.021)
    assert "equally well" in found(fit, "fail")


def test_regular_frames_with_little_room_warn():
    made = trains(jitter=0.0, noise=0.0, dropped=0.0, missing=0.0, before=2, after=1)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.verdict == "warn"
    assert fit.ambiguity_s == pytest.approx(0.06, abs=1e-3)
    assert fit_clock(made.frames, made.pulses, SyncSettings(max_ambiguity_s=0.01)).verdict == "fail"


def test_regular_frames_that_fill_the_pulses_rest_on_the_ends():
    made = trains(jitter=0.0, noise=0.0, dropped=0.0, missing=0.0, before=0, after=0)
    fit = fit_clock(made.frames, made.pulses, SETTINGS)
    assert fit.verdict == "warn"
    assert fit.ambiguity_s == 0
    assert fit.intercept_s == pytest.approx(OFFSET_S, abs=1e-6)
    assert "first and the last pulse" in found(fit, "warn")


def test_pulses_of_another_session_fail():
    made, other = trains(seed=1), trains(seed=2)
    fit = fit_clock(made.frames, other.pulses, SETTINGS)
    assert fit.verdict == "fail"


def test_pulses_that_stop_early_fail():
    made = trains()
    fit = fit_clock(made.frames, made.pulses[: len(made.pulses) // 2], SETTINGS)
    assert fit.verdict == "fail"
    assert "have a pulse" in found(fit, "fail")


@pytest.mark.parametrize("take", [slice(0, 20), slice(None, None, 2)])
def test_too_few_or_half_the_pulses_fail_with_a_reason(take):
    made = trains(seconds=60, missing=0.0)
    fit = fit_clock(made.frames, made.pulses[take], SETTINGS)
    assert fit.verdict == "fail"
    assert np.isnan(fit.slope)
    (finding,) = fit.findings
    assert finding["expected"] and finding["remedy"]


@pytest.mark.parametrize(
    ("frames", "message"),
    [
        (np.append(np.arange(100.0), np.nan), "not finite"),
        (np.append(np.arange(100.0), 3.0), "go back"),
        (np.zeros((10, 2)), "shape"),
    ],
)
def test_unusable_times_are_refused(frames, message):
    with pytest.raises(InputError, match=message):
        fit_clock(frames, np.arange(100.0), SETTINGS)


def test_the_document_is_plain_json_without_nan():
    made = trains(seconds=60)
    for fit in (
        fit_clock(made.frames, made.pulses, SETTINGS),
        fit_clock(made.frames[:5], made.pulses, SETTINGS),
    ):
        document = clock_document("meadow_1", fit)
        text = json.dumps(document, allow_nan=False)
        assert json.loads(text)["session"] == "meadow_1"
        assert document["verdict"] == fit.verdict
    assert document["slope"] is None


def test_the_document_names_a_fault():
    made = trains(camera_jump=(150.0, 1.0))
    document = clock_document("meadow_1", fit_clock(made.frames, made.pulses, SETTINGS))
    assert document["fault"]["kind"] == "jump"
    json.dumps(document, allow_nan=False)


def test_no_pulses_means_the_recording_clock_and_says_so():
    fit = identity_clock(100)
    assert fit.verdict == "pass"
    assert to_recording_clock(fit, np.array([1.5])) == 1.5
    assert fit.findings[0]["level"] == "note"
