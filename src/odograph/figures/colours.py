"""The colours and words every picture and the report share.

The three variables differ in hue, in lightness and in the mark that stands for them, so that a figure can be
read in grey and by colour-blind readers. The cyclic scale `compass` runs through lightness on one axis and
through blue and yellow on the other: the two differences that the common colour deficiencies leave intact.
"""

from __future__ import annotations

import numpy as np

INK = "#1c2530"
SOFT_INK = "#56616e"
RULE = "#c9ced4"
PATH = "#b9c0c8"
UNVISITED = "#e4e6e9"
PAPER = "#ffffff"

TERM_COLOURS = {"position": "#1d4e89", "head_direction": "#d07818", "speed": "#187e70"}
TERM_MARKS = {"position": "s", "head_direction": "o", "speed": "^"}
_MORE_COLOURS = ("#8c4a86", "#6f6a1f", "#7b4a32")
_MORE_MARKS = ("D", "v", "P")

VERDICT_COLOURS = {"pass": "#187e70", "warn": "#a96300", "fail": "#b3261e"}
VERDICT_WORDS = {"pass": "pass", "warn": "warn", "fail": "fail"}

# Where the cyclic scale passes at 0, 90, 180 and 270 degrees, in CIE L*a*b*.
_COMPASS_LAB = np.array([[30.0, 38.0, -24.0], [58.0, 34.0, 60.0], [76.0, -22.0, 22.0], [48.0, -6.0, -42.0]])


def term_colour(term: str) -> str:
    """The colour of one variable; variables a laboratory adds get one of three more by their name."""
    return TERM_COLOURS.get(term) or _MORE_COLOURS[sum(term.encode()) % len(_MORE_COLOURS)]


def term_mark(term: str) -> str:
    """The mark (matplotlib's letter) of one variable."""
    return TERM_MARKS.get(term) or _MORE_MARKS[sum(term.encode()) % len(_MORE_MARKS)]


def term_label(term: str) -> str:
    """A variable's name as text: `head_direction` -> `head direction`."""
    return term.replace("_", " ")


def model_label(model: str) -> str:
    """A model's name as text: `position+head_direction` -> `position + head direction`."""
    return " + ".join(term_label(term) for term in model.split("+"))


def shape_label(shape: str) -> str:
    """The name of a shape of speed tuning as text: `non_monotonic` -> `non-monotonic`."""
    return "non-monotonic" if shape == "non_monotonic" else shape.replace("_", " ")


def model_terms(model: str) -> tuple[str, ...]:
    """The variables of a model, none for the constant one."""
    return () if model in ("", "constant", "none") else tuple(model.split("+"))


def lab_to_srgb(lab: np.ndarray) -> np.ndarray:
    """Colours of CIE L*a*b* (white point D65) as sRGB, clipped to what a screen can show.

    Parameters
    ----------
    lab : (n, 3) array
        Lightness 0..100, a*, b*.

    Returns
    -------
    (n, 3) array
        Red, green, blue in 0..1 (IEC 61966-2-1).
    """
    lab = np.asarray(lab, dtype=float)
    y = (lab[:, 0] + 16.0) / 116.0
    f = np.stack([y + lab[:, 1] / 500.0, y, y - lab[:, 2] / 200.0], axis=1)
    linear = np.where(f > 6 / 29, f**3, 3 * (6 / 29) ** 2 * (f - 4 / 29))
    xyz = linear * np.array([0.95047, 1.0, 1.08883])
    to_rgb = np.array(
        [
            [3.2404542, -1.5371385, -0.4985314],
            [-0.9692660, 1.8760108, 0.0415560],
            [0.0556434, -0.2040259, 1.0572252],
        ]
    )
    rgb = np.clip(xyz @ to_rgb.T, 0.0, 1.0)
    return np.where(rgb <= 0.0031308, 12.92 * rgb, 1.055 * rgb ** (1 / 2.4) - 0.055)


def compass_colours(n: int = 256) -> np.ndarray:
    """The cyclic scale as (n, 3) sRGB, the first colour standing for 0 rad (east, +x)."""
    angle = np.arange(n) * (2 * np.pi / n)
    c0 = _COMPASS_LAB.mean(axis=0)
    c1 = (_COMPASS_LAB[0] - _COMPASS_LAB[2]) / 2
    s1 = (_COMPASS_LAB[1] - _COMPASS_LAB[3]) / 2
    c2 = (_COMPASS_LAB[0] - _COMPASS_LAB[1] + _COMPASS_LAB[2] - _COMPASS_LAB[3]) / 4
    lab = c0 + np.outer(np.cos(angle), c1) + np.outer(np.sin(angle), s1) + np.outer(np.cos(2 * angle), c2)
    return lab_to_srgb(lab)
