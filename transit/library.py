"""Templates from the priors, and the statistic they give: ln B of every species against the best null."""

from __future__ import annotations

import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import logsumexp, ndtri
from scipy.stats import norm, qmc

from transit.hypotheses import Hypothesis
from transit.likelihood import ln_gaussian_mass
from transit.linearised import LinearBase
from transit.mixtures import Mixture
from transit.problem import Problem

NOISE_PARAMETERS = ("ar1_coefficient", "ln_error_factor")
MODEL_BLOCK = 512  # atmospheres computed at once
ROW_BLOCK = 160  # simulations at once: their products with a library stay in the cache


@dataclass(frozen=True, eq=False)
class Library:
    """Whitened templates: draws from the prior of one hypothesis, with weights.

    Parameters
    ----------
    name : str
    templates : ndarray of float32, shape (J, M)
        Changes of depth in units of the noise. Single precision is part of the definition: data and simulations meet
        the same rounded templates.
    weight : ndarray of float32, shape (J,), optional
        Of mean 1; all alike when left out.
    """

    name: str
    templates: np.ndarray
    weight: np.ndarray | None = None

    def __getstate__(self):
        # What follows from the templates is cheap to find again in another process.
        return {name: self.__dict__[name] for name in self.__dataclass_fields__}

    @cached_property
    def share(self) -> np.ndarray:
        """Weights of sum 1, shape (J,)."""
        n_templates = len(self.templates)
        weight = np.ones(n_templates, np.float32) if self.weight is None else self.weight
        return weight / np.float32(n_templates)

    @cached_property
    def exact(self) -> np.ndarray:
        """The same templates in double precision, shape (J, M)."""
        return self.templates.astype(float)

    @cached_property
    def half_square(self) -> np.ndarray:
        """Half the squared length of each template, shape (J,)."""
        return 0.5 * np.einsum("jm,jm->j", self.exact, self.exact)


@dataclass(frozen=True, eq=False)
class Statistic:
    """What is computed alike for data and simulations, in a frame where the noise is standard normal.

    Parameters
    ----------
    species : tuple of Library
    continuum : Library, optional
        None where the frame has no such null.
    slope_edge : ndarray, shape (M,), optional
        Whitened line with the steepest slope of the prior; None where there is no such null.
    """

    species: tuple[Library, ...]
    continuum: Library | None = None
    slope_edge: np.ndarray | None = None


# --- templates ---------------------------------------------------------------------------------------------


def prior_points(n_dim: int, n_points: int, stream: list[int]) -> np.ndarray:
    """Low-discrepancy draws from the prior in the sampler's unit normal space.

    Parameters
    ----------
    n_dim, n_points : int
    stream : list of int
        Entropy of the scrambling.

    Returns
    -------
    ndarray, shape (n_points, n_dim)

    Notes
    -----
    Scrambled Sobol points (Owen 1998, J. Complexity 14, 466), which cover the prior more evenly than independent
    draws, mapped by the normal quantile.
    """
    sobol = qmc.Sobol(n_dim, scramble=True, seed=np.random.default_rng(stream))
    unit = sobol.random_base2(int(np.ceil(np.log2(n_points))))[:n_points]
    return ndtri(np.clip(unit, 1e-12, 1 - 1e-12))


def name_key(name: str) -> int:
    """Number that stands for a name in the entropy of a random stream."""
    return zlib.crc32(name.encode())


def model_depths(problem: Problem, hypothesis: Hypothesis, z: np.ndarray) -> np.ndarray:
    """Depths (fraction), shape (J, N), at sampler coordinates (J, D), with the reference radius at the observed one.

    The level of a spectrum is projected out of every statistic, so that the radius matters to second order only.
    """
    blocks = []
    for start in range(0, len(z), MODEL_BLOCK):
        said = problem.predict(hypothesis, z[start : start + MODEL_BLOCK])
        radius = np.ones(len(said.mean_height))
        blocks.append(
            problem.likelihood.predicted_depth(
                said.mean_height, said.mean_square_height, radius, bin_factor=said.bin_factor
            )
        )
    return np.concatenate(blocks)


def atmosphere_dim(problem: Problem) -> int:
    """Number of coordinates of temperature, deck and haze: the first ones of every atmosphere."""
    continuum = problem.parameters(Hypothesis("continuum", ()))
    return sum(p.name not in NOISE_PARAMETERS for p in continuum)


def library_points(
    problem: Problem,
    hypothesis: Hypothesis,
    n_points: int,
    stream: list[int],
    focuses: Sequence[Mixture] = (),
) -> tuple[np.ndarray, np.ndarray]:
    """Draws of a hypothesis and the weights with which they stand for its prior.

    Parameters
    ----------
    problem : Problem
    hypothesis : Hypothesis
        An atmosphere.
    n_points : int
    stream : list of int
        Entropy.
    focuses : sequence of Mixture
        Half of the draws come from these, the same number from each; a mixture with fewer dimensions than the
        hypothesis stands for the first of them.

    Returns
    -------
    z : ndarray, shape (J, D)
    weight : ndarray, shape (J,)
        Of mean 1.

    Notes
    -----
    Prior over sampling density, 1/(1/2 + mean q/2p) (deterministic mixture: Owen & Zhou 2000, J. Am. Stat. Assoc. 95,
    135), which no draw can exceed by more than a factor of 2.
    """
    z = prior_points(len(problem.parameters(hypothesis)), n_points, stream)
    if not focuses:
        return z, np.ones(n_points)
    rng = np.random.default_rng([*stream, 6])
    # The first half of a Sobol sequence is as even as the whole; every other point of it would lie on one side.
    moved = np.array_split(np.arange(n_points // 2, n_points), len(focuses))
    for rows, focus in zip(moved, focuses, strict=True):
        z[rows, : focus.n_dim] = focus.draw(len(rows), rng)
    return z, focus_weights(z, focuses)


def focus_weights(z: np.ndarray, focuses: Sequence[Mixture], normalised: bool = True) -> np.ndarray:
    """Weights (J,) of draws (J, D), half from the prior and half from the focuses, as in `library_points`.

    Their mean is 1 over both halves, and set to 1 over the draws given unless `normalised` is False.
    """
    ratios = []
    for focus in focuses:
        own = z[:, : focus.n_dim]
        ratios.append(focus.ln_density(own) - norm.logpdf(own).sum(axis=1))
    ln_ratio = np.minimum(logsumexp(ratios, axis=0) - np.log(len(focuses)), 600.0)
    weight = 1 / (0.5 + 0.5 * np.exp(ln_ratio))
    return weight / weight.mean() if normalised else weight


def prior_library(
    problem: Problem,
    hypothesis: Hypothesis,
    base: LinearBase,
    n_templates: int,
    seed: int,
    focuses: Sequence[Mixture] = (),
) -> Library:
    """Library of an atmosphere's prior.

    Parameters
    ----------
    problem : Problem
    hypothesis : Hypothesis
    base : LinearBase
        Frame with the level taken out.
    n_templates : int
    seed : int
    focuses : sequence of Mixture
        As `library_points`. Without them a few thousand draws leave gaps wider than the noise of a precise spectrum.

    Returns
    -------
    Library
    """
    z, weight = library_points(
        problem, hypothesis, n_templates, [seed, name_key(hypothesis.name), 1], focuses
    )
    templates = whitened(base, model_depths(problem, hypothesis, z))
    return Library(hypothesis.name, templates, weight.astype(np.float32))


def feature_library(
    problem: Problem,
    species: str,
    base: LinearBase,
    n_templates: int,
    seed: int,
    focuses: Sequence[Mixture] = (),
) -> Library:
    """Library of what one species adds to the continuum of the same draw; all alike in weight.

    Parameters
    ----------
    problem : Problem
    species : str
    base : LinearBase
    n_templates, seed : int
    focuses : sequence of Mixture

    Returns
    -------
    Library
    """
    hypothesis, bare = Hypothesis(species, (species,)), Hypothesis("continuum", ())
    z, _ = library_points(problem, hypothesis, n_templates, [seed, name_key(species), 2], focuses)
    # The atmosphere comes first among the coordinates, the noise, which no depth depends on, last.
    continuum = z[:, : len(problem.parameters(bare))]
    depth = model_depths(problem, hypothesis, z) - model_depths(problem, bare, continuum)
    return Library(species, whitened(base, depth))


def whitened(base: LinearBase, depths: np.ndarray) -> np.ndarray:
    """Whitened depths in single precision, shape (J, M)."""
    return base.whiten_template(depths).astype(np.float32)


def line_statistic(
    problem: Problem, base: LinearBase, continuum: Library | None, species: tuple[Library, ...]
) -> Statistic:
    """Statistic of a check: species against the best of flat, slope and continuum.

    With a slope in every hypothesis alike there is no null with one.
    """
    edge = None
    if not problem.nuisances.slope:
        edge = base.whiten_template(problem.slope_limit * problem.abscissa)
    return Statistic(species, continuum, edge)


# --- the statistic -----------------------------------------------------------------------------------------


def evaluate(statistic: Statistic, mean: np.ndarray, noise: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """ln B and fall of chi-square of every species against the best null.

    Parameters
    ----------
    statistic : Statistic
    mean : ndarray, shape (K, M)
        Means of the whitened spectra in double precision.
    noise : ndarray, shape (K * R, M)
        What is added to them, R rows to each mean in order.

    Returns
    -------
    (ndarray, ndarray), each of shape (K * R, n_species)
        ln B, and the best chi-square of the nulls less that of the species.

    Notes
    -----
    With white noise the likelihood of a template g over that of nothing is exp(y.g - |g|^2/2); ln Z is the ln of its
    mean over the prior draws. The slope has a uniform prior and a closed form.
    """
    repeats = len(noise) // len(mean)
    step = max(1, ROW_BLOCK // repeats)
    parts = []
    for start in range(0, len(mean), step):
        block = slice(start * repeats, (start + step) * repeats)
        parts.append(_evaluate_block(statistic, mean[start : start + step], noise[block]))
    return tuple(np.concatenate(part) for part in zip(*parts, strict=True))


def _evaluate_block(statistic, mean, noise):
    n_rows = len(noise)
    best_ln_z, best_gain = np.zeros(n_rows), np.zeros(n_rows)
    if statistic.slope_edge is not None:
        rows = np.repeat(mean, n_rows // len(mean), axis=0) + noise
        ln_z, gain = slope_over_flat(rows, statistic.slope_edge)
        best_ln_z, best_gain = np.maximum(best_ln_z, ln_z), np.maximum(best_gain, gain)
    if statistic.continuum is not None:
        ln_z, gain = library_over_flat(statistic.continuum, mean, noise)
        best_ln_z, best_gain = np.maximum(best_ln_z, ln_z), np.maximum(best_gain, gain)
    found = [library_over_flat(library, mean, noise) for library in statistic.species]
    ln_b = np.stack([ln_z - best_ln_z for ln_z, _ in found], axis=1)
    return ln_b, np.stack([gain - best_gain for _, gain in found], axis=1)


def library_over_flat(library: Library, mean: np.ndarray, noise: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """ln B over nothing and the largest fall of chi-square, each (K * R,), of spectra mean + noise.

    Parameters
    ----------
    library : Library
    mean : ndarray, shape (K, M)
    noise : ndarray, shape (K * R, M)

    Returns
    -------
    (ndarray, ndarray), each of shape (K * R,)
    """
    templates = library.templates
    # Products with the means can be in the millions where spectra are precise, and need double precision; those with
    # the noise are small once the largest of the others is taken out.
    fixed = mean @ library.exact.T - library.half_square
    top = fixed.max(axis=1)
    fixed = (fixed - top[:, None]).astype(np.float32)
    ln_like = np.asarray(noise, np.float32) @ templates.T
    by_mean = ln_like.reshape(len(mean), -1, len(templates))
    by_mean += fixed[:, None, :]
    largest = ln_like.max(axis=1)
    ln_like -= largest[:, None]
    np.exp(ln_like, out=ln_like)
    peak = np.repeat(top, len(noise) // len(mean)) + largest
    return peak + np.log((ln_like @ library.share).astype(float)), 2 * peak


def slope_over_flat(rows: np.ndarray, edge: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """ln B of a slope over nothing, and its fall of chi-square, each (S,).

    Parameters
    ----------
    rows : ndarray, shape (S, M)
        Whitened spectra.
    edge : ndarray, shape (M,)
        Whitened line with the steepest slope of its uniform prior.

    Returns
    -------
    (ndarray, ndarray), each of shape (S,)

    Notes
    -----
    The mean of exp(s z |t| - s^2 |t|^2 / 2) over s uniform in (-1, 1), with |t| the length of the edge and z the
    best slope over its error: a normal integral.
    """
    length = float(np.linalg.norm(edge))
    if length == 0:
        return np.zeros(len(rows)), np.zeros(len(rows))
    z = rows @ (edge / length)
    mass = ln_gaussian_mass(-length - z, length - z)
    return 0.5 * z**2 + 0.5 * np.log(2 * np.pi) - np.log(2 * length) + mass, z**2
