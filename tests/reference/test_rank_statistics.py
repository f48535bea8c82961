"""Simulation-based calibration on few stars; tests/benchmarks/rank_statistics.py is the full-size version."""

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "benchmarks"))

from rank_statistics import CONFIGURATIONS, chance_of_uniform, holm, ranks

CHOSEN = ("13 bands", "4 bands, poor parallaxes")


def test_ranks_of_the_truth_are_uniform():
    chances = {}
    for configuration in CHOSEN:
        found = ranks(200, CONFIGURATIONS[configuration], seed=5)
        assert set(found) == {"teff", "ang_diam", "dist", "radius", "lum", "av", "z1"}
        chances |= {(configuration, name): chance_of_uniform(values, bins=8) for name, values in found.items()}
    corrected = holm(list(chances.values()))
    assert corrected.min() > 1e-3, min(chances, key=chances.get)


def test_ranks_of_intervals_too_narrow_by_a_third_are_not():
    random = np.random.default_rng(2)
    truth = random.normal(size=(400, 1))
    narrow = truth + random.normal(size=(400, 1)) + 0.67 * random.normal(size=(400, 63))
    right = truth + random.normal(size=(400, 1)) + random.normal(size=(400, 63))
    assert chance_of_uniform((narrow < truth).sum(axis=1), bins=8) < 1e-3
    assert chance_of_uniform((right < truth).sum(axis=1), bins=8) > 1e-3


def test_holm_correction_of_four_tests():
    # Multiplied by 4, 3, 2, 1 from the least upwards, never falling.
    assert holm([0.01, 0.04, 0.03, 0.005]) == pytest.approx([0.03, 0.06, 0.06, 0.02])
