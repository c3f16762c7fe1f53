"""Families of models behind one small interface, and the distances they give."""

from fitter.cosmology.base import DistanceModel, FluidModel, Model, Within, radiation_density
from fitter.cosmology.cosmographic import Cosmographic
from fitter.cosmology.lcdm import CurvedLCDM, FlatLCDM
from fitter.cosmology.w0wa import CurvedW0WA, FlatW0WA
from fitter.cosmology.wcdm import CurvedWCDM, FlatWCDM
from fitter.errors import InputError

__all__ = ["MODELS", "DistanceModel", "FluidModel", "Model", "Within", "get_model", "radiation_density"]

MODELS: dict[str, type[Model]] = {m.name: m for m in (FlatLCDM, CurvedLCDM, FlatWCDM, CurvedWCDM, FlatW0WA, CurvedW0WA, Cosmographic)}


def get_model(name: str) -> Model:
    """Return the model of that name.

    Raises
    ------
    InputError
        If there is none; the message lists those there are.
    """
    try:
        return MODELS[name]()
    except (KeyError, TypeError):
        known = ", ".join(MODELS)
        raise InputError("there is no such model", key="model", value=name, cure=f"Choose one of {known}.") from None
