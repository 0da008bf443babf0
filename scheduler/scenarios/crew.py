"""Who works a grid off: processes of this machine, or the workers of a Dask cluster."""

from __future__ import annotations

import logging
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from importlib import import_module
from typing import Any

from scheduler.errors import MissingExtraError, MisuseError

_CONNECT = 5.0  # seconds until an address counts as unreachable
_FIRST = 10.0  # seconds until a cluster counts as one without workers
_FAILURES = 1  # deaths of processes that a chunk may see before it is suspect
_ALIKE = ("headrace", "numpy", "scipy", "pandas")
_DASK = {
    # giving freed memory back at once, Dask's default, costs as much as the solving
    "distributed.nanny.pre-spawn-environ.MALLOC_TRIM_THRESHOLD_": None,
    "distributed.worker.profile.enabled": False,  # 5 % of the time
}
_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


@dataclass(frozen=True)
class Crew:
    """Who solves: so many processes of this machine, or the workers of a cluster.

    Raises:
        MisuseError: neither or both, or fewer than one worker.
    """

    workers: int | None = None
    cluster: str | None = None

    def __post_init__(self) -> None:
        if (self.workers is None) == (self.cluster is None):
            raise MisuseError(
                "workers are of this machine, a cluster brings its own: give --workers or "
                "--cluster (workers or cluster), not both"
            )
        if self.workers is not None and (type(self.workers) is not int or self.workers < 1):
            raise MisuseError(
                f"workers must be a whole number from 1 on, got {self.workers!r}; as many as "
                "there are cores is usual"
            )


@contextmanager
def at_work(crew: Crew | None) -> Iterator[Any]:
    """A Dask client of the crew, at work until it is left; None of no crew.

    Raises:
        MissingExtraError: dask.distributed is not installed. MisuseError: an address that cannot
            be reached, a cluster without workers, or workers with other versions than here.
    """
    if crew is None:
        yield None
        return
    distributed = _distributed()
    if crew.cluster is not None:
        with _connected(distributed, crew.cluster) as client:
            _check_alike(client, crew.cluster)
            yield client
        return
    assert crew.workers is not None
    with (
        import_module("dask").config.set(_DASK),
        distributed.LocalCluster(
            n_workers=crew.workers,
            threads_per_worker=1,
            processes=True,
            host="127.0.0.1",
            dashboard_address="127.0.0.1:0",
            scheduler_kwargs={"dashboard": False, "allowed_failures": _FAILURES},
            env=dict.fromkeys(_ONE_THREAD, "1"),
            silence_logs=logging.CRITICAL,
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        yield client


def renew(client: Any) -> None:
    """New processes on this machine in place of its own; a cluster's workers are its own matter.

    What watches over a process gives up where it dies while it starts.
    """
    if client.cluster is not None:
        count = len(client.cluster.worker_spec)
        client.cluster.scale(0)
        client.cluster.scale(count)


def _distributed() -> Any:
    try:
        return import_module("distributed")
    except ModuleNotFoundError as error:
        raise MissingExtraError(
            "workers need dask.distributed, which is not installed; pip install 'headrace[cluster]'"
        ) from error


def _connected(distributed: Any, address: str) -> Any:
    try:
        return distributed.Client(address, timeout=_CONNECT)
    except (OSError, ValueError, TypeError) as error:
        raise MisuseError(
            f"there is no Dask scheduler at {address!r} ({type(error).__name__}: {error}); give "
            "the address that it names when it starts, as in tcp://10.0.0.5:8786"
        ) from error


def _check_alike(client: Any, address: str) -> None:
    """Refuse a cluster without workers, or whose workers have other versions than here."""
    try:
        client.wait_for_workers(1, timeout=_FIRST)
    except TimeoutError as error:
        raise MisuseError(
            f"the cluster at {address} has no workers; start some with: dask worker {address}"
        ) from error
    found = client.get_versions(packages=_ALIKE)
    here = _versions(found["client"])
    for worker, theirs in found["workers"].items():
        other = [
            f"{name} {version or 'missing'} (here {here[name]})"
            for name, version in _versions(theirs).items()
            if version != here[name]
        ]
        if other:
            raise MisuseError(
                f"worker {worker} of the cluster at {address} has {', '.join(other)}; install the "
                "same there as here"
            )


def _versions(found: Any) -> dict[str, str | None]:
    """Of Python, as far as it decides what can be exchanged, and of the packages that matter."""
    packages = found["packages"]
    python = ".".join(str(packages["python"]).split(".")[:2])
    return {"python": python, **{name: packages.get(name) for name in _ALIKE}}
