"""The figure of a result: spectrum, models, bands of the species and residuals."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter, NullLocator

from transit.records import CheckResult, Fit, offset_name
from transit.units import PPM
from transit.verdict import best_model, best_null

LOG_AXIS_FROM_RATIO = 2.5

# Dark, middle and light on purpose: the lines stay apart in greyscale and for every common colour blindness.
_INK = "#26282b"
_BEST = {"color": "#12307a", "linestyle": "-", "linewidth": 1.7}
_SECOND = {"color": "#d9791e", "linestyle": (0, (5, 1.6)), "linewidth": 1.6}
_NULL = {"color": "#74787d", "linestyle": (0, (1.2, 1.4)), "linewidth": 1.9}
_BAND_ALPHA = {"best": 0.20, "null": 0.22}
_MARKERS = "osD^vPX"
_WORD_SHADES = {
    "present": "#12307a",
    "hint": "#4f6fb8",
    "interchangeable": "#d9791e",
    "confounded": "#a33b20",
}
_QUIET_SHADE = "#a9adb2"
_WORD_BAR_POINTS, _QUIET_BAR_POINTS = 6.5, 3.0
_CROWDED_FROM_BINS = 120
_LEGEND_LETTERS = 30  # longer names of parts are cut
_LEGEND_LETTER_IN, _LEGEND_HANDLE_IN = 0.075, 0.62  # width of a letter, and of a line sample with its spaces

_WIDTH_IN = 7.6
_STRIP_ROW_IN = 0.2
_DATA_IN = 3.1
_RESIDUAL_IN = 1.0
_TOP_IN, _BOTTOM_IN, _GAP_IN = 0.72, 0.52, 0.08
_LEFT_IN, _RIGHT_IN = 0.86, 1.34


def check_figure(result: CheckResult) -> Figure:
    """Draw a result.

    Parameters
    ----------
    result : CheckResult
        Nothing but this is used; no statistic is computed here beyond residuals.

    Returns
    -------
    matplotlib.figure.Figure
        Strip of known bands above, depth in ppm with the best models (68 per cent bands) in the middle,
        residuals of the best model below. The second-best model is drawn only where the evidence does not
        tell it from the best.
    """
    strip_in = _STRIP_ROW_IN * len(result.bands_um)
    strip_gap_in = _GAP_IN if result.bands_um else 0.0
    height_in = _TOP_IN + strip_in + strip_gap_in + _DATA_IN + _GAP_IN + _RESIDUAL_IN + _BOTTOM_IN
    figure = Figure(figsize=(_WIDTH_IN, height_in), facecolor="white")

    def axes(bottom_in: float, tall_in: float, **options) -> Axes:
        wide_in = _WIDTH_IN - _LEFT_IN - _RIGHT_IN
        box = (_LEFT_IN / _WIDTH_IN, bottom_in / height_in, wide_in / _WIDTH_IN, tall_in / height_in)
        return figure.add_axes(box, **options)

    residual_axes = axes(_BOTTOM_IN, _RESIDUAL_IN)
    data_bottom_in = _BOTTOM_IN + _RESIDUAL_IN + _GAP_IN
    data_axes = axes(data_bottom_in, _DATA_IN, sharex=residual_axes)
    _set_wavelength_axis(residual_axes, result)
    drawn = _models_to_draw(result)
    _draw_depths(data_axes, result, drawn)
    _draw_residuals(residual_axes, result, drawn[0][0])
    if result.bands_um:
        strip_axes = axes(data_bottom_in + _DATA_IN + strip_gap_in, strip_in, sharex=residual_axes)
        _draw_bands(strip_axes, result)
    _add_heading(figure, result, height_in)
    return figure


def _models_to_draw(result: CheckResult) -> list[tuple[Fit, str]]:
    """Best model first, then the second if it is as good, then the best null."""
    null = best_null(result.fits)
    best = best_model(result.fits)
    if best is None:
        return [(null, "null")]
    drawn = [(best, "best")]
    second = best_model([fit for fit in result.fits if fit is not best])
    if second is not None and best.ln_evidence - second.ln_evidence < result.system.thresholds.hint_ln_b:
        drawn.append((second, "second"))
    drawn.append((null, "null"))
    # The residuals are those of whichever explains the data better.
    return drawn if best.ln_evidence >= null.ln_evidence else drawn[::-1]


def _style(role: str) -> dict:
    return {"best": _BEST, "second": _SECOND, "null": _NULL}[role]


# --- axes ---------------------------------------------------------------------------------------------------


def _wavelength_limits_um(result: CheckResult) -> tuple[float, float]:
    spectrum = result.spectrum
    low = float(np.min(spectrum.wavelength_um - spectrum.half_width_um))
    high = float(np.max(spectrum.wavelength_um + spectrum.half_width_um))
    low = max(low, 0.5 * float(spectrum.wavelength_um[0]))
    if high > LOG_AXIS_FROM_RATIO * low:
        return low / (high / low) ** 0.02, high * (high / low) ** 0.02
    return low - 0.02 * (high - low), high + 0.02 * (high - low)


def _set_wavelength_axis(axes: Axes, result: CheckResult) -> None:
    low, high = _wavelength_limits_um(result)
    if high > LOG_AXIS_FROM_RATIO * low:
        axes.set_xscale("log")
        axes.xaxis.set_major_locator(FixedLocator(_log_ticks_um(low, high)))
        axes.xaxis.set_minor_locator(NullLocator())
        axes.xaxis.set_minor_formatter(NullFormatter())
    else:
        axes.xaxis.set_major_locator(MaxNLocator(8, steps=[1, 2, 2.5, 5, 10]))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.set_xlim(low, high)
    axes.set_xlabel("wavelength (µm)")


def _log_ticks_um(low: float, high: float) -> list[float]:
    """Round wavelengths that lie apart by at least a twentieth of the axis."""
    round_numbers = (1, 2, 3, 5, 1.5, 4, 7, 6, 2.5, 8, 1.2, 3.5)
    apart = np.log(high / low) / 18
    ticks: list[float] = []
    for number in round_numbers:
        for power in (0.01, 0.1, 1.0, 10.0, 100.0):
            tick = number * power
            if low <= tick <= high and all(abs(np.log(tick / other)) >= apart for other in ticks):
                ticks.append(tick)
    return sorted(ticks)


def _tidy(axes: Axes) -> None:
    axes.tick_params(direction="in", color=_INK, labelcolor=_INK, labelsize=9)
    for spine in axes.spines.values():
        spine.set_color(_INK)
        spine.set_linewidth(0.8)


# --- panels -------------------------------------------------------------------------------------------------


def _draw_depths(axes: Axes, result: CheckResult, drawn: Sequence[tuple[Fit, str]]) -> None:
    # The second model is dashed and goes on top, so that both stay visible where they agree.
    order = {"null": 1, "best": 2, "second": 3}
    for fit, role in drawn:
        _draw_model(axes, result, fit, role, order[role])
    moved_ppm = _moved_ppm(result, drawn[0][0])
    depth_ppm = result.spectrum.depth_ppm + moved_ppm[result.spectrum.segment]
    _draw_points(axes, result, depth_ppm, result.spectrum.depth_err_ppm, moved_ppm)
    _set_depth_limits(axes, result, drawn)
    axes.set_ylabel("transit depth (ppm)")
    axes.tick_params(labelbottom=False)
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:.10g}".replace("-", "−")))
    _tidy(axes)
    _add_scale_height_axis(axes, result)
    _add_legend(axes)


def _curve(result: CheckResult, fit: Fit) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Wavelengths with lower, median and upper depth in ppm: on the fine grid where there is one."""
    if fit.fine_median is not None:
        return (result.fine_wavelength_um, fit.fine_lower / PPM, fit.fine_median / PPM, fit.fine_upper / PPM)
    spectrum = result.spectrum
    lower, median, upper = fit.model_lower / PPM, fit.model_median / PPM, fit.model_upper / PPM
    return spectrum.wavelength_um, lower, median, upper


def _draw_model(axes: Axes, result: CheckResult, fit: Fit, role: str, zorder: int) -> None:
    wavelength_um, lower, median, upper = _curve(result, fit)
    style = _style(role)
    colour = style["color"]
    if role == "second":
        # Two fills that overlap would read as a third colour.
        for edge in (lower, upper):
            axes.plot(wavelength_um, edge, color=colour, linewidth=0.7, zorder=zorder)
    else:
        alpha = _BAND_ALPHA[role]
        axes.fill_between(wavelength_um, lower, upper, color=colour, alpha=alpha, linewidth=0, zorder=zorder)
    lift = 8 if result.spectrum.n_bins > _CROWDED_FROM_BINS else 3
    axes.plot(wavelength_um, median, label=_model_label(result, fit), zorder=zorder + lift, **style)


def _model_label(result: CheckResult, fit: Fit) -> str:
    if fit.species:
        left_out = [x for x in result.bands_um if x not in fit.species]
        if fit.name == "all":
            return "all species"
        if fit.name.startswith("all-") and left_out:
            return f"all but {_formula(left_out[0])}"
        return _formula(fit.name)
    return {"flat": "flat line", "slope": "straight slope"}.get(fit.name, fit.name)


def _draw_points(axes: Axes, result: CheckResult, values, errors, moved_ppm=None) -> None:
    spectrum = result.spectrum
    crowded = spectrum.n_bins > _CROWDED_FROM_BINS
    for index, name in enumerate(spectrum.segment_names):
        mine = spectrum.segment == index
        if not np.any(mine):
            continue
        axes.errorbar(
            spectrum.wavelength_um[mine],
            values[mine],
            xerr=spectrum.half_width_um[mine],
            yerr=errors[mine],
            fmt=_MARKERS[index % len(_MARKERS)],
            markersize=2.2 if crowded else 4.2,
            markerfacecolor="white" if not crowded else _INK,
            markeredgecolor=_INK,
            markeredgewidth=0.9 if not crowded else 0.4,
            ecolor=_INK,
            elinewidth=0.5 if crowded else 0.9,
            capsize=0,
            linestyle="none",
            alpha=0.75 if crowded else 1.0,
            zorder=8,
            label=_segment_label(name, moved_ppm, index) if len(spectrum.segment_names) > 1 else None,
        )


def _segment_label(name: str, moved_ppm, index: int) -> str:
    label = _plain(_shortened(name, _LEGEND_LETTERS))
    if moved_ppm is not None and round(moved_ppm[index]) != 0:
        label += f", moved {moved_ppm[index]:+.0f} ppm".replace("-", "−")
    return label


def _moved_ppm(result: CheckResult, fit: Fit) -> np.ndarray:
    """What is added to each segment's depths in the drawing: less its offset in the model drawn first."""
    offsets = [fit.parameters.get(offset_name(name)) for name in result.spectrum.segment_names]
    return np.array([0.0 if offset is None else -offset.median for offset in offsets])


def _set_depth_limits(axes: Axes, result: CheckResult, drawn: Sequence[tuple[Fit, str]]) -> None:
    """Keep every point and every median curve in view, but let no huge error bar flatten the rest."""
    spectrum = result.spectrum
    err = np.minimum(spectrum.depth_err_ppm, 3 * np.median(spectrum.depth_err_ppm))
    low, high = _wavelength_limits_um(result)
    depth_ppm = spectrum.depth_ppm + _moved_ppm(result, drawn[0][0])[spectrum.segment]
    ends = [np.min(depth_ppm - err), np.max(depth_ppm + err)]
    for fit, _ in drawn:
        wavelength_um, _, median, _ = _curve(result, fit)
        seen = median[(wavelength_um >= low) & (wavelength_um <= high)]
        ends += [np.min(seen), np.max(seen)] if seen.size else []
    bottom, top = min(ends), max(ends)
    # The legend stands above everything drawn.
    labels = axes.get_legend_handles_labels()[1]
    rows = -(-len(labels) // _legend_columns(labels))
    axes.set_ylim(bottom - 0.06 * (top - bottom), top + (0.08 + 0.1 * rows) * (top - bottom))
    axes.yaxis.set_major_locator(MaxNLocator(7))


def _add_scale_height_axis(axes: Axes, result: CheckResult) -> None:
    height_ppm = result.scale_height_ppm
    if not (np.isfinite(height_ppm) and height_ppm > 0):
        return
    middle_ppm = float(np.median(result.spectrum.depth_ppm))
    right = axes.secondary_yaxis(
        "right",
        functions=(lambda depth: (depth - middle_ppm) / height_ppm, lambda n: n * height_ppm + middle_ppm),
    )
    right.yaxis.set_major_locator(MaxNLocator(7))
    right.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}".replace("-", "−")))
    right.set_ylabel("scale heights from the median", color=_INK, fontsize=10)
    right.tick_params(direction="in", color=_INK, labelcolor=_INK, labelsize=9)


def _legend_columns(labels: Sequence[str]) -> int:
    """Most columns whose labels fit side by side inside the panel; labels fill column after column."""
    room_in = _WIDTH_IN - _LEFT_IN - _RIGHT_IN - 0.2
    widths_in = [_LEGEND_HANDLE_IN + _LEGEND_LETTER_IN * len(_bare(label)) for label in labels]
    for columns in range(min(len(labels), 4), 1, -1):
        rows = -(-len(labels) // columns)
        if sum(max(widths_in[k : k + rows]) for k in range(0, len(labels), rows)) <= room_in:
            return columns
    return 1


def _bare(label: str) -> str:
    """A label without the marks of subscripts."""
    return label.replace("$_{", "").replace("}$", "")


def _add_legend(axes: Axes) -> None:
    handles, labels = axes.get_legend_handles_labels()
    axes.legend(
        handles,
        labels,
        loc="upper center",
        ncols=_legend_columns(labels),
        fontsize=8.5,
        frameon=False,
        handlelength=2.4,
        columnspacing=1.4,
        borderaxespad=0.3,
    )


def _draw_residuals(axes: Axes, result: CheckResult, fit: Fit) -> None:
    spectrum = result.spectrum
    residual = (spectrum.depth - fit.model_median) / spectrum.depth_err
    axes.axhspan(-1, 1, color=_QUIET_SHADE, alpha=0.25, linewidth=0, zorder=0)
    axes.axhline(0, color=_INK, linewidth=0.8, zorder=1)
    _draw_points(axes, result, residual, np.ones_like(residual))
    reach = max(3.5, 1.15 * float(np.max(np.abs(residual))) + 1)
    axes.set_ylim(-reach, reach)
    axes.yaxis.set_major_locator(MaxNLocator(5, integer=True))
    axes.set_ylabel("residual (σ)")
    minus = f"data minus\n{_model_label(result, fit)}"
    axes.text(1.015, 0.5, minus, transform=axes.transAxes, va="center", fontsize=8.5, color=_INK)
    _tidy(axes)


def _draw_bands(axes: Axes, result: CheckResult) -> None:
    """One row per species: name on the left, word on the right, a bar over each known band between."""
    rows = list(result.bands_um)
    low, high = _wavelength_limits_um(result)
    words = [result.verdict.species.get(species, "") for species in rows]
    for row, (species, word) in enumerate(zip(rows, words, strict=True)):
        shade = _WORD_SHADES.get(word, _QUIET_SHADE)
        points = _WORD_BAR_POINTS if word in _WORD_SHADES else _QUIET_BAR_POINTS
        for lower_um, upper_um in result.bands_um[species]:
            start, stop = max(lower_um, low), min(upper_um, high)
            if stop > start:
                axes.hlines(row, start, stop, color=shade, linewidth=points)
    axes.set_ylim(len(rows) - 0.4, -0.6)
    axes.set_yticks(range(len(rows)), [_formula(x) for x in rows])
    axes.tick_params(axis="both", length=0, labelsize=9, labelcolor=_INK, labelbottom=False)
    right = axes.secondary_yaxis("right")
    right.set_yticks(range(len(rows)), words)
    right.tick_params(length=0, labelsize=9, labelcolor=_INK)
    for part in (axes, right):
        for spine in part.spines.values():
            spine.set_visible(False)


def _add_heading(figure: Figure, result: CheckResult, height_in: float) -> None:
    x = _LEFT_IN / _WIDTH_IN
    name = _plain(_shortened(result.system.planet_name, 48))
    figure.text(x, 1 - 0.12 / height_in, name, fontsize=13, color=_INK, va="top", weight="bold")
    quick = "   (quick run)" if result.settings.get("quick") else ""
    rowless = [
        x for x, word in result.verdict.species.items() if word == "untested" and x not in result.bands_um
    ]
    untested = f"   untested: {', '.join(_formula(x) for x in rowless)}" if rowless else ""
    line = f"feature: {result.verdict.feature}{quick}{untested}"
    figure.text(x, 1 - 0.42 / height_in, line, fontsize=10.5, color=_INK, va="top")


def _formula(name: str) -> str:
    return re.sub(r"(?<=[A-Za-z])(\d+)", r"$_{\1}$", name)


def _shortened(text: str, letters: int) -> str:
    return text if len(text) <= letters else f"{text[: letters - 1]}…"


def _plain(text: str) -> str:
    """Text of the user's with the dollar signs kept from starting a formula."""
    return text.replace("$", r"\$")
