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
    shard_minutes: float = setting(
        5.0,
        "Predicted time of the fits of one job: a session has as many jobs (shards) as that takes. Settled "
        "when the session is first planned, and kept; the results do not depend on it.",
        unit="min",
        gt=0,
        le=1440,
    )
    shards_per_session: int | None = setting(
        None,
        "Number of jobs the units of every session are spread over, instead of what shard_minutes gives.",
        unit="jobs",
        ge=1,
        le=64,
    )
