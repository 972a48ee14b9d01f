"""What the name of a column says: role, unit, direction of an error."""

from __future__ import annotations

import re
from dataclasses import dataclass

from transit.readers.quantities import StatedUnit, is_unit_text


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
SQUARE_LABEL = "its label as a squared radius ratio"  # names a quantity: weaker than a stated unit
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
_LIMIT_WORDS = {"lim", "limit", "limits"}
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
        rest = " ".join(w for w in words if w not in _LIMIT_WORDS | {"flag"})
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
