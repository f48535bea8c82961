"""Passbands: response curve, detector, band average and zero points.

The band average of a photon counter is ``<X> = ∫ X_ν S dλ/λ / ∫ S dλ/λ``; of an energy response both
integrals carry one more ``1/λ``. S runs straight between the points of its curve and is zero outside
them. The integrals are two-point Gauss-Legendre sums over pieces no wider than 0.2 per cent in wavelength,
so that a blackbody of 1500 K is averaged to better than 1e-6 even in the far ultraviolet.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from starkiln.errors import SettingsError, UnknownPassband, nearest
from starkiln.physics.builtin_bands import BUILTIN_BANDS, BuiltinBand, Detector, System
from starkiln.physics.constants import AB_ZERO_JY

if TYPE_CHECKING:
    from astropy.table import Column, Table

FloatArray = NDArray[np.float64]

_BUILTIN = {band.name: band for band in BUILTIN_BANDS}
_FORMATS = {".ecsv": "ascii.ecsv", ".vot": "votable", ".votable": "votable", ".xml": "votable"}
_MIN_POINTS = 4
_MAX_PIECE = 0.002  # in ln wavelength


@dataclass(frozen=True, eq=False)
class Passband:
    """A response curve with what is needed to turn its magnitudes into fluxes.

    ``wavelength_um`` rises; ``throughput`` is on any scale. ``zero_point_jy`` is the band-averaged flux of
    magnitude zero in ``system``, None if magnitudes of that system cannot be used; ``zero_point_error`` is
    its fractional error. ``vega_spectrum`` and ``vega_mag`` name the CALSPEC spectrum of Vega, and its
    magnitude, that the zero point agrees with.
    """

    name: str
    wavelength_um: FloatArray
    throughput: FloatArray
    detector: Detector
    system: System
    zero_point_jy: float | None
    zero_point_error: float
    source: str
    curve_source: str
    vega_spectrum: str = ""
    vega_mag: float | None = None

    @cached_property
    def quadrature(self) -> tuple[FloatArray, FloatArray]:
        """The wavelengths [um] and the weights, which sum to 1, of the band average."""
        left_um, right_um = _pieces(self.wavelength_um)
        middle_um, half_um = 0.5 * (left_um + right_um), 0.5 * (right_um - left_um)
        offset_um = half_um / np.sqrt(3.0)
        nodes_um = np.stack([middle_um - offset_um, middle_um + offset_um], axis=1).ravel()
        per_wavelength = 1 if self.detector == "photon" else 2
        response = np.interp(nodes_um, self.wavelength_um, self.throughput)
        weights = np.repeat(half_um, 2) * response / nodes_um**per_wavelength
        used = weights > 0.0
        return nodes_um[used], weights[used] / weights[used].sum()

    def average(self, spectrum_at: Callable[[FloatArray], ArrayLike]) -> float:
        """Return the band average of a spectrum per unit frequency, a function of the wavelength [um]."""
        nodes_um, weights = self.quadrature
        return float(np.sum(weights * np.asarray(spectrum_at(nodes_um), dtype=np.float64)))

    @cached_property
    def pivot_um(self) -> float:
        """The wavelength at which <f_nu> = <f_lambda> λ²/c holds exactly, for this kind of detector."""
        return float(np.sqrt(self.average(np.square)))

    def digest(self) -> str:
        """Return the SHA-256, in hex, of curve, detector and zero point: equal digests, equal fluxes."""
        digest = hashlib.sha256(f"{self.detector} {self.system} {self.zero_point_jy!r}\n".encode())
        for values in (self.wavelength_um, self.throughput):
            digest.update(np.ascontiguousarray(values, dtype="<f8").tobytes())
        return digest.hexdigest()


def _pieces(wavelength_um: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Cut every interval of a curve into equal pieces narrow enough for the quadrature."""
    widths = np.diff(wavelength_um)
    counts = np.ceil(widths / (_MAX_PIECE * wavelength_um[:-1])).astype(np.int64)
    interval = np.repeat(np.arange(len(counts)), counts)
    within = np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
    step_um = widths[interval] / counts[interval]
    left_um = wavelength_um[interval] + within * step_um
    return left_um, left_um + step_um


def zero_point_jy(passband: Passband, system: System) -> float:
    """Return the flux [Jy] of magnitude zero of a passband, in the AB or in the Vega system.

    Raises
    ------
    SettingsError
        If the passband has no zero point in that system.
    """
    if system == "AB":
        return AB_ZERO_JY
    if passband.system == "Vega" and passband.zero_point_jy is not None:
        return passband.zero_point_jy
    raise SettingsError(
        f"passband {passband.name!r} has no Vega zero point; give zero_point_jy, the flux of magnitude zero, "
        "or use system = 'AB'"
    )


def builtin_names() -> list[str]:
    """Return the names of the built-in passbands."""
    return list(_BUILTIN)


def load_passband(name: str) -> Passband:
    """Return a built-in passband, its curve read from the ``speclite`` package.

    Raises
    ------
    UnknownPassband
        If there is none of this name; the message names the nearest ones.
    """
    if name not in _BUILTIN:
        raise UnknownPassband(_unknown(name))
    band = _BUILTIN[name]
    wavelength_um, throughput, meta = _read_curve(_speclite_file(band), "wavelength", "response")
    for zero_um in band.zeros_um:
        place = int(np.searchsorted(wavelength_um, zero_um))
        wavelength_um = np.insert(wavelength_um, place, zero_um)
        throughput = np.insert(throughput, place, 0.0)
    return Passband(
        name=name,
        wavelength_um=wavelength_um,
        throughput=throughput,
        detector=band.detector,
        system=band.system,
        zero_point_jy=band.zero_point_jy,
        zero_point_error=band.zero_point_error,
        source=band.source,
        curve_source=" ".join(f"speclite {band.curve} {meta.get('url', '')}".split()),
        vega_spectrum=band.vega_spectrum,
        vega_mag=band.vega_mag,
    )


def read_passband(
    path: str | Path,
    name: str,
    detector: Detector = "photon",
    zero_point_jy: float | None = None,
    zero_point_error: float = 0.0,
    source: str = "",
) -> Passband:
    """Return a passband read from an ECSV or VOTable file.

    Parameters
    ----------
    path : str or Path
        A table with one column of wavelengths, which carries a unit, and one of throughputs without one;
        a table of more columns must call them ``wavelength`` and ``throughput``.
    name : str
        What the passband is called.
    detector : {"photon", "energy"}
        What the throughput weighs.
    zero_point_jy : float, optional
        The band-averaged flux of a source of Vega magnitude zero. AB magnitudes need none.
    zero_point_error : float
        Fractional error of the zero point.
    source : str
        Where curve and zero point come from.

    Raises
    ------
    SettingsError
        If the file cannot be read or its curve cannot be used; the message names file, column and row.
    """
    wavelength_um, throughput, _ = _read_curve(Path(path))
    return Passband(
        name=name,
        wavelength_um=wavelength_um,
        throughput=throughput,
        detector=detector,
        system="AB" if zero_point_jy is None else "Vega",
        zero_point_jy=AB_ZERO_JY if zero_point_jy is None else zero_point_jy,
        zero_point_error=zero_point_error,
        source=source,
        curve_source=Path(path).name,
    )


def describe_passbands() -> list[dict[str, Any]]:
    """Return a row per built-in passband: name, pivot, detector, system, zero points [Jy], error, source."""
    return [_description(load_passband(name)) for name in _BUILTIN]


def _description(passband: Passband) -> dict[str, Any]:
    return {
        "name": passband.name,
        "pivot_um": passband.pivot_um,
        "detector": passband.detector,
        "system": passband.system,
        "zero_point_ab_jy": AB_ZERO_JY,
        "zero_point_vega_jy": passband.zero_point_jy if passband.system == "Vega" else None,
        "zero_point_error": passband.zero_point_error,
        "source": passband.source,
        "curve_source": passband.curve_source,
    }


def _unknown(name: str) -> str:
    family, _, band = name.partition("_")
    released = [known for known in _BUILTIN if known.startswith(f"{family}_dr")]
    editions = [known for known in released if known.endswith(f"_{band}")]
    if editions:
        return f"passband {name!r} comes in several editions; choose {' or '.join(editions)}"
    return (
        f"no passband is called {name!r}{nearest(name, _BUILTIN)}; "
        "`starkiln passbands` lists the built-in ones, [[passband]] adds a curve of your own"
    )


def _speclite_file(band: BuiltinBand) -> Path:
    from importlib.resources import files

    return Path(str(files("speclite") / "data" / "filters" / f"{band.curve}.ecsv"))


def _read_curve(
    path: Path, wavelength_name: str = "wavelength", throughput_name: str = "throughput"
) -> tuple[FloatArray, FloatArray, dict[str, Any]]:
    table = _read_table(path)
    wavelength, throughput = _curve_columns(table, path, wavelength_name, throughput_name)
    wavelength_um, response = _wavelengths_um(wavelength, path), _numbers(throughput, path)
    _check_curve(wavelength_um, response, path, wavelength.name, throughput.name)
    kept = _support(response)
    return wavelength_um[kept], response[kept], dict(table.meta)


def _read_table(path: Path) -> Table:
    from astropy.table import Table

    form = _FORMATS.get(path.suffix.lower())
    if form is None:
        raise SettingsError(f"{path}: a passband curve is an ECSV (.ecsv) or VOTable (.vot, .xml) file")
    try:
        return Table.read(path, format=form)
    except FileNotFoundError:
        raise SettingsError(f"{path}: no such passband curve") from None
    except Exception as error:  # the readers raise whatever their parsers do
        reason = (str(error).splitlines() or [type(error).__name__])[0]
        raise SettingsError(f"{path}: cannot be read as {form}: {reason}") from error


def _curve_columns(
    table: Table, path: Path, wavelength_name: str, throughput_name: str
) -> tuple[Column, Column]:
    names = list(table.colnames)
    if {wavelength_name, throughput_name} <= set(names):
        return table[wavelength_name], table[throughput_name]
    if len(names) != 2:
        raise SettingsError(
            f"{path}: a passband curve has the columns {wavelength_name!r} and {throughput_name!r}; "
            f"this file has {', '.join(names)}"
        )
    with_unit = [name for name in names if _is_length(table[name])]
    if len(with_unit) != 1:
        raise SettingsError(
            f"{path}: exactly one of the columns {', '.join(names)} must carry a unit of wavelength, "
            "such as nm or um"
        )
    (other,) = set(names) - set(with_unit)
    return table[with_unit[0]], table[other]


def _is_length(column: Column) -> bool:
    from astropy import units

    return column.unit is not None and units.Unit(column.unit).is_equivalent(units.m)


def _wavelengths_um(column: Column, path: Path) -> FloatArray:
    from astropy import units

    if not _is_length(column):
        given = "no unit" if column.unit is None else f"the unit {column.unit}"
        raise SettingsError(
            f"{path}, column {column.name!r}: has {given}; give a wavelength's, such as nm or um"
        )
    return _numbers(column, path) * float(units.Unit(column.unit).to(units.um))


def _numbers(column: Column, path: Path) -> FloatArray:
    if column.dtype.kind not in "iuf" or column.ndim != 1:
        raise SettingsError(f"{path}, column {column.name!r}: must hold one number per row")
    if hasattr(column, "filled"):
        return np.asarray(column.astype(np.float64).filled(np.nan), dtype=np.float64)
    return np.asarray(column, dtype=np.float64)


def _check_curve(
    wavelength_um: FloatArray, throughput: FloatArray, path: Path, wavelength_name: str, throughput_name: str
) -> None:
    if len(wavelength_um) < _MIN_POINTS:
        raise SettingsError(
            f"{path}: {len(wavelength_um)} points are too few; a curve has {_MIN_POINTS} or more"
        )
    for name, values in ((wavelength_name, wavelength_um), (throughput_name, throughput)):
        _refuse_rows(~np.isfinite(values), path, name, "is missing or not finite")
    _refuse_rows(wavelength_um <= 0.0, path, wavelength_name, "is not above zero")
    _refuse_rows(throughput < 0.0, path, throughput_name, "is below zero")
    falls = np.diff(wavelength_um, prepend=-np.inf) <= 0.0
    _refuse_rows(falls, path, wavelength_name, "does not rise; sort the rows by wavelength, each one once")
    if not np.any(throughput > 0.0):
        raise SettingsError(f"{path}, column {throughput_name!r}: is zero everywhere")


def _refuse_rows(bad: NDArray[np.bool_], path: Path, column: str, what: str) -> None:
    if np.any(bad):
        raise SettingsError(f"{path}, column {column!r}, row {int(np.argmax(bad)) + 1}: {what}")


def _support(throughput: FloatArray) -> slice:
    """Return the stretch from the last zero before the response to the first one after it."""
    positive = np.flatnonzero(throughput > 0.0)
    return slice(max(int(positive[0]) - 1, 0), int(positive[-1]) + 2)
