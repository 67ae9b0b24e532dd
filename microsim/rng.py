"""Random numbers as a function: (seed, draw, patient, stream, firing) -> uniform in (0, 1). No state anywhere.

The generator is Philox4x32-10 (Salmon, Moraes, Dror and Shaw 2011). Key = the 64-bit seed; counter words =
(patient, stream, firing, draw). A stream id is a 32-bit hash of a name, so adding, removing or reordering clocks
never moves another clock's numbers. This NumPy form is the definition; the engine compiles the same arithmetic.
"""

from __future__ import annotations

import hashlib

import numpy as np
import numpy.typing as npt

U64 = npt.NDArray[np.uint64]

MULTIPLIER_0 = np.uint64(0xD2511F53)
MULTIPLIER_1 = np.uint64(0xCD9E8D57)
WEYL_0 = np.uint64(0x9E3779B9)
WEYL_1 = np.uint64(0xBB67AE85)
LOW = np.uint64(0xFFFFFFFF)
HALF = np.uint64(32)


def stream_id(kind: str, name: str) -> int:
    """32-bit id of a named stream; kind keeps clocks, attributes and the start apart."""
    return int.from_bytes(hashlib.blake2s(f"{kind}:{name}".encode(), digest_size=4).digest(), "little")


def philox4x32(counter: tuple[U64, U64, U64, U64], key: tuple[int, int], rounds: int = 10) -> tuple[U64, U64, U64, U64]:
    """The published block function on arrays of 32-bit words held in uint64[n]; key words are 32-bit ints."""
    c0, c1, c2, c3 = counter
    k0, k1 = np.uint64(key[0]), np.uint64(key[1])
    for _ in range(rounds):
        p0 = MULTIPLIER_0 * c0
        p1 = MULTIPLIER_1 * c2
        c0, c1, c2, c3 = (p1 >> HALF) ^ c1 ^ k0, p1 & LOW, (p0 >> HALF) ^ c3 ^ k1, p0 & LOW
        k0, k1 = (k0 + WEYL_0) & LOW, (k1 + WEYL_1) & LOW
    return c0, c1, c2, c3


def uniforms(
    patient: npt.ArrayLike, *, seed: int, stream: int, firing: npt.ArrayLike = 0, draw: int = 0
) -> npt.NDArray[np.float64]:
    """float64[n] in (0, 1): the top 52 of the first 64 output bits, centred in their cell, so neither 0 nor 1 occurs.

    patient, firing: integer arrays below 2**32 (broadcast together); seed below 2**64; stream, draw below 2**32.
    """
    p, f = np.broadcast_arrays(np.asarray(patient, dtype=np.uint64), np.asarray(firing, dtype=np.uint64))
    full = np.full(p.shape, stream, dtype=np.uint64)
    w0, w1, _, _ = philox4x32((p, full, f, np.full(p.shape, draw, dtype=np.uint64)), (seed & 0xFFFFFFFF, seed >> 32))
    bits = ((w1 << HALF) | w0) >> np.uint64(12)
    return (bits.astype(np.float64) + 0.5) * 2.0**-52


def thresholds(
    patient: npt.ArrayLike, *, seed: int, clock: str, firing: npt.ArrayLike = 0, draw: int = 0
) -> npt.NDArray[np.float64]:
    """Unit-exponential thresholds -log(u) of a clock, float64[n]; firing 0 is the first."""
    return -np.log(uniforms(patient, seed=seed, stream=stream_id("clock", clock), firing=firing, draw=draw))
