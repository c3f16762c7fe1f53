"""chain.h5: every replica's chain, log-posterior, marginalised and derived values."""

from __future__ import annotations

import json
from pathlib import Path

from fitter.errors import InputError
from fitter.inference.posterior import Posterior
from fitter.parameters import declare_again, declared_elsewhere
from fitter.report.facts import json_safe
from fitter.report.hdf5 import writing_hdf5

__all__ = ["CHAIN_FORMAT", "read_chain", "write_chain"]

CHAIN_FORMAT = "mufitter chain 1"


def write_chain(path: str | Path, posterior: Posterior, attributes: dict[str, str] | None = None) -> None:
    """Write a posterior to an HDF5 file, under a temporary name first.

    Parameters
    ----------
    path : path-like
        The file; replaced if it exists.
    posterior : Posterior
    attributes : dict of str, optional
        Further attributes of the file, e.g. the hash of the config.

    Notes
    -----
    Datasets ``chain`` (R, S, W, n), ``log_posterior`` (R, S, W) and ``extra/NAME`` (R, S, W); attributes ``format``,
    ``intervals`` (how they are made), and as JSON ``names``, ``kinds``, ``sampling`` and ``declared`` (symbols of parameters
    from a model of one's own).
    """
    with writing_hdf5(path, CHAIN_FORMAT) as file:
        file.attrs["names"] = json.dumps(list(posterior.names))
        file.attrs["intervals"] = posterior.intervals
        file.attrs["kinds"] = json.dumps(posterior.kinds)
        file.attrs["sampling"] = json.dumps(json_safe(posterior.sampling))
        file.attrs["declared"] = json.dumps(declared_elsewhere(posterior.kinds))
        for name, value in (attributes or {}).items():
            file.attrs[name] = value
        axes = "replica, step, walker"
        file.create_dataset("chain", data=posterior.chain).attrs["axes"] = f"{axes}, parameter"
        file.create_dataset("log_posterior", data=posterior.log_posterior).attrs["axes"] = axes
        for name, values in posterior.extra.items():
            file.create_dataset(f"extra/{name}", data=values).attrs["axes"] = axes


def read_chain(path: str | Path) -> Posterior:
    """Read a posterior back.

    Raises
    ------
    InputError
        A file that is missing, damaged, no chain of ours, or of another format version.
    """
    import h5py

    path = Path(path)
    if not path.is_file():
        raise InputError("the chain is missing", file=path, cure="Run the fit again with --replace")
    try:
        with h5py.File(path, "r") as file:
            written = file.attrs.get("format")
            if written != CHAIN_FORMAT:
                raise InputError(
                    f"the format is not {CHAIN_FORMAT!r}",
                    file=path,
                    value=written,
                    cure="Another version of mufitter wrote it: use that one",
                )
            declare_again(json.loads(file.attrs.get("declared", "{}")))
            extra = {name: data[()] for name, data in file["extra"].items()} if "extra" in file else {}
            posterior = Posterior(
                names=tuple(json.loads(file.attrs["names"])),
                chain=file["chain"][()],
                log_posterior=file["log_posterior"][()],
                extra=extra,
                kinds=json.loads(file.attrs["kinds"]),
                sampling=json.loads(file.attrs["sampling"]),
                intervals=str(file.attrs.get("intervals", "equal_tailed")),
            )
    except (OSError, KeyError, ValueError) as error:
        raise InputError(f"the chain is damaged or cut short: {error}", file=path, cure="Run the fit again with --replace") from None
    _check(posterior, path)
    return posterior


def _check(posterior: Posterior, path: Path) -> None:
    shape = posterior.log_posterior.shape
    wrong = [name for name, values in posterior.extra.items() if values.shape != shape]
    wrong += [name for name in posterior.kinds if name not in posterior.names and name not in posterior.extra]
    if posterior.chain.shape != (*shape, len(posterior.names)) or wrong:
        raise InputError(
            "the chain's parts do not belong together", file=path, value=wrong or None, cure="Run the fit again with --replace"
        )
