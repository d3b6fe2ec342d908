"""Tuning functions of the simulated units: what each unit truly encodes, as a relative rate."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

PositionGain = Callable[[np.ndarray, np.ndarray], np.ndarray]
CircleGain = Callable[[np.ndarray], np.ndarray]


@dataclass(frozen=True)
class Tuning:
    """The parts of a unit's relative rate; None for a variable that the unit ignores.

    `sharpen_with_speed` raises position and direction gains to a power that grows with running speed.
    """

    position: PositionGain | None = None
    head_direction: CircleGain | None = None
    speed: CircleGain | None = None
    sharpen_with_speed: bool = False


def position_gain(shape: str, side_m: float, rng: np.random.Generator) -> PositionGain:
    """Draw one spatial tuning of a shape: single_field, periodic, wall or irregular; values in (0, 1]."""
    draw = {"single_field": _single_field, "periodic": _periodic, "wall": _wall, "irregular": _irregular}[
        shape
    ]
    return draw(side_m, rng)


def _single_field(side_m: float, rng: np.random.Generator) -> PositionGain:
    centre_x, centre_y = rng.uniform(0.15 * side_m, 0.85 * side_m, 2)
    width_m = rng.uniform(0.11, 0.16)
    floor = rng.uniform(0.03, 0.20)

    def gain(x: np.ndarray, y: np.ndarray) -> np.ndarray:
        return floor + (1 - floor) * np.exp(-((x - centre_x) ** 2 + (y - centre_y) ** 2) / (2 * width_m**2))

    return gain


def _periodic(side_m: float, rng: np.random.Generator) -> PositionGain:
    """Three plane waves 60 degrees apart: fields on a hexagonal lattice."""
    spacing_m = rng.uniform(0.34, 0.48)
    turn = rng.uniform(0, math.pi / 3)
    shift_x, shift_y = rng.uniform(0, side_m, 2)
    contrast = rng.uniform(1.6, 2.8)
    wave = 4 * math.pi / (math.sqrt(3) * spacing_m)

    def gain(x: np.ndarray, y: np.ndarray) -> np.ndarray:
        waves = 0.0
        for angle in (turn, turn + math.pi / 3, turn + 2 * math.pi / 3):
            along = (x - shift_x) * math.cos(angle) + (y - shift_y) * math.sin(angle)
            waves = waves + np.cos(wave * along)
        return np.exp(contrast * (waves - 3) / 3)

    return gain


def _wall(side_m: float, rng: np.random.Generator) -> PositionGain:
    """Active along one wall or along two that meet."""
    first = int(rng.integers(4))
    walls = [first] if rng.random() < 0.6 else [first, (first + 1) % 4]
    reach_m = rng.uniform(0.09, 0.14)
    floor = rng.uniform(0.04, 0.25)

    def gain(x: np.ndarray, y: np.ndarray) -> np.ndarray:
        distance = (x, y, side_m - x, side_m - y)
        nearest = np.minimum.reduce([np.maximum(distance[wall], 0.0) for wall in walls])
        return floor + (1 - floor) * np.exp(-0.5 * (nearest / reach_m) ** 2)

    return gain


def _irregular(side_m: float, rng: np.random.Generator) -> PositionGain:
    """A smooth random surface: many plane waves of random direction, the wave numbers Gaussian."""
    count, scale_m, contrast = 40, rng.uniform(0.15, 0.20), rng.uniform(0.6, 1.1)
    wave_x, wave_y = rng.standard_normal((2, count)) / scale_m
    phase = rng.uniform(0, 2 * math.pi, count)
    height = math.sqrt(2 / count)

    def surface(x: np.ndarray, y: np.ndarray) -> np.ndarray:
        total = np.zeros(np.shape(x))
        for kx, ky, shift in zip(wave_x, wave_y, phase, strict=True):
            total += np.cos(kx * x + ky * y + shift)
        return contrast * height * total

    grid = np.linspace(0, side_m, 45)
    highest = surface(*np.meshgrid(grid, grid)).max()
    return lambda x, y: np.exp(np.minimum(surface(x, y) - highest, 0.0))


def head_direction_gain(rng: np.random.Generator) -> CircleGain:
    """One preferred direction, a von Mises bump over a floor; values in (0, 1]."""
    preferred = rng.uniform(0, 2 * math.pi)
    concentration = rng.uniform(1.2, 4.5)
    floor = rng.uniform(0.04, 0.35)
    return lambda angle: floor + (1 - floor) * np.exp(concentration * (np.cos(angle - preferred) - 1))


def speed_gain(shape: str, rng: np.random.Generator) -> CircleGain:
    """One speed tuning over 0 to 60 cm/s: rising, falling or non_monotonic; values in (0, 1]."""
    floor = rng.uniform(0.20, 0.42)
    if shape == "non_monotonic":
        best, width = rng.uniform(13, 18), rng.uniform(5.5, 7.5)
        return lambda speed: floor + (1 - floor) * np.exp(-0.5 * ((speed - best) / width) ** 2)
    scale = rng.uniform(14, 22)
    if shape == "rising":
        return lambda speed: floor + (1 - floor) * (1 - np.exp(-speed / scale))
    return lambda speed: floor + (1 - floor) * np.exp(-speed / scale)


def sharpening(speed_cm_s: np.ndarray) -> np.ndarray:
    """Power on position and direction gains: weak tuning at rest, strong tuning at full run."""
    return 0.35 + 1.15 * np.clip(speed_cm_s / 35.0, 0.0, 1.0)
