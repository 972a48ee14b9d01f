"""A table as found in a file: cells still as written, and where each row stands in the file."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from transit.errors import InputFileError


@dataclass(frozen=True, slots=True)
class RawTable:
    """Cells as written, before anything is known about their meaning.

    Parameters
    ----------
    path : str
        File, as the user named it.
    kind : str
        Format in words, for the report ("IPAC table").
    names : tuple of str
        Column names, unique, in file order.
    cells : dict of str to list
        One list per column, each of the same length: text, a number, or None where masked.
    units : dict of str to str
        Units stated in the header; columns without one are absent.
    meta : dict of str to str
        Header keywords in lower case.
    lines : tuple of int
        Line (text formats) or row (binary formats) of the file, counted from 1, that each row came from.
    line_word : {"line", "row"}
        What `lines` counts.
    missing : frozenset of str
        Texts that the header declares to mean "no value", in lower case.
    decimal_comma : bool
        Whether a comma inside a number can only be a decimal sign.
    notes : tuple of str
        Sentences for the report.
    """

    path: str
    kind: str
    names: tuple[str, ...]
    cells: dict[str, list]
    units: dict[str, str] = field(default_factory=dict)
    meta: dict[str, str] = field(default_factory=dict)
    lines: tuple[int, ...] = ()
    line_word: str = "line"
    missing: frozenset[str] = frozenset()
    decimal_comma: bool = False
    notes: tuple[str, ...] = ()

    @property
    def n_rows(self) -> int:
        """Number of rows."""
        return len(self.lines)

    def take(self, rows) -> RawTable:
        """Return the table with only these rows (positions), in this order."""
        cells = {name: [column[i] for i in rows] for name, column in self.cells.items()}
        return replace(self, cells=cells, lines=tuple(self.lines[i] for i in rows))

    def refusal(self, message: str, row: int | None = None) -> InputFileError:
        """Return (not raise) the error for this file, with the place of a row when one is given."""
        if row is None:
            return InputFileError(message, self.path)
        if self.line_word == "line":
            return InputFileError(message, self.path, self.lines[row])
        return InputFileError(f"row {self.lines[row]}: {message}", self.path)
