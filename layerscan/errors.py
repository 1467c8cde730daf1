"""The mistakes a user can make, one exception per kind, each with the exit code that the command line gives it.

A message says which thing, what came, what is needed and what to do next.
"""

from __future__ import annotations


class LayerscanError(Exception):
    """Base of every error that layerscan raises on purpose."""

    exit_code = 1


class SettingsError(LayerscanError, ValueError):
    """A setting, option or quantity is wrong: nothing was read yet."""

    exit_code = 2


class InputError(LayerscanError, ValueError):
    """A file or array cannot be used: unreadable, empty, not what it claims to be."""

    exit_code = 3


class CalibrationError(InputError):
    """The pixel size is unknown or impossible."""


class MaterialError(InputError):
    """A material is unknown or its optical constants cannot be used."""


class MeasurementError(InputError):
    """The image or profile is readable, but no honest number exists for what was asked."""


class MissingExtraError(LayerscanError, ImportError):
    """An optional dependency is needed and is not installed."""

    exit_code = 1


class Interrupted(LayerscanError):
    """The caller asked to stop; nothing half-written is left behind."""
