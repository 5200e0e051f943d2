"""Which versions of what made a file."""

from __future__ import annotations

import platform
from importlib import metadata

import hurstfit

__all__ = ["PACKAGES", "versions"]

#: Packages, besides this one, whose version can change a number in a file that hurstfit writes.
PACKAGES = ("numpy", "scipy", "emcee", "astropy", "h5py")


def versions() -> dict[str, str]:
    """Versions of hurstfit, of Python, and of the packages in :data:`PACKAGES`."""
    found = {"hurstfit": hurstfit.__version__, "python": platform.python_version()}
    return {**found, **{package: metadata.version(package) for package in PACKAGES}}
