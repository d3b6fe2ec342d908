"""Settings of the study as a whole: its name, its sessions, and what a bad session does to the rest."""

from __future__ import annotations

from typing import Literal

from odograph.settings.base import StageSettings, setting


class StudySettings(StageSettings):
    """What holds for the whole study rather than for one stage."""

    name: str = setting("study", "Name of the study, printed in the report and on figures.", min_length=1)
    sessions_table: str = setting(
        "config/sessions.tsv",
        "Table of the sessions (tab-separated), relative to the folder the workflow is run in.",
        min_length=1,
    )
    on_bad_session: Literal["leave_out", "stop"] = setting(
        "leave_out",
        "What a session that cannot be used does: it is left out by name and the rest goes on, "
        "or the run stops.",
    )
    shards_per_session: int = setting(
        2,
        "Number of jobs the units of one session are spread over; the results do not depend on it.",
        unit="jobs",
        ge=1,
        le=64,
    )
