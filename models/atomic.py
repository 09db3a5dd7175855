"""Files that appear whole or not at all.

The content is written into a temporary file in the target's own folder (a rename
across file systems would not be atomic), forced to the disk and then renamed
over the target. Whatever goes wrong before the rename, the target stays as it was
and the temporary file is removed.
"""

from __future__ import annotations

import contextlib
import errno
import os
import re
import stat
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from .errors import InputError

# A temporary name must stay within what file systems allow (255 bytes).
_MAX_STEM = 40
_LEFTOVER = re.compile(r"\..{1,40}\.[a-z0-9_]{8}\.part(\.\w+)?")


@contextmanager
def atomic_path(target: str | Path) -> Iterator[Path]:
    """Give a temporary path to write to; on leaving without error it becomes `target`.

    Parameters
    ----------
    target : str or Path
        The file to be made or replaced. The temporary path has the same suffix
        and exists, empty, when the block is entered.

    Yields
    ------
    Path
        Where to write. Close the file before the block ends.

    Raises
    ------
    InputError
        If the folder is missing or not writable, if the target is a folder or a
        link, if the disk is full; with the remedy. Errors of other kinds raised
        in the block pass unchanged.
    """
    target = Path(target)
    check_target(target)
    try:
        handle, name = tempfile.mkstemp(
            prefix=f".{target.stem[:_MAX_STEM]}.", suffix=f".part{target.suffix}", dir=target.parent
        )
    except OSError as fault:
        raise explain_write_fault(fault, target) from None
    temporary = Path(name)
    try:
        try:
            os.close(handle)
            yield temporary
            temporary.chmod(_wanted_mode(target))
            _force_to_disk(temporary, os.O_RDWR)
            temporary.replace(target)
        except OSError as fault:
            if _concerns(fault, temporary):
                raise explain_write_fault(fault, target) from None
            raise
    finally:
        with contextlib.suppress(OSError):
            temporary.unlink(missing_ok=True)
    # The rename itself lasts only once the folder is on the disk; where folders
    # cannot be opened the file is whole all the same.
    with contextlib.suppress(OSError):
        _force_to_disk(target.parent, os.O_RDONLY)


def clear_leftovers(folder: str | Path) -> list[Path]:
    """Remove temporary files that a killed process left in a folder; return what was removed.

    Call it only while no other process of this program writes there.

    Parameters
    ----------
    folder : str or Path
        The folder.
    """
    removed = []
    for path in sorted(Path(folder).iterdir()):
        if _LEFTOVER.fullmatch(path.name) and path.is_file() and not path.is_symlink():
            with contextlib.suppress(OSError):
                path.unlink()
                removed.append(path)
    return removed


def write_text_atomically(target: str | Path, text: str) -> None:
    """Write `text` as UTF-8, line ends as they are, whole or not at all.

    Parameters
    ----------
    target : str or Path
        The file to be made or replaced.
    text : str
        Its new content.

    Raises
    ------
    InputError
        As :func:`atomic_path`.
    """
    with atomic_path(target) as temporary:
        temporary.write_bytes(text.encode("utf-8"))


def explain_write_fault(fault: OSError, target: Path) -> InputError:
    """Return the plain message for an operating system's refusal to write `target`."""
    if fault.errno in (errno.ENOSPC, errno.EDQUOT):
        reason = "the disk is full; free some space or choose another folder"
    elif fault.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        reason = "not allowed to write here; choose another folder or change its permissions"
    elif fault.errno == errno.ENAMETOOLONG:
        reason = "the name is too long for this disk; choose a shorter one"
    elif fault.errno == errno.EFBIG:
        reason = "the file would be too large for this disk; choose another folder"
    else:
        reason = f"cannot write: {fault.strerror or fault}; choose another place"
    return InputError(f"{target}: {reason}")


def check_target(target: Path) -> None:
    """Refuse a target that cannot be made or replaced, before any work is done for it.

    Parameters
    ----------
    target : Path
        The file to be made or replaced.

    Raises
    ------
    InputError
        If the folder is missing, or if the target is a folder, a link, no ordinary
        file or protected.
    """
    folder = target.parent
    try:
        if not folder.is_dir():
            what = "is not a folder" if folder.exists() else "does not exist; make it first"
            raise InputError(f"{target}: the folder {folder} {what}, or choose another place")
        if target.is_symlink():
            # Renaming over a link would leave the file it names untouched and stale.
            raise InputError(
                f"{target}: is a link to {target.readlink()}; give that file's own name instead"
            )
        if target.is_dir():
            raise InputError(f"{target}: is a folder; give the name of a file in it")
        if target.exists() and not target.is_file():
            raise InputError(f"{target}: is not an ordinary file; choose another name")
        if target.exists() and not os.access(target, os.W_OK):
            raise InputError(
                f"{target}: is protected against writing; choose another name or change its "
                "permissions"
            )
    except OSError as fault:
        raise explain_write_fault(fault, target) from None


def _wanted_mode(target: Path) -> int:
    """Return the permissions of the file replaced, or those any new file would get."""
    if target.exists():
        return stat.S_IMODE(target.stat().st_mode)
    mask = os.umask(0)
    os.umask(mask)
    return 0o666 & ~mask


def _force_to_disk(path: Path, mode: int) -> None:
    handle = os.open(path, mode)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _concerns(fault: OSError, temporary: Path) -> bool:
    """Tell whether a fault raised in the block is about the file being written."""
    if fault.errno in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EROFS):
        return True
    named = {os.fspath(n) for n in (fault.filename, fault.filename2) if n is not None}
    return os.fspath(temporary) in named
