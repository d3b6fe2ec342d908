"""The metadata of an archive: an RO-Crate 1.1 that follows the Workflow Run Crate profile 0.5.

One action for the run as a whole, whose instrument is the workflow, and one for every kind of step and
session: what it used, what it made, when and with which code. Actions of shards are told together, since
thousands of them would make the file unreadable; the records in the archive hold each one.
"""

from __future__ import annotations

import mimetypes
from collections import defaultdict
from collections.abc import Iterable, Mapping
from datetime import datetime
from typing import Any
from urllib.parse import quote

from odograph.provenance.archive.payload import Recording
from odograph.provenance.canonical import readable_json

CRATE = "https://w3id.org/ro/crate/1.1"
WORKFLOW_CRATE = "https://w3id.org/workflowhub/workflow-ro-crate/1.0"
PROFILES = (
    "https://w3id.org/ro/wfrun/process/0.5",
    "https://w3id.org/ro/wfrun/workflow/0.5",
    WORKFLOW_CRATE,
)
PARAMETER_PROFILE = "https://bioschemas.org/profiles/FormalParameter/1.0-RELEASE"
TERMS = "https://w3id.org/ro/terms/workflow-run#"
LICENSE = "https://spdx.org/licenses/BSD-3-Clause"
_FORMATS = {
    ".parquet": "application/vnd.apache.parquet",
    ".tsv": "text/tab-separated-values",
    ".yaml": "application/yaml",
    ".smk": "text/x-python",
    ".md": "text/markdown",
    ".toml": "application/toml",
    ".npz": "application/zip",
    ".nwb": "application/x-hdf5",
}


def crate_text(
    name: str,
    files: Mapping[str, tuple[int, str]],
    records: Iterable[Mapping[str, Any]],
    parameters: Mapping[str, Any],
    recordings: Iterable[Recording],
    root: Mapping[str, Any],
    engine: str,
) -> str:
    """ro-crate-metadata.json.

    Parameters
    ----------
    name : str
        The study's name.
    files : mapping of str to (int, str)
        Size and SHA-256 (hex digits) of every file of the payload, by path.
    records : iterable of dict
        All records of the run.
    parameters : mapping of str to Any
        Settings that are not the default, by dotted path.
    recordings : iterable of Recording
        Those that are not among the files become entities of their own, with digest and size.
    root : dict
        The run root's document.
    engine : str
        Version of Snakemake.
    """
    records = sorted(records, key=lambda record: record["record_id"])
    ended = max(record["run"]["ended"] for record in records)
    graph = _Graph()
    _add_descriptor(graph, name, ended, root["root"])
    for path, (size, digest) in sorted(files.items()):
        _add_file(graph, path, size, digest)
    recordings = list(recordings)
    for one in recordings:
        _add_recording(graph, one)
    _add_workflow(graph, files, records, root, engine)
    _add_parameters(graph, parameters)
    settings = [row["file"] for row in root["user_files"]]
    _add_actions(graph, files, records, parameters, recordings, settings)
    graph.get("./")["hasPart"] = _references([*sorted(files), *(_recording_id(one) for one in recordings)])
    context = [
        f"{CRATE}/context",
        {term: TERMS + term for term in ("sha256", "environment", "resourceUsage")},
    ]
    return readable_json({"@context": context, "@graph": graph.entities()})


class _Graph:
    """Entities by identifier, in the order of their identifiers but for the two that come first."""

    def __init__(self) -> None:
        self._entities: dict[str, dict[str, Any]] = {}

    def add(self, name: str, kind: str | list[str], /, **facts: Any) -> dict[str, Any]:
        known = {key: value for key, value in facts.items() if value not in (None, [], "")}
        return self._entities.setdefault(name, {"@id": name, "@type": kind} | known)

    def get(self, identifier: str) -> dict[str, Any]:
        return self._entities[identifier]

    def entities(self) -> list[dict[str, Any]]:
        first = ("ro-crate-metadata.json", "./")
        return [self._entities[name] for name in first] + [
            self._entities[name] for name in sorted(self._entities) if name not in first
        ]


def _references(identifiers: Iterable[str]) -> list[dict[str, str]]:
    return [{"@id": _quoted(name)} for name in dict.fromkeys(identifiers)]


def _quoted(name: str) -> str:
    return name if name.startswith(("https://", "#")) else quote(name)


def _add_descriptor(graph: _Graph, name: str, ended: str, root: str) -> None:
    graph.add(
        "ro-crate-metadata.json", "CreativeWork",
        about={"@id": "./"}, conformsTo=_references([CRATE, WORKFLOW_CRATE]),
    )  # fmt: skip
    graph.add(
        "./", "Dataset",
        name=name,
        description=f"What the units of the study '{name}' encode: the results of one run of odograph, with "
        "the records that lead from every figure back to the recordings, and the workflow, the library and "
        "the settings that made them.",
        datePublished=ended[:10], license={"@id": LICENSE}, identifier=root,
        conformsTo=_references(PROFILES), mainEntity={"@id": "Snakefile"},
    )  # fmt: skip
    graph.add(LICENSE, "CreativeWork", name="BSD 3-Clause, for the software; data as their owners say")
    for profile in PROFILES:
        title, version = profile.split("/")[-2:]
        graph.add(profile, "CreativeWork", name=f"{title} crate profile", version=version)
    graph.add(PARAMETER_PROFILE, "CreativeWork", name="FormalParameter", version="1.0-RELEASE")


def _add_file(graph: _Graph, path: str, size: int, digest: str) -> None:
    suffix = "." + path.rpartition(".")[2]
    form = _FORMATS.get(suffix) or mimetypes.guess_type(path)[0] or "text/plain"
    graph.add(
        _quoted(path), "File",
        name=path.rpartition("/")[2], encodingFormat=form, contentSize=str(size), sha256=digest,
    )  # fmt: skip


def _recording_id(one: Recording) -> str:
    return one.file if one.enclosed else f"#recording-{one.session}-{one.digest[-12:]}"


def _add_recording(graph: _Graph, one: Recording) -> None:
    if not one.enclosed:
        graph.add(
            _recording_id(one), "CreativeWork",
            name=one.file.rpartition("/")[2],
            description=f"Recording of session {one.session}, not enclosed.",
            contentSize=str(one.size), sha256=one.digest.removeprefix("sha256:"), identifier=one.identifier,
            url=one.fetch_from, encodingFormat=_FORMATS[".nwb"],
        )  # fmt: skip


def _add_workflow(
    graph: _Graph,
    files: Mapping[str, Any],
    records: list[Mapping[str, Any]],
    root: Mapping[str, Any],
    engine: str,
) -> None:
    code = [path for path in sorted(files) if path.startswith(("workflow/", "src/"))]
    versions = sorted({record["software"]["odograph"] for record in records})
    workflow = graph.get("Snakefile")
    workflow["@type"] = ["File", "SoftwareSourceCode", "ComputationalWorkflow"]
    workflow |= {
        "name": "odograph: from NWB recordings of foraging animals to what their neurons encode",
        "programmingLanguage": {"@id": "#snakemake"},
        "softwareRequirements": _references(
            [path for path in ("constraints.txt", "environment.yml") if path in files]
        ),
        "hasPart": _references([*(f"#step-{rule}" for rule in sorted({r["rule"] for r in records})), *code]),
        "version": root["code"]["commit"] or ", ".join(versions),
    }
    graph.add(
        "#snakemake", "ComputerLanguage",
        name="Snakemake", version=engine, url="https://snakemake.readthedocs.io",
        identifier="https://snakemake.readthedocs.io",
    )  # fmt: skip
    for rule in sorted({record["rule"] for record in records}):
        codes = sorted({record["code"][rule] for record in records if record["rule"] == rule})
        graph.add(
            f"#step-{rule}", "SoftwareApplication",
            name=f"odograph.steps.{rule}", softwareVersion=", ".join(versions), identifier=codes,
            description=f"The step of rule {rule}; `identifier` is the fingerprint of its code, and the part "
            "named is the script that its jobs start.",
            hasPart=_references(path for path in (f"src/odograph/steps/{rule}.py",) if path in files),
            softwareRequirements=_references(_packages(graph, records)),
        )  # fmt: skip


def _packages(graph: _Graph, records: list[Mapping[str, Any]]) -> list[str]:
    """The libraries that the records name, as entities."""
    names = []
    for package, version in sorted({pair for record in records for pair in record["software"].items()}):
        names.append(f"#software-{package}-{version}")
        graph.add(names[-1], "SoftwareApplication", name=package, softwareVersion=version)
    return names


def _add_parameters(graph: _Graph, parameters: Mapping[str, Any]) -> None:
    inputs = []
    for path, value in sorted(parameters.items()):
        inputs.append(f"#parameter-{path}")
        text = value if isinstance(value, str) else readable_json(value).strip().replace("\n", "")
        graph.add(
            inputs[-1], "FormalParameter",
            name=path, additionalType="Text", conformsTo={"@id": PARAMETER_PROFILE},
            workExample={"@id": f"#value-{path}"},
        )  # fmt: skip
        graph.add(
            f"#value-{path}",
            "PropertyValue",
            name=path,
            value=text,
            exampleOfWork={"@id": f"#parameter-{path}"},
        )
    for path, title in (("config/config.yaml", "configuration"), ("results/report.html", "report")):
        graph.add(
            f"#parameter-{title}", "FormalParameter",
            name=title, additionalType="File", conformsTo={"@id": PARAMETER_PROFILE},
            workExample={"@id": path},
        )  # fmt: skip
        graph.get(path)["exampleOfWork"] = {"@id": f"#parameter-{title}"}
    workflow = graph.get("Snakefile")
    workflow["input"] = _references(["#parameter-configuration", *inputs])
    workflow["output"] = _references(["#parameter-report"])


def _add_actions(
    graph: _Graph,
    files: Mapping[str, Any],
    records: list[Mapping[str, Any]],
    parameters: Mapping[str, Any],
    recordings: list[Recording],
    settings: list[str],
) -> None:
    by_step: dict[tuple[str, str], list[Mapping[str, Any]]] = defaultdict(list)
    for record in records:
        by_step[record["rule"], record["keys"].get("session", "")].append(record)
    used = [
        *settings,
        *(_recording_id(one) for one in recordings),
        *(f"#value-{path}" for path in sorted(parameters)),
    ]
    made = sorted({product["path"] for record in records for product in record["products"]} & files.keys())
    actions = ["#run"]
    _add_action(graph, "#run", "the whole run", "Snakefile", used, [*made, "results/root.json"], records)
    of_session = defaultdict(list)
    for one in recordings:
        of_session[one.session].append(_recording_id(one))
    for (rule, session), some in sorted(by_step.items()):
        actions.append(f"#run-{rule}" + (f"-{session}" if session else ""))
        inputs = {
            entry["path"] for record in some for entry in record["inputs"] if entry["kind"] == "product"
        }
        reads = any(entry["kind"] in ("signal", "unit") for record in some for entry in record["inputs"])
        results = sorted(
            {product["path"] for record in some for product in record["products"]} & files.keys()
        )
        stages = {stage for record in some for stage in record["settings"]}
        read = [f"#value-{path}" for path in sorted(parameters) if path.split(".")[0] in stages]
        of_recording = of_session[session] if reads else []
        objects = [*sorted(inputs & files.keys()), *of_recording, *settings, *read]
        title = f"{rule} of session {session}" if session else rule
        _add_action(graph, actions[-1], title, f"#step-{rule}", objects, results, some)
    graph.get("./")["mentions"] = _references(actions)


def _add_action(
    graph: _Graph,
    identifier: str,
    title: str,
    instrument: str,
    objects: list[str],
    results: list[str],
    records: list[Mapping[str, Any]],
) -> None:
    seconds = sum(_seconds(record) for record in records)
    usage = f"#usage-{identifier.removeprefix('#')}"
    graph.add(usage, "PropertyValue", name="time of all its jobs", value=f"{seconds:.1f}", unitText="s")
    graph.add(
        identifier, "CreateAction",
        name=title,
        description=f"{len(records)} job{'s' if len(records) != 1 else ''}; records name each one's inputs, "
        "settings, code and products by their digests.",
        instrument={"@id": instrument}, object=_references(objects), result=_references(results),
        startTime=min(record["run"]["started"] for record in records),
        endTime=max(record["run"]["ended"] for record in records),
        actionStatus="http://schema.org/CompletedActionStatus",
        resourceUsage={"@id": usage},
    )  # fmt: skip


def _seconds(record: Mapping[str, Any]) -> float:
    start, end = (datetime.fromisoformat(record["run"][name]) for name in ("started", "ended"))
    return (end - start).total_seconds()
