"""How each table is made: which source serves where, what is trusted, whom to cite."""

from __future__ import annotations

from functools import cache, partial
from pathlib import Path

import numpy as np
import pandas as pd

from transit.opacity import LN_FLOOR, OpacityTable, band_edges_cm1, band_index
from transit.opacity_builder import alkali
from transit.opacity_builder.bandmeans import BandMeans, effective_width_cm1, read_band_means
from transit.opacity_builder.collisions import coefficient_cm5, read_collision_table
from transit.opacity_builder.completion import completed, missing_mean_cm2
from transit.opacity_builder.distributions import N_SLICES, MalkmusSlices, slice_means
from transit.opacity_builder.linelists import (
    LineList,
    lines_from_gf,
    read_hitran,
    read_partition_sums,
)
from transit.opacity_builder.profiles import LINE_CUTOFF_CM1, SegmentSpectrum, doppler_hwhm_cm1
from transit.units import ATM_BAR

BUILDER_VERSION = "1"
TEMPERATURE_K = np.array(
    [150, 200, 250, 300, 400, 500, 600, 700, 800, 1000, 1200, 1400, 1600, 1800, 2000, 2250, 2500], float
)
PRESSURE_BAR = 10.0 ** np.arange(-6, 2)
COLLISION_TEMPERATURE_K = np.array([150, 200, 250, 300, 350, 400, 600, 800, 1000, 1500, 2000, 2500], float)
MEAN_PRESSURE_BAR = PRESSURE_BAR[4]  # band means are kept at 10 mbar: they hardly depend on pressure
SEGMENT_BANDS = 12  # bands summed in one go: 3 per cent in wavenumber, so one Doppler width serves

HITRAN_TERMS = "HITRAN data are free to use with citation; computed tables may be distributed with it."
CITE_HITRAN = "Gordon et al. 2022, JQSRT 277, 107949 (HITRAN2020) and earlier editions"
CITE_TIPS = "Gamache et al. 2021, JQSRT 271, 107713 (partition sums)"
CITE_BAND_MEANS = "Riviere & Soufiani 2012, Int. J. Heat Mass Transfer 55, 3349 (hot band means)"


# --- slices of bands ---------------------------------------------------------------------------------------


def slices_from_lines(
    lines: LineList,
    first_band: int,
    n_bands: int,
    temperature_k: float,
    pressure_bar: np.ndarray,
    band_means: BandMeans | None = None,
) -> tuple[np.ndarray, np.ndarray]:
    """Slice means of ln k from summed Voigt lines, completed by band means where given.

    Parameters
    ----------
    lines : LineList
    first_band, n_bands : int
        Stretch of the common band grid.
    temperature_k : float
    pressure_bar : ndarray, shape (P,)
    band_means : BandMeans, optional
        Sets the mean that must be reached; nothing is added below its first temperature.

    Returns
    -------
    (ndarray, ndarray), shape (n_bands, P, N_SLICES) and (n_bands,)
        And ln of the band means.
    """
    out = np.full((n_bands, len(pressure_bar), N_SLICES), LN_FLOOR)
    ln_mean = np.full(n_bands, LN_FLOOR)
    missing = None
    if band_means is not None and temperature_k >= band_means.temperature_k[0]:
        missing = missing_mean_cm2(lines, band_means, temperature_k)
    for start in range(0, n_bands, SEGMENT_BANDS):
        count = min(SEGMENT_BANDS, n_bands - start)
        edges = band_edges_cm1(first_band + start, count)
        segment = SegmentSpectrum(lines, edges[0], edges[-1], temperature_k)
        cuts = np.searchsorted(segment.grid_cm1, edges)
        for p, pressure in enumerate(pressure_bar):
            k = segment.cross_section_cm2(pressure)
            if missing is not None:
                k = completed(np.maximum(k, 0), segment.grid_cm1, missing, band_means.centre_cm1)
            ln_k = np.log(np.maximum(k, np.exp(LN_FLOOR)))
            for band in range(count):
                out[start + band, p] = slice_means(ln_k[cuts[band] : cuts[band + 1]])
            if pressure == MEAN_PRESSURE_BAR:
                for band in range(count):
                    mean = k[cuts[band] : cuts[band + 1]].mean()
                    ln_mean[start + band] = np.log(max(mean, np.exp(LN_FLOOR)))
    return out, ln_mean


@cache
def _malkmus() -> MalkmusSlices:
    return MalkmusSlices()


def slices_from_means(
    species: str,
    ln_mean: np.ndarray,
    lines_per_cm1: np.ndarray,
    centre_cm1: np.ndarray,
    temperature_k: float,
    pressure_bar: np.ndarray,
    molar_mass: float,
    gamma_296k: float,
    gamma_exponent: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Slice means of ln k of the Malkmus form with the calibrated effective width.

    Parameters
    ----------
    species : str
        Whose calibration of the effective width to use.
    ln_mean, lines_per_cm1, centre_cm1 : ndarray, shape (B,)
        ln of the mean cross section (-inf: nothing there), inverse line spacing, band centres.
    temperature_k : float
    pressure_bar : ndarray, shape (P,)
    molar_mass, gamma_296k, gamma_exponent : float

    Returns
    -------
    (ndarray, ndarray), shape (B, P, N_SLICES) and (B,)
        And ln of the band means.
    """
    out = np.empty((len(centre_cm1), len(pressure_bar), N_SLICES))
    doppler = doppler_hwhm_cm1(centre_cm1, temperature_k, molar_mass)
    for p, pressure in enumerate(pressure_bar):
        lorentz = gamma_296k * (296.0 / temperature_k) ** gamma_exponent * pressure / ATM_BAR
        width = effective_width_cm1(species, lorentz, doppler, lines_per_cm1)
        out[:, p] = _malkmus()(np.maximum(ln_mean, LN_FLOOR), 2 * width * lines_per_cm1)
    return np.maximum(out, LN_FLOOR), np.maximum(ln_mean, LN_FLOOR)


# --- H2O ---------------------------------------------------------------------------------------------------


def water_lines(source: Path) -> LineList:
    """H2O lines: HITRAN records where there are any, weighted oscillator strengths beyond 5405 cm-1 elsewhere."""
    sums = read_partition_sums(source / "partition_functions/tips_hapi1.3.0.0.csv")
    hitran = read_hitran(source / "hitran/01_H2O.par.gz", sums)
    table = pd.read_csv(source / "hot_linelists/H2O_linemake.csv.gz")
    nu = table["nu_vac_cm-1"].to_numpy()
    table = table[(nu > 5405) & ~((nu >= 6000) & (nu < 6400))]
    rest = lines_from_gf(
        table["nu_vac_cm-1"],
        table["E_lower_cm-1"],
        table["log10_gf_corrected"],
        np.full(len(table), 0.997317),
        np.ones(len(table), int),
        *mean_width(hitran, 1e-23),
        hitran.molar_mass,
        hitran.partition,
    )
    keep = (hitran.wavenumber_cm1 < 5405) | ((hitran.wavenumber_cm1 >= 6000) & (hitran.wavenumber_cm1 < 6400))
    return _merge(_keep(hitran, keep), rest)


def _keep(lines: LineList, keep: np.ndarray) -> LineList:
    return LineList(
        lines.wavenumber_cm1[keep],
        lines.intensity[keep],
        lines.lower_energy_cm1[keep],
        lines.gamma[keep],
        lines.gamma_exponent[keep],
        lines.isotopologue[keep],
        lines.molar_mass,
        lines.partition,
    )


def _merge(a: LineList, b: LineList) -> LineList:
    order = np.argsort(np.concatenate([a.wavenumber_cm1, b.wavenumber_cm1]), kind="stable")

    def both(name):
        return np.concatenate([getattr(a, name), getattr(b, name)])[order]

    return LineList(
        both("wavenumber_cm1"),
        both("intensity"),
        both("lower_energy_cm1"),
        both("gamma"),
        both("gamma_exponent"),
        both("isotopologue"),
        a.molar_mass,
        {**b.partition, **a.partition},
    )


def mean_width(lines: LineList, least_intensity: float) -> tuple[float, float]:
    """Strength-weighted mean air width (cm-1/atm) and its temperature exponent, for lists that have none."""
    strong = lines.intensity > least_intensity
    weights = lines.intensity[strong]
    return (
        float(np.average(lines.gamma[strong], weights=weights)),
        float(np.average(lines.gamma_exponent[strong], weights=weights)),
    )


def _span(low_cm1: float, high_cm1: float) -> tuple[int, int]:
    first = int(band_index(low_cm1 * (1 + 1e-9)))
    return first, int(band_index(high_cm1)) - first


@cache
def _water_inputs(source: Path):
    return water_lines(source), read_band_means(source / "snb_band_model/SNBH2O.txt.gz")


WATER_SPAN = _span(500.0, 12950.0)


def water_at(source: Path, temperature_k: float) -> tuple[np.ndarray, np.ndarray]:
    """Slices of H2O at one temperature, (B, P, S), and ln of the band means, (B,)."""
    lines, means = _water_inputs(source)
    return slices_from_lines(lines, *WATER_SPAN, temperature_k, PRESSURE_BAR, means)


WATER_HEADER = {
    "trusted": [
        {"low_um": 0.90, "high_um": 20.0, "t_min_k": 150, "t_max_k": 2500,
         "error": "5 per cent in the band means to 1000 K; above, what the lines lack is added from hot band means"},
        {"low_um": 0.775, "high_um": 0.90, "t_min_k": 150, "t_max_k": 1000,
         "error": "lines alone, 20 per cent; nothing completes them above 1000 K"},
    ],
    "bands_um": [[0.81, 0.84], [0.91, 0.98], [1.10, 1.18], [1.32, 1.50], [1.77, 1.98], [2.50, 3.10], [4.9, 8.0]],
    "method": f"Voigt lines cut at {LINE_CUTOFF_CM1:g} cm-1, air widths (H2/He widths differ by tens of per cent); "
    "hot gas completed to the band means by displaced copies of the line structure",
    "sources": [CITE_HITRAN, CITE_TIPS, CITE_BAND_MEANS,
                "Placco et al. 2021, RNAAS 5, 92 (line data beyond 5405 cm-1, from HITRAN)"],
    "terms": HITRAN_TERMS,
}  # fmt: skip

# --- CO ----------------------------------------------------------------------------------------------------

CO_ABUNDANCE = {1216: 0.986544, 1316: 0.011084, 1218: 0.001978, 1217: 0.000368}
CO_PARTITION_INDEX = {1216: 1, 1316: 2, 1218: 3, 1217: 4}


def carbon_monoxide_lines(source: Path) -> LineList:
    """CO lines of four isotopologues on the HITRAN strength scale."""
    sums = read_partition_sums(source / "partition_functions/tips_hapi1.3.0.0.csv")
    table = pd.read_csv(source / "hot_linelists/CO_linemake.csv.gz")
    table = table[table["log10_gf_hitran_scale"].notna()]
    kind = table["isotopologue"].astype(int)
    return lines_from_gf(
        table["nu_vac_cm-1"],
        table["E_lower_cm-1"],
        table["log10_gf_hitran_scale"],
        kind.map(CO_ABUNDANCE),
        kind.map(CO_PARTITION_INDEX),
        *mean_width(read_hitran(source / "hitran/05_CO.par.gz", sums), 1e-22),
        27.994915,
        {index: sums[5, index] for index in CO_PARTITION_INDEX.values()},
    )


CO_SPAN = _span(1030.0, 8500.0)


@cache
def _co_inputs(source: Path):
    return carbon_monoxide_lines(source)


def carbon_monoxide_at(source: Path, temperature_k: float) -> tuple[np.ndarray, np.ndarray]:
    """Slices of CO at one temperature, (B, P, S), and ln of the band means, (B,)."""
    return slices_from_lines(_co_inputs(source), *CO_SPAN, temperature_k, PRESSURE_BAR)


CO_HEADER = {
    "trusted": [{"low_um": 1.2, "high_um": 9.5, "t_min_k": 150, "t_max_k": 2500, "error": "5 per cent in the bands"}],
    "bands_um": [[1.56, 1.61], [2.29, 2.42], [4.45, 5.00]],
    "method": f"Voigt lines cut at {LINE_CUTOFF_CM1:g} cm-1, one mean air width for all lines",
    "sources": ["Goorvitch 1994, ApJS 95, 535 (lines), scaled to HITRAN2012 by band",
                "Placco et al. 2021, RNAAS 5, 92 (distribution)", CITE_HITRAN, CITE_TIPS],
    "terms": "Published data, free with citation. " + HITRAN_TERMS,
}  # fmt: skip

# --- CO2 ---------------------------------------------------------------------------------------------------

CO2_SPAN = _span(500.0, 8280.0)
# Stretches where the line list is complete; elsewhere the fine structure is of Malkmus form.
CO2_LINE_STRETCHES_CM1 = ((2028, 2276), (3580, 3600), (4028, 5022), (6028, 6472))
CO2_GAMMA, CO2_GAMMA_EXPONENT = 0.075, 0.70


@cache
def _co2_inputs(source: Path):
    sums = read_partition_sums(source / "partition_functions/tips_hapi1.3.0.0.csv")
    return read_hitran(source / "hitran/02_CO2.par.gz", sums), read_band_means(
        source / "snb_band_model/SNBCO2.txt.gz"
    )


def _overlay_lines(out, band_mean, span, stretches, lines, means, temperature_k):
    """Replace the Malkmus slices by summed lines in the stretches that have a complete list."""
    for low, high in stretches:
        first = int(band_index(low)) + 1
        count = int(band_index(high)) - first
        at = first - span[0]
        out[at : at + count], band_mean[at : at + count] = slices_from_lines(
            lines, first, count, temperature_k, PRESSURE_BAR, means
        )


def carbon_dioxide_at(source: Path, temperature_k: float) -> tuple[np.ndarray, np.ndarray]:
    """Slices of CO2 at one temperature, (B, P, S), and ln of the band means, (B,)."""
    lines, means = _co2_inputs(source)
    edges = band_edges_cm1(*CO2_SPAN)
    centre = np.sqrt(edges[1:] * edges[:-1])
    out, band_mean = slices_from_means(
        "CO2",
        means.ln_mean_at(centre, temperature_k),
        means.lines_per_cm1_at(centre, temperature_k),
        centre,
        temperature_k,
        PRESSURE_BAR,
        43.98983,
        CO2_GAMMA,
        CO2_GAMMA_EXPONENT,
    )
    _overlay_lines(out, band_mean, CO2_SPAN, CO2_LINE_STRETCHES_CM1, lines, means, temperature_k)
    return out, band_mean


CO2_HEADER = {
    "trusted": [{"low_um": 1.21, "high_um": 20.0, "t_min_k": 250, "t_max_k": 2500,
                 "error": "band means 5 per cent; mean ln k of bands without lines uncertain by about 0.5; "
                 "below 300 K continued, with an error (rms of ln k) of 0.1-0.2 at 250 K"}],
    "bands_um": [[1.42, 1.45], [1.57, 1.62], [1.94, 2.09], [2.67, 2.84], [4.15, 4.50], [13.5, 17.0]],
    "method": "hot band means of 25 cm-1 with Malkmus fine structure of calibrated effective width; summed lines, "
    "completed to the band means, at 2028-2276, 3580-3600, 4028-5022 and 6028-6472 cm-1; below 300 K the band means "
    "are continued along the slope of 300-400 K",
    "sources": [CITE_BAND_MEANS, CITE_HITRAN, CITE_TIPS],
    "terms": "Computed from published band parameters, with citation. " + HITRAN_TERMS,
}  # fmt: skip

# --- CH4 ---------------------------------------------------------------------------------------------------

CH4_SPAN = _span(500.0, 20000.0)
CH4_LINE_STRETCHES_CM1 = ((2845, 3228), (3428, 4072))
CH4_GAMMA, CH4_GAMMA_EXPONENT = 0.055, 0.70
CH4_NEAR_INFRARED_START_CM1 = 6150.0
CH4_LUT_END_CM1 = 9295.0
CH4_VISIBLE_START_CM1 = 10010.0
CH4_LUT_GAMMA_CM1 = (
    0.5 * 0.058
)  # half width behind the near-infrared table's beta: about half an atmosphere of air


@cache
def _ch4_inputs(source: Path):
    sums = read_partition_sums(source / "partition_functions/tips_hapi1.3.0.0.csv")
    near_ir = pd.read_csv(source / "ch4_nir/CH4_lut_4033-9300.csv.gz", comment="#")
    visible = pd.read_csv(source / "ch4_nir/CH4_karkoschka1994_300-1000nm.csv.gz", comment="#")
    return (
        read_hitran(source / "hitran/06_CH4.par.gz", sums),
        read_band_means(source / "snb_band_model/SNBCH4.txt.gz"),
        near_ir.to_numpy(float),
        visible.sort_values("nu_cm-1")[["nu_cm-1", "sigma_cm2_per_molecule"]].to_numpy(float),
    )


def _box_mean(nu, values, edges):
    """Mean of samples in each band; bands between samples take the interpolated value."""
    total, _ = np.histogram(nu, bins=edges, weights=np.nan_to_num(values))
    count, _ = np.histogram(nu[np.isfinite(values)], bins=edges)
    centre = np.sqrt(edges[1:] * edges[:-1])
    known = np.isfinite(values)
    return np.where(count > 0, total / np.maximum(count, 1), np.interp(centre, nu[known], values[known]))


def methane_at(source: Path, temperature_k: float) -> tuple[np.ndarray, np.ndarray]:
    """Slices of CH4 at one temperature, (B, P, S), and ln of the band means, (B,)."""
    lines, means, near_ir, visible = _ch4_inputs(source)
    edges = band_edges_cm1(*CH4_SPAN)
    centre = np.sqrt(edges[1:] * edges[:-1])
    ln_mean = means.ln_mean_at(centre, temperature_k)
    density = means.lines_per_cm1_at(centre, temperature_k)
    sigma = _box_mean(near_ir[:, 0], near_ir[:, 1], edges)
    spacing = np.exp(_box_mean(near_ir[:, 0], np.log(near_ir[:, 2]), edges)) / (2 * CH4_LUT_GAMMA_CM1)
    use = (centre > CH4_NEAR_INFRARED_START_CM1) & (centre < CH4_LUT_END_CM1)
    ln_mean = np.where(use, np.log(np.maximum(sigma, 1e-34)), ln_mean)
    density = np.where(use, spacing, density)
    sigma = _box_mean(visible[:, 0], np.maximum(visible[:, 1], 1e-34), edges)
    use = centre > CH4_VISIBLE_START_CM1
    ln_mean = np.where(use, np.log(sigma), ln_mean)
    density = np.where(use, np.median(spacing[(centre > 8000) & (centre < CH4_LUT_END_CM1)]), density)
    nothing = ~np.isfinite(ln_mean)
    density = np.where(nothing | ~np.isfinite(density) | (density <= 0), 1.0, density)
    out, band_mean = slices_from_means(
        "CH4", ln_mean, density, centre, temperature_k, PRESSURE_BAR, 16.0313, CH4_GAMMA, CH4_GAMMA_EXPONENT
    )
    out[nothing] = LN_FLOOR
    _overlay_lines(out, band_mean, CH4_SPAN, CH4_LINE_STRETCHES_CM1, lines, means, temperature_k)
    return out, band_mean


CH4_HEADER = {
    "trusted": [
        {"low_um": 2.5, "high_um": 20.0, "t_min_k": 250, "t_max_k": 1400,
         "error": "band means 10 per cent; mean ln k of bands without lines uncertain by about 0.5; "
         "below 300 K continued, with an error (rms of ln k) of 0.1-0.2 at 250 K"},
        {"low_um": 1.63, "high_um": 2.5, "t_min_k": 250, "t_max_k": 600,
         "error": "hot bands missing above 600 K, where the table is too weak"},
        {"low_um": 1.08, "high_um": 1.63, "t_min_k": 250, "t_max_k": 400,
         "error": "15 per cent at 250-400 K, no temperature dependence"},
        {"low_um": 0.5, "high_um": 0.999, "t_min_k": 150, "t_max_k": 300,
         "error": "band means of cold giant planets, no temperature dependence"},
    ],
    "bands_um": [[0.86, 0.91], [1.13, 1.20], [1.33, 1.44], [1.62, 1.75], [2.20, 2.45], [3.15, 3.50], [7.2, 8.2]],
    "method": "hot band means with Malkmus fine structure of calibrated effective width to 6150 cm-1; summed lines, "
    "completed to the band means, at 2845-3228 and 3428-4072 cm-1; near-infrared and visible band data of one "
    "temperature beyond; nothing at 9295-10010 cm-1",
    "sources": [CITE_BAND_MEANS, CITE_HITRAN, CITE_TIPS,
                "Roger et al. 2024, AMT 17, 1333 (near-infrared transmittances)",
                "Karkoschka 1994, Icarus 111, 174 (0.3-1.0 um)"],
    "terms": "Computed from published band parameters, with citation. " + HITRAN_TERMS,
}  # fmt: skip

# --- Na, K -------------------------------------------------------------------------------------------------

ALKALI_SPAN = {"Na": _span(15450.0, 18480.0), "K": _span(11480.0, 14550.0)}


def alkali_at(
    atom: str, source: Path, temperature_k: float, cutoff_cm1: float = alkali.WING_CUTOFF_CM1
) -> tuple[np.ndarray, np.ndarray]:
    """Slices of an alkali doublet at one temperature, (B, P, S), and ln of the band means, (B,)."""
    doublet = alkali.read_doublet(source / "atomic_Na_K_resonance.csv", atom)
    first, count = ALKALI_SPAN[atom]
    out = np.empty((count, len(PRESSURE_BAR), N_SLICES))
    ln_mean = np.empty(count)
    for band in range(count):
        low, high = band_edges_cm1(first + band, 1)
        grid = low + (high - low) * (np.arange(4000) + 0.5) / 4000
        for p, pressure in enumerate(PRESSURE_BAR):
            k = alkali.doublet_cross_section_cm2(grid, doublet, atom, temperature_k, pressure, cutoff_cm1)
            out[band, p] = slice_means(np.log(np.maximum(k, np.exp(LN_FLOOR))))
            if pressure == MEAN_PRESSURE_BAR:
                ln_mean[band] = np.log(max(k.mean(), np.exp(LN_FLOOR)))
    return out, ln_mean


def _alkali_header(atom: str, low_um: float, high_um: float, band: list[float]) -> dict:
    return {
        "trusted": [{"low_um": low_um, "high_um": high_um, "t_min_k": 150, "t_max_k": 2500,
                     "error": "cores 5 per cent; far wings approximate (Lorentzian)"}],
        "bands_um": [band],
        "method": f"Voigt doublet cut at {alkali.WING_CUTOFF_CM1:g} cm-1 from each line; H2/He impact widths",
        "sources": ["Morton 2003, ApJS 149, 205 (lines)", "Burrows, Marley & Sharp 2000, ApJ 531, 438 (widths)"],
        "terms": "Published data, free with citation.",
    }  # fmt: skip


# --- collision-induced absorption --------------------------------------------------------------------------

COLLISION_SPAN = _span(500.0, 20000.0)
COLLISION_FILES = {
    "H2-H2": ("h2h2_rt_0-2400_fp0.25_40-400K", "h2h2_2500-4000_fp0.25_40-400K",
              "h2h2_rvfund_1000-11000_fp0.25_100-350K", "H2-H2_borysow_1000-7000K"),
    "H2-He": ("h2he_rt_fp0.25_40-400K", "h2he_fundamental_fp0.25_40-400K", "H2-He_jorgensen_1000-7000K"),
}  # fmt: skip


def collisions_at(pair: str, source: Path, temperature_k: float) -> tuple[np.ndarray, np.ndarray]:
    """ln coefficient (cm5 per molecule2) of a collision pair at one temperature, (B, 1, 1) and (B,)."""
    edges = band_edges_cm1(*COLLISION_SPAN)
    centre = np.sqrt(edges[1:] * edges[:-1])
    parts = [read_collision_table(source / f"cia/{name}.csv.gz") for name in COLLISION_FILES[pair]]
    value = coefficient_cm5(parts, centre, temperature_k)
    ln_value = np.log(np.maximum(value, 1e-55))
    return ln_value[:, None, None], ln_value


def _collision_header(pair: str) -> dict:
    cold = "Fletcher et al. 2018, ApJS 235, 24; Orton et al. 2025 (40-400 K, normal hydrogen)"
    hot = {
        "H2-H2": "Borysow, Jorgensen & Fu 2001, JQSRT 68, 235",
        "H2-He": "Jorgensen et al. 2000, A&A 361, 283",
    }
    return {
        "trusted": [{"low_um": 0.5, "high_um": 20.0, "t_min_k": 150, "t_max_k": 2500,
                     "error": "interpolated in ln T between 350 and 1000 K; overtones missing below 1000 K"}],
        "bands_um": [],
        "method": "ln(coefficient / cm5 per molecule2), linear in ln T; one value a band",
        "sources": [cold, f"{hot[pair]} (1000-7000 K)"],
        "terms": "Published data, free with citation.",
    }  # fmt: skip


RECIPES = {
    "H2O": (water_at, WATER_SPAN, TEMPERATURE_K, PRESSURE_BAR, WATER_HEADER),
    "CO": (carbon_monoxide_at, CO_SPAN, TEMPERATURE_K, PRESSURE_BAR, CO_HEADER),
    "CO2": (carbon_dioxide_at, CO2_SPAN, TEMPERATURE_K, PRESSURE_BAR, CO2_HEADER),
    "CH4": (methane_at, CH4_SPAN, TEMPERATURE_K[:12], PRESSURE_BAR, CH4_HEADER),
    "Na": (partial(alkali_at, "Na"), ALKALI_SPAN["Na"], TEMPERATURE_K, PRESSURE_BAR,
           _alkali_header("Na", 0.542, 0.645, [0.575, 0.605])),
    "K": (partial(alkali_at, "K"), ALKALI_SPAN["K"], TEMPERATURE_K, PRESSURE_BAR,
          _alkali_header("K", 0.69, 0.868, [0.755, 0.782])),
    "H2-H2": (partial(collisions_at, "H2-H2"), COLLISION_SPAN, COLLISION_TEMPERATURE_K, np.array([1.0]),
              _collision_header("H2-H2")),
    "H2-He": (partial(collisions_at, "H2-He"), COLLISION_SPAN, COLLISION_TEMPERATURE_K, np.array([1.0]),
              _collision_header("H2-He")),
}  # fmt: skip


def assemble(name: str, by_temperature: list[tuple[np.ndarray, np.ndarray]]) -> OpacityTable:
    """Put the slices of all temperatures of a recipe into a table."""
    _, span, temperature_k, pressure_bar, header = RECIPES[name]
    return OpacityTable(
        species=name,
        first_band=span[0],
        temperature_k=temperature_k,
        pressure_bar=pressure_bar,
        ln_cross_section=np.stack([slices for slices, _ in by_temperature], axis=1),
        ln_mean=np.stack([ln_mean for _, ln_mean in by_temperature], axis=1),
        header={**header, "builder_version": BUILDER_VERSION},
    )
