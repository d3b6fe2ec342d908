"""The methods in words, made from the settings the run was made with."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from odograph.figures.colours import term_label

REFERENCES = {
    "nwb": "Rübel et al. 2022, The Neurodata Without Borders ecosystem for neurophysiological data science, "
    "eLife 11:e78362",
    "kalman": "Kalman 1960, Journal of Basic Engineering 82:35",
    "rts": "Rauch, Tung & Striebel 1965, AIAA Journal 3:1445",
    "splines": "Eilers & Marx 1996, Statistical Science 11:89",
    "strengths": "Wood & Fasiolo 2017, Biometrics 73:1071",
    "bands": "Wood 2006, Australian & New Zealand Journal of Statistics 48:445",
    "history": "Pillow et al. 2008, Nature 454:995",
    "one_se": "Breiman, Friedman, Olshen & Stone 1984, Classification and Regression Trees, section 3.4.3",
    "rank": "Davison & Hinkley 1997, Bootstrap Methods and their Application, sections 3.8 and 4.2",
    "fdr": "Benjamini & Hochberg 1995, Journal of the Royal Statistical Society B 57:289",
    "information": "Skaggs, McNaughton, Gothard & Markus 1993, Advances in Neural Information Processing "
    "Systems 5:1030",
    "wilson": "Wilson 1927, Journal of the American Statistical Association 22:209",
    "signed_rank": "Wilcoxon 1945, Biometrics Bulletin 1:80",
    "rescaling": "Brown, Barbieri, Ventura, Kass & Frank 2002, Neural Computation 14:325",
    "corrected": "Wood, Pya & Säfken 2016, Journal of the American Statistical Association 111:1548",
    "level": "Marra & Wood 2012, Scandinavian Journal of Statistics 39:53",
    "engine": "Mölder et al. 2021, Sustainable data analysis with Snakemake, F1000Research 10:33",
}


def methods(value: Callable[[str], Any], software: dict[str, str]) -> tuple[list[str], list[str]]:
    """Paragraphs of the methods, and the references they cite.

    Parameters
    ----------
    value : callable
        A setting's value by its dotted path.
    software : dict
        Versions by name.

    Returns
    -------
    paragraphs, references : list of str
        Plain text; a paragraph cites as [n], n counting the references from 1.
    """
    order: list[str] = []

    def cite(*keys: str) -> str:
        order.extend(key for key in keys if key not in order)
        return "[" + ", ".join(str(order.index(key) + 1) for key in keys) + "]"

    paragraphs = [
        _recordings(value, cite),
        _behaviour(value, cite),
        *_encoding(value, cite),
        _population(value, cite),
        _software(software, cite),
    ]
    return paragraphs, [REFERENCES[key] for key in order]


def _plain(value: Any) -> str:
    if isinstance(value, float):
        return f"{value:g}"
    return f"{value:,}" if isinstance(value, int) and not isinstance(value, bool) else str(value)


def _recordings(value: Callable[[str], Any], cite: Callable[..., str]) -> str:
    if value("intake.frame_pulses_place"):
        clock = (
            "The camera's clock was put on the recording's clock by matching frame pulses to camera frames "
            "by the pattern of their intervals and fitting a robust line through the pairs; sessions whose "
            f"clock departed from the line by more than {_plain(value('sync.max_bend_ms'))} ms, or drifted "
            f"by more than {_plain(value('sync.max_drift_ppm'))} ppm, were left out."
        )
    else:
        clock = "Tracking was taken to be on the recording's clock already."
    return f"Recordings were read from NWB files {cite('nwb')}. {clock}"


def _behaviour(value: Callable[[str], Any], cite: Callable[..., str]) -> str:
    swaps = (
        " Exchanges of the two tracked points were found and undone."
        if value("behaviour.repair_swaps")
        else ""
    )
    slow = float(value("behaviour.min_speed_cm_s") or 0)
    mask = f" Bins slower than {slow:g} cm/s were masked." if slow else ""
    return (
        f"Tracked points that implied movement faster than {_plain(value('behaviour.max_speed_m_s'))} m/s, "
        f"or lay more than {_plain(value('behaviour.gate_sd'))} standard deviations from the prediction of a "
        f"Kalman filter {cite('kalman')}, were dropped.{swaps} The track was smoothed {cite('rts')}, gaps of "
        f"up to {_plain(value('behaviour.max_gap_s'))} s were interpolated, and position, head direction and "
        f"running speed were taken from it in bins of {1000 * float(value('behaviour.bin_s')):g} ms.{mask} "
        f"Sessions with less than {100 * float(value('behaviour.min_valid_share')):g} % or "
        f"{_plain(value('behaviour.min_valid_s'))} s of valid time were left out."
    )


_BASES = {
    "plane": "a tensor product of {n} by {n} B-splines",
    "line": "{n} B-splines",
    "circle": "{n} cyclic B-splines",
    "category": "one value per category",
}


def _penalties(terms: list[dict[str, Any]]) -> str:
    first = [term_label(term["name"]) for term in terms if term.get("penalty_order") == 1]
    told = "second-derivative penalties"
    return f"{told} (first-derivative for {', '.join(first)})" if first else told


def _encoding(value: Callable[[str], Any], cite: Callable[..., str]) -> list[str]:
    terms = list(value("encoding.terms") or [])
    bases = "; ".join(
        f"{term_label(term['name'])} by {_BASES[term['kind']].format(n=term['basis_size'])}" for term in terms
    )
    models = 2 ** len(terms) - 1
    drift = (
        " Every model, the constant one too, held a slow drift with knots "
        f"{_plain(value('encoding.drift_knot_s'))} s apart."
        if value("encoding.drift")
        else ""
    )
    folds, blocks, guard_s, fewest = (
        _plain(value(f"encoding.{key}")) for key in ("folds", "blocks_per_fold", "guard_s", "minimum_spikes")
    )
    first = (
        "Spike counts were modelled as Poisson with the log rate a sum of smooth terms under "
        f"{_penalties(terms)} {cite('splines')}: {bases}. Smoothing strengths were chosen from the "
        f"training data by restricted marginal likelihood {cite('strengths')}.{drift}{_history(value, cite)} "
        f"Models of every subset of the terms ({models} in all) and the constant model were compared by "
        f"held-out log-likelihood in {folds} folds of {blocks} interleaved contiguous blocks each, "
        f"{guard_s} s beside each held-out block being left out of training. The simplest model within one "
        f"standard error of the best was selected {cite('one_se')}. Units with fewer than {fewest} spikes in "
        "valid time were not fitted. "
        f"Bands are pointwise 95 %, the uncertainty of the mean level included {cite('bands', 'level')}."
    )
    test = (
        "Each term was tested against the model of the others by circular shifts of its covariate over valid "
        f"time, in steps of {_plain(value('encoding.test_step_s'))} s and none shorter than "
        f"{_plain(value('encoding.test_minimum_shift_s'))} s: all of them, or "
        f"{_plain(value('encoding.test_draws'))} drawn (seed {value('encoding.seed')}) where a term has too "
        f"many columns; p is the rank of the true alignment {cite('rank')}. "
        if value("encoding.tests")
        else "Terms were not tested beyond the selection. "
    )
    second = (
        f"{test}Information per spike {cite('information')} at slow and at fast running was compared in the "
        f"two halves of running time (above {_plain(value('encoding.running_above_cm_s'))} cm/s, cut at its "
        f"median) after matching them in occupancy and in spikes, over "
        f"{_plain(value('encoding.matching_repeats'))} repeats."
    )
    return [first, second, *_gains(value, cite, terms), _goodness(cite)]


def _history(value: Callable[[str], Any], cite: Callable[..., str]) -> str:
    if not value("encoding.history_s"):
        return ""
    return (
        " Every model held a filter of the unit's own spikes of the last "
        f"{_plain(value('encoding.history_s'))} s, made of {_plain(value('encoding.history_functions'))} "
        f"raised cosines {cite('history')}."
    )


def _gains(value: Callable[[str], Any], cite: Callable[..., str], terms: list[dict[str, Any]]) -> list[str]:
    """The speed-gain model, for studies whose terms can have a gain."""
    speed = next((t for t in terms if t["kind"] == "line" and t["columns"][0] == "speed_cm_s"), None)
    scaled = [term_label(term["name"]) for term in terms if term["kind"] in ("plane", "circle")]
    if speed is None or not scaled:
        return []
    test = (
        " A gain was tested by the efficient score at the fit without gains, ranked among "
        f"{_plain(value('encoding.test_draws'))} circular shifts of speed against everything else "
        f"{cite('rank')}."
        if value("encoding.tests")
        else ""
    )
    running = _plain(value("encoding.running_above_cm_s"))
    return [
        f"Whether tuning sharpens with running speed was asked of the units whose selected model holds "
        f"{' or '.join(scaled)}, with a p of at most 0.05 where it was tested. Their log rate was modelled "
        "as constant + s(v) + sum over these terms of (1 + g z) f + the other terms, f being a term's part "
        "of the log rate, s that of speed, and z log(1 + v / 5 cm/s) of the speed v, standardised over valid "
        "time. "
        "Gains g, tuning and all other terms were fitted jointly. Standard errors are from the full Hessian "
        "of the penalised likelihood, with the uncertainty of the smoothing strengths added to first order "
        f"{cite('corrected')}. "
        "A gain of 0 is tuning that does not change with speed; above 0 the tuning is deeper and sharper at "
        f"speed, below 0 flatter.{test} In plain units a gain is told as the information per spike "
        f"{cite('information')} of the tuning exp((1 + g z) f), over the time spent in every place or "
        "direction, at the z of the 20th and of the 80th percentile of running speed (above "
        f"{running} cm/s), and as the information per second, which is that times the fitted mean rate at "
        "that speed. Fits that did not converge are counted as failed and given no gain."
    ]


def _goodness(cite: Callable[..., str]) -> str:
    return (
        "How well the selected model describes time that it was not fitted to was judged by the "
        f"Kolmogorov-Smirnov statistic of intervals rescaled by the held-out rate {cite('rescaling')} and by "
        "the autocorrelation of held-out residuals up to 1 s. A fit counts as compatible with held-out time "
        "when the p of that statistic is above 0.05, which is lenient, since the rate was fitted to the same "
        "session."
    )


def _population(value: Callable[[str], Any], cite: Callable[..., str]) -> str:
    level = f"{100 * float(value('population.confidence')):g} %"
    return (
        "A unit counts as encoding a variable when its selected model holds it and, where the variable was "
        "tested, its p passes a false discovery rate of "
        f"{_plain(value('population.false_discovery_rate'))} over all "
        f"fitted units {cite('fdr')}; gains are judged at the same rate over the units that encode the "
        f"variable. Shares have {level} intervals: within an animal Wilson's "
        f"{cite('wilson')}, over animals a bootstrap that resamples animals and then their units "
        f"{cite('rank')} ({_plain(value('population.bootstrap_draws'))} draws, seed "
        f"{value('population.bootstrap_seed')}). Changes from slow to fast running were tested by the "
        f"signed-rank test {cite('signed_rank')}, units taken as independent."
    )


def _software(software: dict[str, str], cite: Callable[..., str]) -> str:
    named = ", ".join(f"{name} {version}" for name, version in sorted(software.items()))
    return f"The run was made with Snakemake {cite('engine')}" + (f" and {named}." if named else ".")
