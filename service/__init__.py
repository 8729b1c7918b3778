"""The HTTP service of Smilewright: thin routes over the engine, reached through its face alone."""

from __future__ import annotations

from importlib import metadata

__all__ = ["CONTRACT_VERSION", "version"]

CONTRACT_VERSION = "1.0.0"
"""Version of the HTTP contract, which changes apart from the package's."""


def version() -> str:
    """Version of the installed package; ``0+source`` where it runs from a tree that was never installed."""
    try:
        return metadata.version("smilewright")
    except metadata.PackageNotFoundError:
        return "0+source"
