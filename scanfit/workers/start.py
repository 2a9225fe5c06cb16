"""Choose the workers that a run asks for."""

from __future__ import annotations

from scanfit.errors import InputError, Problem
from scanfit.workers.contract import Build, Workers
from scanfit.workers.serial import SerialWorkers


def start_workers(
    build: Build,
    *,
    count: int = 1,
    cluster: str | None = None,
    seconds_per_point_maximum: float | None = None,
) -> Workers:
    """Start workers.

    Parameters
    ----------
    build : callable
        Gives the posterior; must be fit to be sent to another process unless this one does the work.
    count : int
        Number of worker processes. One without a time limit means this process.
    cluster : str, optional
        Address of a Dask scheduler (``tcp://...``), or ``"local"`` for one on this machine with `count` workers.
    seconds_per_point_maximum : float, optional
        Points that take longer are given up and marked. Takes a worker process even when `count` is one.

    Raises
    ------
    InputError
        If `build` cannot be sent, the cluster cannot be reached, or the packages for it are missing.
    """
    if cluster is not None:
        try:
            from scanfit.workers.cluster import ClusterWorkers
        except ModuleNotFoundError as error:
            if error.name not in ("dask", "distributed"):
                raise
            rule = "a cluster needs the optional packages: pip install 'scanfit[cluster]'"
            raise InputError([Problem("compute.cluster", rule)]) from error
        return ClusterWorkers(build, cluster, count, seconds_per_point_maximum)
    if count == 1 and seconds_per_point_maximum is None:
        return SerialWorkers(build)
    from scanfit.workers.processes import ProcessWorkers

    return ProcessWorkers(build, count, seconds_per_point_maximum)
