"""leadline: does a transmission spectrum hold a feature, which absorber explains it, and how sure is that?"""

from importlib import import_module

# Resolved on first use: the command line must not pay for numpy and matplotlib to print its help.
_HOMES = {
    "read_depth_table": "transit.readers",
    "ReadOptions": "transit.readers",
    "read_system": "transit.system",
    "check_spectrum": "transit.check",
    "summary": "transit.report",
    "check_figure": "transit.figures",
    "result_document": "transit.writers",
    "write_result": "transit.writers",
    "DepthSpectrum": "transit.records",
    "Priors": "transit.records",
    "System": "transit.records",
    "Interval": "transit.records",
    "Fit": "transit.records",
    "Comparison": "transit.records",
    "Verdict": "transit.records",
    "CheckResult": "transit.records",
    "Nuisances": "transit.records",
    "Rival": "transit.records",
    "FalseAlarms": "transit.records",
    "Sensitivity": "transit.records",
    "Thresholds": "transit.thresholds",
    "read_star_spectra": "transit.star",
    "prepare": "transit.check",
    "sensitivity_of": "transit.check",
}

__all__ = ["__version__", *_HOMES]


def _version() -> str:
    from importlib import metadata

    try:
        return metadata.version("leadline")
    except metadata.PackageNotFoundError:
        return "0+unknown"  # run from a folder that was never installed


def __getattr__(name: str):
    if name == "__version__":
        value = _version()
    elif name in _HOMES:
        value = getattr(import_module(_HOMES[name]), name)
    else:
        raise AttributeError(f"module 'transit' has no attribute {name!r}")
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
