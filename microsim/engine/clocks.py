"""The clocks of a state over a block of patients: thresholds read, consumed and carried, and which clock fires first.

A threshold is a unit-exponential amount of cumulative hazard. It is read once per firing; what another clock's firing
leaves of it survives. Rows of ``x`` are scratch, named in columns.py.
"""

from __future__ import annotations

import numpy as np

from microsim._jit import helper, spliced
from microsim.engine.columns import (
    ARC,
    ARC_END,
    BEST,
    BY,
    CLOCK,
    FAMILY,
    LEVEL,
    ORIGIN,
    OUT,
    RATIO,
    SCALE,
    SCALED,
    STRIDE,
    SUB1,
    SUB2,
    T0,
    T1,
    TARGET,
    THRESHOLD,
    TMP,
    USED,
    WAIT,
    C,
    H,
)  # fmt: skip
from microsim.engine.draws import draw_thresholds
from microsim.hazards import kernels


@helper
def fill_rows(gather, first, last, years, idx, at, t0, attributes, memory, rows, w):
    """Fill the register rows gather[first:last] that the formulas of a state read, at entry to the state.

    ``memory`` holds the study's own fields from row FIXED on; ``at`` points into its columns, ``idx`` into attributes.
    """
    for n in range(first, last):
        how, source, of, row = gather[n, 0], gather[n, 1], gather[n, 2], rows[gather[n, 3]]
        if how == 0:
            from_attribute = attributes[source]
            for i in range(w):
                row[i] = from_attribute[idx[i]]
        elif how == 1:
            field = memory[source]
            for i in range(w):
                row[i] = field[at[i]]
        elif how == 2:
            field = memory[source]
            for i in range(w):
                row[i] = t0[i] - field[at[i]]
        elif how == 3:
            field = memory[source]
            for i in range(w):
                row[i] = 1.0 if field[at[i]] == of else 0.0
        elif how == 4:
            for i in range(w):
                row[i] = t0[i]
        else:
            from_attribute = attributes[source]
            for i in range(w):
                row[i] = from_attribute[idx[i]] / years + t0[i]


@helper
def fill_origin(scale, age, years, idx, t0, attributes, out, w):
    """out[i] = where a clock on the scale stands at entry to the state; ``age`` is the row of the attribute age."""
    if scale == 0:
        for i in range(w):
            out[i] = 0.0
    elif scale == 1:
        for i in range(w):
            out[i] = t0[i]
    else:
        age_years = attributes[age]
        for i in range(w):
            out[i] = age_years[idx[i]] / years + t0[i]


@helper
def fill_level(start, stride, by, idx, attributes, out, w):
    """out[i] = where the patient's stretch of a table starts; ``by`` is the attribute that selects it, or -1."""
    if by < 0:
        for i in range(w):
            out[i] = start
    else:
        codes = attributes[by]
        for i in range(w):
            out[i] = start + stride * np.int64(codes[idx[i]])


@helper
def _scale_threshold(row, threshold, rows, out, w):
    """out = threshold / ratio (register ``row``, -1 = none): what the clock must consume on its family's own scale."""
    if row < 0:
        for i in range(w):
            out[i] = threshold[i]
    else:
        ratio = rows[row]
        for i in range(w):
            out[i] = threshold[i] / ratio[i]


@spliced
def draw_next(p, clock, key0, key1, draw, first_patient, pick, words, accumulators, remaining, out, n):
    """New thresholds of a clock for the patients pick[:n]; the firing number is how often the clock has fired."""
    sizes, stream = p.sizes, p.stream
    fired = accumulators[sizes[0] + clock]
    for j in range(n):
        words[0, j] = np.uint64(first_patient + pick[j])
        words[1, j] = np.uint64(np.int64(fired[pick[j]]))
    draw_thresholds(key0, key1, words[0], stream[clock], words[1], draw, out, n)
    carried = remaining[clock]
    for j in range(n):
        carried[pick[j]] = out[j]


@spliced
def _draw_unread(p, arc, key0, key1, draw, first_patient, idx, pick, words, accumulators, remaining, threshold, out, w):
    """First arming of a clock: read the threshold of the patients who have none yet."""
    arcs = p.arcs
    clock = arcs[arc, CLOCK]
    n = 0
    for i in range(w):
        pick[n] = idx[i]
        n += 1 if threshold[i] < 0.0 else 0
    draw_next(p, clock, key0, key1, draw, first_patient, pick, words, accumulators, remaining, out, n)
    carried = remaining[clock]
    for i in range(w):
        threshold[i] = carried[idx[i]]


@spliced
def first_firing(p, state, key0, key1, draw, first_patient, idx, cause, pick, level, words, remaining, accumulators,
                  attributes, rows, x, w):  # fmt: skip
    """x[BEST] = time to the first firing among the clocks of the state, cause = its arc (or -1)."""
    arc_par, arcs, numbers, sizes, states = p.arc_par, p.arcs, p.numbers, p.sizes, p.states
    best = x[BEST]
    for i in range(w):
        best[i] = np.inf
        cause[i] = -1
    for arc in range(states[state, ARC], states[state, ARC_END]):
        threshold, scaled, origin, wait = x[THRESHOLD], x[SCALED], x[ORIGIN], x[WAIT]
        carried = remaining[arcs[arc, CLOCK]]
        unread = 0
        for i in range(w):
            threshold[i] = carried[idx[i]]
            unread += 1 if threshold[i] < 0.0 else 0
        if unread > 0:
            _draw_unread(
                p, arc, key0, key1, draw, first_patient, idx, pick, words, accumulators, remaining, threshold, scaled, w
            )
        _scale_threshold(arcs[arc, RATIO], threshold, rows, scaled, w)
        fill_origin(arcs[arc, SCALE], sizes[6], numbers[4], idx, x[T0], attributes, origin, w)
        family = arcs[arc, FAMILY]
        if family == kernels.TABLE:
            _table_firing(p, arc, idx, level, cause, attributes, x, w)
            continue
        kernels.waiting_time(family, arc_par[arc], origin, arcs[arc, SCALE] == 0, scaled, x[H], x[C], wait, w)
        for i in range(w):
            earlier = wait[i] < best[i]
            best[i] = wait[i] if earlier else best[i]
            cause[i] = arc if earlier else cause[i]


@spliced
def _table_firing(p, arc, idx, level, cause, attributes, x, w):
    """Tables come last: compare consumed hazards first, and invert only for patients whose clock fires before the best."""
    arc_par, arcs, numbers, table_cum, table_rate = p.arc_par, p.arcs, p.numbers, p.table_cum, p.table_rate
    horizon = numbers[0]
    t0, best, origin, scaled, target, at_end, end = x[T0], x[BEST], x[ORIGIN], x[SCALED], x[H], x[C], x[TMP]
    par = arc_par[arc]
    fill_level(arcs[arc, LEVEL], arcs[arc, STRIDE], arcs[arc, BY], idx, attributes, level, w)
    kernels.table_cumulative(par, level, table_cum, table_rate, origin, target, w)
    at_entry = x[USED]
    for i in range(w):
        at_entry[i] = target[i]
        stop = horizon - t0[i]
        end[i] = origin[i] + (best[i] if best[i] < stop else stop)
        target[i] = target[i] + scaled[i]
    kernels.table_cumulative(par, level, table_cum, table_rate, end, at_end, w)
    for i in range(w):
        at_entry[i] = at_end[i] - at_entry[i]
    n = 0
    sub1, sub2, lanes = x[SUB1], x[SUB2], x[OUT]
    for i in range(w):
        if target[i] <= at_end[i]:
            sub1[n] = target[i]
            lanes[n] = i
            level[n] = level[i]
            n += 1
    kernels.table_inverse(par, level, table_cum, table_rate, sub1, sub2, n)
    for j in range(n):
        i = np.int64(lanes[j])
        d = sub2[j] - origin[i]
        d = d if d > 0.0 else 0.0
        if d < best[i] or cause[i] < 0:
            best[i] = d
            cause[i] = arc


@spliced
def arc_consumption(p, arc, idx, t0, duration, level, attributes, x, out, w):
    """out[i] = integrated hazard of the arc's family over the sojourn, without its ratio. Uses x[ORIGIN, H, C]."""
    arc_par, arcs, numbers, sizes, table_cum, table_rate = (
        p.arc_par,
        p.arcs,
        p.numbers,
        p.sizes,
        p.table_cum,
        p.table_rate,
    )
    origin = x[ORIGIN]
    fill_origin(arcs[arc, SCALE], sizes[6], numbers[4], idx, t0, attributes, origin, w)
    if arcs[arc, FAMILY] == kernels.TABLE:
        h, c = x[H], x[C]
        fill_level(arcs[arc, LEVEL], arcs[arc, STRIDE], arcs[arc, BY], idx, attributes, level, w)
        kernels.table_cumulative(arc_par[arc], level, table_cum, table_rate, origin, h, w)
        for i in range(w):
            c[i] = origin[i] + duration[i]
        kernels.table_cumulative(arc_par[arc], level, table_cum, table_rate, c, out, w)
        for i in range(w):
            out[i] = out[i] - h[i]
    else:
        kernels.consumed(arcs[arc, FAMILY], arc_par[arc], origin, arcs[arc, SCALE] == 0, duration, x[H], x[C], out, w)


@spliced
def carry_thresholds(p, state, idx, cause, lanes, pick, level, remaining, attributes, rows, x, w):
    """Whoever lost keeps what was not consumed, unless the patient has reached a state without clocks."""
    arcs, states = p.arcs, p.states
    t0_, t1_, ratio_ = x[T0], x[T1], x[TMP]
    n_alive = 0
    for i in range(w):
        a = cause[i]
        goes_on = a >= 0 and states[arcs[a, TARGET], ARC_END] > states[arcs[a, TARGET], ARC]
        lanes[n_alive] = i
        n_alive += 1 if goes_on else 0
    for arc in range(states[state, ARC], states[state, ARC_END]):
        n = 0
        # what the last table consumed up to the first firing is known from the search for it
        known = arc == states[state, ARC_END] - 1 and arcs[arc, FAMILY] == kernels.TABLE
        t0, duration, used = x[SUB1], x[SUB2], x[OUT]
        for j in range(n_alive):
            level[n] = lanes[j]
            n += 1 if cause[lanes[j]] != arc else 0
        if n == 0:
            continue
        known_used, has_ratio = x[USED], arcs[arc, RATIO] >= 0
        ratio_row = rows[max(arcs[arc, RATIO], 0)]
        for j in range(n):
            i = level[j]
            pick[j] = idx[i]
            used[j] = known_used[i]
            t0[j] = t0_[i]
            duration[j] = t1_[i] - t0_[i]
            ratio_[j] = ratio_row[i] if has_ratio else 1.0
        if not known:
            arc_consumption(p, arc, pick, t0, duration, level, attributes, x, used, n)
        carried = remaining[arcs[arc, CLOCK]]
        for j in range(n):
            left = carried[pick[j]] - ratio_[j] * used[j]
            carried[pick[j]] = left if left > 0.0 else 0.0
