"""Simulations about a null mean whose far tail is reached by planted templates, and the probabilities they give."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass

import numpy as np

from transit.library import Library, Statistic, evaluate, library_over_flat, name_key

# Simulations that share one drawn mean of the null: the first are plain noise, the rest hold a planted template.
PLAIN, PLANTED = 2, 8
REPEATS = PLAIN + PLANTED
PLANTED_SHARE = PLANTED / REPEATS
N_CHUNKS = 4  # fixed, so that the numbers do not depend on the number of workers
N_PLANTED_TEMPLATES = 2048
# Squared length of planted templates: a false alarm of p = 1e-8 lies near |g|^2 = 32.
PLANTED_SQUARE = (4.0, 60.0)
# Below this effective number of simulations a probability is a bound only (its relative error is above 30 per cent).
FEWEST_EFFECTIVE = 11.0


def planted_templates(libraries: Sequence[Library], seed: int) -> Library:
    """Templates to plant: from every library alike, half as they are, half brought to a length that matters.

    Parameters
    ----------
    libraries : sequence of Library
        Of species, and of their features alone, which stand out above any null.
    seed : int

    Returns
    -------
    Library

    Notes
    -----
    Any set gives the right answer, a good one gives it with small errors. In a very precise spectrum hardly a template
    has the length of a false alarm, in a poor one none has, so that shapes are drawn and lengths made.
    """
    rng = np.random.default_rng([seed, name_key("planted")])
    share = max(1, N_PLANTED_TEMPLATES // (2 * len(libraries)))
    low, high = PLANTED_SQUARE
    parts = []
    for library in libraries:
        square = 2 * library.half_square
        inside = np.flatnonzero((square > low) & (square < high))
        if len(inside):
            chosen = rng.choice(inside, min(share, len(inside)), replace=False)
            parts.append(library.templates[chosen])
        shaped = np.flatnonzero(square > 1e-6 * square.max(initial=0.0))
        if len(shaped):
            chosen = rng.choice(shaped, share)
            length = rng.uniform(np.sqrt(low), np.sqrt(high), share) / np.sqrt(square[chosen])
            parts.append(library.templates[chosen] * length[:, None].astype(np.float32))
    if not parts:
        parts = [libraries[0].templates[:1]]
    return Library("planted", np.concatenate(parts))


def run_in_order(function, tasks, executor: Executor | None) -> list:
    """Results in the order of the tasks; in this process when there is no executor."""
    return list(map(function, tasks) if executor is None else executor.map(function, tasks))


# --- simulations -------------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class NullTask:
    """A chunk of the simulations of one null: REPEATS of them about each mean (K, M)."""

    statistic: Statistic
    planting: Library
    means: np.ndarray
    stream: tuple[int, ...]


@dataclass(frozen=True, eq=False)
class NullDraws:
    """Simulations of one null: weights (K, R), ln B and falls of chi-square (K, R, n_species)."""

    weight: np.ndarray
    ln_b: np.ndarray
    delta_chi2: np.ndarray


def run_null(task: NullTask) -> NullDraws:
    """Simulate a chunk: a pure function of the task."""
    rng = np.random.default_rng(list(task.stream))
    n_means, n_bins = task.means.shape
    noise = rng.standard_normal((n_means, REPEATS, n_bins), dtype=np.float32)
    chosen = rng.integers(len(task.planting.templates), size=(n_means, PLANTED))
    noise[:, PLAIN:] += task.planting.templates[chosen]
    noise = noise.reshape(-1, n_bins)
    ln_b, delta_chi2 = evaluate(task.statistic, task.means, noise)
    shape = (n_means, REPEATS)
    return NullDraws(
        importance_weights(task.planting, noise).reshape(shape),
        ln_b.reshape(*shape, -1),
        delta_chi2.reshape(*shape, -1),
    )


def importance_weights(planting: Library, noise: np.ndarray) -> np.ndarray:
    """Density of plain noise over that of noise with plants, (S,), for noise (S, M) counted from the mean of the null.

    The mean of the null cancels, so that the weights hold whatever it was.
    """
    zero = np.zeros((1, noise.shape[1]))
    blocks = [
        library_over_flat(planting, zero, noise[start : start + 256])[0]
        for start in range(0, len(noise), 256)
    ]
    ln_ratio = np.minimum(np.concatenate(blocks), 600.0)  # exp must not overflow; the weight is 0 long before
    return 1 / (1 - PLANTED_SHARE + PLANTED_SHARE * np.exp(ln_ratio))


def simulate_nulls(
    statistic: Statistic,
    features: Sequence[Library],
    means: Mapping[str, np.ndarray],
    seed: int,
    executor: Executor | None = None,
) -> dict[str, NullDraws]:
    """Simulations of every null.

    Parameters
    ----------
    statistic : Statistic
    features : sequence of Library
        Shapes to plant besides those that lead from the mean of a null to the templates of a species.
    means : mapping of str to ndarray, shape (K, M)
        By the name of the null.
    seed : int
    executor : concurrent.futures.Executor, optional

    Returns
    -------
    dict of NullDraws by the name of the null
    """
    planting = {
        name: planted_templates([*(_from(own.mean(axis=0), x) for x in statistic.species), *features], seed)
        for name, own in means.items()
    }
    tasks = [
        NullTask(statistic, planting[name], part, (seed, name_key(name), k))
        for name, all_means in means.items()
        for k, part in enumerate(np.array_split(all_means, N_CHUNKS))
    ]
    chunks = run_in_order(run_null, tasks, executor)
    out = {}
    for k, name in enumerate(means):
        own = chunks[k * N_CHUNKS : (k + 1) * N_CHUNKS]
        out[name] = NullDraws(
            *(np.concatenate([getattr(c, f) for c in own]) for f in ("weight", "ln_b", "delta_chi2"))
        )
    return out


def _from(mean: np.ndarray, library: Library) -> Library:
    """What leads from the mean of a null to each template."""
    return Library(library.name, (library.exact - mean).astype(np.float32))


# --- tails -------------------------------------------------------------------------------------------------


class Tail:
    """Weighted simulations of one number under one null.

    Parameters
    ----------
    weight, value : ndarray, shape (K, R)
        R simulations about each of K independent means.
    """

    def __init__(self, weight: np.ndarray, value: np.ndarray):
        self._weight, self._value = weight, value
        order = np.argsort(-value, axis=None)
        sorted_weight = weight.ravel()[order]
        total = np.cumsum(sorted_weight)
        effective = total**2 / np.maximum(np.cumsum(sorted_weight**2), 1e-300)
        first = min(int(np.searchsorted(np.maximum.accumulate(effective), FEWEST_EFFECTIVE)), len(order) - 1)
        #: Largest value whose probability is resolved.
        self.resolved = float(value.ravel()[order[first]])

    def chance(self, threshold: float) -> tuple[float, float]:
        """P(value >= threshold) and its Monte Carlo error; beyond what is resolved, that of the last resolved value.

        The latter is an upper bound, because the probability can only fall.
        """
        above = self._value >= min(threshold, self.resolved)
        by_mean = np.sum(self._weight * above, axis=1) / self._weight.shape[1]
        # The simulations about one mean are not independent of each other, the means are.
        err = by_mean.std(ddof=1) / np.sqrt(len(by_mean))
        return float(min(by_mean.mean(), 1.0)), float(err)


def largest_chance(
    tails: Mapping[str, Tail], threshold: float, of_best: Mapping[str, Tail] | None = None
) -> tuple[float, float, dict[str, float]]:
    """Largest p of several nulls, its error, and p by null.

    `of_best` are the tails of the best of several, of which `tails` describes one. The best is reached at least as
    often as one of them, which bounds p where the simulations of that one end.
    """
    found = {name: tail.chance(threshold) for name, tail in tails.items()}
    if of_best is not None:
        found = {name: min(found[name], of_best[name].chance(threshold)) for name in found}
    worst = max(found, key=lambda name: found[name][0])
    return *found[worst], {name: p for name, (p, _) in found.items()}


def is_bound(tails: Mapping[str, Tail], threshold: float, by_null: Mapping[str, float]) -> bool:
    """Whether the largest p of several nulls is only a bound: no simulation resolves so large a value."""
    worst = max(by_null, key=by_null.get)
    return bool(threshold > tails[worst].resolved)


def tails_of(draws: Mapping[str, NullDraws], kind: str, column: int | None) -> dict[str, Tail]:
    """Tails by null of the ln B or fall of chi-square of one species, or of the best (column None)."""
    out = {}
    for name, own in draws.items():
        value = getattr(own, kind)
        out[name] = Tail(own.weight, value.max(axis=2) if column is None else value[:, :, column])
    return out
