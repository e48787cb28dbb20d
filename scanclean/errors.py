"""What can go wrong, as few kinds as callers tell apart.

Every message names what is wrong, where, and what to do about it, in one line.
Wrong arguments of library calls stay ``ValueError`` and ``TypeError``.
"""

from __future__ import annotations

__all__ = ["CallError", "OutputError", "PageError", "RecipeError", "ScancleanError"]


class ScancleanError(Exception):
    """Base of all errors that a user can meet and mend."""


class CallError(ScancleanError):
    """A call that cannot be carried out as it stands; nothing was done."""


class PageError(ScancleanError):
    """A scan, or one page of it, that cannot be read or cleaned."""


class RecipeError(ScancleanError):
    """A recipe with an unknown key or an impossible value."""


class OutputError(ScancleanError):
    """A result that cannot be written."""
