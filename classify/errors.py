"""Errors a user can cause. Each carries one sentence: what is wrong, where, what to do.

    StarfathomError
    |- SpectrumError    one spectrum cannot be read or measured (status ``failed``, exit 1)
    |- RequestError     the call itself is wrong: type, magnitude, band, option, table (exit 2)
"""

from __future__ import annotations


class StarfathomError(Exception):
    """Base of every error meant for the user's eyes; ``str(error)`` is one sentence."""


class SpectrumError(StarfathomError):
    """One spectrum cannot be read or measured; the others go on."""


class RequestError(StarfathomError):
    """The call cannot be carried out as it stands."""
