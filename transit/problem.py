"""One spectrum with its model, priors and likelihood: everything a fit needs, built from a small picklable recipe."""

from __future__ import annotations

import zlib
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np

from transit.atmosphere import observed_radius_m, planet_gravity_m_s2
from transit.evidence import EvidenceRun, SamplerSettings, estimate_evidence
from transit.hypotheses import DECK_COORDINATE, Hypothesis, Parameter, limb_state, parameters, physical
from transit.likelihood import Collapsed, DepthLikelihood
from transit.models.grid import make_grid
from transit.models.limb import LimbModel
from transit.records import DepthSpectrum, System

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
    """

    spectrum: DepthSpectrum
    system: System
    species: tuple[str, ...]
    temperature_range_k: tuple[float, float]
    tables: Path | None = None

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
    def likelihood(self) -> DepthLikelihood:
        """Likelihood of the spectrum."""
        priors = self.system.priors
        return DepthLikelihood(self.spectrum, self.median_depth, priors.radius_fraction, priors.offset_ppm)

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
            hypothesis, self.system.priors, self.temperature_range_k, self.system.background, inflate
        )

    def heights(
        self, hypothesis: Hypothesis, z: np.ndarray, inflate: bool = False, model: LimbModel | None = None
    ):
        """Mean and mean squared heights (W, N) and error factors for sampler coordinates (W, D)."""
        parameter_set = self.parameters(hypothesis, inflate)
        state, factor = limb_state(
            physical(z, parameter_set), parameter_set, hypothesis, self.system.background
        )
        use = np.array([self.species.index(name) for name in hypothesis.species], int)
        mean, square = (model or self.model).heights(state, use)
        return mean, square, factor

    def collapsed(self, hypothesis: Hypothesis, z: np.ndarray, inflate: bool = False) -> Collapsed:
        """Likelihood integrated over reference radius and offsets, for sampler coordinates (W, D)."""
        mean, square, factor = self.heights(hypothesis, z, inflate)
        return self.likelihood.collapse(mean, square, factor)

    def ln_likelihood(self, hypothesis: Hypothesis, z: np.ndarray, inflate: bool = False) -> np.ndarray:
        """ln likelihood, shape (W,)."""
        value = self.collapsed(hypothesis, z, inflate).ln_evidence
        return np.where(np.isfinite(value), value, LIKELIHOOD_FLOOR)


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
        stratum_dim=DECK_COORDINATE,
        starts_z=task.starts_z,
    )


def share_model(problem: Problem) -> Problem:
    """Prepare the model before workers are started, so that forked ones inherit it."""
    prepared = _share_model(problem)
    _ = prepared.model, prepared.likelihood
    return prepared
