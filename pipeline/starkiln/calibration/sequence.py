"""The mean dwarf sequence: temperature, radius and absolute magnitudes along the main sequence.

"A Modern Mean Dwarf Stellar Color and Effective Temperature Sequence", E. Mamajek, version 2022.04.16, an update of
Pecaut & Mamajek 2013, ApJS 208, 9, table 5; the ``MeanStars`` package carries it.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import takewhile
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from starkiln.errors import SettingsError
from starkiln.physics.constants import TSUN_K

FloatArray = NDArray[np.float64]

SOURCE = "mean dwarf sequence, version 2022.04.16 of Pecaut & Mamajek 2013, ApJS 208, 9, table 5"
# Cooler rows contradict themselves: V - Ks against M_Ks by 0.2 mag from L3V on, no luminosity from L6V on.
COOLEST_K = 2_000.0


@dataclass(frozen=True, eq=False)
class MeanSequence:
    """Rows of the mean dwarf sequence.

    Attributes
    ----------
    spectral_type
        Of each row.
    teff_k, radius_rsun
        (n_rows,): effective temperature [K]; radius [R_sun], from the row's luminosity and temperature.
    magnitude
        Absolute magnitude of each row by passband name, NaN where the sequence has none.
    colour
        (n_rows,) by the table's name: colours of other systems, such as the g-r of SDSS.
    """

    spectral_type: tuple[str, ...]
    teff_k: FloatArray
    radius_rsun: FloatArray
    magnitude: dict[str, FloatArray]
    colour: dict[str, FloatArray]

    def every(self, step: int, start: int = 0) -> MeanSequence:
        """Return every ``step``-th row."""
        rows = slice(start, None, step)
        return MeanSequence(
            self.spectral_type[rows],
            self.teff_k[rows],
            self.radius_rsun[rows],
            {name: values[rows] for name, values in self.magnitude.items()},
            {name: values[rows] for name, values in self.colour.items()},
        )


def meanstars_path() -> Path:
    """Return the sequence's table in the ``MeanStars`` package."""
    from importlib.resources import files

    return Path(str(files("MeanStars") / "EEM_dwarf_UBVIJHK_colors_Teff.txt"))


def read_mean_sequence(path: Path) -> MeanSequence:
    """Return the mean dwarf sequence from its table.

    Raises
    ------
    SettingsError
        If the table has no line of column names that starts with ``SpT``.
    """
    names, rows = _table(path)
    column = {name: np.array([_number(row[i]) for row in rows]) for i, name in enumerate(names) if name != "SpT"}
    kept = np.flatnonzero((column["Teff"] >= COOLEST_K) & np.isfinite(column["logL"]))
    column = {name: values[kept] for name, values in column.items()}
    teff_k = column["Teff"]
    return MeanSequence(
        spectral_type=tuple(rows[row][0] for row in kept),
        teff_k=teff_k,
        radius_rsun=np.sqrt(10.0 ** column["logL"]) * (TSUN_K / teff_k) ** 2,
        magnitude=_magnitudes(column),
        colour={name: column[name] for name in ("g-r", "i-z", "z-Y")},
    )


def _table(path: Path) -> tuple[list[str], list[list[str]]]:
    """Return the column names and the rows between the line of names and the comments after the table."""
    lines = path.read_text(encoding="utf-8").splitlines()
    first = next((number for number, line in enumerate(lines) if line.startswith("SpT")), None)
    if first is None:
        raise SettingsError(f"{path}: not the mean dwarf sequence; no line of column names starts with SpT")
    names = lines[first].split()[:-1]
    rows = [line.split() for line in takewhile(lambda line: not line.startswith("#"), lines[first + 1 :])]
    return names, [row for row in rows if row]


def _number(text: str) -> float:
    """Return a number of the table, NaN for the dots of a missing one; a colon marks a doubtful one."""
    try:
        return float(text.rstrip(":"))
    except ValueError:
        return np.nan


def _magnitudes(column: dict[str, FloatArray]) -> dict[str, FloatArray]:
    """Return absolute magnitudes by passband, chained from V through the colours, or from M_Ks and M_G."""
    v = column["Mv"]
    b = v + column["B-V"]
    ks = _first_known(v - column["V-Ks"], column["M_Ks"])
    h = ks + column["H-Ks"]
    w1 = ks - column["Ks-W1"]
    g = _first_known(v + column["G-V"], column["M_G"])
    rp = g - column["G-Rp"]
    return {
        "johnson_u": b + column["U-B"],
        "johnson_b": b,
        "johnson_v": v,
        "cousins_r": v - column["V-Rc"],
        "cousins_i": v - column["V-Ic"],
        "gaia_dr2_bp": rp + column["Bp-Rp"],
        "gaia_dr2_g": g,
        "gaia_dr2_rp": rp,
        "2mass_j": h + column["J-H"],
        "2mass_h": h,
        "2mass_ks": ks,
        "wise_w1": w1,
        "wise_w2": w1 - column["W1-W2"],
        "wise_w3": w1 - column["W1-W3"],
        "wise_w4": w1 - column["W1-W4"],
    }


def _first_known(first: FloatArray, second: FloatArray) -> FloatArray:
    return np.where(np.isfinite(first), first, second)
