"""Colours can be told apart by colour-blind eyes and in a grey print."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest

from scheduler.report import palette

COLOURS = (palette.PLAN, palette.EVEN, palette.VOLUME)
# Machado, Oliveira & Fernandes (2009), IEEE TVCG 15(6), severity 1.0, on linear RGB
SIGHT = {
    "full": np.eye(3),
    "no red": [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ],
    "no green": [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.011820, 0.042940, 0.968881],
    ],
    "no blue": [
        [1.255528, -0.076749, -0.178779],
        [-0.078411, 0.930809, 0.147602],
        [0.004733, 0.691367, 0.303900],
    ],
}
XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])


def linear(colour: str) -> np.ndarray:
    part = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255.0
    return np.where(part <= 0.04045, part / 12.92, ((part + 0.055) / 1.055) ** 2.4)


def lab(rgb: np.ndarray) -> np.ndarray:
    x, y, z = np.cbrt(XYZ @ np.clip(rgb, 1e-3, 1.0) / XYZ.sum(axis=1))
    return np.array([116.0 * y - 16.0, 500.0 * (x - y), 200.0 * (y - z)])


@pytest.mark.parametrize("sight", SIGHT)
def test_told_apart_by_every_eye(sight):
    """The three lines are 20 or more apart in CIELAB; 2 is about what an eye can just see."""
    seen = [lab(np.array(SIGHT[sight]) @ linear(colour)) for colour in COLOURS]
    assert all(np.linalg.norm(a - b) > 20.0 for a, b in combinations(seen, 2))


def test_told_apart_in_grey():
    """Lightness alone tells the lines apart, and all of them from white paper."""
    lightness = [lab(linear(colour))[0] for colour in COLOURS]
    assert all(abs(a - b) > 10.0 for a, b in combinations([*lightness, 100.0], 2))


def test_told_apart_without_any_shade():
    """Dashes, marks and hatches are all different."""
    for marks in (
        ("solid", palette.EVEN_DASH, palette.VOLUME_DASH),
        (palette.PLAN_MARK, palette.EVEN_MARK, palette.VOLUME_MARK),
        (palette.FREE, palette.AT_CAP, palette.AUCTION, palette.AUCTION_AT_CAP),
    ):
        assert len(set(marks)) == len(marks)
