"""Column and row numbers shared by the kernels: the study's tables as program.py writes them, and a block's scratch."""

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
