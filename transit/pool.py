"""What proposals are fitted to: the posterior with its calls counted, and weighted draws from it."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.special import logsumexp

from transit.errors import TransitError
from transit.mixtures import Mixture, effective_size, systematic_resample

LnLikelihood = Callable[[np.ndarray], np.ndarray]

# Likelihood calls are fastest between 32 and 512 rows.
_BATCH_ROWS = 512
# Largest number of chain draws in a fit.
FIT_DRAWS = 2500
# Chain draws are correlated: the criterion that chooses the number of components counts one in this many.
CHAIN_THIN = 5.0


class EvidenceError(TransitError, RuntimeError):
    """The evidence of a model cannot be computed at all."""


class Target:
    """The likelihood with its calls counted, its best point kept, and the posterior built from it.

    Parameters
    ----------
    ln_likelihood : callable
        Maps points in probit space, shape (N, D), to log likelihoods, shape (N,).
    n_dim : int
        Number of dimensions D.
    """

    def __init__(self, ln_likelihood: LnLikelihood, n_dim: int):
        self._ln_likelihood = ln_likelihood
        self.n_dim = n_dim
        self.calls = 0
        self.best_z = np.zeros(n_dim)
        self.best_ln_likelihood = -np.inf

    def ln_posterior(self, z: np.ndarray) -> np.ndarray:
        """Unnormalised log posterior density ln L + ln N(z; 0, I) at points (N, D); shape (N,).

        Raises
        ------
        EvidenceError
            If the likelihood is NaN or +inf at one of them.
        """
        ln_like = np.empty(len(z))
        for first in range(0, len(z), _BATCH_ROWS):
            # A copy: a likelihood may scribble on its input.
            block = z[first : first + _BATCH_ROWS].copy()
            ln_like[first : first + _BATCH_ROWS] = self._ln_likelihood(block)
        self.calls += len(z)
        if np.isnan(ln_like).any() or np.isposinf(ln_like).any():
            row = int(np.flatnonzero(np.isnan(ln_like) | np.isposinf(ln_like))[0])
            raise EvidenceError(
                f"The log likelihood is {ln_like[row]} at probit coordinates {np.round(z[row], 4).tolist()}, "
                "expected a finite number or -inf: a fault of the model."
            )
        top = int(np.argmax(ln_like))
        if ln_like[top] > self.best_ln_likelihood:
            self.best_ln_likelihood = float(ln_like[top])
            self.best_z = z[top].copy()
        return ln_like - 0.5 * np.einsum("nd,nd->n", z, z) - 0.5 * self.n_dim * np.log(2 * np.pi)


class Pool:
    """Draws from a growing list of proposals, weighted against their mean density. For fitting only."""

    def __init__(self, target: Target):
        self.target = target
        self.draws = np.empty((0, target.n_dim))
        self.ln_post = np.empty(0)
        self.ln_prior = np.empty(0)
        self._proposals: list[tuple[float, Mixture]] = []
        self._ln_proposed = np.empty(0)

    def add(self, proposal: Mixture, n_draws: int, rng: np.random.Generator) -> np.ndarray:
        """Draw from one more proposal; returns its own log weights (n_draws,)."""
        fresh = proposal.draw(n_draws, rng)
        ln_post = self.target.ln_posterior(fresh)
        ln_own = proposal.ln_density(fresh)
        ln_count = float(np.log(n_draws))
        ln_fresh = [ln_own + ln_count]
        ln_fresh += [earlier.ln_density(fresh) + ln_size for ln_size, earlier in self._proposals]
        if self._proposals:
            self._ln_proposed = np.logaddexp(self._ln_proposed, proposal.ln_density(self.draws) + ln_count)
        self._ln_proposed = np.concatenate([self._ln_proposed, logsumexp(ln_fresh, axis=0)])
        self._proposals.append((ln_count, proposal))
        self.draws = np.vstack([self.draws, fresh])
        self.ln_post = np.concatenate([self.ln_post, ln_post])
        self.ln_prior = np.concatenate([self.ln_prior, ln_standard_normal(fresh)])
        return ln_post - ln_own

    @property
    def ln_like(self) -> np.ndarray:
        """Log likelihoods (N,)."""
        return self.ln_post - self.ln_prior

    def ln_weights(self) -> np.ndarray:
        """Log weights (N,) against the mean proposal (Cornuet et al. 2012)."""
        return self.ln_post - self._ln_proposed


def ln_standard_normal(z: np.ndarray) -> np.ndarray:
    """Log density (N,) of the prior N(0, I) at points (N, D)."""
    return -0.5 * np.einsum("nd,nd->n", z, z) - 0.5 * z.shape[1] * np.log(2 * np.pi)


def relative_weights(ln_weights: np.ndarray) -> np.ndarray:
    """Weights (N,) scaled to a largest one of 1."""
    return np.exp(ln_weights - ln_weights.max())


def truncate(ln_weights: np.ndarray) -> np.ndarray:
    """Log weights cut at the mean weight times sqrt(N) (Ionides 2008, J. Comput. Graph. Stat. 17, 295)."""
    limit = logsumexp(ln_weights) - 0.5 * np.log(len(ln_weights))
    return np.minimum(ln_weights, limit)


def fit_set(pool: Pool, chain_draws: np.ndarray, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Draws for a fit: a chain, and the pool with the say of its effective size.

    Parameters
    ----------
    pool : Pool
    chain_draws : np.ndarray
        Shape (M, D), each with a share of one.
    rng : np.random.Generator

    Returns
    -------
    draws : np.ndarray
        Shape (N, D).
    shares : np.ndarray
        Shape (N,).
    """
    weights = relative_weights(truncate(pool.ln_weights()))
    trust = min(effective_size(weights) * CHAIN_THIN, float(FIT_DRAWS))
    # Thinned in proportion to the root of the weight: light draws still mark the flanks, heavy ones are not lost.
    root = np.sqrt(weights)
    kept, copies = np.unique(systematic_resample(root, FIT_DRAWS, rng), return_counts=True)
    shares = root[kept] * copies
    shares *= trust / shares.sum()
    return np.vstack([chain_draws, pool.draws[kept]]), np.concatenate([np.ones(len(chain_draws)), shares])


def resample_walkers(
    points: np.ndarray, weights: np.ndarray, n_walkers: int, rng: np.random.Generator
) -> np.ndarray:
    """Positions (W, D) resampled from points (N, D) with weights (N,); a hair's breadth parts repeated ones.

    The moves step along differences of walkers and fail on two at the same place.
    """
    starts = points[systematic_resample(weights, n_walkers, rng)]
    return starts + 1e-6 * rng.standard_normal(starts.shape)
