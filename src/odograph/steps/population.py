"""Step of rule `population`: all units in one table, and what they say together."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

from odograph.errors import InputError
from odograph.provenance import layout
from odograph.provenance.files import read_json, read_table
from odograph.provenance.step import Step, run_step

if TYPE_CHECKING:
    import pandas as pd


def work(step: Step) -> None:
    """Gather the units of all sessions, count, compare, and sum up."""
    import pandas as pd

    from odograph.population.adaptivity import speed_table
    from odograph.population.composition import composition
    from odograph.population.gather import gather_scores, gather_units
    from odograph.population.sessions import session_table
    from odograph.population.summarise import summary, summary_lines
    from odograph.settings.population import PopulationSettings

    settings = step.stage_settings(PopulationSettings)
    members = step.plan["sessions"]
    step.record.add_table_input("sessions", members)
    columns = ["session", "animal", "group"]
    sessions = pd.DataFrame([{name: row[name] for name in columns} for row in members], columns=columns)
    documents = _documents(step, members)
    units = gather_units(_shards(step, members, "units"), documents["intake"], sessions, settings)
    scores = gather_scores(_shards(step, members, "scores"))
    table = session_table(documents, sessions, units)
    _refuse_failed_sessions(table, step.settings["study"]["on_bad_session"])
    parts, speed = composition(units, settings), speed_table(units, settings)
    found = summary(units, parts, speed, table)
    step.write_table("scores", scores)
    for name, product in (("units", units), ("composition", parts), ("speed", speed), ("sessions", table)):
        step.write_table(name, product)
        step.write_table(f"{name}_tsv", product)
    step.write_json("summary", {**found, "lines": summary_lines(found)})


def _documents(step: Step, members: list[dict[str, Any]]) -> dict[str, list[dict[str, Any]]]:
    """The verdicts of every session: from intake only, where the recording cannot be read."""
    readable = [row["session"] for row in members if row["readable"]]
    return {
        "intake": [read_json(step.use(layout.inventory(row["session"]))) for row in members],
        "sync": [read_json(step.use(layout.clock(session))) for session in readable],
        "behaviour": [read_json(step.use(layout.audit(session))) for session in readable],
    }


def _shards(step: Step, members: list[dict[str, Any]], name: str) -> Iterator[pd.DataFrame]:
    for row in members:
        for shard in range(row["shards"]) if row["readable"] else ():
            yield read_table(step.use(layout.shard_folder(row["session"], shard) / f"{name}.parquet"))


def _refuse_failed_sessions(table: pd.DataFrame, on_bad_session: str) -> None:
    failed = table[table["verdict"] == "fail"]
    if not len(failed) or (on_bad_session != "stop" and len(failed) < len(table)):
        return
    told = [f"{row.session} at {row.stage}: {row.reason}" for row in failed.head(5).itertuples()]
    more = [f"and {len(failed) - 5} more"] if len(failed) > 5 else []
    raise InputError(
        f"{len(failed)} of {len(table)} sessions cannot be used ({'; '.join(told + more)})",
        expected="every session to pass, since study.on_bad_session is stop"
        if on_bad_session == "stop"
        else "at least one session that passes",
        remedy="mend the recordings or the intake settings (`odograph look FILE` shows what a file holds)",
    )


if __name__ == "__main__":
    sys.exit(run_step("population", work))
