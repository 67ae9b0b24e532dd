"""Occurrence, exposure and integrated hazards of logged sojourns on grids of elapsed and of sojourn time.

Reads the log a chunk left behind, so one arm's hazards and rewards can be evaluated along another arm's paths.
Quantities constant during a sojourn are spread over cells in constant time: a difference array for the cells covered
whole (``full``) and a sum for the two partial ones (``part``); ``exposure_of`` puts them together.
"""

from __future__ import annotations

import numpy as np

from microsim._jit import entry, helper, spliced
from microsim.engine.clocks import fill_level, fill_origin, fill_rows
from microsim.engine.columns import (
    ARC,
    ARC_END,
    BY,
    CHECK,
    CHECK_END,
    FAMILY,
    GATHER,
    GATHER_END,
    LEVEL,
    RATIO,
    SCALE,
    STRIDE,
    TAPE,
    TAPE_END,
    TARGET,
    TRIVIAL,
)  # fmt: skip
from microsim.engine.tape import check_rows, run_tape
from microsim.hazards import kernels

SEGMENTS = 2048  # pieces of sojourns evaluated together; a grid may have at most this many cells


@helper
def _cell(edges, t):
    """Cell of t: the last edge at or before it, within the grid."""
    low, high = 0, edges.size - 2
    while low < high:
        middle = (low + high + 1) >> 1
        if edges[middle] <= t:
            low = middle
        else:
            high = middle - 1
    return low


@helper
def _spread(edges, full, part, a, b, ca, cb, value):
    """Add value x time for a stretch [a, b) that begins in cell ca and ends in cell cb."""
    if ca == cb:
        part[ca] += value * (b - a)
    else:
        part[ca] += value * (edges[ca + 1] - a)
        part[cb] += value * (b - edges[cb])
        full[ca + 1] += value
        full[cb] -= value


@helper
def _edge_at_or_after(edges, cell, t):
    return cell if edges[cell] >= t else cell + 1


@helper
def _present(edges, row, t0, c0, t1, c1, leaves):
    """Difference array over edges of people present: entered at or before the edge, not yet left."""
    row[_edge_at_or_after(edges, c0, t0)] += 1.0
    if leaves:
        row[_edge_at_or_after(edges, c1, t1)] -= 1.0


@entry
def tally_paths(
    p, log_index, log_value, n_blocks, time, sojourn, present, full, part, entries, events, full_d, part_d, events_d
):
    """Occurrence and exposure of all logged sojourns, added to the given arrays.

    present float64[s, T+2]; full, part float64[s, T+1] (see ``exposure_of``); entries float64[s, T]; events
    float64[a, T]; full_d, part_d float64[s, D+1]; events_d float64[a, D].
    """
    arcs, states = p.arcs, p.states
    horizon = time[-1]
    last = time.size - 2
    for block in range(n_blocks):
        s, at, w = log_index[2, 3 * block], log_index[2, 3 * block + 1], log_index[2, 3 * block + 2]
        for i in range(at, at + w):
            arc = log_index[1, i]
            t0, t1, d = log_value[0, i], log_value[1, i], log_value[2, i]
            c0, c1, cd = _cell(time, t0), _cell(time, t1), _cell(sojourn, d)
            _present(time, present[s], t0, c0, t1, c1, arc >= 0)
            _spread(time, full[s], part[s], t0, t1, c0, c1, 1.0)
            _spread(sojourn, full_d[s], part_d[s], 0.0, d, 0, cd, 1.0)
            if arc < 0:
                continue
            target = arcs[arc, TARGET]
            events[arc, c1] += 1.0
            events_d[arc, cd] += 1.0
            entries[target, c1] += 1.0
            if states[target, TRIVIAL] == 1:
                _present(time, present[target], t1, c1, horizon, last, False)
                _spread(time, full[target], part[target], t1, horizon, c1, last, 1.0)
                rest = horizon - t1
                _spread(sojourn, full_d[target], part_d[target], 0.0, rest, 0, _cell(sojourn, rest), 1.0)


@helper
def _cut(edges, start, stop, first, w, lane, cell, end):
    """Cut the stretches of lanes first..w into pieces at the edges; returns (pieces, next lane to cut)."""
    n = 0
    for i in range(first, w):
        c0, c1 = _cell(edges, start[i]), _cell(edges, stop[i])
        if n + c1 - c0 + 1 > SEGMENTS:
            return n, i
        for c in range(c0, c1 + 1):
            lane[n] = i
            cell[n] = c
            end[n] = edges[c + 1] if c < c1 else stop[i]
            n += 1
    return n, w


@helper
def _collect(lane, cell, h, h0, ratio, out, n):
    """out[cell] += ratio * (hazard consumed in the piece), pieces of a lane in order; h0: at the lane's start."""
    previous_lane, previous = -1, 0.0
    for j in range(n):
        i = lane[j]
        if i != previous_lane:
            previous_lane, previous = i, h0[i]
        out[cell[j]] += ratio[i] * (h[j] - previous)
        previous = h[j]


@helper
def _clock_values(lane, end, start, origin, out, n):
    for j in range(n):
        i = lane[j]
        out[j] = origin[i] + (end[j] - start[i])


@helper
def _lane_levels(lane, level, out, n):
    for j in range(n):
        out[j] = level[lane[j]]


@spliced
def _integrate_arcs(p, state, edges, start, stop, idx, level, attributes, x, lane, cell, end, levels, c, h, out, w):
    """out[arc, cell] += integrated hazard of every non-exponential arc of the state, cut at the edges.

    x rows: 0 entry time, 2 origin, 3 ratio, 4 hazard at entry (3 is filled by the caller per arc).
    """
    arc_par, arcs, numbers, sizes, states, table_cum, table_rate = (
        p.arc_par,
        p.arcs,
        p.numbers,
        p.sizes,
        p.states,
        p.table_cum,
        p.table_rate,
    )
    done = 0
    while done < w:
        n, done = _cut(edges, start, stop, done, w, lane, cell, end)
        for arc in range(states[state, ARC], states[state, ARC_END]):
            family = arcs[arc, FAMILY]
            if family == kernels.EXPONENTIAL:
                continue
            fill_origin(arcs[arc, SCALE], sizes[6], numbers[4], idx, x[0], attributes, x[2], w)
            _clock_values(lane, end, start, x[2], c, n)
            if family == kernels.TABLE:
                fill_level(arcs[arc, LEVEL], arcs[arc, STRIDE], arcs[arc, BY], idx, attributes, level, w)
                _lane_levels(lane, level, levels, n)
                kernels.table_cumulative(arc_par[arc], level, table_cum, table_rate, x[2], x[4], w)
                kernels.table_cumulative(arc_par[arc], levels, table_cum, table_rate, c, h, n)
            else:
                kernels.cumulative(family, arc_par[arc], x[2], x[4], w)
                kernels.cumulative(family, arc_par[arc], c, h, n)
            _collect(lane, cell, h, x[4], x[5 + arc - states[state, ARC]], out[arc], n)


@helper
def _ratios(row, rows, out, w):
    """out = the arc's ratio for every lane of the block."""
    for i in range(w):
        out[i] = rows[row, i] if row >= 0 else 1.0


@helper
def _spread_block(edges, full, part, start, stop, value, factor, w):
    """Spread a quantity that is constant in each sojourn of the block."""
    for i in range(w):
        a, b = start[i], stop[i]
        _spread(edges, full, part, a, b, _cell(edges, a), _cell(edges, b), value[i] * factor)


@helper
def _spread_lumps(edges, out, start, value, w):
    for i in range(w):
        if start[i] > 0.0:
            out[_cell(edges, start[i])] += value[i]


@entry
def tally_hazards(p, log_index, log_value, n_blocks, time, sojourn, attributes, rows, x, ints, lane, cell, end, levels, c, h,
                  integrated, full, part, integrated_d, full_d, part_d, reward_full, reward_part, lump, status):  # fmt: skip
    """Hazards and rewards of the arm ``p`` along logged sojourns, added to the given arrays.

    integrated float64[a, T] takes the non-exponential arcs, full and part float64[a, T+1] the exponential ones; *_d the
    same on the sojourn grid; reward_full, reward_part float64[r, s, T+1]; lump float64[r, s, T]. status as in
    ``queue.run_chunk``: a formula of the arm may fail on another arm's paths. rows, x and ints are block scratch (x needs
    5 + arcs of a state rows), lane, cell, end, levels, c, h scratch of SEGMENTS.
    """
    arc_par, arcs, checks, consts, gather, lump_row, numbers, reward_row, states, tape = (
        p.arc_par,
        p.arcs,
        p.checks,
        p.consts,
        p.gather,
        p.lump_row,
        p.numbers,
        p.reward_row,
        p.states,
        p.tape,
    )
    for k in range(consts.size):
        rows[k, :] = consts[k]
    for block in range(n_blocks):
        s, first, w = log_index[2, 3 * block], log_index[2, 3 * block + 1], log_index[2, 3 * block + 2]
        idx, at, level = ints[0], ints[1], ints[2]
        for i in range(w):
            idx[i] = log_index[0, first + i]
            at[i] = first + i
            x[0, i] = log_value[0, first + i]
            x[1, i] = log_value[1, first + i]
            x[3, i] = log_value[2, first + i]
        fill_rows(gather, states[s, GATHER], states[s, GATHER_END], numbers[4], idx, at, x[0], attributes, log_value,
                  rows, w)  # fmt: skip
        run_tape(tape, states[s, TAPE], states[s, TAPE_END], rows, w)
        if not check_rows(checks, states[s, CHECK], states[s, CHECK_END], idx, rows, status, w):
            return
        for r in range(reward_row.shape[1]):
            row = reward_row[s, r]
            if row > 0:  # row 0 is the constant zero
                factor = numbers[4] if r == 0 else 1.0
                _spread_block(time, reward_full[r, s], reward_part[r, s], x[0], x[1], rows[row], factor, w)
            row = lump_row[s, r]
            if row >= 0:
                _spread_lumps(time, lump[r, s], x[0], rows[row], w)
        others = 0
        for arc in range(states[s, ARC], states[s, ARC_END]):
            ratio = x[5 + arc - states[s, ARC]]
            _ratios(arcs[arc, RATIO], rows, ratio, w)
            if arcs[arc, FAMILY] == kernels.EXPONENTIAL:
                _spread_block(time, full[arc], part[arc], x[0], x[1], ratio, arc_par[arc, 0], w)
            else:
                others += 1
        if others > 0:
            _integrate_arcs(
                p, s, time, x[0], x[1], idx, level, attributes, x, lane, cell, end, levels, c, h, integrated, w
            )
        _sojourn_grid(p, s, sojourn, idx, level, attributes, x, lane, cell, end, levels, c, h, integrated_d, full_d, part_d,
                      others, w)  # fmt: skip


@spliced
def _sojourn_grid(p, s, edges, idx, level, attributes, x, lane, cell, end, levels, c, h, out, full, part, others, w):
    """The same hazards by time since entry."""
    arc_par, arcs, states = p.arc_par, p.arcs, p.states
    for i in range(w):
        x[1, i] = 0.0
    for arc in range(states[s, ARC], states[s, ARC_END]):
        if arcs[arc, FAMILY] == kernels.EXPONENTIAL:
            _spread_block(edges, full[arc], part[arc], x[1], x[3], x[5 + arc - states[s, ARC]], arc_par[arc, 0], w)
    if others > 0:
        _integrate_arcs(p, s, edges, x[1], x[3], idx, level, attributes, x, lane, cell, end, levels, c, h, out, w)


def exposure_of(full: np.ndarray, part: np.ndarray, edges: np.ndarray) -> np.ndarray:
    """Person-time per cell, float64[..., cells], from difference and partial sums, float64[..., cells + 1]."""
    total: np.ndarray = np.cumsum(full[..., :-1], axis=-1) * np.diff(edges) + part[..., :-1]
    return total
