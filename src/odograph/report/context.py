"""What the page is made from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import pandas as pd

from odograph.figures.miniature import Miniature


@dataclass(frozen=True)
class PageFigure:
    """A figure shown on the page.

    Parameters
    ----------
    name : str
        One of `odograph.figures.captions.POPULATION_FIGURES`.
    png : bytes
        The PNG file's content.
    record_id : str
        Identifier of the record behind it.
    path : str
        Where the file is, relative to the folder of the results.
    """

    name: str
    png: bytes
    record_id: str
    path: str


@dataclass(frozen=True)
class PageContext:
    """All that the page says, as plain values.

    Parameters
    ----------
    study : str
        Name of the study.
    summary_lines : sequence of str
        What was found, a line each.
    verdicts : DataFrame
        The table of `odograph.population.sessions.session_table`.
    documents : dict of stage to {session: document}
        Stages "intake", "sync", "behaviour": the sessions' documents with their findings; any may be missing.
    units : DataFrame
        The population's units table.
    miniatures : mapping of (session, unit) to Miniature
        Small pictures of the units; units without are listed without.
    figures : sequence of PageFigure
        Population figures, in the order to show them.
    settings : sequence of dict
        The rows of `odograph.settings.load.settings_table`: path, value, default, changed, unit, description.
    session_settings : mapping of session to {path: value}
        Settings that the sessions table sets for single sessions.
    record_id : str
        Identifier of the page's own record.
    software : mapping of name to version
        Shown with the methods.
    results_folder : str
        The folder of the results as the user names it, for the commands that are shown.
    speed : DataFrame or None
        The table of `odograph.population.adaptivity.speed_table`.
    fit_line : str
        How many units' models agree with held-out time, as a sentence; empty where none was judged.
    unit_pages : mapping of session to str
        Where the units of each session are listed, relative to the folder of the results, when they are too
        many for the page itself.
    """

    study: str
    summary_lines: Sequence[str]
    verdicts: pd.DataFrame
    documents: Mapping[str, Mapping[str, Mapping[str, Any]]]
    units: pd.DataFrame
    miniatures: Mapping[tuple[str, int], Miniature]
    figures: Sequence[PageFigure]
    settings: Sequence[Mapping[str, Any]]
    session_settings: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    record_id: str = ""
    software: Mapping[str, str] = field(default_factory=dict)
    results_folder: str = "results"
    speed: pd.DataFrame | None = None
    fit_line: str = ""
    unit_pages: Mapping[str, str] = field(default_factory=dict)

    def value(self, path: str) -> Any:
        """The value of a setting by its dotted path.

        Raises
        ------
        KeyError
            When there is no such setting.
        """
        for row in self.settings:
            if row["path"] == path:
                return row["value"]
        raise KeyError(f"there is no setting {path!r}")
