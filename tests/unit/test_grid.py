import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from transit.models.grid import (
    BANDS_PER_CELL,
    SLICES,
    cell_key,
    cell_slices,
    make_grid,
    photon_weight,
    slice_orders,
)
from transit.opacity import BANDS_PER_E_FOLD, band_edges_cm1, band_index

# --- cells under the bins


@pytest.mark.parametrize("star_teff_k", [None, 3000.0, 6000.0])
def test_rows_and_band_weights_sum_to_one(star_teff_k):
    """Every bin is a weighted mean of its cells, every cell of its bands."""
    edges = np.geomspace(0.6, 12.0, 40)
    grid = make_grid((edges[1:] + edges[:-1]) / 2, np.diff(edges) / 2, star_teff_k)
    assert grid.averaging.sum(axis=1) == pytest.approx(np.ones(39), abs=1e-12)
    assert [w.sum() for w in grid.band_weights] == pytest.approx([1.0] * len(grid.bands))
    assert all(np.all(w >= 0) for w in grid.band_weights)
    assert grid.n_points == SLICES * len(grid.bands)


def test_narrow_bins_are_one_cell_and_wide_ones_several():
    """A bin is cut so that no cell holds many more bands than allowed."""
    narrow = make_grid(np.array([1.4]), np.array([0.0095]))
    assert len(narrow.bands) == 1
    wide = make_grid(np.array([3.6]), np.array([0.375]))
    assert len(wide.bands) == int(np.ceil(0.75 / 3.6 * BANDS_PER_E_FOLD / BANDS_PER_CELL))
    assert max(len(b) for b in wide.bands) <= BANDS_PER_CELL + 2


def test_cells_tile_the_bin():
    """The bands of a bin's cells are the ones that it overlaps, each once."""
    centre, half = 2.3, 0.2
    grid = make_grid(np.array([centre]), np.array([half]))
    bands = np.concatenate(grid.bands)
    expected = np.arange(band_index(1e4 / (centre + half)), band_index(1e4 / (centre - half)) + 1)
    assert np.array_equal(bands, expected)


def test_share_of_a_band_is_its_overlap():
    """Without a star the weights are the overlaps in wavelength, so the mean wavelength is the bin's centre."""
    centre, half = 1.4, 0.03
    grid = make_grid(np.array([centre]), np.array([half]))
    assert grid.averaging @ grid.wavelength_um == pytest.approx([centre], rel=2e-5)
    first = grid.bands[0][0]
    low_um, high_um = 1e4 / band_edges_cm1(first, 1)[::-1]
    share = (centre + half - max(low_um, centre - half)) / (2 * half)
    found = grid.band_weights[0][0] * grid.averaging.toarray()[0, 0]
    assert high_um >= centre + half
    assert found == pytest.approx(share)


def test_one_bin_equals_its_parts_averaged():
    """The mean over a wide bin is the photon-weighted mean over the halves that make it up."""
    teff = 4000.0

    def band_shares(low, high):
        grid = make_grid(np.array([(low + high) / 2]), np.array([(high - low) / 2]), teff)
        share = grid.averaging.toarray()[0]
        out = {}
        for bands, weights, s in zip(grid.bands, grid.band_weights, share, strict=True):
            for band, weight in zip(bands, weights, strict=True):
                out[int(band)] = out.get(int(band), 0.0) + weight * s
        return out

    cut = float(1e4 / band_edges_cm1(int(band_index(1e4 / 2.0)), 1)[0])  # on an edge, so no band is shared
    left, right, both = band_shares(1.9, cut), band_shares(cut, 2.1), band_shares(1.9, 2.1)
    bands = sorted(both)
    inside = [b for b in bands if left.get(b, 0) > 1e-9]
    share = sum(both[b] for b in inside)
    for b in bands:
        expected = share * left.get(b, 0) + (1 - share) * right.get(b, 0)
        assert both[b] == pytest.approx(expected, abs=1e-9)


def test_bins_finer_than_the_tables_are_counted():
    """A bin of a fifth of a band is flagged; it still gets a full cell."""
    width = 1.4 / BANDS_PER_E_FOLD
    grid = make_grid(np.array([1.4, 1.5]), np.array([width / 10, 0.01]))
    assert grid.too_fine == 1
    assert grid.averaging.sum(axis=1) == pytest.approx([1, 1])


def test_bin_means_average_slices_and_cells():
    """Slices count equally, cells by their share."""
    grid = make_grid(np.array([1.4, 3.6]), np.array([0.01, 0.3]))
    values = np.random.default_rng(2).uniform(0, 1, (3, SLICES, len(grid.bands))).astype(np.float32)
    expected = values.astype(float).mean(axis=1) @ grid.averaging.toarray().T
    assert grid.bin_means(values) == pytest.approx(expected, abs=1e-6)


# --- photon weights


def test_photon_weight_is_planck_photons():
    """The weight is B_lambda times lambda: its maximum lies at lambda T = 3669.7 um K (CODATA 2018, c2/3.92069)."""
    wave = np.linspace(0.3, 3.0, 200_001)
    weight = photon_weight(wave, 5000.0)
    assert wave[np.argmax(weight)] == pytest.approx(14387.76877 / 3.920690 / 5000.0, rel=1e-4)


def test_photon_weight_without_a_star_is_uniform():
    """Nothing is assumed about an unknown star."""
    assert np.array_equal(photon_weight(np.array([0.5, 5.0]), None), np.ones(2))


def test_photon_weight_in_the_infrared_falls_as_the_cube():
    """Rayleigh-Jeans: photons per wavelength fall as lambda^-3."""
    weight = photon_weight(np.array([300.0, 600.0]), 6000.0)
    assert weight[0] / weight[1] == pytest.approx(8, rel=0.01)


def test_hot_star_moves_a_wide_bin_to_the_blue():
    """In the infrared a star shifts the centre of a wide bin towards short wavelengths."""
    plain = make_grid(np.array([4.5]), np.array([0.5]))
    seen = make_grid(np.array([4.5]), np.array([0.5]), 6000.0)
    assert (seen.averaging @ seen.wavelength_um)[0] < (plain.averaging @ plain.wavelength_um)[0] - 0.02


# --- slices of joint distributions


@given(seed=st.integers(0, 10_000), n_bands=st.integers(1, 9), n_slices=st.sampled_from([1, 4, 16, 20]))
@settings(max_examples=60, deadline=None, derandomize=True)
def test_cell_slices_keep_the_mean_and_increase(seed, n_bands, n_slices):
    """The mean of ln k, which a transit radius follows, survives; slices are in increasing order."""
    rng = np.random.default_rng(seed)
    values = rng.normal(-50, 5, (n_bands, 3, n_slices))
    weights = rng.dirichlet(np.ones(n_bands))
    merged = cell_slices(values, weights)
    assert merged.shape == (3, SLICES)
    expected = np.einsum("b,bk->k", weights, values.mean(axis=2))
    assert merged.mean(axis=1) == pytest.approx(expected, abs=1e-9)
    assert np.all(np.diff(merged, axis=1) >= -1e-9)
    assert np.all(merged.min(axis=1) >= values.min(axis=(0, 2)) - 1e-9)
    assert np.all(merged.max(axis=1) <= values.max(axis=(0, 2)) + 1e-9)


def test_cell_slices_of_one_band_are_its_own():
    """A cell of one band with the standard number of slices only sorts them."""
    values = np.random.default_rng(4).normal(size=(1, 5, SLICES))
    assert cell_slices(values, np.ones(1)) == pytest.approx(np.sort(values[0], axis=1), abs=1e-12)


def test_cell_slices_are_quantile_means():
    """Against direct sorting of a million weighted values."""
    rng = np.random.default_rng(5)
    values = rng.normal(size=(2, 1, 16))
    weights = np.array([0.3, 0.7])
    copies = np.concatenate([np.repeat(values[0, 0], 300), np.repeat(values[1, 0], 700)])
    direct = np.sort(copies).reshape(SLICES, -1).mean(axis=1)
    assert cell_slices(values, weights)[0] == pytest.approx(direct, abs=1e-9)


# --- orders of the slices


@given(n_species=st.integers(1, 6), key=st.integers(0, 5000))
@settings(max_examples=30, deadline=None, derandomize=True)
def test_slice_orders_are_permutations_and_repeat(n_species, key):
    """Each species gets every slice once, the same way in every run."""
    orders = slice_orders(n_species, key)
    assert orders.shape == (n_species, SLICES)
    assert np.array_equal(np.sort(orders, axis=1), np.tile(np.arange(SLICES), (n_species, 1)))
    assert np.array_equal(orders, slice_orders(n_species, key))


def test_slice_orders_do_not_depend_on_later_species():
    """Adding a species to the list leaves the orders of the first ones."""
    assert np.array_equal(slice_orders(2, 17), slice_orders(5, 17)[:2])


def test_slice_orders_are_nearly_uncorrelated():
    """Rank correlations between species stay small, on average far below those of random orders (0.21)."""
    correlations = []
    for key in range(60):
        a, b, c = slice_orders(3, key)
        correlations += [np.corrcoef(a, b)[0, 1], np.corrcoef(a, c)[0, 1], np.corrcoef(b, c)[0, 1]]
    assert np.abs(correlations).max() < 0.35
    assert np.abs(correlations).mean() < 0.1


def test_cells_have_different_keys():
    """Neighbouring cells do not share their orders."""
    grid = make_grid(np.array([1.4, 1.43]), np.array([0.012, 0.012]))
    keys = [cell_key(bands) for bands in grid.bands]
    assert len(set(keys)) == 2
    assert cell_key(np.array([-3000])) == 0  # far beyond the grid a key must still be a seed
