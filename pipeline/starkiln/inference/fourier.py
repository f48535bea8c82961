"""Autocovariances at all lags by Fourier transforms, many series beside each other in vector lanes.

Plain arithmetic like that of arithmetic.py, so that lengths of chains do not hang on the processor.
"""

from __future__ import annotations

import numpy as np

from starkiln.inference.arithmetic import sine_cosine_turns
from starkiln.inference.compile import kernel

LANES = 8


@kernel
def all_products(series, weight, out):
    """Write, for every lag, the sum of the products of values that far apart, weighted by column of a series (n, C).

    Columns are taken two by two as the real and the imaginary part of one series, LANES of these at a time: the power
    spectrum of a complex series transforms into the sum of its two parts' products.
    """
    n, columns = series.shape
    size = 2
    while size < 2 * n:
        size *= 2
    cosine, sine = np.empty(size // 2), np.empty(size // 2)
    for k in range(size // 2):
        sine[k], cosine[k] = sine_cosine_turns(k / size)
    room = np.empty((2, 2, size * LANES))
    power = np.empty(size * LANES)
    power[:] = 0.0
    scale = np.empty(columns)
    for c in range(columns):
        scale[c] = np.sqrt(weight[c])
    for begin in range(0, columns, 2 * LANES):
        _put_columns(series, scale, begin, room)
        here = _transform(room, cosine, sine)
        real, imaginary = room[here, 0], room[here, 1]
        for i in range(power.size):
            power[i] += real[i] * real[i] + imaginary[i] * imaginary[i]
    total = np.empty((2, 2, size))
    total[0] = 0.0
    for k in range(size):
        for lane in range(LANES):
            total[0, 0, k] += power[k * LANES + lane]
    here = _transform(total, cosine, sine)
    for lag in range(n):
        out[lag] = total[here, 0, lag] / size


@kernel
def _put_columns(series, scale, begin, room):
    """Write 2 * LANES scaled columns beside each other, then zeros; zeros for columns that there are not."""
    room[0] = 0.0
    for part in range(2):
        first = begin + part * LANES
        its_scale = scale[first : first + LANES]
        for t in range(series.shape[0]):
            row, target = series[t, first:], room[0, part, t * LANES :]
            for lane in range(its_scale.size):
                target[lane] = row[lane] * its_scale[lane]


@kernel
def _transform(room, cosine, sine):
    """Fourier transform the series in the first half of a room; return the half (2, size * lanes) where it is then.

    The room is (2, 2, size * lanes): two halves, real and imaginary, the lanes beside each other. Stockham's order:
    nothing is left bit-reversed.
    """
    here, there = 0, 1
    span = room.shape[2] // (2 * cosine.size)
    while span < room.shape[2]:
        parts = 4 if room.shape[2] // span % 4 == 0 else 2
        if parts == 4:
            _by_fours(room[here], room[there], span, cosine, sine)
        else:
            _by_twos(room[here], room[there], span, cosine, sine)
        here, there = there, here
        span *= parts
    return here


@kernel
def _by_twos(source, target, span, cosine, sine):
    """Turn series (2, 2, n, span) by halves into (2, n, 2, span), both without their inner axes."""
    half = source.shape[1] // 2
    turn = cosine.size * span // half
    for k in range(half // span):
        c, s = cosine[k * turn], sine[k * turn]
        a_re, a_im = source[0, k * span :], source[1, k * span :]
        b_re, b_im = a_re[half:], a_im[half:]
        sum_re, sum_im = target[0, 2 * k * span :], target[1, 2 * k * span :]
        turned_re, turned_im = sum_re[span:], sum_im[span:]
        for i in range(span):
            re, im = a_re[i] - b_re[i], a_im[i] - b_im[i]
            sum_re[i], sum_im[i] = a_re[i] + b_re[i], a_im[i] + b_im[i]
            turned_re[i], turned_im[i] = re * c - im * s, re * s + im * c


@kernel
def _by_fours(source, target, span, cosine, sine):
    """Turn series (2, 4, n, span) by quarters into (2, n, 4, span), both without their inner axes."""
    quarter = source.shape[1] // 4
    turn = cosine.size * span // (2 * quarter)
    for k in range(quarter // span):
        c1, s1, c2, s2 = cosine[k * turn], sine[k * turn], cosine[2 * k * turn], sine[2 * k * turn]
        c3, s3 = c1 * c2 - s1 * s2, c1 * s2 + s1 * c2
        re, im = source[0, k * span :], source[1, k * span :]
        a_re, b_re, c_re, d_re = re, re[quarter:], re[2 * quarter :], re[3 * quarter :]
        a_im, b_im, c_im, d_im = im, im[quarter:], im[2 * quarter :], im[3 * quarter :]
        re, im = target[0, 4 * k * span :], target[1, 4 * k * span :]
        re_0, re_1, re_2, re_3 = re, re[span:], re[2 * span :], re[3 * span :]
        im_0, im_1, im_2, im_3 = im, im[span:], im[2 * span :], im[3 * span :]
        for i in range(span):
            sum_re, sum_im = a_re[i] + c_re[i], a_im[i] + c_im[i]
            gap_re, gap_im = a_re[i] - c_re[i], a_im[i] - c_im[i]
            odd_re, odd_im = b_re[i] + d_re[i], b_im[i] + d_im[i]
            turn_re, turn_im = d_im[i] - b_im[i], b_re[i] - d_re[i]
            re_0[i], im_0[i] = sum_re + odd_re, sum_im + odd_im
            re, im = gap_re + turn_re, gap_im + turn_im
            re_1[i], im_1[i] = re * c1 - im * s1, re * s1 + im * c1
            re, im = sum_re - odd_re, sum_im - odd_im
            re_2[i], im_2[i] = re * c2 - im * s2, re * s2 + im * c2
            re, im = gap_re - turn_re, gap_im - turn_im
            re_3[i], im_3[i] = re * c3 - im * s3, re * s3 + im * c3
