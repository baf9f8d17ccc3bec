"""Pictures: the colours stand for what they should, and every kind of grid can be drawn."""

from __future__ import annotations

import io
import struct
import time
from typing import Any

import matplotlib.image
import numpy as np
import numpy.typing as npt
import pytest

from service.colours import diverging, sequential
from service.pictures import DOTS_PER_INCH, MAX_HEIGHT_INCHES, MAX_WIDTH_INCHES, mean_png, mode_png
from streaming.declaration import Grid, NoGrid, RectilinearGrid, ScatteredPoints, UniformGrid

Array = npt.NDArray[np.float64]
RNG = np.random.default_rng(5)

# Deuteranopia as a matrix on linear sRGB: Machado, Oliveira and Fernandes (2009), IEEE TVCG 15, 1291 (from memory).
DEUTERANOPIA = np.array(
    [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
)
# sRGB to CIE XYZ, IEC 61966-2-1.
TO_XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])


def linear(rgb: Array) -> Array:
    return np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)


def lab(linear_rgb: Array) -> Array:
    """CIE L*a*b* (n, 3) by the definition of CIE 15, white point D65."""
    ratio = np.clip(linear_rgb, 0, 1) @ TO_XYZ.T / [0.95047, 1.0, 1.08883]
    f = np.where(ratio > (6 / 29) ** 3, np.cbrt(ratio), ratio / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.stack([116 * f[:, 1] - 16, 500 * (f[:, 0] - f[:, 1]), 200 * (f[:, 1] - f[:, 2])], axis=1)


def colours_of(scale: Any) -> Array:
    return np.asarray(scale.colors, dtype=float)


def pixels(png: bytes) -> Array:
    return np.asarray(matplotlib.image.imread(io.BytesIO(png)))[:, :, :3].astype(float)


def size_of(png: bytes) -> tuple[int, int]:
    """Width and height from the header of a PNG (ISO 15948)."""
    assert png[:8] == b"\x89PNG\r\n\x1a\n"
    width, height = struct.unpack(">II", png[16:24])
    return width, height


@pytest.mark.parametrize(("scale", "total"), [(diverging(), 62.0), (sequential(), 74.0)])
def test_lightness_goes_in_even_steps(scale: Any, total: float) -> None:
    lightness = lab(linear(colours_of(scale)))[:, 0]
    steps = np.abs(np.diff(lightness))
    assert np.ptp(steps) < 0.02 * steps.mean()
    assert np.ptp(lightness) == pytest.approx(total, abs=0.5)


def test_a_value_and_its_negative_weigh_the_same_and_zero_has_no_colour() -> None:
    found = lab(linear(colours_of(diverging())))
    np.testing.assert_allclose(found[:, 0], found[::-1, 0], atol=0.1)
    assert np.abs(found[len(found) // 2, 1:]).max() < 0.5


def test_the_two_signs_differ_for_people_who_do_not_tell_red_from_green() -> None:
    seen = lab(linear(colours_of(diverging())) @ DEUTERANOPIA.T)
    distance = np.linalg.norm(seen - seen[::-1], axis=1)
    assert distance[:96].min() > 20.0  # a quarter of the scale and more; 2 is a difference just noticed
    assert distance[0] > 60.0


def test_zero_is_drawn_in_the_neutral_colour_whatever_the_largest_value() -> None:
    values = np.zeros((30, 60))
    values[:, 50:] = 3.0
    values[:, :5] = -0.5
    picture = pixels(mode_png(values, uniform(30, 60), "mode 1", "m/s"))
    neutral = colours_of(diverging())[128]
    row = picture[picture.shape[0] // 2]
    assert np.abs(row[row.shape[0] // 2] - neutral).max() < 0.01
    blue = row[:, 2] - row[:, 0]
    assert blue.max() > 0.05  # the small negative side is tinted, not saturated
    assert blue.max() < 0.35
    assert blue.min() < -0.3


def uniform(*shape: int) -> UniformGrid:
    return UniformGrid(kind="uniform", shape=list(shape), spacing=[0.01] * len(shape))


SCATTERED = ScatteredPoints(kind="points")
KINDS: dict[str, tuple[Grid, tuple[int, ...], Array | None]] = {
    "line": (uniform(50), (50,), None),
    "plane": (uniform(20, 45), (20, 45), None),
    "tall plane": (uniform(80, 2), (80, 2), None),
    "space": (uniform(6, 9, 12), (6, 9, 12), None),
    "one plane of cells": (uniform(1, 9, 12), (1, 9, 12), None),
    "stretched": (
        RectilinearGrid(kind="rectilinear", axes=[[0, 1, 3, 7], [0.0, 0.1, 0.4, 0.5, 1.0]]),
        (4, 5),
        None,
    ),
    "taps on a line": (SCATTERED, (40,), RNG.uniform(size=(40, 1))),
    "taps in a plane": (SCATTERED, (200,), RNG.uniform(size=(200, 2))),
    "taps in space": (SCATTERED, (500,), RNG.uniform(size=(500, 3))),
    "taps in a row": (SCATTERED, (9,), np.stack([np.arange(9.0), np.zeros(9)], axis=1)),
    "no grid": (NoGrid(), (30,), None),
}


@pytest.mark.parametrize("draw", [mode_png, mean_png])
@pytest.mark.parametrize("kind", list(KINDS))
def test_every_kind_of_grid_gives_a_picture_of_bounded_size(kind: str, draw: Any) -> None:
    grid, shape, positions = KINDS[kind]
    png = draw(RNG.normal(size=shape), grid, "mode 1 of $p_1", "Pa", positions)
    width, height = size_of(png)
    assert width == MAX_WIDTH_INCHES * DOTS_PER_INCH
    assert 300 <= height <= MAX_HEIGHT_INCHES * DOTS_PER_INCH
    assert pixels(png).std() > 0.01


@pytest.mark.parametrize("values", [np.zeros((4, 5)), np.full((4, 5), 7.0), np.full((4, 5), np.nan)])
@pytest.mark.parametrize("draw", [mode_png, mean_png])
def test_fields_without_any_difference_are_drawn(values: Array, draw: Any) -> None:
    assert size_of(draw(values, uniform(4, 5), "still", "m/s"))


def test_a_large_field_is_thinned() -> None:
    values = RNG.normal(size=(3000, 4000)).astype(np.float32)
    begin = time.monotonic()
    png = mode_png(values, uniform(3000, 4000), "large", "m/s")
    assert len(png) < 4_000_000
    assert time.monotonic() - begin < 20.0


def test_what_does_not_fit_is_refused() -> None:
    with pytest.raises(ValueError, match="positions"):
        mode_png(np.zeros(5), SCATTERED, "", "")
    with pytest.raises(ValueError, match=r"\(4, 2\).*5"):
        mode_png(np.zeros(5), SCATTERED, "", "", np.zeros((4, 2)))
    with pytest.raises(ValueError, match="reshape"):
        mode_png(np.zeros(5), uniform(2, 3), "", "")
