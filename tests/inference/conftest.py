"""The doubles, importable by name so that worker processes can unpickle them."""

import importlib.util
import sys
from pathlib import Path

import pytest

_NAME = "mufitter_inference_doubles"


def _load():
    if _NAME not in sys.modules:
        spec = importlib.util.spec_from_file_location(_NAME, Path(__file__).with_name("doubles.py"))
        module = importlib.util.module_from_spec(spec)
        sys.modules[_NAME] = module
        spec.loader.exec_module(module)
    return sys.modules[_NAME]


@pytest.fixture(scope="session")
def doubles():
    return _load()
