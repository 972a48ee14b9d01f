"""The fast limb model: limits, monotony, backgrounds, and independence of how it is called."""

from functools import cache

import numpy as np
import pytest
from scipy.special import exp1

from transit.atmosphere import BACKGROUNDS, mean_molecular_weight, scale_height_m
from transit.models.grid import SLICES, cell_slices, make_grid, slice_orders
from transit.models.limb import LimbModel, LimbState, chord_height, interpolate_table
from transit.opacity import LN_FLOOR, load_table

RADIUS_M, GRAVITY = 9e7, 8.0
RANGE_K = (500.0, 1200.0)
SPECIES = ("H2O", "CO2", "CO")
WAVELENGTH_UM = np.array([0.6, 1.15, 1.4, 2.0, 2.35, 3.3, 4.3, 4.7])
HALF_UM = WAVELENGTH_UM / 200


@cache
def limb(species=SPECIES, background="H2/He", range_k=RANGE_K) -> LimbModel:
    """A model over eight bins of R = 100."""
    return LimbModel(make_grid(WAVELENGTH_UM, HALF_UM), species, background, RADIUS_M, GRAVITY, range_k)


def atmospheres(vmr, temperature_k=900.0, deck=1.0, haze=-10.0, exponent=-4.0) -> LimbState:
    """Atmospheres from log10 deck pressure and haze strength; scalars are repeated for every row of `vmr`."""
    vmr = np.atleast_2d(np.asarray(vmr, float))

    def column(value):
        return np.broadcast_to(np.asarray(value, float), len(vmr)).copy()

    return LimbState(
        temperature_k=column(temperature_k),
        ln_deck_pressure_bar=column(deck) * np.log(10),
        ln_haze_strength=column(haze) * np.log(10),
        haze_exponent=column(exponent),
        vmr=vmr,
    )


def scale_height(temperature_k=900.0, background="H2/He") -> float:
    """Scale height without absorbers, in units of the reference radius."""
    weight = mean_molecular_weight(background, (), np.zeros((1, 0)))
    return float(scale_height_m(temperature_k, weight, GRAVITY)[0]) / RADIUS_M


def test_closed_chord_height():
    """gamma + ln tau + E1(tau) from thin to thick: de Wit & Seager 2013, Science 342, 1473; 2.0e-4 as declared."""
    ln_tau = np.linspace(-12, 15, 400)
    tau = np.exp(ln_tau)
    assert np.abs(chord_height(ln_tau) - (np.euler_gamma + ln_tau + exp1(tau))).max() < 2.1e-4
    assert chord_height(np.log([1e-2, 1.0, 1e3, 1e5])) == pytest.approx(
        [0.009975, 0.796599, 7.4850, 12.0901], abs=3e-4
    )


def test_zero_abundance_equals_continuum():
    """An abundance of 1e-30 gives the same heights as leaving the species out."""
    traces, _ = limb().heights(atmospheres([1e-30] * 3))
    continuum, _ = limb().heights(atmospheres(np.zeros((1, 0))), use=np.array([], int))
    assert traces == pytest.approx(continuum, abs=1e-3 * scale_height())


def test_subset_equals_full_set_with_zeros():
    """Asking for some species gives what all give with the others at nothing."""
    some, _ = limb().heights(atmospheres([1e-4]), use=np.array([1]))
    every, _ = limb().heights(atmospheres([1e-30, 1e-4, 1e-30]))
    assert some == pytest.approx(every, abs=1e-3 * scale_height())


@pytest.mark.parametrize("background", BACKGROUNDS)
def test_heights_are_finite_at_all_corners_of_the_priors(background):
    """Temperature, deck, haze, exponent and abundances at their extremes in all combinations give finite heights."""
    corners = np.array(np.meshgrid([500.0, 1200.0], [-6.0, 1.0], [-2.0, 5.0], [-8.0, 0.0], [-12.0, -1.0], [-12.0, -1.0],
                                   [-12.0, -1.0])).reshape(7, -1)  # fmt: skip
    vmr = 10 ** corners[4:].T
    if background in SPECIES:
        vmr[:, SPECIES.index(background)] = 0
        vmr[:, SPECIES.index(background)] = 1 - vmr.sum(axis=1)
    mean, square = limb(background=background).heights(
        atmospheres(vmr, corners[0], corners[1], corners[2], corners[3])
    )
    assert np.all(np.isfinite(mean))
    assert np.all(np.isfinite(square))
    assert np.all(square >= mean**2 * (1 - 1e-4) - 1e-12)
    assert np.all(mean > -1)


def test_heights_are_finite_from_cold_to_hot():
    """The whole range of the tables, and beyond both its ends, gives finite heights."""
    model = limb(("H2O",), "H2/He", (100.0, 3000.0))
    temperature_k = np.linspace(100, 3000, 30)
    mean, _ = model.heights(atmospheres(np.full((30, 1), 1e-3), temperature_k, -1.0))
    assert np.all(np.isfinite(mean))


@pytest.mark.parametrize("column", range(3))
def test_heights_grow_with_abundance(column):
    """More of a trace absorber never lowers a bin; where it absorbs, three decades raise it by several heights.

    The cubic through four pressure nodes rings where lines rise out of the continuum: up to 0.03 H in one step.
    """
    vmr = np.full((19, 3), 1e-12)
    vmr[:, column] = np.logspace(-12, -3, 19)
    mean, _ = limb().heights(atmospheres(vmr))
    step = np.diff(mean, axis=0) / scale_height()
    assert step.min() > -0.05
    assert (mean[-1] - mean[-7]).max() > 2.5 * scale_height()


def test_slope_of_growth_is_one_scale_height_per_e_fold():
    """Where the response d ln tau/d ln P is 1, an e-fold of abundance lifts the limb by one scale height or less."""
    vmr = np.full((2, 3), 1e-12)
    vmr[:, 1] = [1e-5, np.e * 1e-5]
    mean, _ = limb().heights(atmospheres(vmr))
    rise = np.diff(mean, axis=0)[0, 6] / scale_height()
    assert 0.5 < rise < 1.15


def test_deck_caps_from_below():
    """Nothing lies lower than the deck, a deep deck changes nothing, and a high one hides all features."""
    deck = np.linspace(-6, 1, 15)
    mean, _ = limb().heights(atmospheres(np.tile([1e-3, 1e-5, 1e-4], (15, 1)), deck=deck))
    weight = mean_molecular_weight("H2/He", SPECIES, np.array([[1e-3, 1e-5, 1e-4]]))
    ratio = float(scale_height_m(900.0, weight, GRAVITY)[0]) / RADIUS_M
    level = (np.log(0.01) - deck * np.log(10)) * ratio
    level = level / (1 - level)
    assert np.all(mean >= level[:, None] - 0.01 * ratio)
    assert np.all(np.diff(mean, axis=0) <= 0.01 * ratio)  # deeper decks, lower limb
    assert np.ptp(mean[0]) < 0.3 * ratio
    assert mean[-1] == pytest.approx(mean[-2], abs=0.1 * ratio)


def test_haze_fills_the_blue():
    """A strong Rayleigh haze lifts the shortest bin by one scale height per e-fold of its strength."""
    mean, _ = limb().heights(atmospheres(np.full((2, 3), 1e-12), haze=[3.0, 3.0 + np.log10(np.e)]))
    assert np.diff(mean, axis=0)[0, 0] / scale_height() == pytest.approx(1.0, abs=0.06)


@pytest.mark.parametrize("background", BACKGROUNDS)
def test_heavier_background_gives_smaller_features(background):
    """Features scale with the scale height of the background gas, also when the species is that gas."""
    model = limb(("H2O", "CO2"), background)
    vmr = np.array([[1e-4, 1e-4]])
    if background in ("H2O", "CO2"):
        vmr[0, ("H2O", "CO2").index(background)] = 1 - 1e-4
    mean, _ = model.heights(atmospheres(vmr))
    contrast = np.ptp(mean) / scale_height(900.0, background)
    assert 3 < contrast < 20


def test_background_as_species_is_the_pure_gas():
    """In a CO2 background, CO2 named as the only species fills everything: no Rayleigh gas is left over twice."""
    mean, _ = limb(("H2O", "CO2"), "CO2").heights(atmospheres([1e-12, 1 - 1e-12]))
    assert np.all(np.isfinite(mean))
    assert mean[0, 6] > mean[0, 0] + 3 * scale_height(900.0, "CO2")


def random_atmospheres(count: int) -> LimbState:
    """Atmospheres drawn over the priors."""
    rng = np.random.default_rng(8)
    return atmospheres(
        10 ** rng.uniform(-12, -1, (count, 3)),
        rng.uniform(*RANGE_K, count),
        rng.uniform(-6, 1, count),
        rng.uniform(-2, 5, count),
        rng.uniform(-8, 0, count),
    )


def select(state: LimbState, rows) -> LimbState:
    """Some of the atmospheres."""
    return LimbState(*(getattr(state, name)[rows] for name in LimbState.__dataclass_fields__))


def test_order_and_size_of_batches_do_not_matter():
    """One at a time, all at once or shuffled: the same heights to single precision."""
    state = random_atmospheres(40)
    together, square = limb().heights(state)
    alone = np.concatenate([limb().heights(select(state, [i]))[0] for i in range(40)])
    order = np.random.default_rng(1).permutation(40)
    shuffled, shuffled_square = limb().heights(select(state, order))
    assert alone == pytest.approx(together, abs=2e-6)
    assert shuffled == pytest.approx(together[order], abs=2e-6)
    assert shuffled_square == pytest.approx(square[order], abs=2e-6)


def test_calling_changes_nothing():
    """The atmospheres handed over are left alone, and a second call gives the same."""
    state = random_atmospheres(5)
    before = state.vmr.copy()
    first, _ = limb().heights(state)
    second, _ = limb().heights(state)
    assert np.array_equal(first, second)
    assert np.array_equal(state.vmr, before)


def test_heights_are_smooth_in_temperature():
    """Across nodes of the tables and of the model's own grid there are neither jumps nor kinks of 0.02 H."""
    temperature_k = np.arange(505.0, 1196.0, 5.0)
    count = len(temperature_k)
    mean, _ = limb().heights(atmospheres(np.tile([1e-3, 1e-5, 1e-4], (count, 1)), temperature_k, 0.0))
    by_scale_height = mean / (scale_height(1.0) * temperature_k[:, None])
    assert np.abs(np.diff(by_scale_height, axis=0)).max() < 0.06
    assert np.abs(np.diff(by_scale_height, n=2, axis=0)).max() < 0.02


def test_table_is_met_at_its_nodes():
    """At temperatures and pressures of the table the interpolation returns the table; off it the floor."""
    table = load_table("H2O")
    bands = np.array([table.first_band - 5, table.first_band + 400])
    found = interpolate_table(table, bands, np.array([600.0, 800.0]), np.log([1e-3, 1e-2]))
    assert found[0] == pytest.approx(LN_FLOOR)
    nodes = [list(table.temperature_k).index(t) for t in (600.0, 800.0)]
    expected = table.ln_cross_section[400][nodes][:, [3, 4]]
    assert found[1] == pytest.approx(expected, abs=1e-4)


def test_grid_bins_are_averages_of_bands():
    """Weights of the bands in a cell and of the cells in a bin sum to 1, also with a star's photons."""
    for teff in (None, 4500.0):
        grid = make_grid(np.array([1.4, 4.5]), np.array([0.005, 0.6]), teff)
        assert [w.sum() for w in grid.band_weights] == pytest.approx(np.ones(len(grid.bands)))
        assert grid.averaging.sum(axis=1) == pytest.approx(np.ones(2))
        assert grid.n_points == SLICES * len(grid.bands)
    assert make_grid(np.array([1.4]), np.array([0.0005])).too_fine == 1


def test_cell_slices_keep_the_weighted_mean():
    """Joining bands into one distribution keeps the weighted mean of ln k, and one band alone stays as it is."""
    rng = np.random.default_rng(2)
    values = np.sort(rng.normal(-50, 4, (3, 2, SLICES)), axis=2)
    weights = np.array([0.2, 0.5, 0.3])
    joined = cell_slices(values, weights)
    assert joined.mean(axis=1) == pytest.approx(np.einsum("bks,b->k", values, weights) / SLICES)
    assert np.all(np.diff(joined, axis=1) >= 0)
    assert cell_slices(values[:1], np.ones(1)) == pytest.approx(values[0])


def test_slice_orders_are_permutations():
    """Every species gets each slice once, the same cell the same orders, another cell others."""
    orders = slice_orders(4, 17)
    assert np.array_equal(np.sort(orders, axis=1), np.tile(np.arange(SLICES), (4, 1)))
    assert np.array_equal(orders, slice_orders(4, 17))
    assert not np.array_equal(orders, slice_orders(4, 18))
