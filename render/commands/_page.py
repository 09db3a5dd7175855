"""The listening page that ``audition`` and ``demo`` write beside their takes."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from ..audition import Audition
    from ..page.data import PageData, PagePair

PAGE_NAME = "listen.html"


def page_name(text: str) -> str:
    """Return the page's file name.

    Raises
    ------
    InputError
        If it is not the name of an HTML file beside the takes.
    """
    from ...models.errors import InputError

    beside = text == Path(text).name and not set(text) & set("/\\\0")
    if not beside or not text.lower().endswith((".html", ".htm")):
        raise InputError(
            f"--page {text!r}: expected a name without a folder, ending in .html; the page lies "
            "beside its takes"
        )
    return text


def page_of(
    made: Audition,
    title: str,
    pairs: Sequence[PagePair] = (),
    excerpt_s: tuple[float, float] | None = None,
) -> PageData:
    """Return the page of an audition."""
    from ..page.data import page_data, page_takes
    from ._cautions import CAUTIONS

    return page_data(title, page_takes(made), CAUTIONS[:1], excerpt_s=excerpt_s, pairs=pairs)


def write_page(data: PageData, path: Path) -> None:
    """Write a page whole or not at all."""
    from ...models.atomic import write_text_atomically
    from ..page.write import listening_page

    write_text_atomically(path, listening_page(data))
