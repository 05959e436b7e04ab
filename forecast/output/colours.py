"""Colours of the charts: lightness alone tells the story, for grey prints and for any eye."""

from __future__ import annotations

import numpy as np
from matplotlib.colors import ListedColormap

__all__ = [
    "FAINT",
    "GRADIENT_RANGE",
    "INK",
    "INTERVAL",
    "LIGHT",
    "LIKELIHOOD",
    "NO_DATA",
    "gradient_colours",
]

INK = "#1b1b1b"
FAINT = "#5f5f5f"
NO_DATA = "#d2d2d2"
LIKELIHOOD = "#b3430b"  # how likely: outlines and bars
INTERVAL = "#f0b27a"
LIGHT = ("#30343b", "#9aa1ab", "#fbf7e4")  # night, twilight, day

GRADIENT_RANGE = (-150.0, 260.0)  # dM/dz per km; trapping below 0

# Bends of the way through OKLab (lightness, green-red, blue-yellow), by dM/dz per km; standard
# air has 118.
_WAY = (
    (-150.0, (0.22, 0.00, -0.10)),
    (-0.5, (0.42, -0.01, -0.12)),
    (0.5, (0.68, -0.03, -0.06)),
    (118.0, (0.94, -0.01, 0.00)),
    (260.0, (0.985, 0.00, 0.03)),
)


def gradient_colours() -> ListedColormap:
    """Map for dM/dz over `GRADIENT_RANGE`, one colour per unit: dark below 0, light above.

    Returns
    -------
    matplotlib.colors.ListedColormap
        Lighter all the way, in even steps to the eye between trapping, super-refraction and
        standard air, with a leap at 0, where layers begin to trap.

    References
    ----------
    OKLab: Ottosson 2020, "A perceptual color space for image processing" (matrices from memory).
    """
    low, high = GRADIENT_RANGE
    middle = np.arange(low, high) + 0.5
    at = [gradient for gradient, _ in _WAY]
    way = np.array([colour for _, colour in _WAY])
    return ListedColormap(
        _srgb(np.stack([np.interp(middle, at, way[:, i]) for i in range(3)], axis=1))
    )


def _srgb(oklab: np.ndarray) -> np.ndarray:
    """OKLab to sRGB, (colour, 3)."""
    to_cone_roots = np.array(
        [
            [1.0, 0.3963377774, 0.2158037573],
            [1.0, -0.1055613458, -0.0638541728],
            [1.0, -0.0894841775, -1.2914855480],
        ]
    )
    to_linear = np.array(
        [
            [4.0767416621, -3.3077115913, 0.2309699292],
            [-1.2684380046, 2.6097574011, -0.3413193965],
            [-0.0041960863, -0.7034186147, 1.7076147010],
        ]
    )
    linear = np.clip((oklab @ to_cone_roots.T) ** 3 @ to_linear.T, 0.0, 1.0)
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1.0 / 2.4) - 0.055)
