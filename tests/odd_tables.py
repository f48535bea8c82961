"""Odd surveys for fuzzing: any types, units, ids, names and values that tables come with; and stages that fit nothing.

Choices that shape a survey are Hypothesis's; cells come from a generator of random numbers that it seeds.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from hypothesis import strategies as st

from starkiln.engine.job import Stages
from starkiln.flags import BY_NAME
from starkiln.physics.passbands import Passband, load_passband
from starkiln.settings import Settings
from starkiln.stages.ingest import ingest
from starkiln.stages.process import PartTables
from starkiln.tables.columns import catalogue_schema, draws_schema, output_fields
from starkiln.tables.hashes import row_hashes

TAG = "tag"
"""A carried column that numbers the rows of a survey, whatever its ids."""

FIELD = "field"
"""A column that filters ask for."""

BANDS = ("panstarrs_g", "panstarrs_r", "panstarrs_i", "2mass_j")

ODD_FLOATS = (
    *(np.nan, np.inf, -np.inf, 0.0, -0.0, -1.0, 99.0, -999.0, 1e308, -1e308, 5e-324, 1e30, 1e-30, 1e19),
    *(50.0, 50.1, 2.0**53 + 1, float(np.finfo(np.float32).tiny)),
)
ODD_TEXTS = (
    *("", " ", "a", "A", "\0", "a\0", "é", "e\u0301", "星", "🌟", "x" * 3000, "1", "01", "-1", "nan", "None", "NULL"),
    *("'; DROP TABLE parts; --", "<script>alert(1)</script>", "../../etc/passwd", "$(touch x)", "a\nb", "\ufeff", "%s"),
)
ODD_INTEGERS = (0, 1, -1, 2**31, -(2**31), 2**53 + 1, 2**63 - 1, -(2**63), 2**64 - 1)
NAMES = (
    *("flux", "Flux", "flux g", "α", "f.g", "a/b", "x'y", 'x"y', "`f`", "f[0]", "f;g", "%d", "flux\n", "-", "_f"),
    *("row_hash", "reason", "file", "row", "input_file", "id_hash", "__index__"),
)
OWN_NAMES = ("_input_row", "_input_file", "_duplicate", "_source", "_source_row", "teff_p50", "flags")
FILE_NAMES = (
    *("a", "b", "c", "b c", "ü", "it's", 'x"y', "new\nline", "100%", "a;b", "星", "--help", "$(touch x)", "a" * 200),
    *("sub/a", "sub/deeper/a", "%41", "a.b", "~", "a=b"),
)
FOLDERS = (
    "region=1",
    "region=2",
    "region=02",
    "region=ä",
    "region=a%2Fb",
    "region=__HIVE_DEFAULT_PARTITION__",
    "region=",
)
WRONG_BYTES = (b"", b"PAR1", b"PAR1PAR1", b"no table\n" * 30)
UNITS = {"nJy": "f_nu", "Jy": "f_nu", "erg / (s cm2 Hz)": "f_nu", "W / (m2 um)": "f_lambda", "mag": "mag"}
PARALLAX = {"value": "parallax", "error": "error"}
STATED = ("", "nJy", "Jy", "mag", "mag(AB)", "uJy", "1e-9 Jy", "K", "furlong", "10**-9 Jy", "é")

NUMBER_TYPES = (
    *(pa.float64(), pa.float32(), pa.float16(), pa.int8(), pa.int16(), pa.int64(), pa.uint8(), pa.uint64()),
    *(pa.dictionary(pa.int32(), pa.float64()),),
)
ID_TYPES = (
    *(pa.int64(), pa.string(), pa.int8(), pa.int32(), pa.uint16(), pa.uint64(), pa.large_string(), pa.string_view()),
    *(pa.dictionary(pa.int16(), pa.string()), pa.dictionary(pa.int8(), pa.int64())),
)
CARRIED_TYPES = (
    *(pa.float64(), pa.float32(), pa.int16(), pa.string(), pa.bool_(), pa.timestamp("ns", "UTC"), pa.timestamp("s")),
    *(pa.dictionary(pa.int8(), pa.string()), pa.float16()),
)
MARK_TYPES = (pa.bool_(), pa.int8(), pa.uint64())
WRONG_TYPES = (
    *(pa.decimal128(20, 3), pa.string(), pa.bool_(), pa.float64(), pa.binary(), pa.null(), pa.timestamp("us")),
    *(pa.date32(), pa.list_(pa.int8())),
)


@dataclass(frozen=True)
class Survey:
    """Tables as row groups by file name without its ending (or bytes that are no table), and settings beside them."""

    files: dict[str, list[pa.Table] | bytes]
    settings: dict[str, Any]
    targets: pa.Table | None = None
    keep: frozenset[str] | None = None

    def write(self, folder: Path) -> None:
        """Write the files below a folder."""
        for name, groups in self.files.items():
            path = folder / "tables" / f"{name}.parquet"
            path.parent.mkdir(parents=True, exist_ok=True)
            if isinstance(groups, bytes):
                path.write_bytes(groups)
                continue
            with pq.ParquetWriter(path, groups[0].schema) as writer:
                for group in groups:
                    writer.write_table(group)
        if self.targets is not None:
            pq.write_table(self.targets, folder / "targets")

    def changed(self, how: str, seed: int) -> Survey:
        """Return the survey another night: its files renamed, its rows in other groups, some gone, or other values."""
        random = np.random.default_rng(seed)
        tables = {name: pa.concat_tables(g) for name, g in self.files.items() if not isinstance(g, bytes)}
        others = {name: groups for name, groups in self.files.items() if isinstance(groups, bytes)}
        if how == "renamed":
            files = {str(Path(name).with_name(f"{99 - k}")): [table] for k, (name, table) in enumerate(tables.items())}
        elif how == "in other groups":
            whole = pa.concat_tables(tables.values(), promote_options="default")
            files = {f"all{k}": [whole[k : k + 5], whole[k + 5 : k + 7]] for k in range(0, max(1, len(whole)), 7)}
        elif how == "some gone":
            files = {name: [table[: len(table) // 3], table[len(table) // 2 :]] for name, table in tables.items()}
        else:
            inputs = self.settings["input"]
            column = inputs["carry"][-1] if how == "carried" else inputs["photometry"][0]["value"]
            files = {name: [_shuffled(random, table, column)] for name, table in tables.items()}
        return Survey(files | others, self.settings, self.targets, self.keep)

    def rows(self) -> dict[tuple[str, int], dict[str, Any]]:
        """Return id, tag and field of each row, by file name and row."""
        found = {}
        for name, groups in self.files.items():
            if not isinstance(groups, bytes):
                table = pa.concat_tables(group.select([self.settings["input"]["id"], TAG, FIELD]) for group in groups)
                columns = (column.to_pylist() for column in table.columns)
                for row, (star, tag, where) in enumerate(zip(*columns, strict=True)):
                    found[f"{name}.parquet", row] = {"id": star, "tag": tag, "field": where}
        return found

    def selects(self, row: dict[str, Any]) -> bool:
        """Return whether a row passes the filters."""
        if self.keep is not None and row["field"] not in self.keep:
            return False
        return self.targets is None or (row["id"] is not None and row["id"] in self._wanted())

    def _wanted(self) -> set[Any]:
        assert self.targets is not None
        return set(self.targets.column(0).to_pylist())


@dataclass
class Layout:
    """The columns of a survey's tables beside the id: type, unit in the metadata, and what the values are.

    The missing one has no value in the file at hand, and the type null.
    """

    types: dict[str, tuple[pa.DataType, str, str]] = field(default_factory=dict)
    missing: str = ""


def _shuffled(random: np.random.Generator, table: pa.Table, column: str) -> pa.Table:
    """Exchange values of a column between rows."""
    place = table.column_names.index(column)
    return table.set_column(
        place, table.schema.field(place), table[column].take(pa.array(random.permutation(len(table))))
    )


def sometimes(draw: Any, ordinary: Any, odd: Any, chance: int = 4) -> Any:
    """Draw what is ordinary most of the time, and something odd one time in so many."""
    # Not the ends of the range, which Hypothesis likes to draw.
    return draw(st.sampled_from(odd)) if draw(st.integers(0, 2 * chance)) in (chance - 1, chance) else ordinary


def some_type(draw: Any, kinds: Any) -> pa.DataType:
    """Draw a type: the first, one that does as well, or now and then one that does not."""
    return sometimes(draw, sometimes(draw, kinds[0], kinds), WRONG_TYPES, 100)


@st.composite
def surveys(draw: Any) -> Survey:
    """Surveys of a few small files; most can be run, some must be refused."""
    layout = Layout()
    data = _input_settings(draw, layout)
    id_type = sometimes(draw, sometimes(draw, pa.int64(), ID_TYPES, 2), WRONG_TYPES, 50)
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    oddness = draw(st.sampled_from([0.0, 0.05, 0.3, 1.0]))
    names = draw(st.lists(st.sampled_from(FILE_NAMES), min_size=1, max_size=4, unique=True))
    if sometimes(draw, False, [True]):
        names = [f"{draw(st.sampled_from(FOLDERS))}/{number}" for number in range(len(names))]
    files: dict[str, list[pa.Table] | bytes] = {}
    first = 0
    for name in names:
        groups = []
        layout.missing = sometimes(draw, "", list(layout.types), 5)
        for rows in draw(st.lists(st.integers(1, 10).map(lambda rows: rows % 10), min_size=1, max_size=3)):
            groups.append(_table(random, oddness, rows, id_type, layout, data["input"]["id"], first))
            first += rows
        files[name] = sometimes(draw, groups, WRONG_BYTES, 40)
    return _filtered(draw, Survey(files, data))


def _input_settings(draw: Any, layout: Layout) -> dict[str, Any]:
    """Draw settings, and lay down the columns that they name."""
    names = sometimes(draw, NAMES, [OWN_NAMES], 20)
    star = sometimes(draw, "star_id", names, 6)
    used = {TAG, FIELD, star}

    def column(kinds: Any, values: str, unit: str = "") -> str:
        name = sometimes(draw, f"c{len(used)}", names, 6)
        if name in used:
            name = f"{name}{len(used)}"
        used.add(name)
        layout.types[name] = (sometimes(draw, kinds[0], kinds), sometimes(draw, "", [unit]), values)
        return name

    data: dict[str, Any] = {
        "tables": "tables",
        "id": star,
        "carry": [TAG],
        "min_bands": draw(st.integers(1, 3)),
        "on_bad_file": draw(st.sampled_from(["stop", "skip"])),
        "photometry": [_band(draw, column, passband) for passband in BANDS],
    }
    if draw(st.booleans()):
        data["carry"].append(column(CARRIED_TYPES, "any"))
    if draw(st.booleans()):
        unit = sometimes(draw, "mas", ["arcsec", "deg"])
        data["parallax"] = {key: column(NUMBER_TYPES, values, unit) for key, values in PARALLAX.items()} | {
            "unit": unit
        }
        data["parallax"]["error_scale"] = sometimes(draw, 1.0, [column(NUMBER_TYPES, "error")])
    elif draw(st.booleans()):
        unit = sometimes(draw, "pc", ["kpc", "lyr"])
        data["distance"] = {key: column(NUMBER_TYPES, "error", unit) for key in PARALLAX} | {"unit": unit}
    scale = sometimes(draw, 0.3, [column(NUMBER_TYPES, "error", "mag")])
    _spoil(draw, layout)
    return {"input": data, "model": {"extinction": {"scale": scale}}, **_output_settings(draw)}


def _spoil(draw: Any, layout: Layout) -> None:
    """Give a column, now and then, a type or a unit that it should not have."""
    name = draw(st.sampled_from(list(layout.types)))
    kind, unit, values = layout.types[name]
    layout.types[name] = (sometimes(draw, kind, WRONG_TYPES, 10), sometimes(draw, unit, STATED, 20), values)


def _band(draw: Any, column: Any, passband: str) -> dict[str, Any]:
    unit = draw(st.sampled_from(list(UNITS)))
    values = "magnitude" if unit == "mag" else "flux"
    data = {
        "passband": passband,
        "value": column(NUMBER_TYPES, values, unit),
        "error": column(NUMBER_TYPES, "error", unit),
        "unit": unit,
    }
    if unit == "mag":
        data["system"] = sometimes(draw, "Vega" if passband == "2mass_j" else "AB", ["AB", "Vega"], 20)
    for key in ("bad", "limit"):
        if sometimes(draw, False, [True]):
            data[key] = column(MARK_TYPES, "mark")
    return data


def _output_settings(draw: Any) -> dict[str, Any]:
    return {
        "output": {
            "layout": draw(st.sampled_from(["flat", "hive"])),
            "rows_per_file": draw(st.sampled_from([1, 5, 500_000])),
            "per_band": draw(st.sampled_from(["residual", "both", "none"])),
        },
        "sampling": {"keep_draws": draw(st.sampled_from([0, 2]))},
        "compute": {"workers": 1, "rows_per_part": draw(st.sampled_from([1, 3, 5000]))},
    }


def _filtered(draw: Any, survey: Survey) -> Survey:
    keep = targets = None
    if sometimes(draw, False, [True], 3):
        keep = draw(st.frozensets(st.sampled_from(["T1", "T2", "é", "none of them"]), min_size=1))
        survey.settings["input"]["where"] = [[FIELD, "in", sorted(keep)]]
    tables = [groups for groups in survey.files.values() if not isinstance(groups, bytes)]
    if tables and sometimes(draw, False, [True], 5):
        targets = tables[0][0].select([survey.settings["input"]["id"]])
        survey.settings["input"]["only"] = "targets"
    return Survey(survey.files, survey.settings, targets, keep)


def _table(
    random: np.random.Generator, oddness: float, rows: int, id_type: pa.DataType, layout: Layout, star: str, first: int
) -> pa.Table:
    columns = {star: _ids(random, oddness, rows, id_type, first)}
    fields = [pa.field(star, id_type)]
    for name, (usual, unit, values) in layout.types.items():
        kind = pa.null() if name == layout.missing else usual
        columns[name] = _cells(random, oddness, rows, kind, values)
        fields.append(pa.field(name, kind, metadata={"unit": unit} if unit else None))
    columns[FIELD] = pa.array(random.choice(["T1", "T2", "é"], rows).tolist(), pa.string())
    columns[TAG] = pa.array(range(first, first + rows), pa.int32())
    fields += [pa.field(FIELD, pa.string()), pa.field(TAG, pa.int32())]
    return pa.table(list(columns.values()), schema=pa.schema(fields))


def _ids(random: np.random.Generator, oddness: float, rows: int, kind: pa.DataType, first: int) -> pa.Array:
    """Ids that are mostly different, with odd ones, repeated ones and none among them."""
    inner = kind.value_type if pa.types.is_dictionary(kind) else kind
    texts = pa.types.is_string(inner) or pa.types.is_large_string(inner) or pa.types.is_string_view(inner)
    odd = [*(ODD_TEXTS if texts else ODD_INTEGERS), None, 1, 2, 3]
    ids = [odd[random.integers(len(odd))] if random.random() < oddness else first + row for row in range(rows)]
    if texts:
        return _made([star if star is None else str(star) for star in ids], kind)
    return _made(ids, kind)


def _cells(random: np.random.Generator, oddness: float, rows: int, kind: pa.DataType, values: str) -> pa.Array:
    ordinary = {
        "flux": random.lognormal(8, 1, rows),
        "magnitude": random.uniform(10, 25, rows),
        "error": random.lognormal(-3, 1, rows),
        "parallax": random.normal(3, 3, rows),
        "mark": random.integers(0, 2, rows),
        "any": random.normal(0, 100, rows),
    }[values]
    odd = random.random(rows) < oddness
    pool = [*ODD_FLOATS, None]
    cells = [pool[random.integers(len(pool))] if is_odd else float(v) for v, is_odd in zip(ordinary, odd, strict=True)]
    return _made(cells, kind)


def _made(cells: list[Any], kind: pa.DataType) -> pa.Array:
    """An array of a type, with what the type cannot hold brought into its range or left out."""
    if pa.types.is_dictionary(kind):
        return _made(cells, kind.value_type).dictionary_encode().cast(kind)
    return pa.array([_cell(cell, kind) for cell in cells], kind)


def _cell(cell: Any, kind: pa.DataType) -> Any:
    if cell is None or pa.types.is_null(kind):
        return None
    if pa.types.is_integer(kind):
        unsigned = pa.types.is_unsigned_integer(kind)
        low, high = (
            (0, 2**kind.bit_width - 1) if unsigned else (-(2 ** (kind.bit_width - 1)), 2 ** (kind.bit_width - 1) - 1)
        )
        return None if isinstance(cell, float) and not np.isfinite(cell) else min(max(int(cell), low), high)
    if pa.types.is_float16(kind):
        with np.errstate(over="ignore"):
            return np.float16(cell)
    if pa.types.is_floating(kind):
        return float(cell)
    if pa.types.is_boolean(kind):
        return bool(cell)
    if pa.types.is_binary(kind):
        return str(cell).encode()
    if pa.types.is_list(kind):
        return [1, None]
    if pa.types.is_decimal(kind):
        return Decimal(int(cell) % 1000) if np.isfinite(float(cell)) else None
    if pa.types.is_timestamp(kind) or pa.types.is_date(kind):
        return int(cell) % 20_000 if np.isfinite(float(cell)) else None
    return str(cell)


class BandsOnly:
    """Stands for the model of a run: its passbands."""

    def __init__(self, settings: Settings) -> None:
        self.passbands: dict[str, Passband] = {
            band.label: load_passband(band.passband) for band in settings.input.photometry
        }

    def digests(self) -> dict[str, str]:
        return {label: passband.digest() for label, passband in self.passbands.items()}

    def departures_digest(self) -> str:
        return ""


def ingest_and_invent(table: pa.Table, settings: Settings, model: BandsOnly) -> PartTables:
    """Reject what cannot be fitted; give the others values that hang on nothing but what a fit hangs on."""
    ingested = ingest(table, settings, model)  # type: ignore[arg-type]
    star, carried = output_fields(table.schema, settings)
    row_hash = row_hashes(table, settings)[ingested.is_kept]
    first_copy = ingested.kept["_duplicate"].to_numpy() == 1
    own = {name: ingested.kept[name] for name in (star.name, *(field.name for field in carried))}
    own |= {"row_hash": pa.array(row_hash), "flags": pa.array(first_copy * BY_NAME["duplicate_id"].value, pa.int32())}
    draws = None
    if settings.sampling.keep_draws:
        draws = _invented(draws_schema(settings, star), own, row_hash % 1000)
    return PartTables(
        _invented(catalogue_schema(settings, star, carried), own, row_hash % 1000), ingested.rejected, draws
    )


def _invented(schema: pa.Schema, own: dict[str, Any], values: np.ndarray) -> pa.Table:
    return pa.table([own[field.name] if field.name in own else _column(values, field.type) for field in schema], schema)


def _column(values: np.ndarray, kind: pa.DataType) -> pa.Array:
    if pa.types.is_fixed_size_list(kind):
        flat = pa.array(np.repeat(values, kind.list_size)).cast(kind.value_type)
        return pa.FixedSizeListArray.from_arrays(flat, kind.list_size)
    return pa.repeat(pa.scalar("blackbody"), len(values)) if pa.types.is_string(kind) else pa.array(values).cast(kind)


def stages() -> Stages:
    return Stages(BandsOnly, ingest_and_invent)
