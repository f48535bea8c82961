"""Departures: evaluation, what holds outside their range, the file, fallbacks."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from starkiln.errors import SettingsError
from starkiln.physics.departures import (
    LN_TEFF_NODES,
    DepartureMismatch,
    Departures,
    builtin_departures,
    extended,
    extended_scatter,
    fallback_error,
    inside_range,
    read_departures,
    write_departures,
)
from starkiln.physics.passbands import builtin_names, load_passband

TEFF_NODES_K = np.exp(LN_TEFF_NODES)
NAMES = ("johnson_b", "johnson_v", "2mass_ks")


def made(n_factors=1, ranges=((2500.0, 30_000.0), (2400.0, 30_000.0), (2000.0, 20_000.0))):
    """Return invented departures of three bands."""
    passbands = [load_passband(name) for name in NAMES]
    inside = [inside_range(range_k) for range_k in ranges]
    curves = [0.3 * np.sin(3.0 * LN_TEFF_NODES + place) for place in range(3)]
    loading = [
        [extended(0.01 * (factor + 1) * (LN_TEFF_NODES - 8.0), held) for held in inside] for factor in range(n_factors)
    ]
    return Departures(
        bands=NAMES,
        digests=tuple(passband.digest() for passband in passbands),
        kind=("sequence", "stars", "chain"),
        source=("a table", "some stars", "a relation"),
        pivot_um=np.array([passband.pivot_um for passband in passbands]),
        range_k=np.stack([TEFF_NODES_K[held][[0, -1]] for held in inside]),
        ln_d=np.stack([extended(curve, held) for curve, held in zip(curves, inside, strict=True)]),
        loading=np.array(loading).reshape(n_factors, 3, len(LN_TEFF_NODES)),
        scatter=np.stack([extended_scatter(np.full(len(held), 0.03), held) for held in inside]),
        factors=("photosphere", "activity")[:n_factors],
        temperature_scatter=np.where(TEFF_NODES_K < 4000.0, 0.02, 0.01),
        luminosity_scatter=np.where(TEFF_NODES_K < 4000.0, 0.03, 0.04),
        provenance={"curves": "invented", "stars": 12},
    )


# ---- evaluation


def test_values_at_the_nodes_are_the_nodes():
    departures = made()
    at = departures.at(TEFF_NODES_K)
    np.testing.assert_allclose(at.ln_d, departures.ln_d, atol=1e-12)
    np.testing.assert_allclose(at.loading, departures.loading, atol=1e-12)
    np.testing.assert_allclose(at.scatter, departures.scatter, rtol=1e-12)


def test_between_the_nodes_a_smooth_curve_is_met():
    teff_k = np.linspace(3000.0, 15_000.0, 200)
    expected = 0.3 * np.sin(3.0 * np.log(teff_k))
    np.testing.assert_allclose(made().at(teff_k).ln_d[0], expected, atol=1e-4)


@given(ln_teff=st.floats(5.0, 13.0))
def test_no_step_anywhere(ln_teff):
    below, above = made().at(np.exp([ln_teff, ln_teff + 1e-6]))[0].T
    np.testing.assert_allclose(below, above, atol=1e-5)
    scatter = made().at(np.exp([ln_teff, ln_teff + 1e-6])).scatter
    np.testing.assert_allclose(scatter[:, 0], scatter[:, 1], atol=1e-5)


def test_beyond_its_range_ln_d_is_held_and_the_scatter_grows():
    departures = made()
    low_k, high_k = departures.range_k[0]
    for edge_k, outside_k in ((low_k, low_k / 1.3), (high_k, high_k * 1.3)):
        edge, outside = departures.at(edge_k), departures.at(outside_k)
        assert abs(outside.ln_d[0, 0] - edge.ln_d[0, 0]) < 0.03  # slopes of 0.9 at most die within 0.03 of ln T
        assert outside.scatter[0, 0] == pytest.approx(np.hypot(0.03, np.log(1.3)), rel=0.02)


def test_beyond_the_last_node_the_scatter_grows_on():
    at = made().at([100_000.0, 200_000.0])
    np.testing.assert_allclose(at.ln_d[:, 0], at.ln_d[:, 1], atol=1e-9)
    assert np.all(at.scatter[:, 1] > at.scatter[:, 0])


def test_where_a_band_holds():
    holds = made().holds([2200.0, 5000.0, 25_000.0])
    assert holds.tolist() == [[False, True, True], [False, True, True], [True, True, False]]


def test_a_departure_known_at_one_node_is_refused():
    inside = np.zeros(len(LN_TEFF_NODES), dtype=bool)
    inside[40] = True
    with pytest.raises(ValueError, match="two nodes or more"):
        extended(np.zeros(len(LN_TEFF_NODES)), inside)


# ---- choosing bands


def test_bands_come_in_the_order_asked_for():
    chosen = made().for_bands([load_passband("2mass_ks"), load_passband("johnson_b"), load_passband("2mass_ks")])
    assert chosen.bands == ("2mass_ks", "johnson_b", "2mass_ks")
    np.testing.assert_array_equal(chosen.ln_d, made().ln_d[[2, 0, 2]])
    np.testing.assert_array_equal(chosen.loading[0], made().loading[0][[2, 0, 2]])
    assert chosen.kind == ("chain", "sequence", "chain")
    assert chosen.served.all()


def test_another_curve_of_the_same_name_is_refused():
    other = replace(load_passband("johnson_v"), zero_point_jy=3600.0)
    with pytest.raises(DepartureMismatch, match=r"'johnson_v'.*starkiln calibrate"):
        made().for_bands([other])


def test_a_mismatch_is_a_settings_error():
    assert issubclass(DepartureMismatch, SettingsError)


@pytest.mark.parametrize(
    ("name", "error"), [("sdss_u", 0.20), ("sdss_z", 0.20), ("2mass_j", 0.10), ("2mass_h", 0.10), ("wise_w1", 0.05)]
)
def test_a_band_without_departures_gets_a_wide_error(name, error):
    chosen = made().for_bands([load_passband("johnson_v"), load_passband(name)])
    assert chosen.kind == ("stars", "fallback")
    assert chosen.served.tolist() == [True, False]
    assert chosen.factors == ("photosphere", "fallback")
    at = chosen.at(5000.0)
    # Half of the variance is shared; what the neighbours scatter, 0.03, comes on top.
    assert at.loading[1, 1, 0] == pytest.approx(error * np.sqrt(0.5))
    assert at.loading[1, 0, 0] == 0.0
    assert np.hypot(at.loading[1, 1, 0], at.scatter[1, 0]) == pytest.approx(np.hypot(error, 0.03), rel=1e-3)
    assert fallback_error(load_passband(name).pivot_um) == error


def test_a_fallback_lies_between_its_neighbours():
    departures = made()
    ln_d = departures.for_bands([load_passband("2mass_j")]).at(6000.0).ln_d[0, 0]
    low, high = np.sort(departures.at(6000.0).ln_d[1:, 0])
    assert low < ln_d < high


def test_a_fallback_beyond_the_last_band_takes_that_one():
    fallback = made().for_bands([load_passband("wise_w2")])
    np.testing.assert_allclose(fallback.ln_d[0], made().ln_d[2], atol=1e-12)
    assert fallback.source == ("a guess between 2mass_ks and 2mass_ks",)


def test_two_factors_leave_no_room_so_fallbacks_share_the_second():
    chosen = made(n_factors=2).for_bands([load_passband("johnson_v"), load_passband("sdss_r"), load_passband("sdss_i")])
    assert chosen.factors == ("photosphere", "activity")
    np.testing.assert_allclose(chosen.loading[1, 1:], 0.20 * np.sqrt(0.5))
    np.testing.assert_array_equal(chosen.loading[:, 0], made(n_factors=2).loading[:, 1])


# ---- the file


@pytest.mark.parametrize("n_factors", [0, 1, 2])
def test_a_file_gives_back_what_was_written(tmp_path, n_factors):
    departures, path = made(n_factors), tmp_path / "departures.ecsv"
    write_departures(departures, path)
    read = read_departures(path)
    assert (read.bands, read.digests, read.kind, read.source) == (
        NAMES,
        departures.digests,
        departures.kind,
        departures.source,
    )
    assert (read.factors, read.provenance, read.origin) == (departures.factors, departures.provenance, str(path))
    np.testing.assert_allclose(read.range_k, departures.range_k, rtol=1e-5)
    teff_k = np.geomspace(1500.0, 60_000.0, 50)
    for got, expected in zip(read.at(teff_k), departures.at(teff_k), strict=True):
        np.testing.assert_allclose(got, expected, atol=3e-5)


def test_without_scatter_about_the_scale_the_file_is_silent_of_it(tmp_path):
    path = tmp_path / "departures.ecsv"
    none = np.zeros(len(LN_TEFF_NODES))
    write_departures(replace(made(), temperature_scatter=none, luminosity_scatter=none), path)
    assert "temperature_scatter" not in path.read_text()
    assert "luminosity_scatter" not in path.read_text()
    assert not read_departures(path).temperature_scatter.any()
    assert not read_departures(path).luminosity_scatter.any()


def test_the_same_departures_are_the_same_bytes(tmp_path):
    for name in ("a", "b"):
        write_departures(made(2), tmp_path / name)
    assert (tmp_path / "a").read_bytes() == (tmp_path / "b").read_bytes()


def test_departures_on_other_nodes_are_not_written(tmp_path):
    with pytest.raises(ValueError, match="standard nodes"):
        write_departures(replace(made(), ln_teff=LN_TEFF_NODES + 0.01), tmp_path / "departures.ecsv")


def spoilt(tmp_path, old, new):
    path = tmp_path / "departures.ecsv"
    write_departures(made(), path)
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new, 1))
    return path


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("{format: 1}", "{format: 2}", "format 2"),
        ("kind: chain", "kind: rumour", "'2mass_ks' is of kind 'rumour'"),
        ("- factors:", "- factoids:", "lacks factors"),
        (
            f"johnson_v {TEFF_NODES_K[inside_range((2400.0, 3e4))][0]:.2f} ",
            "johnson_v 2222.22 ",
            "'johnson_v': its rows",
        ),
        (" 0.03\njohnson_v", " -0.03\njohnson_v", "'johnson_b', column 'scatter'"),
        ("temperature_scatter: [0.02,", "temperature_scatter: [", "temperature_scatter needs 129 numbers"),
    ],
)
def test_a_spoilt_file_is_refused(tmp_path, old, new, message):
    path = spoilt(tmp_path, old, new)
    with pytest.raises(SettingsError, match=message) as caught:
        read_departures(path)
    assert str(path) in str(caught.value)


def test_a_file_that_lacks_a_row_is_refused(tmp_path):
    path = tmp_path / "departures.ecsv"
    write_departures(made(), path)
    lines = path.read_text().splitlines(keepends=True)
    path.write_text("".join(lines[:-1]))
    with pytest.raises(SettingsError, match="'2mass_ks': its rows are not the nodes of its range"):
        read_departures(path)


def test_a_missing_file_is_named(tmp_path):
    with pytest.raises(SettingsError, match=r"nowhere\.ecsv: no such file"):
        read_departures(tmp_path / "nowhere.ecsv")


def test_any_other_file_is_refused(tmp_path):
    path = tmp_path / "other.ecsv"
    path.write_text("not a table\n")
    with pytest.raises(SettingsError, match=r"other\.ecsv"):
        read_departures(path)


# ---- the built-in set


def test_every_built_in_passband_has_departures_of_its_own_curve():
    chosen = builtin_departures().for_bands([load_passband(name) for name in builtin_names()])
    assert chosen.served.all()
    assert chosen.factors == ("photosphere",)
    assert np.all(chosen.temperature_scatter > 0.0)
    assert np.all(chosen.luminosity_scatter > 0.0)


def test_built_in_departures_are_finite_and_their_scatter_positive():
    at = builtin_departures().at(np.geomspace(1000.0, 100_000.0, 500))
    assert np.all(np.isfinite(at.ln_d))
    assert np.all(np.isfinite(at.loading))
    assert np.all(at.scatter > 0.0)
    assert builtin_departures().provenance["temperature_scale"]
