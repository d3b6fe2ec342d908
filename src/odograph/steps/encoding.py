"""Step of rule `encoding`: fit the units of one shard that are not in the store, and say which and why."""

from __future__ import annotations

import logging
import math
import sys
from typing import TYPE_CHECKING, Any

from odograph.errors import ChangedInputError, InputError
from odograph.provenance import layout
from odograph.provenance.canonical import digest_value
from odograph.provenance.files import columns_digest
from odograph.provenance.fingerprint import code_fingerprint
from odograph.provenance.step import Step, known_code, run_step
from odograph.provenance.store import FitHistory, FitSource, FitStore, StoredFit

if TYPE_CHECKING:
    import numpy as np

    from odograph.settings.encoding import EncodingSettings

logger = logging.getLogger(__name__)
_FIT_CODE = "odograph.encoding.analyse"


def work(step: Step) -> None:
    """Bring together the fits of a shard's units, from the store where they are there."""
    from odograph.steps.source import recording_name

    columns = step.read_columns("behaviour")
    planned = {int(unit): digest for unit, digest in step.plan["units"].items()}
    audit = step.read_json("audit")
    usable = audit["verdict"] != "fail"
    if not usable:
        logger.info("%s: no unit is fitted, since the session is left out", step.name)
        planned = {}
    named = recording_name(step.source)
    for unit, digest in planned.items():
        step.record.add_unit_input(unit, digest, file=named)
    step.record.code["fit"] = code_fingerprint(_FIT_CODE, known_code())
    columns.pop("reason", None)
    behaviour, settings = columns_digest(columns), digest_value(step.settings["encoding"])
    sources = {
        unit: FitSource(spikes=digest, behaviour=behaviour, settings=settings, code=step.record.code["fit"])
        for unit, digest in sorted(planned.items())
    }
    fits = _fits(step, columns, sources) if sources else {}
    _write(step, fits, sources)
    _remove_shards_of_before(step)


def _fits(step: Step, columns: dict[str, np.ndarray], sources: dict[int, FitSource]) -> dict[int, StoredFit]:
    """The fit of every unit, and an account of where each came from."""
    store = FitStore(layout.STORE)
    history = FitHistory(layout.PLAN / "history" / step.session, step.shard, step.shards)
    before = history.load(sources)
    fits = {unit: fit for unit, source in sources.items() if (fit := store.load(source.key)) is not None}
    why = {unit: source.difference(before.get(unit)) for unit, source in sources.items()}
    missing = [unit for unit in sources if unit not in fits]
    for unit in missing:
        why[unit] = why[unit] or "its fit was not in the store"
    step.record.run["units"] = [
        {"unit": unit, "made": "fitted" if unit in missing else "restored", "why": why[unit] or "unchanged"}
        for unit in sources
    ]
    logger.info("%s: %s", step.name, _account(missing, why, len(sources)))
    for unit in sorted(fits):
        logger.debug("unit %s: restored from the store (%s)", unit, why[unit] or "unchanged")
    fits |= _refit(step, columns, {unit: sources[unit] for unit in missing}, why, store)
    history.save(sources)
    return fits


def _refit(
    step: Step,
    columns: dict[str, np.ndarray],
    sources: dict[int, FitSource],
    why: dict[int, str],
    store: FitStore,
) -> dict[int, StoredFit]:
    """Fit units; each goes into the store as soon as it is done, so a job that dies loses one fit at most."""
    if not sources:
        return {}
    from numpy.linalg import LinAlgError

    from odograph.encoding.analyse import analyse_unit, prepare_session
    from odograph.settings.encoding import EncodingSettings
    from odograph.steps.source import read_units

    settings = step.stage_settings(EncodingSettings)
    recording = read_units(step, {unit: source.spikes for unit, source in sources.items()})
    try:
        design = prepare_session(columns, settings)
    except ChangedInputError:
        raise
    except InputError as error:
        if step.stops_on_bad_session:
            raise
        logger.warning("%s: no unit can be fitted: %s", step.name, error)
        return {unit: _failed_fit(str(error), settings) for unit in sources}
    fits = {}
    for done, unit in enumerate(recording.units, start=1):
        try:
            result = analyse_unit(design, unit.spike_times_s, unit.observed_s, settings)
        except (ArithmeticError, LinAlgError) as error:
            # One unit that defeats the arithmetic is shown as failed; it must not take the study down.
            logger.warning("%s: unit %s cannot be fitted", step.name, unit.unit_id, exc_info=True)
            fits[unit.unit_id] = _failed_fit(f"{type(error).__name__}: {error}", settings)
            continue
        fit = StoredFit(result.row, result.scores, result.curves)
        fits[unit.unit_id] = store.save(sources[unit.unit_id].key, fit)
        status = result.row["status"]
        logger.debug(
            "unit %s: fitted (%s), %s of %s; %s", unit.unit_id, why[unit.unit_id], done, len(sources), status
        )
    return fits


def _failed_fit(reason: str, settings: EncodingSettings) -> StoredFit:
    """A unit that could not be analysed at all: shown as failed, with the reason."""
    row: dict[str, Any] = {
        "n_spikes": 0,
        "mean_rate_hz": math.nan,
        "status": "failed",
        "status_reason": " ".join(reason.split()),
        "selected_model": "",
        "best_model": "",
        "selected_bits_per_spike": math.nan,
        "selected_deviance_explained": math.nan,
        "speed_shape": "",
        "speed_shape_probability": math.nan,
    }
    for term in settings.terms:
        row[f"encodes_{term.name}"] = False
        missing = ["p", "information_bits_per_spike"]
        if term.kind in ("plane", "circle"):
            missing += ["information_slow_bits_per_spike", "information_fast_bits_per_spike"]
        row |= {f"{term.name}_{name}": math.nan for name in missing}
    return StoredFit(row, [], {})


def _account(missing: list[int], why: dict[int, str], total: int) -> str:
    """One line: how many units are fitted, which, and why."""
    if not missing:
        return f"{total} units, none fitted (all in the store)"
    reasons: dict[str, list[int]] = {}
    for unit in missing:
        reasons.setdefault(why[unit], []).append(unit)
    told = "; ".join(f"{reason}: {', '.join(map(str, units))}" for reason, units in sorted(reasons.items()))
    return f"{total} units, {len(missing)} fitted ({told})"


def _write(step: Step, fits: dict[int, StoredFit], sources: dict[int, FitSource]) -> None:
    rows, scores, curves = [], [], {}
    for unit in sorted(fits):
        fit, name = fits[unit], {"session": step.session, "unit": unit}
        key = {"fit_key": sources[unit].key, "code": sources[unit].code}
        rows.append(name | fit.row | key)
        scores += [name | row for row in fit.scores]
        curves |= {f"{unit}/{curve}": values for curve, values in fit.curves.items()}
    step.write_table("units", _columns(rows, ("session", "unit", "status")))
    step.write_table("scores", _columns(scores, ("session", "unit", "model")))
    step.write_arrays("curves", curves)


def _columns(rows: list[dict[str, Any]], at_least: tuple[str, ...]) -> dict[str, list[Any]]:
    """Rows as columns; an empty table keeps the columns that every table has."""
    names = list(dict.fromkeys(name for row in rows for name in row)) or list(at_least)
    return {name: [row.get(name) for row in rows] for name in names}


def _remove_shards_of_before(step: Step) -> None:
    """Remove what shards left that are no more, since the study was divided into more of them."""
    import shutil

    if step.shard == 0:
        for folder in layout.shard_folder(step.session, 0).parent.glob("shard-*"):
            if int(folder.name.removeprefix("shard-")) >= step.shards:
                shutil.rmtree(folder)


if __name__ == "__main__":
    sys.exit(run_step("encoding", work))
