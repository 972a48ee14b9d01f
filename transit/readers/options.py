"""What a user may say about a table that the table does not say itself."""

from __future__ import annotations

from dataclasses import dataclass

from transit.errors import SettingError

WAVELENGTH_UNITS = ("um", "nm", "angstrom", "m", "cm-1")
DEPTH_UNITS = ("fraction", "percent", "ppm", "radius-ratio")
WIDTH_KINDS = ("half", "full")


@dataclass(frozen=True, slots=True)
class ReadOptions:
    """Choices that settle what a table leaves open; every one mirrors a command-line option.

    Parameters
    ----------
    wavelength_unit : {"um", "nm", "angstrom", "m", "cm-1"}, optional
        `--wavelength-unit`.
    depth_unit : {"fraction", "percent", "ppm", "radius-ratio"}, optional
        `--depth-unit`; "radius-ratio" means that the column holds Rp/Rs, which is squared.
    width_kind : {"half", "full"}, optional
        `--width-kind`: whether the width column holds half or full widths of the bins.
    planet, reference : str, optional
        `--planet`, `--reference`: which rows of a table of several planets or papers.
    wavelength_column, width_column, depth_column, error_column : str, optional
        `--wavelength-column` and so on: names of columns that would not be recognised.

    Raises
    ------
    SettingError
        If a unit or kind is not one of those above, or a text is empty.
    """

    wavelength_unit: str | None = None
    depth_unit: str | None = None
    width_kind: str | None = None
    planet: str | None = None
    reference: str | None = None
    wavelength_column: str | None = None
    width_column: str | None = None
    depth_column: str | None = None
    error_column: str | None = None

    def __post_init__(self):
        allowed = {"wavelength_unit": WAVELENGTH_UNITS, "depth_unit": DEPTH_UNITS, "width_kind": WIDTH_KINDS}
        for name in self.__dataclass_fields__:
            value = getattr(self, name)
            if value is None:
                continue
            flag = "--" + name.replace("_", "-")
            if name in allowed and value not in allowed[name]:
                raise SettingError(f"{flag} is {value!r}, expected one of {', '.join(allowed[name])}.")
            if not isinstance(value, str) or not value.strip():
                raise SettingError(f"{flag} is {value!r}, expected a text that is not empty.")
