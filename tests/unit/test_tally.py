import pytest

from starkiln.engine.records import Cut, DonePart, PartFile, Plan, RowCounts, SetAside
from starkiln.engine.tally import Tally


def done(number, catalogue, rejected, **more):
    files = {"catalogue": PartFile(catalogue, 9, "c"), "rejected": PartFile(rejected, 9, "r")}
    facts = {
        "rows": catalogue + rejected,
        "fitted": catalogue,
        "files": files,
        "reasons": {"no id": rejected} if rejected else {},
        "flags": {"few_bands": 1},
        "audit": b"",
        "seconds": {"process": 2.0},
        "peak_memory": 100 * (number + 1),
        "host": "here",
    }
    return DonePart(number=number, **facts | more)


def plan_of(selected, read=None):
    return Plan(read=read or selected, selected=selected, units=(), stamps=(), rows=RowCounts(new=selected))


def test_parts_of_earlier_nights_and_of_this_one_count_alike():
    tally = Tally.of([done(0, 10, 0), done(1, 8, 2)], {1: (SetAside(3, "stage raised", "x"), SetAside(4, "y", "z"))})
    tally.add_cut(Cut((), 0.5, 250))
    tally.add_part(done(2, 5, 0, flags={"few_bands": 2, "poor_fit": 1}))
    assert (tally.parts, tally.rows, tally.fitted, tally.catalogue) == (3, 25, 23, 23)
    assert tally.set_aside == 2
    assert tally.flags == {"few_bands": 4, "poor_fit": 1}
    assert tally.seconds == {"process": 6.0, "cut": 0.5}
    assert tally.worker_peak == 300
    assert tally.counts(plan_of(25, read=40)) == {
        "read": 40,
        "filtered": 15,
        "selected": 25,
        "catalogue": 23,
        "rejected": 2,
        "rejected_by_reason": {"no id": 2},
        "pending": 0,
    }


def test_rows_that_do_not_add_up_are_a_bug():
    with pytest.raises(RuntimeError, match="do not add up"):
        Tally.of([done(0, 10, 0)], {}).counts(plan_of(11))
