"""Errors a user can act on: every message is one line that says what was found and what to do."""

from __future__ import annotations

__all__ = ["InputError", "SchurbenchError", "SettingsError"]


class SchurbenchError(Exception):
    """Base of every error that schurbench raises on purpose."""


class InputError(SchurbenchError, ValueError):
    """The matrix, file or saved object cannot be used as it is."""


class SettingsError(SchurbenchError, ValueError):
    """A setting, or a combination of settings, cannot be carried out on this matrix."""
