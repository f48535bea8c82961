"""What the fit sees of a table: plain arrays, one row per star."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Stars:
    """Fluxes, distances and prior parameters of n stars in b bands, all float64 and C-contiguous.

    Attributes
    ----------
    ids
        Canonical id bytes, which key each star's random numbers.
    flux_jy, error_jy
        (n, b); a limit band holds the limit and the error at which it was drawn; unusable bands hold 0 and 1.
    usable, limit
        (n, b) bool; a limit band is usable too.
    parallax_mas, parallax_error_mas
        (n,), zero point removed and error scaled; NaN where there is none.
    distance_pc, distance_error_pc
        (n,), a distance given by the user; NaN where there is none.
    av_mean, av_scale
        (n,), parameters of the prior of A_V in magnitudes.
    length_scale_pc
        (n,), scale of the exponentially decreasing space density.
    """

    ids: list[bytes]
    flux_jy: NDArray[np.float64]
    error_jy: NDArray[np.float64]
    usable: NDArray[np.bool_]
    limit: NDArray[np.bool_]
    parallax_mas: NDArray[np.float64]
    parallax_error_mas: NDArray[np.float64]
    distance_pc: NDArray[np.float64]
    distance_error_pc: NDArray[np.float64]
    av_mean: NDArray[np.float64]
    av_scale: NDArray[np.float64]
    length_scale_pc: NDArray[np.float64]

    def __len__(self) -> int:
        return len(self.ids)

    def take(self, rows: slice) -> Stars:
        """Return the stars of a slice of rows."""
        return Stars(**{field.name: getattr(self, field.name)[rows] for field in fields(self)})

    def at(self, rows: NDArray[np.int64]) -> Stars:
        """Return the stars at some rows, in their order."""
        others = {field.name: getattr(self, field.name)[rows] for field in fields(self) if field.name != "ids"}
        return Stars(ids=[self.ids[row] for row in rows], **others)
