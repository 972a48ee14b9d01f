"""Units of columns: which spellings are known, what they convert to, and which holds when several speak."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

_WAVELENGTH_SPELLINGS = {
    "um": "um mum micron microns micrometer micrometers micrometre micrometres",
    "nm": "nm nanometer nanometers nanometre nanometres",
    "angstrom": "angstrom angstroms angstroem aa ang a å 0.1nm",
    "m": "m meter meters metre metres",
    "cm-1": "cm-1 cm^-1 cm**-1 1/cm /cm cm^{-1} kayser kaysers wavenumber",
}
_DEPTH_SPELLINGS = {
    "fraction": "fraction frac fractional dimensionless unitless 1",
    "percent": "% percent percentage pct per_cent 10**-2 10^-2 10-2 1e-2 1e-02 0.01",
    "ppm": "ppm parts_per_million 1e-6 1e-06 10^-6 10-6 10**-6",
    "radius-ratio": "radius-ratio rp/rs rp/r* rp/rstar rp/r_star rp/r",
}
_SPELLINGS = {
    spelling.replace("_", " ") if spelling in ("per_cent", "parts_per_million") else spelling: unit
    for group in (_WAVELENGTH_SPELLINGS, _DEPTH_SPELLINGS)
    for unit, spellings in group.items()
    for spelling in spellings.split()
}
_TO_UM = {"um": 1.0, "nm": 1e-3, "angstrom": 1e-4, "m": 1e6}
_TO_FRACTION = {"fraction": 1.0, "percent": 1e-2, "ppm": 1e-6}
WAVENUMBER_UM = 1e4  # wavelength in um times wavenumber in cm-1


def standard_unit(text: str | None) -> str | None:
    """Return the name that the options use for a unit, or None when the spelling is unknown.

    >>> standard_unit("Microns"), standard_unit("%"), standard_unit("mmag")
    ('um', 'percent', None)
    """
    if text is None:
        return None
    plain = " ".join(text.replace("µ", "u").replace("μ", "u").lower().strip(" []()$").split())
    return _SPELLINGS.get(plain.removeprefix("\\"))


def is_unit_text(text: str) -> bool:
    """Tell whether a text is the spelling of a known unit."""
    return standard_unit(text) is not None


@dataclass(frozen=True, slots=True)
class StatedUnit:
    """A unit and where it was stated: by the column's name, the header, the kind of quantity or an option."""

    unit: str
    origin: str


def to_um(values: np.ndarray, unit: str) -> np.ndarray:
    """Convert wavelengths, shape (N,), or wavenumbers in cm-1, to micrometre; signs and NaN are kept."""
    if unit == "cm-1":
        with np.errstate(divide="ignore"):
            return WAVENUMBER_UM / values
    return values * _TO_UM[unit]


def from_um(values_um: np.ndarray, unit: str) -> np.ndarray:
    """Convert wavelengths in micrometre, shape (N,), to another unit, or to wavenumbers in cm-1."""
    return WAVENUMBER_UM / values_um if unit == "cm-1" else values_um / _TO_UM[unit]


def to_fraction(values: np.ndarray, unit: str) -> np.ndarray:
    """Convert depths, shape (N,), to fractions; "radius-ratio" is squared."""
    return values**2 if unit == "radius-ratio" else values * _TO_FRACTION[unit]


def error_to_fraction(errors: np.ndarray, values: np.ndarray, unit: str) -> np.ndarray:
    """Convert errors of depths to fractions; of a ratio k to first order, 2 k err(k).

    Parameters
    ----------
    errors, values : ndarray, shape (N,)
        Errors, and the values they belong to (used for ratios only), in `unit`.
    unit : str
        One of the depth units.

    Returns
    -------
    ndarray, shape (N,)
    """
    return 2.0 * values * errors if unit == "radius-ratio" else errors * _TO_FRACTION[unit]


def half_width_to_um(
    centre: np.ndarray, half: np.ndarray, unit: str, half_unit: str
) -> tuple[np.ndarray, np.ndarray]:
    """Convert centres and half widths to micrometre.

    Parameters
    ----------
    centre, half : ndarray, shape (N,)
        In `unit` and `half_unit`; half widths may be NaN.
    unit, half_unit : str
        Wavelength units; when both are wavenumbers the two edges are converted, and the centre becomes the
        mid-point of the bin in wavelength, since a bin that is symmetric in one is not in the other.

    Returns
    -------
    centre_um, half_um : ndarray, shape (N,)
    """
    centre_um = to_um(centre, unit)
    if half_unit != "cm-1":
        return centre_um, half * _TO_UM[half_unit]
    nu = centre if unit == "cm-1" else WAVENUMBER_UM / centre_um
    with np.errstate(divide="ignore"):
        short, long = WAVENUMBER_UM / (nu + half), WAVENUMBER_UM / (nu - half)
    known = np.isfinite(half)
    centre_um = np.where(known & (unit == "cm-1"), (short + long) / 2, centre_um)
    return centre_um, np.where(known, (long - short) / 2, np.nan)


def format_number(value: float) -> str:
    """Write a number with four significant digits for messages, without an exponent where readable."""
    if value and 1e-3 <= abs(value) < 1e7:
        digits = max(0, 3 - math.floor(math.log10(abs(value))))
        return f"{value:.{digits}f}".rstrip("0").rstrip(".") if digits else f"{value:.0f}"
    return f"{value:.4g}"
