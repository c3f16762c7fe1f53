"""What can be wrong with `figures:` and `labels:`, found before hours of sampling and not after them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from fitter.config.problems import nearest
from fitter.config.yaml_file import Key
from fitter.errors import InputError
from fitter.parameters import PARAMETERS, ZERO_POINT

if TYPE_CHECKING:
    from fitter.config.settings import Config
    from fitter.likelihood.posterior import LogPosterior

__all__ = ["figure_problems"]


def figure_problems(config: Config, log_posterior: LogPosterior) -> list[InputError]:
    """Return what is wrong with the sections on figures and labels.

    Parameters
    ----------
    config : Config
    log_posterior : LogPosterior
        Tells which parameters the fit has.
    """
    has = [*log_posterior.names, *log_posterior.marginalised, *log_posterior.derived_names]
    problems = []
    for i, name in enumerate(config.figures.parameters or ()):
        if name not in has:
            problems.append(_unknown(config, ("figures", "parameters", i), name, has, "this fit has no such parameter"))
    # Labels and marks may be shared by configs of several models.
    for section in (("figures", "mark"), ("labels",)):
        given = config.labels if section == ("labels",) else config.figures.mark
        for name in given:
            if name not in has and name not in PARAMETERS and not name.startswith(ZERO_POINT):
                problems.append(_unknown(config, (*section, name), name, [*has, *PARAMETERS], "there is no such parameter"))
    return problems + _label_problems(config) + _style_problems(config)


def _unknown(config: Config, keys: tuple[Key, ...], name: str, known: Sequence[str], problem: str) -> InputError:
    near = nearest(name, known)
    cure = f"Did you mean `{near}`?" if near else f"The parameters are {', '.join(dict.fromkeys(known))}"
    return config.document.error(problem, keys, value=name, cure=cure)


def _label_problems(config: Config) -> list[InputError]:
    """Symbols that cannot be set: matplotlib is asked, which takes a moment, only if there are any."""
    if not config.labels:
        return []
    from matplotlib.mathtext import MathTextParser

    problems = []
    for name, symbol in config.labels.items():
        try:
            MathTextParser("path").parse(f"${symbol}$")
        except ValueError:
            cure = r"Use LaTeX that matplotlib's mathtext knows, e.g. \Omega_\mathrm{m}"
            problems.append(config.document.error("this symbol cannot be set", ("labels", name), value=symbol, cure=cure))
    return problems


def _style_problems(config: Config) -> list[InputError]:
    if config.style_file is None:
        return []
    from fitter.report.figures.style import styled

    try:
        with styled(config.style_file):
            return []
    except InputError as error:
        return [config.document.error(error.problem, ("figures", "style"), value=error.value, cure=error.cure)]
