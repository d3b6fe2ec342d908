"""What the readers of records, tables, settings and packages must do with damaged ones."""

from __future__ import annotations

import contextlib
import io
import json
import os
import shutil
from pathlib import Path
from typing import Any

from reading import WrongError, check_facts
from record_damage import RECORDS, SESSION, study, write_records

from odograph.errors import DamagedError, OdographError, SettingsError
from odograph.provenance.archive.unpack import unpack
from odograph.provenance.canonical import readable_json
from odograph.provenance.files import read_arrays, read_columns, read_table
from odograph.provenance.identifier import read_record_id
from odograph.provenance.records import producer_of, read_record
from odograph.provenance.root import read_root
from odograph.provenance.trace import find_start, trace
from odograph.provenance.verify import verify

__all__ = ["WrongError", "read_case", "write_records"]


def read_case(case: dict[str, Any], home: Path) -> str:
    """Read a damaged study; returns how it ended."""
    before = Path.cwd()
    os.chdir(home)
    try:
        refusals = {"study": _read_study, "plan": _plan, "tables": _read_tables, "package": _unpack}[
            case["what"]
        ]()
    finally:
        os.chdir(before)
    return "refused" if refusals else "read"


def _try(action: Any, *facts: Any, **more: Any) -> list[str]:
    """Do something that may be refused with all the facts; the refusal."""
    try:
        action(*facts, **more)
    except OdographError as error:
        facts = dict(vars(error))
        if isinstance(error, DamagedError):
            # The harness of the steps says what to do: the product is removed and made again.
            facts["remedy"] = "run snakemake again"
        if isinstance(error, SettingsError) and "what to do" in error.found:
            # Several faults of the configuration at once, each with its own facts.
            facts |= {"expected": error.found, "remedy": error.found}
        check_facts(facts)
        error.message().encode()
        return [error.found]
    return []


def _read_study() -> list[str]:
    refusals = []
    for file in RECORDS:
        refusals += _try(read_record, file)
    refusals += _try(read_root, ".")
    for name in ("clock.svg", "clock.png"):
        refusals += _try(read_record_id, f"results/figures/{name}")
    refusals += _try(_trace, "results/figures/clock.png")
    refusals += _try(_trace, f"{SESSION}/sync/clock.json")
    _try(_trace, "0")  # no identifier is that short, but every record is looked at
    refusals += _try(_command, "trace", "results/figures/clock.svg", "--all")
    producer_of.__globals__["_producers_in"].cache_clear()
    refusals += _try(producer_of, f"{SESSION}/sync/clock.json")
    return refusals + _verify()


def _verify() -> list[str]:
    """Whatever was done to what the records name has to be told as a breach."""
    found = verify(".")
    readable_json([vars(breach) for breach in found.breaches]).encode()
    _command("verify", ".")
    changed = [
        file
        for file, content in study().items()
        if file.startswith(("results/", "config/"))
        and not file.startswith("results/plan/")
        and not (Path(file).is_file() and Path(file).read_bytes() == content)
    ]
    # The root is a digest over the records. What its file says besides (the commit, whose recording it is) a
    # forger may write anew, digest and all, for whoever does not know the root from elsewhere.
    if changed == ["results/root.json"] and found.root == json.loads(study()[changed[0]])["root"]:
        changed = []
    if changed and not found.breaches:
        raise WrongError(f"changes that nothing tells of: {', '.join(changed)}")
    return [breach.found for breach in found.breaches]


def _trace(target: str) -> None:
    found = trace(find_start(target, Path("results")), Path("results"))
    readable_json(found.document()).encode()


def _command(*arguments: str) -> None:
    """A command of the user's, with what it prints."""
    from odograph.command.main import main

    said = io.TextIOWrapper(io.BytesIO(), encoding="utf-8")
    with contextlib.redirect_stdout(said), contextlib.redirect_stderr(said):
        main(["--debug", *arguments])
        said.flush()


def _plan() -> list[str]:
    from odograph.provenance import plan, plan_files
    from odograph.settings.load import load_settings

    answer = {
        "inventory": "sha256:5", "signals": {"tracking": "sha256:1"}, "units": {"3": "sha256:3"}, "links": [],
        "animal": None, "regions": {}, "duration_s": 60.0,
    }  # fmt: skip
    # What is tried is the planning's own reading; recordings have their own cases.
    plan_files.survey = lambda requests: {request.session: dict(answer) for request in requests}
    refusals = _try(load_settings, Path("config/config.yaml"))
    if refusals:
        return refusals
    settings = load_settings(Path("config/config.yaml")).model_dump(mode="json")
    with contextlib.redirect_stderr(io.StringIO()):
        refusals += _try(plan.make_plan, settings, config_file="config/config.yaml")
        refusals += _try(plan.make_plan, settings, config_file="config/config.yaml")
    return refusals


def _read_tables() -> list[str]:
    shard = f"{SESSION}/encoding/shard-0"
    return [
        *_try(read_table, f"{shard}/units.parquet"),
        *_try(read_columns, f"{shard}/units.parquet", ["unit", "rate"]),
        *_try(read_arrays, f"{shard}/curves.npz"),
    ]


def _unpack() -> list[str]:
    """Nothing may be written outside the new folder, and nothing may be left of what was refused."""
    before = {path for path in Path().parent.rglob("*")}
    target = Path("unpacked")
    refusals = _try(unpack, Path("package.zip"), target)
    after = {path for path in Path().parent.rglob("*")} - before
    strange = [path for path in after if path != target and target not in path.parents]
    if strange or (refusals and target.exists()):
        raise WrongError(f"left behind: {strange or target}")
    if any(path.is_symlink() for path in after) or (Path.cwd().parent / "x").exists():
        raise WrongError("a link, or a file outside")
    shutil.rmtree(target, ignore_errors=True)
    return refusals
