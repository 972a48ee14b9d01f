"""Every threshold of the verdict in one table, with its source; a system file may change any under `[thresholds]`."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, fields

from transit.errors import SettingError


def _threshold(default: float, allowed: tuple[float, float], source: str):
    return field(default=default, metadata={"source": source, "allowed": allowed})


@dataclass(frozen=True, slots=True)
class Thresholds:
    """Where words begin; all in ln B unless the name says otherwise. `source_of` tells where each comes from.

    Raises
    ------
    SettingError
        If a value is not a finite number, lies outside its range, or a hint would begin above present.
    """

    present_ln_b: float = _threshold(
        5.0,
        (0.0, 100.0),
        "strong evidence, odds of about 150 to 1: Trotta 2008, Contemp. Phys. 49, 71, table 1",
    )
    hint_ln_b: float = _threshold(
        2.5, (0.0, 100.0), "moderate evidence, odds of about 12 to 1: Trotta 2008, table 1"
    )
    rival_ln_b: float = _threshold(
        2.5, (0.0, 100.0), "a rival that is not beaten by moderate evidence (Trotta 2008) stands beside"
    )
    largest_ln_b_err: float = _threshold(0.3, (0.0, 5.0), "ours: about a tenth of the step between two words")
    clear_margin_ln_b: float = _threshold(
        20.0, (0.0, 1000.0), "ours: a doubtful fit is harmless only where words are this far off"
    )
    smallest_share: float = _threshold(
        0.01, (0.0, 1.0), "ours: a smaller share moves the mean evidence by 0.01 at most"
    )
    poor_fit_p: float = _threshold(
        0.001, (0.0, 1.0), "ours: below, errors are taken to be understated or the models to be wrong"
    )
    sensitivity_chance: float = _threshold(
        0.8, (0.01, 0.99), "power of 80 per cent: common practice in the design of experiments"
    )
    sensitivity_scale_heights: float = _threshold(
        3.0,
        (0.1, 100.0),
        "ours: above the 0.9-2.9 scale heights of observed water bands (Iyer et al. 2016, ApJ 823, 109)",
    )
    cool_star_teff_k: float = _threshold(
        4000.0,
        (0.0, 50000.0),
        "stars of type M are cooler (M0 V 3850 K): Pecaut & Mamajek 2013, ApJS 208, 9, from memory",
    )

    def __post_init__(self):
        for entry in fields(self):
            value, (low, high) = getattr(self, entry.name), entry.metadata["allowed"]
            is_number = isinstance(value, int | float) and not isinstance(value, bool)
            if not is_number or not math.isfinite(value) or not low <= value <= high:
                raise SettingError(
                    f"[thresholds] {entry.name} is {value!r}, expected a finite number from {low:g} to {high:g}."
                )
            object.__setattr__(self, entry.name, float(value))
        if self.present_ln_b < self.hint_ln_b:
            raise SettingError(
                f"[thresholds] present_ln_b is {self.present_ln_b:g}, below hint_ln_b ({self.hint_ln_b:g}); expected "
                "it to be at least that."
            )


DEFAULT_THRESHOLDS = Thresholds()


def source_of(name: str) -> str:
    """Where a threshold comes from."""
    return Thresholds.__dataclass_fields__[name].metadata["source"]
