# The plan, made before the graph, and the functions that take from it what a rule's job depends on.
#
# A job depends on its plan file (which signals and units its recording holds), on the digest of that file, on the
# settings that its step reads and on the fingerprint of the step's code. The last three are params as text: the
# engine compares params, and it does not compare large inputs by content nor look into imported modules.

import sys

from snakemake.exceptions import WorkflowError

from odograph.errors import OdographError
from odograph.figures.captions import POPULATION_FIGURES
from odograph.provenance.plan import make_plan, use_this_python
from odograph.provenance.running import planning


include: "recordings.smk"


try:
    # One run at a time; a job that reads this file again, and a look beside a run, take the plan that is there.
    with planning(sys.argv[1:], workflow.is_main_process) as alone:
        PLAN = make_plan(
            config,
            main_process=alone,
            config_file=str(workflow.configfiles[-1]) if workflow.configfiles else None,
            fetch=fetch,
        )
except OdographError as error:
    raise WorkflowError(str(error)) from None

# Jobs call `python`; it has to be the one that runs this.
use_this_python()


wildcard_constraints:
    session=r"[A-Za-z0-9_-]+",
    shard=r"\d+",


def planned(step):
    """The digest of the plan file of a session's step."""
    return lambda wildcards: PLAN.digests[
        f"{wildcards.session}/{step.format(**wildcards)}"
    ]


def settings(step):
    """The settings of a session's step, as text."""
    return lambda wildcards: PLAN.settings_of(step, wildcards.session)


def origin(wildcards):
    """The animal of a session and the regions of a shard's units, as text."""
    return PLAN.origin_of(wildcards.session, int(wildcards.shard))


def shards(wildcards):
    """Into how many shards the session is divided."""
    return PLAN.shards[wildcards.session]


def megabytes(step):
    """Memory of a job, from units and bins; twice as much with every further attempt."""
    return lambda wildcards, attempt: PLAN.megabytes(
        step, wildcards.get("session")
    ) * 2 ** (attempt - 1)


def minutes(step):
    """Time of a job, from units and bins; twice as much with every further attempt."""
    return lambda wildcards, attempt: PLAN.minutes(
        step, wildcards.get("session")
    ) * 2 ** (attempt - 1)


def of_shards(pattern):
    """A file of every shard of every session that can be read."""
    return [
        pattern.format(session=session, shard=shard)
        for session in PLAN.readable
        for shard in range(PLAN.shards[session])
    ]


def of_sessions(pattern):
    """A file of every session that can be read."""
    return expand(pattern, session=PLAN.readable)


def all_cards(wildcards):
    """The indexes of all cards."""
    return of_shards("results/sessions/{session}/cards/shard-{shard}.json")


def all_session_figures(wildcards):
    """The quality figures of all sessions, those that cannot be read among them."""
    return expand(
        "results/sessions/{session}/session_quality.png", session=PLAN.sessions
    )


def documents_of_session(wildcards):
    """What the stages say of a session; of a recording that cannot be read there is an inventory only."""
    folder = f"results/sessions/{wildcards.session}"
    found = {"inventory": f"{folder}/intake/inventory.json"}
    if wildcards.session not in PLAN.unreadable:
        found |= {
            "clock": f"{folder}/sync/clock.json",
            "residuals": f"{folder}/sync/residuals.parquet",
            "behaviour": f"{folder}/behaviour/behaviour.parquet",
            "audit": f"{folder}/behaviour/audit.json",
        }
    return found


def all_records(wildcards):
    """The records of all jobs."""
    folder = "results/sessions/{session}"
    return [
        *expand(f"{folder}/intake/record.json", session=PLAN.sessions),
        *expand(f"{folder}/session_quality.record.json", session=PLAN.sessions),
        *of_sessions(f"{folder}/sync/record.json"),
        *of_sessions(f"{folder}/behaviour/record.json"),
        *of_shards(f"{folder}/encoding/shard-{{shard}}/record.json"),
        *of_shards(f"{folder}/cards/shard-{{shard}}.record.json"),
        "results/population/record.json",
        "results/figures/record.json",
        "results/report.record.json",
    ]
