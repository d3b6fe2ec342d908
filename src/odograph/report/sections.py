"""The sections of the page, except the units' table: each takes the context and gives HTML."""

from __future__ import annotations

import base64
from collections.abc import Iterator, Mapping
from typing import Any

from odograph.figures.captions import CAPTIONS
from odograph.report.context import PageContext
from odograph.report.speed_gains import speed_gain_table
from odograph.report.words import (
    cell,
    number,
    row,
    section,
    setting_value,
    short_record,
    table,
    text,
    verdict,
)

STAGES = ("intake", "sync", "behaviour")
_LEVELS = {"fail": 0, "warn": 1, "note": 2}


def found_section(context: PageContext) -> str:
    """What was found, a line each."""
    lines = "".join(f"<li>{text(line)}</li>" for line in context.summary_lines)
    return section("found", "What was found", f'<ol class="found">{lines}</ol>')


def _findings(context: PageContext) -> Iterator[tuple[str, str, Mapping[str, Any]]]:
    """Session, stage and finding, the worst first, then by session and stage."""
    told = [
        (session, stage, finding)
        for stage in STAGES
        for session, document in (context.documents.get(stage) or {}).items()
        for finding in document.get("findings") or []
    ]
    return iter(
        sorted(told, key=lambda item: (_LEVELS.get(item[2].get("level"), 3), item[0], STAGES.index(item[1])))
    )


def checks_section(context: PageContext) -> str:
    """Findings of all sessions, failures first, with what to do; then units that were not fitted."""
    columns = ("session", "stage", "verdict", "found", "expected", "what to do")
    rows, notes = [], []
    for session, stage, finding in _findings(context):
        level = str(finding.get("level"))
        place = f'<br><span class="place">{text(finding["place"])}</span>' if finding.get("place") else ""
        line = row(
            text(session),
            [
                cell(stage),
                cell(verdict(level)),
                cell(text(finding.get("found")) + place),
                cell(text(finding.get("expected"))),
                cell(text(finding.get("remedy"))),
            ],
        )
        (notes if level == "note" else rows).append(line)
    body = "<p>No check failed and none warned.</p>"
    if rows:
        body = table(columns, rows, caption="Checks that failed, then those that warned")
    if notes:
        body += table(columns, notes, caption="Notes", kind="quiet")
    return section("checks", "Checks that did not pass", body + _unfitted(context))


def _unfitted(context: PageContext) -> str:
    units = context.units
    if not len(units) or (units["status"] == "fitted").all():
        return ""
    rows = [
        row(
            f"{text(unit['session'])}, unit {unit['unit']}",
            [cell(_status(unit["status"])), cell(text(unit["status_reason"]))],
        )
        for unit in units[units["status"] != "fitted"]
        .sort_values(["status", "session", "unit"])
        .to_dict("records")
    ]
    return table(("unit", "status", "reason"), rows, caption="Units that were not fitted")


def _status(status: str) -> str:
    word = str(status).replace("_", " ")
    return verdict("fail").replace(">fail<", f">{text(word)}<") if status == "failed" else text(word)


def sessions_section(context: PageContext) -> str:
    """A row for each session: verdict, reason, clock, valid time, units."""
    rows = []
    for facts in context.verdicts.to_dict("records"):
        session = facts["session"]
        inventory, clock, audit = (
            (context.documents.get(stage) or {}).get(session) or {} for stage in STAGES
        )
        share = audit.get("valid_share")
        minutes = None
        if audit.get("valid_bins") is not None and audit.get("bin_s") is not None:
            minutes = audit["valid_bins"] * audit["bin_s"] / 60
        # A reason that is missing comes from the table's file as NaN, which is true.
        reason = f"{facts['stage']}: {facts['reason']}" if isinstance(facts.get("reason"), str) else None
        valid = f"{number(minutes, 1)} min" + (f" ({100 * share:.1f} %)" if share is not None else "")
        rows.append(
            row(
                f'<a href="sessions/{text(session)}/session_quality.png">{text(session)}</a>',
                [
                    cell(verdict(str(facts["verdict"]))),
                    cell(text(reason)),
                    cell(text(facts.get("animal"))),
                    cell(text(facts.get("group"))),
                    cell(text((inventory.get("file") or {}).get("name"))),
                    cell(number(clock.get("drift_ppm"), 2), kind="n", sort=clock.get("drift_ppm")),
                    cell(valid if minutes is not None else "–", kind="n", sort=minutes),
                    cell(
                        f"{facts['units_fitted']} of {facts['units_kept']}",
                        kind="n",
                        sort=facts["units_fitted"],
                    ),
                ],
            )
        )
    used = context.verdicts[context.verdicts["verdict"] != "fail"]
    columns = (
        "session",
        "verdict",
        "reason",
        "animal",
        "group",
        "file",
        "clock drift (ppm)#",
        "valid time#",
        "units fitted#",
    )
    lead = (
        f"<p>{len(used)} of {len(context.verdicts)} sessions were used. A session's name leads to the "
        "picture of its quality.</p>"
    )
    return section("sessions", "Sessions", lead + table(columns, rows, caption="Sessions", kind="sortable"))


def figures_section(context: PageContext) -> str:
    """The population's figures with their captions, and the table of speed gains with theirs."""
    parts = []
    for figure in context.figures:
        caption = CAPTIONS[figure.name]
        data = base64.b64encode(figure.png).decode()
        parts.append(
            f'<figure id="figure-{figure.name}"><h3 class="unseen">{text(caption.title)}</h3>'
            f'<img src="data:image/png;base64,{data}" alt="{text(caption.title)}. {text(caption.text)}">'
            f"<figcaption>{text(caption.text)} <span class='place'>Numbers: "
            f'<a href="{caption.table}">{caption.table}</a>. '
            f'File: <a href="{text(figure.path)}">{text(figure.path)}</a>, '
            f"record {short_record(figure.record_id)}.</span></figcaption></figure>"
        )
        if figure.name == "speed_gains":
            parts.append(speed_gain_table(context.speed))
    lead = f"<p>{text(context.fit_line)}</p>" if context.fit_line else ""
    return section("population", "The population", lead + ("".join(parts) or "<p>No figures were drawn.</p>"))


def settings_section(context: PageContext) -> str:
    """Settings that differ from their defaults, settings of single sessions, then all settings."""
    changed = [facts for facts in context.settings if facts.get("changed")]
    body = "<p>Every setting has its default.</p>"
    if changed:
        columns = ("setting", "value", "default", "unit", "what it does")
        rows = [_setting_row(facts, ("value", "default")) for facts in changed]
        body = table(columns, rows, caption="Settings that differ from their defaults")
    single = [
        row(text(session), [cell(f"<code>{text(path)}</code>"), cell(f"<code>{setting_value(value)}</code>")])
        for session, settings in sorted(context.session_settings.items())
        for path, value in sorted(settings.items())
    ]
    if single:
        body += table(("session", "setting", "value"), single, caption="Settings of single sessions")
    rows = [_setting_row(facts, ("value",)) for facts in context.settings]
    columns = ("setting", "value", "unit", "what it does")
    return section("settings", "Settings", body + table(columns, rows, caption="All settings", kind="quiet"))


def _setting_row(facts: Mapping[str, Any], shown: tuple[str, ...]) -> str:
    return row(
        f"<code>{text(facts['path'])}</code>",
        [
            *(cell(f"<code>{setting_value(facts[name])}</code>") for name in shown),
            cell(text(facts.get("unit"))),
            cell(text(facts.get("description"))),
        ],
    )


def trace_section(context: PageContext) -> str:
    """How to find what stands behind a figure."""
    example = context.figures[0] if context.figures else None
    folder = text(context.results_folder)
    target = f"{folder}/{text(example.path)}" if example else f"{folder}/report.html"
    commands = f"odograph trace {target}"
    if example and example.record_id:
        commands += f"\nodograph trace {short_record(example.record_id)}"
    return section(
        "trace",
        "How to trace a number",
        "<p>Every figure carries the identifier of its record: inside the file, and its first twelve digits "
        "in the lower right margin. The file and the short code both lead back to the signals in the NWB "
        "files and to the settings "
        f"that were read:</p><pre><code>{commands}</code></pre>"
        "<p>The tables beside the figures hold the numbers that are drawn.</p>",
    )
