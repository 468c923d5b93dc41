"""The two ways in which work can fail: the user can mend it, or the picture does not show it."""

from __future__ import annotations


class PatternscoreError(Exception):
    """Anything a user can cause and mend; its message is one line that says what to do."""


class UsageError(PatternscoreError):
    """A command or call that cannot be carried out as written (exit status 2)."""


class UnscorableFrame(PatternscoreError):
    """A frame that cannot be read or holds no pattern (exit status 1); the others are still scored."""


class Unreadable(Exception):
    """One quantity that this frame does not show; the message is the reason given on the card."""

    def __init__(self, reason: str) -> None:
        super().__init__(reason)
        self.reason = reason
