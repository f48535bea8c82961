"""The settings of a forecast: the stars, bands and errors of a survey that has no data yet."""

from __future__ import annotations

from collections.abc import Iterator
from math import isfinite
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field

from starkiln.errors import nearest
from starkiln.settings.load import build_section, load_section
from starkiln.settings.models import (
    Input,
    Model,
    ParallaxColumns,
    PassbandFile,
    PhotometryColumns,
    Problem,
    Run,
    Sampling,
    Section,
    Settings,
)
from starkiln.settings.values import Count, FilePath, SnakeCase, Temperature


def _number_or_list(value: object) -> object:
    numbers: list[Any] = value if isinstance(value, list) else [value]
    if not numbers or any(isinstance(number, bool) or not isinstance(number, int | float) for number in numbers):
        raise ValueError("should be a number, or a list of numbers in square brackets")
    if any(not isfinite(number) or number <= 0 for number in numbers):
        raise ValueError("should be greater than 0")
    return value


NumberOrList = Annotated[float | list[float], BeforeValidator(_number_or_list)]


class ForecastRun(Section):
    """What the forecast is called and where its results go."""

    name: Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]*$")]
    """Name of the forecast."""
    output: FilePath
    """Folder for the table and the picture."""
    seed: Annotated[int, Field(ge=0, lt=2**63)] = 0
    """Seed of the invented stars and of the fits."""


class Brightness(Section):
    """How bright the stars are: observed magnitudes in one of the bands, dust included."""

    label: SnakeCase
    """Label of the band, one of [[forecast.band]]."""
    mag: list[float]
    """Magnitudes of the grid."""
    system: Literal["AB", "Vega"]
    """Zero of the magnitudes."""


class ForecastBand(Section):
    """A band, and how well it is measured."""

    passband: SnakeCase
    """Name of the passband, as `starkiln passbands` lists them, or one of [[passband]]."""
    label: SnakeCase = Field(default_factory=lambda known: known["passband"])
    """Names the band; unique. The passband's name unless given."""
    depth_mag: float
    """Magnitude of a star measured at 5 sigma: the error of the flux, the same for every star."""
    system: Literal["AB", "Vega"]
    """Zero of depth_mag."""
    floor: Annotated[float, Field(ge=0, lt=1)] = 0.0
    """Relative error added in quadrature, as a fraction of the model's flux."""
    zero_point_error: Annotated[float, Field(ge=0, lt=1)] | None = None
    """Relative error of the zero point, instead of the passband's own."""

    def columns(self) -> PhotometryColumns:
        """Return the columns of such a band in a table of fluxes in Jy."""
        return PhotometryColumns(
            passband=self.passband,
            label=self.label,
            value=f"flux_{self.label}",
            error=f"error_{self.label}",
            unit="Jy",
            zero_point_error=self.zero_point_error,
            floor=self.floor,
        )


class Forecast(Section):
    """The grid of stars, their bands, and which bands to try without."""

    temperature_k: list[Temperature]
    """Effective temperatures of the grid in kelvins."""
    radius_rsun: NumberOrList = 1.0
    """Radius in nominal solar radii: one number, or one for each temperature."""
    brightness: Brightness
    """Magnitudes of the grid."""
    parallax_error_mas: NumberOrList | None = None
    """Standard error of the parallax in milliarcseconds: one number, or one for each magnitude; none, no parallax."""
    stars: Count = 30
    """Stars at each point of the grid."""
    without: list[list[str]] = Field(default_factory=list)
    """Sets of bands, by label, to leave out for comparison."""
    band: list[ForecastBand]
    """The bands, one [[forecast.band]] each."""

    def problems(self) -> Iterator[Problem]:
        """Yield lists that are empty or do not match, and labels that no band has."""
        mags, labels = self.brightness.mag, [band.label for band in self.band]
        for loc, grid in ((("temperature_k",), self.temperature_k), (("brightness", "mag"), mags)):
            if not grid or len(set(grid)) < len(grid):
                yield loc, "should be a list of different numbers in square brackets"
        for key, grid, what in (
            ("radius_rsun", self.temperature_k, "temperatures"),
            ("parallax_error_mas", mags, "magnitudes"),
        ):
            values = getattr(self, key)
            if isinstance(values, list) and len(values) != len(grid):
                yield (key,), f"has {len(values)} values for {len(grid)} {what}: give one for each, or one for all"
        if len(self.band) < 2:
            yield ("band",), "should hold two bands at least: describe each with a [[forecast.band]] table"
        for index, label in enumerate(labels):
            if label in labels[:index]:
                yield ("band", index, "label"), f'{label!r} is taken: add label = "..." of its own'
        if self.brightness.label not in labels:
            yield ("brightness", "label"), _no_band(self.brightness.label, labels)
        yield from self._problems_without(labels)

    def _problems_without(self, labels: list[str]) -> Iterator[Problem]:
        for index, left_out in enumerate(self.without):
            unknown = [label for label in left_out if label not in labels]
            for label in unknown:
                yield ("without", index), _no_band(label, labels)
            if not left_out or set(left_out) in [set(earlier) for earlier in self.without[:index]]:
                yield ("without", index), "should name bands to leave out, a set of its own each time"
            elif not unknown and len(set(labels) - set(left_out)) < 2:
                yield ("without", index), "leaves fewer than two bands: no temperature can be had from them"

    def radii_rsun(self) -> list[float]:
        """Return the radius at each temperature."""
        return _for_each(self.radius_rsun, self.temperature_k)

    def parallax_errors_mas(self) -> list[float] | None:
        """Return the error of the parallax at each magnitude; None without parallaxes."""
        return None if self.parallax_error_mas is None else _for_each(self.parallax_error_mas, self.brightness.mag)

    def band_sets(self) -> dict[str, list[str]]:
        """Return the labels used in each set of bands by the set's name, all of them first."""
        labels = [band.label for band in self.band]
        sets = {ALL_BANDS: labels}
        for left_out in self.without:
            sets["without " + ", ".join(left_out)] = [label for label in labels if label not in left_out]
        return sets


ALL_BANDS = "all"


class ForecastSettings(Section):
    """The settings of a forecast."""

    run: ForecastRun
    forecast: Forecast
    passband: list[PassbandFile] = Field(default_factory=list)
    model: Model = Model()
    sampling: Sampling = Sampling()

    def problems(self) -> Iterator[Problem]:
        """Yield stars that the model excludes, and settings that need data."""
        for loc, values, bounds, key in (
            (("forecast", "temperature_k"), self.forecast.temperature_k, self.model.temperature_k, "temperature_k"),
            (("forecast", "radius_rsun"), self.forecast.radii_rsun(), self.model.radius_rsun, "radius_rsun"),
        ):
            if outside := [value for value in values if not bounds[0] <= value <= bounds[1]]:
                yield loc, f"holds {outside[0]:g}, outside model.{key}, [{bounds[0]:g}, {bounds[1]:g}]"
        columns: dict[tuple[str, str, str], Any] = {
            ("model", "extinction", "scale"): self.model.extinction.scale,
            ("model", "extinction", "mean"): self.model.extinction.mean,
            ("model", "distance", "length_scale_pc"): self.model.distance.length_scale_pc,
        }
        for place, value in columns.items():
            if isinstance(value, str):
                yield place, f"names the column {value!r}, and a forecast has no table: give a number"
        if self.sampling.keep_draws:
            yield ("sampling", "keep_draws"), "has no use in a forecast: remove it"

    def run_settings(self) -> Settings:
        """Return the settings that would fit such stars from a table of fluxes and errors in Jy."""
        forecast = self.forecast
        parallax = ParallaxColumns(value="parallax", error="parallax_error", unit="mas")
        return Settings(
            run=Run(name=self.run.name, output=self.run.output, seed=self.run.seed),
            input=Input(
                tables=str(self.run.output / "stars.parquet"),
                id="id",
                min_bands=2,
                parallax=None if forecast.parallax_error_mas is None else parallax,
                photometry=[band.columns() for band in forecast.band],
            ),
            passband=self.passband,
            model=self.model,
            sampling=self.sampling,
        )


def load_forecast(path: str | Path) -> ForecastSettings:
    """Return the settings of a forecast's TOML file, its relative paths taken from the file's folder.

    Raises
    ------
    SettingsError
        If the file cannot be read, is no TOML, or holds anything wrong; all problems are named at once.
    """
    return load_section(ForecastSettings, Path(path))


def build_forecast(data: dict[str, Any], folder: str | Path = "") -> ForecastSettings:
    """Return the settings of a forecast held by nested dictionaries, as a TOML file would give them.

    Raises
    ------
    SettingsError
        If anything is wrong; all problems are named at once.
    """
    return build_section(ForecastSettings, data, folder)


def forecast_schema() -> dict[str, Any]:
    """Return the JSON Schema of a forecast's settings."""
    return {"$schema": "https://json-schema.org/draft/2020-12/schema"} | ForecastSettings.model_json_schema()


def _for_each(values: float | list[float], grid: list[float]) -> list[float]:
    return values if isinstance(values, list) else [values] * len(grid)


def _no_band(label: str, labels: list[str]) -> str:
    return f"{label!r} is the label of no band{nearest(label, labels)}"
