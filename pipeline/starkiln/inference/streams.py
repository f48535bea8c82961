"""Random numbers: one stream a star and purpose, keyed by the run's seed and the star's id alone.

The generator is xoshiro256++ (Blackman & Vigna 2021, ACM TOMS 47, 36), seeded by BLAKE2b.
"""

from __future__ import annotations

import hashlib

import numpy as np
from numpy.typing import NDArray

from starkiln.inference.arithmetic import log, sine_cosine_turns
from starkiln.inference.compile import inlined, kernel


def star_streams(ids: list[bytes], seed: int, purpose: bytes) -> NDArray[np.uint64]:
    """Return the initial state of each star's stream.

    Parameters
    ----------
    ids
        Canonical id bytes of n stars.
    seed
        The run's seed, 0 to 2**64 - 1.
    purpose
        At most 16 bytes that keep the streams of two uses apart.

    Returns
    -------
    (n, 4) uint64.
    """
    salt = seed.to_bytes(8, "little")
    base = hashlib.blake2b(digest_size=32, salt=salt, person=purpose)
    states = bytearray()
    for star_id in ids:
        digest = base.copy()
        digest.update(star_id)
        states += digest.digest()
    return np.frombuffer(states, dtype="<u8").reshape(-1, 4).astype(np.uint64)


@inlined
def _rotate_left(x, k):
    return (x << np.uint64(k)) | (x >> np.uint64(64 - k))


@kernel
def next_uint64(state):
    """Advance a (4,) uint64 state and return 64 random bits."""
    result = _rotate_left(state[0] + state[3], 23) + state[0]
    t = state[1] << np.uint64(17)
    state[2] ^= state[0]
    state[3] ^= state[1]
    state[1] ^= state[2]
    state[0] ^= state[3]
    state[2] ^= t
    state[3] = _rotate_left(state[3], 45)
    return result


@kernel
def uniform(state):
    """Return a uniform draw strictly between 0 and 1."""
    return (np.float64(next_uint64(state) >> np.uint64(12)) + 0.5) * (1.0 / 4503599627370496.0)


@kernel
def below(state, n):
    """Return a random integer from 0 to n - 1, n far below 2**32."""
    return np.int64(((next_uint64(state) >> np.uint64(32)) * np.uint64(n)) >> np.uint64(32))


@kernel
def fill_uniform(state, out):
    """Fill a (k, L) array with uniform draws, lane by lane within each row."""
    for k in range(out.shape[0]):
        for i in range(out.shape[1]):
            out[k, i] = uniform(state)


@kernel
def fill_normal(uniforms, out):
    """Turn uniform draws (2m, L) into standard normal ones (2m, L), by Box & Muller's transform."""
    for k in range(0, out.shape[0], 2):
        for i in range(out.shape[1]):
            radius = np.sqrt(-2.0 * log(uniforms[k, i]))
            sine, cosine = sine_cosine_turns(uniforms[k + 1, i])
            out[k, i] = radius * cosine
            out[k + 1, i] = radius * sine


def normal_draws(streams: NDArray[np.uint64], n_draws: int) -> NDArray[np.float64]:
    """Return standard normal draws (S, n_draws) of S streams (S, 4), which advance."""
    pairs = (n_draws + 1) // 2
    out = np.empty((len(streams), 2, pairs))
    _fill_normals(streams, out)
    return np.ascontiguousarray(out.reshape(len(streams), -1)[:, :n_draws])


@kernel
def _fill_normals(streams, out):
    uniforms = np.empty(out.shape[1:])
    for star in range(out.shape[0]):
        fill_uniform(streams[star], uniforms)
        fill_normal(uniforms, out[star])
