"""Batches: what is missing is rendered, what is there is kept, nothing is lost."""

import csv
import io
import json
import os
import signal
import subprocess
import sys
import time
from concurrent.futures import ProcessPoolExecutor

import pytest
from sweepset.models.errors import InputError
from sweepset.render.batch.index import INDEX_JSON, JOURNAL, BatchIndex
from sweepset.render.batch.run import Batch, chosen_takes
from sweepset.render.batch.takeplan import load_plan
from sweepset.render.commands import main


def run(bench, **asked):
    batch = Batch(load_plan(bench / "plan.toml"), bench / "takes")
    return batch.run(**asked)


def wavs(bench):
    return {path.name: path.read_bytes() for path in (bench / "takes").glob("*.wav")}


def test_index_says_what_was_rendered_with_what_and_where(bench):
    made = run(bench)
    assert (made.rendered, made.kept) == (4, 0)
    rows = list(csv.DictReader((bench / "takes" / "index.csv").read_text().splitlines()))
    record = json.loads((bench / "takes" / INDEX_JSON).read_text())
    assert [row["file"] for row in rows] == [row["file"] for row in record["rows"]]
    for row in record["rows"]:
        assert (bench / "takes" / row["file"]).is_file()
        assert row["travel_octaves"] > 0.0
        assert row["lufs"] < 0.0
        assert row["seconds"] == 0.5
    assert record["rows"][2]["trimmer"] == 0.45
    assert not (bench / "takes" / JOURNAL).exists()


def test_a_second_start_renders_nothing_and_changes_nothing(bench):
    run(bench)
    before = {path: path.stat().st_mtime_ns for path in (bench / "takes").glob("*.wav")}
    made = run(bench)
    assert (made.rendered, made.kept) == (0, 4)
    assert {path: path.stat().st_mtime_ns for path in before} == before


def test_only_what_changed_is_rendered_again(bench, write_riff):
    run(bench)
    plan = bench / "plan.toml"
    text = plan.read_text()
    plan.write_text(text.replace('"45%"', '"45%", "50%"'))
    assert run(bench).rendered == 2
    plan.write_text(text.replace("-2.11V", "-2.15V"))
    assert run(bench).rendered == 4
    plan.write_text(text)  # back again: all there still
    assert run(bench).rendered == 0
    write_riff(bench / "riff.wav", seed=2)
    assert run(bench).rendered == 4
    write_riff(bench / "riff.wav", seed=1)
    assert run(bench).rendered == 0
    # Names and dates are no content.
    (bench / "riff.wav").rename(bench / "song.wav")
    plan.write_text(text.replace("riff.wav", "song.wav").replace("close", "near"))
    assert run(bench).rendered == 0


def test_a_deleted_take_is_rendered_again_alike(bench):
    run(bench)
    before = wavs(bench)
    (bench / "takes" / min(before)).unlink()
    assert run(bench).rendered == 1
    assert wavs(bench) == before


def test_bytes_do_not_depend_on_workers_or_executor(bench, tmp_path):
    made = {}
    for name, asked in (("one", {"workers": 1}), ("two", {"workers": 2}), ("procs", None)):
        batch = Batch(load_plan(bench / "plan.toml"), bench / name)
        if asked is not None:
            batch.run(**asked)
        else:
            with ProcessPoolExecutor(2) as pool:
                batch.run(executor=pool, workers=2)
        made[name] = {path.name: path.read_bytes() for path in (bench / name).glob("*.wav")}
    assert len(made["one"]) == 4
    assert made["one"] == made["two"] == made["procs"]


@pytest.mark.slow
@pytest.mark.filterwarnings("ignore")  # the engine's own
def test_a_cluster_engines_executor_renders_the_same(bench):
    distributed = pytest.importorskip("distributed", reason="pip install 'sweepset[cluster]'")
    run(bench)
    with (
        distributed.LocalCluster(
            n_workers=1, threads_per_worker=2, processes=False, dashboard_address=None
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        batch = Batch(load_plan(bench / "plan.toml"), bench / "cluster")
        assert batch.run(executor=client.get_executor()).rendered == 4
    elsewhere = {path.name: path.read_bytes() for path in (bench / "cluster").glob("*.wav")}
    assert elsewhere == wavs(bench)


def test_a_file_that_is_not_as_it_was_left_is_kept(bench):
    run(bench)
    name = min(wavs(bench))
    (bench / "takes" / name).write_bytes(b"mine now")
    with pytest.raises(InputError, match="not as a batch left it"):
        run(bench)
    assert (bench / "takes" / name).read_bytes() == b"mine now"


@pytest.mark.parametrize(
    ("content", "said"),
    [
        ('{"format": "somebody else\'s"}', "not an index of a sweepset batch"),
        ('{"format": "sweepset batch ind', "cannot be read as an index"),
        ("[1, 2]", "not an index"),
        ('{"format": "sweepset batch index 1", "rows": [{"key": "k"}]}', "row 1 is damaged"),
        (
            '{"format": "sweepset batch index 1", "rows": '
            '[{"key": "k", "file": "../../x.wav", "file_sha256": "0"}]}',
            "outside this folder",
        ),
    ],
)
def test_a_foreign_or_damaged_index_is_refused_and_kept(bench, content, said):
    (bench / "takes").mkdir()
    path = bench / "takes" / INDEX_JSON
    path.write_text(content)
    with pytest.raises(InputError, match=said):
        run(bench)
    assert path.read_text() == content


def test_a_torn_journal_loses_its_last_line_only(tmp_path):
    index = BatchIndex(tmp_path)
    for n in range(3):
        index.add({"key": f"k{n}", "file": f"{n}.wav", "file_sha256": "0", "lufs": float("-inf")})
    torn = (tmp_path / JOURNAL).read_bytes()[:-20]
    (tmp_path / JOURNAL).write_bytes(torn)
    again = BatchIndex(tmp_path)
    assert [row["key"] for row in again.rows()] == ["k0", "k1"]
    again.write(["k1"])
    record = json.loads((tmp_path / INDEX_JSON).read_text())
    assert [row["key"] for row in record["rows"]] == ["k1"]
    assert [row["key"] for row in record["earlier"]] == ["k0"]


def test_two_batches_in_one_folder_do_not_run_together(bench):
    from filelock import FileLock

    (bench / "takes").mkdir()
    with (
        FileLock(bench / "takes" / ".batch.lock"),
        pytest.raises(InputError, match="another batch runs there"),
    ):
        run(bench)
    assert run(bench).rendered == 4


def test_a_full_disk_half_way_keeps_what_is_done(bench, monkeypatch):
    import errno

    from sweepset.render.batch import run as module

    real, count = module.render_task, 0

    def render_two(task):
        nonlocal count
        count += 1
        if count > 2:
            from sweepset.models.atomic import explain_write_fault

            raise explain_write_fault(OSError(errno.ENOSPC, "full"), task.path)
        return real(task)

    monkeypatch.setattr(module, "render_task", render_two)
    with pytest.raises(InputError, match="disk is full"):
        run(bench, workers=1)
    assert len(json.loads((bench / "takes" / INDEX_JSON).read_text())["rows"]) == 2
    monkeypatch.undo()
    assert run(bench).rendered == 2


def test_filters_choose_by_what_the_plan_writes(bench):
    plan = load_plan(bench / "plan.toml")
    assert len(chosen_takes(plan, [("rate", "noon")])) == 2
    assert len(chosen_takes(plan, [("rate", "noon"), ("rate", "9:00"), ("trim", "AUTO")])) == 2
    with pytest.raises(InputError, match="did you mean rate"):
        chosen_takes(plan, [("rat", "noon")])
    with pytest.raises(InputError, match="the plan has rate: 9:00, noon"):
        chosen_takes(plan, [("rate", "3:00")])


def test_hostile_set_names_stay_inside_the_folder(bench):
    plan = bench / "plan.toml"
    plan.write_text(plan.read_text().replace("close =", '"../../<b>=1+1" ='))
    run(bench)
    assert not list(bench.parent.glob("*.wav"))
    assert len(wavs(bench)) == 4
    text = (bench / "takes" / "index.csv").read_text()
    assert "\n=" not in text


LONG = """
import sys
from sweepset.render.commands import main
sys.exit(main(sys.argv[1:]))
"""


def started(bench):
    plan = bench / "plan.toml"
    plan.write_text(plan.read_text().replace('trim = ["auto", "45%"]',
                    'trim = { from = "40%", to = "60%", steps = 12 }'))  # fmt: skip
    asked = [sys.executable, "-c", LONG, "batch", str(plan), "-o", str(bench / "takes"), "--yes"]
    process = subprocess.Popen(asked, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    deadline = time.monotonic() + 120
    while time.monotonic() < deadline and len(list((bench / "takes").glob("*.wav"))) < 3:
        time.sleep(0.02)
    return process


@pytest.mark.slow
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGKILL])
def test_an_interruption_loses_no_finished_take(bench, number):
    process = started(bench)
    there = set(wavs(bench))
    os.kill(process.pid, number)
    process.communicate(timeout=60)
    assert process.returncode == (130 if number == signal.SIGINT else -signal.SIGKILL)
    known = {row["file"] for row in BatchIndex(bench / "takes").rows()}
    # Of those on the disk at that moment only ones in flight may be without a row; they
    # are known by what stands in them, and rendered again.
    assert len(there - known) <= (os.cpu_count() or 1) + 1
    assert main(["batch", str(bench / "plan.toml"), "-o", str(bench / "takes"), "--yes"]) == 0
    assert len(wavs(bench)) == 24
    assert not list((bench / "takes").glob(".*part*"))


def test_count_asks_nothing_and_renders_nothing(bench, capsys):
    asked = ["batch", str(bench / "plan.toml"), "-o", str(bench / "takes")]
    assert main([*asked, "--count"]) == 0
    assert "4 takes, 4 of them to render: 0.0 min of audio" in capsys.readouterr().out
    assert not (bench / "takes").exists()


def test_page_of_chosen_rows(bench, capsys):
    asked = ["batch", str(bench / "plan.toml"), "-o", str(bench / "takes")]
    assert main([*asked, "--only", "trim=45%", "--page", "--json"]) == 0
    record = json.loads(capsys.readouterr().out)
    assert record["rendered"] == 2
    page = (bench / "takes" / "listen.html").read_text()
    assert '"name":"9:00"' in page
    assert '"name":"noon"' in page


def test_many_takes_into_a_pipe_want_yes(bench, capsys, monkeypatch):
    plan = bench / "plan.toml"
    plan.write_text(plan.read_text().replace('["auto", "45%"]',
                    '{ from = "40%", to = "60%", steps = 60 }'))  # fmt: skip
    monkeypatch.setattr("sys.stdin", io.StringIO())
    assert main(["batch", str(plan), "-o", str(bench / "takes")]) == 2
    assert "give --yes" in capsys.readouterr().err
