"""Finding the rows of a part that no stage can do, so that all the others are done as ever."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, replace
from itertools import pairwise

from starkiln.engine.records import Fitted, Part, SetAside

SPANS = 16
"""Spans that failing rows are split into, or the fourth root of a part's rows: single rows after four splits."""

TRIES = 2
ROW_TRIES = {"raised": 2, "slow": 2, "died": 4}
"""How often a row may fail alone; a worker may also have died of what the row is not to blame for."""

FAILURES = 16
"""Small spans that fail, none having succeeded, before a part is hopeless."""

DETAIL_LENGTH = 200

REASONS = {"raised": "stage raised", "slow": "took too long", "died": "worker died"}
DETAILS = {
    "slow": "compute.row_seconds is what a row may take",
    "died": "out of memory, or a crash: its worker process ended each time",
}


@dataclass(frozen=True)
class Span:
    """Rows first to last (not included) of a part: to be fitted, or one that is to be set aside.

    Attributes
    ----------
    level
        How many splits led to it.
    tries
        1 for the first try.
    set_aside
        What is told of the row, if it is not to be fitted.
    """

    first: int
    last: int
    level: int = 0
    tries: int = 1
    set_aside: SetAside | None = None

    @property
    def rows(self) -> int:
        """The number of rows."""
        return self.last - self.first


class Isolation:
    """What is done and what is still to do of a part; says how to go on after a failure.

    Failing rows are split until those at fault are alone. They are not told before some rows of the part are
    done: if none can be, the stage or the machine is at fault, not the rows.

    Parameters
    ----------
    part
        The part, with the rows that are known to be at fault.
    excused
        Set rows aside even if no other row of the part is done.
    """

    def __init__(self, part: Part, *, excused: bool = False) -> None:
        self._rows = part.rows
        self._excused = excused
        self._split_into = max(SPANS, _fourth_root(part.rows))
        self._waiting: deque[Span] = deque(_known_first(part))
        self._to_fit = sum(span.rows for span in self._waiting if span.set_aside is None)
        self._pieces: dict[int, Fitted] = {}
        self._any_done = False
        self._held: list[SetAside] = []
        self._told: list[SetAside] = []
        self._first_spans = 0
        self._first_failures = 0
        self._small_failures = 0
        self.faulty = False
        """Whether a row has failed for good."""

    def spans(self) -> list[Span]:
        """Return the spans to do now, each only once."""
        spans = list(self._waiting)
        self._waiting.clear()
        return spans

    def done(self, span: Span, fitted: Fitted) -> None:
        """Take the result of a span."""
        self._pieces[span.first] = fitted
        if span.set_aside is None:
            self._any_done = True
            self._tell()

    def failed(self, span: Span, kind: str, text: str) -> None:
        """Go on after a failure: again, in smaller spans, or, with a single row, without it.

        Parameters
        ----------
        span
            What failed.
        kind
            "raised", "slow" or "died".
        text
            The error.
        """
        allowed = ROW_TRIES[kind] if span.rows == 1 else TRIES if span.level == 0 and kind != "slow" else 1
        if span.tries < allowed:
            self._waiting.append(replace(span, tries=span.tries + 1))
            return
        self._first_failures += span.level == 1 and kind != "slow"
        self._small_failures += span.level >= 2 or span.rows == 1
        if span.rows > 1:
            self._split(span)
            return
        self.faulty = True
        self._held.append(SetAside(span.first, REASONS[kind], DETAILS.get(kind, _first_line(text))))
        if self._any_done or self._excused:
            self._tell()

    def _split(self, span: Span) -> None:
        count = min(span.rows, self._split_into)
        bounds = [span.first + span.rows * index // count for index in range(count + 1)]
        self._first_spans += count if span.level == 0 else 0
        self._waiting.extend(Span(first, last, span.level + 1) for first, last in pairwise(bounds))

    def _tell(self) -> None:
        self._waiting.extend(Span(row.row, row.row + 1, set_aside=row) for row in self._held)
        self._told += self._held
        self._held = []

    def newly_set_aside(self) -> list[SetAside]:
        """Return the rows to be told as set aside, each only once."""
        told, self._told = self._told, []
        return told

    @property
    def complete(self) -> bool:
        """Whether each row is done or set aside."""
        return sum(piece.rows for piece in self._pieces.values()) == self._rows

    @property
    def hopeless(self) -> bool:
        """Whether so much has failed, and nothing succeeded, that the rows are not to blame."""
        if self._any_done or self._excused:
            return False
        all_failed = 0 < self._first_spans <= self._first_failures
        return all_failed or self._small_failures >= max(1, min(FAILURES, self._to_fit))

    def pieces(self) -> tuple[Fitted, ...]:
        """Return what is done, in the order of the rows."""
        return tuple(self._pieces[first] for first in sorted(self._pieces))


def _known_first(part: Part) -> list[Span]:
    spans, start = [], 0
    for row in sorted(part.set_aside, key=lambda row: row.row):
        spans.append(Span(start, row.row))
        spans.append(Span(row.row, row.row + 1, set_aside=row))
        start = row.row + 1
    spans.append(Span(start, part.rows))
    return [span for span in spans if span.rows]


def _fourth_root(rows: int) -> int:
    root = 1
    while root**4 < rows:
        root += 1
    return root


def _first_line(text: str) -> str:
    return (text.splitlines() or [""])[0][:DETAIL_LENGTH]
