"""A model that comes in a file of the user's own: loaded, tried out, and its parameters declared."""

from __future__ import annotations

import copyreg
import hashlib
import importlib.machinery
import importlib.util
import inspect
import re
import sys
import traceback
from collections.abc import Callable
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np

from fitter.array_types import FloatArray
from fitter.cosmology import MODELS
from fitter.cosmology.base import Model
from fitter.errors import InputError
from fitter.likelihood.priors import parse_prior
from fitter.parameters import Parameter, declare

__all__ = ["load_model"]

_TRIED_Z = np.expm1(np.linspace(0.0, np.log(2.0), 9))
_PRIOR_SHARES = (0.5, 0.4, 0.6)  # quantiles of the priors at which a model is tried
_UNITY = 1e-6
_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")


def load_model(file: str | Path, name: str | None = None) -> Model:
    """Run a file and return the model in it.

    Parameters
    ----------
    file : path-like
        Python code with a subclass of `Model`, `FluidModel` or `DistanceModel`.
    name : str, optional
        The ``name`` of the model, or of its class; not needed where the file has only one.

    Raises
    ------
    InputError
        No such file or model, code that fails, or a model that does not keep to the interface.
    """
    file = Path(file).expanduser().resolve()
    module = _run(file)
    kind = _choose(_models_in(module), name, file)
    _check_declaration(kind, file)
    declare(kind.parameters)
    model = kind()
    _try_out(model, file)
    # A process that knows nothing of the file runs it again.
    copyreg.pickle(kind, _Reducer(str(file), kind.name))
    return model


class _Reducer:
    """How copies of a model reach other processes: by its file."""

    def __init__(self, file: str, name: str) -> None:
        self.file, self.name = file, name

    def __call__(self, model: Model) -> tuple[Callable[..., Any], tuple[str, str]]:
        return load_model, (self.file, self.name)


def _run(file: Path) -> ModuleType:
    try:
        content = file.read_bytes()
    except OSError as error:
        raise InputError(f"the model's file cannot be read: {error.strerror}", file=file) from None
    # The name follows the content, so that an edited file is run anew and two files never share one.
    label = f"fitter_model_{hashlib.sha256(str(file).encode() + content).hexdigest()[:16]}"
    if label in sys.modules:
        return sys.modules[label]
    spec = importlib.util.spec_from_file_location(label, file, loader=importlib.machinery.SourceFileLoader(label, str(file)))
    if spec is None:
        raise InputError("the model's file cannot be loaded as Python code", file=file)
    module = importlib.util.module_from_spec(spec)
    sys.modules[label] = module
    try:
        exec(compile(content, str(file), "exec"), module.__dict__)
    except Exception as error:  # noqa: BLE001 - whatever the user's code does wrong is told as theirs
        del sys.modules[label]
        raise _theirs(error, file, "the model's file does not run") from None
    return module


def _theirs(error: Exception, file: Path, problem: str) -> InputError:
    """An exception from the user's code as a message with its line."""
    rows = [f.lineno for f in traceback.extract_tb(error.__traceback__) if f.filename == str(file)]
    row = error.lineno if isinstance(error, SyntaxError) else (rows[-1] if rows else None)
    return InputError(f"{problem}: {type(error).__name__}: {error}", file=file, row=row)


def _models_in(module: ModuleType) -> list[type[Model]]:
    own = [v for v in vars(module).values() if inspect.isclass(v) and issubclass(v, Model) and v.__module__ == module.__name__]
    return [k for k in own if not inspect.isabstract(k)]


def _choose(kinds: list[type[Model]], name: str | None, file: Path) -> type[Model]:
    known = [getattr(k, "name", None) or k.__name__ for k in kinds]
    if not kinds:
        cure = "Derive a class from fitter.cosmology.Model and give it `name`, `parameters` and `e_squared`"
        raise InputError("there is no model in this file", file=file, cure=cure)
    chosen = [k for k, n in zip(kinds, known, strict=True) if name in (None, n, k.__name__)]
    if len(chosen) == 1:
        return chosen[0]
    if name is None:
        raise InputError("there are several models in this file", file=file, cure=f"Say `name:`, one of {', '.join(known)}")
    raise InputError("there is no such model in this file", file=file, value=name, cure=f"It has {', '.join(known)}")


def _check_declaration(kind: type[Model], file: Path) -> None:
    name, parameters = getattr(kind, "name", None), getattr(kind, "parameters", None)
    if not isinstance(name, str) or not _NAME.fullmatch(name):
        raise InputError(f"class {kind.__name__} needs a `name` of letters, digits and _", file=file, value=name)
    if name in MODELS:
        raise InputError("a model of that name is built in", file=file, value=name, cure="Choose another name")
    if not isinstance(parameters, tuple | list) or not parameters or not all(isinstance(p, Parameter) for p in parameters):
        cure = 'E.g. parameters = (PARAMETERS["omega_m"], Parameter("tau", r"\\tau", "τ", "", "meaning", {"uniform": [0, 1]}))'
        raise InputError(f"{name}: `parameters` must be a tuple of Parameter objects", file=file, value=parameters, cure=cure)
    kind.parameters = tuple(parameters)
    for p in parameters:
        _check_parameter(name, p, file)
    if len({p.name for p in parameters}) != len(parameters):
        raise InputError(f"{name}: two parameters have the same name", file=file, value=[p.name for p in parameters])


def _check_parameter(model: str, p: Parameter, file: Path) -> None:
    if not _NAME.fullmatch(p.name) or p.name in ("H0", "absolute_magnitude", "intrinsic_scatter", "covariance_scale"):
        cure = "H0, the magnitude and the errors' own parameters are added where the data call for them; others need a plain name"
        raise InputError(f"{model}: not a name for a model's parameter", file=file, value=p.name, cure=cure)
    if not p.default_prior:
        raise InputError(f"{model}: the parameter {p.name} needs a default prior", file=file, cure='E.g. {"uniform": [0, 1]}')
    try:
        parse_prior(p.default_prior)
    except InputError as error:
        raise InputError(
            f"{model}: the default prior of {p.name}: {error.problem}", file=file, value=error.value, cure=error.cure
        ) from None


def _try_out(model: Model, file: Path) -> None:
    """Evaluate the model at three points of its default priors, together and one by one."""
    priors = [parse_prior(p.default_prior or {}) for p in model.parameters]
    theta = np.array([[float(prior.quantile(share)) for prior in priors] for share in _PRIOR_SHARES])
    what = "log_distance" if hasattr(model, "log_distance") else "e_squared"
    function = getattr(model, what)
    try:
        with np.errstate(all="ignore"):
            together = np.asarray(function(_TRIED_Z, theta))
            apart = np.array([np.asarray(function(_TRIED_Z, row[None]))[0] for row in theta])
            curvature = np.asarray(model.omega_k(theta))
    except Exception as error:  # noqa: BLE001 - whatever the user's code does wrong is told as theirs
        raise _theirs(error, file, f"{model.name}: {what} fails on (W, p) parameters and (M,) redshifts") from None
    _check_values(model, what, together, apart, file)
    if curvature.shape != (len(theta),):
        raise InputError(f"{model.name}: omega_k must return one number a point, shape (W,)", file=file, value=curvature.shape)


def _check_values(model: Model, what: str, together: FloatArray, apart: FloatArray, file: Path) -> None:
    wanted = (len(_PRIOR_SHARES), len(_TRIED_Z))
    if together.shape != wanted:
        cure = "Broadcast: theta[:, 0:1] is (W, 1), z is (M,)"
        raise InputError(f"{model.name}: {what} must return shape (W, M), here {wanted}", file=file, value=together.shape, cure=cure)
    if not np.allclose(together, apart, rtol=1e-9, atol=1e-12, equal_nan=True):
        raise InputError(f"{model.name}: {what} gives a point another value when it comes with others", file=file)
    today, expected = together[:, 0], 0.0 if what == "log_distance" else 1.0
    finite = np.isfinite(today)
    if not finite.any() or np.abs(today[finite] - expected).max() > _UNITY:
        said = "the distance must be c z / H0 near z = 0" if what == "log_distance" else "E² must be 1 at z = 0"
        raise InputError(f"{model.name}: {said}", file=file, value=today.tolist())
