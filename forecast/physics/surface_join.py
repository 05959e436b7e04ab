"""A profile continued down to the surface by similarity theory, without a jump where they meet.

The surface layer is solved from the air at the lowest *trusted* level itself, so that its profile
passes through that level. Levels below it (a screen on land beside the water, say) give way to
modelled ones; all above stay as measured.

Where the layer was solved from air below that level, at the 2 m of a model, its profile need not
pass through the level. From 2 m up the potential temperature and humidity then run from the one
value to the other in the proportions of the layer's own profile, so that nothing in between lies
outside the two: no layer arises that neither has.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np

from forecast.physics.surface_layer import ADIABATIC, GRAVITY, SurfaceLayer, surface_profile
from forecast.schema import LEVEL_ORIGINS

__all__ = ["SURFACE_HEIGHTS", "JoinedColumns", "join_surface_layer", "trusted_level"]

_COARSE = np.array(
    [0.02, 0.05, 0.12, 0.25, 0.5, 0.9, 1.4, 2.0, 3.0, 4.4, 6.2, 8.5, 11.5, 15.5, 21.0, 28.0, 37.0,
     50.0, 67.0, 90.0]
)  # fmt: skip

#: Heights (m) at which the surface layer is laid out; finest where gradients are steepest, and
#: 2 m, where models give the air, among them. Half as many under 21 m would cost 2 to 3 m of the
#: height that light clears over cold water.
SURFACE_HEIGHTS = np.sort(np.concatenate([_COARSE, np.sqrt(_COARSE[1:15] * _COARSE[:14])]))

_TRUSTED_RANGE = (8.0, 60.0)  # m; below is not over water, above is beyond the surface layer
_HIGHEST_WITH_SCREEN = 100.0  # m; with air at 2 m the gap above may be wider
_GAS_CONSTANT_DRY = 287.05287  # J kg⁻¹ K⁻¹, ICAO Doc 7488/3
_NEAREST = 0.9  # modelled levels end at this share of the trusted height


class JoinedColumns(NamedTuple):
    """Columns with the surface layer below: arrays (column, level), NaN where there is no level.

    ``origin``: code of `forecast.schema.LEVEL_ORIGINS`, −1 where there is no level.
    """

    height: np.ndarray
    air_pressure: np.ndarray
    air_temperature: np.ndarray
    specific_humidity: np.ndarray
    origin: np.ndarray


def trusted_level(height: Any, with_screen: Any = False) -> np.ndarray:
    """Index of the lowest level that the surface layer may be joined to.

    Parameters
    ----------
    height : array_like
        Heights above the surface, m, (column, level); NaN where unusable.
    with_screen : array_like of bool, optional
        (column,) whether air temperature and humidity at 2 m are known.

    Returns
    -------
    ndarray of int
        (column,); −1 where no level lies between 8 and 60 m, 100 m with a screen.
    """
    z = np.asarray(height, dtype=float)
    low, high = _TRUSTED_RANGE
    top = np.where(np.asarray(with_screen, dtype=bool), _HIGHEST_WITH_SCREEN, high)
    inside = (z >= low) & (z <= top[..., None])
    return np.where(inside.any(axis=1), inside.argmax(axis=1), -1)


def join_surface_layer(
    height: np.ndarray,
    air_pressure: np.ndarray,
    air_temperature: np.ndarray,
    specific_humidity: np.ndarray,
    trusted: np.ndarray,
    layer: SurfaceLayer,
    solved_at: Any = np.nan,
) -> JoinedColumns:
    """Put the surface layer under columns.

    Parameters
    ----------
    height, air_pressure, air_temperature, specific_humidity : ndarray
        m, Pa, K, kg/kg; (column, level).
    trusted : ndarray of int
        From `trusted_level`; columns with −1 stay as they are.
    layer : SurfaceLayer
        Solved with the air at `solved_at`; columns that did not converge stay as they are.
    solved_at : array_like, optional
        Height of the air that the layer was solved from, m; NaN for that of the trusted level.

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
    z_s = np.broadcast_to(np.asarray(solved_at, dtype=float), (columns,))[:, None]
    above = z > np.where(np.isnan(z_s), np.inf, z_s)
    with np.errstate(invalid="ignore", divide="ignore"):
        t, q = surface_profile(layer, z)
        if above.any():
            t, q = _stretch(layer, z, z_s, z_t, (t, q), (t_t, q_t), above)
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
    states = (
        np.concatenate([np.where(use, new, np.nan), np.where(keep, old, np.nan)], axis=1)
        for new, old in pairs
    )
    made = np.where(above, LEVEL_ORIGINS["interpolated"], LEVEL_ORIGINS["modelled_surface_layer"])
    known = keep & np.isfinite(height)
    origin = np.concatenate(
        [np.where(use, made, -1), np.where(known, LEVEL_ORIGINS["measured"], -1)], axis=1
    )
    return JoinedColumns._make([*states, origin.astype(np.int8)])


def _stretch(
    layer: SurfaceLayer,
    z: np.ndarray,
    z_s: np.ndarray,
    z_t: np.ndarray,
    made: tuple[np.ndarray, np.ndarray],
    met: tuple[np.ndarray, np.ndarray],
    above: np.ndarray,
) -> list[np.ndarray]:
    """Profiles that leave the similarity law at `z_s` and meet the trusted air at `z_t`."""
    unit = layer._replace(
        surface_temperature=0.0 * layer.surface_humidity,
        surface_humidity=0.0 * layer.surface_humidity,
        temperature_scale=np.ones_like(layer.temperature_scale),
        humidity_scale=np.ones_like(layer.humidity_scale),
    )
    shape, low, high = (surface_profile(unit, h)[1] for h in (z, z_s, z_t))
    share = np.clip((shape - low) / (high - low), 0.0, 1.0)
    start = surface_profile(layer, z_s)
    out = []
    for law, first, last, lapse in zip(made, start, met, (ADIABATIC, 0.0), strict=True):
        potential = first + lapse * z_s
        between = potential + share * (last + lapse * z_t - potential) - lapse * z
        out.append(np.where(above, between, law))
    return out
