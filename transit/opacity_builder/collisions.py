"""Collision-induced absorption: published tables to one table over temperature and wavenumber."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

# 1 cm-1 amagat-2 in cm5 per molecule squared.
CM5_PER_CM1_AMAGAT2 = 1.38527e-39


def read_collision_table(path: Path) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Read wavenumber (N,), temperature (T,) and coefficient (N, T) in cm-1 amagat-2."""
    table = pd.read_csv(path, comment="#")
    return (
        table.iloc[:, 0].to_numpy(float),
        np.array([float(c) for c in table.columns[1:]]),
        table.iloc[:, 1:].to_numpy(float),
    )


def coefficient_cm5(
    parts: list[tuple[np.ndarray, np.ndarray, np.ndarray]], wavenumber_cm1: np.ndarray, temperature_k: float
) -> np.ndarray:
    """Coefficient at a temperature from several published tables.

    Parameters
    ----------
    parts : list of (wavenumber, temperature, coefficient)
        Tables of one pair; where several cover a wavenumber their sum is taken within a temperature set, since
        rotational and vibrational parts add.
    wavenumber_cm1 : ndarray, shape (N,)
    temperature_k : float
        Between the coldest and hottest node of the parts.

    Returns
    -------
    ndarray, shape (N,)
        cm5 per molecule squared; zero outside the tables.

    Notes
    -----
    ln(coefficient) is interpolated linearly in ln T, also across the gap between the cold (to 350-400 K) and hot
    (from 1000 K) tables.
    """
    cold = [part for part in parts if part[1][-1] < 500]
    hot = [part for part in parts if part[1][-1] > 500]
    nodes: dict[float, np.ndarray] = {}
    for group in (cold, hot):
        # A common set of temperatures for parts that add, here those of the narrowest part.
        low = max(part[1][0] for part in group)
        high = min(part[1][-1] for part in group)
        for node in np.unique(np.clip(np.concatenate([part[1] for part in group]), low, high)):
            nodes[float(node)] = sum(_at_node(part, wavenumber_cm1, node) for part in group)
    grid = np.array(sorted(nodes))
    ln_values = np.log(np.maximum(np.array([nodes[t] for t in grid]), 1e-60))
    position = np.clip(np.searchsorted(grid, temperature_k), 1, len(grid) - 1)
    share = np.log(temperature_k / grid[position - 1]) / np.log(grid[position] / grid[position - 1])
    share = np.clip(share, 0, 1)
    ln_value = ln_values[position - 1] * (1 - share) + ln_values[position] * share
    return np.exp(ln_value) * CM5_PER_CM1_AMAGAT2


def _at_node(part, wavenumber_cm1, temperature_k):
    nu, grid_k, values = part
    ln_values = np.log(np.maximum(values, 1e-60))
    position = np.clip(np.searchsorted(grid_k, temperature_k), 1, len(grid_k) - 1)
    share = np.log(temperature_k / grid_k[position - 1]) / np.log(grid_k[position] / grid_k[position - 1])
    ln_t = ln_values[:, position - 1] * (1 - share) + ln_values[:, position] * share
    return np.where(
        (wavenumber_cm1 >= nu[0]) & (wavenumber_cm1 <= nu[-1]),
        np.exp(np.interp(wavenumber_cm1, nu, ln_t)),
        0.0,
    )
