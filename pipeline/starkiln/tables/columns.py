"""The one registry of output columns: names, types, units, UCDs and descriptions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import pyarrow as pa

from starkiln.errors import SettingsError
from starkiln.settings import Settings

SCHEMA_VERSION = "1.0"
"""Major.minor of the output schema; a minor step only adds nullable columns."""


@dataclass(frozen=True)
class Column:
    """One output column; unit and UCD are None where there is none."""

    name: str
    type: pa.DataType
    unit: str | None
    ucd: str | None
    description: str | None

    def field(self) -> pa.Field:
        """Return the Arrow field, with unit, ucd and description as field metadata."""
        texts = {"unit": self.unit, "ucd": self.ucd, "description": self.description}
        metadata = {key: text for key, text in texts.items() if text}
        return pa.field(self.name, self.type, metadata=metadata or None)

    @classmethod
    def of(cls, field: pa.Field) -> Column:
        """Return the column an Arrow field and its metadata describe."""
        texts = {key.decode(): text.decode() for key, text in (field.metadata or {}).items()}
        return cls(field.name, field.type, texts.get("unit"), texts.get("ucd"), texts.get("description"))


@dataclass(frozen=True)
class Quantity:
    """A quantity with a posterior: five quantile columns, and a column of draws if kept."""

    name: str
    unit: str
    ucd: str
    title: str


TEFF = Quantity("teff", "K", "phys.temperature.effective", "Effective temperature")
RADIUS = Quantity("radius", "solRad", "phys.size.radius", "Stellar radius")
LUM = Quantity("lum", "solLum", "phys.luminosity", "Bolometric luminosity")
DIST = Quantity("dist", "pc", "pos.distance", "Distance")
AV = Quantity("av", "mag", "phys.absorption;em.opt.V", "Interstellar extinction A_V")
ANG_DIAM = Quantity("ang_diam", "mas", "phys.angSize", "Angular diameter")
FBOL = Quantity("fbol", "W m-2", "phot.flux.bol", "Bolometric flux at Earth, extinction removed")

QUANTITIES = (TEFF, RADIUS, LUM, DIST, AV, ANG_DIAM, FBOL)
DRAWN = (TEFF, RADIUS, LUM, DIST, AV, ANG_DIAM)

_QUANTILES = (
    ("lo95", "stat.percentile", "lower end of the central 95 % interval"),
    ("lo68", "stat.percentile", "lower end of the central 68 % interval"),
    ("p50", "stat.median", "posterior median"),
    ("hi68", "stat.percentile", "upper end of the central 68 % interval"),
    ("hi95", "stat.percentile", "upper end of the central 95 % interval"),
)

_CORRELATION = "Correlation of ln({0}) and {1} over the posterior draws"

_SINGLE = (
    Column(
        "lambda_peak_p50",
        pa.float32(),
        "nm",
        "em.wl;stat.median",
        "Wien peak wavelength of the spectrum per unit wavelength, posterior median",
    ),
    Column(
        "mbol_p50",
        pa.float32(),
        "mag",
        "phys.magAbs.bol;stat.median",
        "Absolute bolometric magnitude on the IAU 2015 scale, posterior median",
    ),
    Column(
        "corr_teff_radius", pa.float32(), None, "stat.correlation", _CORRELATION.format("teff", "ln(radius)")
    ),
    Column("corr_teff_lum", pa.float32(), None, "stat.correlation", _CORRELATION.format("teff", "ln(lum)")),
    Column(
        "corr_teff_av",
        pa.float32(),
        None,
        "stat.correlation",
        _CORRELATION.format("teff", "av (av itself, not its logarithm)"),
    ),
    Column(
        "corr_radius_lum", pa.float32(), None, "stat.correlation", _CORRELATION.format("radius", "ln(lum)")
    ),
    Column("photosphere", pa.string(), None, "meta.code.class", "Photosphere model that was fitted"),
    Column(
        "ln_evidence_ratio",
        pa.float32(),
        None,
        "stat.likelihood",
        "Log odds of a bare blackbody against the calibrated photosphere, prior fraction included; null unless auto",
    ),
    Column(
        "photosphere_z1_p50",
        pa.float32(),
        None,
        "stat.value;stat.median",
        "Common departure z_1 of all bands from the mean photosphere, in sigmas of the reference stars, median",
    ),
    Column("photosphere_z1_lo68", pa.float32(), None, "stat.value", "z_1, lower end of the central 68 % interval"),
    Column("photosphere_z1_hi68", pa.float32(), None, "stat.value", "z_1, upper end of the central 68 % interval"),
    Column(
        "chi2",
        pa.float32(),
        None,
        "stat.fit.chi2",
        "Chi squared of the measured bands at the posterior mode (common departures fitted), with the total variance: "
        "errors, floors, own scatter, jitter",
    ),
    Column("n_bands", pa.int16(), None, "meta.number", "Number of bands fitted, upper limits included"),
    Column("n_limits", pa.int16(), None, "meta.number", "Number of bands fitted as upper limits"),
    Column(
        "ppp_value",
        pa.float32(),
        None,
        "stat.probability",
        "Posterior predictive p-value: mean over posterior draws of the chance "
        "of a chi squared at least as large, outlying bands allowed for",
    ),
)

_SAMPLING = (
    Column(
        "ess_bulk",
        pa.float32(),
        None,
        "stat.value",
        "Rank-normalised bulk effective sample size, the least over the parameters",
    ),
    Column(
        "ess_tail",
        pa.float32(),
        None,
        "stat.value",
        "Rank-normalised tail effective sample size, the least over the parameters",
    ),
    Column(
        "autocorr_steps",
        pa.float32(),
        None,
        "stat.value",
        "Integrated autocorrelation time in steps, the largest over the parameters",
    ),
    Column(
        "rhat_max",
        pa.float32(),
        None,
        "stat.value",
        "Rank-normalised split R-hat, the largest over the parameters",
    ),
    Column("n_steps", pa.int32(), None, "meta.number", "Steps each walker took after the burn-in"),
    Column(
        "accept_frac", pa.float32(), None, "stat.value", "Fraction of proposals accepted after the burn-in"
    ),
    Column("flags", pa.int32(), None, "meta.code.qual", "Quality flags, one bit each"),
    Column(
        "row_hash", pa.int64(), None, "meta.checksum", "Hash of the input values this row was fitted from"
    ),
)


def _quantile_columns() -> list[Column]:
    return [
        Column(f"{q.name}_{suffix}", pa.float32(), q.unit, f"{q.ucd};{ucd}", f"{q.title}, {text}")
        for q in QUANTITIES
        for suffix, ucd, text in _QUANTILES
    ]


def _band_columns(settings: Settings) -> list[Column]:
    """Return residual_<label> and outlier_<label>; without the outlier model there is no outlier column."""
    per_band = settings.output.per_band
    labels = [band.label for band in settings.input.photometry]
    columns = []
    if per_band in ("residual", "both"):
        columns += [
            Column(
                f"residual_{label}",
                pa.float32(),
                None,
                "stat.fit.residual",
                f"Observed minus model flux in {label} at the posterior mode, in sigmas (total variance)",
            )
            for label in labels
        ]
    if per_band == "both" and settings.model.outliers:
        columns += [
            Column(
                f"outlier_{label}",
                pa.float32(),
                None,
                "stat.probability",
                f"Posterior probability that the flux in {label} is an outlier",
            )
            for label in labels
        ]
    return columns


def fitted_columns(settings: Settings) -> list[Column]:
    """Return the columns a fit adds, in file order: all but the id and the carried columns."""
    return [*_quantile_columns(), *_SINGLE, *_band_columns(settings), *_SAMPLING]


def catalogue_columns(
    settings: Settings, id_field: pa.Field, carry_fields: Sequence[pa.Field]
) -> list[Column]:
    """Return every catalogue column in order: the id, the carried ones, the fitted ones.

    Raises
    ------
    SettingsError
        If the id or a carried column has the name of a fitted column.
    """
    columns = fitted_columns(settings)
    _refuse_collisions([id_field, *carry_fields], {column.name for column in columns}, "the catalogue")
    return [*map(Column.of, [id_field, *carry_fields]), *columns]


def _refuse_collisions(fields: Sequence[pa.Field], taken: set[str], where: str) -> None:
    clashes = [field.name for field in fields if field.name in taken]
    if clashes:
        names = ", ".join(repr(name) for name in clashes)
        raise SettingsError(
            f"input column {names} has the name of a column that {where} adds: "
            "rename it in the input tables, or leave it out of input.carry"
        )


def output_fields(schema: pa.Schema, settings: Settings) -> tuple[pa.Field, list[pa.Field]]:
    """Return the id field and the carried fields of an input schema, metadata included."""
    return schema.field(settings.input.id), [schema.field(name) for name in settings.input.carry]


def catalogue_schema(settings: Settings, id_field: pa.Field, carry_fields: Sequence[pa.Field]) -> pa.Schema:
    """Return the schema of the catalogue; id and carried fields keep their types and metadata.

    Raises
    ------
    SettingsError
        If the id or a carried column has the name of a fitted column.
    """
    catalogue_columns(settings, id_field, carry_fields)
    fitted = [column.field() for column in fitted_columns(settings)]
    return _versioned([id_field, *carry_fields, *fitted])


REJECTED = (
    Column(
        "input_file", pa.string(), None, "meta.dataset", "Input file, relative to the folder of the tables"
    ),
    Column("input_row", pa.int64(), None, "meta.record", "Row in the input file, counted from 0"),
    Column("reason", pa.string(), None, "meta.code.error", "Why the row was not fitted"),
    Column("detail", pa.string(), None, "meta.note", "The columns and values behind the reason"),
    Column(
        "kind", pa.string(), None, "meta.code.class", "data: the row itself; fault: the row made the fit fail"
    ),
)


def rejected_schema(id_field: pa.Field) -> pa.Schema:
    """Return the schema of the rejected rows: id, input_file, input_row, reason, detail, kind.

    Raises
    ------
    SettingsError
        If the id has the name of one of the other columns.
    """
    _refuse_collisions([id_field], {column.name for column in REJECTED}, "the rejected table")
    return _versioned([id_field.with_nullable(True), *(column.field() for column in REJECTED)])


def draws_schema(settings: Settings, id_field: pa.Field) -> pa.Schema:
    """Return the schema of the kept draws: the id and one float32 list of keep_draws values per quantity.

    Raises
    ------
    SettingsError
        If the id has the name of a quantity.
    """
    _refuse_collisions([id_field], {quantity.name for quantity in DRAWN}, "the table of draws")
    draws = pa.list_(pa.float32(), settings.sampling.keep_draws)
    return _versioned(
        [
            id_field,
            *(Column(q.name, draws, q.unit, q.ucd, f"{q.title}, posterior draws").field() for q in DRAWN),
        ]
    )


def index_schema() -> pa.Schema:
    """Return the schema of the index: how an unchanged row finds its result."""
    return _versioned(
        [
            Column("id_hash", pa.int64(), None, "meta.checksum", "Hash of the id").field(),
            Column("row_hash", pa.int64(), None, "meta.checksum", "Hash of the input values").field(),
            Column(
                "file", pa.string(), None, "meta.dataset", "File of the result, relative to the generation"
            ).field(),
            Column("row", pa.int64(), None, "meta.record", "Row in that file, counted from 0").field(),
        ]
    )


def _versioned(fields: Sequence[pa.Field]) -> pa.Schema:
    return pa.schema(fields, metadata={"starkiln.schema": SCHEMA_VERSION})
