"""A job on disk: data and names only, from which another process makes the same job."""

import json
import re
from dataclasses import replace

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fake_stages import NoModel, build_no_model, pass_through, stages
from small_survey import settings_for, stars, with_column
from starkiln.engine.identity import make_identity
from starkiln.engine.job import Job, Stages, fitting_stages, name_of, named, open_job
from starkiln.engine.records import EarlierFile, WorkerDisagrees
from starkiln.errors import EnvironmentTrouble
from starkiln.settings import dump_toml
from starkiln.tables.source import open_source

RICH = {
    "run__seed": 2**62,
    "input__carry": ["ra", "field"],
    "input__where": [["field", "in", ["T1", "it's"]], ["dec", ">=", -89.5]],
    "model__outliers": False,
    "model__extinction": {"prior": "gaussian", "mean": "ra", "scale": 0.1},
    "compute__workers": 3,
    "sampling__keep_draws": 4,
}


@pytest.fixture
def job(tmp_path):
    """A job on two files in partition folders of awkward names."""
    for name in ("T1", "it's"):
        folder = tmp_path / "in put ü" / f"field={name}"
        folder.mkdir(parents=True)
        table = with_column(stars(20), "parallax", stars(20)["parallax"], {"unit": "mas"})
        pq.write_table(table, folder / "a.parquet", row_group_size=7)
    settings = settings_for(tmp_path / "in put ü", tmp_path / "run", **RICH)
    (tmp_path / "scratch").mkdir()
    return Job(
        source=open_source(settings),
        settings=settings,
        stages=stages(),
        model=NoModel(),
        stamps=((5, 2**62), (6, 7)),
        scratch=tmp_path / "scratch",
        parts=tmp_path / "parts",
        notes=tmp_path / "plan" / "notes",
        earlier=(
            EarlierFile(
                tmp_path / "ö" / "part-000000.parquet", tmp_path / "draws" / "part-000000.parquet", "catalogue"
            ),
            EarlierFile(tmp_path / "rejected" / "part-000000.parquet", None, "rejected"),
        ),
    )


def test_another_process_gets_the_same_job(job):
    opened = open_job(job.save())
    assert opened.source.files == job.source.files
    assert {file.partition["field"] for file in opened.source.files} == {"T1", "it's"}
    assert opened.source.schema.equals(job.source.schema, check_metadata=True)
    assert opened.source.schema.field("parallax").metadata == {b"unit": b"mas"}
    assert opened.settings == job.settings
    assert (opened.stages.build_model, opened.stages.process_part) == (build_no_model, pass_through)
    assert isinstance(opened.model, NoModel)
    assert (opened.stamps, opened.scratch, opened.parts) == (job.stamps, job.scratch, job.parts)
    assert (opened.notes, opened.earlier) == (job.notes, job.earlier)


def test_a_process_reads_a_job_once_and_tells_two_apart(job):
    first = job.save()
    opened = open_job(first)
    assert open_job(first) is opened
    second = replace(job, stamps=((1, 1),)).save()
    assert open_job(second).stamps == ((1, 1),)


def test_a_job_that_has_not_left_the_process_is_taken_as_it_is(job):
    assert open_job(job) is job


def test_the_scratch_folder_holds_text(job):
    path = job.save().path
    assert list(job.scratch.iterdir()) == [path]
    assert json.loads(path.read_text())["settings"] == dump_toml(job.settings)


def test_nothing_in_the_package_can_load_stored_objects(repository):
    loaders = re.compile(
        r"^\s*(import|from) (pickle|cloudpickle|marshal|shelve|joblib)\b|allow_pickle(?!=False)", re.MULTILINE
    )
    found = [path for path in (repository / "pipeline").rglob("*.py") if loaders.search(path.read_text())]
    assert found == []


class OtherModel(NoModel):
    curve = "abc"

    def digests(self):
        return {"panstarrs_g": "abc", "panstarrs_r": self.curve}


def build_other_model(settings):
    return OtherModel()


def test_a_model_that_is_not_the_one_of_the_run_is_trouble(job, monkeypatch):
    other = replace(job, stages=Stages(build_other_model, pass_through), model=OtherModel())
    assert isinstance(open_job(other.save()).model, OtherModel)
    saved = other.save()
    monkeypatch.setattr(OtherModel, "curve", "changed")
    with pytest.raises(EnvironmentTrouble, match="not the same passbands, panstarrs_r as the run began with"):
        open_job(saved)


WARMED = []


def note_warm_up(settings, model):
    WARMED.append(model)


@pytest.fixture
def warmed():
    """The models that were warmed up."""
    WARMED.clear()
    return WARMED


def with_warm_up(job):
    return replace(job, stages=replace(job.stages, warm_up=note_warm_up))


@pytest.mark.parametrize("from_elsewhere", [False, True])
def test_a_worker_is_warmed_up_once_before_its_first_task(job, warmed, from_elsewhere):
    saved = with_warm_up(job).save(make_identity(job.scratch) if from_elsewhere else None)
    opened = open_job(saved)
    assert open_job(saved) is opened
    assert warmed == [opened.model]


@pytest.mark.parametrize("what", ["method", "libraries", "nonce"])
def test_a_worker_from_elsewhere_that_disagrees_does_not_open_the_job(job, warmed, what):
    saved = with_warm_up(job).save(replace(make_identity(job.scratch), **{what: "another"}))
    for _ in range(2):
        with pytest.raises(WorkerDisagrees) as caught:
            open_job(saved)
    assert caught.value.address == "this process"
    assert caught.value.text
    assert warmed == []


def test_stages_have_names_that_lead_back_to_them():
    some = fitting_stages()
    assert name_of(some.process_part) == "starkiln.stages.process:process_part"
    assert named(name_of(some.build_model)) is some.build_model


def test_a_stage_without_a_name_cannot_go_to_a_worker(job):
    for function in (lambda *arguments: None, Stages(build_no_model, pass_through).__init__):
        with pytest.raises(ValueError, match=r"cannot be imported by a worker"):
            replace(job, stages=stages(function)).save()


def test_an_opened_job_reads_the_rows(job):
    from starkiln.tables.source import read_rows

    opened = open_job(job.save())
    batches = list(read_rows(opened.source, opened.settings, [(0, 0), (1, 2)], ["star_id"], 100))
    tables = [batch.table for batch in batches]
    assert pa.concat_tables(tables)["star_id"].to_pylist() == [*range(1, 8), *range(15, 21)]
