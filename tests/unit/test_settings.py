"""The settings: what loads, what is refused and how it is told."""

import json
import re
import tomllib
from datetime import date
from pathlib import Path
from typing import get_args

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

import starkiln.settings
from starkiln.errors import SettingsError
from starkiln.settings import Settings, build_settings, dump_toml, load_settings, settings_schema
from starkiln.settings.models import Section
from starkiln.settings.values import flux_kind, memory_bytes

TEMPLATE = Path(__file__).parents[2] / "configs" / "template.toml"


def band(passband="panstarrs_g", column="g", **keys):
    return {"passband": passband, "value": column, "error": f"{column}_error", "unit": "nJy"} | keys


def example(**changes):
    """A small right settings tree; `input__id="x"` sets input.id, and None takes a key out."""
    bands = [band(), band("panstarrs_r", "r"), band("2mass_j", "j", unit="mag", system="Vega")]
    data = {
        "run": {"name": "tamarin", "output": "runs/tamarin"},
        "input": {"tables": "tables", "id": "star_id", "photometry": bands},
    }
    for dotted, value in changes.items():
        *parents, key = dotted.split("__")
        section = data
        for parent in parents:
            section = section.setdefault(parent, {})
        if value is None:
            del section[key]
        else:
            section[key] = value
    return data


def problems(**changes) -> list[str]:
    """The lines of the message about a settings tree that is wrong."""
    with pytest.raises(SettingsError) as caught:
        build_settings(example(**changes), "/survey")
    headline, *lines = str(caught.value).split("\n")
    assert headline.startswith(f"settings: {len(lines)} problem")
    return [line.strip() for line in lines]


def only_problem(**changes) -> str:
    (line,) = problems(**changes)
    return line


ANYTHING = st.recursive(
    st.booleans() | st.integers() | st.floats() | st.text() | st.dates() | st.sampled_from(["mag", "Jy", "in"]),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=5), inner, max_size=3),
    max_leaves=5,
)


def holders(tree):
    """Every dictionary or list of a tree, with each of its keys or places."""
    for key, value in tree.items() if isinstance(tree, dict) else enumerate(tree):
        yield tree, key
        if isinstance(value, dict | list):
            yield from holders(value)


class TestReading:
    def test_the_template_loads(self):
        settings = load_settings(TEMPLATE)
        assert settings.input.photometry[1].system == "Vega"
        assert settings.passband[0].curve == TEMPLATE.parent / "curves" / "survey_blue.ecsv"

    def test_paths_start_from_the_file_and_home(self, tmp_path, monkeypatch):
        monkeypatch.setenv("HOME", "/home/nia")
        config = tmp_path / "configs" / "a.toml"
        config.parent.mkdir()
        config.write_text(dump_toml(build_settings(example(), "/")).replace('"/', '"../'))
        settings = load_settings(config)
        assert settings.run.output == tmp_path / "runs" / "tamarin"
        assert settings.input.tables == str(tmp_path / "tables")
        home = build_settings(example(run__output="~/runs", input__only="~/targets.parquet"), "/survey")
        assert home.run.output == Path("/home/nia/runs")
        assert home.input.only == Path("/home/nia/targets.parquet")

    def test_parent_of_a_linked_folder_is_the_shells(self, tmp_path):
        (tmp_path / "far" / "configs").mkdir(parents=True)
        (tmp_path / "near").symlink_to(tmp_path / "far" / "configs")
        (tmp_path / "near" / "a.toml").write_text(TEMPLATE.read_text())
        assert load_settings(tmp_path / "near" / "a.toml").run.output == tmp_path / "far" / "runs" / "my-survey"

    def test_glob_patterns_survive(self):
        settings = build_settings(example(input__tables="night=*/part-[0-9].parquet"), "/survey")
        assert settings.input.tables == "/survey/night=*/part-[0-9].parquet"

    def test_syntax_error_names_file_and_line(self, tmp_path):
        config = tmp_path / "broken.toml"
        config.write_text('[run]\nname = "a"\noutput = runs\n')
        with pytest.raises(SettingsError, match=r"broken\.toml: not valid TOML: .*line 3"):
            load_settings(config)

    def test_missing_file(self, tmp_path):
        with pytest.raises(SettingsError, match=r"absent\.toml: cannot read the settings: No such file"):
            load_settings(tmp_path / "absent.toml")

    def test_other_encodings(self, tmp_path):
        config = tmp_path / "latin.toml"
        config.write_bytes('# Größe\n[run]\nname = "a"\n'.encode("latin-1"))
        with pytest.raises(SettingsError, match=r"latin\.toml: not UTF-8 text at byte 4"):
            load_settings(config)

    def test_settings_cannot_be_changed(self):
        settings = build_settings(example())
        with pytest.raises(ValidationError, match="frozen"):
            settings.run.seed = 3


class TestProblems:
    def test_all_at_once(self):
        lines = problems(
            run__nam="b",
            input__id=None,
            input__min_bands="many",
            model={"extinction": {"rv": -3.1}},
            sampling={"walkers": 33},
        )
        assert [re.split(r"[ :]", line)[0] for line in lines] == [
            "run.nam",
            "input.id",
            "input.min_bands",
            "model.extinction.rv",
            "sampling.walkers",
        ]

    def test_unknown_keys_name_a_near_one(self):
        assert only_problem(input__tabels="x") == "input.tabels: unknown key (did you mean 'tables'?)"
        assert only_problem(model={"outliers": {"widht": 3.0}}) == (
            "model.outliers.widht: unknown key (did you mean 'width'?)"
        )
        assert only_problem(inputs={}) == "inputs: unknown key (did you mean 'input'?)"

    def test_unknown_keys_name_their_home(self):
        assert only_problem(run__rows_per_part=10) == "run.rows_per_part: unknown key (it belongs in [compute])"

    def test_unknown_keys_do_not_hide_what_is_wrong_between_keys(self):
        lines = problems(input__photometry=[band(unit="mag", colour="blue"), band(), band("wise_w1", "w1")])
        assert len(lines) == 2
        assert lines[0].startswith("input.photometry[0].colour (panstarrs_g): unknown key")
        assert "add system" in lines[1]

    def test_missing_keys_say_what_they_are(self):
        assert only_problem(input__id=None) == "input.id is missing: Column of the star's id, integer or string."
        assert only_problem(run=None) == "run is missing: What the run is called and where its results go."

    @pytest.mark.parametrize(
        ("changes", "expected"),
        [
            ({"input__id": 7}, "input.id = 7: should be text in quotes"),
            ({"input__id": ""}, "input.id = '': should not be empty"),
            ({"run__seed": 1.5}, "run.seed = 1.5: should be a whole number, without quotes"),
            ({"run__seed": -1}, "run.seed = -1: should be greater than or equal to 0"),
            ({"run__seed": True}, "run.seed = True: should be a whole number, without quotes"),
            ({"run__output": 3}, "run.output = 3: should be a path in quotes"),
            ({"run__name": "a/b"}, "run.name = 'a/b': should be letters, digits, points, hyphens and"),
            ({"input__carry": "ra"}, "input.carry = 'ra': should be a list in square brackets"),
            ({"input__tables": "s3://bucket/x"}, "input.tables: 's3://bucket/x' is a URL"),
            ({"input__on_bad_file": "skpi"}, "should be 'stop' or 'skip' (did you mean 'skip'?)"),
            ({"input__min_bands": 4}, "input.min_bands is 4, but only 3 bands are described"),
            ({"input__photometry": []}, "input.photometry is empty"),
            ({"input__photometry": band()}, "write its header with double brackets, [[input.photometry]]"),
            ({"input__parallax": [{}]}, "input.parallax should be a table, headed [input.parallax]"),
            ({"input__carry": ["ra", "ra"]}, "input.carry[1] 'ra' is listed twice"),
            ({"input__carry": ["ra", "star_id"]}, "input.carry[1] 'star_id' is the id"),
            ({"model": {"outliers": True}}, "model.outliers should be a table"),
            ({"model": {"temperature_k": [500.0, 6e4]}}, "model.temperature_k[0] = 500.0"),
            ({"model": {"temperature_k": [3000.0, 2e5]}}, "model.temperature_k[1] = 200000.0"),
            ({"model": {"temperature_k": [6000.0, 3000.0]}}, "low < high"),
            ({"model": {"temperature_k": [3000.0]}}, "should be two numbers, [low, high]"),
            ({"model": {"radius_rsun": [0.0, 3.0]}}, "model.radius_rsun[0] = 0.0: should be greater than 0"),
            ({"model": {"photosphere": "grey"}}, "model.photosphere = 'grey': should be 'blackbody'"),
            ({"model": {"extinction": {"max": float("inf")}}}, "model.extinction.max = inf: should be"),
            ({"model": {"extinction": {"scale": 0}}}, "model.extinction.scale = 0: should be greater than 0"),
            ({"model": {"extinction": {"scale": ""}}}, "the name of a column in quotes"),
            ({"model": {"distance": {"length_scale_pc": True}}}, "should be a number, or the name"),
            ({"model": {"distance": {"bounds_pc": [10.0, 1.0]}}}, "model.distance.bounds_pc = [10.0, 1.0]"),
            ({"sampling": {"walkers": 6}}, "sampling.walkers = 6"),
            ({"sampling": {"walkers": 33}}, "sampling.walkers = 33"),
            ({"sampling": {"max_steps": 0}}, "sampling.max_steps = 0: should be greater than or equal to 64"),
            ({"output": {"rows_per_file": 0}}, "output.rows_per_file = 0: should be greater than 0"),
            ({"compute": {"workers": 0}}, 'compute.workers = 0: should be "auto" or a whole number above 0'),
            ({"compute": {"workers": "all"}}, "compute.workers = 'all'"),
            ({"compute": {"row_seconds": 0}}, "compute.row_seconds = 0"),
            ({"compute": {"memory_per_worker": "2 gigs"}}, "compute.memory_per_worker: '2 gigs' is not"),
            ({"run__output": "tables/out"}, "run.output lies inside input.tables"),
        ],
    )
    def test_wrong_values(self, changes, expected):
        assert expected in only_problem(**changes)

    @pytest.mark.parametrize(
        ("changes", "expected"),
        [
            ({"unit": "nJyy"}, "input.photometry[2].unit (wise_w1): 'nJyy' is not a unit (did you mean nJ"),
            ({"unit": "W / m2"}, "'W / m2' is not a flux density; give a flux density per frequency"),
            ({"unit": "mag(AB)"}, 'is logarithmic: write unit = "mag" with system = "AB" or "Vega"'),
            ({"unit": "mag"}, "input.photometry[2].system (wise_w1) is missing: magnitudes need their zero"),
            ({"system": "AB"}, 'input.photometry[2].system (wise_w1) is for unit = "mag" only'),
            (
                {"zero_point_jy": 309.5},
                'input.photometry[2].zero_point_jy (wise_w1) is for unit = "mag" only',
            ),
            ({"unit": "mag", "system": "vega"}, "should be 'AB' or 'Vega' (did you mean 'Vega'?)"),
            ({"floor": 1.0}, "should be less than 1"),
            ({"floor": -0.1}, "should be greater than or equal to 0"),
            ({"limit_sigma": 0}, "should be greater than 0"),
            ({"passband": "WISE_W1"}, "should be lower-case letters, digits and underscores only"),
            ({"label": "panstarrs_g"}, "input.photometry[2].label (wise_w1) 'panstarrs_g' is taken"),
            ({"passband": "panstarrs_g"}, "input.photometry[2].label (panstarrs_g) 'panstarrs_g' is taken"),
            ({"value": "g"}, "input.photometry[2].value (wise_w1) column 'g' is already the value"),
            ({"error": "w1"}, "input.photometry[2] (wise_w1) names one column twice"),
            ({"value": None}, "input.photometry[2].value (wise_w1) is missing: Column of the flux density"),
        ],
    )
    def test_wrong_bands(self, changes, expected):
        wrong = {key: value for key, value in (band("wise_w1", "w1") | changes).items() if value is not None}
        assert expected in only_problem(input__photometry=[band(), band("panstarrs_r", "r"), wrong])

    def test_distances(self):
        parallax = {"value": "plx", "error": "plx_error", "unit": "mas"}
        distance = {"value": "d", "error": "d_error", "unit": "pc"}
        assert "input.parallax.unit: 'pc' is not a unit of angle" in only_problem(
            input__parallax=parallax | {"unit": "pc"}
        )
        assert "input.distance.unit: 'mag' is not a unit of length" in only_problem(
            input__distance=distance | {"unit": "mag"}
        )
        assert "input.distance cannot stand beside [input.parallax]" in only_problem(
            input__parallax=parallax, input__distance=distance
        )
        assert "input.parallax.error_scale = 0" in only_problem(input__parallax=parallax | {"error_scale": 0})

    def test_priors_of_extinction(self):
        def problem(**keys):
            return problems(model={"extinction": keys})

        assert problem(prior="gaussian") == [
            f'model.extinction.{key} is missing: prior = "gaussian" needs mean and scale, in magnitudes'
            for key in ("mean", "scale")
        ]
        assert (
            "model.extinction.mean has no use with prior = 'exponential'" in problem(prior="exponential", mean="ebv")[0]
        )
        assert "mean has no use" in problem(mean=0.5)[0]
        assert "name the column in mean" in problem(prior="fixed", scale="av")[0]
        assert "model.extinction.mean is 7" in problem(prior="fixed", mean=7.0)[0]
        fixed = build_settings(example(model={"extinction": {"prior": "fixed"}}))
        assert fixed.model.extinction.mean == 0.0

    def test_passbands_of_ones_own(self):
        curve = {"name": "blue", "curve": "blue.ecsv", "detector": "photon"}
        assert "passband[1].name 'blue' is the name of two passbands" in only_problem(passband=[curve, curve])
        assert "should be 'photon' or 'energy'" in only_problem(passband=[curve | {"detector": "ccd"}])

    @given(st.data())
    def test_whatever_stands_in_the_file_is_told_or_comes_back(self, data):
        tree = example(
            model={"outliers": {}, "extinction": {"scale": 0.1}, "distance": {}},
            compute={"workers": 2, "memory_per_worker": "1GB"},
            input__where=[["field", "==", 1]],
            input__parallax={"value": "plx", "error": "plx_error", "unit": "mas"},
            passband=[{"name": "blue", "curve": "blue.ecsv", "detector": "photon"}],
        )
        places = list(holders(tree))
        for holder, key in data.draw(st.lists(st.sampled_from(places), min_size=1, max_size=3)):
            if data.draw(st.booleans()) and isinstance(holder, dict):
                key = data.draw(st.text())
            holder[key] = data.draw(ANYTHING)
        try:
            settings = build_settings(tree)
        except SettingsError:
            return
        assert repr(build_settings(tomllib.loads(dump_toml(settings)))) == repr(settings)


class TestFilters:
    @pytest.mark.parametrize(
        ("where", "columns"),
        [
            ([["field", "in", ["T1", "T2"]]], ["field"]),
            ([["field", "==", "T1"], ["mag_r", "<", 20], ["mag_r", ">", 12.5]], ["field", "mag_r"]),
            (
                [[["field", "==", "T1"]], [["night", "not in", [3]], ["ok", "=", True]]],
                ["field", "night", "ok"],
            ),
        ],
    )
    def test_right(self, where, columns):
        settings = build_settings(example(input__where=where))
        assert settings.input.where == where
        assert settings.filter_columns() == columns

    @pytest.mark.parametrize(
        ("where", "expected"),
        [
            (["field", "in", ["T1"]], "is no filter: write"),
            ([], "leave the key out"),
            ([["field", "in"]], "is no condition"),
            ([["field", "~", 3]], "the operator should be one of"),
            ([["field", "In", ["a"]]], "(did you mean 'in'?)"),
            ([["field", "in", "T1"]], "'in' needs a list of values"),
            ([["field", "in", []]], "'in' needs a list of values"),
            ([["field", "==", ["T1"]]], "'==' needs one value"),
            ([["field", "==", 1], [["night", "==", 1]]], "mixes conditions and lists"),
            ([[[3, "==", 1]]], "the first item should be the name of a column"),
        ],
    )
    def test_wrong(self, where, expected):
        line = only_problem(input__where=where)
        assert line.startswith("input.where")
        assert expected in line


class TestColumns:
    def test_used_columns_in_settings_order(self):
        settings = build_settings(
            example(
                input__carry=["ra", "plx"],
                input__where=[["field", "==", "T1"]],
                input__parallax={
                    "value": "plx",
                    "error": "plx_error",
                    "unit": "mas",
                    "zero_point": "plx_zero",
                    "error_scale": 1.1,
                },
                input__photometry=[
                    band(bad="g_bad"),
                    band("wise_w1", "w1", bad="w1_bad", limit="w1_limit"),
                    band("2mass_j", "j"),
                ],
                model={
                    "extinction": {"prior": "gaussian", "mean": "av", "scale": "av_error"},
                    "distance": {"length_scale_pc": "scale"},
                },
            )
        )
        fit = [
            "star_id",
            "plx",
            "plx_error",
            "plx_zero",
            "g",
            "g_error",
            "g_bad",
            "w1",
            "w1_error",
            "w1_bad",
            "w1_limit",
            "j",
            "j_error",
            "av_error",
            "av",
            "scale",
        ]
        assert settings.fit_columns() == fit
        assert settings.used_columns() == [*fit, "ra"]
        assert settings.filter_columns() == ["field"]

    def test_distance_columns(self):
        settings = build_settings(example(input__distance={"value": "d", "error": "d_error", "unit": "kpc"}))
        assert settings.used_columns()[:4] == ["star_id", "d", "d_error", "g"]


class TestFitSettings:
    PARALLAX = {"value": "plx", "error": "plx_error", "unit": "mas"}  # noqa: RUF012

    @pytest.mark.parametrize(
        "changes",
        [
            {"run__seed": 7},
            {"input__min_bands": 2},
            {"input__parallax": PARALLAX | {"unit": "arcsec"}},
            {"input__parallax": PARALLAX | {"zero_point": -0.02}},
            {"input__parallax": PARALLAX | {"zero_point": "plx_zero"}},
            {"input__parallax": PARALLAX | {"error_scale": 1.2}},
            {"input__photometry": [band("panstarrs_r", "r"), band(), band("2mass_j", "j", unit="Jy")]},
            {"input__photometry": [band(floor=0.01), band("panstarrs_r", "r"), band("2mass_j", "j")]},
            {"model": {"temperature_k": [2000.0, 60000.0]}},
            {"model": {"outliers": False}},
            {"model": {"extinction": {"rv": 3.3}}},
            {"model": {"distance": {"length_scale_pc": "scale"}}},
            {"sampling": {"walkers": 40}},
            {"passband": [{"name": "panstarrs_g", "curve": "g.ecsv", "detector": "photon"}]},
        ],
    )
    def test_change_with_what_changes_a_fit(self, changes):
        before = build_settings(example(input__parallax=self.PARALLAX)).fit_settings()
        after = build_settings(example(**{"input__parallax": self.PARALLAX} | changes)).fit_settings()
        assert json.dumps(after) != json.dumps(before)

    def test_keep_through_what_does_not(self):
        before = build_settings(example(input__parallax=self.PARALLAX), "/a").fit_settings()
        bands = [
            band(column="flux_g"),
            band("panstarrs_r", "flux_r"),
            band("2mass_j", "mag_j", unit="mag", system="Vega"),
        ]
        after = build_settings(
            example(
                run__name="other",
                run__output="elsewhere",
                run__keep_generations=9,
                input__tables="new",
                input__id="name",
                input__carry=["ra"],
                input__where=[["field", "==", "T1"]],
                input__parallax={"value": "p", "error": "e", "unit": "mas"},
                input__photometry=bands,
                passband=[{"name": "unused", "curve": "u.ecsv", "detector": "photon"}],
                output={"per_band": "none"},
                compute={"workers": 3, "row_seconds": 90},
            ),
            "/b",
        ).fit_settings()
        assert json.dumps(after) == json.dumps(before)

    def test_the_name_of_a_column_is_no_matter(self):
        one, other = (build_settings(example(model={"extinction": {"scale": name}})).fit_settings() for name in "ab")
        assert one == other


class TestResolvedCopy:
    def test_template_comes_back(self, tmp_path):
        settings = load_settings(TEMPLATE)
        (tmp_path / "settings.toml").write_text(dump_toml(settings))
        assert load_settings(tmp_path / "settings.toml") == settings

    def test_every_kind_of_value_comes_back(self):
        settings = build_settings(
            example(
                input__where=[[["night", ">=", date(2026, 12, 1)]], [["name", "==", 'a "b" \\']]],
                input__only="targets.parquet",
                model={"outliers": False, "extinction": {"prior": "gaussian", "mean": "av", "scale": 0.1}},
                output={"per_band": "none", "rows_per_file": 10, "layout": "hive"},
                sampling={"walkers": 40, "keep_draws": 5},
                compute={"workers": 2, "scratch": "fast"},
            ),
            "/survey",
        )
        assert build_settings(tomllib.loads(dump_toml(settings)), "/elsewhere") == settings

    @given(
        scale=st.floats(min_value=1e-300, max_value=1e300) | st.text(min_size=1),
        column=st.text(min_size=1).filter(lambda text: text not in {"r", "r_error", "j"}),
    )
    def test_any_number_or_name_comes_back(self, scale, column):
        settings = build_settings(example(model={"extinction": {"scale": scale}}, input__id=column))
        assert build_settings(tomllib.loads(dump_toml(settings))) == settings


class TestShippedFiles:
    def test_schema_is_the_models(self):
        shipped = Path(starkiln.settings.__file__).with_name("settings.schema.json")
        assert json.loads(shipped.read_text()) == settings_schema(), (
            "the models changed: write json.dumps(settings_schema(), indent=2) to settings.schema.json"
        )

    def test_template_holds_every_key(self):
        shown, section = set(), ""
        for line in TEMPLATE.read_text().splitlines():
            if header := re.match(r"(?:# )?\[+([a-z._]+)\]+", line):
                section = header[1]
            elif key := re.match(r"(?:# )?([a-z0-9_]+) = ", line):
                shown.add(f"{section}.{key[1]}")
        assert shown == set(keys(Settings)) - {"model.outliers.fraction", "model.outliers.width"}
        assert re.search(r"outliers = \{ fraction = .*, width = ", TEMPLATE.read_text())

    @pytest.mark.parametrize(
        "line",
        [
            line
            for line in TEMPLATE.read_text().splitlines()
            if re.match("# (?!(value|error|unit) )[a-z0-9_]+ = ", line)
        ],
        ids=lambda line: line[2:].split(" = ")[0],
    )
    def test_each_optional_line_loads(self, line, tmp_path):
        text = TEMPLATE.read_text()
        assert text.count(line) == 1
        text = text.replace(line, line[2:])
        if line.startswith(("# angular_diameter", "# fbol")):
            # They stand instead of the radius.
            text = re.sub("^radius = .*$", "", text, flags=re.MULTILINE)
        (tmp_path / "a.toml").write_text(text)
        load_settings(tmp_path / "a.toml")


def keys(model: type[Section], place: str = ""):
    """The dotted keys of a model that hold a value rather than a section."""
    for name, field in model.model_fields.items():
        dotted = f"{place}.{name}".removeprefix(".")
        if inner := section_in(field.annotation):
            if dotted == "model.outliers":
                yield dotted
            yield from keys(inner, dotted)
        else:
            yield dotted


def section_in(annotation) -> type[Section] | None:
    if isinstance(annotation, type) and issubclass(annotation, Section):
        return annotation
    return next(filter(None, map(section_in, get_args(annotation))), None)


@pytest.mark.parametrize(
    ("unit", "kind"),
    [
        ("nJy", "f_nu"),
        ("3.631e-6 Jy", "f_nu"),
        ("erg / (s cm2 Hz)", "f_nu"),
        ("erg s-1 cm-2 AA-1", "f_lambda"),
        ("W / (m2 um)", "f_lambda"),
        ("mag", "mag"),
    ],
)
def test_flux_kinds(unit, kind):
    assert flux_kind(unit) == kind


@pytest.mark.parametrize(
    ("text", "size"),
    [("2GB", 2 * 10**9), ("1.5 GB", 15 * 10**8), ("512MiB", 2**29), ("64kB", 64000), ("9B", 9)],
)
def test_memory(text, size):
    assert memory_bytes(text) == size


@pytest.mark.parametrize("text", ["2", "0GB", "-1GB", "two GB", "2gb", "", "9" * 400 + "GB"])
def test_no_memory(text):
    with pytest.raises(ValueError, match="not an amount of memory"):
        memory_bytes(text)
