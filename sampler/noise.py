"""Normal random numbers without hidden state: each is a function of (key, step, substep, particle label).

Bits: the counter-based 4x32 generator with ten rounds of J. K. Salmon, M. A. Moraes, R. O. Dror, D. E. Shaw,
Proc. SC11, 16 (2011); constants and check values from memory. Normals: G. E. P. Box, M. E. Muller,
Ann. Math. Stat. 29, 610 (1958), with logarithm, sine and cosine as series, so that loops run in vector registers.
"""

from __future__ import annotations

import hashlib
import math
from typing import Any

import numpy as np
import numpy.typing as npt
from llvmlite import ir
from numba.core import types
from numba.extending import intrinsic

from sampler.compiled import kernel, piece

__all__ = ["START", "Key", "chain_key", "draw", "normals", "scramble", "uniform"]

Key = tuple[np.uint64, np.uint64]
START = np.uint64(2**63)  # a step number that no trajectory reaches: draws made before the first step

_LOW = np.uint64(0xFFFFFFFF)
_HALF = np.uint64(32)
_FACTOR_0, _FACTOR_1 = np.uint64(0xD2511F53), np.uint64(0xCD9E8D57)
_STEP_0, _STEP_1 = np.uint64(0x9E3779B9), np.uint64(0xBB67AE85)
_UNIT = 2.0**-32
_EXPONENT_BITS, _BIAS = np.int64(52), 1023.0
_WHOLE_BITS, _WHOLE = np.int64(0x433 << 52), 2.0**52  # adding a small integer to the bits of 2^52 adds it to the number
_MANTISSA, _ONE = np.int64(2**52 - 1), np.int64(1023 << 52)


def chain_key(seed: int, temperature: float, density: float, repeat: int) -> Key:
    """Key of one repeat of one rung, from values alone: two 32-bit words."""
    text = f"{seed}|{float(temperature).hex()}|{float(density).hex()}|{repeat}"
    digest = hashlib.sha256(text.encode()).digest()
    return np.uint64(int.from_bytes(digest[:4], "little")), np.uint64(int.from_bytes(digest[4:8], "little"))


@intrinsic
def _bits(typing: Any, value: Any) -> Any:
    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.IntType(64))

    return types.int64(types.float64), build


@intrinsic
def _from_bits(typing: Any, value: Any) -> Any:
    def build(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.bitcast(args[0], ir.DoubleType())

    return types.float64(types.int64), build


@piece
def _number(word):  # type: ignore[no-untyped-def]
    """A whole number below 2^52 as a float64, by its bits: a conversion that every vector unit has."""
    return _from_bits(np.int64(word) | _WHOLE_BITS) - _WHOLE


@piece
def scramble(c0, c1, c2, c3, k0, k1):  # type: ignore[no-untyped-def]
    """Four random 32-bit words, each in a uint64, from a counter of four words and a key of two."""
    for _ in range(10):
        p0, p1 = _FACTOR_0 * c0, _FACTOR_1 * c2
        c0, c1, c2, c3 = (p1 >> _HALF) ^ c1 ^ k0, p1 & _LOW, (p0 >> _HALF) ^ c3 ^ k1, p0 & _LOW
        k0, k1 = (k0 + _STEP_0) & _LOW, (k1 + _STEP_1) & _LOW
    return c0, c1, c2, c3


@piece
def _logarithm(value):  # type: ignore[no-untyped-def]
    """Natural logarithm of a normal positive number: ln m = 2 artanh((m - 1)/(m + 1)) with m in [0.71, 1.42)."""
    bits = _bits(value)
    mantissa = _from_bits((bits & _MANTISSA) | _ONE)
    exponent = _number(bits >> _EXPONENT_BITS) - _BIAS
    large = mantissa > 1.4142135623730951
    mantissa = 0.5 * mantissa if large else mantissa
    exponent = exponent + 1.0 if large else exponent
    t = (mantissa - 1.0) / (mantissa + 1.0)
    s = t * t
    series = 1.0 / 19.0
    for odd in (17.0, 15.0, 13.0, 11.0, 9.0, 7.0, 5.0, 3.0, 1.0):
        series = series * s + 1.0 / odd
    return 2.0 * t * series + exponent * 0.6931471805599453


@piece
def _turn(fraction):  # type: ignore[no-untyped-def]
    """Cosine and sine of 2 pi fraction, fraction in [0, 1)."""
    quarter = math.floor(4.0 * fraction + 0.5)
    a = (fraction - 0.25 * quarter) * (2.0 * math.pi)
    q = a * a
    sine = (
        (
            (
                (((-1.0 / 1307674368000.0 * q + 1.0 / 6227020800.0) * q - 1.0 / 39916800.0) * q + 1.0 / 362880.0) * q
                - 1.0 / 5040.0
            )
            * q
            + 1.0 / 120.0
        )
        * q
        - 1.0 / 6.0
    ) * q * a + a
    cosine = (
        (
            (
                (
                    (((1.0 / 20922789888000.0 * q - 1.0 / 87178291200.0) * q + 1.0 / 479001600.0) * q - 1.0 / 3628800.0)
                    * q
                    + 1.0 / 40320.0
                )
                * q
                - 1.0 / 720.0
            )
            * q
            + 1.0 / 24.0
        )
        * q
        * q
        - 0.5 * q
        + 1.0
    )
    odd = (quarter == 1.0) | (quarter == 3.0)
    x = sine if odd else cosine
    y = cosine if odd else sine
    x = -x if (quarter == 1.0) | (quarter == 2.0) else x
    y = -y if (quarter == 2.0) | (quarter == 3.0) else y
    return x, y


@kernel
def normals(k0, k1, step, substep, labels, out):  # type: ignore[no-untyped-def]
    """Three standard normals for each particle, zeros where there is none.

    labels : (n,), int64, negative where there is no particle
    out : (3, n), overwritten
    """
    low, high = step & _LOW, step >> _HALF
    for i in range(labels.size):
        a, b, c, d = scramble(np.uint64(labels[i]) & _LOW, substep, low, high, k0, k1)
        there = 1.0 if labels[i] >= 0 else 0.0
        radius = there * math.sqrt(-2.0 * _logarithm((_number(a) + 0.5) * _UNIT))
        cosine, sine = _turn(_number(b) * _UNIT)
        out[0, i] = radius * cosine
        out[1, i] = radius * sine
        radius = there * math.sqrt(-2.0 * _logarithm((_number(c) + 0.5) * _UNIT))
        cosine, sine = _turn(_number(d) * _UNIT)
        out[2, i] = radius * cosine


@kernel
def uniform(k0, k1, step, substep):  # type: ignore[no-untyped-def]
    """A number between 0 and 1 that belongs to no particle."""
    word, _, _, _ = scramble(_LOW, substep, step & _LOW, step >> _HALF, k0, k1)
    return (_number(word) + 0.5) * _UNIT


def draw(key: Key, step: np.uint64, n: int) -> npt.NDArray[np.float64]:
    """Standard normals of particles 0 to n - 1 at a step, (n, 3)."""
    out = np.empty((3, n))
    normals(key[0], key[1], step, np.uint64(0), np.arange(n), out)
    return np.ascontiguousarray(out.T)
