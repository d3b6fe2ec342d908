"""What was found, in one document and in ten lines."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np
import pandas as pd

from odograph.population.composition import AT_LEAST_ONE, COMPATIBLE, TWO_OR_MORE
from odograph.population.gains import gain_variables
from odograph.population.gather import UNNAMED_ANIMAL, fitted_units, in_order, variables_of
from odograph.population.intervals import FEW_ANIMALS, counted
from odograph.population.speed import SHAPES, compared_variables

_LINE_LENGTH = 160


def summary(
    units: pd.DataFrame, composition: pd.DataFrame, speed: pd.DataFrame, verdicts: pd.DataFrame
) -> dict[str, Any]:
    """The findings of a run.

    Parameters
    ----------
    units, composition, speed : DataFrame
        The tables of `gather_units`, `composition` and `speed_table`.
    verdicts : DataFrame
        The table of `session_table`.

    Returns
    -------
    dict
        Plain values only (no NaN: what is not available is None). Shares come with k, n, animals and
        their interval.
    """
    fitted = fitted_units(units)
    used = verdicts[verdicts["verdict"] != "fail"]
    whole = composition[composition["level"] == "all"].set_index(["kind", "category"])
    exact = [category for kind, category in whole.index if kind == "exact"]
    return _plain(
        {
            "sessions": {
                "total": len(verdicts),
                "used": len(used),
                "left_out": _told(verdicts, "fail"),
                "with_warnings": _told(verdicts, "warn"),
            },
            "animals": sorted(set(used["animal"].dropna())),
            "units": {
                "recorded": int(used["units_recorded"].sum()),
                "kept": int(used["units_kept"].sum()),
                "analysed": len(units),
                **{
                    name: int((units["status"] == name).sum())
                    for name in ("fitted", "too_few_spikes", "failed")
                },
            },
            "variables": {
                variable: _share(whole.loc[("includes", f"{variable}, whatever else")])
                for variable in variables_of(units)
            },
            "at_least_one": _share(whole.loc[("includes", AT_LEAST_ONE)]),
            "two_or_more": _share(whole.loc[("includes", TWO_OR_MORE)]),
            "combinations": {category: _share(whole.loc[("exact", category)]) for category in exact},
            "speed_shapes": {shape: _share(_speed_row(speed, "speed_shape", shape)) for shape in SHAPES},
            "information_change": {
                variable: _change(_speed_row(speed, f"{variable}_information_change", "fast minus slow"))
                for variable in compared_variables(units)
            },
            "speed_gains": {variable: _gains(speed, variable) for variable in gain_variables(units)},
            "speed_gains_failed": int((fitted["speed_gain_status"] == "failed").sum())
            if "speed_gain_status" in fitted
            else 0,
            "rescaled_intervals_fit": (
                _share(whole.loc[("fit", COMPATIBLE)]) if ("fit", COMPATIBLE) in whole.index else None
            ),
            "held_out_bits_per_spike": _quartiles(fitted),
        }
    )


def summary_lines(summary: Mapping[str, Any]) -> list[str]:
    """The same in exactly ten lines of plain words, each at most 160 characters.

    Parameters
    ----------
    summary : dict
        Of the function `summary`, also when it was read back from its file.
    """
    # Read back from its file the document has its keys in the order of the alphabet.
    variables = [(name, summary["variables"][name]) for name in in_order(summary["variables"])]
    lines = [
        _sessions_line(summary),
        _left_out_line(summary["sessions"]["left_out"]),
        _units_line(summary["units"]),
        *(_variable_line(*variable) for variable in variables[:2]),
        *["No second variable was asked about."] * (len(variables) < 2),
        _further_line(variables[2:]),
        _mixture_line(summary),
        _shapes_line(summary["speed_shapes"]),
        _sharpening_line(summary),
        _trust_line(summary),
    ]
    return [_shortened(line, _LINE_LENGTH) for line in lines]


def fit_line(summary: Mapping[str, Any]) -> str:
    """How many units' selected models agree with held-out time, as a sentence; empty without a test."""
    share = summary.get("rescaled_intervals_fit")
    if not share or not share["n"]:
        return ""
    return f"Goodness of fit on held-out time: {COMPATIBLE} in {_of_units(share)}{_interval(share)}."


def _sessions_line(summary: Mapping[str, Any]) -> str:
    sessions, animals = summary["sessions"], summary["animals"]
    line = f"Sessions: {sessions['used']} of {sessions['total']} used, from {counted(len(animals), 'animal')}"
    if UNNAMED_ANIMAL in animals:
        line += " (sessions without an animal's name count as one animal)"
    warned = len(sessions["with_warnings"])
    return f"{line}; {warned} with a warning." if warned else f"{line}."


def _left_out_line(left_out: list[Mapping[str, Any]]) -> str:
    if not left_out:
        return "Left out: none."
    each = (_LINE_LENGTH - 40) // min(len(left_out), 3)
    told = [
        f"{entry['session']} ({entry['stage'] or 'intake'}: "
        f"{_shortened(entry['reason'] or 'no reason given', max(each - len(entry['session']) - 14, 20))})"
        for entry in left_out[:3]
    ]
    more = f" and {len(left_out) - 3} more" if len(left_out) > 3 else ""
    return f"Left out: {', '.join(told)}{more}."


def _units_line(units: Mapping[str, Any]) -> str:
    line = f"Units: {units['fitted']} of {units['analysed']} fitted"
    rest = [
        f"{units[name]} {words}"
        for name, words in (("too_few_spikes", "with too few spikes"), ("failed", "whose fit failed"))
        if units[name]
    ]
    if units["recorded"] > units["kept"]:
        rest.append(f"{units['recorded'] - units['kept']} more kept out by the unit filter")
    return f"{line}; {', '.join(rest)}." if rest else f"{line}."


def _variable_line(variable: str, share: Mapping[str, Any]) -> str:
    return f"{_words(variable).capitalize()}: {_of_units(share)}{_interval(share)}."


def _further_line(variables: list[tuple[str, Mapping[str, Any]]]) -> str:
    if not variables:
        return "No third variable was asked about."
    if len(variables) == 1:
        return _variable_line(*variables[0])
    return f"Also {'; '.join(f'{_words(name)} {_of_units(share)}' for name, share in variables)}."


def _mixture_line(summary: Mapping[str, Any]) -> str:
    mixed, some = summary["two_or_more"], summary["at_least_one"]
    none = some["n"] - some["k"]
    return f"Two or more of these: {_of_units(mixed)}{_interval(mixed)}; none of them: {none}."


def _shapes_line(shapes: Mapping[str, Mapping[str, Any]]) -> str:
    n = next(iter(shapes.values()))["n"]
    if not n:
        return "Speed tuning: no unit encodes speed."
    told = ", ".join(f"{shapes[shape]['k']} {shape.replace('_', '-')}" for shape in SHAPES)
    return f"Speed tuning: of {counted(n, 'unit')} that {'encodes' if n == 1 else 'encode'} speed {told}."


def _sharpening_line(summary: Mapping[str, Any]) -> str:
    """Fitted speed gains where there are any, else the comparison of slow and fast running."""
    gains = summary.get("speed_gains") or {}
    told = []
    for variable in in_order(gains):
        gain = gains[variable]
        if gain["n"]:
            counts = f"{gain['sharpens']['k']} sharpen, {gain['blunts']['k']} blunt of {gain['n']}"
            told.append(f"{_words(variable)} {counts} (mean gain {gain['mean']:+.2f})")
    if not told:
        return _information_line(summary["information_change"])
    failed = summary["speed_gains_failed"]
    more = f"; {counted(failed, 'fit')} failed" if failed else ""
    return f"Tuning at higher speed: {'; '.join(told)}{more}."


def _information_line(changes: Mapping[str, Mapping[str, Any]]) -> str:
    told = []
    for variable in in_order(changes):
        change = changes[variable]
        if not change["n"]:
            told.append(f"{_words(variable)} not compared")
            continue
        limits = _limits(change, "{:+.2f}")
        within = f", {limits}" if limits else ""
        told.append(f"{_words(variable)} {change['median']:+.2f} (n {change['n']}{within})")
    return f"Fast minus slow running, bits per spike (median): {'; '.join(told)}."


def _trust_line(summary: Mapping[str, Any]) -> str:
    score, some = summary["held_out_bits_per_spike"], summary["at_least_one"]
    animals = some["animals"]
    line = "Held-out gain of the selected models: "
    if score["median"] is None:
        line += "none"
    else:
        line += f"median {score['median']:.2f} bits per spike (n {score['n']})"
    if some["low"] is None:
        return f"{line}. No interval over animals: {counted(animals, 'animal')} with fitted units."
    narrow = ", likely too narrow with so few" if animals < FEW_ANIMALS else ""
    return f"{line}. Intervals are over {counted(animals, 'animal')}{narrow}."


def _of_units(share: Mapping[str, Any]) -> str:
    if not share["n"]:
        return "no fitted unit"
    return f"{share['k']} of {share['n']} units ({100 * share['k'] / share['n']:.0f} %)"


def _interval(share: Mapping[str, Any]) -> str:
    limits = _limits(
        {name: 100 * share[name] for name in ("low", "high") if share[name] is not None}, "{:.0f}"
    )
    return f", {100 * share['confidence']:g} % interval {limits} %" if limits else ""


def _limits(values: Mapping[str, Any], form: str) -> str:
    low, high = values.get("low"), values.get("high")
    return "" if low is None or high is None else f"{form.format(low)} to {form.format(high)}"


def _words(variable: str) -> str:
    return variable.replace("_", " ")


def _shortened(text: str, length: int) -> str:
    """The text on one line, cut between words when longer than the length."""
    text = " ".join(text.split())
    if len(text) <= length:
        return text
    return text[: length - 1].rsplit(" ", 1)[0].rstrip(",;: ") + "…"


def _told(verdicts: pd.DataFrame, verdict: str) -> list[dict[str, Any]]:
    chosen = verdicts[verdicts["verdict"] == verdict].sort_values("session")
    return chosen[["session", "stage", "reason"]].to_dict("records")


def _share(row: pd.Series) -> dict[str, Any]:
    return {name: row[name] for name in ("k", "n", "animals", "low", "high", "confidence", "method")}


def _change(row: pd.Series) -> dict[str, Any]:
    shared = ("n", "animals", "low", "high", "confidence", "median_slow", "median_fast", "p", "method")
    return {"gained": row["k"], "median": row["value"], **{name: row[name] for name in shared}}


def _gains(speed: pd.DataFrame, variable: str) -> dict[str, Any]:
    measure = f"{variable}_speed_gain"
    mean, median = (_speed_row(speed, measure, f"{centre} gain") for centre in ("mean", "median"))
    shared = ("n", "animals", "sessions", "low", "high", "confidence", "method")
    return {
        "mean": mean["value"],
        "median": median["value"],
        **{name: mean[name] for name in shared},
        **{
            category: _share(_speed_row(speed, measure, category))
            for category in ("sharpens", "blunts", "failed")
        },
    }


def _speed_row(speed: pd.DataFrame, measure: str, category: str) -> pd.Series:
    rows = speed[(speed["measure"] == measure) & (speed["level"] == "all") & (speed["category"] == category)]
    return rows.iloc[0]


def _quartiles(fitted: pd.DataFrame) -> dict[str, Any]:
    """Held-out bits per spike of the selected models of the units that encode anything."""
    gain = fitted.loc[fitted["encoded"] != "constant", "selected_bits_per_spike"].dropna().to_numpy(float)
    low, median, high = np.quantile(gain, [0.25, 0.5, 0.75]) if len(gain) else (None, None, None)
    return {"n": len(gain), "lower_quartile": low, "median": median, "upper_quartile": high}


def _plain(value: Any) -> Any:
    """Builtin types only, so that the document reads back from JSON as it is."""
    if isinstance(value, Mapping):
        return {str(name): _plain(entry) for name, entry in value.items()}
    if isinstance(value, str) or value is None or value is pd.NA:
        return value if isinstance(value, str) else None
    if isinstance(value, Iterable):
        return [_plain(entry) for entry in value]
    number = value.item() if isinstance(value, np.generic) else value
    return None if isinstance(number, float) and not math.isfinite(number) else number
