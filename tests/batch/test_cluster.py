"""On a cluster: real scheduler and workers on this machine, one of which is killed; and what is said without them."""

from __future__ import annotations

import json
import subprocess
import sys
import time

import pytest

from napari_boutonrelease import InputError
from napari_boutonrelease.batch import run_batch

ANSWER_S = 60


def test_a_missing_package_is_one_sentence(own_movies, tools, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    manifest = tools.write_manifest(own_movies, tools.row("day1/axon1"))
    with pytest.raises(InputError, match=r"needs dask.distributed: install it with pip install"):
        run_batch(manifest, scheduler="tcp://127.0.0.1:8786")
    assert not (own_movies / "study.study").exists()


class Cluster:
    """A scheduler and two workers, each a process."""

    def __init__(self, folder):
        self.folder = folder
        self.file = folder / "scheduler.json"
        self.processes = []
        self.start("dask_scheduler", "--port", "0", "--scheduler-file", self.file, "--no-dashboard", "--no-show")
        end = time.monotonic() + ANSWER_S
        while not self.file.exists():
            assert time.monotonic() < end, "the scheduler did not start"
            time.sleep(0.1)
        self.address = json.loads(self.file.read_text())["address"]
        self.workers = [self.start("dask_worker", self.address, "--nthreads", "1", "--no-nanny") for _ in range(2)]

    def start(self, program, *words):
        process = subprocess.Popen(
            [sys.executable, "-m", f"distributed.cli.{program}", *map(str, words), "--host", "127.0.0.1"],
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            cwd=self.folder,
        )
        self.processes.append(process)
        return process

    def stop(self):
        for process in reversed(self.processes):
            process.kill()
            process.wait()


@pytest.fixture
def cluster(tmp_path):
    pytest.importorskip("distributed")
    (tmp_path / "cluster").mkdir()
    cluster = Cluster(tmp_path / "cluster")
    yield cluster
    cluster.stop()


def test_a_worker_that_is_killed_costs_nothing(own_movies, tools, cluster):
    rows = [tools.row(name) for name in ("day1/axon1", "day1/axon2", "day2/axon1")]
    tools.write_manifest(own_movies, *rows, "none.tif,none.tif,,")
    (own_movies / "none.tif").write_bytes(b"no movie")
    manifest, out = own_movies / "study.csv", own_movies / "out"
    words = ["batch", manifest, "--scheduler", cluster.address, "--out", out, *tools.words]
    code = "import sys\nfrom napari_boutonrelease.cli.main import main\nsys.exit(main(sys.argv[1:]))"
    batch = subprocess.Popen(
        [sys.executable, "-c", code, *map(str, words)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )
    end = time.monotonic() + ANSWER_S
    while not list(out.glob("day*/*.release")):
        assert batch.poll() is None, batch.communicate()
        assert time.monotonic() < end, "nothing was done"
        time.sleep(0.05)
    cluster.workers[0].kill()
    said, err = batch.communicate(timeout=ANSWER_S)
    assert batch.returncode == 1, err
    assert "3 of 4 recordings done" in said
    assert "failed: none: none.tif" in said
    assert "on the cluster" in said
    entries = [json.loads(line) for line in (out / "journal.jsonl").read_text().splitlines()]
    assert {entry["recording"]: entry["status"] for entry in entries} == {
        "day1/axon1": "done",
        "day1/axon2": "done",
        "day2/axon1": "done",
        "none": "failed",
    }
    assert not [path for path in own_movies.rglob(".*.release.writing-*") if path.parent.name == "day2"]


def test_a_scheduler_that_is_lost_fails_what_is_not_done_and_says_so(own_movies, tools, cluster):
    manifest = tools.write_manifest(own_movies, *map(tools.row, ("day1/axon1", "day1/axon2", "day2/axon1")))
    out = own_movies / "out"

    def lose_it(done, total):
        if done:
            cluster.processes[0].kill()

    outcome = run_batch(
        manifest, out=out, scheduler=cluster.address, settings=tools.settings(), report=False, progress=lose_it
    )
    assert outcome.names("done")
    assert outcome.failures
    assert all(sentence.startswith("The cluster lost it") for sentence in outcome.failures.values())
    assert set(outcome.names("done")) | set(outcome.failures) == {"day1/axon1", "day1/axon2", "day2/axon1"}


def test_a_scheduler_that_does_not_answer_is_one_sentence(own_movies, tools, monkeypatch):
    pytest.importorskip("distributed")
    monkeypatch.setattr("napari_boutonrelease.batch.cluster._CONNECT_S", 1)
    manifest = tools.write_manifest(own_movies, tools.row("day1/axon1"))
    with pytest.raises(InputError, match=r"No scheduler answers at tcp://127\.0\.0\.1:9"):
        run_batch(manifest, scheduler="tcp://127.0.0.1:9")
    assert not (own_movies / "study.study").exists()
