"""What the finished parts of a generation add up to, whatever runs have done them."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from starkiln.engine.audits import unpack_audit
from starkiln.engine.records import Cut, DonePart, Plan, SetAside
from starkiln.stages.audit import together


@dataclass
class Tally:
    """The sums over parts.

    Attributes
    ----------
    parts, rows, fitted
        Parts, their rows, and the rows that went through the stages.
    catalogue
        Rows of the catalogue.
    rejected, flags
        Rejected rows by reason, and catalogue rows by flag.
    seconds
        Time by stage, summed over workers.
    worker_peak
        The largest memory of a worker, in bytes.
    set_aside
        Rows that no stage can do, those of parts that are not done yet as well.
    """

    parts: int = 0
    rows: int = 0
    fitted: int = 0
    catalogue: int = 0
    rejected: Counter[str] = field(default_factory=Counter)
    flags: Counter[str] = field(default_factory=Counter)
    audit: Any = None
    seconds: dict[str, float] = field(default_factory=dict)
    worker_peak: int = 0
    set_aside: int = 0

    @classmethod
    def of(cls, parts: Iterable[DonePart], set_aside: Mapping[int, tuple[SetAside, ...]]) -> Tally:
        """Return the sums over some parts, and over the rows set aside."""
        tally = cls(set_aside=sum(map(len, set_aside.values())))
        for part in parts:
            tally.add_part(part)
        return tally

    def add_part(self, part: DonePart) -> None:
        """Add a part."""
        self.parts += 1
        self.rows += part.rows
        self.fitted += part.fitted
        self.catalogue += part.files["catalogue"].rows
        self.rejected.update(part.reasons)
        self.flags.update(part.flags)
        self.audit = together(self.audit, unpack_audit(part.audit))
        self._add_seconds(part.seconds)
        self.worker_peak = max(self.worker_peak, part.peak_memory)

    def add_cut(self, cut: Cut) -> None:
        """Add what it took to cut a unit."""
        self._add_seconds({"cut": cut.seconds})
        self.worker_peak = max(self.worker_peak, cut.peak_memory)

    def _add_seconds(self, seconds: dict[str, float]) -> None:
        for stage, spent in seconds.items():
            self.seconds[stage] = self.seconds.get(stage, 0.0) + spent

    def counts(self, plan: Plan) -> dict[str, Any]:
        """Return the counts of a generation, which must add up.

        Raises
        ------
        RuntimeError
            If they do not.
        """
        rejected = self.rejected.total()
        counts = {
            "read": plan.read,
            "filtered": plan.read - plan.selected,
            "selected": plan.selected,
            "catalogue": self.catalogue,
            "rejected": rejected,
            "rejected_by_reason": dict(sorted(self.rejected.items())),
            "pending": 0,
        }
        if plan.selected != self.catalogue + rejected:
            raise RuntimeError(f"rows do not add up: {counts}")
        return counts
