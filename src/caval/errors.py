"""Errors of caval. Each message names the value, what is allowed and what to do next."""

from __future__ import annotations

__all__ = ["CavalError", "InputError", "FileError", "PluginError"]


class CavalError(Exception):
    """Parent of every error that caval raises on purpose."""


class InputError(CavalError, ValueError):
    """A value, role, unit or option that cannot be used."""


class FileError(CavalError, OSError):
    """A file that is missing, broken, or in the way."""


class PluginError(CavalError, ImportError):
    """A format or stage that is not installed or does not load."""
