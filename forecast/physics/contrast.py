"""How far air lets one see: scattering by clean air and haze, fading contrast, lamps at night.

Koschmieder (1924, Beitr. Phys. freien Atmos. 12, 33–53): seen against the horizon sky, a target's
contrast ``C0 = (L_target − L_sky) / L_sky`` fades to ``C0 exp(−τ)`` over optical depth τ, because
the air on the way sends as much light as it takes. A lamp at night follows Allard (1876),
``E = I exp(−τ) / d²`` (both as in WMO-No. 8, Part I, chapter on visibility; from memory).

Clean air sets the limit: Bodhaine, Wood, Dutton & Slusser (1999), J. Atmos. Oceanic Technol. 16,
1854–1861 (from memory). Haze grows with humidity: Hänel (1976), Adv. Geophys. 19, 73–188, in the
one-exponent form ``σ(U) = σ_dry (1 − U)^−γ`` of Kasten (1969), Tellus 21, 631–635 (both from
memory). How much dry haze there is no profile tells: without a visibility the answer is good to a
factor of three at best.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from forecast.physics.compiled import njit, prange
from forecast.physics.refractive_index import OPTICAL_WAVELENGTHS

__all__ = [
    "CONTRAST_THRESHOLD",
    "GROWTH_EXPONENT",
    "HAZE_HUMIDITY",
    "HAZE_SCALE_HEIGHT",
    "REPORT_THRESHOLD",
    "apparent_contrast",
    "contrast_range",
    "extinction_from_visibility",
    "haze_extinction",
    "lamp_illuminance",
    "lamp_range",
    "optical_depth",
    "profile_at",
    "rayleigh_cross_section",
    "rayleigh_extinction",
    "visual_range",
]

#: Contrast at which a large dark target is lost to the eye by day (Koschmieder 1924).
CONTRAST_THRESHOLD = 0.02

#: Contrast behind reported visibilities: meteorological optical range (WMO-No. 8).
REPORT_THRESHOLD = 0.05

#: Exponents γ of growth with humidity: least, usual, most; from continental to sea-salt haze
#: (order of published values, from memory).
GROWTH_EXPONENT = (0.4, 0.55, 0.7)

#: Relative humidity beyond which growth is held: there the form no longer fits, droplets form, and
#: the error of the humidity decides.
HAZE_HUMIDITY = 0.95

#: Height (m) over which haze thins to 1/e (Elterman 1968, AFCRL-68-0153, from memory).
HAZE_SCALE_HEIGHT = 1200.0

_BOLTZMANN = 1.380649e-23  # J/K, exact (SI 2019)
_STANDARD_DENSITY = 2.546899e25  # molecules per m³ at 288.15 K and 1013.25 hPa
_VISIBLE = 550e-9  # m, the wavelength that visibilities are meant for
# Exponent of haze extinction by wavelength against meteorological range (km): Kim, McArthur &
# Korevaar (2001), Proc. SPIE 4214, 26–37, up to 50 km (from memory); fog is grey.
_HAZE_RANGE = (0.5, 1.0, 6.0)
_HAZE_COLOUR = (0.0, 0.5, 1.3)


def rayleigh_cross_section(wavelength: float, co2: float = 420e-6) -> float:
    """Scattering cross-section of a molecule of dry air.

    Parameters
    ----------
    wavelength : float
        Vacuum wavelength, m, 300e-9…1700e-9.
    co2 : float
        Mole fraction of carbon dioxide.

    Returns
    -------
    float
        m².

    Raises
    ------
    ValueError
        If the wavelength lies outside the range.

    References
    ----------
    Bodhaine et al. (1999), numbers from memory: refractive index of Peck & Reeder (1972),
    depolarisation of Bates (1984).
    """
    _check_wavelength("rayleigh_cross_section", wavelength)
    s = (1e-6 / wavelength) ** 2  # µm⁻²
    index = 1.0 + 1e-8 * (8060.51 + 2480990.0 / (132.274 - s) + 17455.7 / (39.32957 - s)) * (
        1.0 + 0.54 * (co2 - 300e-6)
    )
    nitrogen = 1.034 + 3.17e-4 * s
    oxygen = 1.096 + 1.385e-3 * s + 1.448e-4 * s**2
    king = (78.084 * nitrogen + 20.946 * oxygen + 0.934 + 1.15 * 100.0 * co2) / (
        78.084 + 20.946 + 0.934 + 100.0 * co2
    )
    polarisability = (index**2 - 1.0) / (index**2 + 2.0)
    density = wavelength**2 * _STANDARD_DENSITY
    return float(24.0 * np.pi**3 * (polarisability / density) ** 2 * king)


def rayleigh_extinction(pressure: Any, temperature: Any, wavelength: float = _VISIBLE) -> Any:
    """Extinction by clean air: the least there can be.

    Parameters
    ----------
    pressure, temperature : array_like
        Pa, K.
    wavelength : float
        m, 300e-9…1700e-9.

    Returns
    -------
    ndarray or float
        m⁻¹. Vapour is counted as air, under 1 % too much in the tropics; absorption by gases (water
        vapour beyond 700 nm) is not included.

    Raises
    ------
    ValueError
        If the wavelength lies outside the range.
    """
    density = np.asarray(pressure, dtype=float) / (_BOLTZMANN * np.asarray(temperature))
    return rayleigh_cross_section(wavelength) * density


def haze_extinction(relative_humidity: Any, dry: Any, exponent: float = GROWTH_EXPONENT[1]) -> Any:
    """Extinction of haze that has grown with humidity.

    Parameters
    ----------
    relative_humidity : array_like
        Over water (1), 0 or more. Above `HAZE_HUMIDITY`, and in supersaturated
        air, the growth is held: the result is the least that there is, and fog is more.
    dry : array_like
        Extinction of the dry haze, m⁻¹; broadcasts.
    exponent : float
        γ.

    Returns
    -------
    ndarray or float
        m⁻¹; NaN where the humidity is not known.

    Raises
    ------
    ValueError
        If a humidity is negative or above 2, as per cent would be.
    """
    u = np.asarray(relative_humidity, dtype=float)
    if np.any((u < 0.0) | (u > 2.0)):
        raise ValueError(
            "haze_extinction: relative humidity outside 0 to 2; expected a fraction, not per cent"
        )
    return dry * (1.0 - np.minimum(u, HAZE_HUMIDITY)) ** -exponent


def extinction_from_visibility(visibility: Any, clean: Any, wavelength: float = _VISIBLE) -> Any:
    """Extinction by haze, fog and rain behind a reported visibility.

    Parameters
    ----------
    visibility, clean : array_like
        Meteorological optical range, m, above 0; extinction by clean air at 550 nm, m⁻¹, which the
        report includes.
    wavelength : float
        m, 300e-9…1700e-9. Haze is more transparent to longer waves, fog is not.

    Returns
    -------
    ndarray or float
        m⁻¹, 0 where the report says more than clean air allows; NaN where it is missing.

    Raises
    ------
    ValueError
        If a visibility is not above 0, or the wavelength lies outside the range.
    """
    v = np.asarray(visibility, dtype=float)
    if np.any(v <= 0.0):
        raise ValueError(
            f"extinction_from_visibility: visibility {np.nanmin(v):g} m; expected more than 0 m"
        )
    _check_wavelength("extinction_from_visibility", wavelength)
    colour = np.interp(1e-3 * v, _HAZE_RANGE, _HAZE_COLOUR)
    grey = np.maximum(-np.log(REPORT_THRESHOLD) / v - clean, 0.0)
    return grey * (_VISIBLE / wavelength) ** colour


def profile_at(level_height: Any, values: Any, height: Any) -> np.ndarray:
    """Values of profiles at the heights of rays.

    Parameters
    ----------
    level_height, values, height : array_like
        Heights (m) and any quantity of levels, (column, level), those with NaN or without rise
        skipped; heights of the rays, m, (column, step).

    Returns
    -------
    ndarray
        (column, step): linear between levels, the lowest and the highest value beyond them; NaN for
        a column without a level or a height that is not known.

    Raises
    ------
    ValueError
        If the shapes do not fit.
    """
    z, v, at = (np.ascontiguousarray(a, dtype=float) for a in (level_height, values, height))
    if z.ndim != 2 or z.shape != v.shape or at.ndim != 2 or at.shape[0] != z.shape[0]:
        raise ValueError(
            f"profile_at: levels {z.shape} and {v.shape}, heights {at.shape}; expected "
            "(column, level) twice and (column, step)"
        )
    out = np.full(at.shape, np.nan)
    _interpolate(z, v, at, out)
    return out


def optical_depth(extinction: Any, distance: Any) -> np.ndarray:
    """Optical depth along rays.

    Parameters
    ----------
    extinction, distance : array_like
        At the heights that the rays cross, m⁻¹, (..., step); along the surface, m, rising, (step,).

    Returns
    -------
    ndarray
        (...), by the trapezoidal rule. Lengths are those along the surface, short by less than
        0.1 % for sightlines.
    """
    return np.trapezoid(np.asarray(extinction, dtype=float), np.asarray(distance, dtype=float))


def apparent_contrast(inherent: Any, depth: Any) -> Any:
    """Contrast of a target against the horizon sky behind it, as it reaches the observer.

    Parameters
    ----------
    inherent, depth : array_like
        ``(L_target − L_sky) / L_sky``, −1 (black) or more, above 0 for a target brighter than the
        sky; optical depth of the path.

    Returns
    -------
    ndarray or float
        Of the same sign. Against another background than the horizon sky it is not valid.

    Raises
    ------
    ValueError
        If an inherent contrast lies below −1: nothing is darker than black.
    """
    c = np.asarray(inherent, dtype=float)
    if np.any(c < -1.0):
        raise ValueError(f"apparent_contrast: contrast {np.nanmin(c):g}; expected −1 or more")
    return c * np.exp(-np.asarray(depth, dtype=float))


def visual_range(extinction: Any, threshold: float = CONTRAST_THRESHOLD) -> Any:
    """Distance (m) at which a black target fades to the threshold, for an extinction in m⁻¹.

    `REPORT_THRESHOLD` gives the meteorological optical range. Infinite without extinction.
    """
    return contrast_range(-1.0, extinction, threshold)


def contrast_range(inherent: Any, extinction: Any, threshold: float = CONTRAST_THRESHOLD) -> Any:
    """Distance at which a target fades to the threshold contrast.

    Parameters
    ----------
    inherent, extinction : array_like
        As in `apparent_contrast`; m⁻¹.
    threshold : float
        0…1. The usual 0.02 is for targets that look larger than half a degree or so; a smaller one
        is lost earlier.

    Returns
    -------
    ndarray or float
        m, 0 for a target that starts below the threshold.

    Raises
    ------
    ValueError
        If an extinction is negative, or the threshold not between 0 and 1.
    """
    if not 0.0 < threshold < 1.0:
        raise ValueError(f"contrast_range: threshold {threshold:g}; expected between 0 and 1")
    sigma = _extinction("contrast_range", extinction)
    size = np.abs(np.asarray(inherent, dtype=float))
    fades = np.log(np.maximum(size, threshold) / threshold)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(fades <= 0.0, 0.0 * sigma, fades / sigma)


def lamp_illuminance(intensity: Any, depth: Any, distance: Any) -> Any:
    """Illuminance (lx) from a lamp, by Allard's law.

    Parameters
    ----------
    intensity, depth, distance : array_like
        Towards the observer, cd; optical depth of the path; m.

    Raises
    ------
    ValueError
        If a distance is not above 0.
    """
    d = np.asarray(distance, dtype=float)
    if np.any(d <= 0.0):
        raise ValueError(f"lamp_illuminance: distance {np.nanmin(d):g} m; expected more than 0 m")
    return intensity * np.exp(-np.asarray(depth, dtype=float)) / d**2


def lamp_range(intensity: Any, extinction: Any, threshold: Any) -> Any:
    """Distance at which a lamp is lost to the eye.

    Allard's law solved for distance: ``x = (2/σ) W(σ/2 √(I/E))`` with Lambert's function W.

    Parameters
    ----------
    intensity, extinction, threshold : array_like
        Towards the observer, cd; m⁻¹; least illuminance that the eye notices, lx.

    Returns
    -------
    ndarray or float
        m.

    Raises
    ------
    ValueError
        If an extinction is negative or a threshold not above 0.
    """
    from scipy.special import lambertw

    sigma = _extinction("lamp_range", extinction)
    least = np.asarray(threshold, dtype=float)
    if np.any(least <= 0.0):
        raise ValueError(f"lamp_range: threshold {np.nanmin(least):g} lx; expected more than 0 lx")
    vacuum = np.sqrt(np.asarray(intensity, dtype=float) / least)
    depth = 0.5 * sigma * vacuum
    # W(x)/x is 1 − x + … near 0: no division there.
    share = np.where(depth > 1e-9, lambertw(depth).real / np.maximum(depth, 1e-300), 1.0)
    return np.where(np.isfinite(depth), vacuum * share, np.nan)


def _check_wavelength(function: str, wavelength: float) -> None:
    low, high = OPTICAL_WAVELENGTHS
    if not low <= wavelength <= high:
        raise ValueError(
            f"{function}: wavelength {wavelength * 1e9:.0f} nm; the equations hold for "
            f"{low * 1e9:.0f} to {high * 1e9:.0f} nm"
        )


def _extinction(function: str, extinction: Any) -> np.ndarray:
    sigma = np.asarray(extinction, dtype=float)
    if np.any(sigma < 0.0):
        raise ValueError(f"{function}: extinction {np.nanmin(sigma):g} per m; expected 0 or more")
    return sigma


@njit(cache=True, nogil=True, parallel=True)
def _interpolate(z, v, at, out):  # pragma: no cover - compiled
    for c in prange(z.shape[0]):
        heights = np.empty(z.shape[1])
        values = np.empty(z.shape[1])
        count = 0
        last = -np.inf
        for i in range(z.shape[1]):
            if last < z[c, i] < np.inf and np.isfinite(v[c, i]):
                last = z[c, i]
                heights[count] = last
                values[count] = v[c, i]
                count += 1
        if count == 0:
            continue
        for s in range(at.shape[1]):
            h = at[c, s]
            i = np.searchsorted(heights[:count], h)
            if not np.isfinite(h):
                continue
            if i == 0 or i == count:
                out[c, s] = values[min(i, count - 1)]
                continue
            share = (h - heights[i - 1]) / (heights[i] - heights[i - 1])
            out[c, s] = values[i - 1] + share * (values[i] - values[i - 1])
