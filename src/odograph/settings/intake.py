"""Settings of the intake stage: where things are in the NWB files and how they were written."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from odograph.settings.base import StageSettings, setting

Scalar = bool | int | float | str
Corner = Annotated[list[float], Field(min_length=2, max_length=2)]

RESERVED_COVARIATES = ("time_s", "x_m", "y_m", "position", "head_direction", "speed", "valid", "reason")


class UnitCondition(StageSettings):
    """One condition on a column of the units table; exactly one of the three tests is given."""

    column: str = setting(..., "column of the units table", min_length=1)
    keep: list[Scalar] | None = setting(None, "keep units whose value is one of these")
    at_least: float | None = setting(None, "keep units whose value is this or more")
    at_most: float | None = setting(None, "keep units whose value is this or less")

    @model_validator(mode="after")
    def _one_test(self) -> UnitCondition:
        given = [name for name in ("keep", "at_least", "at_most") if getattr(self, name) is not None]
        if len(given) != 1:
            raise ValueError(
                f"the condition on column {self.column!r} needs exactly one of keep, at_least, at_most"
            )
        return self


class CovariateSource(StageSettings):
    """One more variable of the behaviour: a time series of the file and the clock it is written on."""

    name: str = setting(..., "name of the variable, used as a column", pattern=r"^[a-z][a-z0-9_]*$")
    place: str = setting(..., "place of the TimeSeries in the file", min_length=1)
    clock: Literal["camera", "recording"] = setting("recording", "the clock its time stamps are on")


class IntakeSettings(StageSettings):
    """Where the signals are in an NWB file; null takes the only candidate, several are an error."""

    position_place: str | None = setting(
        None, "Place of the tracking: a Position or pose container, or one SpatialSeries."
    )
    front_point: str | None = setting(
        None, "Tracked point nearer the nose: name of a series in the container, or its place."
    )
    back_point: str | None = setting(
        None, "Tracked point nearer the tail; with front_point it gives the head direction."
    )
    length_unit: Literal["metres", "centimetres", "millimetres", "pixels"] | None = setting(
        None, "Unit of the tracking; set it only where the file names a wrong unit or none."
    )
    metres_per_pixel: float | None = setting(
        None, "Scale of tracking that is in pixels.", unit="m/pixel", gt=0
    )
    lost_value: Literal["zero", "minus_one"] | None = setting(
        None, "Stored value that stands for a lost point, besides NaN: both coordinates 0, or both -1."
    )
    direction_place: str | None = setting(
        None, "Place of a measured head direction; `none` leaves one that is in the file unread."
    )
    direction_unit: Literal["radians", "degrees"] | None = setting(
        None, "Unit of the measured head direction; set it only where the file names a wrong unit or none."
    )
    direction_clockwise: bool = setting(False, "Whether the measured head direction grows clockwise.")
    direction_zero_deg: float = setting(
        0.0,
        "Where the zero of the measured head direction points, counter-clockwise from +x.",
        unit="degrees",
        ge=-360,
        le=360,
    )
    frame_pulses_place: str | None = setting(
        None,
        "Place of the camera's frame pulses on the recording clock; null takes the tracking as already on "
        "that clock.",
    )
    frame_pulses_label: str | None = setting(
        None, "Only the events with this label are frame pulses, where a table holds several kinds."
    )
    frame_pulses_edge: Literal["rising", "falling"] = setting(
        "rising", "Edge that marks a frame, where the pulses are a sampled line."
    )
    covariates: list[CovariateSource] = Field(
        default_factory=list,
        description="Further variables of the behaviour: name, place, clock (camera or recording).",
        json_schema_extra={"unit": None},
    )
    arena_place: str | None = setting(
        None,
        "Place of a table with columns x_m and y_m, the corners of the arena; `none` leaves it unread.",
    )
    arena_corners_m: list[Corner] | None = setting(
        None, "Corners of the arena in order, [x, y] each; goes before the file.", unit="m", min_length=3
    )
    units_place: str | None = setting(None, "Place of the table of sorted units.")
    unit_filter: list[UnitCondition] = Field(
        default_factory=list,
        description="Conditions a unit must meet: column and one of keep, at_least, at_most.",
        json_schema_extra={"unit": None},
    )
    region_column: str | None = setting(
        None, "Column of the units table that names the brain region; null takes the electrodes' location."
    )
    unsorted_spikes: Literal["refuse", "sort"] = setting(
        "refuse", "What spike times out of order do: the session is refused, or they are sorted and it warns."
    )
    missing_links: Literal["refuse", "warn"] = setting(
        "refuse", "What links to missing files do: the session is refused, or only if a signal in use is hit."
    )

    @model_validator(mode="after")
    def _settings_agree(self) -> IntakeSettings:
        if self.back_point is not None and self.front_point is None:
            raise ValueError("back_point is set but front_point is not; name both, or front_point alone")
        if self.front_point is not None and self.front_point == self.back_point:
            raise ValueError(f"front_point and back_point are both {self.front_point!r}")
        if self.length_unit == "pixels" and self.metres_per_pixel is None:
            raise ValueError("length_unit is pixels; metres_per_pixel is needed too")
        names = [source.name for source in self.covariates]
        for name in names:
            if names.count(name) > 1:
                raise ValueError(f"two covariates share the name {name!r}")
            if name in RESERVED_COVARIATES:
                raise ValueError(f"a covariate may not be named {name!r}; that name is taken")
        return self
