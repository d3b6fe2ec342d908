"""Settings of the population stage: what counts as encoding, intervals."""

from __future__ import annotations

from odograph.settings.base import StageSettings, setting


class PopulationSettings(StageSettings):
    """How the units of all sessions are judged together and counted."""

    false_discovery_rate: float = setting(
        0.05,
        "a unit encodes a variable when its selected model holds it and its adjusted p is at most this; "
        "speed gains are judged at the same rate",
        unit="share",
        gt=0,
        le=0.5,
    )
    confidence: float = setting(0.95, "coverage asked of every interval", unit="share", ge=0.5, le=0.999)
    bootstrap_draws: int = setting(
        2000, "resamples behind each interval that spans animals", unit="draws", ge=200, le=100000
    )
    bootstrap_seed: int = setting(1848, "seed of the resampling", ge=0)
    minimum_animals: int = setting(
        2, "fewest animals for which an interval over animals is given", unit="animals", ge=2, le=1000
    )
