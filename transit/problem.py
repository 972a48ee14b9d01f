"""One spectrum with its model, priors and likelihood: everything a fit needs, built from a small picklable recipe."""

from __future__ import annotations

import zlib
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path

import numpy as np

from transit.atmosphere import (
    background_molecular_weight,
    observed_radius_m,
    planet_gravity_m_s2,
    scale_height_depth,
    scale_height_m,
)
from transit.errors import SettingError
from transit.evidence import EvidenceRun, SamplerSettings, estimate_evidence
from transit.hypotheses import (
    DECK_COORDINATE,
    Hypothesis,
    Parameter,
    columns,
    limb_state,
    noise_values,
    parameters,
    physical,
)
from transit.likelihood import Collapsed, DepthLikelihood
from transit.models.grid import make_grid
from transit.models.limb import LimbModel
from transit.records import DepthSpectrum, Nuisances, System, offset_name, step_name
from transit.star import StarInBins, contamination
from transit.units import PPM

LIKELIHOOD_FLOOR = -1e30  # stands for impossible models, so that samplers need not meet infinities


@dataclass(frozen=True, eq=False)
class Problem:
    """A spectrum, its system, the species in question and the temperature range all hypotheses share.

    Parameters
    ----------
    spectrum : DepthSpectrum
    system : System
    species : tuple of str
    temperature_range_k : (float, float)
    tables : Path, optional
    nuisances : Nuisances
        What may vary in every hypothesis alike.
    star : StarInBins, optional
        Spectra of the star by temperature; needed by hypotheses with `star`.

    Raises
    ------
    SettingError
        From `likelihood`, if AR(1) noise is asked for beside a covariance matrix.
    """

    spectrum: DepthSpectrum
    system: System
    species: tuple[str, ...]
    temperature_range_k: tuple[float, float]
    tables: Path | None = None
    nuisances: Nuisances = field(default_factory=Nuisances)
    star: StarInBins | None = None

    def __getstate__(self):
        # Workers rebuild the model: it is large, and the recipe is small.
        return {name: self.__dict__[name] for name in self.__dataclass_fields__}

    @cached_property
    def median_depth(self) -> float:
        """Median depth, fraction."""
        return float(np.median(self.spectrum.depth))

    @cached_property
    def reference_radius_m(self) -> float:
        """Observed radius Rs sqrt(median depth), metres."""
        return observed_radius_m(self.system, self.median_depth)

    @cached_property
    def gravity(self) -> float:
        """Gravity at the observed radius, m/s2."""
        return planet_gravity_m_s2(self.system, self.reference_radius_m)

    @cached_property
    def one_scale_height(self) -> float:
        """Depth (fraction) of one scale height at the equilibrium temperature of the background gas."""
        height = scale_height_m(
            self.system.equilibrium_temperature_k,
            background_molecular_weight(self.system.background),
            self.gravity,
        )
        return scale_height_depth(self.reference_radius_m, height, self.system.star_radius_rsun)

    @cached_property
    def abscissa(self) -> np.ndarray:
        """ln wavelength less its mean, shape (N,): the abscissa of every slope."""
        x = np.log(self.spectrum.wavelength_um)
        return x - x.mean()

    @cached_property
    def slope_limit(self) -> float:
        """Half range of the prior of the slope, depth (fraction) per e-fold of wavelength."""
        return self.system.priors.slope_scale_heights * self.one_scale_height

    @cached_property
    def direction_names(self) -> tuple[str, ...]:
        """Parameters that the likelihood integrates analytically, in the order of its directions."""
        names = [offset_name(name) for name in self.spectrum.segment_names[1:] if self.nuisances.offsets]
        if self.nuisances.steps:
            names += [step_name(um) for um in self.nuisances.step_um]
        return (*names, "slope_ppm_per_efold") if self.nuisances.slope else tuple(names)

    @cached_property
    def likelihood(self) -> DepthLikelihood:
        """Likelihood of the spectrum."""
        priors, nuisances = self.system.priors, self.nuisances
        if nuisances.ar1 and self.spectrum.covariance is not None:
            raise SettingError(
                "AR(1) noise was asked for beside a covariance of the bins, expected one of the two: leave out the "
                "nuisance ar1 or the covariance."
            )
        directions, widths = [], []
        if nuisances.steps:
            directions += [(self.spectrum.wavelength_um > um).astype(float) for um in nuisances.step_um]
            widths += [priors.step_ppm * PPM] * len(nuisances.step_um)
        if nuisances.slope:
            # A normal prior with the variance of the uniform one of the hypothesis `slope`.
            directions.append(self.abscissa)
            widths.append(self.slope_limit / np.sqrt(3))
        return DepthLikelihood(
            self.spectrum,
            self.median_depth,
            priors.radius_fraction,
            priors.offset_ppm if nuisances.offsets else 0.0,
            np.stack(directions, axis=1) if directions else None,
            np.array(widths),
        )

    @cached_property
    def model(self) -> LimbModel:
        """Forward model over the bins of the spectrum."""
        return self.model_on(self.spectrum.wavelength_um, self.spectrum.half_width_um)

    def model_on(self, wavelength_um: np.ndarray, half_width_um: np.ndarray) -> LimbModel:
        """Forward model over other bins."""
        return LimbModel(
            make_grid(wavelength_um, half_width_um, self.system.star_teff_k),
            self.species,
            self.system.background,
            self.reference_radius_m,
            self.gravity,
            self.temperature_range_k,
            self.tables,
        )

    def parameters(self, hypothesis: Hypothesis, inflate: bool = False) -> tuple[Parameter, ...]:
        """Sampled parameters of a hypothesis."""
        return parameters(
            hypothesis,
            self.system.priors,
            self.temperature_range_k,
            self.system.background,
            inflate,
            self.nuisances,
            self.star.n_grids if self.star is not None else 1,
        )

    def heights(
        self, hypothesis: Hypothesis, z: np.ndarray, inflate: bool = False, model: LimbModel | None = None
    ):
        """Mean and mean squared heights (W, N) and error factors for sampler coordinates (W, D)."""
        parameter_set = self.parameters(hypothesis, inflate)
        column = columns(physical(z, parameter_set), parameter_set)
        mean, square = self.limb_heights(hypothesis, column, len(z), model)
        return mean, square, noise_values(column)[0]

    def limb_heights(
        self,
        hypothesis: Hypothesis,
        column: dict[str, np.ndarray],
        n_walkers: int,
        model: LimbModel | None = None,
    ) -> tuple[np.ndarray, np.ndarray]:
        """Mean and mean squared heights (W, N) for physical values by name; zero without an atmosphere."""
        model = model or self.model
        if not hypothesis.atmosphere:
            zeros = np.zeros((n_walkers, model.grid.averaging.shape[0]))
            return zeros, zeros
        state = limb_state(column, hypothesis, self.system.background, n_walkers)
        use = np.array([self.species.index(name) for name in hypothesis.species], int)
        mean, square = model.heights(state, use)
        if "cloud_fraction" in column:
            # A limb of two kinds: the deck covers a fraction, the rest is as clear as the prior allows.
            lowest = np.full(n_walkers, self.system.priors.log10_deck_pressure_bar[1] * np.log(10))
            clear = model.heights(replace(state, ln_deck_pressure_bar=lowest), use)
            covered = column["cloud_fraction"][:, None]
            mean = covered * mean + (1 - covered) * clear[0]
            square = covered * square + (1 - covered) * clear[1]
        return mean, square

    def star_factor(self, column: dict[str, np.ndarray]) -> np.ndarray | None:
        """What spots and faculae multiply the depths with, (W, N); None for a hypothesis without them."""
        if "spot_fraction" not in column:
            return None
        star, mix = self.star, column.get("star_grid_mix")
        photosphere = star.photon_flux(np.full(len(column["spot_fraction"]), star.teff_k), mix)
        spot = star.photon_flux(star.teff_k + column["spot_contrast_k"], mix)
        facula = star.photon_flux(star.teff_k + column["facula_contrast_k"], mix)
        return contamination(column["spot_fraction"], column["facula_fraction"], photosphere, spot, facula)

    def predict(self, hypothesis: Hypothesis, z: np.ndarray, inflate: bool = False) -> Prediction:
        """What a hypothesis says at sampler coordinates (W, D)."""
        parameter_set = self.parameters(hypothesis, inflate)
        column = columns(physical(z, parameter_set), parameter_set)
        mean, square = self.limb_heights(hypothesis, column, len(z))
        factor, ar1 = noise_values(column)
        return Prediction(mean, square, factor, self.star_factor(column), ar1)

    def collapsed(self, hypothesis: Hypothesis, z: np.ndarray, inflate: bool = False) -> Collapsed:
        """Likelihood integrated over reference radius and offsets, for sampler coordinates (W, D)."""
        said = self.predict(hypothesis, z, inflate)
        return self.likelihood.collapse(
            said.mean_height,
            said.mean_square_height,
            said.error_factor,
            bin_factor=said.bin_factor,
            ar1=said.ar1,
        )

    def ln_likelihood(self, hypothesis: Hypothesis, z: np.ndarray, inflate: bool = False) -> np.ndarray:
        """ln likelihood, shape (W,)."""
        value = self.collapsed(hypothesis, z, inflate).ln_evidence
        return np.where(np.isfinite(value), value, LIKELIHOOD_FLOOR)


@dataclass(frozen=True, eq=False)
class Prediction:
    """Heights (W, N), error factors, factors on the bins (W, N) and AR(1) coefficients (W,) of W models."""

    mean_height: np.ndarray
    mean_square_height: np.ndarray
    error_factor: np.ndarray | float
    bin_factor: np.ndarray | None = None
    ar1: np.ndarray | None = None


@dataclass(frozen=True, eq=False)
class FitTask:
    """One fit of one hypothesis with one of the independent seeds.

    `starts_z` are places, shape (K, D), from which the local optimisation starts besides its own: the best points
    of other runs of the same hypothesis.
    """

    problem: Problem
    hypothesis: Hypothesis
    seed: int
    run: int
    settings: SamplerSettings
    inflate: bool = False
    starts_z: np.ndarray | None = None


_prepared: dict[str, Problem] = {}


def _share_model(problem: Problem) -> Problem:
    """Use the model that this process has already built for the same recipe."""
    key = repr(
        (
            problem.spectrum.wavelength_um.tobytes(),
            problem.spectrum.depth.tobytes(),
            problem.spectrum.depth_err.tobytes(),
            problem.system,
            problem.species,
            problem.temperature_range_k,
            problem.tables,
            problem.nuisances,
            b"" if problem.spectrum.covariance is None else problem.spectrum.covariance.tobytes(),
            problem.spectrum.segment.tobytes(),
            None if problem.star is None else problem.star.key,
        )
    )
    if key not in _prepared:
        _prepared.clear()  # one problem at a time: its model is the largest thing in memory
        _prepared[key] = problem
    return _prepared[key]


def run_fit(task: FitTask) -> EvidenceRun:
    """Fit one hypothesis: a pure function of the task, fit for any executor.

    The random stream depends on the seed, the name of the hypothesis and the number of the run only, so that results
    do not depend on what else is fitted, or where.
    """
    problem = _share_model(task.problem)
    stream = np.random.SeedSequence([task.seed, zlib.crc32(task.hypothesis.name.encode()), task.run])
    return estimate_evidence(
        lambda z: problem.ln_likelihood(task.hypothesis, z, task.inflate),
        len(problem.parameters(task.hypothesis, task.inflate)),
        stream,
        task.settings,
        stratum_dim=DECK_COORDINATE if task.hypothesis.atmosphere else None,
        starts_z=task.starts_z,
    )


def share_model(problem: Problem) -> Problem:
    """Prepare the model before workers are started, so that forked ones inherit it."""
    prepared = _share_model(problem)
    _ = prepared.model, prepared.likelihood
    return prepared
