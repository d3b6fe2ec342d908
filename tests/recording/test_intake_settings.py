"""Settings of intake: what they refuse."""

from __future__ import annotations

import pytest
from pydantic import ValidationError

from odograph.settings.intake import IntakeSettings


def test_the_defaults_name_nothing():
    settings = IntakeSettings()
    assert settings.position_place is None and settings.unit_filter == [] and settings.covariates == []


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"positon_place": "x"}, "Extra inputs"),
        ({"length_unit": "furlongs"}, "metres"),
        ({"metres_per_pixel": 0}, "greater than 0"),
        ({"back_point": "a"}, "front_point"),
        ({"front_point": "a", "back_point": "a"}, "both 'a'"),
        ({"length_unit": "pixels"}, "metres_per_pixel"),
        ({"direction_zero_deg": 400}, "360"),
        ({"arena_corners_m": [[0, 0], [1, 0]]}, "at least 3"),
        ({"arena_corners_m": [[0, 0], [1, 0], [1]]}, "at least 2"),
        ({"unit_filter": [{"column": "grade"}]}, "exactly one"),
        ({"unit_filter": [{"column": "grade", "keep": ["a"], "at_least": 1}]}, "exactly one"),
        ({"covariates": [{"name": "Wheel", "place": "x"}]}, "pattern"),
        ({"covariates": [{"name": "speed", "place": "x"}]}, "taken"),
        ({"covariates": [{"name": "w", "place": "x"}, {"name": "w", "place": "y"}]}, "share the name"),
    ],
)
def test_values_that_are_refused(values, message):
    with pytest.raises(ValidationError, match=message):
        IntakeSettings(**values)


def test_kinds_of_values_in_a_condition_are_kept():
    (condition,) = IntakeSettings(unit_filter=[{"column": "c", "keep": [True, 1, 0.5, "1"]}]).unit_filter
    assert condition.keep == [True, 1, 0.5, "1"]
    assert [type(value) for value in condition.keep] == [bool, int, float, str]
