"""Which versions of what made a file."""

from __future__ import annotations

import platform
from importlib import metadata

__all__ = ["PACKAGES", "versions"]

#: Packages whose version can change a number in a file that hurstfit writes.
PACKAGES = ("hurstfit", "numpy", "scipy", "emcee", "astropy", "h5py")


def versions() -> dict[str, str]:
    """Versions of Python and of the packages in :data:`PACKAGES` that are installed here."""
    found = {"python": platform.python_version()}
    for package in PACKAGES:
        try:
            found[package] = metadata.version(package)
        except metadata.PackageNotFoundError:
            found[package] = "not installed as a package"
    return found
