"""The one exception a user's input can cause."""

from __future__ import annotations

from collections.abc import Iterable
from difflib import get_close_matches


class InputError(ValueError):
    """Bad input, told so that the user can mend it: what was given, what is allowed, nearest match, where.

    Parameters
    ----------
    message
        One sentence that names the offending value.
    where
        Place of the fault, such as ``"[[conductor]] 'arm', key 'radius'"``. The case reader puts the file
        name in front.
    allowed
        What would have been accepted.
    hint
        What to do about it.
    """

    def __init__(self, message: str, *, where: str = "", allowed: str = "", hint: str = ""):
        super().__init__(message)
        self.message, self.where, self.allowed, self.hint = message, where, allowed, hint

    def located(self, place: str) -> InputError:
        """A copy with `place` put in front of `where`."""
        where = f"{place}: {self.where}" if self.where else place
        return InputError(self.message, where=where, allowed=self.allowed, hint=self.hint)

    def __str__(self) -> str:
        text = f"{self.where}: {self.message}" if self.where else self.message
        if self.allowed:
            text += f" Allowed: {self.allowed}."
        return f"{text} {self.hint}" if self.hint else text


def nearest(word: str, choices: Iterable[str]) -> str:
    """``"Did you mean 'radius'?"`` when one of `choices` is close to `word`, else an empty string."""
    match = get_close_matches(word, list(choices), n=1, cutoff=0.6)
    return f"Did you mean '{match[0]}'?" if match else ""
