"""A profile continued down to the surface by similarity theory, without a jump where they meet.

The surface layer is solved from the air at the lowest *trusted* level itself, so that its profile
passes through that level. Levels below it (a screen on land beside the water, say) give way to
modelled ones; all above stay as measured.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.surface_layer import GRAVITY, SurfaceLayer, surface_profile

__all__ = ["SURFACE_HEIGHTS", "JoinedColumns", "join_surface_layer", "trusted_level"]

#: Heights (m) at which the surface layer is laid out; finest where gradients are steepest.
SURFACE_HEIGHTS = np.array(
    [0.02, 0.05, 0.12, 0.25, 0.5, 0.9, 1.5, 2.3, 3.3, 4.6, 6.3, 8.5, 11.5, 15.5, 21.0, 28.0, 37.0]
)

_TRUSTED_RANGE = (8.0, 60.0)  # m; below is not over water, above is beyond the surface layer
_GAS_CONSTANT_DRY = 287.05287  # J kg⁻¹ K⁻¹, ICAO Doc 7488/3
_NEAREST = 0.9  # modelled levels end at this share of the trusted height


class JoinedColumns(NamedTuple):
    """Columns with the surface layer below: arrays (column, level), NaN where there is no level."""

    height: np.ndarray
    air_pressure: np.ndarray
    air_temperature: np.ndarray
    specific_humidity: np.ndarray


def trusted_level(height: Any) -> np.ndarray:
    """Index of the lowest level that the surface layer may be built on.

    Parameters
    ----------
    height : array_like
        Heights above the surface, m, (column, level); NaN where unusable.

    Returns
    -------
    ndarray of int
        (column,); −1 where no level lies between 8 and 60 m.
    """
    z = np.asarray(height, dtype=float)
    low, high = _TRUSTED_RANGE
    inside = (z >= low) & (z <= high)
    return np.where(inside.any(axis=1), inside.argmax(axis=1), -1)


def join_surface_layer(
    height: np.ndarray,
    air_pressure: np.ndarray,
    air_temperature: np.ndarray,
    specific_humidity: np.ndarray,
    trusted: np.ndarray,
    layer: SurfaceLayer,
) -> JoinedColumns:
    """Put the surface layer under columns.

    Parameters
    ----------
    height, air_pressure, air_temperature, specific_humidity : ndarray
        m, Pa, K, kg/kg; (column, level).
    trusted : ndarray of int
        From `trusted_level`; columns with −1 stay as they are.
    layer : SurfaceLayer
        Solved with the air of the trusted level at its height; columns that did not converge stay
        as they are.

    Returns
    -------
    JoinedColumns
        The modelled levels come first. Pressure is hydrostatic from the trusted level.
    """
    columns, levels = height.shape
    modelled = (trusted >= 0) & layer.converged
    at = (np.arange(columns), np.maximum(trusted, 0))
    z_t, p_t, t_t, q_t = (
        a[at][:, None] for a in (height, air_pressure, air_temperature, specific_humidity)
    )
    z = np.broadcast_to(SURFACE_HEIGHTS, (columns, SURFACE_HEIGHTS.size))
    # Similarity starts at the scalar roughness; below it there is no air profile.
    use = modelled[:, None] & (z < _NEAREST * z_t) & (z > layer.scalar_roughness[:, None])
    with np.errstate(invalid="ignore", divide="ignore"):
        t, q = surface_profile(layer, z)
        # Hydrostatic from the trusted level down, layer by layer with the mean virtual
        # temperature; heights beyond it collapse onto it and add nothing.
        inside = np.where(use, z, z_t)
        warm = np.where(use, t * (1.0 + 0.608 * q), t_t * (1.0 + 0.608 * q_t))
        inside = np.concatenate([inside, z_t], axis=1)
        warm = np.concatenate([warm, t_t * (1.0 + 0.608 * q_t)], axis=1)
        step = np.diff(inside) / (0.5 * (warm[:, 1:] + warm[:, :-1]))
        p = p_t * np.exp(GRAVITY / _GAS_CONSTANT_DRY * np.cumsum(step[:, ::-1], axis=1)[:, ::-1])
    keep = ~modelled[:, None] | (np.arange(levels) >= trusted[:, None])
    pairs = (
        (z, height),
        (p, air_pressure),
        (t, air_temperature),
        (q, specific_humidity),
    )
    return JoinedColumns(
        *(
            np.concatenate([np.where(use, new, np.nan), np.where(keep, old, np.nan)], axis=1)
            for new, old in pairs
        )
    )
