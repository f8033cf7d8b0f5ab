"""Where the shipped data stands: in a checkout beside the package, in a wheel inside it."""

from __future__ import annotations

from pathlib import Path

PACKAGE = Path(__file__).resolve().parent.parent


def isa_folder() -> Path:
    """The folder with ``cores/`` and ``operations/``."""
    return _shipped("isa")


def programs_folder() -> Path:
    """The folder with the shipped kernels."""
    return _shipped("programs")


def _shipped(name: str) -> Path:
    inside = PACKAGE / "_data" / name
    return inside if inside.is_dir() else PACKAGE.parent / name
