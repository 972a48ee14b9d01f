import numpy as np
import pytest

from transit.errors import SettingError
from transit.opacity import load_table
from transit.records import DepthSpectrum, Priors, System
from transit.species import (
    MOST_DEFAULT_SPECIES,
    absorbers,
    bins_in_trusted_bands,
    prior_temperature_k,
    select_species,
)

HOT_K = (750.0, 1800.0)


def spectrum(low_um, high_um, n_bins=20):
    """Flat bins between two wavelengths."""
    edges = np.geomspace(low_um, high_um, n_bins + 1)
    depth = np.full(n_bins, 0.01)
    return DepthSpectrum((edges[1:] + edges[:-1]) / 2, np.diff(edges) / 2, depth, np.full(n_bins, 1e-4))


def system(temperature_k=1100.0, **options):
    return System(1.0, 1.2, 0.5, temperature_k, **options)


# --- what there is


def test_absorbers_leave_out_collision_pairs():
    """Collision pairs are part of the continuum, never a species to ask about."""
    names = absorbers()
    assert {"H2O", "CO2", "CO", "CH4", "Na", "K"} <= set(names)
    assert not any("-" in name for name in names)


def test_temperature_prior():
    """In units of the equilibrium temperature, unless kelvin are given."""
    assert prior_temperature_k(system(1000.0), Priors()) == (500.0, 1200.0)
    assert prior_temperature_k(system(1000.0), Priors(temperature_k=(300.0, 900.0))) == (300.0, 900.0)


# --- bins inside bands


def test_bins_inside_a_band():
    """Bins whose centres lie in a trusted band count."""
    table = load_table("K")
    found, usable = bins_in_trusted_bands(spectrum(0.70, 0.85, 30), table, HOT_K)
    centres = spectrum(0.70, 0.85, 30).wavelength_um
    assert np.array_equal(found, (centres >= 0.755) & (centres <= 0.782))
    assert len(usable) == 1


def test_a_bin_wider_than_the_band_counts():
    """One photometric bin that holds a whole band is inside it, wherever its centre lies."""
    wide = DepthSpectrum([0.72], [0.08], [0.01], [1e-4])
    found, _ = bins_in_trusted_bands(wide, load_table("K"), HOT_K)
    assert found.tolist() == [True]


def test_ranges_that_do_not_hold_at_the_temperature():
    """Methane near 1.7 um, trusted at 250-600 K, serves a prior that lies inside for at least a third of its width."""
    bins = spectrum(1.63, 1.75, 5)
    table = load_table("CH4")
    for range_k, served in (
        ((250.0, 600.0), True),
        ((400.0, 999.0), True),
        ((400.0, 1001.0), False),
        (HOT_K, False),
    ):
        inside, usable = bins_in_trusted_bands(bins, table, range_k)
        assert bool(inside.any()) is served
        assert all(min(range_k[1], u["t_max_k"]) > max(range_k[0], u["t_min_k"]) for u in usable)


# --- choice of species


def test_requested_species_are_kept_in_order():
    """Asked for, each once, in the order given, with the reason."""
    found = select_species(spectrum(1.1, 5.0, 60), system(), ("CO2", "H2O", "CO2"))
    assert found.species == ("CO2", "H2O")
    assert found.untested == {}
    for name, reason in found.reasons.items():
        count = found.coverage[name]["bins_in_bands"]
        assert reason.startswith(f"{count} bins inside ")
        assert reason.endswith(" bands, asked for")
        seen = round(found.coverage[name]["bands_covered_fraction"] * len(load_table(name).bands_um))
        assert f"{seen} of its {len(load_table(name).bands_um)} bands" in reason


def test_default_species_have_bands_inside_the_spectrum():
    """By default only species with trusted bands there, at most six, and the reason says so."""
    found = select_species(spectrum(0.70, 0.85, 30), system(1500.0), None)
    assert "K" in found.species
    assert "Na" not in found.species
    assert "CO" not in found.species
    assert found.untested == {}  # nobody asked for them
    assert all("chosen by default" in reason for reason in found.reasons.values())
    everything = select_species(spectrum(0.5, 12.0, 200), system(400.0), None)
    assert len(everything.species) <= MOST_DEFAULT_SPECIES


def test_default_and_requested_agree_on_a_common_case():
    """A grism spectrum of a warm planet is asked about water by default."""
    assert "H2O" in select_species(spectrum(1.12, 1.65, 28), system(), None).species


def test_untested_species_say_why():
    """A species without a trusted band there is untested: temperatures and trusted ranges are named."""
    found = select_species(spectrum(1.12, 1.65, 28), system(), ("H2O", "Na"))
    assert found.species == ("H2O",)
    assert list(found.untested) == ["Na"]
    text = found.untested["Na"]
    assert text.startswith(
        "Na: no bin lies inside one of its bands where its table is trusted over a third of 550-1320 K"
    )
    assert "0.542-0.645 um" in text


def test_hot_methane_is_untested():
    """Methane in the near infrared of a hot planet: its table is not trusted at that temperature."""
    found = select_species(spectrum(1.12, 1.70, 28), system(1450.0), ("CH4",))
    assert found.species == ()
    assert "725-1740 K" in found.untested["CH4"]


@pytest.mark.parametrize(("name", "close"), [("H20", "H2O"), ("h2o", "H2O"), ("CH5", "CH4"), ("NA", "Na")])
def test_unknown_species_get_a_suggestion(name, close):
    """A misspelt name is refused with the known ones and the closest of them."""
    with pytest.raises(SettingError) as caught:
        select_species(spectrum(1.12, 1.65), system(), (name,))
    text = str(caught.value)
    assert text.startswith(f"Unknown species {name!r}; known are ")
    assert text.endswith(f" Did you mean {close}?")


def test_unknown_species_without_a_likeness():
    """Nothing is suggested for a name that resembles none."""
    with pytest.raises(SettingError, match="Unknown species 'xyzzy'") as caught:
        select_species(spectrum(1.12, 1.65), system(), ("xyzzy",))
    assert "Did you mean" not in str(caught.value)


def test_collision_pairs_cannot_be_asked_about():
    """H2-H2 has a table but is not a species."""
    with pytest.raises(SettingError, match="Unknown species 'H2-H2'"):
        select_species(spectrum(1.12, 1.65), system(), ("H2-H2",))


# --- coverage


def test_coverage_of_the_spectrum():
    """Bins beyond a table's end are counted, and a note says that the species is transparent there."""
    found = select_species(spectrum(0.5, 1.1, 40), system(1500.0), ("K",))
    table = load_table("K")
    low, high = sorted(1e4 / table.edges_cm1[[0, -1]])
    centres = spectrum(0.5, 1.1, 40).wavelength_um
    expected = np.mean((centres >= low) & (centres <= high))
    assert 0 < expected < 1
    assert found.coverage["K"]["covered_fraction"] == pytest.approx(expected)
    assert found.coverage["K"]["bands_covered_fraction"] == 1.0
    assert any(note.startswith("K: its table covers") and "transparent" in note for note in found.notes)


# --- temperatures


def test_temperature_range_inside_the_tables():
    """A range that all tables serve is kept, without a note."""
    found = select_species(spectrum(1.12, 1.65, 28), system(), ("H2O",))
    assert found.temperature_range_k == pytest.approx((550.0, 1320.0))
    assert not any("clipped" in note for note in found.notes)


def test_temperature_prior_is_clipped_below_and_above():
    """What the tables do not serve is cut off, for all hypotheses alike, and the note names who is to blame."""
    cold = select_species(spectrum(1.12, 1.65, 28), system(250.0), ("H2O",))
    assert cold.temperature_range_k == pytest.approx((150.0, 300.0))
    assert any(
        note.startswith("Temperature prior clipped from 125 to 150 K: tables of the continuum begin there")
        for note in cold.notes
    )
    hot = select_species(spectrum(1.12, 1.65, 28), system(2400.0), ("H2O",))
    assert hot.temperature_range_k == pytest.approx((1200.0, 2500.0))
    assert any("clipped from 2880 to 2500 K" in note for note in hot.notes)


def test_a_species_clips_the_range_of_all():
    """Methane ends below what water serves: the common prior ends there and the note says methane."""
    found = select_species(spectrum(2.0, 4.0, 40), system(1350.0), ("H2O", "CH4"))
    ceiling = max(r["t_max_k"] for r in load_table("CH4").trusted)
    assert found.temperature_range_k == pytest.approx((675.0, ceiling))
    assert any("tables of CH4 end there" in note for note in found.notes)


def test_approximate_ranges_are_noted():
    """Where the prior leaves the trusted range of a part of a table, a note says so."""
    found = select_species(spectrum(1.0, 4.0, 60), system(900.0), ("CH4",))
    assert any(note.startswith("CH4 at 1.63-2.5 um is trusted at 250-600 K only") for note in found.notes)


def test_no_temperature_left_is_refused():
    """A prior outside all tables cannot be clipped into anything: the error names the limits."""
    priors = Priors(temperature_k=(3000.0, 4000.0))
    with pytest.raises(
        SettingError, match="3000-4000 K lies outside what the opacity tables serve, 150-2500 K"
    ):
        select_species(spectrum(1.12, 1.65, 28), system(1100.0, priors=priors), ("H2O",))


def test_selection_does_not_depend_on_depths():
    """Species are chosen by wavelength and temperature alone, before any depth is looked at."""
    plain = spectrum(1.1, 5.0, 60)
    rng = np.random.default_rng(6)
    other = DepthSpectrum(
        plain.wavelength_um, plain.half_width_um, rng.uniform(0.01, 0.02, 60), plain.depth_err
    )
    assert select_species(plain, system(), None) == select_species(other, system(), None)
    assert set(select_species(plain, system(), None).species) >= {"H2O", "CO2", "CO"}


# --- the background gas as a species


def test_background_species_can_be_asked_about():
    """Water in a steam atmosphere is an absorber like any other: selected, with the same reason."""
    found = select_species(spectrum(1.12, 1.65, 28), system(600.0, background="H2O"), ("H2O",))
    assert found.species == ("H2O",)
    assert found.coverage["H2O"]["bins_in_bands"] > 0
