"""System files: star, planet, priors and thresholds of one target, in TOML."""

from __future__ import annotations

import difflib
import math
import os
import re
import tomllib
from dataclasses import fields
from pathlib import Path

from transit.atmosphere import BACKGROUNDS, equilibrium_temperature_k, gravity_m_s2
from transit.errors import SystemFileError
from transit.records import Priors, System
from transit.system_priors import SPECIES_PRIOR, is_number, priors_from, thresholds_from
from transit.system_template import write_new_system
from transit.thresholds import Thresholds
from transit.units import (
    ASTRONOMICAL_UNIT_M,
    EARTH_MASS_KG,
    EARTH_RADIUS_M,
    JUPITER_MASS_KG,
    JUPITER_RADIUS_M,
    SOLAR_RADIUS_M,
)

__all__ = ["read_system", "write_new_system"]

# Ranges outside which a value is a slip of the unit or the decimal point rather than an unusual planet.
_STAR_RANGES = {
    "radius_rsun": (0.05, 100.0),
    "teff_k": (1500.0, 50000.0),
    "j_mag": (-10.0, 30.0),
}
_PLANET_RANGES = {
    "radius_rjup": (0.005, 10.0),
    "radius_rearth": (0.05, 112.0),
    "mass_mjup": (1e-6, 100.0),
    "mass_mearth": (3e-4, 32000.0),
    "equilibrium_temperature_k": (30.0, 5000.0),
    "semi_major_axis_au": (1e-3, 1000.0),
    "period_d": (0.05, 1e6),
}
_GRAVITY_RANGE_M_S2 = (0.5, 2000.0)
_MAX_BYTES = 1_000_000
_TABLES = ("star", "planet", "priors", "thresholds")


def read_system(path) -> System:
    """Read a system file.

    Parameters
    ----------
    path : str or path-like
        TOML with the tables `[star]`, `[planet]` and, optionally, `[priors]` and `[thresholds]`.

    Returns
    -------
    System
        `notes` says what was computed or converted.

    Raises
    ------
    SystemFileError
        If the file cannot be read, a key is unknown, missing or contradicts another, or a value impossible.

    Notes
    -----
    A missing equilibrium temperature is Teff sqrt(Rs / a) (1/4)^(1/4): albedo 0, full redistribution.

    Examples
    --------
    >>> read_system("target.toml").planet_radius_rjup
    1.02
    """
    shown = os.fspath(path)
    tree = _load(shown)
    _check_keys(tree, shown)
    star, planet = tree.get("star", {}), tree.get("planet", {})
    values = {
        **{f"star.{k}": _number(star, "star", k, r, shown) for k, r in _STAR_RANGES.items() if k in star},
        **{
            f"planet.{k}": _number(planet, "planet", k, r, shown)
            for k, r in _PLANET_RANGES.items()
            if k in planet
        },
    }
    errors = _errors(tree, values, shown)
    notes: list[str] = []
    if "star.radius_rsun" not in values:
        raise SystemFileError(
            "[star] radius_rsun is missing; add the radius of the star in solar radii.", shown
        )
    radius = _either(
        values, errors, "radius_rjup", "radius_rearth", EARTH_RADIUS_M / JUPITER_RADIUS_M, notes, shown
    )
    mass = _either(values, errors, "mass_mjup", "mass_mearth", EARTH_MASS_KG / JUPITER_MASS_KG, notes, shown)
    _check_bodies(values["star.radius_rsun"], radius, mass, shown)
    return System(
        star_radius_rsun=values["star.radius_rsun"],
        planet_radius_rjup=radius,
        planet_mass_mjup=mass,
        equilibrium_temperature_k=_temperature(values, notes, shown),
        star_teff_k=values.get("star.teff_k"),
        star_j_mag=values.get("star.j_mag"),
        planet_name=_name(planet, shown),
        semi_major_axis_au=values.get("planet.semi_major_axis_au"),
        period_d=values.get("planet.period_d"),
        background=_background(planet, shown),
        priors=priors_from(tree.get("priors", {}), shown),
        errors=tuple((_FIELD_OF_KEY[key], error) for key, error in errors.items()),
        source=Path(shown).name,
        notes=tuple(notes),
        thresholds=thresholds_from(tree.get("thresholds", {}), shown),
    )


_FIELD_OF_KEY = {
    "star.radius_rsun": "star_radius_rsun",
    "star.teff_k": "star_teff_k",
    "star.j_mag": "star_j_mag",
    "planet.radius_rjup": "planet_radius_rjup",
    "planet.mass_mjup": "planet_mass_mjup",
    "planet.equilibrium_temperature_k": "equilibrium_temperature_k",
    "planet.semi_major_axis_au": "semi_major_axis_au",
    "planet.period_d": "period_d",
}


# --- file and keys ----------------------------------------------------------------------------------------


def _load(shown: str) -> dict:
    path = Path(shown)
    try:
        if path.is_dir():
            raise SystemFileError("This is a directory, expected a system file in TOML.", shown)
        if not path.exists():
            raise SystemFileError(
                "There is no such file. Check the name, or write a template with `leadline new-system`.",
                shown,
            )
        if path.stat().st_size > _MAX_BYTES:
            raise SystemFileError("The file is larger than 1 MB, expected a system file in TOML.", shown)
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise SystemFileError("The file is not UTF-8 text, expected a system file in TOML.", shown) from error
    except (OSError, ValueError) as error:
        if isinstance(error, SystemFileError):
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise SystemFileError(f"The file cannot be read ({reason}); check its permissions.", shown) from error
    if not text.strip():
        raise SystemFileError(
            "The file is empty, expected [star] and [planet]; `leadline new-system` writes a template.", shown
        )
    try:
        # TOML wants line ends of one kind; the parser accepts both, but not a lone carriage return.
        return tomllib.loads(text.replace("\r\n", "\n"))
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise _syntax_error(str(error), text, shown) from error


def _syntax_error(message: str, text: str, shown: str) -> SystemFileError:
    place = re.search(r"\s*\(at (?:line (\d+), column \d+|end of document)\)", message)
    line = None
    if place:
        line = int(place[1]) if place[1] else max(1, len(text.splitlines()))
        message = message.replace(place[0], "")
    return SystemFileError(
        f"The TOML syntax is wrong ({message}), expected lines such as `radius_rsun = 0.92` and texts in "
        "quotes.",
        shown,
        line,
    )


def _known_keys(table: str) -> list[str]:
    if table == "priors":
        return [*(f.name for f in fields(Priors) if f.name != "log10_vmr_species"), SPECIES_PRIOR + "H2O"]
    if table == "thresholds":
        return [f.name for f in fields(Thresholds)]
    ranges = _STAR_RANGES if table == "star" else _PLANET_RANGES
    texts = [] if table == "star" else ["name", "background"]
    return [*ranges, *texts, *(f"{key}_err" for key in ranges)]


def _check_keys(tree: dict, shown: str) -> None:
    for key, value in tree.items():
        if key not in _TABLES:
            homes = [t for t in _TABLES if key in _known_keys(t)]
            advice = f"It belongs under [{homes[0]}]." if homes else _nearest(key, _TABLES)
            raise SystemFileError(f"Unknown key {key!r} at the top level. {advice}", shown)
        if not isinstance(value, dict):
            raise SystemFileError(f"{key} is {value!r}, expected a table that begins with [{key}].", shown)
    for table in ("star", "planet"):
        if table not in tree:
            raise SystemFileError(
                f"The table [{table}] is missing; add it with the radius of the {table}.", shown
            )
    for table in _TABLES:
        known = _known_keys(table)
        for key in tree.get(table, {}):
            species = table == "priors" and re.fullmatch(SPECIES_PRIOR + r"[A-Z][A-Za-z0-9]*", key)
            if key in known or species:
                continue
            homes = [t for t in _TABLES if t != table and key in _known_keys(t)]
            advice = f"It belongs under [{homes[0]}]." if homes else _nearest(key, known)
            raise SystemFileError(f"Unknown key {key!r} in [{table}]. {advice}", shown)


def _nearest(key: str, known) -> str:
    lowered = {name.lower(): name for name in known}
    match = difflib.get_close_matches(key.lower(), lowered, n=1, cutoff=0.5)
    return f"Did you mean {lowered[match[0]]!r}?" if match else f"Known are: {', '.join(known)}."


# --- values -----------------------------------------------------------------------------------------------


def _number(table: dict, name: str, key: str, allowed: tuple[float, float], shown: str) -> float:
    value = table[key]
    low, high = allowed
    if not is_number(value):
        raise SystemFileError(
            f"[{name}] {key} is {value!r}, expected a finite number without quotes, {low:g} to {high:g}.",
            shown,
        )
    if not low <= value <= high:
        raise SystemFileError(
            f"[{name}] {key} is {value!r}, expected {low:g} to {high:g}. Check the value and its unit.", shown
        )
    return float(value)


def _errors(tree: dict, values: dict[str, float], shown: str) -> dict[str, float]:
    """Return the 1-sigma errors by full key; an error without its value is a slip."""
    errors = {}
    for table, ranges in (("star", _STAR_RANGES), ("planet", _PLANET_RANGES)):
        for key in ranges:
            if f"{key}_err" not in tree[table]:
                continue
            error = tree[table][f"{key}_err"]
            if not is_number(error) or error <= 0:
                raise SystemFileError(f"[{table}] {key}_err is {error!r}, expected a positive number.", shown)
            if f"{table}.{key}" not in values:
                raise SystemFileError(f"[{table}] {key}_err is given without {key}; add {key} too.", shown)
            errors[f"{table}.{key}"] = float(error)
    return errors


def _either(values, errors, jupiter: str, earth: str, factor: float, notes, shown: str) -> float:
    """Return a radius or mass in Jupiter's unit from whichever key is there, converting its error as well."""
    in_jupiter, in_earth = f"planet.{jupiter}", f"planet.{earth}"
    if in_jupiter in values and in_earth in values:
        same = math.isclose(values[in_jupiter], values[in_earth] * factor, rel_tol=0.01)
        how = (
            "both given"
            if same
            else f"both given and differ ({earth} is {values[in_earth] * factor:.4g} {jupiter})"
        )
        raise SystemFileError(f"[planet] {jupiter} and {earth} are {how}; keep one of the two.", shown)
    if in_jupiter in values:
        return values[in_jupiter]
    if in_earth not in values:
        what = jupiter.split("_")[0]
        raise SystemFileError(
            f"The {what} of the planet is missing; add [planet] {jupiter} or {earth}.", shown
        )
    converted = values[in_earth] * factor
    if in_earth in errors:
        errors[in_jupiter] = errors.pop(in_earth) * factor
    notes.append(f"{earth} = {values[in_earth]:g} was converted to {converted:.5g} {jupiter}.")
    return converted


def _check_bodies(star_rsun: float, planet_rjup: float, mass_mjup: float, shown: str) -> None:
    radius_m = planet_rjup * JUPITER_RADIUS_M
    if radius_m > star_rsun * SOLAR_RADIUS_M:
        raise SystemFileError(
            f"The planet ({planet_rjup:.4g} Rjup) is larger than the star ([star] radius_rsun is "
            f"{star_rsun:g}), "
            "expected a smaller one. Check both radii and their units.",
            shown,
        )
    gravity = gravity_m_s2(mass_mjup * JUPITER_MASS_KG, radius_m)
    low, high = _GRAVITY_RANGE_M_S2
    if not low <= gravity <= high:
        raise SystemFileError(
            f"[planet] mass ({mass_mjup:.4g} Mjup) and radius ({planet_rjup:.4g} Rjup) give a gravity of "
            f"{gravity:.4g} m/s2, expected {low:g} to {high:g} m/s2. Check both values and their units.",
            shown,
        )


def _temperature(values: dict[str, float], notes: list[str], shown: str) -> float:
    given = values.get("planet.equilibrium_temperature_k")
    if given is not None:
        return given
    teff, axis_au = values.get("star.teff_k"), values.get("planet.semi_major_axis_au")
    if teff is None or axis_au is None:
        raise SystemFileError(
            "[planet] equilibrium_temperature_k is missing; add it, or both [star] teff_k and [planet] "
            "semi_major_axis_au, from which it is computed.",
            shown,
        )
    star_m = values["star.radius_rsun"] * SOLAR_RADIUS_M
    axis_m = axis_au * ASTRONOMICAL_UNIT_M
    if axis_m <= star_m:
        raise SystemFileError(
            f"[planet] semi_major_axis_au is {axis_au:g}, inside the star "
            f"({star_m / ASTRONOMICAL_UNIT_M:.4g} au), "
            "expected a larger orbit. Check the value and its unit.",
            shown,
        )
    temperature = float(equilibrium_temperature_k(teff, values["star.radius_rsun"], axis_au))
    low, high = _PLANET_RANGES["equilibrium_temperature_k"]
    if not low <= temperature <= high:
        raise SystemFileError(
            "[star] teff_k and [planet] semi_major_axis_au give an equilibrium temperature of "
            f"{temperature:.4g} K, "
            f"expected {low:g} to {high:g} K. Check both values.",
            shown,
        )
    notes.append(
        f"The equilibrium temperature, {temperature:.1f} K, was computed from teff_k and "
        "semi_major_axis_au for "
        "albedo 0 and full redistribution of heat."
    )
    return temperature


def _name(planet: dict, shown: str) -> str:
    name = planet.get("name", System.__dataclass_fields__["planet_name"].default)
    if not isinstance(name, str) or not name.strip() or not name.isprintable():
        raise SystemFileError(f"[planet] name is {name!r}, expected a text in quotes.", shown)
    return name.strip()


def _background(planet: dict, shown: str) -> str:
    background = planet.get("background", System.__dataclass_fields__["background"].default)
    if background not in BACKGROUNDS:
        raise SystemFileError(
            f"[planet] background is {background!r}, expected one of {', '.join(map(repr, BACKGROUNDS))}.",
            shown,
        )
    return background
