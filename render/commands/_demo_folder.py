"""The demo's folder: it may replace what a demo left there, and nothing else."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from ...models.atomic import atomic_path, check_target, write_text_atomically
from ...models.errors import InputError
from ._page import PAGE_NAME

if TYPE_CHECKING:
    from ..audition import Audition

MANIFEST = "demo_files.json"


class DemoFolder:
    """A folder for the demo and the list of files that a demo made there.

    Parameters
    ----------
    path : Path
        The folder; need not exist.

    Raises
    ------
    InputError
        If something else stands there.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        self._known: dict[str, str] = {}
        if path.is_file():
            raise InputError(f"{path}: is a file; give a folder with --out")
        try:
            text = (path / MANIFEST).read_text(encoding="utf-8")
        except FileNotFoundError:
            return
        except (OSError, UnicodeDecodeError, ValueError) as fault:
            raise InputError(f"{path}: cannot be used ({fault}); give another with --out") from None
        try:
            known = json.loads(text)
        except ValueError:
            return  # not a demo's list: nothing there is a demo's
        if isinstance(known, dict):
            self._known = {str(name): str(digest) for name, digest in known.items()}

    def check(self, takes: Sequence[str]) -> None:
        """Refuse if a file in the way is not as a demo left it.

        Parameters
        ----------
        takes : sequence of str
            Names of the takes to be.

        Raises
        ------
        InputError
            With every such file.
        """
        # Told now, not after the sets have been chosen.
        if not self.path.parent.is_dir():
            raise InputError(
                f"{self.path}: the folder {self.path.parent} does not exist; make it or give "
                "another with --out"
            )
        if self.path.is_dir():
            check_target(self.path / MANIFEST)
        names = ["summary.txt", PAGE_NAME, MANIFEST, *takes]
        names += [str(Path(name).with_suffix(".json")) for name in takes]
        self._refuse(name for name in names if not self._may_replace(name))

    def finish(self, made: Audition, texts: Mapping[str, str], copies: Iterable[Path]) -> None:
        """Write the texts and copies beside the takes, then the list of all files made.

        Copies that the user has changed since an earlier demo are left as they are.

        Parameters
        ----------
        made : Audition
            The takes, already there.
        texts : mapping of str to str
            Text files by name.
        copies : iterable of Path
            Shipped files.
        """
        contents = {name: text.encode() for name, text in texts.items()}
        contents |= {path.name: path.read_bytes() for path in copies}
        listed = [take.path for take in made.takes]
        listed += [path.with_suffix(".json") for path in listed]
        for name, content in contents.items():
            if self._may_replace(name):
                with atomic_path(self.path / name) as place:
                    place.write_bytes(content)
                listed.append(self.path / name)
        digests = self._known | {path.name: _digest(path) for path in listed}
        write_text_atomically(self.path / MANIFEST, json.dumps(digests, indent=2) + "\n")

    def _may_replace(self, name: str) -> bool:
        path = self.path / name
        if not path.exists():
            return True
        if name == MANIFEST:
            return bool(self._known)
        return path.is_file() and self._known.get(name) == _digest(path)

    def _refuse(self, names: Iterable[str]) -> None:
        faults = [
            f"{self.path / name}: is not as a demo left it and is kept; move it away or give "
            "another folder with --out"
            for name in names
        ]
        if faults:
            raise InputError(faults)


def _digest(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
