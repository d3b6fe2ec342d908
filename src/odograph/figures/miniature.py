"""Pictures of a unit a few kilobytes small, as SVG to set into a page; they take the page's own colours."""

from __future__ import annotations

import base64
import struct
import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

import matplotlib
import numpy as np

from odograph.figures.panels import number
from odograph.settings.figures import FiguresSettings

_LEVELS = 48
_SIZE = 56
_CURVE_WIDTH = 92
_TOP, _BOTTOM = 3.0, 46.0
#: Names of the arrays that the pictures are drawn from.
DRAWN_FROM = frozenset(
    {"position_observed_hz", "head_direction_rad", "speed_cm_s"}
    | {
        f"{term}_{curve}"
        for term in ("head_direction", "speed")
        for curve in ("rate_hz", "rate_low_hz", "rate_high_hz")
    }
)


@dataclass(frozen=True)
class Miniature:
    """Three small pictures of one unit, each an `<svg>` element or empty.

    Parameters
    ----------
    map, head_direction, speed : str
        Observed rate map, fitted curve of head direction with band, fitted curve of speed with band.
    """

    map: str
    head_direction: str
    speed: str


def draw_miniature(curves: Mapping[str, np.ndarray], settings: FiguresSettings) -> Miniature:
    """Draw the small pictures of one unit.

    Parameters
    ----------
    curves : mapping of arrays
        The unit's maps and curves (those of `DRAWN_FROM`); what is absent gives an empty text.
    settings : FiguresSettings
        The colour scale of the map.
    """
    observed = curves.get("position_observed_hz")
    return Miniature(
        map=_map(np.asarray(observed, float), settings) if observed is not None else "",
        head_direction=_curve(curves, "head_direction", "head_direction_rad"),
        speed=_curve(curves, "speed", "speed_cm_s"),
    )


def _map(rate_hz: np.ndarray, settings: FiguresSettings) -> str:
    known = np.isfinite(rate_hz)
    if not known.any():
        return ""
    top = float(rate_hz[known].max())
    level = (
        np.clip(np.nan_to_num(rate_hz) / (top or 1.0) * (_LEVELS - 1), 0, _LEVELS - 1)
        .round()
        .astype(np.uint8)
    )
    pixels = np.where(known, level + 1, 0).astype(np.uint8)[::-1]
    data = base64.b64encode(palette_png(pixels, _palette(settings.rate_colour_map))).decode()
    ny, nx = pixels.shape
    width = min(92.0, _SIZE * nx / ny)
    peak = f"{number(top, 1)} Hz"
    return (
        f'<svg class="mini" width="{width:.0f}" height="{_SIZE + 13}" role="img" '
        f'aria-label="rate map, peak {peak}">'
        f'<image href="data:image/png;base64,{data}" width="{width:.0f}" height="{_SIZE}" '
        'preserveAspectRatio="none" class="px"/>'
        f'<text x="{width / 2:.0f}" y="{_SIZE + 11}" text-anchor="middle">{peak}</text></svg>'
    )


@lru_cache(maxsize=4)
def _palette(colour_map: str) -> np.ndarray:
    scale = matplotlib.colormaps[colour_map](np.linspace(0, 1, _LEVELS))[:, :3]
    return np.vstack([[0, 0, 0], (scale * 255).round()]).astype(np.uint8)


def palette_png(pixels: np.ndarray, palette: np.ndarray) -> bytes:
    """An indexed PNG (ISO/IEC 15948) whose colour 0 is transparent.

    Parameters
    ----------
    pixels : (ny, nx) uint8 array
        Index into the palette, the top row first.
    palette : (k, 3) uint8 array
        Red, green, blue.
    """

    def chunk(kind: bytes, body: bytes) -> bytes:
        return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))

    ny, nx = pixels.shape
    rows = np.hstack([np.zeros((ny, 1), np.uint8), pixels]).tobytes()
    return (
        b"\x89PNG\r\n\x1a\n"
        + chunk(b"IHDR", struct.pack(">IIBBBBB", nx, ny, 8, 3, 0, 0, 0))
        + chunk(b"PLTE", palette.tobytes())
        + chunk(b"tRNS", b"\x00")
        + chunk(b"IDAT", zlib.compress(rows, 9))
        + chunk(b"IEND", b"")
    )


def _curve(curves: Mapping[str, np.ndarray], term: str, axis: str) -> str:
    if f"{term}_rate_hz" not in curves or axis not in curves:
        return ""
    x = np.asarray(curves[axis], float)
    rate = np.asarray(curves[f"{term}_rate_hz"], float)
    if not np.isfinite(rate).all() or np.ptp(x) == 0:
        return ""
    low = np.asarray(curves.get(f"{term}_rate_low_hz", rate), float)
    high = np.asarray(curves.get(f"{term}_rate_high_hz", rate), float)
    top = min(float(np.nanmax(high)), 2 * float(rate.max())) or 1.0
    across = (x - x[0]) / (x[-1] - x[0]) * _CURVE_WIDTH
    line, upper, lower = (_BOTTOM - np.clip(v / top, 0, 1) * (_BOTTOM - _TOP) for v in (rate, high, low))
    band = _points(np.concatenate([across, across[::-1]]), np.concatenate([upper, lower[::-1]]))
    peak = f"{number(rate.max(), 1)} Hz"
    return (
        f'<svg class="mini {term}" width="{_CURVE_WIDTH}" height="{_SIZE + 13}" role="img" '
        f'aria-label="{term.replace("_", " ")}, peak {peak}">'
        f'<line x1="0" x2="{_CURVE_WIDTH}" y1="{_BOTTOM:.0f}" y2="{_BOTTOM:.0f}"/>'
        f'<polygon points="{band}"/><polyline points="{_points(across, line)}"/>'
        f'<text x="{_CURVE_WIDTH / 2:.0f}" y="{_SIZE + 11}" text-anchor="middle">{peak}</text></svg>'
    )


def _points(x: np.ndarray, y: np.ndarray) -> str:
    return " ".join(f"{a:.0f},{b:.1f}" for a, b in zip(x, y, strict=True))
