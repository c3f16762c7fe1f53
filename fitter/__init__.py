"""mufitter: what a table of supernova distances says about dark energy."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from fitter.api import Fit, fit
    from fitter.checking import Check, check
    from fitter.comparing import Comparison, compare
    from fitter.config.load import load_config
    from fitter.config.settings import Config
    from fitter.errors import InputError, InputErrors, MufitterError
    from fitter.report.run_folder import read_run
    from fitter.sample.sample import Sample

__version__ = "0.1.0"

__all__ = [
    "Check",
    "Comparison",
    "Config",
    "Fit",
    "InputError",
    "InputErrors",
    "MufitterError",
    "Sample",
    "__version__",
    "check",
    "compare",
    "fit",
    "load_config",
    "read_run",
]

# Loaded on first use (PEP 562), so that `mufitter --help` does not wait for numpy and friends.
_HOMES = {
    "Check": "fitter.checking",
    "Comparison": "fitter.comparing",
    "Config": "fitter.config.settings",
    "Fit": "fitter.api",
    "InputError": "fitter.errors",
    "InputErrors": "fitter.errors",
    "MufitterError": "fitter.errors",
    "Sample": "fitter.sample.sample",
    "check": "fitter.checking",
    "compare": "fitter.comparing",
    "fit": "fitter.api",
    "load_config": "fitter.config.load",
    "read_run": "fitter.report.run_folder",
}


def __getattr__(name: str) -> object:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    from importlib import import_module

    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
