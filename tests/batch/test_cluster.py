"""The same run on the workers of a cluster, one of which is lost."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from batch_helpers import CONVERT, HEAD, digests_of, records_of

import realize
from realize.errors import Refused

pytestmark = pytest.mark.filterwarnings("ignore")


def test_a_cluster_loses_a_worker_in_the_middle(folder: Callable[..., Path]) -> None:
    distributed = pytest.importorskip("distributed")
    root = folder(48)
    assert realize.run(root / "jobs.toml", processes=1).status == 0
    undisturbed = digests_of(root)
    (root / "jobs.toml").write_text((HEAD + CONVERT).replace('"made"', '"made/cluster"'))
    killed: list[int] = []
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None) as cluster:

        def watch(event: dict[str, Any]) -> None:
            if event["event"] == "file" and not killed:
                killed.append(next(iter(cluster.workers.values())).pid)
                os.kill(killed[0], signal.SIGKILL)

        made = realize.run(root / "jobs.toml", cluster=cluster.scheduler_address, on_event=watch)
        assert killed and (made.status, made.done, made.earlier) == (0, 48, 0), made.aside
        again = realize.run(root / "jobs.toml", cluster=cluster.scheduler_address)
        assert (again.status, again.earlier) == (0, 48)
    inner = root / "made" / "cluster"
    assert {path.name for path in inner.glob("p*.json")} == set(undisturbed)
    for path in inner.glob("p*.json"):
        assert realize.read(path).receipts[-1].result.digest == undisturbed[path.name]


def test_nobody_at_the_address(folder: Callable[..., Path], monkeypatch: pytest.MonkeyPatch) -> None:
    root = folder(1)
    import sys

    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(Refused, match="not installed"):
        realize.run(root / "jobs.toml", cluster="tcp://127.0.0.1:1")
    assert not (root / "made" / "jobs.records.jsonl").exists() or records_of(root) == []
