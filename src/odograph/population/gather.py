"""All units of all sessions in one table, with the animal, group and region they come from."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np
import pandas as pd

from odograph.errors import InputError
from odograph.population.intervals import benjamini_hochberg
from odograph.settings.population import PopulationSettings

UNNAMED_ANIMAL = "unnamed"
STANDARD_VARIABLES = ("position", "head_direction", "speed")

# The columns that are there whatever was analysed, so that a study whose sessions all failed has legal
# tables.
_UNIT_COLUMNS = {
    "session": "str",
    "animal": "str",
    "group": "str",
    "region": "str",
    "unit": "int",
    "n_spikes": "int",
    "mean_rate_hz": "float",
    "status": "str",
    "status_reason": "str",
    "selected_model": "str",
    "encoded": "str",
    **{f"encodes_{variable}": "bool" for variable in STANDARD_VARIABLES},
    **{f"{variable}_p": "float" for variable in STANDARD_VARIABLES},
    **{f"{variable}_q": "float" for variable in STANDARD_VARIABLES},
    "selected_bits_per_spike": "float",
    "selected_deviance_explained": "float",
    "best_model": "str",
    "rescaling_ks": "float",
    "rescaling_ks_p": "float",
    "rescaling_intervals": "int",
    "residual_correlation_peak": "float",
    "residual_correlation_peak_lag_s": "float",
    "speed_shape": "str",
    "speed_shape_probability": "float",
    "speed_slope_one_sign_probability": "float",
    "speed_gain_status": "str",
    "position_information_bits_per_spike": "float",
    "head_direction_information_bits_per_spike": "float",
    "position_information_slow_bits_per_spike": "float",
    "position_information_fast_bits_per_spike": "float",
    "head_direction_information_slow_bits_per_spike": "float",
    "head_direction_information_fast_bits_per_spike": "float",
    "fit_key": "str",
    "code": "str",
}
_SCORE_COLUMNS = {
    "session": "str",
    "unit": "int",
    "model": "str",
    "n_terms": "int",
    "bits_per_spike": "float",
    "bits_per_spike_se": "float",
    "deviance_explained": "float",
    "converged": "bool",
    "folds": "int",
}


def gather_units(
    unit_tables: Iterable[pd.DataFrame],
    inventories: Iterable[Mapping[str, Any]],
    sessions: pd.DataFrame,
    settings: PopulationSettings,
) -> pd.DataFrame:
    """One row per unit of the study, judged together.

    A unit encodes a variable when its selected model holds it and, where the variable was tested
    (`<variable>_p`), the p-value passes the Benjamini-Hochberg procedure over the fitted units of the
    study, each variable a family of its own. `encodes_<variable>`, `encoded` (the combination, spelled as a
    model) and `speed_shape` follow that final verdict; `selected_model` stays as the encoding stage chose
    it.

    Parameters
    ----------
    unit_tables : iterable of DataFrame
        The shards' unit rows, in any order; empty ones are welcome.
    inventories : iterable of dict
        The sessions' inventories: regions, unit attributes and the animal when the sessions table names none.
    sessions : DataFrame
        Columns `session` and, optionally, `animal` and `group`; missing values allowed.
    settings : PopulationSettings

    Returns
    -------
    DataFrame
        Sorted by session and unit. Inventory attributes are columns `attribute_<name>`; `<variable>_q` are
        the adjusted p-values. `encodes_<variable>` is False in rows whose `status` is not "fitted". Of the
        speed gains that were tested, those of units that encode the variable are adjusted together
        (`<variable>_speed_gain_q`): the variable's tuning `sharpens` with speed (gain above 0) or `blunts`.

    Raises
    ------
    InputError
        A unit that is there twice, or a unit that its session's inventory does not hold.
    """
    units = _concatenated(unit_tables, _UNIT_COLUMNS, ["session", "unit"])
    units = _with_origin(units, {document["session"]: document for document in inventories}, sessions)
    units = _with_verdicts(units, settings)
    first = [column for column in _UNIT_COLUMNS if column in units]
    return units[[*first, *sorted(set(units.columns) - set(first))]]


def gather_scores(score_tables: Iterable[pd.DataFrame]) -> pd.DataFrame:
    """Held-out scores of every model of every unit, sorted by session, unit, number of terms and model.

    Parameters
    ----------
    score_tables : iterable of DataFrame
        The shards' score rows, in any order; empty ones are welcome.

    Raises
    ------
    InputError
        A model of a unit that is there twice.
    """
    scores = _concatenated(score_tables, _SCORE_COLUMNS, ["session", "unit", "model"])
    return scores.sort_values(["session", "unit", "n_terms", "model"], ignore_index=True)


def variables_of(units: pd.DataFrame) -> list[str]:
    """Variables that the units were tested for: position, head direction, speed, then others by name."""
    return in_order(
        column.removeprefix("encodes_") for column in units.columns if column.startswith("encodes_")
    )


def in_order(variables: Iterable[str]) -> list[str]:
    """The variables in the order of all tables: position, head direction, speed, then others by name."""
    found = set(variables)
    standard = [variable for variable in STANDARD_VARIABLES if variable in found]
    return [*standard, *sorted(found - set(standard))]


def fitted_units(units: pd.DataFrame) -> pd.DataFrame:
    """The units whose fit succeeded, the ones that are counted, sorted by session and unit."""
    return units[units["status"] == "fitted"].sort_values(["session", "unit"], ignore_index=True)


def _concatenated(
    tables: Iterable[pd.DataFrame], columns: Mapping[str, str], keys: list[str]
) -> pd.DataFrame:
    """Filled tables below each other, typed by column, sorted by the keys, each key once."""
    filled = [table for table in tables if len(table)]
    names = list(dict.fromkeys(name for table in filled for name in table.columns)) or list(columns)
    # Column by column: pandas lets a column that is all missing in one table decide the type of the whole.
    values = {
        name: [v for t in filled for v in (t[name] if name in t else [None] * len(t))] for name in names
    }
    table = pd.DataFrame({name: _typed(values[name], columns.get(name)) for name in names})
    twice = table.duplicated(keys)
    if twice.any():
        place = ", ".join(f"{key} {table.loc[twice, key].iloc[0]}" for key in keys)
        raise InputError(
            "the same row is there twice", place=place, expected="every unit in one shard of one session only"
        )
    return table.sort_values(keys, ignore_index=True)


def _typed(values: list[Any], kind: str | None) -> pd.Series:
    """A column of one type; of no known kind, numbers are floats, truth values stay, all else is text."""
    missing = [_is_missing(value) for value in values]
    present = [value for value, absent in zip(values, missing, strict=True) if not absent]
    if kind is None and present and all(isinstance(value, bool | np.bool_) for value in present):
        kind = "bool" if len(present) == len(values) else "str"
    elif kind is None:
        numeric = all(isinstance(value, int | float | np.number) for value in present)
        kind = "float" if numeric else "str"
    if kind == "bool":
        return pd.Series([not a and bool(v) for v, a in zip(values, missing, strict=True)], dtype=bool)
    if kind == "int" and len(present) == len(values):
        return pd.Series(values, dtype=np.int64)
    if kind in ("int", "float"):
        return pd.Series(
            [np.nan if a else float(v) for v, a in zip(values, missing, strict=True)], dtype=float
        )
    return pd.Series([None if a else str(v) for v, a in zip(values, missing, strict=True)], dtype=object)


def _is_missing(value: Any) -> bool:
    return value is None or value is pd.NA or (isinstance(value, float) and value != value)


def _with_origin(
    units: pd.DataFrame, inventories: Mapping[str, Mapping[str, Any]], sessions: pd.DataFrame
) -> pd.DataFrame:
    """Join animal and group by session, region and attributes by unit."""
    origins = session_origins(inventories.values(), sessions)
    held = {
        (session, int(entry["unit"])): entry
        for session, document in inventories.items()
        for entry in document.get("units") or []
    }
    keys = list(zip(units["session"], units["unit"], strict=True))
    for session, unit in keys:
        if (session, unit) not in held:
            raise InputError(
                f"unit {unit} was fitted but the session's inventory does not hold it",
                place=f"session {session}",
                remedy="delete the session's folder below the results and run again",
            )
    columns = {name: [origins[session][name] for session, _ in keys] for name in ("animal", "group")}
    columns["region"] = [held[key].get("region") or None for key in keys]
    names = sorted({name for entry in held.values() for name in entry.get("attributes") or {}})
    for name in names:
        columns[f"attribute_{name}"] = [(held[key].get("attributes") or {}).get(name) for key in keys]
    joined = {name: _typed(values, _UNIT_COLUMNS.get(name)) for name, values in columns.items()}
    return units.drop(columns=[name for name in joined if name in units]).assign(**joined)


def session_origins(
    inventories: Iterable[Mapping[str, Any]], sessions: pd.DataFrame
) -> dict[str, dict[str, str | None]]:
    """Animal and group per session.

    The sessions table wins over the file. Sessions without any animal are all taken as one animal, `unnamed`:
    too few animals make intervals wide, too many make them wrong.
    """
    subjects = {
        document["session"]: (document.get("subject") or {}).get("subject_id") for document in inventories
    }
    rows = {str(row["session"]): row for row in sessions.to_dict("records")}
    return {
        session: {
            "animal": _text(rows.get(session, {}).get("animal"))
            or _text(subjects.get(session))
            or UNNAMED_ANIMAL,
            "group": _text(rows.get(session, {}).get("group")),
        }
        for session in sorted({*subjects, *rows})
    }


def _text(value: Any) -> str | None:
    return None if _is_missing(value) or not str(value).strip() else str(value).strip()


def _with_verdicts(units: pd.DataFrame, settings: PopulationSettings) -> pd.DataFrame:
    """Adjusted p-values and the final word on what each unit encodes."""
    units = units.copy()
    fitted = (units["status"] == "fitted").to_numpy(bool)
    selected = [set(str(model).split("+")) for model in units["selected_model"]]
    variables = variables_of(units)
    for variable in variables:
        p = (
            units[f"{variable}_p"].to_numpy(float)
            if f"{variable}_p" in units
            else np.full(len(units), np.nan)
        )
        q = benjamini_hochberg(np.where(fitted, p, np.nan))
        holds = np.array([variable in terms for terms in selected], bool)
        # A variable without a test rests on the selection alone.
        units[f"{variable}_q"] = q
        units[f"encodes_{variable}"] = fitted & holds & (np.isnan(q) | (q <= settings.false_discovery_rate))
        if f"{variable}_speed_gain_p" in units:
            units = _with_gain_verdict(units, variable, settings)
    encodes = units[[f"encodes_{variable}" for variable in variables]].to_numpy(bool)
    units["encoded"] = pd.Series(
        [spelled(variables, row) if fit else None for row, fit in zip(encodes, fitted, strict=True)],
        dtype=object,
    )
    if "speed_shape" in units and "speed" in variables:
        units.loc[fitted & ~units["encodes_speed"], "speed_shape"] = "not_tuned"
        for column in ("speed_shape_probability", "speed_slope_one_sign_probability"):
            if column in units:
                units.loc[~units["encodes_speed"], column] = np.nan
    return units


def _with_gain_verdict(units: pd.DataFrame, variable: str, settings: PopulationSettings) -> pd.DataFrame:
    """Whether tuning to a variable sharpens or blunts with speed, judged over the units that encode it."""
    gain, p = (units[f"{variable}_speed_gain{suffix}"].to_numpy(float) for suffix in ("", "_p"))
    q = benjamini_hochberg(np.where(units[f"encodes_{variable}"], p, np.nan))
    changes = q <= settings.false_discovery_rate
    return units.assign(
        **{
            f"{variable}_speed_gain_q": q,
            f"{variable}_sharpens": changes & (gain > 0),
            f"{variable}_blunts": changes & (gain < 0),
        }
    )


def spelled(variables: Iterable[str], present: Iterable[bool]) -> str:
    """The combination of the present variables, spelled as a model; `constant` for none."""
    return "+".join(name for name, there in zip(variables, present, strict=True) if there) or "constant"
