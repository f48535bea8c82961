import pytest

from starkiln.engine.keys import ROWS_VERSION
from starkiln.engine.reasons import why_refit

THEN = {
    "rows": ROWS_VERSION,
    "fit_key": "one",
    "settings": "s",
    "method": 3,
    "departures": "d",
    "passbands": {"g": "1", "r": "2"},
}
FIT = {
    "seed": 1,
    "model": {"extinction": {"scale": 0.3, "law": "G23"}},
    "photometry": [{"unit": "nJy"}, {"unit": "mag"}],
}


def why(changed, fit_now=FIT, fit_then=FIT, missing=()):
    return why_refit(THEN, THEN | changed, fit_then, fit_now, missing)


def test_nothing_is_told_where_results_can_be_taken_over():
    assert why({}) == ""
    # The parts hold what the key is made of: where it is the same, they are not looked at.
    assert why({"method": 4}) == ""


def test_an_earlier_version_of_the_hashes_is_told_alone():
    for rows in ({}, {"rows": ROWS_VERSION - 1}):
        then = {name: value for name, value in THEN.items() if name != "rows"} | rows
        text = why_refit(then, THEN | {"fit_key": "two", "method": 4}, FIT, FIT, ["teff_p50"])
        assert text == "the published catalogue was made by an earlier version of starkiln"


@pytest.mark.parametrize(
    ("changed", "text"),
    [
        ({"method": 4}, "the method's version changed (3 -> 4)"),
        ({"departures": "e"}, "departures changed"),
        ({"passbands": {"g": "1", "r": "3"}}, "passbands changed (r)"),
        (
            {"passbands": {"g": "0", "r": "3"}, "method": 4},
            "the method's version changed (3 -> 4); passbands changed (g, r)",
        ),
    ],
)
def test_each_part_of_the_key_is_told_by_name(changed, text):
    assert why(changed | {"fit_key": "two"}) == text


def test_settings_that_differ_are_told_with_both_values():
    now = {
        "seed": 2,
        "model": {"extinction": {"scale": 0.5, "law": "G23"}},
        "photometry": [{"unit": "nJy"}, {"unit": "Jy"}],
    }
    text = why({"fit_key": "two", "settings": "t"}, now)
    assert text == ("settings changed (seed: 1 -> 2, model.extinction.scale: 0.3 -> 0.5, photometry.1.unit: mag -> Jy)")
    assert why({"fit_key": "two", "settings": "t"}, now, None) == "settings changed"


def test_settings_that_come_or_go_and_long_lists_stay_short():
    now = {"seed": None, "photometry": [{}], "model": 5, "more": {"a": 1}, "last": True}
    text = why({"fit_key": "two", "settings": "t"}, now)
    assert text == (
        "settings changed (seed: 1 -> none, model: another table -> 5, photometry: 2 of them -> 1 of them, "
        "more: none -> another table and 1 more)"
    )


def test_a_band_that_is_gone_is_told_by_the_settings_alone():
    text = why({"fit_key": "two", "settings": "t", "passbands": {"g": "1"}}, FIT | {"photometry": [{"unit": "nJy"}]})
    assert text == "settings changed (photometry: 2 of them -> 1 of them)"


def test_another_key_is_never_passed_over_in_silence():
    assert why({"fit_key": "two", "passbands": {"g": "1"}}) == "what a fit hangs on has changed"


def test_columns_that_the_catalogue_lacks_are_told():
    assert why({}, missing=["residual_g"]) == "the published catalogue has no column residual_g"
    many = why({}, missing=list("abcdef"))
    assert many == "the published catalogue has no columns a, b, c, d and 2 more"
