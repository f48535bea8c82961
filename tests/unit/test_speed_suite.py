"""The benchmarks of speed compare like with like, and time functions that are there."""

from __future__ import annotations

import time

import numpy as np
import pytest

from benchmarks.speed import end_to_end
from benchmarks.speed.cases import simulated
from benchmarks.speed.common import print_rows
from benchmarks.speed.costs import BANDS, bands_of
from benchmarks.speed.plain import Disagreement, PlainPosterior, b_spline, check_plain, natural, worst_difference
from benchmarks.speed.samplers import OURS, Outcome
from starkiln.inference.start import find_modes


@pytest.fixture(scope="module")
def case(tmp_path_factory):
    return simulated(3, tmp_path_factory.mktemp("speed"), "smooth", bands_of(5))


def test_the_plain_log_posterior_is_the_kernels(case):
    modes = find_modes(case.block, case.model.grid, case.model.prior)
    steps = np.random.default_rng(1).normal(scale=[0.1, 0.1, 0.2, 1.0], size=(3, 40, 4))
    points = modes.coords[:, :1] + steps
    assert check_plain(points, case.block, case.model.grid, case.model.prior) < 1e-9


def test_a_log_posterior_that_differs_is_refused():
    with pytest.raises(Disagreement, match="NumPy and the kernel differ by"):
        worst_difference(np.array([1.0, -np.inf]), np.array([1.0 + 1e-6, -np.inf]), "NumPy")
    with pytest.raises(Disagreement, match="outside"):
        worst_difference(np.array([1.0, 2.0]), np.array([1.0, -np.inf]), "NumPy")


def test_upper_limits_are_refused(case):
    limited = case.block._replace(limit=~case.block.limit)
    with pytest.raises(NotImplementedError, match="upper limits"):
        PlainPosterior(limited, 0, case.model.grid, case.model.prior)


def test_spline_weights_add_up_to_one_at_both_ends():
    for place, first in ((0.0, 0), (3.25, 3), (6.0, 5)):
        found, weights = b_spline(place, 9)
        assert found == first
        assert weights.sum() == pytest.approx(1.0)


def test_positions_of_walkers_become_natural_ones():
    found = natural(np.array([[2.0, -40.0, 0.3, 1.5]]))
    assert found[0] == pytest.approx([np.log(5000.0), -40.0 - np.log(5000.0), 0.3, 1.5])


def test_every_wrapped_function_is_there():
    assert {stage for stage, _, _ in end_to_end.wrapped_functions()} == set(end_to_end.STAGES)


def test_a_function_that_is_gone_is_told(monkeypatch):
    monkeypatch.setitem(end_to_end.STAGES, "kernels", ("starkiln.inference.moves:no_such_kernel",))
    with pytest.raises(end_to_end.WrappedNameGone, match=r"starkiln.inference.moves has no no_such_kernel"):
        end_to_end.wrapped_functions()


def test_a_stages_time_is_without_the_stages_within_it():
    clock = end_to_end.StageClock()

    def busy(seconds):
        until = time.process_time() + seconds
        while time.process_time() < until:
            pass

    def outer():
        for _ in range(2):
            busy(0.01)
            inner(0.03)
            yield 1

    inner = clock.timed(busy, "inner")
    assert list(clock.timed(outer, "outer")()) == [1, 1]
    assert 0.02 <= clock.seconds["outer"] < 0.04 < 0.06 <= clock.seconds["inner"]


def test_another_sampler_is_brought_to_our_effective_size_and_ours_is_not():
    seconds = {"start_s": 1.0, "burn_in_s": 2.0, "sampling_s": 10.0}
    other = Outcome("emcee", [400.0, 600.0], [300.0, 300.0], **seconds)
    assert other.row("stars", 1000.0)["same_ess_stars_per_core_s"] == pytest.approx(2 / 23.0)
    ours = Outcome(OURS, [400.0, 600.0], [300.0, 300.0], **seconds)
    assert ours.row("stars", 1000.0)["same_ess_stars_per_core_s"] == pytest.approx(2 / 13.0)


def test_bands_are_as_many_as_asked_for_and_differ():
    assert [len(set(bands_of(number))) for number in BANDS] == list(BANDS)


def test_a_table_shows_words_numbers_and_gaps(capsys):
    print_rows([{"a": "x", "b": 1234.5}, {"a": "long"}], {"a": "name", "b": "rate"})
    assert capsys.readouterr().out.splitlines()[:3] == ["name   rate", "x     1,234", "long      -"]
