"""Which species a spectrum can speak about: bands inside it, tables trusted there, and the range of temperature."""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from transit.errors import SettingError
from transit.opacity import OpacityTable, available, load_table
from transit.records import DepthSpectrum, Priors, System

MOST_DEFAULT_SPECIES = 6
# A table serves a planet when it is trusted over at least this share of the prior range of temperature; the prior is
# then clipped to it.
LEAST_TRUSTED_SHARE = 1 / 3
FEWEST_DEFAULT_BINS = 2
COLDEST_TABLES_K, HOTTEST_TABLES_K = 150.0, 2500.0


@dataclass(frozen=True)
class Selection:
    """Species to fit and why, species that cannot be tested and why, and the common range of temperature.

    `coverage` maps each fitted species to the fraction of the spectrum's bins that its table covers and the number
    of bins inside its trusted bands. `notes` are sentences for the report.
    """

    species: tuple[str, ...]
    reasons: dict[str, str]
    untested: dict[str, str]
    temperature_range_k: tuple[float, float]
    coverage: dict[str, dict]
    notes: tuple[str, ...]


def absorbers(tables: Path | None = None) -> list[str]:
    """Names of the species that have a table (collision pairs left out)."""
    return [name for name in available(tables) if "-" not in name]


def prior_temperature_k(system: System, priors: Priors) -> tuple[float, float]:
    """Temperature range that the priors ask for, before any clipping, K."""
    if priors.temperature_k is not None:
        return priors.temperature_k
    low, high = priors.temperature_teq
    return low * system.equilibrium_temperature_k, high * system.equilibrium_temperature_k


def bins_in_trusted_bands(
    spectrum: DepthSpectrum, table: OpacityTable, temperature_range_k: tuple[float, float]
) -> tuple[np.ndarray, list[dict]]:
    """Which bins lie inside known bands of a species where its table is trusted over a good part of the temperatures.

    Returns
    -------
    (ndarray of bool, shape (N,), list of dict)
        And the trusted ranges that hold over a good part of the temperatures and have such bins.
    """
    low_k, high_k = temperature_range_k
    usable = [
        r
        for r in table.trusted
        if min(high_k, r["t_max_k"]) - max(low_k, r["t_min_k"]) >= LEAST_TRUSTED_SHARE * (high_k - low_k)
    ]
    inside = np.zeros(spectrum.n_bins, bool)
    used = []
    low_bin = spectrum.wavelength_um - spectrum.half_width_um
    high_bin = spectrum.wavelength_um + spectrum.half_width_um
    for trusted in usable:
        hit = np.zeros_like(inside)
        for low, high in table.bands_um:
            start, stop = max(low, trusted["low_um"]), min(high, trusted["high_um"])
            hit |= (spectrum.wavelength_um >= start) & (spectrum.wavelength_um <= stop)
            # A bin wider than the band holds it even when its centre lies outside.
            hit |= (low_bin <= start) & (high_bin >= stop) & (start < stop)
        if hit.any():
            used.append(trusted)
        inside |= hit
    return inside, used


def select_species(
    spectrum: DepthSpectrum, system: System, requested: tuple[str, ...] | None, tables: Path | None = None
) -> Selection:
    """Choose the species to fit, and the temperature range that all hypotheses share.

    Parameters
    ----------
    spectrum : DepthSpectrum
    system : System
    requested : tuple of str or None
        None: at most six species with at least two bins in bands that are trusted at the equilibrium temperature,
        those with most bins first.
    tables : Path, optional

    Returns
    -------
    Selection

    Raises
    ------
    SettingError
        If a species is unknown, or no temperature is left that the tables serve.
    """
    known = absorbers(tables)
    names = known if requested is None else list(dict.fromkeys(requested))
    for name in names:
        if name not in known:
            close = difflib.get_close_matches(name, known, 1, 0.5) or [
                n for n in known if n.lower() == name.lower()
            ]
            hint = f" Did you mean {close[0]}?" if close else ""
            raise SettingError(f"Unknown species {name!r}; known are {', '.join(known)}.{hint}")
    wanted = prior_temperature_k(system, system.priors)
    found: dict[str, tuple[int, OpacityTable, list[dict]]] = {}
    untested: dict[str, str] = {}
    for name in names:
        table = load_table(name, tables)
        inside, usable = bins_in_trusted_bands(spectrum, table, wanted)
        count = int(inside.sum())
        if count > 0:
            found[name] = (count, table, usable)
        elif requested is not None:
            untested[name] = _why_untested(name, table, wanted)
    if requested is None:
        found = {name: entry for name, entry in found.items() if _by_default(*entry, system)}
    ranked = sorted(found, key=lambda name: -found[name][0])
    chosen = ranked if requested is not None else ranked[:MOST_DEFAULT_SPECIES]
    species = tuple(name for name in names if name in chosen)
    reasons = {
        name: _reason(spectrum, found[name][0], found[name][1])
        + (", chosen by default" if requested is None else ", asked for")
        for name in species
    }
    low, high, notes = _clip_temperature(wanted, {name: found[name][2] for name in species}, tables)
    coverage = {}
    for name in species:
        count, table, _ = found[name]
        edges_um = 1e4 / table.edges_cm1[[0, -1]]
        covered = (spectrum.wavelength_um <= edges_um[0]) & (spectrum.wavelength_um >= edges_um[1])
        coverage[name] = {
            "covered_fraction": float(covered.mean()),
            "bins_in_bands": count,
            "bands_covered_fraction": _bands_seen(spectrum, table) / len(table.bands_um),
        }
        notes += _held_constant(name, table, spectrum, (low, high))
        if not covered.all():
            notes += (
                f"{name}: its table covers {100 * covered.mean():.0f} % of the bins; it is transparent in the others.",
            )
    return Selection(species, reasons, untested, (low, high), coverage, notes)


def _by_default(count: int, table: OpacityTable, usable: list[dict], system: System) -> bool:
    """Whether a species is fitted without being asked for: enough bins, trusted at the equilibrium temperature.

    Otherwise a species of one doubtful bin would narrow the temperature prior of all hypotheses.
    """
    temperature_k = min(system.equilibrium_temperature_k, HOTTEST_TABLES_K)
    trusted = any(r["t_min_k"] <= temperature_k <= r["t_max_k"] for r in usable)
    return trusted and count >= FEWEST_DEFAULT_BINS


def _why_untested(name: str, table: OpacityTable, wanted: tuple[float, float]) -> str:
    ranges = "; ".join(
        f"{r['low_um']:g}-{r['high_um']:g} um at {r['t_min_k']:g}-{r['t_max_k']:g} K" for r in table.trusted
    )
    return (
        f"{name}: no bin lies inside one of its bands where its table is trusted over a third of "
        f"{wanted[0]:.0f}-{wanted[1]:.0f} K (trusted: {ranges})."
    )


def _clip_temperature(wanted, usable_by_species, tables):
    """Common range of temperature of all hypotheses: the prior, clipped to what the tables serve."""
    low, high = wanted
    floor, who_low = COLDEST_TABLES_K, "the continuum"
    ceiling, who_high = HOTTEST_TABLES_K, "the continuum"
    for name, usable in usable_by_species.items():
        t_min = min(r["t_min_k"] for r in usable)
        t_max = max(r["t_max_k"] for r in usable)
        if t_min > floor:
            floor, who_low = t_min, name
        if t_max < ceiling:
            ceiling, who_high = t_max, name
    notes = ()
    if low < floor:
        notes += (
            f"Temperature prior clipped from {low:.0f} to {floor:.0f} K: tables of {who_low} begin there.",
        )
    if high > ceiling:
        notes += (
            f"Temperature prior clipped from {high:.0f} to {ceiling:.0f} K: tables of {who_high} end there.",
        )
    clipped = max(low, floor), min(high, ceiling)
    if clipped[0] >= clipped[1]:
        raise SettingError(
            f"The temperature prior {low:.0f}-{high:.0f} K lies outside what the opacity tables serve, "
            f"{floor:.0f}-{ceiling:.0f} K; set temperature_k under [priors], or leave out {who_low} or {who_high}."
        )
    return *clipped, notes


def _bands_seen(spectrum: DepthSpectrum, table: OpacityTable) -> int:
    """How many of a species' known bands hold a bin of the spectrum."""
    return sum(
        bool(np.any((spectrum.wavelength_um >= low) & (spectrum.wavelength_um <= high)))
        for low, high in table.bands_um
    )


def _reason(spectrum: DepthSpectrum, count: int, table: OpacityTable) -> str:
    bins = "1 bin" if count == 1 else f"{count} bins"
    return f"{bins} inside {_bands_seen(spectrum, table)} of its {len(table.bands_um)} bands"


def _held_constant(name, table, spectrum, temperature_range_k) -> tuple[str, ...]:
    """Sentences for wavelengths where the temperature prior leaves the trusted range of a table."""
    notes = []
    for trusted in table.trusted:
        bins = np.sum(
            (spectrum.wavelength_um >= trusted["low_um"]) & (spectrum.wavelength_um <= trusted["high_um"])
        )
        if bins and (
            temperature_range_k[1] > trusted["t_max_k"] * 1.001
            or temperature_range_k[0] < trusted["t_min_k"] * 0.999
        ):
            notes.append(
                f"{name} at {trusted['low_um']:g}-{trusted['high_um']:g} um is trusted at "
                f"{trusted['t_min_k']:g}-{trusted['t_max_k']:g} K only; beyond, its opacity is approximate."
            )
    return tuple(notes)
