"""What a user may say about a table that the table does not say itself."""

from __future__ import annotations

import os
from dataclasses import dataclass

from transit.errors import SettingError

WAVELENGTH_UNITS = ("um", "nm", "angstrom", "m", "cm-1")
DEPTH_UNITS = ("fraction", "percent", "ppm", "radius-ratio")
WIDTH_KINDS = ("half", "full")
COVARIANCE_UNITS = ("fraction", "percent", "ppm")


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
    covariance : str or path-like, optional
        `--covariance`: file with the covariance of the depths, rows in the order of the table's.
    covariance_unit : {"fraction", "percent", "ppm"}, optional
        `--covariance-unit`: unit of depth whose square it is in; that of the depth column when left out.

    Raises
    ------
    SettingError
        If a unit or kind is not one of those above, a text is empty, or `covariance_unit` stands alone.
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
    covariance: str | os.PathLike | None = None
    covariance_unit: str | None = None

    def __post_init__(self):
        allowed = {
            "wavelength_unit": WAVELENGTH_UNITS,
            "depth_unit": DEPTH_UNITS,
            "width_kind": WIDTH_KINDS,
            "covariance_unit": COVARIANCE_UNITS,
        }
        if isinstance(self.covariance, os.PathLike):
            object.__setattr__(self, "covariance", os.fspath(self.covariance))
        for name in self.__dataclass_fields__:
            value = getattr(self, name)
            if value is None:
                continue
            flag = "--" + name.replace("_", "-")
            if name in allowed and value not in allowed[name]:
                raise SettingError(f"{flag} is {value!r}, expected one of {', '.join(allowed[name])}.")
            if not isinstance(value, str) or not value.strip():
                raise SettingError(f"{flag} is {value!r}, expected a text that is not empty.")
        if self.covariance_unit is not None and self.covariance is None:
            raise SettingError(
                f"--covariance-unit is {self.covariance_unit!r}, but there is no covariance: add --covariance FILE."
            )
