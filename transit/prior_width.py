"""ln B of one Gaussian amplitude in closed form: how much it depends on the width of its prior."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import log_ndtr

from transit.errors import SettingError


def ln_bayes_factor_normal_prior(z: ArrayLike, width: ArrayLike) -> np.ndarray | float:
    """ln B of one Gaussian amplitude against zero, for a normal prior centred on zero.

    Parameters
    ----------
    z : float or ndarray
        Amplitude over its error.
    width : float or ndarray
        Standard deviation of the prior in units of that error, above zero.

    Returns
    -------
    float or ndarray
        -ln(1 + w^2) / 2 + z^2 w^2 / (1 + w^2) / 2: the ratio of N(z; 0, 1 + w^2) to N(z; 0, 1), the two marginal
        densities of the amplitude (Kass & Raftery 1995, J. Am. Stat. Assoc. 90, 773, equation 2).

    Raises
    ------
    SettingError
        If a value is not a number, or a width not above zero.
    """
    z, width = _checked(z, width)
    square = width**2
    return 0.5 * (z**2 * square / (1 + square) - np.log1p(square))


def ln_bayes_factor_uniform_prior(z: ArrayLike, width: ArrayLike) -> np.ndarray | float:
    """ln B of one Gaussian amplitude against zero, for a uniform prior from zero to `width`.

    Parameters
    ----------
    z : float or ndarray
        Amplitude over its error.
    width : float or ndarray
        Upper limit of the prior in units of that error, above zero.

    Returns
    -------
    float or ndarray
        ln[sqrt(2 pi) / w] + z^2 / 2 + ln[Phi(z) - Phi(z - w)]: the likelihood integrated over the prior (Kass &
        Raftery 1995, equation 2).

    Raises
    ------
    SettingError
        If a value is not a number, or a width not above zero.
    """
    z, w = _checked(z, width)
    # Phi(z) - Phi(z - w) is the same with both signs turned: the side where both tails are small keeps its digits.
    flipped = z > w / 2
    upper, lower = np.where(flipped, w - z, z), np.where(flipped, -z, z - w)
    ln_upper = log_ndtr(upper)
    ln_difference = ln_upper + np.log(-np.expm1(log_ndtr(lower) - ln_upper))
    return 0.5 * np.log(2 * np.pi) - np.log(w) + z**2 / 2 + ln_difference


def _checked(z: ArrayLike, width: ArrayLike) -> tuple[np.ndarray, np.ndarray]:
    z, width = np.asarray(z, float)[()], np.asarray(width, float)[()]
    if np.any(np.isnan(z)) or np.any(np.isnan(width)):
        raise SettingError("The amplitude or the width of its prior is not a number; give numbers.")
    if np.any(width <= 0):
        raise SettingError(f"The width of the prior is {np.min(width):g}; give a width above zero.")
    return z, width
