"""From the evidences of fits and rivals to comparisons: which hypothesis is held against which, and by how much."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace

from transit.records import Comparison, FalseAlarms, Fit, Rival

NULL_NAMES = ("flat", "slope", "continuum")


def best_null(fits: Iterable[Fit]) -> Fit:
    """Hypothesis without species that has the highest evidence."""
    return max((fit for fit in fits if not fit.species), key=lambda fit: fit.ln_evidence)


def best_model(fits: Iterable[Fit], species: str | None = None) -> Fit | None:
    """Hypothesis with species (with a given one, if `species` is) that has the highest evidence; None without any."""
    models = (fit for fit in fits if fit.species and (species is None or species in fit.species))
    return max(models, key=lambda fit: fit.ln_evidence, default=None)


def build_comparisons(
    fits: Sequence[Fit],
    inflated: Sequence[Fit],
    species: Sequence[str],
    rivals: Sequence[Rival] = (),
    false_alarms: FalseAlarms | None = None,
    *,
    with_star: Sequence[Fit] = (),
    with_star_inflated: Sequence[Fit] = (),
) -> tuple[Comparison, ...]:
    """Compare every hypothesis with the ones it has to beat.

    Parameters
    ----------
    fits : sequence of Fit
        Quoted errors. Names: the nulls "flat", "slope", "continuum"; each species; with two or more species
        also "all" and "all-X". With two species "all-X" is the other species' own fit, which is then used.
    inflated : sequence of Fit
        The same hypotheses with errors free to grow, or nothing.
    species : sequence of str
        Species in the order wanted; those without a fit are passed over.
    rivals : sequence of Rival
        Explanations other than absorbers.
    false_alarms : FalseAlarms, optional
        Simulated chances of the observed ln B, written beside the ln B they belong to.
    with_star, with_star_inflated : sequence of Fit
        Hypotheses with an inhomogeneous star; those with species as well may be the best ones to hold against a
        rival, since a spotted star does not exclude an atmosphere.

    Returns
    -------
    tuple of Comparison
        "alone": each species against each null, `best_null` marking the best null at quoted errors.
        "left_out": "all" against "all-X", for two or more species.
        "feature": the mean evidence of all hypotheses with species, equally weighted, against the best null;
        its `delta_chi2` is that of the hypothesis with the highest evidence.
        "rival": the best hypothesis with a species (with any, where `species` is None) against a rival on the
        nulls, named by the rival; "all" (or all with a star) against a rival on "all-X", named `all-X+rival`.

    Notes
    -----
    An inflated value of "alone" or "left_out" compares the same two hypotheses. Those of "feature" and "rival" are
    sought anew among the inflated fits: the best null, or the best hypothesis with the species, may be another one
    than the entry names.
    """
    quoted = {fit.name: fit for fit in fits}
    grown = {fit.name: fit for fit in inflated}
    fitted = [name for name in species if name in quoted]
    nulls = [name for name in NULL_NAMES if name in quoted]
    best = best_null(fits).name

    pairs = [("alone", x, quoted[x], quoted[null], null, null == best) for x in fitted for null in nulls]
    if len(fitted) >= 2:
        for x in fitted:
            without = _without(quoted, fitted, x)
            pairs.append(("left_out", x, quoted["all"], without, f"all-{x}", False))
    comparisons = [_compare(*pair, grown) for pair in pairs]
    if fitted:
        comparisons.append(_compare_feature(fits, inflated))
        groups = ((fits, with_star), (inflated, with_star_inflated))
        comparisons += _rival_comparisons(groups, fitted, rivals)
    if false_alarms is not None:
        comparisons = [_with_chances(c, false_alarms) for c in comparisons]
    return tuple(comparisons)


def alone_against_best_null(
    comparisons: Iterable[Comparison], species: str
) -> tuple[tuple[float, float], tuple[float, float] | None]:
    """ln B of one species alone against the best null, at quoted and at inflated errors.

    The best null is the one that leaves the smallest ln B. It is sought separately for quoted and inflated
    errors, since a null that is beaten at quoted errors may be the best once errors are free to grow.

    Returns
    -------
    quoted : tuple of float
        ln B and its error.
    inflated : tuple of float or None
        The same with inflated errors, None when these were not fitted.
    """
    entries = [c for c in comparisons if c.kind == "alone" and c.species == species]
    quoted = min((c.ln_bayes_factor, c.ln_bayes_factor_err) for c in entries)
    return quoted, min((pair for c in entries if (pair := inflated_pair(c)) is not None), default=None)


def deciding(comparison: Comparison) -> tuple[float, float]:
    """ln B with its error that a comparison's word follows: the smaller of quoted and inflated."""
    quoted = (comparison.ln_bayes_factor, comparison.ln_bayes_factor_err)
    return smaller(quoted, inflated_pair(comparison))


def inflated_pair(comparison: Comparison) -> tuple[float, float] | None:
    """ln B with its error at inflated errors; None when these were not fitted."""
    if comparison.ln_bayes_factor_inflated is None:
        return None
    return comparison.ln_bayes_factor_inflated, comparison.ln_bayes_factor_inflated_err or 0.0


def smaller(quoted: tuple[float, float], inflated: tuple[float, float] | None) -> tuple[float, float]:
    """The pair with the smaller ln B; one without a value stays, for nothing can be said then."""
    if inflated is None or math.isnan(quoted[0]):
        return quoted
    return inflated if math.isnan(inflated[0]) else min(quoted, inflated)


def difference(model: Fit | Rival, against: Fit | Rival) -> tuple[float, float]:
    """ln B of one over the other with its error, from their evidences."""
    return (
        float(model.ln_evidence - against.ln_evidence),
        math.hypot(model.ln_evidence_err, against.ln_evidence_err),
    )


def shares(models: Sequence[Fit]) -> dict[str, float]:
    """Share of each hypothesis in the sum of the evidences, by name."""
    top = max(fit.ln_evidence for fit in models)
    weights = {fit.name: math.exp(fit.ln_evidence - top) for fit in models}
    total = sum(weights.values())
    return {name: weight / total for name, weight in weights.items()}


def rival_label(rival: Rival) -> str:
    """Name of a rival among the comparisons."""
    return rival.name if rival.base == "null" else f"{rival.base}+{rival.name}"


def stands_on_rest(comparison: Comparison) -> bool:
    """Whether a comparison is with a rival that has all the other species beside it."""
    return comparison.kind == "rival" and comparison.against.startswith("all-")


def counts_against_feature(rival: Rival) -> bool:
    """Whether a rival explains the feature without an absorber: it must count against every species.

    A bump inside the bands of any species is that species' feature seen without a name.
    """
    return rival.base == "null" and all(rival.counts.values())


# --- between fits -------------------------------------------------------------------------------------------


def _without(quoted: Mapping[str, Fit], fitted: Sequence[str], left_out: str) -> Fit:
    name = f"all-{left_out}"
    if name in quoted or len(fitted) != 2:
        return quoted[name]
    return quoted[next(x for x in fitted if x != left_out)]


def _compare(kind, species, model: Fit, against: Fit, against_name: str, is_best: bool, grown) -> Comparison:
    inflated = (None, None)
    if model.name in grown and against.name in grown:
        inflated = difference(grown[model.name], grown[against.name])
    ln_b, ln_b_err = difference(model, against)
    return Comparison(
        kind=kind,
        species=species,
        model=model.name,
        against=against_name,
        best_null=is_best,
        ln_bayes_factor=ln_b,
        ln_bayes_factor_err=ln_b_err,
        delta_chi2=float(against.chi2 - model.chi2),
        ln_bayes_factor_inflated=inflated[0],
        ln_bayes_factor_inflated_err=inflated[1],
    )


def _compare_feature(fits: Sequence[Fit], inflated: Sequence[Fit]) -> Comparison:
    null = best_null(fits)
    ln_b, ln_b_err = _mean_against_null(fits)
    complete = {fit.name for fit in inflated} >= {fit.name for fit in fits}
    grown = _mean_against_null(inflated) if complete else (None, None)
    return Comparison(
        kind="feature",
        species=None,
        model="mean",
        against=null.name,
        best_null=True,
        ln_bayes_factor=ln_b,
        ln_bayes_factor_err=ln_b_err,
        delta_chi2=float(null.chi2 - best_model(fits).chi2),
        ln_bayes_factor_inflated=grown[0],
        ln_bayes_factor_inflated_err=grown[1],
    )


def _mean_against_null(fits: Sequence[Fit]) -> tuple[float, float]:
    """ln of the mean evidence of the hypotheses with species, less that of the best null, with its error."""
    models = [fit for fit in fits if fit.species]
    null = best_null(fits)
    share = shares(models)
    # The largest share is subtracted first: evidences of real spectra overflow an exponential.
    top = max(models, key=lambda fit: fit.ln_evidence)
    ln_mean = top.ln_evidence - math.log(len(models) * max(share.values()))
    variance = sum((share[fit.name] * fit.ln_evidence_err) ** 2 for fit in models)
    return float(ln_mean - null.ln_evidence), math.sqrt(variance + null.ln_evidence_err**2)


# --- rivals and false alarms --------------------------------------------------------------------------------


def _rival_comparisons(
    groups: Sequence[tuple[Sequence[Fit], Sequence[Fit]]], fitted: Sequence[str], rivals: Sequence[Rival]
) -> list[Comparison]:
    """Entries for each species, then for any; `groups` are the fits and those with a star, quoted and inflated."""
    beside = {rival.name: rival for rival in rivals if is_beside(rival)}
    entries = []
    for x in (*fitted, None):
        for rival in rivals:
            if rival.species not in (None, x) or is_beside(rival):
                continue
            counts = counts_against_feature(rival) if x is None else rival.counts.get(x, True)
            models = [_champion(fits, with_star, x, rival) for fits, with_star in groups]
            entries.append(_compare_rival(x, *models, rival, beside.get(rival.name), counts))
    return entries


def is_beside(rival: Rival) -> bool:
    """Whether a rival stands beside all species, in one hypothesis with them, rather than against any."""
    return rival.species is None and rival.base != "null"


def _champion(fits: Sequence[Fit], with_star: Sequence[Fit], species: str | None, rival: Rival) -> Fit | None:
    """The hypothesis that meets a rival: on "all-X" only `all` is its equal in the number of species."""
    own = fits if rival.species is None else [fit for fit in fits if fit.name == "all"]
    return best_model((*own, *with_star), species)


def _compare_rival(
    species, model: Fit, grown: Fit | None, rival: Rival, beside: Rival | None, counts: bool
) -> Comparison:
    """A rival and the best hypothesis with the species, which may hold the same rival beside all species.

    Without the latter a bad bin would count against every species, wherever it lies.
    """
    inflated = (None, None)
    if grown is not None and rival.ln_evidence_inflated is not None:
        ln_z, err = grown.ln_evidence, grown.ln_evidence_err
        if beside is not None and (beside.ln_evidence_inflated or -math.inf) > ln_z:
            ln_z, err = beside.ln_evidence_inflated, beside.ln_evidence_inflated_err or 0.0
        inflated = (
            float(ln_z - rival.ln_evidence_inflated),
            math.hypot(err, rival.ln_evidence_inflated_err or 0.0),
        )
    name, chi2 = model.name, model.chi2
    if beside is not None and beside.ln_evidence > model.ln_evidence:
        model, name = beside, f"{beside.base}+{beside.name}"
        chi2 = math.nan if beside.chi2 is None else beside.chi2
    ln_b, ln_b_err = difference(model, rival)
    return Comparison(
        kind="rival",
        species=species,
        model=name,
        against=rival_label(rival),
        best_null=False,
        ln_bayes_factor=ln_b,
        ln_bayes_factor_err=ln_b_err,
        delta_chi2=math.nan if rival.chi2 is None else float(rival.chi2 - chi2),
        ln_bayes_factor_inflated=inflated[0],
        ln_bayes_factor_inflated_err=inflated[1],
        counts=counts,
    )


def _with_chances(comparison: Comparison, false_alarms: FalseAlarms) -> Comparison:
    """The comparison with the simulated chances that belong to it."""
    if comparison.kind == "feature":
        found = false_alarms.observed.get("", {})
        return replace(
            comparison,
            p_best_of_n=found.get("p_best_of_n"),
            p_err=found.get("p_err"),
            p_is_bound=found.get("p_is_bound", False),
        )
    if comparison.kind == "alone" and comparison.best_null:
        found = false_alarms.observed.get(comparison.species, {})
    elif comparison.kind == "left_out":
        found = false_alarms.left_out.get(comparison.species, {})
    else:
        return comparison
    return replace(
        comparison,
        p_named=found.get("p_named"),
        # How many species were tried matters to a species alone; leaving one out is a question about that one.
        p_best_of_n=found.get("p_best_of_n"),
        p_err=found.get("p_err"),
        p_null=dict(found.get("p_null", {})),
        p_is_bound=found.get("p_is_bound", False),
    )
