"""The quality page: what it says, that nothing in it is taken for markup, and that it is there whole or not at all."""

import json
import os
import re
from html import unescape
from html.parser import HTMLParser
from pathlib import Path

import pytest
from typer.testing import CliRunner

from published_run import LABELS, NASTY_ID, publish
from starkiln import cli
from starkiln.errors import EnvironmentTrouble, SettingsError
from starkiln.report import page
from starkiln.report.page import build_page, read_run, render


class Outline(HTMLParser):
    """The tags of a page, their attributes, and the text outside of script and style."""

    def __init__(self, text):
        super().__init__()
        self.tags, self.text, self.inside = [], "", ""
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        self.tags.append((tag, dict(attributes)))
        self.inside = tag if tag in ("script", "style") else ""

    def handle_endtag(self, tag):
        self.inside = ""

    def handle_data(self, data):
        self.text += "" if self.inside else data


@pytest.fixture(scope="module")
def run_dir(tmp_path_factory):
    run_dir = tmp_path_factory.mktemp("page") / "run"
    publish(run_dir)
    build_page(run_dir)
    return run_dir


@pytest.fixture(scope="module")
def outline(run_dir):
    return Outline((run_dir / "report" / "index.html").read_text(encoding="utf-8"))


def test_the_page_lies_in_the_generation_and_a_link_leads_to_it(run_dir):
    assert os.readlink(run_dir / "report") == "current/report"
    assert (run_dir / "generations" / "000001" / "report" / "index.html").is_file()
    assert not list((run_dir / "generations" / "000001").glob(".report*"))


def test_the_questions_come_in_their_order(outline):
    questions = ["do its job?", "look like?", "be trusted?", "data sound?", "inference sound?", "was done?"]
    places = [outline.text.index(question) for question in questions]
    assert places == sorted(places)


def test_the_numbers_of_the_run_are_there(outline):
    text = " ".join(outline.text.split())
    assert "Of 410 selected rows 400 were fitted and 10 rejected, 0 are pending." in text
    assert "359 of 400 rows (89.8 %) carry no flag; the most frequent flag is poor_parallax, on 40." in text
    assert "0 of 6 zero points are off" in text
    assert "399 of 400 stars converged" in text
    assert "Nothing stands out." in text


def test_no_text_of_the_run_becomes_markup(run_dir, outline):
    text = (run_dir / "report" / "index.html").read_text(encoding="utf-8")
    assert NASTY_ID not in text
    assert NASTY_ID in unescape(text)
    for tag in ("b", "i"):
        assert f"<{tag}>tamarin" not in text
        assert f"<{tag}>tables" not in text
    assert [tag for tag, _ in outline.tags].count("script") == 1


def test_the_page_asks_for_nothing_from_elsewhere(outline):
    for tag, attributes in outline.tags:
        for name in ("src", "href", "xlink:href", "action", "data"):
            value = attributes.get(name) or ""
            assert value.startswith(("#", "data:")) or not value, f"<{tag} {name}={value[:60]}>"
    policy = next(attributes["content"] for tag, attributes in outline.tags if "http-equiv" in attributes)
    assert policy.startswith("default-src 'none'")


def test_ids_are_unique_and_every_reference_has_its_target(run_dir, outline):
    ids = [attributes["id"] for _, attributes in outline.tags if attributes.get("id")]
    assert len(ids) == len(set(ids))
    text = (run_dir / "report" / "index.html").read_text(encoding="utf-8")
    wanted = set(re.findall(r'href="#([^"]+)"', text)) | set(re.findall(r"url\(#([^)]+)\)", text))
    assert not wanted - set(ids)


def test_every_figure_is_saved_for_a_paper(run_dir):
    names = {path.stem for path in (run_dir / "report" / "figures").iterdir()}
    expected = {"temperature-luminosity", "interval-widths", "log-teff", "p-value", "zero-point-audit"}
    assert expected | {f"residual-{label}" for label in LABELS} <= names
    for name in names:
        assert (run_dir / "report" / "figures" / f"{name}.pdf").read_bytes().startswith(b"%PDF")
        assert (run_dir / "report" / "figures" / f"{name}.png").read_bytes().startswith(b"\x89PNG")


def test_the_row_most_in_need_of_a_look_has_its_observed_fluxes(outline):
    figure = next(attributes for tag, attributes in outline.tags if attributes.get("id") == "star-1")
    label = next(text["aria-label"] for _, text in outline.tags if NASTY_ID in text.get("aria-label", ""))
    assert figure["class"] == "star"
    assert label.startswith(f"Star {NASTY_ID}: 6 bands, T ")
    assert "Observed fluxes are not shown" not in outline.text


def test_without_the_input_tables_the_page_says_so(tmp_path):
    publish(tmp_path / "run", rows=20)
    (tmp_path / "input" / "a.parquet").unlink()
    text = Outline(build_page(tmp_path / "run").read_text(encoding="utf-8")).text
    assert "Observed fluxes are not shown" in text


def test_a_changed_row_is_not_taken_for_the_one_that_was_fitted(tmp_path):
    other = tmp_path / "other"
    other.mkdir()
    publish(tmp_path / "run", rows=20)
    publish(other / "run", rows=30)  # the same ids with other fluxes
    (other / "input" / "a.parquet").replace(tmp_path / "input" / "a.parquet")
    text = Outline(build_page(tmp_path / "run").read_text(encoding="utf-8")).text
    assert "Observed fluxes are not shown" in text


def test_the_same_run_gives_the_same_page(tmp_path):
    folder = publish(tmp_path / "run", rows=50)
    first, second = (render(read_run(folder), tmp_path / name) for name in ("one", "two"))
    assert first == second


def test_the_page_is_built_again_over_an_old_one(run_dir):
    old = run_dir / "report" / "figures" / "old.png"
    old.write_bytes(b"")
    build_page(run_dir)
    assert not old.exists()
    assert (run_dir / "report" / "index.html").is_file()


def test_a_failing_page_leaves_the_old_one_and_no_rest(run_dir, monkeypatch):
    before = (run_dir / "report" / "index.html").read_bytes()

    def fail(run, figures):
        figures.mkdir()
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(page, "render", fail)
    with pytest.raises(EnvironmentTrouble, match="No space left"):
        build_page(run_dir)
    assert (run_dir / "report" / "index.html").read_bytes() == before
    assert not list((run_dir / "generations" / "000001").glob(".report*"))


def test_a_page_that_cannot_be_put_in_place_leaves_the_old_one(run_dir, monkeypatch):
    rename = Path.rename

    def refuse(path, target):
        if path.suffix == ".tmp":
            raise PermissionError(13, "Permission denied")
        return rename(path, target)

    before = (run_dir / "report" / "index.html").read_bytes()
    monkeypatch.setattr(page, "render", lambda run, figures: "new")
    monkeypatch.setattr(Path, "rename", refuse)
    with pytest.raises(EnvironmentTrouble, match="Permission denied"):
        build_page(run_dir)
    assert (run_dir / "report" / "index.html").read_bytes() == before
    assert not list((run_dir / "generations" / "000001").glob(".report*"))


def test_a_folder_without_a_catalogue_is_refused(tmp_path):
    with pytest.raises(SettingsError, match="holds no published catalogue"):
        build_page(tmp_path)


def test_an_empty_catalogue_has_a_page(tmp_path):
    publish(tmp_path / "run", rows=0)
    assert "The catalogue has no row" in build_page(tmp_path / "run").read_text(encoding="utf-8")


def test_runs_of_earlier_versions_have_a_page(tmp_path):
    folder = publish(tmp_path / "run", rows=30)
    facts = json.loads((folder / "run.json").read_text())
    for name in ("rows", "zero_point_audit", "seconds", "input", "hashes", "versions"):
        del facts[name]
    (folder / "run.json").write_text(json.dumps(facts))
    (folder / "settings.toml").write_text((folder / "settings.toml").read_text() + "\n[of_old]\nkey = 1\n")
    text = Outline(build_page(tmp_path / "run").read_text(encoding="utf-8")).text
    assert "did not audit zero points" in text
    assert "does not understand the settings of the run" in text


def test_the_report_command(run_dir):
    shown = CliRunner().invoke(cli.app, ["report", str(run_dir)])
    assert (shown.exit_code, shown.stdout) == (0, f"{run_dir}/report/index.html\n")


def test_the_report_command_without_a_run(tmp_path):
    shown = CliRunner().invoke(cli.app, ["report", str(tmp_path)])
    assert shown.exit_code == 2
    assert "holds no published catalogue" in shown.stderr
