"""Tail probabilities, bounds and published scales: what a p or a ln B may be compared with, never turned into."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import chdtrc, expit, ndtr, ndtri, xlog1py, xlogy

from transit.errors import SettingError

# Scales: (least absolute value of the scale's own quantity, name), strongest first.
_TROTTA = ((5.0, "strong"), (2.5, "moderate"), (1.0, "weak"), (0.0, "inconclusive"))  # ln B
_KASS_RAFTERY = ((10.0, "very strong"), (6.0, "strong"), (2.0, "positive"), (0.0, "bare mention"))  # 2 ln B
_JEFFREYS = (  # log10 B
    (2.0, "decisive"),
    (1.5, "very strong"),
    (1.0, "strong"),
    (0.5, "substantial"),
    (0.0, "bare mention"),
)


# --- tail probabilities ------------------------------------------------------------------------------------------


def normal_deviate(p: ArrayLike) -> np.ndarray | float:
    """Normal deviate whose upper tail has the probability `p` (one-sided).

    Parameters
    ----------
    p : float or ndarray
        Tail probability, 0 to 1; for a two-sided test pass half of its p.

    Returns
    -------
    float or ndarray
        Deviate in standard deviations: negative for p above 0.5, infinite for 0 and 1.

    Raises
    ------
    SettingError
        If a value lies outside 0 to 1.

    Notes
    -----
    The inverse of Q(z) in Abramowitz & Stegun 1964, Handbook of Mathematical Functions, 26.2.3. Only a p becomes a
    deviate in this way; a Bayes factor does not.
    """
    return -ndtri(_probability(p))


def p_from_deviate(z: ArrayLike) -> np.ndarray | float:
    """Probability of the upper tail of the normal distribution beyond `z` (one-sided).

    Parameters
    ----------
    z : float or ndarray
        Deviate in standard deviations.

    Returns
    -------
    float or ndarray
        Abramowitz & Stegun 1964, 26.2.3, accurate to relative rounding far out in the tail.

    Raises
    ------
    SettingError
        If a value is not a number.
    """
    return ndtr(-_number(z, "normal deviate"))


def boundary_p(delta_chi2: ArrayLike) -> np.ndarray | float:
    """Tail probability of a fall in chi-square for one added parameter that cannot be negative.

    Parameters
    ----------
    delta_chi2 : float or ndarray
        Chi-square without the parameter less that with it, 0 or more.

    Returns
    -------
    float or ndarray
        Half the tail of chi-square with one degree of freedom; 1 at zero, where half the noise ends up.

    Raises
    ------
    SettingError
        If a value is negative or not a number.

    Notes
    -----
    Without the feature, delta chi-square is a half and half mixture of zero and chi-square with one degree of freedom:
    Chernoff 1954, Ann. Math. Stat. 25, 573; Self & Liang 1987, J. Am. Stat. Assoc. 82, 605. It does not hold for a
    parameter that exists only with the feature, such as the centre of a band: simulate instead (Protassov et al.
    2002, ApJ 571, 545).
    """
    value = _number(delta_chi2, "fall in chi-square")
    if np.any(value < 0):
        raise SettingError(
            f"A fall in chi-square of {np.min(value):g} is negative, but adding a parameter cannot make the best fit "
            "worse; fit the larger model again from the best point of the smaller."
        )
    return np.where(value > 0, 0.5 * chdtrc(1, value), 1.0)[()]


def trials(p: ArrayLike, n: ArrayLike) -> np.ndarray | float:
    """Probability that at least one of `n` independent looks gives a tail probability of `p` or less.

    Parameters
    ----------
    p : float or ndarray
        Tail probability of one look, 0 to 1.
    n : float or ndarray
        Number of independent looks, 1 or more: everything that was tried, reported or not. It need not be whole:
        looks that depend on each other count as fewer.

    Returns
    -------
    float or ndarray
        1 - (1 - p)^n (Sidak 1967, J. Am. Stat. Assoc. 62, 626), without loss of digits for tiny `p`.

    Raises
    ------
    SettingError
        If a value of `p` lies outside 0 to 1, or one of `n` below 1.
    """
    p, n = _probability(p), _number(n, "number of looks")
    if np.any(n < 1):
        raise SettingError(f"The number of looks is {np.min(n):g}; give 1 or more.")
    return -np.expm1(xlog1py(n, -p))


# --- bounds on Bayes factors ---------------------------------------------------------------------------------------


def sellke_bound(p: ArrayLike) -> np.ndarray | float:
    """Upper bound of the Bayes factor against the null that data with tail probability `p` can give.

    Parameters
    ----------
    p : float or ndarray
        Tail probability under the null, 0 to 1.

    Returns
    -------
    float or ndarray
        -1 / (e p ln p) for p below 1/e, and 1 above, where the bound says only that the null is not disfavoured.

    Raises
    ------
    SettingError
        If a value lies outside 0 to 1.

    Notes
    -----
    Sellke, Bayarri & Berger 2001, Am. Stat. 55, 62, for alternatives under which the density of p falls as a beta
    distribution. It bounds B from p and has no inverse: many p go with one B, depending on the priors, and reading
    it backwards has overstated detections (Kipping & Benneke 2025, arXiv:2506.05392).
    """
    p = _probability(p)
    with np.errstate(divide="ignore"):  # p of zero has no bound: infinity
        bound = -1 / (math.e * np.minimum(xlogy(p, p), 0.0))
    return np.where(p < 1 / math.e, np.abs(bound), 1.0)[()]


def bayes_bound_gaussian(z: ArrayLike) -> np.ndarray | float:
    """Upper bound of the Bayes factor for one Gaussian amplitude `z` standard deviations from zero, any prior.

    Parameters
    ----------
    z : float or ndarray
        Amplitude over its error.

    Returns
    -------
    float or ndarray
        exp(z^2 / 2): all the prior at the measured value (Edwards, Lindman & Savage 1963, Psychol. Rev. 70, 193).
        Infinite beyond the largest number that can be held, z of about 37.

    Raises
    ------
    SettingError
        If a value is not a number.
    """
    with np.errstate(over="ignore"):
        return np.exp(_number(z, "amplitude over its error") ** 2 / 2)


# --- odds ---------------------------------------------------------------------------------------------------------


def posterior_odds_probability(ln_b: ArrayLike, prior_odds: ArrayLike = 1.0) -> np.ndarray | float:
    """Posterior probability of the first of two hypotheses.

    Parameters
    ----------
    ln_b : float or ndarray
        ln Bayes factor of the first against the second.
    prior_odds : float or ndarray
        Odds of the first before the data; even by default, which is a choice.

    Returns
    -------
    float or ndarray
        B O / (1 + B O), if no third hypothesis is possible (Kass & Raftery 1995, J. Am. Stat. Assoc. 90, 773).

    Raises
    ------
    SettingError
        If a value is not a number, or the odds are not above zero.
    """
    odds = _number(prior_odds, "prior odds")
    if np.any(odds <= 0):
        raise SettingError(
            f"Prior odds of {np.min(odds):g} cannot be used; give odds above zero, 1 for even ones."
        )
    return expit(_number(ln_b, "ln B") + np.log(odds))


# --- information criteria -------------------------------------------------------------------------------------------


def bic(chi2: ArrayLike, k: int, n: int) -> np.ndarray | float:
    """Bayesian information criterion, chi2 + k ln n.

    Parameters
    ----------
    chi2 : float or ndarray
        Least chi-square. Where errors are fitted, or differ between the models compared, add ln|C| to it.
    k : int
        Number of free parameters.
    n : int
        Number of bins.

    Returns
    -------
    float or ndarray
        Smaller is better (Schwarz 1978, Ann. Stat. 6, 461). exp of half a difference is only a crude Bayes factor,
        that of a prior as wide as one bin's worth of information.

    Raises
    ------
    SettingError
        If there is no bin, or a number of parameters below zero.
    """
    _counts(k, n, 1)
    return _number(chi2, "chi-square") + k * math.log(n)


def aicc(chi2: ArrayLike, k: int, n: int) -> np.ndarray | float:
    """Akaike's information criterion with its correction for few bins, chi2 + 2k + 2k(k+1)/(n-k-1).

    Parameters
    ----------
    chi2 : float or ndarray
        Least chi-square. Where errors are fitted, or differ between the models compared, add ln|C| to it.
    k : int
        Number of free parameters.
    n : int
        Number of bins, above k + 1.

    Returns
    -------
    float or ndarray
        Smaller is better (Hurvich & Tsai 1989, Biometrika 76, 297).

    Raises
    ------
    SettingError
        If there are too few bins for the correction, or a number of parameters below zero.
    """
    _counts(k, n, k + 2)
    return _number(chi2, "chi-square") + 2 * k + 2 * k * (k + 1) / (n - k - 1)


# --- published scales -----------------------------------------------------------------------------------------------


def trotta_word(ln_b: float) -> str:
    """Name of |ln B| on the scale of Trotta 2008, Contemp. Phys. 49, 71, table 1.

    Parameters
    ----------
    ln_b : float
        ln Bayes factor; its sign tells which hypothesis the evidence is for.

    Returns
    -------
    str
        `inconclusive` below 1, `weak` from 1, `moderate` from 2.5, `strong` from 5.

    Raises
    ------
    SettingError
        If it is not a number.
    """
    return _word(abs(float(_number(ln_b, "ln B"))), _TROTTA)


def kass_raftery_word(ln_b: float) -> str:
    """Name of |ln B| on the scale of Kass & Raftery 1995, J. Am. Stat. Assoc. 90, 773, section 3.2.

    Parameters
    ----------
    ln_b : float
        ln Bayes factor; its sign tells which hypothesis the evidence is for.

    Returns
    -------
    str
        `bare mention` for 2 ln B below 2, `positive` from 2, `strong` from 6, `very strong` from 10.

    Raises
    ------
    SettingError
        If it is not a number.
    """
    return _word(2 * abs(float(_number(ln_b, "ln B"))), _KASS_RAFTERY)


def jeffreys_word(ln_b: float) -> str:
    """Name of |ln B| on the scale of Jeffreys 1961, Theory of Probability, appendix B.

    Parameters
    ----------
    ln_b : float
        ln Bayes factor; its sign tells which hypothesis the evidence is for.

    Returns
    -------
    str
        `bare mention` for log10 B below 1/2, then in steps of a half `substantial`, `strong`, `very strong`, and
        from 2 on `decisive`.

    Raises
    ------
    SettingError
        If it is not a number.
    """
    return _word(abs(float(_number(ln_b, "ln B"))) / math.log(10), _JEFFREYS)


# --- input ----------------------------------------------------------------------------------------------------------


def _word(value: float, scale: Sequence[tuple[float, str]]) -> str:
    return next(name for least, name in scale if value >= least)


def _number(value: ArrayLike, what: str) -> np.ndarray:
    value = np.asarray(value, float)[()]
    if np.any(np.isnan(value)):
        raise SettingError(f"The {what} is not a number; give a number.")
    return value


def _probability(p: ArrayLike) -> np.ndarray:
    p = _number(p, "probability")
    if np.any((p < 0) | (p > 1)):
        worst = np.ravel(p)[np.argmax(np.abs(np.ravel(p) - 0.5))]
        raise SettingError(f"{worst:g} is not a probability; give a value from 0 to 1.")
    return p


def _counts(k: int, n: int, least: int) -> None:
    if k < 0 or n < least:
        raise SettingError(
            f"{n} bins with {k} free parameters were given, but 0 or more parameters and at least {least} bins are "
            "needed; use more bins or fewer parameters."
        )
