"""One star of a published generation: its row, its input row, and a fit of it alone; reads only, and takes no lock."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from starkiln.engine.hashing import BATCH_ROWS
from starkiln.engine.keys import ROWS_VERSION
from starkiln.engine.lookup import (
    Generation,
    StarId,
    StoredRow,
    find_row,
    groups_that_may_hold,
    one_row,
    open_generation,
    parse_id,
    unknown,
)
from starkiln.engine.provenance import hashes, platform_facts, versions
from starkiln.engine.reasons import why_refit
from starkiln.errors import SettingsError, StarkilnError
from starkiln.flags import BY_NAME
from starkiln.settings import Settings, build_settings
from starkiln.stages.closeup import BandModel, BandValue, CloseUp, Spectrum, at_medians, close_up, observed_bands
from starkiln.stages.model import FitModel, build_model
from starkiln.tables.hashes import row_hashes
from starkiln.tables.source import Source, open_source, read_rows


@dataclass(frozen=True)
class InputRow:
    """A row of the input: a table of it alone, and its place."""

    table: pa.Table
    file: str
    row: int


@dataclass(frozen=True, kw_only=True)
class Star:
    """All that is known of one star of a generation.

    Attributes
    ----------
    star_id
        As the tables have it.
    stored
        Its row in the catalogue, or among the rejected rows.
    input_row, input_problem
        Its input row, or why it could not be found.
    observed
        What the input row holds in each band, None without it.
    closeup, refit_problem
        The star fitted again, or why that would not give the catalogue's numbers.
    differing
        The columns in which the new fit differs from the catalogue, and why it may.
    spectrum, bands
        The model, from the new fit or from the stored medians; None where there is none.
    draws
        Joint draws, from the new fit or as the run kept them; None without.
    """

    star_id: StarId
    generation: Generation
    settings: Settings | None
    model: FitModel | None
    stored: StoredRow
    input_row: InputRow | None = None
    input_problem: str = ""
    observed: list[BandValue] | None = None
    closeup: CloseUp | None = None
    refit_problem: str = ""
    differing: list[str] = field(default_factory=list)
    other_platform: str = ""
    spectrum: Spectrum | None = None
    bands: BandModel | None = None
    draws: dict[str, np.ndarray] | None = None


def find_star(run_dir: Path, text: str) -> Star:
    """Return one star of the published generation, fitted again if that gives the catalogue's numbers.

    Parameters
    ----------
    run_dir
        A run directory, or the folder of one generation.
    text
        The id as a user types it.

    Raises
    ------
    SettingsError
        If nothing is published there, or there is no such id.
    EnvironmentTrouble
        If a file of the generation cannot be read.
    """
    generation = open_generation(run_dir)
    star_id = parse_id(text, generation.id_field)
    stored = find_row(generation, star_id)
    if stored is None:
        raise SettingsError(unknown(generation, star_id))
    settings, problem = _settings(generation)
    if settings is None:
        return Star(
            star_id=star_id,
            generation=generation,
            settings=None,
            model=None,
            stored=stored,
            input_problem=problem,
            refit_problem=problem,
        )
    return _with_input(star_id, generation, settings, stored)


def _settings(generation: Generation) -> tuple[Settings | None, str]:
    path = generation.folder / "settings.toml"
    try:
        return build_settings(tomllib.loads(path.read_text())), ""
    except (OSError, ValueError, StarkilnError) as error:
        first_line = str(error).partition("\n")[0]
        return None, f"this version cannot read the generation's settings.toml ({first_line})"


def _with_input(star_id: StarId, generation: Generation, settings: Settings, stored: StoredRow) -> Star:
    """Add the input row, the model and, where it gives the same numbers, a new fit."""
    model, why = _model(generation, settings)
    input_row, input_problem = _find_input(star_id, settings)
    star = Star(
        star_id=star_id,
        generation=generation,
        settings=settings,
        model=model,
        stored=stored,
        input_row=input_row,
        input_problem=input_problem,
        observed=None if input_row is None or model is None else observed_bands(input_row.table, settings, model),
        refit_problem=why or _why_input(input_row, input_problem, stored, settings),
    )
    if stored.outcome == "rejected" or model is None:
        return star
    return _from_stored(star, model) if star.refit_problem else _refitted(star, model, settings)


def _model(generation: Generation, settings: Settings) -> tuple[FitModel | None, str]:
    """Return the model, and why a fit with it would not be the generation's."""
    try:
        model = build_model(settings)
    except StarkilnError as error:
        return None, f"the model cannot be built: {error}"
    return model, _why_not(generation, settings, model)


def _why_not(generation: Generation, settings: Settings, model: FitModel) -> str:
    """Return why a fit by this package would not be the generation's, as far as settings and files tell."""
    now = hashes(settings, model) | {"rows": ROWS_VERSION}
    then = generation.facts.get("hashes", {})
    if then.get("fit_key") == now["fit_key"]:
        return ""
    # The settings are the generation's own, so what differs is the package or a file that they name.
    reason = why_refit(then | {"rows": ROWS_VERSION}, now, settings.fit_settings(), settings.fit_settings(), [])
    return f"a fit would not be the one of this generation: {reason}"


def _why_input(found: InputRow | None, problem: str, stored: StoredRow, settings: Settings) -> str:
    if found is None:
        return problem
    if stored.row_hash is not None and int(row_hashes(found.table, settings)[0]) != stored.row_hash:
        return "the input row has changed since it was fitted (its row_hash differs)"
    return ""


def _find_input(star_id: StarId, settings: Settings) -> tuple[InputRow | None, str]:
    """Return the first input row that has an id and passes the filters, or why there is none."""
    try:
        source = open_source(settings)
        places = list(_input_places(star_id, source, settings))
        if not places:
            return None, f"no row of the input has this {settings.input.id} any more"
        file_index, row, group = places[0]
        columns = settings.used_columns()
        batches = read_rows(source, settings, [(file_index, group)], columns, BATCH_ROWS)
        (table,) = [found for batch in batches if (found := _row_of(batch.table, row)).num_rows]
    except StarkilnError as error:
        return None, f"the input cannot be read: {str(error).partition(chr(10))[0]}"
    copy = pa.array([1 if len(places) > 1 else 0], pa.int8())
    return InputRow(table.append_column("_duplicate", copy), source.files[file_index].name, row), ""


def _row_of(table: pa.Table, row: int) -> pa.Table:
    return table.filter(pc.equal(table["_input_row"], row))


def _input_places(star_id: StarId, source: Source, settings: Settings) -> Iterator[tuple[int, int, int]]:
    """Yield file, row and row group of the input rows that have an id and pass the filters, in input order."""
    name = settings.input.id
    wanted = pa.scalar(star_id, source.schema.field(name).type)
    for file_index, file in enumerate(source.files):
        for group in groups_that_may_hold(file.path, name, star_id):
            for batch in read_rows(source, settings, [(file_index, group)], [name], BATCH_ROWS):
                rows = batch.table["_input_row"].filter(pc.equal(batch.table[name], wanted))
                yield from ((file_index, row, group) for row in rows.to_pylist())


def _refitted(star: Star, model: FitModel, settings: Settings) -> Star:
    assert star.input_row is not None
    closeup = close_up(star.input_row.table, settings, model)
    differing = _differing(star.stored, closeup)
    then, now = star.generation.facts, {"platform": platform_facts(), "versions": versions()}
    changed = [
        f"{name} {then.get(part, {}).get(name)} -> {value}"
        for part, values in now.items()
        for name, value in values.items()
        if then.get(part, {}).get(name) != value
    ]
    return replace(
        star,
        closeup=closeup,
        differing=differing,
        other_platform=", ".join(changed) if differing else "",
        spectrum=closeup.mode,
        bands=closeup.bands,
        draws=closeup.draws,
    )


def _differing(stored: StoredRow, closeup: CloseUp) -> list[str]:
    """Return the columns whose stored value is not, bit for bit, what the new fit gives."""
    duplicate = BY_NAME["duplicate_id"].value
    differing = []
    for name, values in closeup.columns.items():
        if name not in stored.values:
            continue
        then, now = stored.values[name], values[0]
        if name == "flags":  # the mark of a repeated id is not the fit's
            then, now = then & ~duplicate, int(now) & ~duplicate
        if values.dtype.kind == "f":
            now = None if np.isnan(now) else float(np.float32(now))
        if then != now:
            differing.append(name)
    return differing


def _from_stored(star: Star, model: FitModel) -> Star:
    """Add the model at the stored medians, and the draws that the run kept."""
    values = star.stored.values
    draws = _kept_draws(star)
    teff_k, ang_diam_mas, av_mag = (values.get(f"{name}_p50") for name in ("teff", "ang_diam", "av"))
    if teff_k is None or ang_diam_mas is None or av_mag is None:
        return replace(star, draws=draws)
    rival = model.rival if values.get("photosphere") == "blackbody" else None
    spectrum, bands = at_medians(teff_k, ang_diam_mas, av_mag, rival or model)
    return replace(star, spectrum=spectrum, bands=bands, draws=draws)


def _kept_draws(star: Star) -> dict[str, np.ndarray] | None:
    """Return the draws of a star that its run kept; they lie as the catalogue's rows do."""
    path = star.generation.folder / "draws" / star.stored.file.removeprefix("catalogue/")
    if not path.is_file():
        return None
    row = one_row(path, star.stored.row)
    names = [name for name in row.column_names if name != star.generation.id_field.name]
    return {name: np.array(row[name][0].as_py() or [], np.float64) for name in names}
