"""How a figure is made and saved: one look, fixed bytes, and the record's identifier inside the file."""

from __future__ import annotations

import contextlib
import io
import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import matplotlib
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import Colormap, ListedColormap
from matplotlib.figure import Figure

from odograph.figures.colours import INK, PAPER, RULE, SOFT_INK, UNVISITED, compass_colours
from odograph.settings.figures import FiguresSettings

RECORD_KEY = "odograph-record"
STAMP_PT = 7.0
_KEEP = {"backend", "backend_fallback", "interactive", "toolbar", "timezone", "webagg.port", "webagg.address"}


@contextlib.contextmanager
def figure_style(settings: FiguresSettings) -> Iterator[None]:
    """Draw inside this: matplotlib's defaults and ours, whatever the user's own matplotlib is set to."""
    base = {key: value for key, value in matplotlib.rcParamsDefault.items() if key not in _KEEP}
    size = settings.font_size_pt
    ours = {
        "font.family": ["DejaVu Sans"],
        "font.size": size,
        "axes.titlesize": size + 0.5,
        "axes.titleweight": "bold",
        "axes.titlelocation": "left",
        "axes.titlepad": 4.0,
        "axes.labelsize": size,
        "axes.labelpad": 2.0,
        "axes.labelcolor": INK,
        "axes.edgecolor": SOFT_INK,
        "axes.linewidth": 0.6,
        "axes.spines.top": False,
        "axes.spines.right": False,
        "axes.unicode_minus": True,
        "xtick.labelsize": size,
        "ytick.labelsize": size,
        "xtick.color": SOFT_INK,
        "ytick.color": SOFT_INK,
        "xtick.labelcolor": INK,
        "ytick.labelcolor": INK,
        "xtick.major.size": 2.5,
        "ytick.major.size": 2.5,
        "xtick.major.width": 0.6,
        "ytick.major.width": 0.6,
        "xtick.major.pad": 2.0,
        "ytick.major.pad": 2.0,
        "text.color": INK,
        "grid.color": RULE,
        "grid.linewidth": 0.5,
        "legend.fontsize": size,
        "legend.frameon": False,
        "lines.linewidth": 1.2,
        "figure.facecolor": PAPER,
        "savefig.facecolor": PAPER,
        "svg.hashsalt": "odograph",
        "svg.fonttype": "none",
        "pdf.fonttype": 42,
    }
    with matplotlib.rc_context({**base, **ours}):
        yield


def new_figure(width_in: float, height_in: float, settings: FiguresSettings) -> Figure:
    """An empty figure of a print size in inches, drawn by Agg and by nothing else."""
    figure = Figure(figsize=(width_in, height_in), dpi=settings.dpi)
    FigureCanvasAgg(figure)
    # Ticks are made as late as the file is: saving has to happen in the style of the drawing.
    figure.drawn_with = settings
    return figure


def axes_at(figure: Figure, left_in: float, bottom_in: float, width_in: float, height_in: float) -> Any:
    """Axes placed in inches from the figure's lower left corner."""
    width, height = figure.get_size_inches()
    return figure.add_axes((left_in / width, bottom_in / height, width_in / width, height_in / height))


def as_it_stands(text: str) -> str:
    """Text from a file, to be drawn as it stands: two dollar signs would begin and end a formula."""
    return text.replace("$", r"\$")


def text_at(figure: Figure, x_in: float, y_in: float, text: str, **kwargs: Any) -> Any:
    """Text placed in inches from the figure's lower left corner, as it stands."""
    width, height = figure.get_size_inches()
    return figure.text(x_in / width, y_in / height, as_it_stands(text), **kwargs)


def rate_colours(settings: FiguresSettings) -> Colormap:
    """Colour scale of rate maps, with the unvisited in a neutral grey."""
    return matplotlib.colormaps[settings.rate_colour_map].with_extremes(bad=UNVISITED)


def direction_colours(settings: FiguresSettings) -> Colormap:
    """Cyclic colour scale of directions over one turn from 0 rad."""
    if settings.direction_colour_map == "compass":
        return ListedColormap(compass_colours(), name="compass")
    return matplotlib.colormaps[settings.direction_colour_map]


def record_value(record_id: str) -> str:
    """The identifier as files carry it: `record:` and 64 hexadecimal digits."""
    digits = record_id.removeprefix("record:").removeprefix("sha256:")
    return f"record:{digits}"


def figure_bytes(
    figure: Figure, file_format: str, record_id: str, title: str, dpi: int | None = None
) -> bytes:
    """The figure as a file's bytes, the same for the same figure, with the record's identifier inside.

    Parameters
    ----------
    figure : Figure
        One of `new_figure`. Gets a small stamp with the identifier's first 12 digits at its lower right.
    file_format : "png" | "svg" | "pdf"
        PNG carries the identifier in a text chunk `odograph-record`, SVG as Dublin Core identifier, PDF as
        keywords.
    record_id : str
        `record:` and 64 hexadecimal digits.
    title : str
        Title kept in the file.
    dpi : int, optional
        Dots per inch; the figure's own when not given.
    """
    value = record_value(record_id)
    metadata: dict[str, dict[str, Any]] = {
        "png": {RECORD_KEY: value, "Title": title, "Software": None},
        "svg": {"Identifier": value, "Title": title, "Date": None, "Creator": None},
        "pdf": {"Keywords": value, "Title": title, "CreationDate": None, "Creator": None, "Producer": None},
    }
    if file_format not in metadata:
        raise ValueError(f"figure format {file_format!r}; expected one of {', '.join(sorted(metadata))}")
    width, height = figure.get_size_inches()
    buffer = io.BytesIO()
    with figure_style(figure.drawn_with):
        stamp = figure.text(
            1 - 0.06 / width, 0.05 / height, f"record {value.removeprefix('record:')[:12]}",
            ha="right", va="bottom", fontsize=STAMP_PT, color=SOFT_INK,
        )  # fmt: skip
        figure.savefig(buffer, format=file_format, dpi=dpi or figure.dpi, metadata=metadata[file_format])
        stamp.remove()
    return buffer.getvalue()


def save_figure(figure: Figure, path: str | Path, record_id: str, title: str, dpi: int | None = None) -> None:
    """Write the figure in the format of the path's suffix, under another name first and then by rename."""
    path = Path(path)
    content = figure_bytes(figure, path.suffix.removeprefix("."), record_id, title, dpi)
    path.parent.mkdir(parents=True, exist_ok=True)
    partial = path.with_name(f".{path.name}.{os.getpid()}.partial")
    partial.write_bytes(content)
    partial.replace(path)
