"""What a calibration found, as lines of text."""

from __future__ import annotations

from pathlib import Path

from starkiln.stages.calibrate import Calibration

NAMES = {"teff": "T", "radius": "R", "lum": "L", "fbol": "F_bol"}


def describe_calibration(found: Calibration, path: Path) -> str:
    """Return the bands, their ranges and scatter, the factors, and the figures of the held-out stars."""
    departures = found.learnt.departures
    lines = [f"departures of {len(departures.bands)} bands from {len(found.teff_k)} stars are in {path}"]
    lines.append(f"{'band':<16}{'stars':>6}  {'holds from':>10} {'to [K]':>8}  {'own scatter':>11}")
    for band, name in enumerate(departures.bands):
        stars = departures.source[band].split()[0]
        low_k, high_k = departures.range_k[band]
        at = departures.at([(low_k * high_k) ** 0.5]).scatter[band, 0]
        lines.append(f"{name:<16}{stars:>6}  {low_k:>10.0f} {high_k:>8.0f}  {at:>11.3f}")
    scores = "".join(f"  {n}: {score:.3f}" for n, score in enumerate(found.learnt.factor_scores))
    lines.append(
        f"common factors: {len(departures.factors)}"
        + (f" (log-likelihood of left-out stars{scores})" if scores else "")
    )
    middle = departures.at([(departures.range_k[:, 0].min() * departures.range_k[:, 1].max()) ** 0.5])
    lines.append(
        f"the stars' own values scatter about the scale by {middle.temperature_scatter[0]:.2%} in T and "
        f"{middle.luminosity_scatter[0]:.2%} in L"
    )
    for name, figures in found.figures.items():
        lines.append(
            f"held out, {NAMES[name]}: {figures['stars']} stars, median {figures['median']:+.2%}, scatter "
            f"{figures['scatter']:.2%}, {figures['inside_68']:.0%} inside 68 %, {figures['inside_95']:.0%} inside 95 %"
        )
    return "\n".join(lines)
