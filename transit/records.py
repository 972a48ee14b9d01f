"""Frozen records that move between the stages; arrays are read-only copies and invalid records cannot exist."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from transit.errors import SettingError
from transit.thresholds import Thresholds
from transit.units import PPM


def _frozen(array, dtype=float) -> np.ndarray:
    out = np.array(array, dtype=dtype)
    out.flags.writeable = False
    return out


@dataclass(frozen=True, slots=True, eq=False)
class DepthSpectrum:
    """Transit depth against wavelength, one row per bin, sorted by wavelength.

    Parameters
    ----------
    wavelength_um : ndarray, shape (N,)
        Bin centres, micrometre, non-decreasing (centres may repeat where segments overlap).
    half_width_um : ndarray, shape (N,)
        Half widths of the bins, micrometre, positive.
    depth, depth_err : ndarray, shape (N,)
        Depth as a fraction, and its 1-sigma error.
    segment : ndarray of int, shape (N,), optional
        Index into `segment_names` of the part of the spectrum (instrument, order) a bin belongs to.
    segment_names : tuple of str, optional
        Names of the parts; one part when left out.
    covariance : ndarray, shape (N, N), optional
        Covariance of the depths (fractions squared); its diagonal replaces `depth_err` in every fit.
    source, sha256 : str
        File or citation, and the checksum of the file read.
    notes : tuple of str
        What the reader did or noticed, a sentence each; printed in the report.

    Raises
    ------
    SettingError
        If shapes differ, a number is not finite, an error or width is not positive, or the order is wrong.
    """

    wavelength_um: np.ndarray
    half_width_um: np.ndarray
    depth: np.ndarray
    depth_err: np.ndarray
    segment: np.ndarray | None = None
    segment_names: tuple[str, ...] = ("all",)
    covariance: np.ndarray | None = None
    source: str = ""
    sha256: str = ""
    notes: tuple[str, ...] = ()

    def __post_init__(self):
        for name in ("wavelength_um", "half_width_um", "depth", "depth_err"):
            object.__setattr__(self, name, _frozen(getattr(self, name)))
        segment = np.zeros(len(self.wavelength_um), int) if self.segment is None else self.segment
        object.__setattr__(self, "segment", _frozen(segment, int))
        n = self.wavelength_um.shape
        if len(n) != 1 or any(
            a.shape != n for a in (self.half_width_um, self.depth, self.depth_err, self.segment)
        ):
            raise SettingError("The columns of a depth spectrum differ in length.")
        for name in ("wavelength_um", "half_width_um", "depth", "depth_err"):
            if not np.all(np.isfinite(getattr(self, name))):
                raise SettingError(f"{name} of a depth spectrum holds a value that is not finite.")
        if np.any(self.depth_err <= 0) or np.any(self.half_width_um <= 0):
            raise SettingError("Errors and half widths of a depth spectrum must be positive.")
        if np.any(np.diff(self.wavelength_um) < 0):
            raise SettingError("The bins of a depth spectrum must be sorted by wavelength.")
        if self.segment.min(initial=0) < 0 or self.segment.max(initial=0) >= len(self.segment_names):
            raise SettingError("A bin belongs to a segment that has no name.")
        if self.covariance is not None:
            object.__setattr__(self, "covariance", _frozen(self.covariance))
            if self.covariance.shape != (n[0], n[0]):
                raise SettingError(f"The covariance has shape {self.covariance.shape}, expected {n * 2}.")

    @property
    def n_bins(self) -> int:
        """Number of bins."""
        return len(self.wavelength_um)

    @property
    def depth_ppm(self) -> np.ndarray:
        """Depth in parts per million, shape (N,)."""
        return self.depth / PPM

    @property
    def depth_err_ppm(self) -> np.ndarray:
        """1-sigma error in parts per million, shape (N,)."""
        return self.depth_err / PPM


@dataclass(frozen=True, slots=True)
class Priors:
    """Ranges of the uniform priors (and widths where a prior is normal); a pair is (lower, upper).

    The defaults are those that every report prints; a system file may change any of them under `[priors]`.
    """

    temperature_teq: tuple[float, float] = (0.5, 1.2)  # in units of the equilibrium temperature
    temperature_k: tuple[float, float] | None = None  # set: replaces temperature_teq
    log10_deck_pressure_bar: tuple[float, float] = (-6.0, 1.0)
    log10_vmr: tuple[float, float] = (-12.0, -1.0)
    log10_vmr_species: tuple[tuple[str, float, float], ...] = ()  # exceptions for named species
    log10_haze_strength: tuple[float, float] = (-2.0, 5.0)  # over the Rayleigh scattering of H2 at 0.5 um
    haze_exponent: tuple[float, float] = (-8.0, 0.0)
    radius_fraction: float = 0.2  # half range of the reference radius over Rs sqrt(median depth)
    slope_scale_heights: float = 10.0  # half range of the slope, scale heights per e-fold of wavelength
    offset_ppm: float = 100.0  # standard deviation of the normal prior of a segment's offset
    error_factor: tuple[float, float] = (1.0, 10.0)  # log-uniform, used only when errors are inflated
    step_ppm: float = 300.0  # standard deviation of the normal prior of a detector step, in the rival `step`
    outlier_ppm: float = 500.0  # the same for a single bad bin, in the rival `one-bin`
    bump_scale_heights: float = 10.0  # the bump of the rival `bump` is uniform from 0 to this
    spot_fraction: tuple[float, float] = (0.0, 0.5)  # of the disc outside the chord, rival `star`
    spot_contrast_k: tuple[float, float] = (-1500.0, 0.0)  # spots less photosphere
    facula_fraction: tuple[float, float] = (0.0, 0.5)
    facula_contrast_k: tuple[float, float] = (0.0, 300.0)
    # Blend of the two grids of stellar spectra: 0 the first, 1 the other. Bands of observed late M dwarfs are weaker
    # than in either, by as much as the grids differ (docs/stars.md), so that the range goes beyond the first.
    star_grid_mix: tuple[float, float] = (-0.8, 1.0)
    cloud_fraction: tuple[float, float] = (0.0, 1.0)  # of the limb under the deck, only with patchy cloud
    ar1_coefficient: tuple[float, float] = (0.0, 0.9)  # correlation of neighbours, only with AR(1) noise


@dataclass(frozen=True, slots=True)
class Nuisances:
    """What may vary in every hypothesis alike, besides the level; all but `offsets` are off by default.

    `offsets`: each segment after the first; `step_um` with `steps`: steps at these wavelengths; `slope`: a straight
    line in ln wavelength; `inflation`: a factor on all errors; `ar1`: correlation of neighbouring bins; `patchy`:
    the cloud deck covers a part of the limb only. `step_um` without `steps` is for the rival `step` alone.
    """

    offsets: bool = True
    steps: bool = False
    slope: bool = False
    inflation: bool = False
    ar1: bool = False
    patchy: bool = False
    step_um: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True)
class System:
    """Star and planet, in the units of the system file; None where not given.

    `errors` maps a field name to its 1-sigma error; `notes` are sentences for the report (what was computed or
    assumed). Derived quantities (gravity, scale height) live in `transit.atmosphere`.
    """

    star_radius_rsun: float
    planet_radius_rjup: float
    planet_mass_mjup: float
    equilibrium_temperature_k: float
    star_teff_k: float | None = None
    star_j_mag: float | None = None
    planet_name: str = "unnamed planet"
    semi_major_axis_au: float | None = None
    period_d: float | None = None
    background: str = "H2/He"
    priors: Priors = field(default_factory=Priors)
    errors: tuple[tuple[str, float], ...] = ()
    source: str = ""
    notes: tuple[str, ...] = ()
    thresholds: Thresholds = field(default_factory=Thresholds)


def offset_name(segment: str) -> str:
    """Name of the parameter that holds the offset of a segment."""
    return f"offset_ppm: {segment}"


def step_name(wavelength_um: float) -> str:
    """Name of the parameter that holds the step at a wavelength."""
    return f"step_ppm: {wavelength_um:g} um"


@dataclass(frozen=True, slots=True)
class Interval:
    """Median with the 16 and 84 per cent points of a parameter, and its unit."""

    median: float
    lower: float
    upper: float
    unit: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """One hypothesis fitted to one spectrum; everything a comparison, report or figure needs.

    `parameters` maps names (`temperature_k`, `log10_deck_pressure_bar`, `log10_haze_strength`, `haze_exponent`,
    `log10_vmr_H2O`, `reference_radius_rjup`, `slope_ppm_per_efold`, `error_factor`, and for each segment after the
    first `offset_name(segment)`) to intervals.
    `model_*` are depths (fraction, shape (N,)): 16, 50 and 84 per cent of the posterior, offsets included.
    `fine_*` give the same on a dense wavelength grid for drawing, offsets not included.
    `draws` has shape (S, K): equally weighted posterior draws of the K = len(draw_names) parameters.
    `sampling` holds steps, walkers, autocorr_steps, ess, likelihood_calls, flags (list of str), and
    `converged` (bool); closed-form fits have an empty one with converged True.
    """

    name: str
    species: tuple[str, ...]
    n_free: int
    ln_evidence: float
    ln_evidence_err: float
    chi2: float
    dof: int
    p_chi2: float
    bic: float
    parameters: dict[str, Interval]
    model_lower: np.ndarray
    model_median: np.ndarray
    model_upper: np.ndarray
    draws: np.ndarray
    draw_names: tuple[str, ...]
    sampling: dict
    fine_lower: np.ndarray | None = None
    fine_median: np.ndarray | None = None
    fine_upper: np.ndarray | None = None


@dataclass(frozen=True, slots=True)
class Comparison:
    """One hypothesis against another.

    kind is "alone" (a hypothesis with one species against one null), "left_out" (`all` against `all-X`),
    "feature" (mean evidence of the hypotheses with species against the best null; model is "mean") or "rival" (the
    best hypothesis with a species, or with any when `species` is None, against an explanation without it; `counts`
    is False where the rival is the same feature seen without a name, a bump inside the species' bands).

    The false-alarm probabilities are frequentist and stand beside ln B, never for it: `p_named` that noise reaches
    the observed ln B of this species, `p_best_of_n` that the best of all species tried does, `p_null` p_named by null
    simulated. `p_named` is the largest of these, an upper bound; `p_err` its Monte Carlo error; with `p_is_bound` no
    simulation reaches the observed ln B, and p is that of the largest value resolved. They belong to
    "alone" entries against the best null, to "left_out" and (p_best_of_n only) to "feature".
    """

    kind: str
    species: str | None
    model: str
    against: str
    best_null: bool
    ln_bayes_factor: float
    ln_bayes_factor_err: float
    delta_chi2: float
    ln_bayes_factor_inflated: float | None = None
    ln_bayes_factor_inflated_err: float | None = None
    p_named: float | None = None
    p_best_of_n: float | None = None
    p_err: float | None = None
    p_null: dict[str, float] = field(default_factory=dict)
    p_is_bound: bool = False
    counts: bool = True


@dataclass(frozen=True, slots=True, eq=False)
class Rival:
    """An explanation other than an absorber, on the shoulders of a base hypothesis.

    `name` is "star", "step", "bump" or "one-bin". `base` is "null" (the rival stands on the nulls, and competes with
    every species and with the feature), "all-X" (on the best fit without X: it competes with `species` X only), or the
    fit of all species ("all", or the only one): it stands beside them, and then belongs to what the others must beat.
    `ln_evidence` compares with those of the fits; the inflated pair with those of the inflated fits. `counts`
    maps species to whether the rival counts against them. `phrase` names it in a sentence ("a bump at 1.25 um",
    "spots or faculae of the star"). `parameters` are medians with 68 % intervals.
    """

    name: str
    base: str
    species: str | None
    ln_evidence: float
    ln_evidence_err: float
    phrase: str
    parameters: dict[str, Interval] = field(default_factory=dict)
    ln_evidence_inflated: float | None = None
    ln_evidence_inflated_err: float | None = None
    counts: dict[str, bool] = field(default_factory=dict)
    chi2: float | None = None


@dataclass(frozen=True, slots=True)
class Sensitivity:
    """What a spectrum could show of a species, from bins, errors and priors alone.

    `amplitude_scale_heights` is the peak-to-trough height of the species' own features over the bins at which `ln B`
    against the best null reaches `ln_bayes_factor` with the chance `chance`; None when no amplitude of the prior
    does (`largest_scale_heights` was the largest tried). `sentence` states it.
    """

    amplitude_scale_heights: float | None
    amplitude_err: float | None
    largest_scale_heights: float
    chance: float
    ln_bayes_factor: float
    sentence: str


@dataclass(frozen=True, slots=True, eq=False)
class FalseAlarms:
    """Null distributions of ln B for one very spectrum: its bins, errors, species and priors.

    `ln_bayes_factor` (K,) are values of a table; `p_named` maps species to p at those values (largest of the nulls),
    `p_best_of_n` is for the best of all species; `p_named_err` and `p_best_of_n_err` are Monte Carlo errors.
    `observed` maps species to a dict with the linearised library's ln_bayes_factor of the data, delta_chi2,
    p_named, p_best_of_n, p_err, p_null {null: p}, p_is_bound, p_delta_chi2; key "" is the best of all. `left_out` maps
    species to a dict with ln_bayes_factor, p_named, p_err, p_null, p_is_bound. `error_factor` multiplied the quoted
    errors.
    `smallest_p` is the smallest that the simulation resolves: smaller ones are bounds.
    """

    ln_bayes_factor: np.ndarray
    p_named: dict[str, np.ndarray]
    p_named_err: dict[str, np.ndarray]
    p_best_of_n: np.ndarray
    p_best_of_n_err: np.ndarray
    observed: dict[str, dict]
    left_out: dict[str, dict]
    n_simulations: int
    error_factor: float
    smallest_p: float


@dataclass(frozen=True, slots=True)
class Verdict:
    """Words by species and for the feature, with the sentence that opens the report.

    Words: "present", "hint", "confounded", "interchangeable", "not shown", "untested".
    """

    feature: str
    species: dict[str, str]
    sentence: str


@dataclass(frozen=True, slots=True, eq=False)
class CheckResult:
    """All that `leadline check` found; the report, the figure and the files are drawn from this alone.

    `settings` holds seed, species (list), species_reasons {name: sentence}, untested {name: sentence},
    priors {name: [lower, upper] or number}, quick (bool), tables {species: {...}}, and the like: JSON-ready.
    `inflated` is empty unless all hypotheses were fitted again with free error inflation.
    `fine_wavelength_um` is the grid of the fine models. `bands_um` maps species to the (lower, upper) wavelength
    intervals of its known bands, to be marked in the figure. `warnings` are sentences for the report.
    `with_star` are fits with an inhomogeneous star, `star` and that of star and atmosphere together.
    `timing` maps stage names to wall seconds and is written apart, since it differs from run to run.
    """

    spectrum: DepthSpectrum
    system: System
    settings: dict
    fits: tuple[Fit, ...]
    inflated: tuple[Fit, ...]
    comparisons: tuple[Comparison, ...]
    verdict: Verdict
    scale_height_km: float
    scale_height_ppm: float
    fine_wavelength_um: np.ndarray
    bands_um: dict[str, tuple[tuple[float, float], ...]]
    warnings: tuple[str, ...] = ()
    timing: dict = field(default_factory=dict)
    rivals: tuple[Rival, ...] = ()
    false_alarms: FalseAlarms | None = None
    sensitivity: dict[str, Sensitivity] = field(default_factory=dict)
    with_star: tuple[Fit, ...] = ()

    def fit(self, name: str) -> Fit:
        """Return the fit of the hypothesis `name` (quoted errors)."""
        for fit in self.fits:
            if fit.name == name:
                return fit
        raise KeyError(name)
