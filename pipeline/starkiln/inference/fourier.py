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
    power = np.zeros(size * LANES)
    scale = np.sqrt(weight)
    for begin in range(0, columns, 2 * LANES):
        room[0] = 0.0
        for part in range(2):
            some = slice(begin + part * LANES, min(begin + (part + 1) * LANES, columns))
            its_scale = scale[some]
            for t in range(n):
                row, target = series[t, some], room[0, part, t * LANES :]
                for lane in range(its_scale.size):
                    target[lane] = row[lane] * its_scale[lane]
        real, imaginary = _transform(room, cosine, sine)
        for i in range(power.size):
            power[i] += real[i] * real[i] + imaginary[i] * imaginary[i]
    total = np.zeros((2, 2, size))
    for k in range(size):
        for lane in range(LANES):
            total[0, 0, k] += power[k * LANES + lane]
    out[:] = _transform(total, cosine, sine)[0, :n] / size


@kernel
def _transform(room, cosine, sine):
    """Return the Fourier transform (2, size * lanes), real and imaginary, of the series in the first half of a room.

    The room is (2, 2, size * lanes), its second half scratch, the lanes beside each other. Stockham's order: nothing is
    left bit-reversed.
    """
    here, there = 0, 1
    span = room.shape[2] // (2 * cosine.size)
    while span < room.shape[2]:
        parts = 4 if room.shape[2] // span % 4 == 0 else 2
        n = room.shape[2] // (parts * span)
        source, target = room[here].reshape((2, parts, n, span)), room[there].reshape((2, n, parts, span))
        if parts == 4:
            _by_fours(source, target, cosine, sine)
        else:
            _by_twos(source, target, cosine, sine)
        here, there = there, here
        span *= parts
    return room[here]


@kernel
def _by_twos(source, target, cosine, sine):
    turn = cosine.size // source.shape[2]
    for k in range(source.shape[2]):
        c, s = cosine[k * turn], sine[k * turn]
        a_re, b_re, a_im, b_im = source[0, 0, k], source[0, 1, k], source[1, 0, k], source[1, 1, k]
        sum_re, turned_re, sum_im, turned_im = target[0, k, 0], target[0, k, 1], target[1, k, 0], target[1, k, 1]
        for i in range(a_re.size):
            re, im = a_re[i] - b_re[i], a_im[i] - b_im[i]
            sum_re[i], sum_im[i] = a_re[i] + b_re[i], a_im[i] + b_im[i]
            turned_re[i], turned_im[i] = re * c - im * s, re * s + im * c


@kernel
def _by_fours(source, target, cosine, sine):
    turn = cosine.size // (2 * source.shape[2])
    for k in range(source.shape[2]):
        c1, s1, c2, s2 = cosine[k * turn], sine[k * turn], cosine[2 * k * turn], sine[2 * k * turn]
        c3, s3 = c1 * c2 - s1 * s2, c1 * s2 + s1 * c2
        a_re, b_re, c_re, d_re = source[0, 0, k], source[0, 1, k], source[0, 2, k], source[0, 3, k]
        a_im, b_im, c_im, d_im = source[1, 0, k], source[1, 1, k], source[1, 2, k], source[1, 3, k]
        re_0, re_1, re_2, re_3 = target[0, k, 0], target[0, k, 1], target[0, k, 2], target[0, k, 3]
        im_0, im_1, im_2, im_3 = target[1, k, 0], target[1, k, 1], target[1, k, 2], target[1, k, 3]
        for i in range(a_re.size):
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
