"""Names, titles and captions of the population's figures, as plain text that needs no drawing library."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Caption:
    """The words that go with a figure.

    Parameters
    ----------
    title : str
        A few words.
    text : str
        What is drawn, and how to read it.
    table : str
        The table of numbers behind the figure, relative to the folder of the results.
    """

    title: str
    text: str
    table: str


CAPTIONS = {
    "composition": Caption(
        "What the units encode",
        "Shares of the fitted units. Dot, bar and thick line: all units with the interval of the bootstrap "
        "over animals (Wilson's where there is one animal). Small marks and thin lines: each animal with "
        "Wilson's interval over its units. Above, units that encode a variable whatever else they encode; "
        "below, exact combinations.",
        "population/composition.tsv",
    ),
    "speed_shapes": Caption(
        "Shape of the speed tuning",
        "Of the units that encode running speed, the shares whose rate rises with speed, falls with it, "
        "turns, or cannot be told. Marks and lines as in the figure of what the units encode.",
        "population/speed.tsv",
    ),
    "slow_against_fast": Caption(
        "Information at slow and at fast running",
        "Bits per spike about position and about head direction in the slow and in the fast half of running, "
        "each unit a mark, the halves matched in occupancy and in spikes. Filled: units that encode the "
        "variable. Above the broken line the code is sharper at fast running; "
        "marks on the left or lower edge lie at or beyond it.",
        "population/units.tsv",
    ),
    "speed_gains": Caption(
        "Speed gain of the tuning",
        "Units that encode position or head direction, by the gain fitted to them (units and animals: above "
        "the panels). In the model a unit's log rate is a sum of smooth terms, of which the one for position "
        "or direction is multiplied by 1 + g z, z being the standardised logarithm of 1 + v / 5 cm/s of the "
        "speed v: a gain g of 0 leaves the tuning as it is, above 0 it is deeper and sharper at speed, "
        "below 0 flatter. Lines: standard errors. Filled marks, pointing up or down: gains above or below "
        "0 by a score test ranked among circular shifts of speed, at the study's false discovery rate over "
        "the units that encode the variable. At the right, information of the fitted tuning at the 20th and "
        "the 80th percentile of running speed; above the broken line it is more at speed.",
        "population/units.tsv",
    ),
    "held_out_scores": Caption(
        "Held-out score of every model",
        "Log-likelihood of held-out spikes over that of a constant rate, in bits per spike: each unit a dot, "
        "with quartiles and median, dots on an edge at or beyond it; at the right, how often the model was "
        "selected.",
        "population/scores.parquet",
    ),
}
POPULATION_FIGURES = tuple(CAPTIONS)
