"""How much work an evidence may cost, by number of dimensions."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Budget:
    """Numbers of draws and steps for one seed and one number of dimensions.

    Parameters
    ----------
    pool : int
        Prior draws for the start.
    walkers : int
        Walkers of both chains.
    stage_steps : int
        Steps at each temperature between prior and posterior.
    burn_steps, production_steps : int
        Steps of the chains.
    climb_steps : int
        Steps of the local optimisations; 0 leaves them out.
    outliers : int
        Heavy draws that get a local approximation after each adaptation round.
    rounds, round_draws : int
        Largest number of adaptation rounds, and weighted draws of each.
    final_draws, final_batches : int
        Draws of each batch from the frozen mixture, and the largest number of batches.
    target_err : float
        Own error of ln Z at which no further batch is drawn.
    """

    pool: int
    stage_steps: int
    walkers: int
    burn_steps: int
    climb_steps: int
    outliers: int
    rounds: int
    round_draws: int
    production_steps: int
    final_draws: int
    final_batches: int
    target_err: float


@dataclass(frozen=True)
class SamplerSettings:
    """How much work an evidence may cost.

    Parameters
    ----------
    few : Budget
        For four dimensions or fewer.
    many : Budget
        For ten dimensions or more; between four and ten the numbers are interpolated geometrically.
    """

    few: Budget
    many: Budget

    @classmethod
    def standard(cls) -> SamplerSettings:
        """For results: 20 000 to 50 000 likelihood calls per seed for D <= 4, 80 000 to 150 000 for D >= 10.

        Easy posteriors stop early; the larger numbers are spent where weights are uneven.
        """
        return cls(
            few=Budget(1000, 10, 48, 60, 12, 8, 3, 1500, 120, 4000, 8, 0.015),
            many=Budget(2000, 12, 100, 120, 20, 8, 6, 4000, 150, 10000, 8, 0.04),
        )

    @classmethod
    def quick(cls) -> SamplerSettings:
        """For a first look: up to 8 000 likelihood calls per seed for D <= 4, about 20 000 for D >= 10."""
        return cls(
            few=Budget(500, 8, 24, 40, 6, 4, 2, 500, 40, 1200, 2, 0.05),
            many=Budget(1500, 12, 40, 75, 6, 0, 3, 1000, 40, 3000, 1, 0.1),
        )

    def budget(self, n_dim: int) -> Budget:
        """Budget for a number of dimensions D."""
        position = float(np.clip((n_dim - 4) / 6, 0, 1))
        values = {}
        for name, low in vars(self.few).items():
            high = getattr(self.many, name)
            between = low if low == high else float(low) ** (1 - position) * float(high) ** position
            values[name] = between if name == "target_err" else round(between)
        # emcee splits the walkers into two halves and needs two per dimension.
        values["walkers"] = max(2 * ((values["walkers"] + 1) // 2), 2 * n_dim + 2)
        return Budget(**values)
