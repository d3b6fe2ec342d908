"""Values as text, and text as HTML."""

from __future__ import annotations

import html
import json
import math
from collections.abc import Iterable, Sequence
from typing import Any


def text(value: Any) -> str:
    """Escaped text; a dash for what is missing."""
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return "–"
    return html.escape(str(value))


def number(value: Any, digits: int = 2) -> str:
    """A number with a thousands sign; a dash for what is missing or not finite."""
    try:
        value = float(value)
    except (TypeError, ValueError):
        return "–"
    if not math.isfinite(value):
        return "–"
    # Adding zero turns a negative zero into a plain one.
    return f"{round(value, digits) + 0.0:,.{digits}f}".replace("-", "−")


def setting_value(value: Any) -> str:
    """A setting's value as HTML; the entries of a list of mappings on a line each, without what is null."""
    if isinstance(value, list) and value and all(isinstance(item, dict) for item in value):
        return "<br>".join(
            html.escape(", ".join(f"{key}: {_plain(part)}" for key, part in item.items() if part is not None))
            for item in value
        )
    return html.escape(_plain(value))


def _plain(value: Any) -> str:
    return value if isinstance(value, str) else json.dumps(value, ensure_ascii=False, separators=(", ", ": "))


def cell(content: str, *, kind: str = "", sort: Any = None) -> str:
    """A table cell of ready HTML; `sort` is the value that sorting goes by."""
    classes = f' class="{kind}"' if kind else ""
    key = f' data-v="{html.escape(str(sort))}"' if sort is not None else ""
    return f"<td{classes}{key}>{content}</td>"


def table(
    columns: Sequence[str], rows: Iterable[str], *, caption: str, identifier: str = "", kind: str = ""
) -> str:
    """A table with its caption and column heads; `rows` are ready `<tr>` elements.

    A column whose name ends in `#` holds numbers; the sign is not shown.
    """
    heads = "".join(_head(column) for column in columns)
    name = f' id="{identifier}"' if identifier else ""
    classes = f' class="{kind}"' if kind else ""
    return (
        f'<div class="scroll" tabindex="0" role="group" aria-label="{html.escape(caption)}">'
        f"<table{name}{classes}><caption>{html.escape(caption)}</caption><thead><tr>{heads}</tr></thead>"
        f"<tbody>{''.join(rows)}</tbody></table></div>"
    )


def _head(column: str) -> str:
    kind = ' class="n"' if column.endswith("#") else ""
    return f'<th scope="col"{kind}>{html.escape(column.removesuffix("#"))}</th>'


def row(head: str, cells: Iterable[str], attributes: str = "") -> str:
    """A table row whose first cell heads it."""
    return f'<tr{attributes}><th scope="row">{head}</th>{"".join(cells)}</tr>'


def section(identifier: str, title: str, body: str) -> str:
    """A section of the page."""
    return f'<section id="{identifier}"><h2>{html.escape(title)}</h2>{body}</section>'


def verdict(word: str) -> str:
    """A verdict as a coloured word."""
    return f'<span class="verdict {html.escape(word.replace(" ", "-"))}">{html.escape(word)}</span>'


def short_record(record_id: str) -> str:
    """The first 12 digits of a record's identifier, as they stand in the margin of figures."""
    return record_id.removeprefix("record:")[:12]
