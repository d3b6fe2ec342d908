"""Settings of the pictures; none of them changes a number."""

from __future__ import annotations

from typing import Literal

from pydantic import field_validator

from odograph.settings.base import StageSettings, setting


class FiguresSettings(StageSettings):
    """How cards, session pictures and population figures are drawn."""

    formats: tuple[Literal["png", "svg", "pdf"], ...] = setting(
        ("png",), "File formats of every figure; png must be among them, for the report shows it."
    )
    dpi: int = setting(
        200,
        "Resolution of PNG figures and of the dense layers in SVG and PDF.",
        unit="dots per inch",
        ge=72,
        le=600,
    )
    font_size_pt: float = setting(7.5, "Size of the text at print size.", unit="pt", ge=7, le=9)
    rate_colour_map: Literal["viridis", "cividis", "magma", "inferno", "plasma"] = setting(
        "viridis", "Colour scale of rate maps; only scales that are even to the eye are offered."
    )
    direction_colour_map: Literal["compass", "twilight", "twilight_shifted"] = setting(
        "compass",
        "Cyclic colour scale of head direction; compass is readable on white and by colour-blind readers.",
    )
    path_points: int = setting(
        8000, "Most points drawn of an animal's path.", unit="points", ge=500, le=500_000
    )
    spike_dots: int = setting(
        3000,
        "Most spikes drawn on a path; of more, an even sample is shown and said.",
        unit="spikes",
        ge=100,
        le=100_000,
    )

    @field_validator("formats")
    @classmethod
    def _png_among_formats(cls, formats: tuple[str, ...]) -> tuple[str, ...]:
        if "png" not in formats:
            raise ValueError("png must be among the formats, for the report shows the PNG files")
        if len(set(formats)) != len(formats):
            raise ValueError("a format is named twice")
        return formats
