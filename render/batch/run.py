"""Rendering what a plan still lacks, through any executor of ``concurrent.futures``."""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Executor, Future, ThreadPoolExecutor, wait
from contextlib import contextmanager, suppress
from dataclasses import dataclass, replace
from pathlib import Path

from filelock import FileLock, Timeout

from ...models.atomic import check_target, clear_leftovers, explain_write_fault
from ...models.errors import InputError
from ..audio import AudioFacts, audio_bytes, check_audio, check_room, sidecar_path
from .index import BatchIndex
from .takeplan import PlannedTake, TakePlan
from .task import Row, TakeTask, file_hash, left_behind, render_task

LOCK = ".batch.lock"
# The whole index is written this often; between, the journal holds what is done.
INDEX_EVERY_S = 10.0
Progress = Callable[[int, int, float], None]
"""Called with takes done in this run, takes to do, and takes per second so far."""


@dataclass(frozen=True)
class Outlook:
    """What a batch amounts to, before it starts.

    Parameters
    ----------
    takes : int
        Takes of the plan, or those chosen of it.
    missing : int
        Of them, those to render.
    seconds : float
        Audio to render [s].
    size_bytes : int
        Disk that takes.
    """

    takes: int
    missing: int
    seconds: float
    size_bytes: int


@dataclass(frozen=True)
class BatchResult:
    """What a run did.

    Parameters
    ----------
    rows : tuple of dict
        Rows of all chosen takes that exist, in the plan's order.
    rendered, kept : int
        Takes rendered in this run, and takes that were there already.
    """

    rows: tuple[Row, ...]
    rendered: int
    kept: int


def chosen_takes(plan: TakePlan, only: Sequence[tuple[str, str]] = ()) -> list[PlannedTake]:
    """Return the plan's takes that fit all conditions.

    Parameters
    ----------
    plan : TakePlan
        The plan.
    only : sequence of (str, str)
        Column and value, as the plan writes it; several values of one column are
        alternatives.

    Raises
    ------
    InputError
        If there is no such column, or no take fits.
    """
    from ...models.errors import near_names

    known = list(plan.takes[0].columns)
    wanted: dict[str, set[str]] = {}
    for column, value in only:
        if column not in known:
            raise InputError(
                f"no column {column!r} in a plan{near_names(column, known)}; known: "
                f"{', '.join(known)}"
            )
        wanted.setdefault(column, set()).add(value.casefold())
    found = [
        take
        for take in plan.takes
        if all(take.columns[column].casefold() in values for column, values in wanted.items())
    ]
    if not found:
        has = "; ".join(
            f"{column}: {', '.join(dict.fromkeys(take.columns[column] for take in plan.takes))}"
            for column in wanted
        )
        raise InputError(f"no take of the plan fits; the plan has {has}")
    return found


class Batch:
    """A plan, or some of its takes, in a folder.

    Parameters
    ----------
    plan : TakePlan
        The plan.
    folder : str or Path
        Where takes and index go; made when the batch runs.
    takes : sequence of PlannedTake, optional
        Those to care for; all of the plan when left out.

    Raises
    ------
    InputError
        If a riff cannot be read, or the folder's index cannot be used.
    """

    def __init__(
        self, plan: TakePlan, folder: str | Path, takes: Sequence[PlannedTake] | None = None
    ) -> None:
        self.folder = Path(folder)
        self._riffs = {take.riff: check_audio(take.riff) for take in plan.takes}
        chosen = plan.takes if takes is None else takes
        self._tasks = [self._task(take, plan) for take in chosen]
        self._all_keys = [self._task(take, plan).key for take in plan.takes]
        self._index = BatchIndex(self.folder)

    def _task(self, take: PlannedTake, plan: TakePlan) -> TakeTask:
        return TakeTask(take, self._riffs[take.riff].sha256, self.folder, plan.encoding)

    def missing(self) -> list[TakeTask]:
        """Return the takes that are not there, or whose inputs have changed.

        Raises
        ------
        InputError
            If a file stands in a take's way that this batch did not leave so.
        """
        found, faults = [], []
        for task in self._tasks:
            row = self._index.row(task.key)
            path = self.folder / (row["file"] if row else task.path.name)
            in_the_way = task.path.exists() or sidecar_path(task.path).exists()
            if row is not None and path.exists() and file_hash(path) == row["file_sha256"]:
                continue
            if not path.exists() and not in_the_way:
                found.append(task)
            elif (row is None or not path.exists()) and left_behind(task):
                found.append(replace(task, overwrite=True))
            else:
                faults.append(
                    f"{path}: is not as a batch left it and is kept; move it away, or choose "
                    "another folder"
                )
        if faults:
            raise InputError(faults)
        return found

    def outlook(self, missing: Sequence[TakeTask]) -> Outlook:
        """Return what there is to do."""
        facts = [self._riffs[task.planned.riff] for task in missing]
        return Outlook(
            takes=len(self._tasks),
            missing=len(missing),
            seconds=sum(one.duration_s for one in facts),
            size_bytes=sum(
                _take_bytes(one, task) for one, task in zip(facts, missing, strict=True)
            ),
        )

    def run(
        self,
        *,
        executor: Executor | None = None,
        workers: int | None = None,
        progress: Progress | None = None,
    ) -> BatchResult:
        """Render what is missing.

        Parameters
        ----------
        executor : Executor, optional
            Where takes are rendered: any executor of ``concurrent.futures``, that of a
            cluster too if it sees the same folders. Threads of this process when left
            out. The takes do not depend on it.
        workers : int, optional
            Takes at a time; one per processor when left out.
        progress : callable, optional
            Told what is done.

        Raises
        ------
        InputError
            If another batch runs in the folder, a take cannot be written or the like;
            takes finished until then stay, and are in the index.
        """
        count = workers or os.cpu_count() or 1
        _make_folder(self.folder)
        with _only_batch_in(self.folder):
            clear_leftovers(self.folder)
            self._index = BatchIndex(self.folder)  # another batch may have added to it
            missing = self.missing()
            outlook = self.outlook(missing)
            check_room(self.folder, outlook.size_bytes)
            if executor is not None:
                self._render(missing, executor, count, progress)
            else:
                with ThreadPoolExecutor(count) as threads:
                    self._render(missing, threads, count, progress)
        rows = [row for task in self._tasks if (row := self._index.row(task.key)) is not None]
        return BatchResult(tuple(rows), len(missing), len(self._tasks) - len(missing))

    def _render(
        self,
        missing: Sequence[TakeTask],
        executor: Executor,
        count: int,
        progress: Progress | None,
    ) -> None:
        """Keep the workers busy; whatever ends this, finished takes are in the index."""
        start = written = time.monotonic()
        queue = iter(missing)
        # One more than there are workers, so that none waits; no more, so that an
        # interruption loses little.
        running: set[Future[Row]] = set()
        done = 0
        try:
            while True:
                for task in queue:
                    running.add(executor.submit(render_task, task))
                    if len(running) > count:
                        break
                if not running:
                    break
                finished = wait(running, return_when=FIRST_COMPLETED).done
                # Whole ones first: one that failed must not take its fellows along.
                for future in sorted(finished, key=lambda one: one.exception() is not None):
                    row = future.result()
                    running.discard(future)
                    self._index.add(row)
                    done += 1
                now = time.monotonic()
                if progress:
                    progress(done, len(missing), done / (now - start))
                if now - written > INDEX_EVERY_S:
                    self._index.write(self._all_keys)
                    written = now
        finally:
            for future in running:
                future.cancel()
            for future in running:
                if not future.cancelled():
                    # Under way already: let it end, and keep what it made.
                    with suppress(Exception):
                        self._index.add(future.result())
            self._index.write(self._all_keys)


def _take_bytes(facts: AudioFacts, task: TakeTask) -> int:
    return audio_bytes(facts.frames, facts.channels, task.encoding)


def _make_folder(folder: Path) -> None:
    if folder.is_dir():
        check_target(folder / LOCK)
    try:
        folder.mkdir(exist_ok=True)
    except FileNotFoundError:
        raise InputError(
            f"{folder}: the folder {folder.parent} does not exist; make it or give another"
        ) from None
    except OSError as fault:
        raise explain_write_fault(fault, folder) from None


@contextmanager
def _only_batch_in(folder: Path) -> Iterator[None]:
    """Hold the folder's lock; the system lets go of it should this process die."""
    lock = FileLock(folder / LOCK)
    try:
        lock.acquire(timeout=0)
    except Timeout:
        raise InputError(
            f"{folder}: another batch runs there; wait for it to end, or choose another folder"
        ) from None
    except OSError as fault:
        raise explain_write_fault(fault, folder / LOCK) from None
    try:
        yield
    finally:
        lock.release()
        with suppress(OSError):
            (folder / LOCK).unlink(missing_ok=True)
