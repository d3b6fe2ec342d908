"""Score a run on the demo recordings against what their units truly encode.

Run as ``python demo_data/score_against_truth.py results``. Exit status: 0 when the limits hold, 1 when they
do not, 66 when a table is missing or not what it should be.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from simulate_tuning import sharpening
from truth_table import TRUTH_COLUMNS, read_truth

from odograph.encoding.speed_gain import modulation
from odograph.population.intervals import wilson_interval

VARIABLES = ("position", "head_direction", "speed")
SHARPENING = ("position", "head_direction")
FEWEST_FOUND = 0.90
MOST_FALSE = 0.05
DRIFT_TOLERANCE_PPM = 0.1
RECORDINGS = Path(__file__).with_name("recordings")
_TEXT = ("session", "kind", "position_shape", "speed_shape", "region")


@dataclass(frozen=True)
class Share:
    """So many of so many, under a name; `limit` says in words what has to hold, if anything has."""

    what: str
    k: int
    n: int
    limit: str = ""
    holds: bool | None = None

    @property
    def share(self) -> float | None:
        """k / n, None for an empty set."""
        return self.k / self.n if self.n else None

    @property
    def interval(self) -> tuple[float, float] | None:
        """Wilson's 95 % interval of the share, None for an empty set."""
        if not self.n:
            return None
        interval = wilson_interval(self.k, self.n, 0.95)
        return interval.low, interval.high

    def line(self) -> str:
        """The share as a line of the printed table."""
        if self.share is None:
            return f"{self.what:<52} none to judge"
        low, high = self.interval
        verdict = (
            "" if self.holds is None else f"  {self.limit}: {'holds' if self.holds else 'DOES NOT HOLD'}"
        )
        limits = f"[{100 * low:.1f}, {100 * high:.1f}]"
        return f"{self.what:<52} {self.k:>4} of {self.n:<4} {100 * self.share:5.1f} %  {limits}{verdict}"


def join_truth(units: pd.DataFrame, truth: pd.DataFrame, fewest_spikes: int) -> pd.DataFrame:
    """Results beside the truth: one row per unit that both tables have and that fired often enough.

    Truth columns get the prefix `true_`. A unit that could not be fitted counts as encoding nothing.
    """
    renamed = truth.rename(columns=lambda name: name if name in ("session", "unit") else f"true_{name}")
    both = units.merge(renamed, on=["session", "unit"], how="inner", validate="one_to_one")
    return both[both["n_spikes"] >= fewest_spikes].sort_values(["session", "unit"], ignore_index=True)


def score(joined: pd.DataFrame) -> list[Share]:
    """All shares of a joined table; the first two are the ones with limits."""
    truly = pd.DataFrame({name: joined[f"true_{name}"].astype(bool) for name in VARIABLES})
    found = _found(joined)
    per_variable = []
    for name in VARIABLES:
        label = name.replace("_", " ")
        per_variable.append(_count(f"  {label} found where it is encoded", found[name][truly[name]]))
        per_variable.append(_count(f"  {label} found where it is not", found[name][~truly[name]]))
    tuned = _total("encoded variables found", per_variable[0::2], f">= {100 * FEWEST_FOUND:g} %")
    false = _total("variables found that are not encoded", per_variable[1::2], f"<= {100 * MOST_FALSE:g} %")
    return [tuned, false, *per_variable, *_speed_shapes(joined, truly, found), *_sharpening(joined, truly)]


def _found(joined: pd.DataFrame) -> pd.DataFrame:
    return pd.DataFrame({name: joined[f"encodes_{name}"].eq(True) for name in VARIABLES})


def _count(what: str, hits: pd.Series) -> Share:
    return Share(what, int(hits.sum()), len(hits))


def _total(what: str, parts: Sequence[Share], limit: str) -> Share:
    k, n = sum(part.k for part in parts), sum(part.n for part in parts)
    if n == 0:
        return Share(what, 0, 0, limit, None)
    holds = k / n >= FEWEST_FOUND if limit.startswith(">") else k / n <= MOST_FALSE
    return Share(what, k, n, limit, holds)


def _speed_shapes(joined: pd.DataFrame, truly: pd.DataFrame, found: pd.DataFrame) -> list[Share]:
    """How often the shape of a speed tuning that was found is named right."""
    seen = joined[truly["speed"] & found["speed"]]
    shares = [_count("speed shape named right", seen["speed_shape"] == seen["true_speed_shape"])]
    for shape in ("rising", "falling", "non_monotonic"):
        of_shape = seen[seen["true_speed_shape"] == shape]
        shares.append(_count(f"  {shape.replace('_', '-')}", of_shape["speed_shape"] == shape))
    return shares


def _sharpening(joined: pd.DataFrame, truly: pd.DataFrame) -> list[Share]:
    """How often units that sharpen, and others, are said to: by halves of the data, and by gains."""
    shares = []
    for name in SHARPENING:
        slow = joined[f"{name}_information_slow_bits_per_spike"]
        fast = joined[f"{name}_information_fast_bits_per_spike"]
        judged = truly[name] & slow.notna() & fast.notna()
        sharpens = joined["true_sharpens"].astype(bool)
        label = f"more {name.replace('_', ' ')} information when fast"
        shares.append(_count(f"{label}, sharpening", (fast > slow)[judged & sharpens]))
        shares.append(_count(f"{label}, others", (fast > slow)[judged & ~sharpens]))
        right, wrong = _gains_called(joined, name)
        label = f"{name.replace('_', ' ')} gain says"
        shares.append(_count(f"{label} sharpening, where it is", right))
        shares.append(_count(f"{label} change, where there is none", wrong))
    return shares


def _gains_called(joined: pd.DataFrame, name: str) -> tuple[pd.Series, pd.Series]:
    """Of the tuned units that truly sharpen, which are said to; of the other gains, which are said to differ.

    A unit that sharpens but was given no gain counts as missed.
    """
    truly = joined[f"true_{name}"].astype(bool) & joined["true_sharpens"].astype(bool)
    sharpens, blunts = (joined[f"{name}_{verdict}"].eq(True) for verdict in ("sharpens", "blunts"))
    judged = joined[f"encodes_{name}"].eq(True) & joined[f"{name}_speed_gain"].notna()
    return sharpens[truly], (sharpens | blunts)[judged & ~truly]


@dataclass(frozen=True)
class GainError:
    """How far fitted gains lie from the true ones, fitted less true, over `n` units."""

    what: str
    n: int
    mean: float
    standard_error: float
    spread: float

    def line(self) -> str:
        """The error as a line of the printed table."""
        if not self.n:
            return f"{self.what:<52} none to judge"
        within = f" +/- {self.standard_error:.3f}" if self.n > 1 else ""
        return f"{self.what:<52} {self.mean:+.3f}{within}, s.d. {self.spread:.3f}, n {self.n}"


def true_gain(speed_cm_s: np.ndarray) -> float:
    """The gain of a unit that sharpens, in a session with these speeds, (n,).

    Its tuning is raised to a power p of speed, so that its part of the log rate is p f. The model says
    (1 + g z) f; the line over z that comes closest to p, divided by its mean, has the slope g.
    """
    power, z = sharpening(speed_cm_s), modulation(speed_cm_s)
    return float(np.mean(power * z) / np.mean(power))


def gain_errors(joined: pd.DataFrame, results: Path) -> list[GainError]:
    """Bias of the gains of units that truly encode the variable, those that sharpen and the others."""
    gains = {}
    for session in sorted(joined["session"].unique()):
        file = results / "sessions" / session / "behaviour" / "behaviour.parquet"
        if file.is_file():
            behaviour = pd.read_parquet(file, columns=["speed_cm_s", "valid"])
            gains[session] = true_gain(behaviour.loc[behaviour["valid"], "speed_cm_s"].to_numpy(float))
    sharpens = joined["true_sharpens"].astype(bool)
    truth = joined["session"].map(gains).astype(float).where(sharpens, 0.0)
    errors = []
    for name in SHARPENING:
        tuned = joined[f"true_{name}"].astype(bool) & joined[f"encodes_{name}"].eq(True)
        for chosen, which in ((sharpens, "sharpening"), (~sharpens, "others")):
            error = (joined[f"{name}_speed_gain"] - truth)[tuned & chosen].dropna().to_numpy(float)
            n = len(error)
            spread = float(error.std(ddof=1)) if n > 1 else 0.0
            errors.append(
                GainError(
                    f"{name.replace('_', ' ')} gain less the true one, {which}",
                    n,
                    float(error.mean()) if n else 0.0,
                    spread / n**0.5 if n else 0.0,
                    spread,
                )
            )
    return errors


def score_clocks(results: Path, clocks_file: Path) -> list[Share]:
    """How many camera clocks got the verdict they deserve, and the right drift, of the sessions that ran.

    A clock that leaps must fail; of a sound one the drift must be right to `DRIFT_TOLERANCE_PPM`.
    """
    judged, measured = [], []
    for row in read_truth(clocks_file) if clocks_file.is_file() else []:
        document = results / "sessions" / row["session"] / "sync" / "clock.json"
        if not document.is_file():
            continue
        clock = json.loads(document.read_text(encoding="utf-8"))
        sound = float(row["clock_jump_s"]) == 0
        judged.append((clock["verdict"] != "fail") == sound)
        if sound and clock["drift_ppm"] is not None:
            measured.append(abs(clock["drift_ppm"] - float(row["drift_ppm"])) <= DRIFT_TOLERANCE_PPM)
    return [
        Share("camera clocks with the verdict they deserve", sum(judged), len(judged)),
        Share(f"  drift right to {DRIFT_TOLERANCE_PPM:g} ppm, sound clocks", sum(measured), len(measured)),
    ]


def mistakes(joined: pd.DataFrame) -> list[str]:
    """One line for each variable of a unit that was missed or found wrongly, and for each such gain."""
    lines, found = [], _found(joined)
    gains = {name: _gains_called(joined, name) for name in SHARPENING}
    for row_number, row in enumerate(joined.to_dict("records")):
        for name in VARIABLES:
            truly = bool(row[f"true_{name}"])
            if truly != found.at[row_number, name]:
                lines.append(_mistake("missed" if truly else "false", name, row))
        for name, (right, wrong) in gains.items():
            # A gain is missed only where its variable was found: else the line above has said it.
            if not right.get(row_number, True) and found.at[row_number, name]:
                lines.append(_mistake("missed", f"{name} gain", row))
            if wrong.get(row_number, False):
                lines.append(_mistake("false", f"{name} gain", row))
    return lines


def _mistake(word: str, what: str, row: dict) -> str:
    unit = f"{row['session']} unit {row['unit']}"
    return f"{word:<7} {what:<20} {unit:<20} {row['true_kind']:<32} {row['n_spikes']:>6} spikes"


def read_tables(results: Path, truth_file: Path) -> tuple[pd.DataFrame, pd.DataFrame]:
    """The run's table of units and the truth.

    Raises
    ------
    ValueError
        When a table is missing, cannot be read or lacks a column; the message says what to do.
    """
    units_file = results / "population" / "units.parquet"
    for path, remedy in (
        (units_file, "run the workflow first, or name the folder of its results"),
        (truth_file, "make the demo recordings first, or name the table with --truth"),
    ):
        if not path.is_file():
            raise ValueError(f"{path} is not there; {remedy}")
    units, truth = _readable(units_file, pd.read_parquet), _readable(truth_file, _read_truth)
    needed = ["session", "unit", "n_spikes", "speed_shape", *(f"encodes_{name}" for name in VARIABLES)]
    needed += [
        f"{name}_information_{pace}_bits_per_spike" for name in SHARPENING for pace in ("slow", "fast")
    ]
    needed += [f"{name}_{column}" for name in SHARPENING for column in ("speed_gain", "sharpens", "blunts")]
    for path, table, columns in ((units_file, units, needed), (truth_file, truth, TRUTH_COLUMNS)):
        missing = [name for name in columns if name not in table]
        if missing:
            raise ValueError(f"{path} lacks the columns {', '.join(missing)}; was it made by this version?")
        twice = table[table.duplicated(["session", "unit"])]
        if len(twice):
            raise ValueError(
                f"{path} has unit {twice['unit'].iloc[0]} of {twice['session'].iloc[0]} more than once; "
                "make the table again"
            )
    return units, truth


def _read_truth(path: Path) -> pd.DataFrame:
    return pd.read_csv(path, sep="\t", dtype=dict.fromkeys(_TEXT, str), keep_default_na=False)


def _readable(path: Path, read) -> pd.DataFrame:
    try:
        return read(path)
    except (OSError, ValueError) as error:
        raise ValueError(f"{path} cannot be read as a table: {error}") from error


def main(arguments: Sequence[str] | None = None) -> int:
    """Print the scores; the exit status says whether the limits hold."""
    options = _parser().parse_args(arguments)
    try:
        units, truth = read_tables(options.results, options.truth)
    except ValueError as error:
        print(f"score_against_truth.py: {error}", file=sys.stderr)
        return 66
    joined = join_truth(units, truth, options.fewest_spikes)
    shares = score(joined) + score_clocks(options.results, options.truth.with_name("clocks.tsv"))
    if joined.empty:
        print(
            f"score_against_truth.py: no unit of {options.truth} with {options.fewest_spikes} spikes or more "
            f"is in {options.results}; were the demo recordings run?",
            file=sys.stderr,
        )
        return 66
    errors = gain_errors(joined, options.results)
    if options.json:
        print(json.dumps(_document(joined, shares, errors), indent=2))
    else:
        sessions = joined["session"].nunique()
        judged = f"{len(joined)} units of {sessions} sessions with {options.fewest_spikes} spikes or more"
        print(f"{judged}; 95 % intervals by Wilson")
        print("\n".join(entry.line() for entry in (*shares, *errors)))
        if options.mistakes:
            print("\n".join(mistakes(joined)) or "no mistakes")
    return 1 if any(share.holds is False for share in shares) else 0


def _document(
    joined: pd.DataFrame, shares: Sequence[Share], errors: Sequence[GainError]
) -> dict[str, object]:
    rows = []
    for share in shares:
        low, high = share.interval or (None, None)
        rows.append(
            {
                "what": share.what.strip(),
                "k": share.k,
                "n": share.n,
                "share": share.share,
                "low": low,
                "high": high,
                "limit": share.limit or None,
                "holds": share.holds,
            }
        )
    return {
        "units": len(joined),
        "scores": rows,
        "gain_errors": [asdict(error) for error in errors],
        "mistakes": mistakes(joined),
    }


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="score_against_truth.py",
        description="Compare what a run says about the demo units with what they truly encode.",
    )
    parser.add_argument("results", type=Path, nargs="?", default=Path("results"), help="folder (%(default)s)")
    parser.add_argument("--truth", type=Path, default=RECORDINGS / "truth.tsv", help="table (%(default)s)")
    parser.add_argument(
        "--fewest-spikes", type=int, default=300, help="units with fewer are not judged (%(default)s)"
    )
    parser.add_argument("--mistakes", action="store_true", help="list every variable missed or found wrongly")
    parser.add_argument("--json", action="store_true", help="print one JSON document")
    return parser


if __name__ == "__main__":
    raise SystemExit(main())
