"""A machine that rounds otherwise helps, and no replication is put together from two kinds of bits."""

from __future__ import annotations

import json

import pytest

from sim.machines.hello import bits
from sim.provenance import fingerprint
from sim.replicate import TaskSize, replicate, replicate_shares
from sim.resuming import Job
from sim.store import Store
from tests.sim.test_replicate import POLICIES, SCENARIO

pytestmark = pytest.mark.by_hand
OTHERWISE = """
import sim.provenance
there = sim.provenance.fingerprint() | {"probe_intake": "rounded otherwise"}
sim.provenance.fingerprint = lambda: there
"""
OTHER = json.dumps(fingerprint() | {"probe_intake": "rounded otherwise"}, sort_keys=True)


@pytest.fixture
def odd(tmp_path):
    """A folder that, in front of the path, makes a machine say that it rounds otherwise."""
    (tmp_path / "odd").mkdir()
    (tmp_path / "odd" / "sitecustomize.py").write_text(OTHERWISE)
    return tmp_path / "odd"


def by_replication(replies):
    found = {}
    for reply in replies:
        for run in reply:
            found.setdefault(run.replication, []).append((run.cell, run.fingerprint))
    return found


def test_each_replication_comes_whole_from_one_kind(own_site, odd):
    own_site.join("plain")
    own_site.join("odd", path=[odd])
    cluster = own_site.ready("plain", "odd")
    found = by_replication(
        replicate(SCENARIO, POLICIES, range(60), workers=cluster, task_size=TaskSize(cells=1))
    )
    assert sorted(found) == list(range(60))
    assert all(sorted(cell for cell, _ in runs) == [0, 1, 2] for runs in found.values())
    assert all(len({by for _, by in runs}) == 1 for runs in found.values())
    assert {by for runs in found.values() for _, by in runs} == {bits(), OTHER}
    assert any("odd rounds numbers differently" in said for said in own_site.said)


def test_a_store_tells_whose_runs_it_has_and_what_was_begun_here_ends_here(
    own_site, odd, tmp_path, monkeypatch
):
    monkeypatch.setattr("sim.machines.desk.PATIENCE_SECONDS", 1.0)
    own_site.join("odd", path=[odd])
    with Store(tmp_path / "out", write=True) as store:
        half = Job(store, SCENARIO, POLICIES[:1], 2, fingerprint=bits())
        for reply in replicate_shares(SCENARIO, POLICIES[:1], half.shares()):
            half.keep(reply, "reference")
        job = Job(store, SCENARIO, POLICIES, 4, fingerprint=bits())
        assert {share.replications: share.fingerprint for share in job.shares()} == {
            (0, 1): bits(),
            (2, 3): None,
        }
        for reply in replicate_shares(
            SCENARIO, POLICIES, job.shares(), workers=own_site.ready("odd"), task_size=TaskSize(cells=2)
        ):
            job.keep(reply, "reference")
        held = store.held(job.scenario)
        assert {number: (by, len(cells)) for number, (by, cells) in held.items()} == {
            0: (bits(), 3), 1: (bits(), 3), 2: (OTHER, 3), 3: (OTHER, 3)
        }  # fmt: skip
        assert Job(store, SCENARIO, POLICIES, 4, fingerprint=bits()).missing == 0
