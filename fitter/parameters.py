"""Every parameter, declared once: name, symbol, unit, default prior, meaning."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import asdict, dataclass, replace

from fitter.errors import InputError

__all__ = ["PARAMETERS", "ZERO_POINT", "Parameter", "declare", "declare_again", "declared_elsewhere", "parameter"]


@dataclass(frozen=True)
class Parameter:
    """One parameter, sampled, marginalised or derived.

    Parameters
    ----------
    name : str
        The key used in configs, tables and files.
    latex : str
        The symbol in LaTeX, without dollar signs.
    plain : str
        The symbol in plain Unicode, for the terminal.
    unit : str
        Unit in plain text, empty where there is none.
    meaning : str
        One line for people.
    default_prior : dict or None
        As a config would write it, e.g. ``{"uniform": [0, 1]}``; None for what is only derived.
    latex_unit : str
        The unit in LaTeX, without dollar signs.
    """

    name: str
    latex: str
    plain: str
    unit: str
    meaning: str
    default_prior: dict | None = None
    latex_unit: str = ""

    def with_prior(self, **prior: Sequence[float]) -> Parameter:
        """Return the same parameter with another default prior."""
        return replace(self, default_prior=prior)


_KMSMPC = r"\mathrm{km\,s^{-1}\,Mpc^{-1}}"

_DECLARED = (
    Parameter("omega_m", r"\Omega_m", "Ωm", "", "matter density today over the critical density", {"uniform": [0, 1]}),
    Parameter(
        "omega_lambda", r"\Omega_\Lambda", "ΩΛ", "", "cosmological-constant density today over the critical density", {"uniform": [-0.5, 2]}
    ),
    Parameter("omega_de", r"\Omega_\mathrm{DE}", "Ω_DE", "", "dark-energy density today over the critical density", {"uniform": [0, 2]}),
    Parameter("omega_k", r"\Omega_k", "Ωk", "", "curvature term today, 1 minus the sum of all densities"),
    Parameter("w", "w", "w", "", "dark-energy equation of state, constant in time", {"uniform": [-3, 0]}),
    Parameter("w0", "w_0", "w0", "", "dark-energy equation of state today, w(a) = w0 + wa (1 - a)", {"uniform": [-3, 1]}),
    Parameter("wa", "w_a", "wa", "", "change of the dark-energy equation of state, w(a) = w0 + wa (1 - a)", {"uniform": [-20, 10]}),
    Parameter("H0", "H_0", "H0", "km/s/Mpc", "expansion rate today", {"uniform": [40, 100]}, _KMSMPC),
    Parameter("absolute_magnitude", "M", "M", "mag", "absolute magnitude of a standardised supernova", {"flat": []}, r"\mathrm{mag}"),
    Parameter(
        "intrinsic_scatter",
        r"\sigma_\mathrm{int}",
        "σ_int",
        "mag",
        "scatter left after standardisation",
        {"uniform": [0, 0.5]},
        r"\mathrm{mag}",
    ),
    Parameter(
        "covariance_scale", "s", "s", "", "factor on all errors: the covariance is multiplied by its square", {"log_uniform": [0.5, 2]}
    ),
    Parameter("q0", "q_0", "q0", "", "deceleration parameter today", {"uniform": [-3, 2]}),
    Parameter("j0", "j_0", "j0", "", "jerk parameter today", {"uniform": [-10, 20]}),
    Parameter("age_gyr", "t_0", "t0", "Gyr", "age of the universe", None, r"\mathrm{Gyr}"),
    Parameter("z_acceleration", r"z_\mathrm{acc}", "z_acc", "", "redshift at which the expansion began to accelerate"),
    Parameter("z_equality", r"z_\mathrm{eq}", "z_eq", "", "redshift at which matter and dark energy were equally dense"),
    Parameter("lambda_si", r"\Lambda", "Λ", "m⁻²", "cosmological constant", None, r"\mathrm{m^{-2}}"),
    Parameter("vacuum_energy_density", r"\rho_\Lambda c^2", "ρΛc²", "J/m³", "energy density of the vacuum", None, r"\mathrm{J\,m^{-3}}"),
)

PARAMETERS: dict[str, Parameter] = {p.name: p for p in _DECLARED}

ZERO_POINT = "zero_point:"


_OWN: dict[str, Parameter] = {}


def declare(parameters: Iterable[Parameter]) -> None:
    """Make known the parameters of a model that came in a file of its own, so that tables and figures find their symbols.

    A later declaration of the same name replaces an earlier one, but nothing replaces those of `PARAMETERS`.

    Raises
    ------
    InputError
        A name of `PARAMETERS` is declared with another symbol or unit.
    """
    for given in parameters:
        ours = PARAMETERS.get(given.name)
        if ours is None:
            _OWN[given.name] = given
        elif (ours.latex, ours.unit) != (given.latex, given.unit):
            cure = f'Use PARAMETERS["{given.name}"].with_prior(…), or choose another name'
            raise InputError(f"{given.name} is declared already: {ours.meaning}", value=given.latex, cure=cure)


def declared_elsewhere(names: Iterable[str]) -> dict[str, dict]:
    """Return the declarations of those names that are not in `PARAMETERS`, as plain dicts; `declare_again` takes them back."""
    return {name: asdict(_OWN[name]) for name in names if name in _OWN}


def declare_again(stored: Mapping[str, Mapping] | None) -> None:
    """Declare what `declared_elsewhere` once returned: a run is read without the file of its model."""
    declare(Parameter(**given) for given in (stored or {}).values())


def _upright(text: str) -> str:
    """Free text inside a formula: what would end or change it is escaped or left out."""
    special = {"_": r"\_", "%": r"\%", " ": r"\ ", "&": "+", **dict.fromkeys("\\{}$^~#", "")}
    return "".join(special.get(c, c) for c in text)


def parameter(name: str) -> Parameter:
    """The declaration of a parameter; zero points are made for each group by name.

    Raises
    ------
    KeyError
        If the name is not declared.
    """
    if name.startswith(ZERO_POINT):
        group = name.removeprefix(ZERO_POINT)
        latex = rf"\Delta_{{\mathrm{{{_upright(group)}}}}}"
        return Parameter(name, latex, f"Δ({group})", "mag", f"zero-point shift of {group}", None, r"\mathrm{mag}")
    return PARAMETERS[name] if name in PARAMETERS else _OWN[name]
