"""Findings travel between processes, and plans count their parts."""

import pickle

from starkiln.engine.records import Plan, RowCounts, StartedBefore, Unit, WorkerDisagrees


def test_findings_survive_the_way_from_a_worker():
    before = pickle.loads(pickle.dumps(StartedBefore("slow", "a trace")))
    assert (before.kind, before.trace) == ("slow", "a trace")
    other = pickle.loads(pickle.dumps(WorkerDisagrees("tcp://127.0.0.1:1", "another version")))
    assert (other.address, other.text) == ("tcp://127.0.0.1:1", "another version")


def test_a_plan_counts_parts_and_duplicates():
    units = tuple(Unit(n, ".", ((0, n),), 10 * n, 10 * n + 10, 10, 2 * n, (6, 4)) for n in range(3))
    plan = Plan(read=30, selected=30, units=units, stamps=((1, 2),), rows=RowCounts(new=28, duplicate=2))
    assert (plan.parts, plan.duplicates) == (6, 2)
