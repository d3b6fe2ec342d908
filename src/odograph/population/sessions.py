"""Which sessions stand behind the population, and why the others were left out."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import pandas as pd

from odograph.population.gather import fitted_units, session_origins

STAGES = ("intake", "sync", "behaviour", "encoding")
COLUMNS = (
    "session",
    "animal",
    "group",
    "verdict",
    "stage",
    "reason",
    "units_recorded",
    "units_kept",
    "units_fitted",
)
_LEVELS = {"pass": 0, "note": 0, "warn": 1, "fail": 2}


def session_table(
    documents: Mapping[str, Iterable[Mapping[str, Any]]], sessions: pd.DataFrame, units: pd.DataFrame
) -> pd.DataFrame:
    """One row per session: its verdict, the stage that decided it, the reason, and its units.

    Parameters
    ----------
    documents : dict of stage to iterable of dict
        The stages' documents (inventories, clocks, audits), each with `session`, `verdict` and `findings`.
        The inventories stand under "intake".
    sessions : DataFrame
        Columns `session` and, optionally, `animal` and `group`.
    units : DataFrame
        The table of `gather_units`.

    Returns
    -------
    DataFrame
        Sorted by session. `verdict` is the worst over the stages, `stage` the first stage that gave it and
        `reason` the first finding behind it; both None when the verdict is "pass". A session that no document
        speaks of has the verdict "fail": nothing was computed for it. `units_recorded` are the units in the
        file, `units_kept` those that passed the unit filter.
    """
    by_stage = {stage: {doc["session"]: doc for doc in documents[stage]} for stage in documents}
    inventories = by_stage.get("intake", {})
    origins = session_origins(inventories.values(), sessions)
    fitted = fitted_units(units)["session"].value_counts().to_dict()
    stages = [*(s for s in STAGES if s in by_stage), *sorted(set(by_stage) - set(STAGES))]
    rows = []
    for session in sorted({*origins, *(name for documents in by_stage.values() for name in documents)}):
        told = [(stage, by_stage[stage][session]) for stage in stages if session in by_stage[stage]]
        verdict, stage, reason = _worst(told)
        entries = inventories.get(session, {}).get("units") or []
        rows.append(
            {
                "session": session,
                **origins.get(session, {"animal": None, "group": None}),
                "verdict": verdict,
                "stage": stage,
                "reason": reason,
                "units_recorded": len(entries),
                "units_kept": sum(bool(entry.get("kept", True)) for entry in entries),
                "units_fitted": int(fitted.get(session, 0)),
            }
        )
    return pd.DataFrame(rows, columns=list(COLUMNS))


def _worst(told: list[tuple[str, Mapping[str, Any]]]) -> tuple[str, str | None, str | None]:
    """Worst verdict, the first stage that gave it, and what it found."""
    if not told:
        return "fail", None, "nothing was computed for this session"
    stage, document = max(told, key=lambda pair: _LEVELS.get(pair[1]["verdict"], 2))
    verdict = document["verdict"]
    if verdict == "pass":
        return verdict, None, None
    found = [entry for entry in document.get("findings") or [] if entry.get("level") == verdict]
    return verdict, stage, str(found[0]["found"]) if found else None
