"""What ``audition`` writes beside its takes: the page, the joined WAV and the pictures."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from ._page import page_of, write_page

if TYPE_CHECKING:
    from ..audition import Audition, AuditionTake
    from ..pairs import ComparedPair

JOINED_NAME, JOINED_TEXT = "joined.wav", "joined.txt"
TRACKS_STEM = "notch_tracks"
MOST_DIFFERENCES = 6


@dataclass(frozen=True)
class Beside:
    """What is asked beside the takes.

    Parameters
    ----------
    folder, riff : Path
        Where to, and of what.
    page_name : str or None
        The listening page's file name; None for no page.
    excerpt_s : (float, float) or None
        The stretch it holds.
    pictures : str
        ``png``, ``svg`` or ``none``.
    joined : bool
        Whether to write the joined WAV.
    """

    folder: Path
    riff: Path
    page_name: str | None
    excerpt_s: tuple[float, float] | None
    pictures: str
    joined: bool

    def check(self, takes: Sequence[AuditionTake], *, overwrite: bool) -> None:
        """Refuse, before anything is rendered, files that may not be replaced.

        Raises
        ------
        InputError
            With every such file.
        """
        from ...models.errors import InputError
        from ..audio import check_audio
        from ..audition import file_names
        from ..page.data import excerpt_frames
        from ._files import new_file

        if self.excerpt_s is not None:
            excerpt_frames(self.excerpt_s, check_audio(self.riff))
        if not self.folder.is_dir():
            return
        stems = file_names([f"{self.riff.stem} {take.name}" for take in takes])
        names = [] if self.page_name is None else [self.page_name]
        names += [JOINED_NAME, JOINED_TEXT] if self.joined else []
        if self.pictures != "none":
            names += [f"{TRACKS_STEM}.{self.pictures}"]
            # Which pairs there will be is known only once the takes are set up.
            names += sorted(
                path.name for path in self.folder.glob(f"difference_*_*.{self.pictures}")
            )
            names += [
                f"{stem}_{what}.{self.pictures}"
                for stem, take in zip(stems, takes, strict=True)
                if not take.settings.dry
                for what in ("spectrogram", "channels")
            ]
        faults: list[str] = []
        for name in names:
            try:
                new_file(str(self.folder / name), [str(self.riff)], overwrite=overwrite)
            except InputError as fault:
                faults += fault.messages
        if faults:
            raise InputError(faults)

    def _difference_name(self, first: int, second: int) -> str:
        return f"difference_{first + 1}_{second + 1}.{self.pictures}"

    def write(
        self, made: Audition, tell: Callable[[str, float], None] | None
    ) -> tuple[list[ComparedPair], list[str], str]:
        """Measure the takes and write what is asked.

        Returns
        -------
        list of ComparedPair, list of str, str
            What there is to say of pairs of takes, the files written, and the page's notice.
        """
        from ...models.atomic import write_text_atomically
        from ..joined import join_takes, musical_joins
        from ..page.data import page_takes
        from ..pairs import compare_pairs

        takes = page_takes(made)
        pairs = compare_pairs(made, takes, tell and (lambda share: tell("comparing", share)))
        written, notice = [], ""
        if self.page_name is not None:
            if tell:
                tell("listening page", 0.9)
            said = [pair.as_page_pair() for pair in pairs]
            data = page_of(made, self.riff.name, said, self.excerpt_s)
            write_page(data, self.folder / self.page_name)
            written.append(self.page_name)
            notice = data.notice
        if self.joined and pairs:
            first, second = takes[pairs[0].first], takes[pairs[0].second]
            joins = musical_joins(self.riff)
            join_takes(first.path, second.path, self.folder / JOINED_NAME, joins)
            names = (first.name, second.name)
            turns = [f"{0.0:.2f} s: {names[0]}"]
            turns += [f"{join:.2f} s: {names[n % 2]}" for n, join in enumerate(joins, start=1)]
            write_text_atomically(self.folder / JOINED_TEXT, "\n".join(turns) + "\n")
            changes = f"{len(joins)} changes" if joins else "no change: the riff is short"
            written.append(f"{JOINED_NAME}: {names[0]} and {names[1]} by turns, {changes}")
            written.append(f"{JOINED_TEXT}: who plays when")
        if self.pictures != "none":
            written += self._draw(made, pairs, tell)
        return pairs, written, notice

    def _draw(
        self,
        made: Audition,
        pairs: Sequence[ComparedPair],
        tell: Callable[[str, float], None] | None,
    ) -> list[str]:
        from ...models.cycle import analyse_cycle
        from ..figures import save_figure
        from ..pictures import channels_figure, difference_figure, spectrogram_figure, tracks_figure

        dry = next(
            (t.path for t, s in zip(made.takes, made.setups, strict=True) if s is None), None
        )
        cycles, written = [], []
        for number, (name, take, setup) in enumerate(
            zip(made.names, made.takes, made.setups, strict=True)
        ):
            if setup is None or setup.bus is None:
                continue
            if tell:
                tell("pictures", number / len(made.takes))
            cycle = analyse_cycle(setup.circuit, setup.jfets, setup.bus)
            cycles.append((name, cycle))
            for what, figure in (
                ("spectrogram", spectrogram_figure(take.path, dry, cycle)),
                ("channels", channels_figure(setup.circuit, setup.jfets, cycle)),
            ):
                path = take.path.with_name(f"{take.path.stem}_{what}.{self.pictures}")
                save_figure(figure, path)
                written.append(path.name)
        if cycles:
            path = self.folder / f"{TRACKS_STEM}.{self.pictures}"
            save_figure(tracks_figure(cycles), path)
            written.append(path.name)
        for pair in pairs[:MOST_DIFFERENCES]:
            path = self.folder / self._difference_name(pair.first, pair.second)
            save_figure(difference_figure(pair.difference, pair.names), path)
            written.append(path.name)
        return written
