"""Height of an isothermal, hydrostatic limb: closed chord integral with gravity, pressure and cloud-deck terms."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.interpolate import PchipInterpolator

from transit.atmosphere import BACKGROUNDS, REFERENCE_PRESSURE_BAR, mean_molecular_weight, scale_height_m
from transit.models.grid import SLICES, FineGrid, cell_key, cell_slices, slice_orders
from transit.opacity import LN_FLOOR, LN_LEAST, OpacityTable, load_table
from transit.rayleigh import hydrogen_cm2, mixture_cm2
from transit.units import BOLTZMANN_J_K

EULER_GAMMA = 0.5772156649015329
HAZE_REFERENCE_UM = 0.5
# Cross sections are carried in single precision in units of 1e-26 cm2, which keeps products with mixing ratios of
# 1e-12 far from the smallest single-precision number.
CROSS_SECTION_UNIT_CM2 = 1e-26
# Pressures (bar) at which the total cross section is evaluated; ln k is a cubic in ln P through them and straight
# beyond. Against the eight nodes of the tables: 0.01-0.12 H rms at single points, without bias.
NODE_LOG10_BAR = np.linspace(-5.0, 0.0, 4)
TEMPERATURE_STEP_K = 50.0
SMALLEST_RESPONSE = (
    0.15  # least allowed d ln tau / d ln P: a line core loses at most this much on the way down
)
CHUNK = 16


def chord_height(ln_tau):
    """Height of the opaque limb over its lower boundary, in scale heights: gamma + ln tau + E1(tau).

    Parameters
    ----------
    ln_tau : ndarray
        ln of the chord optical depth at the lower boundary, below which everything is opaque.

    Returns
    -------
    ndarray

    Notes
    -----
    Lecavelier des Etangs et al. 2008, A&A 481, L83; de Wit & Seager 2013, Science 342, 1473. E1 is replaced by a
    rational function inside one logarithm, right in both limits and to 2.0e-4 between them.
    """
    tau = np.exp(np.minimum(ln_tau, 16.0))
    tail = 1 / (1 + tau * (0.781490940 + tau * (0.353731904 + tau * (0.136469223 + tau**2 * 0.0168197657))))
    inside = np.log(np.exp(EULER_GAMMA) * tau + tail)
    return np.where(ln_tau > 16.0, EULER_GAMMA + ln_tau, inside)


@dataclass(frozen=True, eq=False)
class LimbState:
    """Parameters of W atmospheres; `vmr` has shape (W, S), the others (W,)."""

    temperature_k: np.ndarray
    ln_deck_pressure_bar: np.ndarray
    ln_haze_strength: np.ndarray
    haze_exponent: np.ndarray
    vmr: np.ndarray


class LimbModel:
    """Limb heights of many atmospheres at once over the bins of one spectrum.

    Parameters
    ----------
    grid : FineGrid
    species : tuple of str
        Absorbers that any hypothesis may use.
    background : str
    reference_radius_m : float
        Radius at which gravity and the chord are evaluated: Rs sqrt(median depth).
    gravity : float
        Gravity at that radius, m/s2.
    temperature_range_k : (float, float)
        Range of the prior; the tables are prepared on a dense grid over it.
    tables : Path, optional
        Folder of opacity tables.

    Notes
    -----
    With k(P) = k_r (P/P_r)^n near the level where the chord optical depth is 0.56, the chord integral stays closed:
    height = H/(1+n) [gamma + ln tau + E1(tau)], chord factor sqrt(2 pi R H / (1+n)). Levels are counted as
    s = ln(10 mbar / P); gravity falling as r^-2 gives r = R / (1 - s H/R), and the chord grows as (r/R)^1.5.
    """

    def __init__(
        self,
        grid: FineGrid,
        species: tuple[str, ...],
        background: str,
        reference_radius_m: float,
        gravity: float,
        temperature_range_k: tuple[float, float],
        tables: Path | None = None,
    ):
        self.grid = grid
        self.species = tuple(species)
        self.background = background
        self.reference_radius_m = reference_radius_m
        self.gravity = gravity
        low, high = temperature_range_k
        count = max(int(np.ceil((high - low) / TEMPERATURE_STEP_K)), 1) + 1
        self.temperature_k = np.linspace(low, high, count)
        self.node_ln_bar = NODE_LOG10_BAR * np.log(10)
        self._table = self._prepare(tables)
        self._middle = 0.5 * (self.node_ln_bar[0] + self.node_ln_bar[-1])
        self._half = (self.node_ln_bar[-1] - self.node_ln_bar[0]) / 2
        self._nodes = (self.node_ln_bar - self._middle) / self._half  # from -1 to 1
        self._to_polynomial = np.linalg.inv(np.vander(self._nodes, increasing=True)).astype(np.float32)
        self._ln_wavelength = np.log(grid.wavelength_um / HAZE_REFERENCE_UM).astype(np.float32)
        self._ln_haze_unit = float(np.log(hydrogen_cm2(HAZE_REFERENCE_UM) / CROSS_SECTION_UNIT_CM2))

    def _prepare(self, tables) -> np.ndarray:
        """Cross sections in single precision, shape (T, 2 + species, J, SLICES, C).

        Row 0 is Rayleigh scattering and row 1 collision-induced absorption of the background gas. Both temperature
        neighbours of an atmosphere lie side by side, for one matrix product.
        """
        grid = self.grid
        n_rows = 2 + len(self.species)
        shape = (len(self.temperature_k), n_rows, len(self.node_ln_bar), SLICES, len(grid.bands))
        out = np.empty(shape, np.float32)
        scattering = mixture_cm2(grid.wavelength_um, BACKGROUNDS[self.background])
        out[:, 0] = scattering / CROSS_SECTION_UNIT_CM2
        out[:, 1] = self._collisions(tables)[:, :, None, :]
        orders = [slice_orders(len(self.species), cell_key(bands)) for bands in grid.bands]
        for row, name in enumerate(self.species):
            ln_k = cell_cross_sections(load_table(name, tables), grid, self.temperature_k, self.node_ln_bar)
            for cell, order in enumerate(orders):
                ln_k[cell] = ln_k[cell][..., order[row]]
            out[:, 2 + row] = np.moveaxis(np.exp(ln_k) / CROSS_SECTION_UNIT_CM2, 0, -1)
        return out

    def _collisions(self, tables) -> np.ndarray:
        """Collision-induced cross section per molecule of pure background gas, 1e-26 cm2, shape (T, J, C)."""
        fractions = BACKGROUNDS[self.background]
        total = np.zeros((len(self.temperature_k), len(self.node_ln_bar), len(self.grid.bands)))
        pairs = {
            "H2-H2": fractions.get("H2", 0) ** 2,
            "H2-He": fractions.get("H2", 0) * fractions.get("He", 0),
        }
        density_cm3 = (
            np.exp(self.node_ln_bar) * 1e-1 / (BOLTZMANN_J_K * self.temperature_k[:, None])
        )  # ideal gas: P / kT, with P in bar
        used = np.unique(np.concatenate(self.grid.bands))
        for pair, share in pairs.items():
            if share > 0:
                ln_cm5 = interpolate_table(load_table(pair, tables), used, self.temperature_k)[:, :, 0, 0]
                by_cell = [
                    np.average(ln_cm5[np.searchsorted(used, bands)], axis=0, weights=weights)
                    for bands, weights in zip(self.grid.bands, self.grid.band_weights, strict=True)
                ]
                total += share * density_cm3[:, :, None] * np.exp(np.stack(by_cell).T)[:, None, :]
        return total / CROSS_SECTION_UNIT_CM2

    def heights(self, state: LimbState, use: np.ndarray | None = None) -> tuple[np.ndarray, np.ndarray]:
        """Mean height and mean squared height over each bin.

        Parameters
        ----------
        state : LimbState
            W atmospheres; `vmr` columns follow `use` (all species when None).
        use : ndarray of int, optional
            Which of the model's species the columns of `vmr` are.

        Returns
        -------
        (ndarray, ndarray), shape (W, N)
            In units of the reference radius (and its square), over the 10 mbar level.
        """
        use = np.arange(len(self.species)) if use is None else np.asarray(use, int)
        names = tuple(self.species[i] for i in use)
        n_walkers = len(state.temperature_k)
        weight = mean_molecular_weight(self.background, names, state.vmr)
        ratio = scale_height_m(state.temperature_k, weight, self.gravity) / self.reference_radius_m
        position = (state.temperature_k - self.temperature_k[0]) / (
            self.temperature_k[1] - self.temperature_k[0]
        )
        node = np.clip(position.astype(int), 0, len(self.temperature_k) - 2)
        share = position - node
        rest = 1 - state.vmr.sum(axis=1, keepdims=True)
        # Pairs of background molecules go with the square of their share.
        mixing = np.concatenate([rest, rest**2, state.vmr], axis=1)
        rows = np.concatenate([[0, 1], 2 + use])
        table = self._table if len(rows) == self._table.shape[1] else self._table[:, rows]
        mean = np.empty((n_walkers, self.grid.averaging.shape[0]))
        mean_square = np.empty_like(mean)
        for value in np.unique(node):
            members = np.flatnonzero(node == value)
            block = table[value : value + 2].reshape(2 * len(rows), -1)
            for start in range(0, len(members), CHUNK):
                walkers = members[start : start + CHUNK]
                coefficient = np.concatenate(
                    [(1 - share[walkers, None]) * mixing[walkers], share[walkers, None] * mixing[walkers]],
                    axis=1,
                )
                total = (coefficient.astype(np.float32) @ block).reshape(len(walkers), *self._table.shape[2:])
                height = self._height(total, state, walkers, ratio[walkers])
                mean[walkers] = self.grid.bin_means(height)
                mean_square[walkers] = self.grid.bin_means(height * height)
        return mean, mean_square

    def _height(self, total, state, walkers, ratio):
        """Heights of the fine points, (W, SLICES, C), from cross sections (W, J, SLICES, C); overwrites `total`."""
        one = np.float32
        haze = np.multiply.outer(state.haze_exponent[walkers].astype(one), self._ln_wavelength)
        haze += (state.ln_haze_strength[walkers, None] + self._ln_haze_unit).astype(one)
        total += np.exp(haze)[:, None, None, :]
        ln_tau_nodes = np.log(total, out=total).reshape(*total.shape[:2], -1)
        ln_tau_nodes += self._node_terms(state, walkers, ratio)[:, :, None].astype(one)
        deck = ((state.ln_deck_pressure_bar[walkers, None] - self._middle) / self._half).astype(one)
        level = _rough_level(ln_tau_nodes, self._nodes)
        np.minimum(level, deck, out=level)
        ln_tau, response = _cubic_at(np.matmul(self._to_polynomial, ln_tau_nodes), level, one(self._half))
        # At the deck, by the power law of the level probed.
        ln_tau += response * ((deck - level) * one(self._half))
        height = _chord_height_single(ln_tau)
        height /= response
        height += one(np.log(REFERENCE_PRESSURE_BAR) - self._middle) - deck * one(self._half)
        # r - R in units of R: s x / (1 - s x) with x = H/R.
        height *= ratio[:, None].astype(one)
        height /= 1 - height
        return height.reshape(len(walkers), *total.shape[2:])

    def _node_terms(self, state, walkers, ratio):
        """ln of density times chord at the pressure nodes, (W, J), without the 1/sqrt(1+n) of the response."""
        s = np.log(REFERENCE_PRESSURE_BAR) - self.node_ln_bar
        shift = np.minimum(ratio[:, None] * s[None, :], 0.8)
        growth = -1.5 * np.log1p(-shift)
        density_cm3 = (
            np.exp(self.node_ln_bar)[None, :] * 1e-1 / (BOLTZMANN_J_K * state.temperature_k[walkers, None])
        )
        chord_cm = 100 * self.reference_radius_m * np.sqrt(2 * np.pi * ratio)[:, None]
        return np.log(density_cm3 * chord_cm * CROSS_SECTION_UNIT_CM2) + growth


def _chord_height_single(ln_tau):
    """`chord_height` in single precision and in place, with few passes over memory."""
    one = np.float32
    tau = np.minimum(ln_tau, one(16.0))
    ln_tau -= tau  # what is above 16 is added back at the end
    np.exp(tau, out=tau)
    tail = tau * tau
    tail *= one(0.0168197657)
    tail += one(0.136469223)
    tail *= tau
    tail += one(0.353731904)
    tail *= tau
    tail += one(0.781490940)
    tail *= tau
    tail += one(1.0)
    np.reciprocal(tail, out=tail)
    tau *= one(np.exp(EULER_GAMMA))
    tau += tail
    np.log(tau, out=tau)
    tau += ln_tau
    return tau


def _rough_level(ln_tau, nodes):
    """Level where the chord optical depth is 0.56, by straight lines between the four nodes.

    Parameters
    ----------
    ln_tau : ndarray, shape (W, 4, M)
        At the nodes, increasing with pressure.
    nodes : ndarray, shape (4,)
        Scaled ln pressures of the nodes, from -1 to 1.

    Returns
    -------
    ndarray, shape (W, M)
        In the units of the nodes; the end lines go on beyond them.
    """
    one = np.float32
    limits = ((-6, 1), (0, 1), (0, 6))
    level = np.full_like(ln_tau[:, 0], nodes[0])
    for k, (low, high) in enumerate(limits):
        step = ln_tau[:, k + 1] - ln_tau[:, k]
        np.maximum(step, one(0.4), out=step)
        part = one(-EULER_GAMMA) - ln_tau[:, k]
        part /= step
        np.clip(part, one(low), one(high), out=part)
        part *= one(nodes[k + 1] - nodes[k])
        level += part
    return level


def _cubic_at(polynomial, level, half):
    """ln tau and its response to ln P at a level, from the cubic through the nodes; straight beyond them.

    Parameters
    ----------
    polynomial : ndarray, shape (W, 4, M)
        Coefficients of ln tau in the scaled ln pressure.
    level : ndarray, shape (W, M)
    half : float
        ln pressure per unit of scaled pressure.

    Returns
    -------
    ln_tau, response : ndarray, shape (W, M)
        The chord factor 1/sqrt(1+n) is included in ln tau; the response is 1 + n.
    """
    one = np.float32
    c0, c1, c2, c3 = (polynomial[:, k] for k in range(4))
    inside = np.clip(level, one(-1), one(1))
    outer = c3 * inside
    inner = outer + c2  # Horner: value and slope together
    value = inner * inside
    value += c1
    slope = inner + outer
    slope += c2  # 2 c2 + 3 c3 x - c3 x
    slope += outer
    slope *= inside
    slope += c1
    value *= inside
    value += c0
    response = slope
    response /= half
    np.maximum(response, one(SMALLEST_RESPONSE), out=response)
    inside -= level
    inside *= response
    inside *= half
    value -= inside
    # Half of ln(response): (x + x^3/3) with x = (response - 1)/(response + 1), within 0.02 for 0.15 to 3.
    x = (response - 1) / (response + 1)
    value -= x * (1 + x * x * one(1 / 3))
    return value, response


def interpolate_table(
    table: OpacityTable,
    bands: np.ndarray,
    temperature_k: np.ndarray,
    ln_pressure_bar: np.ndarray | None = None,
) -> np.ndarray:
    """ln cross section of chosen bands at chosen temperatures and pressures.

    Parameters
    ----------
    table : OpacityTable
    bands : ndarray of int, shape (B,)
        Indices on the common grid; where the table has none the result is very small.
    temperature_k : ndarray, shape (T,)
        Increasing. Held constant beyond the first and last node of the table.
    ln_pressure_bar : ndarray, shape (J,), optional
        None keeps the table's own nodes.

    Returns
    -------
    ndarray, shape (B, T, J, S)

    Notes
    -----
    Monotone cubics in ln P and in ln T between the nodes.
    """
    grid_k = table.temperature_k
    wanted = np.clip(temperature_k, grid_k[0], grid_k[-1])
    # Nodes further than two steps away do not matter to the curve.
    first = max(int(np.searchsorted(grid_k, wanted[0], "right")) - 3, 0)
    last = min(int(np.searchsorted(grid_k, wanted[-1])) + 3, len(grid_k))
    row = bands - table.first_band
    covered = (row >= 0) & (row < table.n_bands)
    values = table.ln_cross_section[row[covered], first:last]
    if ln_pressure_bar is not None:
        values = PchipInterpolator(np.log(table.pressure_bar), values, axis=2)(ln_pressure_bar)
    values = PchipInterpolator(np.log(grid_k[first:last]), values, axis=1)(np.log(wanted))
    # Coefficients of collision pairs (cm5) are far smaller than cross sections (cm2).
    nothing = LN_LEAST if "-" in table.species else LN_FLOOR
    out = np.full((len(bands), *values.shape[1:]), nothing)
    out[covered] = values
    return out


def cell_cross_sections(
    table: OpacityTable, grid: FineGrid, temperature_k: np.ndarray, ln_pressure_bar: np.ndarray
) -> np.ndarray:
    """ln cross section (cm2) of one species in every cell, shape (C, T, J, SLICES), slices in increasing order."""
    used = np.unique(np.concatenate(grid.bands))
    ln_k = interpolate_table(table, used, temperature_k, ln_pressure_bar)
    out = np.empty((len(grid.bands), len(temperature_k), len(ln_pressure_bar), SLICES))
    for cell, (bands, weights) in enumerate(zip(grid.bands, grid.band_weights, strict=True)):
        values = ln_k[np.searchsorted(used, bands)]
        merged = cell_slices(values.reshape(len(bands), -1, values.shape[-1]), weights)
        out[cell] = merged.reshape(out.shape[1:])
    return out
