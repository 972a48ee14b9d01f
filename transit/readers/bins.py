"""Bins on the wavelength axis: half or full widths, missing widths, order, duplicates, overlaps and gaps."""

from __future__ import annotations

import numpy as np

from transit.readers.quantities import format_number

# Spacing of touching bins over the width column is 1 for full widths and 2 for half widths. Real spectra with
# full widths reach 0.83 (overlapping grisms) and 1.16 (small gaps), so that the two ranges stay well apart.
_FULL_RANGE = (0.75, 1.35)
_HALF_RANGE = (1.6, 2.5)
_GAP_FACTOR = 3.0  # a spacing above this many median spacings is a gap, not the width of a bin
_ROUNDING = 0.05  # published widths are rounded: less overlap or gap than this share of a bin is none


def spacing_ratio(centre: np.ndarray, width: np.ndarray, segment: np.ndarray) -> float:
    """Return the median spacing of neighbours in units of their mean width.

    Parameters
    ----------
    centre, width : ndarray, shape (N,)
        In one unit; widths may be NaN.
    segment : ndarray of int, shape (N,)
        Neighbours are looked for within one segment.

    Returns
    -------
    float
        Near 1 when touching bins are given by full widths, near 2 by half widths; NaN without two neighbours.
    """
    ratios = [np.empty(0)]
    for part in np.unique(segment):
        rows = np.flatnonzero((segment == part) & np.isfinite(width))
        rows = rows[np.argsort(centre[rows], kind="stable")]
        step = np.diff(centre[rows])
        mean = (width[rows][1:] + width[rows][:-1]) / 2
        ratios.append((step / mean)[step > 0])
    joined = np.concatenate(ratios)
    return float(np.median(joined)) if len(joined) >= 2 else float("nan")


def kind_from_spacing(ratio: float) -> str | None:
    """Return "full" or "half" when the spacing ratio settles it, else None."""
    for kind, (low, high) in (("full", _FULL_RANGE), ("half", _HALF_RANGE)):
        if low <= ratio <= high:
            return kind
    return None


def fill_half_widths(centre_um: np.ndarray, half_um: np.ndarray, segment: np.ndarray) -> np.ndarray:
    """Fill missing half widths from the distances to the neighbours.

    Parameters
    ----------
    centre_um, half_um : ndarray, shape (N,)
        Sorted centres; half widths, NaN where missing.
    segment : ndarray of int, shape (N,)

    Returns
    -------
    ndarray, shape (N,)
        Edges half-way to both neighbours in the segment, mirrored at the ends; the half width
        is half the distance between the edges. A neighbour beyond a gap does not count.
    """
    filled = half_um.copy()
    for part in np.unique(segment):
        rows = np.flatnonzero(segment == part)
        if not np.any(np.isnan(half_um[rows])):
            continue
        grid = np.unique(centre_um[rows])
        if len(grid) < 2:
            grid = np.unique(centre_um)  # a segment of one bin has its neighbours in the others
        step = np.diff(grid)
        left = np.append(step[0], step)
        right = np.append(step, step[-1])
        limit = _GAP_FACTOR * np.median(step)
        nearest = np.minimum(left, right)
        left = np.where(left > limit, nearest, left)
        right = np.where(right > limit, nearest, right)
        guess = (left + right) / 4
        missing = rows[np.isnan(half_um[rows])]
        filled[missing] = guess[np.searchsorted(grid, centre_um[missing])]
    return filled


def overlap_notes(centre_um, half_um, segment, names) -> list[str]:
    """Return notes on bins that share wavelengths, within one segment and between segments.

    Parameters
    ----------
    centre_um, half_um : ndarray, shape (N,)
        Sorted.
    segment : ndarray of int, shape (N,)
    names : tuple of str
        Names of the segments.

    Returns
    -------
    list of str
        The overlap fraction of a segment is the share of the summed bin widths that is counted twice.
    """
    notes = []
    for part in np.unique(segment):
        rows = np.flatnonzero(segment == part)
        shared, pairs = _shared_width(centre_um[rows], half_um[rows])
        if pairs:
            percent = 100 * shared / (2 * half_um[rows].sum())
            share = f"{percent:.1f}" if percent >= 0.1 else "less than 0.1"
            where = f" in segment {names[part]!r}" if len(names) > 1 else ""
            notes.append(
                f"{pairs} of {len(rows) - 1} pairs of neighbouring bins overlap{where}; the overlap "
                "fraction is "
                f"{share} per cent of the summed widths, where errors may not be independent."
            )
    present = np.unique(segment)
    for k, first in enumerate(present):
        for second in present[k + 1 :]:
            common = _common_range(centre_um, half_um, segment == first, segment == second)
            if common:
                notes.append(
                    f"Bins of the segments {names[first]!r} and {names[second]!r} overlap between "
                    f"{format_number(common[0])} and {format_number(common[1])} um, as different "
                    "instruments may."
                )
    return notes


def _shared_width(centre, half) -> tuple[float, int]:
    order = np.argsort(centre - half, kind="stable")
    low, high = (centre - half)[order], (centre + half)[order]
    shared, pairs = 0.0, 0
    reach = high[0]
    for i in range(1, len(low)):
        overlap = min(reach, high[i]) - low[i]
        if overlap > _ROUNDING * min(high[i] - low[i], high[i - 1] - low[i - 1]):
            shared += overlap
            pairs += 1
        reach = max(reach, high[i])
    return shared, pairs


def _common_range(centre, half, first, second) -> tuple[float, float] | None:
    low_1, high_1 = (centre - half)[first], (centre + half)[first]
    low_2, high_2 = (centre - half)[second], (centre + half)[second]
    low = np.maximum(low_1[:, None], low_2[None, :])
    high = np.minimum(high_1[:, None], high_2[None, :])
    share = (high - low) > _ROUNDING * 2 * np.minimum(half[first][:, None], half[second][None, :])
    return (float(low[share].min()), float(high[share].max())) if share.any() else None


def gap_note(centre_um: np.ndarray, half_um: np.ndarray) -> list[str]:
    """Return the note on gaps wider than the bins beside them; arrays of shape (N,), sorted."""
    reach = np.maximum.accumulate(centre_um + half_um)[:-1]
    start = (centre_um - half_um)[1:]
    beside = 2 * np.maximum(half_um[1:], half_um[:-1])
    rows = np.flatnonzero(start - reach > (1 - _ROUNDING) * beside)
    if not len(rows):
        return []
    shown = rows[np.argsort(reach[rows] - start[rows], kind="stable")][:5]
    listed = ", ".join(f"{reach[i]:.4g}-{start[i]:.4g} um" for i in sorted(shown))
    word = "gap" if len(rows) == 1 else "gaps"
    more = "" if len(rows) <= 5 else " (the five widest are named)"
    return [f"{len(rows)} {word} wider than the bins beside: {listed}{more}."]


def repeated_note(centre_um, segment, names) -> list[str]:
    """Return the note on centre wavelengths that occur more than once; arrays of shape (N,), sorted."""
    same = np.flatnonzero(np.diff(centre_um) == 0)
    if not len(same):
        return []
    listed = ", ".join(format_number(w) for w in np.unique(centre_um[same])[:5])
    within = int(np.sum(segment[same] == segment[same + 1]))
    if within == 0:
        where = "in different segments"
    else:
        where = (
            "within one segment"
            if len(names) == 1 or within == len(same)
            else f"{within} of them in one segment"
        )
    what = "centre wavelength repeats" if len(same) == 1 else "centre wavelengths repeat"
    return [f"{len(same)} {what} ({listed} um), {where}; all rows are kept."]
