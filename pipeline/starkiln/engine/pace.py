"""How fast rows are fitted, and how long a task may take before it counts as hung."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from statistics import median

from starkiln.settings.models import Sampling

FIRST_GUESS_SECONDS = 1 / 50
"""Seconds a row before any has been fitted."""

TASK_SECONDS = 1.0
KEPT_ROW_SECONDS = 1e-4
"""Time that a task takes beside its fits, and to take over a row's earlier result."""

FEW_FITS = 10
"""With fewer fits a task's own cost hides what a fit takes."""

ROW_SECONDS = 45.0
USUAL_STEPS = 128_000
"""Walkers times steps of the default settings, for which the limits are made."""

PATIENCE_SECONDS = 20.0
LEAST_SECONDS_A_ROW = 0.06
PATIENCE = 3.0
KEPT_ROW_LIMIT_SECONDS = 0.01


class Pace:
    """The seconds that the fit of a row takes, from what was measured, in this run and before.

    Parameters
    ----------
    rates
        Seconds a row of earlier parts.
    """

    def __init__(self, rates: Iterable[float] = ()) -> None:
        self._rates = list(rates)

    def note(self, fits: int, seconds: float) -> None:
        """Learn from a task; one of few fits says little."""
        if fits >= FEW_FITS:
            self._rates.append(seconds / fits)

    @property
    def per_row(self) -> float:
        """The usual seconds a row."""
        return median(self._rates) if self._rates else FIRST_GUESS_SECONDS

    @property
    def fastest(self) -> float:
        """The least seconds a row."""
        return min(self._rates, default=FIRST_GUESS_SECONDS)

    def seconds_for(self, fits: int, kept: int = 0) -> float:
        """Return what a task will usually take."""
        return _seconds(fits, kept, self.per_row)

    def least_seconds_for(self, fits: int, kept: int = 0) -> float:
        """Return what a task will take if all goes as fast as ever."""
        return _seconds(fits, kept, self.fastest)


def _seconds(fits: int, kept: int, per_row: float) -> float:
    return TASK_SECONDS + fits * per_row + kept * KEPT_ROW_SECONDS


@dataclass(frozen=True)
class Limits:
    """How long tasks may take.

    Attributes
    ----------
    row_seconds
        The limit of a task of one row, at the default length of chains or shorter ones.
    sampling
        Longer chains may take longer.
    """

    row_seconds: float
    sampling: Sampling

    def limit(self, rows: int, pace: Pace, kept: int = 0) -> float:
        """Return the seconds after which a task that fits so many rows is hung."""
        longer = max(1.0, self.sampling.max_steps * self.sampling.walkers / USUAL_STEPS)
        if rows == 1 and not kept:
            return longer * self.row_seconds
        fits = rows * max(LEAST_SECONDS_A_ROW, PATIENCE * pace.per_row)
        scale = longer * self.row_seconds / ROW_SECONDS
        return scale * (PATIENCE_SECONDS + fits + kept * KEPT_ROW_LIMIT_SECONDS)
