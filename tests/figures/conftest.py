"""An invented session and an invented unit, small enough to draw in a moment."""

from __future__ import annotations

import functools
import itertools

import numpy as np
import pandas as pd
import pytest
from matplotlib.text import Text

from odograph.population.adaptivity import speed_table
from odograph.population.composition import composition
from odograph.settings.figures import FiguresSettings
from odograph.settings.population import PopulationSettings

TERMS = ("position", "head_direction", "speed")
MODELS = ["constant", *("+".join(part) for k in (1, 2, 3) for part in itertools.combinations(TERMS, k))]
CORNERS = [[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]]


@pytest.fixture(scope="session")
def record_id() -> str:
    return "record:" + "0123456789abcdef" * 4


@pytest.fixture(scope="session")
def settings() -> FiguresSettings:
    return FiguresSettings(dpi=72)


@pytest.fixture(scope="session")
def corners() -> list[list[float]]:
    return CORNERS


@pytest.fixture
def behaviour() -> pd.DataFrame:
    n = 4000
    time = np.arange(n) * 0.02
    valid = np.ones(n, bool)
    valid[1000:1100] = False
    reason = np.where(valid, "", "lost").astype(object)
    valid[2000:2400], reason[2000:2400] = False, "invalid_time"
    return pd.DataFrame(
        {
            "time_s": time,
            "x_m": np.where(valid, 0.5 + 0.45 * np.sin(time * 0.9), np.nan),
            "y_m": np.where(valid, 0.5 + 0.45 * np.cos(time * 0.7), np.nan),
            "head_direction_rad": (time * 0.9) % (2 * np.pi),
            "speed_cm_s": 20 + 19 * np.sin(time * 0.4),
            "valid": valid,
            "reason": reason,
        }
    )


@pytest.fixture
def curves() -> dict[str, np.ndarray]:
    centres = np.linspace(0.05, 0.95, 10)
    x, y = np.meshgrid(centres, centres)
    fitted = 1 + 9 * np.exp(-((x - 0.35) ** 2 + (y - 0.65) ** 2) / 0.02)
    observed = fitted * 1.1
    observed[0, 0] = np.nan
    angle = np.linspace(0, 2 * np.pi, 30, endpoint=False) + np.pi / 30
    direction = 2 + np.cos(angle)
    speed = np.linspace(0.5, 39.5, 20)
    rate = 1 + speed / 20
    return {
        "position_x_m": centres,
        "position_y_m": centres,
        "position_rate_hz": fitted,
        "position_rate_low_hz": fitted * 0.8,
        "position_rate_high_hz": fitted * 1.2,
        "position_observed_hz": observed,
        "head_direction_rad": angle,
        "head_direction_rate_hz": direction,
        "head_direction_rate_low_hz": direction * 0.8,
        "head_direction_rate_high_hz": direction * 1.2,
        "head_direction_observed_hz": direction * 1.05,
        "speed_cm_s": speed,
        "speed_rate_hz": rate,
        "speed_rate_low_hz": rate * 0.9,
        "speed_rate_high_hz": rate * 1.1,
        "speed_observed_hz": rate * 0.97,
        "spike_bins": np.arange(0, 4000, 7, dtype=np.int32),
    }


@pytest.fixture
def unit_row() -> dict:
    return {
        "session": "heron_03",
        "unit": 17,
        "animal": "heron",
        "region": "MEC",
        "n_spikes": 572,
        "mean_rate_hz": 2.5,
        "status": "fitted",
        "status_reason": "",
        "selected_model": "position+head_direction",
        "encodes_position": True,
        "encodes_head_direction": True,
        "encodes_speed": False,
        "position_p": 0.0002,
        "head_direction_p": 0.012,
        "speed_p": 0.44,
        "selected_bits_per_spike": 0.31,
        "position_information_bits_per_spike": 0.6,
        "position_information_slow_bits_per_spike": 0.5,
        "position_information_fast_bits_per_spike": 0.7,
        "head_direction_information_bits_per_spike": 0.1,
    }


@pytest.fixture
def unit_scores() -> pd.DataFrame:
    value = [0.0, 0.22, 0.09, 0.02, 0.31, 0.23, 0.1, 0.315]
    return pd.DataFrame({"model": MODELS, "bits_per_spike": value, "bits_per_spike_se": 0.02})


@pytest.fixture
def inventory() -> dict:
    return {
        "session": "heron_03",
        "verdict": "pass",
        "findings": [],
        "file": {"name": "heron_03.nwb", "session_start_time": "2031-05-04T09:00:00+00:00"},
        "subject": {"subject_id": "heron", "species": "Testudo ficta"},
        "units": [{"unit": k, "mean_rate_hz": 0.3 * 1.4**k, "kept": k != 3} for k in range(9)],
        "arena": {"corners_m": CORNERS},
    }


@pytest.fixture
def clock() -> dict:
    return {
        "session": "heron_03",
        "verdict": "warn",
        "drift_ppm": 41.25,
        "offset_s": 1234.5,
        "n_frames": 4000,
        "n_pulses": 4010,
        "n_matched": 3990,
        "dropped_frames": 20,
        "missing_pulses": 10,
        "findings": [{"level": "warn", "place": "acquisition/pulses", "found": "20 pulses have no frame"}],
    }


@pytest.fixture
def residuals() -> pd.DataFrame:
    time = np.linspace(0, 80, 3990)
    return pd.DataFrame({"time_s": time, "residual_ms": 0.2 * np.sin(time * 37)})


@pytest.fixture
def audit() -> dict:
    return {"session": "heron_03", "verdict": "pass", "findings": [], "valid_share": 0.875}


def make_units(animals: list[str], per_animal: int = 9) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Units and scores of a population whose units encode every combination in turn."""
    rows, scores = [], []
    for a, animal in enumerate(animals):
        for k in range(per_animal):
            model = MODELS[(k + a) % len(MODELS)]
            terms = model.split("+")
            status = "failed" if k == 8 else "fitted"
            row = {"session": f"{animal}_01", "unit": k, "animal": animal, "group": None, "region": "MEC"}
            row |= {
                "n_spikes": 500 + k,
                "mean_rate_hz": 1.0 + k,
                "status": status,
                "status_reason": "it diverged",
            }
            row |= {"selected_model": model, "encoded": model if status == "fitted" else None}
            row |= {f"encodes_{term}": term in terms and status == "fitted" for term in TERMS}
            row |= {
                "speed_shape": ("rising", "falling", "undecided")[k % 3],
                "selected_bits_per_spike": 0.1 * k,
            }
            for term in ("position", "head_direction"):
                row[f"{term}_information_slow_bits_per_spike"] = 0.1 + 0.03 * k
                row[f"{term}_information_fast_bits_per_spike"] = 0.12 + 0.04 * k
                gain = 0.1 * (k - 2) if row[f"encodes_{term}"] else np.nan
                row[f"{term}_speed_gain"], row[f"{term}_speed_gain_se"] = gain, 0.05
                row[f"{term}_sharpens"], row[f"{term}_blunts"] = bool(gain > 0.2), bool(gain < 0)
                for pace, factor in (("slow", 1.0), ("fast", 1.2 + k / 10)):
                    row[f"{term}_fitted_{pace}_bits_per_spike"] = 0.1 * factor
                    row[f"{term}_fitted_{pace}_bits_per_s"] = 0.4 * factor
            row["speed_gain_status"] = "fitted" if status == "fitted" else "not_fitted"
            rows.append(row)
            for place, name in enumerate(MODELS):
                score = {
                    "session": row["session"],
                    "unit": k,
                    "model": name,
                    "bits_per_spike": 0.02 * place * k,
                }
                scores.append(score | {"bits_per_spike_se": 0.01})
    return pd.DataFrame(rows), pd.DataFrame(scores)


@pytest.fixture
def population():
    """A function of the animals' names: units, scores, composition and speed tables."""

    return lambda animals: tuple(table.copy() for table in _population(tuple(animals)))


@functools.cache
def _population(animals: tuple[str, ...]) -> tuple[pd.DataFrame, ...]:
    units, scores = make_units(list(animals))
    rules = PopulationSettings(bootstrap_draws=200)
    return units, scores, composition(units, rules), speed_table(units, rules)


@pytest.fixture
def misplaced():
    """A function of a figure: texts that leave it, texts that lie on each other, texts smaller than 7 pt."""

    def look(figure) -> list[str]:
        drawn: list[Text] = []
        draw = Text.draw

        def noted(text, renderer):
            if text.get_visible() and text.get_text().strip() and text not in drawn:
                drawn.append(text)
            draw(text, renderer)

        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(Text, "draw", noted)
            figure.draw_without_rendering()
        told, boxes = [], []
        for text in drawn:
            box = text.get_window_extent()
            name = text.get_text().splitlines()[0][:40]
            if text.get_fontsize() < 7:
                told.append(f"{name!r} is {text.get_fontsize()} pt")
            whole = figure.bbox
            outside = max(whole.x0 - box.x0, box.x1 - whole.x1, whole.y0 - box.y0, box.y1 - whole.y1)
            if outside > 0.5:
                told.append(f"{name!r} leaves the figure by {outside:.1f} px")
            boxes.append((name, box))
        for (one, a), (other, b) in itertools.combinations(boxes, 2):
            across = min(a.x1, b.x1) - max(a.x0, b.x0)
            up = min(a.y1, b.y1) - max(a.y0, b.y0)
            # Boxes hold the room for descenders too: a touch of a pixel or two is no collision.
            if across > 1.5 and up > 0.25 * min(a.height, b.height):
                told.append(f"{one!r} lies on {other!r}")
        return told

    return look
