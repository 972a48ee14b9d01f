"""The tables `[priors]` and `[thresholds]` of a system file."""

from __future__ import annotations

import math
from dataclasses import fields

from transit.errors import SettingError, SystemFileError
from transit.records import Priors
from transit.thresholds import Thresholds

SPECIES_PRIOR = "log10_vmr_"
_PAIR_PRIORS = tuple(
    f.name
    for f in fields(Priors)
    if f.name != "log10_vmr_species" and (isinstance(f.default, tuple) or f.name == "temperature_k")
)
_POSITIVE_PRIORS = ("temperature_teq", "temperature_k", "error_factor")
_ABUNDANCE_PRIORS = ("log10_vmr",)
# Bounds of what a range may hold. A spot is cooler than the photosphere and a facula hotter; neither differs from it
# by more than a star of the main sequence has in hand. A correlation of 1 has no independent noise left.
_LIMITED_PRIORS = {
    "spot_fraction": (0.0, 1.0),
    "facula_fraction": (0.0, 1.0),
    "star_grid_mix": (-1.0, 1.0),
    "cloud_fraction": (0.0, 1.0),
    "spot_contrast_k": (-5000.0, 0.0),
    "facula_contrast_k": (0.0, 5000.0),
    "ar1_coefficient": (0.0, 0.99),
}


def is_number(value) -> bool:
    """Whether a value of a TOML file is a finite number."""
    return isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)


def priors_from(table: dict, shown: str) -> Priors:
    """Priors from the table `[priors]`, its keys known; `shown` names the file.

    Raises
    ------
    SystemFileError
        If a value is of the wrong kind or impossible, or two keys say the same.
    """
    chosen: dict = {}
    species = []
    for key, value in table.items():
        if key in _PAIR_PRIORS:
            chosen[key] = _pair(key, value, shown)
        elif key.startswith(SPECIES_PRIOR):
            species.append((key.removeprefix(SPECIES_PRIOR), *_pair(key, value, shown)))
        else:
            chosen[key] = _positive(key, value, shown)
    if "temperature_k" in chosen and "temperature_teq" in chosen:
        raise SystemFileError(
            "[priors] temperature_k and temperature_teq are both given; keep one of them.", shown
        )
    if chosen.get("radius_fraction", 0.1) > 0.5:
        raise SystemFileError(
            f"[priors] radius_fraction is {chosen['radius_fraction']:g}, expected more than 0 and at most "
            "0.5.",
            shown,
        )
    return Priors(**chosen, log10_vmr_species=tuple(sorted(species)))


def _pair(key: str, value, shown: str) -> tuple[float, float]:
    if not isinstance(value, list) or len(value) != 2 or not all(is_number(v) for v in value):
        raise SystemFileError(
            f"[priors] {key} is {value!r}, expected two finite numbers [lower, upper].", shown
        )
    low, high = (float(v) for v in value)
    if low >= high:
        raise SystemFileError(
            f"[priors] {key} is {value!r}, expected the lower bound before and below the upper one.", shown
        )
    if key in _POSITIVE_PRIORS and low <= 0:
        raise SystemFileError(f"[priors] {key} is {value!r}, expected positive bounds.", shown)
    if (key in _ABUNDANCE_PRIORS or key.startswith(SPECIES_PRIOR)) and high > 0:
        raise SystemFileError(
            f"[priors] {key} is {value!r}, expected an upper bound of at most 0, where the gas is pure.",
            shown,
        )
    if key in _LIMITED_PRIORS:
        lowest, highest = _LIMITED_PRIORS[key]
        if not (lowest <= low and high <= highest):
            raise SystemFileError(
                f"[priors] {key} is {value!r}, expected bounds from {lowest:g} to {highest:g}.", shown
            )
    return low, high


def _positive(key: str, value, shown: str) -> float:
    if not is_number(value) or value <= 0:
        raise SystemFileError(f"[priors] {key} is {value!r}, expected a positive number.", shown)
    return float(value)


def thresholds_from(table: dict, shown: str) -> Thresholds:
    """Thresholds from the table `[thresholds]`, its keys known; `shown` names the file.

    Raises
    ------
    SystemFileError
        If a value is no number, out of range, or contradicts another.
    """
    try:
        return Thresholds(**table)
    except SettingError as error:
        raise SystemFileError(str(error), shown) from error
