"""How one star is told and drawn."""

from types import SimpleNamespace

import numpy as np
import pytest

from starkiln.report.star import _rejection, alike, finite, flags_of, shown_id
from starkiln.report.star_command import file_stem
from starkiln.report.star_figure import _levels, _scaled, spread_out


@pytest.mark.parametrize(
    ("numbers", "expected"),
    [
        ([5772.3, 5700.2, 5850.8, 5600.0, 5900.0], ["5772", "5700", "5851", "5600", "5900"]),
        ([1.23456, 1.2, 1.3, 1.1, 1.4], ["1.235", "1.200", "1.300", "1.100", "1.400"]),
        ([0.34, 0.2, 0.47, 0.0, 0.6], ["0.34", "0.20", "0.47", "0.00", "0.60"]),
        ([7.01e-14, 6.0e-14, 8.2e-14, 5e-14, 1.2e-13], ["7.0e-14", "6.0e-14", "8.2e-14", "5.0e-14", "12.0e-14"]),
        ([0.0, 0.0, 0.0, 0.0, 0.0], ["0"] * 5),
        ([2.5, 2.5, 2.5, 2.5, 2.5], ["2.500"] * 5),
    ],
)
def test_numbers_have_the_decimals_of_their_interval(numbers, expected):
    assert alike(numbers) == expected


@pytest.mark.parametrize("star_id", ["TS-T1-0001", "123", "a.b+c_d"])
def test_plain_ids_name_their_file(star_id):
    assert file_stem(star_id) == f"star-{star_id}"


@pytest.mark.parametrize(
    "star_id", ["../../etc/passwd", "a b", "a/b", "x" * 300, "", "α Vir", "a\0b", "C:\\x", "\udcff"]
)
def test_other_ids_name_a_file_that_is_safe_and_theirs(star_id):
    stem = file_stem(star_id) if star_id else file_stem("?")
    assert set(stem) <= set("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789._+-")
    assert len(stem) < 80
    assert file_stem("a b") != file_stem("a_b") != file_stem("a/b")


def test_ids_cannot_move_the_cursor():
    assert shown_id("a\x1b[2Jb\n") == "'a\\x1b[2Jb\\n'"
    assert shown_id("α Vir") == "α Vir"
    assert shown_id(17) == "17"


def test_bits_of_another_version_are_told():
    star = SimpleNamespace(stored=SimpleNamespace(values={"flags": 1 | 1 << 29}))
    assert [name for name, _ in flags_of(star)] == ["few_bands", "bits 0x20000000"]


def test_a_fault_is_told_with_what_to_do():
    values = {"reason": "exception", "detail": "ValueError: no", "kind": "fault"}
    star = SimpleNamespace(stored=SimpleNamespace(values=values))
    (text,) = _rejection(star)
    assert text == (
        "Not fitted: exception (ValueError: no); a fault while fitting: `starkiln run --retry-failed` tries again."
    )


def test_names_of_bands_are_kept_apart_in_order():
    places = np.array([0.5, 0.0, 0.52, 0.51, 1.0, 0.5])
    moved = spread_out(places, 0.0, 1.0, 0.05)
    order = np.argsort(places, kind="stable")
    assert np.all(np.diff(moved[order]) > 0.049)
    assert moved.min() >= 0.0
    assert moved.max() <= 1.0
    assert np.array_equal(spread_out(np.array([0.2, 0.8]), 0.0, 1.0, 0.05), [0.2, 0.8])


def test_more_names_than_fit_share_the_room():
    moved = spread_out(np.full(50, 0.5), 0.0, 1.0, 0.1)
    assert np.all(np.diff(np.sort(moved)) > 0.0)


def test_contours_hold_what_they_say():
    x = np.linspace(-5.0, 5.0, 401)
    density = np.exp(-0.5 * (x[:, None] ** 2 + x**2))
    held = [density[density >= level].sum() / density.sum() for level in _levels(density)]
    assert held == pytest.approx([0.95, 0.68], abs=0.002)


def test_small_and_large_numbers_are_drawn_in_powers_of_ten():
    draws, label = _scaled(np.array([2.0e-4, 3.0e-4]), "L", "W")
    assert draws.tolist() == pytest.approx([2.0, 3.0])
    assert label == "L [$10^{-4}$ W]"
    assert _scaled(np.array([31000.0]), "T", "K")[1] == "T [K]"


def test_draws_that_do_not_vary_are_not_drawn():
    draws = {"av": np.zeros(5), "lum": np.full(5, np.nan), "teff": np.arange(5.0)}
    assert finite(draws, "av") is None
    assert finite(draws, "lum") is None
    assert finite(draws, "dist") is None
    assert finite(None, "teff") is None
    assert finite(draws, "teff").tolist() == [0, 1, 2, 3, 4]
