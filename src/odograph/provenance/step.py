"""The harness of the steps: arguments, log, planned digests, verdicts, and the record at the end.

A step module has a function ``work(step)`` that reads the inputs its rule names, calls the library and
writes the products. `run_step` does the rest. Exit codes: 0 done, 65 bad data, 70 a fault of the program,
74 no room on the disk, 75 an input changed under the run or is damaged, 78 bad settings, 130 stopped.
"""

from __future__ import annotations

import argparse
import json
import logging
import os
import sys
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from odograph.errors import (
    ChangedInputError,
    DamagedError,
    DiskFullError,
    InputError,
    OdographError,
    SettingsError,
)
from odograph.provenance.canonical import digest_text
from odograph.provenance.files import (
    read_arrays,
    read_columns,
    read_json,
    read_table,
    write_arrays,
    write_json,
    write_table,
    write_tsv,
)
from odograph.provenance.fingerprint import PACKAGE_FOLDER, code_fingerprint
from odograph.provenance.job_log import start_log
from odograph.provenance.known import read_known
from odograph.provenance.layout import PLAN, STORE
from odograph.provenance.records import RecordDraft
from odograph.provenance.renaming import disk_full, disk_full_told, is_full, renamed_into_place
from odograph.provenance.running import still_in_charge

if TYPE_CHECKING:
    import numpy as np
    import pandas as pd

    from odograph.settings.base import StageSettings

logger = logging.getLogger("odograph.step")

EXIT_OK, EXIT_DATA, EXIT_INTERNAL, EXIT_FULL, EXIT_CHANGED, EXIT_SETTINGS = 0, 65, 70, 74, 75, 78
EXIT_STOPPED = 130
# Faults of the run and not of a session's data: they end the job, and no session is left out for them.
_OF_THE_RUN = (ChangedInputError, DamagedError, DiskFullError, SettingsError)
_THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")


class Step:
    """One job at work: its inputs, outputs, settings and record.

    Parameters
    ----------
    rule : str
        Name of the rule.
    arguments : argparse.Namespace
        The parsed command line of `run_step`.
    """

    def __init__(self, rule: str, arguments: argparse.Namespace) -> None:
        self._started = time.monotonic()
        self._started_at = datetime.now(UTC).isoformat(timespec="milliseconds")
        self.rule = rule
        self.session: str | None = arguments.session
        self.shard: int | None = arguments.shard
        self.shards: int | None = arguments.shards
        self.settings: dict[str, Any] = json.loads(arguments.settings)
        self._origin: dict[str, Any] = json.loads(arguments.origin)
        self._inputs = _paths(arguments.inputs)
        self._outputs = _paths(arguments.outputs)
        self.plan = _checked_plan(arguments.plan, arguments.planned)
        self.code = {rule: _checked_code(rule, arguments.code)}
        self._draft: RecordDraft | None = None

    @property
    def name(self) -> str:
        """What to call this job in a log."""
        parts = [self.rule, self.session, f"shard {self.shard}" if self.shard is not None else None]
        return " ".join(part for part in parts if part)

    @property
    def record(self) -> RecordDraft:
        """The record being drawn up."""
        if self._draft is None:
            keys = {"session": self.session, "shard": self.shard}
            self._draft = RecordDraft(
                self.rule,
                keys={key: value for key, value in keys.items() if value is not None},
                settings=self.settings,
                code=self.code,
            )
        return self._draft

    @property
    def record_id(self) -> str:
        """The identifier of the record, for the figures; every input must have been read by then."""
        return self.record.record_id

    def stage_settings(self, model: type[StageSettings]) -> Any:
        """The settings of one stage, as an instance of its model."""
        stage = model.__name__.removesuffix("Settings").lower()
        return model.model_validate(self.settings[stage])

    @property
    def source(self) -> dict[str, Any]:
        """Where the session's recording lies and how to read it: ``nwb``, ``intake``, ``on_bad_session``."""
        return read_json(PLAN / "sessions" / str(self.session) / "source.json")

    @property
    def stops_on_bad_session(self) -> bool:
        """Whether the study asks to stop when a session cannot be used."""
        return self.session is not None and self.source["on_bad_session"] == "stop"

    # Inputs

    def input(self, name: str) -> Path:
        """The path of an input that the rule names; it goes into the record."""
        return self.use(self._inputs[name])

    @property
    def origin(self) -> dict[str, Any]:
        """`animal` of the session and `regions` of its units; they go into the record."""
        self.record.add_table_input("origin", self._origin)
        return self._origin

    def use(self, path: str | Path) -> Path:
        """Put a product of another job into the record as an input."""
        path = Path(path)
        if not path.is_file():
            raise ChangedInputError("the file is missing", file=str(path), remedy="run snakemake again")
        self.record.add_product_input(path)
        return path

    def read_json(self, name: str) -> Any:
        """Read the JSON document that the rule names as an input."""
        return read_json(self.input(name))

    def read_table(self, name: str) -> pd.DataFrame:
        """Read the table that the rule names as an input."""
        return read_table(self.input(name))

    def read_columns(self, name: str) -> dict[str, np.ndarray]:
        """Read the table that the rule names as an input, as one array per column."""
        return read_columns(self.input(name))

    def read_arrays(self, name: str) -> dict[str, np.ndarray]:
        """Read the named arrays that the rule names as an input."""
        return read_arrays(self.input(name))

    # Products

    def output(self, name: str) -> Path:
        """The path of an output that the rule names."""
        return self._outputs[name]

    def write_json(self, name: str, document: Any) -> None:
        """Write a JSON document as the output of that name."""
        write_json(self.output(name), document, still_in_charge)
        self.record.add_product(self.output(name))

    def write_table(self, name: str, table: Any) -> None:
        """Write a table as the output of that name: Parquet, or text for the suffix ``.tsv``."""
        path = self.output(name)
        (write_tsv if path.suffix == ".tsv" else write_table)(path, table, still_in_charge)
        self.record.add_product(path)

    def write_arrays(self, name: str, arrays: Mapping[str, np.ndarray]) -> None:
        """Write named arrays as the output of that name."""
        write_arrays(self.output(name), arrays, still_in_charge)
        self.record.add_product(self.output(name))

    @contextmanager
    def product(self, path: str | Path, **facts: Any) -> Iterator[Path]:
        """Give a temporary name to write a product under; it is renamed and recorded when the block ends."""
        with renamed_into_place(path, still_in_charge) as temporary:
            yield temporary
        self.record.add_product(path, **facts)

    def remove(self, path: Path) -> None:
        """Remove a product of an earlier job that has no place any more."""
        still_in_charge()
        path.unlink(missing_ok=True)

    def finish(self) -> None:
        """Write the record."""
        self.record.run["started"] = self._started_at
        self.record.run["seconds"] = round(time.monotonic() - self._started, 3)
        self.record.run |= _taken()
        self.record.write(self.output("record"), still_in_charge)


def run_step(
    rule: str,
    work: Callable[[Step], None],
    leave_out: Callable[[Step, OdographError], None] | None = None,
    arguments: Sequence[str] | None = None,
) -> int:
    """Run a step from its command line.

    Parameters
    ----------
    rule : str
        Name of the rule, and of the step's module.
    work : callable
        Does the step.
    leave_out : callable, optional
        Writes legal products that say why the session is left out, when `work` cannot use its data. Without
        it, or when the study says `stop`, such data end the job.
    arguments : sequence of str, optional
        The command line; by default that of the process.

    Returns
    -------
    int
        The exit code.
    """
    parsed = _parser(rule).parse_args(arguments)
    _prepare_process()
    try:
        with disk_full_told(parsed.log or "the log"):
            start_log(parsed.log)
        step = Step(rule, parsed)
        logger.debug("%s begins; code %s", step.name, parsed.code)
        try:
            work(step)
        except _OF_THE_RUN:
            raise
        except OdographError as error:
            if leave_out is None or step.stops_on_bad_session:
                raise
            logger.warning("%s: session %s is left out: %s", step.name, step.session, error)
            step._draft = None
            leave_out(step, error)
        step.finish()
        logger.debug("%s is done; %s", step.name, step.record_id)
    except OdographError as error:
        return told(error)
    except KeyboardInterrupt:
        logger.error("stopped")
        return EXIT_STOPPED
    except Exception as error:
        if is_full(error):
            return told(disk_full(parsed.log or parsed.outputs[0].partition("=")[2], error))
        logger.exception("a fault of the program; please report it with this log")
        return EXIT_INTERNAL
    return EXIT_OK


def told(error: OdographError) -> int:
    """Tell an error in the log and give its exit code; a damaged product is removed, to be made again."""
    if isinstance(error, DamagedError):
        error = _removed(error)
    logger.error("%s", error)
    return _exit_code(error)


def _removed(error: DamagedError) -> OdographError:
    try:
        still_in_charge()
    except ChangedInputError as later:
        return later
    Path(error.file).unlink(missing_ok=True)
    return DamagedError(
        f"{error.found}; it was removed",
        file=error.file,
        expected=error.expected,
        remedy="run snakemake again: the job that wrote it makes it anew",
    )


def refuse_if_failed(step: Step, document: Mapping[str, Any]) -> None:
    """Stop the run on a document whose verdict is fail, when the study asks for that.

    Raises
    ------
    InputError
        With the first finding that failed.
    """
    if document["verdict"] == "fail" and step.stops_on_bad_session:
        raise failure_in(document)


def failure_in(document: Mapping[str, Any]) -> InputError:
    """The first failing finding of a document, as an error."""
    failing = [finding for finding in document["findings"] if finding["level"] == "fail"]
    finding = failing[0] if failing else {"found": "the session failed"}
    return InputError(
        finding["found"],
        place=finding.get("place"),
        expected=finding.get("expected"),
        remedy=finding.get("remedy"),
    )


def left_out_because(stage: str, document: Mapping[str, Any]) -> dict[str, Any]:
    """The finding of a later stage on a session that failed at an earlier one."""
    return {
        "level": "fail",
        "place": stage,
        "found": f"left out because {stage} failed: {failure_in(document).found}",
        "expected": f"a session that passes {stage}",
        "remedy": f"mend what {stage} reports for this session",
    }


def _taken() -> dict[str, float]:
    """What this process took so far: time of processors in s, and memory at its most in MB."""
    try:
        import resource
    except ModuleNotFoundError:  # not on every system
        return {}
    usage = resource.getrusage(resource.RUSAGE_SELF)
    unit = 1e6 if sys.platform == "darwin" else 1e3
    return {
        "processor_s": round(usage.ru_utime + usage.ru_stime, 3),
        "memory_mb": round(usage.ru_maxrss / unit, 1),
    }


def _paths(pairs: Sequence[str]) -> dict[str, Path]:
    return {name: Path(path) for name, _, path in (pair.partition("=") for pair in pairs)}


def _checked_plan(path: str | None, planned: str | None) -> dict[str, Any]:
    if path is None:
        return {}
    text = Path(path).read_text(encoding="utf-8")
    if digest_text(text) != planned:
        raise ChangedInputError(
            "what the recordings hold changed since this run was planned",
            file=path,
            remedy="run snakemake again",
        )
    return json.loads(text)


def _checked_code(rule: str, planned: str) -> str:
    found = code_fingerprint(f"odograph.steps.{rule}", known_code())
    if found != planned:
        raise ChangedInputError(
            f"the code of {rule} changed since this run was planned", remedy="run snakemake again"
        )
    return found


def known_code() -> dict[str, Any]:
    """What the planning knows of the package's modules, so that a job need not parse them."""
    return read_known(PLAN / "cache.json").get("code", {})


def _prepare_process() -> None:
    # One thread for linear algebra: sums in another order would give other bytes with other numbers of cores.
    os.environ.update(dict.fromkeys(_THREAD_VARIABLES, "1"))
    if not os.access(PACKAGE_FOLDER, os.W_OK):
        os.environ.setdefault("NUMBA_CACHE_DIR", str((STORE / "compiled").resolve()))


def _exit_code(error: OdographError) -> int:
    if isinstance(error, ChangedInputError | DamagedError):
        return EXIT_CHANGED
    if isinstance(error, DiskFullError):
        return EXIT_FULL
    return EXIT_SETTINGS if isinstance(error, SettingsError) else EXIT_DATA


def _parser(rule: str) -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog=f"python -m odograph.steps.{rule}", description=f"The step of rule {rule}; run by snakemake."
    )
    parser.add_argument("--session", help="the session at work")
    parser.add_argument("--shard", type=int, help="the shard at work")
    parser.add_argument("--shards", type=int, help="into how many shards the session is divided")
    parser.add_argument("--plan", help="the plan file")
    parser.add_argument("--planned", help="digest that the plan file must have")
    parser.add_argument("--settings", default="{}", help="the settings read, as JSON by stage")
    parser.add_argument("--code", required=True, help="fingerprint that the code must have")
    parser.add_argument("--inputs", nargs="*", default=[], metavar="NAME=PATH", help="the files read")
    parser.add_argument("--outputs", nargs="+", default=[], metavar="NAME=PATH", help="the files written")
    parser.add_argument("--origin", default="{}", help="the animal, and the regions of the units, as JSON")
    parser.add_argument("--log", help="the log file")
    return parser
