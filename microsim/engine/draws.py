"""Compiled Philox4x32-10: unit-exponential thresholds for a block of patients. The definition is ``microsim.rng``."""

from __future__ import annotations

import numpy as np

from microsim._jit import double_of, entry, helper, inlined
from microsim.hazards import vmath

_M0 = np.uint64(0xD2511F53)
_M1 = np.uint64(0xCD9E8D57)
_W0 = np.uint64(0x9E3779B9)
_W1 = np.uint64(0xBB67AE85)
_LOW = np.uint64(0xFFFFFFFF)
_HALF = np.uint64(32)
_TWELVE = np.uint64(12)
_ONE_BITS = np.uint64(0x3FF0000000000000)
_OFFSET = 1.0 - 2.0**-53


@inlined
def _centred_uniform(key0, key1, patient, stream, firing, draw):
    """Uniform in (0, 1) from the first 64 output bits of one Philox block."""
    c0, c1, c2, c3 = patient, stream, firing, draw
    k0, k1 = key0, key1
    for _ in range(10):
        p0 = _M0 * (c0 & _LOW)
        p1 = _M1 * (c2 & _LOW)
        c0 = (p1 >> _HALF) ^ (c1 & _LOW) ^ k0
        c2 = (p0 >> _HALF) ^ (c3 & _LOW) ^ k1
        c1 = p1
        c3 = p0
        k0 = (k0 + _W0) & _LOW
        k1 = (k1 + _W1) & _LOW
    bits = ((c1 << _HALF) | (c0 & _LOW)) >> _TWELVE
    # bits | 1.0 is 1 + bits * 2**-52; the subtraction is exact and centres u in its cell
    return double_of(bits | _ONE_BITS) - _OFFSET


@helper
def draw_thresholds(key0, key1, patient, stream, firing, draw, out, w):
    """out[i] = -log(u) for (patient[i], stream, firing[i], draw); all uint64 words below 2**32, out float64[block]."""
    for i in range(w):
        out[i] = -vmath.log(_centred_uniform(key0, key1, patient[i], stream, firing[i], draw))


@entry
def draw_uniforms(key0, key1, patient, stream, draw, out):
    """out[i] = u for (patient[i], stream, firing 0, draw): attributes of patients. patient uint64[n], out float64[n]."""
    firing = np.uint64(0)
    for i in range(patient.size):
        out[i] = _centred_uniform(key0, key1, patient[i], stream, firing, draw)
