"""Files to depth spectra, with exact complaints.

`formats` decides the format and returns a raw table, `rows` picks planet and reference, `names` and `columns`
recognise columns, `quantities` and `settled` know units, `wavelengths`, `bins` and `depths` read the numbers;
`covariance` reads the matrix that may belong to them; `spectrum` puts them together.
"""

from transit.readers.options import (
    COVARIANCE_UNITS,
    DEPTH_UNITS,
    WAVELENGTH_UNITS,
    WIDTH_KINDS,
    ReadOptions,
)
from transit.readers.spectrum import read_depth_table

__all__ = [
    "COVARIANCE_UNITS",
    "DEPTH_UNITS",
    "WAVELENGTH_UNITS",
    "WIDTH_KINDS",
    "ReadOptions",
    "read_depth_table",
]
