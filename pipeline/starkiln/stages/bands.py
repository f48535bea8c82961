"""The passbands of a run and the table of their fluxes: what of a model knows no sampler and compiles nothing."""

from __future__ import annotations

from dataclasses import replace
from typing import NamedTuple

from starkiln.errors import SettingsError, UnknownPassband, nearest
from starkiln.physics.bandtable import BandTable, build_band_table
from starkiln.physics.departures import DepartureMismatch, Departures, builtin_departures, read_departures
from starkiln.physics.extinction import law_names
from starkiln.physics.passbands import Passband, builtin_names, load_passband, read_passband, zero_point_jy
from starkiln.settings import Settings
from starkiln.settings.models import PhotometryColumns


class Bands(NamedTuple):
    """The passbands by label, in the order of the settings, the table of blackbody fluxes, and the departures."""

    passbands: dict[str, Passband]
    table: BandTable
    departures: Departures | None


def build_bands(settings: Settings) -> Bands:
    """Return the bands of a run.

    Raises
    ------
    SettingsError
        If a passband, a zero point, the extinction law or the departures are not known or do not fit together, or there
        are too few walkers.
    """
    passbands = {
        band.label: _passband(settings, band, f"input.photometry[{place}]")
        for place, band in enumerate(settings.input.photometry)
    }
    extinction = settings.model.extinction
    if extinction.law not in law_names():
        raise SettingsError(
            f"model.extinction.law: no law is named {extinction.law!r}{nearest(extinction.law, law_names())}; "
            f"known are {', '.join(law_names())}"
        )
    departures = None if settings.model.photosphere == "blackbody" else _departures(settings, passbands)
    _check_walkers(settings, 0 if departures is None else len(departures.loading))
    teff_min, teff_max = settings.model.temperature_k
    table = build_band_table(
        list(passbands.values()), teff_min, teff_max, extinction.max, extinction.law, extinction.rv
    )
    return Bands(passbands, table, departures)


def _departures(settings: Settings, passbands: dict[str, Passband]) -> Departures:
    source = settings.model.departures
    departures = builtin_departures() if source == "builtin" else read_departures(source)
    try:
        return departures.for_bands(list(passbands.values()))
    except DepartureMismatch as error:
        raise DepartureMismatch(f"model.departures: {error}") from None


def _check_walkers(settings: Settings, n_factors: int) -> None:
    parameters = 2 + (settings.model.extinction.prior != "fixed") + n_factors + settings.model.jitter
    needed = 2 * (parameters + 1)
    if settings.sampling.walkers < needed:
        raise SettingsError(
            f"sampling.walkers is {settings.sampling.walkers}: {parameters} parameters need at least {needed}"
        )


def _passband(settings: Settings, band: PhotometryColumns, key: str) -> Passband:
    own = {file.name: file for file in settings.passband}
    if band.passband in own:
        file = own[band.passband]
        passband = read_passband(
            file.curve, file.name, file.detector, file.zero_point_jy, file.zero_point_error, file.source
        )
    else:
        try:
            passband = load_passband(band.passband)
        except UnknownPassband as error:
            near = nearest(band.passband, own) if band.passband not in builtin_names() else ""
            raise UnknownPassband(f"{key}.passband: {error}{near}") from None
    if band.zero_point_jy is not None:
        return replace(passband, zero_point_jy=band.zero_point_jy)  # departures learnt with another are refused
    if band.system is not None:
        try:
            zero_point_jy(passband, band.system)
        except SettingsError as error:
            raise SettingsError(f"{key}.system: {error}") from None
    return passband
