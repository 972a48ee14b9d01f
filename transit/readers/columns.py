"""Column names to roles: which column is the wavelength, its width, the depth, its errors."""

from __future__ import annotations

import re
from dataclasses import dataclass

from transit.errors import InputFileError
from transit.readers.cells import count_usable
from transit.readers.options import ReadOptions
from transit.readers.quantities import StatedUnit, is_unit_text, standard_unit
from transit.readers.raw import RawTable

# --- what a name says -------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Column:
    """What the name of a column says.

    Parameters
    ----------
    name : str
        As in the file.
    role : str
        "wavelength", "half", "full", "width" (kind unknown), "low", "high", "depth", "ratio", "error",
        "limit", "segment", "instrument", "planet", "reference", or "" when unknown.
    unit : StatedUnit or None
        Unit that the name or the archive's documentation states.
    target : str
        Of errors and limits: the role of the column they belong to, "" when the name does not say.
    direction : {"", "plus", "minus"}
        Of errors.
    base : str
        The words left after units, error words and directions are taken off.
    archive : bool
        Whether the public archive defines the column.
    """

    name: str
    role: str
    unit: StatedUnit | None = None
    target: str = ""
    direction: str = ""
    base: str = ""
    archive: bool = False


_ARCHIVE_UNIT = "the archive's column"
# Columns of the public archive's spectrum files (upper case there) and of its older all-planets table.
_ARCHIVE: dict[str, tuple[str, str | None, str, str]] = {
    "centralwavelng": ("wavelength", "um", "", ""),
    "bandwidth": ("width", "um", "", ""),
    "pl_trandep": ("depth", "percent", "", ""),
    "pl_trandeperr1": ("error", None, "depth", "plus"),
    "pl_trandeperr2": ("error", None, "depth", "minus"),
    "pl_trandeplim": ("limit", None, "depth", ""),
    "pl_ratror": ("ratio", "radius-ratio", "", ""),
    "pl_ratrorerr1": ("error", None, "ratio", "plus"),
    "pl_ratrorerr2": ("error", None, "ratio", "minus"),
    "pl_ratrorlim": ("limit", None, "ratio", ""),
    "plntransdep": ("depth", "percent", "", ""),
    "plntransdeperr1": ("error", None, "depth", "plus"),
    "plntransdeperr2": ("error", None, "depth", "minus"),
    "plntransdeplim": ("limit", None, "depth", ""),
    "plnratror": ("ratio", "radius-ratio", "", ""),
    "plnratrorerr1": ("error", None, "ratio", "plus"),
    "plnratrorerr2": ("error", None, "ratio", "minus"),
    "plnratrorlim": ("limit", None, "ratio", ""),
    "plntname": ("planet", None, "", ""),
    "pl_name": ("planet", None, "", ""),
    "plntranreflink": ("reference", None, "", ""),
    "instrument": ("instrument", None, "", ""),
}

_WAVE = r"(?:wavelengths?|waves?|wl|wav|wvl|wavelen|lambda|lam)"
_BEFORE = r"(?:(?:central|centre|center|mean|mid|middle|bin|effective|eff|observed|vacuum|vac|air) )*"
_AFTER = r"(?: (?:central|centre|center|mean|mid|middle|bin|cen|c|eff|effective|value|0))*"
_RATIO = r"(?:rp ?(?:rs|rstar|r star|r)|rprs)"
_SQUARED = rf"(?:{_RATIO} ?(?:2|squared|sq)|rp ?2 (?:rs|rstar|r star|r) ?2|k ?2)"
_ROLE_PATTERNS = [
    (role, re.compile(pattern))
    for role, pattern in (
        ("wavelength", rf"{_BEFORE}{_WAVE}{_AFTER}|bin (?:centre|center|mid|middle)s?|wave ?numbers?"),
        ("half", rf"(?:(?:{_WAVE}|bin|band) )?half ?(?:(?:bin|band) ?)?widths?|(?:{_WAVE}|bin) half widths?"),
        ("full", rf"(?:(?:{_WAVE}|bin|band) )?full ?(?:(?:bin|band) ?)?widths?|(?:{_WAVE}|bin) full widths?"),
        (
            "width",
            rf"(?:(?:{_WAVE}|bin|band|channel|wave ?number) ?)?(?:(?:bin|band|channel) ?)?(?:widths?|size)"
            rf"|bandwidths?|(?:d|delta) ?{_WAVE}|dw|dwl|{_WAVE} (?:delta|width|bandwidth|binwidth)",
        ),
        (
            "depth",
            r"(?:(?:transit|transmission|planetary|mean|median|measured|observed|white light) )*"
            rf"(?:depths?|tdepths?|transitdepths?|tdep)(?: {_SQUARED}| value)?"
            rf"|{_SQUARED}|radius ratio squared",
        ),
        (
            "ratio",
            rf"(?:transit depth )?{_RATIO}|(?:planet (?:to )?star )?radi(?:us|i) ratio|ror|k"
            r"|ratio of planet to stellar radius",
        ),
        ("segment", r"segments?"),
        ("instrument", r"instruments?"),
        ("planet", r"planet(?: name)?|pl name"),
        ("reference", r"references?|ref|bibcode"),
    )
]
_ERROR_WORDS = {"err", "errs", "error", "errors", "unc", "uncert", "uncertainty", "uncertainties", "sigma"}
_ERROR_WORDS |= {"std", "stddev", "e", "sig"}
_PLUS = {"plus", "upper", "up", "pos", "positive", "high", "hi", "p", "u"}
_MINUS = {"minus", "lower", "low", "lo", "neg", "negative", "m", "l"}
_LOW = {"low", "lower", "lo", "min", "minimum", "start", "left", "begin", "from"}
_HIGH = {"high", "upper", "hi", "up", "max", "maximum", "end", "stop", "right", "to"}
_EDGE_WORDS = {
    "wavelength",
    "wavelengths",
    "wave",
    "wl",
    "wav",
    "lambda",
    "lam",
    "bin",
    "edge",
    "edges",
    "band",
}
_EDGE_WORDS |= {"channel", "bound", "boundary", "wavenumber"}
_LIMIT_WORDS = {"lim", "limit", "limits", "flag"}
_JOINED_ERROR = re.compile(
    r"\b(err|error|unc|sigma|sig)(plus|minus|p|m|upper|lower|up|lo|low|hi|pos|neg|u|l|1|2)\b"
)
_JOINED_DEPTH = re.compile(
    r"\b(t?depth|transitdepth|rprs|ror|wave|wavelength|wl)(errors?|err|unc|sigma|width)"
)
_GREEK = str.maketrans({"λ": "lambda", "σ": "sigma", "Δ": "delta ", "δ": "delta ", "µ": "u", "μ": "u"})
_SURE_UNITS = {"um", "micron", "microns", "nm", "angstrom", "angstroms", "ppm", "percent", "pct"}


def describe(name: str) -> Column:
    """Tell the role, unit and direction that a column name states.

    >>> describe("depth_err_minus_ppm").direction, describe("Wavelength (microns)").unit.unit
    ('minus', 'um')
    """
    known = _ARCHIVE.get(name.strip().lower())
    if known:
        role, unit, target, direction = known
        stated = StatedUnit(unit, _ARCHIVE_UNIT) if unit else None
        return Column(name, role, stated, target, direction, base=role, archive=True)
    rest, unit_text = _take_unit(name)
    words = _words(rest)
    words, unit_text = _take_unit_word(words, unit_text)
    unit = StatedUnit(unit_text, "its name") if unit_text else None
    return _classify(name, words, unit)


def _take_unit(name: str) -> tuple[str, str | None]:
    """Split a unit in brackets or behind a separator off the end of a name."""
    text = name.strip()
    bracket = re.search(r"[(\[]([^()\[\]]*)[)\]]\s*$", text)
    if bracket and bracket.start() > 0:
        inner = bracket[1].strip()
        if is_unit_text(inner):
            return text[: bracket.start()], inner
        if text[bracket.start()] == "[" and inner:
            return text[: bracket.start()], inner
    suffix = re.match(r"^(.*[A-Za-z)\]\d²])[\s_.,/-]+(cm-1|cm\^-1|1/cm|%|[A-Za-zµμ]+)$", text)
    if suffix and is_unit_text(suffix[2]) and suffix[2].lower() not in ("a", "wavenumber"):
        return suffix[1], suffix[2]
    return text, None


def _words(text: str) -> list[str]:
    """Return the words of a name, with signs and joined words spelled out."""
    text = re.sub(r"(?<=[a-z])(?=[A-Z])", " ", text.translate(_GREEK)).replace("²", " 2 ")
    text = re.sub(r"\(\s*\+\s*\)|\+\s*$|(?<=[a-z])\+", " plus ", text)
    text = re.sub(r"\(\s*[-−]\s*\)|[-−]\s*$|_-", " minus ", text).lower()
    text = re.sub(r"\b1[ -]?sigma\b", "sigma", re.sub(r"[_\W]+", " ", text).strip())
    text = _JOINED_DEPTH.sub(r"\1 \2", text)
    return _JOINED_ERROR.sub(r"\1 \2", text).split()


def _take_unit_word(words: list[str], unit: str | None) -> tuple[list[str], str | None]:
    """Take a unit out of the middle of a name (`depth_ppm_err`); short units are believed at the end only."""
    if unit is None:
        for i, word in enumerate(words[1:], start=1):
            if word in _SURE_UNITS:
                return words[:i] + words[i + 1 :], word
    return words, unit


def _role_of(base: str) -> str:
    return next((role for role, pattern in _ROLE_PATTERNS if pattern.fullmatch(base)), "")


def _classify(name: str, words: list[str], unit: StatedUnit | None) -> Column:
    base = " ".join(words)
    role = _role_of(base)
    if role:
        return Column(name, role, unit or _implied_unit(role, base), base=base)
    bag = set(words)
    if bag & _ERROR_WORDS:
        return _classify_error(name, words, unit)
    if bag & _LIMIT_WORDS:
        rest = " ".join(w for w in words if w not in _LIMIT_WORDS)
        target = _role_of(rest)
        if target in ("depth", "ratio") or not rest:
            return Column(name, "limit", target=target, base=rest)
    if bag & _EDGE_WORDS:
        for edge, marks in (("low", _LOW), ("high", _HIGH)):
            if bag & marks and bag <= _EDGE_WORDS | marks:
                return Column(name, edge, unit, base=base)
    return Column(name, "", unit, base=base)


def _implied_unit(role: str, base: str) -> StatedUnit | None:
    if role == "ratio":
        return StatedUnit("radius-ratio", "its name")
    if role == "wavelength" and "number" in base:
        return StatedUnit("cm-1", "its name")
    if role == "depth" and re.search(_SQUARED + "|squared", base):
        return StatedUnit("fraction", SQUARE_LABEL)
    return None


SQUARE_LABEL = "its label as a squared radius ratio"


def _classify_error(name: str, words: list[str], unit: StatedUnit | None) -> Column:
    direction = ""
    rest = []
    for i, word in enumerate(words):
        after_error = i > 0 and words[i - 1] in _ERROR_WORDS
        if word in _ERROR_WORDS:
            continue
        if word in _PLUS or (word == "1" and after_error):
            direction = "plus"
        elif word in _MINUS or (word == "2" and after_error):
            direction = "minus"
        else:
            rest.append(word)
    base = " ".join(rest)
    target = _role_of(base)
    if target == "wavelength":
        # What tables call the "error" of a wavelength is the width of the bin.
        return Column(name, "width", unit, base=base)
    return Column(name, "error", unit, target, direction, base)


# --- which columns are used -------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Choice:
    """The columns that a spectrum is made of; None where there is none.

    `wavelength` is None only when `low` and `high` are there. `error_minus` is set for asymmetric errors.
    """

    wavelength: Column | None
    width: Column | None
    low: Column | None
    high: Column | None
    value: Column
    error: Column
    error_minus: Column | None
    limit: Column | None
    segment: Column | None

    def names(self) -> list[str]:
        """Names of the columns that hold numbers in use."""
        columns = (
            self.wavelength,
            self.width,
            self.low,
            self.high,
            self.value,
            self.error,
            self.error_minus,
        )
        return [column.name for column in columns if column is not None]


def describe_all(table: RawTable) -> list[Column]:
    """Describe every column of a table; `e_X` and `E_X` of journal tables become lower and upper errors."""
    described = []
    for name in table.names:
        column = describe(name)
        twin = name[:1].swapcase() + name[1:]
        if column.role == "error" and name[:2] in ("e_", "E_") and twin in table.names:
            direction = "minus" if name[0] == "e" else "plus"
            column = Column(name, "error", column.unit, column.target, direction, column.base)
        described.append(column)
    return described


def choose_columns(table: RawTable, options: ReadOptions) -> Choice:
    """Choose the columns to read.

    Parameters
    ----------
    table : RawTable
        Already reduced to the rows of one planet and reference.
    options : ReadOptions
        Column overrides win over recognition.

    Returns
    -------
    Choice

    Raises
    ------
    InputFileError
        If a needed column is missing, or several could be meant.
    """
    columns = describe_all(table)
    value = _choose_value(table, columns, options)
    low, high = _edges(table, columns, options)
    wavelength = _override(table, columns, options.wavelength_column, "--wavelength-column", "wavelength")
    if wavelength is None:
        wavelength = _one(table, columns, ("wavelength",), "wavelength", "--wavelength-column", low is None)
    width = _override(table, columns, options.width_column, "--width-column", "width")
    if width is None and low is None:
        for role in ("half", "full", "width"):
            width = width or _one(table, columns, (role,), "bin width", "--width-column", False)
    error, minus = _choose_errors(table, columns, value, options)
    return Choice(
        wavelength=wavelength,
        width=width,
        low=low,
        high=high,
        value=value,
        error=error,
        error_minus=minus,
        limit=_limit(columns, value),
        segment=_segment(table, columns),
    )


def _listing(table: RawTable) -> str:
    return "its columns are " + ", ".join(repr(name) for name in table.names)


def _override(table, columns, wanted, flag, role) -> Column | None:
    """Return the column that an option names; its own role is kept when it fits the use."""
    if wanted is None:
        return None
    exact = [c for c in columns if c.name == wanted]
    found = exact or [c for c in columns if c.name.strip().lower() == wanted.strip().lower()]
    if len(found) != 1:
        raise table.refusal(f"There is no column {wanted!r} as {flag} asks; {_listing(table)}.")
    column = found[0]
    fitting = {"width": ("half", "full", "width"), "depth": ("depth", "ratio")}.get(role, (role,))
    if column.role in fitting:
        return column
    return Column(column.name, role, column.unit, base=column.base, direction=column.direction)


def _one(table, columns, roles, what, flag, needed) -> Column | None:
    found = [c for c in columns if c.role in roles]
    archive = [c for c in found if c.archive]
    filled = [c for c in archive or found if count_usable(table, c.name)]
    # The archive's own names win, then columns that hold something.
    found = filled or archive or found
    if roles == ("wavelength",) and len(found) > 1:
        lengths = [c for c in found if not (c.unit and c.unit.unit == "cm-1")]
        found = lengths or found
    if len(found) == 1:
        return found[0]
    if found:
        names = ", ".join(repr(c.name) for c in found)
        raise table.refusal(f"Several columns could be the {what}: {names}. Name one with {flag}.")
    if not needed:
        return None
    raise table.refusal(f"No column for the {what} was recognised; {_listing(table)}. Name it with {flag}.")


def _edges(table, columns, options) -> tuple[Column | None, Column | None]:
    if options.width_column is not None:
        return None, None
    low = _one(table, columns, ("low",), "lower edge of a bin", "--width-column", False)
    high = _one(table, columns, ("high",), "upper edge of a bin", "--width-column", False)
    return (low, high) if low and high else (None, None)


def _choose_value(table, columns, options) -> Column:
    """Choose depth or radius ratio: the depth, unless most of its cells are empty where the ratio's are not."""
    named = _override(table, columns, options.depth_column, "--depth-column", "depth")
    if named is not None:
        return named
    depth = _one(table, columns, ("depth",), "transit depth", "--depth-column", False)
    ratio = _one(table, columns, ("ratio",), "radius ratio", "--depth-column", False)
    if depth is None and ratio is None:
        return _one(table, columns, ("depth",), "transit depth", "--depth-column", True)
    if depth is None or ratio is None:
        return depth or ratio
    if options.depth_unit == "radius-ratio" and count_usable(table, ratio.name):
        return ratio
    return ratio if count_usable(table, ratio.name) > 2 * count_usable(table, depth.name) else depth


def _choose_errors(table, columns, value, options) -> tuple[Column, Column | None]:
    named = _override(table, columns, options.error_column, "--error-column", "error")
    if named is not None:
        return named, None
    errors = [c for c in columns if c.role == "error"]
    of_value = [c for c in errors if c.base and (c.base == value.base or c.target == value.role)]
    if value.archive:
        of_value = [c for c in of_value if c.archive] or of_value
    found = of_value or [c for c in errors if not c.base]
    plain = [c for c in found if not c.direction]
    plus = [c for c in found if c.direction == "plus"]
    minus = [c for c in found if c.direction == "minus" and count_usable(table, c.name)]
    for group, what in ((plain, "error"), (plus, "upper error"), (minus, "lower error")):
        if len(group) > 1:
            names = ", ".join(repr(c.name) for c in group)
            raise table.refusal(
                f"Several columns could be the {what}: {names}. Name one with --error-column."
            )
    if not plus and not plain:
        raise table.refusal(
            f"No column for the error of {value.name!r} was recognised; {_listing(table)}. Name it with "
            "--error-column. A spectrum without errors cannot be tested."
        )
    return (plus or plain)[0], (minus[0] if minus else None)


def _limit(columns, value) -> Column | None:
    found = [c for c in columns if c.role == "limit" and c.target in ("", value.role)]
    return next((c for c in found if c.target), found[0] if found else None)


def _segment(table, columns) -> Column | None:
    segment = [c for c in columns if c.role == "segment"]
    if segment:
        return segment[0]
    instrument = [c for c in columns if c.role == "instrument"]
    if instrument and len({str(cell).strip() for cell in table.cells[instrument[0].name]}) > 1:
        return instrument[0]
    return None


# --- the unit of a column ---------------------------------------------------------------------------------


def stated_unit(table: RawTable, column: Column) -> StatedUnit | None:
    """Return the unit stated for a column: by its name, else by the header, else by the archive's documents.

    Parameters
    ----------
    table : RawTable
    column : Column

    Returns
    -------
    StatedUnit or None
        With the standard name of the unit, or the text as written when the spelling is unknown.
    """
    header = table.units.get(column.name)
    candidates = [
        column.unit if column.unit and column.unit.origin == "its name" else None,
        StatedUnit(header, "the header") if header else None,
        column.unit,
    ]
    stated = next((unit for unit in candidates if unit is not None), None)
    if stated is None:
        return None
    unit = standard_unit(stated.unit) or stated.unit
    if column.role == "ratio" and unit == "fraction":
        unit = "radius-ratio"  # headers call a ratio "dimensionless", which is true of both
    return StatedUnit(unit, stated.origin)


def wrong_dimension(table: RawTable, column: Column, unit: StatedUnit, allowed, flag: str) -> InputFileError:
    """Return the refusal of a unit that cannot be one of this kind of column."""
    return table.refusal(
        f"The unit of column {column.name!r} is {unit.unit!r} according to {unit.origin}, expected one of "
        f"{', '.join(allowed)}. Name the right one with {flag}."
    )
