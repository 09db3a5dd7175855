"""Atomic writing, held against what the file system shows afterwards."""

from __future__ import annotations

import errno
import os
import stat
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from sweepset.models.atomic import atomic_path, clear_leftovers, write_text_atomically
from sweepset.models.errors import InputError


def names(folder: Path) -> list[str]:
    return sorted(entry.name for entry in folder.iterdir())


def test_new_file_appears_whole_and_alone(tmp_path: Path) -> None:
    write_text_atomically(tmp_path / "a.csv", "part;x\r\nJ01;1,2\r\n")
    assert (tmp_path / "a.csv").read_bytes() == b"part;x\r\nJ01;1,2\r\n"
    assert names(tmp_path) == ["a.csv"]


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture], max_examples=30)
@given(st.text(alphabet=st.characters(exclude_categories=["Cs"])))
def test_text_is_kept_to_the_byte(tmp_path: Path, text: str) -> None:
    write_text_atomically(tmp_path / "t.txt", text)
    assert (tmp_path / "t.txt").read_bytes() == text.encode("utf-8")


@pytest.mark.parametrize("error", [RuntimeError("stop"), KeyboardInterrupt(), SystemExit(1)])
def test_any_exception_leaves_the_old_file_and_no_other(
    tmp_path: Path, error: BaseException
) -> None:
    target = tmp_path / "a.txt"
    target.write_text("old")

    def interrupted() -> None:
        with atomic_path(target) as temporary:
            temporary.write_text("half")
            raise error

    with pytest.raises(type(error)):
        interrupted()
    assert target.read_text() == "old"
    assert names(tmp_path) == ["a.txt"]


def test_killed_writer_leaves_the_old_file(tmp_path: Path) -> None:
    # kill -9 cannot be cleaned up after; the target itself must be untouched.
    target = tmp_path / "a.txt"
    target.write_text("old")
    script = (
        "import os, sys\n"
        "from sweepset.models.atomic import atomic_path\n"
        "with atomic_path(sys.argv[1]) as temporary:\n"
        "    temporary.write_text('half')\n"
        "    os.kill(os.getpid(), 9)\n"
    )
    done = subprocess.run([sys.executable, "-c", script, str(target)], check=False)
    assert done.returncode == -9
    assert target.read_text() == "old"


def test_suffix_of_the_temporary_file_is_the_target_s(tmp_path: Path) -> None:
    with atomic_path(tmp_path / ("long" * 60 + ".wav")) as temporary:
        assert temporary.suffix == ".wav"
        assert temporary.parent == tmp_path


def test_permissions_are_kept_or_usual(tmp_path: Path) -> None:
    plain = tmp_path / "plain"
    plain.write_text("x")
    write_text_atomically(tmp_path / "new", "x")
    assert stat.S_IMODE((tmp_path / "new").stat().st_mode) == stat.S_IMODE(plain.stat().st_mode)
    plain.chmod(0o600)
    write_text_atomically(plain, "y")
    assert stat.S_IMODE(plain.stat().st_mode) == 0o600


def test_missing_folder(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"gone.*does not exist; make it first"):
        write_text_atomically(tmp_path / "gone" / "a", "x")


def test_folder_is_a_file(tmp_path: Path) -> None:
    (tmp_path / "f").write_text("x")
    with pytest.raises(InputError, match="is not a folder"):
        write_text_atomically(tmp_path / "f" / "a", "x")


def test_target_is_a_folder(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is a folder; give the name of a file in it"):
        write_text_atomically(tmp_path, "x")


def test_link_is_refused_and_left(tmp_path: Path) -> None:
    (tmp_path / "true").write_text("old")
    (tmp_path / "link").symlink_to("true")
    with pytest.raises(InputError, match=r"link: is a link to true; give that file's own name"):
        write_text_atomically(tmp_path / "link", "new")
    assert (tmp_path / "link").is_symlink()
    assert (tmp_path / "true").read_text() == "old"


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs the device that is always full")
def test_full_disk(tmp_path: Path) -> None:
    # /dev/full answers every write as a full disk does.
    def fill() -> None:
        with atomic_path(tmp_path / "a") as temporary:
            temporary.unlink()
            temporary.symlink_to("/dev/full")
            temporary.write_text("x" * 100_000)

    with pytest.raises(InputError, match=r"a: the disk is full; free some space"):
        fill()
    assert names(tmp_path) == []


def test_folder_not_writable(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    # As the superuser no folder refuses; the answer of the system is put in its place.
    def refuse(**_: object) -> None:
        raise PermissionError(errno.EACCES, "Permission denied", str(tmp_path))

    monkeypatch.setattr("tempfile.mkstemp", refuse)
    with pytest.raises(InputError, match="not allowed to write here; choose another folder"):
        write_text_atomically(tmp_path / "a", "x")


def test_protected_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = tmp_path / "a"
    target.write_text("old")
    target.chmod(0o400)
    if os.geteuid() == 0:
        # The superuser may write anything; the answer of the system to others in its place.
        asked = os.access
        monkeypatch.setattr(
            "os.access",
            lambda path, mode, **more: (
                not (mode & os.W_OK and Path(path) == target) and asked(path, mode, **more)
            ),
        )
    with pytest.raises(InputError, match="protected against writing"):
        write_text_atomically(target, "x")
    assert target.read_text() == "old"


def test_name_too_long(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"name is too long.*shorter"):
        write_text_atomically(tmp_path / ("n" * 400), "x")


def test_fault_of_another_file_passes_unchanged(tmp_path: Path) -> None:
    def read_other() -> None:
        with atomic_path(tmp_path / "a"):
            (tmp_path / "other").read_text()

    with pytest.raises(FileNotFoundError):
        read_other()
    assert names(tmp_path) == []


def test_leftovers_of_a_killed_process_are_cleared_and_nothing_else(tmp_path):
    with atomic_path(tmp_path / "take.wav") as temporary:
        name = temporary.name
    (tmp_path / "take.wav").unlink()
    left = tmp_path / name
    left.write_bytes(b"half")
    others = [tmp_path / n for n in (".hidden", "take.wav", ".a.part.txt", "x.part.wav")]
    for other in others:
        other.write_bytes(b"mine")
    assert clear_leftovers(tmp_path) == [left]
    assert all(other.read_bytes() == b"mine" for other in others)
