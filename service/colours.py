"""Colour scales of our own: even steps of lightness, told apart by people who confuse red and green.

Both are made in CIE L*C*h (D65), where equal steps of L* look equally far apart, and turned into sRGB. The diverging
scale goes from blue through a near-white to orange brown, equally dark at both ends, so that a
value and its negative weigh the same; the sequential one goes from near-white to a dark blue green.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import numpy.typing as npt
from matplotlib.colors import ListedColormap

Array = npt.NDArray[np.float64]

N_HALF = 128  # colours on each side of the neutral one: more steps than the eye tells apart
NEUTRAL_LIGHTNESS, END_LIGHTNESS = 96.0, 34.0
BLUE_DEG, BROWN_DEG = 280.0, 52.0
END_CHROMA = 44.0  # the most that both hues hold at every lightness without leaving sRGB

# White point D65 and the matrix from CIE XYZ to linear sRGB (IEC 61966-2-1).
_WHITE = np.array([0.95047, 1.0, 1.08883])
_FROM_XYZ = np.array([[3.2406, -1.5372, -0.4986], [-0.9689, 1.8758, 0.0415], [0.0557, -0.2040, 1.0570]])


def srgb(lightness: Array, chroma: Array, hue_deg: Array) -> Array:
    """Return sRGB (n, 3) in [0, 1] of CIE L*C*h; what lies outside is clipped."""
    fy = (lightness + 16.0) / 116.0
    a, b = chroma * np.cos(np.radians(hue_deg)), chroma * np.sin(np.radians(hue_deg))
    f = np.stack([fy + a / 500.0, fy, fy - b / 200.0], axis=1)
    xyz = _WHITE * np.where(f > 6 / 29, f**3, 3 * (6 / 29) ** 2 * (f - 4 / 29))
    linear = np.clip(xyz @ _FROM_XYZ.T, 0.0, 1.0)
    coded: Array = np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)
    return coded


@cache
def diverging() -> ListedColormap:
    """The scale for quantities with a sign: the middle colour is neutral and stands for zero."""
    part = np.linspace(-1.0, 1.0, 2 * N_HALF + 1)
    lightness = NEUTRAL_LIGHTNESS + (END_LIGHTNESS - NEUTRAL_LIGHTNESS) * np.abs(part)
    chroma = END_CHROMA * np.sin(np.pi / 2 * np.minimum(1.0, 1.4 * np.abs(part)))
    hue = np.where(part < 0, BLUE_DEG, BROWN_DEG)
    return ListedColormap(srgb(lightness, chroma, hue), name="blue-brown", bad="#9a9a9a")


@cache
def sequential() -> ListedColormap:
    """The scale for quantities without a natural zero in the middle: light is small, dark is large."""
    part = np.linspace(0.0, 1.0, 2 * N_HALF + 1)
    lightness = NEUTRAL_LIGHTNESS + (22.0 - NEUTRAL_LIGHTNESS) * part
    chroma = 28.0 * np.sin(np.pi * (0.1 + 0.75 * part)) * np.minimum(1.0, 4 * part)
    return ListedColormap(srgb(lightness, chroma, 130.0 + 120.0 * part), name="green-blue", bad="#9a9a9a")
