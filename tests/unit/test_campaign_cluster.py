"""A campaign on a real local cluster of two workers, one of which is killed mid-way."""

from __future__ import annotations

import os
import signal
from pathlib import Path
from typing import Any

import pytest

from schemesim.study.campaign_run import run_campaign
from tests.unit.campaign_cases import OPENING, small

TRIALS, CHUNK = 300, 10


@pytest.mark.skipif(os.name != "posix", reason="SIGKILL")
def test_a_cluster_that_loses_a_worker_ends_with_the_same_counts(tmp_path: Path) -> None:
    from distributed import Client, LocalCluster

    campaign = small(OPENING, TRIALS)
    plain = run_campaign(campaign, str(tmp_path / "plain.db"))
    told: list[int] = []
    where: dict[str, Any] = {"dashboard_address": None, "silence_logs": 50, "local_directory": str(tmp_path)}
    cluster = LocalCluster(n_workers=2, threads_per_worker=1, processes=True, **where)  # type: ignore[no-untyped-call]  # typed in part
    with cluster, Client(cluster) as client:  # type: ignore[no-untyped-call]  # the same
        pids: dict[str, int] = client.run(os.getpid)
        assert len({os.getpid(), *pids.values()}) == 3

        def one_dies(done: int, _: int) -> None:
            told.append(done)
            if len(told) == 15:
                os.kill(next(iter(pids.values())), signal.SIGKILL)

        store = str(tmp_path / "cluster.db")
        result = run_campaign(campaign, store, executor=client.get_executor(), chunk=CHUNK, progress=one_dies)
    assert len(told) == 1 + 4 * TRIALS // CHUNK
    assert told == sorted(set(told))
    assert result.complete
    assert result.places == plain.places


def test_the_extra_is_not_needed_otherwise() -> None:
    """Nothing of the library imports it: the executor comes from outside."""
    import subprocess
    import sys

    code = (
        "import sys, schemesim.study.campaign_run, schemesim.scenario.campaigns, schemesim.cli.campaign;"
        "print(*sorted({'distributed', 'dask', 'joblib', 'pyarrow'} & set(sys.modules)))"
    )
    root = Path(__file__).resolve().parents[2]
    env: dict[str, Any] = {**os.environ, "PYTHONPATH": str(root)}
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=env, check=True)
    assert done.stdout.strip() == ""
