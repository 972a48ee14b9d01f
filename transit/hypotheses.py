"""Hypotheses, their parameters and priors: from the unit normal space of the sampler to physical values."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from transit.errors import SettingError
from transit.models.limb import LimbState
from transit.records import Nuisances, Priors


@dataclass(frozen=True)
class Hypothesis:
    """What is fitted: an atmosphere with a set of absorbing species on the common continuum (none for `continuum`).

    Without `atmosphere` the planet is a disc of one depth; with `star` the spectrum is multiplied by what unocculted
    spots and faculae of the star do to it.
    """

    name: str
    species: tuple[str, ...]
    atmosphere: bool = True
    star: bool = False


@dataclass(frozen=True)
class Parameter:
    """A parameter with a uniform prior."""

    name: str
    low: float
    high: float
    unit: str


def sampled_hypotheses(species: tuple[str, ...]) -> tuple[Hypothesis, ...]:
    """Hypotheses that need sampling: `continuum`, each species alone, `all`, and `all` with one left out.

    With one species `all` is that species; with two, `all` without one is the other alone: neither is fitted twice.
    """
    out = [Hypothesis("continuum", ())]
    out += [Hypothesis(name, (name,)) for name in species]
    if len(species) > 1:
        out.append(Hypothesis("all", tuple(species)))
    if len(species) > 2:
        out += [Hypothesis(f"all-{name}", tuple(s for s in species if s != name)) for name in species]
    return tuple(out)


def vmr_range(priors: Priors, species: str) -> tuple[float, float]:
    """Prior range of log10 volume mixing ratio of a species."""
    for name, low, high in priors.log10_vmr_species:
        if name == species:
            return low, high
    return priors.log10_vmr


def parameters(
    hypothesis: Hypothesis,
    priors: Priors,
    temperature_range_k: tuple[float, float],
    background: str,
    inflate: bool = False,
    nuisances: Nuisances | None = None,
    star_grids: int = 1,
) -> tuple[Parameter, ...]:
    """Sampled parameters of a hypothesis, in the order of the sampler's coordinates.

    The reference radius and the offsets of segments, steps and a slope are integrated analytically and are not among
    them. A species that is the background gas itself has no free abundance: it fills what the others leave. Where
    the spectra of the star come from two grids, their blend is a parameter: the spread is a model error.

    Raises
    ------
    SettingError
        If the abundances can add up to 1 or more.
    """
    trace = [name for name in hypothesis.species if name != background]
    ranges = {name: vmr_range(priors, name) for name in trace}
    total = sum(10**high for _, high in ranges.values())
    if total >= 1 - 1e-9:  # ten times a tenth falls short of one by rounding
        raise SettingError(
            f"The upper limits of log10_vmr let {', '.join(trace)} add up to {total:.2f} of the gas; "
            "lower them so that their sum stays below 1."
        )
    nuisances = nuisances or Nuisances()
    out = []
    if hypothesis.atmosphere:
        out += [
            Parameter("temperature_k", *temperature_range_k, "K"),
            Parameter("log10_deck_pressure_bar", *priors.log10_deck_pressure_bar, "log10 bar"),
            Parameter("log10_haze_strength", *priors.log10_haze_strength, "log10 of H2 Rayleigh at 0.5 um"),
            Parameter("haze_exponent", *priors.haze_exponent, ""),
        ]
        if nuisances.patchy:
            out.append(Parameter("cloud_fraction", *priors.cloud_fraction, "of the limb"))
    out += [Parameter(f"log10_vmr_{name}", *ranges[name], "log10") for name in trace]
    if hypothesis.star:
        out += [
            Parameter("spot_fraction", *priors.spot_fraction, "of the disc"),
            Parameter("spot_contrast_k", *priors.spot_contrast_k, "K"),
            Parameter("facula_fraction", *priors.facula_fraction, "of the disc"),
            Parameter("facula_contrast_k", *priors.facula_contrast_k, "K"),
        ]
        if star_grids > 1:
            out.append(
                Parameter("star_grid_mix", *priors.star_grid_mix, "from one grid of stars to the other")
            )
    if nuisances.ar1:
        out.append(Parameter("ar1_coefficient", *priors.ar1_coefficient, ""))
    if inflate or nuisances.inflation:
        low, high = priors.error_factor
        out.append(Parameter("ln_error_factor", float(np.log(low)), float(np.log(high)), "ln"))
    return tuple(out)


DECK_COORDINATE = 1  # position of the deck pressure among the parameters: starts are spread along it


def physical(z: np.ndarray, parameter_set: tuple[Parameter, ...]) -> np.ndarray:
    """Physical values from unit normal coordinates, shape (W, D): uniform priors by the normal distribution."""
    low = np.array([p.low for p in parameter_set])
    high = np.array([p.high for p in parameter_set])
    return low + (high - low) * ndtr(z)


def columns(values: np.ndarray, parameter_set: tuple[Parameter, ...]) -> dict[str, np.ndarray]:
    """Physical values (W, D) by the name of the parameter."""
    return {p.name: values[:, k] for k, p in enumerate(parameter_set)}


def limb_state(
    column: dict[str, np.ndarray], hypothesis: Hypothesis, background: str, n_walkers: int
) -> LimbState:
    """Atmospheres from physical values.

    Parameters
    ----------
    column : dict of ndarray, shape (W,)
        Values by the name of the parameter.
    hypothesis : Hypothesis
    background : str
    n_walkers : int
        W.

    Returns
    -------
    LimbState
        `vmr` columns follow `hypothesis.species`.
    """
    vmr = np.zeros((n_walkers, len(hypothesis.species)))
    for k, name in enumerate(hypothesis.species):
        if name != background:
            vmr[:, k] = 10 ** column[f"log10_vmr_{name}"]
    if background in hypothesis.species:
        k = hypothesis.species.index(background)
        vmr[:, k] = 1 - vmr.sum(axis=1)
    return LimbState(
        temperature_k=column["temperature_k"],
        ln_deck_pressure_bar=column["log10_deck_pressure_bar"] * np.log(10),
        ln_haze_strength=column["log10_haze_strength"] * np.log(10),
        haze_exponent=column["haze_exponent"],
        vmr=vmr,
    )


def noise_values(column: dict[str, np.ndarray]) -> tuple[np.ndarray | float, np.ndarray | None]:
    """Error factor (1 where it is not free) and AR(1) coefficient (None where the noise is white)."""
    factor = np.exp(column["ln_error_factor"]) if "ln_error_factor" in column else 1.0
    return factor, column.get("ar1_coefficient")
