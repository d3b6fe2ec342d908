"""The report: one HTML page that opens from disk and needs neither network nor scripts."""

from __future__ import annotations

from collections.abc import Mapping
from importlib import resources

from odograph.figures.miniature import Miniature
from odograph.report.context import PageContext
from odograph.report.methods import methods
from odograph.report.sections import (
    checks_section,
    figures_section,
    found_section,
    sessions_section,
    settings_section,
    trace_section,
)
from odograph.report.unit_table import units_section, units_table
from odograph.report.words import section, short_record, text

_ANCHORS = (
    ("found", "Found"),
    ("checks", "Checks"),
    ("sessions", "Sessions"),
    ("population", "Population"),
    ("units", "Units"),
    ("settings", "Settings"),
    ("methods", "Methods"),
    ("trace", "Trace"),
    ("cautions", "Cautions"),
)


def build_page(context: PageContext) -> str:
    """Make the report.

    Parameters
    ----------
    context : PageContext
        All that the page says.

    Returns
    -------
    str
        An HTML document; the same for the same context. Links lead to files beside it, by relative paths.
    """
    body = [
        found_section(context),
        checks_section(context),
        sessions_section(context),
        figures_section(context),
        units_section(context),
        settings_section(context),
        _methods_section(context),
        trace_section(context),
        _cautions_section(),
    ]
    anchors = "".join(f'<a href="#{name}">{title}</a>' for name, title in _ANCHORS)
    return _document(
        context,
        title=f"{context.study}: report",
        heading=context.study,
        lead="what its units encode, and what stands behind it",
        anchors=f'<nav aria-label="sections">{anchors}</nav>',
        body="".join(body),
    )


def build_units_page(
    context: PageContext, session: str, miniatures: Mapping[tuple[str, int], Miniature]
) -> str:
    """Make the page of one session's units, for studies of more units than the report shows.

    Parameters
    ----------
    context : PageContext
    session : str
    miniatures : mapping of (session, unit) to Miniature
        Of this session's units.

    Returns
    -------
    str
        An HTML document that lies in a folder beside the report.
    """
    units = context.units[context.units["session"] == session].sort_values("unit")
    return _document(
        context,
        title=f"{context.study}: units of {session}",
        heading=f"Units of {session}",
        lead=f'{text(context.study)}; <a href="../report.html">the report</a>',
        anchors="",
        body=section("units", "Units", units_table(units, miniatures, "../")),
    )


def _document(context: PageContext, *, title: str, heading: str, lead: str, anchors: str, body: str) -> str:
    """A whole document; `lead`, `anchors` and `body` are ready HTML."""
    record = (
        f'<span class="record">record {short_record(context.record_id)}</span>' if context.record_id else ""
    )
    return (
        "<!DOCTYPE html>\n"
        '<html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        '<meta name="color-scheme" content="light dark">'
        f'<meta name="odograph-record" content="{text(context.record_id)}">'
        f"<title>{text(title)}</title><style>{_resource('page.css')}</style></head><body>"
        '<a class="skip" href="#main">to the content</a>'
        f"<header><h1>{text(heading)}</h1><p>{lead} {record}</p>"
        f"{anchors}</header>"
        f'<main id="main">{body}</main>'
        f"<footer><p>Made by odograph. For research; not for diagnosis or treatment. {record}</p></footer>"
        f"<script>{_resource('page.js')}</script></body></html>\n"
    )


def _resource(name: str) -> str:
    return resources.files("odograph.report").joinpath(name).read_text(encoding="utf-8")


def _methods_section(context: PageContext) -> str:
    paragraphs, references = methods(context.value, dict(context.software))
    cited = "".join(f"<li>{text(reference)}</li>" for reference in references)
    note = "<p class='note'>Written from the run's settings; those of single sessions are listed above.</p>"
    body = "".join(f"<p>{text(paragraph)}</p>" for paragraph in paragraphs)
    return section(
        "methods", "Methods", f"{note}{body}<h3>References</h3><ol class='references'>{cited}</ol>"
    )


def _cautions_section() -> str:
    items = (
        "For research; not for diagnosis or treatment.",
        "That a unit encodes a variable says that the variable helps to predict its spikes beyond the others "
        "that were measured. A variable that was not measured may stand behind it.",
        "Sorting decides what a unit is: spikes of two cells under one number look like mixed coding.",
        "Units come in few animals. Intervals over animals are wide where there are few, and with fewer than "
        "ten they are narrower than they should be.",
        "Fitted curves are sure only where the animal was: look at the bands, and at the time spent.",
    )
    return section(
        "cautions", "Cautions", "<ul>" + "".join(f"<li>{text(item)}</li>" for item in items) + "</ul>"
    )
