"""A trace as a W3C PROV document (PROV-DM, W3C Recommendation 30 April 2013), serialised as PROV-JSON.

Jobs are activities; products, signals, units, tables and the settings read are entities, known by their
digests; the software that ran is the agent. An entity that a job read was `used` by it, a product
`wasGeneratedBy` it.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from prov.model import ProvDocument

from odograph.provenance.canonical import digest_value
from odograph.provenance.trace import Trace

NAMESPACE = "urn:odograph:"


def prov_json(found: Trace) -> str:
    """The trace as PROV-JSON, indented; the same trace gives the same text.

    Parameters
    ----------
    found : Trace
        From `odograph.provenance.trace.trace`.
    """
    document = ProvDocument()
    document.add_namespace("odograph", NAMESPACE)
    for record_id in sorted(found.records):
        _add_job(document, found.records[record_id])
    return json.dumps(json.loads(document.serialize(format="json")), indent=1, sort_keys=True) + "\n"


def _add_job(document: ProvDocument, record: Mapping[str, Any]) -> None:
    keys = "".join(f" {value}" for value in record["keys"].values())
    job = document.activity(
        f"odograph:{_local(record['record_id'])}",
        record["run"]["started"],
        record["run"]["ended"],
        {"prov:label": f"{record['rule']}{keys}", "odograph:rule": record["rule"]}
        | {f"odograph:{name}": value for name, value in record["keys"].items()}
        | {f"odograph:code_of_{name}": digest for name, digest in sorted(record["code"].items())},
    )
    document.wasAssociatedWith(job, _software(document, record["software"]))
    for entry in record["inputs"]:
        document.used(job, _input(document, entry, record["keys"].get("session")))
    for stage, values in sorted(record["settings"].items()):
        digest = digest_value(values)
        entity = _entity(document, f"settings-{stage}", digest, f"settings {stage}", {})
        document.used(job, entity)
    for product in record["products"]:
        entity = _entity(document, "product", product["digest"], product["path"], {})
        document.wasGeneratedBy(entity, job)


def _software(document: ProvDocument, versions: Mapping[str, str]) -> Any:
    name = f"odograph:{_local(digest_value(versions), 'software')}"
    if known := document.get_record(name):
        return known[0]
    facts = {f"odograph:{package}": version for package, version in sorted(versions.items())}
    label = f"odograph {versions.get('odograph', '')}".strip()
    return document.agent(name, {"prov:type": "prov:SoftwareAgent", "prov:label": label} | facts)


def _input(document: ProvDocument, entry: Mapping[str, Any], session: str | None) -> Any:
    kind = entry["kind"]
    if kind == "product":
        return _entity(document, "product", entry["digest"], entry["path"], {})
    label = {
        "signal": lambda: f"{entry['signal']} of session {session}",
        "unit": lambda: f"unit {entry['unit']} of session {session}",
        "table": lambda: f"rows of the table of {entry['table']}",
    }[kind]()
    return _entity(document, kind, entry["digest"], label, {"odograph:place": entry.get("place")})


def _entity(document: ProvDocument, kind: str, digest: str, label: str, facts: Mapping[str, Any]) -> Any:
    # Two sessions may hold equal signals; the label keeps such entities apart.
    name = f"odograph:{_local(digest_value([digest, label]), kind)}"
    if known := document.get_record(name):
        return known[0]
    told = {"prov:label": label, "odograph:digest": digest, "prov:type": f"odograph:{kind}"}
    return document.entity(name, told | {key: value for key, value in facts.items() if value})


def _local(identifier: str, kind: str | None = None) -> str:
    prefix, _, digits = identifier.rpartition(":")
    return f"{kind or prefix}-{digits}"
