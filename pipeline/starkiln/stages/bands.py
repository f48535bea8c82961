"""The passbands of a run and the table of their fluxes: what of a model knows no sampler and compiles nothing."""

from __future__ import annotations

from starkiln.errors import SettingsError, UnknownPassband, nearest
from starkiln.physics.bandtable import BandTable, build_band_table
from starkiln.physics.extinction import law_names
from starkiln.physics.passbands import Passband, builtin_names, load_passband, read_passband, zero_point_jy
from starkiln.settings import Settings
from starkiln.settings.models import PhotometryColumns


def build_bands(settings: Settings) -> tuple[dict[str, Passband], BandTable]:
    """Return the passbands by label, in the order of the settings, and the table of their fluxes.

    Raises
    ------
    SettingsError
        If a passband, a zero point or the extinction law is not known, or there are too few walkers.
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
    n_parameters = 2 if extinction.prior == "fixed" else 3
    if settings.sampling.walkers < 2 * (n_parameters + 1):
        raise SettingsError(
            f"sampling.walkers is {settings.sampling.walkers}: {n_parameters} parameters need at least "
            f"{2 * (n_parameters + 1)}"
        )
    teff_min, teff_max = settings.model.temperature_k
    table = build_band_table(
        list(passbands.values()), teff_min, teff_max, extinction.max, extinction.law, extinction.rv
    )
    return passbands, table


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
    if band.system is not None and band.zero_point_jy is None:
        try:
            zero_point_jy(passband, band.system)
        except SettingsError as error:
            raise SettingsError(f"{key}.system: {error}") from None
    return passband
