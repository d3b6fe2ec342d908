"""A simulated animal with two tracked points, for the tests of this folder."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter1d

from odograph.recording.model import Arena, Track

SIDE_M = 1.0
APART_M = 0.04


@dataclass
class Animal:
    """True course at the frames and what the camera saw of it (arrays that a test may spoil)."""

    time_s: np.ndarray
    centre_m: np.ndarray
    angle_rad: np.ndarray
    speed_m_s: np.ndarray
    front_m: np.ndarray
    back_m: np.ndarray

    def tracks(self, **confidence):
        """Front and back point as the recording holds them."""
        return tuple(
            Track(name, f"processing/behavior/Position/{name}", self.time_s, xy, confidence.get(name))
            for name, xy in (("front", self.front_m), ("back", self.back_m))
        )

    def exchange(self, rows):
        """Exchange the two points in some frames."""
        self.front_m[rows], self.back_m[rows] = self.back_m[rows].copy(), self.front_m[rows].copy()


def make_animal(seconds=120.0, interval=0.02, noise=0.001, seed=0, rest_s=None):
    """An animal on a smooth course that turns its head to and fro; speeds from about 0 to 50 cm/s.

    `rest_s` is a stretch (start, stop) in which it stands still.
    """
    rng = np.random.default_rng(seed)
    time = np.arange(round(seconds / interval)) * interval
    moving = np.ones(len(time))
    if rest_s is not None:
        moving[(time > rest_s[0]) & (time < rest_s[1])] = 0.0
        moving = gaussian_filter1d(moving, 0.3 / interval)
    pace = np.cumsum(moving * (0.6 + 0.45 * np.cos(0.9 * time))) * interval
    x, y = 0.5 + 0.35 * np.sin(pace), 0.5 + 0.35 * np.sin(0.73 * pace + 0.4)
    heading = np.unwrap(np.arctan2(0.73 * np.cos(0.73 * pace + 0.4), np.cos(pace)))
    angle = gaussian_filter1d(heading, 0.2 / interval) + 0.6 * np.sin(1.7 * time) * moving
    half = 0.5 * APART_M * np.column_stack([np.cos(angle), np.sin(angle)])
    centre = np.column_stack([x, y])
    speed = np.hypot(np.gradient(x, interval), np.gradient(y, interval))
    seen = [centre + side * half + noise * rng.standard_normal(centre.shape) for side in (1, -1)]
    return Animal(time, centre, angle, speed, *seen)


@pytest.fixture
def animal():
    """One animal, fresh for every test."""
    return make_animal()


@pytest.fixture
def build_animal():
    """The builder, for other lengths, rates and noises."""
    return make_animal


@pytest.fixture
def arena():
    """The square it runs in."""
    corners = np.array([[0.0, 0.0], [SIDE_M, 0.0], [SIDE_M, SIDE_M], [0.0, SIDE_M]])
    return Arena(corners, "processing/behavior/arena")
