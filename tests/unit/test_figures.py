import dataclasses
import io

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Text
from synthetic import BANDS_UM, check_result, spectrum_record

from transit.figures import check_figure

SIX = tuple(BANDS_UM)
CASES = {
    "grism": lambda: check_result(),
    "six species": lambda: check_result(SIX, spectrum=spectrum_record(0.5, 5.5, 207)),
    "three parts": lambda: check_result(
        ("H2O", "CO2"), spectrum=spectrum_record(1.1, 1.7, 25, wide_points_um=((3.6, 0.38), (4.5, 0.5)))
    ),
    "parts with long names": lambda: with_long_names(CASES["three parts"]()),
    "400 bins": lambda: check_result(("CO2", "CO"), spectrum=spectrum_record(2.8, 5.2, 400), truth=("CO2",)),
    "10 bins, no fine grid": lambda: check_result(spectrum=spectrum_record(1.1, 1.7, 10), fine=False),
    "no species": lambda: check_result(()),
    "interchangeable": lambda: check_result(
        ("H2O", "CO2", "CH4"),
        ln_evidences={"H2O": 9, "CH4": 8, "all": 9, "all-H2O": 9, "all-CO2": 9, "all-CH4": 9},
    ),
    "null best": lambda: check_result(ln_evidences={"H2O": -0.4, "slope": 3.0}),
}


def with_long_names(result):
    names = tuple(f"instrument with a long name, part {i}, of 20{i} and later nights" for i in range(3))
    return dataclasses.replace(result, spectrum=dataclasses.replace(result.spectrum, segment_names=names))


def texts_of(figure):
    return [text.get_text() for text in figure.findobj(Text) if text.get_visible() and text.get_text()]


def drawn_boxes(figure, monkeypatch):
    """Text and box on the page of everything written, tick labels outside an axis excepted."""
    boxes = []
    draw = Text.draw

    def record(self, renderer):
        if self.get_visible() and self.get_text().strip():
            boxes.append((self.get_text(), self.get_window_extent(renderer)))
        draw(self, renderer)

    with monkeypatch.context() as patch:
        patch.setattr(Text, "draw", record)
        FigureCanvasAgg(figure).draw()
    return boxes


@pytest.mark.parametrize("case", CASES)
def test_draws_every_kind_of_spectrum(case):
    figure = check_figure(CASES[case]())
    stream = io.BytesIO()
    figure.savefig(stream, dpi=60)
    assert stream.getvalue().startswith(b"\x89PNG")


@pytest.mark.parametrize("case", CASES)
def test_no_label_lies_on_another_or_leaves_the_page(case, monkeypatch):
    figure = check_figure(CASES[case]())
    boxes = drawn_boxes(figure, monkeypatch)
    assert len(boxes) > 12
    for index, (text, box) in enumerate(boxes):
        assert figure.bbox.x0 <= box.x0, text
        assert box.x1 <= figure.bbox.x1, text
        for other_text, other_box in boxes[index + 1 :]:
            assert not box.overlaps(other_box), (text, other_text)


def test_names_planet_feature_and_words():
    texts = texts_of(check_figure(CASES["interchangeable"]()))
    assert "Example-1 b" in texts
    assert "feature: present" in texts
    assert texts.count("interchangeable") == 2
    assert texts.count("not shown") == 1
    assert "H$_{2}$O" in texts


def test_a_row_of_bands_for_each_species():
    result = check_result(SIX, spectrum=spectrum_record(0.5, 5.5, 60))
    strip = check_figure(result).axes[-1]
    assert [label.get_text() for label in strip.get_yticklabels()] == [
        "H$_{2}$O",
        "CO$_{2}$",
        "CO",
        "CH$_{4}$",
        "NH$_{3}$",
        "HCN",
    ]


def test_second_model_only_where_evidence_does_not_tell():
    close = check_result(("H2O", "CO2"), ln_evidences={"H2O": 9.0, "all": 8.0})
    clear = check_result(("H2O", "CO2"), ln_evidences={"H2O": 9.0, "all": 4.0})
    assert "all species" in texts_of(check_figure(close))
    assert "all species" not in texts_of(check_figure(clear))


def test_residuals_are_those_of_the_best_model():
    result = check_result()
    residual_axes = check_figure(result).axes[0]
    points = residual_axes.containers[0].lines[0].get_ydata()
    expected = (result.spectrum.depth - result.fit("H2O").model_median) / result.spectrum.depth_err
    np.testing.assert_allclose(points, expected)


def test_wide_ranges_get_a_logarithmic_axis_with_plain_labels():
    for high, scale in ((2.0, "linear"), (5.5, "log")):
        axes = check_figure(check_result(spectrum=spectrum_record(1.0, high, 30))).axes[0]
        assert axes.get_xscale() == scale
    axes.figure.canvas.draw()
    assert {"1", "2", "5"} <= {label.get_text() for label in axes.get_xticklabels()}


def test_every_part_has_its_own_marker():
    result = CASES["three parts"]()
    data_axes = check_figure(result).axes[1]
    markers = [bars.lines[0].get_marker() for bars in data_axes.containers]
    assert len(set(markers)) == 3


def test_huge_error_bar_does_not_flatten_the_rest():
    result = check_result()
    err = result.spectrum.depth_err.copy()
    err[3] *= 1000
    spectrum = dataclasses.replace(result.spectrum, depth_err=err)
    low, high = check_figure(dataclasses.replace(result, spectrum=spectrum)).axes[1].get_ylim()
    assert high - low < 3000


def test_scale_height_that_is_unknown_leaves_its_axis_out():
    result = dataclasses.replace(check_result(), scale_height_ppm=float("nan"))
    assert not any("scale heights" in text for text in texts_of(check_figure(result)))


def test_untested_species_without_bands_are_named():
    texts = texts_of(check_figure(check_result(untested={"PH3": "no table"})))
    assert any("untested: PH$_{3}$" in text for text in texts)


def test_quick_run_and_odd_names():
    texts = texts_of(check_figure(check_result(quick=True, planet_name="A $b$ " + "x" * 80)))
    assert any("quick run" in text for text in texts)
    figure = check_figure(check_result(planet_name="cost $5"))
    figure.savefig(io.BytesIO(), dpi=40)


def test_result_is_not_changed():
    result = CASES["three parts"]()
    before = result.spectrum.depth.copy()
    check_figure(result)
    np.testing.assert_array_equal(result.spectrum.depth, before)
