"""Compilation of the sample loops, with a disk cache that cannot go stale.

numba's own cache notices an edit only in the file that holds the compiled
function, not in kernels it calls from another file. The cache folder is therefore
named by a hash over every kernel source, numba's version and Python's. Where no
folder can be written, kernels are compiled anew in each process, which costs
seconds but never fails.
"""

from __future__ import annotations

import hashlib
import os
import shutil
import sys
import tempfile
import threading
from collections.abc import Callable
from contextlib import suppress
from functools import cache
from pathlib import Path
from typing import Any, TypeVar, cast

import numba

F = TypeVar("F", bound=Callable[..., Any])
# numba builds its settings as it is imported; they have no types.
numba_config: Any = numba.config

# Contraction to fused multiply-add is allowed: it speeds the loops and is the same
# on every run of one machine. Reassociation is not: NaN checks, the rounding
# trick in the exponential and bit-identical lanes depend on the written order.
FASTMATH = {"contract"}
KEPT_CACHES = 4
_SETTING = threading.Lock()


def kernel_sources() -> list[Path]:
    """Return the files whose code is compiled: this one and the package's ``*kernels.py``."""
    models = Path(__file__).resolve().parent
    folders = {models}
    render = sys.modules.get("sweepset.render")
    if render is not None and render.__file__ is not None:
        folders.add(Path(render.__file__).resolve().parent)
    else:
        import importlib.util

        spec = importlib.util.find_spec("sweepset.render")
        if spec is not None and spec.origin is not None:
            folders.add(Path(spec.origin).resolve().parent)
    found = [path for folder in folders for path in folder.glob("*kernels.py")]
    return [Path(__file__).resolve(), *sorted(found)]


def source_hash() -> str:
    """Return the hash that names the cache folder."""
    digest = hashlib.sha256(f"{numba.__version__} {sys.version}".encode())
    for path in kernel_sources():
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()[:16]


@cache
def cache_folder() -> Path | None:
    """Return the folder for compiled kernels, or None where none can be written.

    ``SWEEPSET_CACHE_DIR`` overrides the user's cache folder.
    """
    import platformdirs

    try:
        above = os.environ.get("SWEEPSET_CACHE_DIR") or platformdirs.user_cache_dir(
            "sweepset", False
        )
        base = Path(above) / "kernels"
        folder = base / source_hash()
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            pass
        os.utime(folder)
        kept = sorted(
            (entry for entry in base.iterdir() if entry.is_dir() and not entry.is_symlink()),
            key=lambda entry: entry.stat().st_mtime,
        )
        for old in kept[:-KEPT_CACHES]:
            shutil.rmtree(old, ignore_errors=True)
    except (OSError, RuntimeError):
        return None
    return folder


def kernel(**options: Any) -> Callable[[F], F]:
    """Return a decorator compiling a loop without the interpreter lock, cached on disk.

    Parameters
    ----------
    **options
        Passed on to ``numba.njit``, over the defaults used throughout: IEEE
        division (no zero check, which would stop vectorising) and contraction.
    """
    settings = {"nogil": True, "error_model": "numpy", "fastmath": FASTMATH, **options}

    def compile_loop(function: F) -> F:
        folder = cache_folder()
        if folder is None:
            return cast(F, numba.njit(**settings)(function))
        # One setting for the whole process: two threads changing it at once would let a
        # cache stray into the current folder.
        with _SETTING:
            before = numba_config.CACHE_DIR
            numba_config.CACHE_DIR = str(folder)
            try:
                dispatcher = numba.njit(cache=True, **settings)(function)
            except (RuntimeError, OSError):
                return cast(F, numba.njit(**settings)(function))
            finally:
                numba_config.CACHE_DIR = before
        _forgive_full_disk(dispatcher)
        return cast(F, dispatcher)

    return compile_loop


def _forgive_full_disk(dispatcher: Any) -> None:
    """Let a kernel run uncached when its compiled form cannot be saved or read back."""
    store = dispatcher._cache
    save, load = store.save_overload, store.load_overload

    def try_save(signature: Any, data: Any) -> None:
        try:
            save(signature, data)
        except Exception:  # a full disk, or an index cut short: start it anew next time
            with suppress(OSError, AttributeError):
                Path(store._cache_file._index_path).unlink()

    def try_load(signature: Any, target: Any) -> Any:
        try:
            return load(signature, target)
        except Exception:  # a truncated or foreign file must only cost a compilation
            return None

    store.save_overload, store.load_overload = try_save, try_load
