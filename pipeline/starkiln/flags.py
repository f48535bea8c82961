"""The one registry of quality flags: a bit, a name and a sentence each."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Flag:
    """One quality flag of a catalogue row."""

    bit: int
    name: str
    sentence: str

    @property
    def value(self) -> int:
        """The flag as an integer with its one bit set."""
        return 1 << self.bit


FLAGS: tuple[Flag, ...] = (
    Flag(0, "few_bands", "Fewer than five usable bands were fitted."),
    Flag(
        1,
        "poor_parallax",
        "The parallax is below five times its error, so the distance prior shapes R and L.",
    ),
    Flag(2, "negative_parallax", "The parallax, zero point removed, is negative."),
    Flag(3, "no_parallax", "No usable parallax or distance: radius, luminosity and distance are null."),
    Flag(
        4,
        "not_converged",
        "The sampler stopped at max_steps, its walkers disagree (see rhat_max), or the bounds on R left few draws.",
    ),
    Flag(5, "several_modes", "The posterior has more than one separate peak."),
    Flag(6, "temperature_at_bound", "More than 2.5 % of the posterior lies within 1 % of a temperature bound."),
    Flag(7, "extinction_at_bound", "More than 2.5 % of the posterior lies within 2 % of the largest A_V."),
    Flag(8, "radius_at_bound", "More than 2.5 % of the posterior lies within 5 % of a radius bound."),
    Flag(9, "no_detection", "Fewer than two bands above 3 sigma: temperature, radius and luminosity are null."),
    Flag(10, "poor_fit", "The posterior predictive p-value, which allows for outlying bands, is below 0.001."),
    Flag(
        11,
        "odd_photosphere",
        "The star's common departure z_1 is more than two sigma from that of the reference stars.",
    ),
    Flag(12, "band_outlier", "At least one band has an outlier probability above 0.9."),
    Flag(
        13,
        "outside_calibration",
        "More than half of the bands have no departures learnt, or none at this temperature: T may be off.",
    ),
    Flag(
        14,
        "infrared_excess",
        "Of the bands longward of 3 micron one is over 3 sigma above the model, none beyond it 1 sigma below.",
    ),
    Flag(
        15,
        "ultraviolet_excess",
        "Of the bands shortward of 0.32 micron one is over 3 sigma above the model, none beyond it 1 sigma below.",
    ),
    Flag(16, "blackbody_chosen", "With photosphere = auto, the data prefer a bare blackbody."),
    Flag(
        17,
        "duplicate_id",
        "The id occurs more than once in the input; this is the first copy, the one fitted.",
    ),
    Flag(18, "distance_at_bound", "More than 2.5 % of the posterior lies within 5 % of a bound on the distance."),
)

BY_NAME: dict[str, Flag] = {flag.name: flag for flag in FLAGS}


def names(value: int) -> list[str]:
    """Return the names of the flags set in an integer.

    Raises
    ------
    ValueError
        If a bit is set that no flag has.
    """
    unknown = value & ~sum(flag.value for flag in FLAGS)
    if unknown:
        raise ValueError(f"flags {value} has bits that no flag of this version owns: {unknown:#x}")
    return [flag.name for flag in FLAGS if value & flag.value]
