"""The settings of a run as models: every key, its meaning, its default and what it must satisfy."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    Tag,
    ValidationError,
    model_validator,
)
from pydantic_core import InitErrorDetails, PydanticCustomError

from starkiln.settings.values import (
    AngleUnit,
    Count,
    FilePath,
    FluxKind,
    FluxUnit,
    LengthUnit,
    Memory,
    NumberOrColumn,
    Positive,
    PositiveOrColumn,
    PositiveRange,
    SnakeCase,
    TablesPath,
    TemperatureRange,
    Text,
    Where,
    Workers,
    conditions,
    flux_kind,
    memory_bytes,
)

Problem = tuple[tuple[str | int, ...], str]


class Section(BaseModel):
    """A table of the settings: unknown keys are errors, values are never converted or changed."""

    model_config = ConfigDict(
        strict=True, frozen=True, extra="forbid", allow_inf_nan=False, use_attribute_docstrings=True
    )

    def problems(self) -> Iterator[Problem]:
        """Yield what is wrong between keys that are right by themselves: where, and what to do."""
        yield from ()

    @model_validator(mode="after")
    def _has_no_problems(self) -> Section:
        found: list[InitErrorDetails] = [
            {"type": PydanticCustomError("problem", "{text}", {"text": text}), "loc": loc, "input": None}
            for loc, text in self.problems()
        ]
        if found:
            raise ValidationError.from_exception_data(type(self).__name__, found)
        return self


class Run(Section):
    """What the run is called and where its results go."""

    name: Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]*$")]
    """Name of the run; a run directory belongs to one name."""
    output: FilePath
    """The run directory."""
    seed: Annotated[int, Field(ge=0, lt=2**63)] = 0
    """Seed of every star's random numbers."""
    keep_generations: Count = 2
    """How many published generations to keep."""


class ParallaxColumns(Section):
    """The parallax and its error."""

    value: Text
    """Column of the parallax; negative values are data."""
    error: Text
    """Column of its standard error."""
    unit: AngleUnit
    """Unit of both, an angle."""
    zero_point: NumberOrColumn = 0.0
    """Subtracted from the parallax, in the same unit: a number or a column."""
    error_scale: PositiveOrColumn = 1.0
    """Multiplies the error: a number or a column."""


class DistanceColumns(Section):
    """A distance with a Gaussian error."""

    value: Text
    """Column of the distance."""
    error: Text
    """Column of its standard error."""
    unit: LengthUnit
    """Unit of both, a length."""


class PhotometryColumns(Section):
    """The columns of one band."""

    passband: SnakeCase
    """Name of the passband, as `starkiln passbands` lists them, or one of [[passband]]."""
    label: SnakeCase = Field(default_factory=lambda known: known["passband"])
    """Names the band's output columns; unique. The passband's name unless given."""
    value: Text
    """Column of the flux density or magnitude."""
    error: Text
    """Column of its standard error."""
    unit: FluxUnit
    """Unit of both: of flux density per frequency or per wavelength, or "mag"."""
    system: Literal["AB", "Vega"] | None = None
    """Zero of the magnitudes: "AB" or "Vega"; for "mag" only."""
    zero_point_jy: Positive | None = None
    """Flux density of magnitude zero in Jy, instead of the passband's own; for "mag" only."""
    zero_point_error: Annotated[float, Field(ge=0, lt=1)] | None = None
    """Relative error of the zero point, instead of the passband's own."""
    floor: Annotated[float, Field(ge=0, lt=1)] = 0.0
    """Relative error added in quadrature, as a fraction of the model's flux."""
    bad: Text | None = None
    """Boolean column: where true, the band is left out of that row."""
    limit: Text | None = None
    """Boolean column: where true, the value is an upper limit."""
    limit_sigma: Positive = 3.0
    """At how many sigma upper limits are drawn."""

    @property
    def flux_kind(self) -> FluxKind:
        """What the values are: "f_nu", "f_lambda" or "mag"."""
        return flux_kind(self.unit)

    def columns(self) -> list[str]:
        """Return the columns of the band, in settings order."""
        return [name for name in (self.value, self.error, self.bad, self.limit) if name is not None]

    def problems(self) -> Iterator[Problem]:
        """Yield magnitudes without a system, keys that only magnitudes have, one column for two things."""
        if self.unit == "mag" and self.system is None:
            yield ("system",), 'is missing: magnitudes need their zero, add system = "AB" or system = "Vega"'
        for key in ("system", "zero_point_jy"):
            if self.unit != "mag" and getattr(self, key) is not None:
                yield (key,), f'is for unit = "mag" only, and the unit here is {self.unit!r}: remove it'
        if len(set(self.columns())) < len(self.columns()):
            yield (), "names one column twice: value, error, bad and limit are columns of their own"


class Input(Section):
    """The tables to read, and what their columns mean."""

    tables: TablesPath
    """A Parquet file, a folder of them, a glob pattern, or a hive layout."""
    id: Text
    """Column of the star's id, integer or string."""
    carry: list[Text] = []
    """Columns copied to the output as they are."""
    where: Where | None = None
    """Rows to keep, as pyarrow filters: conditions that must all hold, or a list of such lists."""
    only: FilePath | None = None
    """A Parquet file: keep the rows whose id is in its column of the same name."""
    on_bad_file: Literal["stop", "skip"] = "stop"
    """What to do when a file cannot be used: "stop", or "skip" to leave it out and name it."""
    min_bands: Count = 3
    """Rows with fewer usable bands are rejected."""
    parallax: ParallaxColumns | None = None
    """The parallax columns, if there are any."""
    distance: DistanceColumns | None = None
    """The distance columns, instead of parallaxes."""
    photometry: list[PhotometryColumns]
    """The bands, one [[input.photometry]] each."""

    def problems(self) -> Iterator[Problem]:
        """Yield clashes between bands, and between columns that exclude each other."""
        if self.parallax and self.distance:
            yield ("distance",), "cannot stand beside [input.parallax]: keep the one to use"
        if not self.photometry:
            yield ("photometry",), "is empty: describe each band with an [[input.photometry]] table"
        elif self.min_bands > len(self.photometry):
            yield ("min_bands",), f"is {self.min_bands}, but only {len(self.photometry)} bands are described"
        for index, label in _repeats(band.label for band in self.photometry):
            yield ("photometry", index, "label"), f'{label!r} is taken: add label = "..." of its own'
        for index, column in _repeats(band.value for band in self.photometry):
            yield ("photometry", index, "value"), f"column {column!r} is already the value of another band"
        for index, column in _repeats(self.carry):
            yield ("carry", index), f"{column!r} is listed twice"
        if self.id in self.carry:
            yield ("carry", self.carry.index(self.id)), f"{self.id!r} is the id, always copied: remove it"


class PassbandFile(Section):
    """A passband of the user's own."""

    name: SnakeCase
    """Name to use in [[input.photometry]]."""
    curve: FilePath
    """The response curve, an ECSV or VOTable file with units."""
    detector: Literal["photon", "energy"]
    """What the detector counts, which tells how the curve weighs a spectrum."""
    zero_point_jy: Positive | None = None
    """Flux density of Vega magnitude zero in Jy; AB magnitudes need none."""
    zero_point_error: Annotated[float, Field(ge=0, lt=1)] = 0.0
    """Relative error of the zero point."""
    source: str = ""
    """Where the curve comes from."""


class Outliers(Section):
    """The share of bands that have nothing to do with the star, and how far off they lie."""

    fraction: Annotated[float, Field(ge=1e-6, lt=0.5)] = 0.02
    """Expected fraction of outlying bands."""
    width: Annotated[float, Field(gt=1, le=1000)] = 10.0
    """Their scatter, in units of the band's total error."""


class BlackbodyOption(Section):
    """The bare blackbody as one of two answers, for photosphere = "auto"."""

    scatter: Annotated[float, Field(ge=0, lt=0.5)] = 0.015
    """Scatter of its own in every band, as a fraction of the flux."""
    fraction: Annotated[float, Field(gt=0, lt=1)] = 0.02
    """Expected fraction of blackbodies among the stars."""


class Extinction(Section):
    """Dust in front of the star, and what is known of it beforehand."""

    law: Text = "G23"
    """The extinction law, named as in the dust_extinction package."""
    rv: Positive = 3.1
    """Ratio of total to selective extinction R_V."""
    prior: Literal["half-normal", "exponential", "gaussian", "fixed"] = "half-normal"
    """Prior of A_V, truncated to [0, max]."""
    scale: PositiveOrColumn = 0.3
    """Scale of the prior in magnitudes (the sigma of "gaussian"): a number or a column."""
    mean: NumberOrColumn = 0.0
    """Mean of "gaussian", or the value of "fixed", in magnitudes: a number or a column."""
    max: Annotated[float, Field(gt=0, le=100)] = 6.0
    """Largest A_V in magnitudes."""

    def columns(self) -> list[str]:
        """Return the columns that give the prior."""
        return [name for name in (self.scale, self.mean) if isinstance(name, str)]

    def problems(self) -> Iterator[Problem]:
        """Yield parameters that the chosen prior lacks or cannot use."""
        if self.prior == "gaussian":
            for key in sorted({"mean", "scale"} - self.model_fields_set):
                yield (key,), 'is missing: prior = "gaussian" needs mean and scale, in magnitudes'
        elif self.prior == "fixed":
            if isinstance(self.scale, str):
                yield ("scale",), 'has no use with prior = "fixed": name the column in mean'
            if not isinstance(self.mean, str) and not 0 <= self.mean <= self.max:
                yield ("mean",), f"is {self.mean:g}, but a fixed A_V lies between 0 and max ({self.max:g})"
        elif self.mean != 0:
            yield ("mean",), f"has no use with prior = {self.prior!r}: remove it"


class DistancePrior(Section):
    """What is known of distances beforehand."""

    prior: Literal["exponential-density"] = "exponential-density"
    """Space density of the stars as it falls with distance."""
    length_scale_pc: PositiveOrColumn = 1350.0
    """Its scale in parsecs: a number or a column."""
    bounds_pc: PositiveRange = (0.1, 2e5)
    """Least and largest distance in parsecs."""


class Model(Section):
    """The model of a star, and the priors of its parameters."""

    photosphere: Literal["blackbody", "calibrated", "auto"] = "calibrated"
    """The light of a bare star: a blackbody, one with the departures of real stars, or whichever the data prefer."""
    departures: Annotated[Literal["builtin"] | FilePath, Field(union_mode="left_to_right")] = "builtin"
    """Departures from a blackbody: "builtin", or a file that `starkiln calibrate` wrote."""
    blackbody: BlackbodyOption = BlackbodyOption()
    """The blackbody of "auto"."""
    jitter: bool = False
    """Whether to fit a fractional scatter common to all bands of a star."""
    temperature_k: TemperatureRange = (1500.0, 60000.0)
    """Least and largest effective temperature in kelvins."""
    radius_rsun: PositiveRange = (1e-3, 3e3)
    """Least and largest radius in nominal solar radii."""
    outliers: Annotated[
        Annotated[Outliers, Tag("<table>")] | Annotated[Literal[False], Tag("<false>")],
        Discriminator(lambda value: "<false>" if value is False else "<table>"),
    ] = Outliers()
    """Bands that have nothing to do with the star; false means there are none."""
    extinction: Extinction = Extinction()
    """Dust."""
    distance: DistancePrior = DistancePrior()
    """Prior of the distance."""


class Sampling(Section):
    """How long each star is sampled."""

    walkers: Annotated[int, Field(ge=8, multiple_of=2)] = 32
    """Walkers per star: even, and at least twice the number of parameters plus one."""
    effective_samples: Count = 1000
    """Stop when every parameter has this many independent samples."""
    max_steps: Annotated[int, Field(ge=64)] = 4000
    """Stop here in any case."""
    keep_draws: Annotated[int, Field(ge=0)] = 0
    """Posterior draws per star to store."""


class Output(Section):
    """What the catalogue holds, and how it is cut into files."""

    per_band: Literal["residual", "both", "none"] = "both"
    """Columns per band: residuals, residuals and outlier probabilities, or none."""
    rows_per_file: Count = 500000
    """Rows of a catalogue file."""
    layout: Literal["flat", "hive"] = "flat"
    """"flat", or "hive" to keep the partition folders of the input."""


class Calibrate(Section):
    """Reference stars to learn departures from, for `starkiln calibrate`; they are rows of input.tables."""

    output: FilePath
    """The file of departures to write (ECSV); the pictures go beside it."""
    teff: Text
    """Column of the effective temperature in kelvins."""
    radius: Text | None = None
    """Column of the radius in nominal solar radii; the distance comes from input.parallax or input.distance."""
    angular_diameter: Text | None = None
    """Column of the angular diameter in milliarcseconds, instead of a radius."""
    fbol: Text | None = None
    """Column of the bolometric flux in W/m2, instead of a radius."""
    av: NumberOrColumn = 0.0
    """Extinction A_V of the stars in magnitudes: a number or a column."""
    good: Text | None = None
    """Boolean column: only rows where it is true are used."""
    factors: Literal["auto", 0, 1] = "auto"
    """Number of common factors, beside the scatter of the temperature scale; "auto" leaves it to cross-validation."""
    train: Annotated[float, Field(gt=0, lt=1)] = 0.5
    """Share of the stars that the held-out figures are learnt from; the file is learnt from all."""

    def columns(self) -> list[str]:
        """Return the columns that describe the reference stars."""
        names = [self.teff, self.radius, self.angular_diameter, self.fbol, self.good]
        return [name for name in names if name is not None] + ([self.av] if isinstance(self.av, str) else [])

    def problems(self) -> Iterator[Problem]:
        """Yield what keeps the size of the stars from being known, or makes it known twice."""
        given = [key for key in ("radius", "angular_diameter", "fbol") if getattr(self, key) is not None]
        if len(given) != 1:
            yield (), f"needs one of radius, angular_diameter and fbol, and has {' and '.join(given) or 'none'}"


def _scratch(value: object) -> object:
    return None if value == "" else value


class Compute(Section):
    """The machine's share in a run; nothing here changes a result."""

    workers: Workers = "auto"
    """Worker processes; "auto" goes by the processors and memory that this process may use."""
    rows_per_part: Count = 5000
    """Rows of a part, the unit of work and of restart."""
    row_seconds: Positive = 45.0
    """Seconds after which a row counts as hung; limits of whole parts follow from it."""
    memory_per_worker: Memory = "2GB"
    """Memory that each worker may use."""
    scratch: Annotated[FilePath | None, BeforeValidator(_scratch)] = None
    """Folder for temporary files; inside the run directory unless given."""

    @property
    def memory_per_worker_bytes(self) -> int:
        """The memory of a worker in bytes."""
        return memory_bytes(self.memory_per_worker)


class Settings(Section):
    """The settings of a run."""

    run: Run
    input: Input
    passband: list[PassbandFile] = []
    model: Model = Model()
    sampling: Sampling = Sampling()
    output: Output = Output()
    compute: Compute = Compute()
    calibrate: Calibrate | None = None

    def problems(self) -> Iterator[Problem]:
        """Yield clashes between sections."""
        for index, name in _repeats(file.name for file in self.passband):
            yield ("passband", index, "name"), f"{name!r} is the name of two passbands"
        if self.calibrate and self.calibrate.radius and not (self.input.parallax or self.input.distance):
            yield ("calibrate", "radius"), "needs distances: add [input.parallax] or [input.distance]"
        if Path(self.input.tables) in (self.run.output, *self.run.output.parents):
            yield ("run", "output"), "lies inside input.tables: the next run would read its results as input"

    def fit_columns(self) -> list[str]:
        """Return every input column that can change a fit: the id, then in settings order, none twice."""
        columns = [self.input.id]
        if parallax := self.input.parallax:
            columns += [parallax.value, parallax.error]
            columns += [name for name in (parallax.zero_point, parallax.error_scale) if isinstance(name, str)]
        if distance := self.input.distance:
            columns += [distance.value, distance.error]
        for band in self.input.photometry:
            columns += band.columns()
        columns += self.model.extinction.columns()
        if isinstance(self.model.distance.length_scale_pc, str):
            columns.append(self.model.distance.length_scale_pc)
        return list(dict.fromkeys(columns))

    def used_columns(self) -> list[str]:
        """Return every input column read into a fit or copied: the fit's columns, then the carried ones."""
        return list(dict.fromkeys(self.fit_columns() + self.input.carry))

    def filter_columns(self) -> list[str]:
        """Return the columns that `input.where` looks at, none twice."""
        return list(dict.fromkeys(condition[0] for condition in conditions(self.input.where or [])))

    def fit_settings(self) -> dict[str, Any]:
        """Return, in terms of JSON, exactly the settings that can change a fit or whether a row is fitted.

        Column names and paths are left out: the values themselves are hashed row by row, and the curves by
        their contents. Where a number can stand for a column, a column is told by the word alone.
        """
        model, named = self.model, {band.passband for band in self.input.photometry}
        return {
            "seed": self.run.seed,
            "min_bands": self.input.min_bands,
            "parallax": _meaning(self.input.parallax),
            "distance": _meaning(self.input.distance),
            "photometry": [_meaning(band) for band in self.input.photometry],
            "passband": [_meaning(file) for file in self.passband if file.name in named],
            "model": model.model_dump(mode="json")
            | {"extinction": _meaning(model.extinction), "distance": _meaning(model.distance)}
            | {"departures": "builtin" if model.departures == "builtin" else "file"},
            "sampling": self.sampling.model_dump(),
        }


def _meaning(section: Section | None) -> dict[str, Any] | None:
    """Return what a section says of its values, without the names of columns and files."""
    if section is None:
        return None
    names = {"value", "error", "bad", "limit", "curve", "source"}
    number_or_column = {"zero_point", "error_scale", "scale", "mean", "length_scale_pc"}
    return {
        key: "column" if key in number_or_column and isinstance(value, str) else value
        for key, value in section.model_dump(mode="json", exclude=names).items()
    }


def _repeats(names: Iterable[str]) -> Iterator[tuple[int, str]]:
    seen = set()
    for index, name in enumerate(names):
        if name in seen:
            yield index, name
        seen.add(name)
