"""Packages that only some commands need, loaded at first use, and the message for where one is missing."""

from __future__ import annotations

import importlib
from types import ModuleType

from .errors import PackageMissing

PROVIDERS = {"scipy": "measure", "matplotlib": "measure", "wakepy": "night", "pyarrow": "export", "asammdf": "export"}
"""The optional extra of this distribution that brings each package."""


def need(module: str, *, purpose: str) -> ModuleType:
    """Return the module of a package that is optional, such as `scipy.stats`.

    Raises `PackageMissing`, which names the package, what it is wanted for and how to get it.
    """
    package = module.partition(".")[0]
    try:
        return importlib.import_module(module)
    except ModuleNotFoundError as error:
        raise PackageMissing(package, purpose=purpose, extra=PROVIDERS.get(package)) from error
