"""Warming up: whatever is fitted afterwards, no kernel needs machine code of other types."""

import json
import os
import subprocess
import sys

import pytest

WARM_THEN_FIT = """
import json
import sys
from simulated import make_settings, simulate
from test_process import as_table
from starkiln.inference import compile as kernels
from starkiln.stages.model import build_model
from starkiln.stages.process import process_part
from starkiln.stages.warm_up import warm_up

settings = make_settings(**json.loads(sys.argv[1]))
model = build_model(settings)
table = as_table(simulate(settings, model, 60, seed=6, noise=(0.005, 3.0), shallow=0.2)[0], model)
warm_up(settings, model)
warm = kernels.signatures()
for rows in (0, 1, 60):
    process_part(table.slice(0, rows), settings, model)
print(json.dumps([warm, {name: kinds for name, kinds in kernels.signatures().items() if kinds != warm[name]}]))
"""
QUICK = {"effective_samples": 300, "max_steps": 600}


@pytest.mark.parametrize(
    "model",
    [
        {},
        {"photosphere": "blackbody"},
        {"photosphere": "auto"},
        {"photosphere": "blackbody", "outliers": False},
        {"extinction": {"prior": "fixed", "mean": 0.2}},
        {"extinction": {"prior": "fixed"}, "outliers": False},
        {"temperature_k": [4000.0, 5000.0], "extinction": {"prior": "exponential", "scale": 0.05, "max": 0.1}},
    ],
    ids=["usual", "blackbody", "either", "no outliers", "fixed dust", "fixed dust, no outliers", "narrow range"],
)
def test_no_kernel_is_compiled_for_other_types_afterwards(repository, model):
    sections = {"model": model, "sampling": QUICK | {"keep_draws": 10}}
    shown = subprocess.run(
        [sys.executable, "-W", "ignore", "-c", WARM_THEN_FIT, json.dumps(sections)],
        cwd=repository / "tests",
        env=os.environ | {"PYTHONPATH": f"{repository}/tests:{repository}/tests/unit"},
        capture_output=True,
        text=True,
        check=True,
    )
    warm, others = json.loads(shown.stdout)
    assert others == {}
    assert warm["starkiln.inference.ensemble._pull_in"]


FIRST_AND_SECOND = """
import json
import os
import sys
from simulated import make_settings
from starkiln.inference import compile as kernels
from starkiln.stages import warm_up as stage
from starkiln.stages.model import build_model

stage._processors = lambda: 2
sys.executable = sys.argv[2] or sys.executable
settings = make_settings(**json.loads(sys.argv[1]))
model = build_model(settings)
stage.compile_in_two(settings, model)
shared = kernels.signatures()
stage.warm_up(settings, model)
print(json.dumps([kernels.FOUND_EMPTY, shared, kernels.compilations(), kernels.loads()]))
"""


def warm_up_in_two(repository, cache, model, python=""):
    """Warm up in a process of its own; return whether it found no cache, the kernels of its share, and both counts."""
    shown = subprocess.run(
        [sys.executable, "-c", FIRST_AND_SECOND, json.dumps({"model": model}), python],
        cwd=repository / "tests",
        env=os.environ
        | {"PYTHONPATH": f"{repository}/pipeline:{repository}/tests", "STARKILN_KERNEL_CACHE": str(cache)},
        capture_output=True,
        text=True,
        check=True,
    )
    assert shown.stderr == ""
    return json.loads(shown.stdout)


PEAKS = "starkiln.inference.start._search"
CHAINS = "starkiln.inference.convergence._diagnose"


@pytest.mark.slow
@pytest.mark.parametrize(
    "model", [{}, {"photosphere": "auto"}, {"extinction": {"prior": "fixed"}}], ids=["usual", "either", "fixed dust"]
)
def test_two_processes_share_an_empty_cache(repository, tmp_path, model):
    found_empty, share, compiled, loaded = warm_up_in_two(repository, tmp_path, model)
    assert found_empty
    assert share[CHAINS]
    assert not share[PEAKS]
    assert loaded >= 2
    again = warm_up_in_two(repository, tmp_path, model)
    assert not again[0]
    assert again[2] == 0
    assert again[3] == compiled + loaded


@pytest.mark.slow
def test_a_second_process_that_fails_costs_only_time(repository, tmp_path):
    _, _, compiled, loaded = warm_up_in_two(repository, tmp_path, {}, python="/nowhere/python")
    assert compiled > 15
    assert loaded == 0
