"""The template of a system file."""

from __future__ import annotations

import os
import tempfile
from dataclasses import fields
from pathlib import Path

from transit.errors import OutputError
from transit.records import Priors
from transit.thresholds import Thresholds


def _template() -> str:
    defaults = Priors()
    lines = [f"# {name} = {_toml_default(getattr(defaults, name))}" for name in _template_priors()]
    priors = "\n".join(lines)
    thresholds = "\n".join(f"# {f.name} = {f.default}" for f in fields(Thresholds))
    return f"""\
# System file of leadline: star, planet, priors and thresholds of one target.
# The planet and the star below are invented. Replace the numbers; lines that begin with # are optional.
# Any number of [star] and [planet] may have a 1-sigma error beside it: NAME_err.

[star]
radius_rsun = 0.87          # radius, solar radii
# radius_rsun_err = 0.02
# teff_k = 5240.0           # effective temperature, K
# j_mag = 9.6               # J magnitude

[planet]
name = "Invented-1 b"
radius_rjup = 1.02          # radius, Jupiter's equatorial radii; or: radius_rearth
# radius_rjup_err = 0.03
mass_mjup = 0.41            # mass, Jupiter masses; or: mass_mearth
# mass_mjup_err = 0.03
equilibrium_temperature_k = 1060.0   # K; without it: computed from teff_k and semi_major_axis_au
# semi_major_axis_au = 0.049
# period_d = 4.12
# background = "H2/He"      # main gas: "H2/He", "N2", "CO2" or "H2O"

[priors]
# Ranges of the uniform priors, [lower, upper]; the values shown are the defaults.
{priors}
# temperature_k = [500.0, 1300.0]      # replaces temperature_teq
# log10_vmr_H2O = [-8.0, -2.0]         # range of one gas in place of log10_vmr

[thresholds]
# Where the words of the verdict begin; the values shown are the defaults. Change them before you look at the data.
{thresholds}
"""


def _template_priors() -> list[str]:
    return [f.name for f in fields(Priors) if f.name not in ("temperature_k", "log10_vmr_species")]


def _toml_default(value) -> str:
    return f"[{value[0]}, {value[1]}]" if isinstance(value, tuple) else str(value)


def write_new_system(path, force: bool = False) -> Path:
    """Write a commented template of a system file, of an invented planet, which `read_system` accepts.

    Parameters
    ----------
    path : str or path-like
        File to write.
    force : bool
        Replace a file that is already there.

    Returns
    -------
    Path
        The file written.

    Raises
    ------
    OutputError
        If the file is already there and `force` is False, or it cannot be written.
    """
    target = Path(path)
    if target.is_dir():
        raise OutputError(f"{target} is a directory, expected the name of a file to write.")
    if target.exists() and not force:
        raise OutputError(f"{target} is already there; choose another name, or replace it with --force.")
    temporary = None
    try:
        # Written beside the target and renamed, so that an interruption leaves no half file.
        handle, temporary = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.")
        with os.fdopen(handle, "w", encoding="utf-8") as stream:
            stream.write(_template())
        umask = os.umask(0)
        os.umask(umask)
        os.chmod(temporary, 0o666 & ~umask)  # mkstemp gives 0600, unlike every other file the user writes
        os.replace(temporary, target)
        temporary = None
    except OSError as error:
        raise OutputError(f"{target} cannot be written ({error.strerror}); check the directory.") from error
    finally:
        if temporary is not None:
            Path(temporary).unlink(missing_ok=True)
    return target
