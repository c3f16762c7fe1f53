"""The methods section of a paper, from what a run recorded of itself: no sentence without its fact."""

from __future__ import annotations

from collections.abc import Sequence
from math import ceil, isfinite
from typing import Any

from fitter.cosmology import MODELS
from fitter.inference.intervals import interval_words
from fitter.report.citations import SHORT, bibliography
from fitter.report.digits import evidence_digits, plain_number
from fitter.report.prose import CHI2, cite, cited, latex, listed, math, model_text, plain, redshift_range, symbol, with_unit

__all__ = ["METHODS_FILES", "methods", "methods_files"]

METHODS_FILES = ("methods.md", "methods.tex", "references.bib")
_MANY_GROUPS = 12
_RHAT, _LN_Z = math(r"\hat{R}", "R̂"), math(r"\ln Z", "ln Z")
_FIGURES_CITE = ("Hunter2007", "Foreman-Mackey2016")


def methods(summary: dict, settings: dict | None = None) -> list[str]:
    """Return the paragraphs: data, model, computation; with marks for formulas and citations (`fitter.report.prose`).

    Parameters
    ----------
    summary : dict
        The contents of summary.json.
    settings : dict, optional
        The settings as run (config.yaml of the run folder), for cuts, columns and the numbers of uncertainty terms.
    """
    settings = settings or {}
    return [" ".join(part) for part in (_data(summary, settings), _model(summary, settings), _computation(summary, settings)) if part]


def methods_files(summary: dict, settings: dict | None = None) -> dict[str, str]:
    """Return the contents of methods.md, methods.tex and references.bib."""
    paragraphs = methods(summary, settings)
    keys = [*cited("\n".join(paragraphs)), *_FIGURES_CITE]
    return {
        "methods.md": "\n\n".join(plain(p, SHORT) for p in paragraphs) + "\n",
        "methods.tex": "\n\n".join(latex(p) for p in paragraphs) + "\n",
        "references.bib": bibliography(keys),
    }


# ------------------------------------------------------------------------------------------ data


def _data(summary: dict, settings: dict) -> list[str]:
    sample = summary["sample"]
    kind = {"magnitude": "standardised magnitudes", "distance_modulus": "distance moduli"}[sample["data_kind"]]
    low, high = (plain_number(sample[k], 3) for k in ("redshift_min", "redshift_max"))
    many = sample["n"] - sample["n_calibrators"]
    text = f"The data are the {kind} of {_count(many, 'supernova', 'supernovae')} at {redshift_range(low, high)}"
    if sample["n_calibrators"]:
        one = sample["n_calibrators"] == 1
        text += f", and the magnitude{'' if one else 's'} of {_count(sample['n_calibrators'], 'calibrator', 'calibrators')} whose host"
        text += " has a distance modulus" if one else "s have distance moduli"
        text += " known from elsewhere; the redshifts of calibrators are not used"
    said = [text + "."] if many else [f"The data are {_count(sample['n'], 'calibrator', 'calibrators')}."]
    return said + _groups(sample) + _cuts(sample) + _redshifts(settings) + _noise(summary, settings)


def _count(n: int, one: str, several: str) -> str:
    return f"{n:,} {one if n == 1 else several}"


def _groups(sample: dict) -> list[str]:
    groups = sample.get("groups") or {}
    if not 2 <= len(groups) <= _MANY_GROUPS:
        return []
    too = ", calibrators included," if sample["n_calibrators"] else ""
    return [f"By survey{too} there are {listed(f'{count} of {name}' for name, count in groups.items())}."]


def _cuts(sample: dict) -> list[str]:
    removed = {name: count for name, count in (sample.get("removed") or {}).items() if count}
    said = [f"{_count(count, 'row', 'rows')} {_reason(name)}" for name, count in removed.items()]
    return [f"Of the table, in this order, we removed {listed(said)}."] if said else []


def _reason(cut: str) -> str:
    if cut == "missing":
        return "for lack of a number"
    if cut.startswith("one_per "):
        return f"that repeat a value of {cut.removeprefix('one_per ')} with a larger error"
    return f"by the cut on {cut}"


def _redshifts(settings: dict) -> list[str]:
    columns = (settings.get("sample") or {}).get("columns")
    if not columns:
        return []
    distance = math(r"D_L = (1 + z_\mathrm{hel})\,D_M(z)", "D_L = (1 + z_hel) D_M(z)")
    if columns.get("redshift_helio") is not None:
        return [f"Luminosity distances are {distance}, with the redshift in the cosmological frame and the heliocentric one."]
    distance = math(r"D_L = (1 + z)\,D_M(z)", "D_L = (1 + z) D_M(z)")
    return [f"Luminosity distances are {distance}: one redshift serves for both factors."]


def _noise(summary: dict, settings: dict) -> list[str]:
    terms, said = summary["sample"].get("terms") or [], []
    if terms:
        numbers = _numbers((settings.get("sample") or {}).get("uncertainty"))
        each = [_term(term, numbers.get(term["label"], "")) for term in terms]
        if len(each) > 1:
            said.append(f"Their covariance matrix is the sum of {len(each)} terms: {listed(each)}.")
        else:
            said.append(f"Their covariance has one term: {each[0]}.")
    priors, fixed = summary.get("priors") or {}, summary.get("fixed") or {}
    if "intrinsic_scatter" in priors or fixed.get("intrinsic_scatter"):
        how = "with a free standard deviation" if "intrinsic_scatter" in priors else f"of {plain_number(fixed['intrinsic_scatter'])} mag"
        said.append(f"To its diagonal we added an intrinsic scatter {how}, {symbol('intrinsic_scatter')}.")
    if "covariance_scale" in priors or "covariance_scale" in fixed:
        scale = math(rf"{_bare('covariance_scale')}^2", "s²")
        value = (
            "" if "covariance_scale" in priors else f", with {symbol('covariance_scale')} held at {plain_number(fixed['covariance_scale'])}"
        )
        said.append(f"The whole matrix is multiplied by {scale}{value}.")
    return said


def _bare(name: str) -> str:
    from fitter.report.facts import parameter

    return parameter(name).latex


def _numbers(terms: Sequence[dict[str, Any]] | None) -> dict[str, str]:
    """What a config says of a term beyond its label, by label as `fitter.sample` numbers them."""
    said: dict[str, str] = {}
    seen: dict[str, int] = {}
    for term in terms or []:
        kind = next((k for k in _DETAILS if k in term), None)
        if kind is None or isinstance(term[kind], dict) or isinstance(term.get("sigma"), dict):
            continue
        label = term.get("label") or kind
        seen[label] = count = seen.get(label, 0) + 1
        said[label if count == 1 else f"{label} {count}"] = _DETAILS[kind].format(value=term[kind], **{"sigma": "", **term})
    return said


_DETAILS = {
    "peculiar_velocity": "peculiar velocities of {value:g} km/s",
    "lensing": "lensing of {value:g} mag per unit redshift",
    "intrinsic": "a scatter of {value:g} mag",
    "zero_point": "zero points with a standard deviation of {sigma} mag",
}
_KINDS = {
    "sigma": "independent errors",
    "covariance": "a covariance matrix",
    "precision": "the inverse of a given matrix",
    "modes": "one-sigma shifts as modes of unit amplitude",
    "zero_point": "zero-point errors shared within each group",
}


def _term(term: dict, details: str) -> str:
    about = details or _KINDS.get(term["kind"], "")
    median = f"median {plain_number(term['median_sigma'], 2)} mag"
    return f"{term['label'].replace('_', ' ')} ({about + ', ' if about else ''}{median})"


# ----------------------------------------------------------------------------------------- model


def _model(summary: dict, settings: dict) -> list[str]:
    return [_family(summary), *_priors(summary), *_zero_point(summary, settings), _likelihood(summary)]


_FAMILY_CITES = {
    "flat_w0wa": ("Chevallier2001", "Linder2003"),
    "curved_w0wa": ("Chevallier2001", "Linder2003"),
    "cosmographic": ("Visser2004",),
}


def _family(summary: dict) -> str:
    name = summary["model"]
    cites = f" {cite(*_FAMILY_CITES[name])}" if name in _FAMILY_CITES else ""
    if name == "cosmographic":
        about = f"a series of the distance in redshift to third order, with {symbol('q0')} and {symbol('j0')} as its coefficients"
        return f"We fitted {about}, in flat space{cites}."
    text = f"We fitted the {model_text(name)} model{cites}"
    if name in MODELS:
        text += f", with distances from the expansion rate {cite('Hogg1999')}"
        text += "" if summary["radiation"] else ", without radiation"
    # A model of one's own may hold radiation of its own.
    return text + (", radiation (photons and massless neutrinos) included." if summary["radiation"] else ".")


def _priors(summary: dict) -> list[str]:
    priors, fixed = summary.get("priors") or {}, summary.get("fixed") or {}
    said = []
    if priors:
        several = "s are" if len(priors) > 1 else " is"
        each = [f"{_prior_words(text)} for {symbol(name)}{_in_unit(name)}" for name, text in priors.items()]
        said.append(f"The prior{several} {listed(each)}.")
    held = {n: v for n, v in fixed.items() if n not in ("intrinsic_scatter", "covariance_scale")}
    if held:
        each = [f"{symbol(name)} at {plain_number(value, 6)}{with_unit(name)}" for name, value in held.items()]
        said.append(f"We held {listed(each)}.")
    return said


def _in_unit(name: str) -> str:
    unit = with_unit(name).strip()
    return f" (in {unit})" if unit else ""


def _prior_words(text: str) -> str:
    """A prior as `Prior.describe` gives it, in words."""
    kind, _, inside = text.replace("(-", "(−").replace(" -", " −").partition("(")
    numbers = [n.strip() for n in inside.rstrip(")").split(",")]
    if kind in ("uniform", "log-uniform") and len(numbers) == 2:
        return f"{kind} from {numbers[0]} to {numbers[1]}"
    if kind == "normal" and len(numbers) == 2:
        return f"normal with mean {numbers[0]} and standard deviation {numbers[1]}"
    if kind == "truncated-normal" and len(numbers) == 4:
        return f"normal with mean {numbers[0]} and standard deviation {numbers[1]} between {numbers[2]} and {numbers[3]}"
    return text


def _zero_point(summary: dict, settings: dict) -> list[str]:
    scale, said = summary["sample"]["distance_scale"], []
    if scale == "relative":
        said.append(
            f"The zero point of the distances is unknown: the expansion rate and the absolute magnitude enter as one additive offset, "
            f"which we marginalised analytically with a flat prior {cite('Goliath2001')}."
        )
    elif scale == "absolute":
        said.append("The zero point of the moduli is taken as given; an error of its anchor counts as far as the covariance holds it.")
    names = [n for n, facts in summary["parameters"].items() if facts["kind"] == "marginalised"]
    if "absolute_magnitude" in names:
        prior = (settings.get("parameters") or {}).get("absolute_magnitude")
        how = {"flat": " with a flat prior", "normal": ""}.get(next(iter(prior), ""), "") if isinstance(prior, dict) else ""
        if isinstance(prior, dict) and "normal" in prior:
            how = " with a normal prior of mean {:g} and standard deviation {:g} mag".format(*prior["normal"])
        said.append(f"The absolute magnitude {symbol('absolute_magnitude')} was marginalised analytically{how}.")
    others = [n for n in names if n != "absolute_magnitude"]
    if others:
        said.append(f"The zero-point shifts {listed(symbol(n) for n in others)} were marginalised analytically with their Gaussian priors.")
    return said


def _likelihood(summary: dict) -> str:
    free = [n for n in ("intrinsic_scatter", "covariance_scale") if n in (summary.get("priors") or {})]
    text = "The likelihood is Gaussian in the data"
    return text + (", its normalisation varying with " + listed(symbol(n) for n in free) + "." if free else " with their covariance.")


# ----------------------------------------------------------------------------------- computation


def _computation(summary: dict, settings: dict) -> list[str]:
    said = [*_sampler(summary), *_convergence(summary), *_cross_check(summary), *_evidence(summary), *_fit(summary)]
    intervals = interval_words({"": summary.get("intervals", "equal_tailed")})
    said.append(f"Quoted values are posterior medians with {intervals}, unless they are given as limits (one-sided, 95 %).")
    return said + _versions(summary)


_MOVES = {
    "mixture": (
        "three steps in five propose from a Student-t mixture fitted to the posterior beforehand by population Monte Carlo {}, one in five "
        "from Student-t mixtures fitted to the other half of the ensemble, one in five is a differential-evolution move {}",
        ("Cappe2004", "TerBraak2006"),
    ),
    "stretch": ("all steps are stretch moves {}", ("Goodman2010",)),
}


def _sampler(summary: dict) -> list[str]:
    facts = summary["sampling"]
    replicas = _count(facts["replicas"], "independent ensemble", "independent ensembles")
    text = f"We sampled the posterior with {replicas} of {facts['walkers']} walkers {cite('Foreman-Mackey2013')}"
    move = _MOVES.get(facts.get("move"))
    text += ": " + move[0].format(*map(cite, move[1])) if move else ""
    text += f". Each took {facts['steps']} steps, of which the first {facts['burn_in']} were discarded"
    return [text + f" (seed {facts['seed']})." if facts.get("seed") is not None else text + "."]


def _convergence(summary: dict) -> list[str]:
    facts = summary["sampling"]
    rhat, bulk, tail = (list((facts.get(k) or {}).values()) for k in ("rhat", "ess_bulk", "ess_tail"))
    rhat, ess = [r for r in rhat if r is not None], [e for e in (*bulk, *tail) if e is not None]
    said = []
    if rhat and ess:
        said.append(
            f"The rank-normalised split {_RHAT} of the sampled parameters is at most {_rounded_up(max(rhat))}, and the smallest "
            f"of their bulk and tail effective sample sizes is {int(min(ess)):,} {cite('Vehtari2021')}."
        )
    if facts.get("converged") is False:
        reason = str(facts.get("reason") or "").rstrip(".")
        said.append(f"The chains did not meet every criterion of convergence{f': {reason}' if reason else ''}.")
    return said


def _rounded_up(x: float) -> str:
    """Four decimals, never below the number."""
    return f"{ceil(x * 1e4) / 1e4:.4f}" if isfinite(x) else "infinite"


def _cross_check(summary: dict) -> list[str]:
    check = summary.get("cross_check") or {}
    if check.get("agrees") is None or not check.get("method"):
        return []
    method = check["method"].replace("–", "-")
    word = "agrees with" if check["agrees"] else "DISAGREES with"
    which = f", for {symbol(check['worst'])}, the worst against its tolerance," if check.get("worst") else ""
    return [
        f"An independent calculation, {method}, {word} the chains: the largest difference of the cumulative distributions{which} is "
        f"{plain_number(check['max_cdf_difference'], 2)}, where {plain_number(check['tolerance'], 2)} is allowed."
    ]


def _evidence(summary: dict) -> list[str]:
    information = summary["information"]
    value, error = information.get("log_evidence"), information.get("log_evidence_error")
    if value is None:
        return []
    if not error:
        return [f"The evidence is {_LN_Z} = {plain_number(value, 6).replace('-', '−')} under the priors above."]
    digits, said = evidence_digits(value, error)
    bounded = rf" \pm {said}" if said else ""
    number = math(rf"\ln Z = {digits.replace('−', '-')}{bounded}", f"ln Z = {digits}" + (f" ± {said}" if said else ""))
    return [f"The evidence is {number} under the priors above{'' if said else ', with a numerical error below 0.0001'}."]


def _fit(summary: dict) -> list[str]:
    fit = summary["best_fit"]
    text = f"Where the posterior density is highest, {CHI2} is {fit['chi2']:.2f} for {fit['dof']} degrees of freedom"
    return [text + (f" (p = {plain_number(fit['p_value'], 2)})." if fit.get("p_value") is not None else ".")]


_LIBRARIES = {"numpy": "Harris2020", "scipy": "Virtanen2020", "emcee": None}


def _versions(summary: dict) -> list[str]:
    versions = (summary.get("provenance") or {}).get("versions") or {}
    if not versions.get("mufitter"):
        return []
    with_them = [f"{n} {versions[n]}{f' {cite(key)}' if key else ''}" for n, key in _LIBRARIES.items() if versions.get(n)]
    return [f"The computations were made with mufitter {versions['mufitter']}" + (f", {listed(with_them)}." if with_them else ".")]
