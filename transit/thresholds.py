"""Every threshold of the verdict in one table, with its source; a system file may change any under `[thresholds]`."""

from __future__ import annotations

from dataclasses import dataclass, field


def _threshold(default: float, source: str):
    return field(default=default, metadata={"source": source})


@dataclass(frozen=True, slots=True)
class Thresholds:
    """Where words begin. `source_of` tells where each number comes from."""

    present_ln_b: float = _threshold(
        5.0, "strong evidence, odds of about 150 to 1: Trotta 2008, Contemp. Phys. 49, 71, table 1"
    )
    hint_ln_b: float = _threshold(2.5, "moderate evidence, odds of about 12 to 1: Trotta 2008, table 1")
    rival_ln_b: float = _threshold(2.5, "a rival that is not beaten by moderate evidence (Trotta 2008) stands beside")
    largest_ln_b_err: float = _threshold(0.3, "ours: about a tenth of the step between two words")
    clear_margin_ln_b: float = _threshold(20.0, "ours: a doubtful fit is harmless only where words are this far off")
    smallest_share: float = _threshold(0.01, "ours: a smaller share moves the mean evidence by 0.01 at most")
    poor_fit_p: float = _threshold(0.001, "ours: below, errors are taken to be understated or the models to be wrong")
    sensitivity_chance: float = _threshold(0.8, "power of 80 per cent: common practice in the design of experiments")
    sensitivity_scale_heights: float = _threshold(
        3.0, "ours: above the 0.9-2.9 scale heights of observed water bands (Iyer et al. 2016, ApJ 823, 109)"
    )


def source_of(name: str) -> str:
    """Where a threshold comes from."""
    return Thresholds.__dataclass_fields__[name].metadata["source"]
