"""How the code changes with running speed, in one table."""

from __future__ import annotations

import pandas as pd

from odograph.population.gains import gain_rows, gain_variables
from odograph.population.speed import change_rows, compared_variables, shape_rows
from odograph.settings.population import PopulationSettings

COLUMNS = (
    "measure",
    "level",
    "name",
    "category",
    "k",
    "n",
    "animals",
    "sessions",
    "value",
    "low",
    "high",
    "confidence",
    "unit",
    "median_slow",
    "median_fast",
    "p",
    "method",
)


def speed_table(units: pd.DataFrame, settings: PopulationSettings) -> pd.DataFrame:
    """Speed-tuning shapes, the change of information with speed, and fitted speed gains, in one table.

    Parameters
    ----------
    units : DataFrame
        The table of `gather_units`.
    settings : PopulationSettings

    Returns
    -------
    DataFrame
        Rows with measure "speed_shape": per shape, `k` of the `n` units that encode speed, `value` the
        share. Rows with measure "<variable>_information_change", for every variable measured at slow and at
        fast running: `value` is the median over `n` units of fast minus slow (`unit` bits_per_spike), `k` how
        many units gained, `p` of the Wilcoxon signed-rank test; no model stands behind these. Rows with
        measure "<variable>_speed_gain", for every variable with a fitted speed gain, over the units that
        encode it: mean and median gain (`k` gains above 0), the shares whose tuning sharpens or blunts, the
        median change of the fitted information (bits_per_spike, bits_per_s), and of the units asked the share
        whose fit failed. Each for all units, for each animal, and for each group and region; the interval is
        `low`, `high` of `confidence` by `method`.
    """
    changes = [
        row for variable in compared_variables(units) for row in change_rows(units, variable, settings)
    ]
    gains = [row for variable in gain_variables(units) for row in gain_rows(units, variable, settings)]
    return pd.DataFrame([*shape_rows(units, settings), *changes, *gains], columns=list(COLUMNS))
