"""The error a person at the bench can mend."""

from __future__ import annotations

from collections.abc import Iterable


class InputError(ValueError):
    """Something the user gave cannot be used; the message says what to do about it.

    Parameters
    ----------
    messages : str or iterable of str
        One message per fault, each complete in itself: file, place, value,
        what was expected, and the remedy. All faults found are reported at once.

    Notes
    -----
    Commands print the messages and exit with code 2. Anything else that escapes
    a command is a defect of sweepset.
    """

    def __init__(self, messages: str | Iterable[str]) -> None:
        self.messages: tuple[str, ...] = (
            (messages,) if isinstance(messages, str) else tuple(messages)
        )
        super().__init__("\n".join(self.messages))


def near_names(wanted: str, known: Iterable[str]) -> str:
    """Return a "; did you mean ...?" tail naming the nearest known names, or nothing.

    Parameters
    ----------
    wanted : str
        What the user wrote.
    known : iterable of str
        Names that exist.
    """
    from difflib import get_close_matches

    by_fold = {name.casefold(): name for name in known}
    found = get_close_matches(wanted.casefold(), by_fold, n=3, cutoff=0.5)
    if not found:
        return ""
    return "; did you mean " + " or ".join(by_fold[fold] for fold in found) + "?"
