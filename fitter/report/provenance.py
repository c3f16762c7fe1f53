"""Where a result comes from: versions, platform, seed, command, time."""

from __future__ import annotations

import datetime
import os
import platform
import shlex
import sys
from importlib import metadata

__all__ = ["provenance"]

_PACKAGES = ("mufitter", "numpy", "scipy", "emcee", "h5py", "pandas", "matplotlib", "corner", "pydantic", "pyyaml")


def provenance(seed: int, config_sha256: str, inputs: dict[str, str]) -> dict:
    """Return what a reader needs to repeat a run.

    Parameters
    ----------
    seed : int
        The seed all randomness came from.
    config_sha256 : str
        Hash of the settings as run.
    inputs : dict
        Input path → SHA-256.
    """
    return {
        "finished": datetime.datetime.now(datetime.UTC).isoformat(timespec="seconds"),
        "command": shlex.join([os.path.basename(sys.argv[0]), *sys.argv[1:]]),
        "seed": seed,
        "config_sha256": config_sha256,
        "inputs": dict(inputs),
        "python": platform.python_version(),
        "platform": platform.platform(),
        "processors": os.cpu_count(),
        "versions": {name: _version(name) for name in _PACKAGES},
    }


def _version(package: str) -> str | None:
    try:
        return metadata.version(package)
    except metadata.PackageNotFoundError:
        return None
