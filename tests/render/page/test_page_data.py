"""What a page holds: the stretch, the refusals, text that stays text."""

import json
import re

import numpy as np
import pytest
import soundfile
from sweepset.models.errors import InputError
from sweepset.render.page.data import PagePair, PageTake, page_data
from sweepset.render.page.write import embedded_json

RATE = 48_000


def takes_of(folder, *lengths, rate=RATE, channels=1):
    made = []
    for n, frames in enumerate(lengths):
        path = folder / f"{n}.wav"
        soundfile.write(path, np.zeros((frames, channels)), rate, subtype="PCM_24")
        made.append(PageTake(f"take {n}", path, (), None))
    return made


def test_takes_that_fit_are_whole(tmp_path):
    data = page_data("riff", takes_of(tmp_path, 5000, 5000), ("careful",))
    assert (data.start_frame, data.stop_frame, data.notice) == (0, 5000, "")
    assert "2 takes, 0.1 s, 48000 Hz, mono" in data.about


def test_takes_that_do_not_fit_leave_a_stretch_about_the_moment_that_counts(tmp_path):
    takes = takes_of(tmp_path, 10 * RATE, 10 * RATE)
    pair = PagePair(0, 1, "different", (7.0,))
    limit = 3 * 2 * 4 * RATE
    data = page_data("riff", takes, (), pairs=[pair], limit_bytes=limit)
    assert (data.start_frame / RATE, data.stop_frame / RATE) == (5.0, 9.0)
    assert "holds 5.0 s to 9.0 s of the riff's 10.0 s" in data.notice
    # two takes of 10 s at 3 bytes a frame
    assert "all of it would have about 3 MB" in data.notice
    first = page_data("riff", takes, (), limit_bytes=limit)
    assert (first.start_frame, first.stop_frame) == (0, 4 * RATE)


def test_an_asked_stretch_counts_and_a_large_one_is_told(tmp_path):
    takes = takes_of(tmp_path, 10 * RATE)
    data = page_data("riff", takes, (), excerpt_s=(2.0, 9.0), limit_bytes=3 * RATE)
    assert (data.start_frame, data.stop_frame) == (2 * RATE, 9 * RATE)
    assert "large page" in data.notice
    for asked in ((11.0, 12.0), (2.0, 2.01), (-1.0, 3.0)):
        with pytest.raises(InputError, match=r"within the riff's 10\.00 s"):
            page_data("riff", takes, (), excerpt_s=asked)


def test_unlike_takes_are_refused_by_name(tmp_path):
    takes = takes_of(tmp_path, 5000, 5001)
    with pytest.raises(InputError, match=r"1\.wav: 5001 frames.*0\.wav has 5000"):
        page_data("riff", takes, ())
    (tmp_path / "b").mkdir()
    other = takes_of(tmp_path / "b", 5000, rate=44_100)
    with pytest.raises(InputError, match="44100 Hz"):
        page_data("riff", [takes[0], *other], ())
    (tmp_path / "c").mkdir()
    with pytest.raises(InputError, match="9 channels"):
        page_data("riff", takes_of(tmp_path / "c", 100, channels=9), ())
    with pytest.raises(InputError, match="at least one take"):
        page_data("riff", [], ())


def test_nothing_in_the_data_can_end_its_element():
    nasty = "</script><script>alert(1)</script><!-- & \u2028 ]]>"
    text = embedded_json({"label": nasty})
    assert not re.search(r"[<>&\u2028]", text)
    assert json.loads(text) == {"label": nasty}
    with pytest.raises(ValueError, match="not JSON compliant"):
        embedded_json(float("nan"))
