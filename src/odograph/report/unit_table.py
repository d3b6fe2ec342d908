"""The table of all units, with small pictures and links to the cards."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import pandas as pd

from odograph.figures.colours import model_label, model_terms, shape_label
from odograph.figures.miniature import Miniature
from odograph.report.context import PageContext
from odograph.report.words import cell, number, row, section, table, text

#: More units than this, and each session has a page of its own for them: browsers read a few MB at ease.
MOST_UNITS_ON_THE_PAGE = 2000
_NONE = Miniature("", "", "")
_COLUMNS = (
    "unit", "animal", "region", "spikes#", "mean rate (Hz)#", "encodes", "held-out bits per spike#",
    "observed map", "head direction", "speed", "speed shape",
)  # fmt: skip
_LEAD = (
    "<p>A unit's name leads to its full card. Maps are observed rates, curves are fitted ones with 95 % "
    "bands; the number under each is its peak rate.</p>"
)


def units_section(context: PageContext) -> str:
    """A row for each unit; scripts, where they run, add sorting and filters."""
    if context.unit_pages:
        return section("units", "Units", _sessions_with_pages(context))
    units = context.units.sort_values(["session", "unit"]) if len(context.units) else context.units
    if not len(units):
        return section("units", "Units", "<p>No session that was used holds units.</p>")
    return section("units", "Units", units_table(units, context.miniatures))


def units_table(
    units: pd.DataFrame, miniatures: Mapping[tuple[str, int], Miniature], results: str = ""
) -> str:
    """The table of some units.

    Parameters
    ----------
    units : DataFrame
        Rows of the population's units table.
    miniatures : mapping of (session, unit) to Miniature
    results : str
        Path from the page to the folder of the results, with a final slash; empty when it lies in it.
    """
    rows = [_unit_row(unit, miniatures, results) for unit in units.to_dict("records")]
    return _LEAD + table(_COLUMNS, rows, caption="All units", identifier="unit-table", kind="sortable units")


def _sessions_with_pages(context: PageContext) -> str:
    """A row for each session, which leads to the page of its units."""
    lead = (
        f"<p>The study has {number(len(context.units), 0)} units, more than the "
        f"{number(MOST_UNITS_ON_THE_PAGE, 0)} that one page shows; they are listed on a page for each "
        "session. The table of all units is <code>population/units.tsv</code>.</p>"
    )
    rows = []
    for session, units in context.units.groupby("session", sort=True):
        encoded = units["encoded"].fillna("").map(lambda told: len(model_terms(told)))
        fitted = int((units["status"] == "fitted").sum())
        rows.append(
            row(
                f'<a href="{text(context.unit_pages[session])}"><b>{text(session)}</b></a>',
                [
                    cell(text(units["animal"].iloc[0])),
                    cell(number(len(units), 0), kind="n", sort=len(units)),
                    cell(number(fitted, 0), kind="n", sort=fitted),
                    *(
                        cell(number(count, 0), kind="n", sort=count)
                        for count in (int((encoded >= 1).sum()), int((encoded >= 2).sum()))
                    ),
                ],
            )
        )
    columns = ("session", "animal", "units#", "fitted#", "encode a variable#", "encode several#")
    return lead + table(columns, rows, caption="Units by session", identifier="unit-pages", kind="sortable")


def _unit_row(unit: Mapping[str, Any], miniatures: Mapping[tuple[str, int], Miniature], results: str) -> str:
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
    card = f"{results}sessions/{text(session)}/cards/unit-{name}.png"
    return row(
        f'<a href="{card}">{text(session)} <b>{name}</b></a>',
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
