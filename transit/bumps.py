"""A Gaussian bump of any place, width and height about a base: height in closed form, the rest on cells that adapt."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import erf, log_ndtr, logsumexp, ndtri_exp

from transit.linearised import LinearBase
from transit.prior_width import ln_bayes_factor_uniform_prior
from transit.records import DepthSpectrum

# First cells, and when they are fine enough; tests/unit/test_rivals.py measures what halving them does.
CENTRE_STEP = 0.7  # in widths of the bump
FEWEST_CENTRES = 60  # wide bumps too: without level and slope, little of them is left, and that changes fast
WIDTH_RATIO = 1.25
LARGEST_SHARE = 1 / 1000  # of the evidence in one cell: a posterior spread over a thousand cells is resolved
# Share of the highest ln B (less SHARP_FROM_LN_B: weak peaks are not sharp) that a cell's middle may lose by lying
# beside a peak in the cell. With smaller shares peaks are missed about bases with several free directions.
MISPLACED_LOSS = 1.0
SHARP_FROM_LN_B = 5.0
MOST_HALVINGS = 16
CELLS_AT_ONCE = 2048
LARGEST_WIDTH_SHARE = 1 / 3  # of the spectrum's span in ln wavelength
BLIND_WIDTH = 1e-6  # largest height over its error below which the data say nothing of a bump
# Probabilities at which the posterior of the height in a cell is written down.
NODES = (np.arange(21) + 0.5) / 21


@dataclass(frozen=True, eq=False)
class BumpCells:
    """Rectangles in ln centre and ln width; arrays of shape (K,): middles, half sides, ln of the prior in each."""

    ln_centre: np.ndarray
    ln_width: np.ndarray
    half_centre: np.ndarray
    half_width: np.ndarray
    ln_prior: np.ndarray

    def take(self, rows: np.ndarray) -> BumpCells:
        """Some of the cells."""
        return BumpCells(*(getattr(self, name)[rows] for name in self.__dataclass_fields__))

    def joined(self, other: BumpCells) -> BumpCells:
        """These cells and others."""
        return BumpCells(*(np.append(getattr(self, n), getattr(other, n)) for n in self.__dataclass_fields__))

    def quarters(self) -> BumpCells:
        """Each cell halved in both directions."""
        centre_side, width_side = np.array([-0.5, -0.5, 0.5, 0.5]), np.array([-0.5, 0.5, -0.5, 0.5])
        return BumpCells(
            (self.ln_centre[:, None] + self.half_centre[:, None] * centre_side).ravel(),
            (self.ln_width[:, None] + self.half_width[:, None] * width_side).ravel(),
            np.repeat(self.half_centre / 2, 4),
            np.repeat(self.half_width / 2, 4),
            np.repeat(self.ln_prior - np.log(4), 4),
        )


@dataclass(frozen=True, eq=False)
class BumpPosterior:
    """What the data say of a bump.

    Parameters
    ----------
    ln_bayes_factor : float
        Over the base.
    centre_um, width_ln, weights : ndarray, shape (K,)
        Posterior of centre (micrometre) and width (standard deviation in ln wavelength); weights sum to one.
    heights : ndarray, shape (K, Q)
        Evenly spaced quantiles of the height in each, fraction.
    best_centre_um, best_height : float
        Of the likeliest cell.
    best_shape : ndarray, shape (N,)
        Its bump of height one, averaged over the bins.
    """

    ln_bayes_factor: float
    centre_um: np.ndarray
    width_ln: np.ndarray
    weights: np.ndarray
    heights: np.ndarray
    best_centre_um: float
    best_height: float
    best_shape: np.ndarray


def bump_cells(spectrum: DepthSpectrum, fineness: float = 1.0) -> BumpCells:
    """Cells that cover the prior of a bump.

    Parameters
    ----------
    spectrum : DepthSpectrum
    fineness : float
        The cells are smaller by this factor in both directions.

    Returns
    -------
    BumpCells
        The centre is uniform in ln wavelength from the lowest to the highest edge of a bin; the width log-uniform
        from the median half width of a bin, in ln wavelength, to a third of that range (from a sixth, where bins are
        so wide that less than a factor of two would be left).
    """
    low, high = _ln_edges(spectrum)
    start, span = low.min(), high.max() - low.min()
    widest = LARGEST_WIDTH_SHARE * span
    narrowest = min(float(np.median(high - low)) / 2, widest / 2)
    n_widths = int(np.ceil(np.log(widest / narrowest) / np.log(WIDTH_RATIO) * fineness))
    half_width = np.log(widest / narrowest) / n_widths / 2
    parts = []
    for ln_width in np.log(narrowest) + half_width * (2 * np.arange(n_widths) + 1):
        n = int(np.ceil(max(span / (CENTRE_STEP * np.exp(ln_width)), FEWEST_CENTRES) * fineness))
        half = span / n / 2
        middle = start + half * (2 * np.arange(n) + 1)
        constants = (ln_width, half, half_width, -np.log(n * n_widths))
        parts.append((middle, *(np.full(n, value) for value in constants)))
    return BumpCells(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def bump_shapes(spectrum: DepthSpectrum, ln_centre: np.ndarray, ln_width: np.ndarray) -> np.ndarray:
    """Bumps of height one averaged over the bins.

    Parameters
    ----------
    spectrum : DepthSpectrum
    ln_centre, ln_width : ndarray, shape (K,)
        ln of the centre in micrometre; ln of the width in ln wavelength.

    Returns
    -------
    ndarray, shape (K, N)
        Mean over each bin of exp(-((ln wavelength - ln_centre) / width)^2 / 2): a difference of error functions
        (Abramowitz & Stegun 1964, 7.1.1).
    """
    low, high = _ln_edges(spectrum)
    scale = np.sqrt(2) * np.exp(ln_width)[:, None]
    upper, lower = (high - ln_centre[:, None]) / scale, (low - ln_centre[:, None]) / scale
    return np.sqrt(np.pi) / 2 * scale * (erf(upper) - erf(lower)) / (high - low)


def _ln_edges(spectrum: DepthSpectrum) -> tuple[np.ndarray, np.ndarray]:
    low_um = spectrum.wavelength_um - spectrum.half_width_um
    return np.log(low_um), np.log(spectrum.wavelength_um + spectrum.half_width_um)


def bump_products(
    base: LinearBase, spectrum: DepthSpectrum, white: np.ndarray, cells: BumpCells
) -> tuple[np.ndarray, np.ndarray]:
    """Products g.y, shape (..., K), and g.g, shape (K,), of whitened bumps g with whitened data, shape (..., M)."""
    along, square = [], []
    for first in range(0, len(cells.ln_centre), CELLS_AT_ONCE):
        part = slice(first, first + CELLS_AT_ONCE)
        template = base.whiten_template(bump_shapes(spectrum, cells.ln_centre[part], cells.ln_width[part]))
        along.append(white @ template.T)
        square.append(np.einsum("km,km->k", template, template))
    return np.concatenate(along, axis=-1), np.concatenate(square)


def bump_gains(along: np.ndarray, square: np.ndarray, largest_depth: float) -> np.ndarray:
    """ln B of bumps over the base, the height of each uniform from 0 to a limit.

    Parameters
    ----------
    along, square : ndarray, shapes (..., K) and (K,)
        From `bump_products`.
    largest_depth : float
        Limit of the height, fraction.

    Returns
    -------
    ndarray, shape (..., K)
        `ln_bayes_factor_uniform_prior`; to first order in the height for bumps that the base imitates.
    """
    width = largest_depth * np.sqrt(square)
    blind = width < BLIND_WIDTH
    safe = np.where(blind, 1.0, width)
    gains = ln_bayes_factor_uniform_prior(np.where(blind, 0.0, along * largest_depth / safe), safe)
    return np.where(blind, along * largest_depth / 2, gains)


def find_bump(
    base: LinearBase,
    spectrum: DepthSpectrum,
    white: np.ndarray,
    largest_depth: float,
    fineness: float = 1.0,
) -> BumpPosterior:
    """Evidence and posterior of a bump.

    Parameters
    ----------
    base : LinearBase
    spectrum : DepthSpectrum
        Gives the bins.
    white : ndarray, shape (M,)
        Whitened data.
    largest_depth : float
        The height is uniform from 0 to this, fraction.
    fineness : float
        Of the cells; 1 unless they are themselves put to the test.

    Returns
    -------
    BumpPosterior

    Notes
    -----
    Mid-point rule over the prior of centre and width (`bump_cells`); cells are halved in both directions until none
    holds more than a small share of the evidence. A strong bump is known in place and width far better than any grid
    made before the data would resolve.
    """
    cells = bump_cells(spectrum, fineness)
    along, square = bump_products(base, spectrum, white, cells)
    for halving in range(MOST_HALVINGS + 1):
        gains = bump_gains(along, square, largest_depth)
        ln_mass = gains + cells.ln_prior
        total = float(logsumexp(ln_mass))
        # The heaviest middle need not be in the cell of a sharp peak. What a middle may lose falls with the square of
        # the cells' size, so that at first many neighbours are halved too.
        margin = MISPLACED_LOSS * 4.0**-halving * max(float(gains.max()) - SHARP_FROM_LN_B, 0.0)
        heavy = ln_mass > total + np.log(LARGEST_SHARE / fineness**2) - margin
        if halving == MOST_HALVINGS or np.all(ln_mass <= total + np.log(LARGEST_SHARE / fineness**2)):
            break
        fresh = cells.take(heavy).quarters()
        new_along, new_square = bump_products(base, spectrum, white, fresh)
        cells = cells.take(~heavy).joined(fresh)
        along, square = np.append(along[~heavy], new_along), np.append(square[~heavy], new_square)
    best = int(np.argmax(gains))
    weights = np.exp(ln_mass - total)
    kept = weights > 1e-5 * weights.max()
    return BumpPosterior(
        ln_bayes_factor=total,
        centre_um=np.exp(cells.ln_centre[kept]),
        width_ln=np.exp(cells.ln_width[kept]),
        weights=weights[kept] / weights[kept].sum(),
        heights=_height_quantiles(along[kept], square[kept], largest_depth),
        best_centre_um=float(np.exp(cells.ln_centre[best])),
        best_height=float(np.clip(along[best] / max(square[best], 1e-300), 0.0, largest_depth)),
        best_shape=bump_shapes(spectrum, cells.ln_centre[[best]], cells.ln_width[[best]])[0],
    )


def _height_quantiles(along: np.ndarray, square: np.ndarray, largest_depth: float) -> np.ndarray:
    """Quantiles (K, Q) of heights that are normal within 0 and a limit, from the logarithm of the smaller tail."""
    width = largest_depth * np.sqrt(square)
    blind = (width < BLIND_WIDTH)[:, None]
    w = np.where(blind, 1.0, width[:, None])
    z = np.where(blind, 0.0, along[:, None] * largest_depth / w)
    is_high = z > w / 2
    at_zero, at_limit = np.where(is_high, -z, z), np.where(is_high, w - z, z - w)
    ln_tail = np.logaddexp(np.log1p(-NODES) + log_ndtr(at_zero), np.log(NODES) + log_ndtr(at_limit))
    deviate = np.where(is_high, 1.0, -1.0) * ndtri_exp(ln_tail)
    return largest_depth * np.where(blind, NODES, np.clip((z + deviate) / w, 0.0, 1.0))
