"""Grids on several workers: the same table, whoever dies; refusals in a sentence.

The clusters are real: processes of this machine, some of them killed on purpose.
"""

from __future__ import annotations

import os
import signal
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pandas as pd
import psutil
import pytest
from distributed import Client, LocalCluster

from scheduler import LostWorkersError, MissingExtraError, MisuseError, WhatIf
from scheduler.scenarios import Crew, Study, at_work, crew, fanout, study
from scheduler.scenarios.fanout import fan_out
from tests.scenarios.mortal import DEADLY, Deadly, Missing, Slow
from tests.test_what_if import TWO, tried

GRID = {"volume": [0.5, 1.0, 2.0], "urgency": [0.0, 0.1, 1.0], "volatility": [0.7, 1.5]}
NONE = "tcp://127.0.0.1:9"  # nothing listens there


@pytest.fixture(scope="module")
def cluster() -> Iterator[LocalCluster]:
    """Two workers, each restarted when it dies."""
    with LocalCluster(
        n_workers=2,
        threads_per_worker=1,
        host="127.0.0.1",
        dashboard_address="127.0.0.1:0",
        scheduler_kwargs={"dashboard": False},
        silence_logs=60,
    ) as made:
        yield made


@pytest.fixture(autouse=True)
def small_chunks(monkeypatch: pytest.MonkeyPatch) -> None:
    """A dozen chunks, so that there is something to hand out."""
    monkeypatch.setattr(study, "_CHUNK", 150)


def run(grid: dict[str, Any] = GRID, **options: Any) -> WhatIf:
    return tried(*TWO, grid, **options)


def same(one: WhatIf, other: WhatIf) -> None:
    """To the last digits, which sums of excess shares owe to where their array lies in memory."""
    assert len(one.study.chunks) > 5
    pd.testing.assert_frame_equal(one.scenarios, other.scenarios, rtol=1e-10, atol=1e-8)


# the same table


def test_workers_of_this_machine(tmp_path: Path) -> None:
    """The same table, kept in as many parts; progress ends with all rows."""
    alone = run()
    told: list[tuple[int, int]] = []
    kept = run(workers=2, out=tmp_path, progress=lambda done, total: told.append((done, total)))
    same(alone, kept)
    assert told == sorted(told)
    assert told[-1] == (38, 38)
    assert len(list((tmp_path / "parts").glob("*.parquet"))) == len(kept.study.chunks)


def test_a_cluster_by_its_address(cluster: LocalCluster) -> None:
    same(run(), run(cluster=cluster.scheduler_address))


@pytest.mark.parametrize("all_of_them", [False, True])
def test_killed_workers_cost_no_results(cluster: LocalCluster, all_of_them: bool) -> None:
    """One of two, or both at once, in the middle of a run."""
    with Client(cluster) as client:
        client.wait_for_workers(2)
        victims = list(client.run(os.getpid).values())[: 2 if all_of_them else 1]

    def kill(done: int, _total: int) -> None:
        while done and victims:
            os.kill(victims.pop(), signal.SIGKILL)

    same(run(), run(cluster=cluster.scheduler_address, progress=kill))
    assert victims == []


def test_a_stopped_run_goes_on_with_or_without_workers(tmp_path: Path) -> None:
    """Interrupted with workers, it keeps what is finished; its workers are gone."""

    def interrupt(done: int, _total: int) -> None:
        if done >= 8:
            raise KeyboardInterrupt

    before = _children()
    with pytest.raises(KeyboardInterrupt):
        run(workers=1, out=tmp_path, progress=interrupt)
    assert _children() <= before
    kept = {path: path.stat().st_mtime_ns for path in (tmp_path / "parts").glob("*.parquet")}
    assert kept
    again = run(out=tmp_path)
    assert len(kept) < len(again.study.chunks)
    assert {path: path.stat().st_mtime_ns for path in kept} == kept
    same(run(), again)


def _children() -> set[int]:
    """Worker processes of this one."""
    found = psutil.Process().children(recursive=True)
    return {child.pid for child in found if "spawn_main" in " ".join(child.cmdline())}


def collect(deadly: Study, client: Client, found: dict[int, pd.DataFrame]) -> None:
    """All that comes back, also where it ends in an error."""
    for number, rows in fan_out(deadly, range(len(deadly.chunks)), client):
        found[number] = rows  # noqa: PERF403 - an update would lose what came before the error


@pytest.mark.parametrize("kind", [Slow, pytest.param(Deadly, marks=pytest.mark.slow)])
def test_points_that_kill_are_named_and_no_others_are_lost(
    monkeypatch: pytest.MonkeyPatch, kind: type[Study]
) -> None:
    """All chunks but one come back, also those near it, even of workers that die at once."""
    monkeypatch.setattr(fanout, "_LOOK", 1.0)
    whole = run().study
    deadly = kind(whole.recipe, whole.grid, whole.solver)
    guilty = next(n for n, points in enumerate(deadly.chunks) if DEADLY in points)
    found: dict[int, pd.DataFrame] = {}
    named = r"every worker died .* points .*\b5\b.* \(\d+ points\); all others are finished"
    with at_work(Crew(workers=1)) as client, pytest.raises(LostWorkersError, match=named):
        collect(deadly, client, found)
    assert set(found) == set(range(len(deadly.chunks))) - {guilty}
    for number in (0, len(deadly.chunks) - 1):
        rows = whole.rows(deadly.chunks[number])
        pd.testing.assert_frame_equal(found[number], rows, rtol=1e-10, atol=1e-8)


def test_workers_use_one_thread_and_this_machine_alone(monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever the environment says; no port is open beyond this machine."""
    monkeypatch.setenv("OMP_NUM_THREADS", "4")
    with at_work(Crew(workers=1)) as client:
        assert list(client.nthreads().values()) == [1]
        assert client.run(os.getenv, "OMP_NUM_THREADS") == dict.fromkeys(client.nthreads(), "1")
        ours = [psutil.Process(), *psutil.Process().children(recursive=True)]
        open_at = {c.laddr.ip for p in ours for c in p.net_connections() if c.status == "LISTEN"}
        assert open_at == {"127.0.0.1"}


@pytest.mark.slow
def test_twenty_thousand_rows_with_a_worker_killed(
    cluster: LocalCluster, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The table of one process, in larger chunks."""
    monkeypatch.setattr(study, "_CHUNK", 15_000)
    grid = {"urgency": "0.01:10:100", "volume": "0.5:2:10", "volatility": "0.5:2:10"}
    with Client(cluster) as client:
        client.wait_for_workers(2)
        victims = list(client.run(os.getpid).values())[:1]

    def kill(done: int, _total: int) -> None:
        while done > 5_000 and victims:
            os.kill(victims.pop(), signal.SIGKILL)

    found = run(grid, bucket=60, cluster=cluster.scheduler_address, out=tmp_path, progress=kill)
    assert len(found.table) == 20_002
    assert victims == []
    same(run(grid, bucket=60), found)


# refusals


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"workers": 2, "cluster": NONE}, "give --workers or --cluster .*, not both"),
        ({"workers": 0}, "workers must be a whole number from 1 on, got 0"),
        ({"workers": -3}, "got -3"),
        ({"workers": 1.5}, "got 1.5"),
        ({"workers": True}, "got True"),
        ({"cluster": ""}, "there is no Dask scheduler at ''"),
        ({"cluster": "far away"}, "there is no Dask scheduler at 'far away'"),
        ({"cluster": "carrier://pigeon"}, "there is no Dask scheduler at 'carrier://pigeon'"),
    ],
)
def test_a_crew_that_cannot_be(tmp_path: Path, options: dict[str, Any], message: str) -> None:
    with pytest.raises(MisuseError, match=message):
        run(out=tmp_path / "out", **options)
    assert not (tmp_path / "out").exists()


def test_an_address_where_nothing_is(tmp_path: Path) -> None:
    """Told in seconds; nothing is written."""
    clock = time.monotonic()
    with pytest.raises(MisuseError, match=r"no Dask scheduler at 'tcp://127.0.0.1:9' .*8786"):
        run(out=tmp_path / "out", cluster=NONE)
    assert time.monotonic() - clock < 20.0
    assert not (tmp_path / "out").exists()


def test_a_cluster_without_workers(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(crew, "_FIRST", 0.5)
    with (
        LocalCluster(
            n_workers=0, dashboard_address="127.0.0.1:0", scheduler_kwargs={"dashboard": False}
        ) as empty,
        pytest.raises(MisuseError, match="has no workers; start some with: dask worker tcp://"),
    ):
        run(cluster=empty.scheduler_address)


@pytest.mark.parametrize(
    ("theirs", "message"),
    [
        ({"headrace": None}, r"worker W of the cluster at A has headrace missing \(here 1\.0\)"),
        ({"numpy": "1.9"}, r"has numpy 1\.9 \(here 2\.0\); install the same"),
        ({"python": "3.99.0.final.0"}, r"has python 3\.99 \(here 3\.12\)"),
        ({"python": "3.12.9.final.0"}, None),
    ],
)
def test_workers_unlike_this_process(theirs: dict[str, Any], message: str | None) -> None:
    """Another version of what decides the numbers, or none at all."""
    ours = {"python": "3.12.1.final.0", "headrace": "1.0", "numpy": "2.0", "scipy": "1.1"}
    reply = {"client": {"packages": ours}, "workers": {"W": {"packages": ours | theirs}}}

    class Told:
        def wait_for_workers(self, _count: int, timeout: float) -> None:
            pass

        def get_versions(self, packages: Any) -> Any:
            assert "headrace" in packages
            return reply

    if message is None:
        crew._check_alike(Told(), "A")
        return
    with pytest.raises(MisuseError, match=message):
        crew._check_alike(Told(), "A")


def test_a_worker_that_lacks_the_program(cluster: LocalCluster) -> None:
    """One that joined later: told, not traced back."""
    whole = run().study
    lacking = Missing(whole.recipe, whole.grid, whole.solver)
    with (
        Client(cluster) as client,
        pytest.raises(MisuseError, match="a worker cannot load this program: No module"),
    ):
        list(fan_out(lacking, [0], client))


def test_without_dask(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(MissingExtraError, match=r"pip install 'headrace\[cluster\]'"):
        run(workers=2, out=tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_cluster_that_has_gone(tmp_path: Path) -> None:
    """Its scheduler closed in the middle of a run: told, with what is kept."""
    made = LocalCluster(
        n_workers=1,
        host="127.0.0.1",
        dashboard_address="127.0.0.1:0",
        scheduler_kwargs={"dashboard": False},
        silence_logs=60,
    )

    def close(done: int, _total: int) -> None:
        if done:
            made.close()

    with pytest.raises(LostWorkersError, match=r"the cluster is gone \(.*\); with --out the parts"):
        run(cluster=made.scheduler_address, out=tmp_path, progress=close)
    assert list((tmp_path / "parts").glob("*.parquet"))
    assert isinstance(run(out=tmp_path).study, Study)
