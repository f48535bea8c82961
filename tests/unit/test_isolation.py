from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from starkiln.engine.isolation import Isolation, Span
from starkiln.engine.records import Fitted, Part, SetAside


def part_of(rows, *set_aside):
    return Part(3, rows, Path("cut"), rows, tuple(SetAside(row, "stage raised", "known") for row in set_aside))


def fitted(span):
    return Fitted(3, span.first, span.last, span.rows, {}, {}, {}, b"", {}, 0, "here")


def isolate(part, bad, kind="raised", excused=False):
    """Do a part of which some rows fail, and return the isolation, the rows told as set aside, and all tries."""
    isolation = Isolation(part, excused=excused)
    told, tried = [], []
    waiting = isolation.spans()
    while waiting and not isolation.hopeless:
        span = waiting.pop(0)
        if span.set_aside is None:
            tried.append(span)
        if span.set_aside is None and bad & set(range(span.first, span.last)):
            isolation.failed(span, kind, f"no\n{span}")
        else:
            isolation.done(span, fitted(span))
        told += isolation.newly_set_aside()
        waiting += isolation.spans()
    return isolation, told, tried


def test_a_part_without_trouble_is_one_span():
    isolation, told, tried = isolate(part_of(100), set())
    assert tried == [Span(0, 100)]
    assert isolation.complete
    assert not told
    assert not isolation.faulty


@given(
    st.integers(1, 3000).flatmap(lambda rows: st.tuples(st.just(rows), st.sets(st.integers(0, rows - 1), max_size=6))),
    st.sampled_from(["raised", "slow", "died"]),
)
def test_rows_at_fault_are_found_and_only_those(case, kind):
    rows, bad = case
    isolation, told, tried = isolate(part_of(rows), bad, kind)
    if isolation.hopeless:
        assert len(bad) >= min(6, rows)
        return
    assert {row.row for row in told} == bad
    assert isolation.complete
    assert isolation.faulty == bool(bad)
    edges = [(piece.first, piece.last) for piece in isolation.pieces()]
    assert [first for first, _ in edges] == [0, *(last for _, last in edges[:-1])]
    assert edges[-1][1] == rows
    assert len(tried) <= 2 + (2 + 5 * 16) * len(bad)


def test_a_large_part_is_at_single_rows_after_four_splits():
    _, _, tried = isolate(part_of(200_000), {123_456})
    assert max(span.level for span in tried) == 4
    assert [span.tries for span in tried if span.rows == 1 and span.first == 123_456] == [1, 2]


@pytest.mark.parametrize(("kind", "whole", "row"), [("raised", 2, 2), ("slow", 1, 2), ("died", 2, 4)])
def test_what_failed_is_tried_again_by_its_kind(kind, whole, row):
    _, _, tried = isolate(part_of(100), {7}, kind)
    assert sum(span.rows == 100 for span in tried) == whole
    assert sum((span.first, span.last) == (7, 8) for span in tried) == row


@pytest.mark.parametrize(
    ("kind", "reason", "detail"),
    [
        ("raised", "stage raised", "no"),
        ("slow", "took too long", "compute.row_seconds is what a row may take"),
        ("died", "worker died", "out of memory, or a crash: its worker process ended each time"),
    ],
)
def test_a_row_is_told_with_its_reason_and_nothing_of_the_machine(kind, reason, detail):
    _, told, _ = isolate(part_of(40), {7}, kind)
    assert told == [SetAside(7, reason, detail)]


def test_a_long_text_is_cut():
    isolation = Isolation(part_of(1), excused=True)
    (span,) = isolation.spans()
    for _ in range(2):
        isolation.failed(span, "raised", 300 * "x")
        span = (isolation.spans() or [span])[0]
    assert isolation.newly_set_aside() == [SetAside(0, "stage raised", 200 * "x")]


def test_rows_known_to_be_at_fault_are_not_tried():
    isolation, told, tried = isolate(part_of(10, 9, 4), set())
    assert told == []
    assert tried == [Span(0, 4), Span(5, 9)]
    assert isolation.complete
    assert not isolation.hopeless


def test_a_part_that_was_interrupted_finds_the_other_row_at_fault():
    _, told, tried = isolate(part_of(5000, 17), {17, 4000})
    assert [row.row for row in told] == [4000]
    assert not any(span.first <= 17 < span.last for span in tried)


@pytest.mark.parametrize("kind", ["raised", "died"])
def test_a_part_of_which_nothing_succeeds_is_hopeless_at_its_first_split(kind):
    isolation, told, tried = isolate(part_of(5000), set(range(5000)), kind)
    assert isolation.hopeless
    assert not told
    assert len(tried) == 2 + 16


def test_a_part_that_only_takes_too_long_is_given_smaller_spans_before_it_is_hopeless():
    """On a slow machine the first spans are still too large."""
    isolation, _, tried = isolate(part_of(5000), set(range(5000)), "slow")
    assert isolation.hopeless
    assert len(tried) == 1 + 16 + 16


@pytest.mark.parametrize("rows", [1, 2, 16])
def test_small_parts_can_be_hopeless_too(rows):
    isolation, told, _ = isolate(part_of(rows), set(range(rows)), "slow")
    assert isolation.hopeless
    assert told == []


def test_a_single_row_is_excused_where_other_parts_can_be_done():
    isolation, told, _ = isolate(part_of(1), {0}, excused=True)
    assert not isolation.hopeless
    assert isolation.complete
    assert [row.row for row in told] == [0]


def test_rows_are_told_only_once_others_are_done():
    isolation = Isolation(part_of(3))
    (whole,) = isolation.spans()
    isolation.failed(whole, "slow", "")
    first, second, third = isolation.spans()
    for span in (first, Span(0, 1, 1, 2)):
        isolation.failed(span, "raised", "no")
    assert not isolation.newly_set_aside()
    assert isolation.faulty
    isolation.spans()
    isolation.done(second, fitted(second))
    assert [row.row for row in isolation.newly_set_aside()] == [0]
    (aside,) = isolation.spans()
    assert (aside.first, aside.last, aside.set_aside.row) == (0, 1, 0)
    isolation.done(aside, fitted(aside))
    assert not isolation.complete
    isolation.done(third, fitted(third))
    assert isolation.complete
