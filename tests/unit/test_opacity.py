"""The opacity table file: round trip, determinism, verification, and what the shipped files must state."""

import json
import zipfile

import numpy as np
import pytest

from transit.errors import OpacityTableError
from transit.opacity import (
    BANDS_PER_E_FOLD,
    GRID_START_CM1,
    LN_FLOOR,
    LN_LEAST,
    OpacityTable,
    available,
    band_edges_cm1,
    band_index,
    default_folder,
    load_table,
    write_registry,
    write_table,
)

SHIPPED = ("CH4", "CO", "CO2", "H2-H2", "H2-He", "H2O", "K", "Na")


def small_table(species="H2O", seed=5):
    """A random table of 6 bands, 3 temperatures, 2 pressures and 16 slices."""
    rng = np.random.default_rng(seed)
    return OpacityTable(
        species=species,
        first_band=300,
        temperature_k=np.array([300.0, 600.0, 1200.0]),
        pressure_bar=np.array([1e-3, 1.0]),
        ln_cross_section=np.sort(rng.uniform(-80, -40, (6, 3, 2, 16)), axis=3),
        ln_mean=rng.uniform(-60, -45, (6, 3)),
        header={
            "trusted": [{"low_um": 1.0, "high_um": 2.0}],
            "bands_um": [[1.3, 1.5]],
            "builder_version": "1",
        },
    )


@pytest.fixture
def folder(tmp_path):
    """A folder with one registered table."""
    write_table(tmp_path / "H2O.opacity", small_table())
    write_registry(tmp_path)
    return tmp_path


def test_round_trip_within_half_a_step(folder):
    """What is read differs from what was written by half a storage step at most."""
    written, read = small_table(), load_table("H2O", folder)
    assert np.abs(read.ln_cross_section - written.ln_cross_section).max() <= 0.002 + 1e-5
    assert np.abs(read.ln_mean - written.ln_mean).max() <= 0.002 + 1e-9
    assert read.temperature_k == pytest.approx(written.temperature_k)
    assert read.pressure_bar == pytest.approx(written.pressure_bar)
    assert (read.species, read.first_band, read.n_bands) == ("H2O", 300, 6)
    assert read.trusted == written.header["trusted"]
    assert read.bands_um == written.header["bands_um"]


def test_extreme_values_survive(tmp_path):
    """Values down to the least storable come back; what lies below is held there, never wrapped around."""
    table = small_table()
    table.ln_cross_section[:, 0] = LN_LEAST
    table.ln_cross_section[:, 1] = 0.0
    table.ln_cross_section[:, 2] = -1e4
    write_table(tmp_path / "H2O.opacity", table)
    write_registry(tmp_path)
    read = load_table("H2O", tmp_path).ln_cross_section
    assert read[:, 0] == pytest.approx(LN_LEAST)
    assert read[:, 1] == pytest.approx(0.0)
    assert read[:, 2] == pytest.approx(LN_LEAST)


def test_writing_does_not_change_the_table(tmp_path):
    """The arrays handed to the writer are left alone."""
    table = small_table()
    before = table.ln_cross_section.copy()
    write_table(tmp_path / "H2O.opacity", table)
    assert np.array_equal(table.ln_cross_section, before)


def test_same_table_same_bytes(tmp_path):
    """Writing twice gives the same bytes, and the checksum returned is that of the file."""
    first = write_table(tmp_path / "a.opacity", small_table())
    second = write_table(tmp_path / "b.opacity", small_table())
    assert first == second
    assert (tmp_path / "a.opacity").read_bytes() == (tmp_path / "b.opacity").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.opacity", "b.opacity"]


def test_one_flipped_byte_is_noticed(folder):
    """A changed file is refused, and the message names it."""
    path = folder / "H2O.opacity"
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(data)
    with pytest.raises(OpacityTableError, match=r"H2O\.opacity is not the table that was registered"):
        load_table("H2O", folder)


def test_truncated_file_is_noticed(folder):
    """A file cut short is refused."""
    path = folder / "H2O.opacity"
    path.write_bytes(path.read_bytes()[:-100])
    with pytest.raises(OpacityTableError, match=r"H2O\.opacity"):
        load_table("H2O", folder)


def test_missing_file_is_refused(folder):
    """A registered table that is not there is named."""
    (folder / "H2O.opacity").unlink()
    with pytest.raises(OpacityTableError, match=r"H2O\.opacity cannot be read"):
        load_table("H2O", folder)


def test_missing_registry_is_refused(tmp_path):
    """A folder without a registry is named."""
    with pytest.raises(OpacityTableError, match=r"checksums\.txt cannot be read"):
        available(tmp_path)


def test_unknown_species_lists_the_known(folder):
    """An unknown species is refused with the list of those there are."""
    with pytest.raises(OpacityTableError, match="No opacity table for TiO; there are H2O"):
        load_table("TiO", folder)


def rewrite_header(folder, **changes):
    """Change entries of the header of a table and register it anew."""
    path = folder / "H2O.opacity"
    with zipfile.ZipFile(path) as archive:
        members = {name: archive.read(name) for name in archive.namelist()}
    members["header.json"] = json.dumps(json.loads(members["header.json"]) | changes).encode()
    with zipfile.ZipFile(path, "w") as archive:
        for name, content in members.items():
            archive.writestr(name, content)
    write_registry(folder)


def test_other_format_is_refused(folder):
    """A table of another format version is refused, registered or not."""
    rewrite_header(folder, format="leadline-opacity-0")
    with pytest.raises(OpacityTableError, match="format 'leadline-opacity-0'"):
        load_table("H2O", folder)


@pytest.mark.parametrize("change", [{"bands_per_e_fold": 200}, {"grid_start_cm1": 400.0}])
def test_other_grid_is_refused(folder, change):
    """A table on another band grid is refused."""
    rewrite_header(folder, **change)
    with pytest.raises(OpacityTableError, match="another band grid"):
        load_table("H2O", folder)


def test_band_grid_is_its_own_inverse():
    """Every band holds its own middle, edges join, and the resolving power is the declared one."""
    edges = band_edges_cm1(-50, 2000)
    middle = np.sqrt(edges[1:] * edges[:-1])
    assert np.array_equal(band_index(middle), np.arange(-50, 1950))
    assert band_edges_cm1(0, 1)[0] == GRID_START_CM1
    assert edges[1:] / edges[:-1] == pytest.approx(np.exp(1 / BANDS_PER_E_FOLD))


# --- the shipped tables ------------------------------------------------------------------------------------


def test_shipped_tables_are_there_and_small():
    """All tables are shipped; each is under 6 MB and all together under 25 MB."""
    assert available() == sorted(SHIPPED)
    sizes = [(default_folder() / f"{name}.opacity").stat().st_size for name in SHIPPED]
    assert max(sizes) < 6e6
    assert sum(sizes) < 25e6


@pytest.mark.parametrize("species", SHIPPED)
def test_shipped_table_states_what_it_is(species):
    """The header names species, grids, method, sources, terms, trusted ranges, version and checksum."""
    table = load_table(species)
    header = table.header
    assert header["species"] == species
    assert header["temperature_k"] == list(table.temperature_k)
    assert header["pressure_bar"] == list(table.pressure_bar)
    assert header["method"]
    assert header["sources"]
    assert header["terms"]
    assert header["builder_version"]
    assert len(header["values_sha256"]) == 64
    for part in table.trusted:
        assert part["low_um"] < part["high_um"]
        assert part["t_min_k"] < part["t_max_k"]
        assert part["error"]


@pytest.mark.parametrize("species", SHIPPED)
def test_shipped_trust_lies_inside_the_table(species):
    """No range is called trusted where the table has no node or no band."""
    table = load_table(species)
    for part in table.trusted:
        assert table.temperature_k[0] <= part["t_min_k"]
        assert part["t_max_k"] <= table.temperature_k[-1]
        assert 1e4 / part["high_um"] >= table.edges_cm1[0] * (1 - 1 / BANDS_PER_E_FOLD)
        assert 1e4 / part["low_um"] <= table.edges_cm1[-1] * (1 + 1 / BANDS_PER_E_FOLD)


@pytest.mark.parametrize("species", SHIPPED)
def test_shipped_values_are_distributions(species):
    """Values are finite, slices increase, and no band mean of ln k exceeds the ln of the mean."""
    table = load_table(species)
    assert np.all(np.isfinite(table.ln_cross_section))
    assert np.all(np.isfinite(table.ln_mean))
    assert np.all(np.diff(table.ln_cross_section, axis=3) >= -1e-3)
    assert np.all(np.diff(table.temperature_k) > 0)
    assert np.all(np.diff(table.pressure_bar) > 0)
    column = int(np.argmin(np.abs(np.log(table.pressure_bar / 0.01))))  # band means are those at 10 mbar
    above = table.ln_mean > LN_FLOOR + 5 if len(table.pressure_bar) > 1 else np.isfinite(table.ln_mean)
    excess = table.ln_cross_section[:, :, column].mean(axis=2) - table.ln_mean
    assert excess[above].max() <= table.header["step"]
