"""How fine and how high the grid of a radio field must be, from the errors that may be made.

The scales are those of the lowest wave over a sphere (Fock 1965; Rec. ITU-R P.526 section 3.1):
with ``g`` the gradient of the modified index, 1.18e-7 1/m in standard air, height
``h = (2 k² g)^{−1/3}``, range ``2 k h²`` and angle ``1 / k h``. The numbers of them taken here are
those at which halving both steps changes the field by less than `STEP_ERROR` wherever it is above
−80 dB re free space, found by trial between 30 MHz and 40 GHz.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from forecast.physics.field_air import average_index
from forecast.physics.rays import Medium

__all__ = [
    "FREQUENCIES",
    "LIGHT_SPEED",
    "STEP_ERROR",
    "FieldSteps",
    "check_steps",
    "choose_steps",
    "field_scales",
]

LIGHT_SPEED = 299792458.0  # m/s, exact

#: Frequencies that the field is made for, Hz.
FREQUENCIES = (30e6, 40e9)

#: Change of the field on halving both steps at the automatic choice, dB, above −80 dB.
STEP_ERROR = 0.1

#: Gradient of the modified index in standard air, 1/m (118 M-units per km).
STANDARD_INDEX_GRADIENT = 1.18e-7

_CLEAR_HEIGHTS = 60.0  # scale heights free of absorption at least
_ABSORBING_HEIGHTS = 100.0  # scale heights of the absorber: with 50, −100 dB come back
_ANGLE_MARGIN = 3.25  # Nyquist angle over the steepest angle wanted
_IMPEDANCE_MARGIN = 4.0
_SCALE_ANGLES = 8.0
_RANGE_SHARE = 1.0 / 60.0  # range step over the scale range
_DUCT_PHASE = 1.0  # k θ² Δx of a ray at the critical angle of the strongest duct, rad
_GRATING = 0.75  # of the Nyquist angle; waves above are filtered out
_MOST_GRATING = 40.0  # scale angles: the grating is weak beyond
_MOST_POINTS = 2**20


class FieldSteps(NamedTuple):
    """Grid of a field; all lengths in m.

    ``height_step`` is λ / (2 sin θ) with θ the steepest angle that the grid can hold; the field is
    launched evenly up to ``max_angle`` (rad) and fades out towards half of θ. ``points`` heights
    reach to the top; waves are absorbed above ``clear_height``; without ``absorber`` the top is a
    mirror.
    """

    range_step: float
    height_step: float
    points: int
    clear_height: float
    max_angle: float
    absorber: bool = True

    @property
    def top(self) -> float:
        """Height of the top, m."""
        return self.height_step * (self.points + 1)


class Needs(NamedTuple):
    """What a path asks of the grid: heights and lengths (m), angle (rad)."""

    range_step: float
    height_step: float
    clear_height: float
    absorber_depth: float
    max_angle: float


def field_scales(frequency: float, gradient: float = STANDARD_INDEX_GRADIENT) -> tuple[float, ...]:
    """Scale height (m), range (m) and angle (rad) of the lowest wave over a sphere.

    Parameters
    ----------
    frequency : float
        Hz.
    gradient : float
        Gradient of the modified index, 1/m.

    Returns
    -------
    tuple of float
        Height, range, angle.
    """
    k = 2.0 * np.pi * frequency / LIGHT_SPEED
    height = (2.0 * k * k * gradient) ** (-1.0 / 3.0)
    return height, 2.0 * k * height**2, 1.0 / (k * height)


def duct_scales(medium: Medium, frequency: float) -> tuple[float, float]:
    """Height up to which rays can be turned back, m, and the steepest critical angle, rad.

    Parameters
    ----------
    medium : Medium
        Air.
    frequency : float
        Hz; what is thinner than a quarter of the scale height is not felt by the wave.

    Returns
    -------
    tuple of float
        Top of the highest trapping layer, and ``√(2 Δm)`` of the greatest fall of the modified
        index from somewhere below; zeros without a trapping layer.
    """
    # Less than a hundredth of an M-unit turns back nothing that a grid could tell.
    valid = np.arange(medium.mu.shape[1] - 1) < medium.count[:, None] - 1
    falls = valid & (np.diff(np.nan_to_num(medium.mu)) < -2e-8)
    if not np.any(falls):
        return 0.0, 0.0
    top = float(np.max(np.where(falls, medium.z[:, 1:], 0.0)))
    cell = max(0.25 * field_scales(frequency)[0], top / 20000.0)
    index = average_index(medium, cell, int(top / cell) + 3)
    fall = np.maximum.accumulate(index, axis=-1) - index
    return top, float(np.sqrt(2.0 * np.max(fall)))


def find_needs(
    frequency: float,
    antenna_height: float,
    receiver_heights: np.ndarray,
    ranges: np.ndarray,
    duct_top: float,
    duct_angle: float,
    slope: float = 0.0,
    spacing: float = np.inf,
    impedance: bool = False,
    edges: bool = False,
) -> Needs:
    """Steps at which the limits of the module are met.

    Parameters
    ----------
    frequency : float
        Hz.
    antenna_height, receiver_heights, ranges : float, ndarray, ndarray
        m; heights above the lowest ground.
    duct_top, duct_angle : float
        Of `duct_scales`.
    slope, spacing : float
        Of terrain: greatest change of slope, m per m, and distance between its points, m.
    impedance : bool
        Whether the surface is one, whose image of a wave is good to a third of Nyquist's angle.
    edges : bool
        Whether screens stand in the way, whose tops are known to a part of a height step only.

    Returns
    -------
    Needs
    """
    wavelength = LIGHT_SPEED / frequency
    scale, scale_range, scale_angle = field_scales(frequency)
    highest = max(antenna_height, float(receiver_heights.max()), duct_top)
    # The first Fresnel zone of the longest path must stay clear as well.
    clear = max(highest + 0.5 * _CLEAR_HEIGHTS * scale, _CLEAR_HEIGHTS * scale)
    clear = max(clear, highest + np.sqrt(wavelength * ranges.max()))
    absorber = max(_ABSORBING_HEIGHTS * scale, 0.5 * clear)
    top = clear + absorber
    near = float(ranges.min())
    # Straight, by the ground, or by the highest trapping layer.
    climb = antenna_height + float(receiver_heights.max()) + 2.0 * duct_top
    steep = np.arctan2(climb, near)
    angle = max(
        float(steep) + 2.0 * min(np.sqrt(wavelength / near), 0.1),
        _SCALE_ANGLES * scale_angle,
        0.5 * np.sqrt(2.0 * STANDARD_INDEX_GRADIENT * top) + duct_angle,
        2.0 * duct_angle,
        duct_angle + 2.0 * slope + 4.0 * scale_angle,
    )
    angle = min(angle, 0.5)
    step = min(scale_range * _RANGE_SHARE, spacing)
    margin = _IMPEDANCE_MARGIN if impedance else _ANGLE_MARGIN
    nyquist = min(np.sin(min(margin * angle, 0.5 * np.pi)), 0.95)
    if duct_angle > 0.0:
        step = min(step, _DUCT_PHASE * wavelength / (2.0 * np.pi * duct_angle**2))
        # Steps are a grating, which leads waves out of a duct at √(2λ/Δx): beyond those kept.
        grating = min(_GRATING * nyquist, _MOST_GRATING * scale_angle)
        step = min(step, 2.0 * wavelength / grating**2)
    if edges:
        nyquist = min(2.0 * nyquist, 0.95)
    return Needs(step, wavelength / (2.0 * nyquist), clear, absorber, angle)


def choose_steps(needs: Needs, distance: float) -> FieldSteps:
    """Grid that meets the needs in as few points and steps as transforms allow.

    Parameters
    ----------
    needs : Needs
    distance : float
        Length of the path, m.

    Returns
    -------
    FieldSteps

    Raises
    ------
    ValueError
        If more than a million heights would be needed.
    """
    from scipy.fft import next_fast_len

    top = needs.clear_height + needs.absorber_depth
    count = int(np.ceil(top / needs.height_step))
    if count > _MOST_POINTS:
        raise ValueError(
            f"choose_steps: {count} heights of {needs.height_step:.3g} m needed; ask for receivers "
            "lower or farther away"
        )
    points = next_fast_len(count) - 1
    steps = int(np.ceil(distance / needs.range_step))
    return FieldSteps(
        distance / steps, needs.height_step, points, needs.clear_height, needs.max_angle
    )


def check_steps(steps: FieldSteps, needs: Needs, highest: float) -> None:
    """Refuse a grid that is coarser than its own limits allow.

    Range and height steps may be up to twice those of `find_needs`: there the error is some four
    times `STEP_ERROR`, as it falls with the square of both.

    Parameters
    ----------
    steps : FieldSteps
    needs : Needs
    highest : float
        Highest antenna, m.

    Raises
    ------
    ValueError
        With the value needed.
    """
    if not highest < steps.top:
        raise ValueError(
            f"propagate: antenna at {highest:.6g} m is above the domain, which ends at "
            f"{steps.top:.6g} m; {needs.clear_height + needs.absorber_depth:.6g} m needed"
        )
    most = 2.0 * needs.range_step
    if not 0.0 < steps.range_step <= most * (1.0 + 1e-9):
        raise ValueError(
            f"propagate: range step {steps.range_step:.4g} m too coarse; at most {most:.4g} m"
        )
    most = 1.6 * needs.height_step
    if not 0.0 < steps.height_step <= most * (1.0 + 1e-9):
        raise ValueError(
            f"propagate: height step {steps.height_step:.4g} m too coarse; at most {most:.4g} m"
        )
