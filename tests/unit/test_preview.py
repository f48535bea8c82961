import pyarrow as pa
import pyarrow.parquet as pq

from starkiln.engine.preview import first_rows

QUANTITIES = {
    "teff_p50": [5772.4, 13580.0, None],
    "teff_lo68": [5700.0, 12080.0, None],
    "teff_hi68": [5820.0, 17200.0, None],
    "radius_p50": [1.0, 0.0123456, None],
    "radius_lo68": [0.98, 0.012, None],
    "radius_hi68": [1.03, 0.0128, None],
    "lum_p50": [1.0, 1234567.0, None],
    "lum_lo68": [1.0, 1234000.0, None],
    "lum_hi68": [1.1, 1300000.0, None],
}


def write(tmp_path, rows):
    folder = tmp_path / "catalogue"
    folder.mkdir()
    data = {"star_id": ["T1", "T2", "T3"], "ra": [1.0, 2.0, 3.0], "flags": [0, 0b1001, 1 << 9], **QUANTITIES}
    pq.write_table(pa.table(data).slice(0, rows), folder / "part-000000.parquet")


def test_rows_are_told_with_intervals_and_flags_in_words(tmp_path):
    write(tmp_path, 3)
    assert first_rows(tmp_path).splitlines() == [
        "star_id  T [K]              R [solRad]                 L [solLum]           flags",
        "T1       5772 +48 -72       1.000 +0.030 -0.020        1.000 +0.10 -0       none",
        "T2       13580 +3600 -1500  0.01235 +0.00045 -0.00035  1235000 +65000 -570  few_bands, no_parallax",
        "T3       -                  -                          -                    no_detection",
    ]


def test_only_as_many_rows_as_asked_for(tmp_path):
    write(tmp_path, 3)
    assert len(first_rows(tmp_path, 2).splitlines()) == 3


def test_an_empty_catalogue_has_a_heading_only(tmp_path):
    write(tmp_path, 0)
    assert first_rows(tmp_path) == "star_id  T [K]  R [solRad]  L [solLum]  flags"
