"""The audit of zero points: what the stars of a part say of them, and the table that all parts add up to."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.audit import AuditSums, combined, find_offsets, sample_stars
from starkiln.settings import Settings
from starkiln.stages.fit import Fitted
from starkiln.stages.model import FitModel, zero_point_error


def audit(fitted: Fitted, mode: NDArray[np.float64], model: FitModel) -> AuditSums:
    """Return what some stars say of the zero points; ``mode`` are their posterior modes as points."""
    return sample_stars(mode, fitted.block, is_blackbody=model.photosphere == "blackbody")


def together(one: AuditSums | None, other: AuditSums | None) -> AuditSums | None:
    """Return the sums of two parts together; either may have none."""
    if one is None or other is None:
        return other if one is None else one
    return combined(one, other)


def zero_point_audit(sums: AuditSums | None, model: FitModel, settings: Settings) -> list[dict[str, Any]]:
    """Return a row for each band: label, offset and its error in magnitudes, whether it is determined, and stars.

    The stars are those of a sample of the run's that told something of the band. The offset is observed minus expected
    magnitude: to be subtracted from the band's magnitudes.
    """
    if sums is None:
        return []
    errors = [zero_point_error(band, model.passbands[band.label]) for band in settings.input.photometry]
    models = {each.photosphere == "blackbody": (each.grid, each.prior) for each in (model, model.rival) if each}
    offsets = find_offsets(sums, models, np.array(errors))
    return [
        {
            "label": label,
            "offset_mag": round(float(offset), 4) + 0.0,  # no -0.0
            "error_mag": round(float(error), 4),
            "determined": bool(determined),
            "stars": int(stars),
        }
        for label, offset, error, determined, stars in zip(model.passbands, *offsets, strict=True)
    ]
