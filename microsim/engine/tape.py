"""The register tape: formulas as three-address code over rows of a block, one vectorised loop per operation.

A row holds one value per patient of the block (float64[block]); constants are rows filled once. Destinations are never
operands, so every loop vectorises. Truth is 1.0 / 0.0. Knows nothing of states or clocks.
"""

from __future__ import annotations

import numpy as np

from microsim._jit import helper
from microsim.engine.columns import BAD_FORMULA
from microsim.hazards import vmath

OPCODES = {
    name: code
    for code, name in enumerate(
        ("add", "sub", "mul", "div", "min", "max", "neg", "abs", "exp", "log", "sqrt", "pow",
         "lt", "le", "gt", "ge", "eq", "ne", "and", "or", "not", "where")
    )
}  # fmt: skip


@helper
def _arithmetic(code, d, a, b, w):
    if code == 0:
        for i in range(w):
            d[i] = a[i] + b[i]
    elif code == 1:
        for i in range(w):
            d[i] = a[i] - b[i]
    elif code == 2:
        for i in range(w):
            d[i] = a[i] * b[i]
    elif code == 3:
        for i in range(w):
            d[i] = a[i] / b[i]
    elif code == 4:  # a nan operand must survive, as in NumPy
        for i in range(w):
            d[i] = a[i] if (a[i] < b[i] or a[i] != a[i]) else b[i]
    else:
        for i in range(w):
            d[i] = a[i] if (a[i] > b[i] or a[i] != a[i]) else b[i]


@helper
def _function(code, d, a, b, w):
    if code == 6:
        for i in range(w):
            d[i] = -a[i]
    elif code == 7:
        for i in range(w):
            d[i] = abs(a[i])
    elif code == 8:
        for i in range(w):
            d[i] = vmath.exp(a[i])
    elif code == 9:
        for i in range(w):
            d[i] = vmath.log(a[i])
    elif code == 10:
        for i in range(w):
            d[i] = np.sqrt(a[i])
    else:
        for i in range(w):
            d[i] = vmath.power(a[i], b[i])


@helper
def _comparison(code, d, a, b, w):
    if code == 12:
        for i in range(w):
            d[i] = 1.0 if a[i] < b[i] else 0.0
    elif code == 13:
        for i in range(w):
            d[i] = 1.0 if a[i] <= b[i] else 0.0
    elif code == 14:
        for i in range(w):
            d[i] = 1.0 if a[i] > b[i] else 0.0
    elif code == 15:
        for i in range(w):
            d[i] = 1.0 if a[i] >= b[i] else 0.0
    elif code == 16:
        for i in range(w):
            d[i] = 1.0 if a[i] == b[i] else 0.0
    else:
        for i in range(w):
            d[i] = 1.0 if a[i] != b[i] else 0.0


@helper
def _logic(code, d, a, b, c, w):
    if code == 18:
        for i in range(w):
            d[i] = 1.0 if (a[i] != 0.0) & (b[i] != 0.0) else 0.0
    elif code == 19:
        for i in range(w):
            d[i] = 1.0 if (a[i] != 0.0) | (b[i] != 0.0) else 0.0
    elif code == 20:
        for i in range(w):
            d[i] = 1.0 if a[i] == 0.0 else 0.0
    else:
        for i in range(w):
            d[i] = b[i] if a[i] != 0.0 else c[i]


@helper
def run_tape(tape, first, last, rows, w):
    """Execute tape[first:last], int64[n, 5] of (opcode, destination, a, b, c), on rows[:, :w]."""
    for n in range(first, last):
        code = tape[n, 0]
        d, a, b, c = rows[tape[n, 1]], rows[tape[n, 2]], rows[tape[n, 3]], rows[tape[n, 4]]
        if code < 6:
            _arithmetic(code, d, a, b, w)
        elif code < 12:
            _function(code, d, a, b, w)
        elif code < 18:
            _comparison(code, d, a, b, w)
        else:
            _logic(code, d, a, b, c, w)


@helper
def check_rows(checks, first, last, idx, rows, status, w):
    """First formula value of the block that is not finite (or a negative ratio): recorded, and False returned."""
    for n in range(first, last):
        row = rows[checks[n, 0]]
        is_ratio = checks[n, 2] == 1
        bad = 0
        for i in range(w):
            ok = (abs(row[i]) < np.inf) & ((row[i] >= 0.0) | (not is_ratio))
            bad += 0 if ok else 1
        if bad > 0:
            for i in range(w):
                if not (abs(row[i]) < np.inf) or (is_ratio and row[i] < 0.0):
                    status[0], status[1], status[2] = BAD_FORMULA, idx[i], checks[n, 1]
                    return False
    return True
