"""The table of all units, with small pictures and links to the cards."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from odograph.figures.colours import model_label, model_terms, shape_label
from odograph.figures.miniature import Miniature
from odograph.report.context import PageContext
from odograph.report.words import cell, number, row, section, table, text

_NONE = Miniature("", "", "")


def units_section(context: PageContext) -> str:
    """A row for each unit; scripts, where they run, add sorting and filters."""
    columns = (
        "unit", "animal", "region", "spikes#", "mean rate (Hz)#", "encodes", "held-out bits per spike#",
        "observed map", "head direction", "speed", "speed shape",
    )  # fmt: skip
    units = context.units.sort_values(["session", "unit"]) if len(context.units) else context.units
    rows = [_unit_row(unit, context.miniatures) for unit in units.to_dict("records")]
    lead = (
        "<p>A unit's name leads to its full card. Maps are observed rates, curves are fitted ones with 95 % "
        "bands; the number under each is its peak rate.</p>"
    )
    body = table(columns, rows, caption="All units", identifier="unit-table", kind="sortable units")
    return section("units", "Units", lead + body if rows else "<p>No session that was used holds units.</p>")


def _unit_row(unit: Mapping[str, Any], miniatures: Mapping[tuple[str, int], Miniature]) -> str:
    session, name = str(unit["session"]), int(unit["unit"])
    fitted = unit["status"] == "fitted"
    encoded = unit.get("encoded") if isinstance(unit.get("encoded"), str) else None
    if encoded is None and fitted:
        encoded = "constant"
    picture = miniatures.get((session, name), _NONE)
    shape = unit.get("speed_shape")
    shape = shape_label(shape) if fitted and isinstance(shape, str) and shape != "not_tuned" else None
    bits = unit.get("selected_bits_per_spike")
    attributes = f' data-session="{text(session)}" data-encodes="{" ".join(model_terms(encoded or ""))}"'
    attributes += f' data-animal="{text(unit.get("animal"))}" data-status="{text(unit["status"])}"'
    return row(
        f'<a href="sessions/{text(session)}/cards/unit-{name}.png">{text(session)} <b>{name}</b></a>',
        [
            cell(text(unit.get("animal"))),
            cell(text(unit.get("region"))),
            cell(number(unit.get("n_spikes"), 0), kind="n", sort=unit.get("n_spikes")),
            cell(number(unit.get("mean_rate_hz")), kind="n", sort=unit.get("mean_rate_hz")),
            cell(_encodes(encoded) if fitted else f"<em>{text(str(unit['status']).replace('_', ' '))}</em>"),
            cell(number(bits, 3) if fitted else "–", kind="n", sort=bits if fitted else None),
            cell(picture.map),
            cell(picture.head_direction),
            cell(picture.speed),
            cell(text(shape)),
        ],
        attributes,
    )


def _encodes(encoded: str | None) -> str:
    terms = model_terms(encoded or "")
    if not terms:
        return '<span class="none">none</span>'
    return "<br>".join(f'<span class="term {text(term)}">{text(model_label(term))}</span>' for term in terms)
