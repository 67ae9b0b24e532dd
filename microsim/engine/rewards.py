"""Flows and one-off amounts of a block's sojourns: discounted in closed form between events, amounts at their time."""

from __future__ import annotations

import numpy as np

from microsim._jit import helper, spliced
from microsim.engine.columns import COST0, COST1, EFFECT0, EFFECT1, ENTRY_COST, LUMP, LUMP_END, OUT, T0, T1
from microsim.hazards import vmath


@helper
def discount_integral(force, annual, years, t, out, w):
    """out[i] = int_0^t D(s) ds in study time units: continuous D = exp(-force s), or annual steps exp(-force floor(years))."""
    if force == 0.0:
        for i in range(w):
            out[i] = t[i]
    elif annual == 0.0:
        inverse = 1.0 / force
        for i in range(w):
            out[i] = -vmath.expm1(-force * t[i]) * inverse
    else:
        step = 1.0 / years  # one year in study time units
        whole = step / -vmath.expm1(-force * step)
        for i in range(w):
            y = np.floor(t[i] * years)
            factor = vmath.exp(-force * step * y)
            out[i] = whole * -vmath.expm1(-force * step * y) + (t[i] - y * step) * factor


@helper
def discount_factor(force, annual, years, t, out, w):
    """out[i] = D(t[i])."""
    if annual == 0.0:
        for i in range(w):
            out[i] = vmath.exp(-force * t[i])
    else:
        for i in range(w):
            out[i] = vmath.exp(-force / years * np.floor(t[i] * years))


@helper
def add_rewards(flow, first, last, state, n_states, n_clocks, one_rate, idx, accumulators, rows, x, w):
    """Time, discounted time and formula-driven flows flow[first:last] of the sojourns of a block."""
    t0_, t1_, cost0_, cost1_, effect0_, effect1_ = x[T0], x[T1], x[COST0], x[COST1], x[EFFECT0], x[EFFECT1]
    time = accumulators[state]
    cost = accumulators[n_states + n_clocks + state]
    effect = accumulators[(n_states if one_rate else 2 * n_states) + n_clocks + state]  # one rate: no rows of its own
    for i in range(w):
        time[idx[i]] += t1_[i] - t0_[i]
    for i in range(w):
        cost[idx[i]] += cost1_[i] - cost0_[i]
    if not one_rate:
        for i in range(w):
            effect[idx[i]] += effect1_[i] - effect0_[i]
    for n in range(first, last):
        row, plain, discounted = rows[flow[n, 0]], accumulators[flow[n, 1]], accumulators[flow[n, 2]]
        a, b = (EFFECT0, EFFECT1) if flow[n, 3] == 1 and not one_rate else (COST0, COST1)
        for i in range(w):
            plain[idx[i]] += row[i] * (t1_[i] - t0_[i])
            discounted[idx[i]] += row[i] * (x[b, i] - x[a, i])


@spliced
def add_entry_amounts(p, state, idx, accumulators, rows, x, w):
    """One-off amounts at entry by a transition (entry time above zero), at their time."""
    lump, numbers, states = p.lump, p.numbers, p.states
    t0_ = x[T0]
    annual, years = numbers[3], numbers[4]
    for which in range(2):
        const_row = states[state, ENTRY_COST + which]
        needed = const_row >= 0
        for n in range(states[state, LUMP], states[state, LUMP_END]):
            needed = needed or lump[n, 3] == which
        if not needed:
            continue
        factor = x[OUT]
        discount_factor(numbers[1 + which], annual, years, x[T0], factor, w)
        for i in range(w):
            factor[i] = factor[i] if t0_[i] > 0.0 else 0.0
        if const_row >= 0:
            total = accumulators[const_row]
            for i in range(w):
                total[idx[i]] += factor[i]
        for n in range(states[state, LUMP], states[state, LUMP_END]):
            if lump[n, 3] == which:
                row, plain, discounted = rows[lump[n, 0]], accumulators[lump[n, 1]], accumulators[lump[n, 2]]
                for i in range(w):
                    plain[idx[i]] += row[i] if t0_[i] > 0.0 else 0.0
                    discounted[idx[i]] += row[i] * factor[i]
