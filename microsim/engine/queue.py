"""The compiled event queue: one chunk of patients of one arm, from model start to horizon or absorption.

Patients wait in a list per state; the state with most waiting is advanced in blocks of up to 256. In a block every
primitive (gather, formula, inversion, discounting, minimum) is a plain loop the compiler vectorises. What a patient
carries (thresholds, memory, accumulators) lies in arrays [field, patient] and moves only by index. Kernels write status
codes; the runner raises.
"""

from __future__ import annotations

import numpy as np

from microsim._jit import entry, helper, spliced
from microsim.engine.draws import draw_thresholds
from microsim.engine.tape import run_tape
from microsim.hazards import kernels, vmath

BLOCK = 1024
FIXED = 3  # memory rows before the study's own: entry time, discount integral for costs, for effects
OK, LOG_FULL, BAD_FORMULA, RUNAWAY = range(4)
MAX_EVENTS = 100_000.0  # per patient, on average over a chunk

# Columns of the study's tables, in the order program.py writes them.
CLOCK, TARGET, SCALE, FAMILY, RATIO, LEVEL, STRIDE, BY, REARMS = range(9)
(
    TRIVIAL, ARC, ARC_END, TAPE, TAPE_END, GATHER, GATHER_END, FLOW, FLOW_END, LUMP, LUMP_END, CHECK, CHECK_END,
    ENTRY_COST, ENTRY_EFFECT,
) = range(15)  # fmt: skip
# Scratch rows of a block.
(
    T0, T1, BEST, ORIGIN, THRESHOLD, SCALED, H, C, WAIT, COST0, COST1, EFFECT0, EFFECT1, USED, TMP, OUT, SUB1, SUB2, N_SCRATCH,
) = range(19)  # fmt: skip


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
def _first_firing(p, state, idx, cause, level, remaining, attributes, rows, x, w):
    """x[BEST] = time to the first firing among the clocks of the state, cause = its arc (or -1)."""
    best = x[BEST]
    for i in range(w):
        best[i] = np.inf
        cause[i] = -1
    for arc in range(p.states[state, ARC], p.states[state, ARC_END]):
        threshold, scaled, origin, wait = x[THRESHOLD], x[SCALED], x[ORIGIN], x[WAIT]
        carried = remaining[p.arcs[arc, CLOCK]]
        for i in range(w):
            threshold[i] = carried[idx[i]]
        _scale_threshold(p.arcs[arc, RATIO], threshold, rows, scaled, w)
        fill_origin(p.arcs[arc, SCALE], p.sizes[6], p.numbers[4], idx, x[T0], attributes, origin, w)
        family = p.arcs[arc, FAMILY]
        if family == kernels.TABLE:
            _table_firing(p, arc, idx, level, cause, attributes, x, w)
            continue
        kernels.waiting_time(family, p.arc_par[arc], origin, p.arcs[arc, SCALE] == 0, scaled, x[H], x[C], wait, w)
        for i in range(w):
            earlier = wait[i] < best[i]
            best[i] = wait[i] if earlier else best[i]
            cause[i] = arc if earlier else cause[i]


@spliced
def _table_firing(p, arc, idx, level, cause, attributes, x, w):
    """Tables come last: compare consumed hazards first, and invert only for patients whose clock fires before the best."""
    horizon = p.numbers[0]
    t0, best, origin, scaled, target, at_end, end = x[T0], x[BEST], x[ORIGIN], x[SCALED], x[H], x[C], x[TMP]
    par = p.arc_par[arc]
    fill_level(p.arcs[arc, LEVEL], p.arcs[arc, STRIDE], p.arcs[arc, BY], idx, attributes, level, w)
    kernels.table_cumulative(par, level, p.table_cum, p.table_rate, origin, target, w)
    at_entry = x[USED]
    for i in range(w):
        at_entry[i] = target[i]
        stop = horizon - t0[i]
        end[i] = origin[i] + (best[i] if best[i] < stop else stop)
        target[i] = target[i] + scaled[i]
    kernels.table_cumulative(par, level, p.table_cum, p.table_rate, end, at_end, w)
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
    kernels.table_inverse(par, level, p.table_cum, p.table_rate, sub1, sub2, n)
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
    origin = x[ORIGIN]
    fill_origin(p.arcs[arc, SCALE], p.sizes[6], p.numbers[4], idx, t0, attributes, origin, w)
    if p.arcs[arc, FAMILY] == kernels.TABLE:
        h, c = x[H], x[C]
        fill_level(p.arcs[arc, LEVEL], p.arcs[arc, STRIDE], p.arcs[arc, BY], idx, attributes, level, w)
        kernels.table_cumulative(p.arc_par[arc], level, p.table_cum, p.table_rate, origin, h, w)
        for i in range(w):
            c[i] = origin[i] + duration[i]
        kernels.table_cumulative(p.arc_par[arc], level, p.table_cum, p.table_rate, c, out, w)
        for i in range(w):
            out[i] = out[i] - h[i]
    else:
        kernels.consumed(p.arcs[arc, FAMILY], p.arc_par[arc], origin, p.arcs[arc, SCALE] == 0, duration, x[H], x[C], out, w)


@spliced
def _carry_thresholds(p, state, idx, cause, lanes, pick, level, remaining, attributes, rows, x, w):
    """Whoever lost keeps what was not consumed, unless the patient has reached a state without clocks."""
    t0_, t1_, ratio_ = x[T0], x[T1], x[TMP]
    n_alive = 0
    for i in range(w):
        a = cause[i]
        goes_on = a >= 0 and p.states[p.arcs[a, TARGET], ARC_END] > p.states[p.arcs[a, TARGET], ARC]
        lanes[n_alive] = i
        n_alive += 1 if goes_on else 0
    for arc in range(p.states[state, ARC], p.states[state, ARC_END]):
        n = 0
        # what the last table consumed up to the first firing is known from the search for it
        known = arc == p.states[state, ARC_END] - 1 and p.arcs[arc, FAMILY] == kernels.TABLE
        t0, duration, used = x[SUB1], x[SUB2], x[OUT]
        for j in range(n_alive):
            level[n] = lanes[j]
            n += 1 if cause[lanes[j]] != arc else 0
        if n == 0:
            continue
        known_used, has_ratio = x[USED], p.arcs[arc, RATIO] >= 0
        ratio_row = rows[max(p.arcs[arc, RATIO], 0)]
        for j in range(n):
            i = level[j]
            pick[j] = idx[i]
            used[j] = known_used[i]
            t0[j] = t0_[i]
            duration[j] = t1_[i] - t0_[i]
            ratio_[j] = ratio_row[i] if has_ratio else 1.0
        if not known:
            arc_consumption(p, arc, pick, t0, duration, level, attributes, x, used, n)
        carried = remaining[p.arcs[arc, CLOCK]]
        for j in range(n):
            left = carried[pick[j]] - ratio_[j] * used[j]
            carried[pick[j]] = left if left > 0.0 else 0.0


@spliced
def _draw(p, clock, key0, key1, draw, first_patient, pick, words, accumulators, remaining, out, n):
    """New thresholds of a clock for the patients pick[:n]; the firing number is how often the clock has fired."""
    fired = accumulators[p.sizes[0] + clock]
    for j in range(n):
        words[0, j] = np.uint64(first_patient + pick[j])
        words[1, j] = np.uint64(np.int64(fired[pick[j]]))
    draw_thresholds(key0, key1, words[0], p.stream[clock], words[1], draw, out, n)
    carried = remaining[clock]
    for j in range(n):
        carried[pick[j]] = out[j]


@spliced
def _draw_missing(p, state, key0, key1, draw, first_patient, idx, pick, words, accumulators, remaining, out, w):
    """First arming of a clock: patients whose threshold is still unread."""
    for arc in range(p.states[state, ARC], p.states[state, ARC_END]):
        clock = p.arcs[arc, CLOCK]
        carried = remaining[clock]
        n = 0
        for i in range(w):
            pick[n] = idx[i]
            n += 1 if carried[idx[i]] < 0.0 else 0
        if n > 0:
            _draw(p, clock, key0, key1, draw, first_patient, pick, words, accumulators, remaining, out, n)


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


@helper
def _reward(flow, first, last, state, n_states, n_clocks, one_rate, idx, accumulators, rows, x, w):
    """Time, discounted time and formula-driven flows flow[first:last] of the sojourns of a block."""
    t0_, t1_, cost0_, cost1_, effect0_, effect1_ = x[T0], x[T1], x[COST0], x[COST1], x[EFFECT0], x[EFFECT1]
    time = accumulators[state]
    cost = accumulators[n_states + n_clocks + state]
    effect = accumulators[2 * n_states + n_clocks + state]
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
def _entry_amounts(p, state, idx, accumulators, rows, x, w):
    """One-off amounts at entry by a transition (entry time above zero), at their time."""
    t0_ = x[T0]
    annual, years = p.numbers[3], p.numbers[4]
    for which in range(2):
        const_row = p.states[state, ENTRY_COST + which]
        needed = const_row >= 0
        for n in range(p.states[state, LUMP], p.states[state, LUMP_END]):
            needed = needed or p.lump[n, 3] == which
        if not needed:
            continue
        factor = x[OUT]
        discount_factor(p.numbers[1 + which], annual, years, x[T0], factor, w)
        for i in range(w):
            factor[i] = factor[i] if t0_[i] > 0.0 else 0.0
        if const_row >= 0:
            total = accumulators[const_row]
            for i in range(w):
                total[idx[i]] += factor[i]
        for n in range(p.states[state, LUMP], p.states[state, LUMP_END]):
            if p.lump[n, 3] == which:
                row, plain, discounted = rows[p.lump[n, 0]], accumulators[p.lump[n, 1]], accumulators[p.lump[n, 2]]
                for i in range(w):
                    plain[idx[i]] += row[i] if t0_[i] > 0.0 else 0.0
                    discounted[idx[i]] += row[i] * factor[i]


@helper
def _check(checks, first, last, idx, rows, status, w):
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
    t1_, cost1_, effect1_ = x[T1], x[COST1], x[EFFECT1]
    target = p.arcs[arc, TARGET]
    fired = accumulators[p.sizes[0] + p.arcs[arc, CLOCK]]
    for j in range(n):
        fired[pick[j]] += 1.0
    if p.states[target, TRIVIAL] == 1:
        horizon = p.numbers[0]
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
    if p.numbers[1] != p.numbers[2]:
        for j in range(n):
            effect[pick[j]] = effect1_[lanes[j]]
    _update_memory(p.fields, state, target, pick, lanes, memory, x, n)
    at = counts[target]
    for j in range(n):
        waiting[target, at + j] = pick[j]
    counts[target] = at + n


@spliced
def _advance(p, state, key0, key1, draw, first_patient, attributes, memory, remaining, accumulators, rows, x, ints, words,
             waiting, counts, present, log_index, log_value, status, w):  # fmt: skip
    """One block of one state: from entry to exit. False if the status says stop."""
    t0_, t1_, cost0_, effect0_, best_ = x[T0], x[T1], x[COST0], x[EFFECT0], x[BEST]
    idx, cause, lanes, pick, level = ints[0], ints[1], ints[2], ints[3], ints[4]
    horizon, annual, years = p.numbers[0], p.numbers[3], p.numbers[4]
    inverse_cell, one_rate = 1.0 / p.numbers[5], p.numbers[1] == p.numbers[2]
    for i in range(w):
        t0_[i] = memory[0, idx[i]]
    for i in range(w):
        cost0_[i] = memory[1, idx[i]]
    if not one_rate:
        for i in range(w):
            effect0_[i] = memory[2, idx[i]]
    fill_rows(p.gather, p.states[state, GATHER], p.states[state, GATHER_END], years, idx, idx, x[T0], attributes, memory, rows, w)
    run_tape(p.tape, p.states[state, TAPE], p.states[state, TAPE_END], rows, w)
    if not _check(p.checks, p.states[state, CHECK], p.states[state, CHECK_END], idx, rows, status, w):
        return False
    _entry_amounts(p, state, idx, accumulators, rows, x, w)
    _draw_missing(p, state, key0, key1, draw, first_patient, idx, pick, words, accumulators, remaining, x[OUT], w)
    _first_firing(p, state, idx, cause, level, remaining, attributes, rows, x, w)
    for i in range(w):
        t = t0_[i] + best_[i]
        over = t > horizon
        t1_[i] = horizon if over else t
        cause[i] = -1 if over else cause[i]
    discount_integral(p.numbers[1], annual, years, x[T1], x[COST1], w)
    if not one_rate:
        discount_integral(p.numbers[2], annual, years, x[T1], x[EFFECT1], w)
    _reward(p.flow, p.states[state, FLOW], p.states[state, FLOW_END], state, p.sizes[0], p.sizes[1], one_rate, idx, accumulators,
            rows, x, w)  # fmt: skip
    if present.shape[0] > 0:
        _count_presence(state, cause, present, inverse_cell, horizon, x, w)
    if log_value.shape[1] > 0 and not _write_log(state, idx, cause, memory, log_index, log_value, status, x, w):
        return False
    _carry_thresholds(p, state, idx, cause, lanes, pick, level, remaining, attributes, rows, x, w)
    for arc in range(p.states[state, ARC], p.states[state, ARC_END]):
        n = 0
        for i in range(w):
            lanes[n] = i
            pick[n] = idx[i]
            n += 1 if cause[i] == arc else 0
        if n == 0:
            continue
        _leave(p, arc, state, lanes, pick, memory, accumulators, waiting, counts, present, inverse_cell, x, n)
        if p.states[p.arcs[arc, TARGET], TRIVIAL] == 1:
            continue
        if p.arcs[arc, REARMS] == 1:
            clock = p.arcs[arc, CLOCK]
            _draw(p, clock, key0, key1, draw, first_patient, pick, words, accumulators, remaining, x[OUT], n)
        else:
            carried = remaining[p.arcs[arc, CLOCK]]
            for j in range(n):
                carried[pick[j]] = -1.0
    return True


@spliced
def _begin(p, n, start, memory, remaining, accumulators, rows, waiting, counts, present, log):
    """Reset what patients carry, and put each into the list of its first state."""
    memory[:, :n] = 0.0
    accumulators[:, :n] = 0.0
    remaining[:, :n] = -1.0
    counts[:] = 0
    for c in range(p.consts.size):
        rows[c, :] = p.consts[c]
    for f in range(p.fields.shape[0]):
        kind, of = p.fields[f, 0], p.fields[f, 1]
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
    status[:] = 0
    _begin(p, n, start, memory, remaining, accumulators, rows, waiting, counts, present, log_value)
    n_states = p.sizes[0]
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
