"""exp, log, sine and cosine in plain arithmetic against numpy, log Phi against scipy."""

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import log_ndtr

from starkiln.inference.arithmetic import exp_array, log_array, log_normal_cdf, sine_cosine_turns
from starkiln.inference.compile import kernel


@given(st.lists(st.floats(-700.0, 700.0), min_size=1, max_size=50))
def test_exp_is_numpys_to_two_ulp(values):
    x = np.array(values)
    np.testing.assert_allclose(exp_array(x), np.exp(x), rtol=4.5e-16)


def test_exp_is_clamped_and_keeps_nan():
    result = exp_array(np.array([-1e4, 1e4, np.nan]))
    assert result[0] == np.exp(-700.0)
    assert result[1] < np.inf
    assert np.isnan(result[2])


@given(st.lists(st.floats(1e-300, 1e300), min_size=1, max_size=50))
def test_log_is_numpys_to_two_ulp(values):
    x = np.array(values)
    np.testing.assert_allclose(log_array(x), np.log(x), rtol=4.5e-16, atol=1e-16)


def test_values_do_not_depend_on_their_place():
    x = np.linspace(-3.0, 3.0, 37)
    for k in range(37):
        assert exp_array(x[k : k + 1])[0] == exp_array(x)[k]


@kernel
def _turns(u, out):
    for k in range(u.size):
        out[0, k], out[1, k] = sine_cosine_turns(u[k])


def test_sine_and_cosine_of_turns():
    u = np.linspace(1e-9, 1.0 - 1e-9, 10_001)
    out = np.empty((2, u.size))
    _turns(u, out)
    np.testing.assert_allclose(out, [np.sin(2.0 * np.pi * u), np.cos(2.0 * np.pi * u)], atol=1e-15)


def test_log_normal_cdf_down_the_tail():
    x = np.concatenate([np.linspace(-40.0, 8.0, 400), [-6.0, -6.0000001, -300.0]])
    np.testing.assert_allclose([log_normal_cdf(v) for v in x], log_ndtr(x), rtol=2e-6, atol=1e-15)
