"""A result to files: all of them or none, and never over files that were not asked to be replaced."""

from __future__ import annotations

import json
import math
import os
import platform
import re
import shutil
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict
from importlib import metadata
from pathlib import Path

import numpy as np

from transit import __version__
from transit.errors import OutputError
from transit.figures import check_figure
from transit.records import CheckResult, Comparison, FalseAlarms, Fit, Interval, Rival
from transit.report import summary
from transit.units import PPM

FORMAT = "leadline-check-2"
# result.json is moved into place last: where it is, the set is complete.
FILE_NAMES = ("summary.txt", "figure.png", "figure.pdf", "draws.npz", "timing.json", "result.json")
PACKAGES = ("numpy", "scipy", "astropy", "emcee", "pandas", "matplotlib", "click")
FIGURE_DPI = 160


def result_document(result: CheckResult) -> dict:
    """Everything but the posterior draws and the timing, as plain Python that strict JSON can hold.

    Parameters
    ----------
    result : CheckResult

    Returns
    -------
    dict
        Keys `format`, `program`, `spectrum`, `system`, `settings`, `hypotheses`, `comparisons`, `rivals`,
        `with_star`, `false_alarms` (None where not simulated), `sensitivity`, `verdict`, `warnings`. Numbers that
        are not finite become None.
    """
    spectrum = result.spectrum
    grown = {fit.name: fit for fit in result.inflated}
    derived = {"scale_height_km": result.scale_height_km, "scale_height_ppm": result.scale_height_ppm}
    document = {
        "format": FORMAT,
        "program": _program(),
        "spectrum": {
            "file": spectrum.source,
            "sha256": spectrum.sha256,
            "n_bins": spectrum.n_bins,
            "wavelength_um": spectrum.wavelength_um,
            "half_width_um": spectrum.half_width_um,
            "depth_ppm": spectrum.depth_ppm,
            "depth_err_ppm": spectrum.depth_err_ppm,
            "segment": [spectrum.segment_names[index] for index in spectrum.segment],
            "notes": spectrum.notes,
        },
        "system": asdict(result.system) | {"errors": dict(result.system.errors)} | derived,
        "settings": result.settings | {"thresholds": asdict(result.system.thresholds)},
        "hypotheses": [_hypothesis(fit, grown.get(fit.name)) for fit in result.fits],
        "comparisons": [_comparison(comparison) for comparison in result.comparisons],
        "rivals": [_rival(rival) for rival in result.rivals],
        "with_star": [_hypothesis(fit, None) for fit in result.with_star],
        "false_alarms": None if result.false_alarms is None else _false_alarms(result.false_alarms),
        "sensitivity": {species: asdict(found) for species, found in result.sensitivity.items()},
        "verdict": asdict(result.verdict),
        "warnings": result.warnings,
    }
    return _plain(document)


def check_output_dir(out_dir: str | Path, force: bool = False) -> None:
    """Refuse a place where `write_result` would fail; to be called before a long computation.

    Parameters
    ----------
    out_dir : path
        Directory to write to; it need not exist.
    force : bool
        Whether files of an earlier result may be replaced.

    Raises
    ------
    OutputError
        If it is a file, holds (part of) a result and `force` is False, or cannot be written to.
    """
    out_dir = Path(out_dir)
    if out_dir.exists() and not out_dir.is_dir():
        raise OutputError(f"{out_dir} is a file, expected a directory. Choose another name for the results.")
    for name in FILE_NAMES:
        if (out_dir / name).is_dir():
            raise OutputError(f"{out_dir / name} is a directory, but a file has to go there. Move it away.")
    found = [name for name in sorted(FILE_NAMES) if os.path.lexists(out_dir / name)]
    if found and not force:
        raise OutputError(
            f"{out_dir} already holds {', '.join(found)}. "
            "Choose another directory, or replace them with --force."
        )
    present = next(path for path in (out_dir, *out_dir.absolute().parents) if path.exists())
    if not present.is_dir():
        raise OutputError(f"{out_dir} cannot be made, since {present} is a file. Choose another place.")
    if not os.access(present, os.W_OK | os.X_OK):
        raise OutputError(f"{present} is not writable. Choose another directory or change its permissions.")


def write_result(result: CheckResult, out_dir: str | Path, force: bool = False) -> Path:
    """Write result.json, summary.txt, figure.png, figure.pdf, draws.npz and timing.json.

    Parameters
    ----------
    result : CheckResult
    out_dir : path
        Directory to write to, made when missing.
    force : bool
        Replace the files of an earlier result; other files in the directory are never touched.

    Returns
    -------
    pathlib.Path
        The directory.

    Raises
    ------
    OutputError
        As `check_output_dir`, or if the disk refuses.

    Notes
    -----
    Files are written to a hidden directory on the same disk and moved at the end, so that an interrupted run
    leaves no half-written file. The same result gives the same bytes, timing.json excepted. draws.npz holds,
    for a hypothesis NAME, the draws under `NAME` and the names of its columns under `NAME.names`; those with
    inflated errors under `NAME.inflated` and `NAME.inflated.names`.
    """
    out_dir = Path(out_dir)
    check_output_dir(out_dir, force)
    try:
        if out_dir.is_dir():
            with _scratch_dir(out_dir) as scratch:
                _write_files(result, scratch)
                (out_dir / "result.json").unlink(missing_ok=True)
                for name in FILE_NAMES:
                    os.replace(scratch / name, out_dir / name)
        else:
            out_dir.parent.mkdir(parents=True, exist_ok=True)
            with _scratch_dir(out_dir.parent) as scratch:
                _write_files(result, scratch)
                os.rename(scratch, out_dir)
    except OSError as error:
        reason = error.strerror or error
        raise OutputError(f"{out_dir}: the result could not be written ({reason})..") from error
    return out_dir


@contextmanager
def _scratch_dir(parent: Path) -> Iterator[Path]:
    # A plain mkdir, since tempfile's directories are closed to everyone else and this one may be kept.
    scratch = parent / f".leadline-{uuid.uuid4().hex[:12]}"
    scratch.mkdir()
    try:
        yield scratch
    finally:
        shutil.rmtree(scratch, ignore_errors=True)


def _write_files(result: CheckResult, folder: Path) -> None:
    (folder / "result.json").write_text(_json(result_document(result)), encoding="utf-8", newline="\n")
    (folder / "timing.json").write_text(_json(_plain(result.timing)), encoding="utf-8", newline="\n")
    (folder / "summary.txt").write_text(summary(result) + "\n", encoding="utf-8", newline="\n")
    figure = check_figure(result)
    # Dates and program versions in the metadata would make equal results differ.
    figure.savefig(folder / "figure.png", dpi=FIGURE_DPI, metadata={"Software": None})
    figure.savefig(folder / "figure.pdf", metadata={"CreationDate": None, "Creator": None, "Producer": None})
    with (folder / "draws.npz").open("wb") as stream:
        np.savez_compressed(stream, **_draws(result))


def _draws(result: CheckResult) -> dict[str, np.ndarray]:
    arrays = {}
    for fits, suffix in ((result.fits, ""), (result.inflated, ".inflated"), (result.with_star, "")):
        for fit in fits:
            arrays[f"{fit.name}{suffix}"] = np.asarray(fit.draws, float)
            arrays[f"{fit.name}{suffix}.names"] = np.array(fit.draw_names, dtype=np.str_)
    return arrays


# --- parts of the document ----------------------------------------------------------------------------------


def _program() -> dict:
    return {
        "name": "leadline",
        "version": __version__,
        "python": platform.python_version(),
        "packages": {name: metadata.version(name) for name in PACKAGES},
    }


def _hypothesis(fit: Fit, grown: Fit | None) -> dict:
    entry = {
        "name": fit.name,
        "species": fit.species,
        "n_free": fit.n_free,
        "ln_evidence": fit.ln_evidence,
        "ln_evidence_err": fit.ln_evidence_err,
        "chi2": fit.chi2,
        "dof": fit.dof,
        "p_chi2": fit.p_chi2,
        "bic": fit.bic,
        "parameters": {name: asdict(interval) for name, interval in fit.parameters.items()},
        "model": {
            "unit": "ppm",
            "median": fit.model_median / PPM,
            "lower": fit.model_lower / PPM,
            "upper": fit.model_upper / PPM,
        },
        "sampling": fit.sampling,
    }
    if grown is not None:
        factor = grown.parameters.get("error_factor", Interval(math.nan, math.nan, math.nan))
        entry["inflated"] = {
            "ln_evidence": grown.ln_evidence,
            "ln_evidence_err": grown.ln_evidence_err,
            "error_factor": {"median": factor.median, "lower": factor.lower, "upper": factor.upper},
            "sampling": grown.sampling,
        }
    return entry


def _comparison(comparison: Comparison) -> dict:
    return {
        "kind": comparison.kind,
        "species": comparison.species,
        "model": comparison.model,
        "against": comparison.against,
        "best_null": comparison.best_null,
        "ln_bayes_factor": comparison.ln_bayes_factor,
        "ln_bayes_factor_err": comparison.ln_bayes_factor_err,
        "ln_bayes_factor_inflated": comparison.ln_bayes_factor_inflated,
        "ln_bayes_factor_inflated_err": comparison.ln_bayes_factor_inflated_err,
        "delta_chi2": comparison.delta_chi2,
        "p_named": comparison.p_named,
        "p_best_of_n": comparison.p_best_of_n,
        "p_err": comparison.p_err,
        "p_null": comparison.p_null,
        "p_is_bound": comparison.p_is_bound,
        "counts": comparison.counts,
    }


def _rival(rival: Rival) -> dict:
    return {
        "name": rival.name,
        "base": rival.base,
        "species": rival.species,
        "ln_evidence": rival.ln_evidence,
        "ln_evidence_err": rival.ln_evidence_err,
        "ln_evidence_inflated": rival.ln_evidence_inflated,
        "ln_evidence_inflated_err": rival.ln_evidence_inflated_err,
        "phrase": rival.phrase,
        "chi2": rival.chi2,
        "counts": rival.counts,
        "parameters": {name: asdict(interval) for name, interval in rival.parameters.items()},
    }


def _false_alarms(found: FalseAlarms) -> dict:
    return {
        "n_simulations": found.n_simulations,
        "error_factor": found.error_factor,
        "smallest_p": found.smallest_p,
        "ln_bayes_factor": found.ln_bayes_factor,
        "p_named": found.p_named,
        "p_named_err": found.p_named_err,
        "p_best_of_n": found.p_best_of_n,
        "p_best_of_n_err": found.p_best_of_n_err,
        # A name of its own in place of the empty one: the best of all species.
        "observed": {species or "best": values for species, values in found.observed.items()},
        "left_out": found.left_out,
    }


def _plain(value):
    """The same in dicts, lists, str, int, float, bool and None; not-finite numbers become None."""
    if value is None or isinstance(value, str | bool | np.bool_):
        return bool(value) if isinstance(value, np.bool_) else value
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    raise TypeError(f"{type(value).__name__} {value!r} cannot go into result.json.")


_NUMBER = r"(?:-?[\d.]+(?:[eE][+-]?\d+)?|null)"
# A line break inside a JSON string is always escaped, so this can only match real lists.
_NUMBER_LIST = re.compile(rf"\[\n\s*({_NUMBER}(?:,\n\s*{_NUMBER})*)\n\s*\]")


def _json(document) -> str:
    """Indented JSON with each list of numbers on one line, which keeps long spectra readable."""
    text = json.dumps(document, indent=1, allow_nan=False, ensure_ascii=False)
    return _NUMBER_LIST.sub(lambda match: "[" + " ".join(match[1].split()) + "]", text) + "\n"
