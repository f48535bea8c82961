"""Names and bits of the flags are for ever: catalogues in the world hold them."""

import pytest

from starkiln.flags import FLAGS, names

FROZEN = {
    "few_bands": 0,
    "poor_parallax": 1,
    "negative_parallax": 2,
    "no_parallax": 3,
    "not_converged": 4,
    "several_modes": 5,
    "temperature_at_bound": 6,
    "extinction_at_bound": 7,
    "radius_at_bound": 8,
    "no_detection": 9,
    "poor_fit": 10,
    "odd_photosphere": 11,
    "band_outlier": 12,
    "outside_calibration": 13,
    "infrared_excess": 14,
    "ultraviolet_excess": 15,
    "blackbody_chosen": 16,
    "duplicate_id": 17,
    "distance_at_bound": 18,
}


def test_names_and_bits_are_frozen():
    assert {flag.name: flag.bit for flag in FLAGS} == FROZEN


def test_every_flag_has_a_sentence():
    assert all(flag.sentence.endswith(".") and len(flag.sentence) > 20 for flag in FLAGS)


def test_names_of_a_value():
    assert names((1 << 9) | (1 << 4)) == ["not_converged", "no_detection"]
    with pytest.raises(ValueError, match="no flag of this version"):
        names(1 << 30)
