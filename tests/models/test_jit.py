"""The kernel cache: never stale, never a reason to fail."""

import os
import subprocess
import sys
from pathlib import Path

import pytest
from sweepset.models import jit

PROBE = """
import sys
from sweepset.models import jit
{change}
@jit.kernel()
def double(x):
    return 2 * x
assert double(21) == 42
print(jit.cache_folder())
"""


def probe(folder: Path, change: str = "", **environment: str) -> str:
    script = folder / "probe_kernels.py"
    script.write_text(PROBE.format(change=change))
    result = subprocess.run(
        [sys.executable, str(script)],
        capture_output=True,
        text=True,
        env={**os.environ, **environment},
        check=False,
    )
    assert result.returncode == 0, result.stderr
    return result.stdout.strip()


def test_hash_covers_every_kernel_file():
    names = {path.name for path in jit.kernel_sources()}
    assert {"jit.py", "chain_kernels.py", "law_kernels.py", "closing_kernels.py"} <= names


def test_an_edit_in_any_kernel_source_moves_the_cache(tmp_path, monkeypatch):
    first, second = tmp_path / "a_kernels.py", tmp_path / "b_kernels.py"
    first.write_text("one = 1\n")
    second.write_text("two = 2\n")
    monkeypatch.setattr(jit, "kernel_sources", lambda: [first, second])
    before = jit.source_hash()
    assert jit.source_hash() == before
    second.write_text("two = 3\n")
    assert jit.source_hash() != before


def test_kernels_are_stored_in_the_named_folder(tmp_path):
    cache = tmp_path / "cache"
    folder = Path(probe(tmp_path, SWEEPSET_CACHE_DIR=str(cache)))
    assert folder.parent == cache / "kernels"
    assert list(folder.rglob("*.nbi"))


def test_nothing_writable_is_no_failure(tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("not a folder")
    assert probe(tmp_path, SWEEPSET_CACHE_DIR=str(blocked)) == "None"


def test_no_home_is_no_failure(tmp_path):
    probe(tmp_path, change="import os; os.environ.pop('HOME', None)", SWEEPSET_CACHE_DIR="")


@pytest.mark.parametrize("damage", ["truncate", "garbage"])
def test_a_damaged_cache_costs_only_a_compilation(tmp_path, damage):
    cache = tmp_path / "cache"
    folder = Path(probe(tmp_path, SWEEPSET_CACHE_DIR=str(cache)))
    for path in [*folder.rglob("*.nbi"), *folder.rglob("*.nbc")]:
        whole = path.read_bytes()
        path.write_bytes(whole[: len(whole) // 2] if damage == "truncate" else b"\x80garbage")
    assert probe(tmp_path, SWEEPSET_CACHE_DIR=str(cache)) == str(folder)


def test_a_full_disk_costs_only_the_cache(tmp_path):
    """Writing the compiled form fails with ENOSPC, as on a full disk."""
    change = (
        "import errno\n"
        "import numba.core.caching as caching\n"
        "def full(self, sig, data): raise OSError(errno.ENOSPC, 'No space left on device')\n"
        "caching.FunctionCache.save_overload = full\n"
    )
    probe(tmp_path, change=change, SWEEPSET_CACHE_DIR=str(tmp_path / "cache"))


def test_only_the_newest_caches_are_kept(tmp_path):
    base = tmp_path / "cache" / "kernels"
    for age in range(8):
        old = base / f"old{age}"
        old.mkdir(parents=True)
        os.utime(old, (1000 + age, 1000 + age))
    folder = probe(tmp_path, SWEEPSET_CACHE_DIR=str(tmp_path / "cache"))
    kept = {path.name for path in base.iterdir()}
    assert len(kept) == jit.KEPT_CACHES
    assert Path(folder).name in kept


def test_threads_building_loops_at_once_all_cache_in_the_one_folder(monkeypatch):
    import time
    from concurrent.futures import ThreadPoolExecutor

    import numba
    from sweepset.models.jit import cache_folder, kernel, numba_config

    real, places = numba.njit, []

    def slow(**options):
        # Long enough for another thread to change the setting, were it let.
        time.sleep(0.002)
        places.append(numba_config.CACHE_DIR)
        return real(**options)

    monkeypatch.setattr(numba, "njit", slow)
    with ThreadPoolExecutor(8) as pool:
        list(pool.map(lambda number: kernel()(lambda x: x + number), range(40)))
    assert set(places) == {str(cache_folder())}
    assert numba_config.CACHE_DIR == ""
