import numpy as np
import pytest
from scipy.special import ndtri

from transit.errors import SettingError
from transit.hypotheses import (
    DECK_COORDINATE,
    Hypothesis,
    columns,
    limb_state,
    noise_values,
    parameters,
    physical,
    sampled_hypotheses,
    vmr_range,
)
from transit.records import Priors

RANGE_K = (600.0, 1400.0)
WATER = Hypothesis("H2O", ("H2O",))

# --- which hypotheses are fitted


@pytest.mark.parametrize(
    ("species", "names"),
    [
        (("H2O",), ["continuum", "H2O"]),
        (("H2O", "CO2"), ["continuum", "H2O", "CO2", "all"]),
        (
            ("H2O", "CO2", "CH4"),
            ["continuum", "H2O", "CO2", "CH4", "all", "all-H2O", "all-CO2", "all-CH4"],
        ),
    ],
)
def test_names_of_the_hypotheses(species, names):
    """No hypothesis is fitted twice: `all` of one species, or `all` of two without one, has another name."""
    found = sampled_hypotheses(species)
    assert [h.name for h in found] == names
    assert len({frozenset(h.species) for h in found}) == len(found)


def test_species_of_the_hypotheses():
    """`all-X` holds every species but X, in the order asked for."""
    by_name = {h.name: h.species for h in sampled_hypotheses(("H2O", "CO2", "CH4"))}
    assert by_name["continuum"] == ()
    assert by_name["CO2"] == ("CO2",)
    assert by_name["all"] == ("H2O", "CO2", "CH4")
    assert by_name["all-CO2"] == ("H2O", "CH4")


# --- parameters and priors


def test_parameters_and_their_ranges():
    """The continuum's four come first, then abundances in the order of the species, then inflation."""
    hypothesis = Hypothesis("all", ("H2O", "CO"))
    found = parameters(hypothesis, Priors(), RANGE_K, "H2/He", inflate=True)
    assert [(p.name, p.low, p.high) for p in found] == [
        ("temperature_k", 600.0, 1400.0),
        ("log10_deck_pressure_bar", -6.0, 1.0),
        ("log10_haze_strength", -2.0, 5.0),
        ("haze_exponent", -8.0, 0.0),
        ("log10_vmr_H2O", -12.0, -1.0),
        ("log10_vmr_CO", -12.0, -1.0),
        ("ln_error_factor", 0.0, pytest.approx(np.log(10))),
    ]
    assert found[DECK_COORDINATE].name == "log10_deck_pressure_bar"


def test_every_hypothesis_shares_the_continuum():
    """What all hypotheses have in common has the same prior in all, so that it cancels."""
    sets = [parameters(h, Priors(), RANGE_K, "H2/He") for h in sampled_hypotheses(("H2O", "CO2", "CH4"))]
    assert len({s[:4] for s in sets}) == 1


def test_exceptions_for_named_species():
    """A range given for one species holds for it alone."""
    priors = Priors(log10_vmr_species=(("CO", -8.0, -2.0),))
    assert vmr_range(priors, "CO") == (-8.0, -2.0)
    assert vmr_range(priors, "H2O") == (-12.0, -1.0)
    found = parameters(Hypothesis("CO", ("CO",)), priors, RANGE_K, "H2/He")
    assert (found[-1].low, found[-1].high) == (-8.0, -2.0)


def test_background_gas_has_no_free_abundance():
    """Water in a steam atmosphere fills what the others leave."""
    hypothesis = Hypothesis("all", ("H2O", "CO2"))
    found = parameters(hypothesis, Priors(), RANGE_K, "H2O")
    assert [p.name for p in found][4:] == ["log10_vmr_CO2"]
    values = columns(np.array([[900.0, -1.0, 0.0, -4.0, -1.0]]), found)
    state = limb_state(values, hypothesis, "H2O", 1)
    assert state.vmr[0] == pytest.approx([0.9, 0.1])


@pytest.mark.parametrize("upper", [-0.3, 0.0])
def test_abundances_that_can_fill_the_gas_are_refused(upper):
    """Upper limits that add up to the whole gas leave no background: the message names species and sum."""
    priors = Priors(log10_vmr=(-12.0, upper))
    hypothesis = Hypothesis("all", ("H2O", "CO2"))
    with pytest.raises(SettingError, match=r"H2O, CO2 add up to (1\.00|2\.00) of the gas; lower them"):
        parameters(hypothesis, priors, RANGE_K, "H2/He")


def test_abundances_just_below_the_whole_gas_are_accepted():
    """Nine species at ten per cent leave a tenth; eleven leave less than nothing."""
    names = tuple(f"X{k}" for k in range(9))
    assert len(parameters(Hypothesis("all", names), Priors(), RANGE_K, "H2/He")) == 13
    with pytest.raises(SettingError):
        parameters(Hypothesis("all", (*names, "X9", "X10")), Priors(), RANGE_K, "H2/He")


# --- from coordinates to physical values


def test_coordinates_are_uniform_priors():
    """Normal coordinates become uniform values: quantiles map to the same fraction of the range."""
    found = parameters(WATER, Priors(), RANGE_K, "H2/He")
    z = np.tile(ndtri([[0.1], [0.5], [0.75]]), (1, 5))
    values = physical(z, found)
    low, high = np.array([[p.low, p.high] for p in found]).T
    for row, fraction in zip(values, (0.1, 0.5, 0.75), strict=True):
        assert row == pytest.approx(low + fraction * (high - low))


def test_coordinates_stay_inside_the_priors():
    """Even far out no value leaves its range."""
    found = parameters(WATER, Priors(), RANGE_K, "H2/He", inflate=True)
    values = physical(np.array([[-40.0] * 6, [40.0] * 6]), found)
    assert np.all(values[0] == [p.low for p in found])
    assert np.all(values[1] == [p.high for p in found])


def test_state_of_the_limb():
    """Logarithms to base ten become natural ones, and abundances follow the species' order."""
    hypothesis = Hypothesis("all", ("H2O", "CO"))
    found = parameters(hypothesis, Priors(), RANGE_K, "H2/He", inflate=True)
    values = np.array([[900.0, -2.0, 3.0, -4.0, -3.0, -5.0, np.log(1.5)]])
    column = columns(values, found)
    state = limb_state(column, hypothesis, "H2/He", 1)
    factor, ar1 = noise_values(column)
    assert ar1 is None
    assert state.temperature_k == pytest.approx([900.0])
    assert np.exp(state.ln_deck_pressure_bar) == pytest.approx([0.01])
    assert np.exp(state.ln_haze_strength) == pytest.approx([1000.0])
    assert state.haze_exponent == pytest.approx([-4.0])
    assert state.vmr[0] == pytest.approx([1e-3, 1e-5])
    assert factor == pytest.approx([1.5])


def test_state_without_inflation_has_factor_one():
    """Quoted errors are used as they are."""
    found = parameters(WATER, Priors(), RANGE_K, "H2/He")
    assert noise_values(columns(physical(np.zeros((4, 5)), found), found)) == (1.0, None)
