"""The compiled event queue: one chunk of patients of one arm, from model start to horizon or absorption.

Patients wait in a list per state; the state with most waiting is advanced in blocks of up to 1,024. In a block every
primitive (gather, formula, inversion, discounting, minimum) is a plain loop the compiler vectorises. What a patient
carries (thresholds, memory, accumulators) lies in arrays [field, patient] and moves only by index. Kernels write status
codes; the runner raises.
"""

from __future__ import annotations

import numpy as np

from microsim._jit import entry, helper, spliced
from microsim.engine.clocks import carry_thresholds, draw_next, fill_rows, first_firing
from microsim.engine.columns import (
    ARC,
    ARC_END,
        BEST,
    BLOCK,
    CHECK,
    CHECK_END,
    CLOCK,
    COST0,
    COST1,
    EFFECT0,
    EFFECT1,
    FIXED,
    FLOW,
    FLOW_END,
    GATHER,
    GATHER_END,
    LOG_FULL,
    MAX_EVENTS,
    OUT,
    REARMS,
    RUNAWAY,
    T0,
    T1,
    TAPE,
    TAPE_END,
    TARGET,
    TRIVIAL,
)  # fmt: skip
from microsim.engine.rewards import add_entry_amounts, add_rewards, discount_integral
from microsim.engine.tape import check_rows, run_tape


@helper
def _update_memory(fields, state, target, pick, lanes, memory, x, n):
    """The study's own memory fields at a transition state -> target."""
    t0_, t1_ = x[T0], x[T1]
    for f in range(fields.shape[0]):
        kind, of = fields[f, 0], fields[f, 1]
        field = memory[FIXED + f]
        if kind == 0 or (kind == 1 and of == target):
            for j in range(n):
                field[pick[j]] += 1.0
        elif kind == 2 and of == state:
            for j in range(n):
                field[pick[j]] += t1_[lanes[j]] - t0_[lanes[j]]
        elif (kind == 3 and of == target) or (kind == 4 and of == state):
            for j in range(n):
                field[pick[j]] = t1_[lanes[j]]
        elif kind == 5 and of == state:
            for j in range(n):
                field[pick[j]] = t1_[lanes[j]] - t0_[lanes[j]]
        elif kind == 6:
            for j in range(n):
                field[pick[j]] = state


@helper
def _grid_edge(t, inverse_cell, last):
    """Index of the first grid edge at or after t."""
    j = np.int64(np.ceil(t * inverse_cell))
    return j if j < last else last


@helper
def _count_presence(state, cause, present, inverse_cell, horizon, x, w):
    """present[state, j]: difference array over grid edges of people in the state."""
    t0_, t1_ = x[T0], x[T1]
    last = present.shape[1] - 2
    row = present[state]
    for i in range(w):
        row[_grid_edge(t0_[i], inverse_cell, last)] += 1.0
        end = _grid_edge(t1_[i], inverse_cell, last) if cause[i] >= 0 else last + 1
        row[end] -= 1.0


@spliced
def _write_log(state, idx, cause, memory, log_index, log_value, status, x, w):
    """Append the block's sojourns: (patient, arc, blocks) and (entry, exit, duration, memory fields at entry)."""
    t0_, t1_ = x[T0], x[T1]
    at = status[3]
    if at + w > log_value.shape[1]:
        status[0] = LOG_FULL
        return False
    patient, arcs = log_index[0], log_index[1]
    for i in range(w):
        patient[at + i] = idx[i]
        arcs[at + i] = cause[i]
    for i in range(w):
        log_value[0, at + i] = t0_[i]
        log_value[1, at + i] = t1_[i]
        log_value[2, at + i] = t1_[i] - t0_[i]
    for f in range(FIXED, memory.shape[0]):
        field, row = memory[f], log_value[f]
        for i in range(w):
            row[at + i] = field[idx[i]]
    block = status[4]
    log_index[2, 3 * block], log_index[2, 3 * block + 1], log_index[2, 3 * block + 2] = state, at, w
    status[3] = at + w
    status[4] = block + 1
    return True


@spliced
def _leave(p, arc, state, lanes, pick, memory, accumulators, waiting, counts, present, inverse_cell, x, n):
    """Move the n patients in ``lanes`` along the arc."""
    arcs, fields, numbers, sizes, states = p.arcs, p.fields, p.numbers, p.sizes, p.states
    t1_, cost1_, effect1_ = x[T1], x[COST1], x[EFFECT1]
    target = arcs[arc, TARGET]
    fired = accumulators[sizes[0] + arcs[arc, CLOCK]]
    for j in range(n):
        fired[pick[j]] += 1.0
    if states[target, TRIVIAL] == 1:
        horizon = numbers[0]
        rest = accumulators[target]
        for j in range(n):
            rest[pick[j]] += horizon - t1_[lanes[j]]
        if present.shape[0] > 0:
            last = present.shape[1] - 2
            for j in range(n):
                present[target, _grid_edge(t1_[lanes[j]], inverse_cell, last)] += 1.0
        return
    entry_time, cost, effect = memory[0], memory[1], memory[2]
    for j in range(n):
        i = lanes[j]
        entry_time[pick[j]] = t1_[i]
        cost[pick[j]] = cost1_[i]
    if numbers[1] != numbers[2]:
        for j in range(n):
            effect[pick[j]] = effect1_[lanes[j]]
    _update_memory(fields, state, target, pick, lanes, memory, x, n)
    at = counts[target]
    for j in range(n):
        waiting[target, at + j] = pick[j]
    counts[target] = at + n


@spliced
def _advance(p, state, key0, key1, draw, first_patient, attributes, memory, remaining, accumulators, rows, x, ints, words,
             waiting, counts, present, log_index, log_value, status, w):  # fmt: skip
    """One block of one state: from entry to exit. False if the status says stop."""
    arcs, checks, flow, gather, numbers, sizes, states, tape = (
        p.arcs,
        p.checks,
        p.flow,
        p.gather,
        p.numbers,
        p.sizes,
        p.states,
        p.tape,
    )
    t0_, t1_, cost0_, effect0_, best_ = x[T0], x[T1], x[COST0], x[EFFECT0], x[BEST]
    idx, cause, lanes, pick, level = ints[0], ints[1], ints[2], ints[3], ints[4]
    horizon, annual, years = numbers[0], numbers[3], numbers[4]
    inverse_cell, one_rate = 1.0 / numbers[5], numbers[1] == numbers[2]
    for i in range(w):
        t0_[i] = memory[0, idx[i]]
    for i in range(w):
        cost0_[i] = memory[1, idx[i]]
    if not one_rate:
        for i in range(w):
            effect0_[i] = memory[2, idx[i]]
    fill_rows(
        gather,
        states[state, GATHER],
        states[state, GATHER_END],
        years,
        idx,
        idx,
        x[T0],
        attributes,
        memory,
        rows,
        w,
    )
    run_tape(tape, states[state, TAPE], states[state, TAPE_END], rows, w)
    if not check_rows(checks, states[state, CHECK], states[state, CHECK_END], idx, rows, status, w):
        return False
    add_entry_amounts(p, state, idx, accumulators, rows, x, w)
    first_firing(p, state, key0, key1, draw, first_patient, idx, cause, pick, level, words, remaining, accumulators, attributes,
                  rows, x, w)  # fmt: skip
    for i in range(w):
        t = t0_[i] + best_[i]
        over = t > horizon
        t1_[i] = horizon if over else t
        cause[i] = -1 if over else cause[i]
    discount_integral(numbers[1], annual, years, x[T1], x[COST1], w)
    if not one_rate:
        discount_integral(numbers[2], annual, years, x[T1], x[EFFECT1], w)
    first, last = states[state, FLOW], states[state, FLOW_END]
    add_rewards(flow, first, last, state, sizes[0], sizes[1], one_rate, idx, accumulators, rows, x, w)
    if present.shape[0] > 0:
        _count_presence(state, cause, present, inverse_cell, horizon, x, w)
    if log_value.shape[1] > 0 and not _write_log(state, idx, cause, memory, log_index, log_value, status, x, w):
        return False
    carry_thresholds(p, state, idx, cause, lanes, pick, level, remaining, attributes, rows, x, w)
    for arc in range(states[state, ARC], states[state, ARC_END]):
        n = 0
        for i in range(w):
            lanes[n] = i
            pick[n] = idx[i]
            n += 1 if cause[i] == arc else 0
        if n == 0:
            continue
        _leave(p, arc, state, lanes, pick, memory, accumulators, waiting, counts, present, inverse_cell, x, n)
        if states[arcs[arc, TARGET], TRIVIAL] == 1:
            continue
        if arcs[arc, REARMS] == 1:
            clock = arcs[arc, CLOCK]
            draw_next(p, clock, key0, key1, draw, first_patient, pick, words, accumulators, remaining, x[OUT], n)
        else:
            carried = remaining[arcs[arc, CLOCK]]
            for j in range(n):
                carried[pick[j]] = -1.0
    return True


@spliced
def _begin(p, n, start, memory, remaining, accumulators, rows, waiting, counts, present, log):
    """Reset what patients carry, and put each into the list of its first state."""
    consts, fields = p.consts, p.fields
    memory[:, :n] = 0.0
    accumulators[:, :n] = 0.0
    remaining[:, :n] = -1.0
    counts[:] = 0
    for c in range(consts.size):
        rows[c, :] = consts[c]
    for f in range(fields.shape[0]):
        kind, of = fields[f, 0], fields[f, 1]
        for i in range(n):
            here = start[i] == of
            value = 0.0
            if kind == 1:
                value = 1.0 if here else 0.0
            elif kind == 3:
                value = 0.0 if here else -np.inf
            elif kind == 4:
                value = -np.inf
            elif kind == 6:
                value = -1.0
            memory[FIXED + f, i] = value
    for i in range(n):
        s = start[i]
        waiting[s, counts[s]] = i
        counts[s] += 1


@entry
def run_chunk(p, key0, key1, draw, first_patient, n, attributes, start, memory, remaining, accumulators, rows, x, ints,
              words, waiting, counts, present, log_index, log_value, status):  # fmt: skip
    """Run n patients of one arm. status int64[8]: code, patient, formula, log rows, log blocks, events.

    attributes float64[attribute, chunk]; start int64[chunk]; memory float64[field, chunk]; remaining
    float64[clock, chunk]; accumulators float64[acc, chunk]; waiting int64[state, chunk]; present float64[state, edge + 1]
    or with no rows when not wanted; log_value float64[3 + field, capacity] or with no columns; key0, key1, draw uint64.
    """
    sizes = p.sizes
    status[:] = 0
    _begin(p, n, start, memory, remaining, accumulators, rows, waiting, counts, present, log_value)
    n_states = sizes[0]
    while True:
        state, most = 0, 0
        for s in range(n_states):
            if counts[s] > most:
                state, most = s, counts[s]
        if most == 0:
            return
        w = min(most, BLOCK)
        at = most - w
        for i in range(w):
            ints[0, i] = waiting[state, at + i]
        counts[state] = at
        if not _advance(p, state, key0, key1, draw, first_patient, attributes, memory, remaining, accumulators, rows, x, ints,
                        words, waiting, counts, present, log_index, log_value, status, w):  # fmt: skip
            return
        status[5] += w
        if status[5] > n * MAX_EVENTS:
            status[0] = RUNAWAY
            return


@entry
def collect_outcomes(ptr, source_row, weights, constants, n, accumulators, out):
    """out[m, :n] = outcome m of every patient: weighted sums of accumulator rows."""
    for m in range(out.shape[0]):
        row = out[m]
        base = constants[m]
        for i in range(n):
            row[i] = base
        for j in range(ptr[m], ptr[m + 1]):
            source, weight = accumulators[source_row[j]], weights[j]
            for i in range(n):
                row[i] += weight * source[i]
