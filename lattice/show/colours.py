"""The diverging colour map of the field pictures.

Lightness falls evenly from a near-white centre to both ends, the same on both sides, so that equal
amplitudes of either sign weigh the same, also in grey. The ends are a blue and an orange-red, which readers
with any of the common kinds of colour blindness tell apart (common practice).

References
----------
.. [1] B. Ottosson, "A perceptual color space for image processing", 2020,
   https://bottosson.github.io/posts/oklab (the two matrices, from memory; a test checks white and grey).
.. [2] IEC 61966-2-1:1999 (the sRGB transfer function).
"""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from matplotlib.colors import ListedColormap

Colours = npt.NDArray[np.float64]

LIGHT, DARK = 0.97, 0.40
"""Oklab lightness of the centre and of both ends."""
CHROMA = 0.145
"""Largest chroma, reached at two thirds of the amplitude; more would leave the sRGB colours."""
HUES = (258.0, 40.0)
"""Hue angles in degrees of the negative and the positive end."""

_FROM_LAB = np.array(
    [
        [1.0, 0.3963377774, 0.2158037573],
        [1.0, -0.1055613458, -0.0638541728],
        [1.0, -0.0894841775, -1.2914855480],
    ]
)  # [1]
_TO_LINEAR = np.array(
    [
        [4.0767416621, -3.3077115913, 0.2309699292],
        [-1.2684380046, 2.6097574011, -0.3413193965],
        [-0.0041960863, -0.7034186147, 1.7076147010],
    ]
)  # [1]


@lru_cache(maxsize=1)
def diverging(shades: int = 257) -> ListedColormap:
    """Return the map with an odd number of shades, zero in the middle one."""
    from matplotlib.colors import ListedColormap

    return ListedColormap(list(diverging_colours(shades)), name="lattice-diverging")


def diverging_colours(shades: int = 257) -> Colours:
    """Return the map's sRGB colours, shape (shades, 3), from the negative to the positive end."""
    amplitude = np.linspace(-1.0, 1.0, shades)
    strength = np.abs(amplitude)
    hue = np.radians(np.where(amplitude < 0.0, HUES[0], HUES[1]))
    chroma = CHROMA * np.sin(0.75 * np.pi * strength)
    lightness = LIGHT + (DARK - LIGHT) * strength
    return oklab_to_srgb(np.stack([lightness, chroma * np.cos(hue), chroma * np.sin(hue)], axis=-1))


def oklab_to_srgb(lab: Colours) -> Colours:
    """Convert Oklab colours, last axis (lightness, a, b), to sRGB in 0..1."""
    linear = (lab @ _FROM_LAB.T) ** 3 @ _TO_LINEAR.T
    bounded = np.clip(linear, 0.0, 1.0)
    # [2]: linear below 0.0031308, a power law above.
    srgb: Colours = np.where(bounded <= 0.0031308, 12.92 * bounded, 1.055 * bounded ** (1 / 2.4) - 0.055)
    return srgb
