"""Which wavelength stands for a named photometric band."""

from __future__ import annotations

__all__ = ["PHOTOMETRIC_BANDS"]

#: Wavelength in vacuum (m) that stands for a band. Johnson–Cousins U to I and J, H: effective
#: wavelengths, Binney & Merrifield 1998, Galactic Astronomy, table 2.1 (from memory). ``photopic``
#: and ``scotopic``: where the eye by day and by night sees best, ISO/CIE 23539 (555, 507 nm).
PHOTOMETRIC_BANDS = {
    "U": 365e-9,
    "B": 445e-9,
    "V": 551e-9,
    "R": 658e-9,
    "I": 806e-9,
    "J": 1220e-9,
    "H": 1630e-9,
    "photopic": 555e-9,
    "scotopic": 507e-9,
}
