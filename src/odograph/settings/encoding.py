"""Settings of the encoding stage: terms, folds, selection, tests."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from odograph.settings.base import StageSettings, setting

TermKind = Literal["plane", "line", "circle", "category"]


class TermSettings(StageSettings):
    """One variable that a unit may encode."""

    name: str = setting(..., "name of the term, used in tables and models", pattern=r"^[a-z][a-z0-9_]*$")
    kind: TermKind = setting(..., "plane (two coordinates), line, circle (period 2 pi rad) or category")
    columns: list[str] = setting(..., "columns of the behaviour table: two for a plane, else one")
    basis_size: int = setting(10, "B-splines per axis (ignored for a category)", ge=4, le=40)
    penalty_order: Literal[1, 2] = setting(
        2,
        "derivative a line's penalty is on: 2 leaves straight lines free; 1 shrinks to a constant, so that a "
        "line without effect costs next to no degree of freedom and a straight one costs more",
    )
    cells: int = setting(40, "grid cells per axis on which the covariate is discretised", ge=8, le=200)
    low: float | None = setting(None, "lower end of the range; null takes it from the data")
    high: float | None = setting(None, "upper end of the range; null takes it from the data")

    @model_validator(mode="after")
    def _columns_fit_the_kind(self) -> TermSettings:
        wanted = 2 if self.kind == "plane" else 1
        if len(self.columns) != wanted:
            raise ValueError(f"a term of kind {self.kind} takes {wanted} column(s), not {len(self.columns)}")
        if self.penalty_order != 2 and self.kind != "line":
            raise ValueError(f"penalty_order is a setting of lines; a {self.kind} has its own penalty")
        if self.low is not None and self.high is not None and self.low >= self.high:
            raise ValueError("low must be below high")
        return self


def _standard_terms() -> list[TermSettings]:
    return [
        TermSettings(name="position", kind="plane", columns=["x_m", "y_m"], basis_size=11, cells=40),
        TermSettings(
            name="head_direction", kind="circle", columns=["head_direction_rad"], basis_size=12, cells=60
        ),
        TermSettings(name="speed", kind="line", columns=["speed_cm_s"], basis_size=8, cells=40),
    ]


class EncodingSettings(StageSettings):
    """How each unit's spike counts are modelled."""

    terms: list[TermSettings] = Field(
        default_factory=_standard_terms,
        description="the variables a unit may encode; every subset of them is a candidate model",
        json_schema_extra={"unit": None},
        min_length=1,
        max_length=5,
    )
    drift: bool = setting(True, "give every model a slow drift of the rate over the session (never tested)")
    drift_knot_s: float = setting(300.0, "spacing of the drift's knots", unit="s", ge=30)
    history_s: float = setting(
        0.0,
        "reach of the spike history that every model has (never tested), guard_s at most; 0 for none. "
        "With it a unit takes 2 to 5 times as long",
        unit="s",
        ge=0,
        le=2,
    )
    history_functions: int = setting(
        4, "raised cosines that make up the spike history; more than 4 are slower", ge=2, le=8
    )
    folds: int = setting(10, "held-out folds, each made of interleaved contiguous blocks", ge=3, le=30)
    blocks_per_fold: int = setting(5, "blocks per fold", ge=1, le=50)
    guard_s: float = setting(
        0.5, "time beside each held-out block that is kept out of training too", unit="s", ge=0
    )
    minimum_spikes: int = setting(
        100, "units with fewer spikes in valid time are not fitted", unit="spikes", ge=20
    )
    tests: bool = setting(True, "test each term by circular shifts of its covariate")
    test_minimum_shift_s: float = setting(20.0, "shortest shift used by the tests", unit="s", gt=0)
    test_step_s: float = setting(0.1, "shifts go in steps of this length", unit="s", gt=0, le=1)
    test_draws: int = setting(
        1000, "shifts drawn where a term has too many columns for all of them", ge=99, le=100000
    )
    information_cells: int = setting(
        20, "cells per axis of the maps used for spatial information", ge=5, le=60
    )
    matching_repeats: int = setting(
        20, "repeats of the occupancy- and spike-matched comparison of slow and fast running", ge=1, le=1000
    )
    running_above_cm_s: float = setting(
        2.0, "slow and fast running are both taken from samples above this speed", unit="cm/s", ge=0
    )
    seed: int = setting(20260, "seed of every random draw in this stage", ge=0)

    @model_validator(mode="after")
    def _history_stays_within_the_guard(self) -> EncodingSettings:
        if self.history_s > self.guard_s:
            raise ValueError(
                f"history_s ({self.history_s:g} s) must not exceed guard_s ({self.guard_s:g} s), else spikes "
                "of held-out time would reach the bins that train; raise guard_s as well"
            )
        return self

    @model_validator(mode="after")
    def _names_are_unique(self) -> EncodingSettings:
        names = [term.name for term in self.terms]
        if len(set(names)) != len(names):
            raise ValueError(f"two terms share a name: {', '.join(names)}")
        if taken := sorted({"drift", "history"} & set(names)):
            raise ValueError(f"a term must not be called {taken[0]}, which every model may have; rename it")
        return self
