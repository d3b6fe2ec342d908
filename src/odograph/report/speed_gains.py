"""Does tuning sharpen with speed: fitted gains beside the comparison of slow and fast running, in a table."""

from __future__ import annotations

from typing import Any

import pandas as pd

from odograph.population.intervals import counted
from odograph.report.words import cell, number, row, table, text

COLUMNS = (
    "variable",
    "of",
    "units#",
    "mean gain#",
    "sharpen#",
    "blunt#",
    "fits failed#",
    "fitted, fast minus slow (bits per spike)#",
    "fitted, fast minus slow (bits per s)#",
    "matched halves, fast minus slow (bits per spike)#",
)
_SUFFIX = "_speed_gain"


def speed_gain_table(speed: pd.DataFrame | None) -> str:
    """HTML of the gains of all units and of each group and region; empty where no gain was fitted.

    Parameters
    ----------
    speed : DataFrame or None
        The population's speed table.
    """
    if speed is None or not len(speed):
        return ""
    shown = speed[speed["level"].isin(["all", "group", "region"])]
    gains = shown[shown["measure"].str.endswith(_SUFFIX)]
    heads = gains[["measure", "level", "name"]].drop_duplicates().to_dict("records")
    rows = [_row(shown, **head) for head in heads]
    if not rows:
        return ""
    return (
        table(COLUMNS, rows, caption="Does tuning sharpen with running speed")
        + "<p>Means, shares and median changes over the units that encode the variable, with intervals where "
        "there are animals enough. All but the last column are of the speed-gain model; the last compares "
        "halves of the data matched in occupancy and in spikes, with no model of the gain. Single animals "
        'stand in <a href="population/speed.tsv">population/speed.tsv</a>.</p>'
    )


def _row(speed: pd.DataFrame, measure: str, level: str, name: str) -> str:
    place = speed[(speed["level"] == level) & (speed["name"] == name)]
    gains = place[place["measure"] == measure].set_index("category")
    variable = measure.removesuffix(_SUFFIX)
    halves = place[place["measure"] == f"{variable}_information_change"]
    mean = gains.loc["mean gain"]
    changes = [
        gains.loc[f"{what}, fast minus slow"] for what in ("fitted information", "fitted information rate")
    ]
    return row(
        text(variable.replace("_", " ")),
        [
            cell("all" if level == "all" else f"{text(level)}: {text(name)}"),
            cell(
                f"{number(mean['n'], 0)}<br>"
                f'<span class="place">{counted(int(mean["animals"]), "animal")}, '
                f"{counted(int(mean['sessions']), 'session')}</span>",
                kind="n",
                sort=mean["n"],
            ),
            _value(mean),
            *(_share(gains.loc[verdict]) for verdict in ("sharpens", "blunts", "failed")),
            *(_value(change) for change in changes),
            _value(halves.iloc[0]) if len(halves) else cell("–", kind="n"),
        ],
    )


def _value(found: Any) -> str:
    return cell(_with_interval(number(found["value"]), found, 1), kind="n", sort=found["value"])


def _share(found: Any) -> str:
    told = f"{number(found['k'], 0)} of {number(found['n'], 0)}"
    if found["n"]:
        told = _with_interval(f"{told}: {number(100 * found['value'], 0)}", found, 100, " %")
    return cell(told, kind="n", sort=found["value"])


def _with_interval(told: str, found: Any, factor: float, unit: str = "") -> str:
    """A number with its interval below it, where it has one."""
    low, high = (number(factor * found[key], 0 if factor != 1 else 2) for key in ("low", "high"))
    if "–" in (low, high):
        return f"{told}{unit}"
    return f'{told}{unit}<br><span class="place">{low} to {high}{unit}</span>'
