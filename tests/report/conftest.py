"""An invented run of two sessions, one of which failed, as the page takes it."""

from __future__ import annotations

import io

import numpy as np
import pandas as pd
import pytest
from PIL import Image

from odograph.figures.captions import POPULATION_FIGURES
from odograph.figures.miniature import draw_miniature
from odograph.report.context import PageContext, PageFigure
from odograph.settings.all import Settings
from odograph.settings.figures import FiguresSettings
from odograph.settings.load import settings_table


def units_table(n: int) -> pd.DataFrame:
    """Units that encode position, direction, both or nothing in turn; every seventh was not fitted."""
    encoded = ["position", "position+head_direction", "constant", "head_direction"]
    rows = []
    for k in range(n):
        fitted = k % 7 != 6
        rows.append(
            {
                "session": "heron_01",
                "unit": k,
                "animal": "heron",
                "group": None,
                "region": "MEC" if k % 2 else None,
                "n_spikes": 400 + 10 * k,
                "mean_rate_hz": 1.25 + k,
                "status": "fitted" if fitted else "too_few_spikes",
                "status_reason": None if fitted else "41 spikes in valid time",
                "selected_model": encoded[k % 4] if fitted else None,
                "encoded": encoded[k % 4] if fitted else None,
                "selected_bits_per_spike": 0.1 * k if fitted else np.nan,
                "speed_shape": "non_monotonic" if k == 1 else "not_tuned",
            }
        )
    return pd.DataFrame(rows)


def unit_curves(k: int) -> dict[str, np.ndarray]:
    """Maps and curves of realistic size."""
    y, x = np.mgrid[0:40, 0:40] / 40
    angle = np.linspace(0, 2 * np.pi, 60, endpoint=False)
    speed = np.linspace(0, 60, 40)
    rate = 2 + np.cos(angle + k)
    noise = np.random.default_rng(k).uniform(0, 1, (40, 40))
    return {
        "position_observed_hz": 5 * np.exp(-((x - 0.3) ** 2 + (y - 0.02 * (k % 40)) ** 2) / 0.05) + noise,
        "head_direction_rad": angle,
        "head_direction_rate_hz": rate,
        "head_direction_rate_low_hz": rate * 0.9,
        "head_direction_rate_high_hz": rate * 1.1,
        "speed_cm_s": speed,
        "speed_rate_hz": 1 + speed / 30,
    }


@pytest.fixture
def make_context():
    """A function of the number of units and of what is to differ."""

    def make(n_units: int = 8, settings: Settings | None = None, **changes) -> PageContext:
        units = units_table(n_units)
        verdicts = pd.DataFrame(
            [
                {
                    "session": "heron_01",
                    "verdict": "warn",
                    "stage": "sync",
                    "reason": "20 pulses have no frame",
                },
                {
                    "session": "ibis_02",
                    "verdict": "fail",
                    "stage": "intake",
                    "reason": "the file ends too early",
                },
            ]
        ).assign(
            animal=["heron", "ibis"], group=None, units_recorded=9, units_kept=[8, 0], units_fitted=[7, 0]
        )
        warned = {"level": "warn", "place": "acquisition/pulses", "found": "20 pulses have no frame"}
        failed = {
            "level": "fail",
            "place": "/",
            "found": "the file ends too early",
            "expected": "a whole file",
            "remedy": "copy it again",
        }
        documents = {
            "intake": {
                "heron_01": {"verdict": "pass", "findings": [], "file": {"name": "heron_01.nwb"}},
                "ibis_02": {"verdict": "fail", "findings": [failed], "file": None},
            },
            "sync": {"heron_01": {"verdict": "warn", "findings": [warned], "drift_ppm": -31.5}},
            "behaviour": {
                "heron_01": {
                    "verdict": "pass",
                    "findings": [{"level": "note", "place": None, "found": "3 swaps were repaired"}],
                    "valid_bins": 30000,
                    "bin_s": 0.02,
                    "valid_share": 0.95,
                }
            },
        }
        buffer = io.BytesIO()
        Image.new("RGB", (40, 20), "white").save(buffer, "png")
        figures = [
            PageFigure(name, buffer.getvalue(), "record:" + "ab" * 32, f"figures/{name}.png")
            for name in POPULATION_FIGURES
        ]
        pictures = FiguresSettings()
        parts = {
            "study": "Marsh birds & friends",
            "summary_lines": [f"line {k}" for k in range(10)],
            "verdicts": verdicts,
            "documents": documents,
            "units": units,
            "miniatures": {("heron_01", k): draw_miniature(unit_curves(k), pictures) for k in range(n_units)},
            "figures": figures,
            "settings": settings_table(settings or Settings()),
            "session_settings": {"heron_01": {"behaviour.max_gap_s": 0.75}},
            "record_id": "record:" + "cd" * 32,
            "software": {"numpy": "9.8.7"},
        }
        return PageContext(**(parts | changes))

    return make
