"""All settings of a run: one section for every stage."""

from __future__ import annotations

from typing import Any

from pydantic import Field

from odograph.settings.base import StageSettings
from odograph.settings.behaviour import BehaviourSettings
from odograph.settings.encoding import EncodingSettings
from odograph.settings.figures import FiguresSettings
from odograph.settings.intake import IntakeSettings
from odograph.settings.population import PopulationSettings
from odograph.settings.study import StudySettings
from odograph.settings.sync import SyncSettings

# The sections that a column of the sessions table may set for one session alone. The others hold for all
# sessions at once: a population of units judged by different rules could not be counted.
SESSION_STAGES = ("intake", "sync", "behaviour", "encoding")


def _section(model: type[StageSettings], description: str) -> Any:
    return Field(default_factory=model, description=description)


class Settings(StageSettings):
    """The whole configuration: a section for every stage, in the order of the data."""

    study: StudySettings = _section(StudySettings, "The study as a whole.")
    intake: IntakeSettings = _section(IntakeSettings, "Where things are in the NWB files.")
    sync: SyncSettings = _section(SyncSettings, "The clock of the camera and the clock of the recording.")
    behaviour: BehaviourSettings = _section(
        BehaviourSettings, "From tracked points to position, head direction and speed."
    )
    encoding: EncodingSettings = _section(EncodingSettings, "Which variables each unit encodes.")
    population: PopulationSettings = _section(PopulationSettings, "All units taken together.")
    figures: FiguresSettings = _section(FiguresSettings, "How figures are drawn.")


STAGES = tuple(Settings.model_fields)
