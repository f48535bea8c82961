"""Random numbers: the published generator, and streams that depend on the star alone."""

import numpy as np
from scipy.stats import kstest

from starkiln.inference.compile import kernel
from starkiln.inference.streams import below, fill_normal, fill_uniform, next_uint64, star_streams

# First outputs of xoshiro256++ from the state (1, 2, 3, 4), as the reference code of Blackman & Vigna (2021, ACM TOMS
# 47, 36) gives them; the ten numbers are from memory.
XOSHIRO_1234 = [
    41943041,
    58720359,
    3588806011781223,
    3591011842654386,
    9228616714210784205,
    9973669472204895162,
    14011001112246962877,
    12406186145184390807,
    15849039046786891736,
    10450023813501588000,
]


@kernel
def _take(state, out):
    for k in range(out.size):
        out[k] = next_uint64(state)


@kernel
def _take_below(state, n, out):
    for k in range(out.size):
        out[k] = below(state, n)


def test_generator_is_xoshiro256_plus_plus():
    out = np.empty(10, np.uint64)
    _take(np.array([1, 2, 3, 4], np.uint64), out)
    assert out.tolist() == XOSHIRO_1234


def test_stream_depends_on_seed_star_and_purpose_only():
    base = star_streams([b"a", b"b"], 1, b"photometry")
    assert (star_streams([b"b", b"c", b"a"], 1, b"photometry")[[2, 0]] == base).all()
    for other in (
        star_streams([b"a", b"b"], 2, b"photometry"),
        star_streams([b"a", b"b"], 1, b"distance"),
        star_streams([b"b", b"a"], 1, b"photometry"),
    ):
        assert (other != base).any(axis=1).all()


def test_normals_and_integers_are_distributed_as_they_should_be():
    state = star_streams([b"any"], 0, b"test")[0]
    uniforms, normals = np.empty((4, 20_000)), np.empty((4, 20_000))
    fill_uniform(state, uniforms)
    fill_normal(uniforms, normals)
    assert kstest(uniforms.ravel(), "uniform").pvalue > 1e-3
    assert kstest(normals.ravel(), "norm").pvalue > 1e-3
    assert abs(np.corrcoef(normals)[0, 1]) < 0.03
    integers = np.empty(60_000, np.int64)
    _take_below(state, 6, integers)
    counts = np.bincount(integers, minlength=6)
    assert counts.size == 6
    assert ((counts - 10_000) ** 2 / 10_000).sum() < 25.0  # chi-square, 5 degrees of freedom: chance 1e-4
