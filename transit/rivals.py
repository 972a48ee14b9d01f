"""Rivals in closed form: a bad bin, steps and a bump, each a template of free amplitude on a base hypothesis."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.special import logsumexp, ndtri

from transit.bumps import find_bump
from transit.errors import SettingError
from transit.linearised import LinearBase
from transit.records import DepthSpectrum, Interval, step_name
from transit.units import PPM

# Probabilities at which the posterior of an amplitude is written down: an odd number, so that the median is one.
NODES = (np.arange(401) + 0.5) / 401


@dataclass(frozen=True, eq=False)
class Spread:
    """Posterior of one parameter: values and weights, both of shape (K,), and their unit."""

    values: np.ndarray
    weights: np.ndarray
    unit: str

    def interval(self) -> Interval:
        """Median with the 16 and 84 per cent points: the first values at which these shares are reached."""
        order = np.argsort(self.values, kind="stable")
        reached = np.cumsum(self.weights[order])
        places = np.searchsorted(reached, np.array([0.5, 0.16, 0.84]) * reached[-1])
        return Interval(*(float(value) for value in self.values[order][places]), self.unit)


class _WithSpreads:
    """What rivals on one base and on several have in common."""

    spreads: dict[str, Spread]

    @property
    def parameters(self) -> dict[str, Interval]:
        """Medians and 68 per cent intervals."""
        return {name: spread.interval() for name, spread in self.spreads.items()}

    def outside_share(self, bands_um: Sequence[tuple[float, float]]) -> float:
        """Posterior probability that the place lies outside all of the given bands (lower, upper; micrometre)."""
        place = self.spreads["wavelength_um"]
        inside = np.zeros(len(place.values), bool)
        for low, high in bands_um:
            inside |= (place.values >= low) & (place.values <= high)
        return float(place.weights[~inside].sum() / place.weights.sum())


@dataclass(frozen=True, eq=False)
class Found(_WithSpreads):
    """A rival on one base.

    Parameters
    ----------
    ln_bayes_factor : float
        Over the base.
    phrase : str
        Names it in a sentence.
    spreads : dict of Spread
        Posterior of each parameter.
    depth : ndarray, shape (N,)
        Best model, fraction; what the base may do besides (its level, say) stays as it is without the rival.
    chi2 : float
        Of the best model, everything that the base may do refitted.
    """

    ln_bayes_factor: float
    phrase: str
    spreads: dict[str, Spread]
    depth: np.ndarray
    chi2: float


@dataclass(frozen=True, eq=False)
class OnBases(_WithSpreads):
    """A rival averaged over several bases, each equally likely beforehand.

    `ln_evidence` is in the units of the bases' own; `by_base` holds what was found on each; `spreads` are those of
    the mixture, weighted by evidence; the rest is that of the base with the highest evidence.
    """

    ln_evidence: float
    by_base: tuple[Found, ...]
    phrase: str
    spreads: dict[str, Spread]
    depth: np.ndarray
    chi2: float


# --- amplitudes ---------------------------------------------------------------------------------------------


def ln_gain_normal(along: np.ndarray, square: np.ndarray, sd: float) -> np.ndarray:
    """ln Bayes factor of a template of normal amplitude over none.

    Parameters
    ----------
    along : ndarray, shape (..., K)
        Products g.y of whitened templates (per unit amplitude) with the whitened data.
    square : ndarray, shape (K,)
        Products g.g.
    sd : float
        Standard deviation of the amplitude's normal prior.

    Returns
    -------
    ndarray, shape (..., K)
        -ln(1 + s^2 g.g) / 2 + s^2 (g.y)^2 / (1 + s^2 g.g) / 2: a Gaussian integral (Kass & Raftery 1995, J. Am. Stat.
        Assoc. 90, 773, equation 2).
    """
    growth = 1 + sd**2 * square
    return 0.5 * (sd**2 * along**2 / growth - np.log(growth))


def ln_gain_joint(along: np.ndarray, products: np.ndarray, sd: float) -> np.ndarray:
    """ln Bayes factor of several templates at once, each of normal amplitude, over none.

    Parameters
    ----------
    along : ndarray, shape (..., K)
        Products b = G y of the whitened templates with the whitened data.
    products : ndarray, shape (K, K)
        G G^T.
    sd : float
        Standard deviation of each amplitude's normal prior.

    Returns
    -------
    ndarray, shape (...)
        -ln|1 + s^2 G G^T| / 2 + s^2 b^T (1 + s^2 G G^T)^-1 b / 2: `ln_gain_normal` in several dimensions.
    """
    growth = np.eye(len(products)) + sd**2 * products
    solved = np.linalg.solve(growth, along[..., None])[..., 0]
    return 0.5 * (sd**2 * np.sum(along * solved, axis=-1) - np.linalg.slogdet(growth)[1])


def _normal_spread(mean: float, sd: float) -> Spread:
    """Normal posterior of an amplitude in ppm, of a mean and standard deviation as fractions."""
    return Spread((mean + sd * ndtri(NODES)) / PPM, np.full(len(NODES), 1 / len(NODES)), "ppm")


# --- rivals -------------------------------------------------------------------------------------------------


def one_bin_rival(base: LinearBase, spectrum: DepthSpectrum, depth: np.ndarray, sd_ppm: float) -> Found:
    """One bin, any of them, is off by a normal amount.

    Parameters
    ----------
    base : LinearBase
    spectrum : DepthSpectrum
    depth : ndarray, shape (N,)
        Observed, fraction.
    sd_ppm : float
        Standard deviation of the error's prior.

    Returns
    -------
    Found
    """
    data = base.whiten(depth)
    # A bin alone is a column of the transform.
    along, square = data @ base.transform, np.sum(base.transform**2, axis=0)
    sd = sd_ppm * PPM
    gains = ln_gain_normal(along, square, sd)
    shares = np.exp(gains - logsumexp(gains))
    error = 1 / np.sqrt(square + 1 / sd**2)
    amplitude = along * error**2
    best = int(np.argmax(gains))
    added = np.zeros(len(depth))
    added[best] = amplitude[best]
    um = spectrum.wavelength_um
    by_bin = [_normal_spread(mean, width) for mean, width in zip(amplitude, error, strict=True)]
    return Found(
        ln_bayes_factor=float(logsumexp(gains) - np.log(len(gains))),
        phrase=f"a single bad bin at {um[best]:.2f} um",
        spreads={"wavelength_um": Spread(um, shares, "um"), "amplitude_ppm": _mixture(by_bin, shares)},
        depth=base.depth + added,
        chi2=_chi2(base, data, added),
    )


def check_steps(spectrum: DepthSpectrum, step_um: Sequence[float]) -> None:
    """Refuse steps that the spectrum cannot show.

    Parameters
    ----------
    spectrum : DepthSpectrum
    step_um : sequence of float
        Wavelengths of the steps, micrometre; bins whose centre lies beyond are off.

    Raises
    ------
    SettingError
        If a step leaves no bin on one of its sides, or two steps have no bin between them.
    """
    centre = spectrum.wavelength_um
    for um in step_um:
        if not centre[0] <= um < centre[-1]:
            raise SettingError(
                f"--step {um:g} leaves no bin on one of its sides, expected a wavelength between the first and the "
                f"last bin of the spectrum, {centre[0]:.4g} to {centre[-1]:.4g} um."
            )
    ordered = sorted(step_um)
    for low, high in pairwise(ordered):
        if not np.any((centre > low) & (centre <= high)):
            raise SettingError(
                f"--step {low:g} and --step {high:g} have no bin between them, expected at least one: leave one out."
            )


def step_rival(
    base: LinearBase, spectrum: DepthSpectrum, depth: np.ndarray, step_um: Sequence[float], sd_ppm: float
) -> Found | None:
    """Steps at named wavelengths and at the edges of segments, all at once.

    Parameters
    ----------
    base : LinearBase
        Offsets of segments may be in its covariance already; the step's prior is the wider one.
    spectrum : DepthSpectrum
    depth : ndarray, shape (N,)
    step_um : sequence of float
        Bins beyond each of them are higher or lower together.
    sd_ppm : float
        Standard deviation of each step's prior.

    Returns
    -------
    Found or None
        None when there is neither a segment nor a named step.

    Raises
    ------
    SettingError
        From `check_steps`.
    """
    check_steps(spectrum, step_um)
    columns = [(step_name(um), spectrum.wavelength_um > um) for um in step_um]
    columns += [
        (f"step_ppm: {spectrum.segment_names[k]}", spectrum.segment == k)
        for k in range(1, len(spectrum.segment_names))
    ]
    if not columns:
        return None
    data, sd = base.whiten(depth), sd_ppm * PPM
    directions = np.array([marks for _, marks in columns], float)
    templates = base.whiten_template(directions)
    along, products = templates @ data, templates @ templates.T
    # Precisions of prior and data add up; the scaling by the prior keeps the matrix well conditioned.
    posterior = sd**2 * np.linalg.inv(np.eye(len(products)) + sd**2 * products)
    amplitude, errors = posterior @ along, np.sqrt(np.diag(posterior))
    strongest = int(np.argmax(np.abs(amplitude) / errors))
    return Found(
        ln_bayes_factor=float(ln_gain_joint(along, products, sd)),
        phrase=_step_phrase(spectrum, step_um, strongest),
        spreads={
            name: _normal_spread(a, e) for (name, _), a, e in zip(columns, amplitude, errors, strict=True)
        },
        depth=base.depth + amplitude @ directions,
        chi2=_chi2(base, data, amplitude @ directions),
    )


def _step_phrase(spectrum: DepthSpectrum, step_um: Sequence[float], strongest: int) -> str:
    if strongest < len(step_um):
        return f"a step at {step_um[strongest]:.2f} um"
    return f"a step of {spectrum.segment_names[strongest - len(step_um) + 1]}"


def bump_rival(
    base: LinearBase,
    spectrum: DepthSpectrum,
    depth: np.ndarray,
    largest_depth: float,
    fineness: float = 1.0,
) -> Found:
    """A Gaussian in ln wavelength of free place, width and (positive) height.

    Parameters
    ----------
    base : LinearBase
    spectrum : DepthSpectrum
    depth : ndarray, shape (N,)
    largest_depth : float
        The height is uniform from 0 to this, fraction.
    fineness : float
        As `find_bump`.

    Returns
    -------
    Found

    Notes
    -----
    The centre is uniform in ln wavelength over the spectrum, the width log-uniform from half a bin to a third of the
    spectrum. That a Gaussian bump must not do as well as a named molecule is asked by Taylor 2025, arXiv:2504.15916.
    """
    data = base.whiten(depth)
    bump = find_bump(base, spectrum, data, largest_depth, fineness)
    n_heights = bump.heights.shape[1]
    added = bump.best_height * bump.best_shape
    return Found(
        ln_bayes_factor=bump.ln_bayes_factor,
        phrase=f"a bump at {bump.best_centre_um:.2f} um",
        spreads={
            "wavelength_um": Spread(bump.centre_um, bump.weights, "um"),
            "width_ln": Spread(bump.width_ln, bump.weights, "e-folds"),
            "amplitude_ppm": Spread(
                bump.heights.ravel() / PPM, np.repeat(bump.weights / n_heights, n_heights), "ppm"
            ),
        },
        depth=base.depth + added,
        chi2=_chi2(base, data, added),
    )


def _chi2(base: LinearBase, data: np.ndarray, added: np.ndarray) -> float:
    return float(np.sum((data - base.whiten_template(added)) ** 2))


def _mixture(spreads: Sequence[Spread], shares: np.ndarray) -> Spread:
    """Posterior of a parameter over several cases with their probabilities."""
    return Spread(
        np.concatenate([spread.values for spread in spreads]),
        np.concatenate([share * spread.weights for spread, share in zip(spreads, shares, strict=True)]),
        spreads[0].unit,
    )


def rivals_on(bases: Sequence[LinearBase], find: Callable[[LinearBase], Found | None]) -> OnBases | None:
    """Average a rival over bases that are equally likely beforehand.

    Parameters
    ----------
    bases : sequence of LinearBase
    find : callable
        From a base to what is found on it, or None where the rival does not exist.

    Returns
    -------
    OnBases or None
    """
    by_base = [find(base) for base in bases]
    if by_base[0] is None:
        return None
    ln_z = np.array([base.ln_evidence + f.ln_bayes_factor for base, f in zip(bases, by_base, strict=True)])
    shares = np.exp(ln_z - logsumexp(ln_z))
    best = by_base[int(np.argmax(ln_z))]
    return OnBases(
        ln_evidence=float(logsumexp(ln_z) - np.log(len(ln_z))),
        by_base=tuple(by_base),
        phrase=best.phrase,
        spreads={name: _mixture([found.spreads[name] for found in by_base], shares) for name in best.spreads},
        depth=best.depth,
        chi2=best.chi2,
    )
