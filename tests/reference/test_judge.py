"""The fast limb model against the slow judge: the same lines, but added one by one and integrated chord by chord.

Target: 0.1 scale heights rms and 0.3 at worst over bins of R = 100 on a hot Saturn (R = 9e7 m, 7 m/s2).
"""

from functools import cache
from itertools import pairwise

import judge
import numpy as np
import pytest

from transit.models.grid import make_grid
from transit.models.limb import LimbModel, LimbState
from transit.opacity import LN_FLOOR, OpacityTable, band_index, write_registry, write_table
from transit.opacity_builder.linelists import LineList
from transit.opacity_builder.recipes import PRESSURE_BAR, slices_from_lines

RADIUS_M, GRAVITY = 9e7, 7.0
NODES_K = np.array([400, 500, 600, 800, 1000, 1200, 1400, 1600, 1800], float)  # those of the shipped tables
RANGE_K = (480.0, 1520.0)
POINTS = 2500
PAIR_CM5 = 1e-46  # H2-H2 between its bands, as near 2000 cm-1 at 500 K
# Where tests/reference/data holds the lines of a species, cm-1.
WINDOWS = {
    "H2O": ((1500, 1560), (2060, 2186), (2990, 3080), (3690, 3800), (4210, 4336), (5230, 5336)),
    "CO": ((2060, 2186), (4210, 4336)),
    "CO2": ((2060, 2186),),
    "CH4": ((2990, 3080),),
}
WATER = ((1500, 1560), (3690, 3800), (5230, 5336))
MIXED = ((2060, 2186), (2990, 3080), (4210, 4336))


def bins_of(windows) -> tuple[tuple[float, float], ...]:
    """Limits of the bins of R = 100 that fill the windows, cm-1."""
    out = []
    for low, high in windows:
        edges = np.geomspace(low, high, max(round(100 * np.log(high / low)), 1) + 1)
        out += [(float(a), float(b)) for a, b in pairwise(edges)]
    return tuple(out)


@pytest.fixture(scope="module")
def tables(tmp_path_factory):
    """Opacity tables that the package's builder makes from the excerpts of line lists."""
    folder = tmp_path_factory.mktemp("tables")
    empty = {"trusted": [], "bands_um": []}
    for species, windows in WINDOWS.items():
        x = judge.excerpt(species)
        lines = LineList(
            x.nu, x.intensity, x.energy, x.gamma, x.exponent, x.isotopologue, x.mass, x.partition
        )
        first, last = int(band_index(windows[0][0])), int(band_index(windows[-1][1]))
        shape = (last - first + 1, len(NODES_K))
        values = np.full((*shape, len(PRESSURE_BAR), 16), LN_FLOOR)
        means = np.full(shape, LN_FLOOR)
        for low, high in windows:
            start = int(band_index(low))
            count = int(band_index(high)) - start + 1
            part = slice(start - first, start - first + count)
            for t, temperature_k in enumerate(NODES_K):
                values[part, t], means[part, t] = slices_from_lines(
                    lines, start, count, temperature_k, PRESSURE_BAR
                )
        table = OpacityTable(species, first, NODES_K, PRESSURE_BAR, values, means, empty)
        write_table(folder / f"{species}.opacity", table)
    first = int(band_index(1400))
    for pair, value in {"H2-H2": np.log(PAIR_CM5), "H2-He": -130.0}.items():
        values = np.full((int(band_index(5500)) - first, len(NODES_K), 1, 1), value)
        table = OpacityTable(pair, first, NODES_K, np.array([1.0]), values, values[:, :, 0, 0], empty)
        write_table(folder / f"{pair}.opacity", table)
    write_registry(folder)
    return folder


@cache
def points_of(limits: tuple[float, float]) -> np.ndarray:
    """Sampled wavenumbers of a bin."""
    return judge.sample_points(*limits, POINTS, seed=7)


@cache
def excerpt(species: str):
    """Lines of a species."""
    return judge.excerpt(species)


@cache
def judged_lines(species: str, limits: tuple[float, float], temperature_k: float) -> np.ndarray:
    """ln cross sections at the sampled wavenumbers of a bin."""
    return judge.ln_cross_sections(excerpt(species), points_of(limits), temperature_k)


def differences(tables, vmr: dict[str, float], windows, temperature_k: float, deck_bar: float):
    """Bin heights of the model less those of the judge, and the judge's own errors, in scale heights."""
    bins = bins_of(windows)
    heights = []
    for limits in bins:
        here = {
            name: judged_lines(name, limits, temperature_k)
            for name in vmr
            if any(low <= limits[0] < high for low, high in WINDOWS[name])
        }
        points = points_of(limits)
        heights.append(
            judge.mean_and_error(
                judge.point_heights(here, vmr, points, temperature_k, RADIUS_M, GRAVITY, deck_bar, PAIR_CM5)
            )
        )
    exact, error = np.array(heights).T
    centre_um = np.array([0.5e4 * (1 / a + 1 / b) for a, b in bins])
    half_um = np.array([0.5e4 * (1 / a - 1 / b) for a, b in bins])
    grid = make_grid(centre_um, half_um)
    model = LimbModel(grid, tuple(vmr), "H2/He", RADIUS_M, GRAVITY, RANGE_K, tables)
    state = LimbState(
        temperature_k=np.array([temperature_k]),
        ln_deck_pressure_bar=np.log([deck_bar]),
        ln_haze_strength=np.array([-50.0]),
        haze_exponent=np.array([-4.0]),
        vmr=np.array([list(vmr.values())]),
    )
    mean, _ = model.heights(state)
    scale_m = judge.scale_height_m(vmr, temperature_k, GRAVITY)
    return mean[0] * RADIUS_M / scale_m - exact, error


def check(difference, error):
    """Hold differences to the target, and the judge to an error that does not matter beside it."""
    assert error.max() < 0.03
    assert np.sqrt(np.mean(difference**2)) < 0.1, difference.round(3)
    assert np.abs(difference).max() < 0.3, difference.round(3)


CASES = {
    "H2O strong": ({"H2O": 1e-3}, WATER),
    "H2O weak": ({"H2O": 1e-5}, WATER),
    "CO strong": ({"CO": 1e-3}, WINDOWS["CO"]),
    "CO weak": ({"CO": 1e-5}, WINDOWS["CO"]),
    "four species": ({"H2O": 1e-3, "CO": 3e-4, "CO2": 1e-5, "CH4": 1e-4}, MIXED),
}


@pytest.mark.parametrize("deck_bar", [10.0, 0.01], ids=["clear", "deck"])
@pytest.mark.parametrize("temperature_k", [500.0, 1000.0, 1500.0])
@pytest.mark.parametrize("case", CASES)
def test_bin_heights_meet_the_judge(tables, case, temperature_k, deck_bar):
    """Bin heights agree within the target, in and between bands, for one species and for mixtures."""
    check(*differences(tables, *CASES[case], temperature_k, deck_bar))


@pytest.mark.parametrize("case", ["H2O strong", "CO strong"])
def test_temperature_between_table_nodes(tables, case):
    """At 900 K, far from the nodes at 800 and 1000 K, the target holds as at a node."""
    check(*differences(tables, *CASES[case], 900.0, 10.0))


@pytest.mark.parametrize("temperature_k", [500.0, 1500.0])
def test_continuum_alone(tables, temperature_k):
    """Rayleigh scattering and collision-induced absorption without lines, where one gives way to the other."""
    windows = (*WATER, (2060, 2186), (4210, 4336))
    check(*differences(tables, {"CO": 1e-30}, windows, temperature_k, 10.0))


# --- the judge itself --------------------------------------------------------------------------------------


def grey(cross_section_cm2: float) -> np.ndarray:
    """ln of a cross section that does not depend on pressure, at one point."""
    return np.full((1, len(judge.LINE_PRESSURES_BAR)), np.log(cross_section_cm2))


def test_judge_meets_published_chord_numbers():
    """A grey gas over an opaque surface, R/H = 100, gravity falling as r^-2, tau = 1e3: 8.277 scale heights.

    Source: numerical chord integration that accompanies the closed form of de Wit & Seager 2013, Science 342, 1473.
    """
    radius_m, temperature_k = 1e8, 1000.0
    weight = judge.mean_weight({})
    gravity = judge.BOLTZMANN_J_K * temperature_k / (weight * judge.ATOMIC_MASS_KG * radius_m / 100)
    density = 0.01 * 0.1 / (judge.BOLTZMANN_J_K * temperature_k)
    sigma = 1e3 / (density * np.sqrt(2 * np.pi * radius_m * radius_m / 100) * 100)
    height = judge.point_heights(
        {"CO": grey(sigma / 1e-12)},
        {"CO": 1e-12},
        np.array([1.0]),
        temperature_k,
        radius_m,
        gravity,
        0.01,
        levels_per_e_fold=20,
    )
    assert height[0] == pytest.approx(8.277, abs=0.005)


def test_judge_meets_half_response_of_pair_absorption():
    """Absorption by pairs, R/H = 300, tau = 1e3 over an opaque surface: 3.7425 scale heights at constant gravity.

    Source: H/2 (gamma + ln tau + E1(tau)), after Lecavelier des Etangs et al. 2008, A&A 481, L83; with gravity
    falling as r^-2 the level s becomes s / (1 - s H/R) and tau grows as (r/R)^1.5.
    """
    radius_m, temperature_k = 1e8, 1000.0
    gravity = judge.BOLTZMANN_J_K * temperature_k
    gravity /= judge.mean_weight({}) * judge.ATOMIC_MASS_KG * radius_m / 300
    density = 0.01 * 0.1 / (judge.BOLTZMANN_J_K * temperature_k)
    chord_cm = np.sqrt(np.pi * radius_m * radius_m / 300) * 100
    pair = 1e3 / (0.85**2 * density**2 * chord_cm)
    height = judge.point_heights(
        {}, {}, np.array([1.0]), temperature_k, radius_m, gravity, 0.01, pair, levels_per_e_fold=20
    )
    level = 3.7425
    for _ in range(3):
        level = 3.7425 - 0.75 * np.log(1 - level / 300)
    assert height[0] == pytest.approx(level / (1 - level / 300), abs=0.01)


def test_judge_far_wings_are_voigt():
    """Taking Lorentz beyond 1 cm-1 changes the sum of Voigt profiles by less than 1e-3."""
    points = points_of((1500, 1515))[::250]
    lines = excerpt("H2O")
    plain = judge.ln_cross_sections(lines, points, 1500.0, near_cm1=judge.CUT_CM1)
    assert judge.ln_cross_sections(lines, points, 1500.0) == pytest.approx(plain, abs=1e-3)
