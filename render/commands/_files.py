"""Text files that commands write: checked first, then written whole or not at all."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

from ...models.errors import InputError


def new_file(path: str, inputs: Iterable[str | None], *, overwrite: bool) -> None:
    """Refuse, before any work is done, a file that may not be written.

    Parameters
    ----------
    path : str
        The file to be.
    inputs : iterable of str or None
        Files that must stay untouched.
    overwrite : bool
        Whether an existing file may be replaced.

    Raises
    ------
    InputError
        If it may not be written.
    """
    from ...models.atomic import check_target

    target = Path(path)
    check_target(target)
    if not target.exists():
        return
    for given in inputs:
        if given is not None and Path(given).exists() and target.samefile(given):
            raise InputError(f"{path}: is one of the files given; choose another name")
    if not overwrite:
        raise InputError(f"{path}: exists already; give another name or --overwrite")


def write_new(path: str, text: str) -> None:
    """Write a file that :func:`new_file` has let pass."""
    from ...models.atomic import write_text_atomically

    write_text_atomically(path, text)
