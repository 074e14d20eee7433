"""The same function on a Dask cluster: a local one, on loopback only."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import pytest
from click.testing import CliRunner

from daq.cli.root import midspan
from daq.errors import MidspanError
from daq.recompute.many import recompute_on_cluster
from daq.recompute.one import recompute

DATA = Path(__file__).parent.parent / "data"
RECORDS = (DATA / "record-1.h5", DATA / "record-1-memory.h5")
there = pytest.mark.skipif(importlib.util.find_spec("distributed") is None, reason="the extra `cluster`")


@there
@pytest.mark.slow
@pytest.mark.processes
@pytest.mark.filterwarnings("default")  # of another project's sockets and loops
def test_a_cluster_gives_the_same_as_this_process() -> None:
    from distributed import LocalCluster

    with LocalCluster(
        n_workers=1, threads_per_worker=1, protocol="tcp://", host="127.0.0.1", dashboard_address=None
    ) as cluster:
        found = list(recompute_on_cluster(RECORDS, cluster.scheduler_address))
        assert found == [recompute(path.absolute()) for path in RECORDS]
        words = ["reduce", str(DATA), "--cluster", cluster.scheduler_address]
        done = CliRunner().invoke(midspan, words)
        assert done.exit_code == 0, done.output
        assert "2 the same, 0 not" in done.output


@there
@pytest.mark.slow
def test_no_cluster_is_one_clear_line() -> None:
    with pytest.raises(MidspanError, match="no cluster answers at nonsense://x"):
        list(recompute_on_cluster(RECORDS, "nonsense://x"))
