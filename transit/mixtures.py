"""Mixtures of Gaussians and Student t distributions: density, draws, and fits to weighted draws."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import gammaln, logsumexp

# Rows per block: keeps the (K, rows, D) work array inside the processor cache and the memory small.
_BLOCK_ROWS = 2048


@dataclass(frozen=True, eq=False)
class Mixture:
    """A normalised mixture of K multivariate Gaussians and Student t distributions in D dimensions.

    Parameters
    ----------
    weights : np.ndarray
        Shape (K,), positive; scaled to sum to one.
    means : np.ndarray
        Shape (K, D), centres.
    scales : np.ndarray
        Shape (K, D, D), scale matrices (the covariance for a Gaussian, covariance times (dof - 2)/dof for a
        t with dof > 2), symmetric and positive definite.
    dof : np.ndarray
        Shape (K,), degrees of freedom; `inf` makes the component Gaussian.

    Raises
    ------
    np.linalg.LinAlgError
        If a scale matrix is not positive definite.
    """

    weights: np.ndarray
    means: np.ndarray
    scales: np.ndarray
    dof: np.ndarray

    def __post_init__(self) -> None:
        weights = np.array(self.weights, dtype=float)
        for name, value in (
            ("weights", weights / weights.sum()),
            ("means", np.array(self.means, dtype=float)),
            ("scales", np.array(self.scales, dtype=float)),
            ("dof", np.broadcast_to(np.asarray(self.dof, dtype=float), weights.shape).copy()),
        ):
            value.flags.writeable = False
            object.__setattr__(self, name, value)
        # Factorise now, so that an unusable mixture cannot exist.
        object.__setattr__(self, "_cholesky", np.linalg.cholesky(self.scales))

    @property
    def n_components(self) -> int:
        """Number of components K."""
        return len(self.weights)

    @property
    def n_dim(self) -> int:
        """Number of dimensions D."""
        return self.means.shape[1]

    @cached_property
    def _whitening(self) -> tuple[np.ndarray, np.ndarray]:
        """Transposed inverse Cholesky factors (K, D, D), and the whitened centres (K, 1, D)."""
        identity = np.broadcast_to(np.eye(self.n_dim), self.scales.shape)
        inverse_transposed = np.swapaxes(np.linalg.solve(self._cholesky, identity), 1, 2)
        return inverse_transposed, np.matmul(self.means[:, None, :], inverse_transposed)

    @cached_property
    def _ln_norm(self) -> np.ndarray:
        """Logarithm of each component's density at its own centre, shape (K,)."""
        dim = self.n_dim
        ln_det_half = np.log(np.diagonal(self._cholesky, axis1=1, axis2=2)).sum(axis=1)
        gaussian = np.isinf(self.dof)
        dof = np.where(gaussian, 1.0, self.dof)
        student = gammaln((dof + dim) / 2) - gammaln(dof / 2) - dim / 2 * np.log(dof * np.pi)
        return np.where(gaussian, -dim / 2 * np.log(2 * np.pi), student) - ln_det_half

    def squared_distance(self, z: np.ndarray) -> np.ndarray:
        """Squared Mahalanobis distance of points (N, D) from every centre, shape (K, N)."""
        inverse_transposed, centres = self._whitening
        whitened = np.matmul(z[None, :, :], inverse_transposed)
        whitened -= centres
        return np.einsum("knd,knd->kn", whitened, whitened)

    def ln_component_density(self, squared_distance: np.ndarray) -> np.ndarray:
        """Log density of each component, without its weight, from squared distances (K, N); shape (K, N)."""
        gaussian = np.isinf(self.dof)[:, None]
        dof = np.where(gaussian, 1.0, self.dof[:, None])
        tail = np.where(
            gaussian,
            0.5 * squared_distance,
            0.5 * (dof + self.n_dim) * np.log1p(squared_distance / dof),
        )
        return self._ln_norm[:, None] - tail

    def ln_density(self, z: np.ndarray) -> np.ndarray:
        """Log density of the mixture.

        Parameters
        ----------
        z : np.ndarray
            Shape (N, D).

        Returns
        -------
        np.ndarray
            Shape (N,).

        Notes
        -----
        Multivariate t density: Kotz & Nadarajah 2004, *Multivariate t Distributions and Their Applications*,
        eq. 1.1.
        """
        z = np.asarray(z, dtype=float)
        ln_density = np.empty(len(z))
        ln_weights = np.log(self.weights)[:, None]
        for first in range(0, len(z), _BLOCK_ROWS):
            rows = slice(first, first + _BLOCK_ROWS)
            terms = self.ln_component_density(self.squared_distance(z[rows])) + ln_weights
            ln_density[rows] = _ln_sum_columns(terms)
        return ln_density

    def draw(self, n_draws: int, rng: np.random.Generator) -> np.ndarray:
        """Draw points in random order.

        Parameters
        ----------
        n_draws : int
            Number of points N.
        rng : np.random.Generator
            Source of randomness.

        Returns
        -------
        np.ndarray
            Shape (N, D).

        Notes
        -----
        The number of points of each component is drawn by systematic sampling (Kitagawa 1996, J. Comput. Graph.
        Stat. 5, 1): its expectation is N times the weight, so averages stay unbiased, and the variance is below
        that of independent draws.
        """
        members = systematic_resample(self.weights, n_draws, rng)
        points = rng.standard_normal((n_draws, self.n_dim))
        for k in np.unique(members):
            rows = members == k
            stretched = points[rows] @ self._cholesky[k].T
            if np.isfinite(self.dof[k]):
                chi2 = rng.chisquare(self.dof[k], size=(len(stretched), 1))
                stretched *= np.sqrt(self.dof[k] / chi2)
            points[rows] = self.means[k] + stretched
        return points[rng.permutation(n_draws)]

    def draw_block(self, z: np.ndarray, block: np.ndarray, rng: np.random.RandomState) -> np.ndarray:
        """Replace some coordinates of points by draws from the mixture conditional on the others.

        Parameters
        ----------
        z : np.ndarray
            Shape (N, D).
        block : np.ndarray
            Shape (B,), distinct coordinates to replace, 1 <= B <= D.
        rng : np.random.RandomState
            Source of randomness, of the old kind that emcee hands to its moves.

        Returns
        -------
        np.ndarray
            Shape (N, D).

        Notes
        -----
        With R the other coordinates, a component's conditional is a t with dof + |R| degrees of freedom and the
        Gaussian conditional scale times (dof + d_R)/(dof + |R|), d_R the squared distance in R (Ding 2016,
        Am. Stat. 70, 293). The ratio of conditional densities equals that of the joint ones, as R is the same.
        """
        rest = np.setdiff1d(np.arange(self.n_dim), block)
        if len(rest) == 0:
            joint = np.broadcast_to(np.log(self.weights)[:, None], (self.n_components, len(z)))
            distance = np.zeros(joint.shape)
        else:
            marginal = Mixture(
                self.weights, self.means[:, rest], self.scales[:, rest[:, None], rest], self.dof
            )
            distance = marginal.squared_distance(z[:, rest])
            joint = marginal.ln_component_density(distance) + np.log(self.weights)[:, None]
        edges = np.cumsum(np.exp(joint - joint.max(axis=0)), axis=0)
        member = np.sum(edges < rng.random_sample(len(z)) * edges[-1], axis=0)
        to_block = self.scales[:, block[:, None], rest]
        slope = np.linalg.solve(self.scales[:, rest[:, None], rest], np.swapaxes(to_block, 1, 2))  # (K, R, B)
        spread = np.linalg.cholesky(self.scales[:, block[:, None], block] - np.matmul(to_block, slope))
        offset = np.einsum("nr,nrb->nb", z[:, rest] - self.means[:, rest][member], slope[member])
        noise = np.einsum("nij,nj->ni", spread[member], rng.standard_normal((len(z), len(block))))
        dof = self.dof[member]
        heavy = np.isfinite(dof)
        if np.any(heavy):
            chi2 = rng.chisquare(dof[heavy] + len(rest))
            noise[heavy] *= np.sqrt((dof[heavy] + distance[member, np.arange(len(z))][heavy]) / chi2)[:, None]
        drawn = z.copy()
        drawn[:, block] = self.means[:, block][member] + offset + noise
        return drawn

    def widened(self, factor: float) -> Mixture:
        """Copy with every scale matrix multiplied by `factor`."""
        return Mixture(self.weights, self.means, self.scales * factor, self.dof)


def _ln_sum_columns(terms: np.ndarray) -> np.ndarray:
    """Log of the sum of exponentials over the first axis of finite terms (K, N); shape (N,)."""
    top = terms.max(axis=0)
    return top + np.log(np.exp(terms - top).sum(axis=0))


def standard_normal_mixture(n_dim: int) -> Mixture:
    """The prior N(0, I) in D dimensions as a mixture of one component."""
    return Mixture(np.ones(1), np.zeros((1, n_dim)), np.eye(n_dim)[None], np.array([np.inf]))


def combine_mixtures(parts: list[tuple[float, Mixture]]) -> Mixture:
    """Join mixtures, each with its share of the total weight.

    Parameters
    ----------
    parts : list of (float, Mixture)
        Shares (scaled to sum to one) and mixtures of one dimension; a share of zero leaves its mixture out.

    Returns
    -------
    Mixture
    """
    kept = [(share, part) for share, part in parts if share > 0]
    return Mixture(
        np.concatenate([share * part.weights for share, part in kept]),
        np.concatenate([part.means for _, part in kept]),
        np.concatenate([part.scales for _, part in kept]),
        np.concatenate([part.dof for _, part in kept]),
    )


def systematic_resample(weights: np.ndarray, n_draws: int, rng: np.random.Generator) -> np.ndarray:
    """Indices drawn in proportion to weights with one common random offset (Kitagawa 1996).

    Parameters
    ----------
    weights : np.ndarray
        Shape (N,), not negative, not all zero.
    n_draws : int
        Number of indices S.
    rng : np.random.Generator
        Source of randomness.

    Returns
    -------
    np.ndarray
        Shape (S,), ascending integers in [0, N).
    """
    edges = np.cumsum(weights)
    places = (np.arange(n_draws) + rng.random()) / n_draws * edges[-1]
    return np.minimum(np.searchsorted(edges, places, side="right"), len(weights) - 1)


def effective_size(weights: np.ndarray) -> float:
    """Effective number of weighted draws, (sum w)^2 / sum w^2 (Kong, Liu & Wong 1994); 0 if all are zero."""
    total_square = float(np.sum(weights**2))
    return float(np.sum(weights)) ** 2 / total_square if total_square > 0 else 0.0


def fit_mixture(
    draws: np.ndarray,
    weights: np.ndarray,
    start: Mixture,
    *,
    max_iterations: int = 40,
    tolerance: float = 2e-3,
) -> tuple[Mixture, float]:
    """Fit a mixture with fixed degrees of freedom to weighted draws by expectation-maximisation.

    Parameters
    ----------
    draws : np.ndarray
        Shape (N, D).
    weights : np.ndarray
        Shape (N,), not negative.
    start : Mixture
        First guess; its number of components is an upper limit (components that starve are dropped) and its
        degrees of freedom are kept.
    max_iterations : int, optional
        Upper limit of iterations.
    tolerance : float, optional
        Stop when the mean log density per draw rises by less than this in one iteration. A proposal gains
        nothing from more: 0.002 changes the effective size by about as many parts in a thousand.

    Returns
    -------
    mixture : Mixture
        The fit.
    mean_ln_density : float
        Weighted mean of the log density of the draws, at the start of the last iteration.

    Notes
    -----
    EM for t mixtures: Peel & McLachlan 2000, Stat. Comput. 10, 339. Each scale matrix is drawn towards the
    mean one within components with the strength of (D + 2)/2 draws, as a conjugate prior would (the idea of
    Fraley & Raftery 2007, J. Classif. 24, 155): a component that owns few draws cannot collapse onto them.
    """
    n_dim = draws.shape[1]
    share = weights / weights.sum()
    n_effective = effective_size(weights)
    pull = 0.5 * (n_dim + 2)
    floor = 1e-10 * _weighted_scale(draws, share)
    mixture, previous = start, -np.inf
    mean_ln_density = previous
    for _ in range(max_iterations):
        distance = mixture.squared_distance(draws)
        joint = mixture.ln_component_density(distance) + np.log(mixture.weights)[:, None]
        total = _ln_sum_columns(joint)
        mean_ln_density = float(share @ total)
        if mean_ln_density - previous < tolerance:
            break
        previous = mean_ln_density
        member = np.exp(joint - total) * share  # (K, N), sums to one
        dof = mixture.dof[:, None]
        with np.errstate(invalid="ignore"):
            latent = np.where(np.isinf(dof), 1.0, (dof + n_dim) / (dof + distance))
        alive = member.sum(axis=1) * n_effective > 2.0
        if not np.any(alive):
            break
        mixture = _maximise(draws, member[alive], latent[alive], mixture.dof[alive], n_effective, pull, floor)
    return mixture, mean_ln_density


def _weighted_scale(draws: np.ndarray, share: np.ndarray) -> np.ndarray:
    """Diagonal matrix (D, D) of the weighted variances, with the smallest positive number as a floor."""
    mean = share @ draws
    return np.diag(np.maximum(share @ (draws - mean) ** 2, 1e-20))


def _maximise(
    draws: np.ndarray,
    member: np.ndarray,
    latent: np.ndarray,
    dof: np.ndarray,
    n_effective: float,
    pull: float,
    floor: np.ndarray,
) -> Mixture:
    """M step: mixture from memberships (K, N) and latent precisions (K, N)."""
    occupancy = member.sum(axis=1)
    pulled = member * latent
    means = (pulled @ draws) / pulled.sum(axis=1)[:, None]
    scatter = np.empty((len(means), draws.shape[1], draws.shape[1]))
    for k, mean in enumerate(means):
        centred = draws - mean
        scatter[k] = (centred * pulled[k][:, None]).T @ centred
    within = scatter.sum(axis=0) / occupancy.sum()
    counts = n_effective * occupancy[:, None, None]
    scales = (n_effective * scatter + pull * within) / (counts + pull) + floor
    return Mixture(occupancy, means, scales, dof)


def spread_start(
    draws: np.ndarray, weights: np.ndarray, n_components: int, dof: float, rng: np.random.Generator
) -> Mixture:
    """First guess for a fit: centres spread over the draws, members assigned to the nearest.

    Parameters
    ----------
    draws : np.ndarray
        Shape (N, D).
    weights : np.ndarray
        Shape (N,), not negative.
    n_components : int
        Number of components K.
    dof : float
        Degrees of freedom of all of them.
    rng : np.random.Generator
        Source of randomness.

    Returns
    -------
    Mixture
        K components or fewer.

    Notes
    -----
    k-means++ seeding (Arthur & Vassilvitskii 2007) after whitening, then three rounds of Lloyd 1982.
    """
    share = weights / weights.sum()
    mean = share @ draws
    centred = draws - mean
    covariance = (centred * share[:, None]).T @ centred + 1e-10 * _weighted_scale(draws, share)
    white = np.linalg.solve(np.linalg.cholesky(covariance), centred.T).T
    centres = white[rng.choice(len(white), p=share)][None]
    nearest2 = ((white - centres[0]) ** 2).sum(axis=1)
    for _ in range(n_components - 1):
        chance = share * nearest2
        if chance.sum() <= 0:
            break
        centre = white[rng.choice(len(white), p=chance / chance.sum())]
        centres = np.vstack([centres, centre])
        nearest2 = np.minimum(nearest2, ((white - centre) ** 2).sum(axis=1))
    for _ in range(3):
        distance2 = (centres**2).sum(axis=1)[:, None] - 2 * centres @ white.T
        member = (np.argmin(distance2, axis=0) == np.arange(len(centres))[:, None]) * share
        occupancy = member.sum(axis=1)
        member, occupancy = member[occupancy > 0], occupancy[occupancy > 0]
        centres = (member @ white) / occupancy[:, None]
    n_effective = effective_size(weights)
    return _maximise(
        draws,
        member,
        np.ones_like(member),
        np.full(len(member), dof),
        n_effective,
        0.5 * (draws.shape[1] + 2),
        1e-10 * _weighted_scale(draws, share),
    )


def choose_mixture(
    draws: np.ndarray,
    weights: np.ndarray,
    rng: np.random.Generator,
    *,
    sizes: tuple[int, ...] = (1, 2, 3, 4, 6, 8),
    dof: float = 5.0,
    thin: float = 1.0,
) -> Mixture:
    """Fit mixtures of several sizes and keep the one with the lowest Bayesian information criterion.

    Parameters
    ----------
    draws : np.ndarray
        Shape (N, D).
    weights : np.ndarray
        Shape (N,), not negative.
    rng : np.random.Generator
        Source of randomness for the first guesses.
    sizes : tuple of int, optional
        Numbers of components to try, ascending; the search ends after two sizes without improvement.
    dof : float, optional
        Degrees of freedom of all components.
    thin : float, optional
        The criterion counts one in this many draws, for draws that are correlated.

    Returns
    -------
    Mixture

    Notes
    -----
    BIC = -2 ln L + k ln n (Schwarz 1978, Ann. Stat. 6, 461), with n the effective number of draws and k the
    K (D + 1)(D + 2)/2 - 1 free numbers of the mixture.
    """
    n_dim = draws.shape[1]
    n_effective = max(effective_size(weights) / thin, 2.0)
    best, best_bic, failures = None, np.inf, 0
    for size in sizes:
        guess = spread_start(draws, weights, size, dof, rng)
        mixture, mean_ln_density = fit_mixture(draws, weights, guess)
        numbers = mixture.n_components * (n_dim + 1) * (n_dim + 2) / 2 - 1
        bic = -2 * n_effective * mean_ln_density + numbers * np.log(n_effective)
        if best is None or bic < best_bic:
            best, best_bic, failures = mixture, bic, 0
        else:
            failures += 1
            if failures == 2:
                break
    return best


def pareto_shape(ln_weights: np.ndarray) -> float:
    """Shape k of the generalised Pareto distribution of the largest importance weights.

    Parameters
    ----------
    ln_weights : np.ndarray
        Shape (N,), log weights; -inf allowed.

    Returns
    -------
    float
        Above 0.7 the mean of the weights is unreliable; `inf` when fewer than 10 distinct weights make up
        the tail.

    Notes
    -----
    Tail of min(N/5, 3 sqrt(N)) weights (Vehtari et al. 2024, JMLR 25, 72); fit of Zhang & Stephens 2009,
    Technometrics 51, 316, with the weak prior of Vehtari et al. towards 0.5 worth ten draws.
    """
    n_tail = int(min(len(ln_weights) / 5, 3 * np.sqrt(len(ln_weights))))
    if n_tail < 10:
        return np.inf
    ordered = np.sort(ln_weights)[-n_tail - 1 :]
    scaled = np.exp(ordered - ordered[-1])
    excess = scaled[1:] - scaled[0]
    if not np.isfinite(ordered[0]) or excess[0] < 0 or excess[n_tail // 4] <= 0:
        return np.inf
    n_grid = 30 + int(np.sqrt(n_tail))
    steps = 1 - np.sqrt(n_grid / (np.arange(1, n_grid + 1) - 0.5))
    theta = 1 / excess[-1] + steps / (3 * excess[int(n_tail / 4 + 0.5) - 1])
    shapes = np.mean(np.log1p(-theta[:, None] * excess), axis=1)
    ln_profile = n_tail * (np.log(-theta / shapes) - shapes - 1)
    theta_mean = float(np.exp(ln_profile - logsumexp(ln_profile)) @ theta)
    shape = float(np.mean(np.log1p(-theta_mean * excess)))
    return (n_tail * shape + 10 * 0.5) / (n_tail + 10)
