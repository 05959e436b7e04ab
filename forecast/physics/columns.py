"""The labelled face of the physics: datasets in, datasets out, the kernels in between.

Users' scripts and notebooks depend on these names: `refract`, `find_ducts`, `trace_sightlines`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray as xr

from forecast.errors import InputError
from forecast.physics import curvature, ducts, sightline
from forecast.physics.column_batch import analyse_columns, analyse_refractivity
from forecast.physics.earth import euler_radius
from forecast.physics.rays import build_medium
from forecast.physics.refractive_index import optical_refractivity
from forecast.schema import describe

__all__ = ["WAVES", "duct_dataset", "find_ducts", "refract", "trace_sightlines"]

#: Kinds of wave the physics knows.
WAVES = ("radio", "optical")

_NEEDED = ("height", "air_pressure", "air_temperature", "specific_humidity")


def refract(profiles: xr.Dataset, wave: str = "radio", wavelength: float = 550e-9) -> xr.Dataset:
    """Refraction of every profile: N, M, gradients, curvature, k, layer classes.

    Parameters
    ----------
    profiles : xarray.Dataset
        Profiles (profile, level) as `forecast.open_profiles` returns them.
    wave : {"radio", "optical"}
        Radio: Rec. ITU-R P.453-14. Optical: Ciddor (1996) phase index.
    wavelength : float
        Vacuum wavelength of the light, m, 300e-9…1700e-9; radio ignores it.

    Returns
    -------
    xarray.Dataset
        ``refractivity``, ``modified_refractivity``; ``refractivity_gradient`` (N/km),
        ``ray_curvature`` (1/m), ``effective_earth_radius_factor``, ``layer_class`` of the layer
        from each level to the next usable one; ``height``; ``earth_radius`` (profile).

    Raises
    ------
    InputError
        If a variable is missing.
    ValueError
        If `wave` is unknown or the wavelength is outside the equations' range.
    """
    missing = [name for name in _NEEDED if name not in profiles]
    if missing:
        raise InputError(
            f"found {', '.join(map(str, profiles.data_vars)) or 'nothing'}; "
            f"missing {', '.join(missing)}",
            source="refract",
            remedy="pass the dataset that forecast.open_profiles returns",
        )
    if wave not in WAVES:
        raise ValueError(f"refract: wave {wave!r}; choose from {', '.join(WAVES)}")
    z, p, t, q = (
        profiles[name].transpose("profile", "level").values.astype(float) for name in _NEEDED
    )
    radius = euler_radius(profiles["latitude"].values) if "latitude" in profiles else 6371e3
    radius = np.broadcast_to(radius, z.shape[:1]).astype(float)
    if wave == "radio":
        batch = analyse_columns(p, t, q, z, radius)
    else:
        batch = analyse_refractivity(optical_refractivity(p, t, q, wavelength), z, radius)
    gradient = batch.refractivity_gradient
    dims = ("profile", "level")
    data = {
        "height": (dims, z),
        "refractivity": (dims, batch.refractivity),
        "modified_refractivity": (dims, batch.modified_refractivity),
        "refractivity_gradient": (dims, gradient),
        "ray_curvature": (dims, curvature.ray_curvature(gradient, batch.refractivity)),
        "effective_earth_radius_factor": (dims, batch.effective_earth_radius_factor),
        "layer_class": (dims, curvature.classify_layers(gradient, radius[:, None])),
        "earth_radius": ("profile", radius),
    }
    coords = {name: c for name, c in profiles.coords.items() if c.dims == ("profile",)}
    attrs: dict[str, Any] = {"wave": wave}
    if wave == "optical":
        attrs["wavelength"] = wavelength
    return describe(xr.Dataset(data, coords=coords, attrs=attrs))


def find_ducts(refraction: xr.Dataset) -> xr.Dataset:
    """Every duct of every profile, lowest first, padded along ``duct``.

    Parameters
    ----------
    refraction : xarray.Dataset
        From `refract`.

    Returns
    -------
    xarray.Dataset
        Dims (profile, duct): kind, base, top, thickness, strength, … as in
        `forecast.physics.ducts`, whose docstring holds the rule.
    """
    dims = ("profile", "level")
    table = ducts.find_ducts(
        refraction["height"].transpose(*dims).values,
        refraction["modified_refractivity"].transpose(*dims).values,
    )
    return duct_dataset(table, dict(refraction.coords))


def duct_dataset(table: ducts.DuctTable, coords: dict[Any, Any]) -> xr.Dataset:
    """Label a table of ducts.

    Parameters
    ----------
    table : forecast.physics.ducts.DuctTable
        Arrays (profile, duct).
    coords : dict
        Coordinates on ``profile``; others are left out.

    Returns
    -------
    xarray.Dataset
        Dims (profile, duct).
    """
    dims = ("profile", "duct")
    data: dict[str, Any] = {
        "duct_count": ("profile", table.count),
        "duct_kind": (dims, table.kind),
        "duct_base": (dims, table.base),
        "duct_top": (dims, table.top),
        "duct_thickness": (dims, table.thickness),
        "duct_strength": (dims, table.strength),
        "trapping_base": (dims, table.trapping_base),
        "height_of_maximum": (dims, table.height_of_maximum),
        "grazing_angle": (dims, table.grazing_angle),
        "longest_trapped_wavelength": (dims, table.longest_trapped_wavelength),
        "enclosed": (dims, table.enclosed),
    }
    keep = {name: c for name, c in coords.items() if c.dims == ("profile",)}
    return describe(xr.Dataset(data, coords=keep))


def trace_sightlines(
    refraction: xr.Dataset,
    observer_height: Any,
    target_height: Any,
    distance: Any,
    target_base_height: Any = 0.0,
    azimuth: float | None = None,
) -> xr.Dataset:
    """State, hidden height and apparent elevation of sightlines in the air of every profile.

    Parameters
    ----------
    refraction : xarray.Dataset
        From `refract`; its wave decides how the air goes on beyond the profile's ends.
    observer_height, target_height, distance, target_base_height : float or array_like
        Heights above the surface and distance along it, m; scalars or (sightline,).
    azimuth : float, optional
        Azimuth of the path, degrees, for the Earth's radius; the mean radius if not given.

    Returns
    -------
    xarray.Dataset
        ``sightline_state``, ``hidden_height``, ``visible_extent``, ``apparent_elevation``, images
        upright and inverted, ``horizon_elevation`` on (profile, sightline); the visible heights
        as intervals ``visible_bottom`` to ``visible_top`` with a third dimension; for comparison
        on (sightline): hidden height and elevation with
        straight rays and in the standard atmosphere.

    Raises
    ------
    ValueError
        As `forecast.physics.sightline.trace_sightlines`.
    """
    wave = refraction.attrs.get("wave", "radio")
    radius = refraction["earth_radius"].values
    if azimuth is not None and "latitude" in refraction.coords:
        radius = euler_radius(refraction["latitude"].values, azimuth)
    geometry = np.broadcast_arrays(
        *(
            np.atleast_1d(np.asarray(a, dtype=float))
            for a in (observer_height, target_height, distance, target_base_height)
        )
    )
    observer, target, far, base = geometry
    dims = ("profile", "level")
    medium = build_medium(
        refraction["height"].transpose(*dims).values,
        refraction["refractivity"].transpose(*dims).values,
        radius,
        wave,
    )
    table = sightline.trace_sightlines(medium, observer, target, far, base)
    both, line = ("profile", "sightline"), ("sightline",)
    data: dict[str, Any] = {
        "sightline_state": (both, table.state),
        "hidden_height": (both, table.hidden_height),
        "visible_extent": (both, table.visible_extent),
        "apparent_elevation": (both, table.apparent_elevation),
        "upright_images": (both, table.upright_images),
        "inverted_images": (both, table.inverted_images),
        "horizon_elevation": (both, table.horizon_elevation),
        "visible_bottom": ((*both, "interval"), table.visible_bottom),
        "visible_top": ((*both, "interval"), table.visible_top),
        "observer_height": (line, observer),
        "target_height": (line, target),
        "target_base_height": (line, base),
        "distance": (line, far),
    }
    mean_radius = float(np.mean(radius)) if np.size(radius) else 6371e3
    for label, kind in (("straight", "straight"), ("standard", wave)):
        air = sightline.standard_medium(kind, mean_radius)
        alone = sightline.trace_sightlines(air, observer, target, far, base)
        data[f"hidden_height_{label}"] = (line, alone.hidden_height[0])
        data[f"apparent_elevation_{label}"] = (line, alone.apparent_elevation[0])
    coords = {name: c for name, c in refraction.coords.items() if c.dims == ("profile",)}
    return describe(xr.Dataset(data, coords=coords))
